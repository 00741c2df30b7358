"""The serial bridge: what it carries, what it survives, and what it never does."""

from __future__ import annotations

import math
import os
import socket
import time
from contextlib import contextmanager

import numpy as np
import pytest
import zmtp_reference as rfc
from conftest import PATIENCE_S, RawRig, running, wait_until
from framed_host import ANSWER, BYE, HELLO, SAMPLE, WELCOME, encode
from hypothesis import given
from hypothesis import strategies as st
from numba import typeof
from serial_device import CDevice, bench, pack
from test_hot import FORBIDDEN, NATIVE, calls_through_pointers, code_of, outside

from gatestep import bridgehost
from gatestep.bridge import carry, make_memory
from gatestep.bridgefigures import BINS, note, percentiles, upper_nsec
from gatestep.bridgehost import Expected, read_hello

SAMPLES = 2000
SERVER_GONE, HOST_STOPS = 3, 4
SOCKETS = {"ppoll", "read", "write", "ioctl", "recv", "send", "clock_gettime", "__errno_location"}


def voltage(k):
    """A made-up voltage that float32 holds: rest, and a slow swing that opens gates."""
    return float(np.float32(-65.0 + 30.0 * math.sin(k / 40.0)))


def loop_of(server):
    return server.server.endpoints()["loop"]


def reference(server, samples):
    """Answers of a server to a client of its own libzmq: the ways there must not differ."""
    with RawRig(loop_of(server)) as rig:
        return [rig.ask(k, *v_mv) for k, v_mv in enumerate(samples)]


@contextmanager
def armed(folder, **changes):
    folder.mkdir()
    with running(folder, **changes) as server:
        server.control.arm(force=True)
        yield server


def test_two_thousand_samples_are_carried_rightly(tmp_path):
    """Each is answered once, in order, with the current that libzmq brings for the same samples."""
    samples = [(voltage(k),) for k in range(SAMPLES)]
    with armed(tmp_path / "a") as server:
        wanted = [(r.seq, r.flags, r.i_pa) for r in reference(server, samples)]
    with armed(tmp_path / "b") as server, bench(tmp_path, loop_of(server)) as made:
        made.device.join()
        began, trips_nsec = time.monotonic_ns(), 0
        found = []
        for k, v_mv in enumerate(samples):
            sent = time.monotonic_ns()
            seq, flags, _, *i_pa = made.device.ask(k, *v_mv)
            trips_nsec += time.monotonic_ns() - sent
            found.append((seq, flags, i_pa))
        made.bridge.halt()
        elapsed = time.monotonic_ns() - began
        figures = made.bridge.figures()
    assert found == wanted
    assert {i[2][0] for i in found} != {0.0}
    assert (figures["samples"], figures["answers"]) == (SAMPLES, SAMPLES)
    rare = ("dropped", "overtaken", "damaged", "malformed", "garbled", "unserved", "passed")
    assert [figures[name] for name in rare] == [0] * len(rare)
    check_latency(made.bridge, figures, trips_nsec, elapsed)


def check_latency(bridge, figures, trips_nsec, elapsed_nsec):
    """Each sample and answer is counted once; together they took no longer than there was.

    A sample is sent on before its answer can be there, so what it cost is part of its round
    trip; and one thread does both ways, so its times do not overlap.
    """
    record = bridge._memory.bridge[0]
    lower = np.concatenate([[0.0], upper_nsec()[:-1]])
    total = [
        float(np.sum(np.array(c) * lower)) for c in (record.sample_counts, record.answer_counts)
    ]
    assert [int(np.sum(c)) for c in (record.sample_counts, record.answer_counts)] == [SAMPLES] * 2
    assert 0 < total[0] <= trips_nsec
    assert sum(total) <= elapsed_nsec
    for way in ("to_server", "to_device"):
        values = list(figures["added_nsec"][way].values())
        assert list(figures["added_nsec"][way]) == ["p50", "p90", "p99", "p99.9", "max"]
        assert values == sorted(values)


