"""The step against its plain twin, closed solutions, scipy's solver and its own bounds.

Everything here also holds when nothing is compiled (``NUMBA_DISABLE_JIT=1``); a test
in ``test_simd.py`` runs it so, with fewer examples.
"""

from __future__ import annotations

import math
import os
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from naive import UNTOUCHED, Conductance, Gate, Model, Twin, fresh_state, loaded, pack, unpack
from scipy.integrate import solve_ivp

from gatestep.kernel import (
    MAX_CONDUCTANCES,
    MAX_GATES,
    conductance,
    current,
    follow,
    power,
    settle,
    step,
)
from gatestep.library import load_model, shipped_names
from gatestep.tables import build_tables

EXAMPLES = int(os.environ.get("GATESTEP_EXAMPLES", "150"))
examples = settings(max_examples=EXAMPLES, deadline=None, derandomize=True)
ON_AND_OFF_GRID = st.floats(-250.0, 250.0)
UNIT = st.floats(0.0, 1.0)
USUAL_RATES = st.floats(0.0, 100.0)
EXTREME_RATES = st.floats(0.0, 1e300) | st.sampled_from([0.0, 5e-324, 1e-300, 1e300])


@st.composite
def models(draw, rates=USUAL_RATES, most_gates=4):
    """Up to 6 conductances of 0 to 4 gates on a random grid, with arbitrary tables."""
    rows = draw(st.integers(2, 12))

    def gate():
        rate = draw(st.none() | arrays(np.float64, rows, elements=rates))
        inf = draw(arrays(np.float64, rows, elements=UNIT))
        return Gate(inf, rate, draw(st.integers(1, 15)))

    def one():
        gmax, reversal = draw(st.floats(-1e6, 1e6)), draw(st.floats(-300.0, 300.0))
        return Conductance(
            gmax, reversal, [gate() for _ in range(draw(st.integers(0, most_gates)))]
        )

    conductances = [one() for _ in range(draw(st.integers(1, 6)))]
    return Model(draw(st.floats(-200.0, 0.0)), draw(st.floats(0.05, 64.0)), conductances)


def full_scale(model, v_mv):
    """The most that the conductances could inject together, pA."""
    return sum(abs(c.gmax_ns * (v_mv - c.reversal_mv)) for c in model.conductances)


@examples
@given(
    model=models(),
    base=st.integers(0, 50),
    voltages=st.lists(ON_AND_OFF_GRID, min_size=2, max_size=8),
    ticks=st.lists(st.integers(1, 20), min_size=8, max_size=8),
    dt=st.floats(1e-4, 0.5),
)
def test_step_agrees_with_the_plain_twin(model, base, voltages, ticks, dt):
    """Gates, conductance and current are the twin's to 1e-12, gaps and off-grid voltages too."""
    bank, table, places = pack(model, base)
    x, twin = fresh_state(bank), Twin(model)
    settle(bank, table, x, voltages[0])
    twin.settle(voltages[0])
    np.testing.assert_allclose(x[places], twin.x, rtol=1e-12, atol=1e-14)
    for old, new, n in zip(voltages, voltages[1:], ticks, strict=False):
        got = step(bank, table, x, old, new, n * dt)
        wanted = twin.step(old, new, n * dt)
        np.testing.assert_allclose(x[places], twin.x, rtol=1e-12, atol=1e-12)
        assert got == pytest.approx(wanted, rel=1e-12, abs=1e-12 * full_scale(model, new))
        # From the very same gates, only the conductances' own cancellation is allowed for.
        twin.x = [float(v) for v in x[places]]
        scale = sum(abs(t) for t in twin.terms(new))
        assert got == pytest.approx(twin.current(new), rel=1e-12, abs=1e-12 * scale + 1e-290)
        total = sum(abs(g) for g in twin.conductances())
        assert conductance(bank, x) == pytest.approx(
            twin.conductance(), rel=1e-12, abs=1e-12 * total + 1e-290
        )
    assert (x[bank.dynamic + bank.instant :] == UNTOUCHED).all()


@pytest.mark.parametrize("name", shipped_names())
def test_every_shipped_model_steps_like_its_twin(name):
    """As laid out by the loader, every shipped model follows the twin to 1e-12, no term lost."""
    tables = build_tables(load_model(name).spec)
    bank, table = loaded(tables)
    model = unpack(bank, table)
    assert len(model.gates) == len(tables.gates)
    x, twin = fresh_state(bank), Twin(model)
    voltages = action_potential(np.arange(0.0, 20.0, 0.25 if EXAMPLES > 20 else 1.0))
    settle(bank, table, x, voltages[0])
    twin.settle(voltages[0])
    for old, new in pairwise(voltages):
        got, wanted = step(bank, table, x, old, new, 0.25), twin.step(old, new, 0.25)
        scale = sum(abs(t) for t in twin.terms(new))
        assert got == pytest.approx(wanted, rel=1e-12, abs=1e-12 * scale)


