"""The measuring client in compiled code: samples out by the clock, answers noted as they come.

It speaks ZMTP 3.1 NULL as a DEALER over a plain TCP or UNIX stream socket, so that
neither an I/O thread nor the interpreter stands between the clock and the wire.
:func:`run_paced` sends sample n at ``start + n * interval`` whatever has become of the
answers before it, as a converter's clock does; :func:`run_flat` sends, waits, sends.

A sample reports truthfully what a rig's output would have done with the answers.
Flat out there is no clock and so no output: ``in_force`` is nil.

What calls these functions is :mod:`gatestep.measuring`.
"""

from __future__ import annotations

from enum import IntEnum
from math import floor
from typing import Any, NamedTuple

import numpy as np
from numba import types

from .compiling import compiled, inner
from .direct import POLL
from .kernel import records
from .rigoutput import put_out, report
from .wire import ANSWER, LIVE, MAX_MESSAGE, NIL, REFUSED, SAMPLE, read_answer, write_sample
from .zmtp import BROKEN, MESSAGE, OPEN, PEER, feed, make_room, put_answer


class Status(IntEnum):
    """Why a run came back."""

    DONE = 0
    CLOSED = 1
    HALTED = 2
    BROKEN = 3
    REFUSED = 4
    ARMED = 5
    MALFORMED = 6
    NO_ANSWER = 7
    SILENT = 8


PROBE = np.dtype(
    [
        # Set before a run.
        ("fd", "i8"),
        ("cells", "i8"),
        ("interval_nsec", "f8"),
        ("on_arrival", "i8"),
        ("spin", "i8"),  # whether an answer is awaited without sleeping
        ("margin_nsec", "i8"),  # before a tick, the last part of the wait is not slept
        ("patience_nsec", "i8"),
        ("may_be_live", "i8"),  # whether answers from an armed loop are expected
        ("start_nsec", "i8"),  # paced: the monotonic clock at row 0
        ("first", "i8"),  # seq of row 0
        ("halt", "i8"),  # set by another thread
        # The state.
        ("row", "i8"),  # next row
        ("outstanding", "i8"),
        ("sent_nsec", "i8"),  # of the newest sample
        ("since_nsec", "i8"),  # newest answer, or the first sample that lacks one
        ("in_force", "i8"),  # answer at the output, NIL if none
        ("lag_us", "f8"),
        ("coming", "i8"),  # answer that the output takes at the start of tick ...
        ("coming_row", "i8"),  # ... this one
        ("coming_lag_us", "f8"),
        ("settled", "i8"),  # whether what the next sample reports is known already ...
        ("told", "i8"),  # ... as this answer ...
        ("told_lag_us", "f8"),  # ... and this lag
        # Counters of the run.
        ("garbled", "i8"),  # messages that are no answer
        ("strays", "i8"),  # answers to no sample of this run, or second ones
        ("unsent", "i8"),  # samples for which the socket had no room
        ("incoming_at", "u8"),
        ("outgoing_at", "u8"),
        ("time_at", "u8"),
        ("poll_at", "u8"),
        ("out", "u1", (MAX_MESSAGE,)),
        ("time", "i8", (2,)),
        ("poll", POLL, (1,)),
    ],
    align=True,
)


class Memory(NamedTuple):
    """Everything a run touches, allocated before it starts.

    ``wave_mv`` (points, cells) is played over and over as the measured voltages.
    """

    probe: Any
    peer: Any
    sample: Any
    answer: Any
    wave_mv: Any


class Columns(NamedTuple):
    """One row a tick, int64: monotonic times of sending and arrival, and the answer's own.

    ``sent_nsec`` is 0 where no sample went out, ``arrived_nsec`` where no answer came.
    """

    sent_nsec: Any
    arrived_nsec: Any
    service_nsec: Any
    flags: Any


_DONE, _CLOSED, _HALTED = int(Status.DONE), int(Status.CLOSED), int(Status.HALTED)
_BROKEN, _REFUSED, _ARMED = int(Status.BROKEN), int(Status.REFUSED), int(Status.ARMED)
_MALFORMED, _NO_ANSWER = int(Status.MALFORMED), int(Status.NO_ANSWER)
_SILENT = int(Status.SILENT)
_MAX_MESSAGE = MAX_MESSAGE
_MONOTONIC = 1
_POLLIN = 1
_NOSIGNAL_DONTWAIT = 0x4000 | 0x40
_LONGEST_SLEEP_NSEC = 50_000_000

