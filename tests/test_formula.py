"""Rate formulas: what is accepted, what it evaluates to, what is refused."""

import itertools
import math
import random
import re

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st
from scipy.special import expit, exprel

from gatestep.errors import FormulaError
from gatestep.formula import MAX_DEPTH, MAX_TEXT, make_curve, parse_formula
from gatestep.specs import MeasuredPoints, StandardRate

V = np.linspace(-150.0, 100.0, 1001)


def curve(text, **parameters):
    return make_curve(text, parameters, "K.n alpha")


def linear_exponential(rate, x, scale):
    """A * x / (1 - exp(-x / k)) without its singularity, from scipy.special.exprel."""
    return rate * scale / exprel(-np.asarray(x) / scale)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("-2**2", -4.0),
        ("2**3**2", 512.0),
        ("2**-1", 0.5),
        ("7 - 3 - 2", 2.0),
        ("8/4/2", 1.0),
        ("-(-3)", 3.0),
        ("+4", 4.0),
        ("min(3, 1, 2) + max(3, 5, 4)", 6.0),
        ("sqrt(9) + abs(-2) + log(exp(3)) + tanh(0)", 8.0),
        ("1e-3*1_000", 1.0),
        ("1 if 2 < 3 else 4", 1.0),
        ("1 if 2 > 3 else 4 if 5 <= 5 else 6", 4.0),
        ("1\n  + 2", 3.0),
    ],
)
def test_arithmetic_has_the_usual_precedence(text, expected):
    """Operators bind as in any arithmetic; expected values worked by hand."""
    assert curve(text)(-65.0) == pytest.approx(expected, rel=1e-15)


def random_formula(rng, depth):
    """Text of a random formula without division, whose digits therefore never cancel away."""
    if depth == 0 or rng.random() < 0.2:
        return rng.choice(["V", "p", "V/50", f"{rng.uniform(0.1, 9):.3f}"])
    a, b = random_formula(rng, depth - 1), random_formula(rng, depth - 1)
    shapes = ["(a + b)", "(a - b)", "(a*b)", "max(a, b)", "min(a, b)", "(a if b < a else b)", "-a"]
    shapes += ["abs(a)", "tanh(a)", "sqrt(abs(a))", "exp(min(3, a))", "log(1 + abs(a))", "(a)**2"]
    pieces = {"a": a, "b": b}
    return re.sub(r"\b[ab]\b", lambda found: pieces[found[0]], rng.choice(shapes))


@pytest.mark.parametrize("seed", range(300))
def test_formulas_evaluate_as_python_arithmetic_would(seed):
    """Any accepted formula has the value that Python's own float arithmetic gives it."""
    rng = random.Random(seed)
    text = random_formula(rng, 3)
    names = {n: getattr(math, n) for n in ("exp", "log", "tanh", "sqrt")}
    names |= {"abs": abs, "min": min, "max": max, "p": -3.5}
    for v_mv in (0.0, rng.uniform(-100, 60)):
        expected = eval(text, {"__builtins__": {}}, {**names, "V": v_mv})
        assert curve(text, p=-3.5)(v_mv) == pytest.approx(expected, rel=1e-9, abs=1e-11)


def test_arrays_keep_their_shape():
    """A curve maps any shape of voltages to the same shape; a constant fills it."""
    for text in ("V + 1", "0.25"):
        assert curve(text)(np.zeros((3, 4))).shape == (3, 4)
        assert curve(text)(0.0).shape == ()
    assert make_curve(0.25, {}, "x")(V).tolist() == [0.25] * V.size


