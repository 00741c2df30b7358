"""What each sweep of a plan needs of the loop, prepared before the first one runs.

Models are read, tables built and margins computed once for every different setting, off
the threads that matter; at a boundary between two sweeps only arrays are copied.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from .choosing import Choice, choose
from .config import LoadedRig
from .errors import ControlError
from .library import LoadedModel, load_model
from .plans import Plan, PlannedSweep, parameter_faults, parse_plan
from .shelf import STIMULUS_TICKS, Ready, parameters_of, with_parameters
from .tables import Tables, build_tables
from .units import US_PER_MS

MOST_SETTINGS = 200
"""Different models and parameters in one plan; their tables stay in memory."""


@dataclass(frozen=True)
class Setting:
    """A model with the parameters a sweep asks for, and how its cell anticipates."""

    model: LoadedModel
    tables: Tables
    choice: Choice

    def is_in_force(self, ready: Ready) -> bool:
        """Whether a bank holds just this."""
        return (
            self.tables.sha256 == ready.tables.sha256
            and self.model.sha256 == ready.model.sha256
            and parameters_of(self.tables) == parameters_of(ready.tables)
        )

    def goes_on(self, ready: Ready) -> bool:
        """Whether the gates of a bank in force are this model's, so that they can go on."""
        return self.tables.sha256 == ready.tables.sha256


@dataclass(frozen=True)
class PreparedSweep:
    """A sweep, its cell's place in the rig, its length in ticks, and what it sets."""

    sweep: PlannedSweep
    cell: int
    ticks: int
    ramp_ticks: int
    pause_ticks: int
    setting: Setting


Prepared = tuple[Plan, list[PreparedSweep]]


def prepare_plan(
    text: str, path: Path, seed: int | None, rig: LoadedRig, in_force: Sequence[Ready]
) -> Prepared:
    """A plan from the text of its file, with every sweep prepared.

    ``path`` is the file's, for what it names beside it; the rest as for
    :func:`prepare_sweeps`.
    """
    plan = parse_plan(text.encode("utf-8"), path)
    sweeps = plan.expand(seed, rig.spec.loop.interval_us)
    return plan, prepare_sweeps(sweeps, rig, in_force)


def prepare_sweeps(
    sweeps: Sequence[PlannedSweep],
    rig: LoadedRig,
    in_force: Sequence[Ready],
) -> list[PreparedSweep]:
    """Prepare every sweep of a plan.

    Parameters
    ----------
    sweeps : sequence of PlannedSweep
        In the order in which they run.
    rig : LoadedRig
    in_force : sequence of Ready
        The model of each cell now, with the parameters that were set.

    Raises
    ------
    ControlError
        When a sweep does not fit the rig or its model.
    GatestepError
        When a model cannot be used.
    """
    made: dict[tuple[object, ...], Setting] = {}
    built: dict[str, tuple[LoadedModel, Tables]] = {}
    names = [cell.name for cell in rig.spec.cell]
    prepared = []
    for sweep in sweeps:
        cell = _cell_of(sweep, names)
        key = (cell, sweep.model, sweep.scale, *sorted(sweep.parameters.items()))
        if key not in made:
            if len(made) == MOST_SETTINGS:
                raise ControlError(
                    f"run: more than {MOST_SETTINGS} different models and parameters; "
                    "split the plan"
                )
            made[key] = _setting(sweep, cell, rig, in_force[cell], built)
        prepared.append(_timed(sweep, cell, rig.spec.loop.interval_us, made[key]))
    return prepared


def _cell_of(sweep: PlannedSweep, names: list[str]) -> int:
    if sweep.cell is None and len(names) == 1:
        return 0
    if sweep.cell in names:
        return names.index(sweep.cell)
    found = "names no cell" if sweep.cell is None else f"cell {sweep.cell!r} is not on this rig"
    raise ControlError(f"run: sweep {sweep.name!r} {found}; its cells are {', '.join(names)}")


def _setting(
    sweep: PlannedSweep,
    cell: int,
    rig: LoadedRig,
    ready: Ready,
    built: dict[str, tuple[LoadedModel, Tables]],
) -> Setting:
    model, tables = ready.model, ready.tables
    if sweep.model is not None:
        if sweep.model not in built:
            found = load_model(sweep.model)
            built[sweep.model] = found, build_tables(found.spec)
        model, tables = built[sweep.model]
    faults = list(parameter_faults(sweep.parameters, model.name, model.spec))
    if faults:
        raise ControlError(f"run: sweep {sweep.name!r}: " + "; ".join(faults))
    values = parameters_of(tables)
    for key in values:
        if key.endswith(".gmax_ns"):
            values[key] *= sweep.scale
    tables = with_parameters(tables, values | sweep.parameters)
    return Setting(model, tables, choose(rig.spec.cell[cell], tables, rig.spec.loop))


def _timed(sweep: PlannedSweep, cell: int, interval_us: float, setting: Setting) -> PreparedSweep:
    def ticks_of(ms: float) -> int:
        return round(ms * US_PER_MS / interval_us)

    ticks = max(1, ticks_of(sweep.duration_ms))
    if ticks > STIMULUS_TICKS:
        longest_s = STIMULUS_TICKS * interval_us * 1e-6
        raise ControlError(
            f"run: sweep {sweep.name!r} is {ticks} ticks long; at {interval_us:g} us a sweep lasts "
            f"{longest_s:.0f} s at most: split it"
        )
    ramp_ticks = ticks_of(sweep.ramp_ms)
    return PreparedSweep(sweep, cell, ticks, ramp_ticks, ticks_of(sweep.pause_ms), setting)
