"""Compensators converted from s to z: the program's closed loops against published difference equations."""

import numpy as np
import pytest
from numpy import exp, pi, tan

# Poles are promised to 1e-9 in s; np.roots of the expected polynomial, of degree 3 at most, is far closer.
AGREEMENT = 1e-9
POLE_MEASURES = ["spectral radius", "damping ratio", "natural frequency"]


def motor(corner, h):
    """1/(s(s/corner + 1)) behind a hold; Åström and Wittenmark 1997, table 2.1, from memory."""
    e = exp(-corner * h)
    return np.array([corner * h - 1 + e, 1 - e - corner * h * e]) / corner, np.array([1, -(1 + e), e])


def double_integrator(h):
    return np.array([h**2 / 2, h**2 / 2]), np.array([1, -2, 1])


def pole_measures(plant, compensator, period):
    """The three measures of the loop closed around two (numerator, denominator) pairs in z."""
    closed = np.polyadd(np.polymul(plant[1], compensator[1]), np.polymul(plant[0], compensator[0]))
    poles = np.roots(closed).astype(complex)
    s = np.log(poles) / period
    return np.array([abs(poles).max(), (-s.real / abs(s)).min(), abs(s).min()])


def found(measured, transfer, compensator, conversion, period):
    values = measured(
        transfer, POLE_MEASURES, period=[period], compensator=compensator, conversion=conversion
    )
    return np.array([values[measure][0, 0] for measure in POLE_MEASURES])


@pytest.mark.parametrize(
    ("period", "printed"),
    [
        # Franklin, Powell and Workman, Digital Control of Dynamic Systems, antenna example, plant 1/(s(10s +
        # 1)), D(s) = (10s + 1)/(s + 1) by matched poles and zeros, from memory: 6.64(z - 0.9048)/(z - 0.3679)
        # at T = 1 s and 9.15(z - 0.9802)/(z - 0.8187) at T = 0.2 s.
        (1.0, (6.64, 0.9048, 0.3679)),
        (0.2, (9.15, 0.9802, 0.8187)),
    ],
)
def test_matched_lead_of_the_antenna(measured, period, printed):
    gain, zero, pole = printed
    exact_zero, exact_pole = exp(-period / 10), exp(-period)
    exact_gain = (1 - exact_pole) / (1 - exact_zero)
    assert [exact_gain, exact_zero, exact_pole] == pytest.approx(printed, abs=5e-3)
    values = found(measured, "1/(s*(10*s + 1))", "gain*(10*s + 1)/(s + 1)", "matched poles and zeros", period)
    plant = motor(0.1, period)
    exact = pole_measures(plant, ([exact_gain, -exact_gain * exact_zero], [1, -exact_pole]), period)
    assert values == pytest.approx(exact, rel=AGREEMENT)
    # The printed gain is right to 1 in 1300 at worst, and its zero very nearly cancels the plant's pole.
    rounded = pole_measures(plant, ([gain, -gain * zero], [1, -pole]), period)
    assert values == pytest.approx(rounded, rel=4e-3)


def test_matched_lead_of_the_attitude_control(measured):
    # Franklin, Powell and Emami-Naeini, Feedback Control of Dynamic Systems, chapter on digital control,
    # attitude of a space station, plant 1/s^2, D(s) = 0.81(s + 0.2)/(s + 2), T = 1 s, from memory: D(z) =
    # 0.389(z - 0.82)/(z - 0.135). (With unrounded pole and zero the gain is 0.386.)
    values = found(measured, "1/s^2", "gain*0.81*(s + 0.2)/(s + 2)", "matched poles and zeros", 1.0)
    zero, pole = exp(-0.2), exp(-2.0)
    gain = 0.081 * (1 - pole) / (1 - zero)
    exact = pole_measures(double_integrator(1.0), ([gain, -gain * zero], [1, -pole]), 1.0)
    assert values == pytest.approx(exact, rel=AGREEMENT)
    printed = pole_measures(double_integrator(1.0), ([0.389, -0.389 * 0.82], [1, -0.135]), 1.0)
    assert values == pytest.approx(printed, rel=0.02)  # two and three printed digits


def test_bilinear_lead(measured):
    # Franklin, Powell and Emami-Naeini, Feedback Control of Dynamic Systems, chapter on digital control,
    # example on Tustin's method, plant 1/(s(s + 1)), D(s) = 10(s/2 + 1)/(s/10 + 1), T = 0.025 s, from memory:
    # (45.56 - 43.33/z)/(1 - 0.7778/z). Exactly: 10(41z - 39)/(9z - 7).
    values = found(measured, "1/(s*(s + 1))", "gain*10*(s/2 + 1)/(s/10 + 1)", "bilinear", 0.025)
    plant = motor(1.0, 0.025)
    assert values == pytest.approx(pole_measures(plant, ([410, -390], [9, -7]), 0.025), rel=AGREEMENT)
    # D(1) = 10 is (45.56 - 43.33)/(1 - 0.7778) in print: each half of a last digit, 0.005 in 2.22 twice, is
    # 0.5 %.
    printed = pole_measures(plant, ([45.56, -43.33], [1, -0.7778]), 0.025)
    assert values == pytest.approx(printed, rel=0.01)


