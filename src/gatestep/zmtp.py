"""ZMTP 3.1 with the NULL mechanism, the server's side, as ROUTER: bytes in, events out.

No sockets here. A ``PEER`` record holds what has come from one connection and what
is to go to it; :func:`feed` reads on in what has come and says what it found. Nothing
that a peer sends can make it read outside its buffers, wait, or grow.

Source: ZMTP 3.1, ZeroMQ RFC 37; NULL and the socket types' pairing as there.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from .compiling import compiled, inner
from .wire import MAX_MESSAGE

FREE, GREETING, HANDSHAKE, OPEN = 0, 1, 2, 3
"""Phases of a connection; FREE is an unused record."""

WAITING, MESSAGE, BROKEN = 0, 1, 2
"""What :func:`feed` found: nothing whole yet, a message, or a breach that ends it."""

INCOMING = 4096
OUTGOING = 16_384
"""Room for what waits for a peer: some 700 small answers; one further behind is dropped."""
LONGEST_SKIP = 1 << 20
"""A longer frame ends the connection; a shorter one, too long to be a sample, is passed over."""
TOO_LONG = MAX_MESSAGE + 1

PEER = np.dtype(
    [
        ("fd", "i8"),
        ("serial", "i8"),  # connections since the start; never used twice
        ("phase", "i8"),
        ("opened_nsec", "i8"),
        ("heard_nsec", "i8"),
        ("ttl_nsec", "i8"),  # silence the peer allows itself; 0 for any
        ("start", "i8"),  # of what is unread in ``incoming``
        ("end", "i8"),
        ("skip", "i8"),  # bytes of an overlong frame still to pass over
        ("skip_more", "i8"),  # whether that frame has another behind it
        ("frames", "i8"),  # of the message so far
        ("enveloped", "i8"),  # whether an empty frame stands before the message
        ("message_size", "i8"),  # TOO_LONG if it is none
        ("unread", "i8"),  # whether a message may stand in ``incoming`` already
        ("pending", "i8"),  # bytes in ``outgoing``
        ("waiting", "i8"),  # answers put there since it was last empty
        ("message", "u1", (MAX_MESSAGE,)),
        ("incoming", "u1", (INCOMING,)),
        ("outgoing", "u1", (OUTGOING,)),
    ],
    align=True,
)

_MORE, _LONG, _COMMAND = 1, 2, 4
_GREETING_SIZE = 64
_MAX_COMMAND = 1024
_NSEC_PER_DECISECOND = 100_000_000
_MAX_CONTEXT = 16


def _bytes(text: bytes) -> np.ndarray[Any, Any]:
    return np.frombuffer(text, np.uint8).copy()


_MECHANISM = b"NULL".ljust(20, b"\0")
GREETING_BYTES = b"\xff" + bytes(8) + b"\x7f\x03\x01" + _MECHANISM + bytes(32)
"""What each side sends first: signature, version 3.1, mechanism, not a server, filler."""

_GO_ON = 3
_GREETING = _bytes(GREETING_BYTES)
_READY_BODY = b"\x05READY" + b"\x0bSocket-Type\x00\x00\x00\x06ROUTER" + b"\x08Identity" + bytes(4)
_READY = _bytes(bytes([_COMMAND, len(_READY_BODY)]) + _READY_BODY)
_READY_NAME = _bytes(b"\x05READY")
_PING_NAME = _bytes(b"\x04PING")
_PONG_NAME = _bytes(b"\x04PONG")
_ERROR_NAME = _bytes(b"\x05ERROR")
_TYPE_NAME = _bytes(b"socket-type")
_DEALER, _REQ, _ROUTER = _bytes(b"DEALER"), _bytes(b"REQ"), _bytes(b"ROUTER")


@inner
def _append(peer: Any, data: Any, size: int) -> bool:
    """[hot] Put bytes on their way to the peer; False when there is no room."""
    if peer.pending + size > peer.outgoing.size:
        return False
    at = np.uint64(peer.pending)
    for k in range(np.uint64(size)):
        peer.outgoing[at + k] = data[k]
    peer.pending += size
    return True


@compiled
def open_peer(peer: Any, fd: int, serial: int, now_nsec: int) -> None:
    """[hot] Begin a connection: everything fresh, our greeting on its way."""
    peer.fd = fd
    peer.serial = serial
    peer.phase = GREETING
    peer.opened_nsec = now_nsec
    peer.heard_nsec = now_nsec
    peer.ttl_nsec = 0
    peer.start = 0
    peer.end = 0
    peer.skip = 0
    peer.frames = 0
    peer.unread = 0
    peer.pending = 0
    peer.waiting = 0
    _append(peer, _GREETING, _GREETING.size)


@inner
def _begin_message(peer: Any) -> None:
    """[hot] Forget the message before."""
    peer.enveloped = 0
    peer.message_size = 0


@compiled
def make_room(peer: Any) -> int:
    """[hot] Move what is unread to the front; bytes that now fit behind it."""
    if peer.start:
        start = np.uint64(peer.start)
        for k in range(np.uint64(peer.end - peer.start)):
            peer.incoming[k] = peer.incoming[start + k]
        peer.end -= peer.start
        peer.start = 0
    return peer.incoming.size - peer.end


@compiled
def put_answer(peer: Any, answer: Any, size: int, enveloped: int) -> bool:
    """[hot] Frame an answer for the peer; False when it has left too much unread."""
    needed = size + 2 + (2 if enveloped else 0)
    if size > 255 or peer.pending + needed > peer.outgoing.size:
        return False
    at = np.uint64(peer.pending)
    if enveloped:
        peer.outgoing[at] = np.uint8(_MORE)
        peer.outgoing[at + np.uint64(1)] = np.uint8(0)
        at += np.uint64(2)
    peer.outgoing[at] = np.uint8(0)
    peer.outgoing[at + np.uint64(1)] = np.uint8(size)
    at += np.uint64(2)
    for k in range(np.uint64(size)):
        peer.outgoing[at + k] = answer[k]
    peer.pending += needed
    peer.waiting += 1
    return True


@compiled
def feed(peer: Any) -> int:
    """[hot] Read on in what has come: ``WAITING``, ``MESSAGE`` or ``BROKEN``.

    With ``MESSAGE``, the message stands in ``peer.message`` with its
    ``message_size``, which is ``TOO_LONG`` for what cannot be a sample, and
    ``enveloped``; call again for the next, as ``unread`` says.
    """
    while True:
        if peer.phase == OPEN:
            found = _read_frame(peer)
        elif peer.phase == GREETING:
            found = _read_greeting(peer)
        else:
            found = _read_ready(peer)
        if found != _GO_ON:
            peer.unread = np.int64(found == MESSAGE and peer.start < peer.end)
            return found


@inner
def _read_greeting(peer: Any) -> int:
    """[hot] Check the peer's greeting, each part as soon as it is there."""
    data, have = peer.incoming, peer.end
    if have > 0 and data[0] != 0xFF:
        return BROKEN
    if have > 9 and data[9] != 0x7F:
        return BROKEN
    if have > 10 and data[10] < 3:
        return BROKEN
    if have < _GREETING_SIZE:
        return WAITING
    for k in range(12, 32):
        if data[np.uint64(k)] != _GREETING[np.uint64(k)]:
            return BROKEN
    peer.start = _GREETING_SIZE
    peer.phase = HANDSHAKE
    return _GO_ON if _append(peer, _READY, _READY.size) else BROKEN


