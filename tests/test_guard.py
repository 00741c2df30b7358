"""The guard: whatever goes in, what comes out is finite and within the cell's limits."""

from __future__ import annotations

import math

import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from gatestep.guard import limited, voltage_fault
from gatestep.specs import MAX_CURRENT_PA
from gatestep.states import Fault

ANYTHING = st.floats()
LIMIT = st.floats(1e-6, MAX_CURRENT_PA)
SLEW = st.floats(1e-9, 1e15)
SHARE = st.floats(-1.0, 1.0)


@given(ANYTHING, ANYTHING, LIMIT, ANYTHING)
def test_finite_and_within_the_limit_whatever_comes(wanted, last, limit, slew):
    """Any current asked for, any last one, any slew, sane or not: finite, within ±limit.

    The limit itself is the one thing that must be as the rig file's check leaves it.
    """
    last = last if math.isfinite(last) else 0.0
    slew = slew if slew > 0 else 1.0
    current, _ = limited(wanted, last, limit, slew)
    assert math.isfinite(current)
    assert -limit <= current <= limit


@given(ANYTHING, SHARE, LIMIT, SLEW)
@example(math.inf, 1.0, 1000.0, 1.0)
@example(-math.inf, -1.0, 1000.0, 1.0)
@example(1e308, -1.0, 1e6, 1e15)
def test_within_the_slew_of_the_last_current(wanted, share, limit, slew):
    """A finite current moves by no more than the slew from a last one within the limit."""
    last = share * limit
    current, _ = limited(wanted, last, limit, slew)
    if math.isfinite(wanted):
        assert last - slew <= current <= last + slew
    else:
        assert current == 0.0


@given(ANYTHING, SHARE, LIMIT, SLEW)
def test_what_is_allowed_passes_unchanged(wanted, share, limit, slew):
    """Clipped says exactly whether the current is another than was asked for.

    What is within both limits passes to the bit, and the rest stops at the nearest allowed
    value.
    """
    last = share * limit
    current, clipped = limited(wanted, last, limit, slew)
    assert clipped == (current != wanted)
    low, high = max(last - slew, -limit), min(last + slew, limit)
    if low <= wanted <= high:
        assert current == wanted
    elif math.isfinite(wanted):
        assert current == (low if wanted < low else high)


@pytest.mark.parametrize("wanted", [math.nan, math.inf, -math.inf])
def test_a_current_that_is_no_number_becomes_zero(wanted):
    """NaN and infinity give 0 pA, marked as clipped, from any last current."""
    for last in (-1000.0, 0.0, 1000.0):
        assert limited(wanted, last, 1000.0, 10.0) == (0.0, True)


@given(ANYTHING, st.floats(-200, 199), st.floats(1, 200))
@example(math.nan, -150.0, 100.0)
@example(100.0, -150.0, 100.0)
@example(-150.0, -150.0, 100.0)
def test_voltages_are_judged_against_their_window(v_mv, low, span):
    """Finite and within the window, ends included, is no fault; each other case is its own."""
    high = low + span
    fault = voltage_fault(v_mv, low, high)
    if not math.isfinite(v_mv):
        assert fault == Fault.NON_FINITE_VOLTAGE
    elif v_mv < low or v_mv > high:
        assert fault == Fault.VOLTAGE_OUT_OF_WINDOW
    else:
        assert fault == Fault.NONE
