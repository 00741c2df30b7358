"""Measures on voltage traces, held to analytic waveforms, scipy.signal and circuit laws."""

from __future__ import annotations

from functools import cache
from math import log, sqrt

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import signal
from scipy.integrate import solve_ivp

from gatestep.spikes import firing, response, rest_before, rises, spike_times, vertex

TICK_MS = 0.05
REST_MV = -65.0
WHOLE = (100.0, 400.0)


def bumps(centres_ms, height_mv=100.0, sd_ms=0.4, end_ms=500.0, tick_ms=TICK_MS):
    """Gaussian spikes on a steady rest: time of peak, height and width are known."""
    t_ms = np.arange(0.0, end_ms, tick_ms)
    v_mv = np.full(t_ms.size, REST_MV)
    for centre in centres_ms:
        v_mv += height_mv * np.exp(-0.5 * ((t_ms - centre) / sd_ms) ** 2)
    return t_ms, v_mv


@given(phase=st.floats(0.0, 1.0), height=st.floats(80.0, 130.0), sd=st.floats(0.25, 2.0))
def test_peak_width_and_latency_of_a_gaussian_are_within_a_quarter_tick(phase, height, sd):
    """Analytic: vertex at the centre, full width at half height 2 sqrt(2 ln 2) sd, rise by ln."""
    centre = 150.0 + phase * TICK_MS
    t_ms, v_mv = bumps([centre], height, sd)
    found = firing(t_ms, v_mv, WHOLE)
    (spike,) = found.spikes
    rise_ms = centre - sd * sqrt(2.0 * log(height / -REST_MV))
    assert spike.peak_ms == pytest.approx(centre, abs=0.25 * TICK_MS)
    assert spike.peak_mv == pytest.approx(REST_MV + height, abs=0.1)
    assert spike.width_ms == pytest.approx(2.0 * sqrt(2.0 * log(2.0)) * sd, abs=0.25 * TICK_MS)
    assert spike.time_ms == pytest.approx(rise_ms, abs=0.25 * TICK_MS)
    assert found.latency_ms == pytest.approx(rise_ms - 100.0, abs=0.25 * TICK_MS)
    assert found.rest_mv == REST_MV
    assert found.ahp_mv is None or abs(found.ahp_mv) < 1e-9


@given(
    x=st.floats(-1.0, 1.0),
    y=st.floats(-50.0, 50.0),
    bend=st.floats(0.5, 500.0),
    gaps=st.tuples(st.floats(0.02, 0.5), st.floats(0.02, 0.5)),
)
def test_the_vertex_of_a_parabola_is_exact(x, y, bend, gaps):
    """Analytic: any parabola's vertex is found from three points on both sides, even or not."""
    place = x * 0.5 * min(gaps)
    t_ms = np.array([place - gaps[0], place, place + gaps[1]])
    v_mv = y - bend * t_ms**2
    if v_mv.argmax() == 1:
        assert vertex(t_ms, v_mv, 1) == pytest.approx((0.0, y), abs=1e-6)
        assert vertex(t_ms, -v_mv, 1) == pytest.approx((0.0, -y), abs=1e-6)


def _hodgkin_huxley(_t, y, i_ua):
    """Squid axon membrane at 6.3 °C, modern sign (Hodgkin and Huxley 1952; from memory)."""
    v, m, h, n = y
    u = v + 65.0
    rates = (
        (0.1 * (25 - u) / np.expm1((25 - u) / 10), 4 * np.exp(-u / 18)),
        (0.07 * np.exp(-u / 20), 1 / (np.exp((30 - u) / 10) + 1)),
        (0.01 * (10 - u) / np.expm1((10 - u) / 10), 0.125 * np.exp(-u / 80)),
    )
    i_ion = 120 * m**3 * h * (v - 50) + 36 * n**4 * (v + 77) + 0.3 * (v + 54.387)
    gates = [a * (1 - x) - b * x for (a, b), x in zip(rates, (m, h, n), strict=True)]
    return [i_ua - i_ion, *gates]


@cache
def squid_trace():
    """50 ms at rest, then 10 uA/cm2 for 450 ms, every 20 µs, by scipy's LSODA."""
    t_ms = np.arange(25_000) * 0.02
    state, columns = [-65.0, 0.0529, 0.5961, 0.3177], []
    for first, last, i_ua in ((0, 2500, 0.0), (2500, 25_000, 10.0)):
        span = (t_ms[first], t_ms[last - 1] + 0.02)
        run = solve_ivp(
            _hodgkin_huxley, span, state, "LSODA", t_ms[first:last], True,
            args=(i_ua,), rtol=1e-9, atol=1e-9, max_step=0.5,
        )  # fmt: skip
        columns.append(run.y[0])
        state = run.sol(span[1])
    return t_ms, np.concatenate(columns)


