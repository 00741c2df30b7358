"""Anticipation: the answer for the time when it flows, not for the time it was asked.

A plain loop holds, over ``[t + d, t + d + dt]``, a current computed from the voltage at
``t``: stale by the delay ``d`` and by half a tick. Here a shadow of the cell is carried
to that interval and across it, and the answer is the model's mean current there:

1. From the last two measured voltages and the mean of the currents that flowed between
   them, the rest of the cell's current follows: ``I_rest = C dV/dt - I_flowed``, less a
   known leak. It is smoothed by ``alpha`` and extrapolated by ``beta`` ticks. The
   estimate stands for the middle of the last tick, so ``beta = d / dt + 1`` reaches the
   middle of the hold.
2. Voltage and gates are carried from ``t`` to ``t + d`` under ``I_rest`` and the currents
   in force until then.
3. They are carried across the hold in ``substeps`` with the virtual conductances live:
   exponential in V, gates staggered by half a sub-step, which is second order.
4. The mean model current over the hold is the answer. Only measured voltages ever enter
   the committed gates; the shadow is thrown away.

Sources: a predictor in the loop, Smith 1957 (Chem. Eng. Prog. 53:217-219); exponential
integrators, Hochbruck and Ostermann 2010 (Acta Numerica 19:209-286). The estimate of
``I_rest`` and the mean over the hold are our own. Derivation: with g and I_rest held over
a sub-step h, ``C V' = I_rest + gE - gV`` gives, with ``f`` the slope at its start and
``z = -g h / C``, the end ``V + h phi1(z) f`` and the mean ``V + h phi2(z) f``, where
``phi1(z) = (exp(z) - 1) / z`` and ``phi2(z) = (phi1(z) - 1) / z``. The mean current is
``gE - g * mean(V)``: exactly 0 where there is no conductance.
"""

from __future__ import annotations

from math import exp, isfinite
from typing import Any

import numpy as np

from .compiling import compiled, inner
from .kernel import STATES, advance, follow, power

SHADOW = np.dtype(
    [
        ("on", "i8"),
        ("substeps", "i8"),  # across the hold, from 1
        ("alpha", "f8"),  # share of a new estimate of I_rest in the smoothed one
        ("beta", "f8"),  # extrapolation of I_rest, in ticks
        ("capacitance_pf", "f8"),
        ("leak_ns", "f8"),  # a conductance the cell is known to have, and its reversal
        ("leak_mv", "f8"),
        ("estimates", "i8"),  # of I_rest so far, in a row
        ("rest_pa", "f8"),  # smoothed
        ("rest_before_pa", "f8"),  # the same, a tick earlier
        ("x", "f8", (STATES,)),
    ],
    align=True,
)
"""One cell's shadow: how it is carried, what is known of the cell, and room for gates."""

FARTHEST_MV = 200.0
"""The shadow's voltage is held within this, the range of the tables."""
MOST_SEGMENTS = 8
"""Answers under way at once that the carry takes account of."""


@inner
def _phis(z: float) -> Any:
    """[hot] ``(phi1, phi2)`` of z; below 0.03 in magnitude by series, to rounding."""
    if abs(z) < 0.03:
        phi2 = 0.5 + z * (1 / 6 + z * (1 / 24 + z * (1 / 120 + z * (1 / 720 + z / 5040))))
        return 1.0 + z * phi2, phi2
    z = min(z, 50.0)
    phi1 = (exp(z) - 1.0) / z
    return phi1, (phi1 - 1.0) / z


@inner
def _on_grid(v_mv: float) -> float:
    """[hot] A voltage held within the range of the tables; NaN becomes its lower end."""
    return min(max(v_mv, -FARTHEST_MV), FARTHEST_MV) if isfinite(v_mv) else -FARTHEST_MV


@inner
def _open(bank: Any, x: Any) -> Any:
    """[hot] Total conductance in nS, and conductance times reversal in pA."""
    total, driven = 0.0, 0.0
    gate = np.uint64(0)
    for c in range(np.uint64(bank.conductances)):
        g = bank.gmax_ns[c]
        for _ in range(bank.gates[c]):
            g *= power(x[np.uint64(bank.state[gate])], bank.power[gate])
            gate += np.uint64(1)
        total += g
        driven += g * bank.reversal_mv[c]
    return total, driven


@compiled
def forget(shadow: Any) -> None:
    """[hot] Start the estimate of I_rest afresh."""
    shadow.estimates = 0


