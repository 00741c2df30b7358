"""The hot loop: receive, consider, reply, log. One compiled function on one thread.

:func:`run_loop` runs without the interpreter and without its lock until it is
ordered to stop. What it shares with the rest of the server are messages: orders
come in over an inproc socket, and blocks of log entries, each led by a copy of the
loop's own record, go out over another. Orders are taken between two samples, and
the order of work is reply first, log after, save for what was ordered for a sample: that is
done, and logged, before the sample's step.

Arrays that the loop reads and others prepare: the banks and their tables. A control
thread writes only banks that are not in force and hands them over with a ``SWAP``; the
same goes for the slots of stimuli and ``PLAY``.
"""

from __future__ import annotations

from enum import IntEnum
from typing import Any, NamedTuple

import numpy as np

from .compiling import compiled, inner
from .inforce import HISTORY
from .kernel import BANK, records
from .lanebase import CLOSED, GONE, MAX_PEER, NOTHING, now_nsec
from .lanes import close_lane, receive, reply
from .orders import AGENDA, ORDER, Order, Outcome, obey
from .specs import MAX_CELLS, RigSpec
from .states import Fault
from .tick import (
    ANSWERED,
    CELL,
    LOOP,
    WAS_MALFORMED,
    begin_session,
    decode,
    play,
    refuse,
    settle_answer,
    take_sample,
    trip,
)
from .wire import ANSWER, NIL, REPEAT, SAMPLE, write_answer, write_malformed
from .zmqlane import send, take


class Entry(IntEnum):
    """What a log entry tells."""

    SAMPLE = 0
    ORDER = 1
    TRIP = 2
    HOLD = 3
    RELEASE = 4
    CLOCK_JUMP = 5


ENTRY = np.dtype(
    [
        ("kind", "i8"),
        ("nsec", "i8"),  # monotonic time: of arrival for a sample
        ("seq", "i8"),
        ("t_us", "f8"),
        ("in_force", "i8"),
        ("lag_us", "f8"),
        ("flags", "i8"),
        ("service_nsec", "i8"),
        ("number", "i8"),  # of an order
        ("code", "i8"),  # kind of an order, fault of a trip, session of a hold
        ("outcome", "i8"),
        ("cell", "i8"),
        ("index", "i8"),
        ("value", "f8"),
        ("v_mv", "f8", (MAX_CELLS,)),
        ("i_pa", "f8", (MAX_CELLS,)),
        ("stimulus_pa", "f8", (MAX_CELLS,)),  # what the sweep asked for; 0 unless live
    ],
    align=True,
)

BLOCK = 128
"""Most log entries in one message."""

DESK = np.dtype(
    [
        ("orders", "u8"),  # libzmq's addresses of the two inproc sockets
        ("log", "u8"),
        ("order_at", "u8"),
        ("block_at", "u8"),
        ("entries", "i8"),  # waiting in the block
        ("planned", "i8"),  # orders on the agenda
        ("next", "i8"),  # the first of them
        ("urgent", "i8"),  # whether an entry waits that should be handed over at once
        ("untold", "i8"),  # whether a counter has moved that no waiting entry tells
        ("flushed_nsec", "i8"),
        ("holder_serial", "i8"),
        ("holder_size", "i8"),
        ("holder", "u1", (MAX_PEER,)),
    ],
    align=True,
)

_FLUSH_NSEC = 20_000_000
_STOP_NSEC = 250_000_000
_ORDERS_A_TURN = 4
_BLOCK = BLOCK
_AGENDA = np.int64(AGENDA)
_REPEAT = np.int64(REPEAT)
_LOOP_SIZE = LOOP.itemsize
_ENTRY_SIZE = ENTRY.itemsize
_ORDER_SIZE = ORDER.itemsize
_NO_ROOM, _DROPPED = int(Outcome.NO_ROOM), int(Outcome.DROPPED)
_CANCEL, _REST, _PLAY = int(Order.CANCEL), int(Order.REST), int(Order.PLAY)
# Typed, so that compiled callers share one body: a plain literal makes a type of its own.
_SAMPLE, _ORDER, _TRIP = (np.int64(e) for e in (Entry.SAMPLE, Entry.ORDER, Entry.TRIP))
_HOLD, _RELEASE, _CLOCK_JUMP = (np.int64(e) for e in (Entry.HOLD, Entry.RELEASE, Entry.CLOCK_JUMP))
_NO_FAULT, _SILENCE = np.int64(Fault.NONE), np.int64(Fault.SILENCE)
_DISCONNECTED = np.int64(Fault.DISCONNECTED)


