"""What the stability check does about arming, swapping and setting, on a real server."""

from __future__ import annotations

import time

import msgpack
import pytest
import zmq

from gatestep.errors import ControlError, LinkError

# 30 pF at 50 us in the next tick: a plain loop carries at most 600 nS (Jury test on
# z^2 - (1 - a(1 - d)) z + a d), and squid Na and K open far more.
PLAIN = {"interval_us": 50.0, "anticipate": False}
CELL = {
    "name": "a",
    "model": "squid-na-k",
    "capacitance_pf": 30.0,
    "limits": {"current_pa": 1000.0},
}


def _leak(folder, gmax_ns):
    path = folder / f"leak-{gmax_ns:g}.toml"
    path.write_text(
        'title = "leak"\nsource = "made for this test"\ntemperature_c = 20\n'
        f'[[conductance]]\nname = "leak"\ngmax_ns = {gmax_ns}\nreversal_mv = -65.0\n'
    )
    return str(path)


class Rig:
    """A rig by hand: one sample at a time."""

    def __init__(self, server, interval_us=50):
        self.context = zmq.Context()
        self.socket = self.context.socket(zmq.DEALER)
        self.socket.connect(server.server.endpoints()["loop"])
        self.interval_us = interval_us

    def ask(self, seq, in_force=None, v_mv=-60.0):
        lag = None if in_force is None else self.interval_us
        self.socket.send(msgpack.packb([seq, seq * self.interval_us, in_force, lag, v_mv]))
        assert self.socket.poll(20_000)
        return msgpack.unpackb(self.socket.recv())

    def close(self):
        self.context.destroy(linger=0)


@pytest.fixture
def rig_of():
    rigs = []

    def make(server):
        rigs.append(Rig(server))
        return rigs[-1]

    yield make
    for rig in rigs:
        rig.close()


def _until(condition):
    """Wait until the server's attending thread has come round to it."""
    for _ in range(400):
        if condition():
            return
        time.sleep(0.05)
    raise AssertionError("it did not happen")


def test_arming_what_would_ring_is_refused_unless_forced(serving):
    """Arm names the cell, what the loop carries and what the model opens; force arms it."""
    server = serving(loop=PLAIN, cell=[CELL])
    with pytest.raises(ControlError, match=r"cell a: the loop carries .* nS and the model opens"):
        server.control.arm()
    assert server.control.status()["state"] == "idle"
    assert server.control.arm(force=True)["state"] == "armed"


def test_swapping_an_armed_loop_to_what_would_ring_is_refused_unless_forced(serving, tmp_path):
    """The same for a swap while armed; an idle loop may swap to anything."""
    server = serving(loop=PLAIN, cell=[{**CELL, "model": _leak(tmp_path, 10.0)}])
    server.control.arm()
    server.control.load("squid-na-k")
    with pytest.raises(ControlError, match="swap: cell a"):
        server.control.swap()
    assert server.control.swap(force=True)["model"] == "squid-na-k"


def test_a_conductance_set_while_armed_is_judged_anew(serving, tmp_path):
    """A gmax beyond what the loop carries is warned of, and refuses the next arming."""
    server = serving(loop=PLAIN, cell=[{**CELL, "model": _leak(tmp_path, 10.0)}])
    server.control.arm()
    server.control.set("leak.gmax_ns", 5000.0)
    _until(lambda: any("armed against advice" in text for text in server.said))
    server.control.disarm()
    with pytest.raises(ControlError, match="the model opens 5000 nS"):
        server.control.arm()
    server.control.set("leak.gmax_ns", 10.0)
    assert server.control.arm()["state"] == "armed"


def test_a_rig_that_reports_nothing_is_judged_by_the_plain_loop(serving, rig_of):
    """Anticipation lives on in_force; without it the plain loop's margin counts."""
    server = serving(loop={"interval_us": 50.0}, cell=[CELL])
    rig = rig_of(server)
    for seq in range(200):
        rig.ask(seq)
    _until(lambda: server.control.status()["answered"] == 200)
    with pytest.raises(ControlError, match="cell a"):
        server.control.arm()
    for seq in range(200, 400):
        rig.ask(seq, in_force=seq - 2)
    _until(lambda: server.control.status()["answered"] == 400)
    assert server.control.arm()["state"] == "armed"


def test_a_repeat_brings_back_no_current_from_before_the_loop_was_armed(serving, rig_of):
    """After disarm and arm, a resent sample is answered with 0 pA."""
    server = serving(loop={"interval_us": 50.0}, cell=[CELL])
    rig = rig_of(server)
    server.control.arm()
    for seq in range(10):
        rig.ask(seq, in_force=seq - 2 if seq > 1 else None)
    live = rig.ask(10, in_force=8, v_mv=-30.0)
    assert live[1] & 1
    assert live[3] != 0.0
    assert rig.ask(10, in_force=8, v_mv=-30.0)[3] == live[3]
    server.control.disarm()
    server.control.arm()
    assert rig.ask(10, in_force=8, v_mv=-30.0)[3] == 0.0


def test_resending_one_sample_for_ever_is_silence(serving, rig_of):
    """A stuck counter does not keep an armed loop live."""
    server = serving(
        loop={"interval_us": 50.0}, cell=[CELL], limits={"silence_ms": 300.0, "late_run": 1000}
    )
    rig = rig_of(server)
    rig.ask(0)
    server.control.arm()
    _until(lambda: rig.ask(0)[1] & 8)
    assert "silent" in server.control.status()["fault"]


def test_a_second_server_takes_no_socket_from_the_first(serving, tmp_path):
    """Control and feed over ipc are refused to a second server while the first runs."""
    first = serving(cell=[CELL])
    taken = first.rig.spec.control.endpoint
    with pytest.raises(LinkError, match="another server listens there"):
        serving(cell=[CELL], control={"endpoint": taken})
    assert first.control.status()["state"] == "idle"
