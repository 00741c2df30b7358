"""Four gates at a time: the innermost arithmetic of the step.

A gate relaxes over a held voltage as ``x <- inf + (x - inf) * exp(-dt * rate)``.
With the table's columns side by side, four gates need eight contiguous loads and
one four-wide exponential, so the block is written as LLVM vector code: it stays
vectors on every processor, where a compiler would have to guess at aliasing. Two
blocks side by side take the same steps in turn, so that one's waiting is filled by
the other's work.

The exponential is our own, from plain additions and multiplications without
contraction, so that each processor gives the same bits: ``exp(-y) = 2**n * exp(r)``
with ``n = round(-y / ln 2)``, ``|r| <= ln(2) / 2`` and the Taylor series of degree
12, whose remainder there is below 1.7e-16. Within 3 units in the last place of
the true value for y in [0, 708]; larger y count as 708, which gives 3e-308.
"""

from __future__ import annotations

from functools import partial
from math import factorial
from typing import Any

import numpy as np
from llvmlite import ir
from numba import config, types
from numba.extending import intrinsic

WIDTH = 4
"""Gates in one block; columns of a table are padded to a multiple of it."""

_LARGEST = 708.0
_LOG2_E = 1.4426950408889634
# ln 2 in two parts; the first has its low 32 bits clear, so n times it is exact.
_LN2_HIGH = 6.93147180369123816490e-01
_LN2_LOW = 1.90821492927058770002e-10
# Adding 1.5 * 2**52 rounds to an integer and leaves it in the low bits.
_ROUNDER = 6755399441055744.0
_SERIES = [1.0 / factorial(k) for k in range(13)]


def _relax_plain(
    table: Any,
    x: Any,
    low: Any,
    high: Any,
    dynamic: Any,
    block: Any,
    f: Any,
    dt: Any,
    width: int = WIDTH,
) -> None:
    """[hot] The same block in numpy, operation for operation."""
    low, high, dynamic, block = int(low), int(high), int(dynamic), int(block)
    a = table[low + block : low + block + width]
    b = table[high + block : high + block + width]
    inf = a + f * (b - a)
    a = table[low + dynamic + block : low + dynamic + block + width]
    b = table[high + dynamic + block : high + dynamic + block + width]
    y = dt * (a + f * (b - a))
    y = np.where(y < _LARGEST, y, _LARGEST)
    t = _ROUNDER - y * _LOG2_E
    n = t - _ROUNDER
    r = -(y + n * _LN2_HIGH) - n * _LN2_LOW
    scale = ((t.view(np.uint64) + np.uint64(1023)) << np.uint64(52)).view(np.float64)
    old = x[block : block + width]
    x[block : block + width] = inf + (old - inf) * (_polynomial(_Numpy, r) * scale)


def _polynomial(o: Any, r: Any) -> Any:
    """The series of exp(r) by Estrin's scheme, for any carrier of add and mul."""
    c = [o.const(k) for k in _SERIES]
    r2 = o.mul(r, r)
    r4 = o.mul(r2, r2)

    def quad(k: int) -> Any:
        first = o.add(c[k], o.mul(c[k + 1], r))
        second = o.add(c[k + 2], o.mul(c[k + 3], r))
        return o.add(first, o.mul(r2, second))

    top = o.add(quad(8), o.mul(r4, c[12]))
    return o.add(quad(0), o.mul(r4, o.add(quad(4), o.mul(r4, top))))


class _Numpy:
    """Carrier of plain numbers."""

    @staticmethod
    def const(value: float) -> float:
        return value

    @staticmethod
    def add(a: Any, b: Any) -> Any:
        return a + b

    @staticmethod
    def mul(a: Any, b: Any) -> Any:
        return a * b


