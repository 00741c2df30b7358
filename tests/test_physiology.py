"""The main job: cells given conductances through the real server behave as the laws say."""

from __future__ import annotations

import numpy as np
import pytest

from gatestep.simrig import SimRig

CAPACITANCE_PF = 30.0
PA_PER_UA_CM2 = 30.0  # 1 uF/cm2 on 30 pF is 3e-5 cm2: 1 uA/cm2 is 30 pA


def _squid_spikes(serving, current_ua_cm2: float, seconds: float) -> np.ndarray:
    """Spike times (ms) of capacitance and squid leak given Na and K through the loop."""
    server = serving(
        loop={"interval_us": 10.0},
        cell=[
            {
                "name": "axon",
                "model": "squid-na-k",
                "capacitance_pf": CAPACITANCE_PF,
                "limits": {"current_pa": 200_000.0},
            }
        ],
        simulated={
            "cell": [
                {
                    "capacitance_pf": CAPACITANCE_PF,
                    "leak_ns": 0.3 * CAPACITANCE_PF,
                    "leak_mv": -54.387,
                    "start_mv": -65.0,
                }
            ]
        },
    )
    server.control.arm()
    with SimRig(server.rig.spec) as rig:
        ticks = round(seconds * 1e6 / rig.interval_us)
        trace = rig.run(seconds, np.full(ticks, current_ua_cm2 * PA_PER_UA_CM2))
    assert server.control.status()["state"] == "armed"
    return np.asarray(trace.spikes(0))


@pytest.mark.parametrize(
    ("current_ua_cm2", "rate_hz"),
    [(7.0, 58.33), (10.0, 68.32), (15.0, 78.65), (20.0, 86.47), (40.0, 108.61)],
)
def test_squid_axon_fires_at_its_steady_rate(serving, current_ua_cm2, rate_hz):
    """Rates within 1 % of the equations of Hodgkin and Huxley 1952.

    The rates were computed with scipy at rtol 1e-10 from the published equations,
    mean after 200 ms.
    """
    spikes = _squid_spikes(serving, current_ua_cm2, 0.7)
    steady = spikes[spikes > 200.0]
    measured = 1000.0 / np.mean(np.diff(steady))
    assert measured == pytest.approx(rate_hz, rel=0.01)
