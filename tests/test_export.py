"""gatestep export: NWB files held to pynwb's validator, nwbinspector, neo and the journal."""

from __future__ import annotations

import hashlib
import json
import subprocess
import sys
from itertools import pairwise
from pathlib import Path

import neo
import numpy as np
import pynwb
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from journals import Log, new_journal
from nwbinspector import inspect_nwbfile

from gatestep.commands.export import export as command
from gatestep.config import LoadedRig
from gatestep.errors import FileError, GatestepError, JournalError, MissingExtraError
from gatestep.journal import Journal
from gatestep.journalbytes import Kind
from gatestep.journalfacts import header_of
from gatestep.journalfile import open_journal
from gatestep.library import load_model
from gatestep.loop import Entry
from gatestep.nwb import export
from gatestep.nwbrecordings import NO_SAMPLE, UNREADABLE, Span, spans_of, survey
from gatestep.orders import Order
from gatestep.plans import WITH, WITHOUT, parse_plan
from gatestep.specs import RecordSpec, RigSpec
from gatestep.tables import build_tables
from gatestep.wire import CLIPPED, GAP, LATE, LIVE, REPEAT

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "bench"))
import busy_session

TICK_S = 20e-6
TICKS = 500
PLAN = """
title = "a plan of the tests"
[plan]
repeats = 1
pause_ms = 2.0
[[sweep]]
name = "step"
cell = "b"
duration_ms = 10.0
scale = [0.0, 1.0]
[[sweep.stimulus]]
kind = "step"
start_ms = 2.0
stop_ms = 8.0
current_pa = [100.0, 200.0]
"""
SUBJECT = {"subject_id": "A12", "species": "Mus musculus", "sex": "F", "age": "P21D"}
SESSION = {"description": "K added", "experimenter": ["Family, Given"], "electrode": "5 MOhm"}


def change(sweep, entries):
    """Sweep 1 misses ticks 100 to 139 and has tick 200 twice; 2 has late and clipped answers."""
    if sweep.index == 1:
        entries["flags"][140] |= GAP
        again = entries[200:201].copy()
        again["flags"] |= REPEAT
        again["v_mv"] += 1.0
        entries = np.concatenate((entries[:100], entries[140:201], again, entries[201:]))
    if sweep.index == 2:
        entries["flags"][10:15] |= LATE
        entries["flags"][20:23] |= CLIPPED
    return entries


def make_journal(folder: Path, **sections) -> Path:
    """A journal of PLAN on two cells; a model is swapped in before the third sweep."""
    cells = [{"name": name, "model": "leak"} for name in "ab"]
    spec = RigSpec.model_validate({"loop": {"interval_us": 20.0}, "cell": cells, **sections})
    rig, log = LoadedRig(folder / "rig.toml", 'title = "µ"\n', spec), Log(2)
    journal = Journal(RecordSpec(), folder, header_of(rig), 2, lambda _: None, "rig")
    models = []
    for name in ("leak", "squid-axon"):
        model = load_model(name)
        models.append(journal.add_model(model, build_tables(model.spec)))
    for cell in range(2):
        journal.note("in_force", cell=cell, model=models[0], name="leak")
    plan = parse_plan(PLAN.encode(), folder / "plan.toml")
    sweeps = plan.expand(interval_us=20.0)
    journal.note("plan", plan=plan.as_json(sweeps))
    journal.take(log.block(log.other(Entry.HOLD, code=1)))
    for sweep in sweeps:
        journal.take(log.block(log.samples(100)))
        if sweep.index == 2:
            journal.note("swap", cell=1, model=models[1], name="squid-axon")
            journal.note("set", cell=1, key="K.gmax_ns", which="gmax_ns", index=1, value=12.5)
        journal.note("sweep_start", sweep=sweep.index, **sweep.as_json())
        journal.take(log.block(change(sweep, log.samples(TICKS))))
        journal.flush()
        journal.note("sweep_end", sweep=sweep.index, complete=True)
    journal.note("mark", text="the end\0")
    return Path(journal.close()["path"])


