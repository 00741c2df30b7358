"""What a rig's output would do with the answers: the bookkeeping behind a truthful sample.

There is no output here, only the account of it, in the fields of a
:data:`gatestep.probe.PROBE` record: which answer flows, which waits for its tick, and
what the next sample has to report of them.
"""

from __future__ import annotations

from math import floor
from typing import Any

import numpy as np

from .compiling import inner
from .wire import NIL


@inner
def put_out(probe: Any, answer: Any, now: int) -> None:
    """[hot] Let an answer go to the output: at once, or at the start of the next tick."""
    row = answer.seq - probe.first
    since_start = now - probe.start_nsec
    if probe.on_arrival:
        if answer.seq > probe.in_force:
            probe.in_force = answer.seq
            probe.lag_us = max(0.0, (since_start - row * probe.interval_nsec) / 1000.0)
        return
    tick = np.int64(floor(since_start / probe.interval_nsec)) + 1
    if probe.coming != NIL and probe.coming_row < tick:
        if probe.coming_row >= probe.row:
            # The tick has begun and its sample is not out yet: it tells what flowed before.
            _settle(probe)
        _take_force(probe)
    if answer.seq > probe.coming:
        probe.coming = answer.seq
        probe.coming_row = tick
        probe.coming_lag_us = (tick - row) * probe.interval_nsec / 1000.0


@inner
def _take_force(probe: Any) -> None:
    """[hot] The answer that waited for its tick is at the output now."""
    probe.in_force = probe.coming
    probe.lag_us = probe.coming_lag_us


@inner
def _settle(probe: Any) -> None:
    """[hot] What is at the output now is what the next sample reports, whatever comes."""
    probe.settled = 1
    probe.told = probe.in_force
    probe.told_lag_us = probe.lag_us


@inner
def report(probe: Any, sample: Any, row: int) -> None:
    """[hot] Tell in a sample what was at the output just before it."""
    if not probe.settled:
        if probe.coming != NIL and probe.coming_row < row:
            _take_force(probe)
        _settle(probe)
    probe.settled = 0
    sample.in_force = probe.told
    sample.lag_us = probe.told_lag_us if probe.told != NIL else np.float64(NIL)
