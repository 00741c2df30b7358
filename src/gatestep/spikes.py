"""Measures on a voltage trace: spikes and their shapes, rest, input resistance.

All take times in ms that rise and finite voltages in mV, one a sample; ticks may be
missing. Nothing is filtered. What cannot be measured is None.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

Floats = npt.NDArray[np.float64]

HYSTERESIS_MV = 5.0
"""The voltage must fall so far below the threshold before another spike is counted."""
REST_MS = 100.0
"""Rest is taken over so long before the stimulus, at most."""
LAST_PART = 0.2
"""Share of a step, at its end, over which the voltage counts as steady."""
_REST_SAMPLES = 3
_TAU_FROM, _TAU_TO = 0.05, 0.9


@dataclass(frozen=True)
class Spike:
    """One spike.

    Attributes
    ----------
    time_ms : float
        When the voltage rises through the threshold, linear between samples.
    peak_ms, peak_mv : float
        Vertex of the parabola through the highest sample before the voltage falls
        below threshold and hysteresis, and its two neighbours; that sample itself
        where one is missing.
    width_ms : float or None
        Width at half height: how long the voltage stays above the middle between base
        and peak, linear between samples. None where it does not fall so far before
        the next spike.
    trough_ms, trough_mv : float or None
        The lowest voltage from the fall to the next spike, by a parabola as the peak;
        None where the trace or the window ends while the voltage still falls.
    """

    time_ms: float
    peak_ms: float
    peak_mv: float
    width_ms: float | None
    trough_ms: float | None
    trough_mv: float | None


@dataclass(frozen=True)
class Firing:
    """How a cell fired within a window of a trace.

    Attributes
    ----------
    rest_mv : float or None
        Median voltage over the ``REST_MS`` before the window; None with fewer than
        three samples there.
    spikes : tuple of Spike
        Those whose rise lies in the window.
    outside : int
        Spikes before and after it.
    rate_hz : float
        Spikes in the window over its length.
    steady_hz : float or None
        One over the mean interval between them; None with fewer than two.
    latency_ms : float or None
        From the window's start to the first.
    ahp_mv : float or None
        Afterhyperpolarisation of the first spike: trough minus rest, negative below it.
    """

    rest_mv: float | None
    spikes: tuple[Spike, ...]
    outside: int
    rate_hz: float
    steady_hz: float | None
    latency_ms: float | None
    ahp_mv: float | None

    @property
    def first(self) -> Spike | None:
        """The first spike in the window."""
        return self.spikes[0] if self.spikes else None


@dataclass(frozen=True)
class Response:
    """The answer of a cell to a step of current that does not make it fire.

    Attributes
    ----------
    deflection_mv : float
        Mean voltage over the last fifth of the step minus rest.
    input_mohm : float
        Deflection over the step's current: what the step meets, virtual conductances
        included.
    own_mohm : float or None
        Deflection over the change of all injected current, the model's included: the
        cell without its virtual conductances. None where that change is too small.
    tau_ms : float or None
        Time constant: of the straight line fitted to the logarithm of what is left of
        the deflection, between 5 and 90 % of it, each sample weighted with the square
        of what is left. None where the voltage does not get there in three samples.
    """

    deflection_mv: float
    input_mohm: float
    own_mohm: float | None
    tau_ms: float | None


def rises(v_mv: Floats, threshold_mv: float, hysteresis_mv: float) -> npt.NDArray[np.int64]:
    """Indices of the first sample of each spike at or above the threshold.

    A rise counts when the voltage has been below threshold minus hysteresis since the
    one before, and the first one also when the trace began below the threshold.
    """
    if v_mv.size == 0:
        return np.zeros(0, dtype=np.int64)
    crossed = np.flatnonzero((v_mv[:-1] < threshold_mv) & (v_mv[1:] >= threshold_mv)) + 1
    lows = np.cumsum(v_mv < threshold_mv - hysteresis_mv)[crossed]
    counted = np.diff(lows, prepend=-1 if v_mv[0] < threshold_mv else 0) > 0
    return np.asarray(crossed[counted], dtype=np.int64)


def spike_times(
    t_ms: Floats,
    v_mv: Floats,
    threshold_mv: float = 0.0,
    hysteresis_mv: float = HYSTERESIS_MV,
) -> Floats:
    """Times in ms at which spikes rise through the threshold; see :class:`Spike`."""
    return _times(t_ms, v_mv, rises(v_mv, threshold_mv, hysteresis_mv), threshold_mv)


def _times(t_ms: Floats, v_mv: Floats, k: npt.NDArray[np.int64], threshold_mv: float) -> Floats:
    """When the voltage passes the threshold on its way to each of some samples."""
    part = (threshold_mv - v_mv[k - 1]) / (v_mv[k] - v_mv[k - 1])
    return np.asarray(t_ms[k - 1] + part * (t_ms[k] - t_ms[k - 1]), dtype=np.float64)


def rest_before(t_ms: Floats, v_mv: Floats, start_ms: float) -> float | None:
    """Median voltage over the ``REST_MS`` before a time; see :class:`Firing`."""
    before = v_mv[_span(t_ms, start_ms - REST_MS, start_ms)]
    return float(np.median(before)) if before.size >= _REST_SAMPLES else None


def firing(
    t_ms: Floats,
    v_mv: Floats,
    window_ms: tuple[float, float],
    threshold_mv: float = 0.0,
    hysteresis_mv: float = HYSTERESIS_MV,
) -> Firing:
    """How a cell fired.

    Parameters
    ----------
    t_ms, v_mv : arrays (n,)
        The trace.
    window_ms : tuple of float
        Start and end of the stimulus, or of the whole trace: spikes are counted in it.
    threshold_mv, hysteresis_mv : float
        What counts as a spike; see :func:`rises`.

    Notes
    -----
    Half height is from rest, or from the trace's median where rest is not known.
    """
    start_ms, stop_ms = window_ms
    rest_mv = rest_before(t_ms, v_mv, start_ms)
    base_mv = float(np.median(v_mv)) if rest_mv is None and v_mv.size else rest_mv
    at = rises(v_mv, threshold_mv, hysteresis_mv)
    low = np.flatnonzero(v_mv < threshold_mv - hysteresis_mv)
    end = int(np.searchsorted(t_ms, stop_ms))
    spikes = []
    for j, time_ms in enumerate(_times(t_ms, v_mv, at, threshold_mv).tolist()):
        if start_ms <= time_ms < stop_ms:
            begin = int(at[j - 1]) if j else 0
            after = int(at[j + 1]) if j + 1 < at.size else v_mv.size
            rise = int(at[j])
            spikes.append(_spike(t_ms, v_mv, low, base_mv, time_ms, begin, rise, after, end))
    return _summed(rest_mv, tuple(spikes), int(at.size) - len(spikes), window_ms)


def _summed(
    rest_mv: float | None, spikes: tuple[Spike, ...], outside: int, window_ms: tuple[float, float]
) -> Firing:
    """Rates, latency and afterhyperpolarisation of the spikes in a window."""
    start_ms, stop_ms = window_ms
    length_ms, count = stop_ms - start_ms, len(spikes)
    spread_ms = spikes[-1].time_ms - spikes[0].time_ms if count > 1 else 0.0
    trough_mv = spikes[0].trough_mv if spikes else None
    return Firing(
        rest_mv=rest_mv,
        spikes=spikes,
        outside=outside,
        rate_hz=1000.0 * count / length_ms if length_ms > 0.0 else 0.0,
        steady_hz=1000.0 * (count - 1) / spread_ms if spread_ms > 0.0 else None,
        latency_ms=spikes[0].time_ms - start_ms if spikes else None,
        ahp_mv=None if trough_mv is None or rest_mv is None else trough_mv - rest_mv,
    )


def _spike(
    t_ms: Floats,
    v_mv: Floats,
    low: Any,
    base_mv: float | None,
    time_ms: float,
    begin: int,
    rise: int,
    after: int,
    end: int,
) -> Spike:
    """One spike: ``begin`` and ``after`` are the rises of its neighbours, ``end`` the window's."""
    place = int(np.searchsorted(low, rise))
    fall = min(int(low[place]) if place < low.size else v_mv.size, after)
    top = rise + int(np.argmax(v_mv[rise:fall]))
    peak_ms, peak_mv = vertex(t_ms, v_mv, top)
    width_ms = None
    if base_mv is not None:
        width_ms = _width(t_ms, v_mv, 0.5 * (base_mv + peak_mv), begin, top, after)
    trough_ms = trough_mv = None
    until = after if after < v_mv.size and after <= end else min(end, v_mv.size)
    if until - fall > 1:
        bottom = fall + int(np.argmin(v_mv[fall:until]))
        if bottom < until - 1:
            trough_ms, trough_mv = vertex(t_ms, v_mv, bottom)
    return Spike(time_ms, peak_ms, peak_mv, width_ms, trough_ms, trough_mv)


