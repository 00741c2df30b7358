"""Rate formulas: text to a small syntax tree to numbers, never evaluated as Python.

A rate in a model file is plain arithmetic in ``V`` (mV) and the file's parameters,
one of NeuroML2's three standard forms, measured points, or a number. Each becomes
a :class:`Curve`, a function of arrays of voltages.

Python's parser gives the first tree; only what is on a short white list is carried
over into the nodes below, and length, depth and size are limited, so a hostile file
can neither run code nor exhaust the loader.

A removable singularity (0/0 in ``x / (1 - exp(-x))``) takes its limit, also within
rounding of the singular point. Such points are found by a running error bound
(Higham, Accuracy and Stability of Numerical Algorithms, section 3.3): where
cancellation has eaten the digits, the value is extrapolated from both sides, and
only if both sides agree; a true pole stays one.
"""

from __future__ import annotations

import ast
import difflib
import keyword
import re
import warnings
from abc import ABC, abstractmethod
from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .errors import FormulaError
from .specs import MeasuredPoints, Rate, StandardRate

MAX_TEXT = 500
MAX_NODES = 300
MAX_DEPTH = 100
MAX_PARENTHESES = 40
MAX_DIGITS = 30

Floats = NDArray[np.float64]

ALLOWED = (
    "allowed are numbers, V (mV), the file's parameters, + - * / **, exp log tanh sqrt abs "
    "min max, and a if V < b else c"
)


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

_BINARY: dict[type[ast.operator], str] = {
    ast.Add: "+",
    ast.Sub: "-",
    ast.Mult: "*",
    ast.Div: "/",
    ast.Pow: "**",
}
_COMPARE: dict[type[ast.cmpop], str] = {ast.Lt: "<", ast.LtE: "<=", ast.Gt: ">", ast.GtE: ">="}
_CALLS = ("exp", "log", "tanh", "sqrt", "abs", "min", "max")
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


class Curve(ABC):
    """A rate, steady state or time constant as a function of the voltage in mV."""

    @property
    @abstractmethod
    def branching(self) -> bool:
        """Whether the definition is piecewise, so that :meth:`branches` can change."""

    @abstractmethod
    def __call__(self, v_mv: ArrayLike) -> Floats:
        """Values at voltages in mV; not finite where the definition has none."""

    @abstractmethod
    def branches(self, v_mv: ArrayLike) -> NDArray[np.uint64]:
        """Signature of the pieces in use at each voltage; it changes where one ends."""


@dataclass(frozen=True)
class FormulaCurve(Curve):
    """A curve given by a syntax tree."""

    tree: Node

    @property
    def branching(self) -> bool:
        """Whether the tree holds a choice, an abs, a min or a max."""
        return any(
            isinstance(n, Choice) or (isinstance(n, Apply) and n.name in ("abs", "min", "max"))
            for n in _walk(self.tree)
        )

    def __call__(self, v_mv: ArrayLike) -> Floats:
        """Values at voltages in mV; not finite at poles, overflows and roots of negatives."""
        shape = np.shape(v_mv)
        v = np.array(v_mv, dtype=np.float64).reshape(-1)
        doubts: list[Any] = []
        with np.errstate(all="ignore"):
            value: Floats = np.array(np.broadcast_to(_value(self.tree, v, doubts), v.shape))
            doubtful = ~np.isfinite(value)
            for doubt in doubts:
                doubtful |= doubt
            if doubtful.any():
                value[doubtful] = _repaired(self.tree, v[doubtful], value[doubtful])
        return value.reshape(shape)

    def branches(self, v_mv: ArrayLike) -> NDArray[np.uint64]:
        """Signature of the pieces in use at each voltage."""
        v = np.asarray(v_mv, dtype=np.float64)
        signature = np.zeros(v.shape, dtype=np.uint64)
        with np.errstate(all="ignore"):
            for node in _walk(self.tree):
                side = _side(node, v)
                if side is not None:
                    # An FNV-like mix: wraps, and differs when any side does.
                    signature = signature * np.uint64(1099511628211) + side.astype(np.uint64)
        return signature


