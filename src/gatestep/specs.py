"""Descriptions of models and rigs: frozen, validated, free of any machinery.

These classes are the single statement of what a model file and a rig file may
hold. Reading files and reporting their faults is in :mod:`gatestep.files`.
"""

from __future__ import annotations

import ipaddress
import re
from typing import Literal, Self

from pydantic import (
    Field,
    field_validator,
    model_validator,
)

from .recordspecs import RecordSpec, SessionSpec, SubjectSpec
from .specbase import Celsius, Cpu, Finite, Formula, Name, Positive, Spec
from .units import nernst_mv, q10_factor

MAX_CELLS = 8
MAX_CONDUCTANCES = 64
MAX_GATES = 256
MAX_GMAX_NS = 1e6
MAX_REVERSAL_MV = 300.0
MAX_CURRENT_PA = 1e6
MAX_PEERS = 62
"""Peers on the list; with loopback's two addresses the direct lane keeps 64."""
USUAL_PRIORITY = 50


class StandardRate(Spec):
    """One of NeuroML2's three standard rate forms, with x = (V - midpoint) / scale.

    ``exp``: rate * exp(x); ``sigmoid``: rate / (1 + exp(-x));
    ``exp_linear``: rate * x / (1 - exp(-x)). Source: the NeuroML2 schema,
    types HHExpRate, HHSigmoidRate, HHExpLinearRate.
    """

    form: Literal["exp", "sigmoid", "exp_linear"]
    rate: Finite
    midpoint: Finite
    scale: Finite

    @field_validator("scale")
    @classmethod
    def _scale_is_not_zero(cls, scale: float) -> float:
        if scale == 0:
            raise ValueError("scale must not be 0 (mV per e-fold)")
        return scale


class MeasuredPoints(Spec):
    """Values measured at given voltages, linear between them, constant outside."""

    v_mv: list[Finite] = Field(min_length=2, max_length=10_000)
    values: list[Finite] = Field(min_length=2, max_length=10_000)

    @model_validator(mode="after")
    def _points_are_ordered(self) -> Self:
        if len(self.v_mv) != len(self.values):
            raise ValueError(
                f"v_mv has {len(self.v_mv)} entries and values has {len(self.values)}; "
                "they must pair up"
            )
        if any(b <= a for a, b in zip(self.v_mv, self.v_mv[1:], strict=False)):
            raise ValueError("v_mv must rise from each point to the next")
        return self


Rate = Formula | Finite | StandardRate | MeasuredPoints


class GateSpec(Spec):
    """One gate: how many instances open together, and its kinetics.

    Either ``alpha`` and ``beta`` (per ms) or ``inf`` (0 to 1) and ``tau`` (ms).
    A ``tau`` of the number 0 makes the gate instantaneous. ``q10`` overrides the
    conductance's.
    """

    name: Name
    instances: int = Field(default=1, ge=1, le=15)
    alpha: Rate | None = None
    beta: Rate | None = None
    inf: Rate | None = None
    tau: Rate | None = None
    q10: Positive | None = None
    q10_temperature_c: Celsius | None = None

    @model_validator(mode="after")
    def _one_pair_of_rates(self) -> Self:
        given = {k for k in ("alpha", "beta", "inf", "tau") if getattr(self, k) is not None}
        if given not in ({"alpha", "beta"}, {"inf", "tau"}):
            found = ", ".join(sorted(given)) or "neither"
            raise ValueError(f"give alpha and beta (per ms), or inf and tau (ms); found {found}")
        return self

    @property
    def instantaneous(self) -> bool:
        """Whether the gate is always at its steady state (tau = 0)."""
        return isinstance(self.tau, float | int) and self.tau == 0


class NernstSpec(Spec):
    """Ion concentrations (mM) from which the reversal potential follows."""

    valence: Literal[-2, -1, 1, 2]
    inside_mmolar: Positive
    outside_mmolar: Positive


