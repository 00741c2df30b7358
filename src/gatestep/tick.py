"""What one sample does to the loop, without any socket.

:func:`decode` reads a message and :func:`take_sample` fills the answer: account for
gaps, repeats, lateness and the rig's clock, step every cell's gates, then let the
guard pass a current. Gates follow the measured voltage in every state, so that
arming finds them where the cell's history has put them.
"""

from __future__ import annotations

from math import isfinite
from typing import Any

import numpy as np

from .anticipate import MOST_SEGMENTS, SHADOW, anticipated, cross, estimate, forget
from .compiling import compiled, inner
from .guard import limited, voltage_fault
from .inforce import HISTORY, fill_coming, flowed, note_lag
from .kernel import STATES, current, settle, step
from .specs import MAX_CELLS, MAX_CONDUCTANCES
from .states import Event, Fault, State, next_state
from .wire import CLIPPED, GAP, LATE, LIVE, NIL, REFUSED, REPEAT, TRIPPED, read_sample

LOOP = np.dtype(
    [
        # Set before the loop runs.
        ("cells", "i8"),
        ("interval_us", "f8"),
        ("budget_us", "f8"),
        ("due_ticks", "i8"),  # an answer should be in force this many samples later
        ("silence_nsec", "i8"),
        ("late_run_limit", "i8"),
        ("usual_delay_us", "f8"),  # from a sample to its answer's current, before it is known
        # The state, and what led to it.
        ("state", "i8"),
        ("fault", "i8"),
        ("fault_cell", "i8"),
        ("armed_after", "i8"),  # newest answered when it was last armed; NIL in a new session
        ("stopping", "i8"),
        ("stopped_nsec", "i8"),  # when it was ordered to stop
        # The stimulus of a sweep.
        ("play_slot", "i8"),  # NIL when none plays
        ("play_cell", "i8"),
        ("play_from", "i8"),  # its first sample
        ("play_ticks", "i8"),
        ("play_number", "i8"),  # of the order that began it
        # The rig that holds the loop, and its sequence.
        ("held", "i8"),
        ("session", "i8"),  # rigs that have taken hold so far
        ("running", "i8"),  # whether the session has had a sample
        ("seq", "i8"),  # newest answered
        ("heard_nsec", "i8"),  # monotonic time of the rig's last new sample
        # Lateness and the rig's clock.
        ("late_through", "i8"),  # newest answer already judged late
        ("due_through", "i8"),  # newest answer already judged for being in force when due
        ("late_run", "i8"),
        ("t_us", "f8"),
        ("since_seq", "i8"),
        ("since_t_us", "f8"),
        ("tick_us", "f8"),  # as the rig's clock shows it; 0 before it is known
        ("tick_wrong", "i8"),
        ("bank", "i8", (MAX_CELLS,)),  # in force in each cell, as of the last flush
        # What anticipation needs of the rig's reports.
        ("first_seq", "i8"),  # of the session
        ("in_force", "i8"),  # as reported with the sample before
        ("delay_us", "f8"),  # from a sample to its answer's current, by the rig's lags
        # Counters, from the start of the server.
        ("answered", "i8"),
        ("late", "i8"),
        ("missed", "i8"),
        ("repeats", "i8"),
        ("malformed", "i8"),
        ("refused", "i8"),
        ("clipped", "i8"),
        ("trips", "i8"),
        ("clock_jumps", "i8"),
        ("foreseen", "i8"),  # cells' currents that were anticipated
        ("fallbacks", "i8"),  # those that should have been and lacked what it needs
        ("records_lost", "i8"),
        ("undelivered", "i8"),  # answers that did not leave; the lane counts them
    ],
    align=True,
)
CELL = np.dtype(
    [
        ("limit_pa", "f8"),
        ("slew_pa", "f8"),  # largest change from one answer to the next
        ("low_mv", "f8"),
        ("high_mv", "f8"),
        ("bank", "i8"),  # index of the bank in force
        ("settled", "i8"),  # whether the gates have met a voltage
        ("owed_ticks", "f8"),  # ticks the gates have not been carried across
        ("v_mv", "f8"),  # newest finite voltage
        ("i_pa", "f8"),  # current last answered
        ("stimulus_pa", "f8"),  # to be added to the model's current in the next answer
        ("ramp_ticks", "i8"),  # how long a change of gmax takes
        ("ramp_left", "i8"),
        ("ramp_from_ns", "f8", (MAX_CONDUCTANCES,)),
        ("ramp_to_ns", "f8", (MAX_CONDUCTANCES,)),
        ("x", "f8", (STATES,)),
        ("coming_pa", "f8", (MOST_SEGMENTS,)),
        ("shadow", SHADOW),
    ],
    align=True,
)

