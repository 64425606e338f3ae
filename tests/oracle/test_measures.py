"""The program's responses and frequency measures against 40-digit answers, loop by loop.

Neighbours: measure_loops.py (loops and studies), answers.py and measured.json (the answers), explorer.read_study
and explorer.probe. The answers themselves are checked in test_answers.py.
"""

import math

import pytest
from mpmath import mp

import explorer

from . import test_oracle
from .answers import answer, kept
from .measure_loops import MEASURE_LOOPS, asked_of, study
from .reference import exactly, number

ANSWERS = kept()
CASES = [(loop, gain) for loop in MEASURE_LOOPS for gain in loop.gains]
CHEAP = ("lag, fractional delay", "feedthrough, whole delay", "levitation, PD by backward difference")
NEAR_ZERO = 0.01  # of its size: below this a value is compared with the size


def named(cases):
    return pytest.mark.parametrize(
        ("loop", "gain"), cases, ids=[f"{loop.name}, gain {gain}".replace(" ", "_") for loop, gain in cases]
    )


@exactly
def agrees(asked, found, exact):
    """Whether a value is within the requirement's tolerance of the exact one; an end is met only by itself.

    A measure without a size is exactly 0 where the exact one is: there is nothing to reduce the gain to, say.
    """
    exact = number(exact)
    if math.isnan(found) or math.isinf(found) or mp.isinf(exact):
        return found == exact
    near_zero = asked.size is not None and abs(exact) < NEAR_ZERO * asked.size
    return abs(number(found) - exact) <= asked.tolerance * (asked.size if near_zero else abs(exact))


@named(CASES)
def test_every_measure(loop, gain):
    place = {"gain": float(gain)} if loop.in_z else {"gain": float(gain), "period": float(loop.period)}
    values = explorer.probe(explorer.read_study(text=study(loop)), at=place)["value"].isel(scenario=0)
    exact = ANSWERS[loop.name][gain]
    found = {asked: float(values.sel(measure=asked.name)) for asked in asked_of(loop)}
    wrong = [
        f"{asked.name}: {value!r}, exactly {exact[asked.name]}"
        for asked, value in found.items()
        if not agrees(asked, value, exact[asked.name])
    ]
    assert not wrong, "\n".join(wrong)


@pytest.mark.parametrize("loop", MEASURE_LOOPS, ids=lambda loop: loop.name.replace(" ", "_"))
def test_text_and_coefficients_of_a_loop_agree(loop):
    test_oracle.test_text_and_coefficients_of_a_loop_agree(loop)


def test_answers_are_kept_for_every_loop():
    assert {(name, gain) for name, gains in ANSWERS.items() for gain in gains} == {
        (loop.name, gain) for loop, gain in CASES
    }
    for loop, gain in CASES:
        assert list(ANSWERS[loop.name][gain]) == [asked.name for asked in asked_of(loop)]


@named([case for case in CASES if case[0].name in CHEAP])
def test_kept_answers_are_worked_out_again(loop, gain):
    assert answer(loop, gain) == ANSWERS[loop.name][gain]
