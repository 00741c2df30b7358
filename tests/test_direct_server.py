"""A server in the direct lane before unmodified libzmq clients, and before hostile ones.

The libzmq lane is the reference: for the same samples both must answer alike, but for
the service time. Nothing here asserts a time.
"""

from __future__ import annotations

import os
import random
import re
import threading
import time
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import msgpack
import numpy as np
import pytest
import zmq
import zmq.auth
import zmtp_reference as rfc
from conftest import PATIENCE_S, RawRig, Reply, read_reply, wait_until
from zmq.utils.monitor import recv_monitor_message
from zmtp_reference import Wire

from gatestep.direct import PLACES
from gatestep.wire import GAP, LIVE, MALFORMED, REFUSED

DIRECT = {"interval_us": 20.0, "lane": "direct"}
TCP = {**DIRECT, "endpoint": "tcp://127.0.0.1:0"}
SMALL = 1 << 14
LIBZMQ = {"interval_us": 20.0, "lane": "libzmq"}


def endpoint(server: Any) -> str:
    return server.server.endpoints()["loop"]


@pytest.fixture(params=["ipc", "tcp"])
def server(request, serving):
    """An armed server in the direct lane."""
    made = serving(loop=DIRECT if request.param == "ipc" else TCP)
    made.control.arm()
    return made


def sample(seq: int, v_mv: float, **more: Any) -> bytes:
    """A sample by the reference MessagePack implementation."""
    return msgpack.packb([seq, 20 * seq, more.get("in_force"), more.get("lag_us"), v_mv])


def long_sample(seq: int, v_mv: float) -> bytes:
    """The same in the widest forms that MessagePack has."""
    wide = [b"\xcf" + n.to_bytes(8, "big") for n in (seq, 20 * seq)]
    voltage = b"\xcb" + np.array([v_mv], ">f8").tobytes()
    return b"\xdd" + (5).to_bytes(4, "big") + wide[0] + wide[1] + b"\xc0\xc0" + voltage


def conversation(count: int = 400) -> list[list[bytes]]:
    """Messages of every kind: samples, gaps, repeats, nonsense, too long, too many frames."""
    rng = np.random.default_rng(11)
    v_mv = np.clip(np.cumsum(rng.normal(0, 3, count)) - 60, -90, 40)
    messages, seq = [], 0
    for n, v in enumerate(v_mv):
        seq += 1 + (n % 23 == 0) * int(rng.integers(1, 9))
        messages.append([(long_sample if n % 3 == 0 else sample)(seq, float(v))])
        if n % 17 == 0:
            messages.append([sample(seq, 0.0)])
        if n % 29 == 0:
            messages += [[b""], [b"\xc1"], [b"x" * 300], [b"x" * 512], [b"x" * 513]]
            messages += [[b"x" * 70_000], [sample(seq, 0.0)] * 2, [b"", b"", b"x"]]
    return messages


def plain(reply: Reply) -> tuple[Any, ...]:
    """A reply but for its service time."""
    return reply.seq, reply.flags, reply.i_pa


class RouterRig(RawRig):
    """A ROUTER as a client: it names the server and takes the name off again."""

    def __init__(self, where: str) -> None:
        super().__init__(where, zmq.ROUTER, connect_routing_id=b"server", router_mandatory=1)

    def tell(self, *frames: bytes) -> Reply:
        def sent() -> bool:
            try:
                self.socket.send_multipart([b"server", *frames])
            except zmq.ZMQError:  # no route before the handshake is done
                return False
            return True

        wait_until(sent, "the connection")
        return self.hear()


PEERS = {
    "DEALER": RawRig,
    "REQ": lambda where: RawRig(where, zmq.REQ),
    "ROUTER": RouterRig,
    "named": lambda where: RawRig(where, identity=b"\x01rig" + b"x" * 200),
    "heartbeats": lambda where: RawRig(where, heartbeat_ivl=20, heartbeat_timeout=20_000),
}


