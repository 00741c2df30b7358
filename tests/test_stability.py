"""How much conductance a loop carries, what a model opens, and the choice between loops."""

from __future__ import annotations

import itertools
import json
import math

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from gatestep.choosing import ALPHAS, KEPT, Choice, advice, candidates, choose
from gatestep.errors import FileError
from gatestep.library import load_model
from gatestep.lockstep import Conditions, LockstepRun, run_lockstep_loop
from gatestep.operating import largest_ns, operating_ns
from gatestep.simcell import SUBSTEP_US
from gatestep.specs import CellSpec, LoopSpec, ModelSpec, SimCellSpec
from gatestep.stability import (
    Circuit,
    Settings,
    corners,
    limit_ns,
    spectral_radius,
    tick_matrix,
    worst_limit_ns,
)
from gatestep.tables import Tables, build_tables

AXON = SimCellSpec(capacitance_pf=30.0, leak_ns=9.0, leak_mv=-54.387, start_mv=-65.0)
DRIVE_PA = 300.0
FOURTEENTH_MS = 192.471
"""14th spike of the squid axon membrane at 10 uA/cm2; computed with scipy's LSODA and
DOP853 at rtol 1e-10 from the published equations."""
NEXT_TICK, ON_ARRIVAL = 1.0, 0.5
SPIKES_OPEN_NS = 1080.0
"""What the squid axon's conductances reach in repetitive firing (computed with scipy)."""


@pytest.fixture(scope="module")
def squid() -> Tables:
    return build_tables(load_model("squid-na-k").spec)


@pytest.fixture(scope="module")
def peak_mv(squid) -> float:
    """The highest voltage where the conductances are the cell's own, stepped by 1 µs."""
    idle = Conditions(50.0, 0.5)
    run = run_lockstep_loop(
        idle, AXON, squid, 200.0, stimulus_pa=DRIVE_PA, arm_ms=1e6, native=(squid,),
        fine_us=SUBSTEP_US,
    )  # fmt: skip
    assert run.spikes_ms[13] == pytest.approx(FOURTEENTH_MS, abs=1e-3)
    return float(run.fine_mv.max())


def leak_of(gmax_ns: float) -> Tables:
    """A model that is one leak, reversing at 0 mV."""
    leak = {"name": "leak", "gmax_ns": gmax_ns, "reversal_mv": 0.0}
    return build_tables(
        ModelSpec(title="leak", source="Ohm's law", temperature_c=22.0, conductance=[leak])
    )


def run_leak(
    circuit: Circuit, chosen: Settings | None, g_ns: float, ticks: int, start_mv: float
) -> LockstepRun:
    """A pure capacitance in the nonlinear loop with one virtual leak."""
    true_pf = circuit.capacitance_pf * (1.0 + circuit.capacitance_error)
    conditions = Conditions(
        1000.0 * circuit.interval_ms,
        circuit.delay_ms / circuit.interval_ms,
        capacitance_error=1.0 / (1.0 + circuit.capacitance_error) - 1.0,
        residue_mohm=circuit.residue_mohm,
        settings=chosen,
    )
    cell = SimCellSpec(capacitance_pf=true_pf, leak_ns=0.0, start_mv=start_mv)
    return run_lockstep_loop(conditions, cell, leak_of(g_ns), ticks * circuit.interval_ms)


# The limit


@given(st.floats(0, 1), st.floats(0.1, 1000), st.floats(0.005, 1))
@settings(max_examples=25)
def test_the_plain_loops_limit_is_that_of_jurys_test(delay, capacitance, interval):
    """z^2 - (1 - a(1-d))z + a d: stable while a < 1/d and, for d < 1/2, a < 2/(1 - 2d)."""
    jury = min(
        1.0 / delay if delay > 0 else math.inf,
        2.0 / (1.0 - 2.0 * delay) if delay < 0.5 else math.inf,
    )
    found = limit_ns(Circuit(capacitance, interval, delay * interval), None)
    assert found == pytest.approx(jury * capacitance / interval, rel=0.01)


