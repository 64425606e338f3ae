"""Zero-order hold: closed-loop poles against the printed tables of pulse transfer functions."""

import numpy as np
import pytest
from numpy import cos, exp, sin, sqrt

# Both sides hold simple roots of degree 1 to 5 computed in double precision; poles are promised to 1e-9 in s.
AGREEMENT = 1e-9
POLE_MEASURES = ["spectral radius", "damping ratio", "natural frequency"]

A, B, C = 0.8, 2.3, 1.4  # corner frequencies and a zero of no significance [rad/s]
ZETA, OMEGA = 0.35, 1.7


def integrator(h):
    return [h], [1, -1]


def double_integrator(h):
    return [h**2 / 2, h**2 / 2], [1, -2, 1]


def triple_integrator(h):
    return np.array([1, 4, 1]) * h**3 / 6, [1, -3, 3, -1]


def lag(h):
    return [1 - exp(-A * h)], [1, -exp(-A * h)]


def motor(h):
    e = exp(-A * h)
    return np.array([A * h - 1 + e, 1 - e - A * h * e]) / A, [1, -(1 + e), e]


def motor_behind_integrator(h):
    e = exp(-A * h)
    first = (1 - e) / A**2 + h * (h / 2 - 1 / A)
    second = (1 - e) * (h**2 / 2 - 2 / A**2) + (h / A) * (1 + e)
    third = -((e - 1) / A**2 + e * h * (h / 2 + 1 / A))
    return [first, second, third], [1, -(e + 2), 2 * e + 1, -e]


def equal_lags(h):
    e = exp(-A * h)
    return [1 - e * (1 + A * h), e * (e + A * h - 1)], [1, -2 * e, e**2]


def washed_out_equal_lags(h):
    e = exp(-A * h)
    return np.array([1, -1]) * h * e, [1, -2 * e, e**2]


def two_lags(h):
    ea, eb = exp(-A * h), exp(-B * h)
    first = (B * (1 - ea) - A * (1 - eb)) / (B - A)
    second = (A * (1 - eb) * ea - B * (1 - ea) * eb) / (B - A)
    return [first, second], [1, -(ea + eb), ea * eb]


def two_lags_with_zero(h):
    ea, eb = exp(-A * h), exp(-B * h)
    first = (eb - ea + (1 - eb) * C / B - (1 - ea) * C / A) / (A - B)
    second = C / (A * B) * ea * eb + (B - C) / (B * (A - B)) * ea + (C - A) / (A * (A - B)) * eb
    return [first, second], [1, -(ea + eb), ea * eb]


def damped_oscillator(h):
    w = OMEGA * sqrt(1 - ZETA**2)
    alpha, beta, gamma, ratio = exp(-ZETA * OMEGA * h), cos(w * h), sin(w * h), ZETA * OMEGA / w
    first = 1 - alpha * (beta + ratio * gamma)
    return [first, alpha**2 + alpha * (ratio * gamma - beta)], [1, -2 * alpha * beta, alpha**2]


def differentiated_damped_oscillator(h):
    w = OMEGA * sqrt(1 - ZETA**2)
    alpha, beta, first = exp(-ZETA * OMEGA * h), cos(w * h), exp(-ZETA * OMEGA * h) * sin(w * h) / w
    return [first, -first], [1, -2 * alpha * beta, alpha**2]


def oscillator(h):
    return np.array([1, 1]) * (1 - cos(A * h)), [1, -2 * cos(A * h), 1]


def differentiated_oscillator(h):
    return np.array([1, -1]) * sin(A * h) / A, [1, -2 * cos(A * h), 1]


# Åström and Wittenmark, Computer-Controlled Systems: Theory and Design, 3rd ed. 1997, table 2.1
# "zero-order-hold sampling of a continuous-time system", from memory; every row was checked against an
# exponential of the augmented state matrix. (1/s^3 is the table's 1/s^m at m = 3; its second coefficient in
# a/(s^2(s + a)) carries 2/a^2.)
TABLE = {
    "1/s": integrator,
    "1/s^2": double_integrator,
    "1/s^3": triple_integrator,
    f"{A}/(s + {A})": lag,
    f"{A}/(s*(s + {A}))": motor,
    f"{A}/(s^2*(s + {A}))": motor_behind_integrator,
    f"{A}^2/(s + {A})^2": equal_lags,
    f"s/(s + {A})^2": washed_out_equal_lags,
    f"{A}*{B}/((s + {A})*(s + {B}))": two_lags,
    f"(s + {C})/((s + {A})*(s + {B}))": two_lags_with_zero,
    f"{OMEGA}^2/(s^2 + 2*{ZETA}*{OMEGA}*s + {OMEGA}^2)": damped_oscillator,
    f"s/(s^2 + 2*{ZETA}*{OMEGA}*s + {OMEGA}^2)": differentiated_damped_oscillator,
    f"{A}^2/(s^2 + {A}^2)": oscillator,
    f"s/(s^2 + {A}^2)": differentiated_oscillator,
}


