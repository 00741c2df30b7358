"""The journal's bytes: blocks and what is none, and content that no writer would write."""

from __future__ import annotations

import json
import struct
import zlib
from contextlib import suppress

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from journals import write_journal

from gatestep.errors import JournalError
from gatestep.journalbytes import (
    HEADER_SIZE,
    MAGIC,
    Block,
    Hole,
    Kind,
    dtype_as_json,
    dtype_from_json,
    find_block,
    find_close,
    pack_block,
    pack_json,
    sample_dtype,
    unpack_header,
    unpack_json,
    walk,
)
from gatestep.journalfile import open_journal


class Memory:
    """Bytes in memory, to be read like a file's."""

    def __init__(self, data: bytes) -> None:
        self.data, self.size, self.bytes_read = data, len(data), 0

    def read(self, offset: int, count: int) -> bytes:
        found = self.data[offset : offset + count]
        self.bytes_read += len(found)
        return found


def test_the_crc_is_the_usual_one():
    """CRC-32 of "123456789" is 0xCBF43926 (the catalogues' check value), little-endian here."""
    block = pack_block(Kind.EVENTS, b"123456789", 0, 0)
    assert block[12:16] == bytes.fromhex("2639f4cb")
    assert len(block) == 32 + 16


@given(
    st.sampled_from(Kind), st.binary(max_size=40), st.integers(0, 2**64 - 1),
    st.integers(0, 2**32 - 1),
)  # fmt: skip
def test_a_block_comes_back(kind, payload, position, serial):
    """Every field of the header, the payload, and padding to eight bytes."""
    data = pack_block(kind, payload, position, serial)
    found = unpack_header(data[:HEADER_SIZE], 0)
    assert found is not None
    assert (found.kind, found.position, found.serial) == (kind, position, serial)
    assert data[found.payload : found.payload_end] == payload
    assert found.end == len(data)
    assert len(data) % 8 == 0
    assert found.crc == zlib.crc32(payload)


@given(st.integers(0, 31), st.integers(1, 255))
def test_a_header_with_any_byte_changed_is_none(at, change):
    """Its own CRC sees every single changed byte."""
    data = bytearray(pack_block(Kind.SAMPLES, bytes(64), 12, 3))
    data[at] ^= change
    assert unpack_header(bytes(data[:HEADER_SIZE]), 0) is None


pieces = st.one_of(
    st.binary(max_size=60),
    st.just(MAGIC),
    st.builds(pack_block, st.just(Kind.EVENTS), st.binary(max_size=30), st.just(0), st.just(1)),
    st.builds(
        lambda n: pack_block(Kind.SAMPLES, bytes(80), 0, 0)[:n], st.integers(0, 112)
    ),
)  # fmt: skip


@settings(max_examples=300)
@given(st.lists(pieces, max_size=8))
def test_every_byte_is_in_a_block_or_in_a_hole(parts):
    """Whatever the bytes, blocks and holes follow on each other from the first to the last."""
    source = Memory(b"".join(parts))
    at = 0
    for found in walk(source):
        assert found.offset == at
        if isinstance(found, Block):
            assert found.payload_end <= source.size
            at = found.end
        else:
            assert isinstance(found, Hole)
            assert found.end > at
            at = found.end
    assert source.size <= at < source.size + 8


def test_a_block_is_found_across_the_border_of_what_is_read_at_once():
    """A header may lie over the end of a chunk, and false magics before it mislead no one."""
    block = pack_block(Kind.EVENTS, b"[]", 0, 0)
    for before in range((1 << 20) - 34, (1 << 20) + 3):
        noise = (MAGIC * 3 + bytes(500)) * 3000
        source = Memory(noise[:before] + block)
        assert find_block(source, 0) == before
    assert find_block(Memory(bytes(3 << 20)), 1) == 3 << 20


@pytest.mark.parametrize("size", [0, 100, 3000, 5000, 100_000, 3_000_000])
def test_the_closing_block_is_found_from_the_end(size):
    """However long its index; and it is searched for no further than it can reach."""
    before = bytes(range(1, 200)) * 300_000
    close = pack_block(Kind.CLOSE, pack_json({"index": "x" * size}), 0, 9)
    source = Memory(before[: -(-len(before) % 8) or None] + close)
    found = find_close(source)
    assert found is not None
    assert (found.kind, found.end) == (Kind.CLOSE, source.size)
    torn = Memory(source.data[:-8])
    assert find_close(torn) is None
    assert find_close(Memory(before)) is None
    none = Memory(bytes(1 << 26))
    assert find_close(none) is None
    assert none.bytes_read <= 4096


