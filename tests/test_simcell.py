"""The simulated cell against closed solutions, scipy's solvers and numpy."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp
from scipy.linalg import expm
from scipy.stats import kstest

from gatestep.compiling import compiled
from gatestep.kernel import BANK, records
from gatestep.simcell import (
    SUBSTEP_US,
    V_LIMIT_MV,
    _scrambled,
    carry,
    electrode_voltage,
    gaussian,
    make_cells,
    measured,
    output,
    quantised,
    uniform,
)
from gatestep.specs import SimCellSpec

DT_MS = 0.02


@compiled
def run_cell(sim, i_pa, dt_ms, substep_us, ticks, out):
    """Membrane voltage after every tick under a constant command."""
    for k in range(ticks):
        carry(sim, 0, i_pa, dt_ms, substep_us)
        out[k] = sim.cells[0].v_mv


@compiled
def finalised(z):
    """The generator's finaliser, callable from here."""
    return _scrambled(z)


def voltages(sim, i_pa, ticks, dt_ms=DT_MS, substep_us=SUBSTEP_US):
    out = np.empty(ticks)
    run_cell(sim, i_pa, dt_ms, substep_us, ticks, out)
    return out


def passive(**values):
    return make_cells([SimCellSpec(**values)], [[]])


# The squid membrane. Rate functions of Hodgkin and Huxley 1952 (J. Physiol. 117:500-544)
# in the modern sign with rest at -65 mV, written out here apart from the program.


def _linoid(a, x, k):
    z = np.asarray(x / k, dtype=float)
    small = np.abs(z) < 1e-7
    z = np.where(small, 1.0, z)
    return a * k * np.where(small, 1.0 + x / k / 2.0, z / -np.expm1(-z))


def squid_rates(v):
    return {
        "m": (_linoid(0.1, v + 40, 10), 4 * np.exp(-(v + 65) / 18)),
        "h": (0.07 * np.exp(-(v + 65) / 20), 1 / (1 + np.exp(-(v + 35) / 10))),
        "n": (_linoid(0.01, v + 55, 10), 0.125 * np.exp(-(v + 65) / 80)),
    }


def tabulated(columns_of, gmax_ns, reversal_mv, gates, state, power, dynamic, instant=0):
    """A bank and its table on a 0.02 mV grid, whose error is below 1e-6."""
    v = np.linspace(-150.0, 100.0, 12_501)
    bank = records(BANK)[0]
    bank.v_low_mv, bank.rows_per_mv, bank.rows = -150.0, 50.0, v.size
    bank.dynamic, bank.instant, bank.stride = dynamic, instant, 2 * dynamic + instant
    bank.conductances = len(gmax_ns)
    for field, values in [
        ("gmax_ns", gmax_ns),
        ("reversal_mv", reversal_mv),
        ("gates", gates),
        ("state", state),
        ("power", power),
    ]:
        bank[field][: len(values)] = values
    return bank, columns_of(v, bank.stride).ravel()


def _columns(names, dynamic, instant=()):
    def columns(v, stride):
        table = np.zeros((v.size, stride))
        rates = squid_rates(v)
        for k, name in enumerate(names):
            a, b = rates[name]
            table[:, k], table[:, dynamic + k] = a / (a + b), a + b
        for k, name in enumerate(instant):
            a, b = rates[name]
            table[:, 2 * dynamic + k] = a / (a + b)
        return table

    return columns


C_PF = 30.0
SQUID = {
    "capacitance_pf": C_PF,
    "leak_ns": 0.3 * C_PF,
    "leak_mv": -54.387,
    "start_mv": -65.0,
}


def squid_model(instant_m=False):
    if instant_m:
        return tabulated(
            _columns("hn", 4, "m"),
            [120 * C_PF, 36 * C_PF],
            [50.0, -77.0],
            [2, 1],
            [4, 0, 1],
            [3, 1, 4],
            4,
            1,
        )
    return tabulated(
        _columns("mhn", 4),
        [120 * C_PF, 36 * C_PF],
        [50.0, -77.0],
        [2, 1],
        [0, 1, 2],
        [3, 1, 4],
        4,
    )


def squid_reference(t_ms, i_pa, instant_m=False):
    """V at the times given, by LSODA at rtol 1e-10 on the equations themselves."""

    def slope(_, y):
        v, m, h, n = y
        rates = squid_rates(v)
        if instant_m:
            m = rates["m"][0] / sum(rates["m"])
        ionic = 120 * m**3 * h * (v - 50) + 36 * n**4 * (v + 77) + 0.3 * (v + 54.387)
        gates = [a * (1 - x) - b * x for (a, b), x in zip(rates.values(), (m, h, n), strict=True)]
        return [i_pa / C_PF - ionic, *gates]

    start = [a / (a + b) for a, b in squid_rates(-65.0).values()]
    solved = solve_ivp(
        slope, (0, t_ms[-1]), [-65.0, *start], "LSODA", t_eval=t_ms, rtol=1e-10, atol=1e-12
    )
    return solved.y[0]


