"""What one sample does: safety under any operations, then each promise by itself.

No sockets: messages go to ``decode``, ``take_sample`` and ``settle_answer`` and orders to the
function that the hot loop carries them out with, on memory made as the server
makes it.
"""

from __future__ import annotations

import math
from typing import Any

import msgpack
import numpy as np
import pytest
from tickbench import SQUID, TICK_US, Bench, obey, shipped

from gatestep.kernel import advance, current, settle
from gatestep.orders import Order, Outcome
from gatestep.states import Fault, State
from gatestep.tick import (
    ANSWERED,
    WAS_MALFORMED,
    WAS_REPEAT,
    begin_session,
    decode,
    refuse,
)
from gatestep.wire import (
    CLIPPED,
    GAP,
    LIVE,
    MAX_MESSAGE,
    REFUSED,
    REPEAT,
    TRIPPED,
    pack_sample,
)


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