def stretch(folder: Path, *pieces: np.ndarray, cells: int = 1, holds=()) -> Path:
    """A journal of an armed stretch; each piece of samples is a block of its own."""
    journal, log = new_journal(folder, cells), Log(cells)
    journal.take(log.block(log.other(Entry.ORDER, code=Order.ARM)))
    for k, piece in enumerate(pieces):
        if k in holds:
            journal.take(log.block(log.other(Entry.HOLD, code=k)))
        journal.take(log.block(piece))
        journal.flush()
    return Path(journal.close()["path"])


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    """A journal, its NWB file, and what the export says of it."""
    folder = tmp_path_factory.mktemp("made")
    journal = make_journal(folder, subject=SUBJECT, session=SESSION)
    return journal, folder / "out.nwb", export(journal, folder / "out.nwb")


def findings(path: Path) -> set[str]:
    """Names of the checks of nwbinspector that find something, save for its suggestions."""
    found = inspect_nwbfile(nwbfile_path=path)
    return {m.check_function_name for m in found if m.importance.name != "BEST_PRACTICE_SUGGESTION"}


def signals_of(path: Path) -> dict:
    """The signals that neo reads, by name."""
    blocks = neo.io.NWBIO(str(path), "r").read_all_blocks()
    return {a.name: a for b in blocks for s in b.segments for a in s.analogsignals}


def test_the_validators_of_the_standard_find_nothing(made):
    """The validator of pynwb is silent; nwbinspector has suggestions at most, facts being given."""
    _, path, _ = made
    assert pynwb.validate(path=str(path)) == []
    assert findings(path) == set()


def test_neo_reads_the_journal_s_voltages_and_currents(made):
    """An independent reader: each value is the journal's in float32, and NaN where none is."""
    journal, path, _ = made
    signals = signals_of(path)
    assert len(signals) == 4 * (2 * 2 + 1)
    with open_journal(journal) as opened:
        for k, sweep in enumerate(opened.sweeps):
            samples = opened.samples[sweep.start : sweep.stop]
            first = samples["seq"][0]
            for c, cell in enumerate("ab"):
                for name, field, unit in (
                    ("voltage", "v_mv", "mV"),
                    ("current", "i_pa", "pA"),
                    ("stimulus", "stimulus_pa", "pA"),
                )[: 2 + c]:  # the plan plays to the second cell
                    expected = np.full(TICKS, np.nan, np.float32)
                    for sample in samples:
                        if not sample["flags"] & REPEAT:
                            expected[sample["seq"] - first] = sample[field][c]
                    signal = signals[f"sweep_{k:04d}_{cell}_{name}"]
                    assert signal.units.dimensionality.string == unit
                    assert signal.sampling_rate.rescale("Hz").magnitude == pytest.approx(50_000)
                    # One unit of float32 is what the format may take from a value.
                    np.testing.assert_allclose(
                        signal.magnitude[:, 0], expected, rtol=np.finfo(np.float32).eps
                    )


def test_neo_has_a_segment_for_each_sweep_and_the_models_as_epochs(made):
    """Voltage and current of a sweep are found together; the epochs are the models' times."""
    _, path, result = made
    (block,) = neo.io.NWBIO(str(path), "r").read_all_blocks()
    segments = {s.name: s for s in block.segments}
    assert set(segments) == {"default", *(f"sweep_{k:04d}" for k in range(4))}
    assert all(len(segments[f"sweep_{k:04d}"].analogsignals) == 5 for k in range(4))
    (epoch,) = segments["default"].epochs
    assert len(epoch.times) == result.models == 3


def test_a_current_starts_when_it_flows(made):
    """With apply = next-tick the answer to a sample flows a tick later, on the rig's clock."""
    with pynwb.NWBHDF5IO(str(made[1]), "r") as io:
        file = io.read()
        v = [file.acquisition[f"sweep_{k:04d}_b_voltage"].starting_time for k in range(4)]
        i = [file.stimulus[f"sweep_{k:04d}_b_current"].starting_time for k in range(4)]
    np.testing.assert_allclose(np.subtract(i, v), TICK_S)
    np.testing.assert_allclose(np.diff(v), (TICKS + 100) * TICK_S)


