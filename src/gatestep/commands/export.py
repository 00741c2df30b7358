"""``gatestep export JOURNAL OUT.nwb``: a journal in the field's open format."""

from __future__ import annotations

import json
import time
from pathlib import Path
from types import TracebackType
from typing import Any

from ..nwb import ExportResult
from ..nwb import export as write

PATIENCE_S = 1.0
"""Work that takes longer than this shows how far it is."""


def export(
    journal: Path,
    out: Path,
    overwrite: bool = False,
    replay: bool = False,
    json_output: bool = False,
) -> int:
    """Write a journal as an NWB file and say what is in it; returns the exit status.

    It is 1 when a replay was asked for and is not identical.

    Raises
    ------
    GatestepError
        As :func:`gatestep.nwb.export`.
    """
    with Bar() as bar:
        result = write(journal, out, overwrite, replay, bar.show)
    if json_output:
        print(json.dumps(result.plain_data(), ensure_ascii=False))
    else:
        print("\n".join(lines_of(result)))
    return int(result.replay is not None and not result.replay["identical"])


def lines_of(result: ExportResult) -> list[str]:
    """What was written, for people."""
    kinds = f"{result.planned} sweeps of a plan" if result.planned else "no plan in it"
    armed = result.recordings - result.planned
    armed_words = f", {armed} armed stretches" if armed else ""
    lines = [
        f"{result.path}: {result.bytes:,} bytes, valid NWB",
        f"{result.recordings} recordings ({kinds}{armed_words}) of {result.cells} "
        f"{'cell' if result.cells == 1 else 'cells'}, {result.samples:,} samples; "
        f"{result.models} model intervals, {result.events} events",
    ]
    lines += _left_out(result)
    if result.replay is not None:
        lines.append(_verdict(result.replay))
    lines += _missing(result.missing)
    return lines


def _left_out(result: ExportResult) -> list[str]:
    """What the file does not have, or has as NaN."""
    told = (
        (result.missed_ticks, f"ticks in {result.gaps} gaps have no sample and are NaN"),
        (result.repeats, "repeated samples are left out"),
        (result.outside, "samples outside the recordings are left out"),
        (result.unreadable, "samples cannot be read: their blocks are damaged"),
    )
    lines = [f"{count:,} {words}" for count, words in told if count]
    if result.torn_bytes:
        lines.append(f"the journal's last {result.torn_bytes:,} bytes are torn and left out")
    return lines


def _verdict(replay: dict[str, Any]) -> str:
    if not replay["identical"]:
        return f"replay: NOT identical, {replay['different']:,} samples differ"
    rest = replay["samples"] - replay["compared"]
    return f"replay: identical{f', {rest:,} samples not compared' if rest else ''}"


def _missing(missing: list[str]) -> list[str]:
    """The facts that the rig file does not give, by its tables."""
    lines = []
    for table in ("subject", "session"):
        keys = [name.partition(".")[2] for name in missing if name.startswith(f"{table}.")]
        if keys:
            lines.append(f"not in the rig file's [{table}]: {', '.join(keys)}")
    return lines


class Bar:
    """A progress bar on stderr that comes when the work takes longer than a second."""

    def __init__(self) -> None:
        self._begun = time.monotonic()
        self._bar: Any = None
        self._tasks: dict[str, Any] = {}

    def __enter__(self) -> Bar:
        return self

    def __exit__(
        self,
        _kind: type[BaseException] | None,
        _fault: BaseException | None,
        _at: TracebackType | None,
    ) -> None:
        if self._bar is not None:
            self._bar.stop()

    def show(self, what: str, done: int, of: int) -> None:
        """Show how far a part of the work is."""
        if self._bar is None:
            if time.monotonic() - self._begun < PATIENCE_S:
                return
            from rich.console import Console
            from rich.progress import Progress

            console = Console(stderr=True)
            # Where no one looks on, even a bar that vanishes would leave an empty line.
            self._bar = Progress(console=console, transient=True, disable=not console.is_terminal)
            self._bar.start()
        if what not in self._tasks:
            self._tasks[what] = self._bar.add_task(what, total=max(of, 1))
        self._bar.update(self._tasks[what], completed=done)
