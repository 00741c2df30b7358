"""Golden vectors and mutated streams: the same bytes mean the same in C, in Python, and in SPEC."""

from __future__ import annotations

import binascii
import ctypes
import math
import re
import struct
import subprocess

import msgpack
import numpy as np
import pytest
import zmtp_reference as rfc
from firmware_build import (
    BRIDGE,
    NIL,
    SANITIZED,
    VECTORS,
    Answer,
    Sample,
    library,
    program,
    run,
)
from hypothesis import given
from hypothesis import strategies as st

from gatestep.kernel import records
from gatestep.wire import ANSWER, SAMPLE, read_answer, read_sample, unpack_answer, write_answer

STREAMS = 1_000_000
OK, BAD_MESSAGE = 0, -3
ROOM = 4096


def _vectors():
    for path in VECTORS:
        for line in path.read_text().splitlines():
            if line.startswith("#"):
                continue
            name, kind, hexes, *fields = line.split()
            yield name, kind, _bytes(hexes), dict(f.split("=", 1) for f in fields)


def _bytes(hexes):
    return b"" if hexes == "-" else bytes.fromhex(hexes)


VECTORS_OF = {
    kind: [pytest.param(data, fields, id=name) for name, k, data, fields in _vectors() if k == kind]
    for kind in {kind for _, kind, *_ in _vectors()}
}


def _of(*kinds):
    return pytest.mark.parametrize(
        ("data", "fields"), [vector for kind in kinds for vector in VECTORS_OF[kind]]
    )


def _optional(text):
    return None if text == "nil" else int(text)


def _numbers(text):
    return [] if text == "-" else [float(number) for number in text.split(",")]


def _array(data):
    return np.frombuffer(data + bytes(8), np.uint8).copy()


def test_c_agrees_with_every_vector():
    """The harness, under sanitizers, checks each line of the files and finds none wrong."""
    path = program("check_vectors", BRIDGE / "vectors" / "check_vectors.c", flags=(*SANITIZED,))
    told = run([path, *VECTORS]).stdout
    assert told == f"checked {len(list(_vectors()))}\n"


def test_a_wrong_vector_is_found(tmp_path):
    """The harness can fail: of one vector of each kind, its last digit changed, all do.

    One that must be refused is replaced by a good one instead.
    """
    path = program("check_vectors", BRIDGE / "vectors" / "check_vectors.c", flags=(*SANITIZED,))
    lines = []
    for kind, vectors in VECTORS_OF.items():
        data, fields = next(v.values for v in vectors if v.values[0])
        if kind.endswith("-bad"):
            data = VECTORS_OF[kind.removesuffix("-bad")][0].values[0]
        else:
            data = data[:-1] + bytes([data[-1] ^ 1])
        given_fields = " ".join(f"{key}={value}" for key, value in fields.items())
        lines.append(f"changed {kind} {data.hex()} {given_fields}\n")
    wrong = tmp_path / "wrong.txt"
    wrong.write_text("".join(lines))
    told = subprocess.run([path, wrong], capture_output=True, text=True, check=False)
    assert told.returncode == 1
    assert told.stdout.count("failed") == len(VECTORS_OF)


@_of("sample", "sample-read")
def test_python_reads_every_sample_vector(data, fields):
    """The server's decoder finds the fields; times it keeps with their fractions."""
    v_mv = _numbers(fields["v_mv"])
    sample = records(SAMPLE)[0]
    assert read_sample(_array(data), len(data), len(v_mv), sample)
    assert sample["seq"] == int(fields["seq"])
    in_force, lag_us = _optional(fields["in_force"]), _optional(fields["lag_us"])
    assert sample["in_force"] == (NIL if in_force is None else in_force)
    for got, want in ((sample["t_us"], int(fields["t_us"])), (sample["lag_us"], lag_us)):
        _check_time(float(got), want)
    np.testing.assert_array_equal(sample["v_mv"][: len(v_mv)], v_mv)


def _check_time(got, want):
    """A time as C keeps it: whole, and held at the top of its range."""
    if want is None:
        assert got == NIL
    elif want in (2**64 - 1, 2**63 - 1):
        assert got >= want * (1 - 1e-15)
    else:
        assert math.floor(got) == pytest.approx(want, rel=2**-52)


@_of("sample")
def test_msgpack_writes_what_a_device_writes(data, fields):
    """The reference implementation, told to use float32, gives the same bytes."""
    items = [int(fields["seq"]), int(fields["t_us"])]
    items += [_optional(fields["in_force"]), _optional(fields["lag_us"])]
    assert msgpack.packb(items + _numbers(fields["v_mv"]), use_single_float=True) == data


@_of("answer", "answer-read")
def test_python_reads_every_answer_vector(data, fields):
    """The server's decoder and the reference implementation both find the fields."""
    i_pa, cells = _numbers(fields["i_pa"]), int(fields["cells"])
    answer = records(ANSWER)[0]
    assert read_answer(_array(data), len(data), cells, answer)
    seq, flags, service_nsec, found = unpack_answer(data)
    want = _optional(fields["seq"]), int(fields["flags"]), int(fields["service_nsec"])
    assert (seq, flags, service_nsec) == want
    assert answer["seq"] == (NIL if want[0] is None else want[0])
    assert (answer["flags"], answer["service_nsec"]) == want[1:]
    np.testing.assert_array_equal(found, i_pa)
    np.testing.assert_array_equal(answer["i_pa"][: len(i_pa)], i_pa)


