"""The closed loop without sockets: server and simulated rig in one compiled function.

The server's side is what the server runs (:func:`gatestep.tick.take_sample`), and the
rig's side is the simulated rig's own (:mod:`gatestep.simloop`), so that a run is the
same as one of :class:`gatestep.simrig.SimRig` in lockstep against a real server, to the
last bit, at a small part of its cost. Nothing in a run depends on the machine or on the
time: the same arguments give the same run.

The current at the output may change inside a tick; so that a spike's time does not
depend on the tick at which it is sampled, the membrane is noted every ``FINE_US`` too.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from math import ceil, floor
from typing import Any, NamedTuple

import numpy as np

from .compiling import compiled, inner
from .errors import GatestepError
from .inforce import HISTORY
from .kernel import BANK, records
from .simcell import DROP_STREAM, SUBSTEP_US, carry, make_cells, uniform
from .simloop import (
    Columns,
    SimLoop,
    enqueue,
    let_flow,
    make_columns,
    make_loop,
    measure,
    note,
    put_in_force,
)
from .simpace import virtual_arrival
from .simtrace import Floats, Trace, crossings
from .specs import CellLimits, SimCellSpec
from .stability import Settings
from .states import State
from .tables import Tables, fill_bank
from .tick import CELL, LOOP, begin_session, settle_answer, take_sample
from .wire import ANSWER, NIL

FINE_US = 10.0
"""Longest time between two of the voltages that spikes are found in, in µs."""
_LONGEST_DELAY_TICKS = 8.0
_SHORTEST_TICK_US, _LONGEST_TICK_US = 1.0, 100_000.0
_NEVER = float("inf")
_ARMED, _IDLE = int(State.ARMED), int(State.IDLE)


@dataclass(frozen=True)
class Conditions:
    """What a loop is like: its clock, its faults, and what its server knows and does.

    Attributes
    ----------
    tick_us : float
        Tick of the rig.
    delay_ticks : float
        From a sample to its answer's current, 0 to 8 ticks. With ``next_tick`` it is
        rounded up to whole ticks, at least 1.
    next_tick : bool
        Answers flow from a tick's edge, not from their arrival.
    jitter_ticks : float
        The delay is uniform within so much on either side.
    drop : float
        Share of the answers that never reach the output, 0 to below 1.
    noise_mv : float
        Noise of each measured voltage, rms.
    capacitance_error : float
        What the server takes for the capacitance, as a fraction above the true one.
    residue_mohm : float
        Series resistance left in the measured voltage.
    seed : int
        For noise, jitter and drops.
    input_ns, input_mv : float
        A conductance that the server is told the cell has, and its reversal.
    settings : Settings or None
        How the server anticipates; None is a plain loop.
    limits : CellLimits or None
        The guard's; None lets every finite current and voltage pass.
    """

    tick_us: float = 20.0
    delay_ticks: float = 0.5
    next_tick: bool = False
    jitter_ticks: float = 0.0
    drop: float = 0.0
    noise_mv: float = 0.0
    capacitance_error: float = 0.0
    residue_mohm: float = 0.0
    seed: int = 1
    input_ns: float = 0.0
    input_mv: float = 0.0
    settings: Settings | None = None
    limits: CellLimits | None = None

    def __post_init__(self) -> None:
        for name, low, high in (
            ("tick_us", _SHORTEST_TICK_US, _LONGEST_TICK_US),
            ("delay_ticks", 0.0, _LONGEST_DELAY_TICKS),
            ("jitter_ticks", 0.0, _LONGEST_DELAY_TICKS),
            ("drop", 0.0, 0.999),
            ("noise_mv", 0.0, 50.0),
            ("capacitance_error", -0.99, 10.0),
            ("residue_mohm", 0.0, 1000.0),
        ):
            if not low <= getattr(self, name) <= high:
                raise GatestepError(f"{name} = {getattr(self, name)}: give {low:g} to {high:g}")


@dataclass(frozen=True)
class LockstepRun:
    """What became of a run.

    Attributes
    ----------
    trace : Trace
        Every tick, one cell: voltages at the samples, currents, reports.
    fine_ms, fine_mv : array (ticks * parts,)
        The membrane at least every ``FINE_US``.
    counts : dict
        ``late``, ``clipped``, ``foreseen``, ``fallbacks`` and ``trips`` of the server,
        ``dropped`` and ``overtaken`` of the rig.
    """

    trace: Trace
    fine_ms: Floats
    fine_mv: Floats
    counts: dict[str, int]

    @property
    def v_mv(self) -> Floats:
        """Membrane voltage at the samples, mV."""
        return np.asarray(self.trace.v_mv[:, 0])

    @cached_property
    def spikes_ms(self) -> Floats:
        """Times at which the membrane rises through 0 mV, ms."""
        return crossings(self.fine_ms, self.fine_mv, 0.0)


class _ServerSide(NamedTuple):
    """The server's memory, as :func:`gatestep.tick.take_sample` takes it."""

    loop: Any
    cells: Any
    banks: Any
    table: Any
    past: Any


