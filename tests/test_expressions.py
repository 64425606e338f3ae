"""Expressions: the closed grammar, rational functions over scenarios against exact fractions, units of trees.

Neighbours: test_reading gives the same modules whole studies; oracle/ carries their values through to poles.
"""

from __future__ import annotations

import contextlib
import math
from fractions import Fraction

import numpy as np
import pytest
import sympy
from hypothesis import given, settings
from hypothesis import strategies as st

from explorer.study.dimensions import Inference, Measured
from explorer.study.expressions import ExpressionError, closest, depends_on, names_in, read_expression
from explorer.study.quantities import Dimension, read_quantity
from explorer.study.rational import HIGHEST_DEGREE, NotAffineError, evaluate

FEW = settings(deadline=None, max_examples=60)


def number(text):
    return float(evaluate(read_expression(text), "s", [1.0, 0.0], {}).scale[0])


VALUES = [
    ("2", 2), (3, 3), (0.25, 0.25), (-1.5, -1.5), ("1e-3", 1e-3), (".5", 0.5), ("5.", 5), ("2.5E+1", 25),
    ("1 - 2 - 3", -4), ("8/4/2", 1), ("2 + 3*4", 14), ("(2 + 3)*4", 20), (" 1\t+\r\n1 ", 2),
    ("2^3^2", 512), ("2**3**2", 512), ("2^-1", 0.5), ("2^-3^2", 2**-9), ("--2", 2), ("+-+2", -2), ("2*-3", -6),
    ("-2^2", -4),  # the sign applies to the power, as it is written in mathematics
    ("(-2)^2", 4), ("4^0.5", 2), ("sqrt(2)^2", 2), ("abs(-3)", 3), ("exp(log(5))", 5), ("tan(pi/4)", 1),
    ("sin(pi/6) + cos(pi/3)", 1), ("1/3", 1 / 3), ("((((7))))", 7), ("2*pi*40", 80 * math.pi),
]  # fmt: skip


@pytest.mark.parametrize(("text", "value"), VALUES)
def test_grammar_reads_what_mathematics_means(text, value):
    assert number(text) == pytest.approx(value, rel=4e-16, abs=0)  # a rounding or two of a function


FAULTS = [
    ("", 1, "ends where"), ("1 +", 4, "ends where"), ("(s + 1", 1, "never closed"), ("a*(s", 3, "never closed"),
    ("1/(2 s + 1)", 6, "'s' stands where an operator or )"), ("2 s", 3, "an operator"), ("s)", 2, "')' stands"),
    ("*s", 1, "'*' stands"), ("s + * 2", 5, "'*' stands"), ("()", 2, "')' stands"), ("s(s + 1)", 1, "write s*(...)"),
    ("sqr(4)", 1, "Did you mean 'sqrt'?"), ("sqrt 4", 1, "parentheses"), ("s,1", 2, "not allowed"),
    ("s % 2", 3, "not allowed"), ("a = 2", 3, "not allowed"), ("1e400", 1, "beyond the largest"),
    ("1_000", 2, "an operator"), ("1.2.3", 4, "an operator"), ("0x10", 2, "an operator"), ("a.b", 2, "not allowed"),
    ("a[0]", 2, "not allowed"), ("lambda: 1", 7, "not allowed"), ("'s'", 1, "not allowed"), ("\x00", 1, "not allowed"),
    ("s\x1b[2J", 2, "not allowed"), ("\ufeffs", 1, "not allowed"), ("ѕ + 1", 1, "not allowed"),  # Cyrillic
    ("ｓ + 1", 1, "not allowed"), ("s\u00a0+ 1", 2, "not allowed"), ("s −1", 3, "not allowed"),
    ("√2", 1, "not allowed"), ("²", 1, "not allowed"),
    ("__import__('os').system('x')", 12, "not allowed"), ("eval(1)", 1, "no function 'eval'"),
    ("open(s)", 1, "no function"), ("s.__class__", 2, "not allowed"), (True, 1, "neither"), (None, 1, "neither"),
    (10**400, 1, "beyond the largest"), (2**20000, 1, "beyond the largest"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "column", "phrase"), FAULTS, ids=range(len(FAULTS)))
