"""Where prepared models stand: never on top of one another, never in the loop's way."""

from __future__ import annotations

from itertools import pairwise
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, initialize, invariant, rule

from gatestep.errors import ControlError
from gatestep.kernel import BANK, records
from gatestep.library import load_model
from gatestep.shelf import Shelf, make_room
from gatestep.tables import build_tables

MODEL = load_model("leak")
CHOICE = SimpleNamespace()  # how the cell anticipates: kept beside the model, not looked at


def tables(size: int, mark: float = 1.0):
    """Tables of a size, filled with a number that is theirs alone."""
    bank = np.zeros(1, BANK)[0]
    bank["rows"], bank["gmax_ns"][0] = 2, mark
    return SimpleNamespace(
        table=np.full(size, mark), bank=bank, spec=SimpleNamespace(title="made up")
    )


def shelf(cells: int = 1, room: int = 100) -> Shelf:
    return Shelf(records(BANK, 2 * cells), np.zeros(room))


def install(made: Shelf, cell: int, size: int, mark: float = 1.0):
    """Prepare a model and put it in force."""
    ready = made.prepare(cell, MODEL, tables(size, mark), CHOICE)
    made.put_in_force(cell)
    return ready


def test_a_model_goes_into_the_bank_that_is_not_in_force():
    """Each of a cell's two banks in turn; that of the other cell is never touched."""
    made = shelf(cells=2)
    banks = [install(made, 1, 5).bank for _ in range(4)]
    assert banks == [2, 3, 2, 3]
    assert install(made, 0, 5).bank == 0


def test_preparing_again_takes_the_same_bank():
    """A second load before the swap replaces the first, and gives back its room."""
    made = shelf(room=30)
    in_force = install(made, 0, 10)
    first = made.prepare(0, MODEL, tables(20), CHOICE)
    second = made.prepare(0, MODEL, tables(20), CHOICE)
    assert first.bank == second.bank != in_force.bank
    assert second.base == first.base
    assert made.prepared == [second]


def test_first_fit():
    """A model takes the first stretch that is large enough, between others too."""
    made = shelf(cells=4, room=100)
    for cell, size in enumerate((10, 20, 30)):
        install(made, cell, size)
    assert [r.base for r in made.in_force if r] == [0, 10, 30]
    moved = install(made, 1, 25)
    assert moved.base == 60
    assert install(made, 3, 15).base == 10
    assert made.prepare(0, MODEL, tables(5), CHOICE).base == 25
    assert made.prepare(3, MODEL, tables(15), CHOICE).base == 85


def test_what_finds_no_room_is_refused():
    """The error names the model and says what to do; nothing in force is touched."""
    made = shelf(cells=2, room=100)
    install(made, 0, 60, mark=3.0)
    install(made, 1, 30)
    with pytest.raises(ControlError, match=r"leak need 11 values.*fewer or smaller"):
        made.prepare(0, MODEL, tables(11), CHOICE)
    assert made.prepared == [None, None]
    assert (made._table[:60] == 3.0).all()
    assert made.prepare(0, MODEL, tables(10), CHOICE).base == 90


def test_what_was_prepared_is_told_in_the_bank():
    """The bank's record holds the model and where its table begins."""
    made = shelf(room=100)
    install(made, 0, 10)
    ready = made.prepare(0, MODEL, tables(20, mark=7.0), CHOICE)
    bank = made._banks[ready.bank]
    assert (bank["start"], bank["rows"], bank["gmax_ns"][0]) == (10, 2, 7.0)
    assert (made._table[10:30] == 7.0).all()
    assert not made._table[30:].any()


def test_the_common_room_holds_the_largest_rig():
    """Two banks for each of eight cells, all with the squid axon's tables, find room."""
    room = make_room()
    size = build_tables(load_model("squid-axon").spec).table.size
    assert room.size >= 16 * size
    assert room.dtype == np.float64


class AnyLoadsAndSwaps(RuleBasedStateMachine):
    """Invariant: no two models that are in force or prepared share a value of the table.

    Whatever is loaded, refused and swapped in any order, what is in force keeps every
    number of its bank and its table.
    """

    @initialize(cells=st.integers(1, 4), room=st.integers(10, 200))
    def begin(self, cells, room):
        self.made = shelf(cells, room)
        self.cells = cells
        self.marks = {}
        self.count = 0

    @rule(data=st.data(), size=st.integers(1, 80))
    def load(self, data, size):
        cell = data.draw(st.integers(0, self.cells - 1))
        self.count += 1
        try:
            ready = self.made.prepare(cell, MODEL, tables(size, float(self.count)), CHOICE)
        except ControlError:
            self.marks.pop((cell, "prepared"), None)
            return
        self.marks[cell, "prepared"] = (ready, float(self.count))

    @rule(data=st.data())
    def swap(self, data):
        cell = data.draw(st.integers(0, self.cells - 1))
        if self.made.prepared[cell] is not None:
            self.made.put_in_force(cell)
            self.marks[cell, "in force"] = self.marks.pop((cell, "prepared"))

    @invariant()
    def each_stands_by_itself(self):
        if not hasattr(self, "made"):
            return
        spans = sorted((r.base, r.end) for r, _ in self.marks.values())
        assert all(end <= base for (_, end), (base, _) in pairwise(spans))
        assert not spans or spans[-1][1] <= self.made._table.size
        banks = [r.bank for r, _ in self.marks.values()]
        assert len(set(banks)) == len(banks)
        for (cell, _), (ready, mark) in self.marks.items():
            assert ready.bank // 2 == cell
            assert (self.made._table[ready.base : ready.end] == mark).all()
            assert self.made._banks[ready.bank]["gmax_ns"][0] == mark
            assert self.made._banks[ready.bank]["start"] == ready.base


TestAnyLoadsAndSwaps = AnyLoadsAndSwaps.TestCase
TestAnyLoadsAndSwaps.settings = settings(max_examples=60, stateful_step_count=30)