class LoopMemory(NamedTuple):
    """Everything the hot loop touches, allocated before it starts.

    ``block`` is one buffer: the ``LOOP`` record, then ``BLOCK`` entries, so that a
    flush is a single send. ``loop`` and ``entries`` are views of it.
    """

    desk: Any
    lane: Any
    block: Any
    loop: Any
    entries: Any
    cells: Any
    banks: Any
    table: Any
    past: Any
    order: Any
    agenda: Any
    stimulus: Any
    sample: Any
    answer: Any


def make_memory(
    rig: RigSpec, lane: Any, orders: int, log: int, table: Any, stimulus: Any
) -> LoopMemory:
    """Allocate and set up what the loop needs.

    Parameters
    ----------
    rig : RigSpec
        Limits, interval and budget are taken from it.
    lane : ndarray of ZMQ_LANE or DIRECT
        From :func:`gatestep.zmqlane.make_zmq_lane` or :func:`gatestep.direct.make_direct`.
    orders, log : int
        ``Socket.underlying`` of the loop's ends of the inproc sockets.
    table : ndarray of float64
        Room for the tables of two banks a cell.
    stimulus : ndarray (slots, ticks) of float64
        Where the stimuli of sweeps are written, pA; only to slots that do not play.
    """
    block = np.zeros(_LOOP_SIZE + BLOCK * _ENTRY_SIZE, np.uint8)
    loop = block[:_LOOP_SIZE].view(LOOP).view(np.recarray)
    entries = block[_LOOP_SIZE:].view(ENTRY).view(np.recarray)
    order = records(ORDER)
    desk = records(DESK)
    desk[0].orders, desk[0].log = orders, log
    desk[0].order_at, desk[0].block_at = order.ctypes.data, block.ctypes.data
    _set_up_loop(loop[0], rig)
    cells = records(CELL, len(rig.cell))
    for cell, spec in zip(cells, rig.cell, strict=True):
        limit = spec.limits.current_pa
        slew = spec.limits.slew_pa_per_ms
        cell.limit_pa = limit
        cell.slew_pa = 2.0 * limit if slew is None else slew * rig.loop.interval_us * 1e-3
        cell.low_mv, cell.high_mv = spec.limits.window_mv
        cell.shadow.capacitance_pf = spec.capacitance_pf or 0.0
        cell.shadow.leak_ns, cell.shadow.leak_mv = spec.input_ns or 0.0, spec.input_mv or 0.0
        cell.shadow.substeps = 1
    for k, cell in enumerate(cells):
        cell.bank = 2 * k
    return LoopMemory(
        desk, lane, block, loop, entries, cells, records(BANK, 2 * len(rig.cell)), table,
        records(ANSWER, HISTORY), order, records(ORDER, AGENDA), stimulus, records(SAMPLE),
        records(ANSWER),
    )  # fmt: skip


def _set_up_loop(loop: Any, rig: RigSpec) -> None:
    loop.cells = len(rig.cell)
    loop.interval_us = rig.loop.interval_us
    loop.budget_us = rig.loop.budget
    whole_ticks = int(np.ceil(rig.loop.budget / rig.loop.interval_us - 1e-9))
    loop.due_ticks = max(whole_ticks, 1) + (rig.loop.apply == "next-tick")
    loop.silence_nsec = int(rig.limits.silence_ms * 1e6)
    loop.late_run_limit = rig.limits.late_run
    on_arrival = rig.loop.apply == "on-arrival"
    loop.usual_delay_us = rig.loop.interval_us * (0.5 if on_arrival else 1.0)
    loop.fault_cell = NIL
    loop.play_slot = NIL
    loop.late_through = NIL
    loop.due_through = NIL


@inner
def _flush(m: Any, now: int) -> None:
    """[hot] Hand the waiting entries to the log; if it is full they are counted lost."""
    desk = m.desk[0]
    size = _LOOP_SIZE + desk.entries * _ENTRY_SIZE
    loop = m.loop[0]
    loop.undelivered = m.lane[0].undelivered
    for k in range(np.uint64(loop.cells)):
        loop.bank[k] = m.cells[k].bank
    if not send(desk.log, desk.block_at, size):
        loop.records_lost += desk.entries
    desk.entries = 0
    desk.untold = 0
    desk.urgent = 0
    desk.flushed_nsec = now


@inner
def _new_entry(m: Any, kind: int, now: int) -> Any:
    """[hot] A fresh log entry of a kind, with the common fields set."""
    desk, loop = m.desk[0], m.loop[0]
    if desk.entries == _BLOCK:
        _flush(m, now)
    entry = m.entries[np.uint64(desk.entries)]
    desk.entries += 1
    entry.kind = kind
    entry.nsec = now
    entry.seq = loop.seq if loop.running else np.int64(NIL)
    entry.number = 0
    entry.code = 0
    entry.outcome = 0
    entry.cell = NIL
    entry.index = 0
    entry.value = 0.0
    return entry


