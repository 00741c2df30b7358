"""What round trips cost, and ratios between contestants that took turns."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from gatestep.commands.bench import Spread

Rounds = list[np.ndarray]
"""Round trips in ns, one array a round."""
PERCENTILES = (50.0, 99.0, 99.9)
BEYOND = 10
"""A block of rounds holds at least so many trips beyond the percentile it is asked for."""


@dataclass(frozen=True)
class Cost:
    """One contestant's round trips in µs: of each round's median, and over all trips."""

    round_median: Spread
    p50: float
    p99: float
    p999: float
    largest: float
    trips: int


@dataclass(frozen=True)
class Ratio:
    """Ratios of percentiles, each over paired blocks of rounds; and over all trips."""

    p50: Spread
    p99: Spread
    p999: Spread
    over_all: tuple[float, float, float]
    blocks: tuple[int, int, int]


@dataclass(frozen=True)
class Growth:
    """How much longer a round's median is than its reference's, in µs.

    ``low95`` to ``high95`` holds the median of the paired differences (order
    statistics of the sign test). ``step_us`` is what the model's steps alone differ by.
    """

    median: float
    low95: float
    high95: float
    step_us: float


def cost(rounds: Rounds) -> Cost:
    """Summarise one contestant."""
    every = np.concatenate(rounds) / 1e3
    p50, p99, p999 = (float(p) for p in np.percentile(every, PERCENTILES))
    medians = Spread.over([float(np.median(r)) / 1e3 for r in rounds])
    return Cost(medians, p50, p99, p999, float(every.max()), every.size)


def ratio(over: Rounds, under: Rounds) -> Ratio:
    """Compare two contestants of the same rounds."""
    spreads, counts, whole = [], [], []
    for p in PERCENTILES:
        pairs = zip(_blocks(over, p), _blocks(under, p), strict=True)
        found = [float(np.percentile(a, p) / np.percentile(b, p)) for a, b in pairs]
        spreads.append(Spread.over(found))
        counts.append(len(found))
        above, below = (np.percentile(np.concatenate(r), p) for r in (over, under))
        whole.append(float(above / below))
    return Ratio(*spreads, (whole[0], whole[1], whole[2]), (counts[0], counts[1], counts[2]))


def growth(over: Rounds, under: Rounds, step_us: float) -> Growth:
    """How much a size adds to another, round by round."""
    pairs = zip(over, under, strict=True)
    found = np.sort([float(np.median(a) - np.median(b)) / 1e3 for a, b in pairs])
    rank = max(0, math.floor(found.size / 2 - 0.98 * math.sqrt(found.size)))
    low, high = float(found[rank]), float(found[found.size - 1 - rank])
    return Growth(float(np.median(found)), low, high, step_us)


def _blocks(rounds: Rounds, percentile: float) -> Rounds:
    """Consecutive rounds put together until the percentile has trips beyond it."""
    beyond = rounds[0].size * (1 - percentile / 100)
    each = min(len(rounds), max(1, math.ceil(BEYOND / beyond - 1e-9)))
    starts = range(0, len(rounds) - each + 1, each)
    return [np.concatenate(rounds[k : k + each]) for k in starts]