def run_lockstep_loop(
    conditions: Conditions,
    cell: SimCellSpec,
    model: Tables,
    duration_ms: float,
    *,
    stimulus_pa: float | Floats | None = None,
    arm_ms: float = 0.0,
    lead_ms: float = 0.0,
    native: tuple[Tables, ...] = (),
    fine_us: float = FINE_US,
) -> LockstepRun:
    """Let a simulated cell live in a loop with a model; deterministic.

    Parameters
    ----------
    conditions : Conditions
        The loop. Its noise and residue replace the cell's.
    cell : SimCellSpec
        The cell. Its own conductances are ``native``, not the names in it.
    model : Tables
        What the server injects.
    duration_ms : float
        Rounded to whole ticks.
    stimulus_pa : float or array (ticks,), optional
        Added by the rig, pA; the cell's own steps if not given.
    arm_ms : float
        The server is armed at the first sample from this time on.
    lead_ms : float
        The cell lives so long by itself before the first sample; the run's times count
        from before it, and so do ``duration_ms`` and ``arm_ms``. Lets a sample, or the
        moment its answer flows, fall where it should.
    native : tuple of Tables
        Conductances of the cell's own.
    fine_us : float
        The membrane is noted at least this often.

    Raises
    ------
    GatestepError
        When a stimulus does not have one finite value a tick.
    """
    tick_ms = conditions.tick_us / 1000.0
    ticks = max(1, round((duration_ms - lead_ms) / tick_ms))
    rig = _rig_side(conditions, cell, native)
    server = _server_side(conditions, cell, model)
    columns = make_columns(ticks, 1)
    t_ms = _times(ticks, tick_ms, lead_ms)
    columns.stimulus_pa[:, 0] = _stimulus(t_ms, cell, stimulus_pa)
    parts = max(1, ceil(conditions.tick_us / fine_us - 1e-9))
    fine_mv = np.empty(ticks * parts)
    armed_from = ceil((arm_ms - lead_ms) / tick_ms - 1e-6)
    if lead_ms > 0.0:
        carry(rig.cells, 0, columns.stimulus_pa[0, 0], lead_ms, SUBSTEP_US)
    _run(rig, server, columns, fine_mv, parts, ticks, armed_from)
    loop = server.loop[0]
    counts = {n: int(loop[n]) for n in ("late", "clipped", "foreseen", "fallbacks", "trips")}
    counts |= {n: int(rig.rig[0][n]) for n in ("dropped", "overtaken")}
    trace = Trace(
        t_ms=t_ms,
        **columns._asdict(),
        interval_us=conditions.tick_us,
        budget_us=float(loop.budget_us),
    )
    return LockstepRun(trace, _times(fine_mv.size, tick_ms / parts, lead_ms), fine_mv, counts)


def _times(count: int, step_ms: float, lead_ms: float) -> Floats:
    return np.asarray(lead_ms + np.arange(count) * step_ms, dtype=np.float64)


def _stimulus(t_ms: Floats, cell: SimCellSpec, given: float | Floats | None) -> Floats:
    """The rig's own current over every tick, pA."""
    if given is not None:
        values = np.broadcast_to(np.asarray(given, np.float64), np.shape(given) or t_ms.shape)
        if values.shape != t_ms.shape or not np.isfinite(values).all():
            raise GatestepError(f"stimulus_pa: give {t_ms.size} finite values or one number")
        return values
    total = np.zeros_like(t_ms)
    for step in cell.step:
        total[(t_ms > step.start_ms - 1e-9) & (t_ms < step.stop_ms - 1e-9)] += step.current_pa
    return total


def _rig_side(conditions: Conditions, cell: SimCellSpec, native: tuple[Tables, ...]) -> SimLoop:
    """The simulated rig, without a socket."""
    measured = cell.model_copy(
        update={
            "noise_mv": conditions.noise_mv,
            "electrode_mohm": conditions.residue_mohm,
            "bridge_mohm": 0.0,
        }
    )
    cells = make_cells([measured], [[(model.bank, model.table) for model in native]])
    side = make_loop(cells, 64)
    rig = side.rig[0]
    rig.interval_us, rig.seed = conditions.tick_us, conditions.seed
    rig.on_arrival = not conditions.next_tick
    rig.delay_us = conditions.delay_ticks * conditions.tick_us
    rig.jitter_us = conditions.jitter_ticks * conditions.tick_us
    rig.drop = conditions.drop
    rig.budget_us = rig.timeout_us = _NEVER
    return side


