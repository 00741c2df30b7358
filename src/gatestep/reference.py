"""The continuous solution that a loop is held to: formulas, not tables, and no clock.

Cell, native and virtual conductances stand in one membrane, from ``act_ms`` on, and the
ordinary differential equations are solved by scipy (LSODA or Radau) or, where
scikit-sundae is installed, by SUNDIALS' CVODE.

A solver asks for slopes tens of thousands of times, and a formula takes tens of
microseconds. So the formulas are first expressed, piece by piece, in Chebyshev
polynomials of the voltage (Trefethen 2013, Approximation Theory and Approximation
Practice), each piece halved until it agrees with the formula to ``AGREEMENT`` at points
between its own; a jump or a kink ends up in a piece of ``NARROWEST_MV``. They share
nothing with the tables of the kernel but the formulas.
"""

from __future__ import annotations

import threading
from dataclasses import dataclass
from itertools import pairwise
from typing import Any, Literal, NamedTuple

import numpy as np

from .compiling import compiled, inner
from .errors import GatestepError, MissingExtraError
from .kinetics import Kinetics, kinetics_of
from .scenarios import Scenario
from .simtrace import Floats, crossings
from .specs import ModelSpec

Solver = Literal["lsoda", "radau", "sundials"]
RTOL = 1e-10
ATOL_MV, ATOL_GATE = 1e-9, 1e-12
AGREEMENT = 1e-10
"""Largest difference from a formula, as a share of its largest value on the piece."""
NARROWEST_MV = 2.0**-12
STEP_MS = 0.005
"""Time between the voltages that are kept; every usual tick is a multiple of it."""
_LOW_MV, _HIGH_MV, _PIECE_MV = -200.0, 200.0, 8.0
_DEGREE = 15
_COUNT = _DEGREE + 1
_NODES = np.cos(np.pi * (np.arange(_COUNT) + 0.5) / _COUNT)
_TO_SERIES = np.cos(np.outer(np.arange(_COUNT), np.arccos(_NODES))) * (2.0 / _COUNT)
_TO_SERIES[0] *= 0.5
_BETWEEN = np.cos(np.linspace(0.07, np.pi - 0.07, 23))
_AT_BETWEEN = np.cos(np.outer(np.arccos(_BETWEEN), np.arange(_COUNT)))


@dataclass(frozen=True)
class Reference:
    """The solution of a scenario.

    ``t_ms``, ``v_mv`` every ``STEP_MS`` from 0; ``spikes_ms`` the upward crossings of
    0 mV, located on the solver's own dense output to rounding.
    """

    t_ms: Floats
    v_mv: Floats
    spikes_ms: Floats

    def at(self, t_ms: Floats) -> Floats:
        """Voltage at times within the solution, mV; linear between what is kept."""
        return np.asarray(np.interp(t_ms, self.t_ms, self.v_mv), dtype=np.float64)


class _Membrane(NamedTuple):
    """Curves and conductances in flat arrays.

    ``series`` (pieces, 2 * gates, degree + 1): steady state and rate of every gate on the
    pieces of voltage between ``edges``. ``gates`` and ``first`` count and place the gates
    of each conductance.
    """

    edges: Floats
    series: Floats
    power: Floats
    instant: Any
    gmax_ns: Floats
    reversal_mv: Floats
    gates: Any
    first: Any


_kept: dict[tuple[str, Solver], Reference] = {}
_lock = threading.Lock()


def solve(scenario: Scenario, solver: Solver = "lsoda") -> Reference:
    """Solve a scenario, once in a process.

    Raises
    ------
    MissingExtraError
        Without scipy, or without scikit-sundae where its solver is asked for.
    GatestepError
        When the solver gives up.
    """
    with _lock:
        key = scenario.key, solver
        if key not in _kept:
            _kept[key] = _Solution(scenario, solver).solve()
        return _kept[key]