def test_spikes_of_the_squid_axon_agree_with_scipy_signal():
    """Peaks, widths and troughs are those of find_peaks and peak_widths on the same trace."""
    t_ms, v_mv = squid_trace()
    found = firing(t_ms, v_mv, (50.0, 500.0))
    peaks, _ = signal.find_peaks(v_mv, height=0.0, prominence=20.0)
    assert len(found.spikes) == len(peaks) > 25
    assert [s.peak_ms for s in found.spikes] == pytest.approx(t_ms[peaks], abs=0.01)
    assert [s.peak_mv for s in found.spikes] == pytest.approx(v_mv[peaks], abs=0.05)
    rest = np.median(v_mv[:2500])
    assert found.rest_mv == rest
    half = (v_mv[peaks] - rest, np.zeros_like(peaks), np.full_like(peaks, v_mv.size - 1))
    widths = signal.peak_widths(v_mv, peaks, 0.5, prominence_data=half)[0] * 0.02
    assert [s.width_ms for s in found.spikes] == pytest.approx(widths, abs=0.005)
    troughs, _ = signal.find_peaks(-v_mv, prominence=20.0)
    inner = [s.trough_mv for s in found.spikes[:-1]]
    assert inner == pytest.approx(v_mv[troughs[: len(inner)]], abs=0.01)
    assert found.ahp_mv == pytest.approx(v_mv[troughs[0]] - rest, abs=0.01)


def test_the_steady_rate_is_the_published_membranes():
    """10 uA/cm2 make the squid axon fire at 68.32 Hz (scipy at rtol 1e-10, after 200 ms)."""
    t_ms, v_mv = squid_trace()
    late = firing(t_ms, v_mv, (250.0, 500.0))
    assert late.steady_hz == pytest.approx(68.32, abs=0.02)
    assert late.outside + len(late.spikes) == spike_times(t_ms, v_mv).size


@given(shift=st.floats(-1e4, 1e4), offset=st.floats(-40.0, 40.0))
def test_shifts_of_time_and_voltage_shift_the_measures(shift, offset):
    """Times move with the trace and levels with the offset; widths and rates stay."""
    t_ms, v_mv = bumps([120.0, 151.3, 260.02])
    plain = firing(t_ms, v_mv, WHOLE)
    window = (WHOLE[0] + shift, WHOLE[1] + shift)
    moved = firing(t_ms + shift, v_mv + offset, window, threshold_mv=offset)
    assert len(moved.spikes) == len(plain.spikes) == 3
    for a, b in zip(plain.spikes, moved.spikes, strict=True):
        assert b.time_ms - shift == pytest.approx(a.time_ms, abs=1e-6)
        assert b.peak_ms - shift == pytest.approx(a.peak_ms, abs=1e-6)
        assert b.peak_mv - offset == pytest.approx(a.peak_mv, abs=1e-6)
        assert b.width_ms == pytest.approx(a.width_ms, abs=1e-6)
    assert moved.rate_hz == pytest.approx(plain.rate_hz)
    assert moved.rest_mv == pytest.approx(plain.rest_mv + offset)


@given(seed=st.integers(0, 2**32 - 1), hysteresis=st.floats(1.0, 20.0))
def test_noise_within_the_hysteresis_adds_no_spikes(seed, hysteresis):
    """Noise below half the hysteresis either way leaves the count as it is."""
    t_ms, v_mv = bumps([120.0, 151.3, 260.02], sd_ms=3.0)
    noise = np.random.default_rng(seed).uniform(-0.499, 0.499, v_mv.size) * hysteresis
    assert rises(v_mv + noise, 0.0, hysteresis).size == 3
    assert spike_times(t_ms, v_mv + noise, 0.0, hysteresis).size == 3


def test_without_hysteresis_the_same_noise_does_add_spikes():
    """The check itself: the hysteresis is what keeps the count."""
    _, v_mv = bumps([120.0, 151.3, 260.02], sd_ms=3.0)
    noise = np.random.default_rng(1).uniform(-5.0, 5.0, v_mv.size)
    assert rises(v_mv + noise, 0.0, 0.0).size > 3


