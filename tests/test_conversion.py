"""Compensators: loop.conversion and loop.compensator against the substitution itself and against one gain at a time.

Neighbours: small_study writes studies; published/test_conversions closes loops around published equations.
"""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from small_study import study_of, swept

from explorer.errors import StudyError
from explorer.loop.compensator import compensator_on_axes
from explorer.study.expressions import ExpressionError, read_expression

GAIN, PERIOD = np.array([0.5, 3.0]), np.array([1e-6, 0.02, 0.3])
POINTS = 1.0 + np.array([0.3 + 0.4j, -1.2 + 0.5j, 0.02 + 0.01j])  # off every pole and zero here
VALUES = {"lead": 0.4, "a": 2.0}

COMPENSATORS = {
    "lead": "gain*(lead*s + 1)/(lead/8*s + 1)",
    "PI": "gain*(1 + 1/(a*s))",
    "notch": "gain*(s^2 + 0.2*s + 9)/(s^2 + 6*s + 9)",
    "double lead": "gain*(lead*s + 1)^2/(0.05*s + 1)^2",
    "two zeros more than poles": "gain*(s^2 + s + 1)",
    "gain on one path": "1 + gain/(s + a)",
}


def converted(text, conversion, gain=GAIN, period=PERIOD):
    study = study_of(
        compensator=text, loop=f'conversion = "{conversion}"', gain="{ values = [1] }",
        parameters="a = { nominal = 2.0 }\nlead = { nominal = 0.4 }",
    )  # fmt: skip
    return compensator_on_axes(study.loop, VALUES, gain, period)


def value_at(compensator, variable, gain_index, period_index, x):
    """The compensator's value; variable 0: x = w, 1: x = z."""
    above, below = (array[variable][:, period_index] for array in (compensator.numerator, compensator.denominator))
    if compensator.affine:
        numerator, denominator = above[0] + GAIN[gain_index] * above[1], below[0]
    else:
        numerator, denominator = above[gain_index], below[gain_index % len(below)]
    return np.polyval(numerator, x) / np.polyval(denominator, x)


def worked_out(text, gain, **names):
    """Plain arithmetic on a study's expression."""
    return eval(text.replace("^", "**"), {"__builtins__": {}}, VALUES | {"gain": gain} | names)


def backward(z, period):
    return (z - 1) / (period * z)


def bilinear(z, period):
    return 2 / period * (z - 1) / (z + 1)


def bilinear_at_one_hertz(z, period):
    return 2 * np.pi / np.tan(np.pi * period) * (z - 1) / (z + 1)


SUBSTITUTIONS = {
    "backward difference": backward,
    "bilinear": bilinear,
    "bilinear, exact at 1 Hz": bilinear_at_one_hertz,
}


@pytest.mark.parametrize("text", COMPENSATORS.values(), ids=COMPENSATORS)
@pytest.mark.parametrize("conversion", SUBSTITUTIONS)
def test_substitution(conversion, text):
    compensator = converted(text, conversion)
    assert compensator.affine
    for column, period in enumerate(PERIOD):
        for row, gain in enumerate(GAIN):
            for z in 1 + (POINTS - 1) * min(1.0, 10 * period):  # at fast sampling, near z = 1 where the loop lives
                expected = worked_out(text, gain, s=SUBSTITUTIONS[conversion](z, period))
                # w keeps its digits at any period; in z the difference of z and 1 has only so many left
                assert value_at(compensator, 0, row, column, z - 1) == pytest.approx(expected, rel=1e-9)
                if period > 1e-3:
                    assert value_at(compensator, 1, row, column, z) == pytest.approx(expected, rel=1e-10)


def test_bilinear_is_exact_at_its_frequency():
    compensator = converted("gain*(s^2 + 0.2*s + 9)/(s^2 + 6*s + 9)", "bilinear, exact at 1 Hz")
    for column, period in enumerate(PERIOD):
        s = 2j * np.pi
        expected = worked_out("gain*(s^2 + 0.2*s + 9)/(s^2 + 6*s + 9)", GAIN[0], s=s)
        w = np.exp(s * period) - 1  # loses what 1 has more digits than s T: 3e-11 at the shortest period
        assert value_at(compensator, 0, 0, column, w) == pytest.approx(expected, rel=1e-9)


# text, zeros in s, poles in s, zeros more than poles at infinity
MATCHED = {
    "lead": ("gain*(lead*s + 1)/(lead/8*s + 1)", [-2.5], [-20.0]),
    "PI": ("gain*(a*s + 1)/(a*s)", [-0.5], [0.0]),
    "notch": ("gain*(s^2 + 0.2*s + 9)/(s^2 + 6*s + 9)", [-0.1 + 2.9983328700j, -0.1 - 2.9983328700j], [-3, -3]),
    "two poles more": ("gain*(s + 4)/((s + 1)*(s + 2)*(s + 3))", [-4], [-1, -2, -3]),
    "zero at the origin": ("gain*s/((s + 1)*(s + 2))", [0], [-1, -2]),
    "one zero more": ("gain*(s + 4)", [-4], []),
}


