"""A model as a microcontroller holds it: float32 tables for one fixed tick.

The grid is narrower than the server's, so that a cell of it is a power of two of a
millivolt: -156 to 100 mV, which holds the usual window of -150 to 100 mV. A row holds,
for each dynamic gate, its steady state and its *gain*, the share of the way to it that
one tick of a held voltage covers::

    x <- x + (inf - x) * gain        gain = 1 - exp(-interval / tau)

The exponential is thereby taken when the firmware is made, and the device needs none.
The gain is stored and not the decay ``1 - gain``: of a slow gate the decay is so near 1
that float32 would keep only a few digits of its distance from it. A missed tick needs
no rate either, since the gain over two ticks follows from that over one::

    1 - (1 - a) * (1 - b) = a + b * (1 - a)

so any number of ticks takes a handful of doublings. What the choice costs is that the
tick is built in; the device refuses to run at another.

With inf and gain in [0, 1] a gate cannot leave [0, 1], whatever the voltage. In float32
a slow gate would also stand still once a tick's change is below half a unit in its last
place, 3e-8 (at a gain of 5e-5 it stops 6e-4 short), so each gate carries the rounding
of its last addition into the next (Kahan 1965, Commun ACM 8:40).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from .errors import FirmwareError
from .kinetics import Kinetics, kinetics_of
from .specs import ModelSpec

Singles = NDArray[np.float32]
Wholes = NDArray[np.int64]
Floats = NDArray[np.float64]

LOW_MV = -156.0
SPAN_MV = 256.0
ROWS = (257, 513, 1025, 2049, 4097, 8193)
USUAL_ROWS = 2049
INTERVAL_US = (5.0, 100_000.0)
"""Shortest and longest tick, µs: a rig file's own bounds."""


@dataclass(frozen=True)
class DeviceTables:
    """A model laid out for the device.

    Attributes
    ----------
    spec : ModelSpec
    interval_us : float
        The tick that the gains are for.
    gates : tuple of str
        Names such as ``K.n``, in file order; ``power`` and ``column`` follow it.
    power : array of int
        Instances of each gate.
    column : array of int
        Where a gate's steady state stands in a row; a dynamic gate's gain follows it.
        Its place in the state is half of that for a dynamic gate; see :attr:`state`.
    dynamic, instant : int
        How many gates of either sort. A row is ``2 * dynamic + instant`` long.
    counts : array of int
        How many gates each conductance has.
    gmax_ns, reversal_mv : array of float32
        What the parameters start with, one a conductance.
    table : array of float32 (rows, 2 * dynamic + instant)
    """

    spec: ModelSpec
    interval_us: float
    gates: tuple[str, ...]
    power: Wholes
    column: Wholes
    dynamic: int
    instant: int
    counts: Wholes
    gmax_ns: Singles
    reversal_mv: Singles
    table: Singles

    @property
    def rows(self) -> int:
        """Rows of the table."""
        return int(self.table.shape[0])

    @property
    def rows_per_mv(self) -> float:
        """Rows in a millivolt, a power of two."""
        return (self.rows - 1) / SPAN_MV

    @property
    def state(self) -> Wholes:
        """Each gate's place in the state: dynamic gates first, then instantaneous ones."""
        moving = self.column < 2 * self.dynamic
        return np.where(moving, self.column // 2, self.column - self.dynamic)

    @property
    def table_bytes(self) -> int:
        """Flash that the table takes."""
        return int(self.table.nbytes)


def device_tables(
    model: ModelSpec, rows: int = USUAL_ROWS, interval_us: float = 50.0
) -> DeviceTables:
    """Tabulate a model for the device.

    Parameters
    ----------
    model : ModelSpec
    rows : int
        One of :data:`ROWS`.
    interval_us : float
        The tick, µs.

    Raises
    ------
    FirmwareError
        If there is no such grid or tick.
    FormulaError, TableError
        If a formula cannot be read, or gives values that no gate can have.
    """
    _check(rows, interval_us)
    gates = kinetics_of(model)
    v_mv = LOW_MV + SPAN_MV * np.arange(rows) / (rows - 1)
    moving = [k for k, gate in enumerate(gates) if not gate.instantaneous]
    instant = [k for k, gate in enumerate(gates) if gate.instantaneous]
    table = np.zeros((rows, 2 * len(moving) + len(instant)), dtype=np.float32)
    column = np.zeros(len(gates), dtype=np.int64)
    for place, k in enumerate(moving):
        column[k] = 2 * place
        table[:, 2 * place], table[:, 2 * place + 1] = inf_and_gain(gates[k], v_mv, interval_us)
    for place, k in enumerate(instant):
        column[k] = 2 * len(moving) + place
        table[:, column[k]] = gates[k].at(v_mv)[0]
    return DeviceTables(
        spec=model,
        interval_us=interval_us,
        gates=tuple(gate.name for gate in gates),
        power=np.array([gate.instances for gate in gates], dtype=np.int64),
        column=column,
        dynamic=len(moving),
        instant=len(instant),
        counts=np.array([len(c.gate) for c in model.conductance], dtype=np.int64),
        gmax_ns=np.array([c.gmax_ns for c in model.conductance], dtype=np.float32),
        reversal_mv=np.array(
            [c.reversal_at(model.temperature_c) for c in model.conductance], dtype=np.float32
        ),
        table=table,
    )


def _check(rows: int, interval_us: float) -> None:
    if rows not in ROWS:
        allowed = ", ".join(map(str, ROWS))
        raise FirmwareError(f"{rows} rows: the table can have {allowed} of them")
    low, high = INTERVAL_US
    if not low <= interval_us <= high:
        raise FirmwareError(f"a tick of {interval_us:g} µs: give {low:g} to {high:g} µs")


def inf_and_gain(gate: Kinetics, v_mv: Floats, interval_us: float) -> tuple[Floats, Floats]:
    """A gate's steady state and its gain over a tick, from its formulas, in float64."""
    inf, rate = gate.at(v_mv)
    return inf, -np.expm1(-rate * (interval_us * 1e-3))
