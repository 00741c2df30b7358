"""Plans on a real server: each sweep's model, parameters and stimulus from its first tick on.

The models are leaks, so that what each answer must be follows from Ohm's law alone.
"""

from __future__ import annotations

import threading
from contextlib import contextmanager

import numpy as np
import pytest
from conftest import PATIENCE_S, RawRig, running, wait_until
from test_loop import LEAK

from gatestep.comparison import compare
from gatestep.control import Control
from gatestep.errors import ControlError
from gatestep.journalfile import open_journal
from gatestep.wire import CLIPPED, GAP, LIVE

TICK_US = 20.0
V_MV = -60.0


def leak(folder, g: float, e: float) -> str:
    path = folder / f"leak-{g:g}.toml"
    path.write_text(LEAK.format(g=g, e=e), "utf-8")
    return str(path)


class Lab:
    """A server with a leak in force, a rig that samples a held voltage, and plans for it."""

    def __init__(self, folder, server):
        self.folder, self.server, self.control = folder, server, server.control
        self.seq, self.v_mv = -1, V_MV
        self.over = threading.Event()

    def run(self, text: str, force: bool = False):
        path = self.folder / "plan.toml"
        path.write_text(text, "utf-8")
        return self.control.run(text, path, force=force)

    def told(self):
        return self.control.ask("sweeps")["plan"]

    def ended(self):
        """The plan, once it has ended and what was in force is back."""
        return wait_until(lambda: (p := self.told()) and not p["running"] and p, "the plan's end")

    def playing(self):
        """Wait until a sweep plays."""
        return wait_until(lambda: (p := self.told()) and p["now"], "a sweep")


@contextmanager
def lab(tmp_path, **limits):
    """A running lab; its rig samples without pause from a thread of its own."""
    cell = {
        "name": "a",
        "model": leak(tmp_path, 10.0, -70.0),
        "limits": {"current_pa": 1e5, **limits},
    }
    with running(tmp_path, cell=[cell], record={"flush_ms": 20.0}) as server:
        here = Lab(tmp_path, server)

        def sample():
            with RawRig(server.server.endpoints()["loop"]) as rig:
                while not here.over.is_set():
                    here.seq += 1
                    rig.ask(here.seq, here.v_mv)

        thread = threading.Thread(target=sample)
        thread.start()
        try:
            wait_until(lambda: here.control.status()["seq"], "samples")
            yield here
        finally:
            here.over.set()
            thread.join(PATIENCE_S)


def recorded(here):
    """The journal of a lab that has ended: its samples, and itself."""
    journal = open_journal(here.control_path)
    return journal.samples[:], journal


def keep_path(here):
    here.control_path = here.control.status()["recording"]["path"]


PLAN = """
title = "two leaks"
[plan]
order = "interleaved"
repeats = {repeats}
pause_ms = {pause}
ramp_ms = {ramp}
[[sweep]]
name = "first"
duration_ms = 4
[[sweep.stimulus]]
kind = "step"
start_ms = 1
stop_ms = 2
current_pa = 50
[[sweep]]
name = "second"
duration_ms = 6
model = "{other}"
scale = 0.5
[[sweep.stimulus]]
kind = "ramp"
start_ms = 0
stop_ms = 6
from_pa = 0
to_pa = 120
"""


