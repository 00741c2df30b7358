"""What waits for the journal's writer, bounded in bytes; where it is full, what is left out.

No lock is taken here: whoever calls holds the journal's.
"""

from __future__ import annotations

import threading
from collections import deque
from typing import NamedTuple

from .journalentries import only_events
from .library import LoadedModel
from .tables import Tables

_BATCH_BYTES = 4 << 20


class Dropped(NamedTuple):
    """Samples that found no room, at one place; ``newest`` is the last one's number."""

    samples: int
    blocks: int
    newest: int | None


class Note(NamedTuple):
    """An event of a control thread; ``fields`` is JSON."""

    kind: str
    nsec: int
    fields: bytes


class Expected(NamedTuple):
    """What an order means; ``fields`` is JSON."""

    number: int
    kind: str
    fields: bytes


class Model(NamedTuple):
    """A model that is to be in the journal."""

    id: int
    model: LoadedModel
    tables: Tables


Item = bytes | Dropped | Note | Expected | Model | threading.Event
"""Bytes are a block of the loop's log; an event is set when what was before it is written."""
Batch = list[tuple[Item, int]]


class Waiting:
    """The queue, and the account of what it had no room for.

    Parameters
    ----------
    limit : int
        Bytes beyond which samples are left out.

    Attributes
    ----------
    queued, high_water : int
        Bytes that wait now, and that ever waited at once.
    dropped_samples, dropped_blocks : int
    """

    def __init__(self, limit: int) -> None:
        self.queued = self.high_water = 0
        self.dropped_samples = self.dropped_blocks = 0
        self._limit = limit
        self._items: deque[tuple[Item, int]] = deque()
        self._missing = Dropped(0, 0, None)

    def __bool__(self) -> bool:
        return bool(self._items)

    def has_room(self, size: int) -> bool:
        """Whether so many bytes more are within the limit."""
        return self.queued + size <= self._limit

    def put(self, item: Item, size: int) -> None:
        """Queue an item behind the account of what is missing before it."""
        self.put_missing()
        self._items.append((item, size))
        self.queued += size
        self.high_water = max(self.high_water, self.queued)

    def put_missing(self) -> None:
        """Queue the account of what was left out since the last item."""
        if self._missing.blocks:
            self._items.append((self._missing, 0))
            self._missing = Dropped(0, 0, None)

    def leave_out(self, block: bytes, keep_events: bool) -> int:
        """Leave out a block's samples, but not what else it tells; how many they were."""
        rest, samples, newest = only_events(block)
        self.dropped_samples += samples
        self.dropped_blocks += 1
        if keep_events:
            was = self._missing
            newest = was.newest if newest is None else newest
            self._missing = Dropped(was.samples + samples, was.blocks + 1, newest)
            # Events are few; if they alone fill the queue again, they are left out too.
            if rest is not None and self.queued < 2 * self._limit:
                self.put(rest, len(rest))
        return samples

    def batch(self) -> Batch:
        """Some of what waits; its bytes still count until :meth:`written`."""
        taken: Batch = []
        size = 0
        while self._items and size < _BATCH_BYTES:
            taken.append(self._items.popleft())
            size += taken[-1][1]
        return taken

    def written(self, batch: Batch) -> None:
        """A batch has been written: there is room for others."""
        self.queued -= sum(size for _, size in batch)

    def give_up(self, unwritten: int) -> tuple[Batch, int, int]:
        """Empty the queue for good.

        Returns what waited, the samples that the file has to tell of, those of them that
        were counted before included, and the blocks that they were in.

        Parameters
        ----------
        unwritten : int
            Samples that were taken out and not written.
        """
        self.put_missing()
        waiting = list(self._items)
        blocks = [item for item, _ in waiting if isinstance(item, bytes)]
        lost = unwritten + sum(only_events(block)[1] for block in blocks)
        # Counted when they were left out, but the file does not say so yet.
        untold = sum(item.samples for item, _ in waiting if isinstance(item, Dropped))
        self.dropped_samples += lost
        self.dropped_blocks += len(blocks)
        self._items.clear()
        self.queued = 0
        return waiting, lost + untold, len(blocks)
