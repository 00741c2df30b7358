"""What a plan file may hold: sweeps, their stimuli, their order.

As :mod:`gatestep.specs` for rigs and models. Where a value may be stepped through, a
list stands for several sweeps, and a single value for a list of one.
"""

from __future__ import annotations

import re
from collections.abc import Mapping
from math import prod
from typing import Annotated, Any, Literal, Self

from pydantic import BeforeValidator, Field, model_validator

from .specbase import Finite, Name, Spec
from .specs import MAX_CURRENT_PA, MAX_GMAX_NS, MAX_REVERSAL_MV

MAX_SWEEPS = 10_000
LONGEST_NOISE_SD = 8.6
"""No draw of :mod:`gatestep.stimulus` lies further from the mean, in standard deviations."""


def _listed(found: Any) -> Any:
    """A single value as a list of one; a list stays as it is."""
    return tuple(found) if isinstance(found, list | tuple) else (found,)


def _dotted(found: Any) -> Any:
    """``K.gmax_ns = 1`` without quotes, which TOML takes for a table ``K``, as one key."""
    if not isinstance(found, Mapping):
        return found
    flat: dict[str, Any] = {}
    for key, value in found.items():
        inner = value if isinstance(value, Mapping) else {"": value}
        flat |= {f"{key}.{name}" if name else key: each for name, each in inner.items()}
    return flat


Current = Annotated[float, Field(ge=-MAX_CURRENT_PA, le=MAX_CURRENT_PA)]
_Steps = Field(min_length=1, max_length=1000)
Currents = Annotated[tuple[Current, ...], BeforeValidator(_listed), _Steps]
Scales = Annotated[
    tuple[Annotated[float, Field(ge=-1000, le=1000)], ...], BeforeValidator(_listed), _Steps
]
Models = Annotated[
    tuple[Annotated[str, Field(min_length=1)], ...], BeforeValidator(_listed), _Steps
]
Values = Annotated[tuple[Finite, ...], BeforeValidator(_listed), _Steps]
Parameters = Annotated[dict[str, Values], BeforeValidator(_dotted)]
Milliseconds = Annotated[float, Field(ge=0, le=1_800_000)]

KEYS_OF: dict[str, tuple[str, ...]] = {
    "step": ("current_pa",),
    "ramp": ("from_pa", "to_pa"),
    "sine": ("amplitude_pa", "frequency_hz", "phase_deg", "offset_pa"),
    "noise": ("sd_pa", "tau_ms", "mean_pa", "seed"),
    "file": ("path", "interval_us", "column"),
}
_OPTIONAL = {"phase_deg", "offset_pa", "tau_ms", "mean_pa", "seed", "column"}
_ALWAYS = {"kind", "start_ms", "stop_ms"}


class StimulusSpec(Spec):
    """One part of a sweep's stimulus; several parts add up. 0 pA outside its span."""

    kind: Literal["step", "ramp", "sine", "noise", "file"]
    start_ms: Milliseconds = 0.0
    stop_ms: Milliseconds | None = None
    current_pa: Currents | None = None
    from_pa: Current | None = None
    to_pa: Current | None = None
    amplitude_pa: float | None = Field(default=None, ge=0, le=MAX_CURRENT_PA)
    frequency_hz: float | None = Field(default=None, gt=0, le=100_000)
    phase_deg: float = Field(default=0.0, ge=-360, le=360)
    offset_pa: Current = 0.0
    sd_pa: float | None = Field(default=None, ge=0, le=MAX_CURRENT_PA)
    tau_ms: float = Field(default=0.0, ge=0, le=100_000)
    mean_pa: Current = 0.0
    seed: int = Field(default=1, ge=0, le=2**63 - 1)
    path: str | None = None
    interval_us: float | None = Field(default=None, ge=1, le=1e6)
    column: int = Field(default=1, ge=1, le=1000)

    @model_validator(mode="after")
    def _keys_are_those_of_the_kind(self) -> Self:
        keys = KEYS_OF[self.kind]
        lacking = [key for key in keys if key not in _OPTIONAL and getattr(self, key) is None]
        foreign = sorted(self.model_fields_set - _ALWAYS - set(keys))
        faults = [f"{key} is missing" for key in lacking]
        faults += [f"{key} is not for it" for key in foreign]
        if faults:
            allowed = ", ".join(("start_ms", "stop_ms", *keys))
            raise ValueError(f'kind = "{self.kind}": {", ".join(faults)}; its keys are {allowed}')
        if self.stop_ms is not None and self.stop_ms <= self.start_ms:
            raise ValueError("stop_ms must be after start_ms")
        return self

    def bound_pa(self) -> float:
        """The largest current that it may reach either way; a file's is not in it."""
        if self.kind == "step":
            return max(abs(i) for i in self.current_pa or (0.0,))
        if self.kind == "ramp":
            return max(abs(self.from_pa or 0.0), abs(self.to_pa or 0.0))
        if self.kind == "sine":
            return abs(self.offset_pa) + (self.amplitude_pa or 0.0)
        if self.kind == "noise":
            return abs(self.mean_pa) + LONGEST_NOISE_SD * (self.sd_pa or 0.0)
        return 0.0