TICKS_TO_JUDGE = 1000
"""Ticks over which the rig's clock is compared with the interval."""
TICK_TOLERANCE = 0.01
_JUMP_US = 1e6

ANSWERED, WAS_REPEAT, WAS_MALFORMED = 0, 1, 2
"""What a message was found to be."""

_LAST = np.int64(HISTORY - 1)
_IDLE, _ARMED, _TRIPPED = int(State.IDLE), int(State.ARMED), int(State.TRIPPED)
_FAULT = np.int64(Event.FAULT)
# Typed, so that compiled callers share one body: a plain literal makes a type of its own.
_NONE = np.int64(Fault.NONE)
_LATE_RUN = np.int64(Fault.RUN_OF_LATE_ANSWERS)
_WRONG_TICK = np.int64(Fault.WRONG_TICK)
_BAD_CURRENT = np.int64(Fault.NON_FINITE_CURRENT)


@compiled
def begin_session(loop: Any, cells: Any, past: Any) -> None:
    """[hot] Ready for a new rig: its sequence, clock and gates start afresh."""
    loop.running = 0
    loop.armed_after = NIL
    loop.late_through = NIL
    loop.due_through = NIL
    loop.late_run = 0
    loop.tick_us = 0.0
    loop.tick_wrong = 0
    loop.in_force = NIL
    loop.play_slot = NIL
    loop.delay_us = loop.usual_delay_us
    for k in range(HISTORY):
        past[k].seq = NIL
    for k in range(np.uint64(loop.cells)):
        cells[k].settled = 0
        cells[k].owed_ticks = 0.0
        cells[k].i_pa = 0.0
        cells[k].stimulus_pa = 0.0
        forget(cells[k].shadow)


@compiled
def trip(loop: Any, fault: int, cell: int) -> None:
    """[hot] Let a fault change the state as the transition table says."""
    after = next_state(loop.state, _FAULT)
    if after == _TRIPPED and loop.state != _TRIPPED:
        loop.fault = fault
        loop.fault_cell = cell
        loop.trips += 1
    loop.state = after


@inner
def _judge_clock(loop: Any, sample: Any) -> None:
    """[hot] Compare the rig's tick with the interval, over enough ticks to tell.

    A clock that steps back or leaps (a counter that wrapped, a clock that was set)
    says nothing about the tick: the comparison starts again from there.
    """
    expected = (sample.seq - loop.seq) * loop.interval_us
    jumped = sample.t_us < loop.t_us or sample.t_us - loop.t_us > expected + _JUMP_US
    ticks = sample.seq - loop.since_seq
    if loop.running and not jumped and ticks < TICKS_TO_JUDGE:
        loop.t_us = sample.t_us
        return
    if loop.running and jumped:
        loop.clock_jumps += 1
    elif loop.running:
        loop.tick_us = (sample.t_us - loop.since_t_us) / ticks
        off = abs(loop.tick_us - loop.interval_us)
        loop.tick_wrong = np.int64(off > TICK_TOLERANCE * loop.interval_us)
    loop.since_seq = sample.seq
    loop.since_t_us = sample.t_us
    loop.t_us = sample.t_us


@inner
def _judge_lateness(loop: Any, sample: Any, past: Any) -> bool:
    """[hot] Whether the sample shows an answer to have come too late; each counts once.

    Either the rig says so by ``lag_us``, or an answer that was due by now is not
    the one in force. An answer that this rig has not been given says nothing.
    """
    due = min(sample.seq - loop.due_ticks, loop.seq)
    first = max(loop.due_through + 1, loop.seq - _LAST)
    loop.due_through = max(due, loop.due_through)
    if sample.in_force == NIL or not loop.running or sample.in_force > loop.seq:
        return False
    late = False
    if sample.lag_us > loop.budget_us and sample.in_force > loop.late_through:
        loop.late += 1
        loop.late_through = sample.in_force
        late = True
    # One answer as a rule; after a gap, all those that became due in it.
    for overdue in range(max(first, sample.in_force + 1, loop.late_through + 1), due + 1):
        if past[np.uint64(overdue & _LAST)].seq == overdue:
            loop.late += 1
            loop.late_through = overdue
            late = True
    loop.late_run = loop.late_run + 1 if late else 0
    return late


@inner
def _judge_voltages(loop: Any, cells: Any, sample: Any) -> None:
    """[hot] Trip on a voltage that is not finite or has left its window."""
    for k in range(np.uint64(loop.cells)):
        fault = voltage_fault(sample.v_mv[k], cells[k].low_mv, cells[k].high_mv)
        if fault != _NONE:
            trip(loop, fault, k)


