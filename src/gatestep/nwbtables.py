"""The tables of an NWB file: sweeps and their groups, models, events, gaps. Needs pynwb."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, NamedTuple

from pynwb import NWBFile
from pynwb.core import VectorData
from pynwb.epoch import TimeIntervals
from pynwb.event import EventsTable

from .journalfacts import JournalModel
from .journalfile import Event, JournalFile
from .nwbfacts import plain, told
from .nwbrecordings import Recording, Survey

NOT_TOLD = "not told"
UNPLANNED = "no plan"

_CHANGES = ("in_force", "swap", "set")


@dataclass(frozen=True)
class Stretch:
    """A cell's model and parameters over a time, s since the journal's start."""

    cell: int
    start: int
    start_s: float
    stop_s: float
    name: str
    model: JournalModel | None
    gmax_ns: Mapping[str, float]
    reversal_mv: Mapping[str, float]

    @property
    def parameters(self) -> str:
        """Every conductance with what was in force of it."""
        return "; ".join(
            f"{name} gmax {gmax!r} nS, reversal {self.reversal_mv.get(name)!r} mV"
            for name, gmax in self.gmax_ns.items()
        )


def stretches_of(journal: JournalFile, found: Survey) -> list[Stretch]:
    """Which model each cell had when, in the order in which they began."""
    made: list[Stretch] = []
    pairs = list(zip(journal.events, found.event_s.tolist(), strict=True))
    for cell in range(len(journal.cells)):
        begun: Stretch | None = None
        for event, at_s in pairs:
            if not _changes(event, cell, journal.cells):
                continue
            if begun is not None:
                made.append(_until(begun, at_s))
            begun = _changed(begun, event, at_s, cell, journal)
        if begun is not None:
            made.append(_until(begun, found.end_s))
    lasting = [stretch for stretch in made if stretch.stop_s > stretch.start_s]
    return sorted(lasting, key=lambda stretch: stretch.start_s)


def _changes(event: Event, cell: int, names: Sequence[str]) -> bool:
    """Whether an event changed what a cell is given."""
    if event.kind not in _CHANGES or event.fields.get("outcome", "done") != "done":
        return False
    return event.fields.get("cell") in {cell, names[cell]}


def _until(begun: Stretch, stop_s: float) -> Stretch:
    return Stretch(**{**vars(begun), "stop_s": stop_s})


def _changed(
    was: Stretch | None, event: Event, at_s: float, cell: int, journal: JournalFile
) -> Stretch:
    """What a cell is given after an event."""
    fields = event.fields
    begins: dict[str, Any] = {
        "cell": cell,
        "start": event.position,
        "start_s": at_s,
        "stop_s": at_s,
    }
    if event.kind == "set" and was is not None:
        which = "gmax_ns" if fields.get("which") == "gmax_ns" else "reversal_mv"
        name = str(fields.get("key", "")).partition(".")[0]
        changed = {**getattr(was, which), name: fields.get("value")}
        return Stretch(**{**vars(was), **begins, which: changed})
    number = fields.get("model")
    model = journal.models.get(number) if isinstance(number, int) else None
    if model is None:
        name = str(fields.get("name") or NOT_TOLD)
        return Stretch(**begins, name=name, model=None, gmax_ns={}, reversal_mv={})
    gmax = fields.get("gmax_ns") or model.gmax_ns
    reversal = fields.get("reversal_mv") or model.reversal_mv
    return Stretch(
        **begins,
        name=model.name,
        model=model,
        gmax_ns=dict(zip(model.conductances, gmax, strict=False)),
        reversal_mv=dict(zip(model.conductances, reversal, strict=False)),
    )


def model_at(stretches: Iterable[Stretch], cell: int, recording: Recording) -> str:
    """The model that a cell had when a recording began."""
    mine = [s for s in stretches if s.cell == cell and s.start <= recording.start]
    return mine[-1].name if mine else NOT_TOLD


def add_models(file: NWBFile, stretches: Sequence[Stretch], cells: Sequence[str]) -> None:
    """The models with their texts as intervals of time, and as epochs for other readers."""
    if not stretches:
        return
    texts = {
        "cell": ("the rig file's name of the cell", [cells[s.cell] for s in stretches]),
        "model": ("the model's name", [s.name for s in stretches]),
        "parameters": ("what was in force", [s.parameters for s in stretches]),
        "sha256": ("of the model's file", [s.model.sha256 if s.model else "" for s in stretches]),
        "table_sha256": (
            "of the tables that the loop followed",
            [s.model.table_sha256 if s.model else "" for s in stretches],
        ),
        "text": ("the model's file in full", [s.model.text if s.model else "" for s in stretches]),
    }
    what = "The model that each cell was given while the loop was armed; a row for each change"
    file.add_time_intervals(_intervals("models", what, stretches, texts))
    file.add_epoch_column("cell", "the rig file's name of the cell")
    for stretch in stretches:
        cell = cells[stretch.cell]
        tags = [plain(stretch.name)]
        file.add_epoch(start_time=stretch.start_s, stop_time=stretch.stop_s, tags=tags, cell=cell)


def _intervals(
    name: str, what: str, rows: Sequence[Any], columns: Mapping[str, tuple[str, list[Any]]]
) -> TimeIntervals:
    """A table of intervals made whole, as adding row after row is slow."""
    times = {
        "start_time": ("s since the session's start", [row.start_s for row in rows]),
        "stop_time": ("s since the session's start", [row.stop_s for row in rows]),
    }
    return TimeIntervals(name=name, description=what, columns=_columns({**times, **columns}))


def _columns(columns: Mapping[str, tuple[str, list[Any]]]) -> list[VectorData]:
    return [
        VectorData(
            name=name,
            description=what,
            data=[plain(value) if isinstance(value, str) else value for value in values],
        )
        for name, (what, values) in columns.items()
    ]


class _GapRow(NamedTuple):
    start_s: float
    stop_s: float
    recording: str
    ticks: int
    reason: str


def add_gaps(file: NWBFile, named: Sequence[tuple[str, Recording]], tick_s: float) -> None:
    """The ticks of the recordings that have no sample, and why."""
    rows = [
        _GapRow(
            recording.time_s + gap.first * tick_s,
            recording.time_s + (gap.first + gap.ticks) * tick_s,
            name,
            gap.ticks,
            gap.reason,
        )
        for name, recording in named
        for gap in recording.gaps
    ]
    if not rows:
        return
    columns: dict[str, tuple[str, list[Any]]] = {
        "recording": ("what the names of its series begin with", [row.recording for row in rows]),
        "ticks": ("ticks without a sample", [row.ticks for row in rows]),
        "reason": ("why there is none", [row.reason for row in rows]),
    }
    what = "Ticks without a sample: the series of that recording are NaN there"
    file.add_time_intervals(_intervals("gaps", what, rows, columns))


def add_events(file: NWBFile, events: Sequence[Event], found: Survey) -> None:
    """All that happened."""
    if not events:
        return
    table = EventsTable(
        name="loop_events",
        description=(
            "What happened in the loop and what it was told to do; each before the sample at its "
            "time, or where no rig sampled by the server's clock"
        ),
    )
    for name, what in (
        ("kind", "what happened"),
        ("place", "samples in the journal before it"),
        ("server_nsec", "the server's monotonic clock, ns"),
    ):
        table.add_column(name=name, description=what)
    for event, at_s in zip(events, found.event_s.tolist(), strict=True):
        row = {"kind": plain(event.kind), "place": event.position, "server_nsec": event.nsec}
        table.add_event(timestamp=at_s, annotation=told(event), **row)
    file.add_events_table(table)


def add_groups(file: NWBFile, recordings: Sequence[Recording], rows: Sequence[list[int]]) -> None:
    """Group the rows of the recordings' table, ``rows`` of them for each recording.

    Simultaneous are the cells of a recording; sequential those of one name, repeat and
    condition; a repetition has all that were run with one repeat of a condition.
    """
    simultaneous = file.get_icephys_simultaneous_recordings()
    for name, what in (("sweep", "name of the sweep"), ("complete", "whether it ran to its end")):
        simultaneous.add_column(name=name, description=what)
    sequences: dict[tuple[Any, ...], list[int]] = {}
    for k, (recording, mine) in enumerate(zip(recordings, rows, strict=True)):
        file.add_icephys_simultaneous_recording(
            recordings=mine, sweep=sweep_name(recording), complete=recording.complete
        )
        sequences.setdefault(_key(recording), []).append(k)
    repetitions: dict[tuple[Any, ...], list[int]] = {}
    file.get_icephys_sequential_recordings().add_column(name="sweep", description="its name")
    for k, (key, members) in enumerate(sequences.items()):
        file.add_icephys_sequential_recording(
            simultaneous_recordings=members, stimulus_type=key[4], sweep=key[3]
        )
        repetitions.setdefault(key[:3], []).append(k)
    _add_conditions(file, repetitions)


def _add_conditions(file: NWBFile, repetitions: Mapping[tuple[Any, ...], list[int]]) -> None:
    table = file.get_icephys_repetitions()
    table.add_column(name="repeat", description="repeat of the sweeps, from 0")
    conditions: dict[tuple[Any, ...], list[int]] = {}
    for k, (key, members) in enumerate(repetitions.items()):
        file.add_icephys_repetition(sequential_recordings=members, repeat=key[2])
        conditions.setdefault(key[:2], []).append(k)
    table = file.get_icephys_experimental_conditions()
    table.add_column(name="condition", description="by which the sweeps are compared")
    table.add_column(name="plan", description="number of the plan, from 1; 0 without one")
    for (run, condition), members in conditions.items():
        file.add_icephys_experimental_condition(repetitions=members, condition=condition, plan=run)


def sweep_name(recording: Recording) -> str:
    """A recording's sweep as its plan names it."""
    return plain(str(recording.span.fields.get("name") or "armed"))


def _key(recording: Recording) -> tuple[int, str, int, str, str]:
    """Plan, condition, repeat, name and stimulus."""
    fields = recording.span.fields
    condition = plain(str(fields.get("condition") or UNPLANNED))
    repeat = fields.get("repeat")
    name = sweep_name(recording)
    number = repeat if isinstance(repeat, int) else 0
    return recording.span.run, condition, number, name, stimulus_of(recording)


def stimulus_of(recording: Recording) -> str:
    """The kinds of stimulus that a sweep plays."""
    parts = recording.span.fields.get("stimulus") or []
    kinds = [str(part.get("kind")) for part in parts if isinstance(part, dict)]
    return plain(" + ".join(kinds)) or "none"
