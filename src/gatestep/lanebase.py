"""What both lanes share: how they report, the size of a peer's id, the clock."""

from __future__ import annotations

from typing import Any

from numba import types

from .compiling import compiled

MAX_PEER = 256
"""Room for a peer's id; a libzmq routing id is at most 255 bytes."""

NOTHING = -1
"""Size reported when no message has come in time."""
CLOSED = -2
"""Size reported when the lane can no longer be used."""

SENT, STALLED, GONE = 0, 1, 2
"""What became of a reply: sent; not taken by a peer that reads nothing; peer gone."""

_MONOTONIC = 1
_clock_gettime: Any = types.ExternalFunction("clock_gettime", types.intc(types.intc, types.uintp))


@compiled
def now_nsec(lane: Any) -> int:
    """[hot] The monotonic clock in nanoseconds.

    ``lane`` is any record with ``time``, two int64, and its address ``time_at``.
    """
    _clock_gettime(_MONOTONIC, lane.time_at)
    return lane.time[0] * 1_000_000_000 + lane.time[1]
