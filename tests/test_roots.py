"""Closed-loop poles: kernels.roots and loop.closing against known roots, 40 digits and hostile coefficients.

Neighbours: oracle.reference for exact loops; small_study writes studies.
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from mpmath import mp
from oracle import reference
from scipy.optimize import linear_sum_assignment
from small_study import closed_loop_poles, study_of, swept

from explorer.kernels import roots as kernel
from explorer.kernels.roots import HIGHEST_DEGREE, SOLVED, TOO_LONG, UNCERTIFIED, poles
from explorer.loop.closing import power_of_z
from explorer.loop.compensator import compensator_on_axes
from explorer.loop.sampling import sample

EPS = np.finfo(float).eps
PROMISED = 1e-9  # relative error of s


@reference.exactly
def multiplied_out(roots, shift):
    """Coefficients of Π(x - root + shift), rounded to doubles once."""
    return np.array([float(value) for value in reference.from_roots([mp.mpc(root) - shift for root in roots])])


def both_readings(roots):
    """(1, n+1) polynomial in w and in z with these z."""
    return multiplied_out(roots, 1)[None], multiplied_out(roots, 0)[None]


def distances(found, exact):
    """Relative distances of log z by best pairing; the sign of Im at negative real z says nothing."""
    found, exact = (np.where(np.isneginf(one.real), -745.0, one) for one in (found, exact))  # z = 0, about
    mirrored = np.where(exact.imag > np.pi - 1e-9, exact.conj(), exact)
    gap = np.minimum(np.abs(found[:, None] - exact), np.abs(found[:, None] - mirrored))
    relative = gap / np.maximum(np.abs(exact), 1e-300)
    rows, columns = linear_sum_assignment(np.minimum(relative, 1e6))
    return relative[rows, columns]


def nearest(exact):
    """Least gap between two poles, relative to their size."""
    finite = exact[np.isfinite(exact)]
    gaps = np.abs(finite[:, None] - finite) / np.maximum(np.abs(finite), 1e-300)
    return (gaps + 9.0 * np.eye(len(finite))).min(initial=9.0)


def logarithms(exact):
    """log z of 40-digit poles."""
    return np.array([complex(reference.continuous(z, 1)) for z in exact])


TIME_TO_PEAK = """
[[requirements]]
measure = "time to peak"
basis = "poles"
at_most = 5
"""


# Random sets of roots ------------------------------------------------------------------------------------------


@st.composite
def root_sets(draw, largest):
    """Real roots and conjugate pairs, 1 to `largest` of them, some near z = 1 and some near z = 0."""
    count = draw(st.integers(1, largest))
    found: list[complex] = []
    while len(found) < count:
        near = draw(st.sampled_from([0.0, 1.0, 1.0 - 1e-4]))
        radius = draw(st.floats(1e-3, 1.3)) * (1e-4 if near > 0.5 else 1.0)
        if draw(st.booleans()) and len(found) + 2 <= count:
            z = near + radius * np.exp(1j * draw(st.floats(0.01, 3.13)))
            found += [complex(z), complex(z).conjugate()]
        else:
            found.append(complex(near + radius * draw(st.sampled_from([-1.0, 1.0])), 0.0))
    return found


@reference.exactly
def residual(polynomial, x):
    """|p(x)| over Σ|p_k||x|^k in units of eps, exactly."""
    value, size = mp.zero, mp.zero
    for coefficient in polynomial:
        value, size = value * x + mp.mpf(float(coefficient)), size * abs(x) + abs(mp.mpf(float(coefficient)))
    return float(abs(value) / size / EPS) if size else 0.0


@settings(deadline=None, max_examples=60)
@given(root_sets(16))
def test_backward_error_of_random_sets(roots):
    in_w, in_z = both_readings(roots)
    answer = poles(in_w, in_z)
    if answer.status[0] != SOLVED:  # clusters, and many poles close to z = 1, may stay unknown; nothing simpler
        assert answer.status[0] == UNCERTIFIED
        assert np.isnan(answer.log_z).all()
        assert len(roots) > 8 or nearest(np.array(roots) - 1) < 0.01
        return
    for log_z in answer.log_z[0]:
        with mp.workdps(reference.WORKING_DIGITS):
            z = mp.exp(mp.mpc(log_z)) if np.isfinite(log_z) else mp.zero
            # every pole solves the loop in w or in z; eigenvalues leave some ten units per degree, and a
            # logarithm rounded to double costs |log z| of them
            allowed = 100 * len(roots) * (1 + (abs(log_z) if np.isfinite(log_z) else 0))
            assert min(residual(in_w[0], z - 1), residual(in_z[0], z)) < allowed


@settings(deadline=None, max_examples=60)
@given(root_sets(6))
def test_separate_roots_come_back(roots):
    z = np.array(roots)
    gaps = np.abs(z[:, None] - z) + 9 * np.eye(len(z))
    if gaps.min() < 1e-2:
        return  # a cluster is as uncertain as its polynomial is; see the nasty set
    answer = poles(*both_readings(roots))
    # The coefficients' rounding, magnified by the gaps: 1e-16 (1.3/1e-2)^2 at worst for the log of |z| >= 1e-3
    assert distances(answer.log_z[0], np.log(z)).max() < PROMISED


ANY_NUMBER = st.one_of(
    st.floats(), st.floats(-2, 2), st.sampled_from([0.0, -0.0, 1.0, 5e-324, 1e-160, 1e160, 1e300, np.nan, np.inf])
)


@settings(deadline=None, max_examples=400)
@given(st.lists(ANY_NUMBER, min_size=1, max_size=7))
def test_nothing_raises_and_nothing_half_solved_passes(coefficients):
    in_w = np.array(coefficients)
    in_z = np.zeros_like(in_w)
    with np.errstate(all="ignore"):
        for value in in_w:  # Horner in z - 1
            in_z = np.append(in_z[1:], 0.0) - in_z
            in_z[-1] += value
    answer = poles(in_w[None], in_z[None])
    if answer.status[0] == SOLVED:
        assert np.isfinite(in_w).all()
        assert in_w[0] != 0
        assert (np.isfinite(answer.log_z) | np.isneginf(answer.log_z.real)).all()
    else:
        assert np.isnan(answer.log_z).all()


@pytest.mark.parametrize("hostile", [np.nan, np.inf, 0.0])
def test_one_impossible_loop_leaves_its_neighbours_alone(hostile):
    in_w, in_z = (np.repeat(one, 3, axis=0) for one in both_readings([0.9, 0.5, 0.2]))
    in_w[1, 0] = in_z[1, 0] = hostile
    answer = poles(in_w, in_z)
    assert (answer.status == SOLVED).tolist() == [True, False, True]
    assert distances(answer.log_z[2], np.log([0.9 + 0j, 0.5, 0.2])).max() < 1e-14


def test_wrong_roots_are_never_passed_on(monkeypatch):
    in_w, in_z = (np.repeat(one, 2, axis=0) for one in both_readings([0.9, 0.5, 0.2, 0.7]))
    true_roots = kernel.polynomial_roots

    def one_root_twice(polynomial):
        found = true_roots(polynomial)
        found[0, 1] = found[0, 0]  # polishing sends both to the same root
        return found

    monkeypatch.setattr(kernel, "polynomial_roots", one_root_twice)
    answer = poles(in_w, in_z)
    assert answer.status.tolist() == [UNCERTIFIED, SOLVED]
    assert np.isnan(answer.log_z[0]).all()
    assert np.isfinite(answer.log_z[1]).all()


def test_eigenvalues_given_up_by_the_library_are_unknown(monkeypatch):
    in_w, in_z = (np.repeat(one, 3, axis=0) for one in both_readings([0.9, 0.5, 0.2, 0.7]))
    in_w[1, 2] = 1.75  # stands for the matrix on which the library gives up
    library = np.linalg.eigvals

    def gives_up(matrix):
        if (matrix == -1.75).any():
            raise np.linalg.LinAlgError("Eigenvalues did not converge")
        return library(matrix)

    monkeypatch.setattr(np.linalg, "eigvals", gives_up)
    answer = poles(in_w, in_z)
    assert (answer.status == SOLVED).tolist() == [True, False, True]


def test_blocks_of_polynomials_do_not_matter(monkeypatch):
    in_w, in_z = (np.repeat(one, 7, axis=0) for one in both_readings([0.9, 0.5, 0.2, 0.7]))
    in_w[:, 2] += 1e-3 * np.arange(7)
    in_z[:, 2] += 1e-3 * np.arange(7)
    in_w[3, 0] = 0.0
    whole = poles(in_w, in_z)
    monkeypatch.setattr(kernel, "_ENTRIES", 60)  # two at a time
    parts = poles(in_w, in_z)
    assert (parts.status == whole.status).all()
    np.testing.assert_array_equal(parts.log_z, whole.log_z)


def test_poles_at_exactly_zero():
    answer = poles(np.polymul([1, 1], np.polymul([1, 1], [1, 0.3]))[None], np.array([[1.0, -0.7, 0.0, 0.0]]))
    log_z = answer.log_z[0][np.argsort(answer.log_z[0].real)]
    assert np.isneginf(log_z[:2].real).all()
    assert log_z[2] == pytest.approx(np.log(0.7), rel=4 * EPS)
    # no pole at all: a constant loop is solved, with nothing to report
    alone = poles(np.ones((2, 1)), np.ones((2, 1)))
    assert alone.log_z.shape == (2, 0)
    assert (alone.status == SOLVED).all()


def test_too_many_samples_of_dead_time_are_a_status():
    study = study_of(plant="dead_time = 9.0", period="{ values = [0.09, 0.5] }")
    groups = list(closed_loop_poles(*sampled_loop(study), study.gain.values))
    status = {int(group.columns[0]): group.found.status for group in groups}
    assert (status[0] == TOO_LONG).all()
    assert (status[1] == SOLVED).all()
    assert 9.0 / 0.09 + 2 > HIGHEST_DEGREE > 9.0 / 0.5 + 2


def test_power_of_z_in_w():
    # (1 + w)^5 by Pascal's triangle
    assert power_of_z(5, 0).tolist() == [1, 5, 10, 10, 5, 1]
    assert power_of_z(5, 1).tolist() == [1, 0, 0, 0, 0, 0]
    assert power_of_z(0, 0).tolist() == power_of_z(0, 1).tolist() == [1]


# Whole loops ----------------------------------------------------------------------------------------------------


def sampled_loop(study):
    """(Sampled, Compensator) of a study without parameters."""
    sampled = sample(study, {"clock": np.ones(1)}, study.period.values)
    return sampled, compensator_on_axes(study.loop, {}, study.gain.values, study.period.values)


@reference.exactly
def breakaway():
    """Period 1/4, plant 1/(s(s + 1)): the gain that makes the two poles meet, from the discriminant."""
    plant = reference.sample(["1"], ["1", "1", "0"], "0", "0.25")
    (b1, b0), (_, a1, a0) = plant.numerator[-2:], plant.denominator
    # (a1 + K b1)^2 = 4 (a0 + K b0)
    root = mp.polyroots([b1**2, 2 * a1 * b1 - 4 * b0, a1**2 - 4 * a0])
    return float(min(mp.re(one) for one in root if mp.re(one) > 0))


# name: transfer, numerator and denominator in s, dead time, period, gains, how many poles meet
NASTY = {
    "double integrator, two delays, from K = 0": ("1/s^2", ["1"], ["1 0 0"], 0.5, 0.25, [0, 1e-6, 0.01, 1], 2),
    "breakaway on the grid": ("1/(s*(s + 1))", ["1"], ["1 1 0"], 0, 0.25, [0.1, breakaway(), 1], 2),
    "triple start": ("1/s^3", ["1"], ["1 0 0 0"], 0, 0.25, [0, 1e-9, 1e-3, 1], 3),
    "quadruple start": ("1/(s + 1)^4", ["1"], ["1 4 6 4 1"], 0, 0.25, [0, 1e-9, 1e-3, 1], 4),
    "equal complex pairs": ("1/(s^2 + s + 1)^2", ["1"], ["1 1 1"] * 2, 0, 0.25, [0, 1e-12, 1e-3, 1], 2),
    "four delays": ("1/(s*(s + 1))", ["1"], ["1 1 0"], 1.0, 0.25, [0, 0.01, 0.3, 4], 4),
    "12 gains over 6 decades": (
        "1/(s*(s + 1)*(s^2 + s + 4))", ["1"], ["1 1 0", "1 1 4"], 0.3, 0.25, np.geomspace(1e-3, 1e3, 12), 1
    ),
    "fast sampling at degree 8": (
        "(s + 2)/(s*(s + 1)*(s + 3)*(s^2 + s + 4)*(s^2 + 0.2*s + 1)*(s + 5))", ["1 2"],
        ["1 1 0", "1 3", "1 1 4", "1 0.2 1", "1 5"], 0, 2.0**-17, [1e-3, 0.3, 4], 1,
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", NASTY)
def test_nasty_loops(name):
    text, above, below, dead_time, period, gains, meeting = NASTY[name]
    parts = {
        "transfer": text, "plant": f"dead_time = {dead_time}", "period": f"{{ values = [{period!r}] }}",
        "gain": f"{{ values = {[float(gain) for gain in gains]} }}",
    }  # fmt: skip
    study = study_of(**parts)
    (group,) = closed_loop_poles(*sampled_loop(study), study.gain.values)
    assert (group.found.status == SOLVED).all()
    top, bottom = (
        reference.multiply(*[reference.polynomial(one.split()) for one in side]) for side in (above, below)
    )
    plant = reference.sample(top, bottom, dead_time, period)
    radius = swept(**parts)["nominal_value"].sel(measure="stability").values[0]
    for index, gain in enumerate(study.gain.values):
        exact = logarithms(reference.closed_loop_poles(plant, [gain], [1]))
        error = distances(group.found.log_z[0, index], exact).max()
        # m poles that meet move by the m-th root of rounding; thirty for the coefficients' own and the powers'
        allowed = 30 * EPS ** (1 / meeting) if nearest(exact) < 0.01 else PROMISED
        assert error < allowed, gain
        assert radius[index] == pytest.approx(np.exp(exact.real.max()), rel=allowed), gain
        assert radius[index] >= 1 or exact.real.max() < 0, gain  # what is marginal never reads stable


def test_small_gains_at_fast_sampling_are_solved():
    # A slow integral part far below the plant's poles, those far below the poles of the dead time: seven decades
    parts = {
        "transfer": "1/((s^2/3.4 + 0.11*s + 1)*(s^2/0.03 + 17*s + 1))", "plant": "dead_time = 5.6e-7",
        "compensator": "gain*(1 + period/(z - 1))", "period": "{ values = [1.346e-7] }",
        "gain": "{ from = 1e-6, to = 1e3, points = 40 }",
    }  # fmt: skip
    (group,) = closed_loop_poles(*sampled_loop(study_of(**parts)), np.geomspace(1e-6, 1e3, 40))
    assert (group.found.status == SOLVED).all()
    assert swept(**parts).attrs["unknown_loops"] == 0


@mp.workdps(50)
def refined(polynomial, z):
    """The exact root nearest by, from Newton's iteration; None when it wanders off by more than a thousandth."""
    root = mp.mpc(z)
    for _ in range(5):  # 16 digits and more at the start: doubled each time
        value, slope = mp.polyval(polynomial, root, derivative=True)
        root -= value / slope
    return root if abs(root - mp.mpc(z)) <= abs(mp.mpc(z)) / 1000 else None


