"""A journal as an NWB file: written beside its place, validated, then put there."""

from __future__ import annotations

import io
import os
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from .comparison import compare
from .errors import FileError, GatestepError, MissingExtraError
from .journalfile import JournalFile, open_journal
from .nwbfacts import (
    file_facts,
    hash_of,
    missing_facts,
    plain,
    provenance,
    session_of,
    subject_facts,
    subject_of,
)
from .nwbrecordings import Recording, Survey, spans_of, survey

Progress = Callable[[str, int, int], None]


@dataclass(frozen=True)
class ExportResult:
    """What was written.

    Attributes
    ----------
    path, bytes
        The file.
    journal, journal_sha256
        What it was made from.
    recordings, planned : int
        Recordings, and how many of them are sweeps of a plan.
    cells : int
        Each recording has series of so many cells.
    samples, ticks, missed_ticks, gaps : int
        Samples exported, and the ticks of the recordings: those without a sample are NaN.
    repeats, outside, unreadable : int
        Samples of the journal that are left out: they repeat one, lie in no recording, or
        their block is damaged.
    torn_bytes : int
        Bytes at the journal's end that a killed server left torn.
    models, events : int
        Rows of the tables.
    missing : list of str
        Facts of subject and session that the rig file does not give.
    replay : dict or None
        The verdict of a replay, where one was asked for.
    seconds : float
        How long it took.
    """

    path: str
    bytes: int
    journal: str
    journal_sha256: str
    recordings: int
    planned: int
    cells: int
    samples: int
    ticks: int
    missed_ticks: int
    gaps: int
    repeats: int
    outside: int
    unreadable: int
    torn_bytes: int
    models: int
    events: int
    missing: list[str]
    replay: dict[str, Any] | None
    seconds: float

    def plain_data(self) -> dict[str, Any]:
        """Everything, for JSON."""
        return asdict(self)


def _quiet(_what: str, _done: int, _of: int) -> None:
    """Tell no one of the progress."""


def export(
    journal: str | Path,
    out: str | Path,
    overwrite: bool = False,
    replay: bool = False,
    progress: Progress = _quiet,
) -> ExportResult:
    """Write a journal as an NWB file.

    Parameters
    ----------
    journal, out : path
        The second one must end in ``.nwb``.
    overwrite : bool
        Put it in the place of a file that is there.
    replay : bool
        Replay the journal first, and write the verdict into the file.
    progress : callable
        Takes what is done, how much of it is, and how much there is.

    Raises
    ------
    MissingExtraError
        Without pynwb.
    FileError
        If the file exists or cannot be written; nothing of it is left then.
    JournalError
        If the journal cannot be read.
    GatestepError
        If there is nothing to export, or what was written is no valid NWB file.
    """
    begun = time.monotonic()
    _need_pynwb()
    out = Path(out)
    _check_place(out, Path(journal), overwrite)
    with open_journal(journal) as opened:
        verdict = None
        if replay:
            found = compare(opened, lambda done, of: progress("replaying", done, of))
            verdict = found.plain_data()
        sha256 = hash_of(opened, lambda done, of: progress("hashing", done, of))
        with _beside(out) as part:
            made = _write(opened, part, sha256, verdict, progress)
            progress("validating", 0, 1)
            _validate(part, out)
            progress("validating", 1, 1)
            _put(part, out, overwrite)
    size = out.stat().st_size
    return ExportResult(
        path=str(out),
        bytes=size,
        journal=str(journal),
        journal_sha256=sha256,
        replay=verdict,
        seconds=time.monotonic() - begun,
        **made,
    )


def _need_pynwb() -> None:
    try:
        import pynwb  # noqa: F401 -- whether it can be imported is the question
    except ImportError:
        raise MissingExtraError("pynwb", "nwb", "NWB export") from None


def _check_place(out: Path, journal: Path, overwrite: bool) -> None:
    """Refuse a place that the file must not or cannot take, before any work."""
    if out.suffix != ".nwb":
        raise FileError(f"{out}: give a name that ends in .nwb, as readers of NWB go by it")
    if out.is_dir():
        raise FileError(f"{out}: is a folder; give the name of a file")
    if not out.parent.is_dir():
        raise FileError(f"{out}: no folder {out.parent}; make it first")
    if out.exists() and journal.exists() and out.samefile(journal):
        raise FileError(f"{out}: is the journal itself; give another name")
    if out.exists() and not overwrite:
        raise _is_there(out)


def _is_there(out: Path) -> FileError:
    return FileError(f"{out}: exists; give another name, or --overwrite")


@contextmanager
def _beside(out: Path) -> Iterator[Path]:
    """A name beside a file's, of which nothing is left if anything fails."""
    part = out.with_name(f".{out.name}.{os.getpid()}.part.nwb")
    try:
        yield part
    except OSError as fault:
        raise FileError(f"{out}: cannot be written: {fault.strerror or fault}") from None
    finally:
        part.unlink(missing_ok=True)


