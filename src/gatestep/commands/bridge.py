"""``gatestep bridge DEVICE``: a device on a serial line in a loop with a server."""

from __future__ import annotations

import json
import signal
import sys
import time
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from ..bridgehost import Bridge, Expected

_LOOK_S = 0.1
_REPORT_S = 1.0
ENDPOINT = "tcp://127.0.0.1:5790"


def bridge(
    device: str, baud: int, server: str | None, rig_file: Path | None, json_output: bool
) -> int:
    """Carry samples and answers until SIGINT or SIGTERM; returns the exit status.

    Every second a line on stderr says what was carried and the latency it cost; at the
    end a report goes to stdout, as JSON where asked.

    Parameters
    ----------
    device, baud
        The serial line.
    server : str, optional
        The server's loop endpoint; else the rig file's, else the usual one.
    rig_file : Path, optional
        The rig file of the server: its endpoint, and what the device must be.
    json_output : bool
        Report as JSON; then stderr has events only.

    Raises
    ------
    FileError
        When the rig file cannot be used.
    LinkError
        When the device cannot be opened.
    MissingExtraError
        Without pyserial.
    """
    from ..bridgehost import Bridge

    def say(text: str) -> None:
        print(f"gatestep: {text}", file=sys.stderr, flush=True)

    endpoint, expected = _expectations(server, rig_file)
    asked = _ask_signals()
    running = Bridge(device, baud, endpoint, say, expected)
    running.start()
    say(f"{device} is open; waiting for the device")
    try:
        _attend(running, asked, None if json_output else say)
    finally:
        running.halt()
    figures = running.figures()
    print(json.dumps(figures) if json_output else _report(figures), flush=True)
    return 0


def _expectations(server: str | None, rig_file: Path | None) -> tuple[str, Expected | None]:
    """The endpoint, and what the rig file says of the device."""
    from ..bridgehost import Expected

    if rig_file is None:
        return server or ENDPOINT, None
    from ..config import load_rig

    spec = load_rig(rig_file).spec
    expected = Expected(len(spec.cell), spec.loop.interval_us)
    return server or spec.loop.endpoint, expected


def _ask_signals() -> list[int]:
    """Signals that have asked for the end; filled as they come."""
    asked: list[int] = []

    def ask(number: int, _frame: FrameType | None) -> None:
        asked.append(number)

    for number in (signal.SIGINT, signal.SIGTERM):
        signal.signal(number, ask)
    return asked


def _attend(running: Bridge, asked: list[int], say: Any) -> None:
    """Wait for the end; each second tell what went on in it, if anything did."""
    due, before = time.monotonic() + _REPORT_S, running.figures()
    while running.running and not asked:
        time.sleep(_LOOK_S)
        if say is not None and time.monotonic() >= due:
            due += _REPORT_S
            now = running.figures()
            if now["samples"] != before["samples"]:
                say(_second(before, now))
            before = now


def _second(before: dict[str, Any], now: dict[str, Any]) -> str:
    """One second as a line."""
    counts = [f"{now[k] - before[k]} {k}" for k in ("samples", "answers")]
    rare = ("dropped", "overtaken", "damaged", "malformed")
    counts += [f"{now[k] - before[k]} {k}" for k in rare if now[k] != before[k]]
    ways = "; ".join(f"{way} {_spread(now['added_nsec'][key])}" for key, way in _WAYS.items())
    return f"{', '.join(counts)}; added so far in µs: {ways}"


_WAYS = {"to_server": "to the server", "to_device": "to the device"}


def _spread(percentiles: dict[str, float]) -> str:
    """Median and 99th percentile in µs."""
    if not percentiles:
        return "nothing yet"
    return ", ".join(f"{k} {percentiles[k] / 1000:.1f}" for k in ("p50", "p99"))


def _report(figures: dict[str, Any]) -> str:
    """The final figures as a few lines to read."""
    lines = [
        f"bridge         {figures['device']} at {figures['baud']} baud, {figures['endpoint']}",
        f"               line opened {figures['openings']} times, "
        f"server connected {figures['connections']} times",
        f"samples        {figures['samples']} to the server, {figures['dropped']} dropped for "
        f"newer ones, {figures['unserved']} without a server",
        f"answers        {figures['answers']} to the device, {figures['overtaken']} overtaken",
        f"faults         {figures['damaged']} damaged frames, {figures['malformed']} samples "
        f"malformed to the server, {figures['garbled']} messages that are no answer",
    ]
    for key, way in _WAYS.items():
        found = figures["added_nsec"][key]
        shown = ", ".join(f"{k} {v / 1000:.1f}" for k, v in found.items())
        lines.append(f"added          {way}: " + (f"{shown} µs" if found else "nothing carried"))
    if figures["malformed"]:
        lines.append(
            "note           samples were malformed to the server: "
            "does its rig file have as many cells as the device?"
        )
    return "\n".join(lines)
