"""A tolerance whose two ends are stable and whose inside is not: why scenarios need more than corners."""

import numpy as np
import pytest

import explorer

# Bose, Jury and Zeheb, On robust Hurwitz and Schur polynomials, IEEE Transactions on Automatic Control 33,
# 1988, as quoted in Bhattacharyya, Chapellat and Keel, Robust Control: The Parametric Approach, 1995, from
# memory: z^4 + a z^3 + (3/2)z^2 - 1/3 with a in [-17/8, 17/8] is stable at both ends and unstable at a = 0.
# The general finding, that Kharitonov's four polynomials do not decide stability in z: Bose and Zeheb,
# Kharitonov's theorem and stability test of multidimensional digital filters, IEE Proceedings G 133, 1986;
# Hollot and Bartlett, Some discrete-time counterparts to Kharitonov's stability criterion for uncertain
# systems, IEEE Transactions on Automatic Control 31, 1986; from memory.
END = 17 / 8

# On the circle, z = exp(jv): a = -(z + (3/2)/z - (1/3)/z^3) must be real. Its imaginary part vanishes at sin
# v = 0, that is a = 13/6 at z = -1, and at sin(v)^2 = 3/8, that is |a| = (8/3) sqrt(5/8). Stable just between
# the two.
LOWER, UPPER = 8 / 3 * np.sqrt(5 / 8), 13 / 6

# At a = 0, z^2 = -3/4 - sqrt(9/16 + 1/3).
RADIUS_AT_ZERO = np.sqrt(3 / 4 + np.sqrt(9 / 16 + 1 / 3))
POLES = 1e-9  # promised relative error of s

STUDY = """
title = "interval polynomial"
[plant]
transfer = "(a*z^3 + 1.5*z^2 - 1/3)/z^4"
sampled_at = "1 sample"
[plant.parameters]
a = {{ from = -2.125, to = 2.125, nominal = {nominal} }}
[loop]
compensator = "gain"
[sweep]
gain = {{ values = [1.0] }}
scenarios = {{ interior = {interior}, corners = true, seed = 5, tolerance_scales = [1.0] }}
[[requirements]]
measure = "stability"
[[requirements]]
measure = "spectral radius"
at_most = 1
"""


def swept(nominal, interior):
    text = STUDY.format(nominal=nominal, interior=interior)
    return explorer.sweep(explorer.read_study(text=text), jobs=1)


def radius(a):
    return abs(np.roots([1, a, 1.5, 0, -1 / 3])).max()


def test_both_ends_alone_look_stable():
    dataset = swept(nominal=END, interior=0)
    worst = dataset["worst_value"].sel(measure="spectral radius").item()
    assert worst == pytest.approx(radius(END), rel=POLES)
    assert worst < 1
    assert explorer.judge(dataset)["feasible"].all()


def test_interior_scenarios_find_the_instability():
    dataset = swept(nominal=END, interior=64)
    assert not explorer.judge(dataset)["feasible"].any()
    worst = dataset["worst_value"].sel(measure="spectral radius").item()
    # A few dozen plants spread over the range leave gaps of 0.1 or so, and the radius is flat at its largest.
    assert worst == pytest.approx(RADIUS_AT_ZERO, abs=0.02)
    index = int(dataset["worst_scenario"].sel(measure="spectral radius").item())
    a = float(dataset["scenario_parameter"].sel(parameter="a").to_numpy()[index])
    assert abs(a) < LOWER
    assert worst == pytest.approx(radius(a), rel=1e-8)


def test_share_of_stable_plants():
    dataset = swept(nominal=END, interior=64)
    size = abs(dataset["scenario_parameter"].sel(parameter="a").to_numpy())
    stable = (size > LOWER) & (size < UPPER)
    assert 0 < stable.mean() < 1
    assert dataset["share_met"].item() == pytest.approx(stable.mean(), rel=1e-12)  # a ratio of two counts


def test_nominal_plant_in_the_middle_is_unstable():
    dataset = swept(nominal=0.0, interior=0)
    nominal = dataset["nominal_value"].sel(measure="spectral radius").item()
    assert nominal == pytest.approx(RADIUS_AT_ZERO, rel=POLES)
    assert not explorer.judge(dataset)["feasible"].any()


def test_the_coefficient_as_a_gain_has_a_window(measured, judged_stable):
    """The same family as a gain axis: conditionally stable, with both edges in closed form."""
    below, above = 1 - 1e-6, 1 + 1e-6
    gains = [0.01, LOWER * below, LOWER, LOWER * above, END, UPPER * below, UPPER, UPPER * above]
    loop = {"gain": gains, "sampled_at": "1 sample"}
    transfer = "z^3/(z^4 + 1.5*z^2 - 1/3)"
    radii = measured(transfer, ["stability"], **loop)["stability"][0]
    assert radii[[2, 6]] == pytest.approx([1, 1], rel=POLES)
    verdict = judged_stable(transfer, **loop)
    assert verdict[[0, 1, 3, 4, 5, 7]].tolist() == [False, False, True, True, True, False]
