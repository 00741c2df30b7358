"""A model for the device: its tables, its C on this machine, and what both miss.

The emulated microcontroller is in test_firmware_m4f.py. Everything in C is built with the
machine's compiler, as C99 and as C++ with warnings as errors.
"""

from __future__ import annotations

import io
import itertools
import json
import re
import shutil
import sys
from contextlib import redirect_stderr, redirect_stdout

import numpy as np
import pytest
from firmware_build import STRICT, compiler, run
from firmware_model_build import TICK_US, folder, library, same_bits, sources, tables, walk
from hypothesis import given, settings
from hypothesis import strategies as st

from gatestep.cli import main
from gatestep.errors import FirmwareError
from gatestep.firmware import INTERVAL_US, LOW_MV, ROWS, SPAN_MV, device_tables
from gatestep.firmware_errors import (
    STEPS,
    current_error,
    rows_error,
    server_walk,
    walk_mv,
)
from gatestep.firmware_twin import steps_compiled, steps_numpy
from gatestep.library import load_model, shipped_models
from gatestep.specs import ConductanceSpec, GateSpec, ModelSpec
from gatestep.tables import build_tables, curves_of

# Gates of every sort: none, instantaneous alone, both, piecewise, measured powers to 4.
MODELS = ("squid-na-k", "leak", "na-p-hippocampal", "low-threshold-spiking", "ca-t-thalamic-36c")

anything = st.floats(width=32, allow_nan=True, allow_infinity=True)
usual = st.floats(-160, 110, width=32)
voltages = st.lists(st.one_of(usual, usual, anything), min_size=2, max_size=60)
spans = st.one_of(st.just(1), st.integers(0, 60), st.integers(0, 2**31))
wide = st.floats(-1e6, 1e6, width=32)


# ---- the tables ----


@pytest.mark.parametrize("interval_us", [5.0, 20.0, 1000.0])
def test_a_row_is_the_steady_state_and_the_share_covered_in_a_tick(interval_us):
    """A row holds inf and 1 - exp(-interval/tau), from the formulas' own curves."""
    made = tables("squid-axon", 257, interval_us)
    v_mv = LOW_MV + np.arange(257) * (SPAN_MV / 256)
    for gate, column in zip(curves_of(made.spec, v_mv), made.column, strict=True):
        gain = 1.0 - np.exp(-interval_us * 1e-3 / gate.tau_ms)
        np.testing.assert_allclose(made.table[:, column], gate.inf, rtol=1e-7, atol=1e-7)
        np.testing.assert_allclose(made.table[:, column + 1], gain, rtol=3e-7)


def test_the_grid_holds_the_usual_window_in_binary_steps():
    """-150 to 100 mV lie on the grid, and a row's voltage is a float32 without rounding."""
    assert LOW_MV <= -150
    assert LOW_MV + SPAN_MV >= 100
    for rows in ROWS:
        v_mv = LOW_MV + SPAN_MV * np.arange(rows) / (rows - 1)
        assert (v_mv.astype(np.float32) == v_mv).all()


@pytest.mark.parametrize("rows", [0, -1, 1, 2048, 2050, 16385])
def test_a_grid_that_does_not_exist_is_refused(rows):
    """The error names what may be chosen."""
    with pytest.raises(FirmwareError, match="257, 513, 1025, 2049, 4097, 8193"):
        device_tables(load_model("leak").spec, rows)


@pytest.mark.parametrize("interval_us", [0.0, -20.0, 4.9, 1e5 + 1, float("nan"), float("inf")])
def test_a_tick_out_of_range_is_refused(interval_us):
    """The range is a rig file's."""
    with pytest.raises(FirmwareError, match="give 5 to 100000"):
        device_tables(load_model("leak").spec, 257, interval_us)
    assert INTERVAL_US == (5.0, 100_000.0)


# ---- the errors ----


def test_twice_the_rows_miss_a_quarter():
    """Linear interpolation is of second order, so each doubling takes 4 off a smooth curve.

    At 8193 rows float32's own rounding, 6e-8, is part of the error.
    """
    model = load_model("squid-na-k").spec
    server = build_tables(model)
    found = [rows_error(model, server, rows, TICK_US) for rows in ROWS]
    for few, many in itertools.pairwise(found[:-1]):
        assert few.inf_error / many.inf_error == pytest.approx(4.0, rel=0.1)
        assert few.gain_error / many.gain_error == pytest.approx(4.0, rel=0.1)
        assert many.table_bytes / few.table_bytes == pytest.approx(2.0, rel=0.01)
    assert all(e.current_error < 1e-3 for e in found)


