"""How much conductance a loop carries before it rings by itself.

One tick of the loop on a pure capacitance, with the virtual conductance g held, is a
linear map of what the loop remembers: the membrane's voltage, the voltage measured a
tick ago, the smoothed I_rest, and the answers that have not ended yet. The map's matrix
is made by applying the tick to the unit vectors, with :mod:`gatestep.anticipate` or the
plain loop giving the answer; the loop is stable where every eigenvalue lies inside the
unit circle. The limit is the smallest g at which one leaves it. It is scanned for from
below, then bisected: the spectral radius need not rise with g.

An answer asked for at ``t`` flows from ``t + delay`` on, until the next one does. The
true capacitance may be ``1 + error`` times the one that the shadow believes, and a
series resistance R left in the measurement adds ``R i`` of the current that flowed just
before the sample. Without either the plain loop's limit is that of Jury's test,
``g dt / C < 1 / d`` and, for ``d < 1/2``, ``< 2 / (1 - 2 d)`` with d the delay in ticks
up to 1. The number of sub-steps does not appear: with g held, each is exact.

What the limit does not know: gates that move within a tick, and the cell's own leak,
which damps. The limits met in the nonlinear loop are those of :mod:`gatestep.choosing`.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from .arithmetic import Floats
from .units import MV_PER_MOHM_PA

HIGHEST = 1e4
"""Largest g dt / C looked at; a loop stable up to there has no limit."""
LOWEST = 0.01
"""Smallest: of g dt / C, and of g R where there is a residue."""
POINTS_PER_DECADE = 20
BEYOND_ONE = 1e-9
"""Rounding allowed to a spectral radius of 1."""


@dataclass(frozen=True)
class Settings:
    """How a shadow is carried; see :mod:`gatestep.anticipate`."""

    substeps: int
    alpha: float
    beta: float


@dataclass(frozen=True)
class Circuit:
    """A capacitance in a loop.

    ``capacitance_pf`` is what the shadow believes and ``1 + capacitance_error`` times it
    the truth. ``delay_ms`` is from a sample to its answer's current; any number of ticks,
    whole or not. ``residue_mohm`` is left in the measured voltage.
    """

    capacitance_pf: float
    interval_ms: float
    delay_ms: float
    capacitance_error: float = 0.0
    residue_mohm: float = 0.0

    @property
    def whole_ticks(self) -> int:
        """Whole ticks in the delay."""
        return int(np.floor(self.delay_ms / self.interval_ms + 1e-9))

    @property
    def rest_ms(self) -> float:
        """What the delay has beyond its whole ticks."""
        rest_ms = self.delay_ms - self.whole_ticks * self.interval_ms
        return rest_ms if rest_ms > 1e-9 * self.interval_ms else 0.0


def corners(circuit: Circuit, uncertainty: float, residue_mohm: float) -> list[Circuit]:
    """The circuits at the ends of what is uncertain: C low and high, without and with R."""
    errors = dict.fromkeys((-uncertainty, uncertainty))
    residues = dict.fromkeys((residue_mohm, 0.0))
    return [replace(circuit, capacitance_error=e, residue_mohm=r) for r in residues for e in errors]


def worst_limit_ns(
    circuits: list[Circuit], settings: Settings | None, ceiling_ns: float = np.inf
) -> float:
    """The smallest limit of several circuits, in nS; see :func:`limit_ns`."""
    return min(limit_ns(circuit, settings, ceiling_ns) for circuit in circuits)


def limit_ns(circuit: Circuit, settings: Settings | None, ceiling_ns: float = np.inf) -> float:
    """The smallest conductance at which the loop rings by itself, in nS.

    Parameters
    ----------
    circuit : Circuit
        The cell and the clock.
    settings : Settings or None
        Of anticipation; None is the plain loop.
    ceiling_ns : float
        Look no further up than here.

    Returns
    -------
    float
        inf where the loop is stable up to the ceiling, or to ``HIGHEST * C / dt``.
    """
    g_ns = _scanned_ns(circuit, ceiling_ns)
    rings = spectral_radius(circuit, g_ns, settings) > 1.0 + BEYOND_ONE
    if not rings.any():
        return float(np.inf)
    first = int(rings.argmax())
    if first == 0:
        return float(g_ns[0])
    low, high = float(g_ns[first - 1]), float(g_ns[first])
    while high - low > 1e-6 * high:
        # Many points at once cost little more than one.
        between = np.linspace(low, high, 18)
        rings = spectral_radius(circuit, between[1:-1], settings) > 1.0 + BEYOND_ONE
        place = int(rings.argmax()) if rings.any() else rings.size
        low, high = float(between[place]), float(between[place + 1])
    return low


def _scanned_ns(circuit: Circuit, ceiling_ns: float) -> Floats:
    """Conductances to look at, from where no loop rings up to the ceiling."""
    unit_ns = circuit.capacitance_pf / circuit.interval_ms
    low = LOWEST * min(1.0, 1.0 / (1e-9 + circuit.residue_mohm * MV_PER_MOHM_PA * unit_ns))
    count = round(np.log10(HIGHEST / low) * POINTS_PER_DECADE) + 1
    g_ns = np.geomspace(low, HIGHEST, count) * unit_ns
    top_ns = min(ceiling_ns, float(g_ns[-1]))
    return np.append(g_ns[g_ns < top_ns], top_ns)


def spectral_radius(circuit: Circuit, g_ns: Any, settings: Settings | None) -> Floats:
    """Largest magnitude of the eigenvalues of one tick, for each conductance."""
    radius: Floats = np.abs(np.linalg.eigvals(tick_matrix(circuit, g_ns, settings))).max(axis=-1)
    return radius


def tick_matrix(circuit: Circuit, g_ns: Any, settings: Settings | None) -> Floats:
    """One tick of the loop as a matrix, for each conductance; None is the plain loop.

    Returns
    -------
    array, shape (conductances, n, n)
        On the state ``V, V measured a tick ago, I_rest, answers newest first``.
    """
    g = np.atleast_1d(np.asarray(g_ns, dtype=np.float64))[:, None]
    whole, rest_ms, dt_ms = circuit.whole_ticks, circuit.rest_ms, circuit.interval_ms
    state = np.eye(5 + whole)
    v_true, v_before, i_rest, *answers = state
    v_measured = v_true + circuit.residue_mohm * MV_PER_MOHM_PA * answers[whole]
    if settings is None:
        answer = -g * v_measured
    else:
        flowed = _mean_flow(answers, whole, rest_ms, dt_ms)
        raw = circuit.capacitance_pf * (v_measured - v_before) / dt_ms - flowed
        smoothed = i_rest + settings.alpha * (raw - i_rest)
        expected = smoothed + settings.beta * (smoothed - i_rest)
        answer, i_rest = _anticipated(circuit, g, v_measured, expected, answers), smoothed
    answers = [answer, *answers[:-1]]
    true_pf = circuit.capacitance_pf * (1.0 + circuit.capacitance_error)
    v_after = v_true + dt_ms * _mean_flow(answers, whole, rest_ms, dt_ms) / true_pf
    rows = [v_after, v_measured, i_rest, *answers]
    return np.stack([np.broadcast_to(row, (g.shape[0], state.shape[0])) for row in rows], axis=1)


def _mean_flow(answers: list[Any], whole: int, rest_ms: float, dt_ms: float) -> Any:
    """Mean current over a tick in which the older of two answers flows for ``rest_ms``."""
    return answers[whole] + (answers[whole + 1] - answers[whole]) * (rest_ms / dt_ms)


def _anticipated(circuit: Circuit, g: Floats, v: Floats, i_rest: Floats, answers: Any) -> Floats:
    """The answer of :func:`gatestep.anticipate.anticipated` with the gates held."""
    at_ms, dt_ms = 0.0, circuit.interval_ms
    held = circuit.whole_ticks + (circuit.rest_ms > 0.0)
    for newer in range(held - 1, -1, -1):
        end_ms = circuit.delay_ms - newer * dt_ms
        v = v + (end_ms - at_ms) * (i_rest + answers[newer]) / circuit.capacitance_pf
        at_ms = end_ms
    z = -g * dt_ms / circuit.capacitance_pf
    mean: Floats = v + dt_ms * _phi2(z) * (i_rest - g * v) / circuit.capacitance_pf
    return -g * mean


def _phi2(z: Floats) -> Floats:
    """``((exp(z) - 1) / z - 1) / z``, by series near 0."""
    near = np.abs(z) < 1e-3
    divisor = np.where(near, 1.0, z)
    far: Floats = (np.expm1(divisor) / divisor - 1.0) / divisor
    return np.where(near, 0.5 + z * (1 / 6 + z / 24), far)
