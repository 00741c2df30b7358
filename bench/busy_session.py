"""A long recorded session in which everything happens, and its replay.

    python busy_session.py [--minutes 10] [--seed 1] [--folder DIR] [--json]
    python busy_session.py --sweeps 1000

A server and the simulated rig in lockstep: a noisy cell, lost and jittering answers, two
minutes at a time with anticipation and without. Meanwhile models are loaded and swapped,
parameters set, plans played and halted; a conductance that no cell bears trips the loop,
which is reset and armed again. Then a rig that leaves ticks out, sends samples twice and
measures NaN. At the end the journal is replayed. Prints what was in it and whether the
replay is identical; the exit status is 1 if it is not.

With ``--sweeps`` it plays so many sweeps instead, two models in turn, and says how many
ticks were missed and how many sweeps began where the plan had them.

The cell, its models and everything that happens to it are gatestep's own inventions.
"""

from __future__ import annotations

import argparse
import contextlib
import itertools
import json
import random
import sys
import tempfile
import threading
import time
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import msgpack
import zmq

from gatestep.comparison import compare
from gatestep.config import LoadedRig
from gatestep.control import Control
from gatestep.errors import ControlError, LinkError
from gatestep.journalfile import open_journal
from gatestep.server import Server
from gatestep.simrig import SimRig
from gatestep.specs import RigSpec

TICK_US = 50.0
PIECE_S = 1.0
MODELS = ("squid-axon", "squid-na-k", "fast-spiking-cortical", "leak")
KINDS = ("swap", "swap", "set", "set", "set", "mark", "plan", "trip", "rest", "rest")
PLAN = """
title = "Steps and noise under two conductances"
[plan]
pause_ms = 5.0
ramp_ms = 2.0
order = "shuffled"
[[sweep]]
name = "both"
duration_ms = 40.0
scale = [0.0, 0.5, 1.0]
[[sweep.stimulus]]
kind = "step"
start_ms = 5.0
stop_ms = 30.0
current_pa = [100.0, 300.0]
[[sweep.stimulus]]
kind = "noise"
start_ms = 0.0
stop_ms = 40.0
sd_pa = 20.0
tau_ms = 3.0
seed = 5
"""


@dataclass
class Session:
    """What a session left behind."""

    journal: Path
    done: Counter[str]


def rig_of(folder: Path, anticipate: bool) -> LoadedRig:
    """A rig with one noisy cell that loses an answer now and then."""
    sockets: dict[str, dict[str, object]] = {
        n: {"endpoint": f"ipc://{folder}/{n}"} for n in ("loop", "control", "feed")
    }
    sockets["loop"] |= {"interval_us": TICK_US, "anticipate": anticipate, "apply": "on-arrival"}
    spec = RigSpec.model_validate(
        {
            **sockets,
            "limits": {"silence_ms": 600_000.0, "late_run": 1000},
            "record": {"folder": str(folder / "records"), "flush_ms": 50.0},
            "cell": [
                {
                    "name": "cell",
                    "model": "squid-axon",
                    "capacitance_pf": 30.0,
                    "limits": {"current_pa": 60_000.0, "window_mv": (-140.0, 90.0)},
                }
            ],
            "simulated": {
                "seconds": 1.0,
                "jitter_us": 10.0,
                "delay_us": 20.0,
                "drop": 0.01,
                "cell": [{"noise_mv": 0.2, "leak_ns": 6.0}],
            },
        }
    )
    return LoadedRig(folder / "busy.toml", "", spec)


@contextlib.contextmanager
def served(rig: LoadedRig) -> Iterator[Control]:
    """A server on a thread, and a control client."""
    server = Server(rig)
    server.start()
    over = threading.Event()
    thread = threading.Thread(target=server.attend, args=(over.is_set,))
    thread.start()
    try:
        with Control(server.endpoints()["control"], timeout_s=30.0) as control:
            yield control
    finally:
        over.set()
        thread.join()
        server.close()


