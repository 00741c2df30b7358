"""What the simulated rig saw: a trace of every tick, and its figures in short."""

from __future__ import annotations

import os
from contextlib import suppress
from dataclasses import dataclass, field, fields
from pathlib import Path
from typing import Any, Self

import numpy as np
import numpy.typing as npt

from .errors import FileError
from .simloop import NOT_SAMPLED
from .wire import CLIPPED, LATE, LIVE, REFUSED, TRIPPED

Floats = npt.NDArray[np.float64]
Whole = npt.NDArray[np.int64]

SIMULATED = "simulated cell, simulated electrode, simulated converters; no recording"
"""The statement that every trace and summary carries."""


@dataclass(frozen=True)
class Trace:
    """Every tick of a run of the simulated rig; row n is the tick that begins at ``t_ms[n]``.

    Attributes
    ----------
    t_ms : array (n,)
        The rig's clock at the start of the tick.
    v_mv, measured_mv : array (n, cells)
        Membrane voltage at the start of the tick, and what the rig measured of it
        (NaN where no sample was taken; the real pace alone skips samples).
    answered_pa : array (n, cells)
        The answer to this tick's sample, NaN if none came.
    i_pa : array (n, cells)
        Mean current at the output over the tick: answers in force and stimulus.
    stimulus_pa : array (n, cells)
        The rig's own stimulus over the tick.
    flags : array (n,)
        Flags of the answer, -1 if none came, -2 if no sample was taken.
    round_trip_nsec : array (n,)
        From sending the sample to having the answer, -1 if none came.
    in_force, lag_us : array (n,)
        As reported with the sample; -1 and NaN if no answer's current flowed.
    interval_us, budget_us : float
        Of the loop.
    """

    t_ms: Floats
    v_mv: Floats
    measured_mv: Floats
    answered_pa: Floats
    i_pa: Floats
    stimulus_pa: Floats
    flags: Whole
    round_trip_nsec: Whole
    in_force: Whole
    lag_us: Floats
    interval_us: float
    budget_us: float

    @property
    def ticks(self) -> int:
        """Number of rows."""
        return int(self.t_ms.size)

    @property
    def gaps(self) -> int:
        """Ticks without a sample."""
        return int(np.sum(self.flags == NOT_SAMPLED))

    @property
    def missed(self) -> int:
        """Samples without an answer within the trace."""
        return int(np.sum(self.flags == NOT_SAMPLED + 1))

    @property
    def late(self) -> int:
        """Answers that reached the output over the budget after their sample."""
        changed = np.diff(self.in_force, prepend=np.int64(-1)) != 0
        return int(np.sum(changed & (self.lag_us > self.budget_us)))

    def flagged(self, flag: int) -> int:
        """How many answers carry a flag."""
        return int(np.sum((self.flags >= 0) & (self.flags & flag != 0)))

    def spikes(self, cell: int = 0, threshold_mv: float = 0.0) -> Floats:
        """Times in ms at which a cell's membrane rises through a threshold.

        Linear between samples.
        """
        return crossings(self.t_ms, self.v_mv[:, cell], threshold_mv)

    def save(self, path: Path) -> None:
        """Write the trace as an npz file, whole or not at all.

        Raises
        ------
        FileError
            When it cannot be written.
        """
        temporary = path.with_name(f".{path.name}.{os.getpid()}.part")
        arrays: dict[str, Any] = {f.name: getattr(self, f.name) for f in fields(self)}
        try:
            with temporary.open("wb") as out:
                np.savez_compressed(out, about=SIMULATED, **arrays)
            temporary.replace(path)
        except OSError as error:
            with suppress(OSError):
                temporary.unlink(missing_ok=True)
            raise FileError(
                f"{path}: cannot be written ({error.strerror or error}); choose another --out"
            ) from error

    @classmethod
    def load(cls, path: Path) -> Self:
        """Read a trace that :meth:`save` wrote.

        Raises
        ------
        FileError
            When the file is missing or holds no trace.
        """
        try:
            with np.load(path) as held:
                found: dict[str, Any] = {f.name: held[f.name] for f in fields(cls)}
        except (OSError, KeyError, ValueError) as error:
            raise FileError(f"{path}: no trace of the simulated rig ({error})") from error
        for name in ("interval_us", "budget_us"):
            found[name] = float(found[name])
        return cls(**found)

    @classmethod
    def joined(cls, traces: list[Trace]) -> Self:
        """One trace of several that follow each other."""
        columns: dict[str, Any] = {
            f.name: np.concatenate([getattr(t, f.name) for t in traces])
            for f in fields(cls)
            if isinstance(getattr(traces[0], f.name), np.ndarray)
        }
        last = traces[-1]
        return cls(**columns, interval_us=last.interval_us, budget_us=last.budget_us)


