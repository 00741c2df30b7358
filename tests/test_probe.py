"""The compiled measuring client, against a real server and against routers that misbehave."""

from __future__ import annotations

import contextlib
import socket
import threading
import time

import msgpack
import numpy as np
import pytest
import zmq
from conftest import make_rig, wait_until

from gatestep.burners import Burners
from gatestep.errors import LinkError
from gatestep.measuring import Probe, spike_wave_mv
from gatestep.probe import Status

TICK_US = 1000.0


class Router:
    """A pyzmq ROUTER that answers each sample as ``answer(sample)`` says, and keeps them.

    ``answer`` gives a list of ``(delay in s, frames)``.
    """

    def __init__(self, endpoint, answer):
        self.context = zmq.Context()
        self.socket = self.context.socket(zmq.ROUTER)
        self.socket.linger = 0
        self.socket.bind(endpoint)
        self.endpoint = self.socket.getsockopt(zmq.LAST_ENDPOINT).decode().rstrip("\0")
        self.answer, self.samples, self.ending = answer, [], False
        self.thread = threading.Thread(target=self._serve)
        self.thread.start()

    def _serve(self):
        due = []
        while not self.ending:
            if self.socket.poll(1):
                peer, body = self.socket.recv_multipart()
                sample = msgpack.unpackb(body)
                self.samples.append(sample)
                now = time.monotonic()
                due += [(now + wait, [peer, *frames]) for wait, frames in self.answer(sample)]
            for entry in sorted(e for e in due if e[0] <= time.monotonic()):
                self.socket.send_multipart(entry[1])
                due.remove(entry)

    def close(self):
        self.ending = True
        self.thread.join()
        if not self.context.closed:
            self.context.destroy(linger=0)


@pytest.fixture
def routing(tmp_path):
    """Start a :class:`Router` that ends with the test."""
    with contextlib.ExitStack() as stack:

        def start(answer, endpoint=f"ipc://{tmp_path}/router"):
            router = Router(endpoint, answer)
            stack.callback(router.close)
            return router

        yield start


def spec(tmp_path, **loop):
    return make_rig(tmp_path, loop={"interval_us": TICK_US, **loop}).spec


def plain(sample, flags=0):
    return msgpack.packb([sample[0], flags, 1234, 0.5])


def at_once(sample):
    return [(0.0, [plain(sample)])]


@pytest.mark.parametrize("lane", ["direct", "libzmq"])
@pytest.mark.parametrize("where", ["tcp", "ipc"])
def test_every_sample_of_a_real_server_is_answered(serving, tmp_path, lane, where):
    """By the clock and flat out, over TCP and UNIX sockets, on either lane; one sequence."""
    endpoint = "tcp://127.0.0.1:0" if where == "tcp" else f"ipc://{tmp_path}/bench-loop"
    # However busy the machine is, late answers do not disarm.
    limits = {"silence_ms": 60_000.0, "late_run": 1_000_000}
    loop = {"interval_us": TICK_US, "lane": lane, "endpoint": endpoint}
    server = serving(loop=loop, limits=limits)
    server.control.arm()
    with Probe(server.server.endpoints()["loop"], server.rig.spec) as probe:
        flat, paced = probe.flat(0.1), probe.paced(200)
    assert (flat.status, paced.status) == (Status.DONE, Status.DONE)
    for run in (flat, paced):
        assert run.answered.sum() == run.sent.sum() > 0
        assert run.live == run.answered.sum()
        assert (run.round_trip_us > run.service_us).all()
        assert (run.strays, run.garbled, run.unsent) == (0, 0, 0)
    sent = int(flat.sent.sum() + paced.sent.sum())
    wait_until(lambda: server.control.status()["answered"] == sent, "every sample in the log")
    status = server.control.status()
    assert status["malformed"] == status["repeats"] == 0
    # The server cannot know of ticks after the last sample.
    last = np.flatnonzero(paced.sent)[-1]
    assert status["missed"] == int((~paced.sent[:last]).sum())