def test_the_tables_group_the_plan_s_sweeps(made):
    """Cells are simultaneous, a ladder is sequential, repeats and conditions lie over them."""
    _, path, _ = made
    with pynwb.NWBHDF5IO(str(path), "r") as io:
        file = io.read()
        table = file.intracellular_recordings
        assert len(table) == 8
        names = [
            (row.iloc[0].timeseries.name, row.iloc[0].idx_start, row.iloc[0].count)
            for _, row in table.category_tables["responses"].to_dataframe().iterrows()
        ]
        assert names[2] == ("sweep_0001_a_voltage", 0, TICKS)
        assert list(table["missed_ticks"][:]) == [0, 0, 40, 40] + [0] * 4
        for name, count in (("late", 5), ("clipped", 3)):
            assert list(table[name][:]) == [0] * 4 + [count] * 2 + [0] * 2
        models = ["leak"] * 5 + ["squid-axon", "leak", "squid-axon"]
        assert list(table["model"][:]) == models
        simultaneous = file.icephys_simultaneous_recordings.to_dataframe()
        assert [list(r.index) for r in simultaneous["recordings"]] == [
            [2 * k, 2 * k + 1] for k in range(4)
        ]
        assert simultaneous["complete"].all()
        sequential = file.icephys_sequential_recordings.to_dataframe()
        members = [list(r.index) for r in sequential["simultaneous_recordings"]]
        assert sorted(k for mine in members for k in mine) == list(range(4))
        assert set(sequential["stimulus_type"]) == {"step"}
        conditions = file.icephys_experimental_conditions.to_dataframe()
        assert list(conditions["condition"]) == [WITHOUT, WITH]
        with open_journal(made[0]) as opened:
            asked = [s.fields["condition"] for s in opened.sweeps]
        repetitions = file.icephys_repetitions.to_dataframe()
        assert list(repetitions["repeat"]) == [0, 0]
        for _, condition in conditions.iterrows():
            for _, repetition in condition["repetitions"].iterrows():
                for _, run in repetition["sequential_recordings"].iterrows():
                    mine = run["simultaneous_recordings"].index
                    assert {asked[k] for k in mine} == {condition["condition"]}


def test_models_gaps_and_events_are_intervals_and_times(made):
    """A row for each model in force with its file in full; the gap's ticks; every event."""
    journal, path, _ = made
    with pynwb.NWBHDF5IO(str(path), "r") as io, open_journal(journal) as opened:
        file = io.read()
        models = file.intervals["models"].to_dataframe()
        assert list(models["model"]) == ["leak", "leak", "squid-axon"]
        axon = load_model("squid-axon")
        row = models.iloc[2]
        assert (row["text"], row["sha256"], row["cell"]) == (axon.text, axon.sha256, "b")
        assert hashlib.sha256(row["text"].encode()).hexdigest() == row["sha256"]
        assert "K gmax 12.5 nS" in row["parameters"]
        third = file.acquisition["sweep_0002_b_voltage"].starting_time
        assert row["start_time"] == models.iloc[1]["stop_time"] == pytest.approx(third)
        (gap,) = file.intervals["gaps"].to_dataframe().to_dict("records")
        second = file.acquisition["sweep_0001_a_voltage"].starting_time
        assert gap["start_time"] == pytest.approx(second + 100 * TICK_S)
        assert gap["stop_time"] == pytest.approx(second + 140 * TICK_S)
        assert (gap["ticks"], gap["reason"], gap["recording"]) == (40, NO_SAMPLE, "sweep_0001")
        events = file.events["loop_events"].to_dataframe()
        assert list(events["kind"]) == [e.kind for e in opened.events]
        assert list(events["place"]) == [e.position for e in opened.events]
        told = events.loc[events["kind"] == "sweep_start", "timestamp"]
        starts = [file.acquisition[f"sweep_{k:04d}_a_voltage"].starting_time for k in range(4)]
        np.testing.assert_allclose(told, starts, atol=1e-9)


