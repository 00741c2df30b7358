"""The closed loop without sockets: the same as with them, and what theory says of it."""

from __future__ import annotations

from decimal import Decimal, localcontext
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import solve_ivp

from gatestep import anticipate
from gatestep.anticipate import SHADOW, cross, estimate
from gatestep.errors import GatestepError
from gatestep.kernel import BANK, STATES, records, settle, step
from gatestep.kinetics import kinetics_of
from gatestep.library import load_model
from gatestep.lockstep import Conditions, LockstepRun, run_lockstep_loop
from gatestep.simrig import SimRig
from gatestep.specs import CellLimits, ModelSpec, SimCellSpec, StepSpec
from gatestep.stability import Settings
from gatestep.tables import Tables, build_tables, fill_bank

AXON = SimCellSpec(capacitance_pf=30.0, leak_ns=9.0, leak_mv=-54.387, start_mv=-65.0)
DRIVE_PA = 300.0
FOURTEENTH_MS = 192.471178
"""14th spike of the squid axon membrane at 10 uA/cm2; computed with scipy's LSODA and
DOP853 at rtol 1e-10 from the published equations, which agree to 1 ns."""


@pytest.fixture(scope="module")
def squid() -> Tables:
    return build_tables(load_model("squid-na-k").spec)


ARM_MS = 0.25


def leak_of(gmax_ns: float, reversal_mv: float) -> Tables:
    """A model that is one leak."""
    conductance = {"name": "leak", "gmax_ns": gmax_ns, "reversal_mv": reversal_mv}
    return build_tables(
        ModelSpec(title="leak", source="Ohm's law", temperature_c=22.0, conductance=[conductance])
    )


def fire(squid: Tables, tick_us: float, delay_ticks: float, **changes) -> LockstepRun:
    """The squid axon's 14 spikes under 300 pA in a loop."""
    conditions = Conditions(tick_us, delay_ticks, **changes)
    return run_lockstep_loop(conditions, AXON, squid, 200.0, stimulus_pa=DRIVE_PA)


def usual(delay_ticks: float) -> Settings:
    """Four sub-steps, the estimate extrapolated to the middle of the hold."""
    return Settings(4, 1.0, delay_ticks + 1.0)


def error_us(run: LockstepRun) -> float:
    """How late the 14th spike is, in µs."""
    assert run.spikes_ms.size == 14
    return float(1000.0 * (run.spikes_ms[13] - FOURTEENTH_MS))


@pytest.mark.parametrize("apply", ["next-tick", "on-arrival"])
def test_a_run_is_that_of_the_simulated_rig_and_a_real_server(serving, squid, apply):
    """Bit for bit: with noise, residue, jitter and drops, and limits that clip.

    The other side is the server itself over its socket, with the simulated rig as client.
    """
    cell = AXON.model_copy(update={"noise_mv": 0.2, "electrode_mohm": 0.5})
    limits = {"current_pa": 1500.0, "slew_pa_per_ms": 20_000.0}
    server = serving(
        loop={"interval_us": 20.0, "apply": apply, "anticipate": False},
        cell=[{"name": "a", "model": "squid-na-k", "capacitance_pf": 30.0, "limits": limits}],
        limits={"silence_ms": 60_000.0, "late_run": 1000},
        simulated={
            "seed": 7,
            "delay_us": 12.0,
            "jitter_us": 9.0,
            "drop": 0.05,
            "cell": [cell.model_dump()],
        },
    )
    server.control.arm(force=True)
    with SimRig(server.rig.spec, endpoint=server.server.endpoints()["loop"]) as rig:
        theirs = rig.run(0.03, np.full(1500, DRIVE_PA))
    conditions = Conditions(
        delay_ticks=0.6,
        next_tick=apply == "next-tick",
        jitter_ticks=0.45,
        drop=0.05,
        noise_mv=0.2,
        residue_mohm=0.5,
        seed=7,
        limits=CellLimits(**limits),
    )
    ours = run_lockstep_loop(conditions, AXON, squid, 30.0, stimulus_pa=DRIVE_PA, fine_us=1e9).trace
    for name in ("v_mv", "measured_mv", "i_pa", "answered_pa", "in_force"):
        np.testing.assert_array_equal(getattr(ours, name), getattr(theirs, name), name)
    assert ours.flagged(2) == theirs.flagged(2) > 0
    assert theirs.spikes().size >= 2


