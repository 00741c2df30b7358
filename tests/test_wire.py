"""The codec against the reference MessagePack implementation, in both directions."""

from __future__ import annotations

import ctypes
import math
import mmap
import struct

import msgpack
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from gatestep.errors import WireError
from gatestep.kernel import records
from gatestep.specs import MAX_CELLS
from gatestep.wire import (
    ANSWER,
    CLIPPED,
    FLAG_NAMES,
    LIVE,
    MALFORMED,
    MAX_MESSAGE,
    NIL,
    REPEAT,
    SAMPLE,
    flag_names,
    pack_sample,
    read_answer,
    read_sample,
    unpack_answer,
    write_answer,
    write_malformed,
    write_sample,
)

TOP = 2**63 - 1


class GuardedPage:
    """A buffer that ends where the process may not read: one byte too far is a fault."""

    def __init__(self) -> None:
        page = mmap.PAGESIZE
        self._map = mmap.mmap(-1, 2 * page)
        whole = np.frombuffer(self._map, np.uint8)
        libc = ctypes.CDLL(None, use_errno=True)
        beyond = ctypes.c_void_p(whole.ctypes.data + page)
        assert libc.mprotect(beyond, ctypes.c_size_t(page), 0) == 0
        self._buffer = whole[:page]

    def put(self, message: bytes):
        """The message in the page's last bytes."""
        at = len(self._buffer) - len(message)
        self._buffer[at:] = np.frombuffer(message, np.uint8)
        return self._buffer[at:]


class Decoder:
    """``read_sample`` on bytes: what it read, or None where it refused."""

    def __init__(self) -> None:
        self.page = GuardedPage()
        self.sample = records(SAMPLE)
        self.answer = records(ANSWER)

    def __call__(self, message: bytes, cells: int):
        s = self.sample[0]
        if not read_sample(self.page.put(message), len(message), cells, s):
            return None
        return (int(s.seq), float(s.t_us), int(s.in_force), float(s.lag_us)), list(s.v_mv[:cells])

    def read_answer(self, message: bytes, cells: int):
        a = self.answer[0]
        if not read_answer(self.page.put(message), len(message), cells, a):
            return None
        return int(a.seq), int(a["flags"]), int(a.service_nsec), list(a.i_pa[:cells])


@pytest.fixture(scope="module")
def decode():
    return Decoder()


def same(a: float, b: float) -> bool:
    """Equal, or both NaN."""
    return a == b or (math.isnan(a) and math.isnan(b))


def agree(found, expected) -> bool:
    """Whether two decoded samples are the same, NaN counting as equal to NaN."""
    if found is None or expected is None:
        return found is expected
    pairs = zip([*found[0], *found[1]], [*expected[0], *expected[1]], strict=True)
    return all(same(a, b) for a, b in pairs)


def is_whole(x) -> bool:
    return type(x) is int and 0 <= x <= TOP


def is_number(x) -> bool:
    return type(x) in (int, float)


def is_time(x) -> bool:
    return is_number(x) and 0 <= x < math.inf


def reference(message: bytes, cells: int):
    """What the reference implementation and the contract make of a sample's bytes."""
    try:
        items = msgpack.unpackb(message)
    except Exception:
        return None
    if not isinstance(items, list) or len(items) != 4 + cells:
        return None
    seq, t_us, in_force, lag_us, *v_mv = items
    if not (is_whole(seq) and is_time(t_us) and all(map(is_number, v_mv))):
        return None
    if not (in_force is None or is_whole(in_force)) or not (lag_us is None or is_time(lag_us)):
        return None
    known = [NIL if x is None else x for x in (in_force, lag_us)]
    return (seq, float(t_us), known[0], float(known[1])), [float(v) for v in v_mv]


# Every form in which the MessagePack specification lets a number be written.
_UNSIGNED = {0xCC: ">B", 0xCD: ">H", 0xCE: ">I", 0xCF: ">Q"}
_SIGNED = {0xD0: ">b", 0xD1: ">h", 0xD2: ">i", 0xD3: ">q"}


def forms(value) -> list[bytes]:
    """All encodings of a value, the shortest and every wider one."""
    if value is None:
        return [b"\xc0"]
    if isinstance(value, float):
        wide = [b"\xcb" + struct.pack(">d", value)]
        single = float(np.float32(value)) if abs(value) < 3e38 or not math.isfinite(value) else None
        narrow = single is not None and same(single, value)
        return [*wide, b"\xca" + struct.pack(">f", value)] if narrow else wide
    found = [struct.pack(">b", value)] if -32 <= value < 128 else []
    for kind, code in (_UNSIGNED | _SIGNED).items():
        try:
            found.append(bytes([kind]) + struct.pack(code, value))
        except struct.error:
            continue
    return found


