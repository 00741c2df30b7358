"""The compiled ZMTP against RFC 37 as ``zmtp_reference`` has it: bytes in, events out."""

from __future__ import annotations

import os
import re
import subprocess
import sys
from pathlib import Path
from typing import Any, NamedTuple

import numpy as np
import pytest
import zmtp_reference as rfc
from hypothesis import given
from hypothesis import strategies as st
from numba import config, njit

from gatestep import zmtp
from gatestep.kernel import records
from gatestep.zmtp import BROKEN, MESSAGE, OUTGOING, PEER, WAITING

UNCOMPILED, CHECKED = bool(config.DISABLE_JIT), bool(config.BOUNDSCHECK)
FUZZED = 500 if UNCOMPILED else 10_000 if CHECKED else 50_000
BUFFERS = ("message", "incoming", "outgoing")
CANARY = 64
BETWEEN_CANARIES = 20
_MOST = 4096


def _guarded() -> np.dtype[Any]:
    """PEER with a canary before and behind each buffer."""
    fields: list[tuple[Any, ...]] = []
    for name in PEER.names or ():
        kind = PEER.fields[name][0]  # type: ignore[index]
        field = (name, kind.base.str, kind.shape)
        guard = ("u1", (CANARY,))
        fields += (
            [(f"before_{name}", *guard), field, (f"behind_{name}", *guard)]
            if name in BUFFERS
            else [field]
        )
    return np.dtype(fields, align=True)


GUARDED = _guarded()
CANARIES = [name for name in GUARDED.names or () if name not in (PEER.names or ())]


@njit(nogil=True, error_model="numpy")
def _take(peer, chunk, at):
    """Give a peer as much of a chunk as it has room for; how much that was."""
    count = min(zmtp.make_room(peer), chunk.size - at)
    for k in range(count):
        peer.incoming[np.uint64(peer.end + k)] = chunk[at + k]
    peer.end += count
    return count


@njit(nogil=True, error_model="numpy")
def _write_out(peer, sent, total):
    """What is on its way out, as a socket that takes everything would."""
    for k in range(peer.pending):
        sent[total + k] = peer.outgoing[np.uint64(k)]
    total += peer.pending
    peer.pending = 0
    peer.waiting = 0
    return total


@njit(nogil=True, error_model="numpy")
def _drive(peers, stream, cuts, sizes, enveloped, bodies, sent):
    """Feed a stream cut at some places; events found, bytes sent and how it ended."""
    peer = peers[0]
    zmtp.open_peer(peer, 5, 1, 0)
    total = _write_out(peer, sent, 0)
    at, found, events = 0, WAITING, 0
    for cut in cuts:
        while at < cut:
            count = _take(peer, stream[:cut], at)
            if count <= 0:
                return events, total, -1
            at += count
            found = MESSAGE
            while found == MESSAGE:
                found = zmtp.feed(peer)
                total = _write_out(peer, sent, total)
                if found == BROKEN:
                    return events, total, BROKEN
                if found == MESSAGE:
                    sizes[events] = peer.message_size
                    enveloped[events] = peer.enveloped
                    bodies[events] = peer.message
                    events += 1
    return events, total, found


class Found(NamedTuple):
    """What the compiled protocol made of a stream."""

    messages: list[tuple[int, bytes, bool]]
    sent: bytes
    broken: bool


class Driver:
    """Memory for driving a guarded peer, used again and again."""

    def __init__(self) -> None:
        self.peers = records(GUARDED)
        self.sizes, self.enveloped = np.zeros(_MOST, np.int64), np.zeros(_MOST, np.int64)
        self.bodies = np.zeros((_MOST, rfc.LONGEST_SAMPLE), np.uint8)
        self.sent = np.zeros(1 << 16, np.uint8)

    def run(self, stream: bytes, cuts: list[int] | None = None) -> Found:
        ends = np.array([*sorted(c for c in cuts or () if c < len(stream)), len(stream)])
        data = np.frombuffer(stream, np.uint8)
        room = (self.sizes, self.enveloped, self.bodies, self.sent)
        events, total, end = _drive(self.peers, data, ends, *room)
        assert end in (WAITING, BROKEN), "no room left for a peer that is not broken"
        messages = [
            (
                int(self.sizes[k]),
                self.bodies[k, : self.sizes[k] % rfc.NO_SAMPLE].tobytes(),
                bool(self.enveloped[k]),
            )
            for k in range(events)
        ]
        return Found(messages, self.sent[:total].tobytes(), end == BROKEN)

    def set_canaries(self, value: int) -> None:
        for name in CANARIES:
            self.peers[0][name] = value

    def canaries(self) -> set[int]:
        return {int(x) for name in CANARIES for x in np.unique(self.peers[0][name])}


