"""Replay: what ran is computed again bit for bit, and what did not run is found out."""

from __future__ import annotations

import json
import shutil
import sys
from pathlib import Path

import numpy as np
import pytest
from conftest import RawRig, running

from gatestep.commands.replay import replay
from gatestep.comparison import compare
from gatestep.errors import JournalError
from gatestep.journalbytes import Kind, dtype_from_json, pack_block
from gatestep.journalfile import open_journal
from gatestep.journalindex import Disk, build_index, payload_at, read_header
from gatestep.library import load_model
from gatestep.replay import CHUNK, Replay, conductance_currents
from gatestep.wire import LIVE

sys.path.insert(0, str(Path(__file__).resolve().parents[1] / "bench"))
import busy_session


@pytest.fixture(scope="module", params=[True, False], ids=["anticipating", "plain"])
def busy(request, tmp_path_factory):
    """A journal of a session in which everything happens."""
    folder = tmp_path_factory.mktemp("busy")
    return busy_session.play(folder, 3.0, 11, request.param).journal


@pytest.fixture(scope="module")
def quiet(tmp_path_factory):
    """A journal of one armed cell, whose voltage swings slowly and never repeats."""
    folder = tmp_path_factory.mktemp("quiet")
    with running(folder, record={"flush_ms": 5.0}, loop={"interval_us": 20.0}) as server:
        server.control.arm(force=True)
        with RawRig(server.server.endpoints()["loop"]) as rig:
            for k in range(1500):
                v_mv = -60.0 + 30.0 * np.sin(k / 100)
                rig.ask(k, float(v_mv), in_force=k - 2 if k > 1 else None, lag_us=20)
        path = server.control.status()["recording"]["path"]
    return Path(path)


def test_a_session_in_which_everything_happens_replays_as_identical(busy):
    """Swaps, sets, plans, trips, gaps, repeats, noise, lost answers: every bit of every answer."""
    with open_journal(busy) as journal:
        kinds = {event.kind for event in journal.events}
        assert {"swap", "set", "trip", "reset", "gap", "hold", "sweep_start"} <= kinds
        assert (journal.samples.column("flags") & LIVE).any()
        verdict = compare(journal)
    assert (verdict.identical, verdict.complete) == (True, True)
    assert verdict.compared == verdict.samples > 60_000
    assert verdict.notes == []


def test_replay_does_not_depend_on_where_it_is_cut(quiet):
    """Stretches of any length give the same currents."""
    with open_journal(quiet) as journal:
        whole = np.concatenate([s.i_pa for s in Replay(journal).run()])
        replay, parts = Replay(journal), []
        for stop in (1, 2, 700, 701, len(journal.samples)):
            parts += [s.i_pa for s in replay.run(stop)]
        np.testing.assert_array_equal(np.concatenate(parts), whole)
        assert len(journal.samples) < CHUNK


def rewritten(path: Path, copy: Path, change) -> Path:
    """A journal whose sample blocks a function has changed, each with its CRC made good."""
    disk = Disk(path)
    header = read_header(disk, path)
    dtype = dtype_from_json(header["sample_dtype"])
    index = build_index(disk, dtype.itemsize)
    out = b""
    for serial, place in enumerate(index.places):
        payload = payload_at(disk, place)
        if place.kind == Kind.CLOSE:
            continue
        if place.kind == Kind.SAMPLES:
            samples = np.frombuffer(payload, dtype).copy()
            change(place.position, samples)
            payload = samples.tobytes()
        out += pack_block(Kind(place.kind), payload, place.position, serial)
    disk.close()
    copy.write_bytes(out)
    return copy


@pytest.mark.parametrize("field", ["i_pa", "v_mv", "flags"])
def test_the_last_bit_of_one_sample_is_found(quiet, tmp_path, field):
    """A current, a voltage or a flag changed by the least there is: not identical, and where."""

    def change(position, samples):
        k = 400 - position
        if 0 <= k < len(samples):
            values = samples[field].reshape(len(samples), -1)
            bits = values.view(np.uint64)
            bits[k, 0] ^= np.uint64(1) if field != "flags" else np.uint64(2)
            samples[field] = values.reshape(samples[field].shape)

    with open_journal(rewritten(quiet, tmp_path / "changed.journal", change)) as journal:
        verdict = compare(journal)
    assert not verdict.identical
    assert verdict.first is not None
    # A voltage is also the end of the tick before: the sample at it is the first to differ.
    assert verdict.first.position in (400, 401)
    assert verdict.first.seq == verdict.first.position
    assert verdict.first.model == "squid-axon"


