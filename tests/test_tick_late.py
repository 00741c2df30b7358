"""Lateness and the rig's clock, as its samples tell them."""

from __future__ import annotations

from typing import Any

import pytest
from tickbench import TICK_US, Bench, Tick, shipped

from gatestep.orders import Order, Outcome
from gatestep.states import Fault, State
from gatestep.wire import (
    CLIPPED,
    GAP,
    LATE,
    LIVE,
    TRIPPED,
)


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
