"""The serial bridge in compiled code: samples from a framed line to the server, answers back.

One loop serves a line's descriptors and one connection to the server's loop socket, on which
it is a ZMTP DEALER. It carries the bytes of messages as they are and makes none of its own.
Both directions are served in turn, one reading each, and what can go at once goes at once.

Nothing waits long enough to be stale. What the socket has no room for waits as one sample,
the newest; of the answers that came together, or while the line was busy, the newest goes on
and the others are counted as overtaken, for a rig has no use for them. The line counts as
busy while its driver holds more than ``LINE_QUEUE`` bytes. The answer to what is no sample
is never overtaken: it has no number by which a newer one could be known.

The latency that is added is counted from ``poll`` having told of a message's last byte until
the other side's system call has taken all of it.

What connects, greets and reconnects is :mod:`gatestep.bridgehost`.
"""

from __future__ import annotations

import errno
import socket
import termios
from enum import IntEnum
from typing import Any, NamedTuple

import numpy as np
from numba import types

from .bits import i32_at
from .bridgefigures import BINS, note
from .compiling import compiled, inner
from .direct import POLL
from .kernel import records
from .lanebase import now_nsec
from .serialframes import MAX_FRAME, MAX_PAYLOAD, UNFRAMER, WHOLE, Kind, put_frame, unframe
from .wire import MAX_MESSAGE
from .zmtp import BROKEN, MESSAGE, OPEN, PEER, feed, make_room, put_answer


class Status(IntEnum):
    """Why :func:`carry` came back."""

    HALTED = 1
    LINE_GONE = 2
    SERVER_GONE = 3
    CONTROL = 4


CHUNK = 1024
"""Bytes read of the line at once: what waits in the bridge at most, on its way to the server."""
LINE_QUEUE = 64
"""Bytes that the line's driver may hold when another answer is given to it."""
SEND_BUFFER = 32_768
"""Bytes that the system may hold on their way to the server; it doubles them.

Some 80 small samples over UNIX sockets, where what the server has not read counts.
"""
_OUTGOING = 8 * MAX_FRAME

BRIDGE = np.dtype(
    [
        ("line_in", "i8"),  # descriptors, -1 for none
        ("line_out", "i8"),
        ("server", "i8"),
        ("halt", "i8"),  # set by another thread
        ("welcomed", "i8"),  # whether samples are carried
        ("came_nsec", "i8"),  # when poll told of what is in ``chunk``
        ("answered_nsec", "i8"),  # when poll told of what came from the server last
        ("chunk_at", "i8"),  # of what is unread in ``chunk``
        ("chunk_end", "i8"),
        ("line_start", "i8"),  # of what waits in ``outgoing`` for the line
        ("line_end", "i8"),
        ("batch", "i8"),  # samples in the peer's ``outgoing``
        ("batch_nsec", "i8"),
        ("stuck", "i8"),  # whether the socket has not taken all of them
        ("held_sample", "i8"),  # size of the one that waits for room, 0 for none
        ("held_sample_nsec", "i8"),
        ("held_answer", "i8"),
        ("held_answer_nsec", "i8"),
        ("due_nsec", "i8"),  # of the answer whose end is in ``outgoing``, 0 for none
        # Counters since the start.
        ("samples", "i8"),  # given to the server's socket
        ("answers", "i8"),  # given to the line
        ("since_welcome", "i8"),  # samples since the last welcome
        ("unserved", "i8"),  # samples that came while there was no server
        ("dropped", "i8"),  # samples that a newer one replaced
        ("overtaken", "i8"),  # answers that a newer one replaced
        ("malformed", "i8"),  # answers that call a sample malformed
        ("garbled", "i8"),  # messages that are no answer, by their size
        ("passed", "i8"),  # frames of a kind that is not carried
        ("poll_at", "u8"),
        ("time_at", "u8"),
        ("queue_at", "u8"),
        ("chunk_data_at", "u8"),
        ("outgoing_at", "u8"),
        ("incoming_at", "u8"),  # the peer's
        ("peer_outgoing_at", "u8"),
        ("time", "i8", (2,)),
        ("queue", "i4", (2,)),
        ("poll", POLL, (4,)),
        ("chunk", "u1", (CHUNK,)),
        ("outgoing", "u1", (_OUTGOING,)),
        ("sample", "u1", (MAX_MESSAGE,)),
        ("answer", "u1", (MAX_MESSAGE,)),
        ("sample_counts", "i8", (BINS,)),  # histograms of the latency added
        ("answer_counts", "i8", (BINS,)),
    ],
    align=True,
)


class Memory(NamedTuple):
    """Everything that the loop touches, allocated before it starts; arrays of one record."""

    bridge: Any
    peer: Any
    unframer: Any


