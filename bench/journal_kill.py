"""What a journal survives, and what it costs: real servers killed, disks that fail, round trips.

    python bench/journal_kill.py kill [--rounds N]      SIGKILL at random moments under load
    python bench/journal_kill.py fail [--rounds N]      the disk takes no more, then SIGKILL
    python bench/journal_kill.py effect [--rounds N]    round trips with and without a record
    python bench/journal_kill.py load [--seconds S]     50 kHz, 4 cells: samples dropped

``kill`` and ``fail`` run ``gatestep serve`` and, as its rig, ``gatestep simrig`` by the clock.
A disk fails by a limit on the size of files, put on the running server: its next write past
it is refused by the system, as one on a full disk is.
"""

from __future__ import annotations

import argparse
import json
import random
import resource
import signal
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from gatestep.config import load_rig
from gatestep.control import Control
from gatestep.errors import GatestepError
from gatestep.journalfile import JournalFile, open_journal
from gatestep.measuring import Probe

PATIENCE_S = 60.0
_GATESTEP = [sys.executable, "-m", "gatestep"]

_RIG = """\
[loop]
endpoint = "ipc://{folder}/loop"
interval_us = {interval_us}
budget_us = 1000000
[control]
endpoint = "ipc://{folder}/control"
[feed]
endpoint = "ipc://{folder}/feed"
[record]
on = {on}
flush_ms = {flush_ms}
[limits]
silence_ms = 600000
late_run = 1000000
[simulated]
pace = "real"
seconds = 3600
"""
_CELL = """
[[cell]]
name = "cell{number}"
model = "squid-axon"
capacitance_pf = 30
[cell.limits]
current_pa = 200000
"""


@dataclass
class Serving:
    """A server that runs, its folder, and the lines that it has said."""

    folder: Path
    process: subprocess.Popen[str]

    @property
    def rig(self) -> Path:
        """Its rig file."""
        return self.folder / "rig.toml"

    def control(self) -> Control:
        """A client of it."""
        return Control(f"ipc://{self.folder}/control", timeout_s=PATIENCE_S)

    def said(self) -> str:
        """What it has printed."""
        return (self.folder / "said").read_text("utf-8", "replace")

    def journal(self) -> JournalFile:
        """Its journal."""
        (path,) = (self.folder / "records").glob("*.journal")
        return open_journal(path)


def wait_for(true: Any, what: str) -> Any:
    """Wait for something that must come."""
    until = time.monotonic() + PATIENCE_S
    while not (found := true()):
        if time.monotonic() > until:
            raise SystemExit(f"never came: {what}")
        time.sleep(0.01)
    return found


@contextmanager
def serving(
    interval_us: float = 100.0, cells: int = 1, on: bool = True, flush_ms: float = 200.0
) -> Iterator[Serving]:
    """An armed server in a process of its own, which ends with the block."""
    with tempfile.TemporaryDirectory(prefix="journal") as name:
        folder = Path(name)
        text = _RIG.format(
            folder=folder, interval_us=interval_us, on=str(on).lower(), flush_ms=flush_ms
        )
        text += "".join(_CELL.format(number=k) for k in range(cells))
        (folder / "rig.toml").write_text(text, "utf-8")
        with (folder / "said").open("w") as said:
            process = subprocess.Popen(
                [*_GATESTEP, "serve", str(folder / "rig.toml"), "--arm", "--force"],
                stdout=said,
                stderr=subprocess.STDOUT,
                text=True,
            )
        server = Serving(folder, process)
        try:
            wait_for(lambda: "ready: " in server.said(), f"a server; it said {server.said()}")
            yield server
        finally:
            if process.poll() is None:
                process.terminate()
            process.wait(PATIENCE_S)


