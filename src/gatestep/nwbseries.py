"""The series of an NWB file: described first, then filled piece by piece. Needs pynwb."""

from __future__ import annotations

import json
from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np
from pynwb import H5DataIO, NWBFile, ProcessingModule, TimeSeries
from pynwb.icephys import (
    CurrentClampSeries,
    CurrentClampStimulusSeries,
    IntracellularElectrode,
)

from .journalfile import JournalFile
from .nwbfacts import NOT_STATED, plain
from .nwbrecordings import Progress, Recording, ticks_of
from .nwbtables import Stretch, model_at, stimulus_of, sweep_name
from .recordspecs import SessionSpec
from .units import US_PER_MS
from .wire import NIL

MV, PA, US, NSEC = 1e-3, 1e-12, 1e-6, 1e-9
"""One of the data's unit in volts, amperes and seconds: prefixes that readers know."""

CHUNK = 1 << 16
"""Values of a series that are compressed together."""

_BLOCK = "default"
_COUNTS = (
    ("missed_ticks", "ticks without a sample; NaN in the series"),
    ("late", "samples that tell of an answer that came late"),
    ("clipped", "answers that the limits clipped"),
    ("idle", "answers of 0 because the loop was not armed"),
)


class Column(NamedTuple):
    """A series that is to be filled from a field of the samples, of a cell where it has some."""

    series: TimeSeries
    field: str
    cell: int | None


def comments_of(segment: str, words: str) -> str:
    """Comments that neo takes the segment from, so that each recording is one of its own."""
    return json.dumps({"block": _BLOCK, "segment": segment, "comments": words})


def name_of(number: int, recording: Recording) -> str:
    """What the names of a recording's series begin with."""
    return f"{'sweep' if recording.span.planned else 'armed'}_{number:04d}"


