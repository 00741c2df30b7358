"""``gatestep journal PATH``: what a journal holds, and what of it is lost."""

from __future__ import annotations

import json
from dataclasses import asdict
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from ..wire import LATE, LIVE, NIL, REPEAT

if TYPE_CHECKING:
    from ..journalfile import Event, JournalFile

Summary = dict[str, Any]

_SHOWN_SEPARATELY = ("kind", "position", "seq", "nsec")
_WIDEST = 100


def show_journal(path: Path, json_output: bool, with_events: bool) -> int:
    """Read a journal once and say what is in it; the exit status is 1 if it is damaged.

    A tail that a killed server or a power cut has torn off is no damage.

    Raises
    ------
    JournalError
        When the file is no journal, or its first block is damaged.
    """
    from ..journalfile import open_journal

    with open_journal(path) as journal:
        summary = summary_of(journal)
        events = [_plain_event(journal, event) for event in journal.events] if with_events else []
        if json_output:
            more = {"events": events} if with_events else {}
            print(json.dumps({**summary, **more}, ensure_ascii=False))
        else:
            _print(summary)
            _print_events(events)
        return int(bool(summary["damaged"]))


def summary_of(journal: JournalFile) -> Summary:
    """What a journal holds, as plain data; reads all of it, a block at a time."""
    measured = _measured(journal)
    counts: dict[str, int] = {}
    for event in journal.events:
        counts[event.kind] = counts.get(event.kind, 0) + 1
    header = journal.header
    models = [
        {"id": m.id, "name": m.name, "path": m.path, "sha256": m.sha256}
        for m in journal.models.values()
    ]
    return {
        "path": str(journal.path),
        "bytes": journal.size,
        "format": header.get("format"),
        "program": header.get("program"),
        "rig": header["rig"].get("path"),
        "start": journal.start.isoformat(),
        "interval_us": journal.interval_us,
        "cells": journal.cells,
        "closed": journal.closed,
        "samples": len(journal.samples),
        **measured,
        "models": models,
        "in_force": _stretches(journal),
        "sweeps": [_sweep(journal, k) for k in range(len(journal.sweeps))],
        "gaps": _gaps(journal),
        "trips": _trips(journal),
        "event_counts": counts,
        "lost_entries": _total(journal, "lost", "entries"),
        "dropped_samples": _total(journal, "dropped", "samples"),
        "tail": None if journal.tail is None else asdict(journal.tail),
        "damaged": [asdict(found) for found in journal.damaged],
    }


def _measured(journal: JournalFile) -> Summary:
    """Duration, and the counts and percentiles of lateness and service times."""
    from ..watch import Durations

    lag, service = Durations(), Durations()
    counts = {"readable": 0, "repeats": 0, "late": 0, "live": 0, "lag_known": 0}
    nsec: list[int] = []
    for piece in journal.samples.pieces():
        samples = piece.samples
        nsec += [int(samples["nsec"][0]), int(samples["nsec"][-1])]
        fresh = samples[samples["flags"] & REPEAT == 0]
        known = fresh["lag_us"][fresh["lag_us"] != NIL]
        counts["readable"] += len(samples)
        counts["repeats"] += len(samples) - len(fresh)
        counts["late"] += int(np.count_nonzero(fresh["flags"] & LATE))
        counts["live"] += int(np.count_nonzero(fresh["flags"] & LIVE))
        counts["lag_known"] += len(known)
        lag.add((1000 * known).astype(np.int64))
        service.add(fresh["service_nsec"])
    percentiles = {name: value / 1000 for name, value in lag.percentiles().items()}
    return {
        "duration_s": (nsec[-1] - nsec[0]) / 1e9 if nsec else 0.0,
        **counts,
        "lag_us": percentiles,
        "service_nsec": service.percentiles(),
    }


def _stretches(journal: JournalFile) -> list[Summary]:
    """Which model each cell had over which samples, with how many parameters set meanwhile."""
    size = len(journal.samples)
    found: list[Summary] = []
    for k, cell in enumerate(journal.cells):
        own = [
            e for e in journal.events
            if e.kind in {"in_force", "swap", "set"} and e.fields.get("cell") in {k, cell}
            and e.fields.get("outcome", "done") == "done"
        ]  # fmt: skip
        swaps = [e for e in own if e.kind != "set"]
        ends = [*(e.position for e in swaps[1:]), size]
        for swap, stop in zip(swaps, ends, strict=False):
            start = min(swap.position, size)
            sets = [e for e in own if e.kind == "set" and start <= e.position < stop]
            found.append(
                {
                    "cell": cell,
                    "model": swap.fields.get("model"),
                    "name": swap.fields.get("name"),
                    "start": start,
                    "stop": stop,
                    "set": len(sets),
                }
            )
    return [stretch for stretch in found if stretch["stop"] > stretch["start"] or not size]


