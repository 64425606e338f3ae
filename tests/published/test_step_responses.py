"""Step responses, between samples included, from textbooks and by hand: deadbeat loops, a sampled motor."""

import numpy as np
import pytest
from numpy import exp, log, sqrt

RESPONSE = 1e-6  # promised for response times; other response values are promised to 1e-9
VALUE = 1e-9


def crossing(function, low, high):
    """Where a monotonic function changes sign between low and high, by bisection to rounding."""
    rising = function(high) > 0
    for _ in range(80):
        middle = (low + high) / 2
        low, high = (low, middle) if (function(middle) > 0) == rising else (middle, high)
    return (low + high) / 2


# Deadbeat control of 1/s^2: with k = T^2/2, (z - 1)^2 (z + 3/4) + k(z + 1)(5z - 3)/(4k) = z^3. The rule (all
# poles at the origin, the state at rest after as many samples as there are poles, effort as 1/T^2) is that of
# Åström and Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, sections 4.3 and 5.3, from memory; the
# numbers follow.
DOUBLE_INTEGRATOR_DEADBEAT = "gain*(2.5*z - 1.5)/(period^2*(z + 0.75))"


@pytest.mark.parametrize("period", [0.01, 3.0])
def test_deadbeat_of_the_double_integrator(measured, period):
    # u = (5/2, -4, 3/2, 0, ...)/T^2, so y = 5/4, 7/4, 1 at the samples. In the second interval, with
    # x = t/T - 1, y = 5/4 + (5/2)x - 2x^2 rises to 65/32 at x = 5/8; in the third, y - 1 = (3/4)(3 - t/T)^2
    # falls to 2 % at 3 - t/T = sqrt(2/75).
    names = ["overshoot", "excess between samples", "peak effort", "settling time", "time to peak"]
    loop = {"compensator": DOUBLE_INTEGRATOR_DEADBEAT, "period": [period], "basis": "response"}
    values = {name: value[0, 0] for name, value in measured("1/s^2", names, **loop).items()}
    assert values["overshoot"] == pytest.approx(100 * 33 / 32, rel=VALUE)
    assert values["excess between samples"] == pytest.approx(100 * 9 / 32, rel=VALUE)
    assert values["peak effort"] == pytest.approx(4 / period**2, rel=VALUE)
    assert values["settling time"] == pytest.approx((3 - sqrt(2 / 75)) * period, rel=RESPONSE)
    assert values["time to peak"] == pytest.approx(13 / 8 * period, rel=RESPONSE)


class TestDeadbeatOfTheMotor:
    """Ogata, Discrete-Time Control Systems, 2nd ed. 1995, section 4-7, analytical design, from memory.

    Plant 1/(s(s + 1)), T = 1 s: D(z) = 1.5820(1 - 0.3679/z)/(1 + 0.4180/z) brings the output to rest in two
    samples without ripple: y = 0, 0.5820, 1, 1, ...; u = 1.5820, -0.5820, 0, .... Exactly, with e = exp(-1):
    1/(1 - e) for 1.5820, and (1 - 2e)/(1 - e) for 0.4180.
    """

    compensator = "gain*(z - exp(-1))/((1 - exp(-1))*z + 1 - 2*exp(-1))"

    def test_printed_effort(self, measured):
        printed = "gain*1.5820*(z - 0.3679)/(z + 0.4180)"
        values = measured("1/(s*(s + 1))", ["peak effort"], compensator=printed)
        # The first sample is the controller's own; the next is smaller, whatever the printed digits lack.
        assert values["peak effort"][0, 0] == pytest.approx(1.5820, rel=VALUE)

    def test_response_between_samples(self, measured):
        names = [
            "overshoot",
            "excess between samples",
            "peak effort",
            "settling time",
            "time to peak",
            "rise time",
        ]
        loop = {"compensator": self.compensator, "basis": "response"}
        values = {name: value[0, 0] for name, value in measured("1/(s*(s + 1))", names, **loop).items()}
        effort = 1 / (1 - exp(-1))
        assert values["peak effort"] == pytest.approx(effort, rel=VALUE)
        assert values["overshoot"] == 0
        assert values["excess between samples"] == pytest.approx(0, abs=1e-6)  # a difference of zeros, in %
        assert values["time to peak"] == np.inf

        def first(t):
            return effort * (t - 1 + exp(-t))

        def second(t):  # starts at first(1) with the velocity 1
            return first(1) + (1 - exp(-t)) + (1 - effort) * (t - 1 + exp(-t))

        tenth = crossing(lambda t: first(t) - 0.1, 0, 1)
        ninetieth = 1 + crossing(lambda t: second(t) - 0.9, 0, 1)
        settled = 1 + crossing(lambda t: second(t) - 0.98, 0, 1)
        assert values["rise time"] == pytest.approx(ninetieth - tenth, rel=RESPONSE)
        assert values["settling time"] == pytest.approx(settled, rel=RESPONSE)


