"""Measures by poles: measures.by_poles and its catalogue against values worked out by hand, and their edge cases.

s = ln(z)/T on the principal branch (explorer/measures/catalogue.py states every definition).
"""

from __future__ import annotations

import cmath
import math

import numpy as np
import pytest

from explorer.kernels.roots import reductions_of
from explorer.measures.by_poles import BY_POLES, Reduced
from explorer.measures.catalogue import CATALOGUE

PERIOD, BAND = 0.1, 0.02
CLOSE = 1e-14  # a few roundings of a logarithm and a division


def log_of(z):
    """log z as the kernel gives it: -inf at z = 0, +pi at negative real z, NaN for an unsolved pole."""
    if z == 0:
        return complex(-math.inf, 0.0)
    return complex(math.nan, math.nan) if z != z else cmath.log(z)


def measured(kind, *poles, period=PERIOD, band=BAND):
    """One measure of one loop from its poles z."""
    log_z = np.array([[log_of(z) for z in poles]], complex).reshape(1, len(poles))
    return float(BY_POLES[kind](Reduced(*reductions_of(log_z)), np.array([period]), band)[0])


def pair(real, imaginary):
    """z of the poles s = real ± j imaginary."""
    return [cmath.exp(complex(real, sign * imaginary) * PERIOD) for sign in (1, -1)]


# s = -3 ± 4j beside a faster real pole and one at z = 0: |s| = 5, damping 0.6, e^(-3t) decays to 2 % in ln(50)/3,
# half a swing takes pi/4, and the next half swing is exp(-3 pi/4) of it.
BY_HAND = {
    "stability": math.exp(-0.3),
    "spectral radius": math.exp(-0.3),
    "damping ratio": 0.6,
    "natural frequency": 5.0,
    "settling time by poles": math.log(50) / 3,
    "time to peak by poles": math.pi / 4,
    "overshoot by poles": 100 * math.exp(-3 * math.pi / 4),
}


@pytest.mark.parametrize("kind", BY_HAND)
def test_values_worked_out_by_hand(kind):
    poles = [*pair(-3, 4), math.exp(-20 * PERIOD), 0.0]
    assert measured(kind, *poles) == pytest.approx(BY_HAND[kind], rel=CLOSE)
    # The order of the poles says nothing
    assert measured(kind, *reversed(poles)) == pytest.approx(BY_HAND[kind], rel=CLOSE)


def test_each_measure_looks_at_its_own_pole():
    # A slow real pole s = -1, a slow light pair -2 ± 10j, a fast pair -6 ± 2j with less |s|
    poles = [math.exp(-1 * PERIOD), *pair(-2, 10), *pair(-6, 2)]
    assert measured("settling time by poles", *poles) == pytest.approx(math.log(50), rel=CLOSE)
    assert measured("damping ratio", *poles) == pytest.approx(2 / math.hypot(2, 10), rel=CLOSE)
    assert measured("natural frequency", *poles) == pytest.approx(1, rel=CLOSE)
    assert measured("time to peak by poles", *poles) == pytest.approx(math.pi / 10, rel=CLOSE)
    assert measured("overshoot by poles", *poles) == pytest.approx(100 * math.exp(-math.pi / 5), rel=CLOSE)


def test_the_slowest_pair_decides_even_when_it_turns_less():
    # exp(-t) outlasts exp(-3t), although it turns ten times more slowly
    poles = [*pair(-3, 20), *pair(-1, 2)]
    assert measured("time to peak by poles", *poles) == pytest.approx(math.pi / 2, rel=CLOSE)


def test_settling_band():
    assert measured("settling time by poles", math.exp(-PERIOD), band=0.05) == pytest.approx(math.log(20), rel=CLOSE)


def test_times_grow_with_the_period_and_shapes_do_not():
    poles = [0.7 + 0.3j, 0.7 - 0.3j, 0.2]
    for kind, power in {
        "stability": 0, "damping ratio": 0, "overshoot by poles": 0, "natural frequency": -1,
        "settling time by poles": 1, "time to peak by poles": 1,
    }.items():  # fmt: skip
        expected = measured(kind, *poles) * 10.0**power
        assert measured(kind, *poles, period=10 * PERIOD) == pytest.approx(expected, rel=CLOSE), kind


