"""``gatestep run`` as a user runs it: in a process of its own, and interrupted."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys

import pytest
from conftest import PATIENCE_S, wait_until
from test_playing import LONG, lab

SHORT = """
title = "short [/and] bracketed"
[plan]
pause_ms = 5
repeats = 2
[[sweep]]
name = "short"
condition = "with [/brackets]"
duration_ms = 20
scale = [0.0, 2.0]
"""


def start(here, text, *options):
    """The command on a lab's server, with its plan in a file."""
    path = here.folder / "the plan.toml"
    path.write_text(text, "utf-8")
    control = here.server.server.endpoints()["control"]
    return subprocess.Popen(
        [sys.executable, "-m", "gatestep", "run", str(path), "--control", control, *options],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        env={**os.environ, "COLUMNS": "200"},
    )


def finish(process):
    """Its exit status and what it said."""
    out, err = process.communicate(timeout=2 * PATIENCE_S)
    return process.returncode, out, err


def test_each_sweep_has_a_line_and_the_journal_is_named(tmp_path):
    """A plan that plays to its end: exit status 0, brackets in names shown as they are."""
    with lab(tmp_path) as here:
        status, out, err = finish(start(here, SHORT))
        path = here.control.status()["recording"]["path"]
    assert (status, err) == (0, "")
    assert "4/4  short  with [/brackets]  0 spikes" in out
    assert "4 sweeps played; 0 pA; the model that was in force before is back" in out
    assert f"gatestep report {path}" in out


def test_programs_get_one_json(tmp_path):
    """With --json there is one object on stdout: every sweep, complete or not, and the journal."""
    with lab(tmp_path) as here:
        status, out, err = finish(start(here, SHORT, "--json"))
    told = json.loads(out)
    assert (status, err) == (0, "")
    assert (told["complete"], len(told["done"]), told["planned"]) == (True, 4, 4)
    assert all(sweep["complete"] and sweep["ticks_done"] == 1000 for sweep in told["done"])
    assert told["journal"].endswith(".journal")


@pytest.mark.parametrize("number", [signal.SIGINT, signal.SIGTERM, signal.SIGHUP])
def test_an_interrupted_plan_ends_at_0_pa(tmp_path, number):
    """Ctrl-C, or the terminal's end: the plan is halted, the loop idle, what was played kept."""
    with lab(tmp_path) as here:
        process = start(here, LONG)
        here.playing()
        process.send_signal(number)
        status, out, err = finish(process)
        assert (status, err) == (130, "")
        assert "ended after 0 of 1 sweeps (halted); 0 pA" in out
        found = here.control.status()
        assert (found["state"], found["plan"]["running"]) == ("idle", False)


def test_a_server_that_vanishes_is_told_in_capitals(tmp_path):
    """Without an answer nobody knows whether the plan still plays, and that is said."""
    with lab(tmp_path) as here:
        process = start(here, LONG)
        here.playing()
        wait_until(lambda: here.seq > 1000, "samples")
    status, _, err = finish(process)
    assert status == 1
    assert "THE PLAN MAY STILL BE PLAYING" in err
    assert "Traceback" not in err


def test_what_is_no_plan_is_told_before_anything_is_asked(tmp_path):
    """A missing file, a folder, a file that is no plan: exit status 1 and one clear line."""
    for path, words in ((tmp_path / "none.toml", "none.toml"), (tmp_path, str(tmp_path))):
        done = subprocess.run(
            [sys.executable, "-m", "gatestep", "run", str(path)],
            capture_output=True,
            text=True,
            check=False,
            timeout=120,
        )
        assert done.returncode == 1
        assert words in done.stderr
        assert "Traceback" not in done.stderr