_HALTED, _LINE_GONE = int(Status.HALTED), int(Status.LINE_GONE)
_SERVER_GONE, _CONTROL = int(Status.SERVER_GONE), int(Status.CONTROL)
_GO_ON = 0
_SAMPLE, _ANSWER = int(Kind.SAMPLE), int(Kind.ANSWER)
_HELLO, _BYE = int(Kind.HELLO), int(Kind.BYE)
_MAX_PAYLOAD, _MAX_FRAME = MAX_PAYLOAD, MAX_FRAME
_LINE_QUEUE = LINE_QUEUE
_POLLIN, _POLLOUT, _TROUBLE = 1, 4, 8 | 16 | 32
_NOSIGNAL_DONTWAIT = int(getattr(socket, "MSG_NOSIGNAL", 0)) | int(socket.MSG_DONTWAIT)
_EAGAIN, _EINTR = errno.EAGAIN, errno.EINTR
_TIOCOUTQ = termios.TIOCOUTQ
_LONGEST_WAIT_NSEC = 20_000_000
_BUSY_WAIT_NSEC = 200_000
"""How soon a busy line is looked at again: nothing tells when its driver has come down so far."""
_SHORT_ARRAY, _NIL = 0x93, 0xC0

_pointer = types.uintp
_ppoll: Any = types.ExternalFunction("ppoll", types.intc(_pointer, types.ulong, _pointer, _pointer))
_read: Any = types.ExternalFunction("read", types.intp(types.intc, _pointer, types.uintp))
_write: Any = types.ExternalFunction("write", types.intp(types.intc, _pointer, types.uintp))
_ioctl: Any = types.ExternalFunction("ioctl", types.intc(types.intc, types.ulong, _pointer))
_recv: Any = types.ExternalFunction(
    "recv", types.intp(types.intc, _pointer, types.uintp, types.intc)
)
_send: Any = types.ExternalFunction(
    "send", types.intp(types.intc, _pointer, types.uintp, types.intc)
)
_errno_location: Any = types.ExternalFunction("__errno_location", _pointer())


def make_memory() -> Memory:
    """A bridge's memory, with neither line nor server."""
    memory = Memory(records(BRIDGE), records(PEER), records(UNFRAMER))
    bridge = memory.bridge[0]
    for name in ("poll", "time", "queue", "outgoing"):
        bridge[f"{name}_at"] = _address(memory.bridge, name)
    bridge.chunk_data_at = _address(memory.bridge, "chunk")
    bridge.incoming_at = _address(memory.peer, "incoming")
    bridge.peer_outgoing_at = _address(memory.peer, "outgoing")
    bridge.line_in = bridge.line_out = bridge.server = -1
    return memory


def _address(array: Any, name: str) -> int:
    return int(array.ctypes.data) + int(array.dtype.fields[name][1])


def take_line(memory: Memory, line_in: int, line_out: int) -> None:
    """Begin with a line that has just been opened; -1 and -1 when there is none."""
    bridge = memory.bridge[0]
    damaged = int(memory.unframer[0].damaged)
    memory.unframer[0] = np.zeros(1, UNFRAMER)[0]
    memory.unframer[0].damaged = damaged
    bridge.line_in, bridge.line_out = line_in, line_out
    bridge.chunk_at = bridge.chunk_end = bridge.line_start = bridge.line_end = 0
    bridge.held_answer = bridge.due_nsec = 0


def take_server(memory: Memory, descriptor: int) -> None:
    """Begin with a connection whose handshake is done; -1 when there is none."""
    bridge, peer = memory.bridge[0], memory.peer[0]
    memory.peer[0] = np.zeros(1, PEER)[0]
    peer.phase = OPEN
    bridge.server = descriptor
    bridge.batch = bridge.stuck = bridge.held_sample = bridge.held_answer = 0
    bridge.welcomed = bridge.since_welcome = 0


@inner
def _would_wait() -> bool:
    """[hot] Whether the last system call failed only because it would have had to wait."""
    error = np.int64(i32_at(_errno_location()))
    return error == _EAGAIN or error == _EINTR


@inner
def _copy(to: Any, source: Any, start: int, size: int) -> None:
    """[hot] Bytes of a message."""
    for k in range(np.uint64(size)):
        to[k] = source[np.uint64(start) + k]


@inner
def _send_out(m: Any) -> int:
    """[hot] Give the socket what is pending, and then the sample that waited for room."""
    bridge, peer = m.bridge[0], m.peer[0]
    while peer.pending:
        size = np.uint64(peer.pending)
        sent = np.int64(
            _send(np.int32(bridge.server), bridge.peer_outgoing_at, size, _NOSIGNAL_DONTWAIT)
        )
        if sent < 0 and not _would_wait():
            return _SERVER_GONE
        rest = peer.pending - max(sent, 0)
        for k in range(np.uint64(rest if sent > 0 else 0)):
            peer.outgoing[k] = peer.outgoing[np.uint64(sent) + k]
        peer.pending = rest
        bridge.stuck = np.int64(rest > 0)
        if rest:
            return _GO_ON
        _sent(m)
    return _GO_ON