def test_real_poles_between_zero_and_one():
    for z in (0.9, 0.01):
        assert measured("damping ratio", z) == 1
        assert measured("overshoot by poles", z) == 0
        assert measured("time to peak by poles", z) == math.inf


def test_negative_real_pole_rings_at_half_the_sampling_rate_and_is_no_pair():
    # z = -1/2: s T = -ln 2 + j pi
    decay = math.log(2)
    assert measured("damping ratio", -0.5) == pytest.approx(decay / math.hypot(decay, math.pi), rel=CLOSE)
    assert measured("natural frequency", -0.5) == pytest.approx(math.hypot(decay, math.pi) / PERIOD, rel=CLOSE)
    assert measured("time to peak by poles", -0.5) == math.inf
    assert measured("overshoot by poles", -0.5) == 0
    # beside a pair that decays faster the pair is still the one that overshoots
    faster = pair(-9, 4)
    assert measured("time to peak by poles", -0.9, *faster) == pytest.approx(math.pi / 4, rel=CLOSE)


def test_all_poles_at_zero():
    expected = {
        "stability": 0, "spectral radius": 0, "damping ratio": 1, "natural frequency": math.inf,
        "settling time by poles": 0, "time to peak by poles": math.inf, "overshoot by poles": 0,
    }  # fmt: skip
    for kind, value in expected.items():
        assert measured(kind, 0.0, 0.0) == value, kind
        assert measured(kind) == value, kind  # no pole at all settles as fast


def test_marginal_loops():
    # z = 1 has no damping whatever its neighbours, and never settles
    assert measured("stability", 1.0, 0.5) == 1
    assert measured("damping ratio", 1.0, 0.5) == 0
    assert measured("natural frequency", 1.0, 0.5) == 0
    assert measured("settling time by poles", 1.0, 0.5) == math.inf
    assert measured("settling time by poles", -1.0) == math.inf
    assert measured("damping ratio", -1.0) == 0
    assert measured("damping ratio", 1j, -1j) == pytest.approx(0, abs=1e-16)
    assert measured("time to peak by poles", 1j, -1j) == pytest.approx(2 * PERIOD, rel=CLOSE)


def test_unstable_loops():
    # s = 2 ± 1j grows: damping below 0, no settling, an "overshoot" of more than all
    poles = pair(2, 1)
    assert measured("stability", *poles) == pytest.approx(math.exp(0.2), rel=CLOSE)
    assert measured("damping ratio", *poles) == pytest.approx(-2 / math.sqrt(5), rel=CLOSE)
    assert measured("settling time by poles", *poles) == math.inf
    assert measured("overshoot by poles", *poles) > 100
    assert measured("damping ratio", 1.5) == -1


@pytest.mark.parametrize("kind", BY_POLES)
def test_unknown_stays_unknown(kind):
    assert math.isnan(measured(kind, math.nan, math.nan))
    # one loop's unknown does not spread to its neighbour
    log_z = np.array([[math.nan, math.nan], [math.log(0.5), math.log(0.2)]], complex)
    values = BY_POLES[kind](Reduced(*reductions_of(log_z)), np.array([PERIOD, PERIOD]), BAND)
    assert np.isnan(values[0])
    assert not np.isnan(values[1])


@pytest.mark.parametrize("kind", BY_POLES)
def test_shapes_broadcast_over_gains(kind):
    log_z = np.log(np.linspace(0.1, 0.9, 24).reshape(2, 4, 3) * np.exp(1j))
    values = BY_POLES[kind](Reduced(*reductions_of(log_z)), np.array([[0.1], [0.2]]), BAND)
    assert values.shape == (2, 4)
    one = BY_POLES[kind](Reduced(*reductions_of(log_z[1, 2])), np.array(0.2), BAND)
    assert values[1, 2] == one


def test_catalogue_and_functions_name_the_same_measures():
    assert set(BY_POLES) <= {measure.key for measure in CATALOGUE}
    assert {measure.key for measure in CATALOGUE if measure.basis == "poles"} <= set(BY_POLES)
    assert len({measure.key for measure in CATALOGUE}) == len(CATALOGUE)
