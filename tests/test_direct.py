"""The direct lane by itself: who is served, who is dropped, and what is told of it.

The other end speaks ZMTP by the letter of RFC 37 (``zmtp_reference``) over plain
sockets, so that it can do what libzmq never would. Nothing here asserts a time.
"""

from __future__ import annotations

import os
import resource
import time
from collections.abc import Iterator

import numpy as np
import pytest
import zmtp_reference as rfc
from conftest import PATIENCE_S, wait_until
from zmtp_reference import Wire

from gatestep.direct import (
    ABANDONED_NSEC,
    DIRECT,
    MAX_ALLOWED,
    PLACES,
    attach_direct,
    close_direct,
    make_direct,
    receive_direct,
    reply_direct,
)
from gatestep.errors import LinkError
from gatestep.lanebase import GONE, NOTHING, SENT, STALLED
from gatestep.listening import listen
from gatestep.zmtp import OPEN, PEER

SAMPLE = rfc.message(b"sample")


class Lane:
    """A direct lane at an endpoint."""

    def __init__(self, endpoint: str, wait_ms: int = 2) -> None:
        self.array = make_direct(wait_ms)
        self.record = self.array[0]
        self.peers = self.array["peers"][0].view(np.recarray)
        self.listener = listen(endpoint)
        attach_direct(self.array, self.listener)
        if endpoint.startswith("tcp://"):
            endpoint = f"tcp://127.0.0.1:{self.listener.getsockname()[1]}"
        self.endpoint = endpoint
        self.told: list[int] = []

    def close(self) -> None:
        close_direct(self.record)
        self.listener.close()

    def receive(self) -> bytes | None:
        """The next message, if one comes in one turn; connections that ended are noted."""
        size = int(receive_direct(self.record))
        if self.record.gone:
            self.told.append(int(self.record.gone))
        return None if size == NOTHING else self.record.message[:size].tobytes()

    def message(self) -> bytes:
        """The next message, which must come."""
        deadline = time.monotonic() + PATIENCE_S
        while (found := self.receive()) is None:
            assert time.monotonic() < deadline, "no message came"
        return found

    def reply(self, answer: bytes) -> int:
        self.record.out[: len(answer)] = np.frombuffer(answer, np.uint8)
        return int(reply_direct(self.record, len(answer)))

    def until(self, true, what: str) -> None:
        """Run the lane until something holds."""
        deadline = time.monotonic() + PATIENCE_S
        while not true():
            self.receive()
            assert time.monotonic() < deadline, f"never came: {what}"

    def open(self) -> int:
        """How many connections have done their handshake."""
        return int((self.peers.phase == OPEN).sum())

    def connect(self, count: int = 1, extra: bytes = b"") -> list[Wire]:
        """Peers that have done their handshake."""
        before, made = self.open(), []
        for k in range(count):
            made.append(Wire(self.endpoint, rfc.OPENING + extra))
            self.until(lambda k=k: self.open() > before + k, "a handshake")
        return made

    def serial(self) -> int:
        """The connection that the last message came from."""
        return int(self.record.peer_serial)


@pytest.fixture(params=["ipc", "tcp"])
def lane(request, tmp_path) -> Iterator[Lane]:
    made = Lane(f"ipc://{tmp_path}/loop" if request.param == "ipc" else "tcp://127.0.0.1:0")
    yield made
    made.close()


@pytest.fixture
def ipc_lane(tmp_path) -> Iterator[Lane]:
    made = Lane(f"ipc://{tmp_path}/loop")
    yield made
    made.close()


def test_peers_are_served_in_turn(lane):
    """One that has sent a hundred messages ahead holds up nobody: each gets a turn."""
    flood, first, second = lane.connect(3)
    flood.send(b"".join(rfc.message(b"%03d" % n) for n in range(100)))
    assert lane.message() == b"000"
    first.send(rfc.message(b"first"))
    second.send(rfc.message(b"second"))
    heard = [lane.message() for _ in range(101)]
    assert max(heard.index(b"first"), heard.index(b"second")) < 6
    assert [h for h in heard if h.isdigit()] == [b"%03d" % n for n in range(1, 100)]


