"""More traffic than the loop can answer: what is lost is counted, what is answered is right.

Behaviour, never time. In the direct lane a peer that leaves too much unread is dropped
whole; in the libzmq lane single answers that its queue cannot take are dropped and
counted. ``GATESTEP_OVERLOAD_S`` makes the long tests longer (a minute is worth while).
"""

from __future__ import annotations

import json
import os
import re
import subprocess
import sys
import threading
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from pathlib import Path
from typing import NamedTuple

import msgpack
import numpy as np
import pytest
import zmq
import zmtp_reference as rfc
from conftest import PATIENCE_S, RawRig, Reply, read_reply, wait_until
from zmtp_reference import Wire

from gatestep.control import Control
from gatestep.errors import ControlError
from gatestep.wire import GAP, LIVE, REFUSED, TRIPPED

SECONDS = float(os.environ.get("GATESTEP_OVERLOAD_S", "4"))
MOST_GROWTH_MIB = 48.0
"""Bound on what a server's memory may grow by under any of this, buffers of libzmq included."""

LEAK = """
title = "leak"
source = "Ohm's law"
temperature_c = 22.0
[[conductance]]
name = "leak"
gmax_ns = {g}
reversal_mv = -70.0
"""

RIG = """
[loop]
endpoint = "ipc://{folder}/loop"
interval_us = 20.0
lane = "{lane}"
[control]
endpoint = "ipc://{folder}/control"
[feed]
endpoint = "ipc://{folder}/feed"
every = 1
[limits]
silence_ms = 3000.0
[[cell]]
name = "a"
model = "{folder}/leak-10.toml"
limits.current_pa = 1e5
"""


def voltage(n: int) -> float:
    """The sample's voltage: a sawtooth."""
    return -80.0 + (n * 7) % 100


def ohms_law(n: int, g_ns: float = 10.0) -> float:
    """The current of a leak of 10 nS at -70 mV for a sample, pA."""
    return g_ns * (-70.0 - voltage(n))


def sample(n: int) -> bytes:
    return msgpack.packb([n, 20 * n, None, None, voltage(n)])


class Process(NamedTuple):
    """A server in a process of its own."""

    lane: str
    folder: Path
    pid: int
    control: Control

    @property
    def loop(self) -> str:
        return f"ipc://{self.folder}/loop"

    def resident_mib(self) -> float:
        """Memory in use by the server."""
        status = Path(f"/proc/{self.pid}/status").read_text("utf-8")
        return int(re.search(r"VmRSS:\s+(\d+)", status)[1]) / 1024  # type: ignore[index]

    def counted(self) -> dict[str, int]:
        """The status's counters."""
        return {k: v for k, v in self.control.status().items() if type(v) is int}


@contextmanager
def process(folder: Path, lane: str) -> Iterator[Process]:
    """An armed server whose model is a leak, in the lane."""
    for g in (10, 30):
        (folder / f"leak-{g}.toml").write_text(LEAK.format(g=float(g)))
    (folder / "rig.toml").write_text(RIG.format(folder=folder, lane=lane))
    command = [sys.executable, "-m", "gatestep", "serve", str(folder / "rig.toml"), "--json"]
    served = subprocess.Popen(
        command, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True, env={**os.environ}
    )
    try:
        assert json.loads(served.stdout.readline())["ready"]  # type: ignore[union-attr]
        with Control(f"ipc://{folder}/control", timeout_s=20) as control:
            yield Process(lane, folder, served.pid, control)
    finally:
        served.kill()
        served.communicate()


@pytest.fixture(scope="module", params=["direct", "libzmq"])
def server(request, tmp_path_factory) -> Iterator[Process]:
    """One server a lane for all tests here: what one leaves behind, the next would meet."""
    with process(tmp_path_factory.mktemp(request.param), request.param) as made:
        yield made


@pytest.fixture(autouse=True)
def _fresh(server) -> Iterator[None]:
    """Armed, with nobody in hold; the counters go on from test to test."""
    wait_until(lambda: server.control.status()["rig"] == "none", "the loop to be free")
    server.control.reset()
    server.control.arm(force=True)
    before = server.resident_mib()
    yield
    assert server.resident_mib() < before + MOST_GROWTH_MIB


class Audit:
    """Checks answers one by one; what a rig may get, and nothing else."""

    def __init__(self) -> None:
        self.count, self.last, self.live = 0, -1, 0

    def take(self, reply: Reply) -> None:
        """One answer: after the one before, the model's current when live, else 0 pA."""
        assert reply.seq is not None
        assert reply.seq > self.last, "doubled or out of order"
        self.last = reply.seq
        self.count += 1
        if reply.flags & LIVE:
            self.live += 1
            assert reply.flags & ~(LIVE | GAP) == 0
            assert reply.i_pa == [ohms_law(reply.seq)]
        else:
            assert reply.flags & TRIPPED
            assert reply.i_pa == [0.0]


def dial(server: Process, **options: int) -> Wire:
    """A wire that has shaken hands."""
    return Wire(server.loop, rfc.greeting(), **options).shake_hands()


