"""The model step: tables and gates in, current out. Compiled, pure, bounded.

One cell's model is a *bank*: a record of counts, conductances and the mapping from
conductances to gates, beside one flat table. The table's rows lie on an even
voltage grid; a row holds, for that voltage, the steady states of the dynamic
gates, their rates 1/tau (per ms), then the steady states of the instantaneous
gates::

    inf[0..dynamic)  rate[0..dynamic)  inf[0..instant)

``dynamic`` is padded to a multiple of four with gates of rate 0, so a row is read
in whole blocks. Gates in a cell share the voltage, hence the row, hence the cache
lines.

A gate follows the exact solution for a held voltage, so with inf in [0, 1] and
rate >= 0 it cannot leave [0, 1] whatever the voltage, the step or the table.
Dynamic gates cross a tick on the mean of its two end voltages, which is second
order; instantaneous gates and the driving force use the newest voltage.

``kind`` names the mechanism of each conductance; ``OHMIC`` is the only one so far.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from .compiling import merged
from .simd import WIDTH, relax, relax_pair
from .specs import MAX_CONDUCTANCES, MAX_GATES

OHMIC = 0
"""Kind of mechanism: ``i = -gmax * product(x ** power) * (v - reversal)``."""

STATES = MAX_GATES + WIDTH
"""Length of a cell's gate state: every gate, and padding."""

# No field may be named like an attribute of a numpy scalar ("base", "flags"): where
# nothing is compiled, that attribute would be read in its place.
BANK = np.dtype(
    [
        ("v_low_mv", "f8"),  # voltage of row 0
        ("rows_per_mv", "f8"),  # inverse of the grid's step
        ("rows", "i8"),  # at least 2
        ("start", "i8"),  # index of row 0 in the table
        ("stride", "i8"),  # values in a row: 2 * dynamic + instant
        ("dynamic", "i8"),  # dynamic gates, padded to a multiple of 4
        ("instant", "i8"),  # instantaneous gates
        ("conductances", "i8"),
        ("kind", "i8", (MAX_CONDUCTANCES,)),
        ("gmax_ns", "f8", (MAX_CONDUCTANCES,)),
        ("reversal_mv", "f8", (MAX_CONDUCTANCES,)),
        ("gates", "i8", (MAX_CONDUCTANCES,)),  # how many gates this conductance has
        # The gates of all conductances in order: index into the state (dynamic gates
        # first, instantaneous ones from ``dynamic`` on) and number of instances.
        ("state", "i8", (MAX_GATES,)),
        ("power", "i8", (MAX_GATES,)),
    ],
    align=True,
)
"""One cell's model, next to its table. Make one with :func:`gatestep.tables.fill_bank`."""


def records(dtype: np.dtype[Any], count: int = 1) -> Any:
    """``count`` zeroed records whose fields are attributes, compiled or not."""
    return np.zeros(count, dtype).view(np.recarray)


_ONE = np.uint64(1)
_BLOCK = np.uint64(WIDTH)


@merged
def locate(bank: Any, v_mv: float) -> Any:
    """[hot] Row below a voltage and the place between it and the next, in [0, 1].

    Voltages off the grid count as its nearest end; ``v_mv`` must not be NaN.
    """
    place = (v_mv - bank.v_low_mv) * bank.rows_per_mv
    place = min(max(place, 0.0), bank.rows - 1.0)
    row = min(np.int64(place), bank.rows - 2)
    return row, place - row


@merged
def advance(bank: Any, table: Any, x: Any, v_mv: float, dt_ms: float) -> None:
    """[hot] Carry the dynamic gates over ``dt_ms`` with the voltage held at ``v_mv``."""
    row, f = locate(bank, v_mv)
    stride = np.uint64(bank.stride)
    dynamic = np.uint64(bank.dynamic)
    low = np.uint64(bank.start) + np.uint64(row) * stride
    high = low + stride
    block = np.uint64(0)
    while block + _BLOCK < dynamic:
        relax_pair(table, x, low, high, dynamic, block, f, dt_ms)
        block += _BLOCK + _BLOCK
    if block < dynamic:
        relax(table, x, low, high, dynamic, block, f, dt_ms)


@merged
def follow(bank: Any, table: Any, x: Any, v_mv: float) -> None:
    """[hot] Put the instantaneous gates at their steady state for ``v_mv``."""
    if bank.instant == 0:
        return
    row, f = locate(bank, v_mv)
    stride = np.uint64(bank.stride)
    dynamic = np.uint64(bank.dynamic)
    low = np.uint64(bank.start) + np.uint64(row) * stride + dynamic + dynamic
    for k in range(np.uint64(bank.instant)):
        a = table[low + k]
        x[dynamic + k] = a + f * (table[low + stride + k] - a)


@merged
def settle(bank: Any, table: Any, x: Any, v_mv: float) -> None:
    """[hot] Put every gate at its steady state for ``v_mv``."""
    row, f = locate(bank, v_mv)
    stride = np.uint64(bank.stride)
    low = np.uint64(bank.start) + np.uint64(row) * stride
    for k in range(np.uint64(bank.dynamic)):
        a = table[low + k]
        x[k] = a + f * (table[low + stride + k] - a)
    follow(bank, table, x, v_mv)


@merged
def current(bank: Any, x: Any, v_mv: float) -> float:
    """[hot] The current the model injects at ``v_mv``, in pA: the sum of -g * (V - E)."""
    total = 0.0
    gate = np.uint64(0)
    for c in range(np.uint64(bank.conductances)):
        g = bank.gmax_ns[c]
        for _ in range(bank.gates[c]):
            y = x[np.uint64(bank.state[gate])]
            g *= power(y, bank.power[gate])
            gate += _ONE
        total += g * (bank.reversal_mv[c] - v_mv)
    return total


@merged
def conductance(bank: Any, x: Any) -> float:
    """[hot] The model's total conductance, in nS."""
    total = 0.0
    gate = np.uint64(0)
    for c in range(np.uint64(bank.conductances)):
        g = bank.gmax_ns[c]
        for _ in range(bank.gates[c]):
            g *= power(x[np.uint64(bank.state[gate])], bank.power[gate])
            gate += _ONE
        total += g
    return total


@merged
def power(y: float, n: int) -> float:
    """[hot] ``y ** n`` for n from 1 to 15, by squaring."""
    square = y * y
    result = y if n & 1 else 1.0
    if n & 2:
        result *= square
    if n > 3:
        fourth = square * square
        if n & 4:
            result *= fourth
        if n & 8:
            result *= fourth * fourth
    return result


@merged
def step(bank: Any, table: Any, x: Any, v_old_mv: float, v_new_mv: float, dt_ms: float) -> float:
    """[hot] One tick: gates across it, then the current at its end, in pA.

    Parameters
    ----------
    bank, table, x
        One cell's bank record, its flat table and its gate state (``STATES`` long).
    v_old_mv, v_new_mv : float
        Finite voltages at the two ends of the tick, mV.
    dt_ms : float
        Length of the tick in ms; longer when ticks are missing.
    """
    advance(bank, table, x, 0.5 * (v_old_mv + v_new_mv), dt_ms)
    follow(bank, table, x, v_new_mv)
    return current(bank, x, v_new_mv)