def headers(length: int) -> list[bytes]:
    """All encodings of the header of a short array."""
    return [
        bytes([0x90 + length]),
        b"\xdc" + struct.pack(">H", length),
        b"\xdd" + struct.pack(">I", length),
    ]


WHOLE = st.one_of(st.integers(0, 300), st.integers(0, TOP))
TIME = st.one_of(
    st.integers(0, 2**64 - 1), st.floats(0, 1e300), st.floats(0, 2.0**100, width=32), st.just(-0.0)
)
VOLTAGE = st.one_of(
    st.floats(), st.floats(width=32), st.integers(-(2**63), 2**64 - 1), st.integers(-200, 200)
)
ITEMS = st.integers(1, MAX_CELLS).flatmap(
    lambda cells: st.tuples(
        WHOLE, TIME, st.none() | WHOLE, st.none() | TIME, *[VOLTAGE for _ in range(cells)]
    )
)


@given(ITEMS, st.booleans())
def test_decoder_reads_what_the_reference_writes(decode, items, single):
    """A sample packed by msgpack, floats single or double, is read to the same numbers."""
    if single:
        items = [x if not isinstance(x, float) or abs(x) < 3e38 else 1.5 for x in items]
    message = msgpack.packb(list(items), use_single_float=single)
    expected = reference(message, len(items) - 4)
    assert expected is not None
    assert agree(decode(message, len(items) - 4), expected)


@given(ITEMS, st.randoms(use_true_random=False))
def test_decoder_reads_every_width(decode, items, choice):
    """Each item in any width the specification allows, under any array header, is read."""
    parts = [choice.choice(forms(x)) for x in items]
    message = choice.choice(headers(len(items))) + b"".join(parts)
    assert list(map(repr, msgpack.unpackb(message))) == list(map(repr, items))
    assert agree(decode(message, len(items) - 4), reference(message, len(items) - 4))


@pytest.mark.parametrize("place", range(6))
def test_each_number_in_each_width(decode, place):
    """Every width of every integer and float in every place, one after the other."""
    usual = [3, 60, 1, 20, -65.0, 12]
    values = [0, 1, 127, 128, 255, 256, 65535, 65536, 2**31 - 1, 2**32 - 1, 2**32, TOP]
    if place in (1, 3):
        values += [0.0, 2.5, 1e9, 2**64 - 1]
    if place in (4, 5):
        values += [-1, -32, -33, -128, -129, -32768, -(2**31), -(2**63), 2**64 - 1, 0.5, -1e300]
        values += [math.nan, math.inf, -math.inf]
    kinds = set()
    for value in values:
        for form in forms(value):
            parts = [forms(x)[0] for x in usual]
            parts[place] = form
            message = headers(6)[0] + b"".join(parts)
            assert agree(decode(message, 2), reference(message, 2)), (value, form.hex())
            assert decode(message, 2) is not None, (value, form.hex())
            kinds.add(form[0])
    assert set(range(0xCC, 0xD4)) <= kinds
    if place not in (0, 2):
        assert {0xCA, 0xCB} <= kinds


@given(ITEMS)
def test_prefixes_and_extensions_are_malformed(decode, items):
    """A message cut anywhere, or with a byte after its end, is no sample."""
    message = msgpack.packb(list(items))
    cells = len(items) - 4
    assert decode(message, cells) is not None
    for cut in range(len(message)):
        assert decode(message[:cut], cells) is None
    assert decode(message + b"\x00", cells) is None
    assert decode(message, cells % MAX_CELLS + 1) is None


@pytest.mark.parametrize(
    "message",
    [
        b"",
        b"\xc1",
        msgpack.packb(None),
        msgpack.packb("seq"),
        msgpack.packb({"seq": 1}),
        msgpack.packb([[1, 20, None, None, -65.0]]),
        msgpack.packb([1, 20, None, None]),
        msgpack.packb([1, 20, None, None, -65.0, -65.0]),
        msgpack.packb([-1, 20, None, None, -65.0]),
        msgpack.packb([2**63, 20, None, None, -65.0]),
        msgpack.packb([1.0, 20, None, None, -65.0]),
        msgpack.packb([None, 20, None, None, -65.0]),
        msgpack.packb([True, 20, None, None, -65.0]),
        msgpack.packb([1, -20, None, None, -65.0]),
        msgpack.packb([1, None, None, None, -65.0]),
        msgpack.packb([1, math.nan, None, None, -65.0]),
        msgpack.packb([1, math.inf, None, None, -65.0]),
        msgpack.packb([1, 20, -1, None, -65.0]),
        msgpack.packb([1, 20, 0.0, None, -65.0]),
        msgpack.packb([1, 20, None, -1, -65.0]),
        msgpack.packb([1, 20, None, math.nan, -65.0]),
        msgpack.packb([1, 20, None, math.inf, -65.0]),
        msgpack.packb([1, 20, None, None, None]),
        msgpack.packb([1, 20, None, None, "-65"]),
        msgpack.packb([1, 20, None, None, b"-65"]),
        msgpack.packb([1, 20, None, None, False]),
        msgpack.packb([1, 20, None, None, [-65.0]]),
        msgpack.packb([1, 20, None, None, msgpack.Timestamp(1)]),
        msgpack.packb([1, 20, None, None, msgpack.ExtType(5, b"12345678")]),
        b"\xdd\xff\xff\xff\xff\x01\x14\xc0\xc0\x00",
        b"\xdc\xff",
    ],
)
def test_not_a_sample(decode, message):
    """What is not ``[seq, t_us, in_force, lag_us, v]`` of the stated kinds is refused."""
    assert decode(message, 1) is None


