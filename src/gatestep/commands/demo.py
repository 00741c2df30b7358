"""``gatestep demo``: a server, a simulated rig, a plan of three sweeps, and its record.

The scenario is our own invention: a passive cell answers a current step; given Na
and K conductances it fires; given an M-type K conductance as well, it fires and adapts.
The server plays it as a plan while the loop runs, and its journal is replayed, reported
and, with the extra for it, exported. Cell and data are simulated.
"""

from __future__ import annotations

import json
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import FileError, LinkError, MissingExtraError
from .demo_rigs import STATEMENT, check_alive, living, served, write_file, write_rig

if TYPE_CHECKING:
    from ..control import Control
    from ..journalfile import JournalFile

INTERVAL_US = 25.0
_LOOK_S = 0.02
_PATIENCE_S = 120.0
STEP_PA = 250.0
SHORTEST_S, LONGEST_S = 0.3, 60.0
PARTS = ("cell alone", "with Na and K", "with Na, K and M-type K")
_ON, _OFF = 0.2, 0.9  # of the step, as a share of each part

_CELLS = """\
[[cell]]
name = "cell"
model = "regular-spiking"
capacitance_pf = 118.4
[cell.limits]
current_pa = 80000
window_mv = [-120, 80]

[simulated]
pace = "lockstep"
[[simulated.cell]]
capacitance_pf = 118.4
leak_ns = 4.0
leak_mv = -70.0
noise_mv = 0.02
"""
_PLAN = """\
# Written by gatestep demo. {statement}
title = "A conductance given through the loop"

[plan]
pause_ms = 0
"""
_SWEEP = """
[[sweep]]
name = "part-{number}"
condition = "{name}"
duration_ms = {length_ms}
{setting}
[[sweep.stimulus]]
kind = "step"
start_ms = {start_ms}
stop_ms = {stop_ms}
current_pa = {step_pa}
"""
_SETTINGS = ("scale = 0.0", "", 'model = "regular-spiking-m"')

PROOF_US = 100.0
PROOF_PARTS = ("plain loop", "anticipating")
_PROOF_CELL = """\
[[cell]]
name = "{name}"
model = "regular-spiking-m"
{capacitance}
[cell.limits]
current_pa = 40000
window_mv = [-200, 200]

"""
_PROOF_S = 0.26
_PROOF_SIMULATED = """\
[[simulated.cell]]
capacitance_pf = 118.4
leak_ns = 4.0
leak_mv = -70.0
[[simulated.cell.step]]
start_ms = 30
stop_ms = 230
current_pa = {step_pa}
"""


@dataclass(frozen=True)
class Part:
    """One part of the scenario: what was in force, and its step, in ms."""

    name: str
    start_ms: float
    step_ms: float
    stop_ms: float
    end_ms: float


def demo(seconds: float, out: Path, json_output: bool) -> int:
    """Play the scenario and say what came of it; returns the exit status.

    Parameters
    ----------
    seconds : float
        Length of the scenario in the simulated rig's time, 0.3 to 60 s.
    out : Path
        Folder for the rig file, the trace and the figure.
    json_output : bool
        Print the summary as JSON.

    Raises
    ------
    GatestepError
        When the folder cannot be written or one of the two processes fails.
    """
    if not SHORTEST_S <= seconds <= LONGEST_S:
        raise FileError(f"--seconds {seconds:g}: give {SHORTEST_S:g} to {LONGEST_S:g} seconds")
    rig_file = write_rig(out / "rig.toml", INTERVAL_US, _CELLS)
    plan_file = write_file(out / "plan.toml", _plan(scenario(seconds)))
    with _bar(not json_output) as progress:
        progress("starting; the first start of an installation compiles", None)
        played = _play(rig_file, plan_file, progress)
        proof = _prove(out, progress)
        progress("replaying and reporting", None)
        kept = _keep(out, out / "records" / Path(played.pop("journal")).name)
    kept["files"] = {"rig": str(rig_file), "plan": str(plan_file), **kept["files"]}
    summary = {"about": STATEMENT, **kept, **played, "anticipation": proof}
    print(json.dumps(summary) if json_output else _text(summary))
    return 0


