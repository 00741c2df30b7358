"""``gatestep serve``: run a server in this process until it is told to stop."""

from __future__ import annotations

import json
import signal
import sys
from pathlib import Path
from types import FrameType
from typing import Any

CAUTION = (
    "Not a medical device; never for use on people. Try every model and rig on a model cell "
    "first, know the amplifier's limits, and keep to its manual, local rules and licensed practice."
)


def serve(rig_file: Path, arm: bool, force: bool, json_output: bool) -> int:
    """Serve a rig file; returns the exit status.

    SIGINT and SIGTERM make the loop answer 0 pA and end in order.
    """
    from ..config import load_rig
    from ..server import Server

    def say(text: str) -> None:
        print(f"gatestep: {text}", file=sys.stderr, flush=True)

    stop_asked = False

    def ask_stop(_number: int, _frame: FrameType | None) -> None:
        nonlocal stop_asked
        stop_asked = True

    server = Server(load_rig(rig_file), say)
    say(CAUTION)
    for number in (signal.SIGINT, signal.SIGTERM):
        signal.signal(number, ask_stop)
    try:
        server.start()
        if arm and not stop_asked:
            server.arm(force)
            say("armed from the start" + (", whatever the check says" if force else ""))
        _announce(server.endpoints(), server.recording(), json_output)
        result = server.attend(until=lambda: stop_asked)
        _close_report(server.watch.summary(), server.recording(), json_output)
    finally:
        server.close()
    if result:
        say("the loop socket was lost; the loop has ended")
    return result


def _announce(endpoints: dict[str, str], record: dict[str, Any], json_output: bool) -> None:
    if json_output:
        print(
            json.dumps({"ready": True, "endpoints": endpoints, "journal": record["path"]}),
            flush=True,
        )
        return
    print("ready: " + ", ".join(f"{k} {v}" for k, v in endpoints.items()), flush=True)
    if record["state"] == "on":
        print(f"journal: {record['path']}", flush=True)


def _close_report(summary: dict[str, Any], record: dict[str, Any], json_output: bool) -> None:
    if json_output:
        print(json.dumps({"stopped": True, **summary, "recording": record}), flush=True)
        return
    counts = ("answered", "late", "missed", "clipped", "trips")
    print("stopped at 0 pA: " + ", ".join(f"{summary[k]} {k}" for k in counts), flush=True)
    if record["path"]:
        print(f"journal: {record['path']}, {record['samples']} samples", flush=True)