DRIVER = Driver()
GREETING_SENT = rfc.greeting()
READY_SENT = rfc.ready(b"ROUTER")


def expected(stream: bytes) -> Found:
    """What the reference makes of a stream, with what is sent back."""
    heard = rfc.hear(stream)
    sent = GREETING_SENT
    if rfc._greets(stream[:64]) and len(stream) >= 64:
        sent += READY_SENT
    sent += b"".join(rfc.command(b"PONG", context) for context in heard.pongs)
    return Found(heard.messages, sent, heard.broken)


def check(stream: bytes, cuts: list[int] | None = None) -> Found:
    found = DRIVER.run(stream, cuts)
    assert found == expected(stream), stream.hex()
    return found


parts = st.one_of(
    st.binary(max_size=40),
    st.just(b""),
    st.sampled_from([254, 255, 256, 511, 512, 513, 600, 4096, 9000]).map(lambda n: b"\xa5" * n),
)
messages = st.builds(
    lambda body, long: rfc.message(*body, long=long),
    st.lists(parts, min_size=1, max_size=4),
    st.one_of(st.none(), st.just(True)),
)
pings = st.builds(rfc.ping, st.integers(0, 65535), st.binary(max_size=16))
others = st.builds(
    rfc.command,
    st.sampled_from([b"SUBSCRIBE", b"CANCEL", b"PONG", b"X", b"PINGS", b"READY", b"x" * 255]),
    st.one_of(st.binary(max_size=40), st.just(b"y" * 700)),
    st.one_of(st.none(), st.just(True)),
)
traffic = st.lists(st.one_of(messages, messages, pings, others), max_size=12).map(b"".join)
cuts = st.lists(st.integers(0, 3000), max_size=40)


@given(traffic, cuts, st.sampled_from([b"DEALER", b"REQ", b"ROUTER"]))
def test_any_session_in_any_pieces(body, cuts, kind):
    """A session gives the same events however it is cut, and they are the reference's.

    Short and long frames, envelopes, too many and too long frames, PINGs between frames
    and commands that mean nothing.
    """
    stream = rfc.greeting() + rfc.ready(kind, b"me") + body
    whole = check(stream)
    assert check(stream, cuts) == whole
    assert not whole.broken


@given(traffic)
def test_any_session_byte_by_byte(body):
    """The most pieces there can be make no difference."""
    stream = rfc.OPENING + body[:400]
    assert check(stream, list(range(len(stream)))) == check(stream)


def test_a_ping_between_the_frames_of_a_message():
    """The message stays whole and its envelope is kept; libzmq sends so when it is busy."""
    body = rfc.frame(b"", rfc.MORE) + rfc.ping(3, b"now") + rfc.frame(b"sample")
    assert check(rfc.OPENING + body).messages == [(6, b"sample", True)]


def test_what_is_sent_first():
    """Our greeting and READY are those of RFC 37, version 3.1, from a ROUTER without identity."""
    found = check(rfc.OPENING)
    assert found.sent[:64] == bytes.fromhex("ff00000000000000007f0301") + b"NULL" + bytes(48)
    assert found.sent[64:] == (
        b"\x04\x29\x05READY\x0bSocket-Type\x00\x00\x00\x06ROUTER\x08Identity\x00\x00\x00\x00"
    )
    assert check(b"").sent == found.sent[:64]
    assert check(rfc.greeting()).sent == found.sent


@pytest.mark.parametrize("size", [0, 1, 42, 255])
@pytest.mark.parametrize("enveloped", [0, 1])
def test_answers_are_framed(size, enveloped):
    """An answer goes out as one short frame, behind an empty one when its sample had one."""
    peer = DRIVER.peers[0]
    zmtp.open_peer(peer, 5, 1, 0)
    greeting = int(peer.pending)
    answer = np.arange(size, dtype=np.uint64).astype(np.uint8)
    assert zmtp.put_answer(peer, answer, size, enveloped)
    out = peer.outgoing[greeting : int(peer.pending)].tobytes()
    body = answer.tobytes()
    assert out == (rfc.message(b"", body) if enveloped else rfc.message(body))


