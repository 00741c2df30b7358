"""``gatestep report JOURNAL``: each sweep measured, as tables, JSON, CSV and figures."""

from __future__ import annotations

import csv
import json
from collections.abc import Sequence
from contextlib import suppress
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import FileError, GatestepError
from .bar import Progress, bar
from .report_rates import Row, conditions_of, ladders_of

if TYPE_CHECKING:
    from ..journalfile import JournalFile
    from ..sweepmeasures import Measured
    from .report_figures import Drawing

NARROWEST = 130
"""Columns that the tables need; a narrower terminal wraps their lines."""


def report(
    path: Path, figure: Path | None = None, table: Path | None = None, json_output: bool = False
) -> int:
    """Measure the sweeps of a journal; without a plan in it, each armed stretch.

    Parameters
    ----------
    path : Path
        The journal.
    figure : Path, optional
        A folder for figures, made when missing.
    table : Path, optional
        A CSV file, one line a sweep.
    json_output : bool
        Print JSON instead of tables.

    Raises
    ------
    GatestepError
        If there is nothing to measure, or a file cannot be read or written.
    """
    from ..journalfile import open_journal

    with open_journal(path) as journal, bar("measuring") as progress:
        result, rows, drawing = measure_journal(journal, figure is not None, progress)
    if table is not None:
        _write_csv(table, rows)
        result["csv"] = str(table)
    if drawing is not None and figure is not None:
        result["figures"] = [str(made) for made in drawing.save(figure, result)]
    if json_output:
        print(json.dumps(result, ensure_ascii=False))
    else:
        _print(result)
    return 0


def measure_journal(
    journal: JournalFile, drawn: bool, progress: Progress = lambda _done, _of: None
) -> tuple[Row, list[Row], Drawing | None]:
    """The result, its rows, and where they are wanted the sweeps for the figures."""
    from ..sweepmeasures import Measurer, tasks_of
    from .report_figures import Drawing

    tasks = tasks_of(journal)
    if not tasks:
        raise GatestepError(
            f"{journal.path}: no sweep and no armed stretch in it, nothing to measure"
        )
    drawing = Drawing(title_of(journal)) if drawn else None
    measurer = Measurer(journal)
    measured = []
    for done, task in enumerate(tasks):
        progress(done, len(tasks))
        made, stretch = measurer.measure(task)
        measured.append(made)
        if drawing is not None:
            drawing.add(made, stretch)
    rows = [row_of(made, journal.cells) for made in measured]
    return _result(journal, measured, rows), rows, drawing


def report_files(journal: JournalFile, folder: Path) -> Path:
    """The figures of a journal and ``sweeps.csv``, in a folder; the folder.

    Raises
    ------
    GatestepError
        As :func:`report`.
    """
    result, rows, drawing = measure_journal(journal, drawn=True)
    if drawing is not None:
        drawing.save(folder, result)
    _write_csv(folder / "sweeps.csv", rows)
    return folder


def title_of(journal: JournalFile) -> str:
    """The plan's title, the journal's name and when it was begun."""
    plans = [e.fields.get("plan") for e in journal.events if e.kind == "plan"]
    titles = [p["title"] for p in plans if isinstance(p, dict) and p.get("title")]
    begun = journal.start.strftime("%Y-%m-%d %H:%M")
    return " · ".join([*dict.fromkeys(titles), journal.path.name, begun])


def row_of(made: Measured, cells: Sequence[str]) -> Row:
    """One task's measures as plain values, units in the names; None is not measured."""
    task, fired, answer = made.task, made.firing, made.response
    first = fired.first
    return {
        "index": task.index,
        "sweep": task.name,
        "condition": task.condition,
        "repeat": task.repeat,
        "cell": cells[task.cell],
        "current_pa": task.current_pa,
        "start": task.start,
        "samples": made.ticks,
        "seconds": made.seconds,
        "complete": made.complete,
        "rest_mv": fired.rest_mv,
        "spikes": len(fired.spikes),
        "spikes_outside": fired.outside,
        "rate_hz": fired.rate_hz if made.complete else None,
        "steady_hz": fired.steady_hz,
        "latency_ms": fired.latency_ms,
        "peak_mv": first.peak_mv if first else None,
        "width_ms": first.width_ms if first else None,
        "ahp_mv": fired.ahp_mv,
        "deflection_mv": answer.deflection_mv if answer else None,
        "input_mohm": answer.input_mohm if answer else None,
        "own_mohm": answer.own_mohm if answer else None,
        "tau_ms": answer.tau_ms if answer else None,
        "charge_pc": made.charge_pc,
        "stimulus_pc": made.stimulus_pc,
        **{f"{name}_pc": pc for name, pc in (made.conductances_pc or {}).items()},
        "late": made.late,
        "lag_us": made.lag_us,
        "clipped": made.clipped,
        "missed": made.missed,
        "idle": made.idle,
        "damaged": made.damaged,
    }


def _result(journal: JournalFile, measured: list[Measured], rows: list[Row]) -> Row:
    spikes = [[s.time_ms for s in made.firing.spikes] for made in measured]
    sweeps = [{**row, "spikes_ms": times} for row, times in zip(rows, spikes, strict=True)]
    return {
        "journal": str(journal.path),
        "title": title_of(journal),
        "start": journal.start.isoformat(),
        "closed": journal.closed,
        "planned": any(made.task.planned for made in measured),
        "cells": journal.cells,
        "interval_us": journal.interval_us,
        "sweeps": sweeps,
        "conditions": conditions_of(measured, journal.cells),
        "ladders": ladders_of(measured, journal.cells),
    }


