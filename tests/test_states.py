"""The transition table: whole, safe, drawn as it is, and obeyed by compiled code."""

from __future__ import annotations

import itertools
import re

import numpy as np
import pytest

from gatestep.kernel import records
from gatestep.states import FAULT_TEXTS, TRANSITIONS, Event, Fault, State, diagram, next_state
from gatestep.tick import LOOP, trip

PAIRS = list(itertools.product(State, Event))


def test_table_is_total():
    """Every event in every state leads somewhere, and the table holds nothing else."""
    assert set(TRANSITIONS) == set(PAIRS)
    assert all(isinstance(after, State) for after in TRANSITIONS.values())


def test_only_reset_leaves_tripped():
    """A trip is latched: of all events only a reset ends it, and it leads to idle."""
    leaving = {e: TRANSITIONS[State.TRIPPED, e] for e in Event}
    assert {e: s for e, s in leaving.items() if s != State.TRIPPED} == {Event.RESET: State.IDLE}


def test_only_arm_from_idle_arms():
    """Nothing but the order to arm, in idle, makes current flow."""
    arming = {
        pair for pair, s in TRANSITIONS.items() if s == State.ARMED and pair[0] != State.ARMED
    }
    assert arming == {(State.IDLE, Event.ARM)}


def test_faults_and_disarming_never_leave_the_model_in_charge():
    """A fault while armed trips, disarming leads to idle, and neither ever leads to armed."""
    assert TRANSITIONS[State.ARMED, Event.FAULT] == State.TRIPPED
    assert TRANSITIONS[State.ARMED, Event.DISARM] == State.IDLE
    for state in State:
        assert TRANSITIONS[state, Event.FAULT] != State.ARMED
        assert TRANSITIONS[state, Event.DISARM] != State.ARMED


@pytest.mark.parametrize(("state", "event"), PAIRS)
def test_compiled_code_obeys_the_table(state, event):
    """The compiled look-up equals the table in every entry."""
    assert next_state(np.int64(state), np.int64(event)) == TRANSITIONS[state, event]


def test_diagram_draws_the_table():
    """Each change of state is one arrow of the drawing, with its events; nothing else is."""
    drawn = set()
    for line in diagram().splitlines():
        before, events, after = re.fullmatch(r" *(\w+) -- ([\w ]+) -+> (\w+)", line).groups()
        for event in events.split(" or "):
            drawn.add((State[before.upper()], Event[event.upper()], State[after.upper()]))
    assert drawn == {(s, e, after) for (s, e), after in TRANSITIONS.items() if after != s}


def test_every_fault_has_words():
    """Each fault can be told to a person, and no two in the same words."""
    assert set(FAULT_TEXTS) == set(Fault)
    texts = [FAULT_TEXTS[f] for f in Fault if f != Fault.NONE]
    assert all(texts)
    assert len(set(texts)) == len(texts)


def test_a_trip_keeps_its_first_cause():
    """A later fault neither hides the first nor counts as another trip; idle never trips."""
    loop = records(LOOP)[0]
    trip(loop, np.int64(Fault.SILENCE), np.int64(-1))
    assert (loop.state, loop.trips, loop.fault) == (State.IDLE, 0, Fault.NONE)
    loop.state = State.ARMED
    trip(loop, np.int64(Fault.VOLTAGE_OUT_OF_WINDOW), np.int64(3))
    trip(loop, np.int64(Fault.SILENCE), np.int64(-1))
    assert (loop.state, loop.trips) == (State.TRIPPED, 1)
    assert (loop.fault, loop.fault_cell) == (Fault.VOLTAGE_OUT_OF_WINDOW, 3)