def test_a_server_that_is_armed_meanwhile_ends_a_run_at_once(serving):
    """A live answer on a loop that was idle means that a cell may be there."""
    server = serving(loop={"interval_us": TICK_US})
    with Probe(server.server.endpoints()["loop"], server.rig.spec, may_be_live=False) as probe:
        assert probe.paced(100).status == Status.DONE
        server.control.arm()
        run = probe.paced(5000)
    assert run.status == Status.ARMED
    assert run.live == 1


def test_a_loop_that_another_rig_holds_refuses(serving):
    """The client notices that it is turned away and goes."""
    server = serving(loop={"interval_us": TICK_US})
    endpoint = server.server.endpoints()["loop"]
    with Probe(endpoint, server.rig.spec) as holder, Probe(endpoint, server.rig.spec) as second:
        assert holder.paced(100).status == Status.DONE
        assert second.paced(100).status == Status.REFUSED
        assert holder.flat(0.01).status == Status.DONE


def test_samples_follow_the_wire_format(routing, tmp_path):
    """Numbers rise by one, the clock by a tick, voltages are the wave's, msgpack reads all."""
    router = routing(at_once)
    rig = spec(tmp_path)
    with Probe(router.endpoint, rig) as probe:
        run = probe.paced(50)
    wave = spike_wave_mv(rig)[:, 0]
    rows = np.flatnonzero(run.sent)
    assert [s[0] for s in router.samples] == rows.tolist()
    assert [s[1] for s in router.samples] == (rows * TICK_US).tolist()
    assert [s[4] for s in router.samples] == wave[rows % wave.size].tolist()
    assert (run.service_nsec[run.answered] == 1234).all()


def flowing(run, row, apply, interval_nsec):
    """The newest answer at a rig's output just before a sample, from what the run kept.

    An independent statement of the contract: an answer that arrived at time a flows from
    a on, or from the first tick's start after a.
    """
    before = run.start_nsec + row * interval_nsec
    found, lag_us = None, None
    for n in range(row):
        arrived = run.arrived_nsec[n]
        if not arrived:
            continue
        flows = arrived
        limit = run.sent_nsec[row]
        if apply == "next-tick":
            flows = run.start_nsec + interval_nsec * (
                (arrived - run.start_nsec) // interval_nsec + 1
            )
            limit = before - 1
        if flows <= limit:
            found, lag_us = n, (flows - run.start_nsec - n * interval_nsec) / 1000.0
    return found, lag_us


@pytest.mark.parametrize("apply", ["next-tick", "on-arrival"])
def test_in_force_and_lag_tell_what_a_rig_would_have_done(routing, tmp_path, apply):
    """With answers 0 to 6 ticks late, each sample names the answer that flowed before it.

    Where the machine held the client up for over a tick, it and the samples after are left out.
    """
    delays_s = [0.0, 0.0024, 0.0061, 0.0007, 0.0013]

    def late(sample):
        return [(delays_s[sample[0] % len(delays_s)], [plain(sample)])]

    router = routing(late)
    with Probe(router.endpoint, spec(tmp_path, apply=apply)) as probe:
        run = probe.paced(60)
    assert run.status == Status.DONE
    tick = int(TICK_US * 1000)
    held_up = [r for r in range(60) if run.sent_nsec[r] > run.start_nsec + (r + 1) * tick]
    for sample in router.samples:
        if any(0 <= sample[0] - row <= 3 for row in held_up):
            continue
        in_force, lag_us = flowing(run, sample[0], apply, tick)
        assert sample[2] == in_force
        # On the wire in whole microseconds.
        assert sample[3] is lag_us or abs(sample[3] - lag_us) <= 0.51