def test_answers_that_find_no_room():
    """What does not fit is refused whole, at the buffer's last byte and beyond; nothing is cut."""
    peer, answer = DRIVER.peers[0], np.full(300, 7, np.uint8)
    for enveloped in (0, 1):
        for size in (20, 108, 255):
            zmtp.open_peer(peer, 5, 1, 0)
            before = int(peer.pending)
            needed = size + 2 + 2 * enveloped
            count = 0
            while zmtp.put_answer(peer, answer, size, enveloped):
                count += 1
                assert peer.waiting == count
            assert peer.pending == before + count * needed
            assert OUTGOING - needed < peer.pending <= OUTGOING
    zmtp.open_peer(peer, 5, 1, 0)
    assert not zmtp.put_answer(peer, answer, 256, 0)
    assert len(DRIVER.canaries()) == 1


@pytest.mark.parametrize("context", [b"", b"\x00", b"x" * 16])
@pytest.mark.parametrize("ttl_ds", [0, 1, 300, 65535])
def test_a_ping_is_answered(context, ttl_ds):
    """PONG carries the context back; the time to live is in tenths of a second."""
    found = check(rfc.OPENING + rfc.ping(ttl_ds, context))
    assert found.sent.endswith(rfc.command(b"PONG", context))
    assert DRIVER.peers[0].ttl_nsec == ttl_ds * 100_000_000


def test_pings_that_leave_no_room_for_their_pongs():
    """A peer that has more PONGs coming than the buffer holds is ended, never overrun."""
    peer = DRIVER.peers[0]
    zmtp.open_peer(peer, 5, 1, 0)
    stream = np.frombuffer(rfc.OPENING + rfc.ping() * 300, np.uint8)
    peer.incoming[: stream.size] = stream
    peer.end = stream.size
    while zmtp.put_answer(peer, np.full(255, 7, np.uint8), 255, 0):
        pass
    assert zmtp.feed(peer) == BROKEN
    assert OUTGOING - 300 < peer.pending <= OUTGOING


BREACHES = {
    "ERROR": rfc.command(b"ERROR", b"\x03why"),
    "ERROR without a reason": rfc.command(b"ERROR"),
    **{f"reserved bit {bit}": rfc.frame(b"x", bit) for bit in (8, 16, 32, 64, 128)},
    **{f"reserved bit {bit}, long": rfc.frame(b"x", bit, long=True) for bit in (8, 128)},
    "command with more": rfc.frame(b"\x04PING\0\0", rfc.COMMAND | rfc.MORE),
    "long command with more": rfc.frame(b"\x04PING\0\0", rfc.COMMAND | rfc.MORE, long=True),
    "size's top bit": b"\x02\x80" + bytes(7),
    "all of size's bits": b"\x02" + b"\xff" * 8,
    "size 2**56": b"\x02\x01" + bytes(7),
    "size over 1 MiB": b"\x02" + ((1 << 20) + 1).to_bytes(8, "big"),
    "command's top bit": b"\x06\x80" + bytes(7),
    "command over 1024": b"\x06" + (1025).to_bytes(8, "big"),
    "command without a name": b"\x04\x00",
    "command with an empty name": b"\x04\x01\x00",
    "command's name overruns": b"\x04\x03\x05AB",
    "PING without a time to live": rfc.command(b"PING"),
    "PING with half a time to live": rfc.command(b"PING", b"\0"),
    "PING with a long context": rfc.command(b"PING", bytes(2 + 17)),
}


@pytest.mark.parametrize("breach", BREACHES.values(), ids=BREACHES)
def test_a_breach_ends_the_connection(breach):
    """What the RFC forbids ends the connection: what came before still counts, nothing after."""
    sample = rfc.message(b"sample")
    stream = rfc.OPENING + sample + breach + sample
    for pieces in (None, list(range(len(stream)))):
        found = check(stream, pieces)
        assert found.broken
        assert found.messages == [(6, b"sample", False)]


def _opening(*first: bytes) -> bytes:
    return rfc.greeting() + b"".join(first)


