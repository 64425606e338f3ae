"""Exact sampling: explorer.kernels.hold, loop.plant and loop.sampling against scipy, 40 digits and themselves.

Neighbours: oracle.reference samples plants at 160 digits by another method; small_study writes studies.
"""

from __future__ import annotations

import os
import subprocess
import sys

import numpy as np
import pytest
import scipy.linalg
import scipy.signal
from mpmath import mp
from oracle import reference
from small_study import closed_loop_poles, study_of, swept

from explorer.kernels.hold import exponential_of_triangle, sample_with_hold, whole_samples
from explorer.kernels.roots import SOLVED, TOO_LONG
from explorer.loop.compensator import compensator_on_axes
from explorer.loop.plant import Realisation, in_series, realise_states, realise_transfer
from explorer.loop.sampling import sample
from explorer.study.expressions import ExpressionError, read_expression

EPS = np.finfo(float).eps

# name: transfer as written, numerator and denominator in s (decimals, exact), poles; real: stable real poles and
# a numerator without zeros, where the kernel promises that nothing is ever subtracted.
REAL = {
    "lag": ("2/(0.5*s + 1)", "2", "0.5 1", [-2]),
    "integrator": ("1/s", "1", "1 0", [0]),
    "servo": ("3/(s*(0.1*s + 1))", "3", "0.1 1 0", [0, -10]),
    "double integrator": ("1/s^2", "1", "1 0 0", [0, 0]),
    "four equal lags": ("1/(s + 1)^4", "1", "1 4 6 4 1", [-1] * 4),
    "stiff": ("1/((s + 1000)*(s + 0.001))", "1", "1 1000.001 1", [-1000, -0.001]),
    "stiff and slow": ("1/(s*(s + 0.001)*(s + 1000)*(s + 1))", "1", "1 1001.001 1001.001 1 0", [0, -0.001, -1e3, -1]),
}
OTHERS = {
    "light pair": ("1/(s^2 + 0.1*s + 1)", "1", "1 0.1 1", [-0.05 + 1j]),
    "two equal pairs": ("(s + 0.5)/(s^2 + 0.2*s + 1)^2", "1 0.5", "1 0.4 2.04 0.4 1", [-0.1 + 1j]),
    "undamped pair": ("1/(s^2 + 4)", "1", "1 0 4", [2j]),
    "wrong way first": ("(1 - s)/((s + 1)*(s + 2)*(s + 3))", "-1 1", "1 6 11 6", [-3]),
    "feedthrough": ("(s^2 + 3*s + 5)/(s^2 + s + 4)", "1 3 5", "1 1 4", [-0.5 + 2j]),
    "pair beside a fast lag": ("(s + 1)/((s + 100)*(s^2 + s + 4))", "1 1", "1 101 104 400", [-100]),
    "unstable": ("1/((s - 1)*(s + 2))", "1", "1 1 -2", [-2]),
}
PLANTS = REAL | OTHERS
# Powers of two and whole numbers, so that a whole number of periods is one exactly
PERIODS = [2.0**-20, 2.0**-3, 1.0, 100.0]
DELAYS = [0.0, 0.3, 2.0, 20.125]  # in periods


def held(plant: Realisation, period, delay):
    """(numerator, denominator) (P, 2, n+1) and whole samples (P,) of one plant."""
    times = np.atleast_2d(np.asarray(period, float))
    dead_time = np.broadcast_to(np.asarray(delay, float), times.shape).copy()
    above, below = (np.empty((1, times.size, 2, plant.order + 1)) for _ in range(2))
    whole, advance = np.empty((1, times.size), np.int64), np.empty((1, times.size))
    whole_samples(times, dead_time, whole, advance)
    sample_with_hold(plant.state, plant.start, plant.output, plant.direct, times, advance, above, below)
    return above[0], below[0], whole[0]


def realised(text: str) -> Realisation:
    return realise_transfer(read_expression(text), {}, 1)