def test_anything_else_is_refused_with_its_column(text, column, phrase):
    with pytest.raises(ExpressionError) as caught:
        read_expression(text)
    assert caught.value.column == column
    assert phrase in str(caught.value)


HUGE = ["(" * 900 + "s" + ")" * 900, "-" * 1900 + "s", "2^" * 900 + "2", "s+" * 10**6 + "s", "9" * 10**6, "(" * 10**6,
        "a" * 10**6, "sqrt(" * 300 + "2" + ")" * 300, "(" * 100]  # fmt: skip


@pytest.mark.parametrize("text", HUGE, ids=[f"{text[:6]}..." for text in HUGE])
def test_long_and_deep_text_is_refused_before_it_costs_anything(text):
    with pytest.raises(ExpressionError, match=r"longer|more than|nested|closed") as caught:
        read_expression(text)
    assert len(str(caught.value)) < 200


def test_forty_levels_are_enough_for_a_person():
    assert number("(" * 38 + "3" + ")" * 38) == 3


@settings(deadline=None, max_examples=300)
@given(st.one_of(st.text(max_size=60), st.text("0123456789.eE+-*/^() szgainpisqrtexp_µ", max_size=60)))
def test_random_text_is_read_or_refused_and_nothing_else(text):
    try:
        node = read_expression(text)
    except ExpressionError:
        return
    assert all(depends_on(node, name.name) for name in names_in(node))
    with contextlib.suppress(ExpressionError, NotAffineError):
        evaluate(node, "s", [1.0, 0.0], {name.name: np.array([2.0]) for name in names_in(node)})


def test_both_micro_signs_are_one_letter():
    assert [name.name for name in names_in(read_expression("\u00b5 + \u03bc"))] == ["\u03bc", "\u03bc"]


def test_a_misspelt_word_finds_the_nearest_one():
    assert closest("Gian", ["gain", "period"]) == "Did you mean 'gain'?"
    assert closest("q", ["gain", "period"]) == ""
    assert closest("gain" * 10**5, ["gain"]) == ""


# ---------------------------------------------------------------- rational functions against exact fractions

LEAVES = st.sampled_from(["s", "a", "b", "2", "0.5", "3"])
DIVISORS = ["(s + 1)", "(2*s + a)", "s", "(s*s + b*s + 4)", "2", "a"]  # never 0 at the point below
TREES = st.recursive(
    LEAVES,
    lambda below: st.one_of(
        st.tuples(below, st.sampled_from("+-*"), below).map(lambda parts: "({} {} {})".format(*parts)),
        st.tuples(below, st.sampled_from(DIVISORS)).map(lambda parts: "({}/{})".format(*parts)),
        st.tuples(below, st.integers(0, 3)).map(lambda parts: "({})^{}".format(*parts)),
        st.tuples(st.sampled_from(DIVISORS), st.integers(1, 3)).map(lambda parts: "{}^-{}".format(*parts)),
        below.map(lambda inner: f"(-{inner})"),
    ),
    max_leaves=8,
)


def exactly(text, s, values):
    """The value at s by sympy's exact arithmetic, and the same with every term taken positive."""
    table = {name: sympy.Rational(str(value)) for name, value in values.items()} | {"s": sympy.Rational(str(s))}
    return [
        Fraction(str(sympy.parse_expr(form.replace("^", "**"), local_dict=table, transformations=RATIONAL)))
        for form in (text, text.replace(" - ", " + ").replace("(-", "("))
    ]


RATIONAL = (sympy.parsing.sympy_parser.auto_symbol, sympy.parsing.sympy_parser.rationalize,
            sympy.parsing.sympy_parser.auto_number)  # fmt: skip


