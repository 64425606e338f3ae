"""Frequency measures of loops whose margins have closed forms: integrator, late integrator, sampled motor."""

import numpy as np
import pytest
from numpy import arccos, arcsin, degrees, exp, sqrt

AGREEMENT = 1e-9  # promised for every frequency measure
PERIOD = 0.2


def values_of(measured, transfer, names, strength, **loop):
    """The measures at gain = strength/T, so that the integrator's pulse transfer is strength/(z - 1)."""
    values = measured(transfer, names, gain=[strength / PERIOD], period=[PERIOD], **loop)
    return {name: value[0, 0] for name, value in values.items()}


@pytest.mark.parametrize("late", [0, 1, 2])
@pytest.mark.parametrize("strength", [0.1, 0.4, 0.6])
def test_integrator_late_by_whole_samples(measured, late, strength):
    # |k/(exp(jx) - 1)| = 1 at 2 sin(x/2) = k, where the phase is -(90 deg + x/2 + late x); no source. Half a
    # period of the hold and the computing delay make the phase lost: Franklin, Powell and Workman, Digital
    # Control of Dynamic Systems, from memory. The gain margin leads to the limit of Levin and May, A note on
    # difference-delay equations, Theoretical Population Biology 9, 1976, from memory: 2 cos(n pi/(2n + 1)), n
    # samples late.
    names = ["crossover frequency", "phase margin", "delay margin", "gain margin", "phase lost to sampling"]
    delay = {"computing_delay": f"{late} period"} if late else {}
    values = values_of(measured, "1/s", names, strength, **delay)
    x = 2 * arcsin(strength / 2)
    phase_margin = np.pi / 2 - x / 2 - late * x
    limit = 2 * np.cos(late * np.pi / (2 * late + 1))
    assert values["crossover frequency"] == pytest.approx(x / PERIOD, rel=AGREEMENT)
    assert values["phase margin"] == pytest.approx(degrees(phase_margin), rel=AGREEMENT)
    assert values["delay margin"] == pytest.approx(phase_margin / x * PERIOD, rel=AGREEMENT)
    assert values["gain margin"] == pytest.approx(limit / strength, rel=AGREEMENT)
    assert values["phase lost to sampling"] == pytest.approx(degrees(x / 2 + late * x), rel=AGREEMENT)


def test_delay_margin_of_one_sample_at_the_limit_for_one_sample_late(measured):
    # k = 1 is the Levin-May limit for one sample late; without delay it has a margin of just that sample and
    # 60 deg.
    values = values_of(measured, "1/s", ["delay margin", "phase margin"], 1.0)
    assert values["delay margin"] == pytest.approx(PERIOD, rel=AGREEMENT)
    assert values["phase margin"] == pytest.approx(60, rel=AGREEMENT)


@pytest.mark.parametrize("strength", [0.3, 1.0, 1.6])
def test_distance_and_peaks_of_the_integrator(measured, strength):
    # With q = 1 - k: |1 + L| = |z - q|/|z - 1| falls monotonically to 1 - k/2 at z = -1; |L/(1 + L)| = k/|z -
    # q| is largest at z = 1 (where it is 1) for k < 1, at z = -1 (k/(2 - k)) for k > 1; no source.
    values = values_of(measured, "1/s", ["modulus margin", "resonance peak"], strength)
    assert values["modulus margin"] == pytest.approx(1 - strength / 2, rel=AGREEMENT)
    assert values["resonance peak"] == pytest.approx(max(1, strength / (2 - strength)), rel=AGREEMENT)


@pytest.mark.parametrize("strength", [0.1, 0.5])
def test_bandwidth_of_the_integrator(measured, strength):
    # k^2/(1 + q^2 - 2q cos x) = 1/2 with q = 1 - k; no source.
    q = 1 - strength
    x = arccos((1 + q**2 - 2 * strength**2) / (2 * q))
    values = values_of(measured, "1/s", ["bandwidth"], strength)
    assert values["bandwidth"] == pytest.approx(x / PERIOD, rel=AGREEMENT)


@pytest.mark.parametrize("strength", [0.2, 1.0, 1.7])
def test_noise_gain_of_the_integrator(measured, strength):
    # Åström, Introduction to Stochastic Control Theory, 1970, section 5.2, table of the integral I_1, from
    # memory: (b0 z + b1)/(a0 z + a1) passes the variance ((b0^2 + b1^2)a0 - 2 b0 b1 a1)/(a0(a0^2 - a1^2));
    # with K(z - 1)/(z - 1 + k) that is 2K^2/(2 - k).
    values = values_of(measured, "1/s", ["noise gain"], strength)
    assert values["noise gain"] == pytest.approx(strength / PERIOD * sqrt(2 / (2 - strength)), rel=AGREEMENT)


