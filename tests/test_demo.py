"""The demo as a user runs it: a plan on a real server, and everything that it leaves behind."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import pytest

from gatestep.comparison import compare
from gatestep.journalfile import open_journal


@pytest.fixture(scope="module")
def shown(tmp_path_factory):
    """What a short demo prints for programs."""
    out = tmp_path_factory.mktemp("demo") / "out"
    command = [sys.executable, "-m", "gatestep", "demo", "--seconds", "0.9", "--json"]
    done = subprocess.run(
        [*command, "--out", str(out)], capture_output=True, text=True, timeout=300, check=False
    )
    assert done.returncode == 0, done.stderr
    return json.loads(done.stdout)


def test_the_passive_cell_fires_and_then_adapts(shown):
    """Alone it is silent; with Na and K it fires evenly; an M-type K conductance slows it.

    What an M-type conductance does to repetitive firing: Yamada, Koch and Adams 1989
    (Methods in Neuronal Modeling, MIT Press, ch. 4).
    """
    alone, fast, slow = shown["parts"]
    assert alone["spikes"] == 0
    assert fast["spikes"] > slow["spikes"] > 2
    assert fast["last_interval_ms"] == pytest.approx(fast["first_interval_ms"], rel=0.05)
    assert slow["last_interval_ms"] > 1.3 * slow["first_interval_ms"]


def test_nothing_is_lost_and_everything_is_kept(shown):
    """No late, missed or clipped answer; each file named is there; the replay is identical."""
    assert [shown[n] for n in ("late", "missed", "clipped", "trips")] == [0, 0, 0, 0]
    assert shown["replay"] == "identical"
    assert {"rig", "plan", "journal", "figure", "anticipation", "report"} <= set(shown["files"])
    for path in shown["files"].values():
        assert Path(path).exists()
    assert "no recording from a real cell" in shown["about"]
    with open_journal(shown["files"]["journal"]) as journal:
        assert [sweep.complete for sweep in journal.sweeps] == [True] * 3
        assert journal.closed
        assert compare(journal).identical


def test_anticipation_keeps_the_spikes_within_the_cells_range(shown):
    """At the slow tick the plain loop overshoots the sodium reversal, 50 mV; the other does not."""
    plain, anticipating = shown["anticipation"]["parts"].values()
    assert plain["peak_mv"] > 50.0 > anticipating["peak_mv"]