def test_samples_that_wait_for_nothing(tmp_path):
    """A device that samples by its clock: the server gets all, the device the newest of answers.

    Where the machine holds the server up so long that its socket is full, the newest sample
    takes the place of those that wait, which is counted and which the server meets as a gap.
    """
    with armed(tmp_path / "a") as server:
        wanted = {r.seq: r.i_pa for r in reference(server, [(voltage(k),) for k in range(SAMPLES)])}
    with armed(tmp_path / "b") as server, bench(tmp_path, loop_of(server)) as made:
        made.device.join()
        found = {}
        for k in range(SAMPLES):
            made.device.sample(k, voltage(k))
            while (frame := made.device.hear(0.0)) is not None:
                if frame.kind == ANSWER:
                    found[frame.items[0]] = frame.items[3:]
        while SAMPLES - 1 not in found:
            items = made.device.wait(ANSWER)
            found[items[0]] = items[3:]
        figures = wait_until(
            lambda: (f := made.bridge.figures())["answers"] == len(found) and f, "all is counted"
        )
        given = SAMPLES - figures["dropped"]
        wait_until(lambda: server.control.status()["answered"] == given, "all is counted")
        status = server.control.status()
    assert list(found) == sorted(found)
    if not figures["dropped"]:
        assert found == {k: wanted[k] for k in found}
    assert figures["samples"] == given > SAMPLES // 2
    assert len(found) + figures["overtaken"] == given
    assert status["missed"] == figures["dropped"]


@pytest.mark.parametrize("tcp", [False, True], ids=["ipc", "tcp"])
def test_several_cells_over_either_kind_of_socket(tmp_path, tcp):
    """Eight cells, the longest messages there are; the addresses the rig file may have."""
    cells = [{"name": f"c{k}", "model": "leak"} for k in range(8)]
    changes = {"cell": cells, "loop": {"interval_us": 20.0}}
    if tcp:
        changes["loop"]["endpoint"] = "tcp://127.0.0.1:0"
    samples = [[voltage(k + c) for c in range(8)] for k in range(50)]
    with armed(tmp_path / "a", **changes) as server:
        wanted = [r.i_pa for r in reference(server, samples)]
    with armed(tmp_path / "b", **changes) as server, bench(tmp_path, loop_of(server)) as made:
        made.device.join(8)
        assert [made.device.ask(k, *v)[3:] for k, v in enumerate(samples)] == wanted


def test_the_c_library_is_served(tmp_path):
    """The device library over the line: 2,000 ticks, each current that flows is the server's.

    The server anticipates by what the samples report: the answer before the last one's flowed.
    """
    with armed(tmp_path / "a") as server, RawRig(loop_of(server)) as rig:
        reports = [{}, {}, *({"in_force": k - 2, "lag_us": 20} for k in range(2, SAMPLES))]
        answers = [rig.ask(k, voltage(k), **report) for k, report in enumerate(reports)]
        wanted = [0.0, *(float(np.float32(r.i_pa[0])) for r in answers[:-1])]
    with armed(tmp_path / "b") as server, bench(tmp_path, loop_of(server)) as made:
        device = CDevice(made.pty, voltage)
        device.poll_until(lambda: device.state() == "running")
        flowed = [device.step() for _ in range(SAMPLES)]
        wait_until(lambda: server.control.status()["answered"] == SAMPLES, "all is counted")
        counters = [device.counter(name) for name in ("answers", "ignored", "clipped", "silences")]
    assert counters == [SAMPLES, 0, 0, 0]
    assert flowed == wanted