@pytest.mark.parametrize("delay", [0.0, 0.3, 0.5, 1.0, 1.6, 2.0])
@pytest.mark.parametrize(
    "chosen", [None, Settings(3, 1.0, 1.0), Settings(4, 0.35, 3.0)], ids=["plain", "b1", "a035"]
)
def test_the_matrix_is_a_tick_of_the_loop(delay, chosen):
    """From a state of the compiled loop it gives the loop's next 30 voltages, to rounding.

    A capacitance 20 % larger than the shadow's, 0.5 MΩ, and 700 nS over 30 pF.
    """
    circuit = Circuit(30.0, 0.05, 0.05 * delay, 0.2, 0.5)
    run = run_leak(circuit, chosen, 700.0, 100, 1e-15)
    v_mv, read_mv = run.v_mv, np.asarray(run.trace.measured_mv[:, 0])
    asked, flowed = np.asarray(run.trace.answered_pa[:, 0]), np.asarray(run.trace.i_pa[:, 0])
    # By then the first estimates, made before all currents were known, are forgotten.
    at, held = 60, circuit.whole_ticks + 2
    i_rest = 0.0
    if chosen is not None:
        raw = 30.0 * np.diff(read_mv) / 0.05 - flowed[:-1]
        i_rest = raw[0]
        for value in raw[1 : at - 1]:
            i_rest += chosen.alpha * (value - i_rest)
    state = np.array([v_mv[at], read_mv[at - 1], i_rest, *asked[at - held : at][::-1]])
    (matrix,) = tick_matrix(circuit, 700.0, chosen)
    largest = np.abs(v_mv[at : at + 31]).max()
    for n in range(1, 31):
        state = matrix @ state
        assert state[0] == pytest.approx(v_mv[at + n], rel=0, abs=1e-9 * largest)


RINGING = [
    (Circuit(30.0, 0.02, 0.02), None),
    (Circuit(30.0, 0.02, 0.01), None),
    (Circuit(30.0, 0.02, 0.006), None),
    (Circuit(30.0, 0.05, 0.11), None),
    (Circuit(30.0, 0.02, 0.02, 0.0, 0.4), None),
    (Circuit(30.0, 0.05, 0.05, -0.1), Settings(3, 1.0, 2.0)),
    (Circuit(30.0, 0.05, 0.05, 0.1), Settings(3, 1.0, 2.0)),
    (Circuit(30.0, 0.05, 0.05, -0.3), Settings(2, 1.0, 0.0)),
    (Circuit(30.0, 0.02, 0.02, 0.0, 0.1), Settings(4, 0.35, 3.857)),
    (Circuit(30.0, 0.02, 0.01, 0.1, 0.4), Settings(4, 0.2, 0.0)),
    (Circuit(30.0, 0.05, 0.11, -0.2), Settings(4, 0.5, 2.0)),
]


@pytest.mark.parametrize(("circuit", "chosen"), RINGING)
def test_the_loop_starts_to_ring_within_5_percent_of_the_limit(circuit, chosen):
    """The compiled loop on a capacitance: a small deviation dies out below, grows above."""
    limit = limit_ns(circuit, chosen)
    for g_ns, rings in ((0.95 * limit, False), (1.05 * limit, True)):
        v_mv = np.abs(run_leak(circuit, chosen, g_ns, 1200, 1e-6).v_mv)
        early, late = v_mv[200:400].max(), v_mv[-200:].max()
        assert (late > early) == rings, (g_ns, early, late)


SOME = st.builds(
    Settings,
    st.integers(1, 8),
    st.floats(0.05, 1.0),
    st.floats(0.0, 2.0),
)


@given(SOME, st.floats(0.01, 0.1), st.floats(1.0, 300.0), st.integers(1, 2))
@settings(max_examples=25)
def test_anticipation_carries_more_than_the_plain_loop_where_all_is_known(
    chosen, interval, capacitance, delay
):
    """With C exact and no residue, an answer from the next tick on or later."""
    circuit = Circuit(capacitance, interval, delay * interval)
    assert limit_ns(circuit, chosen) > 1.5 * limit_ns(circuit, None)


@given(SOME, st.floats(0.0, 0.9), st.floats(0.0, 0.9), st.floats(0.0, 1.0), st.floats(0.2, 2.0))
@settings(max_examples=25)
def test_the_less_is_known_the_less_is_carried(chosen, one, other, residue, delay):
    """The worst limit is positive and does not rise with the uncertainty of C."""
    circuit = Circuit(30.0, 0.05, 0.05 * delay)
    sure, unsure = sorted((one, other))
    for mode in (None, chosen):
        known = worst_limit_ns(corners(circuit, sure, residue), mode)
        unknown = worst_limit_ns(corners(circuit, unsure, residue), mode)
        assert 0.0 < unknown <= known * (1.0 + 1e-3)


def test_a_ceiling_only_shortens_the_search():
    """Below the ceiling the limit is the same, and above it there is none to be found."""
    circuit = Circuit(30.0, 0.05, 0.05, -0.1)
    chosen = Settings(3, 1.0, 2.0)
    limit = limit_ns(circuit, chosen)
    assert limit_ns(circuit, chosen, 1.5 * limit) == pytest.approx(limit, rel=1e-5)
    assert limit_ns(circuit, chosen, 0.99 * limit) == math.inf
    assert spectral_radius(circuit, [0.99 * limit], chosen)[0] < 1.0


