"""How true a loop is: runs without sockets held to the continuous solution.

A point is one set of conditions, run once, or once a seed where chance plays a part. Its
error is the mean distance of each spike's time from its own in the solution, µs; without
spikes the rms distance of the voltage, µV. Beside it stands what became of the run: it
follows; it fires another number of spikes; or it rings, which is four turns of the
voltage in a row, each within ``RING_TICKS`` of the last and ``RING_MV`` away from it, or
a voltage far outside the solution's.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Executor, Future, ThreadPoolExecutor, as_completed
from dataclasses import dataclass, replace
from math import floor
from typing import Any

import numpy as np

from .burners import usable_cores
from .choosing import choose
from .lockstep import Conditions, LockstepRun, run_lockstep_loop
from .reference import Reference, solve
from .scenarios import Scenario
from .simtrace import Floats
from .specs import CellSpec, LoopSpec
from .stability import Settings

RING_MV = 2.0
RING_TICKS = 8
_TURNS = 4
_OUTSIDE_MV = 30.0

FOLLOWS, MISCOUNTS, RINGS = "follows", "miscounts", "rings"
"""What became of a run."""
PLAIN, ANTICIPATING = "plain", "anticipating"
MODES = (PLAIN, ANTICIPATING)
MAP = "map"
"""The part of a measurement that goes over ticks and delays."""

BASE = Conditions(tick_us=20.0, delay_ticks=0.5)
"""Where the sweeps start from."""


@dataclass(frozen=True)
class Plan:
    """What is measured: ticks by delays, one sweep a quantity, and the seeds of chance."""

    ticks_us: tuple[float, ...] = (5.0, 10.0, 20.0, 50.0, 100.0, 200.0)
    delays_ticks: tuple[float, ...] = (0.0, 0.5, 1.0, 1.5, 2.0)
    jitter_ticks: tuple[float, ...] = (0.0, 0.05, 0.1, 0.2, 0.3, 0.4, 0.5)
    drop: tuple[float, ...] = (0.0, 0.001, 0.003, 0.01, 0.03, 0.1)
    noise_mv: tuple[float, ...] = (0.0, 0.03, 0.06, 0.1, 0.15, 0.2, 0.3)
    capacitance_error: tuple[float, ...] = (-0.5, -0.3, -0.2, -0.1, 0.0, 0.1, 0.2, 0.3, 0.5)
    residue_mohm: tuple[float, ...] = (0.0, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0)
    seeds: int = 6

    @property
    def sweeps(self) -> dict[str, tuple[float, ...]]:
        """Values of every swept quantity."""
        return {name: getattr(self, name) for name in SWEPT}


SWEPT = ("jitter_ticks", "drop", "noise_mv", "capacitance_error", "residue_mohm")
_CHANCE = ("jitter_ticks", "drop", "noise_mv")
QUICK = Plan(
    ticks_us=(20.0, 50.0, 100.0),
    delays_ticks=(0.0, 0.5, 1.0),
    jitter_ticks=(0.0, 0.25, 0.5),
    drop=(0.0, 0.01, 0.1),
    noise_mv=(0.0, 0.1, 0.3),
    capacitance_error=(-0.3, 0.0, 0.3),
    residue_mohm=(0.0, 0.5, 5.0),
    seeds=3,
)


@dataclass(frozen=True)
class Fidelity:
    """One run held to the solution; what cannot be told of it is None.

    ``error`` is ``spike_error_us``, or ``rms_mv`` in µV where the solution has no spikes.
    ``last_spike_us`` is signed, positive when late. ``rate_error`` is a fraction.
    """

    outcome: str
    spikes: int
    expected: int
    error: float | None
    spike_error_us: float | None
    last_spike_us: float | None
    peak_error_mv: float
    rate_error: float | None
    rms_mv: float


@dataclass(frozen=True)
class Point:
    """Conditions to run, one set a seed; ``part`` is ``MAP`` or the quantity swept."""

    scenario: Scenario
    part: str
    value: float
    mode: str
    conditions: tuple[Conditions, ...]


@dataclass(frozen=True)
class Measured:
    """A point and its runs."""

    point: Point
    runs: tuple[Fidelity, ...]

    @property
    def outcome(self) -> str:
        """The worst of its runs'."""
        found = [run.outcome for run in self.runs]
        return next(o for o in (RINGS, MISCOUNTS, FOLLOWS) if o in found)

    @property
    def error(self) -> float | None:
        """Mean error of the runs; None where one of them has none."""
        errors = [run.error for run in self.runs]
        known = [e for e in errors if e is not None]
        return float(np.mean(known)) if len(known) == len(errors) else None


def compare(run: LockstepRun, reference: Reference, act_ms: float) -> Fidelity:
    """Hold a run to the solution, from ``act_ms`` on."""
    t_ms = run.fine_ms[run.fine_ms >= act_ms]
    v_mv = run.fine_mv[run.fine_ms >= act_ms]
    true_mv = reference.at(t_ms)
    found = run.spikes_ms[run.spikes_ms >= act_ms]
    true = reference.spikes_ms[reference.spikes_ms >= act_ms]
    rms_mv = float(np.sqrt(np.mean((v_mv - true_mv) ** 2)))
    outside = v_mv.max() - true_mv.max() > _OUTSIDE_MV or true_mv.min() - v_mv.min() > _OUTSIDE_MV
    samples_mv = run.v_mv[run.trace.t_ms >= act_ms]
    outcome = FOLLOWS if found.size == true.size else MISCOUNTS
    if outside or rings(samples_mv):
        outcome = RINGS
    late_us = 1000.0 * (found - true) if outcome == FOLLOWS and true.size else None
    spike_us = None if late_us is None else float(np.mean(np.abs(late_us)))
    rate_error = None
    if found.size > 1 and true.size > 1:
        rate_error = _rate(found) / _rate(true) - 1.0
    error = spike_us if true.size else 1000.0 * rms_mv
    return Fidelity(
        outcome,
        int(found.size),
        int(true.size),
        error if outcome == FOLLOWS else None,
        spike_us,
        None if late_us is None else float(late_us[-1]),
        float(v_mv.max() - true_mv.max()),
        rate_error,
        rms_mv,
    )