@inner
def _step_cell(loop: Any, cell: Any, bank: Any, table: Any, v_mv: float) -> float:
    """[hot] Carry one cell's gates to its newest voltage; the model's current, pA."""
    interval_ms = loop.interval_us * 1e-3
    if not cell.settled:
        settle(bank, table, cell.x, v_mv)
        cell.settled = 1
        wanted = current(bank, cell.x, v_mv)
    else:
        wanted = step(bank, table, cell.x, cell.v_mv, v_mv, cell.owed_ticks * interval_ms)
    return wanted


@inner
def _know(loop: Any, cell: Any, past: Any, sample: Any, k: int) -> bool:
    """[hot] Take the last tick into what is known of the cell; whether that suffices."""
    shadow, interval_ms = cell.shadow, loop.interval_us * 1e-3
    v_mv = sample.v_mv[np.uint64(k)]
    known = cell.settled and cell.owed_ticks == 1.0 and sample.in_force != NIL
    if known and cell.low_mv <= v_mv <= cell.high_mv:
        mean_pa = flowed(loop, past, sample, k)
        estimate(shadow, cell.v_mv, v_mv, mean_pa, interval_ms)
    else:
        forget(shadow)
    return shadow.estimates > 0 and fill_coming(loop, past, sample, k, cell.coming_pa)


@inner
def _model_current(
    loop: Any, cell: Any, bank: Any, table: Any, past: Any, sample: Any, k: int
) -> float:
    """[hot] Step one cell to its newest voltage; the current it should be given, pA."""
    v_mv = sample.v_mv[np.uint64(k)]
    if not isfinite(v_mv):
        return 0.0
    if cell.shadow.on != 0 and _know(loop, cell, past, sample, k):
        loop.foreseen += 1
        delay_ms, interval_ms = loop.delay_us * 1e-3, loop.interval_us * 1e-3
        cross(cell.shadow, bank, table, cell.x, cell.v_mv, v_mv, delay_ms, interval_ms)
        wanted = anticipated(
            cell.shadow, bank, table, cell.x, v_mv, cell.coming_pa, cell.stimulus_pa,
            delay_ms, interval_ms,
        )  # fmt: skip
    else:
        loop.fallbacks += cell.shadow.on
        wanted = _step_cell(loop, cell, bank, table, v_mv)
    cell.v_mv = v_mv
    cell.owed_ticks = 0.0
    return wanted + cell.stimulus_pa


@inner
def _ramp(cell: Any, bank: Any, ticks: int) -> None:
    """[hot] Carry a change of gmax on by ``ticks``; its end is exact."""
    cell.ramp_left = max(cell.ramp_left - ticks, 0)
    share = np.float64(cell.ramp_left) / np.float64(cell.ramp_ticks)
    for c in range(np.uint64(MAX_CONDUCTANCES)):
        back_ns = share * (cell.ramp_from_ns[c] - cell.ramp_to_ns[c])
        bank.gmax_ns[c] = cell.ramp_to_ns[c] + back_ns


@inner
def _answer_cells(
    loop: Any,
    cells: Any,
    banks: Any,
    table: Any,
    past: Any,
    sample: Any,
    answer: Any,
    ticks: int,
) -> bool:
    """[hot] Step every cell and pass its current through the guard; whether any clipped."""
    clipped = False
    for k in range(np.uint64(loop.cells)):
        cell = cells[k]
        cell.owed_ticks += ticks
        bank = banks[np.uint64(cell.bank)]
        if cell.ramp_left > 0:
            _ramp(cell, bank, ticks)
        wanted = _model_current(loop, cell, bank, table, past, sample, np.int64(k))
        if not isfinite(wanted):
            trip(loop, _BAD_CURRENT, k)
        passed, held_back = limited(wanted, cell.i_pa, cell.limit_pa, cell.slew_pa)
        answer.i_pa[k] = passed
        clipped = clipped or held_back
    return clipped


@inner
def _silence(loop: Any, cells: Any, answer: Any) -> None:
    """[hot] Make every current of an answer 0 pA, whatever it was."""
    answer.flags &= ~np.int64(LIVE | CLIPPED)
    for k in range(np.uint64(loop.cells)):
        answer.i_pa[k] = 0.0


@inner
def _state_flag(loop: Any) -> int:
    """[hot] The flag that tells the state."""
    if loop.state == _ARMED:
        return LIVE
    return TRIPPED if loop.state == _TRIPPED else 0


