"""Largest stable gain against the sample period: poles against textbook limits and exact ones."""

import numpy as np
import pytest

# A textbook prints three or four digits. At the exact limit the pole has to lie on the circle as closely as
# poles are promised: a relative error of s of 1e-9, and |s|T is at most pi.
ON_THE_CIRCLE = 3e-9


def assert_limit(measured, transfer, limit, closeness=ON_THE_CIRCLE, **loop):
    """The largest pole is inside the unit circle just below the limit, on it there, outside just above."""
    gains = limit * np.array([1 - 2e-3, 1.0, 1 + 2e-3])
    below, at, above = measured(transfer, ["stability"], gain=gains, **loop)["stability"][0]
    assert below < 1 < above
    assert at == pytest.approx(1, abs=closeness)


def motor_limit(period):
    """K/(s(s + 1)) behind a hold: z^2 + (Ka - 1 - e)z + e + Kb, a = e - 1 + T, b = 1 - (1 + T)e, e = exp(-T).

    A complex pair leaves the circle when its product e + Kb is 1. (The other condition, a root at -1, comes
    later for every T below 3.7.)
    """
    decay = np.exp(-period)
    return (1 - decay) / (1 - (1 + period) * decay)


@pytest.mark.parametrize(
    ("period", "printed", "rounding"),
    [
        # Dorf and Bishop, Modern Control Systems, chapter on digital control, table "maximum gain for a
        # second-order sampled system", from memory: 20.4 at T = 0.1 tau, 1.45 at T = 2 tau. (Its entries at
        # 0.5 and 1 were read off a chart, as recalled, and are not used.)
        (0.1, 20.4, 4e-3),
        (2.0, 1.45, 4e-3),
        # Ogata, Discrete-Time Control Systems, 2nd ed. 1995, section 4-3, example on the Jury test, from
        # memory: 0 < K < 2.3925 with coefficients rounded to four digits; Phillips and Nagle, Digital Control
        # System Analysis and Design, stability chapter, from memory: 2.39.
        (1.0, 2.3925, 2e-4),
    ],
)
def test_motor_limit_against_printed_and_exact_value(measured, period, printed, rounding):
    exact = motor_limit(period)
    assert exact == pytest.approx(printed, rel=rounding)
    assert_limit(measured, "1/(s*(s + 1))", exact, period=[period])


def test_frequency_of_sustained_oscillation(measured):
    # Ogata 1995, same example, from memory: at K = 2.3925 the poles are 0.2439 +- 0.9698j and the loop
    # oscillates at 1.3244 rad/s; T = 1.
    pole = 0.2439 + 0.9698j
    values = measured("1/(s*(s + 1))", ["spectral radius", "natural frequency"], gain=[2.3925])
    # The printed gain and poles come from coefficients of four digits.
    assert values["natural frequency"][0, 0] == pytest.approx(1.3244, abs=1.5e-4)
    assert values["natural frequency"][0, 0] == pytest.approx(np.angle(pole), abs=1.5e-4)
    assert values["spectral radius"][0, 0] == pytest.approx(abs(pole), abs=1.5e-4)


@pytest.mark.parametrize(
    ("period", "printed"),
    # Ogata 1995, section 4-4, root loci of a digital integral controller Kz/(z - 1) on 1/(s + 1) for three
    # sample periods, from memory: critical gains 8.165, 4.328, 2.626.
    [(0.5, 8.165), (1.0, 4.328), (2.0, 2.626)],
)
def test_integral_control_of_a_lag(measured, period, printed):
    # z^2 - (1 + e - K(1 - e))z + e has a root at -1 when K = 2(1 + e)/(1 - e) = 2 coth(T/2).
    exact = 2 / np.tanh(period / 2)
    assert exact == pytest.approx(printed, abs=1.1e-3)  # the first is printed 8.165 and is 8.16598
    assert_limit(measured, "1/(s + 1)", exact, period=[period], compensator="gain*z/(z - 1)")


def test_integral_control_poles_at_gain_two(measured):
    # Ogata 1995, section 4-4, same example, from memory: K = 2 gives 0.4098 +- 0.6623j at T = 0.5 s and
    # 0.05185 +- 0.6043j at T = 1 s.
    values = measured(
        "1/(s + 1)",
        ["spectral radius", "natural frequency"],
        gain=[2],
        period=[0.5, 1.0],
        compensator="gain*z/(z - 1)",
    )
    printed = np.array([0.4098 + 0.6623j, 0.05185 + 0.6043j])
    frequencies = abs(np.log(printed)) / [0.5, 1.0]
    assert values["spectral radius"][:, 0] == pytest.approx(abs(printed), abs=1e-4)  # four printed digits
    assert values["natural frequency"][:, 0] == pytest.approx(frequencies, abs=3e-4)


@pytest.mark.parametrize("corner", [0.2, 3.0])
@pytest.mark.parametrize("period", [0.01, 0.7])
def test_proportional_control_of_a_lag(measured, corner, period):
    # Common exercise, no source: z = e - (K/a)(1 - e), e = exp(-aT), reaches -1 at K = a coth(aT/2).
    limit = corner / np.tanh(corner * period / 2)
    assert_limit(measured, f"1/(s + {corner})", limit, period=[period])