def _write_csv(path: Path, rows: list[Row]) -> None:
    names = list(dict.fromkeys(name for row in rows for name in row))
    part = path.with_name(f".{path.name}.part")
    try:
        with part.open("w", encoding="utf-8", newline="") as file:
            writer = csv.DictWriter(file, names, restval="")
            writer.writeheader()
            writer.writerows(rows)
        part.replace(path)
    except OSError as fault:
        with suppress(OSError):
            part.unlink(missing_ok=True)
        raise FileError(f"--csv {path}: cannot be written ({fault.strerror or fault})") from None


_CELL_COLUMNS = (
    ("current_pa", "step\npA", "{:g}"),
    ("rest_mv", "rest\nmV", "{:.1f}"),
    ("spikes", "spikes", "{}"),
    ("rate_hz", "rate\nHz", "{:.1f}"),
    ("latency_ms", "latency\nms", "{:.2f}"),
    ("peak_mv", "peak\nmV", "{:.1f}"),
    ("width_ms", "width\nms", "{:.3f}"),
    ("ahp_mv", "AHP\nmV", "{:.1f}"),
    ("input_mohm", "R in\nMΩ", "{:.1f}"),
    ("own_mohm", "R own\nMΩ", "{:.1f}"),
    ("tau_ms", "tau\nms", "{:.2f}"),
)
_LOOP_COLUMNS = (
    ("charge_pc", "charge\npC", "{:.2f}"),
    ("stimulus_pc", "stimulus\npC", "{:.2f}"),
    ("late", "late", "{}"),
    ("lag_us", "longest lag\nµs", "{:.1f}"),
    ("clipped", "clipped", "{}"),
    ("missed", "missed", "{}"),
    ("complete", "complete", "{}"),
)


def _print(result: Row) -> None:
    """Two tables: the cell's, then the loop's, with what is to be known of them."""
    from rich.console import Console

    width = max(NARROWEST, Console().width)
    console = Console(highlight=False, markup=False, width=width)
    rows = result["sweeps"]
    console.print(result["title"])
    if not result["planned"]:
        console.print("no plan in it: each stretch in which the loop was armed is one sweep")
    console.print()
    console.print(_table("What the cell did", rows, _CELL_COLUMNS, len(result["cells"]) > 1))
    console.print()
    charges = dict.fromkeys(k for row in rows for k in row if k.endswith("_pc"))
    named = [k for k in charges if k not in ("charge_pc", "stimulus_pc")]
    each = [(k, f"{k.removesuffix('_pc')}\npC", "{:.2f}") for k in named]
    columns = (*_LOOP_COLUMNS[:2], *each, *_LOOP_COLUMNS[2:])
    console.print(_table("What the loop did", rows, columns, len(result["cells"]) > 1))
    console.print()
    for line in notes_of(result):
        console.print(f"- {line}", soft_wrap=True)


def _table(
    title: str, rows: list[Row], columns: Sequence[tuple[str, str, str]], cells: bool
) -> Any:
    from rich import box
    from rich.table import Table

    table = Table(
        box=box.SIMPLE_HEAD, pad_edge=False, title=title, title_justify="left", padding=(0, 1, 0, 0)
    )
    table.add_column("no.", justify="right", no_wrap=True)
    table.add_column("sweep", no_wrap=True)
    for name in ("cell",) * cells:
        table.add_column(name, no_wrap=True)
    table.add_column("condition", overflow="fold", min_width=10)
    for _, heading, _ in columns:
        table.add_column(heading, justify="right", no_wrap=True)
    for number, row in enumerate(rows, 1):
        named = [str(number), f"{row['sweep']} {row['repeat'] + 1}"]
        cut = "" if row["complete"] else " (cut short)"
        named += [row["cell"]] * cells + [row["condition"] + cut]
        table.add_row(*named, *(_shown(row.get(key), form) for key, _, form in columns))
    return table


def _shown(value: Any, form: str) -> str:
    if value is None:
        return "-"
    if isinstance(value, bool):
        return "yes" if value else "NO"
    return form.format(value)


def notes_of(result: Row) -> list[str]:
    """What a reader of the tables must know, as far as it applies."""
    rows = result["sweeps"]
    notes = []
    cut = [str(number) for number, row in enumerate(rows, 1) if not row["complete"]]
    if cut:
        notes.append(f"not complete: {', '.join(cut)}; not in the rates against current")
    for key, words in (
        ("late", "answers came late"),
        ("clipped", "answers were clipped by the limits"),
        ("missed", "ticks had no sample"),
        ("idle", "answers were 0 because the loop was not armed"),
        ("damaged", "samples cannot be read: their blocks are damaged"),
        ("spikes_outside", "spikes lie outside the stimulus and are not counted"),
    ):
        total = sum(row[key] for row in rows)
        if total:
            notes.append(f"{total} {words}")
    notes.append("peak, width and AHP are the first spike's; AHP is its trough minus rest")
    notes.append("charge is of the answers, each held to the next sample; positive depolarises")
    if any(row["input_mohm"] is not None for row in rows):
        notes.append("R in: to the step; R own: to all injected current, the model's taken off")
    for key in ("csv", "figures"):
        for made in [result[key]] if key == "csv" and key in result else result.get(key, ()):
            notes.append(f"written: {made}")
    return notes
