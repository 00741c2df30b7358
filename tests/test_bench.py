"""``gatestep bench step`` runs and says what it measured. No test asserts a time."""

from __future__ import annotations

import json
import math
import os
import shutil
import subprocess
import sys
import tempfile
from pathlib import Path

import numpy as np
import pytest

from gatestep.commands import bench, squid_c
from gatestep.commands.bench import Line, Sized, Spread, Stepped, bench_step, spike_train
from gatestep.errors import GatestepError
from gatestep.library import load_model

ROOT = Path(__file__).resolve().parent.parent
QUICK = ("--rounds", "3", "--ticks", "1000")


def quiet(_):
    pass


@pytest.fixture
def few_sizes(monkeypatch):
    """The two smallest sizes, to be quick."""
    monkeypatch.setattr(bench, "SIZES", bench.SIZES[:2])


def test_command_prints_one_json_of_sane_structure():
    """Every cost is positive, in order, and beside it stand processor, versions and date."""
    run = subprocess.run(
        [sys.executable, "-m", "gatestep", "bench", "step", "--json", *QUICK],
        capture_output=True,
        text=True,
        timeout=300,
        check=False,
    )
    assert run.returncode == 0, run.stderr
    result = json.loads(run.stdout)
    assert {"cpu", "numba", "gatestep", "date"} <= set(result["host"])
    assert all(result["host"].values())
    spreads = [*result["squid_nsec"].values(), *(s["nsec"] for s in result["sizes"])]
    for spread in spreads:
        assert 0 < spread["low"] <= spread["median"] <= spread["high"]
    assert [s["conductances"] for s in result["sizes"]] == [1, 2, 8, 32, 64, 64]
    assert [s["gates"] for s in result["sizes"]] == [2, 4, 16, 64, 128, 256]
    assert all(math.isfinite(v) for v in result["line"].values())
    if shutil.which("cc"):
        assert result["c_unavailable"] is None
        assert set(result["ratio_to_c"]) == set(squid_c.FLAGS)
        assert all(r["median"] > 0 for r in result["ratio_to_c"].values())
        assert isinstance(result["within_target"], bool)


@pytest.mark.usefixtures("few_sizes")
@pytest.mark.parametrize("compiler", ["", "/nowhere/cc", "false"])
def test_without_a_working_compiler_it_says_so(compiler, monkeypatch, capsys):
    """No ratio is made up: the reason stands in text and JSON, and the rest is measured."""
    monkeypatch.setenv("CC", compiler)
    if not compiler:
        monkeypatch.setattr(squid_c.shutil, "which", lambda _: None)
    assert bench_step(3, 1000, None, json_output=True) == 0
    result = json.loads(capsys.readouterr().out)
    assert result["ratio_to_c"] == {}
    assert result["within_target"] is None
    assert (compiler or "no C compiler") in result["c_unavailable"]
    assert bench_step(3, 1000, None, json_output=False) == 0
    assert "not compared: " in capsys.readouterr().out


@pytest.mark.usefixtures("few_sizes")
@pytest.mark.parametrize("suffix", ["png", "svg"])
def test_figure_is_drawn(suffix, tmp_path, capsys):
    """A file of the asked-for kind, named in the text."""
    path = tmp_path / f"cost.{suffix}"
    assert bench_step(3, 1000, path, json_output=False) == 0
    assert str(path) in capsys.readouterr().out
    start = {"png": b"\x89PNG", "svg": b"<?xml"}[suffix]
    assert path.read_bytes().startswith(start)


@pytest.mark.parametrize(
    ("options", "word"),
    [
        (("--rounds", "2"), "--rounds 2"),
        (("--ticks", "999"), "--ticks 999"),
        (("--figure", "cost.pdf"), "cost.pdf"),
        (("--figure", "/nowhere/cost.png"), "/nowhere/cost.png"),
    ],
)
def test_unusable_options_are_refused_in_one_line(options, word):
    """Exit status 1 and one line that names the option; nothing has been measured."""
    run = subprocess.run(
        [sys.executable, "-m", "gatestep", "bench", "step", *options],
        capture_output=True,
        text=True,
        timeout=100,
        check=False,
    )
    assert run.returncode == 1
    assert run.stdout == ""
    assert word in run.stderr
    assert len(run.stderr.splitlines()) == 1


def test_voltages_are_a_spike_train():
    """The cell of 30 pF at 300 pA (10 uA/cm2) fires at 68 Hz, the published equations' rate.

    68.32 Hz computed from Hodgkin and Huxley 1952 with scipy at rtol 1e-10; the model
    runs uncompensated at 20 us ticks, hence 2 %.
    """
    v = spike_train(load_model("squid-axon").spec, 50_000)
    up = np.flatnonzero((v[1:] > 0) & (v[:-1] <= 0)) * bench.TICK_MS
    steady = up[up > 200.0]
    assert 1e3 / np.diff(steady).mean() == pytest.approx(68.32, rel=0.02)


def test_kernel_and_c_compute_the_same_and_a_difference_is_refused(tmp_path):
    """Currents agree to the table's error; a C with other constants is not compared."""
    model = load_model("squid-axon").spec
    squid = Stepped(model, spike_train(model, 5000))
    builds, _ = squid_c.build_squid_step(tmp_path, squid, bench.TICK_MS)
    if not builds:
        pytest.fail("this test needs a C compiler, as the rest of the suite does")
    bench._check_agreement(squid, builds)
    other, _ = squid_c.build_squid_step(tmp_path, squid, 2 * bench.TICK_MS)
    with pytest.raises(GatestepError, match="cannot be compared"):
        bench._check_agreement(squid, other)


