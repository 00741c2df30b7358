"""What of a journal becomes recordings with a regular time base, and when each was.

A recording is a sweep of a plan, or where no plan played a stretch in which the loop was
armed. Its time base is the rig's sample clock: a value a tick, missing ticks included, so
that a sample's number gives its place. Nothing is written here.
"""

from __future__ import annotations

from bisect import bisect_right
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from itertools import pairwise
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from .journalfile import JournalFile
from .journalsamples import Piece
from .sweepmeasures import armed_stretches
from .units import US_PER_MS
from .wire import CLIPPED, GAP, LATE, LIVE, MALFORMED, NIL, REFUSED, REPEAT

Floats = npt.NDArray[np.float64]
Whole = npt.NDArray[np.int64]
Progress = Callable[[int, int], None]

LONGEST_GAP_S = 10.0
"""Over a longer gap a recording does not go on: what follows is a recording of its own."""

NO_SAMPLE = "no sample came"
UNREADABLE = "the samples' block in the journal is damaged"
UNRECORDED = "the samples are not in the journal"

_NO_TICK = REPEAT | REFUSED | MALFORMED
_S_PER_US = 1e-3 / US_PER_MS
_S_PER_NSEC = 1e-9


@dataclass(frozen=True)
class Span:
    """A sweep of a plan or an armed stretch, as places in the journal.

    ``run`` counts the plans of the journal from 1, and is 0 where none played; ``index``
    is the sweep's place in its plan, or the stretch's number. ``fields`` are what the plan
    says of the sweep.
    """

    run: int
    index: int
    start: int
    stop: int
    complete: bool
    fields: Mapping[str, Any]

    @property
    def planned(self) -> bool:
        """Whether it is a sweep of a plan."""
        return self.run > 0


class Gap(NamedTuple):
    """Ticks of a recording without a sample: the first, how many, and why."""

    first: int
    ticks: int
    reason: str


@dataclass
class Recording:
    """A stretch of samples whose numbers rise, on a regular time base.

    Attributes
    ----------
    span : Span
    part : int
        From 0; more than one where the samples' numbers start again or a gap is too long.
    start, stop : int
        Places in the journal.
    first_seq, last_seq : int
        Numbers of the first and the last sample.
    time_s : float
        Time of the first sample since the journal's start.
    late, clipped, idle : int
        Samples that tell of a late answer, whose answer was clipped, and whose answer was
        0 because the loop was not armed.
    lag_us_sum : float
        Of the ``lags`` lags that the rig reported.
    gaps : list of Gap
    complete : bool
        The span ran to its end, and all of its samples can be read.
    """

    span: Span
    part: int
    start: int
    stop: int
    first_seq: int
    last_seq: int
    time_s: float
    samples: int = 0
    late: int = 0
    clipped: int = 0
    idle: int = 0
    lags: int = 0
    lag_us_sum: float = 0.0
    gaps: list[Gap] = field(default_factory=list)
    complete: bool = True

    @property
    def ticks(self) -> int:
        """Length of the time base."""
        return self.last_seq - self.first_seq + 1

    @property
    def missed(self) -> int:
        """Ticks without a sample."""
        return self.ticks - self.samples

    @property
    def mean_lag_us(self) -> float | None:
        """Mean of the reported lags, or None where there is none."""
        return self.lag_us_sum / self.lags if self.lags else None

    def take(self, places: Whole, samples: np.ndarray, torn: bool) -> None:
        """Take in samples whose numbers follow on; ``torn`` when a block before is damaged."""
        seq, flags = samples["seq"], samples["flags"]
        before = np.concatenate(([self.last_seq], seq[:-1]))
        for k in np.flatnonzero(seq - before > 1):
            reason = NO_SAMPLE if flags[k] & GAP else UNRECORDED
            first = int(before[k]) + 1 - self.first_seq
            ticks = int(seq[k] - before[k] - 1)
            self.gaps.append(Gap(first, ticks, UNREADABLE if torn and k == 0 else reason))
        self.samples += len(samples)
        self.late += int(np.count_nonzero(flags & LATE))
        self.clipped += int(np.count_nonzero(flags & CLIPPED))
        self.idle += int(np.count_nonzero(flags & LIVE == 0))
        lags = samples["lag_us"][samples["lag_us"] != NIL]
        self.lags += len(lags)
        self.lag_us_sum += float(lags.sum())
        self.stop, self.last_seq = int(places[-1]) + 1, int(seq[-1])


