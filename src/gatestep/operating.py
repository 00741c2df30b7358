"""How much conductance a model opens: what a loop's limit is to be set beside.

The sum of every gmax is seldom met: gates that open in the same spike close each other
out. Here the model is held at voltages that a cell can have, by steps and by a ramp, and
the largest total conductance is kept. That is still more than a spike opens: the squid
axon's 4680 nS (30 pF) open to 2230 nS in a step from -100 to +50 mV, 1940 nS in a spike
that follows -80 mV, 1280 nS in one from rest and 1080 nS in repetitive firing.

A negative gmax counts as 0 here: what it takes away does not load the loop with more.
In :func:`largest_ns`, the bound that no voltage can exceed, it counts in full.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from .compiling import compiled
from .kernel import BANK, STATES, advance, conductance, follow, records, settle
from .tables import Tables

HOLDING_MV = (-100.0, -50.0)
TEST_MV = (-60.0, 50.0)
SPACING_MV = 10.0
STEP_MS = 20.0
RAMP_MV_PER_MS = 5.0
SAMPLE_MS = 0.025


@compiled
def _widest(bank: Any, table: Any, x: Any, from_mv: float, to_mv: float, ramp_ms: float) -> float:
    """Largest conductance in nS after a hold: a ramp (none if 0 ms), then ``STEP_MS`` held."""
    settle(bank, table, x, from_mv)
    widest = conductance(bank, x)
    ramp = np.int64(ramp_ms / SAMPLE_MS)
    for k in range(ramp + np.int64(STEP_MS / SAMPLE_MS)):
        share = min((k + 1.0) / (ramp + 1.0), 1.0)
        v_mv = from_mv + share * (to_mv - from_mv)
        follow(bank, table, x, v_mv)
        widest = max(widest, conductance(bank, x))
        advance(bank, table, x, v_mv, SAMPLE_MS)
    return max(widest, conductance(bank, x))


@compiled
def _widest_of_all(bank: Any, table: Any, x: Any) -> float:
    """Largest conductance in nS over the grid of holding and test voltages, and ramps."""
    widest = 0.0
    for h in range(np.int64((HOLDING_MV[1] - HOLDING_MV[0]) / SPACING_MV) + 1):
        hold_mv = HOLDING_MV[0] + h * SPACING_MV
        for t in range(np.int64((TEST_MV[1] - TEST_MV[0]) / SPACING_MV) + 1):
            test_mv = TEST_MV[0] + t * SPACING_MV
            widest = max(widest, _widest(bank, table, x, hold_mv, test_mv, 0.0))
        ramp_ms = (TEST_MV[1] - hold_mv) / RAMP_MV_PER_MS
        widest = max(widest, _widest(bank, table, x, hold_mv, TEST_MV[1], ramp_ms))
    return widest


def operating_ns(tables: Tables) -> float:
    """The largest conductance in nS that a model opens under steps and ramps.

    Holding voltages are -100 to -50 mV, test voltages -60 to +50 mV, each held for
    20 ms; the ramps rise by 5 mV/ms to +50 mV.
    """
    bank = records(BANK)[0]
    for field in BANK.names or ():
        bank[field] = tables.bank[field]
    bank["gmax_ns"] = np.maximum(bank["gmax_ns"], 0.0)
    return float(_widest_of_all(bank, tables.table, np.zeros(STATES)))


def largest_ns(tables: Tables) -> float:
    """The sum of every gmax in magnitude, in nS: no voltage opens more."""
    return float(np.abs(tables.bank["gmax_ns"]).sum())
