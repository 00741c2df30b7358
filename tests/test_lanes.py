"""Both lanes by themselves: compiled code at one end, pyzmq at the other."""

from __future__ import annotations

import ctypes
import threading
import time
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import zmq
from conftest import PATIENCE_S, RawRig, wait_until

from gatestep.direct import attach_direct, close_direct, make_direct
from gatestep.lanebase import CLOSED, GONE, NOTHING, SENT, STALLED, now_nsec
from gatestep.lanes import receive, reply
from gatestep.listening import listen
from gatestep.wire import MAX_MESSAGE
from gatestep.zmqlane import ZMQ_LANE, load_libzmq, make_zmq_lane, send, take

REFUSED_SIZE = MAX_MESSAGE + 1


class Lane:
    """A lane at an endpoint, ``direct`` or ``libzmq``."""

    def __init__(self, kind: str, endpoint: str, high_water: int = 1000) -> None:
        load_libzmq()
        self.kind = kind
        if kind == "direct":
            self.record = make_direct(20)
            self.listener = listen(endpoint)
            attach_direct(self.record, self.listener)
            if endpoint.startswith("tcp://"):
                endpoint = f"tcp://127.0.0.1:{self.listener.getsockname()[1]}"
            self.endpoint = endpoint
            return
        self.context = zmq.Context()
        self.socket: zmq.Socket[bytes] = self.context.socket(zmq.ROUTER)
        self.socket.set_hwm(high_water)
        self.socket.setsockopt(zmq.LINGER, 0)
        self.socket.setsockopt(zmq.ROUTER_MANDATORY, 1)
        self.socket.setsockopt(zmq.RCVTIMEO, 20)
        self.socket.bind(endpoint)
        self.endpoint = self.socket.getsockopt(zmq.LAST_ENDPOINT).decode().rstrip("\0")
        self.record = make_zmq_lane()
        self.record[0].socket = self.socket.underlying

    def close(self) -> None:
        if self.kind == "direct":
            close_direct(self.record[0])
            self.listener.close()
            return
        self.socket.close(0)
        self.context.term()

    def receive(self) -> tuple[int, bytes]:
        """The next message: its size as the lane tells it, and what stands in the buffer."""
        size = wait_until(lambda: self.try_receive() + 1, "a message") - 1
        return size, self.record[0].message[: min(size, MAX_MESSAGE)].tobytes()

    def try_receive(self) -> int:
        return int(receive(self.record[0]))

    def reply(self, message: bytes) -> int:
        self.record[0].out[: len(message)] = np.frombuffer(message, np.uint8)
        return int(reply(self.record[0], len(message)))

    def sender(self) -> bytes:
        """The id of the peer that the last message came from."""
        return self.record[0].peer[: int(self.record[0].peer_size)].tobytes()


def where(transport: str, folder: Path) -> str:
    return f"ipc://{folder}/loop" if transport == "ipc" else "tcp://127.0.0.1:0"


@pytest.fixture(params=["direct ipc", "direct tcp", "libzmq ipc", "libzmq tcp"])
def lane(request, tmp_path):
    kind, transport = request.param.split()
    made = Lane(kind, where(transport, tmp_path))
    yield made
    made.close()


@pytest.fixture
def zmq_lane(tmp_path):
    made = Lane("libzmq", where("ipc", tmp_path))
    yield made
    made.close()


def test_a_dealers_message_and_its_answer(lane):
    """The bytes arrive as sent, from 0 to the longest, and the answer goes back as one frame."""
    with RawRig(lane.endpoint) as rig:
        for size in (1, 24, MAX_MESSAGE):
            message = bytes(range(256)) * 2
            rig.socket.send(message[:size])
            assert lane.receive() == (size, message[:size])
            assert lane.reply(b"answer") == SENT
            assert rig.socket.recv_multipart() == [b"answer"]
        rig.socket.send(b"")
        assert lane.receive() == (0, b"")


def test_a_req_gets_its_empty_frame_back(lane):
    """A REQ's envelope is taken off and echoed; so is a DEALER's leading empty frame."""
    with RawRig(lane.endpoint, zmq.REQ) as rig:
        for _ in range(3):
            rig.socket.send(b"sample")
            assert lane.receive() == (6, b"sample")
            lane.reply(b"answer")
            assert rig.socket.recv_multipart() == [b"answer"]
    with RawRig(lane.endpoint) as rig:
        rig.socket.send_multipart([b"", b"sample"])
        assert lane.receive() == (6, b"sample")
        lane.reply(b"answer")
        assert rig.socket.recv_multipart() == [b"", b"answer"]
        rig.socket.send(b"sample")
        assert lane.receive() == (6, b"sample")
        lane.reply(b"answer")
        assert rig.socket.recv_multipart() == [b"answer"]


@pytest.mark.parametrize(
    "frames",
    [
        [b"one", b"two"],
        [b"", b"one", b"two"],
        [b"", b"", b"one"],
        [b"", b"", b"", b""],
        [b"x"] * 40,
        [b"x" * (MAX_MESSAGE + 1)],
        [b"x" * 100_000],
        [b"", b"x" * 600],
    ],
    ids=["two", "enveloped two", "two empty", "all empty", "forty", "513", "100 kB", "REQ 600"],
)
def test_what_can_be_no_sample_is_too_long(lane, frames):
    """Extra frames and oversized ones come as one message that is too long.

    The next message is not mixed up with them.
    """
    with RawRig(lane.endpoint) as rig:
        rig.socket.send_multipart(frames)
        rig.socket.send(b"next")
        assert lane.receive()[0] >= REFUSED_SIZE
        assert lane.reply(b"no") == SENT
        assert lane.receive() == (4, b"next")
        assert rig.socket.recv_multipart()[-1] == b"no"


