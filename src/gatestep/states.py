"""The states of the loop and the one table of what leads from each to the next.

The table is data: the compiled loop looks it up, the command line words it and
the documentation draws it (:func:`diagram`).
"""

from __future__ import annotations

from enum import IntEnum
from typing import Any

import numpy as np

from .compiling import compiled


class State(IntEnum):
    """What the loop answers: 0 pA, the model's current, or 0 pA until reset."""

    IDLE = 0
    ARMED = 1
    TRIPPED = 2


class Event(IntEnum):
    """What can change the state."""

    ARM = 0
    DISARM = 1
    FAULT = 2
    RESET = 3


class Fault(IntEnum):
    """Why the loop tripped."""

    NONE = 0
    SILENCE = 1
    NON_FINITE_VOLTAGE = 2
    VOLTAGE_OUT_OF_WINDOW = 3
    RUN_OF_LATE_ANSWERS = 4
    WRONG_TICK = 5
    NON_FINITE_CURRENT = 6
    DISCONNECTED = 7


FAULT_TEXTS = {
    Fault.NONE: "",
    Fault.SILENCE: "the rig fell silent for longer than limits.silence_ms",
    Fault.NON_FINITE_VOLTAGE: "a measured voltage was not a finite number",
    Fault.VOLTAGE_OUT_OF_WINDOW: "a measured voltage left the cell's limits.window_mv",
    Fault.RUN_OF_LATE_ANSWERS: "answers reached the output late for limits.late_run ticks on end",
    Fault.WRONG_TICK: "the rig's clock shows a tick over 1 % away from loop.interval_us",
    Fault.DISCONNECTED: "the rig's connection ended",
    Fault.NON_FINITE_CURRENT: "the model gave a current that is not a finite number",
}

TRANSITIONS: dict[tuple[State, Event], State] = {
    (State.IDLE, Event.ARM): State.ARMED,
    (State.IDLE, Event.DISARM): State.IDLE,
    (State.IDLE, Event.FAULT): State.IDLE,
    (State.IDLE, Event.RESET): State.IDLE,
    (State.ARMED, Event.ARM): State.ARMED,
    (State.ARMED, Event.DISARM): State.IDLE,
    (State.ARMED, Event.FAULT): State.TRIPPED,
    (State.ARMED, Event.RESET): State.ARMED,
    (State.TRIPPED, Event.ARM): State.TRIPPED,
    (State.TRIPPED, Event.DISARM): State.TRIPPED,
    (State.TRIPPED, Event.FAULT): State.TRIPPED,
    (State.TRIPPED, Event.RESET): State.IDLE,
}

_NEXT = np.array([[TRANSITIONS[s, e] for e in Event] for s in State], dtype=np.int64)


@compiled
def next_state(state: Any, event: Any) -> int:
    """[hot] The state that an event leads to."""
    return _NEXT[np.uint64(state), np.uint64(event)]


def diagram() -> str:
    """The transition table drawn as text, one line a change of state."""
    lines = []
    for state in State:
        arrows: dict[State, list[str]] = {}
        for event in Event:
            target = TRANSITIONS[state, event]
            if target != state:
                arrows.setdefault(target, []).append(event.name.lower())
        for target, events in arrows.items():
            label = f"-- {' or '.join(events)} --"
            lines.append(f"{state.name.lower():>8} {label:-<18}> {target.name.lower()}")
    return "\n".join(lines)