_pointer = types.uintp
_recv: Any = types.ExternalFunction(
    "recv", types.intp(types.intc, _pointer, types.uintp, types.intc)
)
_send: Any = types.ExternalFunction(
    "send", types.intp(types.intc, _pointer, types.uintp, types.intc)
)
_ppoll: Any = types.ExternalFunction("ppoll", types.intc(_pointer, types.ulong, _pointer, _pointer))
_clock_gettime: Any = types.ExternalFunction("clock_gettime", types.intc(types.intc, _pointer))


def make_memory(wave_mv: Any) -> Memory:
    """A client's memory; connect it by giving ``probe[0].fd`` an open connection.

    Parameters
    ----------
    wave_mv : ndarray (points, cells) of float64
        The voltages it reports, row after row, from the start again after the last.
    """
    memory = Memory(records(PROBE), records(PEER), records(SAMPLE), records(ANSWER), wave_mv)
    probe, peer = memory.probe, memory.peer
    probe[0].cells = wave_mv.shape[1]
    for name in ("time", "poll"):
        probe[0][f"{name}_at"] = _address(probe, PROBE, name)
    for name in ("incoming", "outgoing"):
        probe[0][f"{name}_at"] = _address(peer, PEER, name)
    peer[0].phase = OPEN
    return memory


def _address(array: Any, dtype: np.dtype[Any], name: str) -> int:
    fields = dtype.fields
    assert fields is not None
    return int(array.ctypes.data) + int(fields[name][1])


def make_columns(rows: int) -> Columns:
    """Columns of so many rows, each page of them in memory already."""
    return Columns(*(np.full(rows, fill, dtype=np.int64) for fill in (0, 0, -1, -1)))


@inner
def _now(probe: Any) -> Any:
    """[hot] The monotonic clock, in nanoseconds."""
    _clock_gettime(_MONOTONIC, probe.time_at)
    return probe.time[0] * 1_000_000_000 + probe.time[1]


@inner
def _sleep(probe: Any, nsec: int) -> None:
    """[hot] Sleep until something comes, at most this long."""
    nsec = min(nsec, _LONGEST_SLEEP_NSEC)
    probe.poll[0].fd = np.int32(probe.fd)
    probe.poll[0].events = np.int16(_POLLIN)
    probe.time[0] = 0
    probe.time[1] = nsec
    _ppoll(probe.poll_at, np.uint64(1), probe.time_at, np.uint64(0))


@inner
def _write_out(probe: Any, peer: Any) -> None:
    """[hot] Send what is pending, as far as the socket takes it.

    A broken connection is noticed by the next receiving.
    """
    size = np.uint64(peer.pending)
    sent = np.int64(_send(np.int32(probe.fd), probe.outgoing_at, size, _NOSIGNAL_DONTWAIT))
    if sent <= 0:
        return
    rest = peer.pending - sent
    for k in range(np.uint64(rest)):
        peer.outgoing[k] = peer.outgoing[np.uint64(sent) + k]
    peer.pending = rest
    if rest == 0:
        peer.waiting = 0


@inner
def _note(m: Any, columns: Any, now: int) -> Any:
    """[hot] Note an answer; a status that ends the run when the loop is not ours to measure."""
    probe, answer = m.probe[0], m.answer[0]
    if answer.seq == NIL:
        return _MALFORMED
    row = answer.seq - probe.first
    if row < 0 or row >= probe.row or columns.arrived_nsec[np.uint64(row)] != 0:
        probe.strays += 1
        return _DONE
    r = np.uint64(row)
    if columns.sent_nsec[r] == 0:
        probe.strays += 1
        return _DONE
    columns.arrived_nsec[r] = now
    columns.service_nsec[r] = answer.service_nsec
    columns.flags[r] = answer.flags
    probe.outstanding -= 1
    probe.since_nsec = now
    if probe.start_nsec:
        put_out(probe, answer, now)
    if answer.flags & REFUSED:
        return _REFUSED
    if answer.flags & LIVE and not probe.may_be_live:
        return _ARMED
    return _DONE


@inner
def _read_answers(m: Any, columns: Any, now: int) -> Any:
    """[hot] Read every message in what has come."""
    probe, peer = m.probe[0], m.peer[0]
    while True:
        found = feed(peer)
        if found == BROKEN:
            return _BROKEN
        if found != MESSAGE:
            return _DONE
        whole = peer.message_size <= _MAX_MESSAGE
        if whole and read_answer(peer.message, peer.message_size, probe.cells, m.answer[0]):
            status = _note(m, columns, now)
            if status != _DONE:
                return status
        else:
            probe.garbled += 1


