"""Polynomials from the literature on stability tests in z: verdict and poles against their known roots."""

import numpy as np
import pytest

# Simple roots come out as promised, 1e-9 in s. A double root moves by the square root of rounding, 1e-8 and
# less.
SIMPLE, DOUBLE = 1e-9, 1e-7


def closed_loop_of(polynomial):
    """A plant in z that unity feedback at gain 1 closes with just this monic polynomial: (P(z) - z^n)/z^n."""
    degree = len(polynomial) - 1
    terms = [f"({value:.17g})*z^{degree - place}" for place, value in enumerate(polynomial) if place > 0]
    return f"({' + '.join(terms)})/z^{degree}"


# (coefficients, roots, tolerance); each set of roots was multiplied out again.
STABLE = {
    # Ogata, Discrete-Time Control Systems, 2nd ed. 1995, section 4-3, first example on the Jury test, from
    # memory.
    "Ogata, degree 4": ([1, -1.2, 0.07, 0.3, -0.08], [0.8, 0.5, 0.4, -0.5], SIMPLE),
    # Phillips and Nagle, Digital Control System Analysis and Design, example on the Jury test, from memory.
    "Phillips and Nagle": ([1, -1.8, 1.05, -0.2], [0.8, 0.5, 0.5], DOUBLE),
    # Kuo, Automatic Control Systems, stability of discrete-data systems, from memory.
    "Kuo, double root": ([1, 1, 0.25], [-0.5, -0.5], DOUBLE),
}
UNSTABLE = {
    # Ogata 1995, section 4-3, third example, from memory.
    "Ogata, degree 3": ([1, -1.3, -0.08, 0.24], [1.2, 0.5, -0.4], SIMPLE),
    # Kuo, Automatic Control Systems, example on the Jury test, from memory: "one root outside".
    "Kuo, one outside": ([1, 3.3, 3, 0.8], [-2, -0.8, -0.5], SIMPLE),
}


@pytest.mark.parametrize("name", [*STABLE, *UNSTABLE])
def test_poles_are_the_known_roots(measured, name):
    polynomial, roots, tolerance = (STABLE | UNSTABLE)[name]
    assert np.poly(roots) == pytest.approx(np.array(polynomial, dtype=float), abs=1e-12)
    names = ["spectral radius", "damping ratio", "natural frequency"]
    values = measured(closed_loop_of(polynomial), names, sampled_at="1 s")
    s = np.log(np.array(roots, dtype=complex))
    expected = [max(abs(np.array(roots))), min(-s.real / abs(s)), min(abs(s))]
    assert [values[name][0, 0] for name in names] == pytest.approx(expected, rel=tolerance)


@pytest.mark.parametrize("name", [*STABLE, *UNSTABLE])
def test_verdict_on_stability(judged_stable, name):
    polynomial, _, _ = (STABLE | UNSTABLE)[name]
    assert judged_stable(closed_loop_of(polynomial), sampled_at="1 sample")[0] == (name in STABLE)


def test_root_on_the_circle(measured):
    # Ogata 1995, section 4-3, second example, from memory: z^3 - 1.1z^2 - 0.1z + 0.2 is critically stable,
    # with the roots 1, 0.5, -0.4.
    values = measured(closed_loop_of([1, -1.1, -0.1, 0.2]), ["spectral radius"], sampled_at="1 sample")
    assert values["spectral radius"][0, 0] == pytest.approx(1, rel=SIMPLE)


def test_two_roots_outside(measured):
    # Kuo, Automatic Control Systems, example on the bilinear transformation, from memory:
    # z^3 + 5.94z^2 + 7.7z - 0.368 has two roots outside the circle. Their product is 0.368 over the small
    # root 0.046137 (found by Newton steps from 0.368/7.7), their sum -5.94 less that root.
    small = 0.368 / 7.7
    for _ in range(4):
        small -= (small**3 + 5.94 * small**2 + 7.7 * small - 0.368) / (3 * small**2 + 11.88 * small + 7.7)
    half, product = (5.94 + small) / 2, 0.368 / small
    largest, second = half + np.sqrt(half**2 - product), half - np.sqrt(half**2 - product)
    assert largest > second > 1
    values = measured(
        closed_loop_of([1, 5.94, 7.7, -0.368]), ["spectral radius", "natural frequency"], sampled_at="1 s"
    )
    assert values["spectral radius"][0, 0] == pytest.approx(largest, rel=SIMPLE)
    expected = min(abs(complex(np.log(small))), abs(complex(np.log(second), np.pi)))
    assert values["natural frequency"][0, 0] == pytest.approx(expected, rel=SIMPLE)


