"""The guarded tick on the device and its supervision: what reaches the output, whatever comes.

Driven through the C on this machine, one call at a time, with the host's end of the serial
line written from SPEC.md (framed_host.py).
"""

from __future__ import annotations

import ctypes
import math
import re
from pathlib import Path

import numpy as np
import pytest
from firmware_build import SANITIZED, STRICT, compiler, run
from firmware_model_build import folder, library, sources, tables
from framed_host import (
    ALIVE,
    ARM,
    ASK,
    BYE,
    DISARM,
    DONE,
    HELLO,
    IS,
    PARAMETER,
    TRACE,
    WELCOME,
    Frame,
    decode,
    encode,
)  # fmt: skip
from hypothesis import given, settings
from hypothesis import strategies as st

from gatestep.firmware_twin import steps_compiled

FUZZ = Path(__file__).with_name("firmware_model_fuzz.c")
MODEL = "squid-na-k"
TICK_US = 20
LIMIT_PA, SLEW_PA_PER_MS = 800.0, 20_000.0
SLEW_PA = SLEW_PA_PER_MS * TICK_US * 1e-3
SILENCE_US = 5000
DISARMED, ARMED, TRIPPED = range(3)
OK, ARGUMENT, NOT_FINITE, VOLTAGE, INPUT, OUTPUT, SILENCE, CLOCK = 0, 1, 9, 10, 11, 12, 13, 15
EVERY = 4  # index of trace.every_ticks
COUNTERS = ("ticks", "missed", "clipped", "trips", "faults", "traces_lost")


class Device:
    """The device in C, its clock and its serial line."""

    def __init__(self, limit_pa: float = LIMIT_PA, silence_us: int = SILENCE_US) -> None:
        self.c = library(MODEL)
        self.now_us, self.token = 0, 0
        self.frames: list[Frame] = []
        config = (20.0, limit_pa, SLEW_PA_PER_MS, -150.0, 100.0, silence_us, 20)
        assert self.c.shim_start(*config) == OK
        self.poll()
        assert self.frames.pop().kind == HELLO

    def tick(self, v_mv: float, read: int = 0, write: int = 0, after_us: int = TICK_US) -> float:
        """A tick; the current at the output after it."""
        self.now_us = (self.now_us + after_us) % 2**32
        self.fault = -self.c.shim_tick(v_mv, read, write, self.now_us)
        return self.c.shim_current_pa()

    def poll(self, data: bytes = b"") -> None:
        out = ctypes.create_string_buffer(4096)
        size = self.c.shim_poll(data, len(data), out)
        self.frames += [decode(part) for part in out.raw[:size].split(b"\0") if part]

    def welcome(self) -> None:
        self.poll(encode(WELCOME, [1, 0, 1]))

    def order(self, kind: int, *arguments: float, v_mv: float = -65.0) -> int:
        """Give an order, tick, and return the code of its ``done``."""
        self.token += 1
        self.poll(encode(kind, [self.token, *arguments]))
        self.tick(v_mv)
        self.poll()
        done = [f for f in self.frames if f.kind == DONE][-1]
        assert done.items[0] == self.token
        return done.items[1]

    @property
    def state(self) -> int:
        return self.c.shim_state()

    @property
    def counters(self) -> dict[str, int]:
        return dict(zip(COUNTERS, self.c.shim_counters()[: len(COUNTERS)], strict=True))


@pytest.fixture
def device():
    """A device that has ticked and is welcome."""
    made = Device()
    made.welcome()
    made.tick(-65.0)
    return made


def armed(limit_pa: float = LIMIT_PA, silence_us: int = SILENCE_US) -> Device:
    made = Device(limit_pa, silence_us)
    made.welcome()
    made.tick(-65.0)
    assert made.order(ARM) == OK
    assert made.state == ARMED
    return made


def test_nothing_flows_until_it_is_armed(device):
    """Ticks and parameters bring no current; gates follow the voltage all the same."""
    before = device.c.shim_gate(0)
    assert device.order(PARAMETER, 0, 5000.0) == OK
    for v_mv in np.linspace(-65, 0, 50):
        assert device.tick(v_mv) == 0.0
    assert device.c.shim_gate(0) > before + 0.1


def test_armed_it_gives_the_models_current_bit_for_bit():
    """With limits out of the way the output is the twin's current at every tick."""
    made = armed(limit_pa=1e6, silence_us=0)
    v_mv = np.concatenate([[-65.0, -65.0], -65 + 0.25 * np.arange(200)]).astype(np.float32)
    found = [made.tick(float(v)) for v in v_mv[2:]]
    true = steps_compiled(tables(MODEL), v_mv).i_pa[2:]
    assert np.array_equal(np.array(found, np.float32)[20:], true[20:])  # after the slew's start
    assert made.counters["faults"] == 0