@_of("answer")
def test_the_server_writes_the_answer_vectors(data, fields):
    """The server's encoder gives these bytes."""
    i_pa = _numbers(fields["i_pa"])
    answer, out = records(ANSWER)[0], np.zeros(512, np.uint8)
    seq = _optional(fields["seq"])
    answer["seq"] = NIL if seq is None else seq
    answer["flags"], answer["service_nsec"] = int(fields["flags"]), int(fields["service_nsec"])
    answer["i_pa"][: len(i_pa)] = i_pa
    size = write_answer(out, answer, len(i_pa))
    assert out[:size].tobytes() == data


@_of("sample-bad")
def test_python_refuses_what_is_no_sample(data, fields):
    """As the device's decoder does."""
    assert not read_sample(_array(data), len(data), int(fields["cells"]), records(SAMPLE)[0])


@_of("answer-bad")
def test_python_refuses_what_is_no_answer(data, fields):
    """As the device's decoder does."""
    assert not read_answer(_array(data), len(data), int(fields["cells"]), records(ANSWER)[0])


@_of("crc")
def test_checks_are_those_of_the_standard_library(data, fields):
    """binascii.crc_hqx is the same CRC-16 when it begins with 0xFFFF."""
    assert binascii.crc_hqx(data, 0xFFFF) == int(fields["check"], 16)


def uncobs(data):
    """COBS by the letter of its paper; None when a run is cut short."""
    out = b""
    while data:
        code, data = data[0], data[1:]
        if code == 0 or len(data) < code - 1:
            return None
        out, data = out + data[: code - 1], data[code - 1 :]
        out += b"\0" if code < 255 and data else b""
    return out


@_of("cobs")
def test_cobs_decodes_to_its_data(data, fields):
    """Python's decoder gives the data back, and no byte of the code is 0."""
    assert 0 not in data
    assert uncobs(data) == _bytes(fields["data"])


@_of("frame")
def test_frames_hold_kind_payload_and_check(data, fields):
    """Taken apart in Python."""
    inner = uncobs(data[:-1])
    body = bytes([int(fields["kind"], 16)]) + _bytes(fields["payload"])
    assert (data[-1], inner) == (0, body + binascii.crc_hqx(body, 0xFFFF).to_bytes(2, "big"))


@_of("frame-bad")
def test_damaged_frames_are_damaged(data, fields):
    """Python's reading finds each cut short, too long, or with a wrong check."""
    inner = uncobs(data[:-1])
    sound = inner is not None and 3 <= len(inner) <= 253
    assert not (sound and binascii.crc_hqx(inner, 0xFFFF) == 0)


@_of("zmtp-send")
def test_what_a_device_sends_is_zmtp_by_the_letter(data, fields):
    """RFC 37 as tests/zmtp_reference.py has it."""
    wanted = {
        "open": rfc.greeting(),
        "greeted": rfc.ready(b"DEALER"),
        "put": rfc.message(_bytes(fields.get("payload", "-"))),
        "pinged": rfc.command(b"PONG", _bytes(fields.get("context", "-"))),
    }
    assert data == wanted[fields["at"]]


@_of("zmtp-in")
def test_messages_in_zmtp_vectors_are_there_by_the_letter(data, fields):
    """Frames after the handshake, split by the reference, hold the messages named."""
    found = [m.removeprefix("message:") for m in fields["events"].split(",") if "message" in m]
    frames, rest = [], data[64:]
    while found and isinstance(split := rfc._split(rest), tuple):
        flags, body, rest = split
        frames += [body.hex()] if not flags & rfc.COMMAND else []
    rest_of_frames = iter(frames)
    assert all(message in rest_of_frames for message in found)  # in this order


def _encode(function, structure, room=ROOM):
    out = (ctypes.c_uint8 * max(1, room))()
    size = function(ctypes.byref(structure), out, ctypes.c_size_t(room))
    return size, bytes(out[: max(0, size)])


_TIMES = st.one_of(
    st.integers(0, 2**63 - 1), st.floats(0, 1e18), st.sampled_from([-1, math.nan, math.inf, None])
)
_WHOLES = st.one_of(st.integers(0, 2**63 - 1), st.integers(-5, 5), st.none(), st.just(2**63))
_NUMBERS = st.one_of(st.floats(), st.integers(-(2**63), 2**64 - 1), st.none(), st.booleans())


@st.composite
def _samples(draw):
    """Bytes near to a sample: right or wrong items, either float, now and then mangled."""
    cells = draw(st.integers(1, 8))
    items = [draw(_WHOLES), draw(_TIMES), draw(_WHOLES), draw(_TIMES)]
    items += [draw(_NUMBERS) for _ in range(cells)]
    single = draw(st.booleans())
    if single:
        items = [float(_narrow([i])[0]) if isinstance(i, float) else i for i in items]
    data = msgpack.packb(items, use_single_float=single)
    return cells, _mangled(draw, data)