class _Solution:
    """One scenario on its way through a solver."""

    def __init__(self, scenario: Scenario, solver: Solver) -> None:
        self.scenario, self.solver = scenario, solver
        models = (*scenario.native, scenario.model)
        self.virtual = len(scenario.model.conductance)
        self.gates = [gate for model in models for gate in kinetics_of(model)]
        self.membrane = _membrane(models, self.gates)

    def solve(self) -> Reference:
        """From the starting voltage, gates at rest there, through every switch."""
        cell = self.scenario.cell
        start_mv = cell.leak_mv if cell.start_mv is None else cell.start_mv
        y = np.array([start_mv, *(float(gate.at(start_mv)[0]) for gate in self.gates)])
        times: list[Floats] = []
        voltages: list[Floats] = []
        spikes: list[Floats] = []
        edges = self.scenario.edges_ms
        for from_ms, to_ms in pairwise(edges):
            t_ms, v_mv, found, y = self._stretch(from_ms, to_ms, y)
            times.append(t_ms)
            voltages.append(v_mv)
            spikes.append(found)
        return Reference(*(np.concatenate(parts) for parts in (times, voltages, spikes)))

    def _stretch(
        self, from_ms: float, to_ms: float, y: Floats
    ) -> tuple[Floats, Floats, Floats, Floats]:
        """Times, voltages, spikes and the last state of a stretch without a switch."""
        first, last = (round(t / STEP_MS) for t in (from_ms, to_ms))
        whole = to_ms == self.scenario.edges_ms[-1]
        wanted = np.clip(np.arange(first, last + whole) * STEP_MS, from_ms, to_ms)
        solved = self._sundials if self.solver == "sundials" else self._scipy
        v_mv, spikes, y = solved(from_ms, to_ms, y, wanted)
        return wanted, v_mv, spikes, y

    def _slopes_from(self, from_ms: float) -> Any:
        cell, membrane = self.scenario.cell, self.membrane
        gmax = membrane.gmax_ns.copy()
        if from_ms < self.scenario.act_ms:
            gmax[gmax.size - self.virtual :] = 0.0
        now = membrane._replace(gmax_ns=gmax)
        constants = (
            cell.capacitance_pf,
            cell.leak_ns,
            cell.leak_mv,
            self.scenario.stimulus_pa(from_ms),
        )
        return now, constants

    def _scipy(
        self, from_ms: float, to_ms: float, y: Floats, wanted: Floats
    ) -> tuple[Floats, Floats, Floats]:
        try:
            from scipy.integrate import solve_ivp
        except ImportError:
            raise MissingExtraError("scipy", "fidelity", "The continuous reference") from None
        membrane, constants = self._slopes_from(from_ms)
        out = np.empty_like(y)

        def slopes(_t_ms: float, state: Floats) -> Floats:
            _slopes(membrane, *constants, state, out)
            return out.copy()

        def rises(_t_ms: float, state: Floats) -> float:
            return float(state[0])

        rises.direction = 1  # type: ignore[attr-defined]
        found = solve_ivp(
            slopes,
            (from_ms, to_ms),
            y,
            method={"lsoda": "LSODA", "radau": "Radau"}[self.solver],
            t_eval=np.append(wanted, to_ms) if wanted[-1] < to_ms else wanted,
            events=rises,
            rtol=RTOL,
            atol=_tolerances(y.size),
        )
        if not found.success:
            raise GatestepError(f"reference of {self.scenario.name}: {found.message}")
        v_mv = np.asarray(found.y[0, : wanted.size], dtype=np.float64)
        return v_mv, np.asarray(found.t_events[0], dtype=np.float64), found.y[:, -1].copy()

    def _sundials(
        self, from_ms: float, to_ms: float, y: Floats, wanted: Floats
    ) -> tuple[Floats, Floats, Floats]:
        try:
            from sksundae.cvode import CVODE
        except ImportError:
            raise MissingExtraError("scikit-sundae", "sundials", "The solver SUNDIALS") from None
        membrane, constants = self._slopes_from(from_ms)

        def slopes(_t_ms: float, state: Floats, out: Floats) -> None:
            _slopes(membrane, *constants, state, out)

        solver = CVODE(slopes, rtol=RTOL, atol=_tolerances(y.size), max_num_steps=100_000)
        ends = wanted if wanted[-1] >= to_ms else np.append(wanted, to_ms)
        found = solver.solve(ends, y)
        if not found.success:
            raise GatestepError(f"reference of {self.scenario.name}: {found.message}")
        v_mv = np.asarray(found.y[: wanted.size, 0], dtype=np.float64)
        spikes = _between_points(ends, np.asarray(found.y[:, 0]))
        return v_mv, spikes, np.asarray(found.y[-1], dtype=np.float64).copy()


def _tolerances(count: int) -> Floats:
    return np.array([ATOL_MV] + [ATOL_GATE] * (count - 1))


