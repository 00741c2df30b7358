"""The kernel's slow twin: the same equations in plain Python and numpy, for tests.

Written from the equations, not from the kernel: one gate at a time, ``np.interp`` to
read the table, ``np.exp``, ordinary powers. Units as everywhere: mV, ms, nS, pA.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from gatestep.kernel import BANK, STATES, records
from gatestep.simd import WIDTH
from gatestep.tables import Tables

UNTOUCHED = -7.0
"""What a state holds beyond its gates; nothing may change it."""


@dataclass
class Gate:
    """Steady state and rate (per ms) at each row of the grid; no rate if instantaneous."""

    inf: np.ndarray
    rate: np.ndarray | None
    instances: int


@dataclass
class Conductance:
    gmax_ns: float
    reversal_mv: float
    gates: list[Gate]


@dataclass
class Model:
    v_low_mv: float
    rows_per_mv: float
    conductances: list[Conductance]

    @property
    def gates(self) -> list[Gate]:
        return [gate for c in self.conductances for gate in c.gates]


class Twin:
    """A model with the state of its gates in ``x``, one a gate, in the model's order."""

    def __init__(self, model: Model) -> None:
        self.model = model
        self.x = [0.0] * len(model.gates)

    def between_rows(self, column: np.ndarray, v_mv: float) -> float:
        """Linear between the rows of the grid, constant outside."""
        place = (v_mv - self.model.v_low_mv) * self.model.rows_per_mv
        return float(np.interp(place, np.arange(len(column)), column))

    def settle(self, v_mv: float) -> None:
        self.x = [self.between_rows(gate.inf, v_mv) for gate in self.model.gates]

    def step(self, v_old_mv: float, v_new_mv: float, dt_ms: float) -> float:
        """Gates across the tick on its mean voltage, the current at its end."""
        middle = (v_old_mv + v_new_mv) / 2
        for k, gate in enumerate(self.model.gates):
            if gate.rate is None:
                self.x[k] = self.between_rows(gate.inf, v_new_mv)
                continue
            inf = self.between_rows(gate.inf, middle)
            decay = np.exp(-dt_ms * self.between_rows(gate.rate, middle))
            self.x[k] = float(inf * (1 - decay) + self.x[k] * decay)
        return self.current(v_new_mv)

    def conductances(self) -> list[float]:
        """Each conductance in nS: gmax times every gate to the power of its instances."""
        x = iter(self.x)
        return [
            c.gmax_ns * float(np.prod([next(x) ** gate.instances for gate in c.gates]))
            for c in self.model.conductances
        ]

    def conductance(self) -> float:
        return sum(self.conductances())

    def terms(self, v_mv: float) -> list[float]:
        """What each conductance injects, -g * (V - E), in pA."""
        pairs = zip(self.conductances(), self.model.conductances, strict=True)
        return [-g * (v_mv - c.reversal_mv) for g, c in pairs]

    def current(self, v_mv: float) -> float:
        return sum(self.terms(v_mv))


def pack(model: Model, base: int = 0) -> tuple[np.record, np.ndarray, np.ndarray]:
    """Bank, table and places as the kernel's documentation lays them out.

    The table starts at ``base`` and NaN surrounds it, so that a value read from
    outside would show. The third item is the place of each gate in the state.
    """
    gates = model.gates
    moving = [k for k, gate in enumerate(gates) if gate.rate is not None]
    still = [k for k, gate in enumerate(gates) if gate.rate is None]
    dynamic = -(-len(moving) // WIDTH) * WIDTH
    rows = len(gates[0].inf) if gates else 2
    block = np.zeros((rows, 2 * dynamic + len(still)))
    places = np.zeros(len(gates), dtype=np.int64)
    for column, k in enumerate(moving):
        block[:, column] = gates[k].inf
        block[:, dynamic + column] = gates[k].rate
        places[k] = column
    for column, k in enumerate(still):
        block[:, 2 * dynamic + column] = gates[k].inf
        places[k] = dynamic + column
    table = np.full(base + block.size + 8, np.nan)
    table[base : base + block.size] = block.ravel()
    bank = records(BANK)[0]
    bank.v_low_mv, bank.rows_per_mv, bank.rows = model.v_low_mv, model.rows_per_mv, rows
    bank.start, bank.stride = base, block.shape[1]
    bank.dynamic, bank.instant = dynamic, len(still)
    bank.conductances = len(model.conductances)
    for k, c in enumerate(model.conductances):
        bank.gmax_ns[k], bank.reversal_mv[k], bank.gates[k] = c.gmax_ns, c.reversal_mv, len(c.gates)
    bank.state[: len(gates)] = places
    bank.power[: len(gates)] = [gate.instances for gate in gates]
    return bank, table, places


def fresh_state(bank: np.record) -> np.ndarray:
    """A gate state of zeros; beyond the bank's gates it holds ``UNTOUCHED``."""
    x = np.full(STATES, UNTOUCHED)
    x[: bank.dynamic + bank.instant] = 0.0
    return x


def loaded(tables: Tables) -> tuple[np.record, np.ndarray]:
    """The bank, with fields as attributes, and the table of a model that was loaded."""
    bank = records(BANK)
    bank[0] = tables.bank
    return bank[0], tables.table.copy()


def unpack(bank: np.record, table: np.ndarray) -> Model:
    """The model that a bank and its table hold."""
    base, rows, stride = int(bank.start), int(bank.rows), int(bank.stride)
    block = table[base : base + rows * stride].reshape(rows, stride)
    dynamic, at, conductances = int(bank.dynamic), 0, []
    for c in range(bank.conductances):
        gates = []
        for _ in range(bank.gates[c]):
            place, power = int(bank.state[at]), int(bank.power[at])
            if place < dynamic:
                gates.append(Gate(block[:, place], block[:, dynamic + place], power))
            else:
                gates.append(Gate(block[:, dynamic + place], None, power))
            at += 1
        conductances.append(Conductance(float(bank.gmax_ns[c]), float(bank.reversal_mv[c]), gates))
    return Model(float(bank.v_low_mv), float(bank.rows_per_mv), conductances)