@given(
    r_mohm=st.floats(50.0, 1000.0),
    c_pf=st.floats(10.0, 100.0),
    g_ns=st.floats(-0.5, 20.0),
    i_pa=st.floats(5.0, 100.0),
    sign=st.sampled_from((-1.0, 1.0)),
)
def test_resistance_and_time_constant_of_a_passive_cell(r_mohm, c_pf, g_ns, i_pa, sign):
    """Circuit law: with g added, 1/(1/R + g) and C/(1/R + g); without the model's current R."""
    total_ns = 1000.0 / r_mohm + g_ns
    tau_ms = c_pf / total_ns
    step_ms = 12.0 * tau_ms + 20.0
    t_ms = np.arange(0.0, 50.0 + step_ms, TICK_MS)
    on = np.where(t_ms >= 50.0, 1.0 - np.exp(-(t_ms - 50.0).clip(0.0) / tau_ms), 0.0)
    v_mv = REST_MV + sign * i_pa / total_ns * on
    injected = np.where(t_ms >= 50.0, sign * i_pa, 0.0) - g_ns * (v_mv - REST_MV)
    found = response(t_ms, v_mv, injected, (50.0, 50.0 + step_ms), sign * i_pa)
    assert found.deflection_mv == pytest.approx(sign * i_pa / total_ns, rel=1e-3)
    assert found.input_mohm == pytest.approx(1000.0 / total_ns, rel=1e-3)
    assert found.own_mohm == pytest.approx(r_mohm, rel=2e-3)
    assert found.tau_ms == pytest.approx(tau_ms, rel=1e-3)


def test_a_time_constant_in_noise_is_not_far_off():
    """0.2 mV rms of noise on 10 mV move the time constant by some per cent."""
    rng = np.random.default_rng(5)
    t_ms = np.arange(0.0, 400.0, TICK_MS)
    on = np.where(t_ms >= 100.0, 1.0 - np.exp(-(t_ms - 100.0).clip(0.0) / 15.0), 0.0)
    v_mv = REST_MV + 10.0 * on + rng.normal(0.0, 0.2, t_ms.size)
    found = response(t_ms, v_mv, np.where(t_ms >= 100.0, 50.0, 0.0), (100.0, 400.0), 50.0)
    assert found.tau_ms == pytest.approx(15.0, rel=0.05)


def test_a_trace_that_begins_above_the_threshold_counts_from_its_next_rise():
    """Half a spike at the start is none, nor is its ripple; one that begins below counts."""
    v_mv = np.array([10.0, 20.0, -2.0, 10.0, -60.0, 10.0, -60.0, -60.0])
    assert rises(v_mv, 0.0, 5.0).tolist() == [5]
    assert rises(v_mv[2:], 0.0, 5.0).tolist() == [1, 3]


@pytest.mark.parametrize("v_mv", [[], [-65.0], [-65.0] * 200, [30.0] * 200])
def test_traces_without_spikes_have_none(v_mv):
    """Nothing, one sample and steady voltages on both sides of the threshold are no spikes."""
    t_ms = np.arange(len(v_mv)) * 1.0
    found = firing(t_ms, np.array(v_mv), (120.0, 150.0))
    assert found.spikes == ()
    assert (found.rate_hz, found.steady_hz, found.latency_ms, found.ahp_mv) == (0.0, *[None] * 3)
    assert found.rest_mv == (v_mv[0] if len(v_mv) > 100 else None)


def test_a_spike_that_the_trace_cuts_off_has_no_width_and_no_trough():
    """What was not seen is not measured."""
    t_ms, v_mv = bumps([200.0])
    cut = np.searchsorted(t_ms, 200.2)
    (spike,) = firing(t_ms[:cut], v_mv[:cut], (150.0, 300.0)).spikes
    assert spike.width_ms is spike.trough_mv is None
    assert spike.peak_mv == pytest.approx(35.0, abs=0.1)


def test_the_trough_after_the_last_spike_must_turn_within_the_window():
    """A voltage that still falls when the step ends has no trough yet."""
    t_ms, v_mv = bumps([200.0])
    v_mv -= 10.0 * np.exp(-0.5 * ((t_ms - 230.0) / 10.0) ** 2)
    seen = firing(t_ms, v_mv, (150.0, 300.0))
    assert seen.ahp_mv == pytest.approx(-10.0, abs=0.01)
    assert seen.spikes[0].trough_ms == pytest.approx(230.0, abs=0.25 * TICK_MS)
    assert firing(t_ms, v_mv, (150.0, 225.0)).ahp_mv is None


def test_missing_ticks_do_not_move_what_lies_elsewhere():
    """Times are the samples' own, so a gap changes nothing but what lies in it."""
    t_ms, v_mv = bumps([120.0, 300.0])
    kept = (t_ms < 180.0) | (t_ms > 220.0)
    whole, gappy = (firing(t, v, WHOLE) for t, v in ((t_ms, v_mv), (t_ms[kept], v_mv[kept])))
    assert [s.time_ms for s in whole.spikes] == [s.time_ms for s in gappy.spikes]
    assert [s.width_ms for s in whole.spikes] == [s.width_ms for s in gappy.spikes]


def test_rest_is_the_median_so_a_spike_before_the_stimulus_does_not_move_it():
    """A spontaneous spike takes under half of the time before the stimulus."""
    t_ms, v_mv = bumps([60.0])
    assert rest_before(t_ms, v_mv, 100.0) == REST_MV
    assert rest_before(t_ms, v_mv, 0.1) is None