def test_the_same_arguments_give_the_same_run(squid):
    """Two runs are equal to the last bit, another seed's is not."""
    faults = {"jitter_ticks": 0.25, "drop": 0.02, "noise_mv": 0.2, "settings": usual(0.5)}
    first, again, other = (fire(squid, 50.0, 0.5, seed=s, **faults) for s in (3, 3, 4))
    np.testing.assert_array_equal(first.fine_mv, again.fine_mv)
    assert first.counts == again.counts
    assert not np.array_equal(first.fine_mv, other.fine_mv)


def test_noting_the_membrane_more_often_changes_nothing(squid):
    """Parts of a tick only look at the cell; a passive one's steps are exact to rounding."""
    runs = [
        run_lockstep_loop(
            Conditions(100.0, 0.3, settings=usual(0.3)),
            AXON,
            squid,
            20.0,
            stimulus_pa=DRIVE_PA,
            fine_us=fine_us,
        )
        for fine_us in (5.0, 1e9)
    ]
    np.testing.assert_allclose(runs[0].v_mv, runs[1].v_mv, rtol=0, atol=1e-9)
    assert runs[0].fine_mv.size == 20 * runs[1].fine_mv.size
    np.testing.assert_array_equal(runs[0].fine_mv[::20], runs[0].v_mv)


def test_a_loop_is_armed_when_it_says(squid):
    """Until arm_ms nothing is injected; the next sample's answer is the first that flows."""
    run = run_lockstep_loop(Conditions(20.0, 0.5), AXON, squid, 4.0, arm_ms=2.0)
    i_pa = run.trace.i_pa[:, 0]
    assert not i_pa[:100].any()
    assert i_pa[100:].all()


def test_steps_of_the_cell_are_the_stimulus(squid):
    """Without a stimulus of its own a run takes the cell's steps, each from tick to tick."""
    cell = AXON.model_copy(update={"step": (StepSpec(start_ms=0.4, stop_ms=1.0, current_pa=50.0),)})
    run = run_lockstep_loop(Conditions(20.0, 0.5), cell, squid, 2.0)
    wanted = np.zeros(100)
    wanted[20:50] = 50.0
    np.testing.assert_array_equal(run.trace.stimulus_pa[:, 0], wanted)


@pytest.mark.parametrize(
    ("changes", "named"),
    [
        ({"tick_us": 0.0}, "tick_us"),
        ({"delay_ticks": 9.0}, "delay_ticks"),
        ({"drop": 1.0}, "drop"),
        ({"capacitance_error": float("nan")}, "capacitance_error"),
    ],
)
def test_conditions_that_cannot_be_are_refused(changes, named):
    """The fault names what was given and what is allowed."""
    with pytest.raises(GatestepError, match=f"{named} = .*: give "):
        Conditions(**changes)


def spread_us(squid: Tables, settings: Settings | None, **faults) -> np.ndarray:
    """Errors of the 14th spike at 20 µs and half a tick, one a seed."""
    return np.array(
        [
            error_us(fire(squid, 20.0, 0.5, settings=settings, seed=seed, **faults))
            for seed in range(1, 9)
        ]
    )


def test_jitter_and_drops_do_little_harm(squid):
    """0.25 to 0.75 ticks of delay and 1 % of answers lost: at most 40 µs on the average."""
    errors = spread_us(squid, usual(0.5), jitter_ticks=0.25, drop=0.01)
    assert np.abs(errors).mean() <= 40.0


def test_noise_does_little_harm(squid):
    """0.1 mV rms: at most 60 µs on the average, spread as the plain loop's or up to 1.3 of it."""
    errors = spread_us(squid, usual(0.5), noise_mv=0.1)
    plain = spread_us(squid, None, noise_mv=0.1)
    assert np.abs(errors).mean() <= 60.0
    assert errors.std() <= 1.3 * plain.std()