class TestSampledMotorAtUnitGain:
    """Ogata 1995, section 3-5, unit-step response of 1/(s(s + 1)) at K = 1, T = 1 s, from memory.

    c = 0, 0.3679, 1, 1.3996, 1.3996, 1.1470, 0.8944, 0.8015, ...
    """

    def values(self, measured, *names, **option):
        loop = {"basis": "response"} | option
        return [value[0, 0] for value in measured("1/(s*(s + 1))", names, **loop).values()]

    def test_overshoot_at_the_samples(self, measured):
        overshoot, excess = self.values(measured, "overshoot", "excess between samples")
        assert overshoot - excess == pytest.approx(39.96, abs=6e-3)  # 1.3996
        # From z^2 - z + r, r = 1 - exp(-1): c(3) = c(2) - r c(1) + r = 1 + r^2, as c(1) = 1 - r and c(2) = 1.
        assert overshoot - excess == pytest.approx(100 * (1 - exp(-1)) ** 2, rel=VALUE)

    def test_peak_lies_between_the_third_and_fourth_sample(self, measured):
        # From y = c(3), velocity v, effort u = 1 - c(3): y + v(1 - exp(-t)) + u(t - 1 + exp(-t)) is largest
        # at exp(-t) = u/(u - v).
        e = exp(-1)
        position, velocity = 0.0, 0.0
        for _ in range(3):
            effort = 1 - position
            position, velocity = (
                position + velocity * (1 - e) + effort * e,
                velocity * e + effort * (1 - e),
            )
        effort = 1 - position
        instant = log((effort - velocity) / effort)
        peak = position + velocity * (1 - exp(-instant)) + effort * (instant - 1 + exp(-instant))
        overshoot, time_to_peak = self.values(measured, "overshoot", "time to peak")
        assert overshoot == pytest.approx(100 * (peak - 1), rel=VALUE)
        assert time_to_peak == pytest.approx(3 + instant, rel=RESPONSE)

    @pytest.mark.parametrize("gain", [0.5, 1.0, 2.0])
    def test_ramp_error_is_one_over_the_velocity_constant(self, measured, gain):
        # Franklin, Powell and Workman, Digital Control of Dynamic Systems, section on steady-state accuracy,
        # from memory: K_v = lim (z - 1)G(z)/T, and the hold leaves it at lim sG(s) = K.
        (error,) = self.values(measured, "steady-state error", gain=[gain], option='input = "ramp"')
        assert error == pytest.approx(1 / gain, rel=VALUE)

    def test_step_error(self, measured):
        (error,) = self.values(measured, "steady-state error", option='input = "step"')
        assert error == pytest.approx(0, abs=VALUE)


def test_step_error_of_a_lag(measured):
    # Position constant K_p = G(1) = K, error 1/(1 + K): Franklin, Powell and Workman, as above; from memory.
    gains = np.array([0.5, 1.0, 3.0])
    values = measured("1/(s + 1)", ["steady-state error"], gain=gains, period=[0.5], option='input = "step"')
    assert values["steady-state error"][0] == pytest.approx(1 / (1 + gains), rel=VALUE)


class TestFastSampledSecondOrderSystem:
    """1/(s(s + 2 zeta)): sampled fast, unity feedback closes it to 1/(s^2 + 2 zeta s + 1).

    Half a period of delay takes about T/4 = 2.5e-4 off the damping ratio, and shifts times by less than T.
    """

    period = 1e-3

    def value(self, measured, zeta, name):
        transfer = f"1/(s*(s + {2 * zeta}))"
        return measured(transfer, [name], period=[self.period], basis="response")[name][0, 0]

    @pytest.mark.parametrize(
        ("zeta", "printed"),
        # Ogata, Modern Control Engineering, chapter on transient response, chart of overshoot against damping
        # ratio; Nise, Control Systems Engineering, chapter 4; both from memory [%].
        [(0.2, 52.7), (0.3, 37.2), (0.4, 25.4), (0.5, 16.3), (0.6, 9.5), (0.7, 4.6), (0.8, 1.5)],
    )
    def test_overshoot(self, measured, zeta, printed):
        # Half of the last printed digit, and 2.5e-4 of damping at up to 160 % per unit of it.
        assert self.value(measured, zeta, "overshoot") == pytest.approx(printed, abs=0.05 + 0.04)

    @pytest.mark.parametrize("zeta", [0.2, 0.5, 0.7])
    def test_time_to_peak(self, measured, zeta):
        # Ogata, as above: t_p = pi/(w_n sqrt(1 - zeta^2)).
        expected = np.pi / sqrt(1 - zeta**2)
        assert self.value(measured, zeta, "time to peak") == pytest.approx(expected, abs=2 * self.period)

    @pytest.mark.parametrize(
        ("zeta", "printed"),
        # Nise, as above, normalised rise time from 10 % to 90 %, from memory.
        [(0.2, 1.203), (0.3, 1.321), (0.4, 1.463), (0.5, 1.638), (0.6, 1.854), (0.7, 2.126), (0.8, 2.467)],
    )
    def test_rise_time(self, measured, zeta, printed):
        expected = pytest.approx(printed, abs=5e-4 + self.period)
        assert self.value(measured, zeta, "rise time") == expected
