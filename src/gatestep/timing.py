"""Figures of a measured loop: percentiles, what they mean for a cell, and comparisons.

**Comparison.** Each percentile is taken in every round of a measurement by itself.
Its *centre* is the median of the rounds' values, its *spread* half the distance
between the smallest and the largest of them. Two results differ in a percentile only
where their centres lie further apart than the sum of their spreads, that is, where
two bars drawn around the centres would not touch. Fewer than three rounds on either
side show no spread, and nothing counts. Rounds of one measurement follow each other
within minutes: what changes between days or restarts, they cannot show.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable
from math import ceil, floor, pi, sin
from typing import Any

import numpy as np

from .measuring import Floats, Run
from .specs import LoopSpec, RigSpec
from .units import US_PER_MS

PERCENTILES = (50.0, 90.0, 99.0, 99.9, 99.99)
NAMES = (*(f"p{p:g}" for p in PERCENTILES), "max")
"""Keys of a set of percentiles."""
QUANTITIES = ("round_trip_us", "jitter_us", "service_us")
FEWEST_ROUNDS = 3
"""Rounds below which a comparison tells nothing."""
BINS_A_DECADE = 100
_LONG_DELAY = 50.0

Figures = dict[str, Any]


def percentiles(values: Floats) -> dict[str, float | None]:
    """Percentiles (linear between the order statistics) and maximum; None when empty."""
    if not values.size:
        return dict.fromkeys(NAMES)
    found = np.percentile(values, [*PERCENTILES, 100.0])
    return {name: float(value) for name, value in zip(NAMES, found, strict=True)}


def jitter_us(round_trip_us: Floats) -> Floats:
    """How far each answer's arrival is from the median one, either way, in µs."""
    if not round_trip_us.size:
        return round_trip_us
    return np.asarray(np.abs(round_trip_us - np.median(round_trip_us)))


def lag_us(round_trip_us: Floats, loop: LoopSpec) -> Floats:
    """From a sample to its answer's current at the output, as ``loop.apply`` lets it flow.

    Next tick: whole ticks, 1 at least. On arrival: the round trip.
    """
    if loop.apply == "on-arrival":
        return round_trip_us
    ticks = np.maximum(np.ceil(round_trip_us / loop.interval_us - 1e-9), 1.0)
    return np.asarray(ticks * loop.interval_us)


def late_rows(run: Run, loop: LoopSpec, limit_us: float) -> np.ndarray:
    """For each sample sent: whether its answer is lacking or in force after ``limit_us``."""
    late = np.ones(run.sent_nsec.size, dtype=bool)
    late[run.answered] = lag_us(run.round_trip_us, loop) > limit_us * (1 + 1e-12)
    return np.asarray(late[run.sent])


def longest_run(late: np.ndarray) -> int:
    """Length of the longest run of True."""
    edges = np.flatnonzero(np.diff(np.concatenate([[0], late.astype(np.int8), [0]])))
    return int((edges[1::2] - edges[::2]).max(initial=0))


def histogram(values_us: Floats) -> Figures:
    """Counts in bins of which a hundred make a decade; only the bins that hold any.

    Bin ``k`` reaches from ``10 ** (k / 100)`` µs to ``10 ** ((k + 1) / 100)`` µs.
    """
    places = np.floor(np.log10(np.maximum(values_us, 1e-3)) * BINS_A_DECADE).astype(np.int64)
    bins, counts = np.unique(places, return_counts=True)
    return {"bins_a_decade": BINS_A_DECADE, "bins": bins.tolist(), "counts": counts.tolist()}


def run_figures(run: Run) -> Figures:
    """The percentiles of one round."""
    trips = run.round_trip_us
    return {
        "round_trip_us": percentiles(trips),
        "jitter_us": percentiles(jitter_us(trips)),
        "service_us": percentiles(run.service_us),
    }


def series_figures(runs: list[Run], loop: LoopSpec) -> Figures:
    """The figures of all rounds of one kind together, and of each by itself.

    Parameters
    ----------
    runs : list of Run
        All paced, or all flat out.
    loop : LoopSpec
        Tick, budget and how answers are applied.
    """
    trips = _joined(r.round_trip_us for r in runs)
    sent = sum(int(r.sent.sum()) for r in runs)
    late = [late_rows(r, loop, loop.budget) for r in runs]
    at_once = loop.model_copy(update={"apply": "on-arrival"})
    held = [late_rows(r, at_once, loop.interval_us) for r in runs]
    seconds = sum(r.seconds for r in runs)
    paced = any(r.start_nsec for r in runs)
    return {
        "samples": sent,
        "answered": int(trips.size),
        "missed": sent - int(trips.size),
        "skipped": sum(int((~r.sent).sum()) - r.unsent for r in runs),
        "unsent": sum(r.unsent for r in runs),
        "garbled": sum(r.garbled for r in runs),
        "strays": sum(r.strays for r in runs),
        "live": sum(r.live for r in runs),
        "a_second": trips.size / seconds if seconds else None,
        "inside_budget": 1.0 - _share(late) if sent else None,
        "longest_late_run": max((longest_run(x) for x in late), default=0),
        "held": _share(held) if sent else None,
        "round_trip_us": percentiles(trips),
        "jitter_us": percentiles(jitter_us(trips)),
        "service_us": percentiles(_joined(r.service_us for r in runs)),
        "send_late_us": percentiles(_joined(r.send_late_us for r in runs)) if paced else None,
        "histogram": histogram(trips),
        "rounds": [run_figures(r) for r in runs],
    }