# Formula, parameters, A and k of A * x / (1 - exp(-x / k)), sign of x, singular point.
SINGULAR = [
    ("0.1*(V + 40)/(1 - exp(-(V + 40)/10))", {}, 0.1, 10.0, 1, -40.0),
    ("0.01*(10 - (V + 65))/(exp((10 - (V + 65))/10) - 1)", {}, 0.01, 10.0, 1, -55.0),
    ("0.32*(V - VT - 13)/(1 - exp(-(V - VT - 13)/4))", {"VT": -56.2}, 0.32, 4.0, 1, -43.2),
    ("0.28*(V - VT - 40)/(exp((V - VT - 40)/5) - 1)", {"VT": -56.2}, 0.28, 5.0, -1, -16.2),
    ("0.00643*(V + 154.9)/(exp((V + 154.9)/11.9) - 1)", {}, 0.00643, 11.9, -1, -154.9),
    ("0.1*(V + 40)*(1 - exp(-(V + 40)/10))**-1", {}, 0.1, 10.0, 1, -40.0),
    ("(V + 40)*0.1*(1/(1 - exp(-(V + 40)/10)))", {}, 0.1, 10.0, 1, -40.0),
    ("2.88e-6*(V + 17)/(exp((V + 17)/4.63) - 1)", {}, 2.88e-6, 4.63, -1, -17.0),
]


@pytest.mark.parametrize(("text", "parameters", "rate", "scale", "sign", "at"), SINGULAR)
def test_removable_singularities_take_their_limit(text, parameters, rate, scale, sign, at):
    """On, within rounding of, and near the singular point the value is the limit's.

    Reference: scipy.special.exprel, which is exact through the singular point.
    """
    distances = np.concatenate([[0.0], *(s * 10.0 ** np.arange(-16, 2.0) for s in (-1.0, 1.0))])
    v = at + distances
    expected = linear_exponential(rate, sign * (v - at), scale)
    np.testing.assert_allclose(curve(text, **parameters)(v), expected, rtol=1e-9)


@pytest.mark.parametrize(("text", "parameters", "rate", "scale", "sign", "at"), SINGULAR)
def test_singular_formulas_are_right_on_the_whole_grid(text, parameters, rate, scale, sign, at):
    """No point of the finest table grid, and none random, is off by rounding or repair."""
    rng = np.random.default_rng(3)
    v = np.concatenate([np.arange(-200, 200, 1 / 256), rng.uniform(-200, 200, 5000)])
    expected = linear_exponential(rate, sign * (v - at), scale)
    np.testing.assert_allclose(curve(text, **parameters)(v), expected, rtol=1e-9)


@pytest.mark.parametrize(
    ("text", "at"),
    [
        ("1/V", 0.0),
        ("1/abs(V)", 0.0),
        ("1/V**2", 0.0),
        ("V/abs(V)", 0.0),
        ("log(abs(V))", 0.0),
        ("1/(V - VT - 13)", -43.2),
        ("(V + 41)/(1 - exp(-(V + 40)/10))", -40.0),
        ("max(V, 0)/(1 - exp(-V))", 0.0),
        ("log(V)", -1.0),
        ("sqrt(V)", -1.0),
        ("exp(exp(V))", 50.0),
        ("9**9**9", 0.0),
    ],
)
def test_poles_and_jumps_are_not_silenced(text, at):
    """Where left and right do not meet there is no limit, and the value is not finite."""
    assert not np.isfinite(curve(text, VT=-56.2)(at))


def test_overflow_inside_a_formula_may_leave_its_value_fine():
    """1 / (1 + exp(big)) is 0, whatever overflowed on the way."""
    assert curve("1/(1 + exp(V*10))")(200.0) == 0.0
    assert curve("1/(1 + exp(exp(V + 800)))")(0.0) == 0.0


def test_a_guarded_formula_needs_no_repair():
    """The usual guard of the singular point is read as the piecewise formula it is."""
    guarded = curve("0.1*(V + 40)/(1 - exp(-(V + 40)/10)) if abs(V + 40) > 1e-6 else 1.0")
    expected = linear_exponential(0.1, V + 40, 10.0)
    np.testing.assert_allclose(guarded(V), expected, rtol=1e-9)
    assert guarded(-40.0) == 1.0


def test_values_at_the_edge_of_a_domain_are_kept():
    """A square root that ends inside a denominator keeps its value at the end point."""
    assert curve("1/(1 + sqrt(V + 200))")(-200.0) == 1.0


