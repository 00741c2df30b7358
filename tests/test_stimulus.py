"""Waveforms of stimuli, held to numpy, scipy.stats and the laws of the noise."""

from __future__ import annotations

import hashlib
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from gatestep.errors import FileError
from gatestep.planspecs import LONGEST_NOISE_SD
from gatestep.stimulus import add_noise, cosine, logarithm, tick_at, waveform
from gatestep.waves import read_wave

TICK_US = 20.0


def part(kind, start_ms=0.0, stop_ms=1e9, **keys):
    return {"kind": kind, "start_ms": start_ms, "stop_ms": stop_ms, **keys}


@given(
    start=st.integers(0, 400),
    length=st.integers(1, 400),
    tick_us=st.sampled_from((5.0, 20.0, 33.3, 50.0, 100.0)),
)
def test_a_step_on_the_ticks_has_exactly_its_ticks(start, length, tick_us):
    """From the first tick at or after its start to the last before its stop."""
    span = start * tick_us / 1000.0, (start + length) * tick_us / 1000.0
    found = waveform([part("step", *span, current_pa=7.5)], 1000, tick_us)
    expected = np.zeros(1000)
    expected[start : start + length] = 7.5
    assert np.array_equal(found, expected)


def test_a_step_between_ticks_begins_at_the_next():
    """0.03 ms lies within the second tick of 20 µs, so the third is the first."""
    assert tick_at(0.03, TICK_US) == 2
    assert tick_at(0.04, TICK_US) == 2
    assert tick_at(0.0401, TICK_US) == 3


def test_parts_add_up_and_what_lies_beyond_the_sweep_is_left_out():
    """A stimulus is the sum of its parts."""
    parts = [part("step", 0.02, 0.08, current_pa=1.0), part("step", 0.04, 9.0, current_pa=-3.0)]
    assert waveform(parts, 5, TICK_US).tolist() == [0.0, 1.0, -2.0, -2.0, -3.0]
    assert waveform([part("step", 5.0, 6.0, current_pa=1.0)], 5, TICK_US).tolist() == [0.0] * 5


def test_a_ramps_ticks_are_its_means_over_them():
    """Integral of a straight line: its mean over a tick is its value in the middle."""
    found = waveform([part("ramp", 0.1, 0.3, from_pa=-10.0, to_pa=30.0)], 20, TICK_US)
    edges = -10.0 + 40.0 * np.arange(11) / 10.0
    assert found[5:15] == pytest.approx(0.5 * (edges[1:] + edges[:-1]))
    assert not found[:5].any()
    assert not found[15:].any()


@given(f=st.floats(0.1, 5000.0), phase=st.floats(-360.0, 360.0), start=st.floats(0.0, 5.0))
def test_a_sine_is_numpys(f, phase, start):
    """numpy.sin at the middle of each tick, counted from the part's start."""
    sine = part("sine", start, 20.0, amplitude_pa=100.0, frequency_hz=f, phase_deg=phase)
    found = waveform([sine | {"offset_pa": 20.0}], 1000, TICK_US)
    t_ms = (np.arange(1000) + 0.5) * TICK_US / 1000.0 - start
    expected = 20.0 + 100.0 * np.sin(2 * np.pi * (f * t_ms / 1000.0 + phase / 360.0))
    first = tick_at(start, TICK_US)
    assert found[first:] == pytest.approx(expected[first:], abs=1e-9)
    assert not found[:first].any()


@given(x=st.floats(2.0**-53, 1e6))
def test_the_logarithm_is_the_librarys(x):
    """math.log, within a few units in the last place; Python's own run gives the same bits."""
    assert logarithm(x) == pytest.approx(math.log(x), rel=1e-15, abs=1e-17)
    assert logarithm.py_func(x) == logarithm(x)


