"""Plain arithmetic of the voltage: syntax tree to arrays of numbers, limits included.

A removable singularity (0/0 in ``x / (1 - exp(-x))``) takes its limit, also within
rounding of the singular point. Such points are found by a running error bound
(Higham, Accuracy and Stability of Numerical Algorithms, section 3.3): where
cancellation has eaten the digits, the value is extrapolated from both sides, and
only if both sides agree; a true pole stays one.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

_CHUNK = 8192  # few enough voltages that a formula's steps stay in the processor's cache


@dataclass(frozen=True, slots=True)
class Number:
    """A constant: a literal, or a parameter's value."""

    value: float


@dataclass(frozen=True, slots=True)
class Voltage:
    """The voltage in mV."""


@dataclass(frozen=True, slots=True)
class Apply:
    """A function of one or two operands; ``below`` if a denominator or a power holds it."""

    name: str
    operands: tuple[Node, ...]
    below: bool = False


@dataclass(frozen=True, slots=True)
class Choice:
    """``then if left sign right else other``."""

    sign: str
    left: Node
    right: Node
    then: Node
    other: Node


Node = Number | Voltage | Apply | Choice

_FUNCTIONS: dict[str, Callable[..., Any]] = {
    "+": np.add,
    "-": np.subtract,
    "*": np.multiply,
    "/": np.divide,
    "**": np.float_power,
    "neg": np.negative,
    "exp": np.exp,
    "log": np.log,
    "tanh": np.tanh,
    "sqrt": np.sqrt,
    "abs": np.abs,
    "min": np.minimum,
    "max": np.maximum,
    "<": np.less,
    "<=": np.less_equal,
    ">": np.greater,
    ">=": np.greater_equal,
}


def evaluate(tree: Node, v_mv: Floats) -> Floats:
    """Values of a tree at voltages in mV, limits taken.

    Not finite at poles, at overflows, and at roots and logarithms of negatives.
    """
    v = np.array(v_mv, dtype=np.float64).reshape(-1)
    value = np.empty_like(v)
    with np.errstate(all="ignore"):
        for start in range(0, v.size, _CHUNK):
            part = slice(start, start + _CHUNK)
            value[part] = _evaluated(tree, v[part])
    return value.reshape(np.shape(v_mv))


def _evaluated(tree: Node, v: Floats) -> Floats:
    doubts: list[Any] = []
    value: Floats = np.array(np.broadcast_to(_value(tree, v, doubts), v.shape))
    doubtful = ~np.isfinite(value)
    for doubt in doubts:
        doubtful |= doubt
    if doubtful.any():
        value[doubtful] = _repaired(tree, v[doubtful], value[doubtful])
    return value


def signature(tree: Node, v_mv: Floats) -> NDArray[np.uint64]:
    """Number that changes where a piecewise part of a tree changes sides."""
    mixed = np.zeros(v_mv.shape, dtype=np.uint64)
    with np.errstate(all="ignore"):
        for node in walk(tree):
            side = _side(node, v_mv)
            if side is not None:
                # An FNV-like mix: wraps, and differs when any side does.
                mixed = mixed * np.uint64(1099511628211) + side.astype(np.uint64)
    return mixed


def piecewise(tree: Node) -> bool:
    """Whether a tree holds a choice, an abs, a min or a max."""
    return any(
        isinstance(n, Choice) or (isinstance(n, Apply) and n.name in ("abs", "min", "max"))
        for n in walk(tree)
    )


def walk(node: Node) -> Iterator[Node]:
    """Every node of a tree, from the top."""
    yield node
    if isinstance(node, Apply):
        for operand in node.operands:
            yield from walk(operand)
    elif isinstance(node, Choice):
        for part in (node.left, node.right, node.then, node.other):
            yield from walk(part)


def _value(node: Node, v: Floats, doubts: list[Any]) -> Any:
    """Value of a node; ``doubts`` collects where a denominator's digits cancel."""
    if isinstance(node, Number):
        return np.float64(node.value)
    if isinstance(node, Voltage):
        return v
    if isinstance(node, Choice):
        sides = _value(node.left, v, doubts), _value(node.right, v, doubts)
        parts = _value(node.then, v, doubts), _value(node.other, v, doubts)
        return np.where(_FUNCTIONS[node.sign](*sides), *parts)
    operands = [_value(operand, v, doubts) for operand in node.operands]
    result = _FUNCTIONS[node.name](*operands)
    if node.below and node.name in ("+", "-", "log"):
        doubts.append(np.abs(result) <= 1e-4 * np.abs(operands[0]))
    return result