@reference.exactly
def in_w(coefficients):
    """A polynomial in z read in w = z - 1, exactly."""
    total = [mp.zero]
    for value in coefficients:
        total = reference.add(reference.multiply(total, [mp.one, mp.one]), [value])
    return total


def padded(coefficients, length):
    return [mp.zero] * (length - len(coefficients)) + list(coefficients[-length:])


@reference.exactly
def relative(found, exact):
    """Largest relative error of any coefficient; one that is 0 but for the reference's 160 digits must be 0."""
    exact = [b if abs(b) > mp.mpf(10) ** -100 else mp.zero for b in padded(exact, len(found))]
    errors = [abs(mp.mpf(float(a)) - b) / (abs(b) or mp.mpf(10) ** -100) for a, b in zip(found, exact, strict=True)]
    return float(max(errors))


@reference.exactly
def by_norm(found, exact, size):
    """Largest error on the circle |x| = size, over the sum of the sizes there."""
    weights = [mp.mpf(size) ** k for k in range(len(found) - 1, -1, -1)]
    exact = padded(exact, len(found))
    error = sum(abs(mp.mpf(float(a)) - b) * w for a, b, w in zip(found, exact, weights, strict=True))
    return float(error / sum(abs(b) * w for b, w in zip(exact, weights, strict=True)))


@pytest.mark.parametrize("delay", DELAYS)
@pytest.mark.parametrize("name", PLANTS)
def test_pulse_transfer_against_40_digits(name, delay):
    text, above, below, poles = PLANTS[name]
    for period in PERIODS:
        if name == "unstable" and period > 1:
            continue  # exp(8) and more: the numerator's small coefficients drown in the growth, as they must
        exact = reference.sample(above.split(), below.split(), delay * period, period)
        numerator, denominator, whole = held(realised(text), period, delay * period)
        assert whole[0] == exact.delay
        # On this circle every coefficient of w counts, however fast the sampling
        size = np.abs(np.expm1(np.array(poles, complex) * period)).max() or period
        with mp.workdps(reference.WORKING_DIGITS):
            above_w, below_w = in_w(exact.numerator), in_w(exact.denominator)
        # A few roundings per squaring of the exponential and per factor, measured 6e-15; in z the same by norm
        assert by_norm(numerator[0, 0], above_w, size) < 2e-14, period
        assert by_norm(denominator[0, 0], below_w, size) < 2e-15, period
        assert by_norm(numerator[0, 1], exact.numerator, 1.0) < 2e-14, period
        assert by_norm(denominator[0, 1], exact.denominator, 1.0) < 2e-15, period
        if name in REAL:  # nothing is subtracted: measured 8e-16
            assert relative(numerator[0, 0], above_w) < 4e-15, period
            assert relative(denominator[0, 0], below_w) < 2e-15, period


def transfer_at(plant, period, delay, z):
    """The kernel's pulse transfer at points z, once by its polynomials in w and once by those in z."""
    numerator, denominator, whole = held(plant, [period], delay)
    return [
        np.polyval(numerator[0, v], x) / np.polyval(denominator[0, v], x) / z ** whole[0]
        for v, x in ((0, z - 1), (1, z))
    ]


def state_transfer_at(a, b, c, d, period, delay, z):
    """The same by scipy's exponential of [[A, B], [0, 0]] and the two-part hold of a delayed input."""
    order, whole = len(a), int(np.ceil(delay / period - 1e-12))
    advance = max(whole * period - delay, 0.0)

    def stage(duration):
        both = scipy.linalg.expm(np.block([[a, b], [np.zeros((1, order + 1))]]) * duration)
        return both[:order, :order], both[:order, order:]

    (first, older), (second, newer) = stage(period - advance), stage(advance)
    inside = [np.linalg.solve(x * np.eye(order) - second @ first, second @ older + x * newer) for x in z]
    return np.array([(c @ one)[0, 0] + d for one in inside]) / z**whole


