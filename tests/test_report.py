"""gatestep report: what it measures of a journal, held to how the journal was made."""

from __future__ import annotations

import csv
import json
import subprocess
import sys
from itertools import combinations
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from journals import Log, new_journal

from gatestep.commands.report import report
from gatestep.commands.report_figures import COLOURS, RAMP, shades, slug, thinned
from gatestep.commands.report_rates import in_order
from gatestep.errors import FileError, GatestepError, MissingExtraError
from gatestep.journalfile import open_journal
from gatestep.loop import Entry
from gatestep.orders import Order
from gatestep.plans import parse_plan
from gatestep.stimulus import waveform
from gatestep.sweepmeasures import Measurer, read_stretch, tasks_of
from gatestep.wire import CLIPPED, LATE, LIVE, REPEAT

TICK_MS = 0.02
PLAN = """
title = "a plan of the tests"
[plan]
order = "interleaved"
threshold_mv = -10.0
[[sweep]]
name = "step"
duration_ms = 200.0
scale = [0.0, 1.0]
[[sweep.stimulus]]
kind = "step"
start_ms = 50.0
stop_ms = 150.0
current_pa = [-100.0, 0.0, 200.0]
"""


def voltage(sweep, ticks: int) -> np.ndarray:
    """Rest at -70 mV; -100 pA over 200 MΩ, tau 10 ms; 200 pA give spikes every 10 or 20 ms."""
    t_ms = np.arange(ticks) * TICK_MS
    v_mv = np.full(ticks, -70.0)
    current = sweep.step["current_pa"]
    if current < 0:
        on = 1.0 - np.exp(-(t_ms - 50.0).clip(0.0) / 10.0)
        v_mv += np.where(t_ms < 150.0, -20.0 * on, -20.0 * np.exp(-(t_ms - 150.0) / 10.0))
    if current > 0:
        for centre in np.arange(60.0, 150.0, 10.0 if sweep.scale else 20.0):
            v_mv += 100.0 * np.exp(-0.5 * ((t_ms - centre) / 0.4) ** 2)
    return v_mv


def feed(journal, log, entries) -> None:
    for k in range(0, len(entries), 500):
        journal.take(log.block(entries[k : k + 500]))
        if k % 2500 == 2000:
            journal.flush()
    journal.flush()


def make_journal(folder: Path, change=None, end_last: bool = True) -> Path:
    """A journal of PLAN, one cell; ``change(sweep, entries)`` may alter a sweep's samples.

    The model injects 50 pA throughout where there is one.
    """
    plan = parse_plan(PLAN.encode(), folder / "plan.toml")
    sweeps = plan.expand(interval_us=20.0)
    journal, log = new_journal(folder), Log(1)
    journal.note("plan", plan=plan.as_json(sweeps))
    for sweep in sweeps:
        feed(journal, log, quiet(log, 250))
        entries = quiet(log, sweep.ticks)
        stimulus = waveform(sweep.stimulus, sweep.ticks, 20.0)
        entries["v_mv"][:, 0] = voltage(sweep, sweep.ticks)
        entries["stimulus_pa"][:, 0] = stimulus
        entries["i_pa"][:, 0] = stimulus + 50.0 * sweep.scale
        if change is not None:
            entries = change(sweep, entries)
        journal.note("sweep_start", sweep=sweep.index, **sweep.as_json())
        feed(journal, log, entries)
        if end_last or sweep is not sweeps[-1]:
            journal.note("sweep_end", sweep=sweep.index, complete=True)
    return Path(journal.close()["path"])


def quiet(log: Log, count: int) -> np.ndarray:
    entries = log.samples(count, flags=LIVE)
    for name in ("i_pa", "stimulus_pa"):
        entries[name] = 0.0
    entries["v_mv"], entries["lag_us"] = -70.0, 31.5
    return entries


def rows_of(path: Path, capsys, **options) -> list[dict]:
    assert report(path, json_output=True, **options) == 0
    return json.loads(capsys.readouterr().out)["sweeps"]