# What a model opens


def hodgkin_huxley_open_ns(hold_mv: float, test_mv: float, t_ms: np.ndarray) -> np.ndarray:
    """Na and K conductance (nS on 30 pF) after a step, in closed form.

    Hodgkin and Huxley 1952, rest at -65 mV, 6.3 °C; constants from memory.
    """

    def rates(v_mv: float) -> list[tuple[float, float]]:
        v = v_mv + 65.0 + 1e-9
        return [
            (0.01 * (10 - v) / math.expm1((10 - v) / 10), 0.125 * math.exp(-v / 80)),
            (0.1 * (25 - v) / math.expm1((25 - v) / 10), 4 * math.exp(-v / 18)),
            (0.07 * math.exp(-v / 20), 1 / (math.exp((30 - v) / 10) + 1)),
        ]

    n, m, h = (
        b / (b + d) + (a / (a + c) - b / (b + d)) * np.exp(-t_ms * (b + d))
        for (a, c), (b, d) in zip(rates(hold_mv), rates(test_mv), strict=True)
    )
    return 3600.0 * m**3 * h + 1080.0 * n**4


def test_the_operating_conductance_of_the_squid_axon(squid):
    """The largest over steps from -100..-50 to -60..50 mV, from the published equations."""
    t_ms = np.arange(0.0, 20.0, 0.005)
    steps = [(h, t) for h in range(-100, -49, 10) for t in range(-60, 51, 10)]
    wanted = max(hodgkin_huxley_open_ns(h, t, t_ms).max() for h, t in steps)
    assert operating_ns(squid) == pytest.approx(wanted, rel=0.002)
    assert largest_ns(squid) == pytest.approx(4680.0)
    assert operating_ns(squid) > 2.0 * SPIKES_OPEN_NS


def test_a_leak_is_always_open_and_what_is_taken_away_does_not_count():
    """12 nS of leak beside -7 nS: 12 open at once, 19 at most."""
    pair = [
        {"name": "a", "gmax_ns": 12.0, "reversal_mv": 0.0},
        {"name": "b", "gmax_ns": -7.0, "reversal_mv": 0.0},
    ]
    tables = build_tables(ModelSpec(title="t", source="s", temperature_c=20.0, conductance=pair))
    assert operating_ns(tables) == pytest.approx(12.0)
    assert largest_ns(tables) == pytest.approx(19.0)
    assert tables.bank["gmax_ns"][1] == -7.0


def test_an_inward_rectifier_counts_where_it_is_held():
    """k-ir-striatal opens below rest, at the holding voltages: 1 / (1 + exp((-100 + 100)/10))."""
    tables = build_tables(load_model("k-ir-striatal").spec)
    assert 0.5 * largest_ns(tables) < operating_ns(tables) < largest_ns(tables)


# The choice


def chosen_for(
    tables: Tables, interval_us: float, delay_ticks: float, anticipate="auto", **known
) -> Choice:
    cell = CellSpec(**{"name": "a", "model": "-", "capacitance_pf": 30.0, **known})
    apply = "next-tick" if delay_ticks == NEXT_TICK else "on-arrival"
    loop = LoopSpec(interval_us=interval_us, apply=apply, anticipate=anticipate)
    return choose(cell, tables, loop, delay_ticks * interval_us / 1000.0)


def overridden(tables: Tables, **given) -> Choice:
    cell = CellSpec(name="a", model="-", capacitance_pf=30.0, anticipate=given)
    return choose(cell, tables, LoopSpec(interval_us=20.0))


def fire(tables: Tables, interval_us: float, delay_ticks: float, choice: Choice, **conditions):
    """The squid axon under 300 pA for 200 ms, in the loop of a choice."""
    shadow = Settings(choice.substeps, choice.alpha, choice.beta) if choice.on else None
    loop = Conditions(interval_us, delay_ticks, settings=shadow, **conditions)
    return run_lockstep_loop(loop, AXON, tables, 200.0, stimulus_pa=DRIVE_PA)


def error_us(run: LockstepRun) -> float:
    return 1000.0 * (float(run.spikes_ms[13]) - FOURTEENTH_MS) if run.spikes_ms.size > 13 else 1e9


def kept(run: LockstepRun) -> bool:
    """14 spikes, none of them moved as ringing moves them: a residue alone makes under 3 ms."""
    return run.spikes_ms.size == 14 and abs(error_us(run)) < 3000.0