@st.composite
def _answers(draw):
    cells = draw(st.integers(1, 8))
    numbers = [draw(_NUMBERS) for _ in range(draw(st.sampled_from([0, cells, cells, cells])))]
    data = msgpack.packb([draw(_WHOLES), draw(_WHOLES), draw(_WHOLES), *numbers])
    return cells, _mangled(draw, data)


def _mangled(draw, data):
    data = bytearray(data)
    for _ in range(draw(st.sampled_from([0, 0, 0, 1, 2]))):
        data[draw(st.integers(0, len(data) - 1))] = draw(st.integers(0, 255))
    return bytes(data[: draw(st.sampled_from([len(data), len(data), len(data) - 1]))])


def _narrow(values):
    with np.errstate(over="ignore", under="ignore"):
        return np.asarray(values, np.float64).astype(np.float32)


@given(_samples())
def test_c_reads_a_sample_just_as_the_server_does(case):
    """Whatever the bytes: both take or both refuse it, and see the same numbers.

    Voltages to float32's rounding; an integer beyond 2**53 is rounded twice in Python.
    """
    cells, data = case
    theirs, ours = records(SAMPLE)[0], Sample()
    taken = read_sample(_array(data), len(data), cells, theirs)
    outcome = library().gsb_sample_decode(
        data, ctypes.c_size_t(len(data)), cells, ctypes.byref(ours)
    )
    assert outcome == (OK if taken else BAD_MESSAGE)
    if taken:
        assert (ours.seq, ours.in_force) == (theirs["seq"], theirs["in_force"])
        assert ours.t_us == pytest.approx(math.floor(min(theirs["t_us"], 2**64 - 1)), rel=1e-15)
        want = _narrow(theirs["v_mv"][:cells])
        np.testing.assert_allclose(ours.v_mv[:cells], want, rtol=2**-23)


@given(_answers())
def test_c_reads_an_answer_just_as_the_server_does(case):
    """Whatever the bytes: both take or both refuse it, and see the same numbers."""
    cells, data = case
    theirs, ours = records(ANSWER)[0], Answer()
    taken = read_answer(_array(data), len(data), cells, theirs)
    outcome = library().gsb_answer_decode(
        data, ctypes.c_size_t(len(data)), cells, ctypes.byref(ours)
    )
    assert outcome == (OK if taken else BAD_MESSAGE)
    if taken:
        found = ours.seq, ours.flags, ours.service_nsec
        assert found == (theirs["seq"], theirs["flags"], theirs["service_nsec"])
        if ours.cells:
            want = _narrow(theirs["i_pa"][:cells])
            np.testing.assert_allclose(ours.i_pa[:cells], want, rtol=2**-23)


@given(st.floats(allow_nan=False), st.integers(0, 2**63 - 1))
def test_float64_is_rounded_as_ieee_754_has_it(i_pa, seq):
    """The library's own narrowing against numpy's, bit for bit; and the way back."""
    data = msgpack.packb([seq, 1, 0, i_pa])
    answer = Answer()
    assert (
        library().gsb_answer_decode(data, ctypes.c_size_t(len(data)), 1, ctypes.byref(answer)) == OK
    )
    assert struct.pack("f", answer.i_pa[0]) == _narrow([i_pa]).tobytes()
    size, again = _encode(library().gsb_answer_encode, answer)
    assert size == len(again)
    assert msgpack.unpackb(again)[3] == float(_narrow([i_pa])[0])


def _examples(text):
    """Bytes of every indented block, comments and all; and those of each of its lines."""
    for block in re.findall(r"(?:^    [0-9a-f]{2}(?: .*)?\n)+", text, re.MULTILINE):
        lines = [re.match(r"    ((?:[0-9a-f]{2} ?)+)(?:  |$)", n) for n in block.splitlines()]
        if "times" not in block:
            each = [bytes.fromhex(line[1]) for line in lines if line]
            yield b"".join(each), each


def test_spec_shows_the_vectors_bytes():
    """Each example in SPEC.md is a vector, or a PING as the reference has it."""
    text = (BRIDGE / "SPEC.md").read_text()
    known = {data for _, _, data, _ in _vectors()} | {rfc.ping(10, b"ab")}
    examples = list(_examples(text))
    assert len(examples) >= 14
    for block, lines in examples:
        assert block in known or set(lines) <= known, block.hex(" ")
    for kind, check in (("sample", "879D"), ("answer", "75E9")):
        assert f"0x{check}" in text, kind


def test_a_million_mutated_streams_do_no_harm():
    """Under ASan and UBSan; decoders.c aborts when what must hold does not."""
    fuzz = BRIDGE / "fuzz"
    path = program("mutate", fuzz / "mutate.c", fuzz / "decoders.c", flags=(*SANITIZED,))
    told = run([path, str(STREAMS), "1", *VECTORS]).stdout
    assert told == f"streams {STREAMS}\n"