def rms_mv(run: LockstepRun, cell: SimCellSpec, virtual_ns: float) -> float:
    """Distance from the exact exponentials of a capacitance and its conductances at -60 mV.

    The virtual one counts from ``ARM_MS`` on, when its first answer's sample is taken,
    and a delay: when a loop begins to act says nothing of how well it does.
    """
    t_ms = run.trace.t_ms
    acting_ms = np.maximum(t_ms - ARM_MS - 1e-3 * np.nanmax(run.trace.lag_us), 0.0)
    decays = (cell.leak_ns * t_ms + virtual_ns * acting_ms) / cell.capacitance_pf
    exact_mv = -60.0 + (run.v_mv[0] + 60.0) * np.exp(-decays)
    return float(np.sqrt(np.mean((run.v_mv - exact_mv) ** 2)))


@given(
    reach=st.floats(0.01, 1.5),
    own=st.floats(0.0, 0.5),
    delay_ticks=st.floats(0.0, 1.5),
    substeps=st.integers(1, 4),
    start_mv=st.floats(-100.0, 0.0),
)
def test_anticipating_a_leak_is_never_worse_than_not(reach, own, delay_ticks, substeps, start_mv):
    """A passive cell and a leak, capacitance known, beta 0: an rms error at most the plain one's.

    ``reach`` is g dt / C of the virtual leak, ``own`` the cell's own leak as a share of it.
    The loop is armed when it has seen the cell for some ticks, as it is in use.
    """
    g_ns = 100.0 * reach / 0.05
    cell = SimCellSpec(capacitance_pf=100.0, leak_ns=own * g_ns, leak_mv=-60.0, start_mv=start_mv)
    virtual = leak_of(g_ns, -60.0)
    duration_ms = ARM_MS + max(1.0, 500.0 / g_ns)
    errors = []
    for settings in (None, Settings(substeps, 1.0, 0.0)):
        conditions = Conditions(50.0, delay_ticks, settings=settings)
        run = run_lockstep_loop(conditions, cell, virtual, duration_ms, arm_ms=ARM_MS)
        errors.append(rms_mv(run, cell, g_ns))
    plain, foreseen = errors
    assert foreseen <= plain * (1 + 1e-9) + 1e-9


def order_of(squid: Tables, settings: Settings | None) -> float:
    """How the error of the 14th spike falls with the tick: log2 of its ratio at 20 and 10 µs."""
    coarse, fine = (abs(error_us(fire(squid, t, 0.5, settings=settings))) for t in (20.0, 10.0))
    return float(np.log2(coarse / fine))


def test_a_plain_loop_is_first_order_and_anticipation_second(squid):
    """Held stale currents cost an error linear in the tick; the shadow leaves a quadratic one.

    With beta 0 and one sub-step, so that its error is well above what the tables add.
    """
    assert order_of(squid, None) == pytest.approx(1.0, abs=0.15)
    assert order_of(squid, Settings(1, 1.0, 0.0)) > 1.7


@given(
    delay_ticks=st.floats(0.0, 1.99),
    slope=st.floats(-200.0, 400.0),
    bend=st.one_of(st.floats(-3000.0, -500.0), st.floats(500.0, 3000.0)),
)
def test_committed_gates_follow_the_path_and_not_the_chord(squid, delay_ticks, slope, bend):
    """Across a tick of a curved path, sampled on the chords of its holds: to 1e-5 of a gate.

    Where the path is bent most, as in a spike, a step of the kernel is at least ten times
    less true; on straighter ones its two errors can cancel.

    The path is a parabola, mV and ms; the cell runs along its chord over each hold, as a
    constant current makes it. The truth is scipy's solution of the gates along the path.
    """
    dt_ms, gates = 0.02, np.zeros(STATES)
    path = np.polynomial.Polynomial([-45.0, slope, 0.5 * bend])

    def sampled(t_ms: float) -> float:
        began = (np.floor(t_ms / dt_ms - delay_ticks + 1e-9) + delay_ticks) * dt_ms
        share = (t_ms - began) / dt_ms
        return float((1.0 - share) * path(began) + share * path(began + dt_ms))

    v_mv = [sampled(t_ms) for t_ms in (-dt_ms, 0.0, dt_ms)]
    shadow = records(SHADOW)[0]
    shadow.capacitance_pf, shadow.alpha = 30.0, 1.0
    for old_mv, new_mv in pairwise(v_mv):
        estimate(shadow, old_mv, new_mv, 0.0, dt_ms)
    bank = records(BANK)[0]
    table = np.zeros(squid.table.size)
    fill_bank(squid, bank, table)
    kinetics = kinetics_of(squid.spec)
    settle(bank, table, gates, v_mv[1])
    start, plain = gates[:3].copy(), gates.copy()
    step(bank, table, plain, v_mv[1], v_mv[2], dt_ms)
    cross(shadow, bank, table, gates, v_mv[1], v_mv[2], delay_ticks * dt_ms, dt_ms)

    def slopes(t_ms: float, x: np.ndarray) -> list[float]:
        curves = [gate.at(path(t_ms)) for gate in kinetics]
        return [rate * (inf - y) for (inf, rate), y in zip(curves, x, strict=True)]

    true = solve_ivp(slopes, (0.0, dt_ms), start, rtol=1e-8, atol=1e-11).y[:, -1]
    m = squid.gates.index("Na.m")
    worse, better = (abs(x[m] - true[m]) for x in (plain, gates))
    assert better <= 1e-5
    assert better <= 0.1 * worse or abs(bend) < 2500.0