@dataclass(frozen=True)
class PointsCurve(Curve):
    """A curve through measured points: linear between them, constant outside."""

    points_mv: Floats
    values: Floats

    @property
    def branching(self) -> bool:
        """Every point is a kink."""
        return True

    def __call__(self, v_mv: ArrayLike) -> Floats:
        """Values at voltages in mV."""
        return np.asarray(np.interp(np.asarray(v_mv), self.points_mv, self.values))

    def branches(self, v_mv: ArrayLike) -> NDArray[np.uint64]:
        """Number of points at or below each voltage."""
        return np.searchsorted(self.points_mv, v_mv, side="right").astype(np.uint64)


def make_curve(rate: Rate, parameters: Mapping[str, float], where: str) -> Curve:
    """Turn a rate of any of the allowed kinds into a curve.

    Parameters
    ----------
    rate : str, float, StandardRate or MeasuredPoints
        As the model file gives it.
    parameters : mapping of str to float
        The file's named numbers.
    where : str
        What the rate belongs to, for messages, such as ``K.n alpha``.

    Raises
    ------
    FormulaError
        If a formula is not plain arithmetic, or exceeds a limit.
    """
    if isinstance(rate, str):
        return FormulaCurve(parse_formula(rate, parameters, where))
    if isinstance(rate, MeasuredPoints):
        return PointsCurve(np.array(rate.v_mv, dtype=float), np.array(rate.values, dtype=float))
    if isinstance(rate, StandardRate):
        return FormulaCurve(_standard_tree(rate))
    return FormulaCurve(Number(float(rate)))


def _standard_tree(rate: StandardRate) -> Node:
    text = {
        "exp": "rate * exp((V - midpoint) / scale)",
        "sigmoid": "rate / (1 + exp(-(V - midpoint) / scale))",
        "exp_linear": "rate * ((V - midpoint) / scale) / (1 - exp(-(V - midpoint) / scale))",
    }[rate.form]
    values = {"rate": rate.rate, "midpoint": rate.midpoint, "scale": rate.scale}
    return parse_formula(text, values, rate.form)


def parse_formula(text: str, parameters: Mapping[str, float], where: str) -> Node:
    """Parse a formula into a white-listed syntax tree.

    Raises
    ------
    FormulaError
        Naming ``where``, the offending piece and what is allowed.
    """
    _check_parameters(parameters, where)
    text = " ".join(text.split())
    _check_text(text, where)
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            tree = ast.parse(text, mode="eval").body
    except SyntaxError as error:
        place = f" at position {error.offset}" if error.offset else ""
        raise FormulaError(f"{where}: cannot read {text!r}{place}: {error.msg}") from None
    except (ValueError, RecursionError, MemoryError, OverflowError) as error:
        raise FormulaError(f"{where}: cannot read {text!r}: {error}") from None
    _check_size(tree, where)
    return _Reader(text, parameters, where).node(tree, below=False)


def _check_parameters(parameters: Mapping[str, float], where: str) -> None:
    for name in parameters:
        if name == "V" or name in _CALLS or keyword.iskeyword(name):
            raise FormulaError(f"{where}: parameter {name!r} has a reserved name; rename it")
        if not name.isidentifier():
            raise FormulaError(
                f"{where}: parameter {name!r} would be read as arithmetic; "
                "use letters, digits and underscores"
            )


def _check_text(text: str, where: str) -> None:
    """Refuse what the parser should not even see: length, characters, depth of parentheses."""
    if not text or len(text) > MAX_TEXT:
        raise FormulaError(f"{where}: formula of {len(text)} characters; 1 to {MAX_TEXT} allowed")
    stray = re.search(r"[^A-Za-z0-9_.+\-*/(),<>= ]", text)
    if stray:
        hint = "a power is written **; " if stray[0] == "^" else ""
        raise FormulaError(
            f"{where}: character {stray[0]!r} at position {stray.start() + 1} of {text!r}; "
            f"{hint}{ALLOWED}"
        )
    depth = 0
    for character in text:
        depth += (character == "(") - (character == ")")
        if depth > MAX_PARENTHESES:
            raise FormulaError(f"{where}: parentheses nest more than {MAX_PARENTHESES} deep")