@pytest.mark.parametrize("name", MATCHED)
def test_matched_poles_and_zeros(name):
    text, zeros, poles = MATCHED[name]
    compensator = converted(text, "matched poles and zeros")
    excess = len(poles) - len(zeros)
    at_minus_one, at_zero = [-1.0] * max(excess, 0), [0.0] * max(-excess, 0)
    for column, period in enumerate(PERIOD[1:], 1):
        top = np.poly(np.concatenate([np.exp(np.array(zeros) * period), at_minus_one]))
        bottom = np.poly(np.concatenate([np.exp(np.array(poles) * period), at_zero]))
        numerator = compensator.numerator[1, 1, column]
        denominator = compensator.denominator[1, 0, column]
        numerator = np.trim_zeros(numerator, "f")
        # The published rule, at the accuracy of the zeros stated above
        assert numerator / numerator[0] == pytest.approx(top.real, rel=1e-9, abs=1e-10)
        assert denominator / denominator[0] == pytest.approx(bottom.real, rel=1e-9, abs=1e-10)
        # Equal to the original as s goes to 0: the difference is of the order of s times the time constants
        s = 1e-7
        found = value_at(compensator, 0, 0, column, np.expm1(s * period))
        assert found == pytest.approx(worked_out(text, GAIN[0], s=s), rel=1e-6)


def test_matched_agrees_in_w_and_in_z():
    compensator = converted("gain*(s + 4)/((s + 1)*(s^2 + s + 3))", "matched poles and zeros")
    for z in POINTS:
        in_w = value_at(compensator, 0, 1, 2, z - 1)
        assert value_at(compensator, 1, 1, 2, z) == pytest.approx(in_w, rel=1e-13)


def test_integrator_in_z_stays_exact_at_any_period():
    study = study_of(
        compensator="gain*(1 + period/(a*(z - 1))) + gain*(z - 1)/(z - 0.4)", parameters="a = { nominal = 2 }"
    )
    compensator = compensator_on_axes(study.loop, VALUES, GAIN, np.array([1e-9, 0.1]))
    # (z - 1)(z - 0.4) = w(w + 0.6): the constant term in w is 0 itself, not a rounding
    for column in range(2):
        assert compensator.denominator[0, 0, column] == pytest.approx([1, 0.6, 0], rel=1e-15, abs=0)
    # and of order T at the numerator's end, 0.6 T/a, not lost beside the others
    assert compensator.numerator[0, 1, 0, -1] == pytest.approx(0.6 * 1e-9 / 2, rel=1e-14)


NOT_AFFINE = ["gain**2*(z - 0.5)/z", "gain/(1 + 0.1*gain)", "1/(z - 0.3 + 0.2/gain)", "sqrt(gain)*(z - gain/9)/z"]


@pytest.mark.parametrize("text", NOT_AFFINE)
def test_any_dependence_on_the_gain_equals_one_gain_at_a_time(text):
    gains = [0.5, 1.0, 2.5]
    whole = swept(compensator=text, gain=f"{{ values = {gains} }}")["worst_value"]
    for index, gain in enumerate(gains):
        fixed = f"gain/{gain!r}*({text.replace('gain', repr(gain))})"  # affine, and the same at this gain
        alone = swept(compensator=fixed, gain=f"{{ values = [{gain!r}] }}")["worst_value"]
        # the constants are rounded differently; settling times magnify that by a hundred
        assert whole.isel(gain=index).values == pytest.approx(alone.isel(gain=0).values, rel=1e-12)


def test_gain_inside_a_converted_factor_equals_one_gain_at_a_time():
    for conversion in (*SUBSTITUTIONS, "matched poles and zeros"):
        # At a gain of 0.5 both are (s/2 + 2)/(s + 3); the second is not affine in the gain, matched neither
        first, second = (
            converted(text, conversion, gain=np.array([0.5]))
            for text in ("(gain*s + 2)/(s + 3)", "(gain*s + 2)/(s + gain + 2.5)")
        )
        assert not second.affine
        assert first.affine == (conversion != "matched poles and zeros")
        for x in POINTS:
            assert value_at(first, 0, 0, 1, x) == pytest.approx(value_at(second, 0, 0, 1, x), rel=1e-13)


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("gain*(z - 0.5)", "would need samples that are not taken yet"),
        ("gain/((period - 0.3)*z + 1)", "leading coefficient in z vanishes"),
        ("gain/(period - 0.3)", "divides by zero"),
    ],
)
def test_impossible_compensators_are_refused(text, fault):
    loop = dataclasses.replace(study_of().loop, compensator=read_expression(text))
    with pytest.raises(ExpressionError, match=fault):
        compensator_on_axes(loop, {}, GAIN, PERIOD)
    with pytest.raises(StudyError, match=fault):
        swept(compensator=text)


@pytest.mark.parametrize("text", ["gain*s + 1", "(gain*s^3 + s + 1)/(s + 3)^3"])
def test_matched_rule_refuses_a_root_that_goes_to_infinity_on_the_axes(text):
    with pytest.raises(ExpressionError, match="leading coefficient is 0"):
        converted(text, "matched poles and zeros", gain=np.array([0.0, 1.0]))
