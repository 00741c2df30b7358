"""The continuous reference, and how loops are held to it."""

from __future__ import annotations

import json
import sys
from concurrent.futures import ProcessPoolExecutor, ThreadPoolExecutor
from dataclasses import replace
from multiprocessing import get_context
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from gatestep import reference
from gatestep.cli import app
from gatestep.commands import bench_fidelity as command
from gatestep.errors import FileError, GatestepError, LinkError, MissingExtraError
from gatestep.fidelity import (
    ANTICIPATING,
    BASE,
    FOLLOWS,
    MAP,
    MISCOUNTS,
    PLAIN,
    RINGS,
    SWEPT,
    Plan,
    Point,
    chosen_settings,
    compare,
    measure,
    measure_all,
    points,
    rings,
    run_conditions,
)
from gatestep.library import load_model
from gatestep.reference import Reference, solve
from gatestep.scenarios import NAMES, Scenario, scenario_named
from gatestep.specs import StepSpec

TINY = Plan(
    ticks_us=(20.0, 200.0),
    delays_ticks=(0.5, 2.0),
    jitter_ticks=(0.0, 0.25),
    drop=(0.0, 0.01),
    noise_mv=(0.0, 0.1),
    capacitance_error=(0.0, 0.3),
    residue_mohm=(0.0, 5.0),
    seeds=2,
)


def membrane(density: float, duration_ms: float) -> Scenario:
    """The squid axon membrane of 30 pF under a current density in uA/cm2."""
    step = StepSpec(start_ms=0.0, stop_ms=1e6, current_pa=30.0 * density)
    squid = scenario_named("squid")
    cell = squid.cell.model_copy(update={"step": (step,)})
    return replace(squid, name="membrane", cell=cell, duration_ms=duration_ms)


def test_the_fourteenth_spike_of_the_squid_axon_membrane():
    """At 10 uA/cm2 it comes at 192.471 ms.

    Computed with scipy at rtol 1e-10 straight from the published equations; constants of
    Hodgkin and Huxley 1952.
    """
    spikes_ms = solve(scenario_named("squid")).spikes_ms
    assert spikes_ms.size == 14
    assert spikes_ms[13] == pytest.approx(192.4712, abs=1e-4)


@pytest.mark.parametrize(("density", "rate_hz"), [(10.0, 68.32), (20.0, 86.47)])
def test_the_squid_axon_membrane_fires_at_its_rates(density, rate_hz):
    """Steady rate after 200 ms; figures computed with scipy from the published equations."""
    spikes_ms = solve(membrane(density, 420.0)).spikes_ms
    steady_ms = spikes_ms[spikes_ms > 200.0]
    assert 1000.0 / np.diff(steady_ms).mean() == pytest.approx(rate_hz, abs=0.01)


def test_a_shunt_over_a_passive_cell_is_exact():
    """Two conductances and a capacitance: exponential to their common reversal (circuit law)."""
    scenario = scenario_named("shunt-resting")
    found = solve(scenario)
    after_ms = found.t_ms[found.t_ms >= 5.0] - 5.0
    end_mv = (3.0 * -60.0 + 200.0 * -80.0) / 203.0
    exact_mv = end_mv + (-60.0 - end_mv) * np.exp(-after_ms * 203.0 / 30.0)
    np.testing.assert_allclose(found.v_mv[found.t_ms >= 5.0], exact_mv, rtol=0, atol=1e-7)


def test_leak_that_is_taken_away_leaves_a_slower_and_larger_response():
    """1 nS of 10 is left: 10 mV from 10 pA, 30 ms to its e-th part (circuit law)."""
    found = solve(scenario_named("less-leak"))
    during = (found.t_ms >= 10.0) & (found.t_ms <= 110.0)
    exact_mv = -60.0 - 10.0 * np.exp(-(found.t_ms[during] - 10.0) / 30.0)
    np.testing.assert_allclose(found.v_mv[during], exact_mv, rtol=0, atol=1e-7)