@pytest.mark.parametrize(
    ("form", "expected"),
    [
        ("exp", lambda r, x: r * np.exp(x)),
        ("sigmoid", lambda r, x: r * expit(x)),
        ("exp_linear", lambda r, x: r / exprel(-x)),
    ],
)
@pytest.mark.parametrize("scale", [9.0, -7.5])
def test_standard_forms_are_neuroml2s(form, expected, scale):
    """The three forms equal HHExpRate, HHSigmoidRate, HHExpLinearRate of the NeuroML2 schema.

    Reference: the schema's definitions with scipy's expit and exprel.
    """
    rate = StandardRate(form=form, rate=0.7, midpoint=-40.0, scale=scale)
    x = (V + 40.0) / scale
    np.testing.assert_allclose(make_curve(rate, {}, "x")(V), expected(0.7, x), rtol=1e-9)


def test_standard_forms_equal_the_squid_rates():
    """The squid's alpha_n, beta_n and beta_h in NeuroML's forms equal the formulas."""
    pairs = [
        ("exp_linear", 0.1, -55, 10, "0.01*(V + 55)/(1 - exp(-(V + 55)/10))"),
        ("exp", 0.125, -65, -80, "0.125*exp(-(V + 65)/80)"),
        ("sigmoid", 1.0, -35, 10, "1/(1 + exp(-(V + 35)/10))"),
    ]
    for form, rate, midpoint, scale, text in pairs:
        standard = StandardRate(form=form, rate=rate, midpoint=midpoint, scale=scale)
        np.testing.assert_allclose(make_curve(standard, {}, "x")(V), curve(text)(V), rtol=1e-12)


def test_measured_points_are_linear_between_and_constant_outside():
    """Points are joined by straight lines; beyond the ends the end values hold."""
    points = make_curve(MeasuredPoints(v_mv=[-80, -60, 0], values=[1, 3, 2]), {}, "x")
    np.testing.assert_allclose(
        points([-200, -80, -70, -60, -30, 0, 200]), [1, 1, 2, 3, 2.5, 2, 2], rtol=1e-15
    )


@pytest.mark.parametrize(
    ("rate", "edges"),
    [
        ("1 if V < -80 else 2", [-80.0]),
        ("abs(V + 10)", [-10.0]),
        ("max(0, min(1, (V + 50)/10))", [-50.0, -40.0]),
        ("1 + (2 if V >= p else V)/(3 if V > 7 else 4)", [-33.3, 7.0]),
        (MeasuredPoints(v_mv=[-80, -60, 0], values=[1, 3, 2]), [-80.0, -60.0, 0.0]),
        ("exp(V/10)", []),
    ],
)
def test_branches_change_exactly_where_a_piece_ends(rate, edges):
    """The signature differs across each edge and nowhere else."""
    found = make_curve(rate, {"p": -33.3}, "x")
    assert found.branching == bool(edges)
    ends = [-200.0, *edges, 200.0]
    sides = [np.linspace(a + 1e-6, b - 1e-6, 50) for a, b in itertools.pairwise(ends)]
    signatures = [found.branches(side) for side in sides]
    assert all((s == s[0]).all() for s in signatures)
    assert all(a[-1] != b[0] for a, b in itertools.pairwise(signatures))


HOSTILE = [
    "V.real", "V.__class__", "().__class__.__bases__", "__import__", "__import__('os')",
    "lambda: 1", "(x := 1)", "f'{V}'", "'text'", "[1 for a in V]", "[V]", "{V}", "V[0]", "(V, V)",
    "exp(*V)", "max(V, key=1)", "exp(V, V)", "min(V)", "exp()", "print(V)", "open", "exp", "V(1)",
    "exp(V)(V)", "V and 1", "not V", "V < 1", "1 < V < 2", "1 if V else 2", "1 if V < 1 < 2 else 3",
    "1 if V == 2 else 3", "1 if V is 2 else 3", "V // 2", "V % 2", "V ^ 2", "V @ V", "~V", "V << 2",
    "1j", "True", "None", "...", "1e999", "9" * 31, "yield", "await V", "V; V", "V = 1", "#", "\\",
    "V\x00", "", " ", "(", ")", "((((", "1 +", "exp(", "1 2", "V V", "\ud800", "V\u0301",
]  # fmt: skip


