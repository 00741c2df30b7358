"""The two messages of the loop socket: MessagePack bytes to numbers and back.

No sockets here. A sample is ``[seq, t_us, in_force, lag_us, v_1, ..., v_n]``, an
answer ``[seq, flags, service_nsec, i_1, ..., i_n]``. The decoder takes every width
in which a conforming encoder may write an integer or a float, and refuses anything
else without reading past the message. ``seq`` and ``in_force`` are whole numbers
from 0 to 2**63 - 1; ``t_us`` and ``lag_us`` may be written as floats.

Source of the byte layout: the MessagePack specification.
"""

from __future__ import annotations

from typing import Any

import msgpack
import numpy as np

from .bits import f32_from_u32, f64_from_u64, u64_from_f64
from .compiling import compiled, inner
from .errors import WireError
from .specs import MAX_CELLS

LIVE, CLIPPED, LATE, TRIPPED = 1, 2, 4, 8
GAP, REPEAT, REFUSED, MALFORMED = 16, 32, 64, 128
FLAG_NAMES = {
    LIVE: "live",
    CLIPPED: "clipped",
    LATE: "late",
    TRIPPED: "tripped",
    GAP: "gap",
    REPEAT: "repeat",
    REFUSED: "refused",
    MALFORMED: "malformed",
}

MAX_MESSAGE = 512
"""Longest sample or answer in bytes; eight cells need 108."""

NIL = np.int64(-1)
"""Stands for nil in the ``in_force`` and ``lag_us`` of a decoded sample."""

SAMPLE = np.dtype(
    [
        ("seq", "i8"),
        ("t_us", "f8"),
        ("in_force", "i8"),  # NIL when no answer was in force
        ("lag_us", "f8"),  # NIL when not known
        ("v_mv", "f8", (MAX_CELLS,)),
    ],
    align=True,
)
ANSWER = np.dtype(
    [
        ("seq", "i8"),  # NIL in the answer to a malformed message
        ("flags", "i8"),
        ("service_nsec", "i8"),
        ("i_pa", "f8", (MAX_CELLS,)),
    ],
    align=True,
)

_BAD = np.int64(-1)
# Typed, so that compiled callers share one body: a plain literal makes a type of its own.
_UINT8, _UINT16, _UINT32, _UINT64 = (np.int64(kind) for kind in (0xCC, 0xCD, 0xCE, 0xCF))
_FLOAT64 = np.int64(0xCB)
_1, _2, _4, _8 = (np.int64(count) for count in (1, 2, 4, 8))


@inner
def _big_endian(message: Any, at: int, count: int) -> Any:
    """[hot] An unsigned integer of ``count`` bytes."""
    value = np.uint64(0)
    for k in range(count):
        value = (value << np.uint64(8)) | np.uint64(message[np.uint64(at + k)])
    return value


@inner
def _signed(bits: Any, count: int) -> int:
    """[hot] Two's complement of ``count`` bytes."""
    shift = np.uint64(64 - 8 * count)
    return np.int64(bits << shift) >> np.int64(shift)


@inner
def _width(kind: int) -> int:
    """[hot] Payload bytes of an integer or float type byte; 0 for any other byte."""
    if kind < 0xCA or kind > 0xD3:
        return 0
    if kind < 0xCC:
        return 4 << (kind - 0xCA)
    return 1 << ((kind - 0xCC) & 3)


@inner
def _read_whole(message: Any, size: int, at: int) -> Any:
    """[hot] ``(value, next)`` of a whole number from 0; ``next`` is -1 when it is none."""
    if at >= size:
        return np.int64(0), _BAD
    kind = np.int64(message[np.uint64(at)])
    if kind < 0x80:
        return kind, at + 1
    count = _width(kind)
    if count == 0 or kind < 0xCC or at + 1 + count > size:
        return np.int64(0), _BAD
    bits = _big_endian(message, at + 1, count)
    value = np.int64(bits) if kind <= 0xCF else _signed(bits, count)
    if value < 0:
        return np.int64(0), _BAD
    return value, at + 1 + count


