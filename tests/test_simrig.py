"""The simulated rig against a small server in plain Python, and a naive model of its output."""

from __future__ import annotations

import math
import time

import msgpack
import numpy as np
import pytest
from plain_server import (
    ANYWHERE,
    LIVE,
    MALFORMED,
    REPEAT,
    TICK_US,
    exchange,
    ohmic,
    rig_spec,
    server,
    socket_nobody_has,
)
from zmq.auth import create_certificates, load_certificate

from gatestep import simrig
from gatestep.errors import FileError, LinkError
from gatestep.simcell import DROP_STREAM, JITTER_STREAM, uniform
from gatestep.simrig import SimRig
from gatestep.simtrace import Trace
from gatestep.specs import CellSpec, LoopSpec, NetworkSpec, RigSpec, SimCellSpec, StepSpec


def test_virtual_leak_adds_to_the_cells_own():
    """Input resistance of a passive cell with a virtual leak is 1/(1/R + g) (circuit law)."""
    cell = SimCellSpec(step=(StepSpec(start_ms=0, stop_ms=1e6, current_pa=50),))
    trace, _, _ = exchange(rig_spec(ANYWHERE, cell=cell), ohmic(7.0, -65.0), 0.05)
    resistance_gohm = (trace.v_mv[-1, 0] + 65.0) / 50.0
    assert resistance_gohm == pytest.approx(1 / (3.0 + 7.0), rel=0.005)


def test_virtual_leak_shortens_the_time_constant():
    """The time constant becomes C/(1/R + g) (circuit law), but for the loop's own delay."""
    cell = SimCellSpec(step=(StepSpec(start_ms=0, stop_ms=1e6, current_pa=50),))
    trace, _, _ = exchange(rig_spec(ANYWHERE, cell=cell), ohmic(7.0, -65.0), 0.03)
    risen = (trace.v_mv[:, 0] + 65.0) / 5.0
    tau_ms = np.interp(1 - math.exp(-1), risen, trace.t_ms)
    assert tau_ms == pytest.approx(30.0 / 10.0, abs=0.05)


def test_samples_say_what_flows_next_tick():
    """Applied at the next tick, sample n reports answer n-2 in force with a lag of one tick."""
    trace, there, _ = exchange(rig_spec(ANYWHERE, cells=2), lambda n, _: [n, -n], 0.004)
    assert [s[0] for s in there.samples] == list(range(200))
    assert [s[1] for s in there.samples] == [20 * n for n in range(200)]
    assert [s[2:4] for s in there.samples[:2]] == [[None, None]] * 2
    assert [s[2:4] for s in there.samples[2:]] == [[n, 20] for n in range(198)]
    # The answer to sample n flows from tick n+1 to n+2.
    np.testing.assert_array_equal(trace.i_pa[1:, 0], np.arange(199))
    np.testing.assert_array_equal(trace.i_pa[1:, 1], -np.arange(199))
    np.testing.assert_array_equal(trace.answered_pa[:, 0], np.arange(200))
    assert trace.i_pa[0, 0] == 0
    assert np.all(trace.flags == LIVE)


def test_samples_say_what_flows_on_arrival():
    """Applied on arrival, sample n reports n-1, in force since the delay, half a tick if unsaid."""
    spec = rig_spec(ANYWHERE, apply="on-arrival")
    trace, there, _ = exchange(spec, lambda n, _: [4.0 * n], 0.002)
    assert there.samples[0][2:4] == [None, None]
    assert [s[2:4] for s in there.samples[1:]] == [[n, 10] for n in range(99)]
    # Half the tick under the answer before, half under its own.
    n = np.arange(1, 100)
    np.testing.assert_allclose(trace.i_pa[1:, 0], (4.0 * (n - 1) + 4.0 * n) / 2)