def scenario(seconds: float) -> list[Part]:
    """The parts of the scenario, evenly long."""
    length = 1000.0 * seconds / len(PARTS)
    return [
        Part(name, k * length, (k + _ON) * length, (k + _OFF) * length, (k + 1) * length)
        for k, name in enumerate(PARTS)
    ]


def _plan(parts: list[Part]) -> str:
    """The scenario as a plan: a sweep for each part."""
    sweeps = [
        _SWEEP.format(
            number=number,
            name=part.name,
            length_ms=round(part.end_ms - part.start_ms, 6),
            setting=setting,
            start_ms=round(part.step_ms - part.start_ms, 6),
            stop_ms=round(part.stop_ms - part.start_ms, 6),
            step_pa=STEP_PA,
        )
        for number, (part, setting) in enumerate(zip(parts, _SETTINGS, strict=True), 1)
    ]
    return _PLAN.format(statement=STATEMENT) + "".join(sweeps)


def _write_proof(out: Path) -> Path:
    """Two like cells: the loop anticipates for the one whose capacitance it is told."""
    stated = ("# capacitance not stated: a plain loop", "capacitance_pf = 118.4")
    cells = "".join(
        _PROOF_CELL.format(name=name.replace(" ", "-"), capacitance=text)
        for name, text in zip(PROOF_PARTS, stated, strict=True)
    )
    simulated = '[record]\non = false\n\n[simulated]\npace = "lockstep"\n'
    simulated += 2 * _PROOF_SIMULATED.format(step_pa=STEP_PA)
    return write_rig(out / "anticipation.toml", PROOF_US, cells + simulated)


def _play(rig_file: Path, plan_file: Path, progress: Any) -> dict[str, Any]:
    """Run the plan on a server of our own; the loop's figures, and where its journal is."""
    with served(rig_file) as (server, control), living(rig_file) as rig:
        while not _is_sampled(control):
            check_alive(server, "server")
            rig.check()
            time.sleep(_LOOK_S)
        control.run(plan_file.read_text(encoding="utf-8"), plan_file, timeout_s=_PATIENCE_S)
        while (plan := control.ask("sweeps")["plan"])["running"]:
            check_alive(server, "server")
            rig.check()
            now = plan["now"]
            share = plan["ended"] + (now["ticks_done"] / now["ticks"] if now else 0.0)
            progress("running", share / plan["sweeps"])
            time.sleep(_LOOK_S)
        status = control.status()
        trips = rig.end()
        control.stop()
        server.wait(_PATIENCE_S)
    if plan["why"] != "complete":
        raise LinkError(f"the plan ended early: {plan['why']}")
    counts = ("answered", "clipped", "late", "missed", "trips")
    return {
        **{name: status[name] for name in counts},
        "service_nsec": status["service_nsec"],
        "round_trip_us": trips,
        "journal": status["recording"]["path"],
    }


def _is_sampled(control: Control) -> bool:
    try:
        return control.ask("status", timeout_s=0.5)["seq"] is not None
    except LinkError:
        return False


def _prove(out: Path, progress: Any) -> dict[str, Any]:
    """Run the same model plain and anticipating, where plain fails; what came of it."""
    from ..config import load_rig
    from ..simrig import SimRig

    progress("the same at a slow tick, plain and anticipating", None)
    rig_file = _write_proof(out)
    rig = load_rig(rig_file)
    with (
        served(rig_file, "--arm", "--force") as (server, control),
        SimRig(rig.spec, rig.folder, connect_s=_PATIENCE_S) as there,
    ):
        trace = there.run(_PROOF_S)
        control.stop()
        server.wait(_PATIENCE_S)
    figures = {}
    for c, name in enumerate(PROOF_PARTS):
        low, high = float(trace.v_mv[:, c].min()), float(trace.v_mv[:, c].max())
        figures[name] = {"spikes": len(trace.spikes(c)), "trough_mv": low, "peak_mv": high}
    path = out / "anticipation.npz"
    trace.save(path)
    return {"interval_us": PROOF_US, "trace": str(path), "parts": figures}


def _keep(out: Path, path: Path) -> dict[str, Any]:
    """What the journal gives: the parts' figures, the replay's verdict, and files."""
    from ..comparison import compare
    from ..journalfile import open_journal
    from .report import measure_journal

    with open_journal(path) as journal:
        verdict = compare(journal)
        rows = measure_journal(journal, drawn=False)[0]["sweeps"]
        files, notes = _draw(out, journal)
    return {
        "parts": [_part_figures(row) for row in rows],
        "replay": "identical" if verdict.identical and verdict.complete else "NOT identical",
        "files": {"journal": str(path), **files, **_export(path, out / "demo.nwb", notes)},
        "notes": notes,
    }