def test_late_answers_delay_no_sample(routing, tmp_path):
    """Samples go out while earlier answers are still missing: several are on their way at once."""
    router = routing(lambda sample: [(0.05, [plain(sample)])])
    with Probe(router.endpoint, spec(tmp_path)) as probe:
        run = probe.paced(100)
    assert run.answered.sum() == run.sent.sum()
    # An answer comes 50 ticks after its sample at the earliest; so the sample 10 ticks
    # later, wherever there is one, went out before it.
    later = [(n, n + 10) for n in range(90) if run.sent_nsec[n] and run.sent_nsec[n + 10]]
    assert later
    assert all(run.sent_nsec[b] < run.arrived_nsec[a] for a, b in later)


def test_flat_out_waits_for_each_answer_and_reports_no_output(routing, tmp_path):
    """Sample n+1 goes after answer n; without a clock, nothing flows."""
    router = routing(at_once)
    with Probe(router.endpoint, spec(tmp_path)) as probe:
        run = probe.flat(0.05)
    assert run.status == Status.DONE
    assert (run.sent_nsec[1:] >= run.arrived_nsec[:-1]).all()
    assert all(s[2] is None and s[3] is None for s in router.samples)


@pytest.mark.parametrize("sleep", [True, False])
def test_no_answer_ends_in_time(routing, tmp_path, sleep):
    """A router that never answers: all missing by the clock, one sample flat out."""
    router = routing(lambda _: [])
    with Probe(router.endpoint, spec(tmp_path), sleep=sleep, patience_s=0.1) as probe:
        paced, flat = probe.paced(20), probe.flat(5.0)
    assert (paced.status, flat.status) == (Status.NO_ANSWER, Status.NO_ANSWER)
    assert paced.answered.sum() == flat.answered.sum() == 0
    assert flat.sent.sum() == 1
    assert paced.round_trip_us.size == 0


def test_a_server_that_falls_silent_ends_a_run(routing, tmp_path):
    """The connection stands, but answers stop: not for the whole length of the run."""
    router = routing(lambda s: at_once(s) if s[0] < 20 else [])
    with Probe(router.endpoint, spec(tmp_path), patience_s=0.1) as probe:
        run = probe.paced(100_000)
    assert run.status == Status.SILENT
    rows = np.arange(run.sent.size)
    assert (run.answered == (run.sent & (rows < 20))).all()


def test_some_answers_never_come(routing, tmp_path):
    """What is missing is known row by row, and the others are kept."""
    router = routing(lambda s: at_once(s) if s[0] % 3 else [])
    with Probe(router.endpoint, spec(tmp_path), patience_s=0.1) as probe:
        run = probe.paced(60)
    assert run.status == Status.NO_ANSWER
    rows = np.arange(60)
    assert (run.answered == (run.sent & (rows % 3 > 0))).all()


def test_garbage_is_counted_and_harms_nothing(routing, tmp_path):
    """Bytes that are no answer, too many frames, too long ones, answers twice or to nobody."""

    def noisy(sample):
        good = plain(sample)
        nobody = msgpack.packb([sample[0] + 10_000, 0, 1, 0.0])
        rubbish = [[b"\xc1rubbish"], [b""], [good, good], [b"x" * 3000], [good[:-1]], [nobody]]
        return [(0.0, frames) for frames in [*rubbish, [good], [good]]]

    router = routing(noisy)
    with Probe(router.endpoint, spec(tmp_path)) as probe:
        run = probe.paced(40)
        # What still comes from before belongs to no sample of the next run.
        following = probe.paced(40)
    assert run.status == following.status == Status.DONE
    assert run.answered.sum() == run.sent.sum()
    sent = int(run.sent.sum() + following.sent.sum())
    noticed = run.garbled + following.garbled
    assert 5 * (sent - 1) <= noticed <= 5 * sent
    assert 2 * (sent - 1) <= run.strays + following.strays <= 2 * sent


def test_malformed_means_that_the_rig_files_differ(routing, tmp_path):
    """The answer to a malformed sample ends the run with that status."""
    router = routing(lambda _: [(0.0, [msgpack.packb([None, 128, 0])])])
    with Probe(router.endpoint, spec(tmp_path)) as probe:
        assert probe.paced(100).status == Status.MALFORMED