def spike_times(t_ms, v_mv):
    k = np.flatnonzero((v_mv[:-1] < 0) & (v_mv[1:] >= 0))
    return t_ms[k] - v_mv[k] / (v_mv[k + 1] - v_mv[k]) * (t_ms[k + 1] - t_ms[k])


@settings(max_examples=50, deadline=None)
@given(
    st.floats(1, 1e3),
    st.floats(0, 1e3),
    st.floats(-100, 0),
    st.floats(-100, 0),
    st.floats(-1e3, 1e3),
    st.floats(1e-3, 10),
)
def test_passive_cell_is_exact(c_pf, g_ns, leak_mv, start_mv, i_pa, dt_ms):
    """Leak and capacitance under a constant current follow the closed solution to rounding."""
    sim = passive(capacitance_pf=c_pf, leak_ns=g_ns, leak_mv=leak_mv, start_mv=start_mv)
    ticks = 20
    found = voltages(sim, i_pa, ticks, dt_ms)
    t = dt_ms * np.arange(1, ticks + 1)
    # Circuit law, with (1 - exp(-x)) / x so that g = 0 is covered.
    drive = (g_ns * (leak_mv - start_mv) + i_pa) / c_pf
    x = t * g_ns / c_pf
    with np.errstate(invalid="ignore", divide="ignore"):
        grown = np.where(x > 0, -np.expm1(-x) / x, 1.0)
    expected = start_mv + drive * t * grown
    inside = np.abs(expected) < V_LIMIT_MV
    inside = np.logical_and.accumulate(inside)
    np.testing.assert_allclose(found[inside], expected[inside], rtol=1e-9, atol=1e-9)


def test_electrode_follows_scipy():
    """Cell and charging electrode follow Radau's solution of the two equations."""
    c, ce, r, g, i = 30.0, 5.0, 5.0, 3.0, 200.0
    sim = passive(capacitance_pf=c, leak_ns=g, leak_mv=-65.0, electrode_mohm=r, electrode_pf=ce)
    ge = 1000.0 / r

    def slope(_, y):
        return [(g * (-65.0 - y[0]) + ge * (y[1] - y[0])) / c, (i - ge * (y[1] - y[0])) / ce]

    t = DT_MS * np.arange(1, 201)
    solved = solve_ivp(slope, (0, t[-1]), [-65.0] * 2, "Radau", t_eval=t, rtol=1e-11, atol=1e-11)
    for k in range(t.size):
        carry(sim, 0, i, DT_MS, SUBSTEP_US)
        assert sim.cells[0].v_mv == pytest.approx(solved.y[0, k], abs=1e-8)
        assert electrode_voltage(sim.cells[0]) == pytest.approx(solved.y[1, k], abs=1e-8)


@settings(max_examples=60, deadline=None)
@given(
    st.floats(5, 500),
    st.floats(0, 300),
    st.floats(0.1, 300),
    st.floats(0.1, 100),
    st.floats(-500, 500),
    st.floats(0.005, 1),
)
def test_electrode_is_the_matrix_exponential(c, g, r, ce, i, dt):
    """One step of any electrode is scipy's matrix exponential of the linear system."""
    values = {"capacitance_pf": c, "leak_ns": g, "leak_mv": -65.0, "start_mv": -40.0}
    sim = passive(**values, electrode_mohm=r, electrode_pf=ce)
    carry(sim, 0, i, dt, SUBSTEP_US)
    ge = 1000.0 / r
    system = np.array(
        [
            [-(g + ge) / c, ge / c, g * -65.0 / c],
            [ge / ce, -ge / ce, i / ce],
            [0.0, 0.0, 0.0],
        ]
    )
    expected = expm(system * dt) @ [-40.0, -40.0, 1.0]
    if np.abs(expected[0]) < V_LIMIT_MV:
        found = [sim.cells[0].v_mv, sim.cells[0].electrode_mv]
        np.testing.assert_allclose(found, expected[:2], rtol=1e-9, atol=1e-7)