def test_the_current_starts_and_moves_within_the_slew():
    """From 0 pA on, no step is above the slew and no current above the limit."""
    made, last = armed(), 0.0
    last = made.c.shim_current_pa()
    assert abs(last) <= SLEW_PA
    for k in range(300):
        i_pa = made.tick(-65.0 + 60.0 * (k // 20 % 2))
        assert abs(i_pa - last) <= SLEW_PA * (1 + 1e-6)
        assert abs(i_pa) <= LIMIT_PA
        last = i_pa
        if k % 50 == 0:
            made.poll(encode(ALIVE))
    assert made.counters["clipped"] > 100


FAULTS = {
    "NaN": ({"v_mv": math.nan}, VOLTAGE),
    "infinite": ({"v_mv": math.inf}, VOLTAGE),
    "below the window": ({"v_mv": -150.1}, VOLTAGE),
    "above the window": ({"v_mv": 100.1}, VOLTAGE),
    "no reading": ({"v_mv": -65.0, "read": -1}, INPUT),
    "no writing": ({"v_mv": -65.0, "write": -1}, OUTPUT),
    "a long gap": ({"v_mv": -65.0, "after_us": 25 * TICK_US}, CLOCK),
}


@pytest.mark.parametrize("name", FAULTS)
def test_a_fault_trips_and_stays_tripped(name):
    """The tick that meets it orders 0 pA; only disarm and arm bring current back."""
    how, code = FAULTS[name]
    made = armed()
    for _ in range(20):
        made.tick(-40.0)
    assert made.c.shim_current_pa() != 0.0
    made.tick(**how)
    assert made.fault == code
    assert made.state == TRIPPED
    # A converter that cannot be written keeps what it has until it can.
    assert made.tick(-40.0) == 0.0
    assert made.order(ARM) == code
    assert made.order(DISARM) == OK
    assert made.state == DISARMED
    assert made.order(ARM) == OK
    assert made.counters["trips"] == 1


@pytest.mark.parametrize("data", [encode(BYE), encode(WELCOME, [1, 0, 1]), b"\x05\x11\x22\x00"])
def test_bye_welcome_and_damage_disarm(data):
    """What the page says of each: from the next tick 0 pA, without a trip."""
    made = armed()
    made.tick(-40.0)
    made.poll(data)
    assert made.tick(-40.0) == 0.0
    assert made.state == DISARMED


def test_a_supervisor_that_falls_silent_disarms():
    """Current flows up to the silence time-out after the last word, and not a tick longer."""
    made = armed()
    spoken = made.now_us - TICK_US  # the order to arm came just after the tick before
    flowing = 0
    for _ in range(2 * SILENCE_US // TICK_US):
        if made.tick(-40.0) != 0.0:
            flowing = made.now_us
    assert made.state == DISARMED
    assert 0 <= spoken + SILENCE_US - flowing <= TICK_US


def test_alive_keeps_it_armed_and_a_stop_ends_it():
    """Any word within the time-out will do; a stop button needs none."""
    made = armed()
    for k in range(3 * SILENCE_US // TICK_US):
        made.tick(-40.0)
        if k % 80 == 0:
            made.poll(encode(ALIVE))
    assert made.state == ARMED
    made.c.shim_stop()
    assert made.tick(-40.0) == 0.0
    assert made.state == DISARMED


def test_it_does_not_arm_on_a_voltage_it_does_not_know(device):
    """Arming while the converter fails is refused."""
    device.tick(math.nan)
    device.token += 1
    device.poll(encode(ARM, [device.token]))
    device.tick(math.nan)
    device.poll()
    assert device.frames[-1].items == [device.token, VOLTAGE]
    assert device.state == DISARMED


@pytest.mark.parametrize(
    ("index", "value"),
    [(0, 1.1e6), (0, math.nan), (1, 301.0), (3, -math.inf), (5, 1.0), (2**40, 0.0), (EVERY, -1.0)],
)
def test_a_parameter_that_cannot_be_is_refused(device, index, value):
    """The bounds are a model file's; nothing changes."""
    assert device.order(PARAMETER, index, value) == ARGUMENT
    device.poll(encode(ASK, [1, min(index, 4)]))
    before = [3600.0, 50.0, 1080.0, -77.0, 0.0]
    assert device.frames[-1].items[-1] == before[min(index, 4)]


def test_parameters_are_told_by_name_and_change(device):
    """What is asked is answered; names and starting values are the model file's."""
    told = []
    for index in range(5):
        device.poll(encode(ASK, [index, index]))
        told.append(device.frames.pop())
    assert {f.kind for f in told} == {IS}
    names = ["Na.gmax_ns", "Na.reversal_mv", "K.gmax_ns", "K.reversal_mv", "trace.every_ticks"]
    values = [3600.0, 50.0, 1080.0, -77.0, 0.0]
    assert [f.items for f in told] == [
        [k, k, 5, name, value] for k, (name, value) in enumerate(zip(names, values, strict=True))
    ]
    assert device.order(PARAMETER, 2, -36.5) == OK
    device.poll(encode(ASK, [9, 2]))
    assert device.frames[-1].items[-1] == -36.5


def test_an_order_sent_again_is_not_carried_out_again():
    """The same token is answered with the same code, and does nothing."""
    made = armed()
    again = encode(ARM, [made.token])
    assert made.order(DISARM) == OK
    made.poll(encode(DISARM, [made.token]))
    assert made.frames[-1].items == [made.token, OK]
    made.poll(again)
    made.tick(-65.0)
    assert made.state == ARMED  # another token than the last is another order


@pytest.mark.parametrize("again", [(encode(BYE), encode(WELCOME, [1, 0, 1])), ()])
def test_another_host_may_begin_with_the_same_token(again):
    """After bye or welcome a token is new, whatever it was before."""
    made = armed()
    for data in again or (encode(WELCOME, [1, 0, 1]),):
        made.poll(data)
    made.tick(-65.0)
    made.token -= 1
    assert made.order(ARM) == OK
    assert made.state == ARMED


def test_before_welcome_no_order_is_taken():
    """A device that is not welcome passes orders over."""
    made = Device()
    made.tick(-65.0)
    made.poll(encode(ARM, [1]) + encode(PARAMETER, [2, 0, 1.0]) + encode(ASK, [3, 0]))
    made.tick(-65.0)
    made.poll()
    assert (made.frames, made.state) == ([], DISARMED)


@pytest.mark.parametrize(
    "wrong",
    [
        {"interval_us": 50.0},
        {"interval_us": math.nan},
        {"current_pa": 0.0},
        {"current_pa": math.inf},
        {"slew": -1.0},
        {"low_mv": -157.0},
        {"high_mv": 101.0},
        {"low_mv": 50.0, "high_mv": 40.0},
        {"high_mv": math.nan},
        {"silence_us": 2**31},
        {"gap_ticks": 0},
    ],
)
def test_a_configuration_that_cannot_be_starts_nothing(wrong):
    """Another tick than the tables', no limit, or a window off the grid: refused, 0 pA."""
    usual = {"interval_us": 20.0, "current_pa": 800.0, "slew": 2e4, "low_mv": -150.0}
    usual |= {"high_mv": 100.0, "silence_us": 5000, "gap_ticks": 20, **wrong}
    c = library(MODEL)
    assert c.shim_start(*usual.values()) == -ARGUMENT
    assert c.shim_tick(-65.0, 0, 0, 20) == -ARGUMENT
    assert (c.shim_current_pa(), c.shim_state()) == (0.0, DISARMED)


def test_damaged_streams_under_the_sanitizers(tmp_path):
    """Frames in any order, bits flipped, streams cut: no memory fault, no current out of bounds."""
    made = folder(MODEL)
    target = tmp_path / "fuzz"
    include = ["-I", made, "-I", made / "library", "-I", FUZZ.parent]
    flags = [*STRICT, *SANITIZED, "-ffp-contract=off"]
    run([*compiler(), *flags, *include, "-o", target, FUZZ, *sources(made)])
    said = run([target, 100_000, 1]).stdout
    streams, armed_at, current_at, faults = map(int, re.findall(r"\d+", said))
    assert streams == 100_000
    assert armed_at > current_at > 10_000
    assert faults > 100


def test_thinned_samples_carry_what_was(device):
    """One in so many ticks: number, clock, state, voltage, current."""
    assert device.order(PARAMETER, EVERY, 5) == OK
    assert device.order(ARM) == OK
    device.frames.clear()
    given_mv, flowed = {}, {}
    start = device.counters["ticks"]
    for k in range(100):
        v_mv = -65.0 + 0.125 * k
        flowed[start + k] = device.tick(v_mv)
        given_mv[start + k] = v_mv
        device.poll()
    traces = [f.items for f in device.frames if f.kind == TRACE]
    assert len(traces) == 20
    assert np.diff([t[0] for t in traces]).tolist() == [5] * 19
    for seq, t_us, state, v_mv, i_pa in traces:
        assert (t_us, state) == (seq * TICK_US, ARMED)
        assert (v_mv, i_pa) == (given_mv[seq], flowed[seq])


def test_a_clock_that_shows_another_tick_trips():
    """Over 1024 ticks a tick 2 % away from the tables' own is a fault, half a percent is not."""
    for share, state in ((0.005, ARMED), (-0.005, ARMED), (0.02, TRIPPED), (-0.02, TRIPPED)):
        made = armed(silence_us=0)
        for k in range(2500):
            due_us = round(k * TICK_US * (1 + share))
            made.tick(-65.0, after_us=round((k + 1) * TICK_US * (1 + share)) - due_us)
        assert made.state == state, share
    assert made.fault in (OK, CLOCK)


def test_missed_ticks_are_counted_and_crossed():
    """A gap of several ticks steps the gates over all of them."""
    made = Device()
    made.tick(-65.0)
    ticks = [1, 1, 4, 1, 9, 1, 1]
    v_mv = [-65.0, -60.0, -50.0, -20.0, 0.0, -30.0, -40.0, -50.0]
    for v, span in zip(v_mv[1:], ticks, strict=True):
        made.tick(v, after_us=span * TICK_US)
    assert made.counters["missed"] == sum(ticks) - len(ticks)
    true = steps_compiled(tables(MODEL), v_mv, [1, *ticks]).x
    assert [made.c.shim_gate(k) for k in range(3)] == true.tolist()


def test_jitter_is_no_gap():
    """Ticks that come up to 40 % early or late on their own schedule are one tick each."""
    made = Device()
    rng = np.random.default_rng(3)
    at = 1000 + np.arange(5000) * TICK_US + np.round(rng.uniform(-8, 8, 5000)).astype(int)
    for step in np.diff(at, prepend=0):
        made.tick(-65.0, after_us=int(step))
    assert made.counters["missed"] <= 5000 * 0.02
    assert made.counters["faults"] == 0


# ---- any fault, in any order ----

ticks_ = st.tuples(
    st.just("tick"),
    st.one_of(st.floats(-100, 60, width=32), st.floats(width=32)),
    st.sampled_from([0] * 12 + [-1]),
    st.sampled_from([0] * 12 + [-1]),
    st.one_of(st.just(TICK_US), st.integers(0, 600), st.integers(0, 2**32 - 1)),
)
orders = st.one_of(
    st.just((ARM,)),
    st.just((ARM,)),
    st.just((DISARM,)),
    st.tuples(st.just(PARAMETER), st.integers(0, 6), st.floats(width=32)),
)
words = st.one_of(
    st.tuples(st.just("order"), orders),
    st.tuples(st.just("bytes"), st.sampled_from([encode(ALIVE), encode(BYE), b"\0"])),
    st.tuples(st.just("bytes"), st.just(encode(WELCOME, [1, 0, 1]))),
    st.tuples(st.just("bytes"), st.binary(max_size=40)),
)


@settings(max_examples=150)
@given(st.lists(st.one_of(ticks_, ticks_, ticks_, words), max_size=60))
def test_no_fault_in_any_order_lets_a_wrong_current_out(events):
    """Never above the limit or, while it flows, beyond the slew; 0 pA in the tick of a fault.

    The one exception is what no software can bound: a converter that takes no writes keeps
    its last current, and gets 0 pA as soon as it takes one.
    """
    made = armed()
    last = made.c.shim_current_pa()
    for event in events:
        if event[0] == "tick":
            _, v_mv, read, write, after_us = event
            i_pa = made.tick(v_mv, read, write, after_us)
            assert abs(i_pa) <= LIMIT_PA
            if write < 0:
                assert i_pa == last
            elif made.fault != OK or made.state != ARMED:
                assert i_pa == 0.0
            else:
                assert abs(i_pa - last) <= SLEW_PA * (1 + 1e-6)
            last = i_pa
            gates = [made.c.shim_gate(k) for k in range(3)]
            assert all(0.0 <= x <= 1.0 for x in gates)
        elif event[0] == "order":
            kind, *arguments = event[1]
            made.token += 1
            made.poll(encode(kind, [made.token, *arguments]))
        else:
            made.poll(event[1])
    made.frames.clear()
