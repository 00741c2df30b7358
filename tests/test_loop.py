"""The hot loop over real sockets: who is answered what, and what ends a session.

Nothing here depends on how fast anything is; waits end when the awaited thing comes.
"""

from __future__ import annotations

import signal
import subprocess
import sys
import threading
from contextlib import contextmanager
from pathlib import Path

import msgpack
import numpy as np
import pytest
import zmq
from conftest import PATIENCE_S, RawRig, wait_until

from gatestep.wire import CLIPPED, LIVE, MALFORMED, REFUSED, REPEAT, TRIPPED

LEAK = """
title = "leak"
source = "Ohm's law"
temperature_c = 22.0
[[conductance]]
name = "leak"
gmax_ns = {g}
reversal_mv = {e}
"""

MALFORMED_REPLY = (None, MALFORMED, 0, [])


@pytest.fixture(params=["direct", "libzmq"])
def lane(request):
    """Either lane: the contract of the loop is the same over both."""
    return request.param


@pytest.fixture
def serving(serving, lane):
    """Servers that take the lane under test."""

    def start(**changes):
        loop = {"interval_us": 20.0, "lane": lane, **changes.pop("loop", {})}
        return serving(loop=loop, **changes)

    return start


def endpoint(server) -> str:
    return server.server.endpoints()["loop"]


def leak_cell(folder: Path, g: float = 10.0, e: float = -70.0, name: str = "a", **limits):
    """A cell whose model is one leak: its current is -g * (V - E), nothing else."""
    model = folder / f"leak-{g:g}-{e:g}.toml"
    model.write_text(LEAK.format(g=g, e=e))
    return {
        "name": name,
        "model": str(model),
        "limits": {"current_pa": 1e6, **limits},
    }


@contextmanager
def steady_rig(server, v_mv: float = -60.0, first: int = 0):
    """A rig that samples from a thread without pause; the list of its answers grows.

    It ends with the block, or when no answer has come for a while.
    """
    answers, over = [], threading.Event()

    def sample():
        with RawRig(endpoint(server)) as rig:
            seq = first
            while not over.is_set():
                rig.send(seq, v_mv)
                reply = rig.receive(2.0)
                if reply is None:
                    return
                answers.append(reply)
                seq += 1

    thread = threading.Thread(target=sample)
    thread.start()
    try:
        wait_until(lambda: len(answers) > 20, "answers")
        yield answers
    finally:
        over.set()
        thread.join(PATIENCE_S)


def in_order(answers) -> bool:
    """Whether each sample got exactly one answer, in order."""
    return [a.seq for a in answers] == list(range(answers[0].seq, answers[0].seq + len(answers)))


def state(server) -> str:
    return server.control.status()["state"]


@pytest.mark.parametrize("kind", [zmq.DEALER, zmq.REQ])
@pytest.mark.parametrize("transport", ["ipc", "tcp"])
def test_both_kinds_of_peer_over_both_transports(serving, kind, transport):
    """A DEALER and a REQ, over ipc and tcp, are answered alike, each with the model's current."""
    where = {} if transport == "ipc" else {"endpoint": "tcp://127.0.0.1:0"}
    server = serving(loop={"interval_us": 20.0, **where})
    assert endpoint(server).startswith(transport)
    server.control.arm()
    with RawRig(endpoint(server), kind) as rig:
        first = [rig.ask(n, -65.0 + n) for n in range(30)]
    twin = serving()
    twin.control.arm()
    with RawRig(endpoint(twin)) as rig:
        second = [rig.ask(n, -65.0 + n) for n in range(30)]
    assert all(a.flags == LIVE for a in first)
    assert [(*a[:2], a.i_pa) for a in first] == [(*a[:2], a.i_pa) for a in second]


def test_every_cell_has_its_voltage_its_model_and_its_limits(serving, tmp_path):
    """With several cells each current is that cell's model at that cell's voltage."""
    cells = [
        leak_cell(tmp_path, 10.0, -70.0, "a"),
        leak_cell(tmp_path, -4.0, 0.0, "b"),
        leak_cell(tmp_path, 100.0, 0.0, "c", current_pa=50.0),
    ]
    server = serving(cell=cells)
    server.control.arm()
    with RawRig(endpoint(server)) as rig:
        reply = rig.ask(0, -60.0, -50.0, -40.0)
        assert reply.i_pa == pytest.approx([-100.0, -200.0, 50.0])
        assert reply.flags == LIVE | CLIPPED
        assert rig.ask(1, -60.0) == MALFORMED_REPLY
        assert rig.ask(2, -60.0, -50.0, -40.0, -30.0) == MALFORMED_REPLY
        assert rig.ask(3, -60.0, -50.0, 101.0)[1::2] == (TRIPPED | 16, [0.0] * 3)
    assert server.control.status()["fault"].startswith("cell c:")