@inner
def _header(peer: Any) -> Any:
    """[hot] ``(flags, size, header's length)`` of the next frame; length 0 if not whole yet."""
    data, at, have = peer.incoming, np.uint64(peer.start), peer.end - peer.start
    if have < 2:
        return 0, 0, 0
    flags = np.int64(data[at])
    if not flags & _LONG:
        return flags, np.int64(data[at + np.uint64(1)]), 2
    if have < 9:
        return 0, 0, 0
    size = np.int64(0)
    for k in range(np.uint64(1), np.uint64(9)):
        # Saturates: a size that needs the top bits is far too long anyway.
        size = min(size, np.int64(1) << 54) * 256 + np.int64(data[at + k])
    return flags, size, 9


@inner
def _named(data: Any, at: int, size: int, name: Any) -> bool:
    """[hot] Whether a command's body at this place begins with a name."""
    same = size >= name.size
    for k in range(np.uint64(name.size)):
        same = same and data[np.uint64(at) + k] == name[k]
    return same


@inner
def _read_ready(peer: Any) -> int:
    """[hot] The peer's READY must come first, from a socket that pairs with ROUTER."""
    flags, size, header = _header(peer)
    if header == 0:
        return WAITING
    if flags & ~_LONG != _COMMAND or size > _MAX_COMMAND or size < _READY_NAME.size:
        return BROKEN
    if peer.end - peer.start < header + size:
        return WAITING
    at = peer.start + header
    if not _named(peer.incoming, at, size, _READY_NAME):
        return BROKEN
    if not _pairs(peer.incoming, at + _READY_NAME.size, at + size):
        return BROKEN
    peer.start = at + size
    peer.phase = OPEN
    return _GO_ON


@inner
def _pairs(data: Any, at: int, end: int) -> bool:
    """[hot] Whether READY's properties are whole and name a type that pairs with ROUTER."""
    pairing = False
    while at < end:
        name_size = np.int64(data[np.uint64(at)])
        value_at = at + 1 + name_size + 4
        if name_size == 0 or value_at > end:
            return False
        value_size = np.int64(0)
        for k in range(np.uint64(value_at - 4), np.uint64(value_at)):
            value_size = value_size * 256 + np.int64(data[np.uint64(k)])
        if value_at + value_size > end:
            return False
        if name_size == _TYPE_NAME.size and _same_letters(data, at + 1, _TYPE_NAME):
            pairing = _is_partner(data, value_at, value_size)
            if not pairing:
                return False
        at = value_at + value_size
    return pairing


