"""What one sample does: safety under any operations, then each promise by itself.

No sockets: messages go to ``decode``, ``take_sample`` and ``settle_answer`` and orders to the
function that the hot loop carries them out with, on memory made as the server
makes it.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import msgpack
import numpy as np
import pytest
from hypothesis import settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, invariant, precondition, rule
from numba import njit

from gatestep.kernel import advance, current, records, settle
from gatestep.library import load_model
from gatestep.loop import make_memory
from gatestep.orders import Order, Outcome
from gatestep.orders import obey as carry_out
from gatestep.specs import RigSpec
from gatestep.states import Fault, State
from gatestep.tables import build_tables, fill_bank
from gatestep.tick import (
    ANSWERED,
    WAS_MALFORMED,
    WAS_REPEAT,
    begin_session,
    decode,
    refuse,
    settle_answer,
    take_sample,
)
from gatestep.wire import (
    CLIPPED,
    GAP,
    LATE,
    LIVE,
    MAX_MESSAGE,
    REFUSED,
    REPEAT,
    TRIPPED,
    pack_sample,
)
from gatestep.zmqlane import ZMQ_LANE as LANE

ROOM = 1 << 18
TICK_US = 20.0


@njit(nogil=True, error_model="numpy", _nrt=False)
def obey(m: Any, now: int) -> int:
    """Carry out the order in ``m.order`` as the hot loop does."""
    return carry_out(m, m.order[0], m.loop[0].seq + 1, now)


class Tick(NamedTuple):
    """What came of one message."""

    kind: int
    seq: int
    flags: int
    i_pa: list[float]


class Bench:
    """The loop's memory and its functions, without the loop."""

    def __init__(self, cells: int = 1, bounds: dict[str, Any] | None = None, **rig: Any) -> None:
        spec = RigSpec.model_validate(
            {
                "loop": {"interval_us": TICK_US, **rig.pop("loop", {})},
                "cell": [
                    {"name": f"c{k}", "model": "x", "limits": bounds or {}} for k in range(cells)
                ],
                **rig,
            }
        )
        self.spec = spec
        self.m = make_memory(spec, records(LANE), 0, 0, np.zeros(ROOM), np.zeros((2, 8)))
        self.loop, self.cells = self.m.loop[0], self.m.cells
        self.sample, self.answer = self.m.sample[0], self.m.answer[0]
        self.message = np.zeros(MAX_MESSAGE, np.uint8)
        begin_session(self.loop, self.cells, self.m.past)

    def give_model(self, cell: int, bank: int, model: Any) -> None:
        """Fill a bank of a cell; ``model`` makes it as ``fill(bank record, table) -> None``."""
        base = (2 * cell + bank) * (ROOM // 16)
        model(self.m.banks[2 * cell + bank], self.m.table[base:])
        self.m.banks[2 * cell + bank].start = base

    def order(self, kind: Order, cell: int = 0, index: int = 0, value: float = 0.0) -> Outcome:
        """Carry out an order."""
        order = self.m.order[0]
        order.kind, order.cell, order.index, order.value = kind, cell, index, value
        return Outcome(obey(self.m, 1))

    def put(self, message: bytes) -> Tick:
        """Take a message's bytes as the rig's that holds the loop."""
        self.message[: len(message)] = np.frombuffer(message, np.uint8)
        m = self.m
        kind = WAS_MALFORMED
        if decode(self.loop, self.message, len(message), self.sample):
            kind = take_sample(
                self.loop, self.cells, m.banks, m.table, m.past, self.sample, self.answer
            )
        if kind == ANSWERED:
            settle_answer(self.loop, self.answer, m.past, 1)
        a = self.answer
        return Tick(kind, int(a.seq), int(a["flags"]), a.i_pa[: len(self.cells)].tolist())

    def take(self, seq: int, *v_mv: float, t_us=None, in_force=None, lag_us=None) -> Tick:
        """Take a sample; its clock shows ``TICK_US`` a tick unless told otherwise."""
        t_us = seq * TICK_US if t_us is None else t_us
        return self.put(pack_sample(seq, t_us, in_force, lag_us, list(v_mv)))

    def gates(self, cell: int = 0) -> np.ndarray:
        """A copy of a cell's gates in use."""
        bank = self.m.banks[int(self.cells[cell].bank)]
        return self.cells[cell].x[: int(bank.dynamic + bank.instant)].copy()


def shipped(name: str):
    """Filler of a bank with a shipped model."""
    tables = build_tables(load_model(name).spec)
    return lambda bank, table: fill_bank(tables, bank, table)


SQUID = shipped("squid-axon")


def random_model(seed: int):
    """Filler of a bank with random valid tables and absurd conductances.

    Steady states anywhere in [0, 1], ends included; rates from 0 to the largest
    float; gmax and reversals to their allowed extremes, of both signs.
    """

    def fill(bank: Any, table: Any) -> None:
        draw = np.random.default_rng(seed)
        rows, dynamic = int(draw.integers(2, 12)), 4 * int(draw.integers(0, 4))
        instant, count = int(draw.integers(0, 4)), int(draw.integers(1, 6))
        stride = 2 * dynamic + instant
        inf = draw.choice([0.0, 1.0, 0.5, draw.random(), 5e-324], (rows, dynamic + instant))
        rate = draw.choice([0.0, 1e-3, 1.0, 1e6, 1e300, 1.7e308], (rows, dynamic))
        values = np.hstack([inf[:, :dynamic], rate, inf[:, dynamic:]]).ravel()
        table[: values.size] = values
        bank.v_low_mv, bank.rows_per_mv = (
            float(draw.uniform(-300, 0)),
            float(draw.uniform(0.01, 64)),
        )
        bank.rows, bank.stride, bank.dynamic, bank.instant = rows, stride, dynamic, instant
        bank.conductances = count
        gates = dynamic + instant
        bank.gates[:count] = draw.integers(0, 4, count) if gates else 0
        bank.state[:20] = draw.integers(0, max(gates, 1), 20)
        bank.power[:20] = draw.integers(1, 16, 20)
        bank.gmax_ns[:count] = draw.choice([1e6, -1e6, 1.0, -3.0, 0.0, 5e-324], count)
        bank.reversal_mv[:count] = draw.choice([300.0, -300.0, 0.0, -65.0], count)

    return fill


VOLTAGES = st.one_of(
    st.floats(-150.0, 100.0),
    st.floats(-150.0, 100.0),
    st.floats(-150.0, 100.0),
    st.floats(),
    st.sampled_from([1.7e308, -1.7e308, math.nan, math.inf, -math.inf, 100.0, 100.1, -150.0]),
)
HOSTILE = st.one_of(
    st.floats(), st.sampled_from([math.nan, math.inf, -math.inf, 1e308, -1e308, 1e6, -1e6])
)
KNOWN = st.none() | st.integers(0, 2**63 - 1)


class AnyOperations(RuleBasedStateMachine):
    """Invariant: no voltage, model, order or sequence brings an answer outside the contract.

    Whatever comes, in any order: every answer is finite and within its cell's limits, is
    0 pA unless live, is live only while the loop is armed by the orders given, moves
    within the slew, and no gate leaves [0, 1].
    """

    @initialize(
        cells=st.integers(1, 2),
        limit=st.sampled_from([1e6, 1000.0, 0.5]),
        slew=st.sampled_from([None, 1e-3, 1e6, 1e12]),
        on_arrival=st.booleans(),
        foreseeing=st.booleans(),
        seed=st.integers(0, 2**32 - 1),
    )
    def begin(self, cells, limit, slew, on_arrival, foreseeing, seed):
        limits = {"current_pa": limit, "slew_pa_per_ms": slew}
        apply = "on-arrival" if on_arrival else "next-tick"
        self.bench = Bench(cells, limits, loop={"apply": apply})
        if foreseeing:
            self.anticipate(np.random.default_rng(seed))
        self.limit = limit
        self.slew = 2 * limit if slew is None else slew * TICK_US * 1e-3
        for k in range(cells):
            for bank in (0, 1):
                self.bench.give_model(k, bank, random_model(seed + 2 * k + bank))
        self.count, self.newest, self.t_us = cells, None, 0.0
        self.permitted = False  # whether the orders and voltages so far let current flow
        self.last = [0.0] * cells
        self.kept: dict[int, Tick] = {}

    def anticipate(self, draw):
        """Let each cell's answers be anticipated, from a cell described anyhow."""
        for cell in self.bench.cells:
            shadow = cell.shadow
            shadow.on, shadow.substeps = 1, draw.integers(1, 9)
            shadow.alpha, shadow.beta = draw.uniform(0, 1), draw.uniform(0, 9)
            shadow.capacitance_pf = draw.choice([1e-3, 1.0, 30.0, 1e5])
            shadow.leak_ns, shadow.leak_mv = draw.choice([0.0, 3.0, 1e5]), draw.uniform(-200, 200)

    def voltages(self, data):
        return [data.draw(VOLTAGES) for _ in range(self.count)]

    def check_any(self, tick, seq):
        state = State(int(self.bench.loop.state))
        live = bool(tick.flags & LIVE)
        assert tick.seq == seq
        assert all(math.isfinite(i) and abs(i) <= self.limit for i in tick.i_pa)
        assert live or tick.i_pa == [0.0] * self.count
        assert live or not tick.flags & CLIPPED
        assert not live or (self.permitted and state == State.ARMED)
        assert tick.flags & (REFUSED | 128) == 0

    @rule(
        data=st.data(),
        ticks=st.one_of(st.just(1), st.just(1), st.integers(1, 100), st.integers(1, 2**62)),
        in_force=KNOWN,
        lag=st.none() | st.floats(0, 1e300),
        clock=st.one_of(st.just(TICK_US), st.floats(-1e12, 1e12)),
    )
    def sample(self, data, ticks, in_force, lag, clock):
        self.take(self.voltages(data), ticks, in_force, lag, clock)

    @rule(data=st.data(), count=st.integers(1, 12))
    def run_live(self, data, count):
        self.reset()
        self.arm()
        for _ in range(count):
            v_mv = [data.draw(st.floats(-150.0, 100.0)) for _ in range(self.count)]
            self.take(v_mv, 1, None, None, TICK_US)

    def take(self, v_mv, ticks, in_force, lag, clock):
        """One new sample, held to everything that is promised of its answer."""
        seq = ticks if self.newest is None else self.newest + ticks
        if seq > 2**63 - 1:
            return
        self.t_us = max(self.t_us + clock, 0.0)
        tick = self.bench.take(seq, *v_mv, t_us=self.t_us, in_force=in_force, lag_us=lag)
        assert tick.kind == ANSWERED
        if not all(-150.0 <= v <= 100.0 for v in v_mv):
            self.permitted = False
        self.check_any(tick, seq)
        state = State(int(self.bench.loop.state))
        assert bool(tick.flags & LIVE) == (state == State.ARMED)
        assert bool(tick.flags & TRIPPED) == (state == State.TRIPPED)
        assert bool(tick.flags & GAP) == (self.newest is not None and ticks > 1)
        assert not tick.flags & REPEAT
        for before, now in zip(self.last, tick.i_pa, strict=True):
            assert not tick.flags & LIVE or before - self.slew <= now <= before + self.slew
        self.permitted = self.permitted and state == State.ARMED
        self.newest, self.last, self.kept[seq] = seq, tick.i_pa, tick

    @precondition(lambda self: self.newest is not None)
    @rule(data=st.data(), back=st.integers(0, 3) | st.integers(0, 200), in_force=KNOWN)
    def again(self, data, back, in_force):
        seq = max(self.newest - back, 0)
        before = self.everything()
        tick = self.bench.take(seq, *self.voltages(data), in_force=in_force, lag_us=1e300)
        assert tick.kind == WAS_REPEAT
        self.check_any(tick, seq)
        assert tick.flags & REPEAT
        earlier = self.kept.get(seq)
        if earlier is not None and tick.flags & LIVE:
            assert tick == (WAS_REPEAT, seq, earlier.flags | REPEAT, earlier.i_pa)
        assert tick.flags & LIVE == 0 or earlier is not None
        assert self.everything() == before

    def everything(self):
        """Bytes of the cells and of the loop's record, but for the count of repeats."""
        loop = self.bench.loop.copy()
        loop.repeats = 0
        return loop.tobytes(), self.bench.cells.tobytes()

    @rule(message=st.binary(max_size=60))
    def rubbish(self, message):
        before = self.bench.cells.tobytes()
        malformed = self.bench.loop.malformed
        if self.bench.put(message).kind == WAS_MALFORMED:
            assert self.bench.loop.malformed == malformed + 1
            assert self.bench.cells.tobytes() == before

    @rule()
    def arm(self):
        tripped = self.bench.loop.state == State.TRIPPED
        outcome = self.bench.order(Order.ARM)
        assert (outcome == Outcome.TRIPPED) == tripped
        self.permitted = self.permitted or outcome == Outcome.DONE

    @rule()
    def disarm(self):
        self.bench.order(Order.DISARM)
        self.permitted = False
        assert self.bench.loop.state != State.ARMED

    @rule()
    def reset(self):
        tripped = self.bench.loop.state == State.TRIPPED
        self.bench.order(Order.RESET)
        assert not tripped or self.bench.loop.state == State.IDLE

    @rule(data=st.data(), kind=st.sampled_from([Order.SET_GMAX, Order.SET_REVERSAL]), value=HOSTILE)
    def set_hostile(self, data, kind, value):
        cell = data.draw(st.integers(0, self.count - 1))
        self.bench.order(kind, cell, data.draw(st.integers(0, 5)), value)

    @rule(data=st.data(), seed=st.integers(0, 2**32 - 1))
    def swap(self, data, seed):
        cell = data.draw(st.integers(0, self.count - 1))
        spare = 1 - int(self.bench.cells[cell].bank) % 2
        self.bench.give_model(cell, spare, random_model(seed))
        self.bench.order(Order.SWAP, cell, 2 * cell + spare)

    @invariant()
    def gates_are_fractions(self):
        if not hasattr(self, "bench"):
            return
        for k in range(self.count):
            gates = self.bench.gates(k)
            assert ((gates >= 0.0) & (gates <= 1.0)).all()


TestAnyOperations = AnyOperations.TestCase
TestAnyOperations.settings = settings(max_examples=60, stateful_step_count=40)


@pytest.fixture
def bench():
    """One cell with the squid axon model and wide limits."""
    made = Bench(1, {"current_pa": 200_000.0})
    made.give_model(0, 0, SQUID)
    return made


def noise(count: int, seed: int = 3) -> np.ndarray:
    """Voltages that move all over the squid axon's range."""
    return np.random.default_rng(seed).uniform(-80, 40, count)


def test_idle_answers_zero_and_gates_follow(bench):
    """Idle gives 0 pA, not live.

    All the same, arming later finds the gates where they would be had the loop been armed
    throughout: the answers from then on are the same to the bit.
    """
    other = Bench(1, {"current_pa": 200_000.0})
    other.give_model(0, 0, SQUID)
    other.order(Order.ARM)
    v = noise(200)
    for seq in range(100):
        assert bench.take(seq, v[seq])[2:] == (0, [0.0])
        assert other.take(seq, v[seq]).flags == LIVE
    bench.order(Order.ARM)
    for seq in range(100, 200):
        mine = bench.take(seq, v[seq])
        assert mine.flags == LIVE
        assert mine.i_pa == other.take(seq, v[seq]).i_pa
        assert mine.i_pa[0] != 0.0


@pytest.mark.parametrize("stopped_by", ["disarm", "trip"])
def test_zero_at_once(bench, stopped_by):
    """The first answer after disarming, and the very answer that trips, are 0 pA, slew or not."""
    bench.cells[0].slew_pa = 10.0
    bench.order(Order.ARM)
    for seq in range(50):
        tick = bench.take(seq, -20.0)
    assert abs(tick.i_pa[0]) > 100.0
    if stopped_by == "disarm":
        bench.order(Order.DISARM)
        assert bench.take(50, -20.0)[2:] == (0, [0.0])
    else:
        assert bench.take(50, math.nan)[2:] == (TRIPPED, [0.0])
        assert bench.take(51, -20.0)[2:] == (TRIPPED, [0.0])


def test_slew_counts_from_zero_after_a_pause(bench):
    """Arming starts from 0 pA: the current climbs within the slew from there, clipped."""
    bench.cells[0].slew_pa = 10.0
    for armed_at in (0, 20):
        bench.order(Order.ARM)
        climbed = [bench.take(armed_at + n, -20.0) for n in range(10)]
        assert [abs(t.i_pa[0]) for t in climbed] == pytest.approx([10.0 * n for n in range(1, 11)])
        assert all(t.flags == LIVE | CLIPPED for t in climbed)
        bench.order(Order.DISARM)
        for n in range(10):
            bench.take(armed_at + 10 + n, -20.0)
    assert bench.loop.clipped == 20


@pytest.mark.parametrize(
    ("v_mv", "fault"),
    [
        (math.nan, Fault.NON_FINITE_VOLTAGE),
        (math.inf, Fault.NON_FINITE_VOLTAGE),
        (-math.inf, Fault.NON_FINITE_VOLTAGE),
        (100.001, Fault.VOLTAGE_OUT_OF_WINDOW),
        (-150.001, Fault.VOLTAGE_OUT_OF_WINDOW),
        (1e308, Fault.VOLTAGE_OUT_OF_WINDOW),
    ],
)
def test_a_bad_voltage_in_any_cell_trips_all(v_mv, fault):
    """Armed, it trips at once and names the cell; idle, it does not trip."""
    bench = Bench(2, {"current_pa": 200_000.0})
    for k in (0, 1):
        bench.give_model(k, 0, SQUID)
    assert bench.take(0, -65.0, v_mv)[2:] == (0, [0.0, 0.0])
    assert bench.loop.trips == 0
    bench.order(Order.ARM)
    assert bench.take(1, -60.0, -60.0).flags == LIVE
    assert bench.take(2, -60.0, v_mv)[2:] == (TRIPPED, [0.0, 0.0])
    assert (bench.loop.trips, bench.loop.fault, bench.loop.fault_cell) == (1, fault, 1)
    assert bench.order(Order.ARM) == Outcome.TRIPPED
    assert bench.take(3, -60.0, -60.0)[2:] == (TRIPPED, [0.0, 0.0])
    bench.order(Order.RESET)
    assert bench.take(4, -60.0, -60.0)[2:] == (0, [0.0, 0.0])
    bench.order(Order.ARM)
    assert bench.take(5, -60.0, -60.0).flags == LIVE
    assert bench.loop.trips == 1


def test_a_voltage_at_the_windows_edge_is_allowed(bench):
    """The window's ends are inside it."""
    bench.order(Order.ARM)
    for seq, v_mv in enumerate((-150.0, 100.0)):
        assert bench.take(seq, v_mv).flags & LIVE


@pytest.mark.parametrize("value", [math.nan, math.inf, -math.inf, 1e308])
def test_a_model_that_gives_no_number_trips(bench, value):
    """A current that is NaN or infinite trips an armed loop, whatever made it so."""
    bench.order(Order.ARM)
    bench.take(0, -60.0)
    bench.order(Order.SET_GMAX, 0, 2, value)
    bench.order(Order.SET_REVERSAL, 0, 2, 300.0)
    if value == 1e308:
        bench.m.banks[0].reversal_mv[2] = 1e308
    assert bench.take(1, -60.0)[2:] == (TRIPPED, [0.0])
    assert bench.loop.fault == Fault.NON_FINITE_CURRENT


def naive_relaxed(bank: Any, table: np.ndarray, x: np.ndarray, v_mv: float, ms: float):
    """The exact solution for a held voltage from numpy's own interpolation and exponential."""
    rows, stride, dynamic = int(bank.rows), int(bank.stride), int(bank.dynamic)
    grid = bank.v_low_mv + np.arange(rows) / bank.rows_per_mv
    columns = table[int(bank.start) :][: rows * stride].reshape(rows, stride)
    at = [np.interp(v_mv, grid, column) for column in columns.T]
    inf, rate = np.array(at[:dynamic]), np.array(at[dynamic : 2 * dynamic])
    return inf + (x[:dynamic] - inf) * np.exp(-ms * rate)


@pytest.mark.parametrize("k", [2, 3, 10, 1000])
def test_a_gap_equals_so_many_steps(bench, k):
    """A gap of k ticks carries the gates as k steps on the held mean voltage do.

    So does the exact solution in numpy, to 1e-12; the gap is flagged and k - 1 are counted missed.
    """
    bench.order(Order.ARM)
    bench.take(10, -65.0)
    bank, table, x = bench.m.banks[0], bench.m.table, bench.cells[0].x.copy()
    exact = naive_relaxed(bank, table, x, -45.0, k * TICK_US * 1e-3)
    for _ in range(k):
        advance(bank, table, x, -45.0, TICK_US * 1e-3)
    tick = bench.take(10 + k, -25.0)
    assert tick.flags == LIVE | GAP
    assert bench.loop.missed == k - 1
    np.testing.assert_allclose(bench.cells[0].x, x, rtol=0, atol=1e-12)
    np.testing.assert_allclose(bench.gates()[: exact.size], exact, rtol=0, atol=1e-12)
    assert tick.i_pa[0] == pytest.approx(current(bank, x, -25.0), rel=1e-9)


def test_a_gap_of_any_length_ends_at_the_steady_state(bench):
    """A long gap leaves each gate at its steady state for the mean voltage, up to 2**62 ticks."""
    for ticks in (10**9, 2**62):
        last = int(bench.loop.seq) if bench.loop.running else 0
        bench.take(last + 1, -65.0)
        bench.take(last + 1 + ticks, -25.0)
        x = np.zeros_like(bench.cells[0].x)
        settle(bench.m.banks[0], bench.m.table, x, -45.0)
        np.testing.assert_allclose(bench.cells[0].x, x, rtol=0, atol=1e-12)


def test_gates_cross_ticks_whose_voltage_was_no_number(bench):
    """After NaN while idle the gates are carried across every tick since the last good voltage.

    They cross them on the mean of the two good ones, as across a gap.
    """
    other = Bench(1, {"current_pa": 200_000.0})
    other.give_model(0, 0, SQUID)
    for b in (bench, other):
        b.take(0, -65.0)
    for seq in range(1, 7):
        bench.take(seq, math.nan if seq % 2 else math.inf)
    bench.take(9, math.nan)
    bench.take(10, -25.0)
    other.take(10, -25.0)
    np.testing.assert_allclose(bench.cells[0].x, other.cells[0].x, rtol=0, atol=1e-12)


def test_a_first_voltage_that_is_no_number_leaves_the_start_to_the_next(bench):
    """Gates start at their steady state for the first voltage that is a number."""
    bench.take(0, math.nan)
    bench.take(1, -40.0)
    x = np.zeros_like(bench.cells[0].x)
    settle(bench.m.banks[0], bench.m.table, x, -40.0)
    np.testing.assert_array_equal(bench.cells[0].x, x)


def test_a_repeat_is_the_same_answer_and_no_step(bench):
    """A seq already answered gets the identical answer with the flag.

    That holds whatever the message now says; nothing moves but the count of repeats.
    """
    bench.order(Order.ARM)
    v = noise(70)
    kept = [bench.take(seq, v[seq]) for seq in range(70)]
    x = bench.cells[0].x.copy()
    for seq in (69, 68, 10, 69, 69):
        tick = bench.take(seq, math.nan, t_us=0, in_force=0, lag_us=1e9)
        assert tick == (WAS_REPEAT, seq, kept[seq].flags | REPEAT, kept[seq].i_pa)
    np.testing.assert_array_equal(bench.cells[0].x, x)
    loop = bench.loop
    assert (loop.repeats, loop.answered, loop.seq, loop.late, loop.trips) == (5, 70, 69, 0, 0)
    assert bench.take(3, -60.0)[2:] == (REPEAT, [0.0]), "too old to be remembered: 0 pA"
    assert bench.take(70, -60.0).flags == LIVE


def test_a_repeat_from_before_arming_again_is_zero(bench):
    """A current that disarming has ended does not come back with the next arming either."""
    bench.order(Order.ARM)
    bench.take(0, -65.0)
    assert bench.take(1, -20.0).i_pa[0] != 0.0
    bench.order(Order.DISARM)
    bench.order(Order.ARM)
    assert bench.take(1, -20.0)[2:] == (REPEAT, [0.0])
    live = bench.take(2, -20.0)
    assert live.flags == LIVE
    assert bench.take(2, -20.0)[2:] == (LIVE | REPEAT, live.i_pa)


@pytest.mark.parametrize("after", ["disarm", "trip", "stop", "reset"])
def test_a_repeat_of_a_live_answer_is_zero_once_not_armed(bench, after):
    """A resent sample never brings back a current that disarming or a trip has ended."""
    bench.order(Order.ARM)
    bench.take(0, -65.0)
    assert bench.take(1, -20.0).i_pa[0] != 0.0
    if after in ("trip", "reset"):
        bench.take(2, math.nan)
    if after == "reset":
        bench.order(Order.RESET)
    if after in ("disarm", "stop"):
        bench.order(Order.DISARM if after == "disarm" else Order.STOP)
    tick = bench.take(1, -20.0)
    assert tick.i_pa == [0.0]
    assert tick.flags == REPEAT | (TRIPPED if after == "trip" else 0)


@pytest.mark.parametrize("state", list(State))
def test_stopping_cannot_be_undone(bench, state):
    """Once ordered to stop the loop never goes live again, whatever orders follow.

    A trip stays a trip until it is reset.
    """
    if state != State.IDLE:
        bench.order(Order.ARM)
    bench.take(0, -60.0)
    if state == State.TRIPPED:
        bench.take(1, math.nan)
    bench.order(Order.STOP)
    now = int(bench.loop.seq)
    assert bench.take(now + 1, -20.0)[2:] == (TRIPPED if state == State.TRIPPED else 0, [0.0])
    bench.order(Order.RESET)
    assert bench.order(Order.ARM) == Outcome.STOPPING
    assert bench.take(now + 2, -20.0)[2:] == (0, [0.0])
    assert bench.loop.state == State.IDLE


def test_a_second_order_to_stop_does_not_put_the_end_off(bench):
    """The time to stop counts from the first order."""
    order = bench.m.order[0]
    order.kind = Order.STOP
    obey(bench.m, 1000)
    obey(bench.m, 5000)
    assert bench.loop.stopped_nsec == 1000


def rig(apply: str, **limits: Any) -> Bench:
    """A bench of a leak, for rigs that apply answers in one of the two ways."""
    bench = Bench(1, loop={"apply": apply}, **({"limits": limits} if limits else {}))
    bench.give_model(0, 0, shipped("leak"))
    return bench


def run(bench: Bench, ticks: range, known) -> list[Tick]:
    """Take samples whose ``in_force, lag_us`` are ``known(seq)``."""
    return [bench.take(n, -60.0, in_force=known(n)[0], lag_us=known(n)[1]) for n in ticks]


@pytest.mark.parametrize(
    ("apply", "behind", "lag"),
    [
        ("next-tick", 2, TICK_US),
        ("next-tick", 2, None),
        ("next-tick", 1, 5.0),
        ("on-arrival", 1, 0.0),
        ("on-arrival", 1, 19.9),
        ("on-arrival", 1, TICK_US),
        ("on-arrival", 1, None),
    ],
)
def test_a_rig_in_time_is_never_late(apply, behind, lag):
    """The normal report of each way to apply answers shows nothing late."""
    bench = rig(apply)
    ticks = run(bench, range(500), lambda n: (n - behind, lag) if n >= behind else (None, None))
    assert bench.loop.late == 0
    assert not any(t.flags & LATE for t in ticks)


@pytest.mark.parametrize("apply", ["next-tick", "on-arrival"])
def test_nil_says_nothing(apply):
    """A rig that reports neither in_force nor lag is never counted late, nor trips."""
    bench = rig(apply, late_run=1)
    bench.order(Order.ARM)
    ticks = run(bench, range(300), lambda _: (None, None))
    ticks += run(bench, range(300, 500), lambda _: (None, 1e6))
    assert bench.loop.late == 0
    assert all(t.flags & ~CLIPPED == LIVE for t in ticks)


@pytest.mark.parametrize(("apply", "due"), [("next-tick", 2), ("on-arrival", 1)])
def test_an_answer_stuck_in_force(apply, due):
    """While one answer stays in force, each later one that was due counts late, once."""
    bench = rig(apply)
    run(bench, range(20), lambda n: (n - due, None) if n >= due else (None, None))
    stuck = run(bench, range(20, 30), lambda _: (20 - due, None))
    # At sample 20 + k the answers up to 20 + k - due were due; 20 - due is in force.
    assert [bool(t.flags & LATE) for t in stuck] == [k > 0 for k in range(10)]
    assert bench.loop.late == 9
    run(bench, range(30, 40), lambda n: (n - due, None))
    assert bench.loop.late == 9


@pytest.mark.parametrize(("apply", "behind"), [("next-tick", 2), ("on-arrival", 1)])
def test_a_lag_over_budget_counts_once_an_answer(apply, behind):
    """An answer reported over the budget counts once, however long it stays in force."""
    bench = rig(apply)
    run(bench, range(10), lambda n: (n - behind, 1.0) if n >= behind else (None, None))
    over = run(bench, range(10, 20), lambda n: (n - behind, 20.5))
    assert all(t.flags & LATE for t in over)
    assert bench.loop.late == 10
    in_time = run(bench, range(20, 30), lambda n: (n - behind, 20.0))
    assert not any(t.flags & LATE for t in in_time)
    # The same late answer reported again and again.
    bench = rig("on-arrival")
    run(bench, range(10), lambda n: (n - 1, 1.0) if n else (None, None))
    first = bench.take(10, -60.0, in_force=9, lag_us=30.0)
    assert first.flags & LATE
    before = int(bench.loop.late)
    bench.take(11, -60.0, in_force=10, lag_us=1.0)
    bench.take(12, -60.0, in_force=9, lag_us=30.0)
    assert bench.loop.late - before == 1, "only answer 11, overdue at sample 12"


def test_one_answer_late_by_both_signs_counts_once():
    """An answer overdue at its sample and later reported with its lag is one late answer."""
    bench = rig("on-arrival")
    run(bench, range(10), lambda n: (n - 1, 5.0) if n else (None, None))
    assert bench.take(10, -60.0, in_force=8, lag_us=5.0).flags & LATE  # 9 is overdue
    bench.take(11, -60.0, in_force=10, lag_us=5.0)
    assert bench.loop.late == 1
    bench.take(12, -60.0, in_force=10, lag_us=5.0)  # 11 is overdue
    bench.take(13, -60.0, in_force=11, lag_us=25.0)  # and came late; 12 is overdue
    assert bench.loop.late == 3
    bench.take(14, -60.0, in_force=13, lag_us=5.0)
    assert bench.loop.late == 3


def test_an_answer_never_given_hides_no_lateness():
    """An in_force beyond the newest answer, as from a rig's fault, says nothing.

    Lateness reported after it still counts.
    """
    for behind, lag in ((2**62, 1e6), (1, 1e6)):
        bench = rig("on-arrival")
        bench.take(0, -60.0, in_force=2**62, lag_us=1e6)
        run(bench, range(1, 5), lambda n: (n - 1, 1.0))
        bench.take(5, -60.0, in_force=4 + behind, lag_us=lag)
        assert bench.loop.late == 0
        run(bench, range(6, 16), lambda n: (n - 1, 30.0))
        assert bench.loop.late == 10


@pytest.mark.parametrize(("apply", "due"), [("next-tick", 2), ("on-arrival", 1)])
def test_answers_that_became_due_in_a_gap(apply, due):
    """A gap hides no lateness.

    Answers given before it that were due and are not in force after it count, each once; those
    in force by then, and missed ticks, do not.
    """
    bench = rig(apply)
    run(bench, range(100), lambda n: (n - due, None) if n >= due else (None, None))
    after = bench.take(110, -60.0, in_force=99 - due)
    assert after.flags & (LATE | GAP) == LATE | GAP
    assert bench.loop.late == due
    assert not bench.take(111, -60.0, in_force=110 if due == 1 else 99).flags & LATE
    assert not bench.take(150, -60.0, in_force=111).flags & LATE
    assert bench.loop.late == due


def test_budget_over_one_tick():
    """With a budget of three ticks an answer is overdue only when three have passed."""
    bench = Bench(1, loop={"apply": "on-arrival", "budget_us": 60.0})
    bench.give_model(0, 0, shipped("leak"))
    run(bench, range(50), lambda n: (n - 3, 60.0) if n >= 3 else (None, None))
    assert bench.loop.late == 0
    run(bench, range(50, 60), lambda n: (n - 4, 60.0))
    assert bench.loop.late == 10


def test_a_run_of_late_answers_trips():
    """Exactly limits.late_run late ticks on end trip; one in time starts the count again."""
    bench = rig("on-arrival", late_run=5)
    bench.order(Order.ARM)
    run(bench, range(10), lambda n: (n - 1, 1.0) if n else (None, None))
    run(bench, range(10, 14), lambda n: (n - 1, 30.0))
    run(bench, range(14, 15), lambda n: (n - 1, 1.0))
    ticks = run(bench, range(15, 20), lambda n: (n - 1, 30.0))
    assert [t.flags & (LIVE | TRIPPED) for t in ticks] == [LIVE] * 4 + [TRIPPED]
    assert bench.loop.fault == Fault.RUN_OF_LATE_ANSWERS
    bench.order(Order.RESET)
    bench.order(Order.ARM)
    assert bench.take(20, -60.0, in_force=19, lag_us=1.0).flags & LIVE


def clocked(bench: Bench, ticks: range, tick_us: float, start_us: float = 0.0) -> list[Tick]:
    """Take samples whose clock advances by ``tick_us``."""
    return [bench.take(n, -60.0, t_us=start_us + tick_us * (n - ticks[0])) for n in ticks]


@pytest.mark.parametrize("tick_us", [20.5, 19.5, 40.0, 0.0, 20.21])
def test_a_wrong_tick_trips_or_refuses_arming(tick_us):
    """Over 1 % off over 1,000 ticks trips an armed loop.

    An idle one refuses to arm until the tick is right again.
    """
    bench = rig("on-arrival")
    bench.order(Order.ARM)
    ticks = clocked(bench, range(1001), tick_us)
    assert all(t.flags & LIVE for t in ticks[:1000])
    assert ticks[1000][2:] == (TRIPPED, [0.0])
    assert bench.loop.fault == Fault.WRONG_TICK
    assert bench.loop.tick_us == pytest.approx(tick_us)
    bench.order(Order.RESET)
    assert bench.order(Order.ARM) == Outcome.WRONG_TICK
    assert bench.loop.state == State.IDLE
    clocked(bench, range(1001, 3003), TICK_US, 1001 * tick_us)
    assert bench.order(Order.ARM) == Outcome.DONE


@pytest.mark.parametrize("tick_us", [20.1, 19.9, 20.19])
def test_a_tick_within_one_percent_is_right(tick_us):
    """Half a percent off is a rig's crystal, not a wrong interval."""
    bench = rig("on-arrival")
    bench.order(Order.ARM)
    assert all(t.flags & LIVE for t in clocked(bench, range(3500), tick_us))


def test_a_wrong_tick_shows_through_gaps():
    """A rig that loses samples is judged by its sequence numbers, not by how many came."""
    bench = rig("on-arrival")
    bench.order(Order.ARM)
    for n in range(0, 4000, 7):
        assert bench.take(n, -60.0, t_us=n * TICK_US).flags & LIVE
    assert bench.loop.tick_us == pytest.approx(TICK_US)


@pytest.mark.parametrize(
    "clock",
    [
        lambda n: (2**32 - 30_000 + 20 * n) % 2**32,
        lambda n: 20 * n + (5_000_000 if n > 1500 else 0),
        lambda n: 20 * n if n < 1500 else 20 * (n - 1500),
    ],
    ids=["32-bit counter wraps", "leaps ahead", "set back"],
)
def test_a_clock_that_jumps_does_not_trip(clock):
    """A wrap, a leap and a clock set back are counted as jumps and say nothing of the tick."""
    bench = rig("on-arrival")
    bench.order(Order.ARM)
    ticks = [bench.take(n, -60.0, t_us=clock(n)) for n in range(4000)]
    assert all(t.flags & LIVE for t in ticks)
    assert bench.loop.clock_jumps == 1
    assert bench.loop.tick_us == pytest.approx(TICK_US)


def test_a_new_session_starts_afresh(bench):
    """Another rig's sequence, clock and gates owe nothing to the last one's."""
    fresh = Bench(1, {"current_pa": 200_000.0})
    fresh.give_model(0, 0, SQUID)
    bench.order(Order.ARM)
    for seq in range(100):
        bench.take(seq, -20.0)
    begin_session(bench.loop, bench.cells, bench.m.past)
    fresh.order(Order.ARM)
    for seq, v_mv in enumerate(noise(50)):
        assert bench.take(seq, v_mv, in_force=99, lag_us=1e6) == fresh.take(seq, v_mv)
    assert bench.loop.late == 0
    assert bench.loop.clock_jumps == 0


def test_a_swap_takes_effect_between_two_samples(bench):
    """After a swap the gates stand at the new model's steady state for the newest voltage.

    They are carried on from there; the old model's bank is left as it is.
    """
    bench.give_model(0, 1, shipped("na-squid"))
    bench.order(Order.ARM)
    for seq, v_mv in enumerate(noise(20)):
        bench.take(seq, v_mv)
    old = bench.m.banks[0].tobytes()
    bench.order(Order.SWAP, 0, 1)
    x = np.zeros_like(bench.cells[0].x)
    settle(bench.m.banks[1], bench.m.table, x, bench.cells[0].v_mv)
    advance(bench.m.banks[1], bench.m.table, x, 0.5 * (bench.cells[0].v_mv - 30.0), TICK_US * 1e-3)
    tick = bench.take(20, -30.0)
    assert tick.i_pa[0] == pytest.approx(current(bench.m.banks[1], x, -30.0), rel=1e-12)
    assert bench.m.banks[0].tobytes() == old


def test_refusing_another_rig_touches_nothing(bench):
    """A refused sample is answered [seq, 64, 0, 0.0] and changes only the count."""
    bench.order(Order.ARM)
    bench.take(0, -60.0)
    before = bench.cells.tobytes(), bench.m.past.tobytes(), int(bench.loop.seq)
    message = np.zeros(MAX_MESSAGE, np.uint8)
    for sent, found in (
        (pack_sample(7, 0, None, None, [-60.0]), ANSWERED),
        (b"\xc1", WAS_MALFORMED),
    ):
        message[: len(sent)] = np.frombuffer(sent, np.uint8)
        assert refuse(bench.loop, message, len(sent), bench.sample, bench.answer) == found
        if found == ANSWERED:
            answer = bench.answer
            assert (answer.seq, answer["flags"], answer.i_pa[0]) == (7, REFUSED, 0.0)
    assert refuse(bench.loop, message, 600, bench.sample, bench.answer) == WAS_MALFORMED
    assert (bench.loop.refused, bench.loop.malformed) == (1, 2)
    assert before == (bench.cells.tobytes(), bench.m.past.tobytes(), int(bench.loop.seq))


def test_malformed_and_oversized_messages_change_nothing(bench):
    """They are counted; neither the sequence nor a gate nor the state moves."""
    bench.order(Order.ARM)
    bench.take(0, -60.0)
    before = bench.cells.tobytes(), int(bench.loop.seq), int(bench.loop.state)
    assert bench.put(msgpack.packb([1, 20, None, None, "x"])).kind == WAS_MALFORMED
    for size in (513, 2**31, 2**62):
        assert not decode(bench.loop, bench.message, size, bench.sample)
    assert bench.loop.malformed == 4
    assert before == (bench.cells.tobytes(), int(bench.loop.seq), int(bench.loop.state))
    assert bench.take(1, -60.0).flags == LIVE


def test_the_highest_sequence_number(bench):
    """2**63 - 1 is the last seq there is; nothing overflows on the way to it or at it."""
    bench.order(Order.ARM)
    bench.take(0, -65.0)
    tick = bench.take(2**63 - 1, -60.0, in_force=0, lag_us=1.0)
    assert tick.flags & (LIVE | GAP) == LIVE | GAP
    assert bench.loop.missed == 2**63 - 2
    assert bench.take(2**63 - 1, -60.0).flags & REPEAT
    assert bench.loop.seq == 2**63 - 1
