"""The shipped models against published figures and equations."""

import json
import math
import tomllib
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import brentq

from gatestep.formula import make_curve
from gatestep.kinetics import curves_of, kinetics_of
from gatestep.library import load_model, shipped_folder, shipped_models, shipped_names
from gatestep.tables import BOUND, HIGH_MV, LOW_MV, build_tables

# Its "source" says where the figures come from.
FIGURES = json.loads((Path(__file__).parent / "data" / "gate_values.json").read_text("utf-8"))
CASES = [(value, *place.split(": ")) for value in FIGURES["values"] for place in value["gates"]]
NAMES = shipped_names()


def test_every_shipped_gate_has_published_figures():
    """No gate is shipped that is not held against figures of its paper."""
    shipped = {(m.name, gate.name) for m in shipped_models() for gate in kinetics_of(m.spec)}
    assert shipped == {(name, gate) for _, name, gate in CASES}


@pytest.mark.parametrize(("value", "name", "gate"), CASES)
def test_steady_states_and_time_constants_are_the_published_ones(value, name, gate):
    """At eight voltages, singular points among them, to the figures' 8 digits."""
    curves = {c.name: c for c in curves_of(load_model(name).spec, FIGURES["v_mv"])}
    np.testing.assert_allclose(curves[gate].inf, value["inf"], rtol=1e-7)
    np.testing.assert_allclose(curves[gate].tau_ms, value.get("tau_ms", [0.0] * 8), rtol=1e-7)


@pytest.mark.parametrize(("value", "name", "gate"), [c for c in CASES if "alpha_per_ms" in c[0]])
def test_rates_are_the_published_ones(value, name, gate):
    """Where a file gives alpha and beta, each of them matches, not only their sum."""
    spec = load_model(name).spec
    conductance, gate_name = gate.split(".")
    (found,) = (c for c in spec.conductance if c.name == conductance)
    (found,) = (g for g in found.gate if g.name == gate_name)
    for key in ("alpha", "beta"):
        if getattr(found, key) is not None:
            rates = make_curve(getattr(found, key), spec.parameters, gate)(FIGURES["v_mv"])
            np.testing.assert_allclose(rates, value[f"{key}_per_ms"], rtol=1e-7)


def squid_rates_of_1952(v):
    """The rates as printed in 1952 but in the modern sign, v the voltage above rest.

    Hodgkin and Huxley 1952, J Physiol 117:500-544, equations 12 to 24 (from memory).
    """

    def singular(x):
        return x / math.expm1(x / 10) if x else 10.0

    return {
        "K.n": (0.01 * singular(10 - v), 0.125 * math.exp(-v / 80)),
        "Na.m": (0.1 * singular(25 - v), 4 * math.exp(-v / 18)),
        "Na.h": (0.07 * math.exp(-v / 20), 1 / (math.exp((30 - v) / 10) + 1)),
    }


@pytest.mark.parametrize("name", ["squid-axon", "squid-na-k", "na-squid", "k-squid"])
def test_the_squid_gates_are_those_of_1952(name):
    """Steady states and time constants equal the 1952 equations at rest -65 mV."""
    v_mv = np.append(np.arange(-120.0, 61.0, 2.5), [-65.0, -55.0, -40.0])
    for curve in curves_of(load_model(name).spec, v_mv):
        rates = np.array([squid_rates_of_1952(v + 65.0)[curve.name] for v in v_mv])
        np.testing.assert_allclose(curve.inf, rates[:, 0] / rates.sum(axis=1), rtol=1e-9)
        np.testing.assert_allclose(curve.tau_ms, 1 / rates.sum(axis=1), rtol=1e-9)


