"""Plan files: what is to be played to a cell, sweep by sweep, and in which order.

A plan's sweeps stand in its file as a person thinks of them, with lists where a value
is stepped through; :meth:`Plan.expand` gives them one by one in the order in which
they run. What a stimulus looks like in pA is in :mod:`gatestep.stimulus`.
"""

from __future__ import annotations

import hashlib
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import asdict, dataclass, replace
from itertools import product
from pathlib import Path
from typing import Any

from .errors import FileError
from .files import parse, parse_toml, read_bytes
from .library import find_model, load_model
from .planspecs import KEYS_OF, PlanSpec, StimulusSpec, SweepSpec
from .specs import ModelSpec
from .units import US_PER_MS
from .waves import read_wave

WITHOUT = "without the conductance"
WITH = "with the conductance"


@dataclass(frozen=True)
class PlannedSweep:
    """One sweep as it runs. All of it is plain data, as it goes into the record.

    Attributes
    ----------
    index : int
        Place in the order in which the sweeps run, from 0.
    name, condition : str
        The name in the plan file, and the label by which sweeps are compared.
    repeat : int
        From 0.
    cell, model : str or None
        None: the only cell, the model in force. A model is a shipped name or a whole path.
    scale : float
        Factor on every gmax: of the model's file, or of the model in force as it is set.
    parameters : dict
        Values in place of the file's, such as ``K.gmax_ns``; the factor is not on them.
    duration_ms, ramp_ms, pause_ms : float
        Of the sweep, of the change of conductance before it, of the rest after it.
    ticks : int or None
        Its length in ticks, where the tick is known.
    threshold_mv : float
        Where spikes are counted.
    stimulus : list
        Its parts, each with the keys of its kind.
    step : dict or None
        ``start_ms``, ``stop_ms`` and ``current_pa`` when the stimulus is exactly one step.
    """

    index: int
    name: str
    condition: str
    repeat: int
    cell: str | None
    model: str | None
    scale: float
    parameters: dict[str, float]
    duration_ms: float
    ticks: int | None
    ramp_ms: float
    pause_ms: float
    threshold_mv: float
    stimulus: list[dict[str, Any]]
    step: dict[str, float] | None

    def as_json(self) -> dict[str, Any]:
        """Everything as plain data."""
        return asdict(self)


@dataclass(frozen=True)
class Plan:
    """A plan file: where it lies, its text, the text's SHA-256, what it says."""

    path: Path
    text: str
    sha256: str
    spec: PlanSpec
    wave_sha256: dict[str, str]

    def expand(
        self, seed: int | None = None, interval_us: float | None = None
    ) -> list[PlannedSweep]:
        """The sweeps in the order in which they run.

        Parameters
        ----------
        seed : int, optional
            For the order ``shuffled``, in place of the file's.
        interval_us : float, optional
            The tick, for the sweeps' lengths in ticks; without it they are None.
        """
        order = self.spec.plan
        listed = [list(self._rungs_of(sweep, interval_us)) for sweep in self.spec.sweep]
        repeats = [sweep.repeats or order.repeats for sweep in self.spec.sweep]
        if order.order == "listed":
            pairs = zip(listed, repeats, strict=True)
            found = [(rung, r) for rungs, n in pairs for rung in rungs for r in range(n)]
        else:
            rounds = _rounds(listed, repeats)
            if order.order == "shuffled":
                rounds = shuffled(rounds, order.seed if seed is None else seed)
            found = [(rung, r) for r, rungs in enumerate(rounds) for rung in rungs]
        return [replace(rung, index=k, repeat=r) for k, (rung, r) in enumerate(found)]

    def duration_ms(self) -> float:
        """How long it takes: sweeps, changes of conductance before and rests between them."""
        order = self.spec.plan
        each = [
            (sweep.rungs() * (sweep.repeats or order.repeats), sweep.duration_ms)
            for sweep in self.spec.sweep
        ]
        count = sum(n for n, _ in each)
        sweeps = sum(n * duration for n, duration in each)
        return sweeps + count * order.ramp_ms + (count - 1) * order.pause_ms

    def as_json(self, sweeps: Sequence[PlannedSweep]) -> dict[str, Any]:
        """The plan for the record: the file as it is, and its sweeps as they run."""
        return {
            "path": str(self.path),
            "text": self.text,
            "sha256": self.sha256,
            "title": self.spec.title,
            "threshold_mv": self.spec.plan.threshold_mv,
            "sweeps": [sweep.as_json() for sweep in sweeps],
        }

    def _rungs_of(self, sweep: SweepSpec, interval_us: float | None) -> Iterator[PlannedSweep]:
        """Each rung of a ladder: currents change slowest, and the scale from each to the next.

        So each current is played with and without the conductance before the next one.
        """
        ticks = None
        if interval_us is not None:
            ticks = max(1, round(sweep.duration_ms * US_PER_MS / interval_us))
        models = [self._whole(name) for name in sweep.model] if sweep.model else [None]
        order = self.spec.plan
        for currents, values, model, scale in product(
            product(*(part.current_pa or (0.0,) for part in sweep.stimulus)),
            product(*sweep.parameters.values()),
            models,
            sweep.scale,
        ):
            parameters = dict(zip(sweep.parameters, values, strict=True))
            pairs = zip(sweep.stimulus, currents, strict=True)
            parts = [self._part(part, i, sweep.duration_ms) for part, i in pairs]
            yield PlannedSweep(
                index=0,
                name=sweep.name,
                condition=sweep.condition or condition_of(model, scale, parameters),
                repeat=0,
                cell=sweep.cell,
                model=model,
                scale=scale,
                parameters=parameters,
                duration_ms=sweep.duration_ms,
                ticks=ticks,
                ramp_ms=order.ramp_ms,
                pause_ms=order.pause_ms,
                threshold_mv=order.threshold_mv,
                stimulus=parts,
                step=_only_step(parts),
            )

    def _whole(self, name: str) -> str:
        """A shipped model's name, or the whole path of a file."""
        path = find_model(name, self.path.parent)
        return name if path.stem == name else str(path.resolve())

    def _part(self, part: StimulusSpec, current_pa: float, end_ms: float) -> dict[str, Any]:
        stop_ms = end_ms if part.stop_ms is None else part.stop_ms
        found: dict[str, Any] = {"kind": part.kind, "start_ms": part.start_ms, "stop_ms": stop_ms}
        found |= {key: getattr(part, key) for key in KEYS_OF[part.kind]}
        if part.kind == "step":
            found["current_pa"] = current_pa
        if part.path is not None:
            path = str(_wave_path(part, self.path))
            found |= {"path": path, "sha256": self.wave_sha256[path]}
        return found


