"""The direct lane: the compiled loop at the socket itself, with no thread between.

Stream sockets, TCP or UNIX, never blocking, with one ``poll`` that waits for all of
them. The protocol is in :mod:`gatestep.zmtp`; here are the system calls and the rules
of who is dropped: a peer that breaks the protocol, does not finish its handshake in
time, falls silent beyond the time it allowed itself, or leaves its answers unread.
Nobody is ever waited for, and peers that have something are served in turn, one
message each.
"""

from __future__ import annotations

import errno
import ipaddress
import socket
from typing import Any

import numpy as np
from numba import types

from .bits import i32_at
from .compiling import compiled, inner
from .errors import LinkError
from .kernel import records
from .lanebase import GONE, NOTHING, SENT, STALLED, now_nsec
from .wire import MAX_MESSAGE
from .zmtp import (
    BROKEN,
    FREE,
    MESSAGE,
    OPEN,
    PEER,
    feed,
    make_room,
    open_peer,
    put_answer,
)

PLACES = 128
"""Connections at once; when all are taken, see :func:`_free_place` for which one goes."""
MAX_ALLOWED = 64
"""Longest list of peer addresses."""
HANDSHAKE_NSEC = 1_000_000_000
"""Longest that a peer may take for its handshake."""
ABANDONED_NSEC = 60_000_000_000
"""Silence after which a connection gives its place to a new one when all are taken."""
SEND_BUFFER = 212_992
"""Bytes that the system may keep for a peer that is behind with its reading; it doubles them.

Some 550 small answers over UNIX sockets, 400 kB over TCP, where it would else be 4 MB.
"""
_CHECK_NSEC = 50_000_000
_ACCEPT_NSEC = 1_000_000

POLL = np.dtype([("fd", "i4"), ("events", "i2"), ("revents", "i2")])
DIRECT = np.dtype(
    [
        ("listen", "i8"),
        ("tcp", "i8"),
        ("wait_ms", "i8"),
        ("used", "i8"),  # places that have ever been taken; those beyond are free
        ("serials", "i8"),
        ("turn", "i8"),  # place that the last message came from
        ("checked_nsec", "i8"),
        ("accepted_nsec", "i8"),
        ("deaf", "i8"),  # whether the listener is left alone until the next check
        ("peer_size", "i8"),  # id of the peer of the last message: its serial in bytes
        ("peer_serial", "i8"),
        ("gone", "i8"),  # serial of an open connection that has just ended, 0 if none
        ("ended", "i8"),  # serial of one that ended in a reply; told after the next receive
        ("undelivered", "i8"),
        ("allowed", "i8"),  # addresses that may connect; 0: any
        ("poll_at", "u8"),
        ("time_at", "u8"),
        ("address_at", "u8"),
        ("length_at", "u8"),
        ("options_at", "u8"),
        ("peer", "u1", (8,)),
        ("out", "u1", (MAX_MESSAGE,)),
        ("message", "u1", (MAX_MESSAGE,)),
        ("time", "i8", (2,)),
        ("address", "u1", (128,)),
        ("length", "u4", (2,)),
        ("options", "i4", (2,)),  # values of the options of each connection's socket
        ("addresses", "u1", (MAX_ALLOWED * 16,)),
        ("poll", POLL, (PLACES + 1,)),
        ("peers", PEER, (PLACES,)),
        ("incoming_at", "u8", (PLACES,)),
        ("outgoing_at", "u8", (PLACES,)),
    ],
    align=True,
)

_POLLIN, _POLLOUT, _TROUBLE = 1, 4, 8 | 16 | 32
_NOSIGNAL_DONTWAIT = 0x4000 | 0x40
_NONBLOCK_CLOEXEC = 0o2000000 | 0o4000
_IPPROTO_TCP, _TCP_NODELAY = 6, 1
_SOL_SOCKET, _SO_SNDBUF = 1, 7
_SHUT_WR = np.int32(1)
_DRAINS = 16
_EAGAIN, _EINTR = errno.EAGAIN, errno.EINTR
_INET, _INET6 = int(socket.AF_INET), int(socket.AF_INET6)

_pointer = types.uintp
_poll: Any = types.ExternalFunction("poll", types.intc(_pointer, types.ulong, types.intc))
_recv: Any = types.ExternalFunction(
    "recv", types.intp(types.intc, _pointer, types.uintp, types.intc)
)
_send: Any = types.ExternalFunction(
    "send", types.intp(types.intc, _pointer, types.uintp, types.intc)
)
_shutdown: Any = types.ExternalFunction("shutdown", types.intc(types.intc, types.intc))
_errno_location: Any = types.ExternalFunction("__errno_location", _pointer())
_close: Any = types.ExternalFunction("close", types.intc(types.intc))
_accept4: Any = types.ExternalFunction(
    "accept4", types.intc(types.intc, _pointer, _pointer, types.intc)
)
_setsockopt: Any = types.ExternalFunction(
    "setsockopt", types.intc(types.intc, types.intc, types.intc, _pointer, types.uint)
)


