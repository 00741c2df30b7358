"""The software rig in C closes the loop with the real server over the direct lane."""

from __future__ import annotations

import re
import signal
import subprocess
import sys
import time
from contextlib import contextmanager

import msgpack
import numpy as np
import pytest
import zmq
from conftest import Running, make_rig, wait_until
from firmware_build import BRIDGE, software_rig

from gatestep.commands.demo import INTERVAL_US, STEP_PA, scenario
from gatestep.commands.demo_rigs import write_rig
from gatestep.config import load_rig
from gatestep.control import Control
from gatestep.simrig import SimRig

PA_PER_UA_CM2 = 30.0  # 1 uF/cm2 on 30 pF is 3e-5 cm2: 1 uA/cm2 is 30 pA
SECONDS = 0.9
PATIENCE_S = 60


class CRig:
    """The C program, talked to at its holds."""

    def __init__(self, endpoint, **keys):
        steps = keys.pop("steps", [])
        holds = keys.pop("holds", [])
        given = [f"{key}={value}" for key, value in keys.items()]
        given += [f"step={a},{b},{pa}" for a, b, pa in steps] + [f"hold={ms}" for ms in holds]
        pipes = {"stdin": subprocess.PIPE, "stdout": subprocess.PIPE, "text": True}
        self._child = subprocess.Popen([str(software_rig()), endpoint, *given], **pipes)
        self.spikes: list[float] = []
        self.end: dict[str, int] = {}

    def until_hold(self):
        """Read on to the next hold (True) or the end (False)."""
        for line in self._child.stdout:
            word, *rest = line.split()
            if word == "hold":
                return True
            if word == "spike":
                self.spikes.append(float(rest[0]))
            if word == "end":
                self.end = dict(zip(rest[::2], map(int, rest[1::2]), strict=True))
        self._child.wait(PATIENCE_S)
        return False

    def go_on(self):
        self._child.stdin.write("\n")
        self._child.stdin.flush()

    def finish(self):
        """The rest of the run; its exit status."""
        assert not self.until_hold()
        return self.close()

    def close(self):
        if self._child.poll() is None:
            self._child.kill()
        for pipe in (self._child.stdin, self._child.stdout):
            pipe.close()
        return self._child.wait(PATIENCE_S)


@contextmanager
def c_rig(endpoint, **keys):
    """A C rig that has ended when the block ends."""
    rig = CRig(endpoint, **keys)
    try:
        yield rig
    finally:
        rig.close()


def _squid(serving, **loop):
    return serving(
        loop={"interval_us": 10.0, "anticipate": False, **loop},
        cell=[
            {
                "name": "cell",
                "model": "squid-na-k",
                "capacitance_pf": 30.0,
                "limits": {"current_pa": 200_000.0},
            }
        ],
    )


@pytest.mark.parametrize(
    ("current_ua_cm2", "rate_hz"),
    [(7.0, 58.33), (15.0, 78.65), (40.0, 108.61)],
)
def test_squid_axon_fires_at_its_steady_rate(serving, current_ua_cm2, rate_hz):
    """Rates within 1 % of the equations of Hodgkin and Huxley 1952, through the C library.

    The rates were computed with scipy at rtol 1e-10 from the published equations, mean
    after 200 ms.
    """
    server = _squid(serving)
    server.control.arm()
    step = (0, 1000, current_ua_cm2 * PA_PER_UA_CM2)
    endpoint = server.server.endpoints()["loop"]
    keys = {"interval_us": 10, "seconds": 0.4, "limit_pa": 200_000}
    with c_rig(endpoint, steps=[step], holds=[399.9], **keys) as rig:
        assert rig.until_hold()
        # Asked while the rig is there: one that leaves an armed loop trips it.
        wait_until(lambda: server.control.status()["answered"] == 39_990, "all are counted")
        status = server.control.status()
        rig.go_on()
        assert rig.finish() == 0
    steady = np.asarray(rig.spikes)[np.asarray(rig.spikes) > 200.0]
    assert 1000.0 / np.mean(np.diff(steady)) == pytest.approx(rate_hz, rel=0.01)
    assert (rig.end["samples"], rig.end["answers"], rig.end["faults"]) == (40_000, 40_000, 0)
    assert status["state"] == "armed"
    assert (status["missed"], status["malformed"], status["repeats"]) == (0, 0, 0)
    assert server.server.rig.spec.loop.lane in ("auto", "direct")