@dataclass(frozen=True)
class Survey:
    """What a journal gives: its recordings, and the times of its events.

    Attributes
    ----------
    recordings : tuple of Recording
    event_s : array
        Time of each event of the journal since its start; never falls.
    end_s : float
        Time after the last sample's tick.
    read, repeats : int
        Samples of the journal that can be read, and how many of them only repeat one.
    """

    recordings: tuple[Recording, ...]
    event_s: Floats
    end_s: float
    read: int
    repeats: int


def spans_of(journal: JournalFile) -> list[Span]:
    """The sweeps of a journal, and the armed stretches in which no sweep began."""
    plans = [e.position for e in journal.events if e.kind == "plan"]
    found = [
        Span(max(bisect_right(plans, s.start), 1), s.index, s.start, s.stop, s.complete, s.fields)
        for s in journal.sweeps
    ]
    begun = [sweep.start for sweep in journal.sweeps]
    armed = 0
    for start, stop, whole in armed_stretches(journal):
        if not any(start <= at < stop for at in begun):
            found.append(Span(0, armed, start, stop, whole, {}))
            armed += 1
    return sorted((s for s in found if s.stop > s.start), key=lambda span: span.start)


def survey(
    journal: JournalFile, spans: Sequence[Span], progress: Progress = lambda _done, _of: None
) -> Survey:
    """Read a journal once, and say what its recordings are.

    Parameters
    ----------
    journal : JournalFile
    spans : sequence of Span
        In order, none over another.
    progress : callable
        Takes samples done and samples in all.
    """
    clock, recordings = _Clock(journal), _Recordings(spans)
    moments = _Moments(journal)
    end, read, repeats = 0, 0, 0
    torn = False
    for piece in journal.samples.pieces():
        places, samples = ticks_of(piece)
        read += len(piece.samples)
        repeats += int(np.count_nonzero(piece.samples["flags"] & REPEAT))
        torn = torn or piece.position != end
        if len(places):
            last_s = clock.last_s
            times, begins = clock.take(places, samples)
            moments.take(places, times, begins, last_s)
            recordings.take(places, samples, times, begins, torn)
            torn = False
        end = piece.position + len(piece.samples)
        progress(end, len(journal.samples))
    for made in recordings.found:
        made.complete = made.span.complete and not _damaged(journal, made.span)
    event_s = moments.of_events(clock)
    return Survey(tuple(recordings.found), event_s, clock.end_s, read, repeats)


def _damaged(journal: JournalFile, span: Span) -> bool:
    """Whether samples of a span cannot be read; their blocks have been tried."""
    return any(
        lost.position < span.stop and lost.position + lost.samples > span.start
        for lost in journal.damaged
    )


def ticks_of(piece: Piece) -> tuple[Whole, np.ndarray]:
    """Places and samples of a piece that are a tick of the rig's clock: no repeats."""
    fresh = np.flatnonzero(piece.samples["flags"] & _NO_TICK == 0)
    return piece.position + fresh, piece.samples[fresh]