def test_a_flood_does_not_keep_others_from_connecting(ipc_lane):
    """While one peer always has something waiting, a new one is let in and heard."""
    lane = ipc_lane
    (flood,) = lane.connect()
    newcomer = Wire(lane.endpoint, rfc.OPENING + rfc.message(b"new"))
    flood.socket.setblocking(False)
    ahead = rfc.message(b"flood") * 100
    heard = set()
    deadline = time.monotonic() + PATIENCE_S
    while b"new" not in heard:
        assert time.monotonic() < deadline
        try:
            sent = flood.socket.send(ahead)
            ahead = ahead[sent:] + ahead[:sent]
        except BlockingIOError:
            pass
        heard.add(lane.message())
    assert b"flood" in heard
    newcomer.close()


def test_connections_do_not_keep_the_rig_from_being_heard(ipc_lane):
    """While connections wait to be taken the whole time, a peer that sends is heard."""
    lane = ipc_lane
    (rig,) = lane.connect()
    crowd = [Wire(lane.endpoint, b"") for _ in range(PLACES - 2)]
    for n in range(50):
        rig.send(rfc.message(b"%d" % n))
        assert lane.message() == b"%d" % n
        assert lane.reply(b"%d" % n) == SENT
        assert rig.answer() == b"%d" % n
    for wire in crowd:
        wire.close()


def test_each_end_is_told_once(lane):
    """Each open connection that ends is told, none twice, one a turn; others are not.

    The loop learns from this that its rig has gone.
    """
    rigs = lane.connect(10)
    serials = []
    for rig in rigs:
        rig.send(SAMPLE)
        assert lane.message() == b"sample"
        serials.append(lane.serial())
    silent = Wire(lane.endpoint, rfc.greeting())
    for rig in rigs[:5]:
        rig.close()
    for rig in rigs[5:]:
        rig.reset()
    silent.close()
    lane.until(lambda: len(lane.told) >= 10, "the ends of ten connections")
    for _ in range(10):
        lane.receive()
    assert sorted(lane.told) == sorted(serials)


def test_ends_of_all_kinds_at_once_are_each_told(ipc_lane):
    """A breach, a time to live that has passed, a hang-up: at the same moment, each is told."""
    lane = ipc_lane
    rigs = lane.connect(6)
    for rig in rigs:
        rig.send(rfc.ping(1) + SAMPLE)
    serials = []
    for _ in rigs:
        assert lane.message() == b"sample"
        serials.append(lane.serial())
    time.sleep(0.3)
    rigs[0].send(b"\xff" * 20)
    rigs[1].close()
    lane.until(lambda: len(lane.told) >= 6, "six ends")
    assert sorted(lane.told) == sorted(serials)


def test_an_end_in_a_reply_is_told_after_the_next_receive(ipc_lane):
    """A peer dropped because its answer found no room is told like any other."""
    lane = ipc_lane
    (rig,) = lane.connect()
    rig.send(SAMPLE)
    lane.message()
    serial = lane.serial()
    while lane.reply(b"x" * 100) != GONE:
        pass
    assert lane.told == []
    assert lane.receive() is None
    assert lane.told == [serial]
    lane.receive()
    assert lane.told == [serial]


def test_a_full_socket_is_no_reason_to_drop(lane):
    """A peer behind with its reading stalls; when it reads on it gets every answer, in order.

    Only when more is waiting than the lane's own buffer holds is it dropped.
    """
    (rig,) = lane.connect()
    rig.send(SAMPLE)
    lane.message()
    count = 0
    while (outcome := lane.reply(b"%0200d" % count)) == SENT:
        count += 1
    assert outcome == STALLED
    for _ in range(2):
        count += 1
        assert lane.reply(b"%0200d" % count) == STALLED
    for n in range(count + 1):
        assert rig.answer() == b"%0200d" % n
        if n % 50 == 0 or n > count - 60:
            lane.receive()
    rig.send(SAMPLE)
    assert lane.message() == b"sample"
    assert lane.reply(b"again") == SENT
    assert rig.answer() == b"again"
    assert lane.record.undelivered == 0


def test_answers_that_did_not_leave_are_counted(lane):
    """A peer that never reads is dropped; what it can still read and what is counted is all.

    Answers of which only a part had left count as undelivered.
    """
    (rig,) = lane.connect()
    rig.send(SAMPLE)
    lane.message()
    count = 1
    while lane.reply(b"%0200d" % count) != GONE:
        count += 1
    start = len(rfc.greeting() + rfc.ready(b"ROUTER"))
    arrived, _ = rfc.deframe(rig.rest()[start:])
    assert [body for _, body in arrived] == [b"%0200d" % n for n in range(1, len(arrived) + 1)]
    lost = count - len(arrived)
    most = PEER["outgoing"].shape[0] // 202 + 2
    assert 0 < lost <= lane.record.undelivered <= most
    assert lane.reply(b"late") == GONE
    assert lane.record.undelivered <= most + 1