def counters(server: Any, messages: int) -> dict[str, int]:
    """What the status counts, once it has counted so many messages."""

    def told() -> bool:
        status = server.control.status()
        return status["answered"] + status["repeats"] + status["malformed"] >= messages

    wait_until(told, "the log")
    return server.server.watch.counters()


@pytest.mark.parametrize("transport", ["ipc", "tcp"])
def test_both_lanes_answer_alike(serving, transport):
    """Every kind of peer gets, message for message, what the libzmq lane answers a DEALER.

    The codec, the guard, gaps, repeats and flags are the same; so are the counters.
    """
    messages = conversation()
    reference = serving(loop=LIBZMQ)
    reference.control.arm()
    with RawRig(endpoint(reference)) as rig:
        wanted = [plain(rig.tell(*frames)) for frames in messages]
    assert {f for _, f, _ in wanted} >= {LIVE, LIVE | GAP, MALFORMED}
    counted = counters(reference, len(messages))
    for name, peer in PEERS.items():
        made = serving(loop=DIRECT if transport == "ipc" else TCP)
        made.control.arm()
        with peer(endpoint(made)) as rig:
            assert [plain(rig.tell(*frames)) for frames in messages] == wanted, name
            assert counters(made, len(messages)) == counted, name


def expected_replies(serving, stream: bytes) -> list[tuple[Any, ...]]:
    """What a libzmq lane answers the messages of a stream, as the reference reads it."""
    heard = rfc.hear(stream)
    assert not heard.broken
    reference = serving(loop=LIBZMQ)
    reference.control.arm()
    with RawRig(endpoint(reference)) as rig:
        return [
            plain(rig.tell(body if size != rfc.NO_SAMPLE else b"x" * 600))
            for size, body, _ in heard.messages
        ]


def test_a_stream_in_random_pieces(serving, server):
    """However the bytes of a session are cut, each message gets its answer, in order.

    With long frames, envelopes echoed, PINGs between frames and commands unknown.
    """
    dice = random.Random(3)
    stream = rfc.OPENING
    for n in range(300):
        body = sample(n, -60.0 + n % 50)
        stream += rfc.message(*[b""] * dice.randrange(2), body, long=dice.choice([None, True]))
        stream += (b"", rfc.ping(0, b"%d" % n), rfc.command(b"NEW"), rfc.message(b"y" * 700))[n % 4]
    wanted = expected_replies(serving, stream)
    wire = Wire(endpoint(server), b"")
    cutter = threading.Thread(target=send_in_pieces, args=(wire, stream, dice))
    cutter.start()
    found, envelopes, pongs = [], 0, []
    while len(found) < len(wanted):
        flags, body = wire.frame()
        if flags & rfc.COMMAND:
            pongs.append(body)
        elif flags & rfc.MORE:
            assert body == b""
            envelopes += 1
        else:
            found.append(plain(read_reply(body)))
    cutter.join(PATIENCE_S)
    assert found == wanted
    assert envelopes == sum(enveloped for *_, enveloped in rfc.hear(stream).messages) > 50
    assert pongs == [b"\x04PONG" + c for c in rfc.hear(stream).pongs]
    wire.close()


def send_in_pieces(wire: Wire, stream: bytes, dice: random.Random) -> None:
    """Send a stream cut at random, so that the other end often sees parts of frames."""
    while stream:
        count = dice.choice([1, 1, 2, 3, 7, 20, 100, 1000])
        wire.send(stream[:count])
        stream = stream[count:]


