"""The ways that are timed against each other give the same worst values, on a grid of a few points."""

from types import ModuleType

import numpy as np
import pytest

from . import plain, vectorised
from .study import DAMPING, RADIUS, SETTLING, Cases, Grid, Real
from .sweep import AGREEMENT, largest_difference, layout, program

TINY = Grid(gains=6, periods=5, interior=2)


@pytest.fixture(scope="module")
def cases() -> Cases:
    return layout(TINY)


@pytest.fixture(scope="module")
def answer() -> Real:
    return program(TINY, jobs=1)


@pytest.mark.parametrize("way", [plain, vectorised])
def test_worst_values_agree(way: ModuleType, cases: Cases, answer: Real) -> None:
    assert largest_difference(way.worst_values(cases), answer) <= AGREEMENT


def test_the_grid_holds_stable_and_unstable_loops(answer: Real) -> None:
    # otherwise agreement on infinite settling times would be all there is, or would not be tried at all
    stable = answer[RADIUS] < 1
    assert 0.3 < stable.mean() < 1.0
    assert np.array_equal(np.isfinite(answer[SETTLING]), stable)


def test_a_single_differing_value_is_noticed(answer: Real) -> None:
    changed = answer.copy()
    changed[DAMPING, -1, -1, -1] *= 1 + 3 * AGREEMENT
    assert largest_difference(changed, answer) > AGREEMENT
    changed[DAMPING, -1, -1, -1] = np.nan
    assert largest_difference(changed, answer) == np.inf
