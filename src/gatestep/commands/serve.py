"""``gatestep serve``: run a server in this process until it is told to stop."""

from __future__ import annotations

import contextlib
import json
import queue
import signal
import sys
import threading
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from ..server import Say, Server

CAUTION = (
    "Not a medical device; never for use on people. Try every model and rig on a model cell "
    "first, know the amplifier's limits, and keep to its manual, local rules and licensed practice."
)

_MOST_LINES = 1000
_LAST_WORDS_S = 1.0


def serve(rig_file: Path, arm: bool, force: bool, json_output: bool) -> int:
    """Serve a rig file; returns the exit status.

    SIGINT and SIGTERM make the loop answer 0 pA and end in order.
    """
    from ..config import load_rig
    from ..server import Server

    speaker = Speaker()
    try:
        return _serve(Server(load_rig(rig_file), speaker.say), arm, force, json_output, speaker.say)
    finally:
        speaker.close()


def _serve(server: Server, arm: bool, force: bool, json_output: bool, say: Say) -> int:
    stop_asked = False

    def ask_stop(_number: int, _frame: FrameType | None) -> None:
        nonlocal stop_asked
        stop_asked = True

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


class Speaker:
    """Says lines on stderr from a thread of its own.

    Whoever reads stderr may stall; the thread that carries disarm and stop must not.
    """

    def __init__(self) -> None:
        self._lines: queue.Queue[str | None] = queue.Queue(_MOST_LINES)
        self._thread = threading.Thread(target=self._run, name="speaker", daemon=True)
        self._thread.start()

    def say(self, text: str) -> None:
        """Say a line, soon; it is left out where a thousand wait already."""
        with contextlib.suppress(queue.Full):
            self._lines.put_nowait(text)

    def close(self) -> None:
        """Say what waits, if that can be done at once."""
        with contextlib.suppress(queue.Full):
            self._lines.put_nowait(None)
        self._thread.join(_LAST_WORDS_S)

    def _run(self) -> None:
        while (text := self._lines.get()) is not None:
            with contextlib.suppress(OSError, ValueError):
                print(f"gatestep: {text}", file=sys.stderr, flush=True)


def _announce(endpoints: dict[str, str], record: dict[str, Any], json_output: bool) -> None:
    if json_output:
        print(
            json.dumps(
                {
                    "ready": True,
                    "endpoints": endpoints,
                    "journal": record["path"] if record["state"] == "on" else None,
                }
            ),
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
    if record["state"] == "failed":
        print(f"journal: FAILED: {record['reason']}", flush=True)
    elif record["path"]:
        print(f"journal: {record['path']}, {record['samples']} samples", flush=True)
