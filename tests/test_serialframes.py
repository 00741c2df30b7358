"""Serial frames in Python: golden vectors, any bytes at all, and damage of every kind."""

from __future__ import annotations

import binascii
from pathlib import Path

import framed_host
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from gatestep.errors import WireError
from gatestep.serialframes import (
    MAX_FRAME,
    MAX_PAYLOAD,
    Deframer,
    Frame,
    Kind,
    crc16,
    encode_frame,
    put_cobs,
)

FRAMES = Path(__file__).parents[1] / "firmware_bridge" / "vectors" / "frames.txt"
CODES = set(range(256))


def _bytes(text):
    return b"" if text == "-" else bytes.fromhex(text)


def _vectors(kind):
    """Vectors of a kind: the bytes and the fields."""
    found = []
    for line in FRAMES.read_text().splitlines():
        if not line.startswith("#"):
            name, of, data, *fields = line.split()
            if of == kind:
                fields = dict(field.split("=") for field in fields)
                found.append(pytest.param(_bytes(data), fields, id=name))
    assert found
    return found


def _array(data):
    return np.frombuffer(data + b"\0", np.uint8)


def _cobs(data):
    out = np.zeros(len(data) + len(data) // 254 + 1, np.uint8)
    return out[: put_cobs(out, _array(data), len(data))].tobytes()


@pytest.mark.parametrize(("data", "fields"), _vectors("crc"))
def test_checks_of_the_golden_vectors(data, fields):
    """The vectors that C is held to, and binascii's CRC of the same polynomial."""
    check = crc16(_array(data), len(data))
    assert check == int(fields["check"], 16) == binascii.crc_hqx(data, 0xFFFF)


@pytest.mark.parametrize(("data", "fields"), _vectors("cobs"))
def test_cobs_of_the_golden_vectors(data, fields):
    """Encoded byte for byte as C does, full runs among them."""
    assert _cobs(_bytes(fields["data"])) == data


@pytest.mark.parametrize(("data", "fields"), _vectors("frame"))
def test_frames_of_the_golden_vectors(data, fields):
    """Each is written as it stands there, and read back."""
    frame = Frame(int(fields["kind"], 16), _bytes(fields["payload"]))
    assert encode_frame(*frame) == data
    assert Deframer().feed(data) == [frame]


@pytest.mark.parametrize(("data", "fields"), _vectors("frame-bad"))
def test_damaged_frames_of_the_golden_vectors(data, fields):
    """Each is dropped and counted, and the frame after it is read."""
    deframer = Deframer()
    assert deframer.feed(b"\0" + data) == []
    assert deframer.damaged >= 1
    assert deframer.feed(encode_frame(Kind.BYE)) == [Frame(Kind.BYE, b"")]
    assert fields == {}


@given(st.binary(max_size=1200))
def test_cobs_by_the_letter_of_its_paper(data):
    """No 0 occurs, at most one byte in 254 is added, and a plain decoder gives the data back."""
    code = _cobs(data)
    assert 0 not in code
    assert len(code) <= len(data) + len(data) // 254 + 1
    runs, at = b"", 0
    while at < len(code):
        size = code[at]
        runs += code[at + 1 : at + size]
        at += size
        runs += b"\0" if size < 255 and at < len(code) else b""
    assert runs == data


@given(st.integers(0, 255), st.binary(max_size=MAX_PAYLOAD))
def test_frames_against_a_plain_implementation(kind, payload):
    """A frame written here is read by the tests' own reader: split, unstuffed, binascii's CRC."""
    data = encode_frame(kind, payload)
    assert len(data) <= MAX_FRAME
    assert data.index(0) == len(data) - 1
    body = framed_host.uncobs(data[:-1])
    assert body[:-2] == bytes([kind]) + payload
    assert binascii.crc_hqx(body[:-2], 0xFFFF) == int.from_bytes(body[-2:], "big")


@given(st.lists(st.binary(max_size=600), max_size=8), st.data())
def test_any_bytes_do_no_harm_and_the_next_frame_is_read(parts, data):
    """Whatever came before, in whatever pieces: no error, and after a 0 the next frame is whole."""
    deframer = Deframer()
    for part in parts:
        deframer.feed(part)
    kind, payload = data.draw(st.integers(0, 255)), data.draw(st.binary(max_size=MAX_PAYLOAD))
    # What came may end in a whole frame that only lacked its 0.
    assert deframer.feed(b"\0" + encode_frame(kind, payload))[-1] == (kind, payload)


@given(st.binary(max_size=60), st.lists(st.integers(1, 20), min_size=1))
def test_pieces_make_no_difference(payload, sizes):
    """A stream cut anywhere gives the frames of the whole stream."""
    stream = b"".join(encode_frame(kind, payload) for kind in (1, 0x10, 0x80))
    deframer, found, at = Deframer(), [], 0
    for size in sizes * len(stream):
        found += deframer.feed(stream[at : at + size])
        at += size
    assert found == Deframer().feed(stream)
    assert len(found) == 3


@given(st.integers(0, 255), st.binary(max_size=40), st.data())
def test_a_damaged_byte_is_always_found(kind, payload, data):
    """One byte of a frame changed to any other: no frame comes of it that was not sent.

    A CRC of 16 bits finds every burst of up to 16 bits (Peterson and Brown 1961, Proc. IRE
    49:228, from memory), and a byte changed within a run is one. A changed code moves zeros
    as well, which the check misses once in 65,536 times: not among these examples.
    """
    good = encode_frame(kind, payload)
    place = data.draw(st.integers(0, len(good) - 1))
    byte = data.draw(st.sampled_from(sorted(CODES - {good[place]})))
    deframer = Deframer()
    bad = good[:place] + bytes([byte]) + good[place + 1 :]
    assert deframer.feed(b"\0" + bad + b"\0") == []
    assert deframer.damaged >= 1
    assert deframer.feed(good) == [Frame(kind, payload)]


@given(st.binary(min_size=1, max_size=40), st.data())
def test_lost_and_added_bytes_are_found(payload, data):
    """A frame that lacks bytes, or has some more, is dropped; the one after it is read."""
    good = encode_frame(Kind.ANSWER, payload)
    place = data.draw(st.integers(0, len(good) - 2))
    inserted = data.draw(st.binary(max_size=3))
    lost = data.draw(st.integers(0 if inserted else 1, 3))
    bad = good[:place] + inserted + good[place + lost :]
    deframer = Deframer()
    found = deframer.feed(b"\0" + bad + b"\0" + good)
    assert found[-1] == Frame(Kind.ANSWER, payload)
    if len(found) > 1:  # only where the bytes came out as they were, or behind a new 0
        assert set(found) == {Frame(Kind.ANSWER, payload)}


def test_half_a_frame_at_the_start_is_no_damage():
    """What a line held before it was opened is passed over without counting; later it counts."""
    deframer, good = Deframer(), encode_frame(Kind.SAMPLE, b"\x93\1\2\3")
    assert deframer.feed(good[5:]) == []
    assert deframer.damaged == 0
    assert deframer.feed(good + good[5:] + good) == [Frame(Kind.SAMPLE, b"\x93\1\2\3")] * 2
    assert deframer.damaged == 1


@pytest.mark.parametrize(("kind", "size"), [(1, MAX_PAYLOAD + 1), (256, 0), (-1, 0)])
def test_what_fits_no_frame_is_refused(kind, size):
    """A payload too long and a kind that is no byte are errors with words."""
    with pytest.raises(WireError, match=f"kind {kind} with {size} bytes"):
        encode_frame(kind, bytes(size))
