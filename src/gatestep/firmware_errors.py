"""What a device's float32 tables miss, by their number of rows.

Two measures: the tables against the formulas, between the grid's points; and the
current against the server's float64 kernel, along one series of voltages.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .compiling import compiled
from .firmware import LOW_MV, SPAN_MV, DeviceTables, Floats, Singles, device_tables, inf_and_gain
from .firmware_twin import steps_compiled
from .kernel import BANK, STATES, current, records, settle, step
from .kinetics import Kinetics, kinetics_of
from .specs import ModelSpec
from .tables import Tables

USUAL_MV = (-120.0, 60.0)
"""Range of the voltages walked, and for the gain's error relative to its own local value."""
STEPS = 20_000

_PARTS = 4  # each cell of the grid is examined at its quarters


@dataclass(frozen=True)
class RowsError:
    """What one choice of rows costs and misses.

    ``inf_error`` is the largest distance of any steady state from its formula, of 1;
    ``gain_error`` that of any gain, relative to it, over ``USUAL_MV``. ``jumps`` counts
    the cells in which a piecewise formula switches, which both leave out.
    ``current_error`` is the largest distance of the current from the server's over
    :data:`STEPS` ticks of :func:`walk_mv`, jumps and all, as a share of its range there.
    """

    rows: int
    step_mv: float
    table_bytes: int
    inf_error: float
    gain_error: float
    jumps: int
    current_error: float


def walk_mv(count: int) -> Singles:
    """Voltages like those of a busy cell: every 16 ticks another goal, reached by quarters.

    From a fixed multiplicative generator (Park and Miller 1988, Commun ACM 31:1192), in
    64ths of a millivolt, so each is a float32 and the same everywhere.

    Parameters
    ----------
    count : int
        How many.
    """
    low, high = (int(64 * bound) for bound in USUAL_MV)
    v_mv = np.empty(count, dtype=np.float32)
    now = goal = -65 * 64
    drawn = 1
    for k in range(count):
        if k % 16 == 0:
            drawn = drawn * 16807 % 2147483647
            goal = low + drawn % (high - low + 1)
        now += (goal - now) // 4
        v_mv[k] = now / 64
    return v_mv


def server_walk(tables: Tables, v_mv: Singles, interval_us: float) -> Floats:
    """The currents of the server's kernel, float64, along a series of voltages, in pA."""
    bank = records(BANK)
    bank[0] = tables.bank
    x, v = np.zeros(STATES), v_mv.astype(np.float64)
    i_pa = np.zeros_like(v)
    _server_steps(bank[0], tables.table, x, v, interval_us * 1e-3, i_pa)
    return i_pa


@compiled
def _server_steps(bank: Any, table: Any, x: Any, v_mv: Any, dt_ms: float, i_pa: Any) -> None:
    """Settle at the first voltage and step along the others."""
    settle(bank, table, x, v_mv[0])
    i_pa[0] = current(bank, x, v_mv[0])
    for k in range(np.uint64(1), np.uint64(v_mv.size)):
        i_pa[k] = step(bank, table, x, v_mv[k - np.uint64(1)], v_mv[k], dt_ms)


def current_error(device: DeviceTables, server: Tables, v_mv: Singles) -> float:
    """Largest distance of the device's current from the server's, as a share of its range."""
    true = server_walk(server, v_mv, device.interval_us)
    off = np.abs(steps_compiled(device, v_mv).i_pa - true).max()
    return float(off / (np.ptp(true) or 1.0))


def rows_error(model: ModelSpec, server: Tables, rows: int, interval_us: float) -> RowsError:
    """Measure what a float32 table of so many rows misses, at the quarters of its cells.

    Parameters
    ----------
    model : ModelSpec
    server : Tables
        The same model as the server holds it.
    rows : int
        One of :data:`gatestep.firmware.ROWS`.
    interval_us : float
        The tick, µs.

    Raises
    ------
    FirmwareError
        If there is no such grid or tick.
    """
    tables = device_tables(model, rows, interval_us)
    v_mv = LOW_MV + SPAN_MV * np.arange((rows - 1) * _PARTS + 1) / ((rows - 1) * _PARTS)
    missed = [
        _gate_error(gate, tables, int(column), v_mv)
        for gate, column in zip(kinetics_of(model), tables.column, strict=True)
    ]
    return RowsError(
        rows=rows,
        step_mv=SPAN_MV / (rows - 1),
        table_bytes=tables.table_bytes,
        inf_error=max((inf for inf, _, _ in missed), default=0.0),
        gain_error=max((gain for _, gain, _ in missed), default=0.0),
        jumps=sum(jumps for _, _, jumps in missed),
        current_error=current_error(tables, server, walk_mv(STEPS)),
    )


def _gate_error(
    gate: Kinetics, tables: DeviceTables, column: int, v_mv: Floats
) -> tuple[float, float, int]:
    """A gate's worst errors of steady state and gain, and its cells with a switch."""
    smooth = ~_switching(gate, v_mv)
    jumps = int((~smooth[1::_PARTS]).sum())  # a first quarter lies in one cell only
    inf, gain = inf_and_gain(gate, v_mv, tables.interval_us)
    off = np.abs(_between(tables.table[:, column]) - inf)[smooth]
    worst = float(off.max(initial=0.0))
    if gate.instantaneous:
        return worst, 0.0, jumps
    usual = smooth & (v_mv >= USUAL_MV[0]) & (v_mv <= USUAL_MV[1])
    off = np.abs(_between(tables.table[:, column + 1])[usual] / gain[usual] - 1.0)
    return worst, float(off.max(initial=0.0)), jumps


def _between(column: Any) -> Floats:
    """A column and linear interpolation at the quarters between its values."""
    places = np.arange((column.size - 1) * _PARTS + 1) / _PARTS
    between: Floats = np.interp(places, np.arange(column.size), column.astype(np.float64))
    return between


def _switching(gate: Kinetics, v_mv: Floats) -> NDArray[np.bool_]:
    """Which examined places lie in a cell where a piecewise formula switches."""
    marked = np.zeros(v_mv.size, dtype=bool)
    if not gate.branching:
        return marked
    switches = (np.diff(gate.branches(v_mv).reshape(-1)) != 0).reshape(-1, _PARTS).any(axis=1)
    for part in range(_PARTS + 1):
        marked[part : part + _PARTS * switches.size : _PARTS] |= switches
    return marked