def make_direct(wait_ms: int, allowed: tuple[str, ...] = ()) -> Any:
    """A ``DIRECT`` record array of length 1; give it a listener with :func:`attach_direct`.

    The array must outlive every use: the record holds addresses into itself.

    Parameters
    ----------
    wait_ms : int
        Longest that :func:`receive_direct` waits.
    allowed : tuple of str
        IPv4 or IPv6 addresses that may connect over TCP; empty for any.

    Raises
    ------
    LinkError
        When one is no address, or they are more than ``MAX_ALLOWED``.
    """
    if len(allowed) > MAX_ALLOWED:
        raise LinkError(
            f"{len(allowed)} addresses that may connect, loopback among them; the direct lane "
            f"takes at most {MAX_ALLOWED}: use loop.lane = 'libzmq'"
        )
    lane = records(DIRECT)
    record = lane[0]
    record.listen, record.wait_ms = -1, wait_ms
    record.options[:] = 1, SEND_BUFFER
    record.allowed = len(allowed)
    for k, address in enumerate(allowed):
        record.addresses[16 * k : 16 * k + 16] = np.frombuffer(_as_ipv6(address), np.uint8)
    base = int(lane.ctypes.data)
    offsets = {name: base + field[1] for name, field in DIRECT.fields.items()}  # type: ignore[union-attr]
    for name in ("poll", "time", "address", "length", "options"):
        record[f"{name}_at"] = offsets[name]
    inside = {name: field[1] for name, field in PEER.fields.items()}  # type: ignore[union-attr]
    places = offsets["peers"] + PEER.itemsize * np.arange(PLACES, dtype=np.uint64)
    record.incoming_at[:] = places + np.uint64(inside["incoming"])
    record.outgoing_at[:] = places + np.uint64(inside["outgoing"])
    return lane


def attach_direct(lane: Any, listener: socket.socket) -> None:
    """Let the lane take connections from a listening socket, which stays the caller's."""
    listener.setblocking(False)
    lane[0].listen = listener.fileno()
    lane[0].tcp = listener.family != socket.AF_UNIX


def _as_ipv6(address: str) -> bytes:
    """Sixteen bytes of an address; an IPv4 one is mapped."""
    try:
        parsed = ipaddress.ip_address(address)
    except ValueError as fault:
        raise LinkError(
            f"peer {address!r} is no IP address; give each peer's address, such as 192.168.7.2"
        ) from fault
    return (b"\0" * 10 + b"\xff\xff" if parsed.version == 4 else b"") + parsed.packed


@inner
def _drop(lane: Any, place: int) -> None:
    """[hot] End a connection and note its serial for whoever held the loop through it."""
    peer = lane.peers[np.uint64(place)]
    _close(np.int32(peer.fd))
    if peer.phase == OPEN:
        lane.gone = peer.serial
    lane.undelivered += peer.waiting
    peer.phase = FREE
    peer.fd = -1
    while lane.used > 0 and lane.peers[np.uint64(lane.used - 1)].phase == FREE:
        lane.used -= 1


@inner
def _must_wait() -> bool:
    """[hot] Whether the last system call failed only because it would have had to wait."""
    error = np.int64(i32_at(_errno_location()))
    return error == _EAGAIN or error == _EINTR


@inner
def _write_out(lane: Any, place: int) -> bool:
    """[hot] Send what is pending, as far as the socket takes it; False when it is broken."""
    peer = lane.peers[np.uint64(place)]
    size = np.uint64(peer.pending)
    address = lane.outgoing_at[np.uint64(place)]
    sent = np.int64(_send(np.int32(peer.fd), address, size, _NOSIGNAL_DONTWAIT))
    if sent < 0:
        return _must_wait()
    rest = peer.pending - sent
    for k in range(np.uint64(rest)):
        peer.outgoing[k] = peer.outgoing[np.uint64(sent) + k]
    peer.pending = rest
    if rest == 0:
        peer.waiting = 0
    return True


@inner
def _read_in(lane: Any, place: int, now: int) -> bool:
    """[hot] Take what has come; False when the connection has ended."""
    peer = lane.peers[np.uint64(place)]
    room = np.uint64(make_room(peer))
    address = lane.incoming_at[np.uint64(place)] + np.uint64(peer.end)
    got = np.int64(_recv(np.int32(peer.fd), address, room, _NOSIGNAL_DONTWAIT))
    if got < 0:
        return _must_wait()
    if got == 0:
        return False
    peer.end += got
    peer.heard_nsec = now
    return True