def test_each_sweep_has_the_measures_it_was_made_with(tmp_path, capsys):
    """Spikes, rates, shapes, resistances and charge follow from how the sweeps were made."""
    rows = rows_of(make_journal(tmp_path), capsys)
    assert [(r["current_pa"], r["condition"].split()[0]) for r in rows] == [
        (i, c) for i in (-100.0, 0.0, 200.0) for c in ("without", "with")
    ]
    assert [r["spikes"] for r in rows] == [0, 0, 0, 0, 5, 9]
    assert [r["rate_hz"] for r in rows] == pytest.approx([0, 0, 0, 0, 50, 90])
    assert {r["rest_mv"] for r in rows} == {-70.0}
    fires = rows[5]
    assert fires["steady_hz"] == pytest.approx(100.0)
    assert fires["peak_mv"] == pytest.approx(30.0, abs=0.1)
    assert fires["width_ms"] == pytest.approx(2.0 * np.sqrt(2.0 * np.log(2.0)) * 0.4, abs=0.005)
    rise = 10.0 - 0.4 * np.sqrt(2.0 * np.log(100.0 / 60.0))  # through -10 mV
    assert fires["latency_ms"] == pytest.approx(rise, abs=0.005)
    assert len(fires["spikes_ms"]) == 9
    plain, given = rows[0], rows[1]
    assert plain["input_mohm"] == pytest.approx(200.0, rel=1e-3)
    assert plain["tau_ms"] == pytest.approx(10.0, rel=1e-2)
    assert given["own_mohm"] == pytest.approx(200.0, rel=1e-3)  # 50 pA more at rest, too
    assert rows[2]["input_mohm"] is rows[5]["input_mohm"] is None
    assert [r["stimulus_pc"] for r in rows] == pytest.approx([-10, -10, 0, 0, 20, 20])
    assert [r["charge_pc"] for r in rows] == pytest.approx([-10, 0, 0, 10, 20, 30])
    assert all(r["complete"] for r in rows)
    assert {(r["late"], r["lag_us"], r["clipped"], r["missed"]) for r in rows} == {(0, 31.5, 0, 0)}


def test_what_the_loop_did_is_counted(tmp_path, capsys):
    """Late and clipped answers, missing ticks, repeats and answers of 0 are told per sweep."""

    def change(sweep, entries):
        if sweep.index == 1:
            entries["flags"][100:130] |= LATE
            entries["lag_us"][100:130] = 77.0
            entries["lag_us"][200:] = -1.0
        if sweep.index == 2:
            entries["flags"][:7] |= CLIPPED
        if sweep.index == 3:
            return np.delete(entries, slice(1000, 1040))
        if sweep.index == 4:
            again = entries[500:510].copy()
            again["flags"] |= REPEAT
            return np.concatenate([entries[:510], again, entries[510:]])
        if sweep.index == 5:
            entries["flags"][9000:] &= ~LIVE
        return entries

    rows = rows_of(make_journal(tmp_path, change), capsys)
    assert [r["late"] for r in rows] == [0, 30, 0, 0, 0, 0]
    assert rows[1]["lag_us"] == 77.0
    assert [r["clipped"] for r in rows] == [0, 0, 7, 0, 0, 0]
    assert [r["missed"] for r in rows] == [0, 0, 0, 40, 0, 0]
    assert rows[3]["charge_pc"] == pytest.approx(10.0)  # held through the gap
    assert rows[4]["samples"] == 10_000
    assert rows[4]["spikes"] == 5
    assert [r["idle"] for r in rows] == [0, 0, 0, 0, 0, 1000]
    assert [r["complete"] for r in rows] == [True] * 5 + [False]


def test_a_sweep_that_was_cut_short_is_measured_but_not_in_the_rates(tmp_path, capsys):
    """A torn or halted plan: its last sweep counts as not complete."""
    assert report(make_journal(tmp_path, end_last=False), json_output=True) == 0
    result = json.loads(capsys.readouterr().out)
    assert [r["complete"] for r in result["sweeps"]] == [True] * 5 + [False]
    rates = {c["condition"]: c for c in result["conditions"]}
    assert rates["without the conductance"]["current_pa"] == [-100.0, 0.0, 200.0]
    assert rates["without the conductance"]["mean_hz"] == pytest.approx([0.0, 0.0, 50.0])
    assert rates["with the conductance"]["current_pa"] == [-100.0, 0.0]


