"""Rates of firing against what was stepped through: current, a parameter, the scale."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from ..sweepmeasures import Measured

Row = dict[str, Any]

FEWEST_RUNGS = 3
"""A ladder with fewer is a comparison of conditions."""


def in_order(labels: Iterable[str]) -> list[str]:
    """Labels as they first came, save that those which differ in numbers alone rise with them."""
    first = list(dict.fromkeys(labels))
    families = list(dict.fromkeys(_NUMBER.sub("#", label) for label in first))
    return sorted(
        first,
        key=lambda label: (
            families.index(_NUMBER.sub("#", label)),
            [float(number) for number in _NUMBER.findall(label)],
        ),
    )


_NUMBER = re.compile(r"(?<![\w.])-?\d+(?:\.\d+)?(?:e[+-]?\d+)?(?![\w.])")


def conditions_of(measured: Iterable[Measured], cells: Sequence[str]) -> list[Row]:
    """For each condition and cell, the rates at each step of current, in rising order.

    Sweeps that are not complete are left out, and those whose stimulus is no step.
    """
    found: dict[tuple[str, str], dict[float, list[float]]] = {}
    for made in measured:
        rates = found.setdefault((made.task.condition, cells[made.task.cell]), {})
        if made.task.current_pa is not None and made.complete:
            rates.setdefault(made.task.current_pa, []).append(made.firing.rate_hz)
    order = in_order(condition for condition, _ in found)
    return [
        {"condition": condition, "cell": cell, **_columns("current_pa", found[condition, cell])}
        for condition, cell in sorted(found, key=lambda pair: order.index(pair[0]))
    ]


def ladders_of(measured: Sequence[Measured], cells: Sequence[str]) -> list[Row]:
    """For each key that was stepped through, and all else that was alike, the rates."""
    kept = [m for m in measured if m.task.planned and m.complete and m.task.current_pa is not None]
    settings = [_settings(made) for made in kept]
    ladders = []
    for key in dict.fromkeys(key for one in settings for key in one if key not in _NOT_STEPPED):
        found: dict[str, dict[float, list[float]]] = {}
        for made, one in zip(kept, settings, strict=True):
            if key in one:
                rates = found.setdefault(_alike(one, key, cells), {})
                rates.setdefault(one[key], []).append(made.firing.rate_hz)
        ladders += [
            {"key": key, "at": label, **_columns("values", rates)}
            for label, rates in ((label, found[label]) for label in in_order(found))
            if len(rates) >= FEWEST_RUNGS
        ]
    return ladders


_NOT_STEPPED = ("current", "model", "cell")


def _settings(made: Measured) -> Row:
    """What a sweep was played with, by key."""
    fields = made.task.fields
    settings: Row = {"current": made.task.current_pa, "cell": made.task.cell}
    if fields.get("model"):
        settings["model"] = Path(str(fields["model"])).stem
    return {**settings, "scale": float(fields.get("scale", 1.0)), **fields.get("parameters", {})}


def _alike(one: Row, key: str, cells: Sequence[str]) -> str:
    """All but one of a sweep's settings, as a label."""
    parts = [f"{one['current']:g} pA"]
    parts += [cells[one["cell"]]] * (len(cells) > 1)
    if "model" in one:
        parts.append(one["model"])
    for name, value in one.items():
        if name not in (*_NOT_STEPPED, key) and (name, value) != ("scale", 1.0):
            parts.append(f"{name} = {value:g}")
    return ", ".join(parts)


def _columns(name: str, rates: dict[float, list[float]]) -> Row:
    """Values in rising order, the rates of all sweeps at each, and their means."""
    values = sorted(rates)
    return {
        name: values,
        "rates_hz": [rates[value] for value in values],
        "mean_hz": [float(np.mean(rates[value])) for value in values],
    }