def naive_output(spec, seed, ticks, answers):
    """Mean current per tick and (in force, lag) per sample, from a list of all arrivals."""
    tick, on_arrival = spec.loop.interval_us, spec.loop.apply == "on-arrival"
    faults = spec.simulated
    arrivals = []
    for n in range(ticks):
        if uniform(seed, DROP_STREAM, n) <= faults.drop:
            continue
        spread = 2 * uniform(seed, JITTER_STREAM, n) - 1
        delay = max(0.0, faults.delay_us + faults.jitter_us * spread)
        if not on_arrival:
            delay = max(1, math.ceil(delay / tick)) * tick
        arrivals.append((n * tick + delay, n, delay))
    arrivals.sort()
    in_force, report, mean = None, [], []
    k = 0
    for n in range(ticks):
        report.append(in_force and (in_force[1], in_force[2]))
        flowing = answers[in_force[1]] if in_force else 0.0
        charge, at = 0.0, n * tick
        while k < len(arrivals) and arrivals[k][0] < (n + 1) * tick - 1e-6:
            if in_force is None or arrivals[k][1] > in_force[1]:
                charge += flowing * (arrivals[k][0] - at)
                at, in_force = arrivals[k][0], arrivals[k]
                flowing = answers[in_force[1]]
            k += 1
        mean.append((charge + flowing * ((n + 1) * tick - at)) / tick)
    return np.array(mean), report


@pytest.mark.parametrize("apply", ["next-tick", "on-arrival"])
@pytest.mark.parametrize(
    ("delay_us", "jitter_us", "drop"),
    [(0.0, 0.0, 0.0), (20.0, 0.0, 0.0), (47.0, 0.0, 0.2), (30.0, 70.0, 0.0), (5.0, 15.0, 0.3)],
)
def test_delayed_jittered_and_lost_answers(apply, delay_us, jitter_us, drop):
    """What flows and what samples report equal a naive list of all arrivals, newer winning."""
    ticks = 400
    spec = rig_spec(
        ANYWHERE, apply=apply, delay_us=delay_us, jitter_us=jitter_us, drop=drop, seed=5
    )
    trace, there, counters = exchange(spec, lambda n, _: [(n * 37) % 101 - 50.0], ticks * 2e-5)
    answers = {n: i[0] for n, i in there.answers.items()}
    mean, report = naive_output(spec, 5, ticks, answers)
    np.testing.assert_allclose(trace.i_pa[:, 0], mean, atol=1e-9)
    found = [None if s[2] is None else (s[2], s[3]) for s in there.samples]
    for told, expected in zip(found, report, strict=True):
        assert (told is None) == (expected is None)
        if told is not None:
            assert told[0] == expected[0]
            # The wire carries whole microseconds.
            assert told[1] == pytest.approx(expected[1], abs=0.51)
    assert (counters["dropped"] > 0) == (drop > 0)
    assert counters["overtaken"] > 0 or jitter_us < 50


def test_runs_repeat_for_a_seed_and_differ_between_seeds():
    """Noise, jitter and drops, hence everything but host time, follow from the seed alone."""
    cell = SimCellSpec(noise_mv=0.2, adc_bits=16, electrode_mohm=5.0, electrode_pf=4.0)
    spec = rig_spec(ANYWHERE, cell=cell, cells=2, delay_us=15.0, jitter_us=15.0, drop=0.1)
    runs = [exchange(spec, ohmic(5.0, -50.0), 0.006, seed=seed)[0] for seed in (11, 11, 12)]
    for name in ("v_mv", "measured_mv", "i_pa", "answered_pa", "in_force", "lag_us"):
        first, second, other = (getattr(r, name) for r in runs)
        np.testing.assert_array_equal(first, second)
        assert not np.array_equal(first, other, equal_nan=True)


def test_segments_continue_one_another():
    """Three runs of one rig are one run cut in three: cell, seq, clock, noise and queue go on."""
    spec = rig_spec(ANYWHERE, cell=SimCellSpec(noise_mv=0.2), delay_us=30.0, jitter_us=30.0)
    whole, _, _ = exchange(spec, ohmic(5.0, -50.0), 0.006)
    with server(ohmic(5.0, -50.0)) as there, SimRig(spec, endpoint=there.endpoint) as rig:
        parts = Trace.joined([rig.run(0.001), rig.run(0.002), rig.run(0.003)])
    for name in ("t_ms", "v_mv", "measured_mv", "i_pa", "answered_pa", "in_force", "lag_us"):
        np.testing.assert_array_equal(getattr(whole, name), getattr(parts, name))