@inner
def _read_number(message: Any, size: int, at: int) -> Any:
    """[hot] ``(value, next)`` of an integer or float as float64; ``next`` -1 if neither."""
    if at >= size:
        return 0.0, _BAD
    kind = np.int64(message[np.uint64(at)])
    if kind < 0x80:
        return np.float64(kind), at + 1
    if kind >= 0xE0:
        return np.float64(kind - 256), at + 1
    count = _width(kind)
    if count == 0 or at + 1 + count > size:
        return 0.0, _BAD
    bits = _big_endian(message, at + 1, count)
    if kind == 0xCA:
        return np.float64(f32_from_u32(np.uint32(bits))), at + 1 + count
    if kind == 0xCB:
        return f64_from_u64(bits), at + 1 + count
    if kind <= 0xCF:
        return np.float64(bits), at + 1 + count
    return np.float64(_signed(bits, count)), at + 1 + count


@inner
def _read_array(message: Any, size: int) -> Any:
    """[hot] ``(length, next)`` of an array's header; ``next`` is -1 when it is none."""
    if size < 1:
        return np.int64(0), _BAD
    kind = np.int64(message[0])
    if 0x90 <= kind <= 0x9F:
        return kind - 0x90, 1
    if kind == 0xDC and size >= 3:
        return np.int64(_big_endian(message, _1, _2)), 3
    if kind == 0xDD and size >= 5:
        return np.int64(_big_endian(message, _1, _4)), 5
    return np.int64(0), _BAD


@inner
def _is_nil(message: Any, size: int, at: int) -> bool:
    """[hot] Whether a nil stands at this place."""
    return at < size and message[np.uint64(at)] == 0xC0


@compiled
def read_sample(message: Any, size: int, cells: int, sample: Any) -> bool:
    """[hot] Decode a sample of ``cells`` voltages; False when it is malformed.

    A voltage that is NaN or infinite is well formed: judging it is the guard's
    part. ``sample`` (a ``SAMPLE`` record) may be partly written when False.
    """
    length, at = _read_array(message, size)
    if at == _BAD or length != 4 + cells:
        return False
    sample.seq, at = _read_whole(message, size, at)
    if at == _BAD:
        return False
    sample.t_us, at = _read_number(message, size, at)
    if at == _BAD or not 0.0 <= sample.t_us < np.inf:
        return False
    sample.in_force = NIL
    if _is_nil(message, size, at):
        at += 1
    else:
        sample.in_force, at = _read_whole(message, size, at)
        if at == _BAD:
            return False
    sample.lag_us = NIL
    if _is_nil(message, size, at):
        at += 1
    else:
        sample.lag_us, at = _read_number(message, size, at)
        if at == _BAD or not 0.0 <= sample.lag_us < np.inf:
            return False
    for k in range(np.uint64(cells)):
        sample.v_mv[k], at = _read_number(message, size, at)
        if at == _BAD:
            return False
    return at == size


@compiled
def read_answer(message: Any, size: int, cells: int, answer: Any) -> bool:
    """[hot] Decode an answer of ``cells`` currents, or the short malformed one."""
    length, at = _read_array(message, size)
    if at == _BAD:
        return False
    short = length == 3 and _is_nil(message, size, at)
    answer.seq = NIL
    if short:
        at += 1
    elif length == 3 + cells:
        answer.seq, at = _read_whole(message, size, at)
    else:
        return False
    if at == _BAD:
        return False
    answer.flags, at = _read_whole(message, size, at)
    if at == _BAD:
        return False
    answer.service_nsec, at = _read_whole(message, size, at)
    if at == _BAD:
        return False
    for k in range(np.uint64(cells)):
        answer.i_pa[k] = 0.0
        if not short:
            answer.i_pa[k], at = _read_number(message, size, at)
            if at == _BAD:
                return False
    return at == size


@inner
def _write_bytes(out: Any, at: int, kind: int, bits: Any, count: int) -> int:
    """[hot] A type byte and the low ``count`` bytes of ``bits``; the place after them."""
    out[np.uint64(at)] = np.uint8(kind)
    for k in range(count):
        shift = np.uint64(8 * (count - 1 - k))
        out[np.uint64(at + 1 + k)] = np.uint8((bits >> shift) & np.uint64(255))
    return at + 1 + count


