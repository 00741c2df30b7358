"""``gatestep demo``: a server and a simulated rig as two processes, and one scenario.

The scenario is our own invention: a passive cell answers a current step; given Na
and K conductances it fires; given an M-type K conductance as well, by a swap while
the loop runs, it fires and adapts. Cell and data are simulated.
"""

from __future__ import annotations

import json
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

from ..errors import FileError, LinkError, MissingExtraError

if TYPE_CHECKING:
    from ..control import Control
    from ..simtrace import Trace

INTERVAL_US = 25.0
STEP_PA = 250.0
SHORTEST_S, LONGEST_S = 0.3, 60.0
PARTS = ("cell alone", "with Na and K", "with Na, K and M-type K")
STATEMENT = "Simulated cell and simulated data: no recording from a real cell."
_ON, _OFF = 0.2, 0.9  # of the step, as a share of each part

_RIG = """\
# Written by gatestep demo. {statement}
[loop]
endpoint = "{loop}"
interval_us = {interval_us}

[control]
endpoint = "{control}"

[feed]
endpoint = "{feed}"

[limits]
silence_ms = 20000          # the simulated rig waits while the server compiles

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
    rig_file = _write_rig(out, seconds, parts)
    with _bar(not json_output) as progress, _processes(rig_file, out) as (server, rig, control):
        progress("starting; the first start on a machine compiles", None)
        confirmed = _play(rig, server, control, parts, progress)
        figures = _finish(rig)
        status = control.status()
        control.stop()
        server.wait(10)
    summary = _summary(out, parts, confirmed, figures, status)
    print(json.dumps(summary) if json_output else _text(summary))
    return 0


def scenario(seconds: float) -> list[Part]:
    """The parts of the scenario, evenly long."""
    length = 1000.0 * seconds / len(PARTS)
    return [
        Part(name, k * length, (k + _ON) * length, (k + _OFF) * length, (k + 1) * length)
        for k, name in enumerate(PARTS)
    ]


def _write_rig(out: Path, seconds: float, parts: list[Part]) -> Path:
    loop, control, feed = (f"tcp://127.0.0.1:{port}" for port in _free_ports(3))
    steps = "\n".join(
        f"[[simulated.cell.step]]\nstart_ms = {p.step_ms}\nstop_ms = {p.stop_ms}\n"
        f"current_pa = {STEP_PA}"
        for p in parts
    )
    text = _RIG.format(
        statement=STATEMENT,
        loop=loop,
        control=control,
        feed=feed,
        interval_us=INTERVAL_US,
        seconds=seconds,
        steps=steps,
    )
    try:
        out.mkdir(parents=True, exist_ok=True)
        (out / "rig.toml").write_text(text, encoding="utf-8")
    except OSError as fault:
        raise FileError(f"--out {out}: {fault.strerror or fault}; choose another folder") from fault
    return out / "rig.toml"


def _free_ports(count: int) -> list[int]:
    sockets = [socket.socket() for _ in range(count)]
    try:
        for each in sockets:
            each.bind(("127.0.0.1", 0))
        return [each.getsockname()[1] for each in sockets]
    finally:
        for each in sockets:
            each.close()


@contextmanager
def _processes(rig_file: Path, out: Path) -> Iterator[tuple[Any, Any, Control]]:
    """A server and a simulated rig for it; both have ended afterwards."""
    from ..config import load_rig
    from ..control import Control

    command = [sys.executable, "-m", "gatestep"]
    endpoint = load_rig(rig_file).spec.control.endpoint
    pipes = {"stdout": subprocess.PIPE, "stderr": subprocess.PIPE, "text": True}
    server = subprocess.Popen([*command, "serve", str(rig_file), "--json"], **pipes)  # type: ignore[call-overload]
    trace = str(out / "demo.npz")
    rig = subprocess.Popen(
        [*command, "simrig", str(rig_file), "--json", "--wait", "120", "--out", trace], **pipes
    )  # type: ignore[call-overload]
    try:
        with Control(endpoint) as control:
            yield server, rig, control
    finally:
        for process in (rig, server):
            if process.poll() is None:
                process.send_signal(signal.SIGINT)
                try:
                    process.wait(5)
                except subprocess.TimeoutExpired:
                    process.kill()
                    process.wait()


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
        _check(server, "server")
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


def _check(process: Any, name: str) -> None:
    if process.poll() is not None:
        raise LinkError(
            f"the {name} ended with status {process.returncode}: {process.stderr.read()}"
        )


def _finish(rig: Any) -> dict[str, Any]:
    printed, said = rig.communicate(timeout=30)
    if rig.returncode:
        raise LinkError(f"the simulated rig ended with status {rig.returncode}: {said.strip()}")
    figures: dict[str, Any] = json.loads(printed)
    return figures


def _summary(
    out: Path,
    parts: list[Part],
    confirmed: dict[str, int | None],
    figures: dict[str, Any],
    status: dict[str, Any],
) -> dict[str, Any]:
    from ..simtrace import Trace

    trace = Trace.load(out / "demo.npz")
    files = {"rig": str(out / "rig.toml"), "trace": str(out / "demo.npz")}
    note = None
    try:
        files["figure"] = str(_draw(trace, parts, confirmed, out / "demo.png"))
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
        *(f"{k:7} {v}" for k, v in summary["files"].items()),
    ]
    if summary["note"]:
        lines.append(f"no figure: {summary['note']}")
    return "\n".join(lines)


def _draw(trace: Trace, parts: list[Part], confirmed: dict[str, int | None], path: Path) -> Path:
    """Voltage and injected current over time, the parts marked."""
    try:
        from matplotlib.figure import Figure
    except ImportError:
        raise MissingExtraError("matplotlib", "figure", "Drawing the demo's figure") from None
    figure = Figure(figsize=(10, 6), layout="constrained")
    top, middle, bottom = figure.subplots(3, 1, sharex=True, height_ratios=[3, 2, 1])
    t_s = trace.t_ms / 1000.0
    top.plot(t_s, trace.v_mv[:, 0], color="#1b3a4b", linewidth=0.8)
    top.set_ylabel("membrane (mV)")
    answered = trace.i_pa[:, 0] - trace.stimulus_pa[:, 0]
    middle.plot(t_s, answered / 1000.0, color="#9a3324", linewidth=0.6)
    middle.set_ylabel("model's current (nA)")
    bottom.plot(t_s, trace.stimulus_pa[:, 0], color="#444444", linewidth=1.0)
    bottom.set_ylabel("step (pA)")
    bottom.set_xlabel("time in the simulated rig (s)")
    for part in parts:
        centre = 0.5 * (part.start_ms + part.end_ms) / 1000.0
        top.annotate(part.name, (centre, 1.02), xycoords=("data", "axes fraction"), ha="center")
    for verb in ("arm", "swap"):
        seq = confirmed.get(verb)
        if seq is not None:
            for axes in (top, middle, bottom):
                axes.axvline(seq * INTERVAL_US / 1e6, color="#8a8a8a", linewidth=0.8, linestyle=":")
    for axes in (top, middle, bottom):
        axes.spines[["top", "right"]].set_visible(False)
    figure.suptitle(f"A conductance given through the loop. {STATEMENT}", fontsize=10)
    temporary = path.with_suffix(".part.png")
    figure.savefig(temporary, dpi=130)
    temporary.replace(path)
    return path


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