class ConductanceSpec(Spec):
    """One ohmic conductance; without gates it is a leak. ``gmax_ns`` may be negative."""

    name: Name
    gmax_ns: float = Field(ge=-MAX_GMAX_NS, le=MAX_GMAX_NS)
    reversal_mv: float | None = Field(default=None, ge=-MAX_REVERSAL_MV, le=MAX_REVERSAL_MV)
    nernst: NernstSpec | None = None
    q10: Positive = 1.0
    q10_temperature_c: Celsius | None = None
    note: str = ""
    gate: tuple[GateSpec, ...] = ()

    @model_validator(mode="after")
    def _one_reversal_and_distinct_gates(self) -> Self:
        if (self.reversal_mv is None) == (self.nernst is None):
            raise ValueError("give either reversal_mv or a nernst table, not both and not neither")
        _refuse_twins("gate", [g.name for g in self.gate])
        for q10, reference in [
            (self.q10, self.q10_temperature_c),
            *((g.q10, g.q10_temperature_c or self.q10_temperature_c) for g in self.gate),
        ]:
            if q10 not in (None, 1.0) and reference is None:
                raise ValueError("q10 needs q10_temperature_c, the temperature the rates are for")
        return self

    def reversal_at(self, temperature_c: float) -> float:
        """Reversal potential in mV at a temperature in °C."""
        if self.nernst is None:
            assert self.reversal_mv is not None
            return self.reversal_mv
        n = self.nernst
        return nernst_mv(n.inside_mmolar, n.outside_mmolar, n.valence, temperature_c)

    def rate_factor(self, gate: GateSpec, temperature_c: float) -> float:
        """Factor on the gate's rates at a temperature in °C."""
        q10 = self.q10 if gate.q10 is None else gate.q10
        reference = gate.q10_temperature_c or self.q10_temperature_c
        if q10 == 1.0 or reference is None:
            return 1.0
        return q10_factor(q10, temperature_c, reference)


class ModelSpec(Spec):
    """A set of conductances for one cell, as a model file states it."""

    title: str = Field(min_length=1, max_length=200)
    source: str = Field(min_length=1, max_length=1000)
    temperature_c: Celsius
    version: str = ""
    confidence: Literal["agreed", "uncertain", "own"] = "own"
    caveats: tuple[str, ...] = ()
    parameters: dict[Name, Finite] = Field(default_factory=dict)
    conductance: tuple[ConductanceSpec, ...] = Field(min_length=1, max_length=MAX_CONDUCTANCES)

    @model_validator(mode="after")
    def _fits(self) -> Self:
        _refuse_twins("conductance", [c.name for c in self.conductance])
        gates = sum(len(c.gate) for c in self.conductance)
        if gates > MAX_GATES:
            raise ValueError(f"{gates} gates; at most {MAX_GATES} fit")
        return self


class LoopSpec(Spec):
    """The loop socket and its clock."""

    endpoint: str = "tcp://127.0.0.1:5790"
    interval_us: float = Field(ge=5, le=100_000)
    budget_us: float | None = Field(default=None, gt=0, le=1e6)
    apply: Literal["next-tick", "on-arrival"] = "next-tick"
    anticipate: Literal["auto"] | bool = "auto"
    lane: Literal["auto", "direct", "libzmq"] = "auto"

    @property
    def budget(self) -> float:
        """The budget in µs: ``budget_us``, or one tick."""
        return self.interval_us if self.budget_us is None else self.budget_us


class ControlSpec(Spec):
    """The control socket."""

    endpoint: str = "tcp://127.0.0.1:5791"


class FeedSpec(Spec):
    """The feed socket; ``every`` thins the samples it carries (1 = all)."""

    endpoint: str = "tcp://127.0.0.1:5792"
    every: int = Field(default=50, ge=1, le=1_000_000)


class NetworkSpec(Spec):
    """Who may connect when a socket is bound beyond this machine.

    Either ``peers``, the addresses allowed in, or CURVE: the server's secret
    certificate and a folder of the public certificates of its clients.
    """

    peers: tuple[str, ...] = Field(default=(), max_length=MAX_PEERS)
    curve_secret: str | None = None
    curve_clients: str | None = None

    @field_validator("peers")
    @classmethod
    def _peers_are_addresses(cls, peers: tuple[str, ...]) -> tuple[str, ...]:
        for peer in peers:
            try:
                ipaddress.ip_address(peer)
            except ValueError:
                raise ValueError(f"{peer!r} is not an IPv4 or IPv6 address") from None
        return peers

    @model_validator(mode="after")
    def _curve_is_whole(self) -> Self:
        if (self.curve_secret is None) != (self.curve_clients is None):
            raise ValueError("CURVE needs both curve_secret and curve_clients")
        if self.peers and self.curve_secret:
            raise ValueError("give peers or CURVE keys, not both")
        return self


class CellLimits(Spec):
    """Hard limits on one cell; nothing that gatestep answers is outside them."""

    current_pa: float = Field(default=1000.0, gt=0, le=MAX_CURRENT_PA)
    slew_pa_per_ms: float | None = Field(default=None, gt=0, le=1e12)
    window_mv: tuple[float, float] = (-150.0, 100.0)

    @field_validator("window_mv")
    @classmethod
    def _window_is_ordered(cls, window: tuple[float, float]) -> tuple[float, float]:
        if not -200.0 <= window[0] < window[1] <= 200.0:
            raise ValueError("window_mv is [low, high] within -200 to 200 mV, low below high")
        return window


