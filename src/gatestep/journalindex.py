"""Where a journal's blocks lie, and what of the file is lost.

A journal that was closed names its blocks itself; any other is walked through, header by
header. Payloads are read only when they are asked for, and checked each time.
"""

from __future__ import annotations

import threading
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any, NamedTuple

from .errors import JournalError
from .journalbytes import (
    FORMAT,
    HEADER_SIZE,
    Block,
    Hole,
    Kind,
    find_close,
    read_payload,
    unpack_header,
    unpack_json,
    walk,
)

_COLUMNS = ("offset", "kind", "length", "position")


class Place(NamedTuple):
    """Where a block lies, and what it holds."""

    offset: int
    kind: int
    length: int
    position: int


@dataclass(frozen=True)
class Damaged:
    """A stretch that cannot be read: where it begins, and which samples were in it."""

    offset: int
    position: int
    samples: int
    reason: str


@dataclass(frozen=True)
class Tail:
    """What a journal that was cut off lost at its end.

    ``samples`` counts those that the torn block's header promises; None where no header
    was left to tell.
    """

    offset: int
    bytes: int
    reason: str
    samples: int | None = None


class Disk:
    """A file that can be read at any place, by any thread.

    Not mapped into memory: a file that is cut short while it is read is then an error
    and not the end of the process.

    Raises
    ------
    JournalError
        If it cannot be opened, or later cannot be read.
    """

    def __init__(self, path: Path) -> None:
        self._path, self._lock = path, threading.Lock()
        self.bytes_read = self.reads = 0
        try:
            self._file = path.open("rb", buffering=0)
            self.size = self._file.seek(0, 2)
        except (OSError, ValueError) as fault:
            reason = getattr(fault, "strerror", None) or fault
            raise JournalError(f"{path}: cannot be opened: {reason}") from None

    def read(self, offset: int, count: int) -> bytes:
        """``count`` bytes at an offset, fewer where the file ends before."""
        parts: list[bytes] = []
        try:
            with self._lock:
                self._file.seek(offset)
                while count > 0 and (part := self._file.read(min(count, self.size))):
                    parts.append(part)
                    count -= len(part)
        except (OSError, ValueError) as fault:
            reason = getattr(fault, "strerror", None) or fault
            raise JournalError(f"{self._path}: cannot be read: {reason}") from None
        found = parts[0] if len(parts) == 1 else b"".join(parts)
        self.bytes_read += len(found)
        self.reads += 1
        return found

    def close(self) -> None:
        """Give the file back."""
        self._file.close()


@dataclass
class Index:
    """The blocks of a journal.

    ``places`` holds those that can be reached, in order; ``size`` counts the samples,
    those that are lost between others included.
    """

    places: list[Place]
    damaged: list[Damaged]
    tail: Tail | None
    closing: dict[str, Any] | None
    size: int = 0
    spans: list[Place] = field(default_factory=list)

    def of(self, kind: Kind) -> list[Place]:
        """The blocks of a kind."""
        return [place for place in self.places if place.kind == kind]


def note_damage(index: Index, found: Damaged) -> None:
    """Add a damaged stretch to those known, once."""
    if found.offset not in {known.offset for known in index.damaged}:
        index.damaged.append(found)


def payload_at(disk: Disk, place: Place) -> bytes:
    """A block's payload, checked against its header, and that against its place.

    Raises
    ------
    JournalError
        If either is damaged.
    """
    block = unpack_header(disk.read(place.offset, HEADER_SIZE), place.offset)
    if block is None or _place(block) != place:
        raise JournalError(f"the header at byte {place.offset} is damaged")
    return read_payload(disk, block)


def read_header(disk: Disk, path: Path) -> dict[str, Any]:
    """What the first block says.

    Raises
    ------
    JournalError
        If the file is no journal, one of another format, or damaged right there.
    """
    first = disk.read(0, HEADER_SIZE)
    block = unpack_header(first, 0)
    if block is None or block.kind != Kind.HEADER:
        cut = "it is empty" if not first else "it does not begin with a journal's header"
        raise JournalError(f"{path}: not a journal that can be read: {cut}")
    if block.version != FORMAT:
        raise JournalError(
            f"{path}: journal format {block.version}; this gatestep reads format {FORMAT}"
        )
    try:
        header = unpack_json(read_payload(disk, block))
    except JournalError as fault:
        raise JournalError(f"{path}: {fault}; without its header it cannot be read") from None
    needed = ("start", "rig", "rig_spec", "cells", "sample_dtype")
    missing = [key for key in needed if not isinstance(header, dict) or key not in header]
    if missing:
        raise JournalError(f"{path}: its header lacks {', '.join(missing)}")
    return dict(header)


