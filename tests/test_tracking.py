"""The tracking kernel: formulas against NumPy and mpmath, and whole gain axes against companion eigenvalues."""

from __future__ import annotations

import math
import os
import subprocess
import sys

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from small_study import study_of

import explorer
from explorer.kernels.factors import (
    FLOOR,
    IN_Z,
    NONE,
    angle,
    corrected,
    judged,
    log_one_plus,
    logarithm,
    product,
    reduced,
)
from explorer.kernels.lanes import LANES, ArrayOperations
from explorer.kernels.restart import solve_afresh
from explorer.kernels.roots import poles, reductions_of
from explorer.kernels.tracking import REDUCTIONS, gain_steps, tracker
from explorer.loop import solving

ROUNDING = 4e-16  # two roundings


def track(constant, slope, gain, in_z=False):
    """Reductions (5, G, S) and certificates (G, S) of (S, n+1) polynomials constant + gain * slope."""
    count, degree = constant.shape[0], constant.shape[1] - 1
    blocks = -(-count // LANES)
    rows = np.minimum(np.arange(blocks * LANES), count - 1)
    lanes = [
        np.ascontiguousarray(part[rows].reshape(blocks, LANES, -1).transpose(0, 2, 1)) for part in (constant, slope)
    ]
    found = np.empty((REDUCTIONS, blocks, len(gain), LANES))
    tracker(degree, in_z)(*lanes, gain_steps(gain), found)
    flat = found.transpose(0, 2, 1, 3).reshape(REDUCTIONS, len(gain), -1)[: REDUCTIONS - 1, :, :count]
    return flat, found[-1].transpose(1, 0, 2).reshape(len(gain), -1)[:, :count] == 1.0


def in_z(polynomial):
    """Coefficients in z of a polynomial in w = z - 1, exactly rounded."""
    result = [mpmath.mpf(0)]
    with mpmath.workdps(40):
        for coefficient in polynomial:
            shifted = [*result, mpmath.mpf(0)]
            for k, value in enumerate(result):
                shifted[k + 1] -= value
            shifted[-1] += mpmath.mpf(float(coefficient))
            result = shifted
    return np.array([float(value) for value in result[1:]])


@pytest.mark.parametrize("size", [1e-12, 1e-3, 0.2, 1.0, 40.0])
def test_logarithms_and_angle_to_rounding(size):
    generator = np.random.default_rng(3)
    x = generator.uniform(-0.99, 1.0, 500) * size
    x = x[x > -0.999]
    assert log_one_plus(ArrayOperations, x) == pytest.approx(np.log1p(x), rel=ROUNDING)
    assert logarithm(ArrayOperations, np.exp(x)) == pytest.approx(np.log(np.exp(x)), rel=ROUNDING, abs=1e-16)
    y = np.abs(generator.normal(size=x.size))
    assert angle(ArrayOperations, x, y) == pytest.approx(np.arctan2(y, x), rel=ROUNDING)


@np.errstate(all="ignore")
def test_edges_of_the_logarithms():
    found = log_one_plus(ArrayOperations, np.array([-1.0, np.nan, -3.0, 0.0]))
    assert found.tolist() == [FLOOR, FLOOR, FLOOR, 0.0]
    assert logarithm(ArrayOperations, np.array([0.0, np.nan, 1.0])).tolist() == [FLOOR, FLOOR, 0.0]


@pytest.mark.parametrize("degree", range(3, 13))
def test_corrections_are_of_third_order(degree):
    generator = np.random.default_rng(degree)
    factors = [generator.normal(size=LANES) for _ in range(degree)]
    target = product(factors, degree)
    near = [row * (1 + 1e-4 * generator.normal(size=LANES)) for row in factors]

    def residual(rows):
        return [p - c for p, c in zip(target, product(rows, degree), strict=True)]

    def miss(rows):
        return np.median(np.max(np.abs(residual(rows)), axis=0))

    first = miss(near)
    better = corrected(degree, residual(near), near)
    # 1e-4 leaves about its cube times the conditioning; 1e-9 tells third from second order (1e-8 and more)
    assert miss(better) < 1e-9 < first
    assert judged(ArrayOperations, degree, target, factors)[-1].all()
    assert not judged(ArrayOperations, degree, target, near)[-1].any()


def test_factors_that_overflow_are_not_certified():
    huge = [np.full(LANES, 1e200)] * 4
    with np.errstate(all="ignore"):
        assert not judged(ArrayOperations, 4, product(huge, 4), huge)[-1].any()


def test_starting_weights_reproduce_cubics_in_log_gain():
    gain = np.geomspace(0.3, 70, 9)
    cubic = np.polyval([0.3, -1.0, 2.0, 5.0], np.log(gain))
    steps = gain_steps(gain)
    for index in range(4, 9):
        assert steps[index, 1:] @ cubic[index - 4 : index][::-1] == pytest.approx(cubic[index], rel=1e-11)  # 4! cancels
    assert steps[1, 1] == 1.0
    assert steps[:, 1:].sum(axis=1)[1:] == pytest.approx(1.0, rel=1e-12)


def servo(poles_w, numerator, count, spread, seed):
    """A family of count polynomials prod(w - pole) + gain * numerator around given ones."""
    generator = np.random.default_rng(seed)
    degree = len(poles_w)
    constant, slope = np.empty((count, degree + 1)), np.zeros((count, degree + 1))
    for row in range(count):
        factor = 1 + spread * generator.uniform(-1, 1)
        constant[row] = np.poly(np.asarray(poles_w) * factor).real
        slope[row, degree + 1 - len(numerator) :] = np.asarray(numerator) * (1 + spread * generator.uniform(-1, 1))
    return constant, slope


FAMILIES = {
    "lag": ([-0.3], [0.2]),
    "integrator and lag": ([0.0, -0.2], [0.02, 0.02]),
    "with a delay": ([0.0, -0.2, -1.0], [0.01, 0.02, 0.015]),
    "resonant": ([0.0, -0.02 + 0.3j, -0.02 - 0.3j, -1.0], [0.01, 0.002, 0.001]),
    "breakaways": ([0.0, -0.1, -0.3, -0.6, -0.8], [0.002, 0.003]),
    "two resonances, delay": (
        [0.0, -0.1, -0.01 + 0.2j, -0.01 - 0.2j, -0.02 + 0.5j, -0.02 - 0.5j, -1.0],
        [0.01, 0.004, 0.0004],
    ),
    "triple start": ([-0.2, -0.2, -0.2, 0.0], [0.01, 0.01]),
    "double integrator, two delays": ([0.0, 0.0, -1.0, -1.0], [0.005, 0.0005]),
    "equal pairs": ([-0.1 + 0.2j, -0.1 - 0.2j] * 2, [0.01, 0.01]),
    "fast sampling, order 8": (1e-4 * np.array([0, -1, -2, -3 + 4j, -3 - 4j, -0.5 + 2j, -0.5 - 2j, -9]), [1e-29]),
}


@pytest.mark.parametrize("name", FAMILIES)
@pytest.mark.parametrize("gains", [12, 200])
def test_tracked_reductions_equal_those_of_companion_eigenvalues(name, gains):
    constant, slope = servo(*FAMILIES[name], count=40, spread=0.1, seed=1)
    gain = np.geomspace(1e-3, 1e3, gains)
    found, sure = track(constant, slope, gain)
    polynomial = constant[None] + gain[:, None, None] * slope[None]
    exact = poles(polynomial, np.apply_along_axis(in_z, -1, polynomial) if gains == 12 else polynomial_in_z(polynomial))
    reference = reductions_of(exact.log_z)
    both = sure & (exact.status == 0)
    assert sure.mean() > 0.5  # what is handed over is the exception
    # log|z| and damping of simple roots agree to rounding times their conditioning; of nearly double ones, which
    # the families with multiple starts have at the smallest gains, to its square root
    scale = np.maximum(np.abs(reference[2]), 1e-6)
    error = np.abs(found[0] - reference[0]) / scale
    assert np.quantile(error[both], 0.95) < 1e-9
    assert error[both].max() < 1e-5
    assert np.quantile(np.abs(found[1] - reference[1])[both], 0.95) < 1e-9


def polynomial_in_z(polynomial):
    """The same in double precision, enough where only the bulk is compared."""
    degree = polynomial.shape[-1] - 1
    shift = np.zeros((degree + 1, degree + 1))
    for row in range(degree + 1):
        for column in range(row, degree + 1):
            shift[row, column] = (-1) ** (column - row) * math.comb(degree - row, column - row)
    return polynomial @ shift


@settings(deadline=None, max_examples=60)
@given(st.sampled_from([1, 2, 3, 4, 5, 8, 16]), st.integers(0, 2**31))
def test_no_uncertified_answer_passes_as_known(degree, seed):
    generator = np.random.default_rng(seed)
    scale = 10.0 ** generator.uniform(-4, 0.3)
    constant = np.array([np.poly(_random_roots(generator, degree) * scale).real for _ in range(LANES)])
    slope = np.zeros_like(constant)
    slope[:, 1:] = generator.normal(size=(LANES, degree)) * scale ** np.arange(1, degree + 1)
    gain = np.geomspace(0.01, 10, 8)
    found, sure = track(constant, slope, gain)
    for step, lane in np.argwhere(sure)[:3]:
        with mpmath.workdps(40):
            pairs = zip(constant[lane], slope[lane], strict=True)
            coefficients = [mpmath.mpf(a) + mpmath.mpf(gain[step]) * mpmath.mpf(b) for a, b in pairs]
            exact = mpmath.polyroots(coefficients, maxsteps=500, extraprec=400)
            logs = [mpmath.log(1 + root) for root in exact]
            slowest = float(max(log.real for log in logs))
            gaps = min((abs(a - b) for i, a in enumerate(exact) for b in exact[:i]), default=mpmath.mpf(1))
        # a certified set is exact for coefficients changed by (4 + n) eps: roots move by that over their distance
        # to the others, at most n - 1 times; random polynomials of high degree are ill-conditioned
        allowed = min(1e-2, 1e-13 * 10.0 ** (degree / 2) * (scale / max(float(gaps), 1e-12)) ** min(degree - 1, 2))
        assert abs(found[0, step, lane] - slowest) <= allowed * max(abs(slowest), scale)


def _random_roots(generator, degree):
    pairs = degree // 2
    complex_roots = generator.normal(size=pairs) + 1j * generator.normal(size=pairs)
    return np.concatenate([complex_roots, complex_roots.conj(), generator.normal(size=degree % 2)])


@pytest.mark.parametrize("degree", [2, 5, 6])
def test_reductions_in_z_equal_those_in_w(degree):
    generator = np.random.default_rng(degree)
    rows = [generator.normal(size=LANES) * 0.3 for _ in range(degree)]
    made = np.array([np.ones(LANES), *product(rows, degree)]).T
    in_w = track(made, np.zeros_like(made), np.array([1.0]))[0]
    shifted = np.apply_along_axis(in_z, -1, made)
    assert track(shifted, np.zeros_like(made), np.array([1.0]), in_z=True)[0] == pytest.approx(
        in_w, rel=1e-8, abs=1e-10
    )


INTERPRETED = """
import sys
import numpy as np
from explorer.kernels.tracking import REDUCTIONS, gain_steps, tracker
generator = np.random.default_rng(4)
gains = np.geomspace(0.1, 100.0, 9)
constant = np.stack([np.poly(-generator.uniform(0.05, 0.8, 5)) for _ in range(16)]).T[None].copy()
slope = np.concatenate([np.zeros((1, 1, 16)), 0.01 * generator.uniform(size=(1, 5, 16))], axis=1)
found = np.empty((REDUCTIONS, 1, 9, 16))
tracker(5)(constant, slope, gain_steps(gains), found)
assert (found[-1] == 1).all()
np.save(sys.argv[1], found)
"""


def test_tracking_gives_the_same_without_a_compiler(tmp_path):
    results = []
    for disabled in ("0", "1"):
        words = [sys.executable, "-c", INTERPRETED, str(tmp_path / disabled)]
        subprocess.run(words, env=os.environ | {"NUMBA_DISABLE_JIT": disabled}, check=True)
        results.append(np.load(tmp_path / f"{disabled}.npy"))
    assert results[1] == pytest.approx(results[0], rel=1e-10)  # products and sums fuse where they are compiled


def test_codes_of_both_variables_differ():
    assert len(reduced(ArrayOperations, 2, *[np.ones(LANES)] * 3)) == REDUCTIONS
    unit = [np.zeros(LANES), np.full(LANES, 0.25), np.ones(LANES)]  # z = ±j/2 in z; w = ±j/2 in w
    assert reduced(ArrayOperations, 2 + IN_Z, *unit)[0] == pytest.approx(np.log(0.5), rel=ROUNDING)
    assert reduced(ArrayOperations, 2, *unit)[0] == pytest.approx(0.5 * np.log(1.25), rel=ROUNDING)


def test_no_pair_is_said_so():
    found, sure = track(np.array([[1.0, 0.7, 0.1]]), np.array([[0.0, 0.0, 0.0]]), np.array([1.0]))
    assert sure.all()
    assert found[3, 0, 0] == NONE
    assert found[4, 0, 0] == 0.0


def test_a_fresh_solution_groups_conjugates_and_neighbours():
    roots = np.array([-0.1 + 0.4j, -0.1 - 0.4j, -0.5, -0.2, 0.3])
    constant = np.tile(np.poly(roots).real[:, None], LANES)
    past = np.zeros((5, LANES))
    solve_afresh(constant, np.zeros_like(constant), 0, 5, 1.0, 0, past, 0)
    made = np.array([np.ones(1), *product([row[:1] for row in past], 5)])[:, 0]
    assert made == pytest.approx(np.poly(roots).real, rel=1e-13, abs=1e-15)  # five factors' roundings


LAGGING = {
    "parameters": 'k = { nominal = 1.0, tolerance = "10 %" }\nlag = { from = 0.8, to = 1.3 }',
    "transfer": "k/(s*(lag*s + 1))",
    "gain": "{ from = 0.05, to = 20, points = 24 }",
    "period": "{ from = 0.05, to = 2, points = 5 }",
    "scenarios": "{ interior = 5, corners = true, seed = 1, tolerance_scales = [0, 1.0] }",
}


@pytest.mark.parametrize(
    "parts",
    [
        {"compensator": "gain*(z - 0.9)/z"},
        {"compensator": "gain*(1 + 0.4*(z - 1)/(period*z))", "loop": "computing_delay = 0.03"},
        {"compensator": "(gain + gain**2)*(z - 0.9)/(z - 0.2/(1 + gain))"},
    ],
    ids=["one pole at the origin", "a fractional delay", "not affine in the gain"],
)
def test_a_tracked_sweep_equals_companion_eigenvalues(parts, monkeypatch):
    study = study_of(**LAGGING | parts)
    by_eigenvalues = explorer.sweep(study, jobs=1)
    monkeypatch.setattr(solving, "WORTH_TRACKING", 1)
    by_tracking = explorer.sweep(study, jobs=1)
    for name in ("worst_value", "nominal_value"):
        np.testing.assert_allclose(by_tracking[name], by_eigenvalues[name], rtol=1e-9)  # what is promised
    assert by_tracking.attrs["status_tally"] == by_eigenvalues.attrs["status_tally"]