@examples
@given(
    model=models(rates=EXTREME_RATES),
    start=UNIT,
    voltages=st.lists(
        st.floats(allow_nan=False, allow_infinity=False, min_value=-1e300, max_value=1e300),
        min_size=2,
        max_size=6,
    ),
    dt=st.floats(0.0, 1e6),
)
def test_no_gate_ever_leaves_zero_to_one(model, start, voltages, dt):
    """Whatever voltage, tick and table, a gate is finite and in [0, 1], to the last bit."""
    bank, table, places = pack(model)
    x = fresh_state(bank)
    x[: bank.dynamic + bank.instant] = start
    with np.errstate(over="ignore", invalid="raise"):
        for old, new in pairwise(voltages):
            step(bank, table, x, old, new, dt)
            assert ((x[places] >= 0.0) & (x[places] <= 1.0)).all()


@examples
@given(model=models(), v_mv=ON_AND_OFF_GRID, dt=st.floats(1e-3, 100.0), parts=st.integers(2, 6))
def test_a_missed_tick_is_one_longer_step(model, v_mv, dt, parts):
    """At a held voltage one step over the whole time equals several over its parts."""
    bank, table, places = pack(model)
    one, many = fresh_state(bank), fresh_state(bank)
    step(bank, table, one, v_mv, v_mv, dt)
    for _ in range(parts):
        step(bank, table, many, v_mv, v_mv, dt / parts)
    np.testing.assert_allclose(one[places], many[places], rtol=1e-10, atol=1e-13)


@given(y=UNIT, n=st.integers(1, 15))
@examples
def test_power_is_the_ordinary_power(y, n):
    """Repeated squaring gives y**n to 16 rounding errors."""
    assert power(y, n) == pytest.approx(y**n, rel=16 * 2.3e-16, abs=1e-300)


def test_the_largest_model_fits_and_agrees():
    """64 conductances of 4 gates, dynamic and instantaneous mixed, are the twin's to 1e-12."""
    rng = np.random.default_rng(5)

    def gate(k):
        rate = None if k % 7 == 3 else rng.uniform(0.0, 20.0, 9)
        return Gate(rng.uniform(0.0, 1.0, 9), rate, 1 + k % 15)

    conductances = [
        Conductance(rng.normal(0, 100.0), rng.uniform(-90, 60), [gate(4 * c + k) for k in range(4)])
        for c in range(MAX_CONDUCTANCES)
    ]
    model = Model(-100.0, 0.05, conductances)
    assert len(model.gates) == MAX_GATES
    bank, table, places = pack(model)
    x, twin = fresh_state(bank), Twin(model)
    for old, new in [(-65.0, -20.0), (-20.0, 31.0), (31.0, -140.0), (-140.0, 99.0)]:
        got, wanted = step(bank, table, x, old, new, 0.07), twin.step(old, new, 0.07)
        np.testing.assert_allclose(x[places], twin.x, rtol=1e-12, atol=1e-12)
        assert got == pytest.approx(wanted, rel=1e-12, abs=1e-12 * full_scale(model, new))


def test_ohmic_law_and_its_sign():
    """A leak of 10 nS at 20 mV above its reversal injects -200 pA; a gate of 0.5 ** 4 a 16th."""
    half = Gate(np.full(2, 0.5), None, 4)
    for gates, wanted in [([], -200.0), ([half], -12.5)]:
        bank, table, _ = pack(Model(-100.0, 1.0, [Conductance(10.0, -70.0, gates)]))
        x = fresh_state(bank)
        settle(bank, table, x, -50.0)
        assert current(bank, x, -50.0) == wanted
        assert current(bank, x, -70.0) == 0.0
        assert conductance(bank, x) == -wanted / 20.0


def test_instantaneous_gates_take_the_newest_voltage():
    """They do not lag by half a tick, and dynamic gates do not move with them."""
    model = Model(
        0.0,
        1.0,
        [
            Conductance(
                1.0,
                0.0,
                [
                    Gate(np.array([0.0, 1.0]), None, 1),
                    Gate(np.array([0.0, 1.0]), np.array([0.0, 0.0]), 1),
                ],
            )
        ],
    )
    bank, table, places = pack(model)
    x = fresh_state(bank)
    step(bank, table, x, 0.0, 0.75, 1.0)
    assert x[places].tolist() == [0.75, 0.0]
    follow(bank, table, x, 0.25)
    assert x[places].tolist() == [0.25, 0.0]