def build_index(disk: Disk, itemsize: int) -> Index:
    """Find the blocks, by the closing block's index or by walking through them."""
    index = _from_close(disk) or _from_walk(disk, itemsize)
    end = 0
    for place in index.of(Kind.SAMPLES):
        if place.position < end or place.length % itemsize:
            index.damaged.append(Damaged(place.offset, place.position, 0, "a block out of place"))
            continue
        index.spans.append(place)
        end = place.position + place.length // itemsize
    index.size = max([end, *(place.position for place in index.places)])
    return index


def _place(block: Block) -> Place:
    return Place(block.offset, block.kind, block.length, block.position)


def _from_close(disk: Disk) -> Index | None:
    """The index that a closed journal ends with; None where there is none to go by."""
    block = find_close(disk)
    if block is None:
        return None
    try:
        closing = unpack_json(read_payload(disk, block))
        columns = [closing["index"][name] for name in _COLUMNS]
        places = [Place(*row) for row in zip(*columns, strict=True)]
    except (JournalError, LookupError, TypeError, ValueError):
        return None
    whole = all(type(value) is int and value >= 0 for place in places for value in place)
    # Each block must begin where the one before ended, or it is not this file's index.
    ends = [Block(p.offset, 0, 0, p.length, 0, 0, 0).end for p in places] if whole else [-1]
    starts = [place.offset for place in places]
    if not whole or [0, *ends] != [*starts, block.offset]:
        return None
    return Index([*places, _place(block)], [], None, dict(closing))


def _from_walk(disk: Disk, itemsize: int) -> Index:
    """The blocks by their headers; at the end, those whose payloads are whole as well."""
    found = list(walk(disk))
    last = found.pop() if found and isinstance(found[-1], Hole) else None
    tail = _torn(last, itemsize) if isinstance(last, Hole) else None
    damaged: list[Damaged] = []
    blocks = list(_in_order(found, damaged, itemsize))
    # What a power cut kept from the disk is at the end, and blocks written together need
    # not have reached it in their order.
    while len(blocks) > 1 and not _is_whole(disk, blocks[-1]):
        tail = _longer(tail, blocks.pop(), disk.size, itemsize)
    damaged = [hole for hole in damaged if tail is None or hole.offset < tail.offset]
    closing = None
    if blocks and blocks[-1].kind == Kind.CLOSE and tail is None:
        closing = unpack_json(read_payload(disk, blocks[-1]))
    known = closing if isinstance(closing, dict) else None
    return Index([_place(block) for block in blocks], damaged, tail, known)


def _in_order(
    found: Iterable[Block | Hole], damaged: list[Damaged], itemsize: int
) -> Iterator[Block]:
    """Blocks that follow on each other; what is missing between them goes to ``damaged``."""
    position, serial, hole = 0, 0, None
    for block in found:
        if isinstance(block, Hole):
            hole = hole or block
            continue
        if block.serial < serial or block.position < position:
            damaged.append(Damaged(block.offset, block.position, 0, "a block out of place"))
            continue
        lost = block.position - position
        if hole is not None:
            reason = f"{block.offset - hole.offset} bytes hold no block"
            damaged.append(Damaged(hole.offset, position, lost, reason))
        elif block.serial > serial or lost:
            damaged.append(Damaged(block.offset, position, lost, "blocks are missing before it"))
        yield block
        hole, serial = None, block.serial + 1
        position = block.position + _samples_in(block, itemsize)


def _samples_in(block: Block, itemsize: int) -> int:
    return block.length // itemsize if block.kind == Kind.SAMPLES else 0


def _is_whole(disk: Disk, block: Block) -> bool:
    try:
        read_payload(disk, block)
    except JournalError:
        return False
    return True


def _torn(hole: Hole, itemsize: int) -> Tail:
    """The bytes after the last block, as what was lost."""
    size = hole.end - hole.offset
    if hole.torn is None:
        return Tail(hole.offset, size, "no block begins there")
    reason = f"a block of {hole.torn.end - hole.offset} bytes was being written"
    return Tail(hole.offset, size, reason, _samples_in(hole.torn, itemsize))


def _longer(tail: Tail | None, block: Block, end: int, itemsize: int) -> Tail:
    """A tail to which one more block belongs."""
    samples: int | None = _samples_in(block, itemsize)
    if tail is not None:
        samples = None if tail.samples is None else tail.samples + (samples or 0)
    return Tail(block.offset, end - block.offset, "a block fails its CRC", samples)