def test_half_frames_at_the_start_and_damaged_ones_later(tmp_path):
    """Junk before the hello is no damage; a damaged sample has no answer, others have theirs."""
    with armed(tmp_path / "a") as server, bench(tmp_path, loop_of(server)) as made:
        device = made.device
        device.write(encode(SAMPLE, [1, 2, 3])[4:] + bytes([200, 7, 9]) + b"\0")
        device.join()
        answered = []
        for k in range(200):
            good = encode(SAMPLE, [k, 20 * k, None, None, voltage(k)])
            if k % 10 == 5:
                place = 1 + k % (len(good) - 2)
                device.write(good[:place] + bytes([good[place] ^ 0x55 or 1]) + good[place + 1 :])
            elif k % 10 == 8:
                device.write(good[: len(good) // 2] + b"\0")
            else:
                device.write(good)
                answered.append(device.wait(ANSWER)[0])
        assert device.hear(0.1) is None
        figures = made.bridge.figures()
    assert answered == [k for k in range(200) if k % 10 not in (5, 8)]
    assert figures["samples"] == 160
    assert 40 <= figures["damaged"] <= 80  # a 0 in the middle of one makes two
    assert figures["malformed"] == 0


def test_unplugged_and_plugged_in_again(tmp_path):
    """The loop is let go of at once, the bridge says so and waits; the device is served again."""
    with armed(tmp_path / "a") as server, bench(tmp_path, loop_of(server)) as made:
        for turn in range(3):
            made.device.join()
            assert made.device.ask(10 * turn, -65.0)[0] == 10 * turn
            made.device.write(encode(SAMPLE, [10 * turn + 1, 0, None, None, -65.0])[:7])
            made.device.waiting = b""
            made.pty.unplug()
            wait_until(lambda: made.bridge.figures()["state"] == "no device", "it knows")
            wait_until(lambda: server.control.status()["rig"] == "none", "the loop is free")
            made.pty.plug()
        made.device.join()
        figures = made.bridge.figures()
        assert made.device.ask(100, -65.0)[0] == 100
    assert (figures["openings"], figures["connections"]) == (4, 4)
    assert sum("is gone" in text for text in made.said) == 3
    assert sum("is back" in text for text in made.said) == 3


def test_a_server_that_goes_away_and_comes_back(tmp_path):
    """The device is told, gets no answer that no server gave, and is served when one is there."""
    with bench(tmp_path, f"ipc://{tmp_path}/a/loop") as made:
        made.device.hello()
        assert made.device.wait(BYE) is None
        assert made.device.wait(BYE) == [SERVER_GONE]
        with armed(tmp_path / "a"):
            made.device.join()
            assert made.device.ask(0, -65.0)[0] == 0
        assert made.device.wait(BYE) == [SERVER_GONE]
        for k in range(1, 20):
            made.device.sample(k, -65.0)
        assert made.device.hear(0.3) is None
        os.rename(tmp_path / "a", tmp_path / "was")
        with armed(tmp_path / "a"):
            made.device.join()
            assert made.device.ask(30, -65.0)[0] == 30
        figures = made.bridge.figures()
    assert (figures["samples"], figures["unserved"]) == (2, 19)
    assert made.heard("is the server running?")
    assert made.heard("the server is gone")


def test_hellos_are_not_answered_with_a_flood(tmp_path):
    """Where each goodbye brings a hello, a server that is missing must not fill the line."""
    with bench(tmp_path, f"ipc://{tmp_path}/nobody") as made:
        goodbyes, end = 0, time.monotonic() + 1.2
        while (left := end - time.monotonic()) > 0:
            if made.device.hear(left) is not None:
                goodbyes += 1
                made.device.hello()
    assert 1 <= goodbyes <= 7


def test_a_goodbye_that_is_lost_is_said_again(tmp_path):
    """A device that goes on sampling is told until it says hello, four times a second at most."""
    with armed(tmp_path / "a") as server, bench(tmp_path, loop_of(server)) as made:
        lost = 0
        begun = time.monotonic()
        while lost < 3:  # it has not heard them
            assert time.monotonic() < begun + PATIENCE_S
            made.device.sample(lost, -65.0)
            frame = made.device.hear(0.01)
            assert frame is None or frame.kind == BYE
            lost += frame is not None
        assert time.monotonic() - begun > 0.4
        made.device.join()
        assert made.device.ask(7, -65.0)[0] == 7
        assert made.bridge.figures()["samples"] == server.control.status()["answered"] == 1


@pytest.mark.parametrize(
    ("hello", "reason", "words"),
    [
        ([2, 0, 1, 20.0, 1], 1, "framing 2.0"),
        ([1, 0, 2, 20.0, 1], 2, "the device has 2 cells, the rig file 1"),
        ([1, 0, 1, 20.0, 2], 0, "gatestep supervise"),
    ],
)
def test_devices_that_cannot_be_served_are_told_why(tmp_path, hello, reason, words):
    """Another version, another number of cells, a device that takes no samples: goodbye."""
    endpoint = f"ipc://{tmp_path}/nobody"
    with bench(tmp_path, endpoint, Expected(1, 20.0)) as made:
        assert made.device.wait(BYE) is None
        made.device.send(0x01, hello)
        assert made.device.wait(BYE) == [reason]
        assert made.heard(words)
        assert made.bridge.figures()["connections"] == 0


def test_a_second_hello_keeps_the_connection_and_a_new_start_takes_another(tmp_path, monkeypatch):
    """A hello that crosses the welcome has none of its own; after samples it is a new start."""
    monkeypatch.setattr(bridgehost, "SAID_BEFORE_S", 60.0)
    with armed(tmp_path / "a") as server, bench(tmp_path, loop_of(server)) as made:
        made.device.write(2 * encode(HELLO, [1, 0, 1, 20.0, 1]))
        made.device.wait(WELCOME)
        assert made.device.hear(0.05) is None
        monkeypatch.setattr(bridgehost, "SAID_BEFORE_S", 0.0)
        made.device.join()  # as if the welcome had been lost
        assert made.device.ask(7, -65.0)[0] == 7
        assert made.bridge.figures()["connections"] == 1
        made.device.join()
        assert made.device.ask(0, -65.0)[0] == 0
        assert made.bridge.figures()["connections"] == 2
        made.device.send(BYE)
        wait_until(lambda: server.control.status()["rig"] == "none", "the loop is free")


def test_another_tick_than_the_rig_files_is_told(tmp_path):
    """The server would trip by it."""
    with (
        armed(tmp_path / "a") as server,
        bench(tmp_path, loop_of(server), Expected(1, 50.0)) as made,
    ):
        made.device.join()
        assert made.heard("the device's tick is 20 µs and the rig file's 50 µs")


class SlowServer:
    """A ROUTER by hand that reads only when it is told to; ``tests/zmtp_reference.py`` frames."""

    def __init__(self, folder):
        self.listener = socket.socket(socket.AF_UNIX)
        self.listener.bind(f"{folder}/slow")
        self.listener.listen()
        self.endpoint = f"ipc://{folder}/slow"

    def accept(self):
        self.link, _ = self.listener.accept()
        self.link.settimeout(30)
        self.link.sendall(rfc.greeting() + rfc.ready(b"ROUTER"))
        self.data = b""
        self._need(64)
        self.data = self.data[64:]
        while not isinstance(split := rfc._split(self.data), tuple):
            self._need(len(self.data) + 1)
        self.data = split[2]

    def _need(self, size):
        while len(self.data) < size:
            got = self.link.recv(65536)
            assert got
            self.data += got

    def numbers(self, last):
        """Numbers of all samples up to this one."""
        import msgpack

        found = []
        while not found or found[-1] != last:
            while isinstance(split := rfc._split(self.data), tuple):
                _, body, self.data = split
                found.append(msgpack.unpackb(body)[0])
            if found[-1:] != [last]:
                self._need(len(self.data) + 1)
        return found

    def answer(self, seq, *i_pa):
        self.link.sendall(rfc.message(pack(seq, 1, 1000, *i_pa)))

    def close(self):
        self.link.close()
        self.listener.close()


@contextmanager
def slow(tmp_path):
    server = SlowServer(tmp_path)
    with bench(tmp_path, server.endpoint) as made:
        made.device.wait(BYE)
        made.device.hello()
        server.accept()
        made.device.wait(WELCOME)
        try:
            yield server, made
        finally:
            server.close()


def test_of_samples_that_cannot_go_the_newest_waits(tmp_path):
    """A server that reads nothing: what waits does not grow, and the newest is what it gets."""
    with slow(tmp_path) as (server, made):
        last = 20_000
        for k in range(last + 1):
            made.device.sample(k, -65.0)
        made.device.send(0x7F)  # passed over: when it is counted, all before it is read
        wait_until(lambda: made.bridge.figures()["passed"] == 1, "all is read")
        found = server.numbers(last)
        figures = wait_until(
            lambda: (f := made.bridge.figures())["samples"] == len(found) and f, "all is counted"
        )
        assert found == sorted(set(found))
        assert found[:10] == list(range(10))
        assert len(found) + figures["dropped"] == last + 1
        assert figures["dropped"] > last / 2


def test_of_answers_that_cannot_go_the_newest_waits(tmp_path):
    """A device that reads nothing keeps no sample back, and then hears what is newest."""
    with slow(tmp_path) as (server, made):
        made.device.sample(0, -65.0)
        server.numbers(0)
        for k in range(20_000):
            server.answer(k, 0.5)
            if k % 1000 == 0:
                time.sleep(0.01)  # apart, or all of them come together
        made.device.sample(1, -65.0)
        assert server.numbers(1) == [1]
        found = [made.device.wait(ANSWER)[0]]
        while found[-1] != 19_999:
            found.append(made.device.wait(ANSWER)[0])
        figures = wait_until(
            lambda: (f := made.bridge.figures())["answers"] == len(found) and f, "all is counted"
        )
        assert found == sorted(set(found))
        assert len(found) + figures["overtaken"] == 20_000
        assert figures["overtaken"] > 0


def test_answers_are_carried_as_they_are(tmp_path):
    """What is said of a malformed sample is never overtaken; what is no answer goes nowhere."""
    with slow(tmp_path) as (server, made):
        together = [pack(None, 128, 0), pack(4, 1, 9, 2.0), pack(None, 128, 0), bytes(300), b""]
        together.append(pack(5, 64 + 1, 2**40, -3.25))
        server.link.sendall(b"".join(map(_message, together)))
        heard = [made.device.wait(ANSWER) for _ in range(3)]
        assert heard == [[None, 128, 0], [None, 128, 0], [5, 65, 2**40, -3.25]]
        figures = made.bridge.figures()
        assert [figures[k] for k in ("malformed", "garbled", "overtaken")] == [2, 2, 1]
        server.link.sendall(rfc.ping(10, b"ab"))
        assert server.link.recv(100) == rfc.command(b"PONG", b"ab")
        server.link.sendall(b"\x80nonsense")  # breaks the protocol
        assert made.device.wait(BYE) == [SERVER_GONE]


def _message(body):
    if len(body) < 256:
        return rfc.message(body)
    return bytes([2]) + len(body).to_bytes(8, "big") + body


def test_goodbye_at_the_end(tmp_path):
    """A bridge that is halted says so, and the line is free for the next."""
    with bench(tmp_path, f"ipc://{tmp_path}/nobody") as made:
        assert made.device.wait(BYE) is None
        made.bridge.halt()
        assert made.device.wait(BYE) == [HOST_STOPS]
        assert not made.bridge.running
        assert made.bridge.figures()["state"] == "stopped"


@given(st.lists(st.integers(0, 2**43 - 1), min_size=1, max_size=200))
def test_percentiles_are_within_a_bin(nsec):
    """Against numpy's own on the same durations: never below, at most a sixteenth above."""
    counts = np.zeros(BINS, np.int64)
    for value in nsec:
        note(counts, np.int64(value), np.int64(1))
    found = percentiles(counts)
    assert counts.sum() == len(nsec)
    for name, value in found.items():
        rank = 100.0 if name == "max" else float(name[1:])
        want = float(np.percentile(nsec, rank, method="inverted_cdf"))
        assert want < value <= want * (1 + 1 / 16) + 1
    assert percentiles(np.zeros(BINS, np.int64)) == {}


@given(st.binary(max_size=40))
def test_any_hello_is_read_or_refused(payload):
    """Whatever the bytes; and items that a later version adds are passed over."""
    read_hello(payload)
    assert read_hello(pack(1, 7, 2, 50, 3, payload)).cells == 2
    assert read_hello(pack(1, 7, -2, 50, 3)) is None


def test_its_loop_never_meets_the_interpreter():
    """The compiled loop calls its descriptors and the clock, and nothing that allocates."""
    code = code_of(carry.py_func, typeof(make_memory()), **NATIVE)
    assert outside(code) <= SOCKETS
    assert {"ppoll", "read", "write", "recv", "send"} <= outside(code)
    assert FORBIDDEN.findall(code) == []
    assert calls_through_pointers(code) == []