def test_a_sweep_is_the_new_model_from_its_first_tick_on(tmp_path):
    """Alternating sweeps: every answer is Ohm's law for its sweep's leak, plus its stimulus.

    No tick is missed, a rest between two sweeps is as long as the plan says wherever the next
    one was ready in time, and the whole replays as identical.
    """
    with lab(tmp_path) as here:
        keep_path(here)
        other = leak(tmp_path, 4.0, -20.0)
        answer = here.run(PLAN.format(repeats=20, pause=2, ramp=0, other=other))
        assert answer["sweeps"] == 40
        plan = here.ended()
        assert (plan["why"], plan["ended"]) == ("complete", 40)
        status = here.control.status()
        assert (status["state"], status["missed"], status["clipped"]) == ("idle", 0, 0)
    samples, journal = recorded(here)
    assert len(journal.sweeps) == 40
    assert all(sweep.complete for sweep in journal.sweeps)
    for sweep in journal.sweeps:
        part = samples[sweep.start : sweep.stop]
        t_ms = np.arange(len(part)) * TICK_US / 1000
        if sweep.fields["name"] == "first":
            model, stimulus = 10.0 * (-70.0 - V_MV), np.where((t_ms >= 1) & (t_ms < 2), 50.0, 0.0)
            assert len(part) == 200
        else:
            model, stimulus = 2.0 * (-20.0 - V_MV), (t_ms + TICK_US / 2000) / 6 * 120
            assert len(part) == 300
        np.testing.assert_allclose(part["i_pa"][:, 0], model + stimulus, atol=1e-9)
        np.testing.assert_allclose(part["stimulus_pa"][:, 0], stimulus, atol=1e-9)
        assert (part["flags"] == LIVE).all()
    rests = [b.start - a.stop for a, b in zip(journal.sweeps, journal.sweeps[1:], strict=False)]
    assert min(rests) == 100
    end = journal.sweeps[-1].stop
    assert (samples["flags"][end:] & LIVE == 0).all()
    assert (samples["i_pa"][end:] == 0.0).all()
    verdict = compare(journal)
    assert (verdict.identical, verdict.complete, verdict.compared) == (True, True, len(samples))


def test_without_a_rest_one_sweep_follows_the_other(tmp_path):
    """Where a sweep lasts long enough for the next to be prepared, they touch."""
    text = PLAN.format(repeats=3, pause=0, ramp=0, other=leak(tmp_path, 4.0, -20.0))
    text = text.replace("duration_ms = 4", "duration_ms = 100").replace("= 6\n", "= 100\n")
    with lab(tmp_path) as here:
        keep_path(here)
        here.run(text)
        assert here.ended()["why"] == "complete"
    samples, journal = recorded(here)
    sweeps = journal.sweeps
    assert [a.stop for a in sweeps[:-1]] == [b.start for b in sweeps[1:]]
    assert not (samples["flags"] & GAP).any()
    first = samples["i_pa"][sweeps[1].start]
    assert first[0] == pytest.approx(2.0 * (-20.0 - V_MV) + 0.012, abs=0.001)


def test_a_conductance_comes_gradually_where_the_plan_says_so(tmp_path):
    """Over ramp_ms before a sweep gmax goes evenly to its new value, at first from nothing.

    The plan arms the loop: nothing flowed before, whatever model was in force.
    """
    text = """
title = "ladder"
[plan]
ramp_ms = 2
pause_ms = 20
[[sweep]]
name = "rung"
duration_ms = 5
scale = [3.0, 1.0]
"""
    with lab(tmp_path) as here:
        keep_path(here)
        here.run(text)
        assert here.ended()["why"] == "complete"
    samples, journal = recorded(here)
    up, down = journal.sweeps
    way = np.arange(1, 101) / 100
    before = samples["i_pa"][up.start - 100 : up.start, 0]
    np.testing.assert_allclose(before, -10.0 * (30.0 * way), rtol=1e-12, atol=1e-9)
    before = samples["i_pa"][down.start - 100 : down.start, 0]
    np.testing.assert_allclose(before, -10.0 * (30.0 - 20.0 * way), rtol=1e-12)
    assert (samples["i_pa"][down.start : down.stop, 0] == -100.0).all()
    assert not samples["i_pa"][: up.start - 100].any()
    assert compare(journal).identical


WITHOUT = """
title = "without"
[plan]
ramp_ms = {ramp}
[[sweep]]
name = "without"
duration_ms = 10
scale = 0.0
[[sweep.stimulus]]
kind = "noise"
start_ms = 0
stop_ms = 10
sd_pa = 1
seed = 3
"""


@pytest.mark.parametrize("ramp", [0, 5])
def test_a_first_sweep_without_the_conductance_injects_none(tmp_path, ramp):
    """From the first live answer on there is the stimulus alone, with a ramp and without."""
    with lab(tmp_path) as here:
        keep_path(here)
        here.run(WITHOUT.format(ramp=ramp))
        assert here.ended()["why"] == "complete"
    samples, journal = recorded(here)
    live = samples[samples["flags"] & LIVE != 0]
    assert len(live) == 500 + 50 * ramp
    np.testing.assert_array_equal(live["i_pa"], live["stimulus_pa"])
    assert compare(journal).identical


