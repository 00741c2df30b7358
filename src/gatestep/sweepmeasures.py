"""The sweeps of a journal measured: what the cell did, and what the loop did meanwhile."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from .errors import JournalError
from .journalfile import JournalFile, Sweep
from .replay import Replay, currents_between
from .spikes import Firing, Response, firing, response
from .units import US_PER_MS
from .wire import CLIPPED, LATE, LIVE, MALFORMED, NIL, REFUSED, REPEAT

Floats = npt.NDArray[np.float64]
Whole = npt.NDArray[np.int64]

_NO_TICK = REPEAT | REFUSED | MALFORMED
_PC_PER_PA_MS = 1e-3


_OF_CELL = ("v_mv", "i_pa", "stimulus_pa")
_OF_LOOP = ("seq", "flags", "lag_us")
ROW = np.dtype(
    [("seq", "i8"), ("flags", "i8"), ("lag_us", "f8"), *((name, "f8") for name in _OF_CELL)]
)
"""What is read of a sample for one cell; as in the journal."""


@dataclass(frozen=True)
class Stretch:
    """One cell over a stretch of a journal, a row for each of the rig's samples.

    Attributes
    ----------
    at : array (n,)
        Places in the journal.
    rows : array (n,) of ROW
        The samples: the answered current has the stimulus in it.
    interval_us : float
        The tick.
    damaged : int
        Samples that cannot be read, their block being damaged.
    restarted : bool
        The samples' numbers started again, and the stretch ends there.
    """

    at: Whole
    rows: np.ndarray
    interval_us: float
    damaged: int
    restarted: bool

    @property
    def size(self) -> int:
        """Number of samples."""
        return int(self.at.size)

    @cached_property
    def t_ms(self) -> Floats:
        """Time from the first sample, by the samples' numbers."""
        seq = self.rows["seq"]
        since = seq - (seq[0] if self.size else 0)
        return np.asarray(since * (self.interval_us / US_PER_MS), dtype=np.float64)

    @cached_property
    def v_mv(self) -> Floats:
        """Measured voltage."""
        return np.ascontiguousarray(self.rows["v_mv"])

    @cached_property
    def i_pa(self) -> Floats:
        """Answered current, the stimulus in it included."""
        return np.ascontiguousarray(self.rows["i_pa"])

    @cached_property
    def stimulus_pa(self) -> Floats:
        """What the stimulus asked for."""
        return np.ascontiguousarray(self.rows["stimulus_pa"])

    @property
    def held_ms(self) -> Floats:
        """How long each answer was the newest: to the next sample, through missing ticks."""
        held = np.append(np.diff(self.rows["seq"]), 1)[: self.size]
        return np.asarray(held * (self.interval_us / US_PER_MS))

    def flagged(self, flag: int) -> int:
        """How many answers carry a flag."""
        return int(np.count_nonzero(self.rows["flags"] & flag))

    @property
    def missed(self) -> int:
        """Ticks without a sample."""
        seq = self.rows["seq"]
        return int(seq[-1] - seq[0] + 1 - seq.size) if self.size else 0

    def charge_pc(self, i_pa: Floats) -> float:
        """Charge of a current in pC, each value held until the next sample."""
        return float(np.dot(i_pa, self.held_ms)) * _PC_PER_PA_MS


@dataclass(frozen=True)
class Task:
    """One row of a report: a sweep of a plan, or an armed stretch where there was none.

    ``window_ms`` is the span of its stimulus, or None for all of it.
    """

    index: int
    name: str
    condition: str
    repeat: int
    cell: int
    start: int
    stop: int
    complete: bool
    planned: bool
    window_ms: tuple[float, float] | None
    current_pa: float | None
    threshold_mv: float
    fields: Mapping[str, Any]


