"""What the loop can be told to do, and how it does it between two samples.

An order acts at once, or is put on the agenda until a sample of a given number: then it
is carried out after that sample has come and before it is stepped, so that a model, a
parameter or a stimulus changes exactly there and no tick is missed.
"""

from __future__ import annotations

from enum import IntEnum
from typing import Any

import numpy as np

from .anticipate import forget
from .compiling import inner
from .kernel import settle
from .specs import MAX_CONDUCTANCES
from .states import Event, Fault, State, next_state
from .wire import NIL


class Order(IntEnum):
    """What the loop can be told to do."""

    ARM = 0
    DISARM = 1
    RESET = 2
    STOP = 3
    SWAP = 4
    SET_GMAX = 5
    SET_REVERSAL = 6
    MARK = 7
    FORESEE = 8
    PLAY = 9
    REST = 10  # never sent: the loop's own, when a stimulus has come to its end
    CANCEL = 11


class Outcome(IntEnum):
    """What became of an order."""

    DONE = 0
    TRIPPED = 1
    WRONG_TICK = 2
    STOPPING = 3
    NO_ROOM = 4
    DROPPED = 5


ORDER = np.dtype(
    [
        ("number", "i8"),  # echoed in the log entry that tells the outcome
        ("kind", "i8"),
        ("at", "i8"),  # the sample before whose step it acts; NIL for at once
        ("cell", "i8"),
        ("index", "i8"),  # bank for SWAP, conductance for SET_*, slot for PLAY
        ("value", "f8"),  # ticks for PLAY; 1 for a SWAP whose gates go on
        ("ramp_ticks", "i8"),  # of a SWAP: how long the change of gmax takes
        ("from_zero", "i8"),  # whether that starts from 0 nS, since nothing flowed before
        ("on", "i8"),  # how the cell anticipates, for SWAP and FORESEE
        ("substeps", "i8"),
        ("alpha", "f8"),
        ("beta", "f8"),
    ],
    align=True,
)

AGENDA = 64
"""Orders that can wait for their sample."""

_IDLE, _TRIPPED, _DISARM = int(State.IDLE), int(State.TRIPPED), int(Event.DISARM)
_ORDER_EVENTS = np.array([Event.ARM, Event.DISARM, Event.RESET], dtype=np.int64)
_ARM, _RESET, _STOP = int(Order.ARM), int(Order.RESET), int(Order.STOP)
_SWAP, _FORESEE = int(Order.SWAP), int(Order.FORESEE)
_SET_GMAX, _SET_REVERSAL = int(Order.SET_GMAX), int(Order.SET_REVERSAL)
_PLAY = int(Order.PLAY)
_CANCEL = int(Order.CANCEL)
_DONE, _WAS_TRIPPED = int(Outcome.DONE), int(Outcome.TRIPPED)
_WAS_WRONG_TICK, _WAS_STOPPING = int(Outcome.WRONG_TICK), int(Outcome.STOPPING)
_NO_FAULT = np.int64(Fault.NONE)
_MOST = np.uint64(MAX_CONDUCTANCES)


@inner
def _change_state(loop: Any, kind: int) -> int:
    """[hot] Arm, disarm or reset as the transition table says; the outcome."""
    if kind == _ARM:
        if loop.stopping:
            return _WAS_STOPPING
        if loop.state == _TRIPPED:
            return _WAS_TRIPPED
        if loop.tick_wrong:
            return _WAS_WRONG_TICK
        loop.late_run = 0
        if loop.state == _IDLE:
            loop.armed_after = loop.seq if loop.running else np.int64(NIL)
    loop.state = next_state(loop.state, _ORDER_EVENTS[np.uint64(kind)])
    if loop.state != _TRIPPED:
        loop.fault = _NO_FAULT
        loop.fault_cell = NIL
    return _DONE


@inner
def _foresee(shadow: Any, order: Any) -> None:
    """[hot] Let a cell anticipate, or not, as an order says.

    What is known of the cell's own current stays known.
    """
    if order.on != shadow.on:
        forget(shadow)
    shadow.on = order.on
    shadow.substeps = order.substeps
    shadow.alpha = order.alpha
    shadow.beta = order.beta


@inner
def _begin_ramp(cell: Any, old: Any, new: Any, ticks: int, from_old: bool) -> None:
    """[hot] Let gmax go to the new bank's over ``ticks``; the old bank gets its own again."""
    for c in range(_MOST):
        present = old.gmax_ns[c]
        if cell.ramp_left > 0:
            old.gmax_ns[c] = cell.ramp_to_ns[c]
        cell.ramp_from_ns[c] = present if from_old else 0.0
        cell.ramp_to_ns[c] = new.gmax_ns[c]
    cell.ramp_ticks = ticks
    cell.ramp_left = ticks


@inner
def _swap(cell: Any, banks: Any, table: Any, order: Any) -> None:
    """[hot] Put a prepared bank in force, its gates at steady state for the present voltage.

    Of the same model with other parameters the gates go on as they are.
    """
    goes_on = order.value != 0.0
    old, new = banks[np.uint64(cell.bank)], banks[np.uint64(order.index)]
    _begin_ramp(cell, old, new, order.ramp_ticks, goes_on and order.from_zero == 0)
    cell.bank = order.index
    if cell.settled and not goes_on:
        settle(new, table, cell.x, cell.v_mv)
        cell.owed_ticks = 0.0


@inner
def _set_gmax(cell: Any, bank: Any, order: Any) -> None:
    """[hot] Set a gmax: at once, or as the end of the ramp under way."""
    if cell.ramp_left > 0:
        cell.ramp_to_ns[np.uint64(order.index)] = order.value
    else:
        bank.gmax_ns[np.uint64(order.index)] = order.value


@inner
def _play(loop: Any, order: Any, seq: int) -> None:
    """[hot] Begin a stimulus with the sample ``seq``, or with any order but ``PLAY`` end it."""
    loop.play_slot = NIL
    if order.kind == _PLAY:
        loop.play_slot = order.index
        loop.play_cell = order.cell
        loop.play_ticks = np.int64(order.value)
        loop.play_from = seq
        loop.play_number = order.number


@inner
def _obey_cell(m: Any, order: Any) -> None:
    """[hot] Carry out an order that concerns a cell's model."""
    cell = m.cells[np.uint64(order.cell)]
    bank = m.banks[np.uint64(cell.bank)]
    if order.kind == _SWAP or order.kind == _FORESEE:
        _foresee(cell.shadow, order)
    if order.kind == _SWAP:
        _swap(cell, m.banks, m.table, order)
    elif order.kind == _SET_GMAX:
        _set_gmax(cell, bank, order)
    elif order.kind == _SET_REVERSAL:
        bank.reversal_mv[np.uint64(order.index)] = order.value


@inner
def obey(m: Any, order: Any, seq: int, now: int) -> int:
    """[hot] Carry out one order; its outcome.

    Parameters
    ----------
    m
        Anything with ``loop``, ``cells``, ``banks`` and ``table``: the loop's memory, or
        that of a replay.
    order : ORDER record
    seq : int
        The sample before whose step it acts.
    now : int
        Monotonic time, ns.
    """
    loop = m.loop[0]
    if order.kind <= _RESET:
        return _change_state(loop, order.kind)
    if order.kind == _STOP:
        loop.state = next_state(loop.state, _DISARM)
        loop.stopped_nsec = loop.stopped_nsec if loop.stopping else now
        loop.stopping = 1
    elif order.kind == _PLAY or order.kind == _CANCEL:
        _play(loop, order, seq)
    else:
        _obey_cell(m, order)
    return _DONE