def test_gain_range_of_a_cubic(judged_stable):
    # Kuo, Automatic Control Systems, exercise on the bilinear transformation, from memory: z^3 + z^2 + z + K
    # is stable for 0 < K < 1 (at K = 1 it is (z + 1)(z^2 + 1), at K = 0 it is z(z^2 + z + 1)).
    verdict = judged_stable("1/(z^3 + z^2 + z)", gain=[1e-3, 0.4, 0.999, 1.001, 3], sampled_at="1 sample")
    assert verdict.tolist() == [True, True, True, False, False]


def test_cubic_with_all_roots_on_the_circle(measured):
    values = measured("1/(z^3 + z^2 + z)", ["spectral radius"], sampled_at="1 sample")
    assert values["spectral radius"][0, 0] == pytest.approx(1, rel=SIMPLE)


@pytest.mark.parametrize(
    "corner", [(0, -0.98), (1.98, 0.99), (-1.98, 0.99), (0, 0.99), (1, 0.01), (-1, 0.01)]
)
def test_triangle_of_stable_quadratics(judged_stable, corner):
    # Åström and Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, section 3.2, from memory: z^2 + az + b
    # is stable just for b < 1, b > a - 1, b > -a - 1. Each point here lies inside, near an edge or a vertex;
    # a step of 0.04 away from the middle (0, 1/3) of the triangle leaves it.
    inside = np.array(corner)
    outward = inside - np.array([0, 1 / 3])
    outside = inside + 0.04 * outward / np.linalg.norm(outward)
    for point, expected in ((inside, True), (outside, False)):
        a, b = point
        assert (b < 1 and b > a - 1 and b > -a - 1) == expected
        assert judged_stable(closed_loop_of([1, a, b]), sampled_at="1 sample")[0] == expected


@pytest.mark.parametrize("degree", [1, 2, 5, 9])
def test_rotated_roots_of_a_power(measured, degree):
    # z^n + K has n roots of modulus K^(1/n); K = 1 is the classical limit of Jury, Theory and Application of
    # the z-Transform Method, 1964 (the last coefficient must be smaller than the first), from memory.
    gains = np.array([0.5, 1.0, 1.2])
    values = measured(f"1/z^{degree}", ["spectral radius"], gain=gains, sampled_at="1 sample")
    assert values["spectral radius"][0] == pytest.approx(gains ** (1 / degree), rel=SIMPLE)


# Deadbeat control of 1/s^2: with k = T^2/2, (z - 1)^2 (z + 3/4) + k(z + 1)(5z - 3)/(4k) = z^3. The rule that
# all poles go to the origin is that of Åström and Wittenmark, Computer-Controlled Systems, 3rd ed. 1997,
# sections 4.3 and 5.3, from memory; the numbers follow from it.
def test_deadbeat_of_the_double_integrator(measured):
    compensator = "gain*(2.5*z - 1.5)/(period^2*(z + 0.75))"
    values = measured("1/s^2", ["spectral radius"], compensator=compensator, period=[0.01, 3.0])
    # A triple pole moves by the cube root of rounding: (1e-15)^(1/3) = 1e-5, tenfold for the sums.
    assert values["spectral radius"][:, 0] == pytest.approx([0, 0], abs=1e-4)


def test_deadbeat_of_the_motor_keeps_the_cancelled_pole(measured):
    # Ogata 1995, section 4-7, analytical design, from memory: D(z) = 1.5820(z - 0.3679)/(z + 0.4180) for
    # 1/(s(s + 1)) at T = 1 s. The poles are 0, 0 and the plant's own, cancelled, exp(-1) = 0.3679.
    exact = "gain*(z - exp(-1))/((1 - exp(-1))*z + 1 - 2*exp(-1))"
    values = measured("1/(s*(s + 1))", ["spectral radius"], compensator=exact)
    assert values["spectral radius"][0, 0] == pytest.approx(np.exp(-1), rel=SIMPLE)
    printed = "gain*1.5820*(z - 0.3679)/(z + 0.4180)"
    values = measured("1/(s*(s + 1))", ["spectral radius"], compensator=printed)
    assert values["spectral radius"][0, 0] == pytest.approx(0.3679, abs=1e-4)  # four printed digits


@pytest.mark.parametrize(("corner", "period"), [(0.5, 0.1), (2.0, 1.0)])
def test_deadbeat_of_a_lag(measured, corner, period):
    # Common exercise, no source: e - (K/a)(1 - e) = 0 at K = a/(exp(aT) - 1).
    gain = corner / np.expm1(corner * period)
    values = measured(f"1/(s + {corner})", ["spectral radius"], gain=[gain], period=[period])
    assert values["spectral radius"][0, 0] == pytest.approx(0, abs=1e-12)  # a simple root, so rounding only