def test_a_damaged_block_is_left_out_and_told(tmp_path, capsys):
    """Never a wrong number from damaged bytes: the samples are missing and counted."""
    path = make_journal(tmp_path)
    with open_journal(path) as journal:
        sweep = journal.sweeps[1]
        place = next(p for p in journal._index.spans if p.position >= sweep.start + 2000)
    content = bytearray(path.read_bytes())
    content[place.offset + 200] ^= 0x40
    path.write_bytes(content)
    rows = rows_of(path, capsys)
    assert 0 < rows[1]["damaged"] < 10_000
    assert rows[1]["samples"] + rows[1]["damaged"] == 10_000
    assert [r["complete"] for r in rows] == [True, False, True, True, True, True]
    report(path)
    assert "samples cannot be read: their blocks are damaged" in capsys.readouterr().out


def test_numbers_that_start_again_end_the_stretch(tmp_path):
    """A rig that begins anew within a stretch: what came before is measured, no more."""
    journal, log = new_journal(tmp_path), Log(1)
    first = log.samples(100)
    again = log.samples(50, seqs=np.arange(1, 51))
    journal.take(log.block(first, again))
    with open_journal(journal.close()["path"]) as held:
        stretch = read_stretch(held, 0, 150, 0)
    assert stretch.restarted
    assert stretch.size == 100
    assert stretch.t_ms[-1] == pytest.approx(99 * TICK_MS)


def armed_journal(folder: Path, cells: int = 1) -> Path:
    """Idle, armed for 3000 samples, disarmed, armed again for 1000 until the end."""
    journal, log = new_journal(folder, cells), Log(cells)
    t_ms = np.arange(3000) * TICK_MS
    live = log.samples(3000)
    live["v_mv"] = (-70.0 + 100.0 * np.exp(-0.5 * ((t_ms - 30.0) / 0.4) ** 2))[:, None]
    for part in (
        log.samples(200, flags=0),
        log.other(Entry.ORDER, number=1, code=Order.ARM),
        live,
        log.other(Entry.ORDER, number=2, code=Order.DISARM),
        log.samples(200, flags=0),
        log.other(Entry.ORDER, number=3, code=Order.ARM),
        log.samples(1000),
    ):
        feed(journal, log, part)
    return Path(journal.close()["path"])


def test_without_a_plan_each_armed_stretch_is_one_sweep(tmp_path, capsys):
    """Contract: a journal of someone who armed and watched is measured, too."""
    rows = rows_of(armed_journal(tmp_path), capsys)
    assert [(r["start"], r["samples"]) for r in rows] == [(200, 3000), (3400, 1000)]
    assert rows[0]["spikes"] == 1
    assert rows[0]["seconds"] == pytest.approx(0.06)
    assert rows[0]["current_pa"] is None
    report(armed_journal(tmp_path))
    assert "no plan in it" in capsys.readouterr().out


def test_every_cell_of_an_armed_stretch_has_its_own_line(tmp_path, capsys):
    """Two cells, two lines a stretch, each of its own cell's voltages."""
    path = armed_journal(tmp_path, 2)
    rows = rows_of(path, capsys)
    assert [r["cell"] for r in rows] == ["c0", "c1", "c0", "c1"]
    with open_journal(path) as journal:
        made, stretch = Measurer(journal).measure(tasks_of(journal)[3])
        i_pa = journal.samples[3400:4400]["i_pa"][:, 1]
    assert np.array_equal(stretch.i_pa, i_pa)
    assert made.charge_pc == pytest.approx(i_pa.sum() * TICK_MS / 1000.0)


def test_a_journal_with_nothing_to_measure_says_so(tmp_path):
    """A server that was never armed has recorded no sweep."""
    journal, log = new_journal(tmp_path), Log(1)
    journal.take(log.block(log.samples(100, flags=0)))
    path = journal.close()["path"]
    with pytest.raises(GatestepError, match="no sweep and no armed stretch"):
        report(Path(path))


def test_the_csv_has_a_line_a_sweep_with_the_same_values(tmp_path, capsys):
    """Python's csv reads back what the JSON says; what was not measured is empty."""
    table = tmp_path / "out.csv"
    rows = rows_of(make_journal(tmp_path), capsys, table=table)
    with table.open(encoding="utf-8", newline="") as file:
        read = list(csv.DictReader(file))
    assert len(read) == 6
    for row, line in zip(rows, read, strict=True):
        for key, text in line.items():
            expected = row[key]
            assert text == ("" if expected is None else str(expected))