@pytest.mark.parametrize(
    ("interval_us", "delay_ticks", "largest_us"),
    [(20, 0.5, 5), (20, 1, 15), (50, 0.5, 20), (50, 1, 80), (100, 0.5, 60), (100, 1, 300)],
)
def test_the_choice_is_faithful(squid, peak_mv, interval_us, delay_ticks, largest_us):
    """With what is known by default, C within 10 % and 0.1 MΩ: the 14th spike, and the peak."""
    choice = chosen_for(squid, interval_us, delay_ticks)
    assert choice.on
    assert choice.anticipating_margin >= KEPT
    run = fire(squid, interval_us, delay_ticks, choice)
    assert run.spikes_ms.size == 14
    assert abs(error_us(run)) < largest_us
    if interval_us <= 50:
        assert abs(run.fine_mv.max() - peak_mv) < 0.4


@pytest.mark.parametrize("interval_us", [20, 50])
@pytest.mark.parametrize("delay_ticks", [ON_ARRIVAL, NEXT_TICK])
@pytest.mark.parametrize("factor", [0.7, 1.3])
def test_a_capacitance_as_wrong_as_stated_loses_nothing(
    squid, peak_mv, interval_us, delay_ticks, factor
):
    """C stated as known within 30 % and truly 30 % off: every spike, peak within 4 mV."""
    stated_pf = 30.0 / factor
    choice = chosen_for(
        squid, interval_us, delay_ticks, capacitance_pf=stated_pf, capacitance_uncertainty=0.3
    )
    run = fire(squid, interval_us, delay_ticks, choice, capacitance_error=1.0 / factor - 1.0)
    assert kept(run)
    assert abs(run.fine_mv.max() - peak_mv) < 4.0


@pytest.mark.parametrize("share", [0.2, 0.4, 0.6, 0.8])
def test_a_residue_that_is_stated_loses_no_spike(squid, share):
    """20 µs and one tick: peak conductance times R up to 0.8."""
    residue = 1000.0 * share / SPIKES_OPEN_NS
    choice = chosen_for(squid, 20, NEXT_TICK, electrode={"residue_mohm": residue})
    assert kept(fire(squid, 20, NEXT_TICK, choice, residue_mohm=residue))


@pytest.mark.parametrize("interval_us", [10, 20, 35, 50, 100])
@pytest.mark.parametrize("delay_ticks", [ON_ARRIVAL, NEXT_TICK])
def test_auto_never_takes_the_loop_that_loses_spikes_where_the_other_keeps_them(
    squid, interval_us, delay_ticks
):
    """Over peak conductance times R from 0 to 2."""
    for share in (0.0, 0.5, 1.0, 1.6, 2.0):
        residue = 1000.0 * share / SPIKES_OPEN_NS
        auto = chosen_for(squid, interval_us, delay_ticks, electrode={"residue_mohm": residue})
        other = Choice(**{**vars(auto), "on": not auto.on})
        runs = [
            fire(squid, interval_us, delay_ticks, c, residue_mohm=residue) for c in (auto, other)
        ]
        assert kept(runs[0]) or not kept(runs[1]), (share, auto)


def test_a_margin_below_one_is_where_the_loop_may_ring(squid):
    """50 µs and one tick: the plain loop's margin is a quarter, and its spikes are lost."""
    choice = chosen_for(squid, 50, NEXT_TICK, anticipate=False)
    assert not choice.on
    assert choice.margin == choice.plain_margin
    assert choice.plain_limit_ns == pytest.approx(540.0, rel=0.01)
    assert not kept(fire(squid, 50, NEXT_TICK, choice))
    said = advice([choice])
    assert said is not None
    assert f"cell a: the loop carries {choice.limit_ns:.4g} nS" in said


def test_nothing_is_advised_against_where_margins_hold(squid):
    """Nor where nothing is known of the cell."""
    good = chosen_for(squid, 20, NEXT_TICK)
    unknown = chosen_for(squid, 50, NEXT_TICK, capacitance_pf=None)
    assert advice([good, unknown]) is None
    bad = chosen_for(squid, 50, NEXT_TICK, anticipate=False)
    assert advice([good, bad, bad]).count("may ring by itself") == 2


def test_auto_needs_the_capacitance_and_true_insists_on_it(squid):
    """Without it the plain loop runs and says why; true is a fault of the file."""
    choice = chosen_for(squid, 20, NEXT_TICK, capacitance_pf=None)
    assert not choice.on
    assert choice.margin is choice.plain_margin is choice.anticipating_margin is None
    assert "capacitance_pf" in choice.reason
    assert choice.operating_ns == operating_ns(squid)
    with pytest.raises(FileError, match=r"loop\.anticipate = true needs .* capacitance_pf"):
        chosen_for(squid, 20, NEXT_TICK, anticipate=True, capacitance_pf=None)


