"""The waveform of a sweep's stimulus, in pA, one value a tick.

A value is held for one tick. Steps begin at the first tick at or after their start and
end before their stop; ramps, sines and files have at each tick the value that they
have at its middle, which for a ramp is its mean over the tick. A draw of noise depends
on its seed and the tick, counted from the noise's own start, alone.

Nothing here calls a mathematical library whose last bit differs between machines:
logarithm and cosine are our own, from plain additions and multiplications, so that a
plan gives the same current everywhere.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from decimal import Decimal
from math import ceil, frexp, sqrt
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from .compiling import compiled, inner
from .errors import FileError
from .specs import MAX_CURRENT_PA
from .units import US_PER_MS
from .waves import read_wave

Floats = npt.NDArray[np.float64]


def waveform(parts: Sequence[Mapping[str, Any]], ticks: int, interval_us: float) -> Floats:
    """The sum of a stimulus's parts.

    Parameters
    ----------
    parts : sequence of mappings
        As in :attr:`gatestep.plans.PlannedSweep.stimulus`.
    ticks : int
        Length of the sweep.
    interval_us : float
        The tick, in µs.

    Returns
    -------
    array (ticks,)
        pA, each finite and within ``MAX_CURRENT_PA`` either way.

    Raises
    ------
    FileError
        If a file cannot be read or is another than when the plan was read, or the
        sum leaves the limits, which files can make it do.
    """
    total = np.zeros(ticks)
    for part in parts:
        first = min(tick_at(part["start_ms"], interval_us), ticks)
        last = min(tick_at(part["stop_ms"], interval_us), ticks)
        _ADD[part["kind"]](total[first:last], first, interval_us, part)
    if not np.all(np.abs(total) <= MAX_CURRENT_PA):  # false for NaN too
        raise FileError(
            f"the stimulus reaches {np.abs(total).max():g} pA; "
            f"at most {MAX_CURRENT_PA:g} pA either way are allowed"
        )
    return total


def tick_at(time_ms: float, interval_us: float) -> int:
    """The first tick at or after a time from the sweep's start."""
    # The allowance keeps 10 ms at tick 500 of 20 µs when 500.00000000000006 comes.
    return max(0, ceil(time_ms * US_PER_MS / interval_us - 1e-6))


def _middles_ms(count: int, first: int, interval_us: float, part: Mapping[str, Any]) -> Floats:
    """Middles of the ticks, from the part's start."""
    middles = (np.arange(first, first + count) + 0.5) * (interval_us / US_PER_MS)
    return np.asarray(middles - part["start_ms"], dtype=np.float64)


def _add_step(out: Floats, _first: int, _interval_us: float, part: Mapping[str, Any]) -> None:
    out += part["current_pa"]


def _add_ramp(out: Floats, first: int, interval_us: float, part: Mapping[str, Any]) -> None:
    way = _middles_ms(out.size, first, interval_us, part) / (part["stop_ms"] - part["start_ms"])
    out += part["from_pa"] + (part["to_pa"] - part["from_pa"]) * np.clip(way, 0.0, 1.0)


def _add_sine(out: Floats, first: int, interval_us: float, part: Mapping[str, Any]) -> None:
    middles = _middles_ms(out.size, first, interval_us, part)
    turns = middles * (part["frequency_hz"] / 1000.0) + (part["phase_deg"] / 360.0 - 0.25)
    cosines(turns)
    out += part["offset_pa"] + part["amplitude_pa"] * turns


def _add_noise(out: Floats, _first: int, interval_us: float, part: Mapping[str, Any]) -> None:
    """Gaussian noise: white, or with a time constant (Ornstein-Uhlenbeck, Gillespie 1996)."""
    keep = 0.0
    if part["tau_ms"] > 0.0:
        # Decimal rounds its exponential correctly, so this is the same on every machine.
        keep = float(Decimal(-interval_us / US_PER_MS / part["tau_ms"]).exp())
    add_noise(out, np.uint64(part["seed"]), part["mean_pa"], part["sd_pa"], keep)


