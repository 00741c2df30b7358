"""A plan from the server to the report: what is measured is what the simulated cell is."""

from __future__ import annotations

import io
import json
import threading
from contextlib import redirect_stdout
from pathlib import Path

import pytest
from conftest import PATIENCE_S, running, wait_until

from gatestep.commands.report import report
from gatestep.simrig import SimRig

LEAK_NS, LEAK_MV, C_PF = 9.0, -54.387, 30.0
CELL = {
    "name": "a",
    "model": "squid-na-k",
    "limits": {"current_pa": 30_000.0, "window_mv": [-150.0, 100.0]},
}
SIMULATED = {
    "pace": "lockstep",
    "cell": [{"capacitance_pf": C_PF, "leak_ns": LEAK_NS, "leak_mv": LEAK_MV}],
}
PLAN = """
title = "the squid axon's membrane, given and not"
[plan]
order = "interleaved"
pause_ms = 50.0
[[sweep]]
name = "step"
duration_ms = 320.0
scale = [0.0, 1.0]
[[sweep.stimulus]]
kind = "step"
start_ms = 50.0
stop_ms = 300.0
current_pa = [-50.0, 300.0]
"""


@pytest.fixture(scope="module")
def rows(tmp_path_factory):
    """The report on a plan that was played through a real server to the simulated rig."""
    folder = tmp_path_factory.mktemp("served")
    loop = {"interval_us": 20.0, "anticipate": False}
    changes = {"cell": [CELL], "simulated": SIMULATED, "loop": loop, "record": {}}
    with running(folder, **changes) as served:
        endpoint, over = served.server.endpoints()["loop"], threading.Event()

        def live():
            with SimRig(served.rig.spec, folder, endpoint=endpoint) as rig:
                while not over.is_set():
                    rig.run(0.01)

        thread = threading.Thread(target=live)
        thread.start()
        try:
            wait_until(lambda: served.control.status()["seq"], "samples")
            served.control.run(PLAN, folder / "plan.toml")
            plan = wait_until(
                lambda: (p := served.control.ask("sweeps")["plan"]) and not p["running"] and p,
                "the plan's end",
            )
            path = Path(served.control.status()["recording"]["path"])
        finally:
            over.set()
            thread.join(PATIENCE_S)
    assert plan["why"] == "complete"
    said = io.StringIO()
    with redirect_stdout(said):
        report(path, json_output=True)
    return json.loads(said.getvalue())["sweeps"]


def test_the_cell_without_the_conductance_is_its_leak(rows):
    """Circuit law: R = 1/g = 111.1 MΩ, tau = C/g = 3.33 ms, rest at the leak's reversal."""
    plain = rows[0]
    assert plain["condition"] == "without the conductance"
    assert plain["rest_mv"] == pytest.approx(LEAK_MV, abs=1e-3)
    assert plain["input_mohm"] == pytest.approx(1000.0 / LEAK_NS, rel=1e-4)
    assert plain["tau_ms"] == pytest.approx(C_PF / LEAK_NS, rel=0.01)
    assert rows[2]["spikes"] == 0


def test_the_cells_own_resistance_is_found_beneath_the_conductance(rows):
    """Circuit law: what the model injects is taken off, whatever it makes of the step."""
    given = rows[1]
    assert given["own_mohm"] == pytest.approx(1000.0 / LEAK_NS, rel=5e-3)
    assert given["input_mohm"] < 50.0


def test_with_the_conductances_it_fires_as_the_squid_axon_does(rows):
    """10 uA/cm2 on the published membrane: 68.32 Hz in the long run (computed with scipy).

    The first intervals are shorter, and the plain loop at 20 µs is later by under 1 %.
    """
    fires = rows[3]
    assert fires["spikes"] in (17, 18)
    assert fires["steady_hz"] == pytest.approx(68.3, rel=0.02)
    assert fires["peak_mv"] == pytest.approx(40.0, abs=3.0)


def test_the_charge_of_all_parts_is_the_charge_in_all(rows):
    """Without anticipation or a limit met, an answer is its conductances' and the stimulus."""
    for row in rows:
        parts = row["stimulus_pc"] + row["Na_pc"] + row["K_pc"]
        assert row["charge_pc"] == pytest.approx(parts, rel=1e-9, abs=1e-9)
        assert row["stimulus_pc"] == pytest.approx(0.25 * row["current_pa"])
    assert rows[0]["Na_pc"] == rows[0]["K_pc"] == 0.0
    assert rows[3]["Na_pc"] > 100.0 > -100.0 > rows[3]["K_pc"]


def test_the_sweeps_are_whole(rows):
    """In lockstep nothing is late, missed or clipped."""
    for row in rows:
        assert row["complete"]
        assert row["samples"] == 16_000
        assert row["late"] == row["missed"] == row["clipped"] == row["damaged"] == 0