@FEW
@given(TREES)
def test_random_trees_have_the_value_exact_arithmetic_gives(text):
    batch = {"a": np.array([[1.5, 0.25, 8.0]]), "b": np.array([[3.0, 3.0, 0.125]])}
    node = read_expression(text)
    try:
        value = evaluate(node, "s", [1.0, 0.0], batch)
        above, below = value.numerator()[0], value.denominator()
    except ExpressionError as error:
        assert "degree" in str(error) or "power" in str(error)
        return
    for index in range(3):
        values = {name: array[0, index] for name, array in batch.items()}
        exact, size = exactly(text, 0.75, values)
        found = [
            np.polyval(np.broadcast_to(part, (3, part.shape[-1]))[index], 0.75) for part in (above, below)
        ]
        # the coefficients keep their digits relative to the sum of all terms' sizes, not to a cancelled sum
        assert float(found[0] / found[1]) == pytest.approx(float(exact), abs=1e-12 * float(size), rel=1e-12)


def in_s(text, **names):
    return evaluate(read_expression(text), "s", [1.0, 0.0], {name: np.array([value]) for name, value in names.items()})


def test_factors_stay_apart_and_equal_ones_meet_once():
    lone = in_s("1/(s*(lag*s + 1)^3)", lag=0.5)
    assert sorted(len(factor) for factor in lone.denominator_factors()) == [2, 2, 2, 2]
    assert len(in_s("1/(s + 1) + 1/(s + 1)").denominator_factors()) == 1
    assert in_s("1/(s + 1)^2 + 1/(s + 1)").denominator().shape == (3,)
    assert in_s("(s + 1)*(s + 2)/((s + 2)*(s + 1))").degrees() == (0, 0)
    assert in_s("1/(s*s + 2*s)").degrees() == (0, 2)


def test_text_in_z_is_read_straight_into_w():
    tiny = 1e-13  # 1 - 1e-13 as a number has lost three of its digits
    pole = evaluate(read_expression("1/(z - 1 + tiny)"), "z", [1.0, 1.0], {"tiny": np.array([tiny])})
    assert pole.denominator()[-1] == pytest.approx(tiny, rel=3e-3)
    exact = evaluate(read_expression("1/((z - 1)/tiny + 1)"), "z", [1.0, 1.0], {"tiny": np.array([tiny])})
    assert exact.denominator()[-1] / exact.denominator()[0] == pytest.approx(tiny, rel=1e-15)


def gained(text):
    return evaluate(read_expression(text), "z", [1.0, 0.0], {"gain": np.array([[0.0], [1.0]])})


AFFINE = ["gain", "gain*(z - 0.5)/z", "3 + gain/(z - 1)", "(gain*z + 1)/(z + 2)", "2*gain - gain"]


@pytest.mark.parametrize("text", AFFINE)
def test_the_gain_stays_symbolic_where_it_is_affine(text):
    constant, slope = gained(text).numerator()
    assert slope.any()
    below = gained(text).denominator()
    for gain in (0.5, 7.0):
        at_gain = evaluate(read_expression(text), "z", [1.0, 0.0], {"gain": np.array([[gain]])})
        # a scale may stand above or below: compare the fractions at one point
        value = np.polyval(constant[0] + gain * slope[0], 3.0) / np.polyval(np.ravel(below), 3.0)
        expected = np.polyval(at_gain.numerator()[0, 0], 3.0) / np.polyval(np.ravel(at_gain.denominator()), 3.0)
        assert value == pytest.approx(expected, rel=1e-14)


NOT_AFFINE = ["gain^2", "gain*gain/z", "1/gain", "z/(z + gain)", "sqrt(gain)", "2^gain", "gain*(z + gain)"]


@pytest.mark.parametrize("text", NOT_AFFINE)
def test_what_is_not_affine_in_the_gain_says_so(text):
    with pytest.raises(NotAffineError):
        gained(text).numerator()


