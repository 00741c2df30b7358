"""Gate tables: their error, their breaks, their layout, and what is refused."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants
from scipy.special import expit

from gatestep.errors import TableError
from gatestep.kernel import BANK
from gatestep.specs import ConductanceSpec, GateSpec, MeasuredPoints, ModelSpec, NernstSpec
from gatestep.tables import (
    BOUND,
    HIGH_MV,
    LOW_MV,
    build_tables,
    curves_of,
    fill_bank,
    kinetics_of,
)


def model(*conductances, temperature_c=20.0, **parameters):
    return ModelSpec(
        title="test",
        source="test",
        temperature_c=temperature_c,
        parameters=parameters,
        conductance=conductances,
    )


def one_gate(temperature_c=20.0, conductance=None, **gate):
    spec = GateSpec(name="n", **gate)
    rest = {"name": "K", "gmax_ns": 10.0, "reversal_mv": -77.0, **(conductance or {})}
    return model(ConductanceSpec(gate=(spec,), **rest), temperature_c=temperature_c)


def looked_up(tables, gate, v_mv):
    """Steady state and rate from a table, by numpy's own linear interpolation."""
    bank = tables.bank
    rows = tables.table.reshape(int(bank["rows"]), int(bank["stride"]))
    grid = bank["v_low_mv"] + np.arange(bank["rows"]) / bank["rows_per_mv"]
    k = tables.gates.index(gate)
    column, dynamic = int(bank["state"][k]), int(bank["dynamic"])
    if column >= dynamic:
        return np.interp(v_mv, grid, rows[:, dynamic + column]), np.zeros_like(v_mv)
    rate = np.interp(v_mv, grid, rows[:, dynamic + column])
    return np.interp(v_mv, grid, rows[:, column]), rate


SIGMOID = "1/(1 + exp(-(V + 40)/5))"


def test_steady_state_and_rate_are_what_the_rates_say():
    """The table holds inf = alpha/(alpha + beta) and rate = alpha + beta, straight from numpy."""
    tables = build_tables(one_gate(alpha="0.125*exp(-V/80)", beta="0.5*exp(V/20)"))
    v = np.random.default_rng(1).uniform(LOW_MV, HIGH_MV, 4000)
    alpha, beta = 0.125 * np.exp(-v / 80), 0.5 * np.exp(v / 20)
    inf, rate = looked_up(tables, "K.n", v)
    assert np.abs(inf - alpha / (alpha + beta)).max() <= BOUND
    assert np.abs(rate - alpha - beta).max() <= BOUND * 0.5 * np.exp(10) * 1.01


@pytest.mark.parametrize(("scale", "rows_per_mv"), [(30.0, 16), (4.0, 32), (2.0, 64), (0.6, 256)])
def test_the_grid_is_as_coarse_as_the_bound_allows(scale, rows_per_mv):
    """Each halving quarters the error, so the step follows from the sigmoid's slope.

    Interpolation of 1/(1 + exp(-x/k)) errs by h^2/8 * 0.09623/k^2 (calculus).
    """
    tables = build_tables(one_gate(inf=f"1/(1 + exp(-(V + 40)/{scale}))", tau=1.0))
    assert tables.step_mv == 1 / rows_per_mv
    expected = tables.step_mv**2 / 8 * 0.09623 / scale**2
    assert tables.reports[0].inf_error == pytest.approx(expected, rel=0.02)
    assert expected <= BOUND


def test_a_grid_too_coarse_for_its_gate_is_refused():
    """Past the finest grid the builder says which gate, how wrong, where and what to do."""
    with pytest.raises(TableError) as refusal:
        build_tables(one_gate(inf="1/(1 + exp(-(V + 40)/0.2))", tau=1.0))
    for words in ("K.n", "steady state", "4.59e-06", "V = -39.7", "gentler"):
        assert words in str(refusal.value)
    with pytest.raises(TableError, match="rate"):
        build_tables(one_gate(inf=0.5, tau="2 + tanh((V + 40)*1000)"))


def test_the_grid_covers_its_range_evenly():
    """From -200 to +200 mV, both ends in, in steps of a power of two."""
    tables = build_tables(one_gate(inf=SIGMOID, tau=1.0))
    bank = tables.bank
    assert bank["v_low_mv"] == -200.0
    assert bank["v_low_mv"] + (bank["rows"] - 1) / bank["rows_per_mv"] == 200.0
    assert bank["rows_per_mv"] * tables.step_mv == 1.0