@inner
def _log_event(m: Any, kind: int, code: int, cell: int, now: int) -> None:
    """[hot] Log an event and hand it over at once."""
    entry = _new_entry(m, kind, now)
    entry.code = code
    entry.cell = cell
    _flush(m, now)


@inner
def _log_sample(m: Any, received: int) -> None:
    """[hot] Log a sample and its answer."""
    sample, answer = m.sample[0], m.answer[0]
    entry = _new_entry(m, _SAMPLE, received)
    entry.seq = sample.seq
    entry.t_us = sample.t_us
    entry.in_force = sample.in_force
    entry.lag_us = sample.lag_us
    entry.flags = answer.flags
    entry.service_nsec = answer.service_nsec
    first = np.float64(answer.flags & _REPEAT == 0)
    for k in range(np.uint64(m.loop[0].cells)):
        entry.v_mv[k] = sample.v_mv[k]
        entry.i_pa[k] = answer.i_pa[k]
        entry.stimulus_pa[k] = first * m.cells[k].stimulus_pa


@inner
def _is_holder(desk: Any, lane: Any) -> bool:
    """[hot] Whether the last message came from the rig that holds the loop."""
    same = desk.holder_size == lane.peer_size
    for k in range(np.uint64(lane.peer_size)):
        same = same and desk.holder[k] == lane.peer[k]
    return same


@inner
def _take_hold(m: Any, now: int) -> None:
    """[hot] Remember the last message's peer as the rig that holds the loop."""
    desk, lane, loop = m.desk[0], m.lane[0], m.loop[0]
    loop.held = 1
    loop.session += 1
    desk.holder_serial = lane.peer_serial
    desk.holder_size = lane.peer_size
    for k in range(np.uint64(lane.peer_size)):
        desk.holder[k] = lane.peer[k]
    _log_event(m, _HOLD, loop.session, NIL, now)


@inner
def _let_go(m: Any, fault: int, now: int) -> None:
    """[hot] The rig is lost: trip if armed, and let another take hold."""
    loop = m.loop[0]
    before = loop.trips
    trip(loop, fault, NIL)
    if loop.trips != before:
        _log_event(m, _TRIP, loop.fault, loop.fault_cell, now)
    loop.held = 0
    loop.running = 0
    loop.tick_us = 0.0
    loop.tick_wrong = 0
    m.desk[0].holder_size = 0
    _clear_agenda(m, now)
    _log_event(m, _RELEASE, loop.session, NIL, now)


@inner
def _log_order(m: Any, order: Any, outcome: int, seq: int, now: int) -> None:
    """[hot] Log what became of an order; it is handed over when the turn ends."""
    entry = _new_entry(m, _ORDER, now)
    entry.seq = seq
    entry.number = order.number
    entry.code = order.kind
    entry.outcome = outcome
    entry.cell = order.cell
    entry.index = order.index
    entry.value = order.value
    m.desk[0].urgent = 1


@inner
def _plan(m: Any, order: Any, now: int) -> None:
    """[hot] Put an order on the agenda; the planner gives them in the order of their samples."""
    desk = m.desk[0]
    if desk.planned == _AGENDA or not m.loop[0].held:
        outcome = _NO_ROOM if m.loop[0].held else _DROPPED
        _log_order(m, order, outcome, NIL, now)
        return
    m.agenda[np.uint64((desk.next + desk.planned) % _AGENDA)] = order
    desk.planned += 1


@inner
def _clear_agenda(m: Any, now: int) -> None:
    """[hot] Drop what waits for its sample, and end a stimulus."""
    desk = m.desk[0]
    while desk.planned > 0:
        _log_order(m, m.agenda[np.uint64(desk.next)], _DROPPED, NIL, now)
        desk.next = (desk.next + 1) % _AGENDA
        desk.planned -= 1
    m.loop[0].play_slot = NIL


@inner
def _rest(m: Any, seq: int, now: int) -> None:
    """[hot] End a stimulus that is over; logged by the number of the order that began it."""
    loop = m.loop[0]
    if loop.play_slot == NIL or seq - loop.play_from < loop.play_ticks:
        return
    loop.play_slot = NIL
    entry = _new_entry(m, _ORDER, now)
    entry.seq = seq
    entry.number = loop.play_number
    entry.code = _REST
    entry.cell = loop.play_cell
    m.desk[0].urgent = 1


@inner
def _waits_for_ramp(m: Any, order: Any) -> bool:
    """[hot] Whether it would begin a stimulus before its cell's conductance has come."""
    return order.kind == _PLAY and m.cells[np.uint64(order.cell)].ramp_left > 0


@inner
def _keep_agenda(m: Any, seq: int, now: int) -> None:
    """[hot] Carry out what was to be done before the step of this sample."""
    desk = m.desk[0]
    _rest(m, seq, now)
    while desk.planned > 0:
        order = m.agenda[np.uint64(desk.next)]
        if order.at > seq or _waits_for_ramp(m, order):
            return
        _log_order(m, order, obey(m, order, seq, now), seq, now)
        desk.next = (desk.next + 1) % _AGENDA
        desk.planned -= 1