@inner
def _may_connect(lane: Any) -> bool:
    """[hot] Whether the address just accepted is on the list, or there is none."""
    if lane.allowed == 0:
        return True
    family = np.int64(lane.address[0]) + 256 * np.int64(lane.address[1])
    found = False
    for k in range(np.uint64(lane.allowed)):
        same = True
        for j in range(np.uint64(16)):
            if family == _INET6:
                byte = lane.address[np.uint64(8) + j]
            elif j < 10:
                byte = np.uint8(0)
            elif j < 12:
                byte = np.uint8(255)
            else:
                byte = lane.address[j - np.uint64(8)]
            same = same and byte == lane.addresses[np.uint64(16) * k + j]
        found = found or same
    return found


@inner
def _free_place(lane: Any, now: int) -> int:
    """[hot] A free place; when all are taken one is made free, if one can be spared.

    First the oldest unfinished handshake, else the connection that has been silent for
    longest, where that is over ``ABANDONED_NSEC``: a rig that was switched off leaves
    one behind that never ends by itself. -1 when none can.
    """
    oldest, least, silent = -1, now, -1
    heard = now - ABANDONED_NSEC
    for k in range(PLACES):
        peer = lane.peers[np.uint64(k)]
        if peer.phase == FREE:
            lane.used = max(lane.used, k + 1)
            return k
        if peer.phase != OPEN and peer.opened_nsec <= least:
            oldest, least = k, peer.opened_nsec
        if peer.phase == OPEN and peer.heard_nsec < heard:
            silent, heard = k, peer.heard_nsec
    place = oldest if oldest >= 0 else silent
    if place >= 0:
        _drop(lane, place)
        lane.used = max(lane.used, place + 1)
    return place


@inner
def _accept(lane: Any, now: int) -> None:
    """[hot] Take one waiting connection and greet it."""
    lane.accepted_nsec = now
    lane.length[0] = 128
    fd = _accept4(np.int32(lane.listen), lane.address_at, lane.length_at, _NONBLOCK_CLOEXEC)
    if fd < 0:
        # Out of descriptors, most likely: the poll would come back at once, for ever.
        lane.deaf = 1
        return
    place = _free_place(lane, now) if _may_connect(lane) else -1
    if place < 0:
        _close(fd)
        return
    if lane.tcp:
        _setsockopt(fd, _IPPROTO_TCP, _TCP_NODELAY, lane.options_at, 4)
    _setsockopt(fd, _SOL_SOCKET, _SO_SNDBUF, lane.options_at + np.uint64(4), 4)
    lane.serials += 1
    open_peer(lane.peers[np.uint64(place)], np.int64(fd), lane.serials, now)
    # What the last poll found there was another connection's.
    lane.poll[np.uint64(place + 1)].revents = np.int16(0)
    if not _write_out(lane, place):
        _drop(lane, place)


@inner
def _check_times(lane: Any, now: int) -> None:
    """[hot] Drop one who has not finished the handshake in time or is silent beyond its TTL.

    Not one from whom something has come that is still to be read.
    """
    lane.checked_nsec = now
    lane.deaf = 0
    for k in range(np.uint64(lane.used)):
        peer = lane.peers[k]
        come = peer.unread or lane.poll[k + np.uint64(1)].revents & _POLLIN
        if peer.phase == FREE or come:
            continue
        unfinished = peer.phase != OPEN and now - peer.opened_nsec > HANDSHAKE_NSEC
        silent = peer.ttl_nsec > 0 and now - peer.heard_nsec > peer.ttl_nsec
        if unfinished or silent:
            _drop(lane, np.int64(k))
            # Others can wait a turn: only one that has gone can be told at a time.
            lane.checked_nsec = 0
            return


@inner
def _take_message(lane: Any, place: int) -> int:
    """[hot] Read on in a connection's bytes: a message's size, or ``NOTHING``."""
    peer = lane.peers[np.uint64(place)]
    found = feed(peer)
    if found == BROKEN or (peer.pending and not _write_out(lane, place)):
        _drop(lane, place)
        return NOTHING
    if found != MESSAGE:
        return NOTHING
    lane.turn = place
    for k in range(np.uint64(min(peer.message_size, MAX_MESSAGE))):
        lane.message[k] = peer.message[k]
    lane.peer_serial = peer.serial
    lane.peer_size = 8
    for k in range(np.uint64(8)):
        lane.peer[k] = np.uint8((np.uint64(peer.serial) >> (np.uint64(8) * k)) & np.uint64(255))
    return peer.message_size