def test_lags_and_service_times_are_series_in_seconds(made):
    """Both are the journal's, through their conversion to seconds."""
    journal, path, _ = made
    with pynwb.NWBHDF5IO(str(path), "r") as io, open_journal(journal) as opened:
        module = io.read().processing["icephys"]
        sweep = opened.sweeps[2]
        samples = opened.samples[sweep.start : sweep.stop]
        for name, field, factor in (("lag", "lag_us", 1e-6), ("service", "service_nsec", 1e-9)):
            series = module[f"sweep_0002_{name}"]
            assert series.unit == "seconds"
            found = series.data[:] * series.conversion
            np.testing.assert_allclose(found, samples[field] * factor, rtol=1e-6)


def test_facts_are_the_rig_file_s_and_their_provenance_is_kept(made):
    """Given facts are in the file, missing ones are named; the journal is known by its hash."""
    journal, path, result = made
    digest = hashlib.sha256(journal.read_bytes()).hexdigest()
    with pynwb.NWBHDF5IO(str(path), "r") as io:
        file = io.read()
        assert {key: getattr(file.subject, key) for key in SUBJECT} == SUBJECT
        assert file.session_description == "K added"
        assert file.experimenter == ("Family, Given",)
        assert file.keywords is None  # neo cannot read a file that has any
        assert {e.cell_id for e in file.icephys_electrodes.values()} == {"a", "b"}
        kept = json.loads(str(file.get_scratch("provenance")))
        assert kept["journal"]["sha256"] == file.identifier == digest == result.journal_sha256
        assert kept["versions"]["numpy"]
        assert str(file.get_scratch("rig_file")) == 'title = "µ"\n'
        assert str(file.get_scratch("plan_file_1")) == PLAN
    assert {"subject.strain", "session.lab"} <= set(result.missing)
    assert not {"subject.sex", "session.experimenter"} & set(result.missing)
    assert (result.recordings, result.planned, result.cells) == (4, 4, 2)
    assert (result.samples, result.missed_ticks, result.gaps) == (4 * TICKS - 40, 40, 1)
    assert (result.repeats, result.outside, result.unreadable) == (1, 400, 0)


def test_what_the_rig_file_does_not_say_is_not_made_up(tmp_path, capsys):
    """Without facts there is no subject, and the command names every one that is missing."""
    journal, out = stretch(tmp_path, Log(1).samples(50)), tmp_path / "out.nwb"
    assert command(journal, out) == 0
    said = capsys.readouterr().out
    assert "[subject]: subject_id, species, strain, genotype, sex, age" in said
    assert "[session]: description, experimenter, lab" in said
    with pynwb.NWBHDF5IO(str(out), "r") as io:
        file = io.read()
        assert file.subject is None
        assert "not stated" in file.session_description
    assert findings(out) == {"check_subject_exists"}


def offsets_of(journal: Path) -> list[int]:
    """Where the blocks of samples lie in a closed journal."""
    with open_journal(journal) as opened:
        index = opened.closing["index"]
    pairs = zip(index["kind"], index["offset"], strict=True)
    return [offset for kind, offset in pairs if kind == Kind.SAMPLES]


def test_damaged_and_torn_journals_give_what_can_be_read(tmp_path):
    """A damaged block is NaN with its reason; a torn tail and the sweep it cut are told of."""
    journal = make_journal(tmp_path)
    data = bytearray(journal.read_bytes())
    torn = 4 * (100 + TICKS)
    samples = offsets_of(journal)
    data[samples[1] + 40] ^= 1
    journal.write_bytes(data[: samples[-1] + 100])
    result = export(journal, tmp_path / "out.nwb")
    assert (result.torn_bytes, result.unreadable > 0) == (100, True)
    assert result.samples + result.repeats + result.outside + result.unreadable < torn
    assert pynwb.validate(path=str(tmp_path / "out.nwb")) == []


