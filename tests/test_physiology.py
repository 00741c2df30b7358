"""The main job: cells given conductances through the real server behave as the laws say."""

from __future__ import annotations

import numpy as np
import pytest

from gatestep.simrig import SimRig

CAPACITANCE_PF = 30.0
PA_PER_UA_CM2 = 30.0  # 1 uF/cm2 on 30 pF is 3e-5 cm2: 1 uA/cm2 is 30 pA


def _run(serving, model, cell, current_pa, seconds, interval_us, **loop):
    """Run a cell under a steady current with a model given through the armed loop."""
    server = serving(
        loop={"interval_us": interval_us, **loop},
        cell=[
            {
                "name": "cell",
                "model": model,
                "capacitance_pf": cell["capacitance_pf"],
                "limits": {"current_pa": 200_000.0},
            }
        ],
        simulated={"cell": [cell]},
    )
    server.control.arm()
    with SimRig(server.rig.spec) as rig:
        ticks = round(seconds * 1e6 / interval_us)
        trace = rig.run(seconds, np.full(ticks, current_pa))
        assert server.control.status()["state"] == "armed"
    return trace


def _squid_spikes(serving, current_ua_cm2, seconds, anticipate):
    """Spike times (ms) of capacitance and squid leak given Na and K through the loop."""
    cell = {
        "capacitance_pf": CAPACITANCE_PF,
        "leak_ns": 0.3 * CAPACITANCE_PF,
        "leak_mv": -54.387,
        "start_mv": -65.0,
    }
    current_pa = current_ua_cm2 * PA_PER_UA_CM2
    trace = _run(serving, "squid-na-k", cell, current_pa, seconds, 10.0, anticipate=anticipate)
    return np.asarray(trace.spikes(0))


@pytest.mark.parametrize(
    ("current_ua_cm2", "rate_hz"),
    [(7.0, 58.33), (10.0, 68.32), (15.0, 78.65), (20.0, 86.47), (40.0, 108.61)],
)
def test_squid_axon_fires_at_its_steady_rate(serving, current_ua_cm2, rate_hz):
    """Rates in the plain loop within 1 % of the equations of Hodgkin and Huxley 1952.

    The rates were computed with scipy at rtol 1e-10 from the published equations,
    mean after 200 ms.
    """
    spikes = _squid_spikes(serving, current_ua_cm2, 0.5, anticipate=False)
    steady = spikes[spikes > 200.0]
    measured = 1000.0 / np.mean(np.diff(steady))
    assert measured == pytest.approx(rate_hz, rel=0.01)


def test_squid_axon_is_blocked_by_a_large_current(serving):
    """At 80 uA/cm2 there is one spike and no more, as the same equations have it."""
    assert len(_squid_spikes(serving, 80.0, 0.3, anticipate=False)) == 1


def test_anticipation_takes_the_delay_out(serving):
    """Anticipated, the rate at 10 uA/cm2 is within 0.05 % of the equations' own."""
    spikes = _squid_spikes(serving, 10.0, 0.5, anticipate="auto")
    measured = 1000.0 / np.mean(np.diff(spikes[spikes > 200.0]))
    assert measured == pytest.approx(68.32, rel=0.0005)


def _leak_model(folder, gmax_ns):
    """A model file with one ungated conductance that reverses at -65 mV."""
    path = folder / "leak.toml"
    path.write_text(
        'title = "leak"\nsource = "made for this test"\ntemperature_c = 20\n'
        f'[[conductance]]\nname = "leak"\ngmax_ns = {gmax_ns}\nreversal_mv = -65.0\n'
    )
    return str(path)


def _charging(trace, step_pa):
    """Input resistance (GOhm) and time constant (ms) of a passive cell's charging curve."""
    change = trace.v_mv[:, 0] - trace.v_mv[0, 0]
    end = change[-1]
    early = change < 0.9 * end
    slope, _ = np.polyfit(trace.t_ms[early], np.log(1.0 - change[early] / end), 1)
    return end / step_pa, -1.0 / slope


@pytest.mark.parametrize(("anticipate", "added_ns"), [(False, 3.0), ("auto", 3.0), ("auto", 30.0)])
def test_an_added_leak_adds_to_the_cell_own(serving, tmp_path, anticipate, added_ns):
    """R becomes 1 / (1/R + g) and tau C / (1/R + g), each within 0.5 % (circuit law).

    A plain loop's current is stale by a tick and a half, which shortens tau by
    1.5 dt g / C; there g is small enough.
    """
    own_ns, step_pa = 3.0, 50.0
    cell = {"capacitance_pf": CAPACITANCE_PF, "leak_ns": own_ns, "leak_mv": -65.0}
    model = _leak_model(tmp_path, added_ns)
    trace = _run(serving, model, cell, step_pa, 0.06, 20.0, anticipate=anticipate)
    resistance, tau_ms = _charging(trace, step_pa)
    assert resistance == pytest.approx(1.0 / (own_ns + added_ns), rel=0.005)
    assert tau_ms == pytest.approx(CAPACITANCE_PF / (own_ns + added_ns), rel=0.005)


@pytest.mark.parametrize("anticipate", [False, "auto"])
def test_subtracting_half_the_leak_doubles_the_resistance(serving, tmp_path, anticipate):
    """A virtual conductance of -g/2 doubles the input resistance, within 1 % (circuit law)."""
    own_ns, step_pa = 6.0, 30.0
    cell = {"capacitance_pf": CAPACITANCE_PF, "leak_ns": own_ns, "leak_mv": -65.0}
    model = _leak_model(tmp_path, -own_ns / 2.0)
    trace = _run(serving, model, cell, step_pa, 0.12, 20.0, anticipate=anticipate)
    resistance, _ = _charging(trace, step_pa)
    assert resistance == pytest.approx(2.0 / own_ns, rel=0.01)
