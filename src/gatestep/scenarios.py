"""What the loop's fidelity is measured on: a cell, a model and what is done to them.

Each scenario asks something else of a loop: that spikes come when they should, at two
speeds of kinetics; that a conductance switched on over a cell firing by itself, or at
rest, does what it would do in the membrane; and that taking a leak away leaves the rest.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import cache

from .errors import GatestepError
from .library import load_model
from .specs import ModelSpec, SimCellSpec, StepSpec
from .tables import Tables, build_tables


@dataclass(frozen=True)
class Scenario:
    """A cell in a loop, or, to the reference solution, a cell with all in its membrane.

    Attributes
    ----------
    name, title : str
        A word to choose it by, and what it is.
    model : ModelSpec
        What the server injects.
    cell : SimCellSpec
        Capacitance, leak, starting voltage and steps of stimulus.
    native : tuple of ModelSpec
        The cell's own conductances.
    duration_ms : float
    act_ms : float
        The model's current flows from here on. What a loop is held to begins here too.
    """

    name: str
    title: str
    model: ModelSpec
    cell: SimCellSpec
    duration_ms: float
    native: tuple[ModelSpec, ...] = ()
    act_ms: float = 0.0

    @property
    def key(self) -> str:
        """Everything that a solution depends on, as text."""
        parts = [m.model_dump_json() for m in (self.model, *self.native)]
        return "\n".join([*parts, self.cell.model_dump_json(), f"{self.duration_ms} {self.act_ms}"])

    @property
    def tables(self) -> Tables:
        """The model's tables."""
        return _tables(self.model.model_dump_json())

    @property
    def native_tables(self) -> tuple[Tables, ...]:
        """Tables of the cell's own conductances."""
        return tuple(_tables(model.model_dump_json()) for model in self.native)

    def stimulus_pa(self, t_ms: float) -> float:
        """The stimulus at a time, pA."""
        steps = self.cell.step
        return sum((s.current_pa for s in steps if s.start_ms <= t_ms < s.stop_ms), 0.0)

    @property
    def edges_ms(self) -> list[float]:
        """Times from 0 to the end at which something is switched, in order."""
        ends = {0.0, self.act_ms, self.duration_ms}
        ends |= {t for s in self.cell.step for t in (s.start_ms, s.stop_ms)}
        return sorted(t for t in ends if 0.0 <= t <= self.duration_ms)


@cache
def _tables(model_json: str) -> Tables:
    """Tables of a model, built once whoever asks."""
    return build_tables(ModelSpec.model_validate_json(model_json))


def leak_model(title: str, gmax_ns: float, reversal_mv: float) -> ModelSpec:
    """A model that is one leak; a negative conductance takes one away."""
    conductance = {"name": "leak", "gmax_ns": gmax_ns, "reversal_mv": reversal_mv}
    return ModelSpec.model_validate(
        {"title": title, "source": "Ohm's law", "temperature_c": 22.0, "conductance": [conductance]}
    )


def _always(current_pa: float) -> tuple[StepSpec, ...]:
    return (StepSpec(start_ms=0.0, stop_ms=1e6, current_pa=current_pa),)


def _squid() -> Scenario:
    return Scenario(
        "squid",
        "squid axon Na and K on a 30 pF cell with a leak of its own, 300 pA",
        load_model("squid-na-k").spec,
        SimCellSpec(
            capacitance_pf=30.0,
            leak_ns=9.0,
            leak_mv=-54.387,
            start_mv=-65.0,
            step=_always(300.0),
        ),
        200.0,
    )


def _fast_spiking() -> Scenario:
    return Scenario(
        "fast-spiking",
        "fast-spiking cortical Na, K, M and leak at 36 °C on a 102 pF capacitance, 500 pA",
        load_model("fast-spiking-cortical").spec,
        SimCellSpec(
            capacitance_pf=101.7, leak_ns=0.0, leak_mv=-70.4, start_mv=-70.4, step=_always(500.0)
        ),
        196.0,
    )


def _shunt_firing() -> Scenario:
    return Scenario(
        "shunt-firing",
        "a leak of 4 nS to -80 mV switched on at 50 ms over a cell that fires by itself",
        leak_model("inhibitory shunt", 4.0, -80.0),
        SimCellSpec(
            capacitance_pf=30.0, leak_ns=0.0, leak_mv=-65.0, start_mv=-65.0, step=_always(400.0)
        ),
        157.0,
        (load_model("squid-axon").spec,),
        50.0,
    )


def _shunt_resting() -> Scenario:
    return Scenario(
        "shunt-resting",
        "a leak of 200 nS to -80 mV switched on at 5 ms over a passive cell at -60 mV",
        leak_model("inhibitory shunt", 200.0, -80.0),
        SimCellSpec(capacitance_pf=30.0, leak_ns=3.0, leak_mv=-60.0),
        20.0,
        (),
        5.0,
    )


def _less_leak() -> Scenario:
    return Scenario(
        "less-leak",
        "a leak of 9 nS taken from a passive cell that has 10 nS, and a step of 10 pA",
        leak_model("nine tenths of the cell's leak, taken away", -9.0, -70.0),
        SimCellSpec(
            capacitance_pf=30.0,
            leak_ns=10.0,
            leak_mv=-70.0,
            step=(StepSpec(start_ms=10.0, stop_ms=110.0, current_pa=10.0),),
        ),
        200.0,
    )


_MAKERS: dict[str, Callable[[], Scenario]] = {
    "squid": _squid,
    "fast-spiking": _fast_spiking,
    "shunt-firing": _shunt_firing,
    "shunt-resting": _shunt_resting,
    "less-leak": _less_leak,
}
NAMES = tuple(_MAKERS)
"""The scenarios there are."""


@cache
def scenario_named(name: str) -> Scenario:
    """The scenario of that name.

    Raises
    ------
    GatestepError
        If there is none.
    """
    if name not in _MAKERS:
        raise GatestepError(f"no scenario {name!r}; there are {', '.join(NAMES)}")
    return _MAKERS[name]()