def load_plan(path: str | Path) -> Plan:
    """Read a plan file, with the models and the stimulus files that it names.

    Raises
    ------
    FileError
        Naming every fault: the file, the key, what was found and what is allowed.
    """
    path = Path(path)
    return parse_plan(read_bytes(path), path.resolve())


def parse_plan(content: bytes, path: Path) -> Plan:
    """The same from the bytes of a plan file; relative paths start from ``path``'s folder.

    Raises
    ------
    FileError
        As :func:`load_plan`.
    """
    spec = parse(PlanSpec, parse_toml(content, path), path)
    faults: list[str] = []
    waves: dict[str, str] = {}
    for sweep in spec.sweep:
        where = f'{path}: sweep "{sweep.name}"'
        faults += [f"{where}: {fault}" for fault in _model_faults(sweep, path.parent)]
        for number, part in enumerate(sweep.stimulus, 1):
            if part.path is None:
                continue
            try:
                wave = read_wave(_wave_path(part, path), part.column)
                waves[str(_wave_path(part, path))] = wave.sha256
            except FileError as fault:
                faults.append(f"{where}, stimulus number {number}: path: {fault}")
    if faults:
        raise FileError("\n".join(faults))
    digest = hashlib.sha256(content).hexdigest()
    return Plan(path, content.decode("utf-8"), digest, spec, waves)


def _wave_path(part: StimulusSpec, plan: Path) -> Path:
    return (plan.parent / Path(part.path or "").expanduser()).resolve()


def _model_faults(sweep: SweepSpec, folder: Path) -> Iterator[str]:
    """What is wrong with the models of a sweep, and with the parameters of each."""
    for name in sweep.model or ():
        try:
            spec = load_model(name, folder).spec
        except FileError as fault:
            yield f"model: {fault}"
            continue
        yield from parameter_faults(sweep.parameters, name, spec)


def parameter_faults(parameters: Mapping[str, Any], name: str, spec: ModelSpec) -> Iterator[str]:
    """The parameters of a sweep that a model does not have."""
    names = [c.name for c in spec.conductance]
    for key in parameters:
        if key.rpartition(".")[0] not in names:
            yield f"parameters.{key}: {name} has no such conductance; it has {', '.join(names)}"


def condition_of(model: str | None, scale: float, parameters: Mapping[str, float]) -> str:
    """The label of a sweep that is given none: what is different about its conductance."""
    given = [f"{key} = {value:g}" for key, value in parameters.items()]
    added = any(value for key, value in parameters.items() if key.endswith(".gmax_ns"))
    if scale == 0.0 and not added:
        return WITHOUT
    named = (Path(model).stem if model.endswith(".toml") else model) if model else None
    if named is None and not given:
        named = WITH
    scaled = [f"{named} × {scale:g}" if named else f"× {scale:g}"] if scale != 1.0 else []
    return ", ".join([*(scaled or ([named] if named else [])), *given])


def _rounds(listed: list[list[PlannedSweep]], repeats: list[int]) -> list[list[PlannedSweep]]:
    """For each repeat the sweeps that have so many, in the file's order."""
    pairs = list(zip(listed, repeats, strict=True))
    return [[rung for rungs, n in pairs if r < n for rung in rungs] for r in range(max(repeats))]


def _only_step(parts: list[dict[str, Any]]) -> dict[str, float] | None:
    if len(parts) != 1 or parts[0]["kind"] != "step":
        return None
    return {key: parts[0][key] for key in ("start_ms", "stop_ms", "current_pa")}


def shuffled(rounds: Sequence[Sequence[Any]], seed: int) -> list[list[Any]]:
    """Each list in an order of its own (Fisher and Yates), the same on every machine."""
    draws = _draws(seed)
    found = [list(one) for one in rounds]
    for one in found:
        for last in range(len(one) - 1, 0, -1):
            other = _below(draws, last + 1)
            one[last], one[other] = one[other], one[last]
    return found


_WORD = 2**64


def _draws(seed: int) -> Iterator[int]:
    """The splitmix64 sequence of a seed (Steele, Lea and Flood 2014): 64 bits each."""
    state = seed
    while True:
        state = (state + 0x9E3779B97F4A7C15) % _WORD
        z = (state ^ (state >> 30)) * 0xBF58476D1CE4E5B9 % _WORD
        z = (z ^ (z >> 27)) * 0x94D049BB133111EB % _WORD
        yield z ^ (z >> 31)


def _below(draws: Iterator[int], count: int) -> int:
    """An even draw from 0 to ``count - 1``: those of the last, unfinished turn are left out."""
    whole = _WORD - _WORD % count
    return next(draw for draw in draws if draw < whole) % count