answers = st.integers(1, MAX_CELLS).flatmap(
    lambda cells: st.tuples(
        st.one_of(st.just(NIL), WHOLE),
        st.integers(0, 255),
        WHOLE,
        *[st.floats(allow_nan=False, allow_infinity=False) for _ in range(cells)],
    )
)


@given(answers)
def test_reference_reads_what_the_encoder_writes(decode, fields):
    """Every answer is decoded by msgpack, and by our own decoder, to the same numbers."""
    seq, flags, service_nsec, *i_pa = fields
    answer = records(ANSWER)[0]
    answer.seq, answer.flags, answer.service_nsec = seq, flags, service_nsec
    answer.i_pa[: len(i_pa)] = i_pa
    out = np.zeros(MAX_MESSAGE, np.uint8)
    size = write_answer(out, answer, len(i_pa))
    message = out[:size].tobytes()
    assert not out[size:].any()
    found = msgpack.unpackb(message)
    assert found == [None if seq == NIL else seq, flags, service_nsec, *i_pa]
    assert all(type(i) is float for i in found[3:])
    assert unpack_answer(message) == (found[0], flags, service_nsec, i_pa)
    if seq != NIL:
        assert decode.read_answer(message, len(i_pa)) == (seq, flags, service_nsec, i_pa)


def test_the_answer_to_a_malformed_message(decode):
    """It is ``[nil, 128, 0]`` to the reference, and to our own decoder at any number of cells."""
    out = np.zeros(MAX_MESSAGE, np.uint8)
    message = out[: write_malformed(out)].tobytes()
    assert msgpack.unpackb(message) == [None, 128, 0]
    for cells in (1, MAX_CELLS):
        assert decode.read_answer(message, cells) == (NIL, MALFORMED, 0, [0.0] * cells)


@given(
    st.integers(1, MAX_CELLS).flatmap(
        lambda cells: st.tuples(
            WHOLE,
            st.integers(0, 2**52),
            st.just(NIL) | WHOLE,
            st.just(NIL) | st.integers(0, 2**40),
            *[st.floats() for _ in range(cells)],
        )
    )
)
def test_samples_we_write_are_read_back(decode, fields):
    """Our own encoder of samples, the reference and our decoder agree."""
    seq, t_us, in_force, lag_us, *v_mv = fields
    sample = records(SAMPLE)[0]
    sample.seq, sample.t_us, sample.in_force, sample.lag_us = seq, t_us, in_force, lag_us
    sample.v_mv[: len(v_mv)] = v_mv
    out = np.zeros(MAX_MESSAGE, np.uint8)
    message = out[: write_sample(out, sample, len(v_mv))].tobytes()
    expected = ((seq, t_us, in_force, lag_us), v_mv)
    assert agree(reference(message, len(v_mv)), expected)
    assert agree(decode(message, len(v_mv)), expected)
    packed = pack_sample(
        seq, t_us, None if in_force == NIL else in_force, None if lag_us == NIL else lag_us, v_mv
    )
    assert agree(decode(packed, len(v_mv)), expected)


@pytest.mark.parametrize(
    "message",
    [
        b"",
        b"\xc1",
        b"\x93\x01",
        msgpack.packb([1, 2]),
        msgpack.packb(7),
        msgpack.packb("abc"),
        msgpack.packb({1: 2, 3: 4, 5: 6}),
        msgpack.packb(["a", 1, 0, 0.0]),
        msgpack.packb([1, None, 0, 0.0]),
        msgpack.packb([1, 1, 0, "0"]),
        msgpack.packb([1, 1, 0, None]),
    ],
)
def test_what_is_no_answer_raises(message):
    """A Python client gets a WireError, whatever bytes come in an answer's place."""
    with pytest.raises(WireError, match="not an answer"):
        unpack_answer(message)


def test_flags_in_words():
    """Each flag is one bit of a byte and has the contract's name."""
    assert FLAG_NAMES == {
        1: "live",
        2: "clipped",
        4: "late",
        8: "tripped",
        16: "gap",
        32: "repeat",
        64: "refused",
        128: "malformed",
    }
    assert flag_names(LIVE | CLIPPED | REPEAT) == ["live", "clipped", "repeat"]
    assert flag_names(0) == []
