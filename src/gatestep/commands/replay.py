"""``gatestep replay``: whether a journal's currents can be computed again, bit for bit."""

from __future__ import annotations

import json
from pathlib import Path

from ..comparison import Difference, Verdict, compare
from ..journalfile import open_journal
from .bar import bar

_IDENTICAL, _DIFFERENT, _INCOMPLETE = 0, 1, 3


def replay(path: Path, json_output: bool) -> int:
    """Replay a journal and print what came of it; returns the exit status.

    0 when every current is identical, 1 when one differs, 3 when all that could be
    computed is identical and something could not.

    Raises
    ------
    JournalError
        When the file is no journal, or cannot be replayed at all.
    """
    with open_journal(path) as journal, bar("replaying") as progress:
        verdict = compare(journal, progress)
    if json_output:
        print(json.dumps({"journal": str(path), **verdict.plain_data()}))
    else:
        _print(verdict)
    if not verdict.identical:
        return _DIFFERENT
    return _IDENTICAL if verdict.complete else _INCOMPLETE


def _print(verdict: Verdict) -> None:
    if verdict.samples and not verdict.compared:
        print("nothing compared")
    elif verdict.identical:
        print(f"identical: {verdict.compared:,} of {verdict.samples:,} samples, every bit")
    else:
        print(
            f"NOT identical: {verdict.different:,} of {verdict.compared:,} samples differ, by "
            f"{verdict.largest_pa:.6g} pA at most"
        )
    if verdict.unlike:
        print(verdict.unlike)
    if verdict.first:
        _print_difference(verdict.first)
    if verdict.stopped:
        left = verdict.samples - verdict.compared
        print(f"not compared: {left:,} of the samples in it: {verdict.stopped}")
    for note in verdict.notes:
        print(note)


def _print_difference(found: Difference) -> None:
    print(
        f"first at sample {found.position:,} (seq {found.seq}), cell {found.cell}, model "
        f"{found.model}:"
    )
    print(f"  recorded {found.recorded_pa!r} pA, flags {' '.join(found.recorded_flags) or 'none'}")
    print(f"  computed {found.computed_pa!r} pA, flags {' '.join(found.computed_flags) or 'none'}")
    print(f"  the last events before it: {'; '.join(found.before) or 'none'}")
