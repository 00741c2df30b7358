"""How much conductance a cell's loop carries, set beside what its model opens."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from typing import TYPE_CHECKING

from ..choosing import KEPT, Choice, choose
from ..hostfacts import Finding, Verdict

if TYPE_CHECKING:
    from ..specs import CellSpec, LoopSpec
    from ..tables import Tables

SHORTEST_TICK_US = 5.0
"""The shortest ``loop.interval_us`` that a rig file may have."""
TICKS_US = (200.0, 100.0, 50.0, 40.0, 30.0, 25.0, 20.0, 15.0, 10.0, SHORTEST_TICK_US)
UNCERTAINTIES = (0.5, 0.3, 0.2, 0.15, 0.1, 0.05, 0.02)
RESIDUES = (0.75, 0.5, 0.25, 0.1, 0.05)
"""Shares of the stated residue that are tried."""

MATTERS = (
    "The margin is the conductance at which the loop itself rings, C and R as far off as "
    "stated, over the most that the model opens in voltage steps."
)


def margin_finding(cell: CellSpec, tables: Tables, loop: LoopSpec, choice: Choice) -> Finding:
    """A cell's conductances, limits, margins and settings, and what to do."""
    said = [_opened(choice)]
    if choice.margin is None:
        said.append(f"how much the loop carries is not known: {choice.reason}")
    else:
        said += [_carried(cell, choice), _settings(choice)]
    verdict = _verdict(choice)
    return Finding(
        f"cell {cell.name}",
        verdict,
        "\n".join(said),
        MATTERS,
        None if verdict == "ok" else _remedy(cell, tables, loop, choice),
        {**choice.plain_data(), "foretold": None},
    )


def _verdict(choice: Choice) -> Verdict:
    if choice.margin is None:
        return "weak"
    return "ok" if choice.margin >= KEPT else "weak" if choice.margin >= 1.0 else "missing"


def _opened(choice: Choice) -> str:
    return (
        f"the model opens up to {choice.operating_ns:.4g} nS in voltage steps; the sum of its "
        f"gmax is {choice.largest_ns:.4g} nS"
    )


def _carried(cell: CellSpec, choice: Choice) -> str:
    unsure = f"{cell.capacitance_uncertainty:.0%}, residue {cell.electrode.residue_mohm:g} MΩ"
    return (
        f"C {cell.capacitance_pf:g} pF within {unsure}: the plain loop carries "
        f"{_shown(choice.plain_limit_ns, choice.plain_margin)}, the anticipating one "
        f"{_shown(choice.anticipating_limit_ns, choice.anticipating_margin)}"
    )


def _shown(limit_ns: float | None, margin: float | None) -> str:
    if limit_ns is None or margin is None or limit_ns == math.inf:
        return "any conductance"
    shown = f"{margin:.2f}" if margin < 10.0 else f"{margin:.0f}"
    return f"{limit_ns:.4g} nS" + ("" if margin == math.inf else f" (margin {shown})")


def _settings(choice: Choice) -> str:
    state = "on" if choice.on else "off"
    return (
        f"anticipation {state}, {choice.substeps} sub-steps, alpha {choice.alpha:g}, "
        f"beta {choice.beta:.3g} (delay {1000.0 * choice.delay_ms:.4g} µs)"
    )


def _remedy(cell: CellSpec, tables: Tables, loop: LoopSpec, choice: Choice) -> str:
    """What brings the margin to where it is kept, each by itself."""
    if choice.margin is None:
        return f"measure the cell's capacitance: [[cell]] {cell.name}, capacitance_pf"
    ways = list(_ways(cell, tables, loop, choice))
    factor = choice.margin / KEPT
    return "; or ".join([*ways, f"smaller gmax_ns in the model, {factor:.2g} times what they are"])


def _ways(cell: CellSpec, tables: Tables, loop: LoopSpec, choice: Choice) -> Iterable[str]:
    """Changes of the rig file that would do."""
    if not choice.on and choice.anticipating_margin and choice.anticipating_margin >= KEPT:
        yield 'take the delay out: loop.anticipate = "auto"'
        return

    def holds(cell: CellSpec = cell, loop: LoopSpec = loop) -> bool:
        return (choose(cell, tables, loop).margin or 0.0) >= KEPT

    def with_tick(tick_us: float) -> bool:
        return holds(loop=loop.model_copy(update={"interval_us": tick_us}))

    def with_uncertainty(fraction: float) -> bool:
        return holds(cell.model_copy(update={"capacitance_uncertainty": fraction}))

    def with_residue(share: float) -> bool:
        left = cell.electrode.model_copy(
            update={"residue_mohm": share * cell.electrode.residue_mohm}
        )
        return holds(cell.model_copy(update={"electrode": left}))

    tick_us = _largest(TICKS_US, loop.interval_us, with_tick)
    if tick_us is not None:
        yield f"loop.interval_us = {tick_us:g}, and the rig's clock with it"
    fraction = _largest(UNCERTAINTIES, cell.capacitance_uncertainty, with_uncertainty)
    if fraction is not None:
        yield (
            f"know the capacitance within {fraction:.0%}: [[cell]] {cell.name}, "
            f"capacitance_uncertainty = {fraction:g}"
        )
    share = _largest(RESIDUES, 1.0, with_residue)
    if share is not None:
        left = share * cell.electrode.residue_mohm
        yield f"leave no more than {left:.2g} MΩ: [cell.electrode] residue_mohm = {left:.2g}"


def _largest(
    values: tuple[float, ...], below: float, holds: Callable[[float], bool]
) -> float | None:
    """The largest value below a bound that will do; the smallest is tried first."""
    smaller = [value for value in values if value < below]
    if not smaller or not holds(smaller[-1]):
        return None
    return next(value for value in smaller if holds(value))
