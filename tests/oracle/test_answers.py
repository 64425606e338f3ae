"""The 40-digit answers against closed forms worked by hand, and against plain simulation and plain grids.

Neighbours: responses.py, frequencies.py and sturm.py (checked here), loops.py and measure_loops.py (the loops).
"""

import numpy as np
import pytest
from mpmath import mp

from .chronicle import Chronicle
from .closed import close, plant_alone, precisely
from .frequencies import frequencies, opened
from .loops import fixed, integral, loop
from .measure_loops import MEASURE_LOOPS
from .reference import exactly, from_roots, number
from .responses import responses
from .sturm import positive_roots

CLOSE = mp.mpf(10) ** -38


def assert_same(found, expected):
    with mp.workdps(80):
        for name, value in expected.items():
            gap = mp.zero if found[name] == value else abs(found[name] - value)
            assert gap <= CLOSE * max(1, abs(value)), name


@precisely
def test_lag_that_never_overshoots():
    # u[k] = K (1 - y[k]); at the samples y = final (1 - p^k), p = e - K (1 - e), e = exp(-T), final = K/(1 + K).
    # After sample k the deviation is p^k ((1 + K) exp(-t) - K) of its first size.
    gain, period = number(2), number("0.1")
    e = mp.exp(-period)
    p = e - gain * (1 - e)

    def falls_to(part):
        k = mp.floor(mp.log(part, p))
        return k * period + mp.log((1 + gain) / (gain + part / p**k))

    found = responses(loop("", "1", "1 1", "0.1", "2"), "2")
    rise = falls_to(number("0.1")) - falls_to(number("0.9"))
    expected = {
        "overshoot": 0,
        "time to peak": mp.inf,
        "undershoot": 0,
        "settling time": falls_to(number("0.02")),
        "rise time": rise,
        "samples per rise time": rise / period,
        "excess between samples": 0,
        "error after a step": mp.one / 3,
        "error after a ramp": mp.inf,
        "peak effort": 2,
        "load step deviation": mp.one / 3,
    }
    assert_same(found, expected)


@precisely
def test_integrator_that_is_there_after_one_sample():
    # L = 1/(z - 1): y rises straight to 1 within the first period T and stays. |L| = 1 at wT = 60 degrees, where
    # arg L = -120 degrees; L = -1/2 at z = -1; 1 + L = z/(z - 1); u/noise = -K (z - 1)/z.
    period, gain = number("0.25"), number(4)
    one = loop("", "1", "1 0", "0.25", "4")
    expected = {
        "overshoot": 0,
        "rise time": number("0.8") * period,
        "settling time": number("0.98") * period,
        "peak effort": gain,
        "error after a step": 0,
        "error after a ramp": 1 / gain,
        "load step deviation": period,
        "gain margin": 2,
        "gain reduction margin": 0,
        "phase margin": 60,
        "delay margin": period,
        "modulus margin": mp.one / 2,
        "resonance peak": 1,
        "crossover frequency": mp.pi / 3 / period,
        "bandwidth": mp.inf,
        "phase lost to sampling": 30,
        "noise gain": mp.sqrt(2) * gain,
    }
    assert_same(responses(one, "4") | frequencies(one, "4"), expected)


@precisely
def test_integrator_with_one_sample_of_delay():
    # z^2 - z + K T = 0 with K T = 1/4: a double pole at 1/2. On the circle the product of the roots is f K T = 1.
    # A load of 1 is held by u = -1, y = 1/K, from below.
    one = loop("", "1", "1 0", "0.25", "1", computing_delay="1 period")
    expected = {"gain margin": 4, "load step deviation": 1, "error after a ramp": 1, "overshoot": 0}
    assert_same(responses(one, "1") | frequencies(one, "1"), expected)