@pytest.mark.parametrize("where", ["tcp", "ipc"])
def test_a_connection_that_ends_keeps_what_there_was(routing, tmp_path, where):
    """The run says so, and what was answered before is in it."""
    endpoint = "tcp://127.0.0.1:*" if where == "tcp" else f"ipc://{tmp_path}/router"

    def closing(sample):
        router.ending = sample[0] >= 20
        return at_once(sample)

    router = routing(closing, endpoint)
    with Probe(router.endpoint, spec(tmp_path)) as probe:
        closer = threading.Thread(target=lambda: (router.thread.join(), router.close()))
        closer.start()
        run = probe.paced(5000)
        closer.join()
    assert run.status == Status.CLOSED
    assert 0 < run.answered.sum() <= 21


def test_heartbeats_are_answered(tmp_path):
    """A libzmq that asks for PONG every 20 ms and gives up after 60 keeps the connection."""
    context = zmq.Context()
    server = context.socket(zmq.ROUTER)
    server.heartbeat_ivl, server.heartbeat_timeout = 20, 60
    server.bind(f"ipc://{tmp_path}/beating")
    try:
        with Probe(f"ipc://{tmp_path}/beating", spec(tmp_path), patience_s=0.8) as probe:
            run = probe.paced(500)
        assert run.status == Status.NO_ANSWER
        assert run.sent_nsec[-1] > 0 or run.sent_nsec[-2] > 0
    finally:
        context.destroy(linger=0)


def test_connecting_to_nobody_or_to_no_loop_says_so(tmp_path):
    """Each failure of the handshake has its words."""
    rig = spec(tmp_path)
    with pytest.raises(LinkError, match="is the server running"):
        Probe(f"ipc://{tmp_path}/nobody", rig)
    context = zmq.Context()
    try:
        wrong = context.socket(zmq.PUB)
        wrong.bind(f"ipc://{tmp_path}/wrong")
        with pytest.raises(LinkError, match="loop endpoint"):
            Probe(f"ipc://{tmp_path}/wrong", rig)
        locked = context.socket(zmq.ROUTER)
        locked.curve_publickey, locked.curve_secretkey = zmq.curve_keypair()
        locked.curve_server = True
        locked.bind(f"ipc://{tmp_path}/locked")
        with pytest.raises(LinkError, match="CURVE"):
            Probe(f"ipc://{tmp_path}/locked", rig)
    finally:
        context.destroy(linger=0)
    with socket.create_server(("127.0.0.1", 0)) as other:
        threading.Thread(target=lambda: other.accept()[0].sendall(b"HTTP/1.1 400" * 9)).start()
        with pytest.raises(LinkError, match="ZMTP"):
            Probe(f"tcp://127.0.0.1:{other.getsockname()[1]}", rig)


@pytest.mark.parametrize("window", [[-120.0, 80.0], [-70.0, -60.0], [0.0, 1.0]])
def test_the_made_up_voltage_spikes_and_stays_in_the_window(tmp_path, window):
    """Fifty spikes in a second, never outside the cell's window."""
    cells = [{"name": n, "model": "leak", "limits": {"window_mv": window}} for n in "ab"]
    wave = spike_wave_mv(make_rig(tmp_path, cell=cells).spec)
    assert wave.shape == (50_000, 2)
    assert window[0] < wave.min() < wave.max() < window[1]
    above = wave > wave.min() + 0.6 * (wave.max() - wave.min())
    assert np.sum(np.diff(above.astype(int), axis=0) == 1, axis=0).tolist() == [50, 50]


def test_burners_end_with_their_block_and_by_themselves():
    """None is left over, whether told to stop or out of time."""
    with Burners(2, 60.0) as burners:
        assert burners.running == 2
    assert burners.running == 0
    with pytest.raises(ZeroDivisionError), Burners(1, 60.0) as burners:
        raise ZeroDivisionError
    assert burners.running == 0
    with Burners(1, 0.01) as burners:
        wait_until(lambda: burners.running == 0, "a burner whose time is up")