CIRCLE = 1.3 * np.exp(1j * np.linspace(0.05, 3.1, 9))  # off every pole here


@pytest.mark.parametrize("name", PLANTS)
def test_pulse_transfer_against_scipy(name):
    text, above, below, _ = PLANTS[name]
    above, below = ([float(value) for value in side.split()] for side in (above, below))
    period = 0.2
    plain = scipy.signal.cont2discrete((above, below), period, method="zoh")
    expected = np.polyval(np.squeeze(plain[0]), CIRCLE) / np.polyval(plain[1], CIRCLE)
    for found in transfer_at(realised(text), period, 0.0, CIRCLE):
        # scipy forms the companion matrix, whose norm reaches 1e3 in the stiff plants
        assert found == pytest.approx(expected, rel=1e-10)
    a, b, c, d = scipy.signal.tf2ss(above, below)
    for delay in (0.06, 0.4, 0.73):
        expected = state_transfer_at(a, b, c, d[0, 0], period, delay, CIRCLE)
        for found in transfer_at(realised(text), period, delay, CIRCLE):
            assert found == pytest.approx(expected, rel=1e-10)


@pytest.mark.parametrize("seed", range(4))
def test_triangular_exponential_against_scipy(seed):
    generator = np.random.default_rng(seed)
    rates = -generator.uniform(0, 3, 5) + 1j * generator.uniform(-4, 4, 5) * (seed % 2)
    matrix = np.tril(generator.normal(size=(5, 5)), -1) + np.diag(rates)
    if seed == 3:
        matrix[np.arange(5), np.arange(5)] = -2.0  # equal rates: confluent divided differences
    for time in (1e-8, 0.01, 1.0, 30.0):
        result, spare = np.empty((5, 5), complex), np.empty((5, 5), complex)
        exponential_of_triangle(matrix.astype(complex), time, result, spare)
        expected = scipy.linalg.expm(matrix * time)
        # by norm, as scipy promises; it squares about ten times at the longest
        assert np.abs(np.tril(result) - expected).max() < 1e-12 * np.abs(expected).max()
        assert np.diag(result) == pytest.approx(np.exp(rates * time) if seed != 3 else np.exp(-2 * time), rel=4 * EPS)


def matrices(**rows):
    """State matrices as a study gives them."""
    return {
        name: tuple(tuple(read_expression(entry) for entry in row) for row in value) for name, value in rows.items()
    }


STATES = {
    "servo, controllable form": ("3/(s*(0.1*s + 1))", [[-10, 0], [1, 0]], [[1], [0]], [[0, 30]], 0),
    "resonance, wild units": (
        "1/((s + 1)*(s^2 + 0.4*s + 9))", [[0, 1e6, 0], [0, 0, 1e6], [-9e-12, -9.4e-6, -1.4]],
        [[0], [0], [1e-12]], [[1, 0, 0]], 0,
    ),
    "resonance with feedthrough": (
        "2 + (s + 3)/(s^2 + 0.4*s + 9)", [[0, 1], [-9, -0.4]], [[0], [1]], [[3, 1]], 2
    ),
    "stiff": ("1000/((s + 1000)*(s + 1))", [[-1000, 0], [1, -1]], [[1], [0]], [[0, 1000]], 0),
    "two unlike modes": ("1/(s + 1) + 1/(s + 50)", [[-1, 0], [0, -50]], [[1], [1]], [[1, 1]], 0),
    "two equal lags": ("1/(s + 1)^2", [[-1, 1], [0, -1]], [[0], [1]], [[1, 0]], 0),
}  # fmt: skip


