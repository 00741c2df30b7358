"""What a journal makes of the loop's log: sample records, and events in their order.

Arrays of log entries become arrays of samples without a loop over them in Python: this
runs beside the hot loop, at its rate. Only what is rare (an order, a trip, a gap, a run
of late samples) is looked at one by one.
"""

from __future__ import annotations

import struct
from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np

from .journalbytes import sample_dtype
from .loop import ENTRY, Entry
from .orders import Order, Outcome
from .states import FAULT_TEXTS, Fault
from .tick import LOOP
from .wire import GAP, LATE, NIL, REPEAT

Event = dict[str, Any]

_LOST = struct.Struct("=q")
assert LOOP.fields is not None, "LOOP is a structured dtype"
_LOST_AT = int(LOOP.fields["records_lost"][1])
_SAMPLE, _ORDER = int(Entry.SAMPLE), int(Entry.ORDER)
_TRIP, _HOLD, _RELEASE = int(Entry.TRIP), int(Entry.HOLD), int(Entry.RELEASE)
_NEVER = -1
_COPIED = ("seq", "t_us", "in_force", "lag_us", "nsec", "service_nsec", "flags")
_OF_CELLS = ("v_mv", "i_pa", "stimulus_pa")


class Entries:
    """The log so far, as the journal counts it.

    Parameters
    ----------
    cells : int
        Voltages of a sample.

    Attributes
    ----------
    position : int
        Sample records so far.
    """

    def __init__(self, cells: int) -> None:
        self.position = 0
        self._cells = cells
        self._dtype = sample_dtype(cells)
        self._loop = bytes(LOOP.itemsize)
        self._lost = 0
        self._seq: int | None = None
        self._newest = _NEVER  # the newest sample that was no repeat, where it is known
        self._expected: dict[int, tuple[str, dict[str, Any]]] = {}
        self._sweeps: dict[int, Any] = {}  # those that play, by their order
        self._ending: dict[int, Any] = {}  # the sweep of an order that began its stimulus
        self._samples: list[np.ndarray] = []
        self._events: list[Event] = []

    def expect(self, number: int, kind: str, fields: Mapping[str, Any]) -> None:
        """[writer] Remember what an order means until the log tells its outcome."""
        self._expected[number] = kind, dict(fields)
        if kind == "sweep_start":
            self._ending[number] = fields.get("sweep")

    def note(self, kind: str, nsec: int, fields: Mapping[str, Any]) -> None:
        """[writer] An event of another thread, here."""
        self._events.append(self._event(kind, self.position, self._seq, nsec, fields))

    def skip(self, samples: int, newest: int | None) -> None:
        """[writer] Samples that the journal lacks here; ``newest`` was the last's number."""
        if samples:
            self._newest = _NEVER if newest is None else newest
            self._seq = newest

    def take(self, blocks: list[bytes]) -> None:
        """[writer] Take in blocks of the loop's log, each its ``LOOP`` record and entries."""
        together: list[memoryview] = []
        for block in blocks:
            lost = _LOST.unpack_from(block, _LOST_AT)[0]
            if lost != self._lost:
                self._take_entries(together)
                together = []
                self._note_lost(lost, block)
            together.append(memoryview(block)[LOOP.itemsize :])
        self._take_entries(together)
        if blocks:
            self._loop = blocks[-1][: LOOP.itemsize]

    def give(self) -> tuple[list[np.ndarray], list[Event]]:
        """[writer] The samples and events since this was last called."""
        given = self._samples, self._events
        self._samples, self._events = [], []
        return given

    def counters(self) -> dict[str, Any]:
        """[writer] The loop's record as it last came."""
        loop = np.frombuffer(self._loop, LOOP)[0]
        names = LOOP.names or ()
        start = names.index("answered")
        return {name: int(loop[name]) for name in names[start:]}

    def _note_lost(self, lost: int, block: bytes) -> None:
        """[writer] The loop's log overflowed between the last block and this one."""
        entries = np.frombuffer(block, ENTRY, offset=LOOP.itemsize)
        nsec = int(entries["nsec"][0]) if len(entries) else 0
        fields = {"entries": lost - self._lost}
        self._events.append(self._event("lost", self.position, self._seq, nsec, fields))
        self._lost = lost
        self._newest = _NEVER

    def _take_entries(self, parts: list[memoryview]) -> None:
        """[writer] Take in entries between which none is missing."""
        entries = np.frombuffer(b"".join(parts), ENTRY)
        if not len(entries):
            return
        sampled = entries["kind"] == _SAMPLE
        others = np.flatnonzero(~sampled)
        before = self.position + np.cumsum(sampled) - sampled
        samples = self._records(entries[sampled] if len(others) else entries)
        found = list(self._of_samples(samples))
        found += [self._of_entry(entries[i], int(before[i])) for i in others]
        # What was done before a sample stands before what the sample itself showed.
        found.sort(key=lambda event: (event["position"], event["kind"] in {"gap", "late"}))
        self._events += found
        self._follow(samples, entries, others)

    def _records(self, entries: np.ndarray) -> np.ndarray:
        """[writer] Entries of samples as the journal's records."""
        records = np.empty(len(entries), self._dtype)
        for name in _COPIED:
            records[name] = entries[name]
        for name in _OF_CELLS:
            records[name] = entries[name][:, : self._cells]
        return records

    def _follow(self, samples: np.ndarray, entries: np.ndarray, others: np.ndarray) -> None:
        """[writer] Count the samples, and know the newest."""
        self.position += len(samples)
        if len(samples):
            self._samples.append(samples)
            self._seq = int(samples["seq"][-1])
            fresh = np.flatnonzero(samples["flags"] & REPEAT == 0)
            if len(fresh):
                self._newest = int(samples["seq"][fresh[-1]])
        if len(others) and others[-1] == len(entries) - 1:
            seq = int(entries["seq"][-1])
            self._seq = None if seq == NIL or entries["kind"][-1] == _RELEASE else seq

    def _of_samples(self, samples: np.ndarray) -> Iterator[Event]:
        """[writer] The gaps and the runs of late samples; a repeat tells neither."""
        flags = samples["flags"]
        if not np.any(flags & (GAP | LATE)):
            return
        at = np.flatnonzero(flags & REPEAT == 0)
        seq = samples["seq"][at]
        before = np.concatenate(([self._newest], seq[:-1]))
        for k in np.flatnonzero(flags[at] & GAP):
            missed = None if before[k] == _NEVER else int(seq[k] - before[k] - 1)
            yield self._of_sample("gap", samples, int(at[k]), {"missed": missed})
        late = np.concatenate(([False], flags[at] & LATE != 0, [False]))
        edges = np.flatnonzero(late[1:] != late[:-1])
        for first, end in zip(edges[::2], edges[1::2], strict=True):
            sample = samples[at[first]]
            reported = {
                "in_force": None if sample["in_force"] == NIL else int(sample["in_force"]),
                "lag_us": None if sample["lag_us"] == NIL else float(sample["lag_us"]),
            }
            count = {"count": int(end - first)}
            yield self._of_sample("late", samples, int(at[first]), {**count, **reported})

    def _of_sample(self, kind: str, samples: np.ndarray, k: int, fields: Event) -> Event:
        """[writer] An event that a sample's flags tell."""
        seq, nsec = int(samples["seq"][k]), int(samples["nsec"][k])
        return self._event(kind, self.position + k, seq, nsec, fields)

    def _of_entry(self, entry: Any, position: int) -> Event:
        """[writer] The event that an entry other than a sample tells."""
        kind, code, cell = int(entry["kind"]), int(entry["code"]), int(entry["cell"])
        if kind == _ORDER:
            name, fields = self._of_order(entry, code)
        elif kind == _TRIP:
            text = FAULT_TEXTS[Fault(code)]
            fields = {"fault": code, "text": text, "cell": None if cell == NIL else cell}
            name = "trip"
        else:
            name = Entry(kind).name.lower()
            fields = {"session": code} if kind in {_HOLD, _RELEASE} else {}
        seq = int(entry["seq"])
        nsec = int(entry["nsec"])
        return self._event(name, position, None if seq == NIL else seq, nsec, fields)

    def _of_order(self, entry: Any, code: int) -> tuple[str, Event]:
        """[writer] An order that was carried out: what was expected, and the outcome."""
        number = int(entry["number"])
        if code == Order.REST and number in self._ending:
            return "sweep_end", {"sweep": self._ending.pop(number), "complete": True}
        kind, expected = self._expected.pop(number, (Order(code).name.lower(), {}))
        told = {"number": number, "outcome": Outcome(int(entry["outcome"])).name.lower()}
        return kind, {**told, **_of_order_kind(entry, code), **expected}

    def _event(
        self, kind: str, position: int, seq: int | None, nsec: int, fields: Mapping[str, Any]
    ) -> Event:
        """[writer] An event with the four things that each one has."""
        common = {"kind": kind, "position": position, "seq": seq, "nsec": nsec}
        return {**common, **fields, **common}


def _of_order_kind(entry: Any, code: int) -> Event:
    """[writer] What the log itself says of an order, besides its outcome."""
    cell, index, value = int(entry["cell"]), int(entry["index"]), float(entry["value"])
    if code == Order.SWAP:
        return {"cell": cell, "bank": index}
    if code in {Order.SET_GMAX, Order.SET_REVERSAL}:
        which = "gmax_ns" if code == Order.SET_GMAX else "reversal_mv"
        return {"cell": cell, "which": which, "index": index, "value": value}
    if code == Order.PLAY:
        return {"cell": cell, "slot": index, "ticks": int(value)}
    return {"cell": cell} if code in {Order.FORESEE, Order.REST} else {}


def only_events(block: bytes) -> tuple[bytes | None, int, int | None]:
    """A block of the log without its samples; how many they were, and the last's number.

    None in place of the block where nothing but samples was in it.
    """
    entries = np.frombuffer(block, ENTRY, offset=LOOP.itemsize)
    sampled = entries["kind"] == _SAMPLE
    count = int(sampled.sum())
    last = int(entries["seq"][sampled][-1]) if count else None
    kept = entries[~sampled]
    return (block[: LOOP.itemsize] + kept.tobytes() if len(kept) else None), count, last
