"""Traces of the simulated rig, their figures, and the command that prints them."""

from __future__ import annotations

import json

import numpy as np
import pytest
from plain_server import ohmic, server, socket_nobody_has

from gatestep.commands.simrig import simulate
from gatestep.errors import FileError, LinkError
from gatestep.simtrace import Summary, Trace


def test_spikes_are_interpolated_upward_crossings():
    """Spike times are where a triangle wave rises through the threshold, exactly."""
    t = np.arange(0, 100, 0.5)
    v = 40.0 * np.abs((t / 10.0) % 2 - 1) - 20.0
    trace = make_trace(t, v)
    np.testing.assert_allclose(trace.spikes(0, 0.0), [15, 35, 55, 75, 95])
    np.testing.assert_allclose(trace.spikes(0, 5.0), [16.25, 36.25, 56.25, 76.25, 96.25])


def make_trace(t_ms, v_mv, trips_nsec=None):
    n = t_ms.size
    v = np.asarray(v_mv)[:, None]
    trips = np.full(n, 1000) if trips_nsec is None else trips_nsec
    ones = np.ones(n, dtype=np.int64)
    return Trace(t_ms, v, v, v, v, v, ones, trips.astype(np.int64), ones, np.zeros(n), 500.0, 500.0)


def test_summary_does_not_depend_on_segments():
    """Spikes across a cut are found once, and percentiles are numpy's to 1 %."""
    rng = np.random.default_rng(2)
    t = np.arange(0, 2000, 0.5)
    v = 40.0 * np.sin(t / 7.3)
    trips = rng.lognormal(11, 1, t.size)
    whole, cut = Summary(["a"]), Summary(["a"])
    whole.add(make_trace(t, v, trips))
    for part in np.split(np.arange(t.size), np.sort(rng.choice(t.size, 60, replace=False))):
        cut.add(make_trace(t[part], v[part], trips[part]))
    assert whole.figures() == cut.figures()
    for p in (50, 95, 99):
        assert whole.round_trip_us(p) == pytest.approx(np.percentile(trips, p) / 1e3, rel=0.02)
    assert len(whole.spikes[0]) == make_trace(t, v).spikes().size


def write_rig(folder, endpoint, seconds=0.004):
    path = folder / "rig.toml"
    path.write_text(
        f'[loop]\nendpoint = "{endpoint}"\ninterval_us = 20\n'
        '[[cell]]\nname = "a"\nmodel = "./none.toml"\ncapacitance_pf = 30\n'
        f"[simulated]\nseconds = {seconds}\n"
        "[[simulated.cell]]\nnoise_mv = 0.1\n"
    )
    return path


def test_command_prints_figures_and_saves_the_trace(tmp_path, capsys, monkeypatch):
    """``simrig --json --out`` prints what the trace holds and says that it is simulated."""
    monkeypatch.setattr("gatestep.commands.simrig.SEGMENT_TICKS", 70)
    with server(ohmic(5.0, -50.0)) as there:
        rig = write_rig(tmp_path, there.endpoint)
        simulate(rig, out=tmp_path / "trace.npz", json_output=True)
        figures = json.loads(capsys.readouterr().out)
    with np.load(tmp_path / "trace.npz") as saved:
        assert "simulated" in str(saved["about"])
        assert saved["v_mv"].shape == (200, 1)
        assert figures["cells"][0]["peak_mv"] == saved["v_mv"].max()
    assert figures["ticks"] == figures["live"] == 200
    assert figures["missed"] == figures["gaps"] == figures["late"] == 0
    assert "simulated" in figures["simulated"]
    assert sorted(p.name for p in tmp_path.iterdir()) == ["rig.toml", "trace.npz"]
    with server(ohmic(5.0, -50.0)) as there:
        simulate(write_rig(tmp_path, there.endpoint))
        text = capsys.readouterr().out
    assert "simulated" in text
    assert "200 live" in text


def test_command_errors_are_plain(tmp_path):
    """No server, no rig file, an output that cannot be written: errors of the project's own."""
    with pytest.raises(FileError, match=r"gone\.toml"):
        simulate(tmp_path / "gone.toml")
    with socket_nobody_has() as endpoint, pytest.raises(LinkError, match="gatestep serve"):
        simulate(write_rig(tmp_path, endpoint), wait_s=0.1)
    with server(ohmic(5.0, -50.0)) as there, pytest.raises(FileError, match="--out"):
        simulate(write_rig(tmp_path, there.endpoint), out=tmp_path / "no" / "trace.npz")


def test_saved_traces_are_read_back(tmp_path):
    """Reading gives what was written; a file that is no trace is refused."""
    trace = make_trace(np.arange(5.0), np.arange(5.0) - 60)
    trace.save(tmp_path / "t.npz")
    again = Trace.load(tmp_path / "t.npz")
    for name, value in vars(trace).items():
        np.testing.assert_array_equal(getattr(again, name), value)
    np.savez(tmp_path / "other.npz", v_mv=np.zeros(3))
    (tmp_path / "text.npz").write_text("not an archive")
    for wrong in ("other.npz", "text.npz", "missing.npz"):
        with pytest.raises(FileError, match=wrong):
            Trace.load(tmp_path / wrong)