@pytest.mark.parametrize("solver", ["radau", "sundials"])
@pytest.mark.parametrize("name", ["squid", "fast-spiking", "shunt-firing"])
def test_other_solvers_agree(name, solver):
    """LSODA, scipy's Radau and SUNDIALS' CVODE put every spike within 0.1 µs of each other."""
    whole = scenario_named(name)
    scenario = replace(whole, name="start", duration_ms=25.0, act_ms=min(whole.act_ms, 5.0))
    one, other = solve(scenario), solve(scenario, solver)
    assert one.spikes_ms.size >= 2
    np.testing.assert_allclose(one.spikes_ms, other.spikes_ms, rtol=0, atol=1e-4)
    np.testing.assert_allclose(one.v_mv, other.v_mv, rtol=0, atol=1e-2)


def test_instantaneous_and_piecewise_gates_are_solved():
    """The curves used agree with the formulas of all kinds of gates, to 1e-9.

    Checked at voltages that no piece was fitted or tested at, but for the jumps of
    piecewise formulas, which are confined to pieces of 2**-12 mV.
    """
    v_mv = np.random.default_rng(1).uniform(-120.0, 60.0, 400)
    for name in ("fast-spiking", "ca-t-thalamic", "na-p-hippocampal", "h-cortical"):
        gates = reference.kinetics_of(load_model(name).spec)
        edges, series = reference._curves(gates)
        piece = np.searchsorted(edges, v_mv, "right") - 1
        x = (2 * v_mv - edges[piece] - edges[piece + 1]) / (edges[piece + 1] - edges[piece])
        for row, curve in enumerate(c for gate in gates for c in gate.at(v_mv)):
            fitted = np.array(
                [
                    np.polynomial.chebyshev.chebval(a, series[p, row])
                    for a, p in zip(x, piece, strict=True)
                ]
            )
            np.testing.assert_allclose(fitted, curve, rtol=1e-8, atol=1e-9 * np.abs(curve).max())


@pytest.mark.parametrize(
    ("package", "solver", "extra"),
    [("scipy.integrate", "lsoda", "fidelity"), ("sksundae.cvode", "sundials", "sundials")],
)
def test_a_solver_that_is_not_installed_is_named_with_its_extra(
    monkeypatch, package, solver, extra
):
    """The fault says what to install."""
    monkeypatch.setitem(sys.modules, package, None)
    with pytest.raises(MissingExtraError, match=rf"gatestep\[{extra}\]"):
        solve(membrane(3.21, 1.0), solver)


def test_a_solution_is_made_once():
    """The second asking gives the first one's answer."""
    assert solve(scenario_named("less-leak")) is solve(scenario_named("less-leak"))


def test_a_scenario_that_does_not_exist_is_refused():
    """The fault lists those that do."""
    with pytest.raises(GatestepError, match="no scenario 'frog'; there are squid, "):
        scenario_named("frog")


def shifted(by_us: float) -> Reference:
    """The squid's solution, every spike later by so much."""
    true = solve(scenario_named("squid"))
    return replace(true, spikes_ms=true.spikes_ms + by_us / 1000.0)


def test_errors_are_distances_of_spikes_from_their_times():
    """Held to a solution 100 µs later, a run's mean, last and signed errors follow."""
    scenario = scenario_named("squid")
    conditions = replace(BASE, settings=chosen_settings(scenario, 20.0, 0.5))
    run = run_conditions(scenario, conditions)
    here, there = (compare(run, shifted(by), 0.0) for by in (0.0, 100.0))
    assert here.outcome == there.outcome == FOLLOWS
    assert there.last_spike_us == pytest.approx(here.last_spike_us - 100.0, abs=1e-6)
    assert there.error == there.spike_error_us == pytest.approx(100.0, abs=10.0)
    assert abs(here.peak_error_mv) < 0.2
    assert abs(here.rate_error) < 1e-4


def test_another_number_of_spikes_has_no_error():
    """A miscount is said, not averaged away."""
    scenario = scenario_named("squid")
    run = run_conditions(scenario, BASE)
    true = solve(scenario)
    found = compare(run, replace(true, spikes_ms=true.spikes_ms[:-1]), 0.0)
    assert (found.outcome, found.spikes, found.expected) == (MISCOUNTS, 14, 13)
    assert found.error is None
    assert found.last_spike_us is None