def _between_points(t_ms: Floats, v_mv: Floats) -> Floats:
    """Upward crossings of 0 mV, cubic through the four points around each."""
    from scipy.interpolate import CubicSpline

    found = [
        CubicSpline(v_mv[k - 2 : k + 2], t_ms[k - 2 : k + 2])(0.0)
        for k in np.searchsorted(t_ms, crossings(t_ms, v_mv, 0.0))
    ]
    return np.array(found, dtype=np.float64)


def _membrane(models: tuple[ModelSpec, ...], gates: list[Kinetics]) -> _Membrane:
    edges, series = _curves(gates)
    conductances = [(c, m.temperature_c) for m in models for c in m.conductance]
    counts = np.array([len(c.gate) for c, _ in conductances], dtype=np.int64)
    return _Membrane(
        edges,
        series,
        np.array([float(gate.instances) for gate in gates]),
        np.array([gate.instantaneous for gate in gates], dtype=np.bool_),
        np.array([c.gmax_ns for c, _ in conductances], dtype=np.float64),
        np.array([c.reversal_at(t) for c, t in conductances], dtype=np.float64),
        counts,
        np.cumsum(counts) - counts,
    )


def _curves(gates: list[Kinetics]) -> tuple[Floats, Floats]:
    """Pieces of voltage and, on each, the Chebyshev series of every gate's two curves."""
    waiting = list(np.arange(_LOW_MV, _HIGH_MV, _PIECE_MV)[::-1])
    widths = dict.fromkeys(waiting, _PIECE_MV)
    edges, series = [], []
    while waiting:
        low = waiting.pop()
        width = widths.pop(low)
        middle, half = low + 0.5 * width, 0.5 * width
        fitted = _at(gates, middle + half * _NODES) @ _TO_SERIES.T
        true = _at(gates, middle + half * _BETWEEN)
        missed = np.abs(fitted @ _AT_BETWEEN.T - true).max(axis=1, initial=0.0)
        allowed = AGREEMENT * np.abs(true).max(axis=1, initial=0.0)
        if (missed <= allowed).all() or width <= NARROWEST_MV:
            edges.append(low)
            series.append(fitted)
        else:
            waiting += [middle, low]
            widths[low] = widths[middle] = half
    return np.array([*edges, _HIGH_MV]), np.array(series)


def _at(gates: list[Kinetics], v_mv: Floats) -> Floats:
    """Steady state and rate of every gate in turn, one row each."""
    rows = [curve for gate in gates for curve in gate.at(v_mv)]
    return np.array(rows).reshape(len(rows), v_mv.size)


@inner
def _series_at(series: Any, x: float) -> float:
    """[hot] A Chebyshev series by Clenshaw's recurrence, x in [-1, 1]."""
    last, before = 0.0, 0.0
    for k in range(_DEGREE, 0, -1):
        last, before = series[np.uint64(k)] + 2.0 * x * last - before, last
    return series[np.uint64(0)] + x * last - before


@inner
def _piece(edges: Any, v_mv: float) -> int:
    """[hot] The piece that holds a voltage, by bisection."""
    low, high = 0, edges.size - 1
    while high - low > 1:
        middle = (low + high) // 2
        if edges[np.uint64(middle)] <= v_mv:
            low = middle
        else:
            high = middle
    return low


@compiled
def _slopes(
    m: Any, c_pf: float, leak_ns: float, leak_mv: float, i_pa: float, y: Any, out: Any
) -> None:
    """[hot] Slopes of the voltage (mV/ms) and of every gate (per ms), into ``out``."""
    v = y[np.uint64(0)]
    held = min(max(v, _LOW_MV), _HIGH_MV)
    p = np.uint64(_piece(m.edges, held))
    low, high = m.edges[p], m.edges[p + np.uint64(1)]
    x = (2.0 * held - low - high) / (high - low)
    total = i_pa + leak_ns * (leak_mv - v)
    for c in range(np.uint64(m.gmax_ns.size)):
        g_ns = m.gmax_ns[c]
        for k in range(m.gates[c]):
            n = np.uint64(m.first[c] + k)
            inf = _series_at(m.series[p, n + n], x)
            place = n + np.uint64(1)
            if m.instant[n]:
                g_ns *= inf ** m.power[n]
                out[place] = 0.0
            else:
                rate = _series_at(m.series[p, n + n + np.uint64(1)], x)
                g_ns *= y[place] ** m.power[n]
                out[place] = rate * (inf - y[place])
        total += g_ns * (m.reversal_mv[c] - v)
    out[np.uint64(0)] = total / c_pf
