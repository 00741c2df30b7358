"""What a replay of a journal shows: identical, or where it first is not."""

from __future__ import annotations

import platform
from collections.abc import Callable
from dataclasses import asdict, dataclass, field
from typing import Any

import numpy as np

from . import __version__
from .errors import JournalError
from .journalfile import JournalFile
from .replay import Replay, Stretch
from .wire import flag_names

_EVENTS_TOLD = 3
_GONE = ("lost", "dropped")


@dataclass(frozen=True)
class Difference:
    """The first sample whose answer the replay does not give.

    Currents in pA; ``before`` are the last events before it.
    """

    position: int
    seq: int
    cell: str
    recorded_pa: float
    computed_pa: float
    recorded_flags: list[str]
    computed_flags: list[str]
    model: str | None
    before: list[str]


@dataclass
class Verdict:
    """What became of a replay.

    Attributes
    ----------
    samples, compared : int
        In the journal, and compared.
    different : int
        Samples whose current or flags differ.
    largest_pa : float
        Largest difference of a current.
    first : Difference or None
    unlike : str or None
        An event that the kernel does not agree with.
    stopped : str or None
        Why samples after the compared ones cannot be computed.
    notes : list of str
        What is unlike between the machine that recorded and this one, and what was lost.
    """

    samples: int
    compared: int = 0
    different: int = 0
    largest_pa: float = 0.0
    first: Difference | None = None
    unlike: str | None = None
    stopped: str | None = None
    notes: list[str] = field(default_factory=list)

    @property
    def identical(self) -> bool:
        """Whether all that was compared is the same, to the last bit."""
        return self.different == 0 and self.unlike is None

    @property
    def complete(self) -> bool:
        """Whether everything in the journal was compared."""
        return self.stopped is None

    def plain_data(self) -> dict[str, Any]:
        """Everything, for JSON."""
        return {"identical": self.identical, "complete": self.complete, **asdict(self)}


def compare(
    journal: JournalFile, progress: Callable[[int, int], None] = lambda _done, _of: None
) -> Verdict:
    """Replay a journal and compare every answer.

    Parameters
    ----------
    journal : JournalFile
    progress : callable
        Takes samples done and samples in all.

    Raises
    ------
    JournalError
        When the journal's rig or its first models cannot be read.
    """
    limit = _first_gap(journal)
    verdict = Verdict(len(journal.samples), notes=_notes(journal))
    replay = Replay(journal)
    try:
        for stretch in replay.run(limit):
            _compare(verdict, stretch, journal)
            progress(replay.position, len(journal.samples))
    except JournalError:
        verdict.stopped = (
            f"the record is damaged from sample {replay.position} on, and the gates of all that "
            "followed depend on what is missing"
        )
    verdict.unlike = replay.unlike
    if limit is not None and verdict.stopped is None:
        verdict.stopped = (
            f"the record has a gap before sample {limit}: samples, orders or models are missing "
            "or damaged there, so what followed cannot be computed"
        )
    return verdict


def _first_gap(journal: JournalFile) -> int | None:
    """Where the journal first lacks something that the loop did."""
    places = [e.position for e in journal.events if e.kind in _GONE]
    _ = journal.models  # reading them finds what is damaged
    places += [found.position for found in journal.damaged]
    return min(places) if places else None


def _compare(verdict: Verdict, stretch: Stretch, journal: JournalFile) -> None:
    recorded = stretch.recorded["i_pa"]
    unlike = recorded.view(np.uint64) != stretch.i_pa.view(np.uint64)
    wrong = unlike.any(axis=1) | (stretch.recorded["flags"] != stretch.flags)
    verdict.compared += len(wrong)
    if not wrong.any():
        return
    verdict.different += int(wrong.sum())
    off = float(np.abs(recorded - stretch.i_pa).max())
    verdict.largest_pa = max(verdict.largest_pa, off)
    if verdict.first is None:
        verdict.first = _difference(int(np.flatnonzero(wrong)[0]), unlike, stretch, journal)


def _difference(row: int, unlike: np.ndarray, stretch: Stretch, journal: JournalFile) -> Difference:
    k = int(np.argmax(unlike[row]))
    position = stretch.position + row
    before = [e for e in journal.events if e.position <= position][-_EVENTS_TOLD:]
    sample = stretch.recorded[row]
    return Difference(
        position=position,
        seq=int(sample["seq"]),
        cell=journal.cells[k],
        recorded_pa=float(sample["i_pa"][k]),
        computed_pa=float(stretch.i_pa[row, k]),
        recorded_flags=flag_names(int(sample["flags"])),
        computed_flags=flag_names(int(stretch.flags[row])),
        model=journal.in_force(position)[k].name,
        before=[f"{e.kind} before sample {e.position}" for e in before],
    )


def _notes(journal: JournalFile) -> list[str]:
    notes = []
    recorded = journal.header["machine"]["architecture"]
    here = platform.machine()
    if recorded != here:
        notes.append(
            f"recorded on {recorded}, replayed on {here}: last bits may differ; the largest "
            "difference is what counts"
        )
    version = journal.header["program"]["version"]
    if version != __version__:
        notes.append(f"recorded by version {version}, replayed by {__version__}")
    for event in journal.events:
        if event.kind in _GONE:
            lost = event.fields.get("samples", event.fields.get("entries"))
            notes.append(f"{event.kind} before sample {event.position}: {lost} entries")
    for found in journal.damaged:
        notes.append(f"damaged: the block at byte {found.offset}: {found.reason}")
    if journal.tail is not None:
        tail = journal.tail
        notes.append(
            f"the file's last {tail.bytes} bytes are torn and were left out: {tail.reason}"
        )
    return notes
