"""Frames of a serial line: bytes to frames and back, in both directions. No device here.

A frame is ``COBS(kind, payload, check)`` and a 0 at its end, as ``firmware_bridge/SPEC.md``
has it (framing 1.0). A reader never raises: whatever the bytes, it goes on at the next 0.

Sources: COBS, Cheshire and Baker, IEEE/ACM Trans. Networking 7:159 (1999). The check is
the CRC-16 of polynomial 0x1021 from 0xFFFF, not reflected (CRC-16/IBM-3740 in catalogues).
"""

from __future__ import annotations

from enum import IntEnum
from typing import Any, NamedTuple

import numpy as np

from .compiling import compiled, inner
from .errors import WireError
from .kernel import records

MAJOR, MINOR = 1, 0
"""Version of the framing."""
MAX_PAYLOAD = 250
MAX_BODY = MAX_PAYLOAD + 3
"""Kind, payload and check."""
MAX_FRAME = MAX_PAYLOAD + 5
"""A whole frame on the line, its 0 included."""


class Kind(IntEnum):
    """Kinds of frames; a receiver passes over any other."""

    HELLO = 0x01
    WELCOME = 0x02
    BYE = 0x03
    SAMPLE = 0x10
    ANSWER = 0x11
    PARAMETER = 0x20
    ARM = 0x21
    DISARM = 0x22
    ALIVE = 0x23
    ASK = 0x24
    DONE = 0x28
    IS = 0x29
    TRACE = 0x2A


class Reason(IntEnum):
    """Why a goodbye was said."""

    NONE = 0
    VERSION = 1
    CELLS = 2
    SERVER_GONE = 3
    HOST_STOPS = 4


class Frame(NamedTuple):
    """A frame that has come whole."""

    kind: int
    payload: bytes


UNFRAMER = np.dtype(
    [
        ("length", "i8"),  # of the frame so far
        ("left", "i8"),  # bytes of the present COBS run that are still to come
        ("zero", "i8"),  # whether a 0 stands after the present run
        ("begun", "i8"),  # whether anything has come since the last 0
        ("spoilt", "i8"),  # whether the frame is past saving
        ("in_step", "i8"),  # whether a 0 has come: what was before it may have lacked its head
        ("damaged", "i8"),  # frames dropped since
        ("bytes", "u1", (MAX_BODY,)),  # kind, payload, check
    ],
    align=True,
)
"""A frame in the making; zeros to begin with."""

NOTHING, WHOLE = 0, 1
"""What :func:`unframe` found."""

_MAX_BODY = MAX_BODY
_CRC_INITIAL = 0xFFFF
_LONGEST_RUN = 255


@inner
def _crc_on(crc: int, byte: int) -> int:
    """[hot] The check carried over one byte: the polynomial's terms x^12, x^5 and 1 at once."""
    x = (crc >> 8) ^ byte
    x ^= x >> 4
    return ((crc << 8) ^ (x << 12) ^ (x << 5) ^ x) & 0xFFFF


@compiled
def crc16(data: Any, size: int) -> int:
    """[hot] The check of the first ``size`` bytes."""
    crc = np.int64(_CRC_INITIAL)
    for k in range(np.uint64(size)):
        crc = _crc_on(crc, np.int64(data[k]))
    return crc


@inner
def _stuff(out: Any, code: int, at: int, byte: int) -> Any:
    """[hot] Take one byte in: ``(place of the run's code, place of the next byte)``."""
    if at - code == _LONGEST_RUN:
        # Only now that more follows: a full run at the end has none behind it.
        out[np.uint64(code)] = np.uint8(_LONGEST_RUN)
        code, at = at, at + 1
    if byte != 0:
        out[np.uint64(at)] = np.uint8(byte)
        return code, at + 1
    out[np.uint64(code)] = np.uint8(at - code)
    return at, at + 1


@compiled
def put_cobs(out: Any, data: Any, size: int) -> int:
    """[hot] COBS of the first ``size`` bytes into ``out``; its size, without a 0 behind it.

    ``out`` needs ``size + size // 254 + 1`` bytes.
    """
    code, at = np.int64(0), np.int64(1)
    for k in range(np.uint64(size)):
        code, at = _stuff(out, code, at, np.int64(data[k]))
    out[np.uint64(code)] = np.uint8(at - code)
    return at