def _width(
    t_ms: Floats, v_mv: Floats, level_mv: float, begin: int, top: int, after: int
) -> float | None:
    """How long the voltage stays above a level about a peak; None where it does not cross it."""
    left = np.flatnonzero(v_mv[begin:top] < level_mv)
    right = np.flatnonzero(v_mv[top:after] < level_mv)
    if left.size == 0 or right.size == 0:
        return None
    a, b = begin + int(left[-1]), top + int(right[0])
    return _crossed(t_ms, v_mv, level_mv, b - 1) - _crossed(t_ms, v_mv, level_mv, a)


def _crossed(t_ms: Floats, v_mv: Floats, level_mv: float, k: int) -> float:
    """When the line from sample ``k`` to the next meets a level."""
    part = (level_mv - v_mv[k]) / (v_mv[k + 1] - v_mv[k])
    return float(t_ms[k] + part * (t_ms[k + 1] - t_ms[k]))


def vertex(t_ms: Floats, v_mv: Floats, k: int) -> tuple[float, float]:
    """Time and voltage of the vertex of the parabola through sample ``k`` and its neighbours.

    Newton's form on three points that need not be evenly spaced. The sample itself at
    an end of the trace, and where it is not the extreme of the three.
    """
    if 0 < k < v_mv.size - 1:
        left = (v_mv[k] - v_mv[k - 1]) / (t_ms[k] - t_ms[k - 1])
        right = (v_mv[k + 1] - v_mv[k]) / (t_ms[k + 1] - t_ms[k])
        bend = (right - left) / (t_ms[k + 1] - t_ms[k - 1])
        if bend != 0.0 and left * right <= 0.0:
            at = 0.5 * (t_ms[k - 1] + t_ms[k]) - 0.5 * left / bend
            height = v_mv[k - 1] + (at - t_ms[k - 1]) * (left + bend * (at - t_ms[k]))
            return float(at), float(height)
    return float(t_ms[k]), float(v_mv[k])


