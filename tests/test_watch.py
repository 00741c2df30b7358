"""What the loop's log is turned into: counters, percentiles, events in words."""

from __future__ import annotations

import json

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from gatestep.loop import BLOCK, ENTRY, Entry
from gatestep.orders import Order
from gatestep.states import FAULT_TEXTS, Fault, State
from gatestep.tick import LOOP
from gatestep.watch import Durations, Watch

COUNTERS = [name for name, *_ in LOOP.descr if name in set(Watch(["a"]).counters())]
BIN = 2.0 ** (1 / 16)


def block(loop=None, entries=()):
    """A block as the loop sends it: its own record, then entries."""
    record = np.zeros(1, LOOP)
    record["fault_cell"] = -1
    for name, value in (loop or {}).items():
        record[name] = value
    rows = np.zeros(len(entries), ENTRY)
    rows["cell"] = -1
    for row, entry in zip(rows, entries, strict=True):
        for name, value in entry.items():
            row[name] = value
    return record.tobytes() + rows.tobytes()


def samples(*service_nsec, seq=0):
    return [
        {"kind": Entry.SAMPLE, "seq": seq + k, "service_nsec": n}
        for k, n in enumerate(service_nsec)
    ]


@given(st.lists(st.integers(1, 10**10), min_size=1, max_size=300))
def test_percentiles_are_within_a_bin_of_numpys(nsec):
    """Each percentile is the value at its rank (numpy, inverted_cdf) or up to a bin above it."""
    durations = Durations()
    for part in np.array_split(np.array(nsec), 3):
        durations.add(part)
    found = durations.percentiles()
    for p in (50.0, 90.0, 99.0, 99.9):
        exact = np.percentile(nsec, p, method="inverted_cdf")
        assert exact * 0.999 - 1 <= found[f"p{p:g}"] <= exact * BIN + 1
    assert found["max"] == max(nsec)


def test_percentiles_of_nothing_and_of_zero():
    """Without samples there are none; durations of 0 and below count as the shortest."""
    durations = Durations()
    assert durations.percentiles() == {}
    durations.add(np.array([], np.int64))
    assert durations.percentiles() == {}
    durations.add(np.array([0, 0, 0]))
    found = durations.percentiles()
    assert found["p50"] <= 1
    assert found["max"] == 0


def test_percentiles_never_forget():
    """One slow answer among many stays the maximum, however many follow."""
    durations = Durations()
    durations.add(np.array([5_000_000]))
    for _ in range(100):
        durations.add(np.full(BLOCK, 10_000))
    found = durations.percentiles()
    assert found["max"] == 5_000_000
    assert found["p50"] == pytest.approx(10_000, rel=BIN - 1)
    assert found["p99.9"] == pytest.approx(10_000, rel=BIN - 1)


def test_counters_are_the_loops_own():
    """Each counter of the summary is the loop's, as of the newest block."""
    asked = {"answered", "late", "missed", "repeats", "malformed", "clipped", "trips"}
    assert asked <= set(COUNTERS)
    watch = Watch(["a"])
    assert watch.counters() == dict.fromkeys(COUNTERS, 0)
    for turn in (1, 2):
        values = {name: 100 * turn + k for k, name in enumerate(COUNTERS)}
        watch.take(block(values))
        assert watch.counters() == values
        assert {k: watch.summary()[k] for k in COUNTERS} == values


@pytest.mark.parametrize("state", list(State))
def test_the_state_follows_the_newest_block(state):
    """State and hold are those of the newest block."""
    watch = Watch(["a"])
    assert watch.summary()["state"] == "idle"
    watch.take(block({"state": state, "held": 1}))
    summary = watch.summary()
    assert (watch.state, summary["state"]) == (state, state.name.lower())
    assert summary["rig"] == "connected"
    watch.take(block({"state": state}))
    assert watch.summary()["rig"] == "none"


@pytest.mark.parametrize("fault", [f for f in Fault if f != Fault.NONE])
def test_a_trip_in_words(fault):
    """A trip names its cause and, where it has one, its cell, in event and status alike."""
    watch = Watch(["left", "right"])
    for cell, name in ((-1, ""), (1, "cell right: ")):
        loop = {"state": State.TRIPPED, "fault": fault, "fault_cell": cell}
        trip = {"kind": Entry.TRIP, "seq": 41, "code": fault, "cell": cell}
        (event,), _ = watch.take(block(loop, [trip]))
        assert (event.kind, event.seq) == ("trip", 41)
        assert event.text == f"tripped, 0 pA: {name}{FAULT_TEXTS[fault]}"
        assert watch.summary()["fault"] == name + FAULT_TEXTS[fault]