TYPE = rfc.properties(Socket_Type=b"DEALER")
REFUSED = {
    **{
        kind.decode() or "no type": _opening(rfc.ready(kind))
        for kind in re.split(rb" ", b"SUB PUB XPUB XSUB PUSH PULL PAIR REP STREAM CLIENT SERVER ")
    },
    **{
        f"almost {kind.decode()}": _opening(rfc.ready(kind))
        for kind in (b"DEALERS", b"DEALE", b"dealer", b"REQ ", b"\0DEALER")
    },
    "no metadata": _opening(rfc.command(b"READY")),
    "type missing": _opening(rfc.command(b"READY", rfc.properties(Identity=b"DEALER"))),
    "a value overruns": _opening(rfc.command(b"READY", TYPE + b"\x01a\x00\x00\x00\x09xyz")),
    "a huge value": _opening(rfc.command(b"READY", b"\x01a\xff\xff\xff\xff" + TYPE)),
    "a name overruns": _opening(rfc.command(b"READY", TYPE + b"\xffabc")),
    "a name alone": _opening(rfc.command(b"READY", TYPE + b"\x01")),
    "an empty name": _opening(rfc.command(b"READY", TYPE + b"\x00\x00\x00\x00\x00")),
    "two types": _opening(rfc.command(b"READY", TYPE + rfc.properties(Socket_Type=b"SUB"))),
    "two types, the other way": _opening(
        rfc.command(b"READY", rfc.properties(Socket_Type=b"SUB") + TYPE)
    ),
    "a message instead": _opening(rfc.message(b"\x05READY" + TYPE)),
    "READY with more": _opening(rfc.frame(b"\x05READY" + TYPE, rfc.COMMAND | rfc.MORE)),
    "another command": _opening(rfc.command(b"HELLO", TYPE)),
    "PING instead": _opening(rfc.ping()),
    "ERROR instead": _opening(rfc.command(b"ERROR", b"\x02no")),
    "READY's name overruns": _opening(rfc.frame(b"\x06READY" + TYPE, rfc.COMMAND)),
    "READY too long": _opening(rfc.command(b"READY", TYPE + rfc.properties(X=b"x" * 1024))),
    "lower case": _opening(rfc.command(b"ready", TYPE)),
    "ZMTP 2.0": b"\xff" + bytes(8) + b"\x7f\x01\x05\x00\x00" + rfc.message(b"sample"),
    "ZMTP 2.1": rfc.greeting(major=2, minor=1) + rfc.ready(),
    "ZMTP 1.0": b"\x01\x00" + rfc.message(b"sample"),
    "CURVE": rfc.greeting(b"CURVE") + rfc.ready(),
    "PLAIN": rfc.greeting(b"PLAIN") + rfc.ready(),
    "NULLX": rfc.greeting(b"NULLX") + rfc.ready(),
    "null": rfc.greeting(b"null") + rfc.ready(),
    "HTTP": b"GET / HTTP/1.1\r\nHost: rig\r\n\r\n",
    "TLS": b"\x16\x03\x01\x02\x00\x01\x00\x01\xfc\x03\x03" + bytes(60),
    "zeros": bytes(200),
    "ones": b"\xff" * 200,
}


@pytest.mark.parametrize("stream", REFUSED.values(), ids=REFUSED)
def test_who_is_refused(stream):
    """Sockets that do not pair with ROUTER, broken metadata, older versions, other mechanisms.

    And whatever is no ZMTP; no message of theirs is ever heard.
    """
    for pieces in (None, list(range(len(stream)))):
        found = check(stream + rfc.message(b"sample"), pieces)
        assert found.broken
        assert found.messages == []


@pytest.mark.parametrize(
    "opening",
    [
        rfc.greeting(minor=0) + rfc.ready(),
        rfc.greeting(minor=9) + rfc.ready(),
        rfc.greeting(major=4, minor=0) + rfc.ready(),
        rfc.SIGNATURE[:1] + b"\0" * 7 + b"\x01\x7f" + rfc.greeting()[10:] + rfc.ready(),
        rfc.greeting() + rfc.command(b"READY", TYPE, long=True),
        rfc.greeting() + rfc.command(b"READY", TYPE + rfc.properties(X_Note=b"n" * 900)),
        rfc.greeting() + rfc.command(b"READY", rfc.properties(socket_type=b"REQ")),
        rfc.greeting() + rfc.command(b"READY", rfc.properties(SOCKET_TYPE=b"ROUTER")),
        rfc.greeting() + rfc.command(b"READY", rfc.properties(Identity=b"i" * 255) + TYPE),
    ],
    ids=[
        "3.0", "3.9", "4.0", "libzmq's padding", "long READY", "big READY", "lower", "upper",
        "identity first",
    ],
)  # fmt: skip
def test_who_is_welcome(opening):
    """Newer versions speak as 3.1; the case of a property's name and its place do not count."""
    found = check(opening + rfc.message(b"sample"))
    assert not found.broken
    assert found.messages == [(6, b"sample", False)]


@given(st.binary(max_size=300), cuts)
def test_garbage_is_no_greeting(garbage, cuts):
    """Bytes that are no greeting end the connection or wait for more; they are never a message."""
    assert check(garbage, cuts).messages == []