@pytest.mark.parametrize("gain", [0.2, 1.0, 2.2])
def test_noise_gain_of_the_sampled_motor(measured, gain):
    # The same table's I_2, from memory; the controller's output is -K(z - 1)(z - e)/(z^2 + a1 z + a2) of the
    # noise.
    e = exp(-1)
    b0, b1, b2 = gain, -gain * (1 + e), gain * e
    a0, a1, a2 = 1, gain * e - 1 - e, e + gain * (1 - 2 * e)
    e1 = a0 + a2
    squares, neighbours, ends = b0**2 + b1**2 + b2**2, 2 * (b0 * b1 + b1 * b2), 2 * b0 * b2
    total = squares * a0 * e1 - neighbours * a0 * a1 + ends * (a1**2 - a2 * e1)
    variance = total / a0 / ((a0**2 - a2**2) * e1 - (a0 * a1 - a1 * a2) * a1)
    values = measured("1/(s*(s + 1))", ["noise gain"], gain=[gain])
    assert values["noise gain"][0, 0] == pytest.approx(sqrt(variance), rel=AGREEMENT)


@pytest.mark.parametrize(("gain", "margin"), [(1.0, 2.3922), (0.5, 4.7844)])
def test_gain_margin_of_the_sampled_motor(measured, gain, margin):
    # Critical gain (1 - e)/(1 - 2e) = 2.3922 at T = 1 s; Ogata, Discrete-Time Control Systems, 2nd ed. 1995,
    # prints 2.3925 (section 4-3, rounded coefficients), from memory.
    values = measured("1/(s*(s + 1))", ["gain margin", "gain reduction margin"], gain=[gain])
    assert values["gain margin"][0, 0] == pytest.approx(margin, rel=5e-5)
    exact = (1 - exp(-1)) / (1 - 2 * exp(-1)) / gain
    assert values["gain margin"][0, 0] == pytest.approx(exact, rel=AGREEMENT)
    assert values["gain reduction margin"][0, 0] == 0  # stable down to no gain at all


@pytest.mark.parametrize("gain", [0.5, 1.0])
def test_fast_sampled_motor_has_the_analogue_margins(measured, gain):
    # K/(s(s + 1)) crosses at w^2 = (sqrt(1 + 4K^2) - 1)/2 with the phase -90 deg - arctan w; no source. The
    # hold takes w T/2 of it, to within (wT)^2 = 1e-6.
    period = 1e-3
    w = sqrt((sqrt(1 + 4 * gain**2) - 1) / 2)
    lost = w * period / 2
    values = measured("1/(s*(s + 1))", ["phase margin", "crossover frequency"], gain=[gain], period=[period])
    assert values["crossover frequency"][0, 0] == pytest.approx(w, rel=2e-6)
    margin = np.pi / 2 - np.arctan(w) - lost
    assert values["phase margin"][0, 0] == pytest.approx(degrees(margin), rel=2e-6)


@pytest.mark.parametrize(
    ("zeta", "phase_margin", "resonance_peak", "bandwidth"),
    [
        # Phase margin in degrees and bandwidth over w_n: Nise, Control Systems Engineering, chapter 10;
        # resonance peak 1/(2 zeta sqrt(1 - zeta^2)): Kuo, Automatic Control Systems, chapter on frequency
        # response. From memory.
        (0.2, 22.6, 2.552, 1.510),
        (0.3, 33.3, 1.747, 1.454),
        (0.4, 43.1, 1.364, 1.375),
        (0.5, 51.8, 1.155, 1.272),
        (0.6, 59.2, 1.042, 1.148),
    ],
)
def test_frequency_response_table(measured, zeta, phase_margin, resonance_peak, bandwidth):
    # 1/(s(s + 2 zeta)), sampled fast, closes to 1/(s^2 + 2 zeta s + 1). At T = 1e-4 the hold costs w_c T/2 =
    # 5e-5 rad = 0.003 deg.
    values = measured(
        f"1/(s*(s + {2 * zeta}))", ["phase margin", "resonance peak", "bandwidth"], period=[1e-4]
    )
    assert values["phase margin"][0, 0] == pytest.approx(phase_margin, abs=0.05 + 0.004)
    assert values["resonance peak"][0, 0] == pytest.approx(resonance_peak, abs=5e-4 + 4e-4)
    assert values["bandwidth"][0, 0] == pytest.approx(bandwidth, abs=5e-4 + 1e-4)


def test_margins_reach_to_both_edges_of_a_window(measured):
    # Bose, Jury and Zeheb, On robust Hurwitz and Schur polynomials, IEEE Transactions on Automatic Control
    # 33, 1988, from memory: z^4 + a z^3 + (3/2)z^2 - 1/3 is stable at a = 17/8 and not at a = 0. Its roots
    # meet the circle at a = 13/6 (z = -1) and at a = (8/3) sqrt(5/8) (sin(v)^2 = 3/8 at z = exp(jv)).
    values = measured(
        "z^3/(z^4 + 1.5*z^2 - 1/3)",
        ["gain margin", "gain reduction margin"],
        gain=[17 / 8],
        sampled_at="1 sample",
    )
    assert values["gain margin"][0, 0] == pytest.approx(13 / 6 / (17 / 8), rel=AGREEMENT)
    assert values["gain reduction margin"][0, 0] == pytest.approx(
        8 / 3 * sqrt(5 / 8) / (17 / 8), rel=AGREEMENT
    )
