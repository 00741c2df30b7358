"""Gates as their formulas give them: steady state and rate, checked where evaluated."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .arithmetic import Floats
from .errors import TableError
from .formula import Curve, make_curve
from .specs import ConductanceSpec, GateSpec, ModelSpec

_ROUNDING = 1e-12


@dataclass(frozen=True)
class GateCurves:
    """A gate's steady state and time constant as its formulas give them.

    ``v_mv`` in mV, ``inf`` in [0, 1], ``tau_ms`` in ms, 0 for an instantaneous gate.
    """

    name: str
    instances: int
    v_mv: Floats
    inf: Floats
    tau_ms: Floats


@dataclass(frozen=True)
class Kinetics:
    """One gate's formulas, checked as they are evaluated."""

    name: str
    instances: int
    instantaneous: bool
    factor: float  # of temperature, on the rates
    by_rates: bool  # alpha and beta, not inf and tau
    first: Curve
    second: Curve

    @property
    def branching(self) -> bool:
        """Whether either formula is piecewise."""
        return self.first.branching or (not self.instantaneous and self.second.branching)

    def branches(self, v_mv: ArrayLike) -> NDArray[np.uint64]:
        """Signature of the pieces in use at each voltage."""
        if self.instantaneous:
            return self.first.branches(v_mv)
        return self.first.branches(v_mv) * np.uint64(1000003) + self.second.branches(v_mv)

    def at(self, v_mv: ArrayLike) -> tuple[Floats, Floats]:
        """Steady state in [0, 1] and rate per ms (0 if instantaneous) at voltages in mV.

        Raises
        ------
        TableError
            If a formula gives values that no gate can have, naming gate and voltage.
        """
        v = np.asarray(v_mv, dtype=np.float64)
        if self.by_rates:
            return self._from_rates(v)
        inf = self.first(v)
        self._check("inf", inf, v, 0.0, 1.0)
        inf = np.clip(inf, 0.0, 1.0)
        if self.instantaneous:
            return inf, np.zeros_like(v)
        tau = self.second(v)
        self._check("tau", tau, v, 0.0, math.inf)
        self._refuse(
            "tau", tau, v, tau <= 0, "must be above 0 ms; an instantaneous gate has tau = 0"
        )
        with np.errstate(over="ignore"):
            rate = self.factor / tau
        self._check("1/tau", rate, v, 0.0, math.inf)
        return inf, rate

    def _from_rates(self, v: Floats) -> tuple[Floats, Floats]:
        alpha, beta = self.first(v), self.second(v)
        self._check("alpha", alpha, v, 0.0, math.inf)
        self._check("beta", beta, v, 0.0, math.inf)
        alpha, beta = np.maximum(alpha, 0.0), np.maximum(beta, 0.0)
        with np.errstate(over="ignore"):
            total = alpha + beta
            rate = self.factor * total
        self._check("alpha + beta", rate, v, 0.0, math.inf)
        why = "alpha and beta are both 0 there, which leaves no steady state"
        self._refuse("alpha + beta", total, v, total <= 0, why)
        return np.minimum(alpha / total, 1.0), rate

    def _check(self, what: str, values: Floats, v: Floats, low: float, high: float) -> None:
        why = "must be finite; look for a pole, an overflow, or the root or log of a negative"
        self._refuse(what, values, v, ~np.isfinite(values), why)
        outside = (values < low - _ROUNDING) | (values > high + _ROUNDING)
        why = "must be from 0 to 1" if high == 1 else "must not be negative"
        self._refuse(what, values, v, outside, f"{why}; max and min can confine a formula")

    def _refuse(
        self, what: str, values: Floats, v: Floats, bad: NDArray[np.bool_], why: str
    ) -> None:
        if bad.any():
            at = np.flatnonzero(bad.ravel())[0]
            raise TableError(
                f"gate {self.name}: {what} is {values.ravel()[at]:.6g} at "
                f"V = {v.ravel()[at]:.6g} mV; {why}"
            )


def kinetics_of(model: ModelSpec) -> list[Kinetics]:
    """Formulas of every gate of a model, in file order.

    Raises
    ------
    FormulaError
        If a formula is not plain arithmetic.
    """
    pairs = ((c, g) for c in model.conductance for g in c.gate)
    return [_kinetics(model, c, g) for c, g in pairs]


def _kinetics(model: ModelSpec, conductance: ConductanceSpec, gate: GateSpec) -> Kinetics:
    name = f"{conductance.name}.{gate.name}"
    by_rates = gate.alpha is not None
    keys = ("alpha", "beta") if by_rates else ("inf", "tau")
    first, second = (
        make_curve(getattr(gate, key), model.parameters, f"{name} {key}") for key in keys
    )
    factor = conductance.rate_factor(gate, model.temperature_c)
    return Kinetics(name, gate.instances, gate.instantaneous, factor, by_rates, first, second)


def curves_of(model: ModelSpec, v_mv: ArrayLike) -> list[GateCurves]:
    """Steady states and time constants of a model's gates, straight from the formulas.

    Parameters
    ----------
    model : ModelSpec
    v_mv : array
        Voltages in mV.

    Raises
    ------
    FormulaError, TableError
        If a formula cannot be read, or gives values that no gate can have.
    """
    v = np.asarray(v_mv, dtype=np.float64)
    curves = []
    for gate in kinetics_of(model):
        inf, rate = gate.at(v)
        tau = np.zeros_like(v) if gate.instantaneous else 1.0 / rate
        curves.append(GateCurves(gate.name, gate.instances, v, inf, tau))
    return curves