@inner
def _write_whole(out: Any, at: int, value: int) -> int:
    """[hot] A whole number from 0 in its shortest form; the place after it."""
    bits = np.uint64(value)
    if value < 0x80:
        out[np.uint64(at)] = np.uint8(value)
        return at + 1
    if value < 0x100:
        return _write_bytes(out, at, _UINT8, bits, _1)
    if value < 0x10000:
        return _write_bytes(out, at, _UINT16, bits, _2)
    if value < 0x100000000:
        return _write_bytes(out, at, _UINT32, bits, _4)
    return _write_bytes(out, at, _UINT64, bits, _8)


@inner
def _write_optional(out: Any, at: int, value: int) -> int:
    """[hot] A whole number, or nil for a negative one; the place after it."""
    if value < 0:
        out[np.uint64(at)] = np.uint8(0xC0)
        return at + 1
    return _write_whole(out, at, value)


@compiled
def write_answer(out: Any, answer: Any, cells: int) -> int:
    """[hot] Encode an answer; returns its size in bytes."""
    out[0] = np.uint8(0x93 + cells)
    at = _write_optional(out, _1, answer.seq)
    # By key, since the attribute of that name is numpy's own where nothing is compiled.
    at = _write_whole(out, at, answer["flags"])
    at = _write_whole(out, at, answer.service_nsec)
    for k in range(np.uint64(cells)):
        at = _write_bytes(out, at, _FLOAT64, u64_from_f64(answer.i_pa[k]), _8)
    return at


@compiled
def write_malformed(out: Any) -> int:
    """[hot] Encode the answer to a malformed message, ``[nil, 128, 0]``."""
    out[0] = np.uint8(0x93)
    out[1] = np.uint8(0xC0)
    return _write_whole(out, _write_whole(out, _2, np.int64(MALFORMED)), np.int64(0))


@inner
def _write_time(out: Any, at: int, value_us: float) -> int:
    """[hot] A time from 0: in its shortest form where whole, nil where NIL, else a float."""
    if value_us < 0.0:
        return _write_optional(out, at, NIL)
    if value_us < 2.0**53 and value_us == np.floor(value_us):
        return _write_whole(out, at, np.int64(value_us))
    return _write_bytes(out, at, _FLOAT64, u64_from_f64(value_us), _8)


@compiled
def write_sample(out: Any, sample: Any, cells: int) -> int:
    """[hot] Encode a sample; returns its size in bytes."""
    out[0] = np.uint8(0x94 + cells)
    at = _write_whole(out, _1, sample.seq)
    at = _write_time(out, at, sample.t_us)
    at = _write_optional(out, at, sample.in_force)
    at = _write_time(out, at, sample.lag_us)
    for k in range(np.uint64(cells)):
        at = _write_bytes(out, at, _FLOAT64, u64_from_f64(sample.v_mv[k]), _8)
    return at


def flag_names(flags: int) -> list[str]:
    """The words for the flags set in an answer."""
    return [name for bit, name in FLAG_NAMES.items() if flags & bit]


def pack_sample(
    seq: int, t_us: float, in_force: int | None, lag_us: float | None, v_mv: list[float]
) -> bytes:
    """One sample as bytes, for clients written in Python."""
    return bytes(msgpack.packb([seq, t_us, in_force, lag_us, *v_mv]))


def unpack_answer(message: bytes) -> tuple[int | None, int, int, list[float]]:
    """``(seq, flags, service_nsec, currents in pA)`` of an answer's bytes.

    Raises
    ------
    WireError
        When the bytes are not an answer.
    """
    try:
        items = msgpack.unpackb(message)
    except (ValueError, TypeError, msgpack.exceptions.UnpackException) as fault:
        raise WireError(f"not an answer ({fault}): {message[:32].hex()}") from fault
    if not isinstance(items, list) or not _is_answer(items):
        raise WireError(f"not an answer (wrong items): {message[:32].hex()}")
    seq, flags, service_nsec, *i_pa = items
    return seq, flags, service_nsec, i_pa


def _is_answer(items: list[Any]) -> bool:
    """Whether decoded items are of an answer's number and kinds."""
    whole = [type(x) is int and x >= 0 for x in items[:3]]
    if whole[:1] == [False]:
        whole[0] = items[0] is None
    numbers = all(type(x) in (int, float) for x in items[3:])
    return len(items) >= 3 and all(whole) and numbers