@inner
def _wait(lane: Any) -> int:
    """[hot] Poll the listener and every connection; how many have something."""
    lane.poll[0].fd = np.int32(-1 if lane.deaf else lane.listen)
    lane.poll[0].events = np.int16(_POLLIN)
    lane.poll[0].revents = np.int16(0)
    unread = 0
    for k in range(np.uint64(lane.used)):
        peer, entry = lane.peers[k], lane.poll[k + np.uint64(1)]
        entry.fd = np.int32(peer.fd if peer.phase != FREE else -1)
        entry.events = np.int16(_POLLIN | (_POLLOUT if peer.pending else 0))
        entry.revents = np.int16(0)
        unread += peer.unread if peer.phase != FREE else 0
    wait_ms = np.int32(0 if unread else lane.wait_ms)
    ready = np.int64(_poll(lane.poll_at, np.uint64(lane.used + 1), wait_ms))
    return unread + ready if ready > 0 else unread


@inner
def _serve_ready(lane: Any, place: int, revents: int, now: int) -> int:
    """[hot] Do what a connection's poll result asks for: a message's size, or ``NOTHING``."""
    peer = lane.peers[np.uint64(place)]
    if peer.phase == FREE:
        return NOTHING
    if peer.unread:
        size = _take_message(lane, place)
        if size != NOTHING or peer.phase == FREE:
            return size
    broken = False
    if revents & _POLLOUT and peer.pending:
        broken = not _write_out(lane, place)
    if not broken and revents & _POLLIN:
        broken = not _read_in(lane, place, now)
    elif revents & _TROUBLE:
        broken = True
    if broken:
        _drop(lane, place)
        return NOTHING
    return _take_message(lane, place)


@inner
def _serve(lane: Any, now: int) -> int:
    """[hot] Serve whoever has something: a message's size, or ``NOTHING``."""
    used = lane.used
    for k in range(1, used + 1):
        # Everyone else before the peer that was served last.
        place = (lane.turn + k) % used
        revents = np.int64(lane.poll[np.uint64(place + 1)].revents)
        if revents or lane.peers[np.uint64(place)].unread:
            size = _serve_ready(lane, place, revents, now)
            if size != NOTHING or lane.gone:
                return size
    return NOTHING


@compiled
def receive_direct(lane: Any) -> int:
    """[hot] Wait for a message, at most ``wait_ms``: its size, or ``NOTHING``.

    A size over ``MAX_MESSAGE`` means that it was too long or came in too many frames.
    With ``NOTHING``, ``gone`` may name a connection that has ended; one at a time.
    """
    lane.gone = lane.ended
    lane.ended = 0
    if lane.gone:
        return NOTHING
    ready = _wait(lane)
    now = now_nsec(lane)
    if now - lane.checked_nsec > _CHECK_NSEC:
        _check_times(lane, now)
    # At once when there is nothing else to do; else now and then, so that neither
    # those who connect nor those who send can keep the other out.
    due = ready == 1 or now - lane.accepted_nsec > _ACCEPT_NSEC
    if lane.poll[0].revents and due and not lane.gone:
        _accept(lane, now)
    if ready == 0 or lane.gone:
        return NOTHING
    return _serve(lane, now)


@compiled
def reply_direct(lane: Any, size: int) -> int:
    """[hot] Answer the last message's peer with ``lane.out``: SENT, STALLED or GONE."""
    place = lane.turn
    peer = lane.peers[np.uint64(place)]
    if peer.phase != OPEN or peer.serial != lane.peer_serial:
        lane.undelivered += 1
        return GONE
    waited = peer.pending
    fits = put_answer(peer, lane.out, size, peer.enveloped)
    if not fits or (waited == 0 and not _write_out(lane, place)):
        lane.undelivered += 0 if fits else 1
        _drop(lane, place)
        lane.ended = lane.gone
        return GONE
    return SENT if peer.pending == 0 else STALLED


@inner
def _part(lane: Any, place: int) -> None:
    """[hot] End a connection so that what was sent still arrives.

    Closed with something unread, a TCP connection is reset and may lose its last answer.
    """
    peer = lane.peers[np.uint64(place)]
    _shutdown(np.int32(peer.fd), _SHUT_WR)
    address, room = lane.incoming_at[np.uint64(place)], np.uint64(peer.incoming.size)
    for _ in range(_DRAINS):
        if _recv(np.int32(peer.fd), address, room, _NOSIGNAL_DONTWAIT) <= 0:
            break
    _drop(lane, place)


@compiled
def close_direct(lane: Any) -> None:
    """[hot] End every connection."""
    for k in range(np.uint64(lane.used)):
        if lane.peers[k].phase != FREE:
            _part(lane, np.int64(k))