def _server_side(conditions: Conditions, cell: SimCellSpec, model: Tables) -> _ServerSide:
    """The server, idle, its budget so wide that only a lost answer is late."""
    loop, cells, banks = records(LOOP), records(CELL), records(BANK)
    usual_ticks = conditions.delay_ticks
    if conditions.next_tick:
        usual_ticks = max(1, ceil(usual_ticks - 1e-9))
    longest_ticks = usual_ticks + conditions.jitter_ticks
    loop.cells, loop.interval_us = 1, conditions.tick_us
    loop.budget_us = max(1.0, longest_ticks) * conditions.tick_us
    loop.due_ticks = floor(longest_ticks) + 1
    loop.late_run_limit = np.iinfo(np.int64).max
    loop.play_slot = NIL
    loop.usual_delay_us = usual_ticks * conditions.tick_us
    loop.state = _IDLE
    _fill_cell(cells[0], conditions, cell)
    table = np.empty(model.table.size)
    fill_bank(model, banks[0], table)
    return _ServerSide(loop, cells, banks, table, records(ANSWER, HISTORY))


def _fill_cell(record: Any, conditions: Conditions, cell: SimCellSpec) -> None:
    limits, settings = conditions.limits, conditions.settings
    record.limit_pa = record.slew_pa = record.high_mv = _NEVER
    record.low_mv = -_NEVER
    if limits is not None:
        record.limit_pa = limits.current_pa
        slew = limits.slew_pa_per_ms
        tick_ms = conditions.tick_us / 1000.0
        record.slew_pa = 2.0 * limits.current_pa if slew is None else slew * tick_ms
        record.low_mv, record.high_mv = limits.window_mv
    if settings is not None:
        shadow = record.shadow
        shadow.on, shadow.substeps = 1, settings.substeps
        shadow.alpha, shadow.beta = settings.alpha, settings.beta
        shadow.capacitance_pf = cell.capacitance_pf * (1.0 + conditions.capacitance_error)
        shadow.leak_ns, shadow.leak_mv = conditions.input_ns, conditions.input_mv


@compiled
def _run(
    rig_side: Any,
    server: Any,
    columns: Columns,
    fine_mv: Any,
    parts: int,
    ticks: int,
    armed_from: int,
) -> None:
    """[hot] Exchange samples and answers, tick by tick."""
    rig, sample, answer = rig_side.rig[0], rig_side.sample[0], rig_side.answer[0]
    loop = server.loop[0]
    begin_session(loop, server.cells, server.past)
    while rig.seq < ticks:
        if rig.seq >= armed_from:
            loop.state = _ARMED
        measure(rig_side, columns, rig.seq)
        take_sample(loop, server.cells, server.banks, server.table, server.past, sample, answer)
        settle_answer(loop, answer, server.past, 0)
        note(rig_side, columns, 0, 0)
        if rig.drop > 0.0 and uniform(rig.seed, DROP_STREAM, rig.seq) <= rig.drop:
            rig.dropped += 1
        else:
            tick, offset_us, lag_us = virtual_arrival(rig_side)
            enqueue(rig_side, tick, offset_us, lag_us)
        _live(rig_side, columns, fine_mv, parts)
        rig.seq += 1


@inner
def _live(rig_side: Any, columns: Any, fine_mv: Any, parts: int) -> None:
    """[hot] Let a tick pass in equal parts, the membrane noted at the start of each."""
    rig, pending = rig_side.rig[0], rig_side.pending
    cell = rig_side.cells.cells[np.uint64(0)]
    row = np.uint64(rig.played)
    columns.v_mv[row, np.uint64(0)] = cell.v_mv
    columns.i_pa[row, np.uint64(0)] = 0.0
    at_us = 0.0
    for part in range(parts):
        fine_mv[row * np.uint64(parts) + np.uint64(part)] = cell.v_mv
        end_us = rig.interval_us * (part + 1) / parts
        while rig.count > 0 and pending[np.uint64(rig.head)].tick <= rig.played:
            head = pending[np.uint64(rig.head)]
            switch_us = min(head.offset_us, rig.interval_us) if head.tick == rig.played else 0.0
            if switch_us > end_us:
                break
            if switch_us > at_us:
                let_flow(rig_side, columns, row, switch_us - at_us)
                at_us = switch_us
            put_in_force(rig_side)
        if at_us < end_us:
            let_flow(rig_side, columns, row, end_us - at_us)
            at_us = end_us
    rig.played += 1
