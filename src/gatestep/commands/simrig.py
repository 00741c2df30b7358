"""``gatestep simrig RIG.toml``: the simulated rig as a client of a running server."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import FileError
from .bar import bar

if TYPE_CHECKING:
    from ..simrig import Progress, SimRig
    from ..simtrace import Summary, Trace

SEGMENT_TICKS = 500_000
"""Ticks in memory at once when no trace is kept."""
MOST_KEPT_TICKS = 20_000_000
"""Longest trace that is kept whole; about 2 GB with one cell."""


def simulate(
    rig_path: Path,
    seconds: float | None = None,
    out: Path | None = None,
    json_output: bool = False,
    pace: str | None = None,
    seed: int | None = None,
    threshold_mv: float = 0.0,
    curve_secret: Path | None = None,
    curve_server: Path | None = None,
    wait_s: float = 3.0,
) -> dict[str, Any]:
    """Run the simulated rig against a running server and print what happened.

    Parameters
    ----------
    rig_path : Path
        The rig file that the server was started with.
    seconds, pace, seed : optional
        In place of the rig file's ``[simulated]`` values.
    out : Path, optional
        Where to write the whole trace, as npz.
    json_output : bool
        Print the figures as JSON.
    threshold_mv : float
        A spike is a rise of the membrane through this voltage.
    curve_server : Path, optional
        The server's public CURVE certificate; the rig file's if not given.
    curve_secret : Path, optional
        The rig's own secret CURVE certificate.
    wait_s : float
        How long to wait for a server to accept the connection.

    Returns
    -------
    dict
        The figures, as ``--json`` prints them.

    Raises
    ------
    FileError
        When the rig file, a native model or ``out`` cannot be used.
    LinkError
        When no server answers.
    """
    from ..config import load_rig
    from ..simrig import SimRig
    from ..simtrace import Summary

    loaded = load_rig(rig_path)
    if out is not None and not out.resolve().parent.is_dir():
        raise FileError(f"{out}: its folder does not exist; make it or choose another --out")
    with SimRig(
        loaded.spec,
        loaded.path.parent,
        pace=pace,
        seconds=seconds,
        seed=seed,
        curve_secret=curve_secret,
        curve_server=curve_server,
        connect_s=wait_s,
    ) as rig:
        summary = Summary(rig.cell_names, threshold_mv)
        with bar(f"simulated rig, {rig.pace}") as progress:
            trace = _run(rig, summary, out is not None, progress)
        figures = {
            "rig": str(loaded.path),
            "endpoint": rig.endpoint,
            "pace": rig.pace,
            "interval_us": rig.interval_us,
            "seed": rig.simulated.seed,
            **summary.figures(),
            "counters": rig.counters,
        }
    if out is not None:
        trace.save(out)
        figures["out"] = str(out)
    print(json.dumps(figures) if json_output else _text(figures))
    return figures


def _run(rig: SimRig, summary: Summary, keep: bool, progress: Progress) -> Trace:
    """Run in segments, or in one when its trace is kept; the last trace."""
    total = round(rig.simulated.seconds * 1e6 / rig.interval_us)
    if keep and total > MOST_KEPT_TICKS:
        raise FileError(
            f"--out: a trace of {total} ticks is too long, at most {MOST_KEPT_TICKS} are kept; "
            "give fewer --seconds or leave --out away"
        )
    done = 0
    while True:
        ticks = total - done if keep else min(SEGMENT_TICKS, total - done)
        start = done
        trace = rig.run(
            ticks * rig.interval_us * 1e-6,
            progress=lambda now, _, start=start: progress(start + now, total),  # type: ignore[misc]
        )
        summary.add(trace)
        done += ticks
        if done >= total:
            return trace


def _text(figures: dict[str, Any]) -> str:
    """The figures as a few lines to read."""
    lines = [
        f"simulated rig  {figures['seconds']:g} s, {figures['ticks']} ticks of "
        f"{figures['interval_us']:g} µs, {figures['pace']}, at {figures['endpoint']}",
        f"               {figures['simulated']}",
    ]
    for cell in figures["cells"]:
        lines.append(f"{cell['name']:<13}  {_cell_text(cell)}")
    counts = ("live", "clipped", "late", "missed", "gaps", "tripped", "refused")
    lines.append("answers        " + ", ".join(f"{figures.get(k, 0)} {k}" for k in counts))
    trips = figures["round_trip_us"]
    if trips["p50"] is not None:
        shown = ", ".join(f"{k} {v:.0f}" for k, v in trips.items())
        lines.append(f"round trip     {shown} µs (host time)")
    if figures.get("tripped", 0):
        lines.append(
            "note           the loop had tripped: 'gatestep status' says why, 'gatestep reset' "
            "clears it"
        )
    elif figures.get("live", 0) == 0:
        lines.append("note           no answer was live: the server is not armed (gatestep arm)")
    if figures.get("refused", 0):
        lines.append("note           answers were refused: another rig holds or held the loop")
    if "out" in figures:
        lines.append(f"trace          {figures['out']}")
    return "\n".join(lines)


def _cell_text(cell: dict[str, Any]) -> str:
    text = f"{cell['spikes']} spike{'' if cell['spikes'] == 1 else 's'}"
    if cell["first_spike_ms"] is not None:
        text += f", first at {cell['first_spike_ms']:.3f} ms"
    if cell["rate_hz"] is not None:
        text += f", {cell['rate_hz']:.2f} Hz"
    return f"{text}; membrane {cell['trough_mv']:.1f} to {cell['peak_mv']:.1f} mV"
