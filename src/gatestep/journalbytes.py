r"""The bytes of a journal. No files are opened here; this text is the format's description.

A journal is a sequence of blocks, and only ever grows. Everything is little-endian.
A block is a header of 32 bytes, its payload, and zero bytes up to a multiple of 8::

    offset  type    field
       0    4 bytes magic     b"GSJ\x1a"
       4    u16     kind      1 HEADER, 2 SAMPLES, 3 EVENTS, 4 MODEL, 5 CLOSE
       6    u16     version   of this format, 1
       8    u32     length    of the payload, without the padding
      12    u32     crc       CRC-32 of the payload
      16    u64     position  sample records in the blocks before this one
      24    u32     serial    0, 1, 2, ...: the block's place in the file
      28    u32     check     CRC-32 of the 28 bytes before it

CRC-32 is that of zlib and PNG: ``zlib.crc32``. A reader skips kinds that it does not
know. No JSON of a journal holds the magic, for JSON escapes the character 0x1a. JSON is
UTF-8; a float is written in the fewest digits that give it back exactly; ``NaN``,
``Infinity`` and ``-Infinity`` may stand for numbers, as Python's ``json`` has them.

HEADER is the first block and JSON: ``format`` (1), ``program`` {name, version},
``versions`` {package: version}, ``machine`` {architecture, system, processor}, ``host``
(what was set up for the loop), ``start`` {time: ISO 8601 with its zone, monotonic_nsec:
the clock of every ``nsec`` below at that time}, ``rig`` {path, text, sha256: of the text},
``rig_spec`` (what the rig file says, defaults filled in), ``cells`` [name, ...] and
``sample_dtype``: [[field, type] or [field, type, [n]], ...] as numpy writes a dtype.

SAMPLES holds whole sample records, one after another without padding, as
``sample_dtype`` says; with n cells a record is 56 + 24·n bytes::

    seq           i8     the rig's sequence number
    t_us          f8     the rig's clock at the sample
    in_force      i8     seq of the answer that was in force, -1 if none was
    lag_us        f8     from that answer's sample to its current, -1 if not known
    nsec          i8     monotonic time at which the sample arrived
    service_nsec  i8     from its arrival until its answer was ready
    flags         i8     of the answer: 1 live, 2 clipped, 4 late, 8 tripped, 16 gap, 32 repeat
    v_mv          n·f8   measured voltages
    i_pa          n·f8   currents answered
    stimulus_pa   n·f8   the stimulus's share in them, before the limits

A record with the flag ``repeat`` is an answer given again; there was no step.

EVENTS is a JSON array of objects in the order of what happened. Each has ``kind``,
``position`` (sample records before it; it acted upon the one at that index), ``seq``
(the newest sample's, or null), ``nsec``, and the fields of its kind. An EVENTS block
stands before the samples that it acts upon, so a journal that was cut off may tell of
events beyond its last sample.

MODEL is a u32, the length of a JSON object, the object, and from there to the payload's
end a zlib stream of float64: the model's table, ``rows`` by ``columns``. The object has
``id``, ``name``, ``path``, ``text`` (the model file), ``sha256`` (of the text),
``table_sha256``, ``rows``, ``columns``, ``step_mv``, ``conductances`` and ``gates`` (names
in order), ``reports`` (each gate's measured errors), ``bank`` (what the kernel needs beside
the table: each field's values, trailing zeros left out) and ``layout``, SHA-256 of the
bank's dtype as text. The stream is empty where tables are not recorded.

CLOSE is JSON and the last block of a journal that came to an orderly end: ``nsec``,
``samples``, ``counters`` (the loop's own), ``queue_high_water_bytes``,
``dropped_samples``, ``dropped_blocks`` and ``index`` {offset, kind, length, position: a
list each, of all blocks before this one}, with which a reader need not walk through the
blocks. It is the last magic in the file, and its block ends where the file does.

An example, an EVENTS block with ``[]`` for payload, block 7, after 3 samples::

    47 53 4a 1a  03 00 01 00  02 00 00 00  29 bb 4c 0d
    03 00 00 00  00 00 00 00  07 00 00 00  b5 a8 c7 13
    5b 5d 00 00  00 00 00 00
"""

from __future__ import annotations

import json
import struct
import zlib
from collections.abc import Iterator
from dataclasses import dataclass
from enum import IntEnum
from typing import Any, Protocol