def test_on_arrival_it_fires_as_the_simulated_rig_does(serving):
    """The same cell, model and current: spike times within 2 us of gatestep's own rig's.

    Both solve the passive membrane exactly; the C rig's voltages are float32 on the wire.
    In virtual time an answer arrives with no delay, so on-arrival is a whole tick sooner.
    """
    found = []
    for _ in range(2):
        server = _squid(serving, apply="on-arrival")
        server.control.arm()
        if not found:
            endpoint = server.server.endpoints()["loop"]
            keys = {"interval_us": 10, "seconds": 0.1, "steps": [(0, 1000, 300)], "on_arrival": 1}
            with c_rig(endpoint, limit_pa=200_000, **keys) as rig:
                assert rig.finish() == 0
            found.append(np.asarray(rig.spikes))
            continue
        changes = {"leak_ns": 9.0, "leak_mv": -54.387, "start_mv": -65.0, "capacitance_pf": 30.0}
        spec = make_rig(
            server.rig.path.parent,
            loop=server.rig.spec.loop.model_dump(exclude_none=True),
            cell=[c.model_dump(exclude_none=True) for c in server.rig.spec.cell],
            simulated={"cell": [changes], "delay_us": 0.0},
        ).spec
        with SimRig(spec) as simulated:
            trace = simulated.run(0.1, np.full(10_000, 300.0))
        found.append(np.asarray(trace.spikes(0)))
    ours, theirs = found
    assert len(ours) == len(theirs) > 4
    np.testing.assert_allclose(ours, theirs, atol=0.002)


_CELL = """
[[cell]]
name = "cell"
model = "regular-spiking"
capacitance_pf = 118.4
[cell.limits]
current_pa = 40000
window_mv = [-120, 80]
"""
_SIMULATED = """
[simulated]
pace = "lockstep"
seconds = 0.9
[[simulated.cell]]
capacitance_pf = 118.4
leak_ns = 4.0
leak_mv = -70.0
{steps}
"""


def _write_demo(folder):
    """The demo's rig file, over TCP."""
    parts = scenario(SECONDS)
    steps = "\n".join(
        f"[[simulated.cell.step]]\nstart_ms = {p.step_ms}\nstop_ms = {p.stop_ms}\n"
        f"current_pa = {STEP_PA}"
        for p in parts
    )
    return write_rig(folder / "rig.toml", INTERVAL_US, _CELL + _SIMULATED.format(steps=steps))


@contextmanager
def _served(folder):
    """`gatestep serve` in a process of its own; its rig."""
    path = _write_demo(folder)
    command = [sys.executable, "-m", "gatestep", "serve", str(path)]
    with subprocess.Popen(command, stdout=subprocess.PIPE, text=True) as server:
        try:
            assert any("ready" in line for line in server.stdout)
            yield load_rig(path)
        finally:
            server.send_signal(signal.SIGINT)
            server.wait(PATIENCE_S)


@contextmanager
def _attended(folder):
    """The same server in this process, which is sooner there; its rig."""
    rig = load_rig(_write_demo(folder))
    server = Running(rig)
    try:
        yield rig
    finally:
        server.close()


def _play_in_c(rig):
    """The demo's scenario with the C rig; its spikes."""
    parts = scenario(SECONDS)
    steps = [(p.step_ms, p.stop_ms, STEP_PA) for p in parts]
    holds = [parts[1].start_ms, parts[2].start_ms, parts[2].stop_ms]
    cell = {"capacitance_pf": 118.4, "leak_ns": 4.0, "leak_mv": -70.0, "start_mv": -70.0}
    keys = {"interval_us": INTERVAL_US, "seconds": SECONDS, "steps": steps, "holds": holds}
    with Control(rig.spec.control.endpoint) as control:
        with c_rig(rig.spec.loop.endpoint, **cell, **keys) as c:
            assert c.until_hold()
            control.arm()
            c.go_on()
            assert c.until_hold()
            control.load("regular-spiking-m")
            control.swap()
            c.go_on()
            assert c.until_hold()
            control.disarm()
            c.go_on()
            assert c.finish() == 0
        assert c.end["faults"] == 0
        status = control.status()
        assert (status["trips"], status["missed"], status["late"]) == (0, 0, 0)
    return np.asarray(c.spikes)


def _play_in_python(rig):
    """The same with gatestep's own simulated rig, ordered at the same samples."""
    parts = scenario(SECONDS)
    ends = [parts[1].start_ms, parts[2].start_ms, parts[2].stop_ms, parts[2].end_ms]
    spikes = []
    with Control(rig.spec.control.endpoint) as control, SimRig(rig.spec) as simulated:
        orders = [
            control.arm,
            lambda: (control.load("regular-spiking-m"), control.swap()),
            control.disarm,
            lambda: None,
        ]
        at_ms = 0.0
        for end_ms, order in zip(ends, orders, strict=True):
            trace = simulated.run((end_ms - at_ms) / 1000.0)
            spikes += list(trace.spikes(0))
            at_ms = end_ms
            order()
    return np.asarray(spikes)