def test_what_the_rig_file_says_wins(squid):
    """Both true and false; each setting alone, with the others chosen around it; all three."""
    assert not chosen_for(squid, 20, NEXT_TICK, anticipate=False).on
    large = {"electrode": {"residue_mohm": 2.0}}
    assert chosen_for(squid, 10, ON_ARRIVAL, anticipate=True, **large).on
    for key, value in (("substeps", 7), ("alpha", 0.9), ("beta", 0.25)):
        assert getattr(overridden(squid, **{key: value}), key) == value
    choice = overridden(squid, substeps=2, alpha=1.0, beta=2.0)
    assert (choice.substeps, choice.alpha, choice.beta) == (2, 1.0, 2.0)
    circuit = Circuit(30.0, 0.02, 0.02)
    wanted = worst_limit_ns(corners(circuit, 0.1, 0.1), Settings(2, 1.0, 2.0))
    assert choice.anticipating_limit_ns == wanted


def test_the_delay_is_that_of_the_loop(squid):
    """A tick with next-tick, whatever is measured; on arrival half a tick, or as measured."""
    cell = CellSpec(name="a", model="-", capacitance_pf=30.0)
    next_tick, on_arrival = (
        LoopSpec(interval_us=20.0, apply=apply) for apply in ("next-tick", "on-arrival")
    )
    assert choose(cell, squid, next_tick, 0.003).delay_ms == pytest.approx(0.02)
    assert choose(cell, squid, on_arrival).delay_ms == pytest.approx(0.01)
    assert choose(cell, squid, on_arrival, 0.003).delay_ms == pytest.approx(0.003)
    long = choose(cell, squid, on_arrival, 0.5)
    assert not long.on
    assert "8 ticks" in long.reason


def test_a_small_conductance_is_followed_with_the_whole_lead():
    """1 nS: the margin is ample either way, so fidelity decides."""
    choice = chosen_for(leak_of(1.0), 20, NEXT_TICK)
    assert choice.on
    assert (choice.alpha, choice.beta) == (1.0, 2.0)
    assert choice.margin > 100.0


def test_a_model_without_conductance_has_no_limit_to_meet():
    """With gmax 0 margins are infinite, and None in JSON, which knows no infinity."""
    choice = chosen_for(leak_of(0.0), 20, NEXT_TICK)
    assert choice.plain_margin == choice.anticipating_margin == math.inf
    data = json.loads(json.dumps(choice.plain_data(), allow_nan=False))
    assert data["plain_margin"] is data["margin"] is None
    assert data["plain_limit_ns"] == pytest.approx(1500.0 * 0.9, rel=0.03)
    assert data["reason"] == choice.reason


@given(
    st.floats(1.0, 300.0),
    st.floats(0.0, 0.5),
    st.floats(0.0, 2.0),
    st.floats(5.0, 200.0),
    st.sampled_from([ON_ARRIVAL, NEXT_TICK]),
    st.floats(0.1, 1e4),
)
@settings(max_examples=10)
def test_a_choice_is_never_worse_than_the_plain_loop(
    capacitance, uncertainty, residue, interval_us, delay_ticks, gmax_ns
):
    """Margins are positive, and anticipation runs only where it carries enough or as much."""
    choice = chosen_for(
        leak_of(gmax_ns),
        interval_us,
        delay_ticks,
        capacitance_pf=capacitance,
        capacitance_uncertainty=uncertainty,
        electrode={"residue_mohm": residue},
    )
    assert choice.plain_margin > 0
    assert choice.anticipating_margin > 0
    assert choice.reason
    if choice.on:
        assert choice.margin >= min(KEPT, 0.95 * choice.plain_margin)
    assume(choice.margin < 1.0)
    assert advice([choice]) is not None


def test_candidates_come_in_order_of_fidelity():
    """The farthest reach first: beta less the lag of the smoothing never grows."""
    cell = CellSpec(name="a", model="-", capacitance_pf=30.0)
    tried = list(candidates(cell, Circuit(30.0, 0.05, 0.05)))
    reach = [s.beta - (1.0 - s.alpha) / s.alpha for s in tried]
    assert all(a >= b - 1e-9 for a, b in itertools.pairwise(reach))
    assert tried[0] == Settings(3, 1.0, 2.0)
    assert len(tried) == 4 * len(ALPHAS) + 9
