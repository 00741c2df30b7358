"""``gatestep demo``: a server and a simulated rig as two processes, and one scenario.

The scenario is our own invention: a passive cell answers a current step; given Na
and K conductances it fires; given an M-type K conductance as well, by a swap while
the loop runs, it fires and adapts. Cell and data are simulated.
"""

from __future__ import annotations

import json
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import FileError, LinkError, MissingExtraError
from .demo_rigs import STATEMENT, check_alive, finish, processes, write_rig

if TYPE_CHECKING:
    from ..control import Control
    from ..simtrace import Trace

INTERVAL_US = 25.0
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
current_pa = 40000
window_mv = [-120, 80]

[simulated]
pace = "lockstep"
seconds = {seconds}
[[simulated.cell]]
capacitance_pf = 118.4
leak_ns = 4.0
leak_mv = -70.0
noise_mv = 0.02
{steps}
"""

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


@dataclass(frozen=True)
class Order:
    """An order to give once the rig has come to a time, and what it is called."""

    at_ms: float
    verb: str


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
    parts = scenario(seconds)
    rig_file = _write_scenario(out, seconds, parts)
    with _bar(not json_output) as progress:
        progress("starting; the first start on a machine compiles", None)
        with processes(rig_file, out / "demo.npz") as (server, rig, control):
            confirmed = _play(rig, server, control, parts, progress)
            figures = finish(rig)
            status = control.status()
            control.stop()
            server.wait(10)
        proof = _prove(out, progress)
    summary = _summary(out, parts, confirmed, figures, status, proof)
    print(json.dumps(summary) if json_output else _text(summary))
    return 0


def scenario(seconds: float) -> list[Part]:
    """The parts of the scenario, evenly long."""
    length = 1000.0 * seconds / len(PARTS)
    return [
        Part(name, k * length, (k + _ON) * length, (k + _OFF) * length, (k + 1) * length)
        for k, name in enumerate(PARTS)
    ]


def _write_scenario(out: Path, seconds: float, parts: list[Part]) -> Path:
    steps = "\n".join(
        f"[[simulated.cell.step]]\nstart_ms = {p.step_ms}\nstop_ms = {p.stop_ms}\n"
        f"current_pa = {STEP_PA}"
        for p in parts
    )
    return write_rig(out / "rig.toml", INTERVAL_US, _CELLS.format(seconds=seconds, steps=steps))


def _write_proof(out: Path) -> Path:
    """Two like cells: the loop anticipates for the one whose capacitance it is told."""
    stated = ("# capacitance not stated: a plain loop", "capacitance_pf = 118.4")
    cells = "".join(
        _PROOF_CELL.format(name=name.replace(" ", "-"), capacitance=text)
        for name, text in zip(PROOF_PARTS, stated, strict=True)
    )
    simulated = '[simulated]\npace = "lockstep"\nseconds = 0.26\n'
    simulated += 2 * _PROOF_SIMULATED.format(step_pa=STEP_PA)
    return write_rig(out / "anticipation.toml", PROOF_US, cells + simulated)


def _prove(out: Path, progress: Any) -> dict[str, Any]:
    """Run the same model plain and anticipating, where plain fails; what came of it."""
    from ..simtrace import Trace

    progress("the same at a slow tick, plain and anticipating", None)
    path = out / "anticipation.npz"
    with processes(_write_proof(out), path, "--arm", "--force") as (server, rig, control):
        finish(rig)
        control.stop()
        server.wait(10)
    trace = Trace.load(path)
    figures = {}
    for c, name in enumerate(PROOF_PARTS):
        low, high = float(trace.v_mv[:, c].min()), float(trace.v_mv[:, c].max())
        figures[name] = {"spikes": len(trace.spikes(c)), "trough_mv": low, "peak_mv": high}
    return {"interval_us": PROOF_US, "trace": str(path), "parts": figures}


def _play(
    rig: Any, server: Any, control: Control, parts: list[Part], progress: Any
) -> dict[str, int | None]:
    """Give the scenario's orders as the rig comes to their times; where each took force."""
    _, with_na_k, with_m = parts
    lead_ms = 0.5 * (with_na_k.step_ms - with_na_k.start_ms)
    orders = [
        Order(with_na_k.start_ms, "arm"),
        Order(with_na_k.step_ms + lead_ms, "load"),
        Order(with_m.start_ms, "swap"),
        Order(0.5 * (with_m.stop_ms + with_m.end_ms), "disarm"),
    ]
    confirmed: dict[str, int | None] = {}
    while rig.poll() is None:
        check_alive(server, "server")
        now_ms = _now_ms(control)
        progress("running", None if now_ms is None else now_ms / parts[-1].end_ms)
        while orders and now_ms is not None and now_ms >= orders[0].at_ms:
            verb = orders.pop(0).verb
            argument = {"model": "regular-spiking-m"} if verb == "load" else {}
            answer = control.ask(verb, timeout_s=30, **argument)
            confirmed[verb] = answer.get("seq")
        time.sleep(0.002)
    if orders and rig.returncode == 0:
        raise LinkError(f"the rig was through before {orders[0].verb!r} could be ordered")
    return confirmed