def _check_size(tree: ast.expr, where: str) -> None:
    """Count nodes and depth without recursion, before anything recurses."""
    layer: list[ast.AST] = [tree]
    nodes = depth = 0
    while layer:
        nodes, depth = nodes + len(layer), depth + 1
        if depth > MAX_DEPTH or nodes > 4 * MAX_NODES:
            raise FormulaError(
                f"{where}: formula too large; at most {MAX_NODES} operations and numbers, "
                f"nested at most {MAX_DEPTH} deep"
            )
        layer = [child for node in layer for child in ast.iter_child_nodes(node)]
    if sum(isinstance(n, ast.Constant | ast.Name | ast.BinOp) for n in ast.walk(tree)) > MAX_NODES:
        raise FormulaError(f"{where}: formula holds over {MAX_NODES} operations and numbers")


@dataclass(frozen=True)
class _Reader:
    """Carries white-listed pieces of Python's tree over into ours."""

    text: str
    parameters: Mapping[str, float]
    where: str

    def node(self, tree: ast.expr, below: bool) -> Node:
        match tree:
            case ast.Constant(value=value):
                return Number(self.number(tree, value))
            case ast.Name(id="V"):
                return Voltage()
            case ast.Name(id=name) if name in self.parameters:
                return Number(float(self.parameters[name]))
            case ast.UnaryOp(op=ast.USub(), operand=x):
                return Apply("neg", (self.node(x, below),))
            case ast.UnaryOp(op=ast.UAdd(), operand=x):
                return self.node(x, below)
            case ast.BinOp(left=a, op=op, right=b) if type(op) in _BINARY:
                name = _BINARY[type(op)]
                left = self.node(a, below or name == "**")
                right = self.node(b, below or name in ("/", "**"))
                return Apply(name, (left, right), below)
            case ast.Call(func=ast.Name(id=name), args=args, keywords=[]) if name in _CALLS:
                return self.call(tree, name, [self.node(x, below) for x in args], below)
            case ast.IfExp(
                test=ast.Compare(left=a, ops=[sign], comparators=[b]), body=x, orelse=y
            ) if type(sign) in _COMPARE:
                a_b_x_y = [self.node(part, below) for part in (a, b, x, y)]
                return Choice(_COMPARE[type(sign)], *a_b_x_y)
            case _:
                raise self.refusal(tree)

    def number(self, tree: ast.expr, value: object) -> float:
        if isinstance(value, bool) or not isinstance(value, int | float):
            raise self.refusal(tree)
        if isinstance(value, int) and len(str(value)) > MAX_DIGITS:
            raise self.refusal(tree, f"number of over {MAX_DIGITS} digits")
        if not np.isfinite(float(value)):
            raise self.refusal(tree, "number too large")
        return float(value)

    def call(self, tree: ast.expr, name: str, operands: list[Node], below: bool) -> Node:
        if name not in ("min", "max"):
            if len(operands) != 1:
                raise self.refusal(tree, f"{name} takes one value")
            return Apply(name, tuple(operands), below)
        if len(operands) < 2:
            raise self.refusal(tree, f"{name} takes two values or more")
        while len(operands) > 1:  # halved each time, so many operands nest little
            pairs = zip(operands[::2], operands[1::2], strict=False)
            odd = operands[-1:] if len(operands) % 2 else []
            operands = [Apply(name, pair, below) for pair in pairs] + odd
        return operands[0]

    def refusal(self, tree: ast.expr, why: str = "") -> FormulaError:
        piece = ast.get_source_segment(self.text, tree) or self.text
        if not why and isinstance(tree, ast.Name):
            why = self.unknown(tree.id)
        return FormulaError(
            f"{self.where}: {why or 'not plain arithmetic'}: {piece!r} at position "
            f"{tree.col_offset + 1} of {self.text!r}; {ALLOWED}"
        )

    def unknown(self, name: str) -> str:
        known = ["V", *self.parameters]
        if name in _CALLS:
            return f"{name} needs parentheses"
        close = difflib.get_close_matches(name, known, 1) or ["V"] * (name == "v")
        hint = f", did you mean {close[0]!r}?" if close else ""
        return f"unknown name (known: {', '.join(known)}{hint})"


def _walk(node: Node) -> Iterator[Node]:
    yield node
    if isinstance(node, Apply):
        for operand in node.operands:
            yield from _walk(operand)
    elif isinstance(node, Choice):
        for part in (node.left, node.right, node.then, node.other):
            yield from _walk(part)


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
