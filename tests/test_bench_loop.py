"""Figures of a measured loop, and ``gatestep bench loop`` as a whole."""

from __future__ import annotations

import json
import tomllib

import numpy as np
import pytest
from conftest import make_rig
from hypothesis import given
from hypothesis import strategies as st
from scipy.ndimage import label

from gatestep.commands.loop_report import draw, text
from gatestep.commands.loop_result import Plan, compare_results, read_result
from gatestep.commands.loop_target import as_toml, private_rig
from gatestep.errors import FileError
from gatestep.measuring import Run
from gatestep.probe import Status
from gatestep.specs import LoopSpec, RigSpec
from gatestep.timing import (
    NAMES,
    carried,
    compared,
    comparison,
    delay_in_ticks,
    histogram,
    largest_conductance_ns,
    longest_run,
    percentiles,
    series_figures,
    stable_gain,
)

ROUND_TRIP_US = np.array([20.0, 30.0, 250.0, 260.0, 40.0, 110.0, 25.0, 35.0])


def made_run(round_trip_us=ROUND_TRIP_US, interval_us=100.0, lost=(), skipped=()):
    """A paced run in which each sample went out 1 µs after its tick's start."""
    n = len(round_trip_us)
    sent = 10_000_000 + np.arange(n) * int(interval_us * 1000) + 1000
    arrived = sent + np.round(np.asarray(round_trip_us) * 1000).astype(np.int64)
    arrived[list(lost)] = 0
    sent[list(skipped)] = arrived[list(skipped)] = 0
    flags = np.where(arrived > 0, 1, -1)
    service = np.where(arrived > 0, 700, -1)
    return Run(
        Status.DONE, interval_us, 10_000_000, n * interval_us * 1e-6, sent, arrived, service,
        flags, 0, 0, 0,
    )  # fmt: skip


def loop(**changes):
    return LoopSpec(**{"interval_us": 100.0, **changes})


@given(st.lists(st.floats(0.1, 1e6), min_size=1, max_size=300))
def test_percentiles_are_numpys(values):
    """Each equals numpy's default; the maximum is the largest."""
    found = percentiles(np.array(values))
    wanted = [float(np.percentile(values, p)) for p in (50, 90, 99, 99.9, 99.99)]
    assert list(found.values()) == [*wanted, max(values)]
    assert tuple(found) == NAMES


def test_no_values_have_no_percentiles():
    """Nothing is made up where nothing came."""
    assert set(percentiles(np.empty(0)).values()) == {None}


@given(st.lists(st.booleans(), max_size=60))
def test_longest_run_agrees_with_scipys_labels(rows):
    """The longest stretch of True, as scipy's connected components find it."""
    late = np.array(rows, dtype=bool)
    labels, count = label(late)
    wanted = max((int(np.sum(labels == k)) for k in range(1, count + 1)), default=0)
    assert longest_run(late) == wanted


@given(st.lists(st.floats(0.01, 1e7), max_size=200))
def test_histogram_loses_nothing_and_bins_where_it_says(values):
    """Counts add up, and numpy's histogram over the same edges agrees."""
    found = histogram(np.array(values))
    assert sum(found["counts"]) == len(values)
    for place, count in zip(found["bins"], found["counts"], strict=True):
        low, high = 10 ** (place / 100), 10 ** ((place + 1) / 100)
        inside = [v for v in values if low * (1 + 1e-9) <= v < high * (1 - 1e-9)]
        on_edge = [v for v in values if abs(v - low) < 1e-8 * v or abs(v - high) < 1e-8 * v]
        assert len(inside) <= count <= len(inside) + len(on_edge)


def test_series_by_hand():
    """Eight samples, two of them late by two ticks, one by one: counted out on paper."""
    series = series_figures([made_run()], loop())
    assert (series["samples"], series["answered"], series["missed"]) == (8, 8, 0)
    assert series["inside_budget"] == pytest.approx(5 / 8)
    assert series["held"] == pytest.approx(3 / 8)
    assert series["longest_late_run"] == 2
    assert series["service_us"]["max"] == pytest.approx(0.7)
    assert series["send_late_us"]["p50"] == pytest.approx(1.0)
    median = np.median(ROUND_TRIP_US)
    assert series["jitter_us"]["max"] == pytest.approx(260.0 - median)
    assert len(series["rounds"]) == 1