class ElectrodeSpec(Spec):
    """What the measured voltage still holds of the electrode.

    ``residue_mohm`` is the series resistance that bridge balance or compensation
    has left in it; how good a setting one can trust, not a figure one has read.
    """

    residue_mohm: float = Field(default=0.1, ge=0, le=1000)


class AnticipateSpec(Spec):
    """Anticipation's settings in place of the chosen ones; see :mod:`gatestep.anticipate`."""

    substeps: int | None = Field(default=None, ge=1, le=8)
    alpha: float | None = Field(default=None, gt=0, le=1)
    beta: float | None = Field(default=None, ge=0, le=12)


class CellSpec(Spec):
    """One cell on the rig, the model it is given, and its limits.

    ``capacitance_uncertainty`` is the fraction by which the true capacitance may
    differ from ``capacitance_pf``. ``input_ns`` and ``input_mv`` are a conductance
    that the cell is known to have, and its reversal.
    """

    name: Name
    model: str
    capacitance_pf: float | None = Field(default=None, gt=0, le=1e5)
    capacitance_uncertainty: float = Field(default=0.1, ge=0, le=0.9)
    input_ns: float | None = Field(default=None, ge=0, le=1e5)
    input_mv: float | None = Field(default=None, ge=-MAX_REVERSAL_MV, le=MAX_REVERSAL_MV)
    electrode: ElectrodeSpec = Field(default_factory=ElectrodeSpec)
    anticipate: AnticipateSpec = Field(default_factory=AnticipateSpec)
    limits: CellLimits = Field(default_factory=CellLimits)

    @model_validator(mode="after")
    def _input_is_whole(self) -> Self:
        if (self.input_ns is None) != (self.input_mv is None):
            raise ValueError("give both input_ns and input_mv, or neither")
        return self


class LimitsSpec(Spec):
    """Limits on the loop as a whole."""

    silence_ms: float = Field(default=250.0, ge=1, le=600_000)
    late_run: int = Field(default=20, ge=1, le=1_000_000)


class HostSpec(Spec):
    """What the operating system is asked to do for the loop; Linux only.

    ``policy``, ``priority`` and ``cpus`` are the hot thread's; libzmq's I/O threads,
    where they stand between the wire and the loop, get the same policy and priority,
    and ``io_cpus`` (as ``cpus`` when not given).
    """

    policy: Literal["other", "fifo", "rr"] = "other"
    priority: int = Field(default=USUAL_PRIORITY, ge=1, le=99)
    cpus: tuple[Cpu, ...] = ()
    io_cpus: tuple[Cpu, ...] | None = None
    lock_memory: bool = False
    timer_slack_nsec: int | None = Field(default=None, ge=1, le=1_000_000_000)
    hold_c_states: bool = False

    @field_validator("cpus", "io_cpus")
    @classmethod
    def _cpus_are_distinct(cls, cpus: tuple[int, ...] | None) -> tuple[int, ...] | None:
        _refuse_twins("CPU", [str(cpu) for cpu in cpus or ()])
        return cpus

    @model_validator(mode="after")
    def _priority_has_a_use(self) -> Self:
        if self.policy == "other" and self.priority != USUAL_PRIORITY:
            raise ValueError(
                f'priority = {self.priority} has no effect with policy = "other"; '
                'give policy = "fifo" or "rr", or leave priority out'
            )
        return self

    @property
    def real_time(self) -> bool:
        """Whether a real-time policy is asked for."""
        return self.policy != "other"

    @property
    def cpus_of_io(self) -> tuple[int, ...]:
        """CPUs of the lane's I/O threads; none means any."""
        return self.cpus if self.io_cpus is None else self.io_cpus


class StepSpec(Spec):
    """A step of stimulus current that the simulated rig adds by itself."""

    start_ms: float = Field(ge=0)
    stop_ms: float = Field(gt=0)
    current_pa: float = Field(ge=-MAX_CURRENT_PA, le=MAX_CURRENT_PA)

    @model_validator(mode="after")
    def _stops_after_start(self) -> Self:
        if self.stop_ms <= self.start_ms:
            raise ValueError("stop_ms must be after start_ms")
        return self