import numpy as np

from .errors import JournalError

MAGIC = b"GSJ\x1a"
FORMAT = 1
HEADER_SIZE = 32
ALIGNMENT = 8
LARGEST = 2**32 - 1
"""Bytes that a payload can have at most."""

_HEADER = struct.Struct("<4sHHIIQI")
_CHECK = struct.Struct("<I")
_CHUNK = 1 << 20


class Kind(IntEnum):
    """What a block holds."""

    HEADER = 1
    SAMPLES = 2
    EVENTS = 3
    MODEL = 4
    CLOSE = 5


@dataclass(frozen=True)
class Block:
    """A block's header, and where it lies."""

    offset: int
    kind: int
    version: int
    length: int
    crc: int
    position: int
    serial: int

    @property
    def payload(self) -> int:
        """Where the payload begins."""
        return self.offset + HEADER_SIZE

    @property
    def payload_end(self) -> int:
        """Where the payload ends and the padding begins."""
        return self.payload + self.length

    @property
    def end(self) -> int:
        """Where the next block begins."""
        return self.payload_end + -self.length % ALIGNMENT


@dataclass(frozen=True)
class Hole:
    """Bytes in which no block begins, and the header that was found there, if one was."""

    offset: int
    end: int
    torn: Block | None


class Source(Protocol):
    """Bytes that can be read at any place."""

    size: int

    def read(self, offset: int, count: int) -> bytes:
        """``count`` bytes at an offset, fewer where the file ends before."""


def sample_dtype(cells: int) -> np.dtype[Any]:
    """The packed record of one sample and its answer."""
    numbers = ("seq", "t_us", "in_force", "lag_us", "nsec", "service_nsec", "flags")
    fields: list[Any] = [(name, "<f8" if name.endswith("_us") else "<i8") for name in numbers]
    fields += [(name, "<f8", (cells,)) for name in ("v_mv", "i_pa", "stimulus_pa")]
    return np.dtype(fields)


def dtype_as_json(dtype: np.dtype[Any]) -> list[Any]:
    """A dtype for the header block."""
    return [list(field) for field in dtype.descr]


def dtype_from_json(described: Any) -> np.dtype[Any]:
    """The dtype that a header block states; ``dtype_as_json``'s inverse.

    Raises
    ------
    JournalError
        If it is no dtype, or lacks a field that a sample record has.
    """
    try:
        dtype = np.dtype([(f[0], f[1], *(tuple(shape) for shape in f[2:])) for f in described])
    except (TypeError, ValueError, LookupError, OverflowError, SyntaxError) as fault:
        raise JournalError(f"sample_dtype in its header is not a dtype: {fault}") from None
    missing = [name for name in sample_dtype(1).names or () if name not in (dtype.names or ())]
    if missing or dtype.hasobject or not 0 < dtype.itemsize <= _CHUNK:
        raise JournalError(f"sample_dtype in its header lacks {', '.join(missing) or 'a size'}")
    return dtype


def pack_block(kind: Kind, payload: bytes, position: int, serial: int) -> bytes:
    """One block, header and padding included.

    Raises
    ------
    JournalError
        If the payload is longer than a block can be.
    """
    size = len(payload)
    if size > LARGEST:
        raise JournalError(f"a block of {size} bytes; a journal's block has at most {LARGEST}")
    crc = zlib.crc32(payload)
    head = _HEADER.pack(MAGIC, kind, FORMAT, size, crc, position, serial)
    return b"".join((head, _CHECK.pack(zlib.crc32(head)), payload, bytes(-size % ALIGNMENT)))


def unpack_header(header: bytes, offset: int) -> Block | None:
    """The header in 32 bytes, or None where they are none."""
    if len(header) < HEADER_SIZE or header[:4] != MAGIC:
        return None
    head = header[: _HEADER.size]
    if _CHECK.unpack_from(header, _HEADER.size)[0] != zlib.crc32(head):
        return None
    _, kind, version, length, crc, position, serial = _HEADER.unpack(head)
    return Block(offset, kind, version, length, crc, position, serial)