def _draw(out: Path, journal: JournalFile) -> tuple[dict[str, str], list[str]]:
    """The figures, where they can be drawn, and why not where they cannot."""
    from ..simtrace import Trace
    from .demo_figures import draw_proof, draw_scenario
    from .report import report_files

    try:
        files = {"figure": str(draw_scenario(journal, out / "demo.png"))}
        proof = Trace.load(out / "anticipation.npz")
        files["anticipation"] = str(draw_proof(proof, PROOF_US, out / "anticipation.png"))
        files["report"] = str(report_files(journal, out / "report"))
    except MissingExtraError as missing:
        return {}, [f"no figures: {missing}"]
    return files, []


def _export(path: Path, out: Path, notes: list[str]) -> dict[str, str]:
    """The NWB file, where the extra for it is there."""
    from ..nwb import export

    try:
        return {"export": str(export(path, out, overwrite=True).path)}
    except MissingExtraError as missing:
        notes.append(f"no NWB file: {missing}")
        return {}


def _part_figures(row: dict[str, Any]) -> dict[str, Any]:
    times = row["spikes_ms"]
    intervals = [after - before for before, after in pairwise(times)]
    return {
        "name": row["condition"],
        "spikes": len(times),
        "first_spike_latency_ms": row["latency_ms"],
        "first_interval_ms": intervals[0] if intervals else None,
        "last_interval_ms": intervals[-1] if intervals else None,
        "peak_mv": row["peak_mv"],
    }


def _text(summary: dict[str, Any]) -> str:
    lines = [f"gatestep demo. {summary['about']}", ""]
    head = f"{'':26}{'spikes':>7}{'first after':>13}{'intervals':>20}{'peak':>10}"
    lines.append(head)
    for part in summary["parts"]:
        first, last = part["first_interval_ms"], part["last_interval_ms"]
        intervals = "-" if first is None else f"{first:.1f} to {last:.1f} ms"
        latency = part["first_spike_latency_ms"]
        after = "-" if latency is None else f"{latency:.1f} ms"
        peak = "-" if part["peak_mv"] is None else f"{part['peak_mv']:.1f} mV"
        lines.append(f"{part['name']:26}{part['spikes']:>7}{after:>13}{intervals:>20}{peak:>10}")
    service = {k: v / 1000 for k, v in summary["service_nsec"].items()}
    trips = summary["round_trip_us"]
    lines += [
        "",
        f"answered {summary['answered']}   clipped {summary['clipped']}   late {summary['late']}   "
        f"missed {summary['missed']}   trips {summary['trips']}",
        "service time (µs)   " + "   ".join(f"{k} {v:.1f}" for k, v in service.items()),
        f"round trip (µs)     p50 {trips['p50']:.0f}   p99 {trips['p99']:.0f}",
        "",
        f"with Na, K and M-type K at a tick and a delay of {PROOF_US:g} µs:",
        *(
            f"{name:26}{found['spikes']:>7} spikes, {found['trough_mv']:.0f} to "
            f"{found['peak_mv']:.0f} mV"
            for name, found in summary["anticipation"]["parts"].items()
        ),
        "",
        f"replay        {summary['replay']}",
        *(f"{k:13} {v}" for k, v in summary["files"].items()),
        *summary["notes"],
    ]
    return "\n".join(lines)


@contextmanager
def _bar(shown: bool) -> Iterator[Any]:
    """A progress line on stderr: call with a phase and a fraction, None for unknown."""
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

    columns = (TextColumn("{task.description}"), BarColumn(), TimeElapsedColumn())
    console = Console(stderr=True)
    with Progress(*columns, console=console, transient=True, disable=not shown) as bar:
        task = bar.add_task("starting", total=None)

        def show(phase: str, fraction: float | None) -> None:
            if fraction is None:
                bar.update(task, description=phase, total=None)
            else:
                # Never quite whole: the clock of a task that is done stands still.
                bar.update(task, description=phase, total=1.0, completed=min(fraction, 0.99))

        yield show
