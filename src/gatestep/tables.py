"""Gate tables: each gate's kinetics on one even voltage grid, with measured error.

At load time every gate becomes its steady state and its rate 1/tau (per ms) on the
grid that the kernel interpolates. The table's own error, linear interpolation
against the formula, is measured at three places inside every cell of the grid; the
grid is halved until it is within 1e-6 of full scale (1 for a steady state, the
largest rate on the grid for a rate), or the model is refused. Where a piecewise
formula or a series of measured points switches, one cell of the grid carries the
break: its two ends hold the values of either side, and it is reported.
"""

from __future__ import annotations

import hashlib
import math
from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .arithmetic import Floats
from .errors import TableError
from .kernel import BANK, OHMIC
from .kinetics import Kinetics, curves_of, kinetics_of
from .simd import WIDTH
from .specs import ModelSpec

__all__ = [
    "BOUND",
    "Break",
    "GateReport",
    "Tables",
    "as_in_file",
    "build_tables",
    "curves_of",
    "fill_bank",
    "kinetics_of",
]

LOW_MV = -200.0
HIGH_MV = 200.0
COARSEST_ROWS_PER_MV = 16
FINEST_ROWS_PER_MV = 256
BOUND = 1e-6
"""Largest error of a table against its formula, as a fraction of full scale."""
BREAK_SHARE = 0.01
"""Largest share of a grid's cells that may be excepted from the bound as breaks."""
USUAL_MV = (-120.0, 60.0)
"""Range for the rate's error relative to its own local value."""

_PARTS = 4  # each cell is sampled at its quarters


@dataclass(frozen=True)
class Break:
    """A cell of the grid that holds a jump or kink and is excepted from the bound.

    ``inf_jump`` and ``rate_jump_per_ms`` are the values just above ``v_mv`` less
    those just below; near 0 at a kink.
    """

    v_mv: float
    inf_jump: float
    rate_jump_per_ms: float


@dataclass(frozen=True)
class GateReport:
    """How well one gate's table follows its formula.

    Errors are fractions of full scale with the voltages where they are worst;
    ``rate_local_error`` is relative to the rate at the same place, over
    ``USUAL_MV``. Rates and their errors are 0 for an instantaneous gate.
    """

    name: str
    instantaneous: bool
    inf_error: float
    inf_error_v_mv: float
    rate_error: float
    rate_error_v_mv: float
    rate_local_error: float
    rate_full_scale_per_ms: float
    breaks: tuple[Break, ...]


@dataclass(frozen=True)
class Tables:
    """A model in the kernel's layout.

    ``gates`` names the gates (``K.n``) in file order, which is the order of the
    bank's ``state`` and ``power`` and of ``reports``. ``bank`` is one record of
    :data:`gatestep.kernel.BANK`, ``table`` the flat table of ``rows * stride``
    values. ``sha256`` covers the bank's layout, the bank as loaded and the table.
    """

    spec: ModelSpec
    gates: tuple[str, ...]
    reports: tuple[GateReport, ...]
    bank: NDArray[Any]
    table: Floats
    step_mv: float
    sha256: str


@dataclass(frozen=True)
class _Sampled:
    """One gate on one grid: its columns and what they miss."""

    inf: Floats
    rate: Floats
    report: GateReport
    broken: NDArray[np.int64]  # excepted cells

    @property
    def worst(self) -> tuple[float, str, float]:
        """Error, quantity and voltage of the worst place outside breaks."""
        r = self.report
        return max(
            (r.inf_error, "steady state", r.inf_error_v_mv),
            (r.rate_error, "rate", r.rate_error_v_mv),
        )


def build_tables(model: ModelSpec) -> Tables:
    """Tabulate a model's gates on the coarsest grid that meets the bound.

    Raises
    ------
    FormulaError
        If a formula is not plain arithmetic.
    TableError
        If a formula gives values that no gate can have, or the finest grid misses
        the bound.
    """
    gates = kinetics_of(model)
    rows_per_mv = COARSEST_ROWS_PER_MV
    while True:
        sampled = [_sample(gate, rows_per_mv) for gate in gates]
        worst = max((s.worst[0] for s in sampled), default=0.0)
        if worst <= BOUND:
            break
        if rows_per_mv == FINEST_ROWS_PER_MV:
            raise _too_steep(sampled)
        # Linear interpolation's error falls by 4 with each halving of a smooth curve.
        halvings = max(1, math.ceil(math.log(worst / BOUND, 4)))
        rows_per_mv = min(FINEST_ROWS_PER_MV, rows_per_mv << min(halvings, 8))
    reports = tuple(_finished(g, s, rows_per_mv) for g, s in zip(gates, sampled, strict=True))
    bank, table = _laid_out(model, gates, sampled, rows_per_mv)
    digest = hashlib.sha256(repr(BANK.descr).encode() + bank.tobytes())
    digest.update(table.data)
    names = tuple(gate.name for gate in gates)
    return Tables(model, names, reports, bank, table, 1.0 / rows_per_mv, digest.hexdigest())