@pytest.mark.parametrize("edge", [-80.0, -80.003, -79.98765, 17.3])
def test_a_jump_is_confined_to_one_cell_and_reported(edge):
    """The jump's cell carries the one-sided values at its ends; all other cells hold the bound."""
    text = f"exp((V + 467)/66.6) if V < {edge} else 28 + exp(-(V + 22)/10.5)"
    tables = build_tables(one_gate(inf=SIGMOID, tau=text))
    (found,) = tables.reports[0].breaks
    assert found.v_mv == pytest.approx(edge, abs=1e-9)
    below, above = np.exp((edge + 467) / 66.6), 28 + np.exp(-(edge + 22) / 10.5)
    assert found.rate_jump_per_ms == pytest.approx(1 / above - 1 / below, rel=1e-6)
    assert found.inf_jump == pytest.approx(0.0, abs=1e-9)
    v = np.random.default_rng(2).uniform(LOW_MV, HIGH_MV, 20_000)
    v = v[np.abs(v - edge) > tables.step_mv]
    with np.errstate(over="ignore"):
        tau = np.where(v < edge, np.exp((v + 467) / 66.6), 28 + np.exp(-(v + 22) / 10.5))
    wrong = np.abs(looked_up(tables, "K.n", v)[1] - 1 / tau)
    assert wrong.max() <= BOUND * tables.reports[0].rate_full_scale_per_ms


def test_a_kink_on_the_grid_costs_nothing_and_one_off_it_is_reported():
    """Measured points at whole mV lie on the grid; those off it are kinks in one cell each."""
    on = MeasuredPoints(v_mv=[-80, -60, 0], values=[2, 3, 2.5])
    off = MeasuredPoints(v_mv=[-80.01, -60.01, 0.01], values=[2, 3, 2.5])
    assert build_tables(one_gate(inf=SIGMOID, tau=on)).reports[0].breaks == ()
    breaks = build_tables(one_gate(inf=SIGMOID, tau=off)).reports[0].breaks
    assert [b.v_mv for b in breaks] == pytest.approx([-80.01, -60.01, 0.01], abs=1e-9)
    assert [b.rate_jump_per_ms for b in breaks] == pytest.approx([0, 0, 0], abs=1e-9)


def test_too_many_breaks_are_refused():
    """A table that is mostly exceptions would promise nothing."""
    rng = np.random.default_rng(5)
    v_mv = np.sort(rng.uniform(-100, 50, 3000))
    points = MeasuredPoints(v_mv=v_mv.tolist(), values=rng.uniform(1, 9, 3000).tolist())
    with pytest.raises(TableError, match="jump or kink"):
        build_tables(one_gate(inf=SIGMOID, tau=points))


@pytest.mark.parametrize(
    ("gate", "words"),
    [
        ({"inf": SIGMOID, "tau": "V + 250"}, None),
        ({"inf": SIGMOID, "tau": "V + 100"}, ["tau is -100 at V = -200 mV"]),
        ({"inf": SIGMOID, "tau": "0"}, ["tau is 0", "instantaneous"]),
        ({"inf": SIGMOID, "tau": "1/(V - 1)**2"}, ["tau is inf at V = 1 mV", "pole"]),
        ({"inf": SIGMOID, "tau": "exp(V*10)"}, ["tau is inf"]),
        ({"inf": "1.2*" + SIGMOID, "tau": 1.0}, ["inf is 1.", "0 to 1"]),
        ({"inf": SIGMOID + " - 0.1", "tau": 1.0}, ["inf is -0.1", "0 to 1"]),
        ({"inf": "(1 + 1e-14)*" + SIGMOID, "tau": 1.0}, None),
        ({"inf": "sqrt(V)", "tau": 1.0}, ["inf is nan at V = -200 mV", "root"]),
        ({"alpha": "0.1*V", "beta": 30.0}, ["alpha is -20 at V = -200 mV", "negative"]),
        ({"alpha": 1.0, "beta": "1/V"}, ["beta is"]),
        ({"alpha": "max(V, 0)", "beta": "max(-V, 0)"}, ["at V = 0 mV", "no steady state"]),
        ({"alpha": "exp(V*3)", "beta": "exp(-V*3)"}, ["wrong by"]),
        ({"alpha": "exp(V*3.6)", "beta": "exp(-V*3.6)"}, ["alpha", "finite"]),
    ],
)
def test_values_that_no_gate_can_have_are_refused(gate, words):
    """A refusal names gate, quantity, value and voltage; what is fine passes."""
    if words is None:
        assert build_tables(one_gate(**gate)).table.size > 0
        return
    with pytest.raises(TableError) as refusal:
        build_tables(one_gate(**gate))
    for word in ["K.n", *words]:
        assert word in str(refusal.value)