@inner
def _repeat(loop: Any, cells: Any, sample: Any, answer: Any, past: Any) -> int:
    """[hot] Answer a sequence number again, without a step.

    The same answer, unless the loop is no longer armed, or was armed again since: then
    0 pA. A number too old to be remembered gets 0 pA.
    """
    loop.repeats += 1
    earlier = past[np.uint64(sample.seq & _LAST)]
    known = earlier.seq == sample.seq
    answer.flags = earlier.flags if known else np.int64(0)
    answer.service_nsec = earlier.service_nsec if known else np.int64(0)
    for k in range(np.uint64(loop.cells)):
        answer.i_pa[k] = earlier.i_pa[k] if known else 0.0
    if loop.state != _ARMED:
        _silence(loop, cells, answer)
        answer.flags |= _state_flag(loop)
    elif sample.seq <= loop.armed_after:
        _silence(loop, cells, answer)
    answer.flags |= REPEAT
    return WAS_REPEAT


@inner
def _account(loop: Any, sample: Any, past: Any) -> int:
    """[hot] Gap, clock and lateness of a new sample; the flags they set."""
    flags = np.int64(0)
    if loop.running and sample.seq - loop.seq > 1:
        flags |= GAP
        loop.missed += sample.seq - loop.seq - 1
    _judge_clock(loop, sample)
    if _judge_lateness(loop, sample, past):
        flags |= LATE
    if not loop.running:
        loop.first_seq = sample.seq
    loop.running = 1
    loop.seq = sample.seq
    note_lag(loop, sample)
    return flags


@compiled
def play(loop: Any, cells: Any, stimulus: Any, seq: int) -> None:
    """[hot] Take the stimulus of a new sample, 0 where none plays."""
    for k in range(np.uint64(loop.cells)):
        cells[k].stimulus_pa = 0.0
    at = seq - loop.play_from
    if loop.play_slot != NIL and 0 <= at < loop.play_ticks:
        slot = np.uint64(loop.play_slot)
        cells[np.uint64(loop.play_cell)].stimulus_pa = stimulus[slot, np.uint64(at)]


@compiled
def take_sample(
    loop: Any, cells: Any, banks: Any, table: Any, past: Any, sample: Any, answer: Any
) -> int:
    """[hot] Take a decoded sample and fill the answer: ``ANSWERED`` or ``WAS_REPEAT``.

    The service time is left for :func:`settle_answer`.
    """
    answer.seq = sample.seq
    if loop.running and sample.seq <= loop.seq:
        return _repeat(loop, cells, sample, answer, past)
    ticks = sample.seq - loop.seq if loop.running else np.int64(1)
    flags = _account(loop, sample, past)
    _judge_voltages(loop, cells, sample)
    if loop.tick_wrong:
        trip(loop, _WRONG_TICK, NIL)
    if loop.late_run >= loop.late_run_limit:
        trip(loop, _LATE_RUN, NIL)
    clipped = _answer_cells(loop, cells, banks, table, past, sample, answer, ticks)
    loop.in_force = sample.in_force
    answer.flags = flags | _state_flag(loop)
    if loop.state != _ARMED:
        _silence(loop, cells, answer)
    elif clipped:
        answer.flags |= CLIPPED
        loop.clipped += 1
    live = np.float64(loop.state == _ARMED)
    for k in range(np.uint64(loop.cells)):
        cells[k].i_pa = answer.i_pa[k]
        cells[k].stimulus_pa *= live
    return ANSWERED


@compiled
def decode(loop: Any, message: Any, size: int, sample: Any) -> bool:
    """[hot] Read a message of the rig that holds the loop; False, and counted, if malformed."""
    if size > message.size or not read_sample(message, size, loop.cells, sample):
        loop.malformed += 1
        return False
    return True


@compiled
def settle_answer(loop: Any, answer: Any, past: Any, service_nsec: int) -> None:
    """[hot] Put the service time into a new answer and remember it for repeats."""
    loop.answered += 1
    answer.service_nsec = max(service_nsec, 0)
    kept = past[np.uint64(answer.seq & _LAST)]
    kept.seq = answer.seq
    kept.flags = answer.flags
    kept.service_nsec = answer.service_nsec
    for k in range(np.uint64(loop.cells)):
        kept.i_pa[k] = answer.i_pa[k]


@compiled
def refuse(loop: Any, message: Any, size: int, sample: Any, answer: Any) -> int:
    """[hot] Answer a rig that does not hold the loop: 0 pA and the reason."""
    if size > message.size or not read_sample(message, size, loop.cells, sample):
        loop.malformed += 1
        return WAS_MALFORMED
    loop.refused += 1
    answer.seq = sample.seq
    answer.flags = REFUSED
    answer.service_nsec = 0
    for k in range(np.uint64(loop.cells)):
        answer.i_pa[k] = 0.0
    return ANSWERED
