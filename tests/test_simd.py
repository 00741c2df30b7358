"""The four-wide block bit for bit, its exponential, and the machine code of the step."""

from __future__ import annotations

import decimal
import math
import os
import re
import subprocess
import sys
from functools import partial
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from naive import Conductance, Gate, Model, fresh_state, pack
from numba import float64, njit, typeof

from gatestep import compiling, kernel
from gatestep.compiling import compiled
from gatestep.simd import WIDTH, _relax_plain, relax, relax_pair

ROOT = Path(__file__).resolve().parent.parent
SEED = 11


@compiled
def one_block(table, x, low, high, dynamic, block, f, dt):
    relax(table, x, low, high, dynamic, block, f, dt)


@compiled
def two_blocks(table, x, low, high, dynamic, block, f, dt):
    relax_pair(table, x, low, high, dynamic, block, f, dt)


FORMS = {WIDTH: one_block, 2 * WIDTH: two_blocks}


def relaxed(form, table, x, f, dt, block=0):
    """New gates from two rows of ``dynamic`` steady states and rates each."""
    dynamic, new = table.size // 4, x.copy()
    u = np.uint64
    with np.errstate(over="ignore"):
        form(table, new, u(0), u(2 * dynamic), u(dynamic), u(block), f, dt)
    return new


@pytest.mark.parametrize("width", FORMS)
@settings(max_examples=200, deadline=None, derandomize=True)
@given(data=st.data())
def test_vector_code_equals_the_plain_form_bit_for_bit(width, data):
    """Same inputs, same 64 bits in every gate, and no other gate is touched."""
    draw = data.draw
    dynamic = 3 * width
    inf = draw(arrays(np.float64, (2, dynamic), elements=st.floats(0.0, 1.0)))
    rate = draw(arrays(np.float64, (2, dynamic), elements=st.floats(0.0, 1e300)))
    table = np.concatenate([inf, rate], axis=1).ravel()
    x = draw(arrays(np.float64, dynamic, elements=st.floats(0.0, 1.0)))
    f, dt = draw(st.floats(0.0, 1.0)), draw(st.floats(0.0, 1e6))
    block = width * draw(st.integers(0, 2))
    got = relaxed(FORMS[width], table, x, f, dt, block)
    wanted = relaxed(partial(_relax_plain, width=width), table, x, f, dt, block)
    assert got.tobytes() == wanted.tobytes()
    others = np.delete(np.arange(dynamic), np.arange(block, block + width))
    assert got[others].tobytes() == x[others].tobytes()


