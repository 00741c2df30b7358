"""Where models stand ready for the loop.

Each cell has two banks: the one in force, which only the loop touches, and the
spare, which only this module writes. A bank's table takes a stretch of one common
array, first fit, so that any mix of models finds room as long as the sum does.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from .choosing import Choice
from .errors import ControlError
from .library import LoadedModel
from .tables import Tables, fill_bank

ROOM = 1 << 25
"""Values that all tables together may take: 256 MiB, touched only where used."""


@dataclass(frozen=True)
class Ready:
    """A model with its tables, standing in a bank."""

    model: LoadedModel
    tables: Tables
    choice: Choice
    bank: int
    base: int

    @property
    def end(self) -> int:
        """First index of the common array after this model's table."""
        return self.base + self.tables.table.size


PARAMETERS = ("gmax_ns", "reversal_mv")
"""What of a conductance can be set while its model is in force."""


def parameters_of(tables: Tables) -> dict[str, float]:
    """Every parameter of a model, by names as ``K.gmax_ns``."""
    return {
        f"{conductance.name}.{parameter}": float(tables.bank[parameter][..., c].item())
        for c, conductance in enumerate(tables.spec.conductance)
        for parameter in PARAMETERS
    }


def with_parameters(tables: Tables, parameters: dict[str, float]) -> Tables:
    """The tables of a model with other parameters; all of them must be given."""
    bank = tables.bank.copy()
    for c, conductance in enumerate(tables.spec.conductance):
        for parameter in PARAMETERS:
            bank[parameter][..., c] = parameters[f"{conductance.name}.{parameter}"]
    return replace(tables, bank=bank)


def make_room() -> npt.NDArray[np.float64]:
    """The common array of all tables; pages it never touches take no memory."""
    return np.empty(ROOM, np.float64)


STIMULUS_TICKS = 1 << 24
"""Longest sweep in ticks: two slots of 128 MiB each, touched only where used."""


def make_slots() -> npt.NDArray[np.float64]:
    """Two slots for stimuli: while one plays, the next is written to the other."""
    return np.empty((2, STIMULUS_TICKS), np.float64)


class Shelf:
    """The models in force and prepared, cell by cell.

    Parameters
    ----------
    banks : recarray of BANK, two a cell
    table : ndarray of float64
        From :func:`make_room`.
    """

    def __init__(self, banks: Any, table: npt.NDArray[np.float64]) -> None:
        self._banks, self._table = banks, table
        cells = len(banks) // 2
        self.in_force: list[Ready | None] = [None] * cells
        self.prepared: list[Ready | None] = [None] * cells

    def prepare(self, cell: int, model: LoadedModel, tables: Tables, choice: Choice) -> Ready:
        """Write a model into the cell's spare bank, over one prepared before.

        Raises
        ------
        ControlError
            When the tables find no room.
        """
        current = self.in_force[cell]
        bank = 2 * cell + (0 if current is None or current.bank % 2 else 1)
        self.prepared[cell] = None
        base = self._find_room(tables.table.size, model.name)
        fill_bank(tables, self._banks[bank], self._table[base : base + tables.table.size])
        self._banks[bank].start = base
        ready = Ready(model, tables, choice, bank, base)
        self.prepared[cell] = ready
        return ready

    def put_in_force(self, cell: int) -> None:
        """Note that the loop has taken the cell's prepared bank."""
        self.in_force[cell], self.prepared[cell] = self.prepared[cell], None

    def _find_room(self, size: int, name: str) -> int:
        taken = [r for r in (*self.in_force, *self.prepared) if r is not None]
        base = 0
        for ready in sorted(taken, key=lambda r: r.base):
            if ready.base - base >= size:
                return base
            base = max(base, ready.end)
        if self._table.size - base >= size:
            return base
        raise ControlError(
            f"load: the tables of {name} need {size} values and {self._table.size - base} are "
            "free; prepare it while fewer or smaller models are in force"
        )
