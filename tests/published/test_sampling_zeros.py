"""Zeros that sampling creates, seen through closed-loop poles, against published zeros.

The measures speak of poles only. Three rigorous routes lead from them to the zeros of B(z)/A(z):

- A compensator gain/(z - z0) closes the loop to A(z)(z - z0) + gain B(z). Then z0 is a closed-loop pole just
  when B(z0) = 0, and it sets the spectral radius when every other pole lies further inside.
- With z0 = -1 and a zero on the negative axis near it, the pole near -1 lies between -1 and the zero: the
  loop is unstable when the zero is outside the unit circle, stable when it is inside.
- At infinite gain the poles are the zeros of B and one pole that runs off to -infinity, where |s| is larger
  than at any of them: the least |s| is that of a zero, whatever the plant's slow poles were.
"""

from math import factorial

import pytest
from numpy import log, pi, sqrt

# Poles are promised to 1e-9 in s, |s|T is below 5 here, and |z| is up to 23: relative to |z|, 5e-9.
AGREEMENT = 5e-9

# Åström, Hagander and Sternby, Zeros of sampled systems, Automatica 20, 1984, table of the zeros outside or
# on the unit circle for fast sampling at relative degree 2 to 5, from memory (they are the zeros of the Euler
# polynomials z + 1, z^2 + 4z + 1, z^3 + 11z^2 + 11z + 1, z^4 + 26z^3 + 66z^2 + 26z + 1).
PRINTED = {3: -3.732, 4: -9.899, 5: -23.20}
half_sum = -(13 + sqrt(105)) / 2  # of the outermost pair z, 1/z at degree 5
EXACT = {3: -2 - sqrt(3), 4: -5 - 2 * sqrt(6), 5: half_sum - sqrt(half_sum**2 - 1)}


@pytest.mark.parametrize(("degree", "strength"), [(3, 5.0), (4, 20.0), (5, 100.0)])
@pytest.mark.parametrize("period", [0.01, 2.0])
def test_outermost_zero_of_an_integrator_chain(measured, degree, strength, period):
    # The strength is that of gain T^n/n!, such that the zero and A(z0) weigh alike and all other poles lie
    # inside.
    zero = EXACT[degree]
    assert zero == pytest.approx(PRINTED[degree], abs=6e-3 if degree == 5 else 6e-4)
    values = measured(
        f"1/s^{degree}",
        ["spectral radius"],
        gain=[strength * factorial(degree) / period**degree],
        period=[period],
        compensator=f"gain/(z + {-zero:.17g})",
    )
    assert values["spectral radius"][0, 0] == pytest.approx(-zero, rel=AGREEMENT)


def test_zero_of_the_double_integrator_lies_at_minus_one(measured):
    # Åström, Hagander and Sternby 1984: relative degree 2 gives z + 1. The further zero at 0.8 keeps the
    # other pair inside: (z - 1)^2 + 0.5(z - 0.8) has the product 0.6.
    values = measured("1/s^2", ["spectral radius"], compensator="gain*(z - 0.8)/(z + 1)")
    assert values["spectral radius"][0, 0] == pytest.approx(1, rel=AGREEMENT)


@pytest.mark.parametrize("part", [0.6, 0.7, 0.9])
def test_zero_of_a_late_integrator(measured, part):
    # (1 - p)z + p, p the part of a sample lost: Åström and Wittenmark, Computer-Controlled Systems, 3rd ed.
    # 1997, chapter 2 on time delay, from memory. It lies outside the circle for p > 1/2.
    zero = -part / (1 - part)
    values = measured(
        "1/s", ["spectral radius"], gain=[0.8], dead_time=f"{part} s", compensator=f"gain/(z + {-zero:.17g})"
    )
    assert values["spectral radius"][0, 0] == pytest.approx(-zero, rel=AGREEMENT)


@pytest.mark.parametrize(
    ("transfer", "least"),
    [
        # Relative degree 2: the zero -1 has |s|T = pi. Degree 3: both zeros -2 -+ sqrt(3) have the same |s|,
        # as their product is 1. Degree 4: again -1. Åström, Hagander and Sternby 1984, as above.
        ("1/(s + 1)^2", pi),
        ("1/(s + 1)^3", abs(complex(log(2 + sqrt(3)), pi))),
        ("1/((s + 1)*(s + 3)^3)", pi),
    ],
)
def test_fast_sampled_lags_share_the_zeros_of_integrators(measured, transfer, least):
    # A limit for T towards 0: the zeros lie off by something of the order of (fastest pole) T = 3e-4.
    period = 1e-4
    values = measured(transfer, ["natural frequency"], gain=[1e24], period=[period])
    assert values["natural frequency"][0, 0] * period == pytest.approx(least, rel=1e-3)


def test_fast_sampling_keeps_the_plants_own_zero(measured):
    # Åström, Hagander and Sternby 1984, theorem for h towards 0, from memory: a zero s0 of the plant becomes
    # one near exp(s0 h), here with |s| = 2, far below that of the sampling zeros at pi/h and above.
    values = measured("(s + 2)/((s + 1)*(s + 3)^3)", ["natural frequency"], gain=[1e24], period=[1e-4])
    assert values["natural frequency"][0, 0] == pytest.approx(2, rel=1e-3)


@pytest.mark.parametrize(
    ("transfer", "printed"),
    [
        # Åström, Hagander and Sternby 1984, and Åström and Wittenmark 1997, section 2.6 on zeros, from
        # memory: the sampled 1/(s + 1)^3 has a zero outside the unit circle for 0 < h < 1.8399.
        ("1/(s + 1)^3", 1.8399),
        # Åström and Wittenmark 1997, same section, from memory: 6(1 - s)/((s + 2)(s + 3)) has its zero in the
        # right half plane, yet a stable inverse when sampled slower than h = 1.25 (1.2485).
        ("6*(1 - s)/((s + 2)*(s + 3))", 1.2485),
    ],
)
def test_period_at_which_the_zero_crosses_the_circle(measured, transfer, printed):
    values = measured(
        transfer,
        ["stability"],
        period=[printed - 2e-4, printed + 2e-4],  # four printed digits are right to half of the last: 5e-5
        compensator="gain/(z + 1)",
    )
    outside, inside = values["stability"][:, 0]
    assert inside < 1 < outside


def test_slow_sampling_moves_the_zero_to_the_origin(measured):
    # Åström, Hagander and Sternby 1984, theorem for h towards infinity, from memory: all zeros tend to 0, as
    # a stable plant settles within one sample; the loop is then z + K G(0). At h = 30, exp(-30)*30^2/2 =
    # 4e-11.
    values = measured("1/(s + 1)^3", ["spectral radius"], gain=[0.4], period=[30.0])
    assert values["spectral radius"][0, 0] == pytest.approx(0.4, rel=1e-9)