def test_frames_that_are_no_sample_are_answered_as_malformed(serving):
    """Empty, extra, oversized and nonsensical messages get [nil, 128, 0].

    They are counted in the status and leave a session and its sequence as they were.
    """
    server = serving()
    server.control.arm()
    bad = [
        [b""],
        [b"", b""],
        [b"", b"", b""],
        [b"x" * 600],
        [b"", b"x" * 600],
        [b"x" * 100_000],
        [msgpack.packb([1, 20, None, None, -65.0]), b"more"],
        [b"", msgpack.packb([1, 20, None, None, -65.0]), b""],
        [msgpack.packb({"verb": "status"})],
        [msgpack.packb([1, 20, None, None, "x"])],
    ]
    with RawRig(endpoint(server)) as rig:
        twin = rig.ask(0, -65.0)
        for frames in bad:
            assert rig.tell(*frames) == MALFORMED_REPLY
        assert rig.ask(1, -65.0).flags == LIVE
        assert twin.flags == LIVE
    wait_until(lambda: server.control.status()["malformed"] == len(bad), "every one counted")


def test_malformed_and_refused_are_told_though_no_rig_is_there(serving):
    """The status shows malformed and refused messages although nothing else happens."""
    server = serving()
    with RawRig(endpoint(server)) as rig:
        for _ in range(3):
            rig.tell(b"\xc1")
        wait_until(lambda: server.control.status()["malformed"] == 3, "malformed counted")
        assert server.control.status()["rig"] == "none"
        rig.ask(0, -65.0)
        with RawRig(endpoint(server)) as other:
            for n in range(4):
                assert other.ask(n, -65.0).flags == REFUSED
        wait_until(lambda: server.control.status()["refused"] == 4, "refused counted")


def test_a_message_of_megabytes_harms_no_one_else(serving):
    """A 2 MB message may cost its sender the connection.

    The rig that holds the loop and those who come later are answered as before.
    """
    server = serving()
    server.control.arm()
    with RawRig(endpoint(server)) as rig, RawRig(endpoint(server)) as vandal:
        assert rig.ask(0, -65.0).flags == LIVE
        for n in range(1, 20):
            vandal.socket.send(b"x" * 2_000_000)
            assert rig.ask(n, -65.0).flags == LIVE
    with RawRig(endpoint(server)) as late:
        assert late.ask(0, -65.0).flags in (REFUSED, LIVE, TRIPPED)
    assert server.thread.is_alive()


def test_a_second_rig_is_refused_and_disturbs_nothing(serving):
    """Whatever another peer sends, it gets 0 pA and 'refused' (or malformed).

    The first rig's answers are those of a server it has to itself.
    """
    alone, shared = serving(), serving()
    v_mv = np.random.default_rng(5).uniform(-80, 20, 100)
    for server in (alone, shared):
        server.control.arm()
    with RawRig(endpoint(alone)) as rig:
        expected = [rig.ask(n, v) for n, v in enumerate(v_mv)]
    with (
        RawRig(endpoint(shared)) as rig,
        RawRig(endpoint(shared)) as other,
        RawRig(endpoint(shared), zmq.REQ) as third,
    ):
        for n, v in enumerate(v_mv):
            reply = rig.ask(n, v)
            assert (reply.seq, reply.flags, reply.i_pa) == (n, LIVE, expected[n].i_pa)
            for seq in (n, n + 1, 10**6):
                assert other.ask(seq, float("nan"))[:2] == (seq, REFUSED)
            assert other.tell(b"\xc1") == MALFORMED_REPLY
            assert third.ask(7, 1e6) == (7, REFUSED, 0, [0.0])
        status = shared.control.status()
    assert status["state"] == "armed"
    assert status["missed"] == status["repeats"] == status["trips"] == 0


def test_silence_trips_and_frees_the_loop(serving):
    """A rig that falls silent while armed trips the loop.

    Another then takes hold, with a sequence, a clock and gates of its own.
    """
    server = serving(limits={"silence_ms": 200.0})
    server.control.arm()
    with RawRig(endpoint(server)) as rig, RawRig(endpoint(server)) as other:
        assert rig.ask(1000, -65.0).flags == LIVE
        wait_until(lambda: state(server) == "tripped", "the trip")
        assert "silent" in server.control.status()["fault"]
        reply = wait_until(
            lambda: (r := other.ask(0, -65.0)).flags != REFUSED and r, "the other's hold"
        )
        assert (reply.seq, reply.flags, reply.i_pa) == (0, TRIPPED, [0.0])
    assert server.control.status()["trips"] == 1
    server.control.reset()
    assert state(server) == "idle"


