"""Rate formulas: text to a small syntax tree to numbers, never evaluated as Python.

A rate in a model file is plain arithmetic in ``V`` (mV) and the file's parameters,
one of NeuroML2's three standard forms, measured points, or a number. Each becomes
a :class:`Curve`, a function of arrays of voltages.

Python's parser gives the first tree; only what is on a short white list is carried
over into the nodes of :mod:`gatestep.arithmetic`, and length, depth and size are
limited, so a hostile file can neither run code nor exhaust the loader.
"""

from __future__ import annotations

import ast
import difflib
import keyword
import re
import warnings
from abc import ABC, abstractmethod
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .arithmetic import (
    Apply,
    Choice,
    Floats,
    Node,
    Number,
    Voltage,
    evaluate,
    piecewise,
    signature,
)
from .errors import FormulaError
from .specs import MeasuredPoints, Rate, StandardRate

MAX_TEXT = 500
MAX_NODES = 300
MAX_DEPTH = 100
MAX_PARENTHESES = 40
MAX_DIGITS = 30

ALLOWED = (
    "allowed are numbers, V (mV), the file's parameters, + - * / **, exp log tanh sqrt abs "
    "min max, and a if V < b else c"
)

_BINARY: dict[type[ast.operator], str] = {
    ast.Add: "+",
    ast.Sub: "-",
    ast.Mult: "*",
    ast.Div: "/",
    ast.Pow: "**",
}
_COMPARE: dict[type[ast.cmpop], str] = {ast.Lt: "<", ast.LtE: "<=", ast.Gt: ">", ast.GtE: ">="}
_CALLS = ("exp", "log", "tanh", "sqrt", "abs", "min", "max")


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
        """Whether the tree is piecewise."""
        return piecewise(self.tree)

    def __call__(self, v_mv: ArrayLike) -> Floats:
        """Values at voltages in mV, limits taken; not finite where there is none."""
        return evaluate(self.tree, np.asarray(v_mv, dtype=np.float64))

    def branches(self, v_mv: ArrayLike) -> NDArray[np.uint64]:
        """Signature of the pieces in use at each voltage."""
        return signature(self.tree, np.asarray(v_mv, dtype=np.float64))


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