def pole_measures(numerator, denominator, gain, period):
    """Radius, least damping ratio, least |s| of denominator + gain*numerator = 0 [1, 1, rad/s]."""
    poles = np.roots(np.polyadd(denominator, gain * np.asarray(numerator))).astype(complex)
    s = np.log(poles) / period
    return abs(poles).max(), (-s.real / abs(s)).min(), abs(s).min()


def assert_table_entry(measured, transfer, pulse_transfer, gains, periods, **loop):
    values = measured(transfer, POLE_MEASURES, gain=gains, period=periods, **loop)
    for row, period in enumerate(periods):
        numerator, denominator = pulse_transfer(period)
        for column, gain in enumerate(gains):
            expected = pole_measures(numerator, denominator, gain, period)
            found = [values[measure][row, column] for measure in POLE_MEASURES]
            assert found == pytest.approx(expected, rel=AGREEMENT, abs=AGREEMENT)


@pytest.mark.parametrize("transfer", TABLE)
def test_closed_loop_poles_follow_the_table(measured, transfer):
    assert_table_entry(measured, transfer, TABLE[transfer], gains=[0.3, 1.9, 6.0], periods=[0.2, 1.1])


def delayed_lag(delay, h):
    """z(z - e) y = ((1 - exp(-a(h - d)))z + exp(-a(h - d)) - e) u, for d within one period."""
    late, e = exp(-A * (h - delay)), exp(-A * h)
    return [1 - late, late - e], [1, -e, 0]


def delayed_double_integrator(delay, h):
    left = h - delay
    return np.array([left**2, h**2 + 2 * h * delay - 2 * delay**2, delay**2]) / 2, [1, -2, 1, 0]


@pytest.mark.parametrize("whole", [0, 1, 3])
@pytest.mark.parametrize(
    ("transfer", "pulse_transfer"), [(f"{A}/(s + {A})", delayed_lag), ("1/s^2", delayed_double_integrator)]
)
def test_dead_time_of_part_of_a_sample(measured, transfer, pulse_transfer, whole):
    # Åström and Wittenmark 1997, section 2.3 on time delay: first-order system with delay, double integrator
    # with delay, from memory. Further whole samples are further factors of z.
    part, h = 0.3, 0.8

    def late(period):
        numerator, denominator = pulse_transfer(part, period)
        return numerator, np.append(denominator, np.zeros(whole))

    assert_table_entry(
        measured, transfer, late, gains=[0.4, 2.0], periods=[h], dead_time=f"{part + whole * h} s"
    )


def test_dead_time_and_computing_delay_add(measured):
    # Åström and Wittenmark 1997, chapter 9 on implementation, from memory: a computing delay counts as dead
    # time.
    part, h = 0.5, 0.8
    assert_table_entry(
        measured,
        "1/s^2",
        lambda period: delayed_double_integrator(part, period),
        gains=[0.4, 2.0],
        periods=[h],
        dead_time="0.3 s",
        computing_delay="0.25 period",
    )


def test_motor_with_printed_coefficients(measured):
    # Ogata, Discrete-Time Control Systems, 2nd ed. 1995, section 3-5, from memory: 1/(s(s + 1)) behind a hold
    # at T = 1 is (0.3679z + 0.2642)/((z - 0.3679)(z - 1)), and at K = 1 the loop is z^2 - z + 0.6321.
    values = measured("1/(s*(s + 1))", POLE_MEASURES)
    found = [values[measure][0, 0] for measure in POLE_MEASURES]
    radius = sqrt(0.6321)
    s = complex(np.log(radius), np.arccos(0.5 / radius))
    assert found == pytest.approx([radius, -s.real / abs(s), abs(s)], abs=1e-4)  # four printed digits