def response(
    t_ms: Floats,
    v_mv: Floats,
    i_pa: Floats,
    window_ms: tuple[float, float],
    current_pa: float,
) -> Response | None:
    """The answer to a step that does not make the cell fire.

    Parameters
    ----------
    t_ms, v_mv, i_pa : arrays (n,)
        The trace, and all of the injected current, stimulus included.
    window_ms : tuple of float
        When the step begins and ends.
    current_pa : float
        Its current, not 0.

    Returns
    -------
    Response or None
        None without samples before or at the end of the step.
    """
    start_ms, stop_ms = window_ms
    before = _span(t_ms, start_ms - REST_MS, start_ms)
    steady = _span(t_ms, stop_ms - LAST_PART * (stop_ms - start_ms), stop_ms)
    rest_mv = rest_before(t_ms, v_mv, start_ms)
    if current_pa == 0.0 or rest_mv is None or v_mv[steady].size < _REST_SAMPLES:
        return None
    deflection = float(v_mv[steady].mean()) - rest_mv
    injected = float(i_pa[steady].mean() - np.median(i_pa[before]))
    enough = abs(injected) > 1e-3 * abs(current_pa)
    during = _span(t_ms, start_ms, stop_ms)
    return Response(
        deflection,
        1000.0 * deflection / current_pa,
        1000.0 * deflection / injected if enough else None,
        _time_constant(t_ms[during] - start_ms, v_mv[during] - rest_mv, deflection),
    )


def _time_constant(t_ms: Floats, rise_mv: Floats, deflection_mv: float) -> float | None:
    if deflection_mv == 0.0:
        return None
    left = 1.0 - rise_mv / deflection_mv
    begin = np.flatnonzero(left < 1.0 - _TAU_FROM)
    end = np.flatnonzero(left < 1.0 - _TAU_TO)
    if begin.size == 0 or end.size == 0 or end[0] - begin[0] < 3:
        return None
    used = slice(int(begin[0]), int(end[0]))
    t, y = t_ms[used], np.log(np.maximum(left[used], 1e-3))
    weight = left[used] ** 2
    t = t - np.average(t, weights=weight)
    slope = float(np.sum(weight * t * y) / np.sum(weight * t * t))
    return -1.0 / slope if slope < 0.0 else None


def _span(t_ms: Floats, start_ms: float, stop_ms: float) -> slice:
    """The samples from one time to before another."""
    first, last = np.searchsorted(t_ms, (start_ms, stop_ms))
    return slice(int(first), int(last))