def test_heartbeats_keep_a_connection(server):
    """A libzmq client that pings every 20 ms stays connected, idle or busy.

    libzmq itself would close the connection if a PONG were missing or wrong.
    """
    options = {"heartbeat_ivl": 20, "heartbeat_ttl": 20_000, "heartbeat_timeout": 20_000}
    with RawRig(endpoint(server), **options) as rig:
        events = rig.socket.get_monitor_socket(zmq.EVENT_DISCONNECTED | zmq.EVENT_CONNECTED)
        for n in range(200):
            assert rig.ask(n, -65.0).flags == LIVE
        assert rig.receive(1.0) is None
        for n in range(200, 400):
            assert rig.ask(n, -65.0).flags == LIVE
        told = []
        while events.poll(0):
            told.append(recv_monitor_message(events)["event"])
        rig.socket.disable_monitor()
    assert zmq.EVENT_DISCONNECTED not in told
    assert server.control.status()["rig"] in ("connected", "none")


def trips(server: Any) -> str:
    """The reason of the trip that must come."""
    wait_until(lambda: server.control.status()["state"] == "tripped", "the trip")
    return server.control.status()["fault"]


def is_free(server: Any) -> None:
    """After a reset and arming, a new rig takes hold and is answered by the model."""
    server.control.reset()
    server.control.arm()
    with RawRig(endpoint(server)) as rig:
        assert rig.ask(0, -65.0).flags == LIVE


ENDS = {
    "closed": lambda wire: wire.close(),
    "reset": lambda wire: wire.reset(),
    "half a message": lambda wire: (wire.send(rfc.message(b"x" * 99)[:50]), wire.close()),
    "breach": lambda wire: wire.send(b"\xff" * 20),
    "ERROR": lambda wire: wire.send(rfc.command(b"ERROR", b"\x03end")),
    "time to live": lambda wire: wire.send(rfc.ping(1)),
    "breach behind a sample": lambda wire: wire.send(rfc.message(sample(1, -65.0)) + b"\x80\x00"),
}


@pytest.mark.parametrize("end", ENDS.values(), ids=ENDS)
def test_the_holders_end_trips_at_once(server, end):
    """Armed, the end of the holder's connection trips, long before limits.silence_ms (60 s).

    The status says why, and the loop is free for the next rig.
    """
    wire = Wire(endpoint(server))
    wire.send(rfc.message(sample(0, -65.0)))
    assert read_reply(wire.answer()).flags == LIVE
    end(wire)
    assert "connection ended" in trips(server)
    is_free(server)
    assert server.control.status()["trips"] >= 1
    wire.close()


def test_another_peers_end_does_not_trip(server):
    """Peers that come and go beside the holder, in whatever way, are nothing to it."""
    with RawRig(endpoint(server)) as rig:
        for n, end in enumerate(ENDS.values()):
            assert rig.ask(2 * n, -65.0).flags == LIVE
            wire = Wire(endpoint(server))
            wire.send(rfc.message(sample(n, -65.0)))
            assert read_reply(wire.answer()).flags == REFUSED
            end(wire)
            assert rig.ask(2 * n + 1, -65.0).flags == LIVE
            wire.close()
        assert server.control.status()["trips"] == 0


def test_a_holder_that_stalls_on_nonsense_trips(server):
    """Dropped for leaving answers to nonsense unread, the holder is known to have gone."""
    wire = Wire(endpoint(server), receive_buffer=SMALL)
    wire.send(rfc.message(sample(0, -65.0)))
    assert read_reply(wire.answer()).flags == LIVE
    send_until_dropped(wire, rfc.message(b"\xc1") * 1000)
    assert "connection ended" in trips(server)
    is_free(server)


def send_until_dropped(wire: Wire, block: bytes) -> None:
    """Send and never read, until the server has had enough."""
    deadline = time.monotonic() + PATIENCE_S
    while time.monotonic() < deadline:
        try:
            wire.send(block)
        except ConnectionError:
            return
    raise AssertionError("never dropped")


class Rhythm(threading.Thread):
    """A rig that samples without pause on its own thread and checks every answer."""

    def __init__(self, where: str, wanted: list[list[float]]) -> None:
        super().__init__()
        self.where, self.wanted = where, wanted
        self.answers, self.wrong, self.over = 0, [], threading.Event()  # type: ignore[var-annotated]

    def run(self) -> None:
        with RawRig(self.where) as rig:
            while not self.over.is_set() and not self.wrong:
                n = self.answers
                reply = rig.ask(n, voltage(n))
                if plain(reply) != (n, LIVE, self.wanted[n % len(self.wanted)]):
                    self.wrong.append(reply)
                self.answers += 1