WITHOUT_VALUE = [
    ("1/0", 2, "divides by zero"), ("1/(s - s)", 2, "divides by zero"), ("1/(0*s)", 2, "divides by zero"),
    ("0^-1", 1, "not a finite number"), ("(a - 2)^-1/s", 1, "not a finite number"), ("1/(a - 2)", 2, "somewhere"),
    ("log(0)", 1, "not a finite number"), ("sqrt(-1)", 1, "not a finite number"), ("9**9**9", 1, "not a finite"),
    ("exp(1000)", 1, "not a finite number"), ("1e300*1e300", 1, "not a finite number"),
    ("exp(-s)", 5, "may not contain s"), ("sqrt(s)", 6, "may not contain s"), ("2^s", 3, "may not contain s"),
    ("s^0.5", 2, "whole number"), ("s^a", 2, "whole number"), ("s^1.0000001", 2, "whole number"),
    ("(s + 1)^1e-9", 8, "whole number"), ("s^25", 2, "whole number"), ("(s + 1)^24*(s + 2)", 1, "degree 25"),
    ("1/((((s + 1)^24)^24)^24)^24", 17, "a power of 576"), ("(((s^5)^5)^5)^5", 8, "a power of 25"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "column", "phrase"), WITHOUT_VALUE)
def test_an_expression_without_a_value_says_where_and_why(text, column, phrase):
    with pytest.raises(ExpressionError, match=phrase) as caught:
        evaluate(read_expression(text), "s", [1.0, 0.0], {"a": np.array([[1.0, 2.0]])}).numerator()
    assert caught.value.column == column


def test_the_highest_degree_is_reached():
    assert in_s(f"1/(s + 1)^{HIGHEST_DEGREE}").degrees() == (0, HIGHEST_DEGREE)


# ---------------------------------------------------------------------------------------------------- units

UNITS = {"lag": "s", "speed": "m/s/V", "mass": "kg", "length": "m", "force": "N", "ratio": "%"}
NAMES = {name: Measured(read_quantity(f"1 {unit}").dimension, stated=True) for name, unit in UNITS.items()} | {
    "s": Measured(read_quantity("1 1/s").dimension), "z": Measured(Dimension()), "pi": Measured(Dimension()),
    "bare": Measured(Dimension(), bare=True),
}  # fmt: skip

DIMENSIONS = [
    ("speed/(s*(lag*s + 1))", "m/V"), ("sqrt(force/mass*length)", "m/s"), ("abs(-length)", "m"), ("lag^2", "s^2"),
    ("length^(1/2)*length^0.5", "m"), ("exp(ratio)*lag", "s"), ("force/(mass*s^2 + force/length)", "m"),
    ("length**-1", "1/m"), ("-lag + lag", "s"), ("lag*(z - 1)", "s"), ("2*pi*lag", "s"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "unit"), DIMENSIONS)
def test_units_are_carried_through(text, unit):
    inference = Inference(NAMES)
    assert inference.of(read_expression(text)).dimension == read_quantity(f"1 {unit}").dimension
    assert inference.assumptions == []


CONTRADICTIONS = [
    ("lag + length", 5, "[s] and [m]"), ("lag*s + mass", 7, "[1] and [kg]"), ("2^lag", 2, "no unit"),
    ("exp(lag)", 1, "pure number"), ("length^ratio", 7, "plain number"), ("lag^1e300", 4, "plain number"),
    ("length^(2^2)", 7, "plain number"), ("speed*lag - length/ratio", 11, "[m/V] and [m]"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "column", "phrase"), CONTRADICTIONS)
def test_a_contradiction_of_stated_units_is_refused(text, column, phrase):
    with pytest.raises(ExpressionError) as caught:
        Inference(NAMES).of(read_expression(text))
    assert caught.value.column == column
    assert phrase in str(caught.value)


OPEN = [
    ("s + 3", "column 3 adds [1/s] and [1]"), ("lag + bare", "column 5 adds [s] and [1]"),
    ("s^2 + s + 400", "column 5 adds [1/s^2] and [1/s]"), ("sin(s*bare)", "column 1 takes sin() of [1/s]"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "note"), OPEN)
def test_what_a_bare_number_may_explain_is_noted_and_allowed(text, note):
    inference = Inference(NAMES)
    inference.of(read_expression(text))
    assert inference.assumptions[0].startswith(note)