def test_the_squid_axon_rests_at_its_resting_potential():
    """At -65 mV n, m, h are 0.3177, 0.0529, 0.5961 and no current flows at -64.996 mV.

    Figures computed from the 1952 equations; the leak's printed reversal, 10.613 mV
    above rest, puts the membrane's own rest 0.004 mV above it (by hand: 1.2201 - 4.3998
    + 3.1839 = 0.0042 uA/cm2 at rest, over a slope of about 1.17 mS/cm2).
    """
    spec = load_model("squid-axon").spec
    rest = {c.name: float(c.inf[0]) for c in curves_of(spec, [-65.0])}
    assert rest == pytest.approx({"Na.m": 0.0529, "Na.h": 0.5961, "K.n": 0.3177}, abs=5e-5)

    def current(v_mv):
        open_part = {"Na": 1.0, "K": 1.0, "leak": 1.0}
        for c in curves_of(spec, [v_mv]):
            open_part[c.name.split(".")[0]] *= float(c.inf[0]) ** c.instances
        return sum(c.gmax_ns * open_part[c.name] * (c.reversal_mv - v_mv) for c in spec.conductance)

    assert brentq(current, -75.0, -55.0) == pytest.approx(-64.9964, abs=1e-3)


# pF of cylinders as long as wide, from their diameters in µm (Pospischil et al. 2008).
RAT_RS, RAT_FS, RAT_LTS = (math.pi * d**2 / 100 for d in (61.4, 56.9, 89.2))


@pytest.mark.parametrize(
    ("name", "capacitance_pf", "densities"),
    [
        ("squid-axon", 30, {"Na": 120, "K": 36, "leak": 0.3}),
        ("squid-na-k", 30, {"Na": 120, "K": 36}),
        ("crab-axon", 30, {"Na": 120, "K": 20, "A": 47.7, "leak": 0.3}),
        ("fast-spiking", 30, {"Na": 35, "K": 9, "leak": 0.1}),
        ("regular-spiking-m", RAT_RS, {"Na": 56, "K": 6, "M": 0.075, "leak": 0.0205}),
        ("regular-spiking", RAT_RS, {"Na": 56, "K": 6, "leak": 0.0205}),
        ("fast-spiking-cortical", RAT_FS, {"Na": 58, "K": 3.9, "M": 0.0787, "leak": 0.038}),
        (
            "low-threshold-spiking",
            RAT_LTS,
            {"Na": 50, "K": 4, "M": 0.028, "CaT": 0.4, "leak": 0.019},
        ),
        ("regular-spiking-demo", 290, {"Na": 50, "K": 5, "M": 0.07, "leak": 0.1}),
        ("fast-spiking-demo", 140, {"Na": 50, "K": 10, "leak": 0.15}),
        ("bursting-demo", 290, {"Na": 50, "K": 5, "M": 0.03, "CaL": 0.17, "leak": 0.01}),
        (
            "low-threshold-spiking-demo",
            290,
            {"Na": 50, "K": 5, "M": 0.03, "CaT": 0.4, "leak": 0.01},
        ),
    ],
)
def test_conductances_are_the_published_densities_times_the_cell(name, capacitance_pf, densities):
    """The rule is gmax (nS) = density (mS/cm2) * C (pF) at 1 uF/cm2, for the titled cell."""
    spec = load_model(name).spec
    found = {c.name: c.gmax_ns for c in spec.conductance}
    assert found == pytest.approx({k: d * capacitance_pf for k, d in densities.items()}, rel=5e-4)
    assert f"{capacitance_pf:.0f} pF" in spec.title


@pytest.mark.parametrize("name", NAMES)
def test_a_file_says_what_it_is(name):
    """Title, source, version, temperature and caveats are there; uncertain files say of what."""
    spec = load_model(name).spec
    assert spec.confidence in ("agreed", "uncertain", "own")
    assert ("pF" in spec.title) == (name != "leak")
    assert spec.caveats
    told = any(c.startswith("Uncertain:") for c in spec.caveats)
    assert told == (spec.confidence == "uncertain")
    if len(spec.conductance) > 1:
        has_leak = any(c.name == "leak" for c in spec.conductance)
        assert has_leak == ("and leak, for" in spec.title)
    text = (shipped_folder() / f"{name}.toml").read_text("utf-8")
    assert text.startswith("# ")
    assert tomllib.loads(text)["temperature_c"] == spec.temperature_c