def voltage(n: int) -> float:
    """The sample's voltage: a sawtooth."""
    return -80.0 + (n * 7) % 100


LEAK = 'title = "leak"\nsource = "Ohm\'s law"\ntemperature_c = 22.0\n[[conductance]]\n'
LEAK += 'name = "leak"\ngmax_ns = 10.0\nreversal_mv = -70.0\n'


def leak_cell(folder: Path) -> dict[str, Any]:
    """A cell with one leak of 10 nS at -70 mV: the current is Ohm's law."""
    (folder / "leak.toml").write_text(LEAK)
    return {"name": "a", "model": str(folder / "leak.toml"), "limits": {"current_pa": 1e5}}


@contextmanager
def rhythm(server: Any):
    """A rig keeps its rhythm while the block runs; every answer must be right."""
    wanted = [[10.0 * (-70.0 - voltage(n))] for n in range(100)]
    rig = Rhythm(endpoint(server), wanted)
    rig.start()
    try:
        wait_until(lambda: rig.answers > 20 or rig.wrong, "answers")
        yield rig
        reached = rig.answers
        wait_until(lambda: rig.answers > reached + 20 or rig.wrong, "more answers")
    finally:
        rig.over.set()
        rig.join(PATIENCE_S)
    assert rig.wrong == []


@pytest.fixture(params=["ipc", "tcp"])
def leaky(request, serving, tmp_path):
    """An armed server in the direct lane whose currents are Ohm's law."""
    loop = DIRECT if request.param == "ipc" else TCP
    made = serving(loop=loop, cell=[leak_cell(tmp_path)])
    made.control.arm()
    return made


def test_two_hundred_silent_peers(leaky):
    """200 peers that connect and say nothing change no answer; in time they are dropped."""
    with rhythm(leaky):
        crowd = [Wire(endpoint(leaky), b"") for _ in range(200)]
        assert all(wire.ends() for wire in crowd)
    assert leaky.control.status()["refused"] == 0
    for wire in crowd:
        wire.close()