@dataclass(frozen=True)
class Measured:
    """A task with its measures; see :class:`gatestep.spikes.Firing` for what they are.

    Attributes
    ----------
    task : Task
    ticks : int
        Samples measured.
    seconds : float
        From the first to the last.
    window_ms : tuple of float
        Where spikes were counted.
    firing : Firing
    response : Response or None
        Only for a step of current without a spike.
    late : int
        Answers that the rig reported, in this stretch, to have come late.
    lag_us : float or None
        The longest lag that the rig reported.
    clipped, missed, damaged : int
        Answers clipped, ticks without a sample, samples that cannot be read.
    idle : int
        Answers that were 0 because the loop was not armed.
    charge_pc, stimulus_pc : float
        Injected charge in all, as answered, and what the stimulus asked for.
    conductances_pc : dict or None
        What each conductance injected by itself, ``-g (V - E)`` at each sample and before
        the limits; None where it cannot be computed. With anticipation an answer is the
        mean over the hold to come, so the sum differs a little from the model's share.
    complete : bool
        Whether the sweep was played to its end, with all of its ticks live and readable.
    """

    task: Task
    ticks: int
    seconds: float
    window_ms: tuple[float, float]
    firing: Firing
    response: Response | None
    late: int
    lag_us: float | None
    clipped: int
    missed: int
    idle: int
    damaged: int
    charge_pc: float
    stimulus_pc: float
    conductances_pc: dict[str, float] | None
    complete: bool


def tasks_of(journal: JournalFile) -> list[Task]:
    """What a report is made of: the sweeps, or each armed stretch of each cell."""
    if journal.sweeps:
        return [_of_sweep(journal, sweep) for sweep in journal.sweeps]
    return [
        _of_armed(journal, k, c, stretch)
        for k, stretch in enumerate(armed_stretches(journal))
        for c in range(len(journal.cells))
    ]


def _of_armed(journal: JournalFile, index: int, cell: int, stretch: tuple[int, int, bool]) -> Task:
    start, stop, whole = stretch
    name = journal.in_force(start)[cell].name or "armed"
    return Task(index, "armed", name, 0, cell, start, stop, whole, False, None, None, 0.0, {})


def _of_sweep(journal: JournalFile, sweep: Sweep) -> Task:
    fields = sweep.fields
    step = fields.get("step")
    parts = fields.get("stimulus") or []
    window = None
    if parts:
        window = min(p["start_ms"] for p in parts), max(p["stop_ms"] for p in parts)
    current = float(step["current_pa"]) if step else None
    if not parts:
        current = 0.0
    cell = fields.get("cell")
    number = journal.cells.index(cell) if cell in journal.cells else cell
    return Task(
        sweep.index,
        str(fields.get("name", "sweep")),
        str(fields.get("condition") or "sweeps"),
        int(fields.get("repeat", 0)),
        number if isinstance(number, int) and 0 <= number < len(journal.cells) else 0,
        sweep.start,
        sweep.stop,
        sweep.complete,
        True,
        window,
        current,
        float(fields.get("threshold_mv", 0.0)),
        fields,
    )


def armed_stretches(journal: JournalFile) -> Iterator[tuple[int, int, bool]]:
    """Where the loop was armed: first place, end, and whether it was disarmed by order."""
    begun: int | None = None
    for event in journal.events:
        if event.fields.get("outcome", "done") != "done":
            continue
        if event.kind == "arm" and begun is None:
            begun = event.position
        elif event.kind in {"disarm", "trip", "stop", "reset"} and begun is not None:
            if event.position > begun:
                yield begun, event.position, event.kind != "trip"
            begun = None
    if begun is not None and begun < len(journal.samples):
        yield begun, len(journal.samples), journal.closed


def read_stretch(journal: JournalFile, start: int, stop: int, cell: int) -> Stretch:
    """One cell's samples of a stretch, without repeats; damaged ones are left out and counted."""
    kept: list[np.ndarray] = []
    places: list[Whole] = []
    found = 0
    for piece in journal.samples.pieces(start, stop):
        found += len(piece.samples)
        fresh = np.flatnonzero(piece.samples["flags"] & _NO_TICK == 0)
        places.append(piece.position + fresh)
        kept.append(_of_cell(piece.samples[fresh], cell))
    rows = np.concatenate(kept) if kept else np.empty(0, ROW)
    at = np.concatenate(places) if places else np.empty(0, np.int64)
    falls = np.flatnonzero(np.diff(rows["seq"]) <= 0)
    end = int(falls[0]) + 1 if falls.size else len(rows)
    damaged = stop - start - found
    return Stretch(at[:end], rows[:end], journal.interval_us, damaged, bool(falls.size))