def test_lost_exchanges_are_repeated():
    """A sample without an answer is sent again, unchanged, and nothing else is different."""
    lost = set()

    def forget(_, sample, plain):
        if sample[0] % 40 == 7 and sample[0] not in lost:
            lost.add(sample[0])
            return []
        return [plain]

    spec = rig_spec(ANYWHERE, cell=SimCellSpec(noise_mv=0.1))
    calm, _, _ = exchange(spec, ohmic(5.0, -50.0), 0.004)
    trace, there, counters = exchange(spec, ohmic(5.0, -50.0), 0.004, forget, resend_ms=10)
    again = [s for n, s in enumerate(there.samples) if s in there.samples[:n]]
    assert sorted({s[0] for s in again}) == [7, 47, 87, 127, 167]
    assert counters["resent"] >= 5
    np.testing.assert_array_equal(trace.v_mv, calm.v_mv)
    assert trace.flagged(REPEAT) == 5


def test_rubbish_is_not_applied():
    """Messages that are no answer, old answers and currents that are not finite are passed by."""

    def litter(_, sample, plain):
        seq = sample[0]
        return [
            b"",
            b"\xc1 not msgpack",
            msgpack.packb([seq, LIVE, 0]),
            msgpack.packb([seq, LIVE, 0, math.nan]),
            msgpack.packb([seq, LIVE, 0, math.inf]),
            msgpack.packb([seq - 1, LIVE, 0, 1e5]) if seq else b"",
            msgpack.packb([seq + 5, LIVE, 0, 1e5]),
            b"\x00" * 2000,
            plain,
        ]

    calm, _, _ = exchange(rig_spec(ANYWHERE), ohmic(5.0, -50.0), 0.002)
    trace, _, counters = exchange(rig_spec(ANYWHERE), ohmic(5.0, -50.0), 0.002, litter)
    np.testing.assert_array_equal(trace.v_mv[1:], calm.v_mv[1:])
    assert counters["garbled"] >= 600


def test_silent_server_is_a_link_error():
    """A server that stops answering: the rig gives up after its resends, at 0 pA."""
    spec = rig_spec(ANYWHERE)
    with (
        server(lambda *_: [80.0], lambda _, s, plain: [plain] if s[0] < 50 else []) as there,
        SimRig(spec, endpoint=there.endpoint, resend_ms=5, resends=3) as rig,
    ):
        with pytest.raises(LinkError, match="sample 50, sent 4 times"):
            rig.run(0.01)
        assert rig.now_pa == [0.0]
        assert [s[0] for s in there.samples].count(50) == 4


def test_no_server_is_a_link_error():
    """Where nobody listens the rig says so and what to start."""
    with socket_nobody_has() as endpoint, pytest.raises(LinkError, match="gatestep serve"):
        SimRig(rig_spec(endpoint), connect_s=0.2)


def test_encrypted_server_is_reached_with_keys_only(tmp_path):
    """With CURVE keys in the rig file the rig needs its own certificate, and then works."""
    secret = [create_certificates(tmp_path, name)[1] for name in ("server", "rig")]
    plain = rig_spec(ANYWHERE)
    spec = plain.model_copy(
        update={"network": NetworkSpec(curve_secret="server.key_secret", curve_clients=".")}
    )
    with server(lambda *_: [9.0], curve_keys=load_certificate(secret[0])) as there:
        where = {"folder": tmp_path, "endpoint": there.endpoint}
        with SimRig(spec, curve_secret=tmp_path / "rig.key_secret", **where) as rig:
            assert rig.run(0.001).flagged(LIVE) == 50
        with pytest.raises(LinkError, match="certificate"):
            SimRig(spec, **where)
        with pytest.raises(LinkError, match="no secret key"):
            SimRig(spec, curve_secret=tmp_path / "rig.key", **where)
        with pytest.raises(LinkError, match=r"within 0\.3 s"):
            SimRig(plain, connect_s=0.3, **where)


def test_malformed_is_a_link_error():
    """A server that calls the samples malformed has another rig file: said in so many words."""
    refuse = lambda *_: [msgpack.packb([None, MALFORMED, 0])]  # noqa: E731  one expression
    with pytest.raises(LinkError, match="rig file"):
        exchange(rig_spec(ANYWHERE), ohmic(5.0, -50.0), 0.001, refuse)