def test_two_hundred_open_peers(leaky):
    """More peers than there are places, their handshakes done: the rig keeps its own."""
    with rhythm(leaky):
        crowd = [Wire(endpoint(leaky)) for _ in range(200)]
        for wire in crowd[: PLACES // 2]:
            wire.send(rfc.message(sample(0, 0.0)))
            assert read_reply(wire.answer()).flags == REFUSED
        for wire in crowd:
            wire.close()
    with rhythm_after_reset(leaky):
        pass


@contextmanager
def rhythm_after_reset(server: Any):
    """The same for the next rig, after the first one's leaving has tripped."""
    trips(server)
    server.control.reset()
    server.control.arm()
    with rhythm(server) as rig:
        yield rig


def test_mutated_greetings(leaky):
    """Three peers in four break the greeting or READY somewhere; each gets what the RFC says.

    A breach ends the connection; the fourth is answered; the rig never notices.
    """
    dice = random.Random(17)
    outcomes = {"ended": 0, "answered": 0, "waiting": 0}
    with rhythm(leaky):
        for n in range(400):
            opening = bytearray(rfc.OPENING)
            if n % 4:
                opening[dice.randrange(len(opening))] = dice.randrange(256)
                if n % 4 == 3:
                    del opening[dice.randrange(64, len(opening))]
            stream = bytes(opening) + rfc.message(sample(n, 0.0))
            heard = rfc.hear(stream)
            wire = Wire(endpoint(leaky), b"")
            with wire:
                try:
                    wire.send(stream)
                except ConnectionError:
                    assert heard.broken
                if heard.broken:
                    assert wire.ends()
                    outcomes["ended"] += 1
                elif heard.messages:
                    reply = read_reply(wire.answer())
                    malformed = heard.messages[0][1] != sample(n, 0.0)
                    assert reply.flags == (MALFORMED if malformed else REFUSED)
                    outcomes["answered"] += 1
                else:
                    outcomes["waiting"] += 1
    assert outcomes["ended"] > 100
    assert outcomes["answered"] >= 100


def descriptors() -> int:
    """Files that this process has open."""
    return len(os.listdir("/proc/self/fd"))


def resident_mib() -> float:
    """Memory of this process that is in use, in MiB."""
    status = Path("/proc/self/status").read_text("utf-8")
    return int(re.search(r"VmRSS:\s+(\d+)", status)[1]) / 1024  # type: ignore[index]


def test_ten_thousand_connections(leaky):
    """Connections come and go: silent, half open, answered, by libzmq; nothing is left behind.

    Each that asks is answered right, and files and memory do not grow with their number.
    """
    where, before, memory = endpoint(leaky), descriptors(), resident_mib()
    leaky.control.disarm()
    for n in range(9700):
        if n % 10:
            Wire(where, (b"", rfc.greeting(), rfc.OPENING)[n % 3]).close()
            continue
        with Wire(where) as wire:
            wire.send(rfc.message(sample(n, -60.0)))
            assert plain(read_reply(wire.answer())) == (n, 0, [0.0])
    for n in range(300):
        with RawRig(where, identity=b"same") as rig:
            assert plain(rig.ask(n, -60.0)) == (n, 0, [0.0])
    wait_until(lambda: descriptors() <= before + 5, "all files closed")
    assert resident_mib() < memory + 64
    leaky.control.arm()
    with rhythm(leaky):
        pass


def test_a_peer_that_never_reads(leaky):
    """Sending samples and never reading costs a peer its connection, and nobody else anything.

    What the server keeps for it is bounded, whatever it sends.
    """
    memory = resident_mib()
    with rhythm(leaky):
        for _ in range(3):
            deaf = Wire(endpoint(leaky), receive_buffer=SMALL)
            block = b"".join(rfc.message(sample(n, 0.0)) for n in range(1000))
            send_until_dropped(deaf, block)
            deaf.close()
        status = leaky.control.status()
        assert status["refused"] > 300
        assert status["undelivered"] > 0
    assert resident_mib() < memory + 32


def test_a_holder_that_never_reads(leaky):
    """The rig itself, when it leaves its answers unread, is dropped whole: the loop trips.

    What it reads afterwards is right and in order up to the last that arrived.
    """
    deaf = Wire(endpoint(leaky), receive_buffer=SMALL)
    send_until_dropped(deaf, b"".join(rfc.message(sample(n, voltage(n))) for n in range(200_000)))
    start = len(rfc.greeting() + rfc.ready(b"ROUTER"))
    frames, _ = rfc.deframe(deaf.rest()[start:])
    for n, (_, body) in enumerate(frames):
        assert plain(read_reply(body)) == (n, LIVE, [10.0 * (-70.0 - voltage(n))])
    assert "connection ended" in trips(leaky)
    status = leaky.control.status()
    assert status["answered"] > len(frames) > 100
    assert status["undelivered"] > 0
    if endpoint(leaky).startswith("ipc"):  # over TCP a reset takes what was on its way
        assert len(frames) + status["undelivered"] >= status["answered"]
    is_free(leaky)


def test_the_same_name_twice(server):
    """Two rigs with one routing id are two peers: the second is refused, not mixed up."""
    with (
        RawRig(endpoint(server), identity=b"rig") as first,
        RawRig(endpoint(server), identity=b"rig") as second,
    ):
        for n in range(20):
            assert first.ask(n, -65.0)[:2] == (n, LIVE)
            assert second.ask(n + 100, -65.0)[:2] == (n + 100, REFUSED)