class _Clock:
    """Times of samples by their numbers, in s since the journal's start.

    Where numbers start again, a rig takes hold or a gap is too long, the server's clock
    gives the time anew, though never one that has passed: a simulated rig may be faster.
    """

    def __init__(self, journal: JournalFile) -> None:
        self.tick_s = journal.interval_us * _S_PER_US
        self.longest = max(1, round(LONGEST_GAP_S / self.tick_s))
        self.began_nsec = int(journal.header["start"]["monotonic_nsec"])
        self.holds = np.array([e.position for e in journal.events if e.kind == "hold"], np.int64)
        self.last_s = -np.inf
        self._held = 0
        self._last_seq: int | None = None
        self._zero_s, self._zero_seq = 0.0, 0

    @property
    def end_s(self) -> float:
        """Time after the last sample's tick."""
        return float(max(self.last_s + self.tick_s, 0.0))

    def since_start(self, nsec: int) -> float:
        """Time by the server's clock."""
        return (nsec - self.began_nsec) * _S_PER_NSEC

    def take(self, places: Whole, samples: np.ndarray) -> tuple[Floats, npt.NDArray[np.bool_]]:
        """Times of samples, and where a time base begins."""
        seq = samples["seq"]
        begins = np.zeros(len(seq), bool)
        step = np.diff(seq)
        begins[1:] = (step <= 0) | (step - 1 > self.longest)
        if self._last_seq is None:
            begins[0] = True
        else:
            begins[0] = not 0 < seq[0] - self._last_seq <= self.longest + 1
        held = int(np.searchsorted(self.holds, places[-1], "right"))
        begins[np.searchsorted(places, self.holds[self._held : held])] = True
        self._held = held
        times = np.empty(len(seq))
        edges = [0, *(np.flatnonzero(begins[1:]) + 1).tolist(), len(seq)]
        for a, b in pairwise(edges):
            if begins[a]:
                self._zero_s = max(self.end_s, self.since_start(int(samples["nsec"][a])))
                self._zero_seq = int(seq[a])
            times[a:b] = self._zero_s + (seq[a:b] - self._zero_seq) * self.tick_s
            self.last_s = float(times[b - 1])
        self._last_seq = int(seq[-1])
        return times, begins


class _Moments:
    """Times of events: of the sample that they stand before, or between two time bases."""

    def __init__(self, journal: JournalFile) -> None:
        self._nsec = [e.nsec for e in journal.events]
        self._places = np.array([e.position for e in journal.events], np.int64)
        self._wanted = np.unique(self._places)
        self._low = np.full(len(self._wanted), np.nan)
        self._high = np.full(len(self._wanted), np.nan)
        self._known = 0

    def take(
        self, places: Whole, times: Floats, begins: npt.NDArray[np.bool_], last_s: float
    ) -> None:
        """Take in samples; ``last_s`` is the time of the last one before them."""
        known = int(np.searchsorted(self._wanted, places[-1], "right"))
        at = np.searchsorted(places, self._wanted[self._known : known])
        before = np.concatenate(([last_s], times[:-1]))
        mine = slice(self._known, known)
        self._high[mine] = times[at]
        self._low[mine] = np.where(begins[at], before[at], times[at])
        self._known = known

    def of_events(self, clock: _Clock) -> Floats:
        """The time of each event, in order."""
        # What comes after the last sample is put at its end: no sample tells more.
        self._low[self._known :] = self._high[self._known :] = clock.end_s
        at = np.searchsorted(self._wanted, self._places)
        told = np.array([clock.since_start(nsec) for nsec in self._nsec], np.float64)
        times = np.clip(told, np.maximum(self._low[at], 0.0), self._high[at])
        return np.asarray(np.maximum.accumulate(times), np.float64)


class _Recordings:
    """Puts samples into the recordings of the spans that they lie in."""

    def __init__(self, spans: Sequence[Span]) -> None:
        self.found: list[Recording] = []
        self._spans = spans
        self._next = 0

    def take(
        self,
        places: Whole,
        samples: np.ndarray,
        times: Floats,
        begins: npt.NDArray[np.bool_],
        torn: bool,
    ) -> None:
        """Take in the samples of a piece."""
        while self._next < len(self._spans):
            span = self._spans[self._next]
            a, b = (int(k) for k in np.searchsorted(places, (span.start, span.stop)))
            edges = [a, *(a + 1 + np.flatnonzero(begins[a + 1 : b])).tolist(), b]
            for first, end in pairwise(edges if b > a else []):
                mine = slice(first, end)
                recording = self._of(span, places, samples, times, first, bool(begins[first]))
                recording.take(places[mine], samples[mine], torn and first == 0)
            if span.stop > places[-1] + 1:
                return
            self._next += 1

    def _of(
        self,
        span: Span,
        places: Whole,
        samples: np.ndarray,
        times: Floats,
        first: int,
        begins: bool,
    ) -> Recording:
        """The recording that a sample goes on with, or begins."""
        last = self.found[-1] if self.found else None
        same = last is not None and last.span is span
        if last is not None and same and not begins:
            return last
        part = last.part + 1 if last is not None and same else 0
        place, seq = int(places[first]), int(samples["seq"][first])
        made = Recording(span, part, place, place, seq, seq, float(times[first]))
        self.found.append(made)
        return made
