"""The commands that steer a running server through its control socket."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any


def ask(
    verb: str,
    endpoint: str,
    json_output: bool,
    curve_server: Path | None = None,
    curve_client: Path | None = None,
    **arguments: Any,
) -> int:
    """Send one verb and print its answer; returns the exit status."""
    from ..control import Control

    with Control(endpoint, curve_server=curve_server, curve_client=curve_client) as control:
        if verb == "load":
            answer = control.load(arguments["model"], arguments["cell"])
        else:
            answer = control.ask(verb, **arguments)
    if json_output:
        print(json.dumps(answer))
    elif verb == "status":
        print_status(answer)
    else:
        print(_sentence(verb, answer))
    return 0


def split_assignment(text: str) -> tuple[str, float]:
    """``KEY=VALUE`` as a key and a number.

    Raises
    ------
    ControlError
        When there is no ``=`` or the value is no number.
    """
    from ..errors import ControlError

    key, equals, value = text.partition("=")
    try:
        return key.strip(), float(value)
    except ValueError:
        missing = "has no '='" if not equals else f"{value.strip()!r} is not a number"
        raise ControlError(f"set: {text!r} {missing}; write KEY=VALUE, as K.gmax_ns=120") from None


def print_status(status: dict[str, Any]) -> None:
    """Print a status for people."""
    from rich.console import Console
    from rich.table import Table

    console = Console(soft_wrap=True)
    fault = f" ({status['fault']})" if status["fault"] else ""
    console.print(
        f"{status['state']}{fault}; rig: {status['rig']}, seq {status['seq']}; "
        f"tick {status['interval_us']:g} µs, budget {status['budget_us']:g} µs; "
        f"lane {status['lane']}; up {status['uptime_s']:.0f} s",
        highlight=False,
    )
    names = ("answered", "late", "missed", "repeats", "malformed", "refused", "clipped", "trips")
    # What a sound run has few of, or none, is shown where there is any.
    rare = ("fallbacks", "clock_jumps", "undelivered", "records_lost")
    shown = (*names, *(n for n in rare if status.get(n)))
    console.print("  ".join(f"{n} {status[n]}" for n in shown), highlight=False)
    service = status["service_nsec"]
    if service:
        spread = "  ".join(f"{k} {v / 1000:.1f}" for k, v in service.items())
        console.print(f"service time in µs: {spread}", highlight=False)
    console.print(_record_line(status["recording"]), highlight=False)
    if status["plan"] and status["plan"]["running"]:
        plan = status["plan"]
        console.print(
            f"plan: {plan['title']}; {plan['ended']} of {plan['sweeps']} sweeps ended",
            highlight=False,
            markup=False,
        )
    for setting in status.get("host", []):
        if not setting["applied"]:
            console.print(
                f"not applied: {setting['setting']}: {setting['detail']}", highlight=False
            )
    table = Table("cell", "model in force", "prepared", "V (mV)", "I (pA)", "limit (pA)", box=None)
    for cell in status["cells"]:
        table.add_row(
            cell["name"],
            cell["model"],
            cell["prepared"] or "-",
            _figure(cell["v_mv"]),
            _figure(cell["i_pa"]),
            f"±{cell['limits']['current_pa']:g}",
        )
    console.print(table)


def _record_line(record: dict[str, Any]) -> str:
    """The state of the record for people."""
    if record["state"] == "off":
        return "record: off"
    if record["state"] == "failed":
        return f"record: FAILED, nothing more is kept: {record['reason']}"
    dropped = record["dropped_samples"]
    lost = f", {dropped} SAMPLES DROPPED" if dropped else ""
    return f"record: {record['path']}, {record['bytes'] / 1e6:.1f} MB{lost}"


def _figure(value: float | None) -> str:
    return "-" if value is None else f"{value:.2f}"


def _sentence(verb: str, answer: dict[str, Any]) -> str:
    after = "" if answer.get("seq") is None else f" after sample {answer['seq']}"
    if verb == "load":
        error = answer["table_error"]
        return (
            f"prepared {answer['model']} for cell {answer['cell']}: {answer['gates']} gates, "
            f"largest table error {error:.1e} of full scale; 'gatestep swap' puts it in force"
        )
    if verb == "swap":
        return f"{answer['model']} is in force in cell {answer['cell']}{after}"
    if verb == "set":
        return f"{answer['key']} = {answer['value']:g} in cell {answer['cell']}{after}"
    if verb == "mark":
        return f"marked{after}: {answer['text']}"
    if verb == "stop":
        return "stopping at 0 pA"
    if verb == "halt":
        ended = (answer["plan"] or {"ended": 0})["ended"]
        return f"the plan is ended at 0 pA after {ended} sweeps"
    return f"{answer['state']}{after}"