def test_the_last_answer_arrives_although_more_had_come(lane):
    """Closing ends connections in order: TCP does not reset one that has something unread."""
    (rig,) = lane.connect()
    rig.send(SAMPLE)
    lane.message()
    assert lane.reply(b"last") == SENT
    rig.send(SAMPLE * 1000)
    close_direct(lane.record)
    assert rig.answer() == b"last"
    assert rig.socket.recv(1) == b""


def test_time_to_live(lane):
    """A peer is dropped when it has been silent for longer than it allowed itself.

    Another that gave no such time, or 0, or goes on sending, is not.
    """
    mortal, patient, plain, lively = lane.connect(4)
    mortal.send(rfc.ping(1) + SAMPLE)
    lane.message()
    serial = lane.serial()
    patient.send(rfc.ping(3000))
    plain.send(rfc.ping(0))

    def dropped() -> bool:
        lively.send(rfc.ping(50, b"here"))
        time.sleep(0.005)
        return serial in lane.told

    lane.until(dropped, "the silent one's end")
    assert mortal.ends()
    assert lane.told == [serial]
    for rig in (patient, plain, lively):
        rig.send(SAMPLE)
        assert lane.message() == b"sample"
        assert lane.reply(b"yes") == SENT
        while (found := rig.frame())[0] & rfc.COMMAND:
            assert found[1].startswith(b"\x04PONG")
        assert found == (0, b"yes")


def test_what_waits_unread_is_not_silence(ipc_lane):
    """When the lane itself was held up, peers whose bytes wait are heard, not dropped."""
    lane = ipc_lane
    (rig,) = lane.connect()
    rig.send(rfc.ping(1))
    lane.until(lambda: lane.peers[0].ttl_nsec > 0, "the PING")
    late = Wire(lane.endpoint, rfc.greeting())
    lane.until(lambda: lane.record.used == 2, "the second")
    rig.send(SAMPLE)
    late.send(rfc.ready() + rfc.message(b"late"))
    time.sleep(1.2)  # over the time to live and the handshake's limit
    assert sorted([lane.message(), lane.message()]) == [b"late", b"sample"]
    assert lane.told == []


@pytest.mark.parametrize(
    "said",
    [b"", b"\xff", rfc.greeting()[:63], rfc.greeting(), rfc.OPENING[:-1]],
    ids=["nothing", "a byte", "most of a greeting", "a greeting", "most of READY"],
)
def test_a_handshake_has_a_limit(lane, said):
    """Whoever does not finish the handshake in time is dropped; others are served meanwhile."""
    (rig,) = lane.connect()
    silent = Wire(lane.endpoint, said)
    lane.until(lambda: lane.record.used == 2, "the connection")
    served = 0
    while lane.record.used == 2:
        rig.send(SAMPLE)
        assert lane.message() == b"sample"
        assert lane.reply(b"answer") == SENT
        assert rig.answer() == b"answer"
        served += 1
    assert silent.ends()
    assert served > 1
    assert lane.told == []


def test_a_handshake_in_dribs_and_drabs(lane):
    """One byte every few milliseconds does not stretch the limit for ever; fewer is no breach."""
    slow = Wire(lane.endpoint, b"")
    stream = rfc.greeting() + rfc.command(b"READY", rfc.properties(X=b"x" * 1000))
    try:
        for k in range(len(stream)):
            slow.send(stream[k : k + 1])
            lane.receive()
            time.sleep(0.002)
    except (BrokenPipeError, ConnectionResetError):
        pass
    lane.until(lambda: lane.record.used == 0, "its end")