def test_lateness_is_judged_when_the_current_flows():
    """A budget of 150 µs: 110 µs flows at 110 on arrival, and at 200 on the tick."""
    on_tick = series_figures([made_run()], loop(budget_us=150.0))
    at_once = series_figures([made_run()], loop(budget_us=150.0, apply="on-arrival"))
    assert on_tick["inside_budget"] == pytest.approx(5 / 8)
    assert at_once["inside_budget"] == pytest.approx(6 / 8)


def test_missing_answers_are_late_and_skipped_ticks_are_apart():
    """An answer that never came is late; a tick without a sample is no sample."""
    series = series_figures([made_run(lost=[1, 4], skipped=[6])], loop())
    assert (series["samples"], series["missed"], series["skipped"]) == (7, 2, 1)
    assert series["inside_budget"] == pytest.approx(2 / 7)
    assert series["longest_late_run"] == 5  # samples 1 to 5
    spec = RigSpec(loop=loop(), cell=[{"name": "a", "model": "leak", "capacitance_pf": 10.0}])
    assert carried(series, spec)["delay_ticks"] is None


def radius(gain, delay):
    """Largest root of the plain loop's characteristic polynomial.

    Written out from the recursion V[n+1] = V[n] - a ((1-f) V[n-m] + f V[n-m-1]), d = m + f,
    as the eigenvalues of its companion matrix.
    """
    m = min(int(delay), int(np.ceil(delay)))
    f = delay - m
    companion = np.zeros((m + 2, m + 2))
    companion[0, 0] = 1.0
    companion[0, m] -= gain * (1 - f)
    companion[0, m + 1] -= gain * f
    companion[1:, :-1] += np.eye(m + 1)
    return np.abs(np.linalg.eigvals(companion)).max()


@given(st.floats(0.0, 1.0), st.floats(0.02, 0.98), st.floats(1.02, 3.0))
def test_the_bound_is_the_jury_test(delay, below, above):
    """z^2 - (1 - a (1 - d)) z + a d has its roots in the unit circle below, not above."""
    bound = stable_gain(delay)

    def largest(a):
        return np.abs(np.roots([1.0, -(1.0 - a * (1.0 - delay)), a * delay])).max()

    assert largest(below * bound) < 1.0
    assert largest(above * bound) > 1.0
    assert radius(below * bound, delay) == pytest.approx(largest(below * bound), abs=1e-6)


@pytest.mark.parametrize("delay", [1.0, 1.25, 1.7, 2.0, 3.5, 7.0, 12.3, 49.0, 60.0, 75.0])
def test_beyond_a_tick_every_gain_below_the_bound_is_stable(delay):
    """Scanned from zero: stable up to the bound and never again above it."""
    bound = stable_gain(delay)
    assert all(radius(share * bound, delay) < 1.0 for share in np.linspace(0.01, 0.995, 40))
    assert all(radius(share * bound, delay) > 1.0 for share in np.linspace(1.005, 6.0, 40))


@pytest.mark.parametrize("ticks", [1, 2, 3, 10, 40, 50, 51, 1000])
def test_whole_ticks_have_a_closed_form(ticks):
    """2 sin(pi / (4 k + 2)): the bound of x[n+1] = x[n] - a x[n-k] (Levin and May 1976, memory)."""
    assert stable_gain(ticks) == pytest.approx(2 * np.sin(np.pi / (4 * ticks + 2)), rel=1e-4)


@pytest.mark.parametrize(
    ("trip_us", "apply", "ticks"),
    [
        (20.0, "next-tick", 1.0),
        (100.0, "next-tick", 1.0),
        (101.0, "next-tick", 2.0),
        (20.0, "on-arrival", 0.2),
        (250.0, "on-arrival", 2.5),
    ],
)
def test_delay_in_ticks(trip_us, apply, ticks):
    """Whole ticks when the current flows from the next tick, the time itself on arrival."""
    assert delay_in_ticks(trip_us, loop(apply=apply)) == pytest.approx(ticks)