@pytest.mark.parametrize("width", FORMS)
def test_ordinary_values_bit_for_bit(width):
    """The same at a hundred thousand everyday gates, where every bit of the series counts."""
    rng = np.random.default_rng(SEED)
    for _ in range(100_000 // width // 4):
        table = rng.uniform(0.0, 1.0, 4 * width)
        table[width : 2 * width] *= 30.0
        table[3 * width :] *= 30.0
        x, f, dt = rng.uniform(0.0, 1.0, width), rng.uniform(), rng.uniform(0.0, 0.2)
        got = relaxed(FORMS[width], table, x, f, dt)
        assert (
            got.tobytes() == relaxed(partial(_relax_plain, width=width), table, x, f, dt).tobytes()
        )


def decay(y):
    """exp(-y) as the block computes it: a gate from 1 towards 0 at rate y for 1 ms."""
    padded = np.zeros(-(-y.size // WIDTH) * WIDTH)
    padded[: y.size] = y
    out = np.empty_like(padded)
    for k in range(0, padded.size, WIDTH):
        row = np.concatenate([np.zeros(WIDTH), padded[k : k + WIDTH]])
        out[k : k + WIDTH] = relaxed(one_block, np.tile(row, 2), np.ones(WIDTH), 0.0, 1.0)
    return out[: y.size]


def exact_exp(y):
    """exp(-y) correctly rounded to 40 digits by Python's decimal module."""
    with decimal.localcontext(decimal.Context(prec=40)):
        return (-decimal.Decimal(y)).exp()


def ulps(got, wanted):
    """Distance in units in the last place of the value wanted."""
    return abs(decimal.Decimal(got) - wanted) / decimal.Decimal(math.ulp(float(wanted)))


def test_exponential_within_three_units_in_the_last_place():
    """Over [0, 708], at both sides of every change of n, and near 0, against decimal."""
    rng = np.random.default_rng(SEED)
    edges = (np.arange(1021) + 0.5) * math.log(2.0)
    y = np.concatenate(
        [
            rng.uniform(0.0, 708.0, 3000),
            rng.uniform(0.0, 1.0, 3000),
            10.0 ** rng.uniform(-20, 0, 500),
            np.nextafter(edges, 0.0),
            np.nextafter(edges, 1e3),
            [708.0],
        ]
    )
    got = decay(y)
    worst = max(ulps(g, exact_exp(v)) for g, v in zip(got, y, strict=True))
    assert worst < 3
    np.testing.assert_allclose(got, np.exp(-y), rtol=1e-15)


def test_exponential_at_its_ends():
    """exp(0) is exactly 1; beyond 708 it stays at the value there, up to infinity."""
    y = np.array([0.0, 708.0, 709.0, 1e300, math.inf])
    got = decay(y)
    assert got[0] == 1.0
    assert got[1] == pytest.approx(3.3075e-308, rel=1e-4)
    assert (got[2:] == got[1]).all()


def test_exponential_never_rises_above_one_nor_grows_with_its_argument():
    """A longer tick leaves no more of the old value, to 2 units in the last place; never over 1."""
    y = np.concatenate([[0.0], np.logspace(-18, 2.8, 8000)])
    got = decay(y)
    assert got.max() == 1.0
    assert (np.diff(got) <= 2 * np.spacing(got[1:])).all()


@pytest.fixture(scope="module")
def code():
    """Body of the compiled step, not its wrapper: as assembly and as LLVM IR.

    Code from the cache cannot be inspected, so it is compiled afresh.
    """
    gates = [Gate(np.full(3, 0.5), np.ones(3), 3), Gate(np.full(3, 0.5), None, 1)]
    bank, table, _ = pack(Model(-1.0, 1.0, [Conductance(1.0, 0.0, gates)]))
    signature = (typeof(bank), typeof(table), typeof(fresh_state(bank)), float64, float64, float64)
    step = njit(forceinline=True, **compiling._COMMON)(kernel.step.py_func)
    step.compile(signature)
    assembly, llvm = step.inspect_asm(signature), step.inspect_llvm(signature)
    asm_body = re.search(
        r"^(_ZN8gatestep6kernel4step\S*):\n(.*?)\.Lfunc_end", assembly, re.M | re.S
    )
    llvm_body = re.search(r"^define [^\n]*@_ZN8gatestep6kernel4step.*?^}", llvm, re.M | re.S)
    assert asm_body is not None
    assert llvm_body is not None
    return asm_body[2], llvm_body[0]


def test_step_contracts_nothing(code):
    """No multiply-add is fused, so every processor rounds the same way."""
    assembly, llvm = code
    assert "fmul" in llvm
    assert not re.search(r"\b(v?fn?m(add|sub)|fml[as]|fmuladd|llvm\.fma)", assembly + llvm)
    assert not re.search(r"\bf(add|sub|mul|div|neg) (fast|\S*contract|\S*reassoc)", llvm)


def test_step_calls_nothing(code):
    """Nothing is called: no interpreter, no allocator, no lock, not even another kernel."""
    assembly, llvm = code
    called = re.findall(r"\bcall\b[^@\n]*@\"?([\w.$]+)", llvm)
    assert [name for name in called if not name.startswith("llvm.")] == []
    assert not re.search(r"^\s*(callq?|bl|blr)\s", assembly, re.M)
    assert not re.search(r"NRT_|Py[A-Z_]|malloc|pthread", assembly + llvm)
    assert "lock" not in re.findall(r"^\s*(\w+)", assembly, re.M)


def test_kernel_tests_pass_without_compilation():
    """The kernel in plain Python holds to everything that the compiled one does."""
    environment = {**os.environ, "NUMBA_DISABLE_JIT": "1", "GATESTEP_EXAMPLES": "10"}
    run = subprocess.run(
        [sys.executable, "-m", "pytest", "-p", "no:cacheprovider", "tests/test_kernel.py"],
        cwd=ROOT,
        env=environment,
        capture_output=True,
        text=True,
        timeout=300,
        check=False,
    )
    assert run.returncode == 0, run.stdout[-3000:] + run.stderr[-2000:]
    assert re.search(r"\d+ passed", run.stdout)