@contextmanager
def simulated(server: Serving) -> Iterator[None]:
    """The simulated rig as the server's client; over once samples are answered."""
    command = [*_GATESTEP, "simrig", str(server.rig)]
    rig = subprocess.Popen(command, stdout=subprocess.DEVNULL, stderr=subprocess.DEVNULL)
    try:
        with server.control() as control:
            wait_for(lambda: control.status()["answered"] > 100, "answers")
        yield
    finally:
        rig.terminate()
        rig.wait(PATIENCE_S)


def check(journal: JournalFile) -> dict[str, Any]:
    """What a journal of a killed server must be: readable, unbroken, and with its model."""
    numbers = journal.samples.column("seq")
    faults = []
    if journal.verify():
        faults.append(f"damaged: {journal.damaged}")
    if not np.array_equal(numbers, np.unique(numbers)):
        faults.append("samples out of order")
    # Events stand before their samples: some may be beyond the last that is kept.
    gaps = [e for e in journal.events if e.kind == "gap" and e.position < len(numbers)]
    if int(np.sum(np.diff(numbers) - 1)) != sum(e.fields["missed"] for e in gaps):
        faults.append("samples are missing that no event tells of")
    if journal.in_force(0)[0].name != "squid-axon" or not journal.models[0].tables().gates:
        faults.append("no model")
    tail = 0 if journal.tail is None else journal.tail.bytes
    return {"samples": len(numbers), "torn_bytes": tail, "faults": faults}


def kill_round(pick: random.Random) -> dict[str, Any]:
    """Kill a server that samples; how long before the kill the last sample is that is kept."""
    with serving() as server:
        with simulated(server):
            time.sleep(pick.uniform(0.0, 1.0))
            killed = time.monotonic_ns()
            server.process.send_signal(signal.SIGKILL)
            server.process.wait()
        with server.journal() as journal:
            found = check(journal)
            if not found["samples"]:
                # Killed before the first flush of a sample: what may be lost is all there was.
                return {**found, "lost_ms": None}
            last = int(journal.samples[-1]["nsec"])
            return {**found, "lost_ms": (killed - last) / 1e6}


def fail_round(pick: random.Random) -> dict[str, Any]:
    """Let the disk fail under a server: the loop must go on, say it once, and keep what was."""
    with serving(flush_ms=20.0) as server:
        with simulated(server), server.control() as control:
            wait_for(lambda: control.status()["recording"]["samples"] > 0, "a record")
            size = int(control.status()["recording"]["bytes"]) + pick.randrange(200_000)
            resource.prlimit(server.process.pid, resource.RLIMIT_FSIZE, (size, size))
            status = wait_for(
                lambda: (s := control.status())["recording"]["state"] == "failed" and s,
                "a failed record",
            )
            later = wait_for(
                lambda: (s := control.status())["answered"] > status["answered"] + 100 and s,
                "answers after the failure",
            )
            server.process.send_signal(signal.SIGKILL)
            server.process.wait()
        with server.journal() as journal:
            found = check(journal)
            faults = found["faults"]
            loud = server.said().count("RECORD FAILED")
            if loud != 1:
                faults.append(f"said {loud} times")
            if later["state"] != "armed":
                faults.append(f"the loop is {later['state']}: {later['fault']}")
            if found["samples"] != later["recording"]["samples"]:
                faults.append("the file has not what the server says")
            words = [e for e in journal.events if e.kind == "dropped"]
            return {**found, "last_word": bool(words), "reason": later["recording"]["reason"]}


def survive(round_of: Any, rounds: int) -> dict[str, Any]:
    """Rounds of one kind, and what they come to."""
    pick, results = random.Random(20261201), []
    for k in range(rounds):
        try:
            results.append(round_of(pick))
        except GatestepError as fault:
            results.append({"samples": 0, "torn_bytes": 0, "faults": [str(fault)]})
        print(f"{k + 1}/{rounds} {results[-1]}", file=sys.stderr)
    lost = [r["lost_ms"] for r in results if r.get("lost_ms") is not None]
    spread = {}
    if lost:
        spread = {"lost_ms": {"median": float(np.median(lost)), "largest": max(lost)}}
    return {
        "rounds": rounds,
        "faulty": [r for r in results if r["faults"]],
        "torn": sum(r["torn_bytes"] > 0 for r in results),
        "with_last_word": sum(bool(r.get("last_word")) for r in results),
        **spread,
    }