@pytest.mark.parametrize("verb", ["disarm", "reset", "halt"])
def test_what_is_ordered_before_the_first_sweep_is_not_overruled(tmp_path, verb):
    """Between the request and the first sweep a disarm, a reset or a halt ends the plan."""
    with lab(tmp_path) as here:
        keep_path(here)
        here.run(LONG)
        here.control.ask(verb)
        assert here.ended()["ended"] == 0
        at = here.seq
        wait_until(lambda: here.seq > at + 10_000, "samples")
        assert here.control.status()["state"] == "idle"
    samples, _ = recorded(here)
    assert not (samples["flags"] & LIVE).any()


def test_a_plan_judges_every_cell_that_it_arms(tmp_path):
    """A cell whose model the loop cannot carry bars a plan for the other one, unless forced."""
    cells = [
        {"name": "a", "model": leak(tmp_path, 10.0, -70.0), "limits": {"current_pa": 1e5}},
        {
            "name": "b",
            "model": "squid-axon",
            "capacitance_pf": 3.0,
            "limits": {"current_pa": 1e5},
        },
    ]
    loop = {"interval_us": 50.0, "anticipate": False}
    with running(tmp_path, cell=cells, loop=loop) as server:
        here = Lab(tmp_path, server)
        with RawRig(server.server.endpoints()["loop"]) as rig:
            for k in range(300):
                rig.ask(k, V_MV, V_MV, t_us=50 * k)
            wait_until(lambda: here.control.status()["seq"], "samples")
            with pytest.raises(ControlError, match="run: cell b"):
                here.run(LONG.replace('name = "long"', 'name = "long"\ncell = "a"'))
            assert here.control.status()["state"] == "idle"


LONG = """
title = "long"
[[sweep]]
name = "long"
duration_ms = 60000
scale = 2.0
[[sweep.stimulus]]
kind = "step"
start_ms = 0
stop_ms = 60000
current_pa = 30
"""


def test_a_halted_plan_ends_at_0_pa_with_everything_kept(tmp_path):
    """The stimulus stops, the loop is idle, and the model with its set parameters comes back."""
    with lab(tmp_path) as here:
        keep_path(here)
        here.control.set("leak.gmax_ns", 7.0)
        here.run(LONG)
        here.playing()
        here.control.halt()
        plan = here.ended()
        assert (plan["why"], plan["done"][0]["complete"]) == ("halted", False)
        status = here.control.status()
        assert status["state"] == "idle"
        assert status["cells"][0]["parameters"]["leak.gmax_ns"] == 7.0
        here.control.arm()
        at = here.seq + 5
        wait_until(lambda: here.seq > at + 50, "samples")
    samples, journal = recorded(here)
    [sweep] = journal.sweeps
    assert not sweep.complete
    part = samples[sweep.start : sweep.stop]
    assert (part["i_pa"][:, 0] == -10.0 * 14.0 + 30.0).all()
    assert samples["i_pa"][-1, 0] == -70.0
    assert compare(journal).identical


def test_a_plan_halted_before_its_first_sweep_never_arms(tmp_path):
    """What waited for its sample is dropped, the arming too, and the replay knows."""
    with lab(tmp_path) as here:
        keep_path(here)
        here.run(LONG)
        here.control.halt()
        assert here.ended()["why"] == "halted"
        at = here.seq
        wait_until(lambda: here.seq > at + 10_000, "samples")
        assert here.control.status()["state"] == "idle"
    samples, journal = recorded(here)
    assert not (samples["flags"] & LIVE).any()
    verdict = compare(journal)
    assert (verdict.identical, verdict.unlike) == (True, None)


def test_a_plan_halted_while_it_is_prepared_never_begins(tmp_path):
    """The halt comes before the plan's tables are built: the run is refused, nothing plays."""
    with lab(tmp_path) as here:
        other = Control(here.server.server.endpoints()["control"], timeout_s=PATIENCE_S)
        refused = []

        def run():
            with pytest.raises(ControlError) as found:
                here.run(LONG.replace('name = "long"', 'name = "long"\nmodel = "squid-axon"'))
            refused.append(str(found.value))

        thread = threading.Thread(target=run)
        thread.start()
        with other:
            wait_until(lambda: halted(other), "a plan to halt")
            thread.join(PATIENCE_S)
            state = other.status()["state"]
        assert "halted while it was prepared" in refused[0]
        assert state == "idle"


