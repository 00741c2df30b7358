"""The samples of a journal by their place: a slice reads the blocks that it lies in."""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Iterator
from pathlib import Path
from typing import Any, NamedTuple, overload

import numpy as np

from .errors import JournalError
from .journalindex import Damaged, Disk, Index, Place, note_damage, payload_at


class Piece(NamedTuple):
    """Samples that are whole, and the place of the first."""

    position: int
    samples: np.ndarray


class Samples:
    """The samples of a journal, as a sequence: slices are structured arrays, a name is a column.

    Parameters
    ----------
    disk, index, dtype
        The file, its blocks, and the record.
    path : Path
        For messages.
    """

    def __init__(self, disk: Disk, index: Index, dtype: np.dtype[Any], path: Path) -> None:
        self.dtype = dtype
        self._disk, self._index, self._path = disk, index, path
        self._starts = [place.position for place in index.spans]
        self._kept: tuple[int, bytes] = (-1, b"")

    def __len__(self) -> int:
        return self._index.size

    @overload
    def __getitem__(self, at: int) -> np.void: ...
    @overload
    def __getitem__(self, at: slice | str) -> np.ndarray: ...
    def __getitem__(self, at: int | slice | str) -> Any:
        if isinstance(at, str):
            return self.column(at)
        if isinstance(at, slice):
            start, stop, step = at.indices(len(self))
            if step < 0:
                start, stop = stop + 1, start + 1
            found = self._between(start, stop)
            return found[::step]
        place = at + len(self) if at < 0 else at
        if not 0 <= place < len(self):
            raise IndexError(f"sample {at} of {len(self)}")
        return self._between(place, place + 1)[0]

    def column(self, name: str, start: int = 0, stop: int | None = None) -> np.ndarray:
        """One field of the samples from ``start`` on and before ``stop``.

        Raises
        ------
        JournalError
            If there is no such field, or one of the samples is damaged.
        """
        if name not in (self.dtype.names or ()):
            known = ", ".join(self.dtype.names or ())
            raise JournalError(f"{self._path}: no field {name!r} in its samples; it has {known}")
        start, stop, _ = slice(start, stop).indices(len(self))
        shape = (max(stop - start, 0), *self.dtype[name].shape)
        found = np.empty(shape, self.dtype[name].base)
        for place in self._over(start, stop):
            part = self._part(place, start, stop)
            at = max(place.position, start) - start
            found[at : at + len(part)] = part[name]
        return found

    def pieces(self, start: int = 0, stop: int | None = None) -> Iterator[Piece]:
        """What is whole of a stretch, block by block; damaged blocks are left out."""
        start, stop, _ = slice(start, stop).indices(len(self))
        for place in self._blocks(start, stop):
            try:
                yield Piece(max(place.position, start), self._part(place, start, stop))
            except JournalError:
                continue

    def _between(self, start: int, stop: int) -> np.ndarray:
        parts = [self._part(place, start, stop) for place in self._over(start, stop)]
        return np.concatenate(parts) if parts else np.empty(0, self.dtype)

    def _blocks(self, start: int, stop: int) -> Iterator[Place]:
        """The blocks in which a stretch lies."""
        for k in range(max(bisect_right(self._starts, start) - 1, 0), len(self._starts)):
            place = self._index.spans[k]
            if place.position >= stop:
                return
            if self._end(place) > start:
                yield place

    def _over(self, start: int, stop: int) -> Iterator[Place]:
        """The blocks that cover a stretch without a gap between them."""
        at = start
        for place in self._blocks(start, stop):
            if place.position > at:
                raise self._unreadable(at, place.position, "their block is missing")
            yield place
            at = self._end(place)
        if at < stop:
            raise self._unreadable(at, stop, "their block is missing")

    def _end(self, place: Place) -> int:
        return place.position + place.length // self.dtype.itemsize

    def _part(self, place: Place, start: int, stop: int) -> np.ndarray:
        """A copy of what a block holds of a stretch."""
        whole = np.frombuffer(self._payload(place), self.dtype)
        first = max(start - place.position, 0)
        return whole[first : stop - place.position].copy()

    def _payload(self, place: Place) -> bytes:
        """A block's bytes, checked; the last one is kept, as slices tend to follow on."""
        if self._kept[0] != place.offset:
            try:
                payload = payload_at(self._disk, place)
            except JournalError as fault:
                self._note(place, str(fault))
                raise self._unreadable(place.position, self._end(place), str(fault)) from None
            self._kept = place.offset, payload
        return self._kept[1]

    def _note(self, place: Place, reason: str) -> None:
        samples = self._end(place) - place.position
        note_damage(self._index, Damaged(place.offset, place.position, samples, reason))

    def _unreadable(self, start: int, stop: int, reason: str) -> JournalError:
        return JournalError(
            f"{self._path}: samples {start} to {stop - 1} cannot be read: {reason}. Read on "
            f"either side of them; '.samples.pieces()' gives what is whole"
        )