def _too_steep(sampled: list[_Sampled]) -> TableError:
    found = max(sampled, key=lambda s: s.worst[0])
    error, what, v_mv = found.worst
    return TableError(
        f"gate {found.report.name}: on the finest grid, {1 / FINEST_ROWS_PER_MV} mV, the table of "
        f"its {what} is wrong by {error:.3g} of full scale at V = {v_mv:.6g} mV; at most "
        f"{BOUND:g} is accepted. Use a gentler slope; a true step is written as "
        "'a if V < b else c', which costs one cell of the grid"
    )


def _sample(gate: Kinetics, rows_per_mv: int) -> _Sampled:
    """Evaluate a gate on a grid and measure what interpolation makes of it."""
    cells = round((HIGH_MV - LOW_MV) * rows_per_mv)
    v = LOW_MV + np.arange(cells * _PARTS + 1) / (rows_per_mv * _PARTS)
    inf, rate = gate.at(v)
    full_scale = float(rate[::_PARTS].max())
    errors = _missed(inf), _missed(rate) / (full_scale or 1.0)
    broken = np.zeros(cells, dtype=bool)
    if gate.branching:
        switches = np.diff(gate.branches(v).reshape(-1)) != 0
        broken = switches.reshape(cells, _PARTS).any(axis=1)
    excepted = broken & (np.maximum(*errors) > BOUND)
    _check_share(gate, excepted)
    report = _report(gate, v[::_PARTS], rate[::_PARTS], full_scale, errors, excepted)
    return _Sampled(inf[::_PARTS].copy(), rate[::_PARTS].copy(), report, np.flatnonzero(excepted))


def _missed(values: Floats) -> Floats:
    """Largest distance of linear interpolation from the values inside each cell."""
    ends = values[::_PARTS]
    low, rise = ends[:-1], np.diff(ends)
    missed = [
        np.abs(values[part::_PARTS] - (low + part / _PARTS * rise)) for part in range(1, _PARTS)
    ]
    worst: Floats = np.max(missed, axis=0)
    return worst


def _check_share(gate: Kinetics, excepted: NDArray[np.bool_]) -> None:
    count, cells = int(excepted.sum()), excepted.size
    if count > BREAK_SHARE * cells:
        raise TableError(
            f"gate {gate.name}: {count} of {cells} cells of the grid hold a jump or kink of a "
            f"piecewise formula or of measured points; at most {BREAK_SHARE:.0%} may. Use fewer "
            "or smoother points"
        )


def _report(
    gate: Kinetics,
    v: Floats,
    rate: Floats,
    full_scale: float,
    errors: tuple[Floats, Floats],
    excepted: NDArray[np.bool_],
) -> GateReport:
    inf_errors, rate_errors = (np.where(excepted, 0.0, e) for e in errors)
    inf_at, rate_at = int(inf_errors.argmax()), int(rate_errors.argmax())
    usual = (v[:-1] >= USUAL_MV[0]) & (v[:-1] < USUAL_MV[1])
    lower = np.maximum(np.minimum(rate[:-1], rate[1:]), np.finfo(float).tiny)
    local = rate_errors[usual] * full_scale / lower[usual]
    middle = v[:-1] + 0.5 * (v[1] - v[0])
    return GateReport(
        name=gate.name,
        instantaneous=gate.instantaneous,
        inf_error=float(inf_errors[inf_at]),
        inf_error_v_mv=float(middle[inf_at]),
        rate_error=float(rate_errors[rate_at]),
        rate_error_v_mv=float(middle[rate_at]),
        rate_local_error=float(local.max()),
        rate_full_scale_per_ms=full_scale,
        breaks=(),
    )