@given(turns=st.floats(-1000.0, 1000.0))
def test_the_cosine_is_the_librarys(turns):
    """math.cos of the angle within one turn; Python's own run gives the same bits."""
    assert cosine(turns) == pytest.approx(math.cos(2 * math.pi * (turns % 1.0)), abs=2e-15)
    assert cosine.py_func(turns) == cosine(turns)


def noise(ticks, **keys):
    keys = {"sd_pa": 10.0, "tau_ms": 0.0, "mean_pa": 3.0, "seed": 1} | keys
    return waveform([part("noise", **keys)], ticks, TICK_US)


@pytest.mark.parametrize("seed", [0, 1, 2**63 - 1])
def test_white_noise_is_normal_and_white(seed):
    """scipy.stats: Kolmogorov-Smirnov against the normal law; neighbours do not correlate."""
    found = (noise(200_000, seed=seed) - 3.0) / 10.0
    assert stats.kstest(found, "norm").pvalue > 1e-3
    for lag in (1, 2, 7):
        assert abs(np.corrcoef(found[:-lag], found[lag:])[0, 1]) < 4.0 / math.sqrt(200_000)
    assert np.abs(found).max() < LONGEST_NOISE_SD


def test_no_draw_can_be_longer_than_the_plans_bound():
    """Box and Muller: the smallest uniform draw is 2**-53."""
    assert math.sqrt(-2.0 * math.log(2.0**-53)) < LONGEST_NOISE_SD


def test_coloured_noise_has_its_variance_and_its_time_constant():
    """Ornstein-Uhlenbeck (Gillespie 1996): stationary, correlation exp(-t / tau)."""
    found = noise(2_000_000, tau_ms=2.0) - 3.0  # 20,000 time constants
    assert found.std() == pytest.approx(10.0, rel=0.02)
    for lag_ms in (0.5, 2.0, 5.0):
        lag = round(lag_ms * 1000.0 / TICK_US)
        measured = np.mean(found[:-lag] * found[lag:]) / found.var()
        assert measured == pytest.approx(math.exp(-lag_ms / 2.0), abs=0.03)


def test_coloured_noise_is_as_large_at_its_start_as_later():
    """The first value is drawn from the stationary law: over 2000 seeds its sd is 10 pA."""
    first = [noise(1, tau_ms=50.0, seed=seed)[0] for seed in range(2000)]
    assert np.std(first) == pytest.approx(10.0, rel=0.06)
    assert np.mean(first) == pytest.approx(3.0, abs=0.9)


def test_noise_depends_on_seed_and_tick_alone():
    """A longer sweep begins as a shorter one, a later start plays the same, seeds differ."""
    long, short = noise(1000, tau_ms=1.0), noise(300, tau_ms=1.0)
    assert np.array_equal(long[:300], short)
    keys = {"sd_pa": 10.0, "tau_ms": 1.0, "mean_pa": 3.0, "seed": 1}
    late = waveform([part("noise", 2.0, **keys)], 1000, TICK_US)
    assert np.array_equal(late[100:], long[:900])
    assert not np.array_equal(noise(1000, tau_ms=1.0, seed=2), long)


def _scrambled(z: int) -> int:
    z = (z ^ (z >> 30)) * 0xBF58476D1CE4E5B9 % 2**64
    z = (z ^ (z >> 27)) * 0x94D049BB133111EB % 2**64
    return z ^ (z >> 31)


def _uniform(seed: int, place: int) -> float:
    counter = (place + 1) * 0x9E3779B97F4A7C15
    mixed = _scrambled((_scrambled((seed + 0x9E3779B97F4A7C15) % 2**64) + counter) % 2**64)
    return ((mixed >> 11) + 1) * 2.0**-53