def test_a_conductance_on_a_simulated_capacitance_rings_above_the_bound():
    """The loop played out on a capacitance: dies away 5 % below the figure, grows 5 % above."""
    c_pf, dt_us, delay = 30.0, 20.0, 1.0
    limit_ns = largest_conductance_ns(c_pf, dt_us, delay)
    assert limit_ns == pytest.approx(1500.0)

    def end_mv(g_ns):
        held, v = 0.0, 1.0
        for _ in range(2000):
            i_pa = -g_ns * v
            v += held * dt_us * 1e-3 / c_pf
            held = i_pa
        return abs(v)

    assert end_mv(0.95 * limit_ns) < 1e-6
    assert end_mv(1.05 * limit_ns) > 1e6


def test_the_rule_of_comparison_by_hand():
    """Centres 10 and 14, half-ranges 1 and 2: 4 > 3 counts; with 2 and 2 it does not."""
    counts = compared([9.0, 10.0, 11.0], [12.0, 14.0, 16.0])
    assert counts == {
        "before": 10.0, "now": 14.0, "difference": 4.0, "spread": 3.0, "differs": True,
    }  # fmt: skip
    assert not compared([8.0, 10.0, 12.0], [12.0, 14.0, 16.0])["differs"]
    assert compared([16.0, 14.0, 12.0], [9.0, 10.0, 11.0])["differs"]


def test_too_few_rounds_tell_nothing():
    """Two rounds show no spread, however far apart the results."""
    row = compared([1.0, 1.0], [100.0, 100.0, 100.0])
    assert (row["spread"], row["differs"]) == (None, False)


def test_equal_machines_seldom_differ_and_unequal_ones_mostly():
    """On made-up rounds: below 3 % false alarms at no difference, over 90 % found at 5 sd."""
    rng = np.random.default_rng(7)
    same = rng.normal(50.0, 1.0, (4000, 2, 5))
    alarms = np.mean([compared(a.tolist(), b.tolist())["differs"] for a, b in same])
    found = np.mean([compared(a.tolist(), (b + 5.0).tolist())["differs"] for a, b in same])
    assert alarms < 0.03
    assert found > 0.9


def made_result(shift_us=0.0, seed=3, rounds=5, **changes):
    """A whole result from made-up runs, without any measurement."""
    rng = np.random.default_rng(seed)
    spec = RigSpec(
        loop=loop(**changes), cell=[{"name": "a", "model": "leak", "capacitance_pf": 30.0}]
    )
    conditions = {}
    for condition, scale in (("quiet", 1.0), ("loaded", 3.0)):
        for kind in ("tick", "flat"):
            runs = [
                made_run(20.0 + shift_us + rng.exponential(8.0 * scale, 2000))
                for _ in range(rounds)
            ]
            conditions.setdefault(condition, {})[kind] = series_figures(runs, spec.loop)
    return {
        "kind": "gatestep bench loop",
        "format": 1,
        "date": "2026-01-01T00:00:00+00:00",
        "complete": True,
        "fault": None,
        "host": {"cpu": "made up", "cores": 2, "usable_cores": 2, "kernel": "none",
                 "python": "3", "numba": "0", "libzmq": "4", "gatestep": "0"},
        "rig": {"file": "rig.toml", "sha256": "0", "interval_us": 100.0,
                "budget_us": spec.loop.budget, "apply": spec.loop.apply, "cells": []},
        "server": {"private": True, "state": "armed", "lane": "direct", "anticipate": False,
                   "version": "0", "transport": "tcp"},
        "client": {"sleeps": True, "realtime": False, "voltage": "made up"},
        "load_average": 0.1,
        "plan": {"seconds": 1.0, "rounds": rounds, "burners": 2},
        "conditions": conditions,
        "carries": {c: carried(k["tick"], spec) for c, k in conditions.items()},
    }  # fmt: skip


def test_a_comparison_finds_the_shift_and_only_that():
    """Every round trip 10 µs longer: medians differ, jitter and service do not."""
    rows = comparison(made_result(), made_result(10.0, seed=4))
    assert len(rows) == 2 * 2 * 3 * len(NAMES)
    trips = [r for r in rows if r["quantity"] == "round_trip_us"]
    assert all(r["differs"] and r["difference"] > 0 for r in trips if r["percentile"] == "p50")
    others = [r["differs"] for r in rows if r["quantity"] == "service_us"]
    assert not any(others)
    assert sum(r["differs"] for r in rows if r["quantity"] == "jitter_us") <= 2


