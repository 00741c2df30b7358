"""Which currents flowed, and which will: what the rig's reports say of the answers.

The loop remembers its newest answers (``past``, by sequence number) and the rig reports
which was in force and how long it took to get there. From these follow the mean current
between two samples and the currents until the next hold begins, so that late, dropped
and jittering answers count as what truly flowed.
"""

from __future__ import annotations

from typing import Any

import numpy as np

from .anticipate import MOST_SEGMENTS
from .compiling import inner
from .wire import NIL

HISTORY = 64
"""Answers kept for repeats and for what flowed; a power of two."""

UNKNOWN = np.nan
_LAST = np.int64(HISTORY - 1)
_LAG_SHARE = 0.05  # of a new lag in the running delay
_EXACT = 1e-6


@inner
def answered(past: Any, seq: int, cell: int) -> float:
    """[hot] Current answered to a sample for a cell, pA; 0 for NIL, NaN if forgotten."""
    if seq < 0:
        return 0.0
    kept = past[np.uint64(seq & _LAST)]
    return kept.i_pa[np.uint64(cell)] if kept.seq == seq else UNKNOWN


@inner
def note_lag(loop: Any, sample: Any) -> None:
    """[hot] Follow the delay from a sample to its answer's current, by the rig's lags."""
    if sample.lag_us != NIL and sample.in_force != loop.in_force:
        longest = MOST_SEGMENTS * loop.interval_us
        loop.delay_us += _LAG_SHARE * (min(sample.lag_us, longest) - loop.delay_us)


@inner
def flowed(loop: Any, past: Any, sample: Any, cell: int) -> float:
    """[hot] Mean current between the sample before and this one, pA; NaN if not known."""
    now_pa = answered(past, sample.in_force, cell)
    if sample.in_force == loop.in_force:
        return now_pa
    before_pa = answered(past, loop.in_force, cell)
    lag_us = loop.delay_us if sample.lag_us == NIL else sample.lag_us
    since_us = (sample.in_force - (sample.seq - 1)) * loop.interval_us + lag_us
    share = min(max(since_us / loop.interval_us, 0.0), 1.0)
    return share * before_pa + (1.0 - share) * now_pa


@inner
def fill_coming(loop: Any, past: Any, sample: Any, cell: int, coming_pa: Any) -> bool:
    """[hot] Currents until the hold, newest answer first; False if one is not known.

    The first stretch is the current in force now, where a switch does not fall on the
    sample itself; after it, answers are expected to come as they usually do.
    """
    # As many as the carry reads, by the same arithmetic: one left over from another sample,
    # or not known then, must never be read.
    ticks = (loop.delay_us * 1e-3) / (loop.interval_us * 1e-3)
    count: Any = min(np.int64(np.ceil(ticks - 1e-9)), MOST_SEGMENTS)
    whole = abs(ticks - np.floor(ticks + 0.5)) < _EXACT
    known = True
    for j in range(count):
        # Before the session's first answer nothing flows.
        seq = sample.seq - 1 - j
        i_pa = answered(past, seq, cell) if seq >= loop.first_seq else 0.0
        if j == count - 1 and not whole:
            i_pa = answered(past, sample.in_force, cell)
        coming_pa[np.uint64(j)] = i_pa
        known = known and not np.isnan(i_pa)
    return known
