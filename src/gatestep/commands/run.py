"""``gatestep run``: a plan, sweep by sweep, on a running server."""

from __future__ import annotations

import json
import shlex
import signal
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

from ..control import Control
from ..errors import ControlError, LinkError
from ..plans import load_plan

_POLL_S = 0.2
_PREPARE_S = 600.0
_RIG_S = 15.0
_INTERRUPTED = 130
_COMPLETE = "complete"


def run(
    plan_file: Path,
    endpoint: str,
    seed: int | None,
    force: bool,
    json_output: bool,
    curve: tuple[Path | None, Path | None],
) -> int:
    """Play a plan and tell of every sweep; returns the exit status.

    0 when every sweep was played to its end, 1 when the plan ended before, 130 after
    Ctrl-C. Whatever happens to this command, the server ends a plan at 0 pA.

    Raises
    ------
    GatestepError
        When the plan cannot be read, or the server refuses it.
    """
    plan = load_plan(plan_file)
    for number in (signal.SIGTERM, signal.SIGHUP):
        signal.signal(number, signal.default_int_handler)

    def connect() -> Control:
        return Control(endpoint, curve_server=curve[0], curve_client=curve[1])

    with connect() as control:
        recording = _wait_for_rig(control, json_output)["recording"]
        if not json_output:
            _introduce(plan, recording)
        try:
            answer = control.run(plan.text, plan.path, seed, force, timeout_s=_PREPARE_S)
            told = _watch(control, answer, json_output)
        except ControlError:
            raise  # the server itself refused, or has ended the plan
        except BaseException as fault:
            told = _end(connect)
            if not isinstance(fault, KeyboardInterrupt):
                raise
            _report(told, recording, json_output)
            return _INTERRUPTED
    _report(told, recording, json_output)
    return 0 if told["why"] == _COMPLETE else 1


def _end(connect: Callable[[], Control]) -> dict[str, Any]:
    """End the plan by a connection of its own, as the old one may yet bring another answer.

    Raises
    ------
    LinkError
        When the server does not answer: then nobody here knows whether the plan still plays.
    """
    try:
        with connect() as control:
            return _halt(control)
    except LinkError as fault:
        raise LinkError(
            f"{fault}. THE PLAN MAY STILL BE PLAYING: try 'gatestep halt' or 'gatestep stop', and "
            "look at the rig's output"
        ) from fault


def _wait_for_rig(control: Control, quiet: bool) -> dict[str, Any]:
    """The status once a rig samples, or after some seconds without one."""
    until, told = time.monotonic() + _RIG_S, quiet
    while (status := control.status())["seq"] is None or status["rig"] == "none":
        if time.monotonic() > until:
            return status
        if not told:
            print("waiting for a rig", file=sys.stderr)
            told = True
        time.sleep(_POLL_S)
    return status


def _introduce(plan: Any, recording: dict[str, Any]) -> None:
    seconds = plan.duration_ms() / 1000
    print(f"{plan.spec.title}: {len(plan.expand())} sweeps, {seconds:.1f} s; preparing them")
    if recording["state"] == "on":
        print(f"recorded in {recording['path']}")
    else:
        why = f": {recording['reason']}" if recording.get("reason") else ""
        print(f"NOT recorded: the server's record is {recording['state']}{why}", file=sys.stderr)


def _watch(control: Control, answer: dict[str, Any], quiet: bool) -> dict[str, Any]:
    """Follow the plan to its end; a line for each sweep that has ended."""
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

    columns = (TextColumn("{task.description}", markup=False), BarColumn(), TimeElapsedColumn())
    console = Console(stderr=quiet, quiet=quiet)
    told: dict[str, Any] = {}
    with Progress(*columns, console=console, transient=True, disable=quiet) as bar:
        task = bar.add_task("waiting for the first sweep", total=answer["sweeps"])
        done: list[dict[str, Any]] = []
        while True:
            told = _ask_on(control, len(done))
            for sweep in told["done"]:
                bar.console.print(_line(sweep, answer["sweeps"]), highlight=False, markup=False)
            done += told["done"]
            if told["now"]:
                bar.update(task, description=_line(told["now"], answer["sweeps"]))
            bar.update(task, completed=_share_done(len(done), told["now"]))
            if not told["running"] and len(done) == told["ended"]:
                return {**told, "done": done}
            time.sleep(_POLL_S)


def _ask_on(control: Control, since: int) -> dict[str, Any]:
    """The plan's state."""
    plan = control.ask("sweeps", since=since)["plan"]
    if plan is None:
        raise ControlError("the server was started anew while the plan ran; look at its journal")
    return dict(plan)


def _share_done(done: int, now: dict[str, Any] | None) -> float:
    return done + (now["ticks_done"] / now["ticks"] if now else 0.0)


def _line(sweep: dict[str, Any], count: int) -> str:
    """One sweep in a line."""
    end = "" if sweep["complete"] is not False else "  cut short"
    late = f"  {sweep['late']} late" if sweep["late"] else ""
    clipped = f"  {sweep['clipped']} clipped" if sweep["clipped"] else ""
    step = "" if sweep["current_pa"] is None else f"{sweep['current_pa']:g} pA  "
    return (
        f"{sweep['sweep'] + 1:4d}/{count}  {sweep['name']}  {sweep['condition']}  "
        f"{step}{sweep['spikes']} spike{'' if sweep['spikes'] == 1 else 's'}{late}{clipped}{end}"
    )


def _halt(control: Control) -> dict[str, Any]:
    """End the plan, and wait until what was in force before it is back."""
    nothing: dict[str, Any] = {
        "title": None,
        "sweeps": 0,
        "done": [],
        "why": "halted before the first sweep",
    }
    try:
        if control.halt()["plan"] is None:
            return nothing
    except ControlError:  # it may just have ended by itself, or never begun
        if control.ask("sweeps")["plan"] is None:
            return nothing
    done: list[dict[str, Any]] = []
    while True:
        told = _ask_on(control, len(done))
        done += told["done"]
        if not told["running"] and len(done) == told["ended"]:
            return {**told, "done": done}
        time.sleep(_POLL_S)


def _report(told: dict[str, Any], recording: dict[str, Any], json_output: bool) -> None:
    done, path = told["done"], recording["path"]
    if json_output:
        complete = told["why"] == _COMPLETE
        kept = {"journal": path, "complete": complete, "why": told["why"]}
        print(json.dumps({"title": told["title"], "planned": told["sweeps"], **kept, "done": done}))
        return
    whole = sum(1 for sweep in done if sweep["complete"])
    if told["why"] == _COMPLETE:
        back = "; the model that was in force before is back" if told["restored"] else ""
        print(f"{whole} sweeps played; 0 pA{back}")
    else:
        print(f"ended after {whole} of {told['sweeps']} sweeps ({told['why']}); 0 pA")
    if path and done:
        print(f"gatestep report {shlex.quote(path)}")
