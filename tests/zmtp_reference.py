"""ZMTP 3.1 by the letter, in plain Python: what the compiled protocol is held against.

Written from RFC 37 of the ZeroMQ project: greeting, NULL handshake, framing, PING and
PONG. It reads a whole stream at once by slicing, keeps no state and knows nothing of
buffers. Where the RFC leaves a choice to the receiver, the choice is gatestep's: what
can be no sample is passed over up to a size, commands that mean nothing are ignored.
"""

from __future__ import annotations

import errno
import os
import socket
import struct
import time
from typing import NamedTuple

SIGNATURE = b"\xff" + bytes(8) + b"\x7f"
MORE, LONG, COMMAND = 1, 2, 4
PARTNERS = (b"DEALER", b"REQ", b"ROUTER")

LONGEST_SAMPLE = 512
LONGEST_PASSED_OVER = 1 << 20
LONGEST_COMMAND = 1024
LONGEST_CONTEXT = 16
NO_SAMPLE = LONGEST_SAMPLE + 1


def greeting(mechanism: bytes = b"NULL", major: int = 3, minor: int = 1) -> bytes:
    """The 64 bytes of a greeting."""
    return SIGNATURE + bytes([major, minor]) + mechanism.ljust(20, b"\0") + bytes(32)


def frame(body: bytes, flags: int = 0, long: bool | None = None) -> bytes:
    """One frame; in the long form when it is over 255 bytes or asked for."""
    if len(body) > 255 if long is None else long:
        return bytes([flags | LONG]) + len(body).to_bytes(8, "big") + body
    return bytes([flags, len(body)]) + body


def message(*parts: bytes, long: bool | None = None) -> bytes:
    """A message of one or more frames."""
    *first, last = parts
    return b"".join(frame(p, MORE, long) for p in first) + frame(last, 0, long)


def command(name: bytes, data: bytes = b"", long: bool | None = None) -> bytes:
    """A command."""
    return frame(bytes([len(name)]) + name + data, COMMAND, long)


def properties(**values: bytes) -> bytes:
    """Metadata; an underscore in a name stands for a hyphen."""
    found = b""
    for name, value in values.items():
        key = name.replace("_", "-").encode()
        found += bytes([len(key)]) + key + len(value).to_bytes(4, "big") + value
    return found


def ready(kind: bytes = b"DEALER", identity: bytes = b"") -> bytes:
    """READY of a socket type, as libzmq sends it."""
    return command(b"READY", properties(Socket_Type=kind, Identity=identity))


def ping(ttl_ds: int = 0, context: bytes = b"") -> bytes:
    """PING with a time to live in tenths of a second."""
    return command(b"PING", ttl_ds.to_bytes(2, "big") + context)


OPENING = greeting() + ready()
"""All that a DEALER sends before its first message."""


class Heard(NamedTuple):
    """What a stream says to a ROUTER."""

    messages: list[tuple[int, bytes, bool]]
    """Size (NO_SAMPLE if it is none), body, and whether an empty frame led it."""
    pongs: list[bytes]
    """Contexts of the PINGs."""
    ttl_ds: int
    broken: bool
    rest: bytes
    """What is not whole yet."""


def hear(stream: bytes) -> Heard:
    """Everything in a stream, from the greeting up to its end or its first breach."""
    if not _greets(stream[:64]):
        return Heard([], [], 0, True, b"")
    if len(stream) < 64:
        return Heard([], [], 0, False, stream)
    first = _split(stream[64:], handshake=True)
    if first is None:
        return Heard([], [], 0, False, stream[64:])
    if first == "breach" or not _welcome(first[1]):
        return Heard([], [], 0, True, b"")
    return _traffic(first[2])


def _greets(start: bytes) -> bool:
    """Whether bytes are a greeting of ZMTP 3 with NULL, or may become one."""
    if start[:1] not in (b"", b"\xff") or start[9:10] not in (b"", b"\x7f"):
        return False
    if start[10:11] and start[10] < 3:
        return False
    return len(start) < 64 or start[12:32] == b"NULL".ljust(20, b"\0")


def _split(stream: bytes, handshake: bool = False) -> tuple[int, bytes, bytes] | str | None:
    """``(flags, body, rest)`` of the first frame, ``"breach"``, or None when not whole."""
    if len(stream) < 2 or (stream[0] & LONG and len(stream) < 9):
        return None
    flags, head = stream[0], 9 if stream[0] & LONG else 2
    size = int.from_bytes(stream[1:head], "big")
    is_command = bool(flags & COMMAND)
    if flags > 7 or (is_command and flags & MORE) or (handshake and not is_command):
        return "breach"
    least = 6 if handshake else 1
    if is_command and not least <= size <= LONGEST_COMMAND:
        return "breach"
    if size > LONGEST_PASSED_OVER:
        return "breach"
    if len(stream) < head + size:
        return None
    return flags, stream[head : head + size], stream[head + size :]


def _welcome(body: bytes) -> bool:
    """Whether a handshake's command is READY of a socket that pairs with ROUTER."""
    if not body.startswith(b"\x05READY"):
        return False
    rest, kinds = body[6:], []
    while rest:
        name, rest = rest[1 : 1 + rest[0]], rest[1 + rest[0] :]
        size, rest = int.from_bytes(rest[:4], "big"), rest[4:] if len(rest) >= 4 else None
        if not name or rest is None or len(rest) < size:
            return False
        value, rest = rest[:size], rest[size:]
        if name.lower() == b"socket-type":
            kinds.append(value)
    return bool(kinds) and all(kind in PARTNERS for kind in kinds)