@inner
def _take_answers(m: Any, columns: Any) -> Any:
    """[hot] Take what has come, without waiting."""
    probe, peer = m.probe[0], m.peer[0]
    while True:
        room = np.int64(make_room(peer))
        address = probe.incoming_at + np.uint64(peer.end)
        got = np.int64(_recv(np.int32(probe.fd), address, np.uint64(room), _NOSIGNAL_DONTWAIT))
        if got == 0:
            return _CLOSED
        if got < 0:
            return _DONE
        peer.end += got
        status = _read_answers(m, columns, _now(probe))
        if peer.pending:
            _write_out(probe, peer)
        if status != _DONE or got < room:
            return status


@inner
def _send_sample(m: Any, columns: Any, row: int, now: int) -> None:
    """[hot] Send the sample of a row, if the socket has room for it."""
    probe, sample, peer = m.probe[0], m.sample[0], m.peer[0]
    report(probe, sample, row)
    sample.seq = probe.first + row
    sample.t_us = sample.seq * probe.interval_nsec / 1000.0
    place = np.uint64(sample.seq % m.wave_mv.shape[0])
    for k in range(np.uint64(probe.cells)):
        sample.v_mv[k] = m.wave_mv[place, k]
    size = write_sample(probe.out, sample, probe.cells)
    if not put_answer(peer, probe.out, size, 0):
        probe.unsent += 1
        return
    columns.sent_nsec[np.uint64(row)] = now
    probe.sent_nsec = now
    if probe.outstanding == 0:
        probe.since_nsec = now
    probe.outstanding += 1
    _write_out(probe, peer)


@inner
def _wait_until(m: Any, columns: Any, edge_nsec: int) -> Any:
    """[hot] Take answers until the clock passes a tick's start; ``(status, the clock then)``."""
    probe = m.probe[0]
    while True:
        status = _take_answers(m, columns)
        now = _now(probe)
        rest = edge_nsec - now
        if status != _DONE or rest <= 0:
            return status, now
        if probe.halt != 0:
            return _HALTED, now
        if probe.outstanding > 0 and now - probe.since_nsec > probe.patience_nsec:
            return _SILENT, now
        if rest > probe.margin_nsec and (probe.outstanding == 0 or not probe.spin):
            _sleep(probe, rest - probe.margin_nsec)


@inner
def _await_all(m: Any, columns: Any) -> Any:
    """[hot] Wait until no answer is missing, at most ``patience_nsec`` after the last sample."""
    probe = m.probe[0]
    until = probe.sent_nsec + probe.patience_nsec
    while probe.outstanding > 0:
        status = _take_answers(m, columns)
        if status != _DONE:
            return status
        if probe.outstanding == 0:
            return _DONE
        if probe.halt != 0:
            return _HALTED
        rest = until - _now(probe)
        if rest <= 0:
            return _NO_ANSWER
        if not probe.spin:
            _sleep(probe, rest)
    return _DONE


@compiled
def run_paced(m: Any, columns: Any) -> Any:
    """[hot] One sample a tick of the monotonic clock for every row; a :class:`Status`.

    A tick that had wholly passed before its sample could be sent gets none, as a
    converter's clock does not wait; ``seq`` goes on across it. ``SILENT``: no answer at
    all came for ``patience_nsec``. After the last sample ``NO_ANSWER`` means that some
    answers never came.
    """
    probe = m.probe[0]
    rows = columns.sent_nsec.size
    while probe.row < rows:
        edge_nsec = probe.start_nsec + np.int64(probe.row * probe.interval_nsec)
        status, now = _wait_until(m, columns, edge_nsec)
        if status != _DONE:
            return status
        behind = np.int64(floor((now - edge_nsec) / probe.interval_nsec))
        if behind > 0:
            probe.row += min(behind, rows - probe.row)
            continue
        row = probe.row
        probe.row += 1
        _send_sample(m, columns, row, now)
    return _await_all(m, columns)


@compiled
def run_flat(m: Any, columns: Any, until_nsec: int) -> Any:
    """[hot] Send, wait for the answer, send the next, until the clock or the rows run out."""
    probe = m.probe[0]
    rows = columns.sent_nsec.size
    now = _now(probe)
    while probe.row < rows and now < until_nsec:
        row = probe.row
        probe.row += 1
        _send_sample(m, columns, row, now)
        status = _await_all(m, columns)
        if status != _DONE:
            return status
        now = _now(probe)
    return _DONE


@compiled
def sleep_overshoot(m: Any, nsec: int, late_nsec: Any) -> None:
    """[hot] How much longer each of several sleeps of ``nsec`` takes, nobody sending anything."""
    probe = m.probe[0]
    for k in range(np.uint64(late_nsec.size)):
        before = _now(probe)
        _sleep(probe, nsec)
        late_nsec[k] = _now(probe) - before - nsec