@pytest.mark.parametrize("text", HOSTILE)
def test_anything_but_plain_arithmetic_is_refused(text):
    """No attribute, name, call, string or statement of Python gets through."""
    with pytest.raises(FormulaError) as refusal:
        curve(text)
    assert str(refusal.value).startswith("K.n alpha: ")


@pytest.mark.parametrize(
    "text",
    [
        "(" * 300 + "V" + ")" * 100,
        "(" * 200 + "V" + ")" * 200,
        "-" * 499 + "V",
        "+".join(["V"] * 250),
        "exp(" * 90 + "V" + ")" * 90,
        "2**" * 160 + "2",
        "V" * 501,
        "max(" + ",".join(["V"] * 240) + ",exp(" + "-" * 99 + "V))",
    ],
)
def test_size_is_limited_before_anything_recurses(text):
    """Length, nesting and number of operations are bounded, whatever their shape."""
    with pytest.raises(
        FormulaError, match=r"K\.n alpha: .*(deep|characters|large|over|cannot read)"
    ):
        curve(text)


def test_long_but_legal_formulas_evaluate():
    """A chain of 28 choices, or 240 operands, is within the limits and picks the right one."""
    text = "".join(f"{k} if V < {k} else " for k in range(28)) + "31"
    assert len(text) <= MAX_TEXT
    assert curve(text)([-5.0, 7.5, 99.0]).tolist() == [0.0, 8.0, 31.0]
    assert curve("max(" + ",".join("1" * 239) + ",V)")([-5.0, 7.5]).tolist() == [1.0, 7.5]


def test_depth_below_the_limit_evaluates():
    """A formula close to the limit of depth still parses, evaluates and has branches."""
    deep = curve("-" * (MAX_DEPTH - 2) + "V")
    assert deep(3.0) == 3.0
    assert deep.branches(3.0) == 0


_SCRAPS = st.sampled_from(
    ["V", "VT", "exp", "log", "min", "(", ")", "(", ")", "+", "-", "*", "/", "**", ",", " ", "if",
     " else ", "<", "<=", "==", ".", "_", "1", "0.5", "1e3", "e", "lambda", ":=", "[", "]", "{",
     "'", '"', "f", "__", "9**9**9", "\n", "and", "not", "is", "in", "for", "0x", "1e308", "j"]
)  # fmt: skip


@settings(max_examples=300, deadline=None, derandomize=True)
@given(st.one_of(st.text(max_size=80), st.lists(_SCRAPS, max_size=30).map("".join)))
@example("9**9**9**9")
@example("(" * 41 + "1" + ")" * 41)
def test_arbitrary_text_parses_or_is_refused(text):
    """Invariant: any text gives a curve of float64 values or a FormulaError, nothing else."""
    try:
        values = curve(text, VT=-56.2)(V)
    except FormulaError:
        return
    assert values.dtype == np.float64
    assert values.shape == V.shape


@pytest.mark.parametrize(
    ("text", "parameters", "words"),
    [
        ("0.1*(W + 40)", {"VT": 1.0}, ["unknown name", "'W'", "position 6", "V, VT"]),
        ("v + 1", {}, ["did you mean 'V'"]),
        ("V_T + 1", {"VT": 1.0}, ["did you mean 'VT'"]),
        ("V^2", {}, ["'^'", "position 2", "**"]),
        ("log10(V)", {}, ["'log10(V)'", "allowed are numbers"]),
        ("exp + 1", {}, ["exp needs parentheses"]),
        ("1 if 2", {}, ["cannot read"]),
        ("V", {"exp": 1.0}, ["'exp'", "reserved"]),
        ("V", {"V": 1.0}, ["'V'", "reserved"]),
        ("V", {"a-b": 1.0}, ["'a-b'", "arithmetic"]),
        ("V", {"lambda": 1.0}, ["'lambda'", "reserved"]),
    ],
)
def test_refusals_name_the_piece_and_what_is_allowed(text, parameters, words):
    """A refusal says where the fault is, what it is and what may stand there."""
    with pytest.raises(FormulaError) as refusal:
        parse_formula(text, parameters, "K.n alpha")
    for word in words:
        assert word in str(refusal.value)