def test_the_tables_show_every_sweep_and_what_is_wrong(tmp_path, capsys):
    """For people: both tables, the plan's title, and notes on what is not as it should be."""

    def change(sweep, entries):
        if sweep.index == 5:
            entries["flags"][10:20] |= LATE
        return entries

    report(make_journal(tmp_path, change, end_last=False))
    out = capsys.readouterr().out
    assert out.startswith("a plan of the tests · ")
    assert out.count("without the conductance") == 6
    assert "not complete: 6" in out
    assert "10 answers came late" in out
    assert "NO" in out


def test_figures_are_drawn_for_each_condition_and_the_rates(tmp_path, capsys):
    """PNG files that are no blank sheets, and no half-written ones beside them."""
    from matplotlib.image import imread

    folder = tmp_path / "figures" / "here"
    report(make_journal(tmp_path), figure=folder, json_output=True)
    names = [Path(f).name for f in json.loads(capsys.readouterr().out)["figures"]]
    assert names == [
        "sweeps-1-step-without-the-conductance.png",
        "sweeps-2-step-with-the-conductance.png",
        "rates.png",
    ]
    assert sorted(p.name for p in folder.iterdir()) == sorted(names)
    for name in names:
        assert imread(folder / name)[..., :3].std() > 0.05


def test_without_matplotlib_the_extra_is_named(tmp_path, monkeypatch):
    """Figures are an extra; all else goes without it."""
    monkeypatch.setitem(sys.modules, "matplotlib.figure", None)
    path = armed_journal(tmp_path)
    assert report(path) == 0
    with pytest.raises(MissingExtraError, match=r"gatestep\[figure\]"):
        report(path, figure=tmp_path / "f")


@pytest.mark.parametrize("option", ["figure", "table"])
def test_a_place_that_cannot_be_written_is_told(tmp_path, option):
    """A file where a folder should be: one clear error that names the path."""
    path = armed_journal(tmp_path)
    (tmp_path / "file").write_text("mine")
    with pytest.raises(FileError, match="file"):
        report(path, **{option: tmp_path / "file" / "under"})
    assert (tmp_path / "file").read_text() == "mine"


def test_figures_without_a_plan_need_no_currents(tmp_path, capsys):
    """No step, no legend, no rates: one figure of the armed stretches."""
    report(armed_journal(tmp_path), figure=tmp_path / "f", json_output=True)
    assert len(json.loads(capsys.readouterr().out)["figures"]) == 1


@given(y=arrays(np.float64, st.integers(0, 3000), elements=st.floats(-1e3, 1e3)))
def test_thinning_keeps_every_columns_extremes(y):
    """A long trace is drawn by its lowest and highest samples, in their order."""
    t_ms = np.arange(y.size) * 1.0
    thin_ms, thin = thinned(t_ms, y, 50)
    assert np.array_equal(thin, y[thin_ms.astype(int)])
    assert np.all(np.diff(thin_ms) >= 0)
    if y.size:
        assert (thin.min(), thin.max()) == (y.min(), y.max())
    assert thin.size <= max(4 * 50, 2 * 50 + 60)


def _lab(colour: str, seen: np.ndarray) -> np.ndarray:
    """CIE L*a*b* (D65) of an sRGB colour as an eye sees it whose linear matrix is given."""
    srgb = np.array([int(colour[k : k + 2], 16) for k in (1, 3, 5)]) / 255.0
    linear = np.where(srgb <= 0.04045, srgb / 12.92, ((srgb + 0.055) / 1.055) ** 2.4)
    linear = np.clip(seen @ linear, 0.0, 1.0)
    to_xyz = [[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]]
    xyz = np.array(to_xyz) @ linear / [0.9505, 1.0, 1.089]
    f = np.where(xyz > 0.008856, np.cbrt(xyz), 7.787 * xyz + 16.0 / 116.0)
    return np.array([116.0 * f[1] - 16.0, 500.0 * (f[0] - f[1]), 200.0 * (f[1] - f[2])])