def test_without_a_plan_an_armed_stretch_is_a_recording(tmp_path):
    """The samples from arming on; where numbers begin again, another recording does."""
    log = Log(1)
    journal = stretch(tmp_path, log.samples(300), log.samples(200, seqs=5 + np.arange(200)))
    result = export(journal, tmp_path / "out.nwb")
    assert (result.recordings, result.planned, result.samples) == (2, 0, 500)
    signals = signals_of(tmp_path / "out.nwb")
    ends, begins = (signals[f"armed_000{k}_c0_voltage"] for k in range(2))
    assert (len(ends), len(begins)) == (300, 200)
    assert float(begins.t_start) == pytest.approx(float(ends.t_stop))


def test_a_damaged_block_within_a_recording_is_a_gap_with_its_reason(tmp_path):
    """The ticks of a block that cannot be read are NaN and said to be unreadable."""
    log = Log(1)
    path = stretch(tmp_path, *(log.samples(50) for _ in range(3)))
    data = bytearray(path.read_bytes())
    data[offsets_of(path)[1] + 40] ^= 1
    path.write_bytes(data)
    with open_journal(path) as opened:
        (found,) = survey(opened, spans_of(opened)).recordings
    assert [tuple(gap) for gap in found.gaps] == [(50, 50, UNREADABLE)]
    assert (found.ticks, found.samples, found.complete) == (150, 100, False)


@settings(settings.get_profile("few"))
@given(st.data())
def test_every_sample_has_its_tick(tmp_path_factory, data):
    """However numbers run and blocks fall, ticks are where a plain walk puts the samples."""
    steps = st.sampled_from([1, 1, 1, 1, 0, 2, 7, -40, 10**7, 2**40])
    sizes = data.draw(st.lists(st.integers(1, 9), min_size=1, max_size=6))
    log, seq, pieces = Log(1), 100, []
    for size in sizes:
        seqs = []
        for step in data.draw(st.lists(steps, min_size=size, max_size=size)):
            seq = max(seq + step, 0)
            seqs.append(seq)
        piece = log.samples(size, seqs=np.array(seqs))
        piece["flags"] = np.where(np.diff(seqs, prepend=-1) == 0, LIVE | REPEAT, LIVE)
        pieces.append(piece)
    holds = set(data.draw(st.lists(st.integers(0, len(sizes) - 1), max_size=2)))
    path = stretch(tmp_path_factory.mktemp("ticks"), *pieces, holds=holds)
    with open_journal(path) as opened:
        total = len(opened.samples)
        span = Span(0, 0, data.draw(st.integers(0, total)), total, True, {})
        found = survey(opened, [span] if span.start < span.stop else []).recordings
        samples = opened.samples[:]
        held = {e.position for e in opened.events if e.kind == "hold"}
    last, fresh_hold, plain = None, False, []
    for place, sample in enumerate(samples):
        fresh_hold |= place in held
        if sample["flags"] & REPEAT:
            continue
        step = None if last is None else int(sample["seq"]) - last
        last = int(sample["seq"])
        begins = fresh_hold or step is None or not 0 < step <= round(10 / TICK_S) + 1
        fresh_hold = False
        if place < span.start:
            continue
        if begins or not plain:
            plain.append([])
        plain[-1].append((place, last))
    assert [(r.start, r.first_seq, r.last_seq, r.samples) for r in found] == [
        (one[0][0], one[0][1], one[-1][1], len(one)) for one in plain
    ]
    for before, after in pairwise(found):
        assert after.time_s >= before.time_s + before.ticks * TICK_S - 1e-6
    assert all(one.missed == sum(gap.ticks for gap in one.gaps) for one in found)