@precisely
def test_ripple_under_a_ramp():
    # A lag at rest under the steps of u: y = y_k + T (1 - exp(-t))/(1 - e) within a period, and u = y + const grows
    # by T a period. Two integrators in the compensator make the error 0 at the samples: what is left is
    # t - T (1 - exp(-t))/(1 - e), largest in size where exp(-t) = (1 - e)/T. One makes it 1/K there, and largest.
    period = number("0.5")
    e = mp.exp(-period)
    two = loop("", "1", "1 1", "0.5", "1.5", fixed("1 -0.8 * 1 -0.6", "1 -1 * 1 -1"))
    level = (1 - e) / period
    assert_same(responses(two, "1.5"), {"error after a ramp": abs(-mp.log(level) - (1 - level) / level)})
    one = loop("", "1", "1 1", "0.5", "0.8", integral())
    assert_same(responses(one, "0.8"), {"error after a ramp": 1 / number("0.8")})


@precisely
def test_load_arrives_between_the_samples():
    # An integrator, K T = 1, T = 1, dead time 0.3: the load comes at 0.3 and the sample at 1 sees 0.7; the answer -0.7
    # acts from 1.3 on, at y = 1. The sample at 2 sees 1 + 0.7 * 0.3 = 1.21, answered at 2.3, at y = 1.3: the top.
    one = loop("", "1", "1 0", "1", "1", dead_time="0.3")
    assert_same(responses(one, "1"), {"load step deviation": number("1.3")})


@precisely
def test_feedthrough_answers_at_once():
    # y = (1 + 1/(s + 1)) u without delay: u[0] = K/(1 + K), and y jumps to it at t = 0. With K = 1: final y = 2/3,
    # so it starts at 3/4 of it: 10 % is passed at t = 0. The load jumps y to 1/(1 + K) = 1/2; it ends at
    # 2/(1 + 2 K) = 2/3.
    one = loop("", "1 2", "1 1", "0.1", "1")
    found = responses(one, "1")
    assert_same(found, {"peak effort": number("0.5"), "load step deviation": number(2) / 3, "undershoot": 0})
    assert_same(found, {"error after a step": number(1) / 3})


@exactly
def test_positive_roots_are_all_found():
    # Roots over many decades, a close pair, and others that must not count.
    positive = [number(text) for text in ("0.000000000001", "0.5", "0.50000001", "3", "7000000")]
    polynomial = from_roots([*positive, -number(2), number(0), mp.mpc(1, 1), mp.mpc(1, -1)])
    found = positive_roots(polynomial[::-1])
    assert len(found) == 5
    for root, wanted in zip(found, positive, strict=True):
        assert abs(root - wanted) < wanted * mp.mpf(10) ** -38


# Loops of every kind for the plain ways, which need neither millions of samples nor tiny periods.
PLAIN = [
    (one, gain)
    for one in MEASURE_LOOPS
    for gain in one.gains
    if not one.in_z and float(one.period) >= 0.004 and (close(one, gain).doublings or 99) < 13
]


def named(cases):
    names = [f"{one.name}, gain {gain}".replace(" ", "_") for one, gain in cases]
    return pytest.mark.parametrize(("one", "gain"), cases, ids=names)


def ratio(fraction, place):
    top, bottom = fraction
    return mp.polyval(top, place) / mp.polyval(bottom, place)


@exactly
def final_value(one, gain):
    """What the loop passes on next to s = 0."""
    s = mp.mpf(10) ** -12
    forward = ratio(plant_alone(one), s) * ratio(one.compensator.in_z(gain, one.period), mp.exp(s * number(one.period)))
    back = ratio((one.sensor.numerator, one.sensor.denominator), s)
    return float(forward / (1 + forward * back))