def test_rates_that_vanish_at_one_end_keep_their_steady_state():
    """An alpha underflowing to 0 beside a finite beta gives inf 0, not nan."""
    rate = "(V + 40)/(1 - exp(-(V + 40)/2.6))"
    curves = curves_of(one_gate(alpha=rate, beta="exp(-(V + 65)/18)"), [-200.0, -40.0])
    assert curves[0].inf[0] == pytest.approx(0.0, abs=1e-20)
    expected = 2.6 / (2.6 + np.exp(-25 / 18))
    assert curves[0].inf[1] == pytest.approx(expected, rel=1e-9)


def test_instantaneous_gates_have_a_steady_state_only():
    """A tau of 0 puts a gate in the row's last part, with the steady state of its rates."""
    alpha, beta = "0.1*(V + 35)/(1 - exp(-(V + 35)/10))", "4*exp(-(V + 60)/18)"
    tables = build_tables(one_gate(inf=f"({alpha})/({alpha} + {beta})", tau=0))
    slow = build_tables(one_gate(alpha=alpha, beta=beta))
    assert (tables.bank["dynamic"], tables.bank["instant"], tables.bank["stride"]) == (0, 1, 1)
    assert tables.reports[0].instantaneous
    v = np.append(np.random.default_rng(3).uniform(LOW_MV, HIGH_MV, 500), [-35.0])
    inf = looked_up(tables, "K.n", v)[0]
    np.testing.assert_allclose(inf, looked_up(slow, "K.n", v)[0], atol=2 * BOUND)
    assert curves_of(tables.spec, v)[0].tau_ms.tolist() == [0.0] * v.size


def mixed_model():
    """Five dynamic and two instantaneous gates over three conductances, and a leak."""

    def gate(name, midpoint, tau, instances=1):
        inf = f"1/(1 + exp(-(V - {midpoint})/9))"
        return GateSpec(name=name, instances=instances, inf=inf, tau=tau)

    return model(
        ConductanceSpec(name="A", gmax_ns=1.5, reversal_mv=50, gate=(
            gate("fast", -40, 0, 3), gate("h", -60, 2.0))),
        ConductanceSpec(name="leak", gmax_ns=-3.0, reversal_mv=-65),
        ConductanceSpec(name="B", gmax_ns=2.5, reversal_mv=-90, gate=(
            gate("n", -30, 3.0, 4), gate("b", -50, 4.0))),
        ConductanceSpec(name="C", gmax_ns=4.5, reversal_mv=-20, gate=(
            gate("x", -10, 5.0), gate("s", -20, 0, 2), gate("y", 0, 6.0, 15))),
    )  # fmt: skip


def test_the_bank_is_laid_out_as_the_kernel_reads_it():
    """Dynamic gates first, padded to 4 with gates that never move, then instantaneous ones."""
    tables = build_tables(mixed_model())
    bank = tables.bank
    assert tables.gates == ("A.fast", "A.h", "B.n", "B.b", "C.x", "C.s", "C.y")
    assert (bank["dynamic"], bank["instant"], bank["stride"]) == (8, 2, 18)
    assert bank["conductances"] == 4
    assert bank["gates"][:5].tolist() == [2, 0, 2, 3, 0]
    assert bank["state"][:7].tolist() == [8, 0, 1, 2, 3, 9, 4]
    assert bank["power"][:7].tolist() == [3, 1, 4, 1, 1, 2, 15]
    assert bank["gmax_ns"][:5].tolist() == [1.5, -3.0, 2.5, 4.5, 0.0]
    assert bank["reversal_mv"][:4].tolist() == [50, -65, -90, -20]
    rows = tables.table.reshape(int(bank["rows"]), 18)
    at = int(165 * bank["rows_per_mv"])  # the row of -35 mV
    midpoints = np.array([-60, -30, -50, -10, 0])
    np.testing.assert_allclose(rows[at, :5], expit((-35.0 - midpoints) / 9), rtol=1e-12)
    np.testing.assert_allclose(rows[at, 8:13], 1 / np.array([2, 3, 4, 5, 6.0]), rtol=1e-15)
    np.testing.assert_allclose(rows[at, 16:], expit((-35.0 - np.array([-40, -20])) / 9), rtol=1e-12)
    assert not rows[:, 5:8].any()
    assert not rows[:, 13:16].any()