def _side(node: Node, v: Floats) -> Any:
    """Which piece of a piecewise node is in use at each voltage, or None."""
    if isinstance(node, Choice):
        return _FUNCTIONS[node.sign](_value(node.left, v, []), _value(node.right, v, []))
    if isinstance(node, Apply) and node.name == "abs":
        return _value(node.operands[0], v, []) < 0
    if isinstance(node, Apply) and node.name in ("min", "max"):
        return _value(node.operands[0], v, []) < _value(node.operands[1], v, [])
    return None


_ROUNDING = 2.0**-53


def _tracked(node: Node, v: Floats) -> tuple[Any, Any]:
    """Value of a node and a bound, to first order, on its rounding error."""
    if isinstance(node, Number):
        return np.float64(node.value), _ROUNDING * abs(node.value)
    if isinstance(node, Voltage):
        return v, _ROUNDING * np.abs(v)
    if isinstance(node, Choice):
        (a, _), (b, _) = _tracked(node.left, v), _tracked(node.right, v)
        (x, x_error), (y, y_error) = _tracked(node.then, v), _tracked(node.other, v)
        first = _FUNCTIONS[node.sign](a, b)
        return np.where(first, x, y), np.where(first, x_error, y_error)
    pairs = [_tracked(operand, v) for operand in node.operands]
    x, errors = [p[0] for p in pairs], [p[1] for p in pairs]
    result = _FUNCTIONS[node.name](*x)
    return result, _carried(node.name, result, x, errors) + _ROUNDING * np.abs(result)


def _carried(name: str, result: Any, x: list[Any], errors: list[Any]) -> Any:
    """Error a function's operands bring into its result, to first order."""
    match name:
        case "+" | "-":
            return errors[0] + errors[1]
        case "*":
            return np.abs(x[0]) * errors[1] + np.abs(x[1]) * errors[0]
        case "/":
            spread = (errors[0] + np.abs(result) * errors[1]) / np.abs(x[1])
            return np.where(np.isinf(x[1]), 0.0, spread)
        case "**":
            return _carried_by_power(np.abs(result), np.abs(x[0]), x[1], errors)
        case "exp":
            return np.abs(result) * errors[0]
        case "log":
            return errors[0] / np.abs(x[0])
        case "sqrt":
            return np.fmin(errors[0] / (2 * result), np.sqrt(errors[0]))
        case "min" | "max":
            return np.maximum(errors[0], errors[1])
    return errors[0]


def _carried_by_power(size: Any, base: Any, exponent: Any, errors: list[Any]) -> Any:
    """Error of a power: its ends over the base's spread, as slopes fail at a base of 0."""
    ends = [base + errors[0], np.maximum(base - errors[0], 0.0)]
    spread = np.maximum(*(np.abs(np.float_power(end, exponent) - size) for end in ends))
    steep = np.where(size > 0, np.abs(np.log(base)) * errors[1], 0.0)
    return spread + size * (_ROUNDING * np.abs(exponent) + steep)


def _repaired(tree: Node, v: Floats, value: Floats) -> Floats:
    """Replace the values whose digits are lost by their limits, where there is one."""
    error = np.broadcast_to(_tracked(tree, v)[1], v.shape)
    lost = ~(error <= 1e-10 * np.abs(value) + 1e-15) | ~np.isfinite(value)
    if lost.any():
        value = value.copy()
        value[lost] = _limit(tree, v[lost], value[lost], error[lost])
    return value


_REACH_MV = 2.0**-7
_AGREEMENT = 3e-5


def _limit(tree: Node, v: Floats, value: Floats, error: Floats) -> Floats:
    """Limit at each voltage from values on both sides, or nan if they do not meet.

    The symmetric Richardson estimate is of fourth order in the reach; left and right
    quadratic extrapolations must meet it, which poles, jumps and kinks do not.
    """
    reach = _REACH_MV * np.array([-3.0, -2.0, -1.0, 1.0, 2.0, 3.0])
    f = np.broadcast_to(_value(tree, v + reach[:, None], []), (6, v.size))
    left = 3 * f[2] - 3 * f[1] + f[0]
    right = 3 * f[3] - 3 * f[4] + f[5]
    middle = (4 * (f[2] + f[3]) - (f[1] + f[4])) / 6
    scale = np.fmax.reduce(np.abs(f), axis=0)
    meet = np.maximum(np.abs(left - middle), np.abs(right - middle)) <= _AGREEMENT * scale
    trusted = error <= 1e-6 * np.fmax(scale, np.abs(value))
    kept = np.where(np.isfinite(value) & ~trusted, np.nan, value)
    return np.where(meet, middle, kept)