def test_no_fault_is_none():
    """Without a trip the status has no fault."""
    watch = Watch(["a"])
    watch.take(block())
    assert watch.summary()["fault"] is None


@pytest.mark.parametrize("order", list(Order))
def test_an_order_in_words(order):
    """An order's event carries its number and outcome, so that its caller is found."""
    entry = {"kind": Entry.ORDER, "seq": 9, "code": order, "number": 5, "outcome": 2, "cell": 0}
    (event,), found = Watch(["a"]).take(block(None, [entry]))
    assert (event.kind, event.number, event.outcome, event.seq) == ("order", 5, 2, 9)
    assert event.text == order.name.lower()
    assert len(found) == 0


def test_holds_and_jumps_in_words():
    """Each says what happened, and before any sample there is no seq."""
    watch = Watch(["a"])
    events, _ = watch.take(
        block(
            None,
            [
                {"kind": Entry.HOLD, "seq": -1, "code": 3},
                {"kind": Entry.RELEASE, "seq": 7, "code": 3},
                {"kind": Entry.CLOCK_JUMP, "seq": 8},
            ],
        )
    )
    assert [e.seq for e in events] == [None, 7, 8]
    for event, word in zip(events, ("took hold", "let go", "clock jumped"), strict=True):
        assert word in event.text
    assert list(watch.events) == events


def test_samples_and_events_are_told_apart():
    """A block's samples come back as they were, its events in their order."""
    entries = [*samples(10, 20), {"kind": Entry.TRIP, "seq": 1, "code": 1}, *samples(30, seq=2)]
    events, found = Watch(["a"]).take(block(None, entries))
    assert [e.kind for e in events] == ["trip"]
    assert found["seq"].tolist() == [0, 1, 2]
    assert found["service_nsec"].tolist() == [10, 20, 30]


def test_a_cells_newest_values():
    """Voltage and current are the newest sample's; NaN is told as none; nobody there, nothing."""
    watch = Watch(["a", "b"])
    assert watch.cell(0) == {"v_mv": None, "i_pa": 0.0}
    entry = {"kind": Entry.SAMPLE, "v_mv": [-65.0, np.nan] + [0] * 6, "i_pa": [5.0, -3.0] + [0] * 6}
    watch.take(block({"state": State.ARMED, "held": 1}, [entry]))
    assert watch.cell(0) == {"v_mv": -65.0, "i_pa": 5.0}
    assert watch.cell(1) == {"v_mv": None, "i_pa": -3.0}
    watch.take(block({"state": State.TRIPPED, "held": 1}))
    assert watch.cell(0) == {"v_mv": -65.0, "i_pa": 0.0}
    watch.take(block({"state": State.TRIPPED}))
    assert watch.cell(0) == {"v_mv": None, "i_pa": 0.0}


@pytest.mark.parametrize(
    ("loop", "told"),
    [
        ({}, None),
        ({"tick_us": 19.5}, 19.5),
        ({"tick_us": 0.0, "tick_wrong": 1}, 0.0),
    ],
)
def test_the_rigs_tick(loop, told):
    """It is none until it is known; a clock that stands still has a tick of 0."""
    watch = Watch(["a"])
    watch.take(block(loop))
    assert watch.summary()["tick_us"] == told


def test_the_summary_is_plain():
    """It can be written as JSON, whatever the loop's numbers are."""
    watch = Watch(["a"])
    watch.take(block({"missed": 2**63 - 1, "state": 2, "fault": 1}, samples(1, 2, 3)))
    assert json.loads(json.dumps(watch.summary(), allow_nan=False))["missed"] == 2**63 - 1


def test_old_events_are_let_go():
    """The memory of events is bounded: a rig that trips for days costs no more."""
    watch = Watch(["a"])
    for _ in range(30):
        watch.take(block(None, [{"kind": Entry.CLOCK_JUMP}] * BLOCK))
    assert len(watch.events) == 1000