def test_silence_while_idle_frees_the_loop_without_a_trip(serving):
    """Idle there is nothing to trip: the rig lets go and the next one is answered."""
    server = serving(limits={"silence_ms": 50.0})
    with RawRig(endpoint(server)) as rig, RawRig(endpoint(server)) as other:
        assert rig.ask(5, -65.0).flags == 0
        wait_until(lambda: server.control.status()["rig"] == "none", "the release")
        assert wait_until(lambda: other.ask(0, -65.0).flags != REFUSED, "the other's hold")
    status = server.control.status()
    assert (status["state"], status["trips"]) == ("idle", 0)


def test_noise_keeps_no_one_in_hold(serving):
    """Malformed messages of the holder and samples of refused peers are not the rig's voice.

    While they go on the rig is silent, and an armed loop trips.
    """
    server = serving(limits={"silence_ms": 300.0})
    server.control.arm()
    with RawRig(endpoint(server)) as rig, RawRig(endpoint(server)) as other:
        assert rig.ask(0, -65.0).flags == LIVE

        def tripped():
            assert rig.tell(b"\xc1") == MALFORMED_REPLY
            other.tell(b"\x90")
            return state(server) == "tripped"

        wait_until(tripped, "the trip")
        assert "silent" in server.control.status()["fault"]


def test_a_rig_that_only_resends_is_silent(serving):
    """Repeats get their answers, but no new sample is no voice: an armed loop trips."""
    server = serving(limits={"silence_ms": 300.0})
    server.control.arm()
    with RawRig(endpoint(server)) as rig:
        assert rig.ask(0, -65.0).flags == LIVE

        def tripped():
            reply = rig.ask(0, -65.0)
            assert reply.seq == 0
            return reply.flags & TRIPPED

        wait_until(tripped, "the trip")
    assert server.control.status()["trips"] == 1


def test_noise_takes_no_hold(serving):
    """A peer that has sent nothing valid holds nothing: the next rig is not refused."""
    server = serving()
    with RawRig(endpoint(server)) as noisy, RawRig(endpoint(server)) as rig:
        for frames in ([b""], [b"\xc1"], [b"x" * 600], [b"a", b"b"]):
            noisy.tell(*frames)
        assert rig.ask(0, -65.0).flags == 0
        assert noisy.ask(0, -65.0).flags == REFUSED


def test_a_killed_rig_trips_the_loop(serving, lane):
    """When the rig's process is killed the loop trips.

    It does so at once where the lane is told that the connection ended, else by silence.
    """
    server = serving(limits={"silence_ms": 600_000.0 if lane == "direct" else 300.0})
    server.control.arm()
    child = (
        "import sys, zmq, msgpack\n"
        "s = zmq.Context().socket(zmq.DEALER); s.connect(sys.argv[1])\n"
        "n = 0\n"
        "while True:\n"
        "    s.send(msgpack.packb([n, 20 * n, None, None, -65.0])); s.recv(); n += 1\n"
    )
    rig = subprocess.Popen([sys.executable, "-c", child, endpoint(server)])
    try:
        wait_until(lambda: server.control.status()["answered"] > 100, "answers")
        rig.send_signal(signal.SIGKILL)
        wait_until(lambda: state(server) == "tripped", "the trip")
    finally:
        rig.kill()
        rig.wait()
    status = server.control.status()
    assert (status["trips"], status["rig"]) == (1, "none")
    assert ("connection ended" if lane == "direct" else "silent") in status["fault"]


def test_a_rig_that_hangs_up_frees_the_loop(serving, lane):
    """A rig holds the loop until its connection ends; then another takes hold.

    Over the libzmq lane, which is told nothing of connections, it holds it until it has
    been silent for so long.
    """
    server = serving(limits={"silence_ms": 600_000.0 if lane == "direct" else 100.0})
    server.control.arm()
    with RawRig(endpoint(server)) as other:
        with RawRig(endpoint(server)) as rig:
            assert rig.ask(0, -65.0).flags == LIVE
        reply = wait_until(lambda: (r := other.ask(0, -65.0)).flags != REFUSED and r, "the hold")
        assert (reply.flags, reply.i_pa) == (TRIPPED, [0.0])


def test_a_resent_sample_gets_the_same_answer(serving):
    """After a time-out a rig may send a sample again: same currents, no second step."""
    server = serving()
    server.control.arm()
    with RawRig(endpoint(server)) as rig:
        first = [rig.ask(n, -65.0 + n) for n in range(20)]
        again = rig.ask(19, -65.0 + 19)
        assert (again.seq, again.flags, again.i_pa) == (19, LIVE | REPEAT, first[19].i_pa)
        assert again.service_nsec == first[19].service_nsec
        server.control.disarm()
        assert rig.ask(19, -65.0)[1::2] == (REPEAT, [0.0])