@inner
def _is_partner(data: Any, at: int, size: int) -> bool:
    """[hot] Whether a value is a socket type that pairs with ROUTER."""
    return _is(data, at, size, _DEALER) or _is(data, at, size, _REQ) or _is(data, at, size, _ROUTER)


@inner
def _same_letters(data: Any, at: int, name: Any) -> bool:
    """[hot] Whether a property's name is this one; the case of letters does not count."""
    same = True
    for k in range(np.uint64(name.size)):
        letter = data[np.uint64(at) + k]
        if 65 <= letter <= 90:
            letter += np.uint8(32)
        same = same and letter == name[k]
    return same


@inner
def _is(data: Any, at: int, size: int, text: Any) -> bool:
    """[hot] Whether a value is exactly this text."""
    return size == text.size and _named(data, at, size, text)


@inner
def _read_frame(peer: Any) -> int:
    """[hot] Take the next frame of an open connection."""
    if peer.skip:
        return _pass_over(peer)
    flags, size, header = _header(peer)
    if header == 0:
        return WAITING
    if flags & ~(_MORE | _LONG | _COMMAND):
        return BROKEN
    if flags & _COMMAND:
        return _read_command(peer, flags, size, header)
    if peer.frames == 0:
        _begin_message(peer)
    more = flags & _MORE
    if size > MAX_MESSAGE:
        if size > LONGEST_SKIP:
            return BROKEN
        peer.start += header
        peer.skip = size
        peer.skip_more = more
        return _GO_ON
    if peer.end - peer.start < header + size:
        return WAITING
    at = peer.start + header
    peer.start = at + size
    return _take_frame(peer, at, size, more)


@inner
def _pass_over(peer: Any) -> int:
    """[hot] Drop what has come of an overlong frame; at its end the message is no sample."""
    step = min(peer.skip, peer.end - peer.start)
    peer.start += step
    peer.skip -= step
    if peer.skip:
        return WAITING
    peer.message_size = TOO_LONG
    return _frame_done(peer, peer.skip_more)


@inner
def _take_frame(peer: Any, at: int, size: int, more: int) -> int:
    """[hot] Add a whole frame to the message: an envelope, the body, or one too many."""
    if size == 0 and more and peer.frames == 0:
        peer.enveloped = 1
    elif peer.frames > peer.enveloped:
        peer.message_size = TOO_LONG
    elif peer.message_size != TOO_LONG:
        for k in range(np.uint64(size)):
            peer.message[k] = peer.incoming[np.uint64(at) + k]
        peer.message_size = size
    return _frame_done(peer, more)


@inner
def _frame_done(peer: Any, more: int) -> int:
    """[hot] Count a frame; the message is whole when no more follow."""
    peer.frames += 1
    if more:
        return _GO_ON
    peer.frames = 0
    return MESSAGE


@inner
def _read_command(peer: Any, flags: int, size: int, header: int) -> int:
    """[hot] PING is answered, ERROR ends the connection, any other is passed over.

    One may come between a message's frames: libzmq puts its PING there.
    """
    if flags & _MORE or size > _MAX_COMMAND or size == 0:
        return BROKEN
    if peer.end - peer.start < header + size:
        return WAITING
    at = peer.start + header
    peer.start = at + size
    name_size = np.int64(peer.incoming[np.uint64(at)])
    if name_size == 0 or name_size >= size:
        return BROKEN
    if _named(peer.incoming, at, size, _ERROR_NAME):
        return BROKEN
    if _named(peer.incoming, at, size, _PING_NAME):
        return _answer_ping(peer, at + _PING_NAME.size, size - _PING_NAME.size)
    return _GO_ON


@inner
def _answer_ping(peer: Any, at: int, size: int) -> int:
    """[hot] Take the peer's time to live and send its context back."""
    context = size - 2
    if context < 0 or context > _MAX_CONTEXT:
        return BROKEN
    data, place = peer.incoming, np.uint64(at)
    ttl = np.int64(data[place]) * 256 + np.int64(data[place + np.uint64(1)])
    peer.ttl_nsec = ttl * _NSEC_PER_DECISECOND
    total = 2 + _PONG_NAME.size + context
    if peer.pending + total > peer.outgoing.size:
        return BROKEN
    out = np.uint64(peer.pending)
    peer.outgoing[out] = np.uint8(_COMMAND)
    peer.outgoing[out + np.uint64(1)] = np.uint8(_PONG_NAME.size + context)
    for k in range(np.uint64(_PONG_NAME.size)):
        peer.outgoing[out + np.uint64(2) + k] = _PONG_NAME[k]
    for k in range(np.uint64(context)):
        peer.outgoing[out + np.uint64(2 + _PONG_NAME.size) + k] = data[place + np.uint64(2) + k]
    peer.pending += total
    return _GO_ON