def _traffic(stream: bytes) -> Heard:
    messages: list[tuple[int, bytes, bool]] = []
    pongs: list[bytes] = []
    frames: list[bytes] = []
    ttl_ds, broken = 0, False
    while not broken and (found := _split(stream)) is not None:
        if found == "breach":
            broken = True
            break
        flags, body, stream = found
        if not flags & COMMAND:
            frames.append(body)
            if not flags & MORE:
                messages.append(_sample(frames))
                frames = []
            continue
        name, data = body[1 : 1 + body[0]], body[1 + body[0] :]
        broken = not 0 < body[0] < len(body) or name == b"ERROR"
        if name == b"PING" and not broken:
            broken = not 2 <= len(data) <= 2 + LONGEST_CONTEXT
            if not broken:
                ttl_ds = int.from_bytes(data[:2], "big")
                pongs.append(data[2:])
    return Heard(messages, pongs, ttl_ds, broken, stream)


def _sample(frames: list[bytes]) -> tuple[int, bytes, bool]:
    """A message as the loop is given it: one frame, an empty one before it taken off."""
    enveloped = len(frames) > 1 and frames[0] == b""
    body = frames[enveloped:]
    if len(body) > 1 or len(body[0]) > LONGEST_SAMPLE:
        return NO_SAMPLE, b"", enveloped
    return len(body[0]), body[0], enveloped


def deframe(stream: bytes) -> tuple[list[tuple[int, bytes]], bytes]:
    """Frames of what a ROUTER sent after its handshake, as (flags, body), and the rest."""
    found, at = [], 0
    while (first := _split(stream[at : at + 2048])) is not None:
        assert not isinstance(first, str), stream[at : at + 16]
        flags, body, _ = first
        at += len(body) + (9 if flags & LONG else 2)
        found.append((flags, body))
    return found, stream[at:]


class Wire:
    """A peer that speaks by the letter over a stream socket, and can break every letter.

    Parameters
    ----------
    endpoint : str
        ``tcp://ADDRESS:PORT`` or ``ipc://PATH``.
    opening : bytes
        Sent on connecting.
    source : str, optional
        Address to connect from.
    receive_buffer : int, optional
        Bytes that the system keeps for this end; small for a peer that is not to read.
    """

    def __init__(
        self,
        endpoint: str,
        opening: bytes = OPENING,
        source: str | None = None,
        receive_buffer: int | None = None,
    ) -> None:
        if endpoint.startswith("ipc://"):
            self.socket = socket.socket(socket.AF_UNIX)
            where: object = endpoint.removeprefix("ipc://")
        else:
            host, _, port = endpoint.removeprefix("tcp://").rpartition(":")
            host = host.strip("[]")
            self.socket = socket.socket(socket.AF_INET6 if ":" in host else socket.AF_INET)
            self.socket.setsockopt(socket.IPPROTO_TCP, socket.TCP_NODELAY, 1)
            where = (host, int(port))
        if receive_buffer:
            self.socket.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, receive_buffer)
        if source:
            self.socket.bind((source, 0))
        self.socket.settimeout(30.0)
        while (error := self.socket.connect_ex(where)) in (errno.EAGAIN, errno.EINTR):
            time.sleep(0.001)  # the other end's queue of connections is full
        if error:
            raise OSError(error, os.strerror(error))
        self._come, self._at = bytearray(), 0
        self._opened = False
        self.send(opening)

    def __enter__(self) -> Wire:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        self.socket.close()

    def shake_hands(self) -> Wire:
        """Go on from the greeting step by step, as libzmq's own clients do."""
        while len(self._come) < 64:
            assert self._more(), "ended in the greeting"
        self.send(ready())
        self._open()
        return self

    def _open(self) -> None:
        """Take the other end's greeting and READY."""
        self._opened = True
        while len(self._come) < 64:
            assert self._more(), "ended in the handshake"
        assert self._come[0] == 0xFF
        assert self._come[9:11] == b"\x7f\x03"
        self._at = 64
        assert self.frame()[1].startswith(b"\x05READY")

    def reset(self) -> None:
        """Close so that the other end finds a reset connection, on TCP."""
        self.socket.setsockopt(socket.SOL_SOCKET, socket.SO_LINGER, struct.pack("ii", 1, 0))
        self.socket.close()

    def send(self, data: bytes) -> None:
        self.socket.sendall(data)

    def _more(self) -> bool:
        """Take in what comes; False at the end of the connection."""
        try:
            part = self.socket.recv(1 << 16)
        except ConnectionError:
            return False
        self._come += part
        return bool(part)

    def frame(self) -> tuple[int, bytes]:
        """The next frame after the handshake, as (flags, body)."""
        if not self._opened:
            self._open()
        while (first := _split(bytes(self._come[self._at : self._at + 2048]))) is None:
            del self._come[: self._at]
            self._at = 0
            assert self._more(), "ended before the frame"
        assert not isinstance(first, str), "a breach"
        flags, body, _ = first
        self._at += len(body) + (9 if flags & LONG else 2)
        return flags, body

    def answer(self) -> bytes:
        """The next answer, without its envelope."""
        flags, body = self.frame()
        while flags & MORE:
            flags, body = self.frame()
        return body

    def ends(self) -> bool:
        """Whether the other end closes the connection; what comes before is read."""
        while self._more():
            pass
        return True

    def rest(self) -> bytes:
        """All that came up to the end, after what has been taken."""
        self.ends()
        return bytes(self._come[self._at :])