def test_a_model_without_gates_is_an_empty_table():
    """A leak needs no table; its bank still has a grid of at least two rows."""
    tables = build_tables(model(ConductanceSpec(name="leak", gmax_ns=1, reversal_mv=-65)))
    assert tables.table.size == 0
    assert (tables.bank["stride"], tables.bank["dynamic"], tables.bank["instant"]) == (0, 0, 0)
    assert tables.bank["rows"] >= 2


def test_filling_a_bank_writes_that_bank_and_no_more():
    """One record and the table's own length are written; the neighbours stay as they were."""
    tables = build_tables(mixed_model())
    banks, out = np.zeros(3, BANK), np.full(tables.table.size + 5, 7.0)
    fill_bank(tables, banks[1], out)
    assert banks[1].tobytes() == tables.bank.tobytes()
    assert not any(banks[0].tobytes())
    assert not any(banks[2].tobytes())
    np.testing.assert_array_equal(out[:-5], tables.table)
    assert out[-5:].tolist() == [7.0] * 5


@pytest.mark.parametrize("out", [np.zeros(10), np.zeros((1000, 1000)), np.zeros(10**6, np.float32)])
def test_a_bank_too_small_is_refused_untouched(out):
    """A table that does not fit raises before anything is written."""
    tables = build_tables(mixed_model())
    banks = np.zeros(1, BANK)
    with pytest.raises(TableError, match=str(tables.table.size)):
        fill_bank(tables, banks[0], out)
    assert not any(banks[0].tobytes())
    assert not out.any()


def test_the_hash_follows_what_is_in_the_bank():
    """The same model gives the same hash; another gmax, reversal or formula another."""

    def digest(gmax=1.0, reversal=0.0, tau=1.0):
        return build_tables(one_gate(
            inf=SIGMOID, tau=tau, conductance={"gmax_ns": gmax, "reversal_mv": reversal}
        )).sha256  # fmt: skip

    hashes = [digest(), digest(2.0), digest(1.0, 1.0), digest(1.0, 0.0, 1.5)]
    assert digest() == hashes[0]
    assert len(set(hashes)) == 4
    assert all(len(h) == 64 for h in hashes)


def test_tables_cannot_be_written_to():
    """What is in force elsewhere must not change under it."""
    tables = build_tables(one_gate(inf=SIGMOID, tau=1.0))
    with pytest.raises(ValueError, match="read-only"):
        tables.table[0] = 1.0


def test_q10_multiplies_the_rates_alone():
    """From 6.3 to 16.3 °C a Q10 of 3 triples every rate and moves no steady state."""
    conductance = {"q10": 3.0, "q10_temperature_c": 6.3}
    for gate in ({"alpha": "exp(V/40)", "beta": 0.5}, {"inf": SIGMOID, "tau": "2 + V**2/1e4"}):
        cold = kinetics_of(one_gate(6.3, conductance, **gate))[0].at([-65.0, 0.0])
        warm = kinetics_of(one_gate(16.3, conductance, **gate))[0].at([-65.0, 0.0])
        np.testing.assert_allclose(warm[1], 3.0 * cold[1], rtol=1e-12)
        np.testing.assert_array_equal(warm[0], cold[0])


def test_a_gates_own_q10_overrides_the_conductances():
    """The gate's Q10 and temperature count where both are given."""
    conductance = {"q10": 3.0, "q10_temperature_c": 6.3}
    gate = {"inf": 0.5, "tau": 1.0, "q10": 2.0, "q10_temperature_c": 26.3}
    assert kinetics_of(one_gate(36.3, conductance, **gate))[0].at(0.0)[1] == pytest.approx(2.0)