def test_places_run_out(ipc_lane):
    """With every place taken by open connections a new one is closed, and the open ones live.

    A place that comes free is given away again; those with unfinished handshakes go first.
    """
    lane = ipc_lane
    rigs = lane.connect(PLACES)
    refused = Wire(lane.endpoint, b"")
    lane.receive()
    assert refused.ends()
    assert lane.open() == PLACES
    rigs.pop().close()
    lane.until(lambda: lane.open() == PLACES - 1, "a free place")
    silent = [Wire(lane.endpoint, rfc.greeting()) for _ in range(3)]
    lane.until(lambda: lane.record.serials == PLACES + 3, "three connections")
    rigs += lane.connect()
    assert all(wire.ends() for wire in silent)
    for n, rig in enumerate(rigs):
        rig.send(rfc.message(b"%d" % n))
        assert lane.message() == b"%d" % n
        assert lane.reply(b"%d" % n) == SENT
        assert rig.answer() == b"%d" % n
    assert len(lane.told) == 1


def test_an_abandoned_connection_gives_its_place(ipc_lane):
    """With every place taken, the connection silent for longest goes, if that is very long.

    A rig that was switched off leaves a connection that never ends by itself.
    """
    lane = ipc_lane
    rigs = lane.connect(PLACES)
    serials = lane.peers.serial.copy()
    lane.peers[5].heard_nsec -= ABANDONED_NSEC
    lane.peers[9].heard_nsec -= 2 * ABANDONED_NSEC
    rigs += [Wire(lane.endpoint) for _ in range(2)]
    lane.until(lambda: len(lane.told) == 2 and lane.open() == PLACES, "two replacements")
    assert lane.told == [serials[9], serials[5]]
    assert rigs[9].ends()
    assert rigs[5].ends()
    third = Wire(lane.endpoint, b"")
    lane.receive()
    assert third.ends()


def test_used_places_shrink_again(ipc_lane):
    """After a crowd has left, the lane looks after no more places than are taken."""
    lane = ipc_lane
    rigs = lane.connect(50)
    for rig in rigs[1:]:
        rig.close()
    lane.until(lambda: lane.open() == 1, "49 ends")
    assert lane.record.used == 1
    rigs[0].send(SAMPLE)
    assert lane.message() == b"sample"


def test_out_of_descriptors(ipc_lane):
    """When the process can open no more files the lane goes on, and lets the peer in later."""
    lane = ipc_lane
    (rig,) = lane.connect()
    waiting = Wire(lane.endpoint, rfc.OPENING + rfc.message(b"at last"))
    limits = resource.getrlimit(resource.RLIMIT_NOFILE)
    spare = os.dup(0)
    os.close(spare)
    resource.setrlimit(resource.RLIMIT_NOFILE, (spare, limits[1]))
    try:
        for _ in range(5):
            rig.send(SAMPLE)
            assert lane.message() == b"sample"
            assert lane.reply(b"answer") == SENT
            assert rig.answer() == b"answer"
            lane.receive()
        assert lane.record.deaf
        assert lane.open() == 1
    finally:
        resource.setrlimit(resource.RLIMIT_NOFILE, limits)
    assert lane.message() == b"at last"
    waiting.close()


def test_the_lane_holds_addresses_of_its_own_fields():
    """Each ``*_at`` is where its field lies, of every peer too; a record stays where it is."""
    array = make_direct(1)
    base = array.ctypes.data
    for name in ("poll", "time", "address", "length", "options"):
        assert array[0][f"{name}_at"] == base + DIRECT.fields[name][1]
    for name in ("incoming", "outgoing"):
        places = array[0]["peers"][name]
        wanted = [places[k].__array_interface__["data"][0] for k in range(PLACES)]
        assert array[0][f"{name}_at"].tolist() == wanted


def test_addresses_that_may_connect():
    """What is no address, or one too many, is refused with a reason."""
    make_direct(1, ("192.168.7.2",) * MAX_ALLOWED)
    with pytest.raises(LinkError, match=rf"{MAX_ALLOWED + 1} addresses .*libzmq"):
        make_direct(1, ("192.168.7.2",) * (MAX_ALLOWED + 1))
    for wrong in ("rig.local", "10.0.0.0/24", "10.0.0.256", ""):
        with pytest.raises(LinkError, match="no IP address"):
            make_direct(1, ("127.0.0.1", wrong))


def test_a_taken_port(lane):
    """A second server at the same place is refused; the first goes on."""
    endpoint = lane.endpoint
    with pytest.raises(LinkError):
        listen(endpoint)
    (rig,) = lane.connect()
    rig.send(SAMPLE)
    assert wait_until(lane.receive, "the sample") == b"sample"