@given(st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(), inner, max_size=3),
    max_leaves=8,
))  # fmt: skip
def test_json_comes_back_and_never_holds_the_magic(data):
    """Floats exactly, any text, and no control character, for the magic has one."""
    packed = pack_json({"x": data, "magic": MAGIC.decode("latin-1")})
    assert MAGIC not in packed
    assert packed.isascii() or min(packed) >= 0x20
    again = unpack_json(packed)["x"]
    assert repr(again) == repr(data)


def test_numpy_is_written_plainly():
    """Arrays, scalars and what JSON does not know are written as what they show."""
    packed = pack_json({"a": np.arange(3), "b": np.float64(0.1), "c": np.int64(7), "d": {1}.pop})
    found = unpack_json(packed)
    assert (found["a"], found["b"], found["c"]) == ([0, 1, 2], 0.1, 7)
    assert isinstance(found["d"], str)


def test_the_record_is_the_one_described():
    """Sizes, and a dtype that went through JSON."""
    for cells in (1, 4, 8):
        dtype = sample_dtype(cells)
        assert dtype.itemsize == 56 + 24 * cells
        assert dtype_from_json(json.loads(json.dumps(dtype_as_json(dtype)))) == dtype
    for wrong in (
        None,
        [],
        7,
        [["seq"]],
        [["seq", "O"]],
        [["seq", "<i8"]],
        "seq",
        [["x", "<f8", 3]],
    ):
        with pytest.raises(JournalError):
            dtype_from_json(wrong)


@pytest.fixture(scope="module")
def parts(tmp_path_factory):
    """The payloads of a sound journal, each with its kind and position."""
    path, _ = write_journal(tmp_path_factory.mktemp("parts"), 1, 3, 5)
    data, at, found = path.read_bytes(), 0, []
    while at < len(data):
        _, kind, _, length, _, position = struct.unpack_from("<4sHHIIQ", data, at)
        found.append((kind, data[at + 32 : at + 32 + length], position))
        at += 32 + length + -length % 8
    return found


leaves = st.none() | st.booleans() | st.integers(-5, 10**30) | st.floats() | st.text(max_size=3)
anything = st.recursive(
    leaves,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(), inner, max_size=2),
)


@settings(max_examples=300)
@given(data=st.data())
def test_strange_content_is_a_journal_error(parts, tmp_path_factory, data):
    """Blocks that pass their CRCs and say what no writer would: no other error ever."""
    path = tmp_path_factory.getbasetemp() / "strange.journal"
    at = data.draw(st.integers(0, len(parts) - 1))
    made = []
    for k, (kind, payload, position) in enumerate(parts):
        content = payload
        if k == at and kind in {Kind.HEADER, Kind.EVENTS, Kind.CLOSE}:
            content = pack_json(_changed(json.loads(payload), data))
        elif k == at and kind == Kind.MODEL:
            (size,) = struct.unpack_from("<I", payload)
            text = pack_json(_changed(json.loads(payload[4 : 4 + size]), data))
            content = struct.pack("<I", len(text)) + text + payload[4 + size :]
        elif k == at:
            content = data.draw(st.binary(max_size=200))
        made.append(pack_block(Kind(kind), content, position, k))
    path.write_bytes(b"".join(made))
    with suppress(JournalError), open_journal(path) as found:
        for read in (
            lambda: found.samples[:],
            lambda: [found.time_of(e.nsec) for e in found.events],
            lambda: [found.models[k].tables() for k in found.models],
            lambda: found.in_force(10),
            lambda: found.sweeps,
            lambda: found.position_of(3),
            lambda: (found.interval_us, found.start, found.cells),
            found.verify,
        ):
            with suppress(JournalError):
                read()


def _changed(content, data):
    """JSON with one of its values, at any depth, replaced by anything, or left out."""
    if not content or not isinstance(content, dict | list) or data.draw(st.integers(0, 5)) == 0:
        return data.draw(anything)
    keys = list(content) if isinstance(content, dict) else list(range(len(content)))
    key = data.draw(st.sampled_from(keys))
    if data.draw(st.integers(0, 5)) == 0:
        del content[key]
    else:
        content[key] = _changed(content[key], data)
    return content
