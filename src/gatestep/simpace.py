"""The two paces of the simulated rig: virtual time in lockstep, and the real clock.

:func:`run_lockstep` waits for the answer to each sample and then lets the tick pass, so
that nothing depends on the machine. :func:`run_real` samples by the monotonic clock:
answers flow when they truly come.
"""

from __future__ import annotations

from enum import IntEnum
from math import floor
from typing import Any

import numpy as np
import zmq
from numba import types

from .compiling import compiled, inner
from .lanebase import now_nsec
from .simcell import DROP_STREAM, JITTER_STREAM, uniform
from .simloop import decode, enqueue, note, play, take_and_send
from .wire import MAX_MESSAGE, NIL
from .zmqlane import take


class Status(IntEnum):
    """Why a compiled loop came back."""

    DONE = 0
    NO_ANSWER = 1
    NOT_SENT = 2
    MALFORMED = 3
    CLOSED = 4
    HALTED = 5


_DONE, _NO_ANSWER, _NOT_SENT = int(Status.DONE), int(Status.NO_ANSWER), int(Status.NOT_SENT)
_MALFORMED, _CLOSED, _HALTED = int(Status.MALFORMED), int(Status.CLOSED), int(Status.HALTED)
_EAGAIN, _EINTR = int(zmq.EAGAIN), 4
_MAX_MESSAGE = MAX_MESSAGE
_AWAIT_NSEC = 2_000_000
_SLEEP_MARGIN_NSEC = 150_000
_LONGEST_SLEEP_NSEC = 50_000_000

_pointer = types.uintp
_zmq_recv: Any = types.ExternalFunction(
    "zmq_recv", types.intc(_pointer, _pointer, _pointer, types.intc)
)
_zmq_errno: Any = types.ExternalFunction("zmq_errno", types.intc())
_nanosleep: Any = types.ExternalFunction("nanosleep", types.intc(_pointer, _pointer))
_sched_yield: Any = types.ExternalFunction("sched_yield", types.intc())


@inner
def virtual_arrival(loop: Any) -> Any:
    """[hot] ``(tick, offset_us, lag_us)`` at which the answer reaches the output."""
    rig = loop.rig[0]
    delay_us = rig.delay_us
    if rig.jitter_us > 0.0:
        spread = 2.0 * uniform(rig.seed, JITTER_STREAM, rig.seq) - 1.0
        delay_us = max(0.0, delay_us + rig.jitter_us * spread)
    ticks = np.int64(floor(delay_us / rig.interval_us))
    offset_us = max(0.0, delay_us - ticks * rig.interval_us)
    if rig.on_arrival:
        return rig.seq + ticks, offset_us, delay_us
    ticks = max(np.int64(1), ticks + (offset_us > 0.0))
    return rig.seq + ticks, 0.0, ticks * rig.interval_us


@inner
def _await_answer(loop: Any) -> int:
    """[hot] Wait for the answer to sample ``seq``, at most the socket's time-out."""
    rig, answer = loop.rig[0], loop.answer[0]
    while True:
        size = np.int64(_zmq_recv(rig.socket, rig.message_at, np.uint64(_MAX_MESSAGE), 0))
        if size < 0:
            error = _zmq_errno()
            if error == _EINTR:
                return _HALTED
            return _NO_ANSWER if error == _EAGAIN else _CLOSED
        if decode(loop, size):
            if answer.seq == NIL:
                return _MALFORMED
            if answer.seq == rig.seq:
                return _DONE


@compiled
def run_lockstep(loop: Any, columns: Any, first: int, stop: int) -> int:
    """[hot] Exchange samples up to ``stop`` in virtual time; a :class:`Status`.

    Comes back at any trouble and goes on where it was when called again. Row 0 of
    the columns is sample ``first``.
    """
    rig = loop.rig[0]
    while rig.seq < stop:
        if not rig.waiting:
            rig.waiting = 1
            if not take_and_send(loop, columns, rig.seq - first):
                return _NOT_SENT
        status = _await_answer(loop)
        if status != _DONE:
            return status
        note(loop, columns, first, now_nsec(rig))
        if rig.drop > 0.0 and uniform(rig.seed, DROP_STREAM, rig.seq) <= rig.drop:
            rig.dropped += 1
        else:
            tick, offset_us, lag_us = virtual_arrival(loop)
            enqueue(loop, tick, offset_us, lag_us)
        play(loop, columns, first)
        rig.waiting = 0
        rig.seq += 1
    return _DONE