def test_a_result_is_compared_with_a_saved_one(tmp_path):
    """What is unlike besides the times is named; the text has both and the rule."""
    saved = tmp_path / "before.json"
    saved.write_text(json.dumps(made_result()), "utf-8")
    now = made_result(10.0)
    now["server"]["lane"] = "libzmq"
    now["comparison"] = compare_results(read_result(saved), now, saved)
    assert now["comparison"]["unlike"] == {"server.lane": ["direct", "libzmq"]}
    shown = text(now)
    assert "server.lane was direct, is libzmq" in shown
    assert "longer" in shown
    assert "half-ranges" in shown


@pytest.mark.parametrize(
    ("content", "words"),
    [
        ("", "cannot be read"),
        ("[1]", "holds no result"),
        ('{"kind": "gatestep bench loop", "format": 99}', "format 99"),
        ('{"kind": "gatestep bench loop", "format": 1, "rig": {}}', "not whole"),
    ],
)
def test_a_file_that_is_no_result_is_refused(tmp_path, content, words):
    """Each with its reason, before anything is measured."""
    path = tmp_path / "other.json"
    path.write_text(content, "utf-8")
    with pytest.raises(FileError, match=words):
        read_result(path)


@pytest.mark.parametrize("suffix", ["png", "svg"])
def test_the_figure_is_drawn(tmp_path, suffix):
    """With and without an older result, as PNG and as SVG whose texts say what is what."""
    path = tmp_path / f"figure.{suffix}"
    draw(made_result(), made_result(5.0), path)
    content = path.read_bytes()
    assert content[:4] == (b"\x89PNG" if suffix == "png" else b"<?xm")
    assert [p.name for p in tmp_path.iterdir()] == [path.name]


def test_a_result_without_answers_is_still_shown():
    """No percentile is invented when nothing was answered."""
    result = made_result()
    lost = made_run(lost=range(len(ROUND_TRIP_US)))
    result["conditions"]["quiet"]["tick"] = series_figures([lost], loop())
    spec = RigSpec(loop=loop(), cell=[{"name": "a", "model": "leak", "capacitance_pf": 30.0}])
    result["carries"]["quiet"] = carried(result["conditions"]["quiet"]["tick"], spec)
    assert "answers are lacking" in text(result)
    json.dumps(result, allow_nan=False)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"seconds": 0.0}, "--seconds 0"),
        ({"seconds": float("nan")}, "--seconds nan"),
        ({"seconds": 1e9}, "--seconds"),
        ({"rounds": 0}, "--rounds 0"),
        ({"burners": 1000}, "--burners 1000"),
    ],
)
def test_figures_out_of_range_are_named(changes, words):
    """The option, what was given and what is allowed."""
    given_ = {"seconds": 1.0, "rounds": 5, "burners": 0, "sleep": True, "realtime": False}
    with pytest.raises(FileError, match=words):
        Plan(**{**given_, **changes})
    with pytest.raises(FileError, match="1 to"):
        Plan(**{**given_, "seconds": 0.1}).ticks(100_000.0)


def test_the_private_rig_is_the_rig_on_sockets_of_its_own(tmp_path):
    """Same tick, models and host; local sockets; no keys; read back it is what was written."""
    rig = make_rig(
        tmp_path,
        loop={"interval_us": 50.0, "endpoint": "tcp://192.168.7.1:5790", "apply": "on-arrival"},
        network={"peers": ["192.168.7.2"]},
        record={"folder": "records"},
        cell=[{"name": "a", "model": "./mine.toml", "limits": {"window_mv": [-90.0, 50.0]}}],
    )
    made = private_rig(rig, tmp_path / "new")
    content = made.model_dump(mode="json", exclude_none=True)
    text_ = "".join(f"{k} = {as_toml(v)}\n" for k, v in content.items())
    assert RigSpec.model_validate(tomllib.loads(text_)) == made
    assert made.loop.endpoint.startswith("tcp://127.0.0.1:")
    assert made.network.peers == ()
    assert made.cell[0].model == str(tmp_path / "mine.toml")
    assert made.record is not None
    assert made.record.folder.startswith(str(tmp_path / "new"))
    for key in ("interval_us", "apply", "budget"):
        assert getattr(made.loop, key) == getattr(rig.spec.loop, key)