def halted(control) -> bool:
    try:
        return control.halt()["plan"] is None
    except ControlError:
        return False


def test_what_a_plan_does_by_itself_is_refused_meanwhile(tmp_path):
    """Loading, swapping, setting, arming and a second plan wait; a mark and a disarm do not."""
    with lab(tmp_path) as here:
        here.run(LONG)
        here.playing()
        for refused in (
            lambda: here.control.load("leak"),
            lambda: here.control.swap(),
            lambda: here.control.set("leak.gmax_ns", 1.0),
            lambda: here.control.arm(),
            lambda: here.run(LONG),
        ):
            with pytest.raises(ControlError, match="a plan is running"):
                refused()
        here.control.mark("still here")
        here.control.disarm()
        assert here.ended()["why"] == "the loop was disarmed"
        # None of what was refused has left a trace: all of it can be done now.
        with pytest.raises(ControlError, match="no model is prepared"):
            here.control.swap()
        assert here.control.status()["cells"][0]["parameters"]["leak.gmax_ns"] == 10.0
        here.control.load("leak")
        here.control.swap()
        here.run(LONG)
        here.playing()


def test_a_trip_ends_the_plan(tmp_path):
    """A fault in a sweep: 0 pA, tripped, and the plan says why it ended."""
    with lab(tmp_path, window_mv=[-80.0, 20.0]) as here:
        here.run(LONG)
        here.playing()
        with RawRig(here.server.server.endpoints()["loop"]) as stranger:
            assert stranger.ask(0, V_MV).i_pa == [0.0]  # refused, and of no effect
        here.v_mv = 30.0
        why = here.ended()["why"]
        assert why.startswith("the loop has tripped")
        assert here.control.status()["state"] == "tripped"


def test_without_a_rig_there_is_no_plan(tmp_path):
    """A plan needs someone to play it to."""
    cell = {"name": "a", "model": leak(tmp_path, 10.0, -70.0), "limits": {"current_pa": 1e5}}
    with running(tmp_path, cell=[cell]) as server:
        here = Lab(tmp_path, server)
        with pytest.raises(ControlError, match="no rig holds the loop"):
            here.run(LONG)


def test_a_rig_that_leaves_ends_the_plan(tmp_path):
    """Its loss trips the armed loop and drops what was planned; nothing plays to the next rig."""
    with lab(tmp_path) as here:
        here.run(LONG)
        here.playing()
        here.over.set()
        assert here.ended()["why"].startswith(("the loop has tripped", "the rig let go"))
        with RawRig(here.server.server.endpoints()["loop"]) as other:
            answers = [other.ask(k, V_MV) for k in range(100)]
        assert all(answer.i_pa == [0.0] for answer in answers)
        status = here.control.status()
        assert (status["state"], status["plan"]["running"]) == ("tripped", False)


def test_the_guard_stands_behind_the_stimulus(tmp_path):
    """A stimulus beyond the limit is clipped to it, and flagged, like any current."""
    text = LONG.replace("current_pa = 30", "current_pa = 5000").replace("60000", "20")
    with lab(tmp_path, current_pa=400.0) as here:
        keep_path(here)
        here.run(text)
        plan = here.ended()
        assert plan["done"][0]["clipped"] == 1000
    samples, journal = recorded(here)
    part = samples[journal.sweeps[0].start : journal.sweeps[0].stop]
    assert (part["i_pa"] == 400.0).all()
    assert (part["flags"] & CLIPPED != 0).all()


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("title = 3", "title"),
        (LONG.replace("long", "x" * 300, 1), "title"),
        (LONG + '[sweep.parameters]\n"Na.gmax_ns" = 3\n', "Na"),
        (LONG.replace('name = "long"', 'name = "long"\ncell = "b"'), "cell 'b' is not on this rig"),
        (LONG.replace('name = "long"', 'name = "long"\nmodel = "no-such"'), "no-such"),
        (LONG.replace("60000", "1000000"), "at 20 us a sweep lasts"),
    ],
)
def test_plans_that_do_not_fit_are_refused_before_anything_plays(tmp_path, text, words):
    """The server says what is wrong; the loop stays as it was."""
    with lab(tmp_path) as here:
        with pytest.raises(ControlError, match=words):
            here.run(text)
        assert here.control.status()["state"] == "idle"
        assert here.told() is None
