"""What the hot loop's log says, kept for whoever asks.

The loop sends blocks: a copy of its own record and the entries since the last. This
module turns them into counters, percentiles, events in words and feed messages. It
runs beside the loop and can be as slow as it likes.
"""

from __future__ import annotations

import time
from collections import deque
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from .loop import ENTRY, Entry
from .orders import Order
from .states import FAULT_TEXTS, Fault, State
from .tick import LOOP
from .wire import NIL

_COUNTERS = (
    "answered",
    "late",
    "missed",
    "repeats",
    "malformed",
    "refused",
    "clipped",
    "trips",
    "clock_jumps",
    "foreseen",
    "fallbacks",
    "records_lost",
    "undelivered",
)
_PERCENTILES = (50.0, 90.0, 99.0, 99.9)
_TICKS_TO_REPORT = 100
_BINS_PER_OCTAVE = 16
_BINS = 40 * _BINS_PER_OCTAVE


@dataclass(frozen=True)
class LoopEvent:
    """Something that happened in the loop, with the sequence number it came after."""

    kind: str
    seq: int | None
    text: str
    number: int = 0
    outcome: int = 0
    cell: int = int(NIL)


class Durations:
    """A histogram of durations in ns, sixteen bins an octave; never forgets."""

    def __init__(self) -> None:
        self._counts = np.zeros(_BINS, np.int64)
        self._longest = 0

    def add(self, nsec: np.ndarray) -> None:
        """Take in an array of durations."""
        bins = (np.log2(np.maximum(nsec, 1)) * _BINS_PER_OCTAVE).astype(np.int64)
        np.add.at(self._counts, np.minimum(bins, _BINS - 1), 1)
        self._longest = max(self._longest, int(nsec.max(initial=0)))

    def percentiles(self) -> dict[str, int]:
        """Percentiles to within a bin (4 %), and the exact maximum; empty when none."""
        total = int(self._counts.sum())
        if not total:
            return {}
        sums = np.cumsum(self._counts)
        edges = 2.0 ** ((np.arange(_BINS) + 1) / _BINS_PER_OCTAVE)
        found = {
            f"p{p:g}": min(
                int(edges[np.searchsorted(sums, np.ceil(total * p / 100))]), self._longest
            )
            for p in _PERCENTILES
        }
        return {**found, "max": self._longest}


@dataclass
class Watch:
    """Everything known of the loop from its log.

    Parameters
    ----------
    cell_names : list of str
        In the order of the sample's voltages.
    """

    cell_names: list[str]
    state: State = State.IDLE
    service: Durations = field(default_factory=Durations)
    events: deque[LoopEvent] = field(default_factory=lambda: deque(maxlen=1000))

    def __post_init__(self) -> None:
        self._loop = np.zeros(1, LOOP)[0]
        self._loop["fault_cell"] = NIL
        self._last: Any = None
        self._started = time.monotonic()

    def take(self, block: bytes) -> tuple[list[LoopEvent], np.ndarray]:
        """Take in one block; returns its events and its sample entries."""
        self._loop = np.frombuffer(block[: LOOP.itemsize], LOOP)[0]
        self.state = State(int(self._loop["state"]))
        entries = np.frombuffer(block[LOOP.itemsize :], ENTRY)
        samples = entries[entries["kind"] == Entry.SAMPLE]
        if len(samples):
            self.service.add(samples["service_nsec"])
            self._last = samples[-1]
        events = [self._event(e) for e in entries[entries["kind"] != Entry.SAMPLE]]
        self.events.extend(events)
        return events, samples

    def counters(self) -> dict[str, int]:
        """The loop's counters since the server started."""
        return {name: int(self._loop[name]) for name in _COUNTERS}

    def summary(self) -> dict[str, Any]:
        """State, counters and percentiles as a plain map."""
        loop = self._loop
        fault = Fault(int(loop["fault"]))
        return {
            "state": self.state.name.lower(),
            "fault": self._fault_text(fault, int(loop["fault_cell"])) or None,
            "rig": "connected" if loop["held"] else "none",
            "seq": self.seq,
            **self.counters(),
            # A clock that stands still shows a tick of 0, which is known to be wrong.
            "tick_us": float(loop["tick_us"]) if loop["tick_us"] or loop["tick_wrong"] else None,
            # From a sample to its answer's current, as the loop takes it to be.
            "delay_us": round(float(loop["delay_us"]), 3) if loop["held"] else None,
            "service_nsec": self.service.percentiles(),
            "uptime_s": round(time.monotonic() - self._started, 3),
        }

    @property
    def seq(self) -> int | None:
        """The newest sample that is known of."""
        return int(self._loop["seq"]) if self._last is not None else None

    @property
    def held(self) -> bool:
        """Whether a rig holds the loop."""
        return bool(self._loop["held"])

    @property
    def session(self) -> int:
        """How many rigs have taken hold so far."""
        return int(self._loop["session"])

    @property
    def records_lost(self) -> int:
        """Entries that the loop's log had no room for."""
        return int(self._loop["records_lost"])

    def bank(self, k: int) -> int:
        """The bank that is in force in a cell, by the newest block of the log."""
        return int(self._loop["bank"][k])

    def rig_reports_nothing(self) -> bool:
        """Whether a rig that has long had answers still reports none in force."""
        if self._last is None or not self._loop["held"]:
            return False
        given = int(self._loop["seq"]) - int(self._loop["first_seq"])
        return given > _TICKS_TO_REPORT and int(self._last["in_force"]) == NIL

    def cell(self, k: int) -> dict[str, Any]:
        """Newest voltage of a cell, and the current it is given: 0 unless armed."""
        if self._last is None or not self._loop["held"]:
            return {"v_mv": None, "i_pa": 0.0}
        v_mv = float(self._last["v_mv"][k])
        i_pa = float(self._last["i_pa"][k]) if self.state == State.ARMED else 0.0
        return {"v_mv": v_mv if np.isfinite(v_mv) else None, "i_pa": i_pa}

    def _event(self, entry: Any) -> LoopEvent:
        kind, code, cell = Entry(int(entry["kind"])), int(entry["code"]), int(entry["cell"])
        text = self._words(kind, code, cell)
        seq = int(entry["seq"])
        return LoopEvent(
            kind.name.lower(),
            None if seq == NIL else seq,
            text,
            int(entry["number"]),
            int(entry["outcome"]),
            cell,
        )

    def _words(self, kind: Entry, code: int, cell: int) -> str:
        if kind == Entry.TRIP:
            return f"tripped, 0 pA: {self._fault_text(Fault(code), cell)}"
        if kind == Entry.HOLD:
            return f"a rig took hold of the loop (number {code})"
        if kind == Entry.RELEASE:
            return f"the rig let go of the loop (number {code})"
        if kind == Entry.CLOCK_JUMP:
            return "the rig's clock jumped; its tick is measured afresh"
        return Order(code).name.lower()

    def _fault_text(self, fault: Fault, cell: int) -> str:
        text = FAULT_TEXTS[fault]
        return f"cell {self.cell_names[cell]}: {text}" if text and cell != NIL else text