class SweepSpec(Spec):
    """One sweep, or a ladder of them where a key is given a list."""

    name: Name
    duration_ms: float = Field(ge=1, le=1_800_000)
    cell: Name | None = None
    model: Models | None = None
    scale: Scales = (1.0,)
    parameters: Parameters = Field(default_factory=dict)
    repeats: int | None = Field(default=None, ge=1, le=MAX_SWEEPS)
    condition: str | None = Field(default=None, min_length=1, max_length=80)
    stimulus: tuple[StimulusSpec, ...] = Field(default=(), max_length=32)

    @model_validator(mode="after")
    def _fits(self) -> Self:
        faults = [_parameter_fault(key, value) for key, value in self.parameters.items()]
        for number, part in enumerate(self.stimulus, 1):
            if max(part.start_ms + 1e-9, part.stop_ms or 0.0) > self.duration_ms:
                faults.append(
                    f"stimulus number {number} goes on to {part.stop_ms or part.start_ms:g} ms, "
                    f"beyond the sweep's end at duration_ms = {self.duration_ms:g}"
                )
        largest = max((self._bound_at(part.start_ms) for part in self.stimulus), default=0.0)
        if largest > MAX_CURRENT_PA:
            faults.append(
                f"the parts of the stimulus may add up to {largest:g} pA; "
                f"at most {MAX_CURRENT_PA:g} pA either way are allowed"
            )
        if any(faults):
            raise ValueError("; ".join(filter(None, faults)))
        return self

    def _bound_at(self, at_ms: float) -> float:
        """The largest current at a time; over all times it is largest at some part's start."""
        ends = [(p, self.duration_ms if p.stop_ms is None else p.stop_ms) for p in self.stimulus]
        return sum(p.bound_pa() for p, stop_ms in ends if p.start_ms <= at_ms < stop_ms)

    def rungs(self) -> int:
        """How many sweeps the lists make of it, one repeat each."""
        currents = [len(part.current_pa or (0.0,)) for part in self.stimulus]
        parameters = [len(values) for values in self.parameters.values()]
        return prod([*currents, *parameters, len(self.model or ("",)), len(self.scale)])


class OrderSpec(Spec):
    """What holds for all sweeps of a plan."""

    order: Literal["listed", "interleaved", "shuffled"] = "listed"
    seed: int = Field(default=1, ge=0, le=2**63 - 1)
    repeats: int = Field(default=1, ge=1, le=MAX_SWEEPS)
    pause_ms: float = Field(default=500.0, ge=0, le=600_000)
    ramp_ms: float = Field(default=0.0, ge=0, le=60_000)
    threshold_mv: float = Field(default=0.0, ge=-200, le=200)


class PlanSpec(Spec):
    """A plan file."""

    title: str = Field(min_length=1, max_length=200)
    source: str = Field(default="", max_length=1000)
    plan: OrderSpec = Field(default_factory=OrderSpec)
    sweep: tuple[SweepSpec, ...] = Field(min_length=1, max_length=1000)

    @model_validator(mode="after")
    def _names_differ_and_all_fit(self) -> Self:
        names = [sweep.name for sweep in self.sweep]
        twins = sorted({name for name in names if names.count(name) > 1})
        if twins:
            raise ValueError(f"sweep named twice: {', '.join(twins)}")
        count = sum(sweep.rungs() * (sweep.repeats or self.plan.repeats) for sweep in self.sweep)
        if count > MAX_SWEEPS:
            raise ValueError(
                f"{count:,} sweeps with lists and repeats counted out; at most {MAX_SWEEPS:,}"
            )
        return self


_PARAMETER = re.compile(r"[A-Za-z][A-Za-z0-9_\-]{0,31}\.(gmax_ns|reversal_mv)")


def _parameter_fault(key: str, values: tuple[float, ...]) -> str:
    """What is wrong with a parameter, or nothing."""
    found = _PARAMETER.fullmatch(key)
    if not found:
        return (
            f'parameters: unknown key "{key}"; known are CONDUCTANCE.gmax_ns '
            "and CONDUCTANCE.reversal_mv"
        )
    limit = MAX_GMAX_NS if found[1] == "gmax_ns" else MAX_REVERSAL_MV
    wrong = next((value for value in values if abs(value) > limit), None)
    if wrong is None:
        return ""
    return f"parameters.{key}: found {wrong:g}; must be -{limit:g} to {limit:g}"