@given(z=st.one_of(st.floats(-1e5, 45.0), st.floats(-1.0, 1.0), st.just(0.0)))
def test_phi_functions_are_exact_to_rounding(z):
    """phi1 = (e^z - 1) / z and phi2 = (phi1 - 1) / z, to 5e-14; the standard library's decimal."""
    with localcontext(prec=50):
        exact = Decimal(z)
        tiny = abs(z) < 1e-15
        phi1 = 1 + exact / 2 if tiny else (exact.exp() - 1) / exact
        phi2 = Decimal("0.5") + exact / 6 if tiny else (phi1 - 1) / exact
    assert anticipate._phis(z) == pytest.approx((float(phi1), float(phi2)), rel=5e-14, abs=0.0)


@pytest.mark.parametrize("v_mv", [np.nan, -np.inf, -1e300])
def test_a_shadow_that_has_no_voltage_stays_on_the_tables(v_mv):
    """What is not a number becomes the lowest voltage, so nothing is read beyond a table."""
    assert anticipate._on_grid(v_mv) == anticipate._on_grid.py_func(v_mv) == -200.0


@pytest.mark.parametrize("stimulus", [np.zeros(3), np.full(100, np.nan), float("inf")])
def test_a_stimulus_has_one_finite_value_a_tick(squid, stimulus):
    """Anything else is refused with what is wanted."""
    with pytest.raises(GatestepError, match="give 100 finite values"):
        run_lockstep_loop(Conditions(), AXON, squid, 2.0, stimulus_pa=stimulus)


@pytest.mark.parametrize("delay_ticks", [0.0, 0.5, 1.0, 1.5])
@pytest.mark.parametrize("next_tick", [False, True])
def test_without_a_conductance_anticipation_changes_nothing(delay_ticks, next_tick):
    """Bit for bit: a virtual conductance of 0 nS answers 0 pA, whatever the shadow does."""
    none = leak_of(0.0, -80.0)
    runs = [
        run_lockstep_loop(
            Conditions(50.0, delay_ticks, next_tick, noise_mv=0.3, settings=settings),
            AXON,
            none,
            10.0,
            stimulus_pa=DRIVE_PA,
        )
        for settings in (None, usual(delay_ticks))
    ]
    np.testing.assert_array_equal(runs[0].fine_mv, runs[1].fine_mv)
    assert not runs[1].trace.answered_pa.any()
    assert runs[1].counts["foreseen"] > 190


@pytest.mark.parametrize(
    ("tick_us", "delay_ticks", "most_us"),
    [(20, 0.5, 5), (20, 1, 15), (50, 0.5, 20), (50, 1, 80), (100, 0.5, 60), (100, 1, 300)],
)
def test_anticipation_takes_the_delay_out(squid, tick_us, delay_ticks, most_us):
    """Error of the 14th spike: a few µs where a plain loop is late by ms or explodes."""
    assert abs(error_us(fire(squid, tick_us, delay_ticks, settings=usual(delay_ticks)))) <= most_us


@pytest.mark.parametrize(
    ("tick_us", "delay_ticks", "late_us"), [(20, 0.5, 760), (20, 1, 1138), (50, 0.5, 1896)]
)
def test_a_plain_loop_is_late_by_so_much(squid, tick_us, delay_ticks, late_us):
    """Within 2 % of an independent simulation of the plain loop (numpy, held voltages)."""
    assert error_us(fire(squid, tick_us, delay_ticks)) == pytest.approx(late_us, rel=0.02)