def _now_ms(control: Control) -> float | None:
    """The rig's time by the newest sample, None before the first."""
    try:
        seq = control.ask("status", timeout_s=0.5)["seq"]
    except LinkError:
        return None
    return None if seq is None else float(seq) * INTERVAL_US / 1000.0


def _summary(
    out: Path,
    parts: list[Part],
    confirmed: dict[str, int | None],
    figures: dict[str, Any],
    status: dict[str, Any],
    proof: dict[str, Any],
) -> dict[str, Any]:
    from ..simtrace import Trace
    from .demo_figures import draw_proof, draw_scenario

    trace = Trace.load(out / "demo.npz")
    files = {"rig": str(out / "rig.toml"), "trace": str(out / "demo.npz")}
    note = None
    try:
        marks = [confirmed.get(verb) for verb in ("arm", "swap", "disarm")]
        marks_s = [seq * INTERVAL_US / 1e6 for seq in marks if seq is not None]
        files["figure"] = str(draw_scenario(trace, parts, marks_s, out / "demo.png"))
        second = draw_proof(Trace.load(Path(proof["trace"])), PROOF_US, out / "anticipation.png")
        files["anticipation"] = str(second)
    except MissingExtraError as missing:
        note = str(missing)
    return {
        "about": STATEMENT,
        "parts": [_part_figures(trace, part) for part in parts],
        "orders_after_sample": confirmed,
        "answered": status["answered"],
        "clipped": status["clipped"],
        "late": status["late"],
        "missed": status["missed"],
        "trips": status["trips"],
        "service_nsec": status["service_nsec"],
        "round_trip_us": figures["round_trip_us"],
        "anticipation": proof,
        "files": files,
        "note": note,
    }


def _part_figures(trace: Trace, part: Part) -> dict[str, Any]:
    during = (trace.t_ms >= part.start_ms) & (trace.t_ms < part.end_ms)
    times = trace.spikes()
    times = times[(times >= part.step_ms) & (times < part.end_ms)]
    intervals = times[1:] - times[:-1]
    return {
        "name": part.name,
        "spikes": len(times),
        "first_spike_latency_ms": float(times[0] - part.step_ms) if len(times) else None,
        "first_interval_ms": float(intervals[0]) if len(intervals) else None,
        "last_interval_ms": float(intervals[-1]) if len(intervals) else None,
        "peak_mv": float(trace.v_mv[during, 0].max()),
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
        peak = f"{part['peak_mv']:.1f} mV"
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
        *(f"{k:13} {v}" for k, v in summary["files"].items()),
    ]
    if summary["note"]:
        lines.append(f"no figure: {summary['note']}")
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
                bar.update(task, description=phase)
            else:
                bar.update(task, description=phase, total=1.0, completed=fraction)

        yield show