def test_every_shipped_model_follows_the_server_within_a_thousandth():
    """Current against the float64 kernel, at the usual rows and 50 µs, of its range: < 1e-3."""
    worst = {}
    for model in shipped_models():
        found = rows_error(model.spec, build_tables(model.spec), 2049, 50.0)
        worst[model.name] = found.current_error
    assert max(worst.values()) < 1e-3, worst
    assert worst["squid-na-k"] < 5e-6
    assert np.median(list(worst.values())) < 1e-5


def test_the_walk_keeps_its_range_and_moves():
    """Voltages are exact 64ths within the range stated, and cover most of it."""
    v_mv = walk_mv(STEPS)
    assert (v_mv * 64 == np.round(v_mv * 64)).all()
    assert v_mv.min() >= -120
    assert v_mv.max() <= 60
    assert np.ptp(v_mv) > 170


def _slow(tau_ms: float) -> ModelSpec:
    gate = GateSpec(name="s", inf="1/(1 + exp(-(V + 40)/10))", tau=tau_ms)
    conductance = ConductanceSpec(name="S", gmax_ns=10.0, reversal_mv=0.0, gate=(gate,))
    return ModelSpec(title="slow", source="test", temperature_c=20.0, conductance=(conductance,))


@pytest.mark.parametrize("tau_ms", [100.0, 1000.0, 10_000.0])
def test_a_slow_gate_does_not_stand_still(tau_ms):
    """Over a held voltage a gate is inf + (x0 - inf)·exp(-t/tau).

    So it is also where a tick's change is far below a unit in float32's last place.
    """
    made = device_tables(_slow(tau_ms), 2049, 50.0)
    v_mv = np.full(200_001, -20.0, dtype=np.float32)
    v_mv[0] = -80.0
    # The first tick crosses on the mean of its ends, so the law holds from the second on.
    first = steps_compiled(made, v_mv[:2]).x[0]
    inf = 1.0 / (1.0 + np.exp(-2.0))
    true = inf + (float(first) - inf) * np.exp(-199_999 * 0.05 / tau_ms)
    assert steps_compiled(made, v_mv).x[0] == pytest.approx(true, abs=1e-6)


# ---- float32 three times ----


@settings(max_examples=20)
@given(v_mv=voltages, seed=st.integers(0, 2**16))
@pytest.mark.parametrize("model", MODELS)
def test_numpy_compiled_and_c_give_the_same_bits(model, v_mv, seed):
    """Currents and gates alike to the last bit, for any voltages and missed ticks."""
    ticks = np.random.default_rng(seed).choice([1, 1, 1, 2, 7, 50], len(v_mv))
    made = tables(model)
    in_c, x = walk(model, v_mv, ticks)
    compiled, in_numpy = steps_compiled(made, v_mv, ticks), steps_numpy(made, v_mv, ticks)
    assert same_bits(in_c, compiled.i_pa)
    assert same_bits(in_c, in_numpy.i_pa)
    assert same_bits(x[-1], compiled.x)
    assert same_bits(x[-1], in_numpy.x)
    assert same_bits(compiled.rest, in_numpy.rest)


def test_all_shipped_models_agree_in_numpy_and_compiled():
    """The same over 4 walks side by side of every model that ships."""
    rng = np.random.default_rng(6)
    v_mv = np.clip(-60 + np.cumsum(rng.normal(0, 3, (300, 4)), 0), -170, 120)
    ticks = np.where(rng.random(300) < 0.1, rng.integers(2, 40, 300), 1)
    for model in shipped_models():
        made = device_tables(model.spec, 1025, 50.0)
        side_by_side = steps_numpy(made, v_mv, ticks)
        for k in range(4):
            alone = steps_compiled(made, v_mv[:, k], ticks)
            assert same_bits(alone.i_pa, side_by_side.i_pa[:, k]), model.name
            assert same_bits(alone.x, side_by_side.x[:, k]), model.name