@pytest.mark.parametrize("name", STATES)
def test_state_matrices_agree_with_the_transfer(name):
    text, a, b, c, d = STATES[name]
    by_states = realise_states(matrices(A=a, B=b, C=c, D=[[d]]), {}, 1)
    for period, delay in ((0.05, 0.0), (0.3, 0.1), (0.3, 0.75), (1e-5, 2.5e-5)):
        z = 1 + (CIRCLE - 1) * period  # as near to z = 1 as the poles of fast sampling
        expected = transfer_at(realised(text), period, delay, z)[0]
        # Balanced and by a unitary change of states: rounding times the norm of A T and a few squarings
        assert transfer_at(by_states, period, delay, z)[0] == pytest.approx(expected, rel=1e-11)


def test_series_is_the_product():
    plant, sensor = realised("(s + 3)/(s^2 + s + 4)"), realised("(0.1*s + 1)/(0.02*s + 1)")
    whole = realised("(s + 3)*(0.1*s + 1)/((s^2 + s + 4)*(0.02*s + 1))")
    for delay in (0.0, 0.13, 0.4):
        found = transfer_at(in_series(plant, sensor), 0.2, delay, CIRCLE)[1]
        assert found == pytest.approx(transfer_at(whole, 0.2, delay, CIRCLE)[1], rel=1e-13)


def test_total_dead_time_is_plant_and_computing_delay_in_true_time():
    study = study_of(
        transfer="1/(s + 1)", plant='dead_time = "transport"', loop='computing_delay = "0.5 period"\n'
        'clock_tolerance = "10 %"', parameters='transport = { nominal = 0.02 }',
    )  # fmt: skip
    table = {"transport": np.array([0.02, 0.05]), "clock": np.array([1.0, 1.1])}
    sampled = sample(study, table, study.period.values)
    for row, (transport, clock) in enumerate(((0.02, 1.0), (0.05, 1.1))):
        for column, true_period in enumerate(clock * study.period.values):
            numerator, denominator, whole = held(realised("1/(s + 1)"), [true_period], transport + true_period / 2)
            assert sampled.period[row, column] == true_period
            assert sampled.whole[row, column] == whole[0]
            assert sampled.numerator[row, column] == pytest.approx(numerator[0], rel=1e-14)
            assert sampled.denominator[row, column] == pytest.approx(denominator[0], rel=1e-14)


def test_plant_in_z_is_read_as_it_stands():
    study = study_of(
        transfer="(z + 0.8)/((z - 1)*(z - 0.6))", plant='sampled_at = "10 ms"\ndead_time = "20 ms"',
        period="", loop='computing_delay = "1 period"', requirements='[[requirements]]\nmeasure = "stability"',
    )  # fmt: skip
    sampled = sample(study, {"clock": np.ones(2)}, study.period.values)
    assert sampled.whole.tolist() == [[3], [3]]
    assert sampled.period.tolist() == [[0.01], [0.01]]
    # z + 0.8 = w + 1.8; (z - 1)(z - 0.6) = w(w + 0.4): the integrator stays exact
    for row in range(2):
        assert sampled.numerator[row, 0, 0] == pytest.approx([0, 1, 1.8], rel=2 * EPS)
        assert sampled.denominator[row, 0, 0] == pytest.approx([1, 0.4, 0], rel=2 * EPS, abs=0)
        assert sampled.denominator[row, 0, 1] == pytest.approx([1, -1.6, 0.6], rel=2 * EPS)


EVERY_MEASURE = """
[[requirements]]
measure = "spectral radius"
at_most = 1
[[requirements]]
measure = "damping ratio"
at_least = 0.4
[[requirements]]
measure = "natural frequency"
at_least = 1
[[requirements]]
measure = "time to peak"
basis = "poles"
at_most = 5
[[requirements]]
measure = "overshoot"
basis = "poles"
at_most = 5
"""