@inner
def _sent(m: Any) -> None:
    """[hot] The socket has taken all: note how long it took; the sample that waits is next."""
    bridge, peer = m.bridge[0], m.peer[0]
    if bridge.batch:
        note(bridge.sample_counts, now_nsec(bridge) - bridge.batch_nsec, bridge.batch)
        bridge.samples += bridge.batch
        bridge.since_welcome += bridge.batch
    bridge.batch = peer.waiting = 0
    if bridge.held_sample:
        put_answer(peer, bridge.sample, bridge.held_sample, 0)
        bridge.batch = 1
        bridge.batch_nsec = bridge.held_sample_nsec
        bridge.held_sample = 0


@inner
def _forward(m: Any) -> None:
    """[hot] Put the sample that has just come on its way to the server."""
    bridge, unframer = m.bridge[0], m.unframer[0]
    size = unframer.length - 3
    if bridge.stuck and bridge.held_sample:
        bridge.dropped += 1
    _copy(bridge.sample, unframer.bytes, np.int64(1), size)
    if bridge.stuck:
        bridge.held_sample = size
        bridge.held_sample_nsec = bridge.came_nsec
        return
    if not put_answer(m.peer[0], bridge.sample, size, 0):
        bridge.dropped += 1
        return
    if bridge.batch == 0:
        bridge.batch_nsec = bridge.came_nsec
    bridge.batch += 1


@inner
def _carry_samples(m: Any) -> int:
    """[hot] Read on in what came over the line; ``CONTROL`` for a frame that is not carried."""
    bridge, unframer = m.bridge[0], m.unframer[0]
    status = _GO_ON
    while status == _GO_ON and bridge.chunk_at < bridge.chunk_end:
        found, at = unframe(unframer, bridge.chunk, bridge.chunk_at, bridge.chunk_end)
        bridge.chunk_at = at
        if found != WHOLE:
            break
        kind = np.int64(unframer.bytes[0])
        if kind == _SAMPLE and bridge.server >= 0 and bridge.welcomed:
            _forward(m)
        elif kind == _SAMPLE:
            bridge.unserved += 1
            status = _CONTROL
        elif kind == _HELLO or kind == _BYE:
            status = _CONTROL
        else:
            bridge.passed += 1
    if bridge.server >= 0 and not bridge.stuck and _send_out(m) != _GO_ON:
        # The frame that has been read is not lost: it is still in ``unframer``.
        return _SERVER_GONE if status == _GO_ON else status
    return status


@inner
def _hold_answer(m: Any, size: int) -> None:
    """[hot] An answer has come: the newest waits for the line, if only until all are read."""
    bridge, peer = m.bridge[0], m.peer[0]
    if size < 1 or size > _MAX_PAYLOAD:
        bridge.garbled += 1
        return
    nil = size > 1 and peer.message[0] == _SHORT_ARRAY and peer.message[1] == _NIL
    bridge.malformed += np.int64(nil)
    if bridge.held_answer:
        held_nil = bridge.answer[0] == _SHORT_ARRAY and bridge.answer[1] == _NIL
        if held_nil:
            _frame_answer(m)
        else:
            bridge.overtaken += 1
    _copy(bridge.answer, peer.message, np.int64(0), size)
    bridge.held_answer = size
    bridge.held_answer_nsec = bridge.answered_nsec


@inner
def _frame_answer(m: Any) -> None:
    """[hot] Put the answer that waits into what goes to the line, if there is room."""
    bridge = m.bridge[0]
    if bridge.outgoing.size - bridge.line_end < _MAX_FRAME:
        bridge.overtaken += 1
        bridge.held_answer = 0
        return
    end = put_frame(bridge.outgoing, bridge.line_end, _ANSWER, bridge.answer, bridge.held_answer)
    bridge.line_end = end
    bridge.held_answer = 0
    bridge.due_nsec = bridge.held_answer_nsec
    bridge.answers += 1


@inner
def _line_is_busy(m: Any) -> bool:
    """[hot] Whether something waits for the line already, here or in its driver."""
    bridge = m.bridge[0]
    if bridge.line_end:
        return True
    bridge.queue[0] = 0
    _ioctl(np.int32(bridge.line_out), np.uint64(_TIOCOUTQ), bridge.queue_at)
    return bridge.queue[0] > _LINE_QUEUE