@inner
def _take_orders(m: Any) -> None:
    """[hot] Carry out the orders that have come, a few at most in one turn."""
    desk, order = m.desk[0], m.order[0]
    for _ in range(_ORDERS_A_TURN):
        if take(desk.orders, desk.order_at, _ORDER_SIZE) != _ORDER_SIZE:
            return
        now = now_nsec(m.lane[0])
        if order.at != NIL:
            _plan(m, order, now)
        else:
            if order.kind == _CANCEL:
                _clear_agenda(m, now)
            loop = m.loop[0]
            seq = loop.seq if loop.running else np.int64(NIL)
            _log_order(m, order, obey(m, order, seq + 1, now), seq, now)


@inner
def _send_answer(m: Any, found: int) -> int:
    """[hot] Encode the answer, or the one to a malformed message, and send it."""
    lane = m.lane[0]
    if found == WAS_MALFORMED:
        return reply(lane, write_malformed(lane.out))
    return reply(lane, write_answer(lane.out, m.answer[0], m.loop[0].cells))


@inner
def _turn_away(m: Any, size: int) -> None:
    """[hot] Answer a rig that does not hold the loop."""
    found = refuse(m.loop[0], m.lane[0].message, size, m.sample[0], m.answer[0])
    _send_answer(m, found)
    m.desk[0].untold = 1


@inner
def _answer_holder(m: Any, size: int, received: int) -> None:
    """[hot] Answer the rig that holds the loop, or now takes hold of it; then log."""
    lane, loop, sample, answer = m.lane[0], m.loop[0], m.sample[0], m.answer[0]
    trips, jumps, held = loop.trips, loop.clock_jumps, loop.held
    found = np.int64(WAS_MALFORMED)
    if decode(loop, lane.message, size, sample):
        if not held:
            _clear_agenda(m, received)
            begin_session(loop, m.cells, m.past)
        if not loop.running or sample.seq > loop.seq:
            _keep_agenda(m, sample.seq, received)
            play(loop, m.cells, m.stimulus, sample.seq)
        found = take_sample(loop, m.cells, m.banks, m.table, m.past, sample, answer)
    if found == ANSWERED:
        settle_answer(loop, answer, m.past, now_nsec(lane) - received)
    sent = _send_answer(m, found)
    if found == WAS_MALFORMED:
        m.desk[0].untold = 1
        return
    if found == ANSWERED:
        # One that only resends is as good as silent: its cell is not being watched.
        loop.heard_nsec = received
    if not held:
        _take_hold(m, received)
    _log_sample(m, received)
    if loop.trips != trips:
        _log_event(m, _TRIP, loop.fault, loop.fault_cell, received)
    if loop.clock_jumps != jumps:
        _log_event(m, _CLOCK_JUMP, np.int64(0), NIL, received)
    if sent == GONE:
        _let_go(m, _DISCONNECTED, received)


@inner
def _lost(desk: Any, lane: Any, loop: Any, now: int) -> int:
    """[hot] How the rig has been lost: its connection ended, or silent for too long."""
    if lane.gone != 0 and lane.gone == desk.holder_serial:
        return _DISCONNECTED
    return _SILENCE if now - loop.heard_nsec > loop.silence_nsec else _NO_FAULT


@inner
def _finished(loop: Any, now: int) -> bool:
    """[hot] Whether a loop ordered to stop has told the rig 0 pA, or has no rig to tell."""
    if not loop.stopping:
        return False
    told = loop.heard_nsec > loop.stopped_nsec
    return told or not loop.held or now > loop.stopped_nsec + _STOP_NSEC


@compiled
def run_loop(m: Any) -> int:
    """[hot] Serve until ordered to stop; ``m`` is a :class:`LoopMemory`.

    Returns 0 after an orderly stop, 1 when the loop socket was lost.
    """
    lane, loop, desk = m.lane[0], m.loop[0], m.desk[0]
    now = now_nsec(lane)
    while not _finished(loop, now):
        size = receive(lane)
        now = now_nsec(lane)
        if size == CLOSED:
            return 1
        if loop.held:
            lost = _lost(desk, lane, loop, now)
            if lost != _NO_FAULT:
                _let_go(m, lost, now)
        if size != NOTHING:
            if loop.held and not _is_holder(desk, lane):
                _turn_away(m, size)
            else:
                _answer_holder(m, size, now)
        _take_orders(m)
        news = desk.entries or desk.untold or lane.undelivered != loop.undelivered
        if desk.urgent or (news and now - desk.flushed_nsec > _FLUSH_NSEC):
            _flush(m, now)
    close_lane(lane)
    _flush(m, now)
    return 0