@pytest.mark.parametrize("model", MODELS)
def test_a_long_walk_in_c_follows_the_server(model):
    """20,000 ticks in C against the float64 kernel: the bits of the twin, and its error."""
    v_mv = walk_mv(STEPS)
    i_pa, _ = walk(model, v_mv)
    made, server = tables(model), build_tables(load_model(model).spec)
    assert same_bits(i_pa, steps_compiled(made, v_mv).i_pa)
    true = server_walk(server, v_mv, TICK_US)
    off = np.abs(i_pa - true).max() / np.ptp(true)
    assert off < 1e-3
    assert off == pytest.approx(current_error(made, server, v_mv), rel=1e-12)


@settings(max_examples=40)
@given(v_mv=voltages, data=st.data())
@pytest.mark.parametrize("model", MODELS)
def test_no_voltage_takes_a_gate_out_of_its_range(model, v_mv, data):
    """Gates stay in [0, 1] whatever comes: NaN, infinities, any span of ticks, any order."""
    ticks = data.draw(st.lists(spans, min_size=len(v_mv), max_size=len(v_mv)))
    _, x = walk(model, v_mv, ticks)
    assert ((x >= 0) & (x <= 1)).all()


@settings(max_examples=40)
@given(v_mv=st.lists(usual, min_size=2, max_size=30), data=st.data())
def test_gmax_and_reversal_change_without_a_rebuild(v_mv, data):
    """The current is the sum over conductances of gmax · open share · (reversal - V).

    The values are given at run time, the shares are those of the same gates at unit gmax.
    """
    gmax = [data.draw(wide), data.draw(wide)]
    reversal = [data.draw(st.floats(-300, 300, width=32)) for _ in range(2)]
    i_pa, _ = walk("squid-na-k", v_mv, 1, (gmax, reversal))
    v = np.array(v_mv, dtype=np.float64)
    true = np.zeros_like(v)
    for k in range(2):
        unit = np.eye(2)[k]
        # At a reversal 1000 mV above any V the current is far from 0, so the share is exact.
        share = walk("squid-na-k", v_mv, 1, (unit, [1000.0, 1000.0]))[0] / (1000.0 - v)
        true += gmax[k] * share * (reversal[k] - v)
    np.testing.assert_allclose(i_pa, true, rtol=1e-5, atol=1e-6 * (1 + np.abs(gmax).max() * 400))


@pytest.mark.parametrize("ticks", [2, 3, 7, 20, 100, 5000])
def test_a_missed_tick_is_one_longer_step(ticks):
    """Carried over n ticks at a held voltage, gates are where n single ticks take them."""
    v_mv = [-70.0, -20.0, -20.0]
    _, once = walk("squid-na-k", v_mv, [1, 1, ticks])
    _, singly = walk("squid-na-k", v_mv[:2] + [-20.0] * ticks)
    np.testing.assert_allclose(once[-1], singly[-1], atol=3e-6)


# ---- the folder ----


@pytest.mark.parametrize("model", MODELS)
def test_the_self_test_passes(model):
    """512 steps, off the grid and over missed ticks too, give the bits that were written."""
    assert library(model).gsm_selftest() == 0


@pytest.mark.parametrize("model", MODELS)
def test_the_c_is_strict_c99_and_cplusplus(model, tmp_path):
    """No warning in either language, conversions watched."""
    made = folder(model)
    watched = ["-Wconversion", "-Wshadow", "-Wdouble-promotion", "-O2", "-ffp-contract=off"]
    include = ["-I", made, "-I", made / "library"]
    own = [path for path in sources(made) if path.parent == made]
    for source in own:
        run([*compiler(), *STRICT, *watched, *include, "-c", source, "-o", tmp_path / "c.o"])
    plus = shutil.which("g++")
    if not plus:
        pytest.skip("needs a C++ compiler (Debian: apt install g++)")
    strict = [flag for flag in STRICT if flag != "-std=c99"]
    for source in own:
        run([plus, "-x", "c++", *strict, *watched, *include, "-c", source, "-o", tmp_path / "p.o"])