class _Sink(io.RawIOBase):
    """A file for HDF5 that keeps a fault to itself.

    Told of a full disk, the HDF5 library fails again whenever it is closed, and can end the
    whole process. So it is told nothing, what it writes from then on is left out, and the
    fault is raised here.
    """

    def __init__(self, path: Path) -> None:
        self._file = path.open("x+b", buffering=0)
        self.fault: OSError | None = None

    def check(self) -> None:
        """Raise the fault, if there was one.

        Raises
        ------
        OSError
        """
        if self.fault is not None:
            raise self.fault

    def write(self, data: Any) -> int:
        """Write all of some bytes."""
        left = memoryview(data).cast("B")
        size = len(left)
        try:
            while len(left) and self.fault is None:
                left = left[self._file.write(left) :]
        except OSError as fault:
            self.fault = fault
        return size

    def readinto(self, room: Any) -> int:
        """Read what was written; zeros where that was left out."""
        view = memoryview(room).cast("B")
        count = self._file.readinto(view) or 0
        view[count:] = bytes(len(view) - count)
        return len(view)

    def seek(self, place: int, whence: int = os.SEEK_SET) -> int:
        """Go to a place."""
        return self._file.seek(place, whence)

    def tell(self) -> int:
        """Where the next byte goes."""
        return self._file.tell()

    def truncate(self, size: int | None = None) -> int:
        """Set the size."""
        try:
            return self._file.truncate(size)
        except OSError as fault:
            self.fault = self.fault or fault
        return size or 0

    def close(self) -> None:
        """Give the file back."""
        self._file.close()
        super().close()


@contextmanager
def _hdf5(part: Path) -> Iterator[tuple[Any, Callable[[], None]]]:
    """An NWB file open for writing, and what raises a fault of the disk."""
    import h5py
    from pynwb import NWBHDF5IO

    sink = _Sink(part)
    try:
        with h5py.File(sink, "w") as file, NWBHDF5IO(file=file, mode="w") as nwb:
            yield nwb, sink.check
        sink.check()
    finally:
        sink.close()


def _put(part: Path, out: Path, overwrite: bool) -> None:
    """Put a whole file in its place, safe on the disk before it is seen there."""
    with part.open("rb") as file:
        os.fsync(file.fileno())
    if not overwrite and out.exists():
        raise _is_there(out)
    part.replace(out)


def _validate(part: Path, out: Path) -> None:
    from pynwb import validate

    faults = [str(fault) for fault in validate(path=str(part))]
    if faults:
        shown = "\n".join(faults[:5])
        raise GatestepError(
            f"{out}: not written: what was made is no valid NWB file by pynwb's validator, which "
            f"is a fault of gatestep or of the installed pynwb:\n{shown}"
        )


def _write(
    journal: JournalFile,
    part: Path,
    sha256: str,
    verdict: dict[str, Any] | None,
    progress: Progress,
) -> dict[str, Any]:
    """Describe the file, write it, fill its series; what is told of it."""
    from pynwb import NWBFile
    from pynwb.file import Subject

    from .nwbseries import Series, name_of
    from .nwbtables import add_events, add_gaps, add_groups, add_models, stretches_of

    found = survey(journal, spans_of(journal), lambda done, of: progress("reading", done, of))
    recordings = found.recordings
    if not recordings:
        raise GatestepError(
            f"{journal.path}: no sweep and no armed stretch in it that can be read, nothing to "
            "export"
        )
    session, subject = session_of(journal), subject_of(journal)
    file = NWBFile(**file_facts(journal, session, sha256))
    if facts := subject_facts(subject):
        file.subject = Subject(**facts)
    stretches = stretches_of(journal, found)
    series = Series(file, journal, session, stretches)
    for number, recording in enumerate(recordings):
        series.add(number, recording)
        progress("describing", number + 1, len(recordings))
    series.finish()
    named = [(name_of(k, recording), recording) for k, recording in enumerate(recordings)]
    add_groups(file, recordings, series.rows)
    add_models(file, stretches, journal.cells)
    add_events(file, journal.events, found)
    add_gaps(file, named, journal.interval_us * 1e-6)
    for name, (text, what) in provenance(journal, sha256, verdict).items():
        file.add_scratch(text, name=name, description=plain(what))
    with _hdf5(part) as (nwb, check):
        progress("laying out", 0, 1)
        nwb.write(file)
        check()
        progress("laying out", 1, 1)

        def tell(done: int, of: int) -> None:
            check()
            progress("writing", done, of)

        series.fill(recordings, tell)
    return {
        **_counts(journal, found, recordings),
        "models": len(stretches),
        "events": len(journal.events),
        "missing": missing_facts(subject, session),
    }


def _counts(
    journal: JournalFile, found: Survey, recordings: tuple[Recording, ...]
) -> dict[str, int]:
    exported = sum(r.samples for r in recordings)
    return {
        "recordings": len(recordings),
        "planned": sum(r.span.planned for r in recordings),
        "cells": len(journal.cells),
        "samples": exported,
        "ticks": sum(r.ticks for r in recordings),
        "missed_ticks": sum(r.missed for r in recordings),
        "gaps": sum(len(r.gaps) for r in recordings),
        "repeats": found.repeats,
        "outside": found.read - found.repeats - exported,
        "unreadable": len(journal.samples) - found.read,
        "torn_bytes": 0 if journal.tail is None else journal.tail.bytes,
    }