def rings(v_mv: Floats) -> bool:
    """Whether sampled voltages swing to and fro faster than any cell does."""
    slopes = np.sign(np.diff(v_mv))
    turns = np.flatnonzero(slopes[1:] * slopes[:-1] < 0) + 1
    if turns.size < _TURNS:
        return False
    swift = np.diff(turns) <= RING_TICKS
    wide = np.abs(np.diff(v_mv[turns])) >= RING_MV
    row = np.convolve((swift & wide).astype(np.int64), np.ones(_TURNS - 1, dtype=np.int64), "valid")
    return bool((row == _TURNS - 1).any())


def _rate(spikes_ms: Floats) -> float:
    return float((spikes_ms.size - 1) / (spikes_ms[-1] - spikes_ms[0]))


def run_conditions(scenario: Scenario, conditions: Conditions) -> LockstepRun:
    """A scenario's run under conditions.

    Samples are placed so that the first current flows at ``act_ms`` whatever the delay;
    where that is the start, a delay later.
    """
    tick_ms = conditions.tick_us / 1000.0
    arm_ms = max(0.0, scenario.act_ms - conditions.delay_ticks * tick_ms)
    return run_lockstep_loop(
        conditions,
        scenario.cell,
        scenario.tables,
        scenario.duration_ms,
        arm_ms=arm_ms,
        lead_ms=arm_ms - floor(arm_ms / tick_ms + 1e-9) * tick_ms,
        native=scenario.native_tables,
    )


def measure(point: Point) -> Measured:
    """Run a point and hold every run to the solution."""
    reference = solve(point.scenario)
    runs = (run_conditions(point.scenario, c) for c in point.conditions)
    return Measured(point, tuple(compare(r, reference, point.scenario.act_ms) for r in runs))


_choices: dict[tuple[str, float, float], Settings] = {}


def chosen_settings(scenario: Scenario, tick_us: float, delay_ticks: float) -> Settings:
    """What the server chooses for a scenario's cell, its capacitance stated as it is."""
    wanted = scenario.key, tick_us, delay_ticks
    if wanted not in _choices:
        cell = CellSpec(
            name="cell", model=scenario.name, capacitance_pf=scenario.cell.capacitance_pf
        )
        loop = LoopSpec(interval_us=tick_us, apply="on-arrival", anticipate=True)
        choice = choose(cell, scenario.tables, loop, delay_ticks * tick_us / 1000.0)
        _choices[wanted] = Settings(choice.substeps, choice.alpha, choice.beta)
    return _choices[wanted]


def points(scenario: Scenario, plan: Plan) -> Iterator[Point]:
    """Everything that a plan asks of a scenario."""
    for tick_us in plan.ticks_us:
        for delay_ticks in plan.delays_ticks:
            for mode in MODES:
                there = replace(BASE, tick_us=tick_us, delay_ticks=delay_ticks)
                yield Point(scenario, MAP, tick_us, mode, (_in_mode(scenario, there, mode),))
    for name, values in plan.sweeps.items():
        for value in values:
            for mode in MODES:
                base = _in_mode(scenario, BASE, mode)
                seeds = plan.seeds if name in _CHANCE and value else 1
                changed: dict[str, Any] = {name: value}
                runs = (replace(base, seed=k + 1, **changed) for k in range(seeds))
                yield Point(scenario, name, value, mode, tuple(runs))


def _in_mode(scenario: Scenario, conditions: Conditions, mode: str) -> Conditions:
    if mode == PLAIN:
        return conditions
    settings = chosen_settings(scenario, conditions.tick_us, conditions.delay_ticks)
    return replace(conditions, settings=settings)


def measure_all(
    asked: Sequence[Point],
    executor: Executor | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> list[Measured]:
    """Measure points on every core; the same whatever runs them, in the order asked.

    Parameters
    ----------
    asked : sequence of Point
    executor : concurrent.futures.Executor, optional
        Threads of this process if not given: a run is compiled and holds no lock. One
        that is given is left running.
    progress : callable, optional
        Called with points done and points to do.

    Raises
    ------
    KeyboardInterrupt
        When interrupted; points that have not begun are then dropped.
    """
    own = None
    if executor is None:
        executor = own = ThreadPoolExecutor(usable_cores())
    waiting: dict[Future[Measured], int] = {}
    found: dict[int, Measured] = {}
    try:
        waiting = {executor.submit(measure, point): k for k, point in enumerate(asked)}
        for future in as_completed(waiting):
            k = waiting[future]
            # Another process sends back a copy of the point.
            found[k] = replace(future.result(), point=asked[k])
            if progress is not None:
                progress(len(found), len(asked))
    except BaseException:
        for future in waiting:
            future.cancel()
        raise
    finally:
        if own is not None:
            own.shutdown(wait=True, cancel_futures=True)
    return [found[k] for k in range(len(asked))]
