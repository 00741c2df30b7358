"""``gatestep journal``, and journals of processes that were killed."""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from journals import Log, new_journal, write_journal

from gatestep.commands.journal import show_journal, summary_of
from gatestep.journalbytes import Kind
from gatestep.journalfile import open_journal
from gatestep.loop import Entry
from gatestep.states import Fault
from gatestep.wire import LATE, LIVE, REPEAT

KILLED = 12

WRITERS = """
import os, random, signal, sys, time
from pathlib import Path
sys.path.insert(0, sys.argv[1])
from journals import Log, new_journal

def write(folder):
    journal, log, taken = new_journal(folder, 2, flush_ms=5), Log(2), 0
    words = os.open(folder / "words", os.O_WRONLY | os.O_CREAT)
    while True:
        journal.note("mark", k=taken)
        journal.take(log.block(log.samples(100)))
        taken += 100
        os.write(words, b"%d %d\\n" % (journal.status()["samples"], taken))
        time.sleep(0.001)

pick = random.Random(2026)
for k in range(int(sys.argv[3])):
    folder = Path(sys.argv[2]) / str(k)
    folder.mkdir()
    writer = os.fork()
    if writer == 0:
        write(folder)
    while not (folder / "words").exists() or not (folder / "words").stat().st_size:
        time.sleep(0.001)
    time.sleep(pick.uniform(0.0, 0.3))
    os.kill(writer, signal.SIGKILL)
    os.waitpid(writer, 0)
"""
"""One process that has imported everything forks the writers, one after another, and kills them."""


@pytest.fixture(scope="module")
def killed(tmp_path_factory):
    """Folders of journals whose writers were killed at random moments, and their last words."""
    folder, tests = tmp_path_factory.mktemp("killed"), str(Path(__file__).parent)
    subprocess.run([sys.executable, "-c", WRITERS, tests, str(folder), str(KILLED)], check=True)
    found = []
    for k in range(KILLED):
        lines = (folder / str(k) / "words").read_text("utf-8").split("\n")
        # What follows the last line's end was cut off.
        found.append((folder / str(k), [tuple(map(int, line.split())) for line in lines[:-1]]))
    return found


def test_a_killed_writer_loses_no_more_than_it_had_not_written(killed):
    """Every journal opens; all that was in the file by the writer's own account is there."""
    kept = []
    for folder, words in killed:
        (path,) = folder.glob("*.journal")
        written, taken = words[-1]
        with open_journal(path) as found:
            seqs = found.samples[:]["seq"]
            # After its last word it may have handed over one block more.
            assert written <= len(seqs) <= taken + 100
            assert np.array_equal(seqs, 1 + np.arange(len(seqs)))
            marks = [e.fields["k"] for e in found.events]
            assert marks == [*range(0, 100 * len(marks), 100)]
            # An event stands before the samples that it acts upon.
            assert 100 * len(marks) >= len(seqs)
            assert (found.verify(), found.closed) == ([], False)
            kept.append(len(seqs))
    assert sum(count > 0 for count in kept) > KILLED // 2


@pytest.fixture
def eventful(tmp_path):
    """A journal with late samples, a repeat, a gap, a trip and a sweep; its path."""
    journal, log = new_journal(tmp_path), Log(1)
    journal.note("in_force", cell=0, model=0, name="leak")
    journal.take(log.block(log.other(Entry.HOLD, code=1), log.samples(50)))
    journal.note("sweep_start", sweep=0, name="step", condition="with K")
    flags = np.array([LIVE | LATE, LIVE | LATE, LIVE, LIVE | REPEAT | LATE, LIVE])
    entries = log.samples(5, flags, np.array([51, 52, 53, 53, 54]))
    entries["lag_us"] = [100.0, 200.0, 20.0, 20.0, -1.0]
    entries["service_nsec"] = [5000, 5000, 5000, 1, 5000]
    journal.take(log.block(entries, log.other(Entry.TRIP, code=Fault.SILENCE)))
    journal.note("sweep_end", sweep=0, complete=False)
    journal.note("set", cell=0, key="leak.gmax_ns", which="gmax_ns", index=0, value=2.0)
    return Path(journal.close()["path"])


def test_the_summary_counts_what_is_in_the_journal(eventful):
    """Late samples, repeats, lags, trips, sweeps and models are those that were written."""
    with open_journal(eventful) as found:
        s = summary_of(found)
        lag = found.samples[:]["lag_us"]
    assert (s["samples"], s["readable"], s["repeats"], s["late"]) == (55, 55, 1, 2)
    assert s["live"] == 54
    assert s["lag_known"] == 53
    assert s["lag_us"]["max"] == pytest.approx(lag.max(), abs=1e-3)
    # The histogram's bins are a sixteenth of an octave wide.
    assert s["lag_us"]["p50"] == pytest.approx(np.median(lag[lag >= 0]), rel=0.1)
    assert [(t["position"], t["cell"]) for t in s["trips"]] == [(55, None)]
    assert s["sweeps"] == [
        {
            "sweep": 0, "start": 50, "stop": 55, "name": "step", "condition": "with K",
            "complete": False,
        }
    ]  # fmt: skip
    (stretch,) = s["in_force"]
    assert (stretch["name"], stretch["start"], stretch["stop"]) == ("leak", 0, 55)
    assert s["event_counts"]["late"] == 1
    assert (s["closed"], s["tail"], s["damaged"]) == (True, None, [])
    json.dumps(s)


def test_the_command_speaks_to_people_and_to_programs(eventful, capsys):
    """Both forms have the figures; events are listed when asked for."""
    assert show_journal(eventful, False, True) == 0
    said = capsys.readouterr().out
    for words in ("55 samples", "2 late", "fell silent", "leak", "sweep_start", "closed"):
        assert words in said
    assert show_journal(eventful, True, True) == 0
    plain = json.loads(capsys.readouterr().out)
    assert plain["samples"] == 55
    assert [e["kind"] for e in plain["events"]][:2] == ["in_force", "hold"]
    assert plain["events"][0]["time"] > plain["start"]


def test_the_command_says_what_is_lost(tmp_path, capsys):
    """A torn tail, a damaged block, and what the writer left out, each on a line of its own."""
    path, _ = write_journal(tmp_path, 1, 4, 10)
    with open_journal(path) as found:
        index = found.closing["index"]
    of_samples = [k for k, kind in enumerate(index["kind"]) if kind == Kind.SAMPLES]
    second, last = (index["offset"][of_samples[k]] for k in (1, -1))
    data = bytearray(path.read_bytes())[: last + 100]
    data[second + 50] ^= 1
    path.write_bytes(data)
    assert show_journal(path, False, False) == 1
    said = capsys.readouterr().out
    assert f"torn off at byte {last:,}: 100 bytes (10 samples)" in said
    assert f"damaged at byte {second:,}: 10 samples from place 10" in said
    assert "not closed" in said


def test_a_file_that_is_no_journal_is_one_line(tmp_path):
    """The command line words it; no traceback, exit status 1."""
    path = tmp_path / "x.toml"
    path.write_text("[loop]\n" * 20, "utf-8")
    command = [sys.executable, "-m", "gatestep", "journal", str(path)]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 1
    assert done.stderr.startswith(f"gatestep: {path}: not a journal")
    assert done.stderr.count("\n") == 1