def _add_file(out: Floats, first: int, interval_us: float, part: Mapping[str, Any]) -> None:
    wave = read_wave(Path(part["path"]), part["column"])
    if wave.sha256 != part["sha256"]:
        raise FileError(f"{part['path']}: is not what it was when the plan was read; read it again")
    middles_us = US_PER_MS * _middles_ms(out.size, first, interval_us, part)
    # The allowance: a middle that falls on the edge of a value takes the one that begins.
    places = np.floor(middles_us / part["interval_us"] + 1e-6).astype(np.int64)
    count = int(np.searchsorted(places, wave.values.size))
    out[:count] += wave.values[np.maximum(places[:count], 0)]


_ADD = {
    "step": _add_step,
    "ramp": _add_ramp,
    "sine": _add_sine,
    "noise": _add_noise,
    "file": _add_file,
}

_GOLDEN = np.uint64(0x9E3779B97F4A7C15)
_MIX_1 = np.uint64(0xBF58476D1CE4E5B9)
_MIX_2 = np.uint64(0x94D049BB133111EB)
_LN_2 = 0.6931471805599453
_HALF_SQRT_2 = 0.7071067811865476
_QUARTER_TURN = 1.5707963267948966


@inner
def _scrambled(z: Any) -> Any:
    """The splitmix64 finaliser (Steele, Lea and Flood 2014), uint64 to uint64."""
    z = (z ^ (z >> np.uint64(30))) * _MIX_1
    z = (z ^ (z >> np.uint64(27))) * _MIX_2
    return z ^ (z >> np.uint64(31))


@inner
def _uniform(seed: Any, place: Any) -> float:
    """A draw in (0, 1] that depends on its two arguments alone."""
    bits = _scrambled(_scrambled(seed + _GOLDEN) + (place + np.uint64(1)) * _GOLDEN)
    return (np.float64(bits >> np.uint64(11)) + 1.0) * 2.0**-53


@compiled
def logarithm(x: float) -> float:
    """Natural logarithm of x > 0 to a few units in the last place.

    With ``x = m 2**e`` and ``s = (m - 1) / (m + 1)``: ``2 artanh(s) + e ln 2``.
    """
    m, e = frexp(x)
    if m < _HALF_SQRT_2:
        m, e = 2.0 * m, e - 1
    s = (m - 1.0) / (m + 1.0)
    s2 = s * s
    series = 0.0
    for k in range(23, 1, -2):  # |s| < 0.172, so the next term is below 1e-20
        series = s2 * (1.0 / k + series)
    return 2.0 * s * (1.0 + series) + e * _LN_2


@compiled
def cosine(turns: float) -> float:
    """Cosine of an angle in turns, to a few units of 1e-16."""
    x = abs(turns)
    x = 4.0 * (x - np.floor(x))
    quarter = np.floor(x + 0.5)
    r = (x - quarter) * _QUARTER_TURN
    r2 = r * r
    even, odd = 1.0, 1.0
    for k in range(18, 0, -2):  # Taylor; |r| <= pi / 4
        even = 1.0 - even * r2 / (k * (k - 1.0))
        odd = 1.0 - odd * r2 / (k * (k + 1.0))
    if quarter == 1.0:
        return -r * odd
    if quarter == 2.0:
        return -even
    if quarter == 3.0:
        return r * odd
    return even


@compiled
def cosines(turns: Any) -> None:
    """Cosine of each angle in turns, in place."""
    for k in range(turns.size):
        turns[k] = cosine(turns[k])


@compiled
def add_noise(out: Any, seed: Any, mean: float, sd: float, keep: float) -> None:
    """Add normal noise (Box and Muller 1958) of which each value keeps a part of the last.

    The first value is drawn from the stationary distribution.

    Parameters
    ----------
    out : array
        What to add to.
    seed : uint64
    mean, sd : float
        Of the stationary distribution.
    keep : float
        Correlation of a value with the one before, 0 to below 1; 0 is white.
    """
    fresh = sqrt(1.0 - keep * keep)
    x = 0.0
    for k in range(out.size):
        place = np.uint64(2) * np.uint64(k)
        radius = sqrt(-2.0 * logarithm(_uniform(seed, place)))
        draw = radius * cosine(_uniform(seed, place + np.uint64(1)))
        x = keep * x + fresh * draw if k > 0 else draw
        out[k] += mean + sd * x