def test_output_goes_to_zero_by_itself():
    """When no answer reaches the output for the rig's time-out it goes to 0 pA, in_force nil."""
    spec = rig_spec(ANYWHERE, drop=0.98)
    trace, there, counters = exchange(spec, lambda *_: [80.0], 0.02, timeout_ms=0.3)
    assert counters["silences"] > 0
    reached = np.flatnonzero(np.diff(trace.in_force, prepend=-1) > 0)
    for n in range(trace.ticks):
        since = n - reached[reached <= n][-1] if np.any(reached <= n) else 10**6
        # 0.3 ms are 15 ticks; a sample shows what flowed in the tick before it.
        expected = n - since - 2 if since <= 15 else -1
        assert trace.in_force[n] == (expected if expected >= 0 else -1)
        assert (there.samples[n][2] is None) == (expected < 0)


def test_stimulus_from_the_rig_file_and_from_the_caller():
    """Steps add up over [start, stop); an array replaces them and must have one row a tick."""
    steps = (
        StepSpec(start_ms=0.2, stop_ms=0.6, current_pa=10),
        StepSpec(start_ms=0.4, stop_ms=0.8, current_pa=-3),
    )
    spec = rig_spec(ANYWHERE, cell=SimCellSpec(step=steps))
    with server(lambda *_: [1.0]) as there, SimRig(spec, endpoint=there.endpoint) as rig:
        trace = rig.run(0.001)
        expected = 10.0 * ((trace.t_ms >= 0.2) & (trace.t_ms < 0.6))
        expected -= 3.0 * ((trace.t_ms >= 0.4) & (trace.t_ms < 0.8))
        np.testing.assert_array_equal(trace.stimulus_pa[:, 0], expected)
        np.testing.assert_array_equal(trace.i_pa[1:, 0], expected[1:] + 1.0)
        wave = np.sin(np.arange(50.0))
        trace = rig.run(0.001, wave)
        np.testing.assert_array_equal(trace.i_pa[:, 0], wave + 1.0)
        with pytest.raises(ValueError, match="50 finite rows"):
            rig.run(0.001, wave[:-1])


def test_electrode_and_converters_are_in_the_way():
    """The cell gets the DAC's current; the rig reads electrode, bridge and ADC's code."""
    cell = SimCellSpec(
        electrode_mohm=50.0,
        bridge_mohm=20.0,
        dac_bits=8,
        dac_range_pa=(-256.0, 256.0),
        adc_bits=12,
        adc_range_mv=(-200.0, 209.6),
    )
    trace, there, _ = exchange(rig_spec(ANYWHERE, cell=cell), lambda *_: [101.3], 0.002)
    np.testing.assert_array_equal(trace.i_pa[1:, 0], 102.0)
    drop_mv = 102.0 * (50.0 - 20.0) / 1000.0
    seen = np.array([s[4] for s in there.samples])
    np.testing.assert_array_equal(seen, trace.measured_mv[:, 0])
    np.testing.assert_allclose(seen[2:], trace.v_mv[2:, 0] + drop_mv, atol=0.05 + 1e-9)
    np.testing.assert_allclose(seen * 10, np.round(seen * 10), atol=1e-9)


def test_native_models_come_from_files(tmp_path):
    """A native leak in a model file beside the rig file acts as a leak of the cell."""
    (tmp_path / "leak.toml").write_text(
        'title = "leak"\nsource = "own"\ntemperature_c = 20\n'
        '[[conductance]]\nname = "L"\ngmax_ns = 7\nreversal_mv = -65\n'
    )
    step = (StepSpec(start_ms=0, stop_ms=1e6, current_pa=50),)
    cell = SimCellSpec(native=("./leak.toml",), step=step)
    trace, _, _ = exchange(rig_spec(ANYWHERE, cell=cell), lambda *_: [0.0], 0.05, folder=tmp_path)
    expected = -65.0 + 5.0 * -np.expm1(-trace.t_ms / 3.0)
    np.testing.assert_allclose(trace.v_mv[:, 0], expected, atol=1e-9)


def test_bad_overrides_and_models_are_file_errors(tmp_path):
    """A wrong override or native model is refused with its name, before any connection."""
    with pytest.raises(FileError, match="drop"):
        SimRig(rig_spec(ANYWHERE), drop=1.5)
    with pytest.raises(FileError, match=r"missing\.toml"):
        SimRig(rig_spec(ANYWHERE, cell=SimCellSpec(native=("./missing.toml",))), tmp_path)