def test_arming_and_disarming_hold_from_the_confirmed_sample_on(serving, tmp_path):
    """The confirmation names the newest sample answered before.

    Each one after it, and none up to it, is answered in the new state.
    """
    server = serving(cell=[leak_cell(tmp_path)])
    with steady_rig(server) as answers:
        changes = []
        for _ in range(5):
            changes.append((server.control.arm()["seq"], LIVE))
            changes.append((server.control.disarm()["seq"], 0))
        last = changes[-1][0]
        wait_until(lambda: answers[-1].seq > last + 20, "answers after the last change")
    assert in_order(answers)
    expected = np.zeros(len(answers), int)
    for seq, flags in changes:
        expected[seq + 1 :] = flags
    assert [a.flags for a in answers] == expected.tolist()
    assert all(a.i_pa == [-100.0 if a.flags else 0.0] for a in answers)


def test_set_holds_from_the_confirmed_sample_on(serving, tmp_path):
    """While a rig runs, a parameter changes between two samples, the one it names and the next.

    No answer is lost, doubled or out of order.
    """
    server = serving(cell=[leak_cell(tmp_path, 10.0, -70.0)])
    server.control.arm()
    with steady_rig(server) as answers:
        changes = [
            (server.control.set("leak.gmax_ns", g)["seq"], g) for g in (20.0, -5.0, 0.0, 40.0)
        ]
        wait_until(lambda: answers[-1].seq > changes[-1][0] + 20, "answers after the last change")
    assert in_order(answers)
    expected = np.full(len(answers), -100.0)
    for seq, g in changes:
        expected[seq + 1 :] = -10.0 * g
    assert [a.i_pa[0] for a in answers] == expected.tolist()
    assert all(a.flags == LIVE for a in answers)


def test_swap_holds_from_the_confirmed_sample_on(serving, tmp_path):
    """While a rig runs, models are loaded and swapped between two samples, again and again.

    Each holds from the confirmed sample on; no answer is lost, doubled or out of order.
    """
    server = serving(cell=[leak_cell(tmp_path, 10.0, -70.0)])
    server.control.arm()
    with steady_rig(server) as answers:
        changes = []
        for g in (20.0, 30.0, 5.0, 60.0):
            server.control.load(leak_cell(tmp_path, g, 0.0)["model"])
            changes.append((server.control.swap()["seq"], g))
        wait_until(lambda: answers[-1].seq > changes[-1][0] + 20, "answers after the last change")
    assert in_order(answers)
    expected = np.full(len(answers), -100.0)
    for seq, g in changes:
        expected[seq + 1 :] = 60.0 * g
    assert [a.i_pa[0] for a in answers] == expected.tolist()
    assert all(a.flags == LIVE for a in answers)


def test_a_crowd_at_the_other_sockets_changes_no_answer(serving):
    """Control clients that flood, and clients and watchers that never read, change no answer.

    The loop still obeys, and well-behaved clients are still served.
    """
    v_mv = np.random.default_rng(6).uniform(-80, 20, 3000)
    alone, crowded = serving(), serving(feed={"every": 1})
    for server in (alone, crowded):
        server.control.arm()
    with RawRig(endpoint(alone)) as rig:
        expected = [rig.ask(n, v).i_pa for n, v in enumerate(v_mv)]
    ends = crowded.server.endpoints()
    context = zmq.Context()
    deaf = context.socket(zmq.SUB)
    deaf.setsockopt(zmq.RCVHWM, 1)
    deaf.subscribe(b"")
    deaf.connect(ends["feed"])
    floods = [context.socket(zmq.DEALER) for _ in range(3)]
    requests = [
        msgpack.packb({"verb": "mark", "text": "flood"}),
        msgpack.packb({"verb": "status"}),
        b"\xc1",
    ]
    for flood in floods:
        flood.connect(ends["control"])
    with RawRig(ends["loop"]) as rig:
        for n, v in enumerate(v_mv):
            for flood, request in zip(floods, requests, strict=True):
                if n < 2000:
                    flood.send(request, zmq.DONTWAIT)
            reply = rig.ask(n, v)
            assert (reply.seq, reply.flags, reply.i_pa) == (n, LIVE, expected[n])
        crowded.control.disarm()
        assert rig.ask(len(v_mv), -60.0)[1::2] == (0, [0.0])
    assert crowded.control.status()["records_lost"] == 0
    context.destroy(linger=0)


def test_answers_in_flight_keep_their_order(serving):
    """A rig that sends many samples before it reads gets every answer, in order."""
    server = serving()
    server.control.arm()
    with RawRig(endpoint(server)) as rig:
        answers = []
        for burst in range(20):
            for n in range(50):
                rig.send(50 * burst + n, -65.0)
            answers += [rig.hear() for _ in range(50)]
    assert in_order(answers)
    assert all(a.flags == LIVE for a in answers)