EYES = {
    "usual": np.eye(3),
    # Machado, Oliveira and Fernandes 2009, IEEE TVCG 15:1291, severity 1.0 (from memory).
    "protanope": np.array(
        [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216],
         [-0.003882, -0.048116, 1.051998]]
    ),
    "deuteranope": np.array(
        [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413],
         [-0.011820, 0.042940, 0.968881]]
    ),
    "tritanope": np.array(
        [[1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602],
         [0.004733, 0.691367, 0.303900]]
    ),
}  # fmt: skip


@pytest.mark.parametrize("eye", EYES)
def test_colours_stay_apart_for_every_eye(eye):
    """Any two conditions differ by at least 25 in L*a*b*, ten times what can just be told."""
    seen = [_lab(colour, EYES[eye]) for colour in COLOURS]
    assert min(np.linalg.norm(a - b) for a, b in combinations(seen, 2)) > 25.0


@pytest.mark.parametrize("eye", EYES)
def test_the_ramp_darkens_with_the_current(eye):
    """Lightness falls from each shade to the next, so the order is seen without hues."""
    lightness = [_lab(colour, EYES[eye])[0] for colour in shades(12)]
    assert np.all(np.diff(lightness) < -1.0)
    assert shades(len(RAMP)) == list(RAMP)
    assert len(shades(1)) == 1


def test_labels_that_differ_in_numbers_rise_with_them():
    """A shuffled ladder's conditions come in order; others stay as they first came."""
    labels = ["without", "K, K.gmax_ns = 1080", "K, K.gmax_ns = 540.5", "K2 × 10", "K2 × -1"]
    assert in_order([*labels, "without", "K1 × 3"]) == [
        "without", "K, K.gmax_ns = 540.5", "K, K.gmax_ns = 1080", "K2 × -1", "K2 × 10", "K1 × 3",
    ]  # fmt: skip


LADDER = """
title = "a ladder of the tests"
[plan]
order = "shuffled"
repeats = 2
[[sweep]]
name = "rung"
duration_ms = 100.0
parameters.K.gmax_ns = [5.0, 10.0, 20.0]
[[sweep.stimulus]]
kind = "step"
stop_ms = 100.0
current_pa = [40.0, 80.0]
"""


def test_a_ladder_has_its_rates_against_what_was_stepped_through(tmp_path, capsys):
    """For each current a line over gmax; made to fire gmax / 5 spikes in 100 ms."""
    plan = parse_plan(LADDER.encode(), tmp_path / "plan.toml")
    journal, log = new_journal(tmp_path), Log(1)
    for sweep in plan.expand(interval_us=20.0):
        entries = quiet(log, sweep.ticks)
        for k in range(round(sweep.parameters["K.gmax_ns"] / 5.0)):
            entries["v_mv"][1000 * k + 500 : 1000 * k + 550] = 20.0
        journal.note("sweep_start", sweep=sweep.index, **sweep.as_json())
        feed(journal, log, entries)
        journal.note("sweep_end", sweep=sweep.index, complete=True)
    path = Path(journal.close()["path"])
    report(path, figure=tmp_path / "f", json_output=True)
    result = json.loads(capsys.readouterr().out)
    assert [ladder["at"] for ladder in result["ladders"]] == ["40 pA", "80 pA"]
    for ladder in result["ladders"]:
        assert ladder["key"] == "K.gmax_ns"
        assert ladder["values"] == [5.0, 10.0, 20.0]
        assert ladder["rates_hz"] == [[10.0] * 2, [20.0] * 2, [40.0] * 2]
        assert ladder["mean_hz"] == [10.0, 20.0, 40.0]
    assert [c["condition"] for c in result["conditions"]] == [
        f"K.gmax_ns = {g}" for g in (5, 10, 20)
    ]
    assert Path(result["figures"][-1]).name == "rates-k-gmax-ns.png"


def test_labels_make_names_of_files():
    """Anything may be a condition's label."""
    assert slug("k-squid, K.gmax_ns = 60 µ/..") == "k-squid-k-gmax-ns-60"
    assert slug("×") == "condition"


@pytest.mark.parametrize("content", [b"", b"no journal"])
def test_the_command_line_words_what_is_no_journal(tmp_path, content):
    """One line on stderr, no traceback, exit status 1."""
    path = tmp_path / "x.journal"
    path.write_bytes(content)
    command = [sys.executable, "-m", "gatestep", "report", str(path)]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 1
    assert done.stderr.startswith("gatestep: ")
    assert "Traceback" not in done.stderr