def test_round_trip_benchmark_measures_and_ends_what_it_started():
    """One small group: every server answers, ratios are of positive medians, none is left."""
    command = [sys.executable, str(ROOT / "bench" / "roundtrip.py"), "--json"]
    command += ["--rounds", "2", "--trips", "20", "--transport", "ipc", "--client", "C"]
    # A short folder of its own: a socket's path is at most 107 bytes.
    with tempfile.TemporaryDirectory(prefix="rt-") as folder:
        environment = {**os.environ, "TMPDIR": folder}
        run = subprocess.run(
            command, capture_output=True, text=True, timeout=300, check=False, env=environment
        )
        assert run.returncode == 0, run.stderr
        assert list(Path(folder).iterdir()) == []
        left = subprocess.run(["ps", "-eo", "args"], capture_output=True, text=True, check=True)
        assert folder not in left.stdout
    result = json.loads(run.stdout)
    [group] = result["groups"]
    assert set(group["costs"]) == {
        "gatestep direct lane",
        "gatestep libzmq lane",
        "C libzmq echo",
        "plain Python server",
    }
    for cost in group["costs"].values():
        assert 0 < cost["round_median"]["median"] <= cost["largest"]
    _check_ratios(group)
    assert all(isinstance(met, bool) for met in result["targets"].values())


def _check_ratios(group):
    """Ratios are between contestants of the group, positive, their spreads in order."""
    for name, ratio in group["ratios"].items():
        assert set(name.split(" / ")) <= set(group["costs"])
        for percentile in ("p50", "p99", "p999"):
            spread = ratio[percentile]
            assert 0 < spread["low"] <= spread["median"] <= spread["high"]


def test_round_trip_benchmark_swaps_and_sizes_under_load():
    """Swaps happen during rounds and nothing is lost; the larger model's step takes longer."""
    command = [sys.executable, str(ROOT / "bench" / "roundtrip.py"), "--json", "--load"]
    command += ["--rounds", "2", "--trips", "50", "--client", "compiled"]
    command += ["--swap-every", "5", "--conductances", "2,16"]
    run = subprocess.run(command, capture_output=True, text=True, timeout=300, check=False)
    assert run.returncode == 0, run.stderr
    swaps, sizes = json.loads(run.stdout)["groups"]
    assert swaps["load"]
    assert swaps["facts"]["swaps"] >= 2
    assert not any(swaps["facts"]["counted"].values())
    [growth] = sizes["growths"].values()
    assert growth["low95"] <= growth["median"] <= growth["high95"]
    # 28 gates more, at some ns each (bench step): the sign, not the size.
    assert growth["step_us"] > 0
    for group in (swaps, sizes):
        _check_ratios(group)


@pytest.mark.parametrize(
    ("options", "word"),
    [
        (["--rounds", "0"], "--rounds 0"),
        (["--libzmq", "/nowhere/lib.so"], "/nowhere/lib.so"),
        (["--cells", "1,9"], "--cells 9"),
        (["--conductances", "65"], "--conductances 65"),
        (["--swap-every", "0"], "--swap-every 0"),
        (["--host", "--client", "Python"], "--client Python"),
    ],
)
def test_round_trip_benchmark_refuses_in_one_line(options, word):
    """Status 1 and one line, before anything is started."""
    command = [sys.executable, str(ROOT / "bench" / "roundtrip.py"), *options]
    run = subprocess.run(command, capture_output=True, text=True, timeout=60, check=False)
    assert run.returncode == 1
    assert word in run.stderr
    assert len(run.stderr.splitlines()) == 1


def test_contestants_alternate():
    """Every round runs each contestant once, and each is first in its turn."""
    order = []
    runs = {name: lambda name=name: order.append(name) for name in "abc"}
    costs = bench.alternate(runs, 3, 10, quiet)
    assert "".join(order) == "abc" + "abc" + "bca" + "cab"
    assert {name: len(values) for name, values in costs.items()} == {"a": 3, "b": 3, "c": 3}


def test_line_through_exact_costs():
    """Linear costs give their own terms and no residual; one off by a tenth shows as such."""

    def sized(conductances, gates, factor=1.0):
        blocks = -(-gates // 4) * 4
        nsec = (20.0 + 3.0 * blocks + 5.0 * conductances) * factor
        return Sized(conductances, gates, Spread(nsec, 0, 0))

    sizes = [sized(n, n * each) for n, each in bench.SIZES]
    line = Line.through(sizes)
    assert (line.base_nsec, line.gate_nsec, line.conductance_nsec) == pytest.approx((20, 3, 5))
    assert line.worst < 1e-12
    assert line.at(10, 40) == pytest.approx(190.0)
    assert 0.01 < Line.through([*sizes[:3], sized(32, 64, 1.1), *sizes[4:]]).worst < 0.1


def test_spread_is_median_and_tenths():
    """Of 0 to 100 the median is 50, the 10th percentile 10, the 90th 90."""
    assert Spread.over([float(k) for k in range(101)]) == Spread(50.0, 10.0, 90.0)