def test_compiled_noise_is_the_same_arithmetic_in_python_to_the_bit():
    """Nothing is contracted or reordered when it is compiled; integers wrap at 2**64."""
    found, seed, keep, x = np.zeros(200), 2**63 - 1, 0.9, 0.0
    add_noise(found, np.uint64(seed), 1.0, 2.0, keep)
    for k in range(200):
        radius = math.sqrt(-2.0 * logarithm.py_func(_uniform(seed, 2 * k)))
        draw = radius * cosine.py_func(_uniform(seed, 2 * k + 1))
        x = keep * x + math.sqrt(1.0 - keep * keep) * draw if k else draw
        assert found[k] == 1.0 + 2.0 * x


def wave(path, text, start_ms=0.0, interval_us=TICK_US, column=1):
    path.write_text(text)
    digest = hashlib.sha256(path.read_bytes()).hexdigest()
    keys = {"path": str(path), "sha256": digest, "interval_us": interval_us, "column": column}
    return part("file", start_ms, **keys)


def test_a_wave_at_the_loops_tick_is_played_as_it_is(tmp_path):
    """One value a tick, from its start, then 0."""
    values = np.random.default_rng(1).normal(0.0, 50.0, 100)
    text = "# my wave\n" + "\n".join(map(repr, values.tolist()))
    found = waveform([wave(tmp_path / "w.txt", text, start_ms=0.2)], 200, TICK_US)
    assert np.array_equal(found[10:110], values)
    assert not found[:10].any()
    assert not found[110:].any()


@pytest.mark.parametrize("interval_us", [7.0, 10.0, 50.0, 33.3])
def test_a_wave_at_another_interval_has_the_value_at_each_ticks_middle(tmp_path, interval_us):
    """Each of its values holds until the next, as plain arithmetic says."""
    values = np.arange(1.0, 41.0)
    text = "\n".join(map(str, values))
    found = waveform([wave(tmp_path / "w.txt", text, 0.0, interval_us)], 120, TICK_US)
    for k in range(120):
        place = math.floor((k + 0.5) * TICK_US / interval_us)
        assert found[k] == (values[place] if place < 40 else 0.0)


def test_a_wave_that_changed_since_the_plan_was_read_is_refused(tmp_path):
    """What is played is what was checked."""
    made = wave(tmp_path / "w.txt", "1\n2\n")
    (tmp_path / "w.txt").write_text("1\n3\n")
    with pytest.raises(FileError, match="is not what it was"):
        waveform([made], 10, TICK_US)


def test_a_sum_beyond_the_limit_is_refused(tmp_path):
    """Waves are checked one by one when they are read, their sum when it is made."""
    parts = [wave(tmp_path / "w.txt", "9e5\n"), part("step", current_pa=2e5)]
    with pytest.raises(FileError, match=r"1.1e\+06 pA"):
        waveform(parts, 10, TICK_US)


@pytest.mark.parametrize(
    ("text", "column", "said"),
    [
        ("", 1, "holds no numbers"),
        ("current\n", 1, "holds no numbers"),
        ("1\ntwo\n", 1, "line 2: 'two' is not a number"),
        ("time\ncurrent\n1\n", 1, "line 2: 'current' is not a number"),
        ("1,2\n3\n", 2, "line 2 has no column 2"),
        ("1\nnan\n", 1, "line 2: nan is not a current"),
        ("1\n\n1e7\n", 1, r"line 3: 1e\+07 is not a current in pA within"),
    ],
)
def test_a_faulty_wave_is_refused_with_its_line(tmp_path, text, column, said):
    """What, where, what is allowed."""
    path = tmp_path / "w.csv"
    path.write_text(text)
    with pytest.raises(FileError, match=said):
        read_wave(path, column)


def test_columns_are_separated_by_commas_semicolons_or_tabs(tmp_path):
    """The common tables of numbers, with and without headings."""
    for mark in (",", ";", "\t"):
        path = tmp_path / "w.csv"
        path.write_text(f"t{mark}i\n0{mark} 1.5\n1{mark}-2e1 \n")
        assert read_wave(path, 2).values.tolist() == [1.5, -20.0]