@pytest.mark.parametrize(
    ("valence", "inside", "outside", "expected"),
    [(1, 400, 20, -75.7), (1, 50, 440, 54.9), (-1, 52, 560, -60.0)],
)
def test_nernst_potentials_of_the_squid(valence, inside, outside, expected):
    """Squid concentrations give -75.7, +54.9 and -60.0 mV at 20 °C.

    Concentrations as in Hille's textbook (from memory); the law with the constants of
    scipy.constants.
    """
    nernst = NernstSpec(valence=valence, inside_mmolar=inside, outside_mmolar=outside)
    spec = model(ConductanceSpec(name="X", gmax_ns=1, nernst=nernst))
    reversal = build_tables(spec).bank["reversal_mv"][0]
    kelvin = constants.zero_Celsius + 20
    law = 1000 * constants.R * kelvin / (valence * constants.value("Faraday constant"))
    assert reversal == pytest.approx(law * np.log(outside / inside), rel=1e-9)
    assert reversal == pytest.approx(expected, abs=0.05)


_MIDPOINT = st.floats(-120, 60)
_SCALE = st.one_of(st.floats(1.5, 60), st.floats(-60, -1.5))
_RATES = st.one_of(
    st.builds(lambda a, m, k: f"{a:.6g}*exp((V - {m:.6g})/{k:.6g})", st.floats(1e-4, 9), _MIDPOINT,
              st.one_of(st.floats(8, 80), st.floats(-80, -8))),
    st.builds(lambda a, m, k: f"{a:.6g}/(1 + exp((V - {m:.6g})/{k:.6g}))", st.floats(1e-4, 9),
              _MIDPOINT, _SCALE),
    st.builds(lambda a, m, k: f"{a:.6g}*(V - {m:.6g})/(1 - exp(-(V - {m:.6g})/{k:.6g}))",
              st.floats(1e-4, 9), _MIDPOINT, st.floats(1.5, 60)),
    st.builds(lambda a, b, m: f"{a:.6g} if V < {m:.6g} else {b:.6g}", st.floats(1e-4, 9),
              st.floats(1e-4, 9), _MIDPOINT),
    st.floats(1e-3, 100),
)  # fmt: skip


@settings(max_examples=40, deadline=None, derandomize=True)
@given(_RATES, _RATES, st.booleans(), st.integers(0, 2**32 - 1))
def test_any_accepted_table_keeps_its_gate_within_bounds(first, second, by_rates, seed):
    """Invariant: whatever is accepted, inf is in [0, 1] and the rate finite and not negative.

    Looked up by numpy's own interpolation anywhere, off the grid's ends too.
    """
    gate = {"alpha": first, "beta": second} if by_rates else {"inf": first, "tau": second}
    try:
        tables = build_tables(one_gate(**gate))
    except TableError:
        return
    v = np.random.default_rng(seed).uniform(LOW_MV - 100, HIGH_MV + 100, 3000)
    inf, rate = looked_up(tables, "K.n", v)
    assert inf.min() >= 0.0
    assert inf.max() <= 1.0
    assert np.isfinite(rate).all()
    assert rate.min() >= 0.0


def test_as_many_gates_as_fit_are_tabulated():
    """The largest model, 64 conductances of 4 gates, builds, each gate in its own column."""

    def gate(k):
        alpha = f"0.1*(V + {40 + k / 10})/(1 - exp(-(V + {40 + k / 10})/10))"
        return GateSpec(name=f"g{k}", alpha=alpha, beta=f"4*exp(-(V + 65)/{18 + k / 100})")

    conductances = [
        ConductanceSpec(name=f"K{c}", gmax_ns=1, reversal_mv=0, gate=tuple(
            gate(4 * c + k) for k in range(4)))
        for c in range(64)
    ]  # fmt: skip
    tables = build_tables(model(*conductances))
    assert tables.bank["stride"] == 512
    assert tables.bank["state"].tolist() == list(range(256))
    assert max(max(r.inf_error, r.rate_error) for r in tables.reports) <= BOUND