def _joined(parts: Iterable[Floats]) -> Floats:
    return np.concatenate([np.empty(0), *parts])


def _share(rows: list[np.ndarray]) -> float:
    joined = np.concatenate(rows)
    return float(joined.mean()) if joined.size else 0.0


def stable_gain(delay_ticks: float) -> float:
    """Largest ``g * dt / C`` of a stable plain loop on a pure capacitance.

    A current computed from the voltage at one tick and held for a tick starts to flow
    ``delay_ticks`` later. Up to one tick ``z**2 - (1 - a (1 - d)) z + a d`` has its roots
    inside the unit circle (Jury test) while ``a < 1 / d`` and, for d below 1/2,
    ``a < 2 / (1 - 2 d)``. Beyond, with d = m + f, they are the roots of
    ``z**(m + 2) - z**(m + 1) + a (1 - f) z + a f``, found numerically; beyond 50 ticks
    the closed form for whole ticks serves, ``2 sin(pi / (4 d + 2))``.

    Parameters
    ----------
    delay_ticks : float
        From 0.
    """
    d = delay_ticks
    if d <= 1.0:
        bounds = [1.0 / d] if d > 0 else []
        return min(bounds + ([2.0 / (1.0 - 2.0 * d)] if d < 0.5 else []))
    if d > _LONG_DELAY:
        return 2.0 * sin(0.5 * pi / (2.0 * d + 1.0))
    m, f = floor(d), d - floor(d)

    def stable(a: float) -> bool:
        polynomial = np.zeros(m + 3)
        polynomial[0], polynomial[1] = 1.0, -1.0
        polynomial[-2] += a * (1.0 - f)
        polynomial[-1] += a * f
        return bool(np.abs(np.roots(polynomial)).max() < 1.0)

    return _bisected(stable, 0.0, 1.0)


def _bisected(holds: Callable[[float], bool], low: float, high: float) -> float:
    """Where a condition that holds above ``low`` stops to hold, to 1e-6."""
    while high - low > 1e-6:
        middle = 0.5 * (low + high)
        low, high = (middle, high) if holds(middle) else (low, middle)
    return low


def delay_in_ticks(round_trip_us: float, loop: LoopSpec) -> float:
    """From sample to current, in ticks: whole ones if it flows from the next tick on."""
    if loop.apply == "on-arrival":
        return round_trip_us / loop.interval_us
    return float(max(1, ceil(round_trip_us / loop.interval_us - 1e-9)))


def largest_conductance_ns(capacitance_pf: float, interval_us: float, delay_ticks: float) -> float:
    """Largest conductance, nS, that a plain loop carries on a cell of this capacitance."""
    return stable_gain(delay_ticks) * capacitance_pf / (interval_us / US_PER_MS)


def carried(paced: Figures, spec: RigSpec) -> Figures:
    """What the measured delay means for each cell.

    The delay is that of the 99.9th percentile of the round trip at the tick rate; None
    where more than one answer in a thousand never came.
    """
    trip_us = paced["round_trip_us"]["p99.9"]
    known = trip_us is not None and paced["missed"] <= 1e-3 * paced["samples"]
    delay = delay_in_ticks(trip_us, spec.loop) if known else None
    return {
        "delay_ticks": delay,
        "held": paced["held"],
        "cells": [
            {
                "name": cell.name,
                "capacitance_pf": cell.capacitance_pf,
                "largest_ns": None
                if delay is None or cell.capacitance_pf is None
                else largest_conductance_ns(cell.capacitance_pf, spec.loop.interval_us, delay),
            }
            for cell in spec.cell
        ],
    }


def centre_and_spread(values: list[float]) -> tuple[float, float | None]:
    """Median of the rounds and half their range; the spread is None for too few rounds."""
    spread = 0.5 * (max(values) - min(values)) if len(values) >= FEWEST_ROUNDS else None
    return float(np.median(values)), spread


def compared(before: list[float], now: list[float]) -> Figures:
    """One percentile in two results, from each round's value.

    ``differs`` is whether the centres lie further apart than the sum of the spreads.
    """
    (old, old_spread), (new, new_spread) = centre_and_spread(before), centre_and_spread(now)
    known = old_spread is not None and new_spread is not None
    combined = old_spread + new_spread if known else None  # type: ignore[operator]
    return {
        "before": old,
        "now": new,
        "difference": new - old,
        "spread": combined,
        "differs": combined is not None and abs(new - old) > combined,
    }


def comparison(before: Figures, now: Figures) -> list[Figures]:
    """Every percentile that two results have in common, condition by condition."""
    rows = []
    for condition, kinds in now["conditions"].items():
        for kind, series in kinds.items():
            other = before["conditions"].get(condition, {}).get(kind)
            if other is None:
                continue
            for quantity in QUANTITIES:
                for name in NAMES:
                    old, new = (_round_values(s, quantity, name) for s in (other, series))
                    if old and new:
                        where = {"condition": condition, "kind": kind}
                        what = {"quantity": quantity, "percentile": name}
                        rows.append({**where, **what, **compared(old, new)})
    return rows


def _round_values(series: Figures, quantity: str, name: str) -> list[float]:
    found = [r[quantity].get(name) for r in series["rounds"]]
    return [float(v) for v in found if v is not None]
