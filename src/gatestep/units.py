"""Units, constants and the few conversions that are not one.

The project computes in one coherent set, mV, ms, nS, pA, pF, MΩ, °C, in which
nS * mV = pA and pA / pF = mV / ms, so kernels carry no factors. Time on the wire
is in µs. A name that crosses a module ends in its unit: ``v_mv``, ``i_pa``,
``gmax_ns`` (nanosiemens), ``interval_us``, ``service_nsec`` (nanoseconds).
"""

from __future__ import annotations

import math

US_PER_MS = 1000.0
MV_PER_MOHM_PA = 1e-3
"""MΩ * pA = µV; electrode terms are scaled by this, in one place."""

GAS_J_PER_MOL_K = 8.314462618
"""Molar gas constant, CODATA 2018 (exact)."""
FARADAY_C_PER_MOL = 96485.33212
"""Faraday constant, CODATA 2018 (exact)."""
ZERO_CELSIUS_K = 273.15


def thermal_mv(temperature_c: float) -> float:
    """RT/F in mV at a temperature in °C."""
    return 1000.0 * GAS_J_PER_MOL_K * (temperature_c + ZERO_CELSIUS_K) / FARADAY_C_PER_MOL


def nernst_mv(
    inside_mmolar: float, outside_mmolar: float, valence: int, temperature_c: float
) -> float:
    """Equilibrium potential of an ion in mV (Nernst equation).

    Parameters
    ----------
    inside_mmolar, outside_mmolar : float
        Concentrations in mM, both above 0.
    valence : int
        Charge number with its sign, not 0.
    temperature_c : float
        Temperature in °C.
    """
    return thermal_mv(temperature_c) / valence * math.log(outside_mmolar / inside_mmolar)


def q10_factor(q10: float, temperature_c: float, reference_c: float) -> float:
    """Factor by which rates grow from ``reference_c`` to ``temperature_c`` (Q10 law)."""
    return float(q10 ** ((temperature_c - reference_c) / 10.0))