class Series:
    """The series of all recordings, and the table of recordings.

    Parameters
    ----------
    file : NWBFile
    journal : JournalFile
    session : SessionSpec
    stretches : sequence of Stretch
        The models in force.

    Attributes
    ----------
    rows : list of list of int
        Rows of the table of intracellular recordings, for each recording.
    """

    def __init__(
        self,
        file: NWBFile,
        journal: JournalFile,
        session: SessionSpec,
        stretches: Sequence[Stretch],
    ) -> None:
        self.rows: list[list[int]] = []
        self._file, self._journal, self._stretches = file, journal, stretches
        self._loop = journal.header["rig_spec"]["loop"]
        self._columns: list[list[Column]] = []
        self._told: dict[str, list[Any]] = {}
        device = file.create_device(
            name="rig",
            description="The rig whose samples the loop answered; its amplifier is not stated",
        )
        about = plain(session.electrode or f"electrode {NOT_STATED}")
        self._electrodes = [
            file.create_icephys_electrode(
                name=cell, cell_id=cell, description=about, device=device, **_slice(session)
            )
            for cell in journal.cells
        ]
        self._timing = file.create_processing_module(
            name="icephys", description="How late the loop's answers were, and how long they took"
        )

    def add(self, number: int, recording: Recording) -> None:
        """Describe the series of a recording, and put its cells into the table."""
        name = name_of(number, recording)
        columns, rows = [], []
        for k, electrode in enumerate(self._electrodes):
            mine = self._of_cell(name, number, recording, k, electrode)
            columns += mine
            rows.append(
                self._file.add_intracellular_recording(
                    electrode=electrode,
                    response=mine[0].series,
                    response_start_index=0,
                    response_index_count=recording.ticks,
                    stimulus=mine[1].series,
                    stimulus_start_index=0,
                    stimulus_index_count=recording.ticks,
                )
            )
            self._note(name, recording, k)
        columns += self._of_timing(name, recording, self._timing)
        self._columns.append(columns)
        self.rows.append(rows)

    def finish(self) -> None:
        """Put what is known of each recording beside it in the table."""
        table = self._file.get_intracellular_recordings()
        about = {
            "recording": "what the names of its series begin with",
            "sweep": "name of the sweep; armed: no plan played",
            "model": "the model that the cell had when it began",
            "stimulus_kind": "the kinds of stimulus that the plan played",
            **dict(_COUNTS),
        }
        for name, what in about.items():
            table.add_column(name=name, description=what, data=self._told[name])

    def fill(self, recordings: Sequence[Recording], progress: Progress) -> None:
        """Fill the series of a file that is open for writing, reading each recording once."""
        total, done = sum(r.stop - r.start for r in recordings), 0
        for recording, columns in zip(recordings, self._columns, strict=True):
            for piece in self._journal.samples.pieces(recording.start, recording.stop):
                _, samples = ticks_of(piece)
                if len(samples):
                    _fill(recording, columns, samples)
                done += len(piece.samples)
                progress(done, total)

    def _of_cell(
        self,
        name: str,
        number: int,
        recording: Recording,
        k: int,
        electrode: IntracellularElectrode,
    ) -> list[Column]:
        """A cell's voltage, the current it was given, and what of it was the plan's."""
        cell = self._journal.cells[k]
        rate = 1000.0 * US_PER_MS / self._journal.interval_us
        delay_s, how = self._delay(recording)
        what = f"{sweep_name(recording)}, cell {cell}"
        common = {"electrode": electrode, "rate": rate, "sweep_number": np.uint64(number)}
        voltage = CurrentClampSeries(
            name=f"{name}_{cell}_voltage",
            description=f"Membrane voltage as the rig measured it; {what}. {_NAN}",
            data=_empty(recording),
            conversion=MV,
            starting_time=recording.time_s,
            comments=comments_of(name, "mV"),
            **common,
        )
        injected = CurrentClampStimulusSeries(
            name=f"{name}_{cell}_current",
            description=(
                f"Current as answered, model and stimulus together, behind the limits; {what}. "
                f"{how} {_NAN}"
            ),
            data=_empty(recording),
            conversion=PA,
            starting_time=recording.time_s + delay_s,
            comments=comments_of(name, "pA"),
            **common,
        )
        found = [Column(voltage, "v_mv", k), Column(injected, "i_pa", k)]
        if recording.span.planned and recording.span.fields.get("cell") in {None, k, cell}:
            stimulus = CurrentClampStimulusSeries(
                name=f"{name}_{cell}_stimulus",
                description=(
                    f"What of the current the plan's stimulus asked for, before the limits; {what}."
                    f" {_NAN}"
                ),
                data=_empty(recording),
                conversion=PA,
                starting_time=recording.time_s + delay_s,
                comments=comments_of(name, "pA"),
                **common,
            )
            self._file.add_stimulus(stimulus, use_sweep_table=False)
            found.append(Column(stimulus, "stimulus_pa", k))
        return found

    def _delay(self, recording: Recording) -> tuple[float, str]:
        """From a sample until its answer's current flows, s, and in words."""
        if self._loop.get("apply", "next-tick") == "next-tick":
            words = "The answer to a sample flows from the next tick on: so this starts a tick late"
            return self._journal.interval_us * US, f"{words}r than the voltage."
        lag_us = recording.mean_lag_us
        if lag_us is None:
            return 0.0, "An answer flows from its arrival on; the rig did not tell when that was."
        words = f"An answer flows from its arrival on, {lag_us:.3f} µs after its sample on average"
        return lag_us * US, f"{words}: this starts later than the voltage by so much."

    def _of_timing(self, name: str, recording: Recording, module: ProcessingModule) -> list[Column]:
        """How late answers were, and how long the loop took for them."""
        found = []
        for field, conversion, what in (
            (
                "lag_us",
                US,
                "As the rig reports with each sample: from the sample of the answer whose current "
                "flowed just before until that current reached the output; NaN where not told",
            ),
            ("service_nsec", NSEC, "From a sample's arrival in the loop until its answer is ready"),
        ):
            series = TimeSeries(
                name=f"{name}_{field.partition('_')[0]}",
                description=f"{what}. {_NAN}",
                data=_empty(recording),
                unit="seconds",
                conversion=conversion,
                starting_time=recording.time_s,
                rate=1000.0 * US_PER_MS / self._journal.interval_us,
                comments=comments_of(name, field),
            )
            module.add(series)
            found.append(Column(series, field, None))
        return found

    def _note(self, name: str, recording: Recording, k: int) -> None:
        row = {
            "recording": name,
            "sweep": sweep_name(recording),
            "model": plain(model_at(self._stretches, k, recording)),
            "stimulus_kind": stimulus_of(recording),
            "missed_ticks": recording.missed,
            "late": recording.late,
            "clipped": recording.clipped,
            "idle": recording.idle,
        }
        for key, value in row.items():
            self._told.setdefault(key, []).append(value)


_NAN = "NaN where a tick has no sample: see the intervals gaps."


def _slice(session: SessionSpec) -> dict[str, str]:
    return {"slice": plain(session.slices)} if session.slices else {}


def _empty(recording: Recording) -> H5DataIO:
    """Room for a value a tick; what is never filled reads as NaN and takes no space."""
    return H5DataIO(
        shape=(recording.ticks,),
        dtype=np.dtype(np.float32),
        chunks=(min(recording.ticks, CHUNK),),
        compression="gzip",
        compression_opts=1,
        shuffle=True,
        fillvalue=np.float32(np.nan),
    )


def _fill(recording: Recording, columns: Sequence[Column], samples: np.ndarray) -> None:
    """Put a piece's samples at their ticks."""
    at = samples["seq"] - recording.first_seq
    first, stop = int(at[0]), int(at[-1]) + 1
    for column in columns:
        values = samples[column.field]
        if column.cell is not None:
            values = values[:, column.cell]
        if column.field == "lag_us":
            values = np.where(values == NIL, np.nan, values)
        window = np.full(stop - first, np.nan, np.float32)
        window[at - first] = values
        column.series.data.dataset[first:stop] = window