def test_the_model_needs_nothing_but_memory_functions(tmp_path):
    """No libm, no malloc, nothing at all from outside but the library, memcpy and memset."""
    nm = shutil.which("nm")
    if not nm:
        pytest.skip("needs nm (Debian: apt install binutils)")
    made = folder("low-threshold-spiking")
    plain = ["-Os", "-fno-pic", "-fno-stack-protector", "-ffreestanding"]
    for source in made.glob("*.c"):
        include = ["-I", made, "-I", made / "library"]
        run([*compiler(), *STRICT, *plain, *include, "-c", source, "-o", tmp_path / "o.o"])
        wanted = {
            line.split()[0] for line in run([nm, "-u", "-P", tmp_path / "o.o"]).stdout.splitlines()
        }
        assert {n for n in wanted if not n.startswith(("gsm_", "gsb_"))} <= {"memcpy", "memset"}


def test_another_tick_or_grid_is_another_model():
    """The digest in the header tells builds apart that would compute other numbers."""
    shas = set()
    for rows, interval_us in ((257, 20.0), (513, 20.0), (257, 50.0)):
        text = (folder("leak", rows, interval_us) / "model.h").read_text("utf-8")
        shas.add(text.split('GSM_MODEL_SHA256 "')[1][:64])
    assert len(shas) == 3


# ---- the command ----


def asked(*arguments: object) -> tuple[int, str, str]:
    """Status, stdout and stderr of ``gatestep firmware``."""
    out, err, status = io.StringIO(), io.StringIO(), 0
    with pytest.MonkeyPatch.context() as patch, redirect_stdout(out), redirect_stderr(err):
        patch.setattr(sys, "argv", ["gatestep", "firmware", *map(str, arguments)])
        try:
            main()
        except SystemExit as ended:
            status = int(ended.code or 0)
    return status, out.getvalue(), err.getvalue()


def test_it_prints_what_each_number_of_rows_misses(tmp_path):
    """A table of all choices, the chosen one marked; the folder compiles as its README says."""
    status, said, _ = asked("k-squid", "--out", tmp_path / "k", "--rows", 513)
    assert status == 0
    assert [int(line.split()[0]) for line in re.findall(r"^ +\d+ .*$", said, re.MULTILINE)] == [
        *ROWS
    ]
    assert re.search(r"^ +513 .*<$", said, re.MULTILINE)
    readme = (tmp_path / "k" / "README.md").read_text("utf-8")
    build = re.search(r"^    cc (-std=c99 .*)$", readme, re.MULTILINE)[1]
    run(["sh", "-c", f"cd {tmp_path / 'k'} && {' '.join(compiler())} {build}"])
    assert "| 1 | `K.reversal_mv` |" in readme


def test_json_has_the_same_facts(tmp_path):
    """What a program reads is what the library computes."""
    status, said, _ = asked("k-squid", "--out", tmp_path / "k", "--json", "--interval-us", 20)
    told = json.loads(said)
    made = tables("k-squid")
    assert status == 0
    assert (told["rows"], told["interval_us"]) == (2049, 20.0)
    assert told["table_bytes"] == made.table_bytes == 2049 * 2 * 4
    assert told["parameters"] == ["K.gmax_ns", "K.reversal_mv", "trace.every_ticks"]
    assert [choice["rows"] for choice in told["choices"]] == [*ROWS]
    assert all((tmp_path / "k" / name).is_file() for name in told["files"])
    # A folder that the command made may be made anew.
    assert asked("k-squid", "--out", tmp_path / "k", "--rows", 257)[0] == 0


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (("nosuch", "--out", "new"), "no model is named 'nosuch'"),
        (("leak", "--out", "new", "--rows", "1000"), "1000 rows: the table can have 257"),
        (("leak", "--out", "new", "--interval-us", "nan"), "a tick of nan µs"),
        (("leak", "--out", "full"), "holds other files; give a new folder"),
        (("leak", "--out", "full/file"), "not a folder; give a new one"),
        (("leak", "--out", "full/file/new"), "cannot be written"),
    ],
)
def test_what_cannot_be_is_said_in_one_line(tmp_path, monkeypatch, arguments, said):
    """No traceback, status 1, and nothing is written."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "full").mkdir()
    (tmp_path / "full" / "file").write_text("mine")
    status, out, err = asked(*arguments)
    assert (status, out) == (1, "")
    assert said in err
    assert err.count("\n") == 1
    assert not (tmp_path / "new").exists()
    assert [p.name for p in (tmp_path / "full").iterdir()] == ["file"]