def test_a_torn_journal_replays_as_far_as_it_goes(quiet, tmp_path):
    """Cut anywhere, what is whole is identical."""
    data = quiet.read_bytes()
    for share in (0.5, 0.8, 0.99):
        torn = tmp_path / "torn.journal"
        torn.write_bytes(data[: int(share * len(data))])
        with open_journal(torn) as journal:
            verdict = compare(journal)
        assert verdict.identical
        assert any("torn" in note for note in verdict.notes)


def test_damage_stops_the_replay_and_is_told(quiet, tmp_path, capsys):
    """Behind a damaged block nothing can be computed: compared up to there, exit status 3."""
    with open_journal(quiet) as journal:
        [place] = [p for p in journal._index.spans if p.position < 700][-1:]
    data = bytearray(quiet.read_bytes())
    data[place.offset + 60] ^= 1
    damaged = tmp_path / "damaged.journal"
    damaged.write_bytes(data)
    assert replay(damaged, json_output=False) == 3
    said = capsys.readouterr().out
    assert said.startswith(f"identical: {place.position:,} of")
    assert "not compared" in said


def test_a_damaged_event_is_no_wrong_computation(quiet, tmp_path, capsys):
    """Where an order cannot be read, what follows is not compared, and the journal is blamed."""
    data = bytearray(quiet.read_bytes())
    with open_journal(quiet) as journal:
        place = next(iter(journal._index.of(Kind.EVENTS)))
    data[place.offset + 40] ^= 1
    damaged = tmp_path / "damaged.journal"
    damaged.write_bytes(data)
    assert replay(damaged, json_output=False) == 3
    said = capsys.readouterr().out
    assert said.startswith("nothing compared")
    assert "damaged: the block at byte" in said


def test_the_command_tells_programs_and_people(quiet, tmp_path, capsys):
    """Exit status 0 and 'identical'; JSON with the figures; what is no journal is an error."""
    assert replay(quiet, json_output=False) == 0
    assert capsys.readouterr().out == "identical: 1,500 of 1,500 samples, every bit\n"
    assert replay(quiet, json_output=True) == 0
    told = json.loads(capsys.readouterr().out)
    assert (told["identical"], told["complete"], told["compared"]) == (True, True, 1500)
    other = tmp_path / "other.journal"
    shutil.copy(__file__, other)
    with pytest.raises(JournalError, match="other"):
        replay(other, json_output=False)


def test_tables_are_built_from_the_model_files_where_none_are_recorded(tmp_path):
    """A journal without tables replays as identical too, by the files' text in it."""
    with running(tmp_path, record={"tables": False, "flush_ms": 5.0}) as server:
        server.control.arm(force=True)
        with RawRig(server.server.endpoints()["loop"]) as rig:
            for k in range(300):
                rig.ask(k, -60.0 + k % 7)
        path = server.control.status()["recording"]["path"]
    with open_journal(path) as journal:
        assert compare(journal).identical
        assert len(journal.samples) == 300


def test_currents_by_conductance_sum_to_the_answer_of_a_plain_loop(tmp_path):
    """Without anticipation and within the limits, the shares are the answer itself."""
    with running(tmp_path, loop={"interval_us": 20.0, "anticipate": False}) as server:
        server.control.arm(force=True)
        with RawRig(server.server.endpoints()["loop"]) as rig:
            for k in range(400):
                rig.ask(k, float(-60.0 + 20.0 * np.sin(k / 50)))
        path = server.control.status()["recording"]["path"]
    with open_journal(path) as journal:
        found = conductance_currents(journal, 100, 300)
        answered = journal.samples.column("i_pa", 100, 300)[:, 0]
        v_mv = journal.samples.column("v_mv", 100, 300)[:, 0]
    assert list(found) == ["Na", "K", "leak"]
    np.testing.assert_allclose(sum(found.values()), answered, rtol=1e-12, atol=1e-9)
    spec = load_model("squid-axon").spec
    [leak] = [c for c in spec.conductance if c.name == "leak"]
    expected = -leak.gmax_ns * (v_mv - leak.reversal_at(spec.temperature_c))
    np.testing.assert_allclose(found["leak"], expected, rtol=1e-12)