class _Vector:
    """Carrier of LLVM vectors of ``width`` doubles: emits instructions."""

    def __init__(self, builder: Any, width: int) -> None:
        self.builder, self.width = builder, width
        self.doubles = ir.VectorType(ir.DoubleType(), width)
        self.wholes = ir.VectorType(ir.IntType(64), width)
        self.lanes = ir.VectorType(ir.IntType(32), width)
        self.add, self.sub, self.mul = builder.fadd, builder.fsub, builder.fmul

    def const(self, value: float) -> Any:
        return ir.Constant(self.doubles, [ir.Constant(ir.DoubleType(), value)] * self.width)

    def whole(self, value: int) -> Any:
        return ir.Constant(self.wholes, [ir.Constant(ir.IntType(64), value)] * self.width)

    def spread(self, scalar: Any) -> Any:
        empty = ir.Constant(self.doubles, ir.Undefined)
        first = self.builder.insert_element(empty, scalar, ir.Constant(ir.IntType(32), 0))
        return self.builder.shuffle_vector(first, empty, ir.Constant(self.lanes, [0] * self.width))

    def address(self, base: Any, index: Any) -> Any:
        return self.builder.bitcast(self.builder.gep(base, [index]), self.doubles.as_pointer())

    def load(self, base: Any, index: Any) -> Any:
        return self.builder.load(self.address(base, index), align=8)

    def between(self, low: Any, high: Any, f: Any) -> Any:
        return self.add(low, self.mul(f, self.sub(high, low)))

    def exp_minus(self, y: Any) -> Any:
        build, largest = self.builder, self.const(_LARGEST)
        y = build.select(build.fcmp_ordered("<", y, largest), y, largest)
        t = self.sub(self.const(_ROUNDER), self.mul(y, self.const(_LOG2_E)))
        n = self.sub(t, self.const(_ROUNDER))
        r = build.fneg(self.add(y, self.mul(n, self.const(_LN2_HIGH))))
        r = self.sub(r, self.mul(n, self.const(_LN2_LOW)))
        power = build.add(build.bitcast(t, self.wholes), self.whole(1023))
        scale = build.bitcast(build.shl(power, self.whole(52)), self.doubles)
        return self.mul(_polynomial(self, r), scale)


def _relax_vector(width: int) -> Any:
    @intrinsic
    def relax(
        _typing: Any,
        table: Any,
        x: Any,
        low: Any,
        high: Any,
        dynamic: Any,
        block: Any,
        f: Any,
        dt: Any,
    ) -> Any:
        index = types.uint64
        signature = types.void(table, x, index, index, index, index, types.float64, types.float64)

        def generate(context: Any, builder: Any, sig: Any, args: Any) -> Any:
            v = _Vector(builder, width)
            rows = context.make_array(sig.args[0])(context, builder, args[0]).data
            state = context.make_array(sig.args[1])(context, builder, args[1]).data
            low_inf, high_inf = builder.add(args[2], args[5]), builder.add(args[3], args[5])
            low_rate, high_rate = builder.add(low_inf, args[4]), builder.add(high_inf, args[4])
            f, dt = v.spread(args[6]), v.spread(args[7])
            inf = v.between(v.load(rows, low_inf), v.load(rows, high_inf), f)
            rate = v.between(v.load(rows, low_rate), v.load(rows, high_rate), f)
            kept = v.exp_minus(v.mul(dt, rate))
            old = v.load(state, args[5])
            new = v.add(inf, v.mul(v.sub(old, inf), kept))
            builder.store(new, v.address(state, args[5]), align=8)
            return context.get_dummy_value()

        return signature, generate

    return relax


relax = _relax_plain if config.DISABLE_JIT else _relax_vector(WIDTH)
"""[hot] Relax one block of four gates in place.

``relax(table, x, low, high, dynamic, block, f, dt)``: ``low`` and ``high`` are the
indices in ``table`` of the two rows around the voltage, ``dynamic`` the padded
number of dynamic gates, ``block`` the first gate of the block, ``f`` in [0, 1] the
place between the rows, ``dt`` in ms. No bounds are checked.
"""

relax_pair = (
    partial(_relax_plain, width=2 * WIDTH) if config.DISABLE_JIT else _relax_vector(2 * WIDTH)
)
"""[hot] The same for two blocks, eight gates, from ``block`` on."""