def test_a_session_in_which_everything_happens_is_exported(tmp_path, capsys):
    """A real server's journal with swaps, trips, gaps and plans: valid, and replayed."""
    journal = busy_session.play(tmp_path, 1.0, 11, True).journal
    out = tmp_path / "busy.nwb"
    assert command(journal, out, replay=True, json_output=True) == 0
    told = json.loads(capsys.readouterr().out)
    assert told["replay"]["identical"]
    assert findings(out) == {"check_subject_exists"}
    parts = ("samples", "repeats", "outside", "unreadable")
    with open_journal(journal) as opened:
        assert sum(told[part] for part in parts) == len(opened.samples)
    with pynwb.NWBHDF5IO(str(out), "r") as io:
        file = io.read()
        assert json.loads(str(file.get_scratch("replay")))["identical"]
        times = file.events["loop_events"]["timestamp"][:]
        assert (np.diff(times) >= 0).all()
        assert len(file.intracellular_recordings) == told["recordings"]
        ticks = [len(s.data) for s in file.acquisition.values()]
        assert sum(ticks) == told["ticks"] == told["samples"] + told["missed_ticks"]


@pytest.mark.parametrize(
    ("name", "words"),
    [
        ("out.h5", "ends in .nwb"),
        ("there.nwb", "--overwrite"),
        ("folder.nwb", "is a folder"),
        ("no/such/out.nwb", "no folder"),
    ],
)
def test_places_that_cannot_be_are_refused(tmp_path, name, words):
    """Each with its reason, before any work, and nothing is touched."""
    journal = stretch(tmp_path, Log(1).samples(20))
    (tmp_path / "there.nwb").write_text("kept", "utf-8")
    (tmp_path / "folder.nwb").mkdir()
    before = sorted(tmp_path.rglob("*"))
    with pytest.raises(FileError, match=words):
        export(journal, tmp_path / name)
    assert sorted(tmp_path.rglob("*")) == before
    assert (tmp_path / "there.nwb").read_text("utf-8") == "kept"


def test_a_file_is_replaced_only_when_asked_and_a_journal_never(tmp_path):
    """--overwrite puts a whole file in its place; the journal itself is refused."""
    journal = stretch(tmp_path, Log(1).samples(20))
    out = tmp_path / "out.nwb"
    out.write_text("old", "utf-8")
    export(journal, out, overwrite=True)
    assert pynwb.validate(path=str(out)) == []
    before, link = journal.read_bytes(), tmp_path / "same.nwb"
    link.symlink_to(journal)
    with pytest.raises(FileError, match="the journal itself"):
        export(journal, link, overwrite=True)
    assert journal.read_bytes() == before


def test_journals_without_anything_to_export_are_refused(tmp_path):
    """No armed stretch, or no journal at all: an error in words, and no file."""
    journal, log = new_journal(tmp_path), Log(1)
    journal.take(log.block(log.samples(20, flags=0)))
    path = Path(journal.close()["path"])
    with pytest.raises(GatestepError, match="nothing to export"):
        export(path, tmp_path / "out.nwb")
    (tmp_path / "x.journal").write_text("[loop]\n" * 20, "utf-8")
    with pytest.raises(JournalError, match="not a journal"):
        export(tmp_path / "x.journal", tmp_path / "out.nwb")
    assert list(tmp_path.glob("*.nwb")) == list(tmp_path.glob(".*")) == []


def test_without_pynwb_the_extra_is_named(tmp_path, monkeypatch):
    """Whoever lacks it is told what to install."""
    monkeypatch.setitem(sys.modules, "pynwb", None)
    with pytest.raises(MissingExtraError, match=r"gatestep\[nwb\]"):
        export(tmp_path / "x.journal", tmp_path / "out.nwb")


FULL = """
import resource, signal, sys
signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
resource.setrlimit(resource.RLIMIT_FSIZE, (200_000, 200_000))
sys.argv = ["gatestep", "export", *sys.argv[1:]]
from gatestep.cli import main
main()
"""


def test_a_full_disk_leaves_nothing_behind(tmp_path):
    """Where no more can be written, the command says so on one line and takes its file away."""
    journal = stretch(tmp_path, Log(1).samples(60_000))
    out = tmp_path / "out" / "full.nwb"
    out.parent.mkdir()
    command = [sys.executable, "-c", FULL, str(journal), str(out)]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 1, done.stderr
    assert done.stderr.startswith(f"gatestep: {out}: cannot be written: ")
    assert done.stderr.count("\n") == 1
    assert list(out.parent.iterdir()) == []