def _sweep(journal: JournalFile, k: int) -> Summary:
    sweep = journal.sweeps[k]
    named = {key: sweep.fields.get(key) for key in ("name", "condition")}
    plain = {"sweep": sweep.index, "start": sweep.start, "stop": sweep.stop}
    return {**plain, **named, "complete": sweep.complete}


def _gaps(journal: JournalFile) -> Summary:
    missed = [e.fields.get("missed") for e in journal.events if e.kind == "gap"]
    known = [m for m in missed if isinstance(m, int)]
    return {"count": len(missed), "missed": sum(known), "unknown": len(missed) - len(known)}


def _trips(journal: JournalFile) -> list[Summary]:
    return [
        {
            "position": e.position,
            "seq": e.seq,
            "time": journal.time_of(e.nsec).isoformat(),
            "text": e.fields.get("text"),
            "cell": e.fields.get("cell"),
        }
        for e in journal.events
        if e.kind == "trip"
    ]


def _total(journal: JournalFile, kind: str, key: str) -> int:
    return sum(int(e.fields.get(key) or 0) for e in journal.events if e.kind == kind)


def _plain_event(journal: JournalFile, event: Event) -> Summary:
    common = {key: getattr(event, key) for key in _SHOWN_SEPARATELY}
    return {**common, "time": journal.time_of(event.nsec).isoformat(), **event.fields}


def _print(s: Summary) -> None:
    """A summary for people."""
    from rich.console import Console

    console = Console(highlight=False, markup=False, soft_wrap=True)
    how = "closed" if s["closed"] else "not closed: its server was killed, failed or still runs"
    console.print(f"{s['path']}: {s['bytes']:,} bytes, {how}")
    console.print(
        f"begun {s['start']}, {s['duration_s']:.3f} s; tick {s['interval_us']:g} µs; "
        f"cells {', '.join(s['cells'])}; rig file {s['rig']}"
    )
    console.print(
        f"{s['samples']:,} samples, {s['live']:,} live, {s['repeats']:,} repeats; {s['late']:,} "
        f"late; {s['gaps']['count']:,} gaps with {s['gaps']['missed']:,} ticks missed; "
        f"{len(s['trips'])} trips; {len(s['sweeps'])} sweeps"
    )
    for title, spread, unit in (("lag", s["lag_us"], 1.0), ("service", s["service_nsec"], 1e-3)):
        if spread:
            shown = "  ".join(f"{name} {unit * value:.1f}" for name, value in spread.items())
            console.print(f"{title} in µs: {shown}")
    _print_stretches(console, s)
    for trip in s["trips"]:
        where = f"at {trip['time']}, before sample {trip['position']:,}"
        console.print(f"trip {where}: {trip['text']}", style="bold red")
    counts = "  ".join(f"{kind} {count}" for kind, count in sorted(s["event_counts"].items()))
    console.print(f"events: {counts or 'none'}")
    for line in _losses(s):
        console.print(line, style="bold red")


def _print_stretches(console: Any, s: Summary) -> None:
    from rich.table import Table

    table = Table("cell", "model in force", "from sample", "before sample", "s", "set", box=None)
    for row in s["in_force"]:
        seconds = (row["stop"] - row["start"]) * s["interval_us"] * 1e-6
        numbers = (f"{row['start']:,}", f"{row['stop']:,}", f"{seconds:.3f}", str(row["set"]))
        table.add_row(row["cell"], str(row["name"]), *numbers)
    console.print(table)


def _losses(s: Summary) -> list[str]:
    """What is not in the journal, or cannot be read, in words."""
    lines = []
    tail = s["tail"]
    if tail:
        known = "samples not known" if tail["samples"] is None else f"{tail['samples']} samples"
        lines.append(
            f"torn off at byte {tail['offset']:,}: {tail['bytes']:,} bytes ({known}): "
            f"{tail['reason']}"
        )
    for found in s["damaged"]:
        lines.append(
            f"damaged at byte {found['offset']:,}: {found['samples']:,} samples from place "
            f"{found['position']:,}: {found['reason']}"
        )
    if s["dropped_samples"]:
        lines.append(f"left out by the writer: {s['dropped_samples']:,} samples")
    if s["lost_entries"]:
        lines.append(f"lost before the writer: {s['lost_entries']:,} entries of the loop's log")
    return lines


def _print_events(events: list[Summary]) -> None:
    """One line an event."""
    for event in events:
        others = {k: v for k, v in event.items() if k not in (*_SHOWN_SEPARATELY, "time")}
        said = ", ".join(f"{k} {v}" for k, v in others.items())
        said = said if len(said) <= _WIDEST else f"{said[: _WIDEST - 3]}..."
        print(f"{event['time']}  {event['position']:>10}  {event['kind']:<12} {said}")