def pour(wire: Wire, first: int, count: int) -> None:
    """Send samples as fast as they go; ends early when the server hangs up."""
    with suppress(ConnectionError):
        for n in range(first, first + count, 500):
            wire.send(b"".join(rfc.message(sample(k)) for k in range(n, n + 500)))


class Reader(threading.Thread):
    """Reads answers off a wire on a thread of its own until the wire ends or is closed."""

    def __init__(self, wire: Wire) -> None:
        super().__init__()
        self.wire, self.audit, self.fault = wire, Audit(), None  # type: ignore[var-annotated]

    def run(self) -> None:
        try:
            while True:
                self.audit.take(read_reply(self.wire.answer()))
        except AssertionError as fault:
            if "ended before" not in str(fault):
                self.fault = fault
        except OSError:
            pass


class Since(NamedTuple):
    """Counters at a moment, to tell what has been counted since."""

    server: Process
    before: dict[str, int]

    def __call__(self, key: str) -> int:
        return self.server.control.status()[key] - self.before[key]


def since(server: Process) -> Since:
    return Since(server, server.counted())


def account(told: Since, audit: Audit, sent: int, dropped: bool) -> None:
    """Every sample has its answer, or its loss is told.

    In the direct lane the peer gets all, or is dropped whole: then the loop has tripped,
    and what arrived is everything up to some sample.
    """
    if not dropped:
        wait_until(lambda: told("answered") == sent, "every sample answered")
        wait_until(lambda: audit.count + told("undelivered") == sent, "every answer accounted for")
        assert told("missed") == told("repeats") == told("malformed") == 0
    if told.server.lane == "direct":
        assert audit.count == audit.last + 1, "an answer is missing in the midst"
        if dropped:
            wait_until(lambda: told.server.control.status()["state"] == "tripped", "the trip")
            assert "connection ended" in told.server.control.status()["fault"]
        else:
            assert audit.count == sent
            assert told("undelivered") == 0
    assert audit.live > 0


def test_a_rig_faster_than_the_loop(server):
    """50,000 samples poured in, the answers read beside: none lost untold, none out of order."""
    told, wire, sent = since(server), dial(server), 50_000
    reader = Reader(wire)
    reader.start()
    pour(wire, 0, sent)
    wait_until(lambda: not reader.is_alive() or told("answered") == sent, "the answers")
    dropped = not reader.is_alive()
    account(told, reader.audit, sent, dropped)
    with suppress(OSError):
        wire.socket.shutdown(2)
    reader.join(PATIENCE_S)
    assert reader.fault is None


def test_answers_read_later(server):
    """As many answers as the sockets hold wait for the rig, complete and in order.

    As the direct lane's buffers are: 400 small answers over a UNIX socket.
    """
    told, wire, sent = since(server), dial(server), 400
    wire.send(b"".join(rfc.message(sample(n)) for n in range(sent)))
    wait_until(lambda: told("answered") == sent, "every sample answered")
    audit = Audit()
    while audit.count + told("undelivered") < sent:
        audit.take(read_reply(wire.answer()))
    account(told, audit, sent, dropped=False)
    assert told("undelivered") == 0
    wire.close()


def test_bursts_of_ten_thousand(server):
    """A libzmq client sends 10,000 samples before it reads, three times over.

    Dropped in the direct lane, libzmq connects anew by itself and meets a tripped loop.
    """
    told, audit, sent = since(server), Audit(), 0
    with RawRig(server.loop, rcvhwm=0, sndhwm=0) as rig:
        for _ in range(3):
            for n in range(sent, sent + 10_000):
                rig.socket.send(sample(n))
            sent += 10_000
            while audit.count + told("undelivered") < sent and not told("trips"):
                while (reply := rig.receive(0.5)) is not None:
                    audit.take(reply)
        if not told("trips"):
            account(told, audit, sent, dropped=False)


def test_a_peer_that_never_reads(server):
    """It floods the loop with samples and reads nothing; the rig beside it never notices.

    What is refused and what could not be delivered is counted; memory stays bounded.
    """
    told = since(server)
    over = threading.Event()

    def flood() -> None:
        block = b"".join(rfc.message(sample(n)) for n in range(500))
        while not over.is_set():
            with suppress(OSError), dial(server, receive_buffer=1 << 14) as deaf:
                deaf.socket.settimeout(1.0)
                while not over.is_set():
                    deaf.send(block)

    audit = Audit()
    with RawRig(server.loop) as rig:
        audit.take(rig.ask(0, voltage(0)))
        flooding = threading.Thread(target=flood)
        flooding.start()
        try:
            for n in range(1, 1500):
                audit.take(rig.ask(n, voltage(n)))
            wait_until(lambda: told("refused") > 1000, "refusals")
            wait_until(lambda: told("undelivered") > 0, "what could not be delivered")
        finally:
            over.set()
            flooding.join(PATIENCE_S)
    assert audit.live == audit.count == 1500
    wait_until(lambda: told("answered") == 1500, "the log")