def test_what_rings_is_told_from_what_fires():
    """Spikes at any usual tick do not ring; swings every few ticks do, of 2 mV or more."""
    true = solve(scenario_named("squid"))
    for tick_us in (5, 20, 100, 200):
        assert not rings(true.v_mv[:: tick_us // 5])
    ticks = np.arange(200)
    for period in (2, 3, 6, 12):
        assert rings(-60.0 + 3.0 * np.sin(2 * np.pi * (ticks + 0.3) / period))
        assert not rings(-60.0 + 0.7 * np.sin(2 * np.pi * (ticks + 0.3) / period))
    assert not rings(-60.0 + 30.0 * np.sin(2 * np.pi * ticks / 40))
    assert not rings(np.zeros(5))


def test_a_plain_loop_that_explodes_rings():
    """50 µs and a tick of delay are beyond what a plain loop carries here (Jury's test)."""
    scenario = scenario_named("squid")
    point = Point(scenario, MAP, 50.0, PLAIN, (replace(BASE, tick_us=50.0, delay_ticks=1.0),))
    measured = measure(point)
    assert measured.outcome == RINGS
    assert measured.error is None


@pytest.mark.parametrize("name", NAMES)
def test_anticipating_is_truer_than_not_in_every_scenario(name):
    """At 20 µs and half a tick, by the settings that the server chooses: by a factor of 4."""
    scenario = scenario_named(name)
    anticipating = replace(BASE, settings=chosen_settings(scenario, 20.0, 0.5))
    plain, better = (
        measure(Point(scenario, MAP, 20.0, mode, (conditions,)))
        for mode, conditions in ((PLAIN, BASE), (ANTICIPATING, anticipating))
    )
    assert better.outcome == FOLLOWS
    if plain.error is not None:
        assert better.error < plain.error / 4.0


@pytest.mark.parametrize(
    ("tick_us", "delay_ticks", "most_us"),
    [(20, 0.5, 6), (20, 1, 16), (50, 0.5, 20), (50, 1, 80), (100, 0.5, 60), (100, 1, 300)],
)
def test_settings_that_the_server_chooses_are_true_to_the_squid_axon(tick_us, delay_ticks, most_us):
    """Error of the 14th spike, in µs, where a plain loop is late by hundreds or explodes."""
    scenario = scenario_named("squid")
    settings = chosen_settings(scenario, tick_us, delay_ticks)
    run = run_conditions(
        scenario, replace(BASE, tick_us=tick_us, delay_ticks=delay_ticks, settings=settings)
    )
    found = compare(run, solve(scenario), 0.0)
    assert abs(found.last_spike_us) <= most_us


def test_a_plan_asks_for_both_modes_of_everything():
    """Maps have every tick and delay, sweeps every value; chance gets its seeds."""
    asked = list(points(scenario_named("squid"), TINY))
    assert len([p for p in asked if p.part == MAP]) == 8
    for name in SWEPT:
        values = [(p.value, p.mode) for p in asked if p.part == name]
        wanted = [(v, m) for v in TINY.sweeps[name] for m in (PLAIN, ANTICIPATING)]
        assert values == wanted
    noisy = next(p for p in asked if p.part == "noise_mv" and p.value)
    assert [c.seed for c in noisy.conditions] == [1, 2]
    assert all((c.settings is None) == (p.mode == PLAIN) for p in asked for c in p.conditions)


def small(count: int) -> list[Point]:
    """Points that take no time."""
    scenario = scenario_named("shunt-resting")
    ticks = (20.0, 50.0, 100.0, 200.0)[:count]
    return [Point(scenario, MAP, t, PLAIN, (replace(BASE, tick_us=t),)) for t in ticks]


def test_workers_of_any_kind_give_the_same_figures():
    """Threads, processes and the calling thread: equal to the last bit, in the order asked."""
    asked = small(4)
    alone = [measure(point) for point in asked]
    done = []
    assert measure_all(asked, progress=lambda k, n: done.append((k, n))) == alone
    assert done == [(k + 1, 4) for k in range(4)]
    with ProcessPoolExecutor(1, mp_context=get_context("spawn")) as pool:
        found = measure_all(asked, pool)
        assert pool.submit(int, "7").result() == 7
    assert found == alone
    assert all(m.point is point for m, point in zip(found, asked, strict=True))


def test_an_interrupt_drops_what_has_not_begun():
    """Ctrl-C ends a measurement at once; the caller's executor can be used again."""

    def interrupt(_done, _total):
        raise KeyboardInterrupt

    with ThreadPoolExecutor(1) as pool:
        with pytest.raises(KeyboardInterrupt):
            measure_all(small(4), pool, interrupt)
        assert pool.submit(int, "7").result() == 7


@pytest.fixture
def tiny(monkeypatch):
    """A quick plan that is quicker still."""
    monkeypatch.setattr(command, "QUICK", TINY)


@pytest.mark.usefixtures("tiny")
def test_command_prints_saves_and_draws(tmp_path):
    """JSON holds every point; what is saved is what is printed; the figure is a picture."""
    saved, figure = tmp_path / "out.json", tmp_path / "map.png"
    arguments = ["bench", "fidelity", "--quick", "--json", "--scenario", "shunt-resting"]
    arguments += ["--save", str(saved), "--figure", str(figure)]
    run = CliRunner().invoke(app, arguments)
    assert run.exit_code == 0, run.output
    result = json.loads(run.stdout)
    assert result.pop("figure") == str(figure)
    assert json.loads(saved.read_text()) == result
    [scenario] = result["scenarios"]
    assert (scenario["name"], scenario["unit"]) == ("shunt-resting", "µV")
    assert len(scenario["points"]) == 8 + 2 * 2 * len(SWEPT)
    outcomes = {p["outcome"] for p in scenario["points"]}
    assert outcomes <= {FOLLOWS, MISCOUNTS, RINGS}
    assert figure.read_bytes().startswith(b"\x89PNG")


@pytest.mark.usefixtures("tiny")
def test_command_prints_tables_for_a_person(tmp_path):
    """Both maps and every sweep stand in the text, and a loop that rings says so."""
    figure = tmp_path / "map.svg"
    run = CliRunner().invoke(
        app, ["bench", "fidelity", "--quick", "--scenario", "squid", "--figure", str(figure)]
    )
    assert run.exit_code == 0, run.output
    for said in ("squid axon", "plain; delay, ticks", "anticipating; delay, ticks", "rings"):
        assert said in run.stdout
    for said in ("jitter, ± ticks", "answers lost, %", "noise, mV rms", "series resistance left"):
        assert said in run.stdout
    assert "<svg" in figure.read_text()[:1000]


@pytest.mark.parametrize(
    ("changes", "fault", "said"),
    [
        ({"names": ["frog"]}, GatestepError, "no scenario 'frog'"),
        ({"save": Path("/nowhere/out.json")}, FileError, "--save /nowhere/out.json"),
        ({"figure": Path("map.gif")}, GatestepError, "neither .png nor .svg"),
    ],
)
def test_faults_are_found_before_the_work(monkeypatch, changes, fault, said):
    """Nothing is measured for a result that could not be kept."""
    monkeypatch.setattr(command, "measure", None)
    options = {"quick": True, "names": [], "figure": None, "save": None, "scheduler": None}
    with pytest.raises(fault, match=said):
        command.bench_fidelity(**{**options, **changes}, json_output=True)


def test_a_scheduler_needs_its_extra(monkeypatch):
    """Without dask's distributed the fault names the extra."""
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(MissingExtraError, match=r"gatestep\[dask\]"):
        command.bench_fidelity(True, ["squid"], None, None, "tcp://127.0.0.1:1", True)


def test_a_scheduler_that_does_not_answer_is_named(monkeypatch):
    """A stand-in for dask's client: what it raises becomes one line that says what to start."""

    class Client:
        def __init__(self, *_arguments, **_options):
            raise OSError("timed out")

    stand_in = type(sys)("distributed")
    stand_in.Client = Client
    monkeypatch.setitem(sys.modules, "distributed", stand_in)
    with pytest.raises(LinkError, match=r"--scheduler tcp://127\.0\.0\.1:1: no scheduler"):
        command.bench_fidelity(True, ["squid"], None, None, "tcp://127.0.0.1:1", True)