@compiled
def estimate(shadow: Any, v_old_mv: float, v_mv: float, flowed_pa: float, dt_ms: float) -> None:
    """[hot] Take a tick's two voltages and mean injected current into I_rest."""
    leak_pa = shadow.leak_ns * (shadow.leak_mv - 0.5 * (v_old_mv + v_mv))
    raw_pa = shadow.capacitance_pf * (v_mv - v_old_mv) / dt_ms - flowed_pa - leak_pa
    if not isfinite(raw_pa):
        shadow.estimates = 0
        return
    if shadow.estimates == 0:
        shadow.rest_pa = raw_pa
    shadow.rest_before_pa = shadow.rest_pa
    shadow.rest_pa += shadow.alpha * (raw_pa - shadow.rest_pa)
    shadow.estimates += 1


@inner
def _rest(shadow: Any) -> float:
    """[hot] I_rest as expected over the hold, in pA."""
    return shadow.rest_pa + shadow.beta * (shadow.rest_pa - shadow.rest_before_pa)


@inner
def _drift(shadow: Any, v_mv: float, i_pa: float, span_ms: float) -> float:
    """[hot] Voltage after a span in which a current is held and no conductance is virtual."""
    c = shadow.capacitance_pf
    phi1, _ = _phis(-shadow.leak_ns * span_ms / c)
    slope = (i_pa + shadow.leak_ns * (shadow.leak_mv - v_mv)) / c
    return _on_grid(v_mv + span_ms * phi1 * slope)


@inner
def _to_hold(
    shadow: Any, v_mv: float, rest_pa: float, coming_pa: Any, delay_ms: float, dt_ms: float
) -> float:
    """[hot] Voltage at the start of the hold, under the currents in force until then."""
    count: Any = min(np.int64(np.ceil(delay_ms / dt_ms - 1e-9)), MOST_SEGMENTS)
    at_ms = 0.0
    for j in range(count, 0, -1):
        end_ms = delay_ms - (j - 1) * dt_ms
        v_mv = _drift(shadow, v_mv, rest_pa + coming_pa[np.uint64(j - 1)], end_ms - at_ms)
        at_ms = end_ms
    return v_mv


@inner
def _across(shadow: Any, bank: Any, table: Any, v_mv: float, rest_pa: float, h_ms: float) -> Any:
    """[hot] ``(end voltage, mean current)`` of one sub-step with the gates at its middle."""
    c, x = shadow.capacitance_pf, shadow.x
    g, driven = _open(bank, x)
    own = rest_pa + shadow.leak_ns * shadow.leak_mv
    if bank.instant:
        # Their value at the middle needs the voltage there: predict, then correct.
        phi1, _ = _phis(-0.5 * h_ms * (g + shadow.leak_ns) / c)
        slope = (driven + own - (g + shadow.leak_ns) * v_mv) / c
        follow(bank, table, x, _on_grid(v_mv + 0.5 * h_ms * phi1 * slope))
        g, driven = _open(bank, x)
    total = g + shadow.leak_ns
    phi1, phi2 = _phis(-h_ms * total / c)
    slope = (driven + own - total * v_mv) / c
    mean_mv = v_mv + h_ms * phi2 * slope
    return _on_grid(v_mv + h_ms * phi1 * slope), driven - g * mean_mv


@compiled
def anticipated(
    shadow: Any,
    bank: Any,
    table: Any,
    x: Any,
    v_mv: float,
    coming_pa: Any,
    delay_ms: float,
    dt_ms: float,
) -> float:
    """[hot] The model's mean current over the hold that begins ``delay_ms`` from now, pA.

    Parameters
    ----------
    shadow : SHADOW record
        With at least one estimate of I_rest.
    bank, table, x
        The cell's model and its committed gates, which stay as they are.
    v_mv : float
        The voltage just measured.
    coming_pa : array of float64
        Currents in force until the hold: ``coming_pa[0]`` is the answer before this one,
        in force over the last ``dt_ms`` before it, ``coming_pa[1]`` the one before that.
    delay_ms, dt_ms : float
        From the sample to the hold, and the length of the hold.
    """
    for k in range(np.uint64(bank.dynamic + bank.instant)):
        shadow.x[k] = x[k]
    rest_pa = _rest(shadow)
    h_ms = dt_ms / shadow.substeps
    start_mv = _to_hold(shadow, v_mv, rest_pa, coming_pa, delay_ms, dt_ms)
    span_ms = delay_ms + 0.5 * h_ms
    slope = (start_mv - v_mv) / delay_ms if delay_ms > 0.0 else 0.0
    advance(bank, table, shadow.x, _on_grid(v_mv + 0.5 * span_ms * slope), span_ms)
    follow(bank, table, shadow.x, start_mv)
    at_mv, total_pa = start_mv, 0.0
    for k in range(shadow.substeps):
        if k:
            advance(bank, table, shadow.x, at_mv, h_ms)
            follow(bank, table, shadow.x, at_mv)
        at_mv, mean_pa = _across(shadow, bank, table, at_mv, rest_pa, h_ms)
        total_pa += mean_pa
    return total_pa / shadow.substeps