def test_nothing_within_the_time_out(lane):
    """Without a message the lane comes back with NOTHING, again and again."""
    assert [lane.try_receive() for _ in range(3)] == [NOTHING] * 3


@pytest.mark.parametrize("name", [b"\x01", b"x" * 255, bytes(range(1, 6))])
def test_a_peers_own_routing_id(zmq_lane, name):
    """The libzmq lane leaves any routing id, up to 255 bytes, whole."""
    with RawRig(zmq_lane.endpoint, identity=name) as rig:
        rig.socket.send(b"mine")
        assert zmq_lane.receive()[1] == b"mine"
        assert zmq_lane.sender() == name
        zmq_lane.reply(b"yours")
        assert rig.socket.recv() == b"yours"


def test_peers_are_told_apart(lane):
    """Each peer keeps an id of its own, and each answer reaches the peer of the last message.

    A connection that follows an ended one has another id.
    """
    with RawRig(lane.endpoint) as first, RawRig(lane.endpoint) as second:
        names = []
        for rig, text in ((first, b"1"), (second, b"2"), (first, b"3")):
            rig.socket.send(text)
            assert lane.receive() == (1, text)
            lane.reply(text)
            assert rig.socket.recv() == text
            names.append(lane.sender())
    assert names[0] == names[2] != names[1]
    with RawRig(lane.endpoint) as third:
        third.socket.send(b"4")
        lane.receive()
        assert lane.sender() not in names


def test_a_peer_that_has_gone(lane):
    """Replying to a closed peer says GONE and is counted; it neither waits nor fails."""
    with RawRig(lane.endpoint) as rig:
        rig.socket.send(b"sample")
        lane.receive()
    wait_until(lambda: lane.reply(b"answer") == GONE, "GONE")
    assert lane.record[0].undelivered >= 1


@pytest.mark.parametrize("kind", ["direct", "libzmq"])
def test_a_peer_that_does_not_read(tmp_path, kind):
    """A peer that sends and never reads stalls its own answers only.

    The lane does not wait, says so, and another peer is answered.
    """
    lane = Lane(kind, where("ipc", tmp_path), high_water=10)
    with RawRig(lane.endpoint, rcvhwm=10) as deaf, RawRig(lane.endpoint) as rig:
        deaf.socket.send(b"sample")
        lane.receive()
        outcomes = {lane.reply(b"x" * 200) for _ in range(20_000)}
        assert outcomes & {STALLED, GONE}
        assert lane.record[0].undelivered > 0
        rig.socket.send(b"sample")
        lane.receive()
        assert lane.reply(b"answer") == SENT
        assert rig.socket.recv() == b"answer"
    lane.close()


def test_a_socket_that_is_lost(zmq_lane):
    """When the context is shut down a waiting lane comes back with CLOSED."""
    zmq_lane.socket.setsockopt(zmq.RCVTIMEO, -1)
    found: list[Any] = []
    waiting = threading.Thread(target=lambda: found.append(zmq_lane.try_receive()))
    waiting.start()
    libzmq = ctypes.CDLL(str(load_libzmq()))
    libzmq.zmq_ctx_shutdown(ctypes.c_void_p(zmq_lane.context.underlying))
    waiting.join(PATIENCE_S)
    assert found == [CLOSED]


def test_orders_and_blocks_pass_between_threads(tmp_path):
    """``send`` and ``take`` carry single frames over inproc, never wait.

    Say so when a frame is too big or the line is full.
    """
    load_libzmq()
    context = zmq.Context()
    out, into = context.socket(zmq.PUSH), context.socket(zmq.PULL)
    for socket in (out, into):
        socket.set_hwm(5)
        socket.setsockopt(zmq.LINGER, 0)
    into.bind("inproc://line")
    out.connect("inproc://line")
    buffer, found = np.arange(64, dtype=np.uint8), np.zeros(64, np.uint8)
    assert take(into.underlying, found.ctypes.data, 64) == NOTHING
    assert send(out.underlying, buffer.ctypes.data, 48)
    assert wait_until(lambda: take(into.underlying, found.ctypes.data, 64) + 1, "it") == 49
    assert found[:48].tolist() == list(range(48))
    sent = [send(out.underlying, buffer.ctypes.data, 8) for _ in range(100)]
    assert sent[0]
    assert not sent[-1]
    context.destroy(linger=0)


def test_the_clock_is_monotonic():
    """It is the system's monotonic clock in nanoseconds."""
    record = make_zmq_lane()
    before = time.monotonic_ns()
    told = int(now_nsec(record[0]))
    assert before <= told <= time.monotonic_ns()


def test_the_lane_holds_addresses_of_its_own_fields():
    """Each ``*_at`` is where its field lies; the record never moves with its array."""
    lane = make_zmq_lane()
    for name in ("message", "peer", "out", "more", "size", "time"):
        offset = ZMQ_LANE.fields[name][1]
        assert lane[0][f"{name}_at"] == lane.ctypes.data + offset