@named(PLAIN)
def test_responses_against_a_chronicle(one, gain):
    # Tops lie up to a two-hundredth of a stretch from a place looked at: 1e-3 of the fastest resonance's swing.
    exact = {name: float(value) for name, value in responses(one, gain).items()}
    # A loop without a final value has no settling time to go by.
    settled = 100 * float(one.period) if np.isinf(exact["settling time"]) else exact["settling time"]
    until = max(4 * settled, 60 * float(one.period))
    times, told, efforts = Chronicle(one, gain, 1.0, 0.0).run(until)
    assert max(abs(efforts)) == pytest.approx(exact["peak effort"], rel=1e-3)
    loaded = max(abs(Chronicle(one, gain, 0.0, 1.0).run(until)[1]))
    # A deviation that is a limit has come to 98 % of it by then.
    assert loaded == pytest.approx(exact["load step deviation"], rel=2e-2)
    if np.isinf(exact["rise time"]):
        return
    told = told / final_value(one, gain)
    fine = {"rel": 1e-3, "abs": 3 * float(one.period) / Chronicle.FINE}
    assert max(0, 100 * (told.max() - 1)) == pytest.approx(exact["overshoot"], abs=0.1)
    assert max(0, -100 * told.min()) == pytest.approx(exact["undershoot"], abs=0.1)
    rise = times[told >= 0.9][0] - times[told >= 0.1][0]
    assert rise == pytest.approx(exact["rise time"], **fine)
    assert times[abs(told - 1) > 0.02][-1] == pytest.approx(exact["settling time"], **fine)


def polyval(coefficients, places):
    return np.polyval([float(value) for value in coefficients], places)


@named(PLAIN)
def test_frequency_measures_against_a_grid(one, gain):
    # Places up to 1/400 % apart and 1e-5 pi apart: a crossing lies between two, an extremum hardly beside one.
    exact = {name: float(value) for name, value in frequencies(one, gain).items()}
    angles = np.union1d(np.geomspace(1e-6, np.pi, 400_000), np.linspace(0, np.pi, 100_001)[1:])
    cut = opened(one, gain)
    z = np.exp(1j * angles)
    apart, moved, bottom = (polyval(side, z) for side in (cut.apart, cut.moved, cut.bottom))
    loop_gain = (apart + moved) / bottom
    period, passed = float(one.period), loop_gain / (1 + loop_gain)
    close_by = {"rel": 1e-3, "abs": 1e-6}
    assert min(abs(1 + loop_gain)) == pytest.approx(exact["modulus margin"], **close_by)
    assert max(abs(passed)) == pytest.approx(exact["resonance peak"], **close_by)
    crossing = np.flatnonzero(np.diff(np.sign(abs(loop_gain) - 1)))
    phases, rates = np.degrees(np.angle(-loop_gain[crossing])), angles[crossing] / period
    assert max(rates, default=0) == pytest.approx(exact["crossover frequency"], **close_by)
    assert min(phases, key=abs, default=np.inf) == pytest.approx(exact["phase margin"], rel=1e-3, abs=1e-2)
    delays = np.radians(phases % 360) / rates
    assert min(delays, default=np.inf) == pytest.approx(exact["delay margin"], **close_by)
    factor = -(bottom + apart) / moved
    real = np.flatnonzero(np.diff(np.sign(factor.imag)) * (abs(np.diff(factor)) < abs(factor[1:])))
    factors = np.append(factor.real[real], factor.real[-1])
    assert min(factors[factors > 1], default=np.inf) == pytest.approx(exact["gain margin"], **close_by)
    # At z = 1 the grid only comes near: what is 0 there is not quite.
    factors = np.append(factors, factor.real[0])
    less = factors[(factors > 1e-3) & (factors < 1)]
    assert max(less, default=0) == pytest.approx(exact["gain reduction margin"], **close_by)
    falls = np.flatnonzero(np.diff(np.sign(abs(passed) - abs(passed[0]) / np.sqrt(2))))
    lowest = angles[falls[0]] / period if falls.size and abs(passed[0]) > 1e-5 else np.inf
    assert lowest == pytest.approx(exact["bandwidth"], **close_by)
    top, below = (polyval(side, z) for side in one.compensator.in_z(gain, one.period))
    effort = abs(top / below / (1 + loop_gain)) ** 2
    noise = np.sqrt(np.trapezoid(effort, angles) / np.pi)
    assert noise == pytest.approx(exact["noise gain"], rel=1e-3)
