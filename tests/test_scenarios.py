"""Scenarios: sweeping.scenarios, from the tolerance box of a study to its table of plants.

Neighbours: small_study writes studies.
"""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from small_study import study_of

from explorer.sweeping.scenarios import MOST_CORNERS, scenarios_of, scrambled_halton

THREE = """
strength = { nominal = 0.9, tolerance = "10 %" }
lag = { from = 0.2, to = 0.6, nominal = 0.3 }
fixed = { nominal = 4.0 }
"""
TRANSFER = "strength*fixed/(s*(lag*s + 1))"
EPS = np.finfo(float).eps


def plan(interior=5, corners=True, scales="[0, 0.5, 1.0, 1.5]", seed=7):
    flag = str(corners).lower()
    return f"{{ interior = {interior}, corners = {flag}, seed = {seed}, tolerance_scales = {scales} }}"


def table(parameters=THREE, transfer=TRANSFER, loop="", **how):
    return scenarios_of(study_of(transfer=transfer, parameters=parameters, loop=loop, scenarios=plan(**how)))


def test_nominal_comes_first_and_enters_at_once():
    found = table()
    assert found.names == ("strength", "lag", "fixed")
    assert found.values[0].tolist() == [0.9, 0.3, 4.0]
    assert found.scale[0] == 0
    assert found.note == ""


def test_counts():
    # one nominal, and per scale above 0 four corners of the two that vary and five points inside
    found = table()
    assert len(found.values) == len(found.scale) == 1 + 3 * (4 + 5)
    for scale, count in ((0, 1), (0.5, 10), (1.0, 19), (1.5, 28)):
        assert found.within(scale).sum() == count
    assert len(table(corners=False).values) == 1 + 3 * 5
    assert len(table(interior=0).values) == 1 + 3 * 4
    assert len(table(interior=0, corners=False).values) == 1
    assert len(table(scales="[0, 1.0]").values) == 1 + 9


def test_wider_scales_contain_the_narrower():
    found = table()
    for narrow, wide in itertools.pairwise((0.0, 0.5, 1.0, 1.5)):
        assert (found.within(wide) | ~found.within(narrow)).all()
        assert found.within(wide).sum() > found.within(narrow).sum()


def test_every_point_lies_in_its_box_and_the_corners_on_it():
    found = table()
    nominal, low, high = np.array([0.9, 0.3]), np.array([0.81, 0.2]), np.array([0.99, 0.6])
    for scale in (0.5, 1.0, 1.5):
        entered = found.values[found.scale == scale][:, :2]
        lower, upper = nominal - scale * (nominal - low), nominal + scale * (high - nominal)
        assert (entered >= lower * (1 - 4 * EPS)).all()
        assert (entered <= upper * (1 + 4 * EPS)).all()
        for corner in itertools.product(*zip(lower, upper, strict=True)):
            assert np.isclose(entered, corner, rtol=4 * EPS, atol=0).all(axis=1).any()
    assert (found.values[:, 2] == 4.0).all()
    # low + (high - low) is not high here: a corner is as written, not as rounded
    found = table("strength = { from = 0.06, to = 0.6, nominal = 0.5 }", "strength/(s + 1)", scales="[1.0]")
    assert found.values[found.scale == 1.0].max() == 0.6 != 0.06 + (0.6 - 0.06)


def test_inside_is_spread_over_the_whole_box():
    found = table(interior=64, corners=False, scales="[1.0]")
    share = (found.values[1:, :2] - [0.81, 0.2]) / [0.18, 0.4]
    # A scrambled Halton set of 64 leaves no eighth of either axis empty; a random one would, every third time
    for column in range(2):
        assert set(np.floor(8 * share[:, column]).astype(int).clip(0, 7)) == set(range(8))
    assert abs(np.corrcoef(share.T)[0, 1]) < 0.2


def test_same_text_same_table_and_another_seed_another():
    first, again, other = table(), table(), table(seed=8)
    assert (first.values == again.values).all()
    inside = first.scale == 1.0
    assert not (first.values[inside] == other.values[inside]).all()
    assert (first.values[inside][:4] == other.values[inside][:4]).all()  # corners do not depend on it


def test_variants_are_crossed_with_every_row_and_belong_to_every_scale():
    parameters = THREE + 'load = { any_of = [2, 1, 3], nominal = 1 }\nside = { any_of = [5, 6], nominal = 6 }'
    found = table(parameters, f"{TRANSFER}*load*side", interior=2, scales="[0, 1.0]")
    assert len(found.values) == 6 * (1 + 4 + 2)
    assert found.values[0].tolist() == [0.9, 0.3, 4.0, 1.0, 6.0]
    assert (found.scale == 0).sum() == 6
    groups: dict[tuple[float, ...], set[tuple[float, ...]]] = {}
    for row in found.values.tolist():
        groups.setdefault(tuple(row[:3]), set()).add(tuple(row[3:]))
    every = set(itertools.product((1.0, 2.0, 3.0), (5.0, 6.0)))
    assert len(groups) == 7
    assert all(variants == every for variants in groups.values())


def test_clock_tolerance_is_one_more_parameter():
    found = table(loop='clock_tolerance = "2 %"')
    assert found.names[-1] == "clock"
    assert found.values[0, -1] == 1
    assert len(found.values) == 1 + 3 * (8 + 5)
    entered = found.values[found.scale == 1.0][:, -1]
    assert (entered.min(), entered.max()) == pytest.approx((0.98, 1.02), rel=4 * EPS)
    assert (found.by_name()["clock"] == found.values[:, -1]).all()


def test_clock_is_known_where_nothing_was_said():
    found = table()
    assert "clock" not in found.names
    assert (found.by_name()["clock"] == 1).all()


def test_nothing_varies():
    found = table("fixed = { nominal = 4.0 }", "fixed/(s + 1)")
    assert found.values.tolist() == [[4.0]]
    assert table("", "1/(s + 1)").values.shape == (1, 0)


@pytest.mark.parametrize("count", [10, 11])
def test_more_than_ten_varying_parameters_have_a_stated_subset_of_corners(count):
    names = [f"p{index}" for index in range(count)]
    parameters = "\n".join(f'{name} = {{ nominal = 2.0, tolerance = "50 %" }}' for name in names)
    found = table(parameters, f"1/(s + {' + '.join(names)})", interior=0, scales="[1.0]")
    corners = found.values[1:] - 2.0
    assert len(corners) == len(np.unique(corners, axis=0)) == MOST_CORNERS == 1024
    assert (np.abs(corners) == 1).all()
    if count == 10:
        assert found.note == ""
        return
    assert "1024" in found.note
    assert "2^11 = 2048" in found.note
    kept = set(map(tuple, corners.tolist()))
    for sign in (-1.0, 1.0):
        assert (sign,) * count in kept
        for lone in range(count):
            assert tuple(sign if k == lone else -sign for k in range(count)) in kept
    again = table(parameters, f"1/(s + {' + '.join(names)})", interior=0, scales="[1.0]", seed=9)
    assert (again.values == found.values).all()


@pytest.mark.parametrize(("dimensions", "points", "seed"), [(1, 9, 0), (3, 100, 7), (12, 40, 2**31)])
def test_interior_points_are_those_of_the_reference_library(dimensions, points, seed):
    from scipy.stats import qmc

    reference = qmc.Halton(dimensions, scramble=True, rng=seed).random(points)
    np.testing.assert_array_equal(scrambled_halton(dimensions, points, seed), reference)