def test_backward_difference_of_a_lead(measured):
    # s becomes (z - 1)/(zT): Ogata, Discrete-Time Control Systems, 2nd ed. 1995, section 5-2; from memory.
    period = 0.1
    values = found(measured, "1/(s*(s + 1))", "gain*4*(s + 1)/(0.2*s + 1)", "backward difference", period)
    lead = (4 * np.array([period + 1, -1]), np.array([period + 0.2, -0.2]))
    assert values == pytest.approx(pole_measures(motor(1.0, period), lead, period), rel=AGREEMENT)


@pytest.mark.parametrize("period", [0.5, 2.0])
def test_backward_difference_of_an_integrator_has_the_known_limit(measured, period):
    # Ogata 1995, section 4-4, Kz/(z - 1) on 1/(s + 1): critical K is 2 coth(T/2), 8.165 at 0.5 s and 2.626 at
    # 2 s, from memory. The converted K/s is KTz/(z - 1).
    limit = 2 / np.tanh(period / 2) / period
    values = measured(
        "1/(s + 1)",
        ["stability"],
        gain=limit * np.array([1 - 2e-3, 1, 1 + 2e-3]),
        period=[period],
        compensator="gain/s",
        conversion="backward difference",
    )
    below, at, above = values["stability"][0]
    assert below < 1 < above
    assert at == pytest.approx(1, abs=3e-9)  # |s|T = pi at z = -1, promised to 1e-9


def test_bilinear_integrator_of_an_integrator(measured):
    # The trapezoidal rule K(T/2)(z + 1)/(z - 1) on T/(z - 1), Åström and Wittenmark, Computer-Controlled
    # Systems, 3rd ed. 1997, section 8.2, from memory: (z - 1)^2 + k(z + 1), k = KT^2/2, has the product 1 +
    # k.
    gains, period = np.array([0.1, 2.0]), 0.6
    values = measured(
        "1/s", ["spectral radius"], gain=gains, period=[period], compensator="gain/s", conversion="bilinear"
    )
    assert values["spectral radius"][0] == pytest.approx(np.sqrt(1 + gains * period**2 / 2), rel=AGREEMENT)


@pytest.mark.parametrize("frequency", [0.1, 0.8])
def test_bilinear_exact_at_a_frequency(measured, frequency):
    # Prewarping, s becomes w1/tan(w1 T/2) (z - 1)/(z + 1): Åström and Wittenmark 1997, section 8.2, from
    # memory.
    period = 0.4
    rate = 2 * pi * frequency / tan(pi * frequency * period)
    lead = (np.array([rate + 1, 1 - rate]), np.array([0.2 * rate + 1, 1 - 0.2 * rate]))
    values = found(
        measured, "1/(s*(s + 1))", "gain*(s + 1)/(0.2*s + 1)", f"bilinear, exact at {frequency} Hz", period
    )
    assert values == pytest.approx(pole_measures(motor(1.0, period), lead, period), rel=AGREEMENT)


def test_exact_frequency_keeps_a_notch_in_place(measured):
    # Prewarping for a notch, Franklin, Powell and Workman, chapter on discrete equivalents, from memory: the
    # zeros of (s^2 + w1^2)/(s + w1)^2, converted exactly at w1, are exp(+-j w1 T). On the plant 1/z at a gain
    # of 1e12 two poles have gone there, to within 1e-12, and the third to -1e12, where |s|T is 28.
    frequency, period = 1.3, 0.2
    values = measured(
        "1/z",
        ["natural frequency"],
        gain=[1e12],
        sampled_at=f"{period} s",
        compensator=f"gain*(s^2 + (2*pi*{frequency})^2)/(s + 2*pi*{frequency})^2",
        conversion=f"bilinear, exact at {frequency} Hz",
    )
    assert values["natural frequency"][0, 0] == pytest.approx(2 * pi * frequency, rel=AGREEMENT)


@pytest.mark.parametrize("conversion", ["bilinear", "backward difference", "matched poles and zeros"])
def test_every_conversion_tends_to_the_analogue_loop(measured, conversion):
    # Common practice, no source: the lead 10(s/2 + 1)/(s/10 + 1) on 1/(s(s + 1)), sampled at 1e-4 s, has the
    # analogue poles of 0.1s^3 + 1.1s^2 + 6s + 10 but for a relative shift of the order |s|T = 1e-3.
    analogue = np.roots([0.1, 1.1, 6, 10])
    values = found(measured, "1/(s*(s + 1))", "gain*10*(s/2 + 1)/(s/10 + 1)", conversion, 1e-4)
    assert values[1] == pytest.approx((-analogue.real / abs(analogue)).min(), rel=2e-3)
    assert values[2] == pytest.approx(abs(analogue).min(), rel=2e-3)
