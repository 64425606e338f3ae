"""Tables and rules of the second-order system, on sampled loops with just such a pair of poles."""

import pytest
from numpy import cos, exp, log, pi, sqrt

AGREEMENT = 1e-9  # promised for every measure by poles
OMEGA, PERIOD = 8.0, 0.1  # natural frequency [rad/s] and sample period [s] of the loops with exact poles


def exact_pair(zeta):
    """A plant in z that unity feedback closes to the poles exp(sT) of zeta and OMEGA."""
    alpha = exp(-zeta * OMEGA * PERIOD)
    beta = cos(OMEGA * PERIOD * sqrt(1 - zeta**2))
    return f"(({-2 * alpha * beta:.17g})*z + {alpha**2:.17g})/z^2"


# Overshoot in % for a damping ratio: Ogata, Modern Control Engineering, chapter on transient response, chart
# of overshoot against damping ratio; Nise, Control Systems Engineering, chapter 4; both from memory.
OVERSHOOT = {0.2: 52.7, 0.3: 37.2, 0.4: 25.4, 0.5: 16.3, 0.6: 9.5, 0.7: 4.6, 0.8: 1.5}


@pytest.mark.parametrize("zeta", OVERSHOOT)
def test_overshoot_by_poles(measured, zeta):
    values = measured(
        exact_pair(zeta), ["overshoot", "damping ratio", "natural frequency"], sampled_at=f"{PERIOD} s"
    )
    overshoot = values["overshoot"][0, 0]
    assert overshoot == pytest.approx(OVERSHOOT[zeta], abs=0.05)  # half of the last printed digit
    # The promise for a pole, 1e-9, stretched by the slope of the logarithm: up to 15 per unit of zeta.
    assert overshoot == pytest.approx(100 * exp(-pi * zeta / sqrt(1 - zeta**2)), rel=2e-8)
    assert values["damping ratio"][0, 0] == pytest.approx(zeta, rel=AGREEMENT)
    assert values["natural frequency"][0, 0] == pytest.approx(OMEGA, rel=AGREEMENT)


@pytest.mark.parametrize("zeta", [0.2, 0.5, 0.7])
def test_time_to_peak(measured, zeta):
    # Ogata, Modern Control Engineering, chapter on transient response: t_p = pi/(w_n sqrt(1 - zeta^2)); from
    # memory.
    values = measured(exact_pair(zeta), ["time to peak"], sampled_at=f"{PERIOD} s")
    assert values["time to peak"][0, 0] == pytest.approx(pi / (OMEGA * sqrt(1 - zeta**2)), rel=AGREEMENT)


@pytest.mark.parametrize(
    ("band", "rule", "rounding"),
    [
        # 4/(zeta w_n) for 2 %, 3/(zeta w_n) for 5 %: Ogata, Modern Control Engineering. 4.6/(zeta w_n) for 1
        # %: Franklin, Powell and Workman, Digital Control of Dynamic Systems. From memory. They round ln 50 =
        # 3.912, ln 20 = 2.996 and ln 100 = 4.605.
        ("2 %", 4.0, 0.023),
        ("5 %", 3.0, 0.002),
        ("1 %", 4.6, 0.0012),
    ],
)
@pytest.mark.parametrize("zeta", [0.3, 0.7])
def test_settling_time_rules(measured, band, rule, rounding, zeta):
    values = measured(
        exact_pair(zeta), ["settling time"], sampled_at=f"{PERIOD} s", option=f'band = "{band}"'
    )
    settling = values["settling time"][0, 0]
    assert settling == pytest.approx(rule / (zeta * OMEGA), rel=rounding)
    assert settling == pytest.approx(-log(float(band[0]) / 100) / (zeta * OMEGA), rel=AGREEMENT)


def test_settling_band_is_two_percent_unless_given(measured):
    settling = measured(exact_pair(0.5), ["settling time"], sampled_at=f"{PERIOD} s")["settling time"][0, 0]
    assert settling == pytest.approx(log(50) / (0.5 * OMEGA), rel=AGREEMENT)


@pytest.mark.parametrize("zeta", [0.3, 0.5, 0.7])
def test_damping_line_meets_the_negative_axis_at_the_overshoot(measured, zeta):
    # The logarithmic spiral of constant damping, Franklin, Powell and Workman, z-plane chart, from memory: it
    # reaches half the sampling rate at z = -exp(-pi zeta/sqrt(1 - zeta^2)), for 0.5 at -0.163.
    crossing = exp(-pi * zeta / sqrt(1 - zeta**2))
    assert crossing == pytest.approx(OVERSHOOT[zeta] / 100, abs=5e-4)
    values = measured(f"{crossing:.17g}/z", ["damping ratio", "natural frequency"], sampled_at=f"{PERIOD} s")
    assert values["damping ratio"][0, 0] == pytest.approx(zeta, rel=AGREEMENT)
    assert values["natural frequency"][0, 0] == pytest.approx(pi / PERIOD / sqrt(1 - zeta**2), rel=AGREEMENT)


def test_quarter_of_the_sampling_rate_is_the_imaginary_axis(measured):
    # Ogata, Discrete-Time Control Systems, 2nd ed. 1995, section 4-2, mapping of the s-plane, from memory:
    # z = +-j at w = w_s/4.
    values = measured("1/z^2", ["damping ratio", "natural frequency"], sampled_at=f"{PERIOD} s")
    assert values["damping ratio"][0, 0] == pytest.approx(0, abs=AGREEMENT)
    assert values["natural frequency"][0, 0] == pytest.approx(pi / 2 / PERIOD, rel=AGREEMENT)


def test_two_lags_in_series_have_no_peak(measured):
    # Ogata, Modern Control Engineering, chapter on transient response, overdamped case, from memory. The
    # poles are 0.7 and 0.3, the slower one settles: sigma = -ln(0.7)/T.
    names = ["overshoot", "time to peak", "damping ratio", "settling time"]
    values = measured("(0.21 - z)/z^2", names, sampled_at=f"{PERIOD} s")
    assert values["overshoot"][0, 0] == 0
    assert values["time to peak"][0, 0] == float("inf")
    assert values["damping ratio"][0, 0] == pytest.approx(1, rel=AGREEMENT)
    assert values["settling time"][0, 0] == pytest.approx(log(50) / -log(0.7) * PERIOD, rel=AGREEMENT)


def test_samples_per_cycle_of_a_sampled_example(measured):
    # Ogata 1995, section 4-3, design example of a damped oscillation of 10 samples per cycle with damping
    # ratio 0.5, from memory: |z| = exp(-2 pi 0.5/sqrt(1 - 0.25) w_d/w_s) = 0.6958 at the angle 36 deg.
    assert exp(-2 * pi * 0.5 / sqrt(0.75) / 10) == pytest.approx(0.6958, abs=5e-5)
    real = 0.6958 * cos(pi / 5)
    names = ["damping ratio", "time to peak"]
    values = measured(f"(({-2 * real:.17g})*z + {0.6958**2:.17g})/z^2", names, sampled_at=f"{PERIOD} s")
    assert values["damping ratio"][0, 0] == pytest.approx(0.5, abs=2e-4)  # four printed digits
    assert values["time to peak"][0, 0] == pytest.approx(5 * PERIOD, rel=AGREEMENT)