class Meddler:
    """Does to a server what users do, in an order drawn from a seed."""

    def __init__(self, control: Control, folder: Path, seed: int) -> None:
        self.control, self.draw, self.done = control, random.Random(seed), Counter[str]()
        self.first = ["set", "swap", "plan", "mark", "trip", "rest", "set", "swap"]
        self.plan = folder / "busy-plan.toml"
        self.plan.write_text(PLAN, encoding="utf-8")

    def act(self) -> None:
        """One thing; what the server refuses is refused."""
        kind = self.first.pop(0) if self.first else self.draw.choice(KINDS)
        with contextlib.suppress(ControlError):
            getattr(self, f"_{kind}")()
            self.done[kind] += 1
        with contextlib.suppress(ControlError):
            status = self.control.status()
            if status["state"] == "tripped":
                self.control.reset()
                self.done["reset"] += 1
            if status["state"] != "armed" and not (status["plan"] or {}).get("running"):
                self.control.arm(force=True)

    def _swap(self) -> None:
        self.control.load(self.draw.choice(MODELS))
        self.control.swap(force=True)

    def _set(self) -> None:
        parameters = self.control.status()["cells"][0]["parameters"]
        key = self.draw.choice(sorted(parameters))
        factor = self.draw.uniform(0.5, 1.5)
        self.control.set(key, parameters[key] * factor)

    def _mark(self) -> None:
        self.control.mark(f"note {self.done['mark']}")

    def _plan(self) -> None:
        self.control.run(PLAN, self.plan, force=True, timeout_s=60.0)
        if self.draw.random() < 0.3:
            time.sleep(0.05)
            self.control.halt()
            self.done["halt"] += 1

    def _trip(self) -> None:
        parameters = self.control.status()["cells"][0]["parameters"]
        key = next(k for k in sorted(parameters) if k.endswith("gmax_ns"))
        self.control.set(key, -90_000.0)

    def _rest(self) -> None:
        self.control.disarm()


def lockstep(control: Control, rig: LoadedRig, seconds: float, meddler: Meddler) -> None:
    """Let the simulated rig run while the meddler meddles, until each thing was done once."""
    over = threading.Event()

    def meddle() -> None:
        while not over.wait(0.02):
            meddler.act()

    thread = threading.Thread(target=meddle)
    control.arm(force=True)
    thread.start()
    try:
        with SimRig(rig.spec, rig.folder) as there:
            while seconds > 0.0 or meddler.first:
                there.run(PIECE_S)
                seconds -= PIECE_S
    finally:
        over.set()
        thread.join()


def stumble(control: Control, rig: LoadedRig, seed: int, count: int) -> None:
    """A rig that leaves ticks out, repeats itself, and measures what is no voltage."""
    draw = random.Random(seed)
    context = zmq.Context()
    socket = context.socket(zmq.DEALER)
    socket.connect(rig.spec.loop.endpoint)
    seq, v_mv = 0, -65.0
    for k in range(count):
        seq += draw.choice((1, 1, 1, 1, 1, 1, 2, 5, 0, -3 if seq > 3 else 0))
        v_mv = max(-100.0, min(50.0, v_mv + draw.gauss(0.0, 2.0)))
        shown = draw.choice((float("nan"), 1e9)) if draw.random() < 0.002 else v_mv
        known = (seq - 2, TICK_US) if seq > 2 and draw.random() < 0.9 else (None, None)
        socket.send(msgpack.packb([seq, int(seq * TICK_US), *known, shown]))
        if not socket.poll(30_000):
            raise LinkError("no answer to a stumbling rig")
        socket.recv()
        if k % 500 == 0:
            with contextlib.suppress(ControlError):
                control.reset()
            with contextlib.suppress(ControlError):
                control.arm(force=True)
    context.destroy(linger=0)