def test_electrode_without_capacitance_is_ohms_law():
    """With Ce = 0 the electrode adds R times the command at once; the bridge takes it off."""
    sim = passive(electrode_mohm=20.0, bridge_mohm=15.0)
    carry(sim, 0, 300.0, DT_MS, SUBSTEP_US)
    v = sim.cells[0].v_mv
    # MΩ · pA = µV.
    assert electrode_voltage(sim.cells[0]) == pytest.approx(v + 6.0, abs=1e-12)
    assert measured(sim, 0, 1, 0) == pytest.approx(v + 1.5, abs=1e-12)


def test_capacitance_without_resistance_is_parallel():
    """With R = 0 the electrode's capacitance adds to the membrane's."""
    one = voltages(passive(capacitance_pf=25.0, electrode_pf=5.0), 100.0, 50)
    np.testing.assert_array_equal(one, voltages(passive(capacitance_pf=30.0), 100.0, 50))


def test_squid_cell_spikes_when_it_should():
    """Native squid conductances: spike times over 50 ms within 2 µs of LSODA's."""
    t = DT_MS * np.arange(2501)
    i_pa = 10 * C_PF
    sim = make_cells([SimCellSpec(**SQUID)], [[squid_model()]])
    v = np.concatenate([[-65.0], voltages(sim, i_pa, 2500)])
    reference = squid_reference(t, i_pa)
    expected = spike_times(t, reference)
    assert expected.size == 4
    np.testing.assert_allclose(spike_times(t, v), expected, atol=2e-3)
    assert np.abs(v - reference).max() < 0.05


@pytest.mark.parametrize("instant_m", [False, True])
def test_substeps_are_second_order(instant_m):
    """Halving the sub-step divides the error by about 4, instantaneous gates included."""
    t = DT_MS * np.arange(201)

    def run(substep_us):
        model = squid_model(instant_m)
        sim = make_cells([SimCellSpec(**SQUID)], [[model]])
        return np.concatenate([[-65.0], voltages(sim, 10 * C_PF, 200, DT_MS, substep_us)])

    finest = run(0.1)
    np.testing.assert_allclose(finest, squid_reference(t, 10 * C_PF, instant_m), atol=0.02)
    errors = [np.abs(run(s) - finest).max() for s in (4.0, 2.0, 1.0)]
    for coarse, fine in pairwise(errors):
        assert 3.4 < coarse / fine < 4.6


def test_several_native_models_add_up():
    """Na and K given as two models are the same cell as one model of both."""
    na = tabulated(_columns("mh", 4), [120 * C_PF], [50.0], [2], [0, 1], [3, 1], 4)
    k = tabulated(_columns("n", 4), [36 * C_PF], [-77.0], [1], [0], [4], 4)
    two = voltages(make_cells([SimCellSpec(**SQUID)], [[na, k]]), 300.0, 500)
    one = voltages(make_cells([SimCellSpec(**SQUID)], [[squid_model()]]), 300.0, 500)
    np.testing.assert_allclose(two, one, atol=1e-9)


def test_cells_do_not_touch_each_other():
    """Each cell of several has its own models, gates and voltage."""
    specs = [SimCellSpec(**SQUID), SimCellSpec(), SimCellSpec(**SQUID)]
    sim = make_cells(specs, [[squid_model()], [], [squid_model()]])
    for _ in range(500):
        for cell, i_pa in enumerate((0.0, 50.0, 300.0)):
            carry(sim, cell, i_pa, DT_MS, SUBSTEP_US)
    alone = make_cells([SimCellSpec(**SQUID)], [[squid_model()]])
    assert sim.cells[2].v_mv == voltages(alone, 300.0, 500)[-1]
    assert sim.cells[1].v_mv == voltages(passive(), 50.0, 500)[-1]
    assert sim.cells[0].v_mv == pytest.approx(-65.0, abs=0.1)


def test_switching_within_a_tick_changes_nothing():
    """A tick cut in two at any place under one command gives the same voltage."""
    whole = voltages(passive(electrode_mohm=5.0, electrode_pf=5.0), 100.0, 1)[0]
    cut = passive(electrode_mohm=5.0, electrode_pf=5.0)
    carry(cut, 0, 100.0, 0.0137, SUBSTEP_US)
    carry(cut, 0, 100.0, DT_MS - 0.0137, SUBSTEP_US)
    assert cut.cells[0].v_mv == pytest.approx(whole, abs=1e-11)


any_resistance = st.one_of(st.just(0.0), st.floats(1e-3, 1000))


