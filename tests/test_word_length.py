"""Coefficients of few bits: explorer.loop.word_length against hand-rounded ones, and in whole sweeps."""

from __future__ import annotations

import numpy as np
import pytest
from small_study import LAG, study_of

import explorer
from explorer.errors import StudyError
from explorer.loop.compensator import Compensator, compensator_on_axes
from explorer.loop.word_length import rounded

SERVO = {"transfer": "1/(s*(0.1*s + 1))", "compensator": "gain*(z - 0.9)/(z - 0.4)", "gain": "{ values = [1.0, 3.0] }",
         "period": "{ values = [0.02, 0.05] }"}  # fmt: skip


def compensator_of(bits, **parts):
    study = study_of(**SERVO | parts)
    exact = compensator_on_axes(study.loop, {}, study.gain.values, study.period.values)
    return rounded(exact, study.gain.values, bits)


def test_eight_bits_rounded_by_hand():
    found = compensator_of(8)
    # gain 3: the largest of 3 and 2.7 lies below 4, so a step is 4/128: 96 and -86.4 -> -86 steps
    np.testing.assert_array_equal(found.numerator[1][1, 0], [3.0, -86 / 32])
    # 0.4 lies below 1/2, so a step is 0.5/128: -102.4 -> -102 steps
    np.testing.assert_array_equal(found.denominator[1][1, 0], [1.0, -102 / 256])
    # the same polynomials in w, exactly: 3 w + 3 - 86/32
    np.testing.assert_array_equal(found.numerator[0][1, 0], [3.0, 10 / 32])
    np.testing.assert_array_equal(found.denominator[0][1, 0], [1.0, 1 - 102 / 256])
    assert not found.affine


def test_a_coefficient_that_rounds_up_out_of_its_scale_gets_the_next_one():
    # 0.999 in four bits: 8 of the steps 1/8 are one too many, 4 of the steps 1/4 are not; -0.999 has its -8
    shape = (2, 1, 1, 2)
    for value, kept in ((0.999, 1.0), (-0.999, -1.0)):
        above = np.broadcast_to(np.array([value, 0.0]), shape).copy()
        below = np.broadcast_to(np.array([1.0, 0.0]), shape).copy()
        assert rounded(Compensator(above, below, False), np.ones(1), 4).numerator[1][0, 0, 0] == kept


def test_an_integrator_stays_one():
    found = compensator_of(6, compensator="gain*(z - 0.93)/(z - 1)")
    assert (found.denominator[0][..., -1] == 0).all()


def test_many_bits_change_little_and_few_change_much():
    exact = explorer.sweep(study_of(**SERVO), jobs=1)["nominal_value"]
    for bits, least, most in ((24, 0, 1e-5), (6, 1e-3, 1)):
        loop = {"loop": f"coefficient_bits = {bits}"}
        found = explorer.sweep(study_of(**SERVO | loop), jobs=1)["nominal_value"]
        difference = np.nanmax(np.abs(found - exact) / np.abs(exact))
        assert least <= difference <= most


@pytest.mark.parametrize("bits", ["1", "25", "-3", '"8"', "8.5"])
def test_word_lengths_that_no_coefficient_has_are_refused(bits):
    with pytest.raises(StudyError, match=r"loop\.coefficient_bits"):
        study_of(**LAG | {"loop": f"coefficient_bits = {bits}"})