def effect(rounds: int, seconds: float = 1.0, cells: int = 4) -> dict[str, Any]:
    """Median round trips flat out with the record on and off, two servers taking turns."""
    medians: dict[bool, list[float]] = {True: [], False: []}
    tails: dict[bool, list[float]] = {True: [], False: []}
    with serving(20.0, cells, True) as on, serving(20.0, cells, False) as off:
        spec = load_rig(on.rig).spec
        with (
            Probe(f"ipc://{on.folder}/loop", spec) as a,
            Probe(f"ipc://{off.folder}/loop", spec) as b,
        ):
            probes = {True: a, False: b}
            for k in range(rounds + 1):
                for recorded in (True, False) if k % 2 else (False, True):
                    trips = probes[recorded].flat(seconds).round_trip_us
                    if k:  # the first round warms up
                        medians[recorded].append(float(np.median(trips)))
                        tails[recorded].append(float(np.percentile(trips, 99)))
        with on.control() as control:
            recording = control.status()["recording"]
    ratios = {}
    for name, found in (("p50", medians), ("p99", tails)):
        spread = np.percentile(np.array(found[True]) / np.array(found[False]), (10, 50, 90))
        ratios[name] = dict(zip(("p10", "median", "p90"), spread.tolist(), strict=True))
    return {
        "rounds": rounds,
        "cells": cells,
        "on_us": float(np.median(medians[True])),
        "off_us": float(np.median(medians[False])),
        "ratio": ratios,
        "recording": recording,
    }


def load(seconds: float, cells: int = 4) -> dict[str, Any]:
    """50 kHz by the clock, then flat out: what of it is in the journal."""
    found: dict[str, Any] = {}
    for how in ("paced", "flat"):
        with serving(20.0, cells) as server:
            spec = load_rig(server.rig).spec
            with Probe(f"ipc://{server.folder}/loop", spec) as probe:
                run = probe.paced(int(seconds * 5e4)) if how == "paced" else probe.flat(seconds)
            with server.control() as control:
                wait_for(lambda c=control: c.status()["rig"] == "none", "the end of the rig")
                status = control.status()
                control.ask("stop")
            server.process.wait(PATIENCE_S)
            with server.journal() as journal:
                closing = journal.closing or {}
                found[how] = {
                    "khz": round(status["answered"] / run.seconds / 1e3, 1),
                    "answered": status["answered"],
                    "missed": status["missed"],
                    "in_journal": len(journal.samples),
                    "dropped_samples": closing.get("dropped_samples"),
                    "records_lost": status["records_lost"],
                    "queue_high_water_bytes": closing.get("queue_high_water_bytes"),
                    "journal_mb": round(journal.size / 1e6, 1),
                    "p50_us": float(np.median(run.round_trip_us)),
                }
    return found


def main() -> int:
    """Run one of the four; the exit status is 1 where a journal did not survive."""
    parser = argparse.ArgumentParser(description=(__doc__ or "").partition("\n")[0])
    parser.add_argument("what", choices=("kill", "fail", "effect", "load"))
    parser.add_argument("--rounds", type=int, default=50)
    parser.add_argument("--seconds", type=float, default=60.0)
    given = parser.parse_args()
    if given.what == "effect":
        result = effect(given.rounds)
    elif given.what == "load":
        result = load(given.seconds)
    else:
        result = survive(kill_round if given.what == "kill" else fail_round, given.rounds)
    print(json.dumps({given.what: result}, indent=2))
    return int(bool(result.get("faulty")))


if __name__ == "__main__":
    sys.exit(main())
