"""A tick under anything at all: no operation brings an answer outside the contract."""

from __future__ import annotations

import math

import numpy as np
from hypothesis import settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, invariant, precondition, rule
from tickbench import TICK_US, Bench, Tick, random_model

from gatestep.orders import Order, Outcome
from gatestep.states import State
from gatestep.tick import (
    ANSWERED,
    WAS_MALFORMED,
    WAS_REPEAT,
)
from gatestep.wire import (
    CLIPPED,
    GAP,
    LIVE,
    REFUSED,
    REPEAT,
    TRIPPED,
)

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