def looked_up(tables, k, v_mv):
    """Steady state and rate of the k-th gate from its table, by numpy's interpolation."""
    bank = tables.bank
    rows = tables.table.reshape(int(bank["rows"]), int(bank["stride"]))
    grid = np.linspace(LOW_MV, HIGH_MV, int(bank["rows"]))
    column, dynamic = int(bank["state"][k]), int(bank["dynamic"])
    if column >= dynamic:
        return np.interp(v_mv, grid, rows[:, dynamic + column]), np.zeros_like(v_mv)
    rate = np.interp(v_mv, grid, rows[:, dynamic + column])
    return np.interp(v_mv, grid, rows[:, column]), rate


@pytest.mark.parametrize("name", NAMES)
def test_every_shipped_table_is_as_close_to_its_formula_as_it_says(name):
    """Measured anew at 20,000 random voltages: within the bound, and no worse than reported.

    Outside the cells reported as breaks; those hold a value between their two ends.
    """
    spec = load_model(name).spec
    tables = build_tables(spec)
    v_mv = np.random.default_rng(11).uniform(LOW_MV, HIGH_MV, 20_000)
    for k, (gate, report) in enumerate(zip(kinetics_of(spec), tables.reports, strict=True)):
        inf, rate = gate.at(v_mv)
        table_inf, table_rate = looked_up(tables, k, v_mv)
        smooth = np.ones(v_mv.size, dtype=bool)
        for at in report.breaks:
            smooth &= np.abs(v_mv - at.v_mv) > tables.step_mv
        inf_error = np.abs(table_inf - inf)[smooth].max()
        rate_error = np.abs(table_rate - rate)[smooth].max() / (report.rate_full_scale_per_ms or 1)
        assert report.inf_error <= BOUND
        assert report.rate_error <= BOUND
        assert inf_error <= 1.01 * report.inf_error + 1e-12
        assert rate_error <= 1.01 * report.rate_error + 1e-12
        assert table_inf.min() >= 0.0
        assert table_inf.max() <= 1.0
        assert np.isfinite(table_rate).all()
        assert table_rate.min() >= 0.0


def test_breaks_of_the_shipped_models_are_the_known_ones():
    """Only the T current's published jump and the A current's limit to 1 are breaks.

    The T current of Huguenard and McCormick 1992 jumps from 333.9 to 278.6 ms at
    -80 mV and 24 °C, with the screening shift of 2 mV at -82 mV.
    """
    breaks = {
        (m.name, report.name): report.breaks
        for m in shipped_models()
        for report in build_tables(m.spec).reports
        if report.breaks
    }
    assert set(breaks) == {
        ("ca-t-thalamic", "CaT.h"),
        ("ca-t-thalamic-36c", "CaT.h"),
        ("crab-axon", "A.a"),
        ("k-a-crab", "A.a"),
    }
    (cold,), (warm,) = (breaks[name, "CaT.h"] for name in ("ca-t-thalamic", "ca-t-thalamic-36c"))
    assert cold.v_mv == pytest.approx(-80.0, abs=1e-9)
    assert cold.rate_jump_per_ms == pytest.approx(1 / 278.6 - 1 / 333.9, rel=2e-3)
    assert warm.v_mv == pytest.approx(-82.0, abs=1e-9)
    assert warm.rate_jump_per_ms == pytest.approx(cold.rate_jump_per_ms * 3**1.2, rel=1e-6)
    assert breaks["crab-axon", "A.a"][0].inf_jump == pytest.approx(0.0, abs=1e-9)


@pytest.mark.parametrize(("name", "inside", "outside"), [("ca-t-thalamic", 2.4e-4, 2.0)])
def test_calcium_reverses_at_its_nernst_potential(name, inside, outside):
    """2 mM outside and 240 nM inside give +115.6 mV at 24 °C and +120.3 mV at 36 °C.

    The Nernst equation with RT/F = 25.693 mV at 25 °C (CRC Handbook, from memory),
    scaled to the temperature.
    """
    cold, warm = (load_model(n).spec for n in (name, f"{name}-36c"))
    for spec in (cold, warm):
        kelvin = spec.temperature_c + 273.15
        expected = 25.693 * kelvin / 298.15 / 2 * math.log(outside / inside)
        assert spec.conductance[0].reversal_at(spec.temperature_c) == pytest.approx(
            expected, rel=1e-4
        )
    assert warm.conductance[0].reversal_at(36.0) == pytest.approx(120.255, abs=5e-3)
