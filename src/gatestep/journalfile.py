"""Reading a journal: samples, events, models, sweeps, and what was in force where.

Nothing is given out whose block failed its CRC. Opening reads headers, and a slice reads
the blocks that it lies in.
"""

from __future__ import annotations

import datetime
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise
from pathlib import Path
from typing import Any

import numpy as np

from .closing import Closing
from .errors import JournalError
from .journalbytes import Kind, dtype_from_json, unpack_json, unpack_model
from .journalfacts import JournalModel, model_of
from .journalindex import (
    Damaged,
    Disk,
    Place,
    Tail,
    build_index,
    note_damage,
    payload_at,
    read_header,
)
from .journalsamples import Samples
from .wire import REPEAT

__all__ = ["Damaged", "Event", "InForce", "JournalFile", "Sweep", "Tail", "open_journal"]

_EVENT_KEYS = ("kind", "position", "seq", "nsec")


@dataclass(frozen=True)
class Event:
    """Something that happened before the sample at ``position``, or with it."""

    kind: str
    position: int
    seq: int | None
    nsec: int
    fields: dict[str, Any]


@dataclass(frozen=True)
class Sweep:
    """A sweep of a plan: the samples from ``start`` on and before ``stop``."""

    index: int
    start: int
    stop: int
    complete: bool
    fields: dict[str, Any]


@dataclass(frozen=True)
class InForce:
    """A cell's model at one place; ``model`` is its id in the journal, None if not told."""

    cell: str
    model: int | None
    name: str | None
    gmax_ns: dict[str, float]
    reversal_mv: dict[str, float]