class SimCellSpec(Spec):
    """One simulated cell with its electrode, amplifier and converter.

    ``native`` names models whose conductances the cell has of its own.
    ``electrode_mohm`` and ``electrode_pf`` stand between the amplifier and the
    cell; ``bridge_mohm`` is taken off again by the amplifier. ``start_mv`` is the
    leak's reversal when not given. 0 bits means an ideal converter, without
    steps and without a range.
    """

    capacitance_pf: float = Field(default=30.0, ge=1e-3, le=1e5)
    leak_ns: float = Field(default=3.0, ge=0, le=1e5)
    leak_mv: float = Field(default=-65.0, ge=-200, le=200)
    start_mv: float | None = Field(default=None, ge=-200, le=200)
    native: tuple[str, ...] = ()
    electrode_mohm: float = Field(default=0.0, ge=0, le=1000)
    electrode_pf: float = Field(default=0.0, ge=0, le=1000)
    bridge_mohm: float = Field(default=0.0, ge=0, le=1000)
    noise_mv: float = Field(default=0.0, ge=0, le=50)
    adc_bits: int = Field(default=0, ge=0, le=32)
    adc_range_mv: tuple[float, float] = (-200.0, 200.0)
    dac_bits: int = Field(default=0, ge=0, le=32)
    dac_range_pa: tuple[float, float] = (-20_000.0, 20_000.0)
    step: tuple[StepSpec, ...] = ()

    @field_validator("electrode_mohm", "electrode_pf")
    @classmethod
    def _electrode_is_not_tiny(cls, value: float) -> float:
        if 0 < value < 1e-3:
            raise ValueError("give 0 (none) or at least 0.001")
        return value

    @field_validator("adc_range_mv", "dac_range_pa")
    @classmethod
    def _range_is_ordered(cls, span: tuple[float, float]) -> tuple[float, float]:
        if not -1e9 <= span[0] < span[1] <= 1e9:
            raise ValueError("a converter's range is [low, high], low below high")
        return span


class SimulatedSpec(Spec):
    """The simulated rig: its pace, its faults and its cells.

    ``lockstep`` runs in virtual time, the same for every machine and run;
    ``real`` keeps the clock. Delay, jitter and drops are virtual and belong to
    lockstep: in real pace they are what the machine makes them.
    """

    pace: Literal["lockstep", "real"] = "lockstep"
    seconds: float = Field(default=1.0, gt=0, le=86_400)
    seed: int = Field(default=1, ge=0, le=2**63 - 1)
    delay_us: float | None = Field(default=None, ge=0, le=1e6)
    jitter_us: float = Field(default=0.0, ge=0, le=1e6)
    drop: float = Field(default=0.0, ge=0, lt=1)
    cell: tuple[SimCellSpec, ...] = ()


class RigSpec(Spec):
    """A rig file: the loop, the sockets, the cells and their limits."""

    loop: LoopSpec
    control: ControlSpec = Field(default_factory=ControlSpec)
    feed: FeedSpec = Field(default_factory=FeedSpec)
    record: RecordSpec = Field(default_factory=RecordSpec)
    subject: SubjectSpec = Field(default_factory=SubjectSpec)
    session: SessionSpec = Field(default_factory=SessionSpec)
    network: NetworkSpec = Field(default_factory=NetworkSpec)
    limits: LimitsSpec = Field(default_factory=LimitsSpec)
    host: HostSpec = Field(default_factory=HostSpec)
    cell: tuple[CellSpec, ...] = Field(min_length=1, max_length=MAX_CELLS)
    simulated: SimulatedSpec | None = None

    @model_validator(mode="after")
    def _names_and_endpoints(self) -> Self:
        _refuse_twins("cell", [c.name for c in self.cell])
        endpoints = [self.loop.endpoint, self.control.endpoint, self.feed.endpoint]
        for endpoint in endpoints:
            found = _ENDPOINT.fullmatch(endpoint)
            if not found or int(found["port"] or 0) > 65_535:
                raise ValueError(f"endpoint {endpoint!r} is not tcp://ADDRESS:PORT or ipc://PATH")
        _refuse_twins("endpoint", endpoints)
        if self.loop.lane == "direct" and self.network.curve_secret:
            raise ValueError("loop.lane = 'direct' cannot do CURVE; use 'auto' or 'libzmq'")
        simulated = self.simulated
        if simulated and simulated.cell and len(simulated.cell) != len(self.cell):
            raise ValueError(
                f"{len(self.cell)} cells but {len(simulated.cell)} simulated cells; give one each"
            )
        return self


_ENDPOINT = re.compile(r"tcp://(?:[^:/\s]+|\[[0-9A-Fa-f:]+\]):(?P<port>\d{1,5})|ipc://\S+")


def _refuse_twins(what: str, names: list[str]) -> None:
    twins = sorted({n for n in names if names.count(n) > 1})
    if twins:
        raise ValueError(f"{what} named twice: {', '.join(twins)}")