def crossings(t_ms: Floats, v_mv: Floats, threshold_mv: float) -> Floats:
    """Times of upward crossings of a threshold, linear between the points given."""
    k = np.flatnonzero((v_mv[:-1] < threshold_mv) & (v_mv[1:] >= threshold_mv))
    part = (threshold_mv - v_mv[k]) / (v_mv[k + 1] - v_mv[k])
    return np.asarray(t_ms[k] + part * (t_ms[k + 1] - t_ms[k]), dtype=np.float64)


# Round trips from 1 µs to 10 s in classes 1 % wide: percentiles of any length of run.
_CLASSES_NSEC = 10.0 ** np.arange(3.0, 10.0, np.log10(1.01))


@dataclass
class Summary:
    """The figures of a run in short, gathered trace by trace in bounded memory."""

    cells: list[str]
    threshold_mv: float = 0.0
    ticks: int = 0
    interval_us: float = 0.0
    counts: dict[str, int] = field(default_factory=dict)
    spikes: list[list[float]] = field(default_factory=list)
    peak_mv: list[float] = field(default_factory=list)
    trough_mv: list[float] = field(default_factory=list)
    _trips: Any = field(default_factory=lambda: np.zeros(_CLASSES_NSEC.size + 1, np.int64))
    _last: tuple[float, Floats] | None = None

    def add(self, trace: Trace) -> None:
        """Take in the next trace of the same run."""
        if not self.spikes:
            self.spikes = [[] for _ in self.cells]
            self.peak_mv = [-np.inf] * len(self.cells)
            self.trough_mv = [np.inf] * len(self.cells)
        if trace.ticks == 0:
            return
        self.ticks += trace.ticks
        self.interval_us = trace.interval_us
        found = {"gaps": trace.gaps, "missed": trace.missed, "late": trace.late}
        for name, flag in _FLAGS.items():
            found[name] = trace.flagged(flag)
        for name, count in found.items():
            self.counts[name] = self.counts.get(name, 0) + count
        self._add_cells(trace)
        trips = trace.round_trip_nsec[trace.round_trip_nsec >= 0]
        places = np.searchsorted(_CLASSES_NSEC, trips)
        self._trips += np.bincount(places, minlength=self._trips.size)

    def _add_cells(self, trace: Trace) -> None:
        t_ms, v_mv = trace.t_ms, trace.v_mv
        if self._last is not None:
            t_ms = np.concatenate([[self._last[0]], t_ms])
            v_mv = np.concatenate([self._last[1][None, :], v_mv])
        for c in range(len(self.cells)):
            self.spikes[c] += crossings(t_ms, v_mv[:, c], self.threshold_mv).tolist()
            self.peak_mv[c] = max(self.peak_mv[c], float(v_mv[:, c].max()))
            self.trough_mv[c] = min(self.trough_mv[c], float(v_mv[:, c].min()))
        self._last = float(t_ms[-1]), v_mv[-1].copy()

    def round_trip_us(self, percentile: float) -> float | None:
        """A percentile of the round trips in µs, to 1 %; None if there were none."""
        total = int(self._trips.sum())
        if total == 0:
            return None
        rank = max(1, int(np.ceil(total * percentile / 100.0)))
        place = int(np.searchsorted(np.cumsum(self._trips), rank))
        return float(_CLASSES_NSEC[min(place, _CLASSES_NSEC.size - 1)] / 1000.0)

    def figures(self) -> dict[str, Any]:
        """Everything as plain numbers, for JSON."""
        trips = {f"p{p:g}": self.round_trip_us(p) for p in (50, 95, 99, 99.9, 100)}
        cells = [
            {
                "name": name,
                "spikes": len(times),
                "first_spike_ms": times[0] if times else None,
                "rate_hz": _rate_hz(times),
                "peak_mv": self.peak_mv[c],
                "trough_mv": self.trough_mv[c],
            }
            for c, (name, times) in enumerate(zip(self.cells, self.spikes, strict=True))
        ]
        return {
            "simulated": SIMULATED,
            "ticks": self.ticks,
            "seconds": self.ticks * self.interval_us * 1e-6,
            **self.counts,
            "round_trip_us": trips,
            "cells": cells,
        }


_FLAGS = {
    "live": LIVE,
    "clipped": CLIPPED,
    "flagged_late": LATE,
    "tripped": TRIPPED,
    "refused": REFUSED,
}


def _rate_hz(times_ms: list[float]) -> float | None:
    """Mean rate between the first and the last spike; None with fewer than two."""
    if len(times_ms) < 2:
        return None
    return 1000.0 * (len(times_ms) - 1) / (times_ms[-1] - times_ms[0])