def test_many_rigs_at_once(server):
    """Twenty rigs send at the same time: one holds the loop, the rest are refused, all in order."""
    told, each = since(server), 300
    rigs = [dial(server) for _ in range(20)]
    for rig in rigs:
        rig.send(b"".join(rfc.message(sample(n)) for n in range(each)))
    held = 0
    for rig in rigs:
        replies = [read_reply(rig.answer()) for _ in range(each)]
        assert [r.seq for r in replies] == list(range(each))
        if replies[0].flags & REFUSED:
            assert all(r[1:] == (REFUSED, 0, [0.0]) for r in replies)
        else:
            held += 1
            assert [r.i_pa for r in replies] == [[ohms_law(n)] for n in range(each)]
            assert all(r.flags == LIVE for r in replies)
    assert held == 1
    wait_until(lambda: told("answered") == each, "the answered")
    wait_until(lambda: told("refused") == 19 * each, "the refused")
    for rig in rigs:
        rig.close()


class Crowd:
    """Watchers that never read, control clients that flood, one that never reads its answers."""

    def __init__(self, server: Process) -> None:
        self.context = zmq.Context()
        self.over = threading.Event()
        self.deaf = self.context.socket(zmq.SUB)
        self.deaf.setsockopt(zmq.RCVHWM, 1)
        self.deaf.subscribe(b"")
        self.deaf.connect(f"ipc://{server.folder}/feed")
        self.thread = threading.Thread(target=self.flood, args=(f"ipc://{server.folder}/control",))

    def __enter__(self) -> Crowd:
        self.thread.start()
        return self

    def __exit__(self, *_: object) -> None:
        self.over.set()
        self.thread.join(PATIENCE_S)
        self.context.destroy(linger=0)

    def flood(self, where: str) -> None:
        """A few hundred requests a second, of which no answer is ever read."""
        requests = [{"verb": "status"}, {"verb": "mark", "text": "flood"}, {"verb": "no such"}]
        sockets = [self.context.socket(zmq.DEALER) for _ in requests]
        for socket in sockets:
            socket.setsockopt(zmq.RCVHWM, 1)
            socket.connect(where)
        while not self.over.wait(0.005):
            for socket, request in zip(sockets, requests, strict=True):
                with suppress(zmq.Again):
                    socket.send(msgpack.packb(request), zmq.DONTWAIT)


def change_about(
    control: Control, folder: Path, enough: threading.Event
) -> list[tuple[int, float]]:
    """Every 10 ms, or as often as the server can, another conductance, set or swapped in.

    Returns after which sample each one held.
    """
    changes = []
    for k in range(10_000_000):
        if enough.wait(0.01) and len(changes) >= 10:
            break
        g = float((30, 10)[k // 5 % 2] if k % 5 == 0 else 11 + k % 13)
        try:
            if k % 5 == 0:
                control.load(str(folder / f"leak-{g:g}.toml"))
                changes.append((control.swap()["seq"], g))
            else:
                changes.append((control.set("leak.gmax_ns", g)["seq"], g))
        except ControlError as fault:
            if "waiting already" not in str(fault):  # the crowd's requests fill the line
                raise
    return changes


def test_changes_under_siege(server):
    """Models swapped and parameters set every 10 ms, a crowd at the other sockets: all is right.

    Each answer is the current of what was in force at its sample; none is lost or doubled;
    nothing of the record is lost; memory stays where it was.
    """
    told, over, enough, changes = since(server), threading.Event(), threading.Event(), []
    answers: list[tuple[int, int, float]] = []

    def sampling() -> None:
        with RawRig(server.loop) as rig:
            n = 0
            while not over.is_set():
                seq, flags, _, (i_pa,) = rig.ask(n, voltage(n))
                answers.append((seq, flags, i_pa))
                n += 1

    rig = threading.Thread(target=sampling)
    rig.start()
    wait_until(lambda: answers, "an answer")
    try:
        with Crowd(server), Control(f"ipc://{server.folder}/control", timeout_s=20) as control:
            stop = threading.Timer(SECONDS, enough.set)
            stop.start()
            changes = change_about(control, server.folder, enough)
    finally:
        over.set()
        rig.join(PATIENCE_S)
    seq, flags, i_pa = (np.array(x) for x in zip(*answers, strict=True))
    g_ns = np.full(len(seq), 10.0)
    for held_after, g in changes:
        g_ns[held_after + 1 :] = g
    assert seq.tolist() == list(range(len(seq)))
    assert set(flags.tolist()) == {LIVE}
    assert i_pa.tolist() == [ohms_law(n, g) for n, g in enumerate(g_ns.tolist())]
    assert {g for _, g in changes} >= {10.0, 30.0, 12.0}
    wait_until(lambda: told("answered") == len(seq), "the log")
    quiet = ("missed", "repeats", "malformed", "refused", "undelivered", "records_lost")
    assert {key: told(key) for key in quiet} == dict.fromkeys(quiet, 0)
    server.control.load(str(server.folder / "leak-10.toml"))
    server.control.swap()