def read_payload(source: Source, block: Block) -> bytes:
    """A block's payload, checked.

    Raises
    ------
    JournalError
        If its CRC is not the one in its header, or the file ends before.
    """
    payload = source.read(block.payload, block.length)
    if len(payload) != block.length:
        raise JournalError(f"the block at byte {block.offset} is cut off")
    if zlib.crc32(payload) != block.crc:
        raise JournalError(f"the block at byte {block.offset} fails its CRC")
    return payload


def walk(source: Source) -> Iterator[Block | Hole]:
    """All blocks of a file by their headers, and what lies between them that is none.

    Payloads are not read, save where a header is damaged: the next one is searched for.
    """
    at = 0
    while at < source.size:
        block = unpack_header(source.read(at, HEADER_SIZE), at)
        if block is not None and block.payload_end <= source.size:
            yield block
            at = block.end
        else:
            found = find_block(source, at + 1)
            yield Hole(at, found, block)
            at = found


def find_block(source: Source, start: int) -> int:
    """Where the next whole block begins at or after ``start``; the file's end if none does."""
    at = start
    while at < source.size:
        chunk = source.read(at, _CHUNK + HEADER_SIZE - 1)
        found = chunk.find(MAGIC)
        while 0 <= found < _CHUNK:
            block = unpack_header(chunk[found : found + HEADER_SIZE], at + found)
            if block is not None and block.payload_end <= source.size:
                return block.offset
            found = chunk.find(MAGIC, found + 1)
        at += _CHUNK
    return source.size


def find_close(source: Source) -> Block | None:
    """The CLOSE block with which a whole file ends, or None."""
    end = source.size
    size = 4096
    while True:
        start = max(end - size, 0)
        tail = source.read(start, end - start)
        found = tail.rfind(MAGIC)
        if found >= 0:
            block = unpack_header(tail[found : found + HEADER_SIZE], start + found)
            whole = block is not None and block.kind == Kind.CLOSE and block.end == end
            return block if whole else None
        # JSON has no control characters: anything else is no closing block's payload.
        text = tail[: len(tail) - ALIGNMENT]
        if start == 0 or min(text, default=0) < 0x20:
            return None
        size *= 8


def pack_json(data: Any) -> bytes:
    """JSON as a journal has it; arrays and numbers of numpy are written plainly."""
    text = json.dumps(data, ensure_ascii=False, separators=(",", ":"), default=_plain)
    return text.encode("utf-8", "backslashreplace")


def unpack_json(payload: bytes) -> Any:
    """What a JSON payload says.

    Raises
    ------
    JournalError
        If it is not JSON.
    """
    try:
        return json.loads(payload.decode("utf-8"))
    except (ValueError, RecursionError) as fault:
        raise JournalError(f"a block that should be JSON is not: {fault}") from None


def _plain(value: Any) -> Any:
    return value.tolist() if hasattr(value, "tolist") else str(value)


def pack_model(info: dict[str, Any], table: bytes | None) -> bytes:
    """The payload of a MODEL block; ``table`` is None where tables are not recorded."""
    text = pack_json(info)
    # Level 1: the writer has other work, and a table shrinks little more at a higher one.
    packed = b"" if table is None else zlib.compress(table, 1)
    return b"".join((_CHECK.pack(len(text)), text, packed))


def unpack_model(payload: bytes) -> tuple[dict[str, Any], bytes]:
    """What a MODEL block says, and its table still compressed.

    Raises
    ------
    JournalError
        If it is cut off or says nothing.
    """
    size = _CHECK.unpack_from(payload)[0] if len(payload) >= _CHECK.size else LARGEST
    if _CHECK.size + size > len(payload):
        raise JournalError("a MODEL block is shorter than it says")
    info = unpack_json(payload[_CHECK.size : _CHECK.size + size])
    if not isinstance(info, dict):
        raise JournalError("a MODEL block does not hold an object")
    return info, payload[_CHECK.size + size :]


def unpack_table(packed: bytes, values: int) -> np.ndarray:
    """A MODEL block's table, flat.

    Raises
    ------
    JournalError
        If it does not hold that many values.
    """
    try:
        data = zlib.decompressobj().decompress(packed, 8 * values + 1)
    except (zlib.error, MemoryError, OverflowError) as fault:
        raise JournalError(f"a MODEL block's table cannot be unpacked: {fault}") from None
    if len(data) != 8 * values:
        raise JournalError(f"a MODEL block's table does not hold {values} values")
    return np.frombuffer(data, "<f8")