def _of_cell(samples: np.ndarray, cell: int) -> np.ndarray:
    rows = np.empty(len(samples), ROW)
    for name in _OF_LOOP:
        rows[name] = samples[name]
    for name in _OF_CELL:
        rows[name] = samples[name][:, cell]
    return rows


class Measurer:
    """Measures the tasks of a journal, best in the order of their places.

    Parameters
    ----------
    journal : JournalFile

    Notes
    -----
    The charge of each conductance needs the gates, and so the samples from the journal's
    first on are taken through the kernel again; tasks that follow on share that work.
    """

    def __init__(self, journal: JournalFile) -> None:
        self._journal = journal
        self._replay: Replay | None = None

    def measure(self, task: Task) -> tuple[Measured, Stretch]:
        """Measure one task; its samples are given back too, for figures."""
        stretch = read_stretch(self._journal, task.start, task.stop, task.cell)
        end_ms = float(stretch.t_ms[-1]) + stretch.interval_us / US_PER_MS if stretch.size else 0.0
        window = task.window_ms or (0.0, end_ms)
        fired, answer = _of_the_cell(task, stretch, window)
        lags = stretch.rows["lag_us"][stretch.rows["lag_us"] != NIL]
        idle = stretch.size - stretch.flagged(LIVE)
        lacking = idle or stretch.damaged or stretch.restarted or not stretch.size
        made = Measured(
            task=task,
            ticks=stretch.size,
            seconds=end_ms / 1000.0,
            window_ms=window,
            firing=fired,
            response=answer,
            late=stretch.flagged(LATE),
            lag_us=float(lags.max()) if lags.size else None,
            clipped=stretch.flagged(CLIPPED),
            missed=stretch.missed,
            idle=idle,
            damaged=stretch.damaged,
            charge_pc=stretch.charge_pc(stretch.i_pa),
            stimulus_pc=stretch.charge_pc(stretch.stimulus_pa),
            conductances_pc=self._conductances(task, stretch),
            complete=task.complete and not lacking,
        )
        return made, stretch

    def _conductances(self, task: Task, stretch: Stretch) -> dict[str, float] | None:
        """Charge of each conductance, where one model was in force and all can be read."""
        journal = self._journal
        if journal.in_force(task.start)[task.cell].model is None or _swapped(journal, task):
            return None
        try:
            if self._replay is None or self._replay.position > task.start:
                self._replay = Replay(journal)
            found = currents_between(self._replay, task.start, task.stop, task.cell)
        except JournalError:
            return None
        if self._replay.unlike is not None:
            return None
        return {
            name: stretch.charge_pc(i_pa[stretch.at - task.start]) for name, i_pa in found.items()
        }


def _of_the_cell(
    task: Task, stretch: Stretch, window_ms: tuple[float, float]
) -> tuple[Firing, Response | None]:
    """Spikes, and without any the answer to a step."""
    finite = np.isfinite(stretch.v_mv)
    t_ms, v_mv, i_pa = stretch.t_ms[finite], stretch.v_mv[finite], stretch.i_pa[finite]
    fired = firing(t_ms, v_mv, window_ms, task.threshold_mv)
    if not task.current_pa or fired.spikes or fired.outside:
        return fired, None
    return fired, response(t_ms, v_mv, i_pa, window_ms, task.current_pa)


def _swapped(journal: JournalFile, task: Task) -> bool:
    """Whether the cell's model changed within a task."""
    return any(
        event.kind in {"swap", "in_force"}
        and task.start < event.position < task.stop
        and event.fields.get("cell") in {task.cell, journal.cells[task.cell]}
        for event in journal.events
    )