@inner
def _take_answers(loop: Any, columns: Any, first: int) -> None:
    """[hot] Take every answer that has come and send it on its way to the output."""
    rig, answer = loop.rig[0], loop.answer[0]
    while True:
        size = take(rig.socket, rig.message_at, _MAX_MESSAGE)
        if size < 0:
            return
        nsec = now_nsec(rig)
        if not decode(loop, size):
            continue
        if answer.seq == NIL:
            rig.garbled += 1
        elif note(loop, columns, first, nsec):
            since_us = (nsec - rig.start_nsec) / 1000.0
            tick = np.int64(floor(since_us / rig.interval_us))
            if rig.on_arrival:
                lag_us = since_us - answer.seq * rig.interval_us
                enqueue(loop, tick, since_us - tick * rig.interval_us, lag_us)
            else:
                enqueue(loop, tick + 1, 0.0, (tick + 1 - answer.seq) * rig.interval_us)


@inner
def _wait_until(loop: Any, columns: Any, first: int, edge_nsec: int) -> int:
    """[hot] Take answers until the clock passes ``edge_nsec``; the clock then.

    While an answer is due soon the processor is only yielded; otherwise the wait is
    slept away but for a margin that the host's timers can be trusted with.
    """
    rig = loop.rig[0]
    while True:
        _take_answers(loop, columns, first)
        now = now_nsec(rig)
        rest = edge_nsec - now
        if rest <= 0 or rig.halt != 0:
            return now
        due_soon = rig.heard < rig.seq - 1 and now - rig.sent_nsec < _AWAIT_NSEC
        if due_soon or rest < 2 * _SLEEP_MARGIN_NSEC:
            _sched_yield()
        else:
            rig.time[0] = 0
            rig.time[1] = min(rest - _SLEEP_MARGIN_NSEC, _LONGEST_SLEEP_NSEC)
            _nanosleep(rig.time_at, np.uint64(0))


@inner
def _catch_up(loop: Any, columns: Any, first: int, tick: int) -> None:
    """[hot] Let the cells live up to the start of a tick."""
    while loop.rig[0].played < tick:
        play(loop, columns, first)


@compiled
def run_real(loop: Any, columns: Any, first: int, stop: int) -> int:
    """[hot] Sample at every tick of the monotonic clock up to ``stop``; a :class:`Status`.

    Ticks that had wholly passed before their sample could be taken get none, as a
    converter's clock does not wait; ``seq`` goes on across them. What is known to
    flow over the coming tick (apply next-tick) is simulated after the sample has
    been sent, so that it delays nothing.
    """
    rig = loop.rig[0]
    interval_nsec = rig.interval_us * 1000.0
    while rig.seq < stop and rig.halt == 0:
        edge_nsec = rig.start_nsec + np.int64(rig.seq * interval_nsec)
        now = _wait_until(loop, columns, first, edge_nsec)
        if rig.halt != 0:
            break
        behind = np.int64(floor((now - edge_nsec) / interval_nsec))
        if behind > 0:
            behind = min(behind, stop - rig.seq)
            rig.seq += behind
            rig.skipped += behind
            _catch_up(loop, columns, first, rig.seq)
            continue
        _catch_up(loop, columns, first, rig.seq)
        take_and_send(loop, columns, rig.seq - first)
        rig.seq += 1
        if not rig.on_arrival:
            _catch_up(loop, columns, first, rig.seq)
    _wait_until(loop, columns, first, rig.start_nsec + np.int64(rig.seq * interval_nsec))
    _catch_up(loop, columns, first, rig.seq)
    return _HALTED if rig.halt != 0 else _DONE