@pytest.mark.parametrize("whole", [0, 1, 2, 7])
@pytest.mark.parametrize("name", ["servo", "light pair", "wrong way first", "feedthrough"])
def test_map_is_continuous_where_the_degree_changes(name, whole):
    below, at, above = (
        swept(
            transfer=PLANTS[name][0], plant=f"dead_time = {delay!r}", gain="{ values = [1.5, 2.0] }",
            compensator="gain*(1 + period/(3*(z - 1)))", period="{ values = [0.25] }", requirements=EVERY_MEASURE,
        )["worst_value"].values
        for delay in (0.25 * whole * (1 - 1e-9), 0.25 * whole, 0.25 * whole * (1 + 1e-9) + 1e-10 * (whole == 0))
    )  # fmt: skip
    # The delay moves by 1e-9 of a period and the poles by some hundred times as much. A pair is the worst here:
    # the real pole that leaves z = 0 along the negative axis would count 1 before and 0.997 after.
    assert below == pytest.approx(at, rel=1e-6)
    if name != "feedthrough":  # there the sample sees an older output at once: a true jump towards longer delays
        assert above == pytest.approx(at, rel=1e-6)


@pytest.mark.parametrize(
    ("text", "fault"),
    [
        ("s^2/(s + 1)", "no plant is"),
        ("1/((a - 1)*s + 1)", "the order of the transfer changes"),
    ],
)
def test_impossible_plants_are_refused(text, fault):
    with pytest.raises(ExpressionError, match=fault):
        realise_transfer(read_expression(text), {"a": np.array([2.0, 1.0])}, 2)


def solved(study):
    """The poles of a study without parameters, those of the shortest dead time in samples."""
    sampled = sample(study, {"clock": np.ones(1)}, study.period.values)
    compensator = compensator_on_axes(study.loop, {}, study.gain.values, study.period.values)
    return next(closed_loop_poles(sampled, compensator, study.gain.values))


def test_growth_beyond_the_numbers_is_a_status():
    group = solved(study_of(transfer="1/(s - 1)", period="{ values = [0.1, 800.0] }", gain="{ values = [3.0] }"))
    assert (group.found.status[:, 0] == SOLVED).tolist() == [True, False]
    assert np.isnan(group.found.log_z[1]).all()


def test_absurdly_long_dead_time_is_a_status():
    group = solved(study_of(transfer="1/(s + 1)", plant="dead_time = 1e90", period="{ values = [1e-10] }"))
    assert (group.found.status == TOO_LONG).all()


PLAIN_PYTHON = """
import numpy as np
from explorer.kernels.hold import sample_with_hold, whole_samples
from explorer.loop.plant import realise_transfer
from explorer.study.expressions import read_expression
assert not hasattr(sample_with_hold, "py_func")  # nothing is compiled here
plant = realise_transfer(read_expression("(s + 0.5)/((s + 1)*(s^2 + 0.2*s + 1)*s)"), {}, 1)
period, delay = np.array([[0.01, 0.5]]), np.array([[0.013, 1.0]])
above, below = np.empty((1, 2, 2, 5)), np.empty((1, 2, 2, 5))
whole, advance = np.empty((1, 2), np.int64), np.empty((1, 2))
whole_samples(period, delay, whole, advance)
sample_with_hold(plant.state, plant.start, plant.output, plant.direct, period, advance, above, below)
print(*map(float.hex, np.concatenate([above.ravel(), below.ravel()]).tolist()))
"""


def test_compiled_and_plain_kernels_agree():
    done = subprocess.run(
        [sys.executable, "-c", PLAIN_PYTHON], env=os.environ | {"NUMBA_DISABLE_JIT": "1"},
        capture_output=True, text=True, check=True,
    )  # fmt: skip
    plain = np.array([float.fromhex(word) for word in done.stdout.split()])
    plant = realised("(s + 0.5)/((s + 1)*(s^2 + 0.2*s + 1)*s)")
    above, below, _ = held(plant, [0.01, 0.5], [0.013, 1.0])
    compiled = np.concatenate([above.ravel(), below.ravel()])
    # Compiled code may fuse a product and a sum: single roundings, up to the smallest coefficient in z
    assert compiled == pytest.approx(plain, rel=1e-11)