def play(folder: Path, seconds: float, seed: int, anticipate: bool) -> Session:
    """One session: ``seconds`` in lockstep, then 5,000 stumbling samples."""
    folder.mkdir(parents=True, exist_ok=True)
    rig = rig_of(folder, anticipate)
    with served(rig) as control:
        meddler = Meddler(control, folder, seed)
        lockstep(control, rig, seconds, meddler)
        stumble(control, rig, seed, 5_000)
        path = Path(control.status()["recording"]["path"])
    return Session(path, meddler.done)


ALTERNATING = """
title = "Two models in turn"
[plan]
order = "interleaved"
repeats = {repeats}
pause_ms = 0
[[sweep]]
name = "squid"
duration_ms = {ms}
model = "squid-axon"
[[sweep]]
name = "cortical"
duration_ms = {ms}
model = "fast-spiking-cortical"
"""
SWEEP_MS = 250.0


def alternate(folder: Path, sweeps: int) -> dict[str, object]:
    """Play sweeps of two models in turn without a rest; what became of their boundaries."""
    rig = rig_of(folder, True)
    plan = folder / "alternating.toml"
    plan.write_text(ALTERNATING.format(repeats=sweeps // 2, ms=SWEEP_MS), encoding="utf-8")
    over = threading.Event()

    def live() -> None:
        with SimRig(rig.spec, rig.folder) as there:
            while not over.is_set():
                there.run(PIECE_S)

    with served(rig) as control:
        thread = threading.Thread(target=live)
        thread.start()
        while control.status()["seq"] is None:
            time.sleep(0.1)
        control.run(plan.read_text(encoding="utf-8"), plan, force=True, timeout_s=60.0)
        while control.ask("sweeps")["plan"]["running"]:
            time.sleep(0.2)
        status = control.status()
        over.set()
        thread.join()
    with open_journal(status["recording"]["path"]) as journal:
        verdict = compare(journal)
        rests = [b.start - a.stop for a, b in itertools.pairwise(journal.sweeps)]
        return {
            "sweeps": len(journal.sweeps),
            "missed": status["missed"],
            "with_their_model_from_the_first_tick": sum(
                journal.in_force(sweep.start)[0].name == sweep.fields["model"]
                for sweep in journal.sweeps
            ),
            "touching": sum(rest == 0 for rest in rests),
            "late_starts": sum(rest > 0 for rest in rests),
            "replay": "identical" if verdict.identical and verdict.complete else "NOT identical",
        }


def main() -> int:
    """Play sessions with and without anticipation and replay each."""
    parser = argparse.ArgumentParser(description=__doc__.partition("\n")[0])
    parser.add_argument("--minutes", type=float, default=10.0)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--folder", type=Path)
    parser.add_argument("--sweeps", type=int)
    parser.add_argument("--json", action="store_true")
    given = parser.parse_args()
    identical = True
    with tempfile.TemporaryDirectory(prefix="gatestep-") as temporary:
        folder = given.folder or Path(temporary)
        if given.sweeps:
            print(json.dumps(alternate(folder, given.sweeps)))
            return 0
        for anticipate in (True, False):
            seconds = given.minutes * 30.0
            session = play(folder / str(anticipate), seconds, given.seed, anticipate)
            with open_journal(session.journal) as journal:
                verdict = compare(journal)
                kinds = Counter(event.kind for event in journal.events)
            identical = identical and verdict.identical and verdict.complete
            told = {
                "anticipate": anticipate,
                "seconds": seconds,
                "events": dict(kinds),
                "meddled": dict(session.done),
                **verdict.plain_data(),
            }
            if given.json:
                print(json.dumps(told))
            else:
                word = "identical" if verdict.identical else "NOT identical"
                print(f"anticipation {anticipate}: {word}, {verdict.compared:,} samples")
                print("  " + "  ".join(f"{k} {n}" for k, n in sorted(kinds.items())))
                for line in (verdict.stopped, verdict.unlike, verdict.first):
                    print(f"  {line}" if line else "", end="\n" if line else "")
    return 0 if identical else 1


if __name__ == "__main__":
    sys.exit(main())