@compiled
def put_frame(out: Any, start: int, kind: int, payload: Any, size: int) -> int:
    """[hot] One frame into ``out`` from ``start`` on; the place after it.

    ``out`` needs ``MAX_FRAME`` bytes from there; ``size`` is at most ``MAX_PAYLOAD``.
    """
    code, at = _stuff(out, np.int64(start), np.int64(start) + 1, np.int64(kind))
    crc = _crc_on(np.int64(_CRC_INITIAL), np.int64(kind))
    for k in range(np.uint64(size)):
        byte = np.int64(payload[k])
        crc = _crc_on(crc, byte)
        code, at = _stuff(out, code, at, byte)
    code, at = _stuff(out, code, at, crc >> 8)
    code, at = _stuff(out, code, at, crc & 255)
    out[np.uint64(code)] = np.uint8(at - code)
    out[np.uint64(at)] = np.uint8(0)
    return at + 1


@inner
def _keep(unframer: Any, byte: int) -> None:
    """[hot] Add a decoded byte to the frame, if it can still be one."""
    if unframer.length < _MAX_BODY:
        unframer.bytes[np.uint64(unframer.length)] = np.uint8(byte)
        unframer.length += 1
    else:
        unframer.spoilt = 1


@inner
def _end(unframer: Any) -> int:
    """[hot] A 0 has come: whether what was before it is a frame."""
    begun = unframer.begun
    # The check of a message with its own check behind it is 0.
    sound = (
        not unframer.spoilt
        and unframer.left == 0
        and unframer.length >= 3
        and crc16(unframer.bytes, unframer.length) == 0
    )
    if begun and not sound and unframer.in_step:
        unframer.damaged += 1
    unframer.begun = unframer.left = unframer.zero = unframer.spoilt = 0
    unframer.in_step = 1
    return WHOLE if begun and sound else NOTHING


@inner
def _take(unframer: Any, byte: int) -> None:
    """[hot] A byte that is not 0: a run's code, or one of the run."""
    if not unframer.begun:
        unframer.begun = 1
        unframer.length = 0
    if unframer.left:
        unframer.left -= 1
        _keep(unframer, byte)
        return
    if unframer.zero:
        _keep(unframer, 0)
    unframer.left = byte - 1
    unframer.zero = np.int64(byte != _LONGEST_RUN)


@compiled
def unframe(unframer: Any, data: Any, at: int, end: int) -> Any:
    """[hot] Read on in bytes ``at`` to ``end``: ``(WHOLE or NOTHING, where it stopped)``.

    With ``WHOLE`` the kind is ``bytes[0]`` and the payload the ``length - 3`` bytes after it,
    until the next call. Damaged frames are passed over and counted.
    """
    while at < end:
        byte = np.int64(data[np.uint64(at)])
        at += 1
        if byte != 0:
            _take(unframer, byte)
        elif _end(unframer) == WHOLE:
            return WHOLE, at
    return NOTHING, at


def encode_frame(kind: int, payload: bytes = b"") -> bytes:
    """One frame as bytes, with its 0 at the end.

    Raises
    ------
    WireError
        When the payload is over ``MAX_PAYLOAD`` bytes or the kind no byte.
    """
    if len(payload) > MAX_PAYLOAD or not 0 <= kind <= 255:
        raise WireError(
            f"frame of kind {kind} with {len(payload)} bytes: a kind is 0 to 255 and a payload "
            f"at most {MAX_PAYLOAD} bytes"
        )
    out = np.zeros(MAX_FRAME, np.uint8)
    # One byte more than there is: an empty array would be of no use to compiled code.
    size = put_frame(out, 0, kind, np.frombuffer(payload + b"\0", np.uint8), len(payload))
    return out[:size].tobytes()


class Deframer:
    """Bytes as they come to frames, for programs in Python."""

    def __init__(self) -> None:
        self._state = records(UNFRAMER)

    @property
    def damaged(self) -> int:
        """Frames that were dropped."""
        return int(self._state[0].damaged)

    def feed(self, data: bytes) -> list[Frame]:
        """The frames that these bytes complete."""
        record, found = self._state[0], []
        array, at = np.frombuffer(data, np.uint8), 0
        while at < len(data):
            outcome, at = unframe(record, array, at, len(data))
            if outcome == WHOLE:
                body = record.bytes[: record.length - 2].tobytes()
                found.append(Frame(body[0], body[1:]))
        return found