@settings(max_examples=150, deadline=None)
@given(
    st.builds(
        SimCellSpec,
        capacitance_pf=st.floats(1e-3, 1e5),
        leak_ns=st.floats(0, 1e5),
        leak_mv=st.floats(-200, 200),
        start_mv=st.one_of(st.none(), st.floats(-200, 200)),
        electrode_mohm=any_resistance,
        electrode_pf=any_resistance,
        bridge_mohm=st.floats(0, 1000),
        noise_mv=st.floats(0, 50),
        adc_bits=st.integers(0, 32),
        dac_bits=st.integers(0, 32),
    ),
    st.floats(-1e6, 1e6),
    st.floats(-1e6, 1e6),
    st.floats(0.005, 0.2),
    st.booleans(),
)
def test_any_cell_stays_finite(spec, gmax_ns, i_pa, dt_ms, native):
    """No allowed cell, negative conductance or command makes a voltage that is not finite."""
    model = squid_model()
    model[0].gmax_ns[:2] = gmax_ns, -gmax_ns / 3
    sim = make_cells([spec], [[model] if native else []])
    for tick in range(20):
        carry(sim, 0, output(sim, 0, i_pa if tick % 7 else -i_pa), dt_ms, SUBSTEP_US)
        assert abs(sim.cells[0].v_mv) <= V_LIMIT_MV
        assert math.isfinite(electrode_voltage(sim.cells[0]))
        assert math.isfinite(measured(sim, 0, 1, tick))
    assert np.all((sim.gates >= 0) & (sim.gates <= 1))


@pytest.mark.parametrize("bits", [1, 8, 12, 16])
def test_converters_round_to_codes_and_saturate(bits):
    """Both converters give the nearest of 2**bits values over their range, by numpy."""
    low, high = -200.0, 200.0
    codes = low + (high - low) / 2**bits * np.arange(2**bits)
    values = np.random.default_rng(3).uniform(-300, 300, 500)
    nearest = codes[np.abs(values[:, None] - codes).argmin(axis=1)]
    found = [quantised(v, low, (high - low) / 2**bits, 2.0**bits - 1) for v in values]
    np.testing.assert_allclose(found, nearest, rtol=0, atol=1e-12)
    sim = passive(adc_bits=bits, dac_bits=bits, dac_range_pa=(low, high), start_mv=-63.21)
    assert measured(sim, 0, 1, 0) == codes[np.abs(-63.21 - codes).argmin()]
    assert output(sim, 0, 1e5) == codes[-1]
    assert output(sim, 0, -1e5) == codes[0]


def test_ideal_converters_pass_everything():
    """Without bits nothing is rounded and nothing saturates."""
    sim = passive(start_mv=-61.234567891)
    assert measured(sim, 0, 1, 0) == -61.234567891
    assert output(sim, 0, 54321.987) == 54321.987


def test_noise_is_gaussian_white_and_reproducible():
    """Noise has mean 0 and the stated rms, is normal (Kolmogorov-Smirnov) and uncorrelated."""
    count = 20_000
    sim = passive(noise_mv=0.5, start_mv=-65.0)
    noise = np.array([measured(sim, 0, 7, k) for k in range(count)]) + 65.0
    assert noise.std() == pytest.approx(0.5, rel=0.02)
    assert abs(noise.mean()) < 4 * 0.5 / math.sqrt(count)
    assert kstest(noise / 0.5, "norm").pvalue > 1e-3
    assert abs(np.corrcoef(noise[:-1], noise[1:])[0, 1]) < 4 / math.sqrt(count)
    assert [measured(sim, 0, 7, k) + 65.0 for k in (0, 5)] == [noise[0], noise[5]]
    other_seed = np.array([gaussian(8, 0, k) for k in range(count)])
    other_cell = np.array([gaussian(7, 1, k) for k in range(count)])
    for other in (other_seed, other_cell):
        assert abs(np.corrcoef(noise, other)[0, 1]) < 4 / math.sqrt(count)


def test_generator_is_splitmix64():
    """The finaliser on a Weyl sequence gives splitmix64's outputs for seed 1234567.

    Source: the values widely published for that generator and seed (memory).
    """
    golden = 0x9E3779B97F4A7C15
    found = [int(finalised(np.uint64((1234567 + k * golden) % 2**64))) for k in (1, 2, 3)]
    assert found == [6457827717110365317, 3203168211198807973, 9817491932198370423]


def test_draws_are_uniform_over_streams_and_ticks():
    """Draws lie in (0, 1] and are uniform across ticks and across streams."""
    ticks = np.array([uniform(1, 16, k) for k in range(10_000)])
    streams = np.array([uniform(k, 17, 3) for k in range(10_000)])
    for draws in (ticks, streams):
        assert draws.min() > 0
        assert draws.max() <= 1
        assert kstest(draws, "uniform").pvalue > 1e-3