class JournalFile(Closing):
    """A journal, opened for reading; also a context manager.

    Attributes
    ----------
    path : Path
    header : dict
        What the first block says; see :mod:`gatestep.journalbytes`.
    closed : bool
        Whether the journal came to an orderly end.
    closing : dict or None
        What its last block says then.
    tail : Tail or None
        What was lost at its end.
    samples : Samples

    Raises
    ------
    JournalError
        If it is no journal, or its first block is damaged.
    """

    def __init__(self, path: str | Path) -> None:
        self.path = Path(path)
        self._disk = Disk(self.path)
        try:
            self.header = read_header(self._disk, self.path)
            dtype = dtype_from_json(self.header["sample_dtype"])
            self._check_header(dtype)
            self._index = build_index(self._disk, dtype.itemsize)
        except JournalError:
            self._disk.close()
            raise
        self.tail = self._index.tail
        self.closing = self._index.closing
        self.closed = self.closing is not None
        self.samples = Samples(self._disk, self._index, dtype, self.path)

    def close(self) -> None:
        """Give the file back; what was read stays."""
        self._disk.close()

    @property
    def bytes_read(self) -> int:
        """Bytes taken from the file so far."""
        return self._disk.bytes_read

    @property
    def size(self) -> int:
        """Bytes of the file when it was opened."""
        return self._disk.size

    @property
    def damaged(self) -> list[Damaged]:
        """The damaged stretches known so far, in order; :meth:`verify` finds all."""
        return sorted(self._index.damaged, key=lambda found: found.offset)

    def verify(self) -> list[Damaged]:
        """Check every block of the file; the damaged stretches."""
        for place in self._index.places:
            try:
                payload_at(self._disk, place)
            except JournalError as fault:
                samples = 0
                if place.kind == Kind.SAMPLES:
                    samples = place.length // self.samples.dtype.itemsize
                found = Damaged(place.offset, place.position, samples, str(fault))
                note_damage(self._index, found)
        return self.damaged

    @property
    def cells(self) -> list[str]:
        """Names of the cells, in the order of a sample's voltages."""
        return list(self.header["cells"])

    @property
    def interval_us(self) -> float:
        """The tick."""
        return float(self.header["rig_spec"]["loop"]["interval_us"])

    @property
    def start(self) -> datetime.datetime:
        """When the journal was begun."""
        return datetime.datetime.fromisoformat(self.header["start"]["time"])

    def time_of(self, nsec: int) -> datetime.datetime:
        """Wall time of a monotonic time in the journal, by the clocks at its start."""
        since = int(nsec) - int(self.header["start"]["monotonic_nsec"])
        try:
            return self.start + datetime.timedelta(microseconds=since / 1000)
        except OverflowError:
            raise JournalError(f"{self.path}: {nsec} ns is no time of this journal") from None

    @cached_property
    def events(self) -> tuple[Event, ...]:
        """All events, in order; those of damaged blocks are missing, see :attr:`damaged`."""
        found: list[Event] = []
        for place, payload in self._whole(Kind.EVENTS):
            try:
                found += [_event(data) for data in unpack_json(payload)]
            except (JournalError, LookupError, TypeError, ValueError, OverflowError) as fault:
                reason = f"not events: {fault}"
                note_damage(self._index, Damaged(place.offset, place.position, 0, reason))
        return tuple(found)

    @cached_property
    def models(self) -> dict[int, JournalModel]:
        """Models by their id; those of damaged blocks are missing."""
        found = {}
        for place, payload in self._whole(Kind.MODEL):
            try:
                model = model_of(*unpack_model(payload))
                found[model.id] = model
            except JournalError as fault:
                note_damage(self._index, Damaged(place.offset, place.position, 0, str(fault)))
        return found

    @cached_property
    def sweeps(self) -> tuple[Sweep, ...]:
        """The sweeps in the order in which they ran."""
        found: list[Sweep] = []
        begun: Event | None = None
        for event in self.events:
            if event.kind not in {"sweep_start", "sweep_end"} or not _was_done(event):
                continue
            if begun is not None:
                ends = event.kind == "sweep_end" and bool(event.fields.get("complete"))
                found.append(_sweep(begun, event.position, ends, len(self.samples)))
            begun = event if event.kind == "sweep_start" else None
        if begun is not None:
            found.append(_sweep(begun, len(self.samples), False, len(self.samples)))
        return tuple(found)

    def position_of(self, seq: int, after: int = 0) -> int:
        """Where the sample of a number is: the first that is no repeat.

        Parameters
        ----------
        seq : int
            The rig's number of the sample.
        after : int
            Where to begin; numbers start again whenever a rig takes hold.

        Raises
        ------
        JournalError
            If no sample from ``after`` on has it, or its block is damaged.
        """
        edges = [0, *(e.position for e in self.events if e.kind == "hold"), len(self.samples)]
        for start, stop in pairwise(edges):
            if stop > max(start, after):
                found = self._search(max(start, after), stop, seq)
                if found is not None:
                    return found
        raise JournalError(f"{self.path}: no sample {seq} from place {after} on that can be read")

    def in_force(self, position: int) -> tuple[InForce, ...]:
        """The model and parameters of each cell for the sample at a place."""
        state = [InForce(name, None, None, {}, {}) for name in self.cells]
        for event in self.events:
            if event.position > position:
                break
            if event.kind in {"in_force", "swap", "set"} and _was_done(event):
                k = self._cell(event.fields.get("cell"))
                if k is not None:
                    state[k] = self._changed(state[k], event)
        return tuple(state)

    def _search(self, start: int, stop: int, seq: int) -> int | None:
        """The place of a number in one session, where numbers only rise."""
        while stop - start > 0:
            piece = self._fresh_from(start + (stop - start) // 2, stop)
            if piece is None:
                stop = start + (stop - start) // 2
                continue
            at, numbers = piece
            if numbers[0] > seq:
                stop = start + (stop - start) // 2
            elif numbers[-1] < seq:
                start = int(at[-1]) + 1
            else:
                k = int(np.searchsorted(numbers, seq))
                return int(at[k]) if numbers[k] == seq else None
        return None

    def _fresh_from(self, start: int, stop: int) -> tuple[np.ndarray, np.ndarray] | None:
        """Places and numbers of the first block's samples that are no repeats."""
        for piece in self.samples.pieces(start, stop):
            at = np.flatnonzero(piece.samples["flags"] & REPEAT == 0)
            if len(at):
                return piece.position + at, piece.samples["seq"][at]
        return None

    def _whole(self, kind: Kind) -> Iterator[tuple[Place, bytes]]:
        """The blocks of a kind that pass their checks; the others are noted."""
        for place in self._index.of(kind):
            try:
                yield place, payload_at(self._disk, place)
            except JournalError as fault:
                note_damage(self._index, Damaged(place.offset, place.position, 0, str(fault)))

    def _cell(self, cell: Any) -> int | None:
        if cell in self.cells:
            return self.cells.index(cell)
        return cell if isinstance(cell, int) and 0 <= cell < len(self.cells) else None

    def _changed(self, was: InForce, event: Event) -> InForce:
        """What an event makes of a cell's model."""
        change = self._set if event.kind == "set" else self._swapped
        try:
            return change(was, event.fields)
        except (LookupError, TypeError, ValueError) as fault:
            raise JournalError(
                f"{self.path}: the event {event.kind} before sample {event.position} "
                f"cannot be read: {fault}"
            ) from None

    def _swapped(self, was: InForce, fields: dict[str, Any]) -> InForce:
        number = fields.get("model")
        model = self.models.get(number) if isinstance(number, int) else None
        if model is None:
            return InForce(was.cell, None, fields.get("name"), {}, {})
        named = model.conductances
        gmax_ns = fields.get("gmax_ns") or model.gmax_ns
        reversal_mv = fields.get("reversal_mv") or model.reversal_mv
        gmax = dict(zip(named, gmax_ns, strict=False))
        return InForce(
            was.cell, number, model.name, gmax, dict(zip(named, reversal_mv, strict=False))
        )

    def _set(self, was: InForce, fields: dict[str, Any]) -> InForce:
        name = str(fields.get("key", "")).partition(".")[0]
        new = {name: float(fields["value"])}
        if fields.get("which") == "gmax_ns":
            return InForce(was.cell, was.model, was.name, {**was.gmax_ns, **new}, was.reversal_mv)
        return InForce(was.cell, was.model, was.name, was.gmax_ns, {**was.reversal_mv, **new})

    def _check_header(self, dtype: np.dtype[Any]) -> None:
        """Refuse a header that says what no writer would."""
        header = self.header
        try:
            whole = self.start.tzinfo is not None and 0 < self.interval_us < np.inf
            int(header["start"]["monotonic_nsec"])
            whole = whole and isinstance(header["rig"], dict) and isinstance(header["cells"], list)
            whole = whole and all(isinstance(name, str) for name in header["cells"])
            shapes = {dtype[name].shape for name in ("v_mv", "i_pa", "stimulus_pa")}
            whole = whole and shapes == {(len(header["cells"]),)}
        except (LookupError, TypeError, ValueError, OverflowError) as fault:
            raise JournalError(f"{self.path}: its header cannot be read: {fault}") from None
        if not whole:
            raise JournalError(
                f"{self.path}: its header cannot be read: start, tick, rig, cells or sample_dtype "
                "is not as the format has it"
            )


def open_journal(path: str | Path) -> JournalFile:
    """Open a journal for reading, whole, torn or still being written.

    Raises
    ------
    JournalError
        If it is no journal, or its first block is damaged.
    """
    return JournalFile(path)


def _event(data: Any) -> Event:
    if not isinstance(data, dict):
        raise TypeError("an event that is no object")
    fields = {key: value for key, value in data.items() if key not in _EVENT_KEYS}
    seq = data["seq"]
    number = None if seq is None else int(seq)
    return Event(str(data["kind"]), int(data["position"]), number, int(data["nsec"]), fields)


def _was_done(event: Event) -> bool:
    """Whether an order was carried out; what is no order happened."""
    return bool(event.fields.get("outcome", "done") == "done")


def _sweep(begun: Event, stop: int, complete: bool, size: int) -> Sweep:
    index = begun.fields.get("sweep")
    number = index if isinstance(index, int) else -1
    return Sweep(number, min(begun.position, size), min(stop, size), complete, begun.fields)
