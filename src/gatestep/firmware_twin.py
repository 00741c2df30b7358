"""The device's step in float32, twice: in numpy, for many cells at once, and compiled.

Both take the operations in the order of the C in ``firmware_bridge/model``, one rounding
each and none contracted, so all three give the same bits. :func:`steps_numpy` is written
for arrays and chooses by masks, :func:`steps_compiled` for numbers and chooses by
branches: neither is made from the other.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .compiling import compiled
from .firmware import LOW_MV, DeviceTables, Singles, Wholes

_ZERO, _HALF, _ONE, _TWO = (np.float32(value) for value in (0.0, 0.5, 1.0, 2.0))
_LOW = np.float32(LOW_MV)


class Walk(NamedTuple):
    """What a device does along a series of voltages: ``i_pa[k]`` follows ``v_mv[k]``.

    ``i_pa[0]`` is the current of the gates at steady state for ``v_mv[0]``; ``x`` and
    ``rest`` are the gates, dynamic ones first, and their carried roundings at the end.
    """

    i_pa: Singles
    x: Singles
    rest: Singles


def steps_numpy(tables: DeviceTables, v_mv: ArrayLike, ticks: ArrayLike = 1) -> Walk:
    """Step cells side by side in numpy's float32.

    Parameters
    ----------
    tables : DeviceTables
    v_mv : array (n,) or (n, cells)
        Voltages; any number, NaN too.
    ticks : int or array (n,)
        Ticks that end with each voltage, from 1; the first is not used.
    """
    v = np.asarray(v_mv, dtype=np.float32)
    spans = np.broadcast_to(np.asarray(ticks, dtype=np.int64), v.shape[:1])
    model = _NumpyModel(tables, v.shape[1:])
    i_pa = np.zeros_like(v)
    with np.errstate(all="ignore"):
        model.settle(v[0])
        i_pa[0] = model.current(v[0])
        for k in range(1, v.shape[0]):
            model.cross(_HALF * (v[k - 1] + v[k]), int(spans[k]))
            model.follow(v[k])
            i_pa[k] = model.current(v[k])
    return Walk(i_pa, model.x, model.rest)


class _NumpyModel:
    """Gates of cells side by side."""

    def __init__(self, tables: DeviceTables, shape: tuple[int, ...]) -> None:
        self.tables, self.state = tables, tables.state
        self.x = np.zeros((tables.dynamic + tables.instant, *shape), dtype=np.float32)
        self.rest = np.zeros((tables.dynamic, *shape), dtype=np.float32)
        self.last = np.nextafter(np.float32(tables.rows - 1), _ZERO)
        self.rows_per_mv = np.float32(tables.rows_per_mv)

    def _row(self, v_mv: Any) -> tuple[Any, Any]:
        place = (v_mv - _LOW) * self.rows_per_mv
        place = np.where(place > _ZERO, place, _ZERO)
        place = np.where(place < self.last, place, self.last)
        row = place.astype(np.int64)
        return row, place - row.astype(np.float32)

    def _value(self, row: Any, f: Any, column: int) -> Any:
        low, high = self.tables.table[row, column], self.tables.table[row + 1, column]
        return low + f * (high - low)

    def settle(self, v_mv: Any) -> None:
        row, f = self._row(v_mv)
        for k in range(self.tables.dynamic):
            self.x[k] = self._value(row, f, 2 * k)
        self.rest[...] = _ZERO
        self.follow(v_mv)

    def follow(self, v_mv: Any) -> None:
        row, f = self._row(v_mv)
        for k in range(self.tables.instant):
            self.x[self.tables.dynamic + k] = self._value(row, f, 2 * self.tables.dynamic + k)

    def cross(self, v_mv: Any, ticks: int) -> None:
        row, f = self._row(v_mv)
        for k in range(self.tables.dynamic):
            inf, gain = self._value(row, f, 2 * k), self._value(row, f, 2 * k + 1)
            if ticks != 1:
                gain = _over_numpy(gain, ticks)
            change = (inf - self.x[k]) * gain - self.rest[k]
            new = self.x[k] + change
            within = (new > _ZERO) & (new <= _ONE)
            self.rest[k] = np.where(within, (new - self.x[k]) - change, _ZERO)
            self.x[k] = np.where(within, new, np.where(new > _ONE, _ONE, _ZERO))

    def current(self, v_mv: Any) -> Any:
        total = np.zeros(np.shape(v_mv), dtype=np.float32)
        gate = 0
        for c, count in enumerate(self.tables.counts):
            g: Any = self.tables.gmax_ns[c]
            for _ in range(count):
                g = g * _power_numpy(self.x[self.state[gate]], int(self.tables.power[gate]))
                gate += 1
            total = total + g * (self.tables.reversal_mv[c] - v_mv)
        return total


def _over_numpy(gain: Any, ticks: int) -> Any:
    total = np.zeros_like(gain)
    while ticks:
        if ticks & 1:
            total = np.minimum(total + gain * (_ONE - total), _ONE)
        gain = np.minimum(gain * (_TWO - gain), _ONE)
        ticks >>= 1
    return total


def _power_numpy(y: Any, n: int) -> Any:
    square = y * y
    fourth = square * square
    factors = [y, square, fourth, fourth * fourth]
    chosen = [factor for bit, factor in enumerate(factors) if n >> bit & 1]
    result = chosen[0]
    for factor in chosen[1:]:
        result = result * factor
    return result


def steps_compiled(tables: DeviceTables, v_mv: ArrayLike, ticks: ArrayLike = 1) -> Walk:
    """Step one cell in compiled float32; arguments as for :func:`steps_numpy`, ``v_mv`` (n,)."""
    v = np.ascontiguousarray(v_mv, dtype=np.float32)
    spans = np.array(np.broadcast_to(np.asarray(ticks, dtype=np.int64), v.shape))
    gates = tables.dynamic + tables.instant
    x, rest = np.zeros(gates, dtype=np.float32), np.zeros(gates, dtype=np.float32)
    sizes = np.array([tables.rows, tables.dynamic, tables.instant], dtype=np.int64)
    i_pa = np.zeros_like(v)
    scale = np.float32(tables.rows_per_mv)
    last = np.nextafter(np.float32(tables.rows - 1), _ZERO)
    layout = (tables.counts, tables.state, tables.power)
    parameters = (tables.gmax_ns, tables.reversal_mv)
    _walk(tables.table, sizes, scale, last, *layout, *parameters, v, spans, x, rest, i_pa)
    return Walk(i_pa, x, rest[: tables.dynamic])


@compiled
def _walk(
    table: Singles,
    sizes: Wholes,
    scale: Any,
    last: Any,
    counts: Wholes,
    state: Wholes,
    power: Wholes,
    gmax_ns: Singles,
    reversal_mv: Singles,
    v_mv: Singles,
    ticks: NDArray[np.int64],
    x: Singles,
    rest: Singles,
    i_pa: Singles,
) -> None:
    """Settle at the first voltage, then step along the others."""
    dynamic = sizes[1]
    row, f = _locate(v_mv[0], scale, last)
    for k in range(dynamic):
        x[k] = _between(table, row, f, 2 * k)
    for k in range(v_mv.size):
        if k > 0:
            row, f = _locate(_HALF * (v_mv[k - 1] + v_mv[k]), scale, last)
            for gate in range(dynamic):
                _cross(table, row, f, gate, ticks[k], x, rest)
        row, f = _locate(v_mv[k], scale, last)
        for gate in range(sizes[2]):
            x[dynamic + gate] = _between(table, row, f, 2 * dynamic + gate)
        i_pa[k] = _current(counts, state, power, gmax_ns, reversal_mv, x, v_mv[k])


@compiled
def _locate(v_mv: Any, scale: Any, last: Any) -> Any:
    """Row below a voltage and the place between it and the next; NaN counts as the lowest."""
    place = (v_mv - _LOW) * scale
    if not place > _ZERO:
        place = _ZERO
    place = min(place, last)
    row = np.int64(place)
    return row, place - np.float32(row)


@compiled
def _between(table: Singles, row: int, f: Any, column: int) -> Any:
    """A column of the table between two rows."""
    low = table[row, column]
    return low + f * (table[row + 1, column] - low)


@compiled
def _cross(table: Singles, row: int, f: Any, gate: int, ticks: int, x: Any, rest: Any) -> None:
    """Carry one gate over so many ticks."""
    inf = _between(table, row, f, 2 * gate)
    gain = _between(table, row, f, 2 * gate + 1)
    if ticks != 1:
        gain = _over(gain, ticks)
    change = (inf - x[gate]) * gain - rest[gate]
    new = x[gate] + change
    rest[gate] = (new - x[gate]) - change
    if not new > _ZERO:
        new, rest[gate] = _ZERO, _ZERO
    elif new > _ONE:
        new, rest[gate] = _ONE, _ZERO
    x[gate] = new


@compiled
def _over(gain: Any, ticks: int) -> Any:
    """The gain over several ticks."""
    total = _ZERO
    while ticks:
        if ticks & 1:
            total = min(total + gain * (_ONE - total), _ONE)
        gain = min(gain * (_TWO - gain), _ONE)
        ticks >>= 1
    return total


@compiled
def _current(
    counts: Wholes,
    state: Wholes,
    power: Wholes,
    gmax_ns: Singles,
    reversal_mv: Singles,
    x: Singles,
    v_mv: Any,
) -> Any:
    """The current the model injects, pA."""
    total = _ZERO
    gate = 0
    for c in range(counts.size):
        g = gmax_ns[c]
        for _ in range(counts[c]):
            g *= _power(x[state[gate]], power[gate])
            gate += 1
        total += g * (reversal_mv[c] - v_mv)
    return total


@compiled
def _power(y: Any, n: int) -> Any:
    """``y ** n`` for n from 1 to 15, by squaring."""
    square = y * y
    result = y if n & 1 else _ONE
    if n & 2:
        result *= square
    if n > 3:
        fourth = square * square
        if n & 4:
            result *= fourth
        if n & 8:
            result *= fourth * fourth
    return result