def test_what_is_too_long_is_passed_over():
    """Up to 1 MiB is passed over in little memory, and the message behind it is whole."""
    sample = rfc.message(b"sample")
    for size in (513, 4096, 100_000, 1 << 20):
        found = check(rfc.OPENING + rfc.message(b"x" * size) + sample)
        assert found.messages == [(rfc.NO_SAMPLE, b"", False), (6, b"sample", False)]
    found = check(rfc.OPENING + rfc.message(b"", b"x" * 5000, b"", b"y") + sample)
    assert found.messages == [(rfc.NO_SAMPLE, b"", True), (6, b"sample", False)]


def _session(rng: np.random.Generator) -> bytes:
    """A valid session, with everything in it that sessions have."""
    stream = rfc.greeting() + rfc.ready((b"DEALER", b"REQ", b"ROUTER")[rng.integers(3)])
    for _ in range(rng.integers(1, 6)):
        choice = rng.integers(8)
        size = int(rng.choice([0, 1, 20, 24, 30, 200, 255, 256, 512, 513, 700]))
        body = rng.bytes(size)
        if choice < 4:
            stream += rfc.message(*([b""] * int(rng.integers(2))), body)
        elif choice == 4:
            stream += rfc.message(body, rng.bytes(3), b"", long=True)
        elif choice == 5:
            stream += rfc.ping(int(rng.integers(65536)), rng.bytes(rng.integers(17)))
        else:
            stream += rfc.command((b"SUBSCRIBE", b"PONG", b"NEW")[rng.integers(3)], body)
    return stream


_TELLING = np.array([0, 1, 2, 3, 4, 5, 6, 7, 8, 0x7F, 0x80, 0xFE, 0xFF, 16, 17, 18], np.uint8)


def _mutate(rng: np.random.Generator, stream: bytes, other: bytes) -> bytes:
    """A session with a few bytes changed, taken out or put in, or the tail of another."""
    data = bytearray(stream)
    for _ in range(rng.integers(1, 4)):
        low = (0, 64, 64 + len(rfc.ready()))[rng.integers(3)]
        at = int(rng.integers(min(low, len(data) - 1), len(data)))
        choice = rng.integers(6)
        if choice == 0:
            data[at] ^= 1 << int(rng.integers(8))
        elif choice == 1:
            data[at] = int(_TELLING[rng.integers(_TELLING.size)])
        elif choice == 2:
            del data[at : at + int(rng.integers(1, 10))]
        elif choice == 3:
            data[at:at] = rng.bytes(rng.integers(1, 10))
        elif choice == 4:
            data[at:] = other[at:]
        else:
            data[at:at] = data[at : at + int(rng.integers(1, 70))]
        if len(data) < 2:
            return bytes(data)
    return bytes(data)


def test_mutated_sessions():
    """100,000 mutated sessions in random pieces give what the reference gives.

    A breach is never accepted; nothing outside the buffers is written, and nothing
    outside is read, for what lies there differs from run to run.
    """
    rng = np.random.default_rng(37)
    sessions = [_session(rng) for _ in range(200)]
    broken = heard = canary = 0
    DRIVER.set_canaries(canary)
    for n in range(FUZZED):
        if n % BETWEEN_CANARIES == 0:
            assert DRIVER.canaries() == {canary}
            canary = int(rng.integers(256))
            DRIVER.set_canaries(canary)
        stream = _mutate(rng, sessions[rng.integers(200)], sessions[rng.integers(200)])
        cuts = rng.integers(0, len(stream) + 1, rng.integers(6)).tolist()
        found = DRIVER.run(stream, cuts)
        assert found == expected(stream), (n, stream.hex(), cuts)
        broken += found.broken
        heard += len(found.messages)
    assert DRIVER.canaries() == {canary}
    assert FUZZED // 5 < broken < FUZZED
    assert heard > FUZZED // 5


SELECTIONS = {
    "NUMBA_BOUNDSCHECK": "test_",
    "NUMBA_DISABLE_JIT": "mutated or breach or refused or welcome or framed or room",
}


@pytest.mark.parametrize("mode", SELECTIONS)
def test_every_index_is_checked(tmp_path, mode):
    """The same tests pass where every index is checked, compiled and as plain Python.

    An index outside any buffer, read or written, raises there.
    """
    environment = {**os.environ, mode: "1", "NUMBA_CACHE_DIR": str(tmp_path)}
    command = [sys.executable, "-m", "pytest", "-q", "-x", "-p", "no:cacheprovider"]
    run = subprocess.run(
        [*command, "-k", f"({SELECTIONS[mode]}) and not every_index", str(Path(__file__))],
        env=environment, capture_output=True, text=True, timeout=300, check=False,
    )  # fmt: skip
    assert run.returncode == 0, run.stdout[-3000:]