@pytest.mark.parametrize("delay", [20, 33.375, 60])
@pytest.mark.parametrize(
    ("text", "above", "below", "period", "gain"),
    [
        ("1/(s + 1)", ["1"], ["1", "1"], 2.0**-10, 0.3),
        ("(s^2 + s + 2)/(s^2 + 3*s + 1)", ["1", "1", "2"], ["1", "3", "1"], 0.25, 0.45),
        ("1/(s*(s + 1))", ["1"], ["1", "1", "0"], 2.0**-7, 1.5),
        ("1/(s^2 + 0.2*s + 1)", ["1"], ["1", "0.2", "1"], 0.5, 0.05),
    ],
)
def test_long_dead_times(text, above, below, period, gain, delay):
    parts = {
        "transfer": text, "plant": f"dead_time = {delay * period!r}", "gain": f"{{ values = [{gain}] }}",
        "period": f"{{ values = [{period}] }}", "requirements": TIME_TO_PEAK,
    }  # fmt: skip
    study = study_of(**parts)
    (group,) = closed_loop_poles(*sampled_loop(study), study.gain.values)
    assert group.found.status[0, 0] == SOLVED
    plant = reference.sample(above, below, delay * period, period)
    polynomial = reference.closed_loop_polynomial(plant, [gain], [1])
    found = group.found.log_z[0, 0]
    exact = [refined(polynomial, complex(np.exp(one))) for one in found]
    assert len(found) == len(polynomial) - 1
    assert None not in exact
    # All of them are roots and no two are one, so nothing is missing; tens of poles leave each less certain
    assert nearest(np.array([complex(one) for one in exact])) > 1e-6
    assert distances(found, logarithms(exact)).max() < PROMISED
    # and a real pole stays real: taken for a pair it would hide the slowest true one
    time = swept(**parts)["nominal_value"].values.item()
    assert time == pytest.approx(float(reference.measures(exact, period)["time to peak"]), rel=PROMISED)