def test_the_demo_scenario_in_c_is_the_simulated_rigs(tmp_path):
    """A passive cell is silent, fires with Na and K, and fires fewer with an M-type K as well.

    Spike by spike within 20 us of what gatestep's own simulated rig does with another
    server of the same kind, ordered at the same samples.
    """
    parts = scenario(SECONDS)
    found = []
    for serve, play in ((_served, _play_in_c), (_attended, _play_in_python)):
        with serve(tmp_path / play.__name__) as rig:
            found.append(play(rig))
    ours, theirs = found
    counts = [int(np.sum((ours >= p.start_ms) & (ours < p.end_ms))) for p in parts]
    assert counts[0] == 0
    assert counts[1] > counts[2] > 1
    assert len(ours) == len(theirs)
    np.testing.assert_allclose(ours, theirs, atol=0.02)


def test_in_real_time_the_loop_holds_and_ends_at_zero(serving):
    """By the machine's clock at a slow tick: answers come, none are mistaken, no fault."""
    server = _squid(serving, interval_us=1000.0, budget_us=500_000.0)
    endpoint = server.server.endpoints()["loop"]
    keys = {"interval_us": 1000, "seconds": 0.3, "real": 1, "silence_ms": 5000}
    with c_rig(endpoint, **keys) as rig:
        assert rig.finish() == 0
    assert rig.end["samples"] + rig.end["skipped"] >= 300
    assert 0 < rig.end["answers"] <= rig.end["samples"]
    assert (rig.end["faults"], rig.end["error"]) == (0, 0)


def test_a_server_that_goes_takes_the_rig_to_zero(serving, tmp_path):
    """The connection's end is an error of the link, told by the exit status."""
    server = _squid(serving)
    endpoint = server.server.endpoints()["loop"]
    with c_rig(endpoint, interval_us=10, seconds=0.5, holds=[100]) as rig:
        assert rig.until_hold()
        server.close()
        rig.go_on()
        assert rig.finish() == 1
    assert rig.end["error"] == -7
    with c_rig(f"ipc://{tmp_path}/none", seconds=0.1) as rig:
        assert rig.finish() == 2


def test_libzmq_itself_takes_the_c_rig_for_a_peer(tmp_path):
    """A ROUTER of libzmq with heartbeats, for longer than it waits for a PONG: none is missed."""
    context = zmq.Context()
    router = context.socket(zmq.ROUTER)
    router.setsockopt(zmq.LINGER, 0)
    router.setsockopt(zmq.RCVTIMEO, 1000 * PATIENCE_S)
    router.setsockopt(zmq.HEARTBEAT_IVL, 20)
    router.setsockopt(zmq.HEARTBEAT_TIMEOUT, 200)
    endpoint = f"ipc://{tmp_path}/router"
    router.bind(endpoint)
    samples = []
    try:
        with c_rig(endpoint, seconds=0.006, interval_us=20) as rig:
            for _ in range(300):
                peer, message = router.recv_multipart()
                samples.append(msgpack.unpackb(message))
                time.sleep(0.002)
                router.send_multipart([peer, msgpack.packb([samples[-1][0], 1, 5, 12.5])])
            assert rig.finish() == 0
    finally:
        context.destroy(linger=0)
    assert [s[0] for s in samples] == list(range(300))
    assert [s[2] for s in samples] == [None, None, *range(298)]
    assert (rig.end["answers"], rig.end["faults"]) == (300, 0)


def test_the_libzmq_lane_serves_it_as_well(serving):
    """The server's other lane gives the C rig the same spikes, to the last digit printed."""
    spikes = []
    for lane in ("direct", "libzmq"):
        server = _squid(serving, lane=lane)
        server.control.arm()
        endpoint = server.server.endpoints()["loop"]
        keys = {"interval_us": 10, "seconds": 0.05, "limit_pa": 200_000, "steps": [(0, 99, 300)]}
        with c_rig(endpoint, **keys) as rig:
            assert rig.finish() == 0
        spikes.append(rig.spikes)
    assert spikes[0] == spikes[1] != []


def test_headers_document_every_error():
    """Each error of the enum has a sentence that says what the output does."""
    text = (BRIDGE / "include" / "gsb_error.h").read_text()
    body = text[text.index("enum gsb_error {") :]
    found = re.findall(r"/\*((?:(?!\*/).)*)\*/\s*GSB_(ERROR_\w+) = (-\d+)", body, re.DOTALL)
    assert [int(number) for _, _, number in found] == list(range(-1, -len(found) - 1, -1))
    assert len(found) == 17
    assert all("Output:" in said for said, _, _ in found)