def test_integrator_limit_is_two_over_the_period(measured):
    # Common exercise, no source: z - 1 + KT reaches -1 at KT = 2.
    assert_limit(measured, "1/s", 2 / 0.05, period=[0.05])


@pytest.mark.parametrize("late", [1, 2, 3, 5])
@pytest.mark.parametrize("where", ["dead_time", "computing_delay", "both"])
def test_integrator_late_by_whole_samples(measured, late, where):
    # Levin and May, A note on difference-delay equations, Theoretical Population Biology 9, 1976, from
    # memory: x(n+1) = x(n) - q x(n-k) is stable just for 0 < q < 2 cos(k pi/(2k + 1)). Here q = KT, k samples
    # late.
    period = 0.25
    delays = {
        "dead_time": {"dead_time": f"{late * period} s"},
        "computing_delay": {"computing_delay": f"{late} period"},
        "both": {"dead_time": f"{(late - 1) * period} s", "computing_delay": "1 period"},
    }
    limit = 2 * np.cos(late * np.pi / (2 * late + 1)) / period
    assert_limit(measured, "1/s", limit, period=[period], **delays[where])


@pytest.mark.parametrize("part", [0.1, 0.25, 0.4, 0.75])
def test_integrator_late_by_part_of_a_sample(measured, part):
    # z^2 - z + KT((1 - p)z + p): sampling of a delayed integrator, Åström and Wittenmark, Computer-Controlled
    # Systems, 3rd ed. 1997, chapter 2, from memory. By the second-order Jury conditions a root reaches -1 at
    # KT = 2/(1 - 2p), a pair leaves the circle at KT = 1/p: a quarter of a sample late allows twice the gain
    # of none. There, at KT = 4, the roots are -1 and -1: a double root moves by the square root of rounding.
    limit = min(1 / part, 2 / (1 - 2 * part) if part < 0.5 else np.inf)
    closeness = 1e-7 if part == 0.25 else ON_THE_CIRCLE
    assert_limit(measured, "1/s", limit, closeness, dead_time=f"{part} s", period=[1.0])


def test_dead_time_of_many_samples_reaches_the_continuous_limit(measured):
    # Hayes, Roots of the transcendental equation ..., J. London Math. Soc. 25, 1950, from memory: an
    # integrator with dead time d is stable for 0 < Kd < pi/2. The hold adds half a period, common practice,
    # no source; by the Levin-May limit 2 sin(pi/(2(2k + 1))) the two agree to (pi/(2(2k + 1)))^2/6 = 5e-4 at
    # k = 14.
    delay, samples = 0.3, 14
    period = delay / samples
    limit = np.pi / 2 / (delay + period / 2)
    gains = limit * np.array([1 - 1e-3, 1 + 1e-3])
    values = measured("1/s", ["stability"], gain=gains, period=[period], dead_time=f"{delay} s")
    below, above = values["stability"][0]
    assert below < 1 < above


@pytest.mark.parametrize(
    ("transfer", "critical_gain", "critical_period"),
    [
        # Ogata, Modern Control Engineering, chapter on PID control, ultimate-gain example, from memory:
        # critical gain 30, critical period 2.8099 s.
        ("1/(s*(s + 1)*(s + 5))", 30.0, 2.8099),
        # Åström and Hägglund, PID Controllers, 2nd ed. 1995, from memory: 1/(s + 1)^3 has the critical gain 8
        # at the frequency sqrt(3).
        ("1/(s + 1)^3", 8.0, 2 * np.pi / np.sqrt(3)),
    ],
)
def test_fast_sampling_reaches_the_continuous_critical_point(
    measured, transfer, critical_gain, critical_period
):
    # The hold costs half a period, a phase of w T/2 = 1e-4 rad here: the gain moves by a few times that.
    values = measured(
        transfer,
        ["stability", "natural frequency"],
        gain=critical_gain * np.array([1 - 1e-3, 1 + 1e-3]),
        period=[1e-4],
    )
    below, above = values["stability"][0]
    assert below < 1 < above
    assert 2 * np.pi / values["natural frequency"][0] == pytest.approx(critical_period, rel=1e-3)


@pytest.mark.parametrize("turns", [1, 2])
def test_pathological_period_hides_the_oscillation(measured, turns):
    # Kalman, Ho and Narendra, Controllability of linear dynamical systems, Contributions to Differential
    # Equations 1, 1963, from memory: sampling at a multiple of the resonance's period loses control of it.
    # The poles stay at 1 whatever the gain; a double pole moves by the square root of the rounding of cos.
    period = 2 * np.pi * turns / 3.0
    values = measured("9/(s^2 + 9)", ["spectral radius"], gain=[0.1, 1.0, 10.0], period=[period])
    assert values["spectral radius"][0] == pytest.approx(np.ones(3), abs=1e-7)


def test_double_integrator_never_stands_proportional_control(measured):
    # Pulse transfer T^2 (z + 1)/(2(z - 1)^2), Åström and Wittenmark 1997, table 2.1, from memory: the pair's
    # product is 1 + K T^2/2.
    gains, period = np.array([0.01, 1.0, 3.0]), 0.5
    values = measured("1/s^2", ["spectral radius"], gain=gains, period=[period])
    assert values["spectral radius"][0] == pytest.approx(np.sqrt(1 + gains * period**2 / 2), rel=1e-9)
