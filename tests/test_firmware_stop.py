"""What takes a model on the device to 0 pA when orders, ticks or its start go wrong.

The device in C, one call at a time, as in test_firmware_device.py.
"""

from __future__ import annotations

import pytest
from firmware_model_build import library
from framed_host import ARM, BYE, DISARM, DONE, WELCOME, encode
from test_firmware_device import (
    ARGUMENT,
    ARMED,
    CLOCK,
    DISARMED,
    MODEL,
    OK,
    OUTPUT,
    TICK_US,
    Device,
    armed,
)

OVERTAKEN = 17  # GSB_ERROR_STOPPED
GAP_TICKS = 20


@pytest.fixture
def device():
    """A device that has ticked and is welcome."""
    made = Device()
    made.welcome()
    made.tick(-65.0)
    return made


def put_arm(device: Device) -> None:
    """Give the order to arm; the tick that carries it out is still to come."""
    device.token += 1
    device.poll(encode(ARM, [device.token]))


@pytest.mark.parametrize("what", ["stop", "line"])
def test_an_order_to_arm_does_not_outlive_what_came_after_it(device, what):
    """Stopped, or the line lost, between the order and its tick: it stays disarmed."""
    put_arm(device)
    if what == "stop":
        device.c.shim_stop()
    else:
        assert device.c.shim_connect() == OK
    for _ in range(3):
        assert device.tick(-40.0) == 0.0
        device.poll()
    assert device.state == DISARMED
    if what == "stop":
        assert [f.items for f in device.frames if f.kind == DONE] == [[device.token, OVERTAKEN]]
        assert device.order(ARM) == OK  # given after it, it holds


def test_a_stop_that_is_held_lets_nothing_arm(device):
    """Raised before each tick, as a button's level is: orders are refused until it is let go."""
    for _ in range(5):
        put_arm(device)
        device.c.shim_stop()
        assert device.tick(-40.0) == 0.0
        device.poll()
        assert device.frames[-1].items == [device.token, OVERTAKEN]
    assert device.state == DISARMED
    assert device.order(ARM) == OK
    assert device.state == ARMED


def test_a_disarm_is_carried_out_whatever_came_after_it():
    """Only arming can be overtaken."""
    made = armed()
    made.token += 1
    made.poll(encode(DISARM, [made.token]))
    made.c.shim_stop()
    made.tick(-40.0)
    made.poll()
    assert made.frames[-1].items == [made.token, OK]
    assert made.state == DISARMED


def test_the_poll_says_when_ticks_have_ended():
    """From the first poll beyond the longest gap, at each, until a tick runs; that one trips."""
    made = armed()
    made.poll()
    assert made.c.shim_polled() == OK
    made.c.shim_wait(made.now_us + (GAP_TICKS + 1) * TICK_US)
    made.poll()
    assert made.c.shim_polled() == OK
    for k in range(2, 5):
        made.c.shim_wait(made.now_us + (GAP_TICKS + k) * TICK_US)
        made.poll(encode(BYE) if k == 3 else b"")
        assert made.c.shim_polled() == -CLOCK
    made.poll(encode(WELCOME, [1, 0, 1]))
    made.tick(-65.0, after_us=(GAP_TICKS + 4) * TICK_US)
    made.poll()
    assert made.c.shim_polled() == OK
    assert made.c.shim_current_pa() == 0.0


def test_a_poll_that_comes_late_is_no_end_of_ticks():
    """Ticks that ran between two polls far apart are seen to have run."""
    made = armed(silence_us=0)
    for _ in range(3):
        for _ in range(10 * GAP_TICKS):
            made.tick(-65.0)
        made.poll()
        assert made.c.shim_polled() == OK
    assert made.state == ARMED


@pytest.mark.parametrize(
    ("write", "linked", "outcome"),
    [(-1, True, OUTPUT), (0, False, ARGUMENT), (-1, False, ARGUMENT)],
)
def test_what_could_not_be_written_at_the_start_is_written_later(write, linked, outcome):
    """A first write that fails, or a line that is none, leaves no current from before."""
    c = library(MODEL)
    assert c.shim_start_badly(write, linked) == -outcome
    assert c.shim_current_pa() == (99.0 if write else 0.0)
    if write:
        assert c.shim_tick(-65.0, 0, -1, TICK_US) == -OUTPUT
        assert c.shim_current_pa() == 99.0
    assert c.shim_tick(-65.0, 0, 0, 2 * TICK_US) == (OK if linked else -ARGUMENT)
    assert c.shim_current_pa() == 0.0