# Published rate functions, written out here apart from the program. Squid axon:
# Hodgkin and Huxley 1952 (J. Physiol. 117:500-544), modern sign, rest at -65 mV. A-type
# K: Connor and Stevens 1971 (J. Physiol. 213:31-53) as in Dayan and Abbott 2001, ch. 6.


def linoid(a, x, k):
    return a * k if abs(x) < 1e-9 else a * x / -math.expm1(-x / k)


def by_rates(alpha, beta):
    return lambda v: (alpha(v) / (alpha(v) + beta(v)), alpha(v) + beta(v))


PUBLISHED = {
    ("na-squid", "Na.m"): by_rates(
        lambda v: linoid(0.1, v + 40, 10), lambda v: 4 * math.exp(-(v + 65) / 18)
    ),
    ("na-squid", "Na.h"): by_rates(
        lambda v: 0.07 * math.exp(-(v + 65) / 20), lambda v: 1 / (1 + math.exp(-(v + 35) / 10))
    ),
    ("k-squid", "K.n"): by_rates(
        lambda v: linoid(0.01, v + 55, 10), lambda v: 0.125 * math.exp(-(v + 65) / 80)
    ),
    ("k-a-crab", "A.a"): lambda v: (
        (0.0761 * math.exp(0.0314 * (v + 94.22)) / (1 + math.exp(0.0346 * (v + 1.17)))) ** (1 / 3),
        1 / (0.3632 + 1.158 / (1 + math.exp(0.0497 * (v + 55.96)))),
    ),
    ("k-a-crab", "A.b"): lambda v: (
        (1 / (1 + math.exp(0.0688 * (v + 53.3)))) ** 4,
        1 / (1.24 + 2.678 / (1 + math.exp(0.0624 * (v + 50)))),
    ),
}


def action_potential(t_ms):
    """A smooth spike of our own: 95 mV above -65 mV, then 12 mV below, over some 15 ms."""
    rise = 95.0 * np.exp(-(((t_ms - 6.0) / 1.1) ** 2))
    return -65.0 + rise - 12.0 * np.exp(-(((t_ms - 10.0) / 2.5) ** 2))


def gates_along(name, dt_ms, stop_ms):
    """Each gate of a shipped model at every tick along the action potential."""
    tables = build_tables(load_model(name).spec)
    bank, table = loaded(tables)
    v = action_potential(np.arange(round(stop_ms / dt_ms) + 1) * dt_ms)
    x, rows = fresh_state(bank), []
    settle(bank, table, x, v[0])
    places = bank.state[: len(tables.gates)]
    for old, new in pairwise(v):
        step(bank, table, x, old, new, dt_ms)
        rows.append(x[places])
    return dict(zip(tables.gates, np.array(rows).T, strict=True))


@pytest.mark.parametrize(("name", "gate"), list(PUBLISHED))
def test_gates_are_second_order_in_the_tick(name, gate):
    """Against scipy's LSODA on the published formulas, halving the tick quarters the error."""
    published, stop, coarse = PUBLISHED[name, gate], 16.0, 0.16

    def slope(t, x):
        inf, rate = published(float(action_potential(t)))
        return rate * (inf - x)

    at = np.arange(1, round(stop / coarse) + 1) * coarse
    start = [published(float(action_potential(0.0)))[0]]
    exact = solve_ivp(
        slope, (0.0, stop), start, "LSODA", at, rtol=1e-10, atol=1e-12, max_step=0.05
    ).y[0]
    errors = []
    for halvings in range(3):
        every = 2**halvings
        x = gates_along(name, coarse / every, stop)[gate]
        errors.append(np.abs(x[every - 1 :: every] - exact).max())
    assert errors[0] < 0.02
    assert 3.3 < errors[0] / errors[1] < 4.7
    assert 3.3 < errors[1] / errors[2] < 4.7


def test_a_held_voltage_follows_the_closed_solution():
    """At -20 mV from rest, K.n is inf + (x0 - inf) exp(-t/tau) to the table's error."""
    tables = build_tables(load_model("k-squid").spec)
    bank, table = loaded(tables)
    published = PUBLISHED["k-squid", "K.n"]
    x = fresh_state(bank)
    settle(bank, table, x, -65.0)
    start, (inf, rate) = published(-65.0)[0], published(-20.0)
    for tick in range(1, 201):
        step(bank, table, x, -20.0, -20.0, 0.05)
        wanted = inf + (start - inf) * math.exp(-0.05 * tick * rate)
        assert x[0] == pytest.approx(wanted, abs=3e-6)
