"""Durations counted by compiled code, and what they say.

Sixteen bins an octave by the number's own leading bits, so that compiled code needs no
logarithm: a duration of 16 to 31 ns has a bin of its own, and so has each sixteenth of every
octave above. Percentiles are within 1/16 of the true ones.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from .compiling import compiled

BINS = 640
"""The last ends at 2**43 ns, some two hours; what is longer counts there."""
PERCENTILES = (50.0, 90.0, 99.0, 99.9)

_SPLIT = 16


@compiled
def note(counts: Any, nsec: int, times: int) -> None:
    """[hot] Count a duration so many times; ``counts`` has ``BINS`` places."""
    value, octave = max(nsec, 0), 0
    while value >= 2 * _SPLIT:
        value >>= 1
        octave += 1
    place = min(octave * _SPLIT + value, BINS - 1)
    counts[np.uint64(place)] += times


def upper_nsec() -> npt.NDArray[np.float64]:
    """The end of each bin, in ns."""
    place = np.arange(BINS)
    octave = np.maximum(place // _SPLIT - 1, 0)
    return (place - octave * _SPLIT + 1) * 2.0**octave


def percentiles(counts: npt.NDArray[np.int64]) -> dict[str, float]:
    """Percentiles of what was counted, in ns, each the end of its bin; empty when nothing was.

    ``max`` is the end of the last bin that has something.
    """
    total = int(counts.sum())
    if not total:
        return {}
    sums, ends = np.cumsum(counts), upper_nsec()
    wanted = {f"p{p:g}": np.ceil(total * p / 100) for p in PERCENTILES}
    places = {name: int(np.searchsorted(sums, rank)) for name, rank in wanted.items()}
    places["max"] = int(np.flatnonzero(counts)[-1])
    return {name: float(ends[place]) for name, place in places.items()}