@inner
def _write_line(m: Any) -> int:
    """[hot] Give the line what waits for it, as far as it takes it."""
    bridge = m.bridge[0]
    if bridge.held_answer and not _line_is_busy(m):
        _frame_answer(m)
    if bridge.line_start == bridge.line_end:
        return _GO_ON
    size = np.uint64(bridge.line_end - bridge.line_start)
    address = bridge.outgoing_at + np.uint64(bridge.line_start)
    written = np.int64(_write(np.int32(bridge.line_out), address, size))
    if written < 0:
        return _GO_ON if _would_wait() else _LINE_GONE
    bridge.line_start += written
    if bridge.line_start == bridge.line_end:
        bridge.line_start = bridge.line_end = 0
        if bridge.due_nsec:
            note(bridge.answer_counts, now_nsec(bridge) - bridge.due_nsec, np.int64(1))
            bridge.due_nsec = 0
    return _GO_ON


@inner
def _read_line(m: Any) -> int:
    """[hot] Take what has come over the line; all of the chunk before has been read."""
    bridge = m.bridge[0]
    got = np.int64(_read(np.int32(bridge.line_in), bridge.chunk_data_at, np.uint64(CHUNK)))
    if got < 0 and _would_wait():
        return _GO_ON
    if got <= 0:
        # With VMIN 1 a reading of nothing is a line that has been hung up.
        return _LINE_GONE
    bridge.chunk_at = 0
    bridge.chunk_end = got
    return _GO_ON


@inner
def _read_server(m: Any) -> int:
    """[hot] Take what has come from the server, and hold the newest answer of it."""
    bridge, peer = m.bridge[0], m.peer[0]
    room = np.uint64(make_room(peer))
    address = bridge.incoming_at + np.uint64(peer.end)
    got = np.int64(_recv(np.int32(bridge.server), address, room, _NOSIGNAL_DONTWAIT))
    if got < 0 and _would_wait():
        return _GO_ON
    if got <= 0:
        return _SERVER_GONE
    peer.end += got
    while True:
        found = feed(peer)
        if found == BROKEN:
            return _SERVER_GONE
        if found != MESSAGE:
            return _GO_ON
        if bridge.welcomed:
            _hold_answer(m, peer.message_size)


@inner
def _wait(m: Any) -> None:
    """[hot] Wait until either side has something or takes something again."""
    bridge, peer = m.bridge[0], m.peer[0]
    line_in, server, line_out = bridge.poll[0], bridge.poll[1], bridge.poll[2]
    line_in.fd = np.int32(bridge.line_in)
    line_in.events = np.int16(_POLLIN)
    server.fd = np.int32(bridge.server)
    server.events = np.int16(_POLLIN | (_POLLOUT if peer.pending else 0))
    line_out.fd = np.int32(bridge.line_out if bridge.line_end else -1)
    line_out.events = np.int16(_POLLOUT)
    line_in.revents = server.revents = line_out.revents = np.int16(0)
    busy = bridge.held_answer and not bridge.line_end
    bridge.time[0] = 0
    bridge.time[1] = _BUSY_WAIT_NSEC if busy else _LONGEST_WAIT_NSEC
    _ppoll(bridge.poll_at, np.uint64(3), bridge.time_at, np.uint64(0))


@inner
def _serve_line(m: Any, now: int) -> int:
    """[hot] One reading of the line, if it has something, carried on at once."""
    bridge = m.bridge[0]
    revents = np.int64(bridge.poll[0].revents)
    if revents & _POLLIN:
        bridge.came_nsec = now
        status = _read_line(m)
        return status if status != _GO_ON else _carry_samples(m)
    return _LINE_GONE if revents & _TROUBLE else _GO_ON


@inner
def _serve_server(m: Any, now: int) -> int:
    """[hot] One reading of the server's socket, if it has something, carried on at once."""
    bridge, peer = m.bridge[0], m.peer[0]
    revents = np.int64(bridge.poll[1].revents)
    status = _GO_ON
    if revents & _POLLIN:
        bridge.answered_nsec = now
        status = _read_server(m)
    elif revents & _TROUBLE:
        return _SERVER_GONE
    if status == _GO_ON and peer.pending:
        status = _send_out(m)
    return status


@compiled
def carry(m: Any) -> int:
    """[hot] Carry samples and answers until the caller is needed; a :class:`Status`.

    ``CONTROL``: a hello or goodbye of the device stands in ``unframer``, or a sample of one
    that is not welcome; call again for what came after it. ``SERVER_GONE`` may come after
    the frames it came with were read: take the server away before calling again.
    """
    bridge = m.bridge[0]
    status = _carry_samples(m)
    while status == _GO_ON:
        status = _write_line(m)
        if status != _GO_ON:
            return status
        if bridge.halt != 0:
            return _HALTED
        _wait(m)
        now = now_nsec(bridge)
        # The server first: its answer is the older of two that come at the same moment.
        status = _serve_server(m, now)
        if status == _GO_ON:
            status = _serve_line(m, now)
    return status