def test_rig_without_simulated_part_gets_cells():
    """A rig file without simulated cells gets one each, of the capacitance it states."""
    plain = RigSpec(
        loop=LoopSpec(interval_us=TICK_US),
        cell=(CellSpec(name="a", model="x", capacitance_pf=55), CellSpec(name="b", model="x")),
    )
    made = simrig.with_changes(plain, {"seed": 4})
    assert [c.capacitance_pf for c in made.cell] == [55.0, 30.0]
    assert made.seed == 4


def test_interruption_leaves_zero_current():
    """An exception between chunks (Ctrl-C) ends the run with the output at 0 pA."""
    reached = []

    def interrupt(done, _):
        if done >= 2 * simrig.CHUNK:
            reached.append(done)
            raise KeyboardInterrupt

    with (
        server(lambda *_: [80.0]) as there,
        SimRig(rig_spec(there.endpoint), endpoint=there.endpoint) as rig,
    ):
        with pytest.raises(KeyboardInterrupt):
            rig.run(1.0, progress=interrupt)
        assert rig.now_pa == [0.0]
        # A resent sample shifts the chunks, so where it stopped is what progress was told.
        assert rig.counters["answered"] == reached[0] < 50_000
        assert rig.run(0.001).ticks == 50


@pytest.mark.parametrize("apply", ["next-tick", "on-arrival"])
def test_real_pace_is_truthful(apply):
    """On the real clock: what samples say is in force is what the trace says flowed."""
    spec = rig_spec(ANYWHERE, apply=apply, interval_us=1000.0, pace="real")
    with server(lambda n, _: [float(n + 1)]) as there, SimRig(spec, endpoint=there.endpoint) as rig:
        started = time.monotonic()
        trace = rig.run(0.3)
        took = time.monotonic() - started
    # A lower bound on the time, and no upper one: it must not run ahead of the clock.
    assert took >= 0.3
    seqs = [s[0] for s in there.samples]
    assert seqs == sorted(set(seqs))
    assert trace.gaps == 300 - len(seqs)
    assert trace.gaps == rig.counters["skipped"]
    for seq, t_us, in_force, lag_us, v in there.samples:
        assert t_us == 1000 * seq
        assert v == trace.measured_mv[seq, 0]
        assert (in_force is None) == (trace.in_force[seq] == -1)
        if in_force is not None:
            assert in_force in there.answers
            assert in_force <= seq - (2 if apply == "next-tick" else 1)
            assert lag_us >= (1000 if apply == "next-tick" else 0)
    if apply == "next-tick":
        # The mean over the tick before each sample is the current of the answer in force.
        for seq in range(1, 300):
            if trace.in_force[seq] >= 0:
                assert trace.i_pa[seq - 1, 0] == trace.in_force[seq] + 1.0
    assert np.isfinite(trace.v_mv).all()
    answered = trace.round_trip_nsec[trace.round_trip_nsec >= 0]
    assert answered.size >= 0.5 * len(seqs)
    assert np.all(answered > 0)


def test_real_pace_goes_to_zero_when_the_server_falls_silent():
    """Real pace: an answer that nothing follows flows for the time-out and then 0 pA does."""
    spec = rig_spec(ANYWHERE, interval_us=1000.0, pace="real")
    trace, _, counters = exchange(
        spec, lambda *_: [50.0], 0.15, lambda _, s, plain: [plain] if s[0] < 30 else [],
        timeout_ms=20.0,
    )  # fmt: skip
    assert counters["silences"] >= 1
    assert trace.i_pa[-1, 0] == 0.0
    assert trace.in_force[-1] == -1
    assert np.any(trace.i_pa[:, 0] == 50.0)


def test_real_pace_without_any_answer_is_a_link_error():
    """Real pace: when no sample at all is answered the run ends with the reason."""
    spec = rig_spec(ANYWHERE, interval_us=1000.0, pace="real")
    with pytest.raises(LinkError, match="none of 50 samples"):
        exchange(spec, lambda *_: [50.0], 0.05, lambda *_: [])