def _finished(gate: Kinetics, sampled: _Sampled, rows_per_mv: int) -> GateReport:
    """The report with its breaks located by bisection between neighbouring samples."""
    if sampled.broken.size == 0:
        return sampled.report
    parts = np.arange(_PARTS + 1) / (rows_per_mv * _PARTS)
    v = LOW_MV + sampled.broken[:, None] / rows_per_mv + parts
    signatures = gate.branches(v)
    # argmax finds the first True: the first sample on another side than the cell's low end.
    other = (signatures != signatures[:, :1]).argmax(axis=1)
    row = np.arange(other.size)
    low, high = v[row, other - 1], v[row, other]
    below = gate.branches(low)
    for _ in range(40):
        middle = 0.5 * (low + high)
        same = gate.branches(middle) == below
        low, high = np.where(same, middle, low), np.where(same, high, middle)
    before, after = gate.at(low), gate.at(high)
    found = zip(high, after[0] - before[0], after[1] - before[1], strict=True)
    breaks = tuple(Break(float(at), float(a), float(b)) for at, a, b in found)
    return GateReport(**{**vars(sampled.report), "breaks": breaks})


def _laid_out(
    model: ModelSpec, gates: list[Kinetics], sampled: list[_Sampled], rows_per_mv: int
) -> tuple[NDArray[Any], Floats]:
    """Bank record and table as the kernel reads them."""
    rows = round((HIGH_MV - LOW_MV) * rows_per_mv) + 1
    moving = [k for k, gate in enumerate(gates) if not gate.instantaneous]
    instant = [k for k, gate in enumerate(gates) if gate.instantaneous]
    dynamic = -(-len(moving) // WIDTH) * WIDTH
    table = np.zeros((rows, 2 * dynamic + len(instant)))
    state = np.zeros(len(gates), dtype=np.int64)
    for column, k in enumerate(moving):
        table[:, column], table[:, dynamic + column] = sampled[k].inf, sampled[k].rate
        state[k] = column
    for column, k in enumerate(instant):
        table[:, 2 * dynamic + column] = sampled[k].inf
        state[k] = dynamic + column
    bank = np.zeros(1, dtype=BANK)[0]
    bank["v_low_mv"], bank["rows_per_mv"], bank["rows"] = LOW_MV, rows_per_mv, rows
    bank["stride"], bank["dynamic"], bank["instant"] = table.shape[1], dynamic, len(instant)
    bank["state"][: len(gates)] = state
    bank["power"][: len(gates)] = [gate.instances for gate in gates]
    for field, values in _conductance_fields(model):
        bank[field][: len(model.conductance)] = values
    bank["conductances"] = len(model.conductance)
    flat = table.reshape(-1)
    flat.flags.writeable = False
    return bank, flat


def _conductance_fields(model: ModelSpec) -> Iterator[tuple[str, list[float]]]:
    conductances = model.conductance
    yield "kind", [OHMIC for _ in conductances]
    yield "gmax_ns", [c.gmax_ns for c in conductances]
    yield "reversal_mv", [c.reversal_at(model.temperature_c) for c in conductances]
    yield "gates", [len(c.gate) for c in conductances]


def as_in_file(tables: Tables) -> Tables:
    """A model with the parameters of its file, whatever was set since."""
    bank = tables.bank.copy()
    for name, values in _conductance_fields(tables.spec):
        bank[name][: len(values)] = values
    return replace(tables, bank=bank)


def fill_bank(tables: Tables, bank_record: Any, table_out: Floats) -> None:
    """Write a model into a preallocated bank.

    Parameters
    ----------
    tables : Tables
        The model.
    bank_record : record of BANK
        One element of an array of :data:`gatestep.kernel.BANK`, written in place.
    table_out : 1-D array of float64
        At least ``tables.table.size`` long; what lies beyond is left as it is.

    Raises
    ------
    TableError
        If the table does not fit; nothing has been written then.
    """
    size = tables.table.size
    if table_out.ndim != 1 or table_out.dtype != np.float64 or table_out.size < size:
        raise TableError(
            f"model {tables.spec.title!r} needs a table of {size} values and the bank holds "
            f"{table_out.size}; use a model with fewer or gentler gates"
        )
    table_out[:size] = tables.table
    for field in BANK.names or ():
        bank_record[field] = tables.bank[field]
