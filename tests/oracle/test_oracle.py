"""The program against a slow 40-digit answer, loop by loop; and that answer against closed forms.

Neighbours: reference.py (the slow answer), loops.py (the loops), explorer.read_study and explorer.sweep.
"""

import tomllib
from functools import cache
from itertools import product

import numpy as np
import pytest
import scipy.linalg
import scipy.optimize
from mpmath import mp

import explorer

from . import reference
from .loops import LOOPS, MEASURES, REQUIREMENTS
from .reference import number

TOLERANCE = 1e-9  # the project's figure; the data of no simple loop magnifies rounding by more than 3e3
SMALLEST = 1e-300
ROUNDINGS = 20  # allowed of a state-space solve at multiple poles
SIMPLE = [loop for loop in LOOPS if not loop.multiple]
MULTIPLE = [loop for loop in LOOPS if loop.multiple]


def named(loops):
    return pytest.mark.parametrize("loop", loops, ids=lambda loop: loop.name.replace(" ", "_"))


@cache
def sampled(loop):
    return loop.sampled()


@cache
def exact_poles(loop, gain):
    return reference.closed_loop_poles(sampled(loop), *loop.compensator.in_z(gain, loop.period))


@cache
def exact_measures(loop, gain):
    return reference.measures(exact_poles(loop, gain), loop.period)


def error(found, exact):
    """Relative error; absolute where the exact value is 0; inf against inf is 0, against anything else inf.

    An overshoot of e^-3000 is 0 to a double.
    """
    exact = number(exact)
    if abs(exact) < SMALLEST:
        exact = mp.zero
    if mp.isinf(exact) or not np.isfinite(found):
        return 0.0 if number(found) == exact else np.inf
    return float(abs(number(found) - exact) / (abs(exact) or 1))


def swept(text):
    return explorer.sweep(explorer.read_study(text=text), jobs=1)


def at_every_gain(loop, array):
    """Values of one measure at one scale, every axis but the gain being of length one."""
    assert array.size == len(loop.gains)
    return {gain: array.sel(gain=float(gain), method="nearest").item() for gain in loop.gains}


def found_measures(loop, dataset):
    """Every (where, measure, gain, value) of a sweep without tolerances: worst is nominal at any scale."""
    assert dataset.sizes["measure"] == len(MEASURES)
    for index, measure in enumerate(MEASURES):
        of_measure = dataset.isel(measure=index)
        arrays = {"nominal": of_measure["nominal_value"]}
        for scale in dataset["tolerance_scale"].values:
            arrays[f"worst at {scale}"] = of_measure["worst_value"].sel(tolerance_scale=scale)
        for where, array in arrays.items():
            for gain, value in at_every_gain(loop, array).items():
                yield where, measure, gain, value


@named(SIMPLE)
def test_measures_of_simple_poles(loop):
    wrong = []
    for where, measure, gain, value in found_measures(loop, swept(loop.study())):
        exact = exact_measures(loop, gain)[measure]
        if not error(value, exact) <= TOLERANCE:
            wrong.append(f"{measure}, {where}, gain {gain}: {value!r}, exactly {mp.nstr(exact, 17)}")
    assert not wrong, "\n".join(wrong)


@named(MULTIPLE)
def test_measures_of_multiple_poles(loop):
    # An n-fold pole moves by the nth root of a relative change of the coefficients: a rounding of 1e-16 moves
    # a double pole by 1e-8 and a fourfold one by 1e-4, and that is in the data already. A state-space solve
    # in double precision suffers the same, so its error is the yardstick: of its poles or of the measure made
    # from them, whichever is larger, since a single measure is sometimes right by luck.
    wrong = []
    dataset = swept(loop.study())
    for where, measure, gain, value in found_measures(loop, dataset):
        exact = exact_measures(loop, gain)
        yardstick = max(
            pole_error(eigenvalues(loop, gain), exact_poles(loop, gain), loop.period),
            measure_error(measure, solved_measures(loop, gain)[measure], exact),
        )
        if not measure_error(measure, value, exact) <= max(ROUNDINGS * yardstick, TOLERANCE):
            wrong.append(f"{measure}, {where}, gain {gain}: {value!r}, exactly {mp.nstr(exact[measure], 17)}")
    assert not wrong, "\n".join(wrong)


def measure_error(measure, found, exact):
    """Error of a measure of multiple poles; a time to peak is compared as the frequency it stands for.

    A multiple real pole has no time to peak, and the pair it splits into has a very long one: both are a
    frequency next to 0, small beside the natural frequency.
    """
    if measure == "time to peak":
        frequency = mp.pi / number(exact[measure])
        return float(abs(mp.pi / number(found) - frequency) / exact["natural frequency"])
    return error(found, exact[measure])


def solved_measures(loop, gain):
    poles = [mp.mpc(complex(z)) for z in eigenvalues(loop, gain)]
    return {name: float(value) for name, value in reference.measures(poles, loop.period).items()}


def pole_error(found, exact, period):
    """Largest relative error of s = ln z/T over the best pairing (sorting would swap conjugates)."""
    found = np.log(np.asarray(found, dtype=complex)) / float(period)
    exact = np.array([complex(reference.continuous(z, period)) for z in exact])
    distance = np.abs(found[:, None] - exact[None, :]) / np.abs(exact)
    # The principal branch has its cut along negative real z: rounding may put a pole on either side of it.
    distance = np.minimum(distance, np.abs(found[:, None].conj() - exact[None, :]) / np.abs(exact))
    return distance[scipy.optimize.linear_sum_assignment(distance)].max()


def companion(numerator, denominator):
    """Controllable companion form in double precision."""
    top, bottom = (np.array([float(value) for value in side]) for side in (numerator, denominator))
    top = np.concatenate([np.zeros(len(bottom) - len(top)), top]) / bottom[0]
    bottom = bottom / bottom[0]
    order = len(bottom) - 1
    a = np.diag(np.ones(order - 1), -1) if order else np.zeros((0, 0))
    a[:1] = -bottom[1:]
    return a, np.eye(order, 1), (top[1:] - top[0] * bottom[1:])[None, :], top[0]


def in_two_stages(loop):
    """Double-precision phi, older, newer, C, D and delay: the older input for T - m, then the newer for m."""
    period = float(loop.period)
    whole, remainder = reference.split_delay(loop.total_delay(), loop.period)
    a, b, c, through = companion(*loop.plant())
    if loop.in_z:
        return a, b, 0 * b, c, through, whole
    order = len(a)

    def stage(duration):
        both = scipy.linalg.expm(np.block([[a, b], [np.zeros((1, order + 1))]]) * duration)
        return both[:order, :order], both[:order, order:]

    (first, older), (second, newer) = stage(period - float(remainder)), stage(float(remainder))
    return second @ first, second @ older, newer, c, through, whole


def closed_loop_matrix(loop, gain):
    """State matrix of the closed loop: plant states, past inputs (newest first), compensator states."""
    phi, older, newer, c, through, whole = in_two_stages(loop)
    ac, bc, cc, dc = companion(*loop.compensator.in_z(gain, loop.period))
    n, size = len(phi), len(phi) + whole + len(ac)
    past = np.eye(size)[n : n + whole]
    output = np.zeros((1, size))
    output[:, :n] = c
    effort = np.zeros((1, size))
    effort[:, n + whole :] = cc
    if whole:
        output += through * past[-1:]
        effort -= dc * output
    else:
        effort = (effort - dc * output) / (1 + dc * through)
        output += through * effort
    delayed = past[-1:] if whole else effort
    next_one = past[-2:-1] if whole > 1 else effort
    closed = np.zeros((size, size))
    closed[:n, :n] = phi
    closed[:n] += older @ delayed + newer @ next_one
    if whole:
        closed[n] = effort
        closed[n + 1 : n + whole] = past[:-1]
    closed[n + whole :, n + whole :] = ac
    closed[n + whole :] -= bc @ output
    return closed


@cache
def eigenvalues(loop, gain):
    """Closed-loop poles by the plain double-precision way."""
    return np.linalg.eigvals(closed_loop_matrix(loop, gain))


SCENARIO_STUDY = """
title = "Carriage with tolerances"

[plant]
transfer = "strength/(s*(lag*s + 1))"
dead_time = "transport"

[plant.parameters]
strength = { nominal = 0.9, tolerance = "12 %" }
lag = { from = 0.028, to = 0.046 }
transport = { nominal = 0.0061, tolerance = "35 %" }

[loop]
compensator = "gain*(lag*s + 1)/(lag/8*s + 1)"
conversion = "bilinear"
computing_delay = 0.0004

[sweep]
gain = { values = [4, 17, 60] }
period = { values = [0.0015, 0.006, 0.024] }
scenarios = { interior = 7, corners = true, seed = 5, tolerance_scales = [0, 0.5, 1.0] }
"""

NAMES = ("strength", "lag", "transport")
NOMINAL = ("0.9", "0.037", "0.0061")
HALF_WIDTH = ("0.108", "0.009", "0.002135")
LEAST_IS_WORST = {"damping ratio", "natural frequency"}  # the requirements that say at_least


@cache
def scenario_plant(parameters, period):
    strength, lag, transport = map(number, parameters)
    with mp.workdps(reference.WORKING_DIGITS):
        dead_time = transport + number("0.0004")
    return reference.sample([strength], [lag, 1, 0], dead_time, period)


def scenario_measures(parameters, gain, period):
    """Exact measures of the study above; the compensator keeps the nominal lag, whatever the plant's."""
    with mp.workdps(reference.WORKING_DIGITS):
        lag, gain = number(NOMINAL[1]), number(gain)
        controller = reference.bilinear([lag * gain, gain], [lag / 8, 1], period)
    poles = reference.closed_loop_poles(scenario_plant(parameters, period), *controller)
    return reference.measures(poles, period)


def test_worst_over_scenarios():
    dataset = swept(SCENARIO_STUDY + REQUIREMENTS)
    scales = dataset["scenario_scale"].values
    table = dataset["scenario_parameter"].sel(parameter=list(NAMES)).transpose("scenario", "parameter")
    scenarios = [tuple(map(float, row)) for row in table.values]
    assert len(scenarios) >= 30
    for values, scale in zip(scenarios, scales, strict=True):
        for value, middle, half in zip(values, map(float, NOMINAL), map(float, HALF_WIDTH), strict=True):
            # The edge of the box is rounded once when it is read and once when it is formed.
            assert abs(value - middle) <= half * scale + 4e-16 * middle
    wrong = []
    for gain, period in product(("4", "17", "60"), ("0.0015", "0.006", "0.024")):
        exact = [scenario_measures(values, gain, period) for values in scenarios]
        nominal = scenario_measures(NOMINAL, gain, period)
        cell = dataset.sel(gain=float(gain), period=float(period), method="nearest")
        faults = cell_faults(cell, nominal, exact, scales)
        wrong += [f"gain {gain}, period {period}: {fault}" for fault in faults]
    assert not wrong, "\n".join(wrong)


def cell_faults(cell, nominal, exact, scales):
    """What one cell of the map has wrong: nominal value, worst value, the scenario it is put down to."""
    for index, measure in enumerate(MEASURES):
        of_measure = cell.isel(measure=index)
        if not error(float(of_measure["nominal_value"]), nominal[measure]) <= TOLERANCE:
            yield f"{measure}, nominal: exactly {mp.nstr(nominal[measure], 17)}"
        for scale in cell["tolerance_scale"].values:
            within = [one[measure] for one, enters in zip(exact, scales, strict=True) if enters <= scale]
            worst = min(within) if measure in LEAST_IS_WORST else max(within)
            at_scale = of_measure.sel(tolerance_scale=scale)
            found, blamed = float(at_scale["worst_value"]), int(at_scale["worst_scenario"])
            if not error(found, worst) <= TOLERANCE:
                yield f"{measure}, scale {scale}: {found!r}, exactly {mp.nstr(worst, 17)}"
            if scales[blamed] > scale or not error(float(exact[blamed][measure]), worst) <= TOLERANCE:
                yield f"{measure}, scale {scale}: scenario {blamed} did not give the worst value"


# The slow answer itself, against closed forms worked by hand. It claims 40 digits; these leave a margin of 4.
CLOSE = mp.mpf(10) ** -36


def assert_same(found, expected):
    with mp.workdps(reference.WORKING_DIGITS):
        assert len(found) == len(expected)
        for left, right in zip(found, expected, strict=True):
            assert abs(left - right) <= CLOSE * max(1, abs(right))


@reference.exactly
def test_lag_under_proportional_gain():
    # y' = -a y + u held over T: y[k+1] = e y[k] + (1 - e)/a u[k], e = exp(-a T); u = -K y gives the pole
    # z = e - K (1 - e)/a.
    a, gain, period = number("1.7"), number("3.1"), number("0.21")
    e = mp.exp(-a * period)
    plant = reference.sample(["1"], ["1", "1.7"], "0", "0.21")
    assert_same(reference.closed_loop_poles(plant, ["3.1"], ["1"]), [e - gain * (1 - e) / a])


@reference.exactly
def test_lag_with_fractional_delay():
    # Delay 0.3 T = T - m. Up to T - m the plant still sees u[k-1], then u[k]:
    # y[k+1] = e y[k] + (e^(-a m) - e)/a u[k-1] + (1 - e^(-a m))/a u[k], hence
    # z (z - e) + K ((1 - e^(-a m)) z + e^(-a m) - e)/a = 0.
    a, gain, period = number("1.7"), number("3.1"), number("0.2")
    e, part = mp.exp(-a * period), mp.exp(-a * period * number("0.7"))
    plant = reference.sample(["1"], ["1", "1.7"], "0.06", "0.2")
    found = reference.closed_loop_polynomial(plant, ["3.1"], ["1"])
    assert_same(found, [1, -e + gain * (1 - part) / a, gain * (part - e) / a])


@reference.exactly
def test_lag_delayed_two_samples_and_a_fraction():
    # The same with delay 2.3 T: two more factors z before the plant.
    short = reference.sample(["1"], ["1", "1.7"], "0.06", "0.2")
    longer = reference.sample(["1"], ["1", "1.7"], "0.46", "0.2")
    assert longer.delay == short.delay + 2
    assert_same(longer.numerator, short.numerator)


@reference.exactly
def test_double_integrator():
    # Position and speed under constant force: y[k+1] = y + T v + T^2/2 u, v[k+1] = v + T u, so
    # G = (T^2/2)(z + 1)/(z - 1)^2; with q = K T^2/2 the loop is z^2 + (q - 2) z + 1 + q = 0.
    q = number("5") * number("0.3") ** 2 / 2
    plant = reference.sample(["1"], ["1", "0", "0"], "0", "0.3")
    assert_same(reference.closed_loop_polynomial(plant, ["5"], ["1"]), [1, q - 2, 1 + q])
    radius = reference.measures(reference.closed_loop_poles(plant, ["5"], ["1"]), "0.3")["spectral radius"]
    assert_same([radius], [mp.sqrt(1 + q)])  # the product of a conjugate pair


@reference.exactly
def test_undamped_resonance_above_half_the_sampling_rate():
    # Rotation by w T in the plane (y, y'/w), however large w T is:
    # G = ((1 - cos wT)/w^2)(z + 1)/(z^2 - 2 z cos wT + 1).
    angle = 5 * number("1.1")
    plant = reference.sample(["1"], ["1", "0", "25"], "0", "1.1")
    assert_same(plant.denominator, [1, -2 * mp.cos(angle), 1])
    assert_same(plant.numerator, [0, (1 - mp.cos(angle)) / 25, (1 - mp.cos(angle)) / 25])


@reference.exactly
def test_feedthrough_after_a_whole_delay_sees_the_older_input():
    # (s + 2)/(s + 1) = 1 + 1/(s + 1), delayed 3 samples: y = (1 + (1 - e)/(z - e)) z^-3 u = (z + 1 - 2 e)/...
    e = mp.exp(-number("0.1"))
    plant = reference.sample(["1", "2"], ["1", "1"], "0.3", "0.1")
    assert plant.delay == 3
    assert_same(plant.numerator, [1, 1 - 2 * e])


@reference.exactly
def test_bilinear_is_exact_at_its_frequency():
    # At z = e^(jwT) the substituted s must be jw itself.
    top, bottom = reference.bilinear(["0.3", "1"], ["0.02", "0.5", "2"], "0.01", exact_at="12")
    s = 2j * mp.pi * 12
    z = mp.exp(s * number("0.01"))
    wanted = (number("0.3") * s + 1) / (number("0.02") * s**2 + s / 2 + 2)
    assert_same([mp.polyval(top, z) / mp.polyval(bottom, z)], [wanted])


@reference.exactly
def test_backward_difference():
    # (s + 3)/s at s = (z - 1)/(T z): (z - 1 + 3 T z)/(z - 1).
    top, bottom = reference.backward_difference(["1", "3"], ["1", "0"], "0.25")
    assert_same(top, [number("1.75"), -1])
    assert_same(bottom, [1, -1])


@reference.exactly
def test_matched_poles_and_zeros():
    # 2/((s + 3) s): poles e^(-3T) and 1, two zeros at infinity to -1. As s -> 0 it is (2/3)/s, and
    # g (z + 1)^2/((z - 1)(z - e)) is 4 g/((1 - e) T s): g = T (1 - e)/6.
    period = number("0.2")
    e = mp.exp(-3 * period)
    gain = period * (1 - e) / 6
    top, bottom = reference.matched(["2"], ["1", "3", "0"], "0.2")
    assert_same(top, [gain, 2 * gain, gain])
    assert_same(bottom, [1, -1 - e, e])


@reference.exactly
def test_measures_of_known_poles():
    # s = -3 +- 4j beside a faster real pole: |s| = 5, ratio 0.6, time to peak pi/4, overshoot exp(-3 pi/4).
    period = number("0.1")
    pair = [mp.exp(mp.mpc(-3, sign) * period) for sign in (4, -4)]
    found = reference.measures([*pair, mp.exp(-20 * period), mp.zero], "0.1")
    assert_same(
        [found[name] for name in MEASURES],
        [mp.exp(-3 * period)] * 2
        + [number("0.6"), 5, mp.log(50) / 3, mp.pi / 4, 100 * mp.exp(-3 * mp.pi / 4)],
    )


@reference.exactly
def test_measures_of_real_poles():
    # z = -1/2 rings at half the sampling rate, Im s = pi/T, but is no pair; z = 0 is infinitely fast.
    found = reference.measures([-mp.one / 2, mp.zero], "0.1")
    speed = mp.log(2)
    assert_same([found["damping ratio"]], [speed / mp.hypot(speed, mp.pi)])
    assert_same([found["natural frequency"]], [10 * mp.hypot(speed, mp.pi)])
    assert found["time to peak"] == mp.inf
    assert found["overshoot"] == 0
    assert reference.measures([mp.mpf(2)], "0.1")["settling time"] == mp.inf


@reference.exactly
def test_multiple_roots_and_roots_at_zero():
    # (z - 1/2)^4 z^2; the fourfold root keeps a quarter of the working digits, well over 25.
    found = reference.roots([*reference.power([mp.one, -mp.one / 2], 4), 0, 0])
    assert sum(root == 0 for root in found) == 2
    assert sum(abs(root - mp.one / 2) < mp.mpf(10) ** -25 for root in found) == 4


@named(LOOPS)
def test_text_and_coefficients_of_a_loop_agree(loop):
    # The study's own text worked out as plain arithmetic at one point, against the coefficients there.
    study = tomllib.loads(loop.study())
    names = {"pi": np.pi, "gain": float(loop.gains[-1]), "period": float(loop.period)}
    names |= {name: value["nominal"] for name, value in study["plant"]["parameters"].items()}
    period, conversion = names["period"], study["loop"].get("conversion", "")
    z = np.exp(1e-7 + 2e-7j) if "matched" in conversion else 0.3 + 0.4j
    s = {
        "backward difference": (z - 1) / (period * z),
        "bilinear": 2 / period * (z - 1) / (z + 1),
        # This conversion keeps a value only as s -> 0, with an error of the order of time constant times s.
        "matched poles and zeros": np.log(z) / period,
    }.get(conversion)
    if ", exact at " in conversion:
        rate = 2 * np.pi * float(conversion.split()[-2])
        s = rate / np.tan(rate * period / 2) * (z - 1) / (z + 1)
    compensator = arithmetic(study["loop"]["compensator"], names | {"z": z, "s": s})
    exact = ratio(loop.compensator.in_z(loop.gains[-1], loop.period), z)
    assert exact == pytest.approx(compensator, rel=1e-3 if "matched" in conversion else 1e-9)
    at = names | {"s": 0.7 + 1.1j, "z": 0.7 + 1.1j}
    plant = arithmetic(study["plant"]["transfer"], at) * arithmetic(study["loop"].get("sensor", "1"), at)
    assert ratio(loop.plant(), at["s"]) == pytest.approx(plant, rel=1e-12)


def ratio(fraction, point):
    top, bottom = fraction
    return complex(mp.polyval(top, point) / mp.polyval(bottom, point))


def arithmetic(text, names):
    """Value of a study's expression; those of loops.py differ from Python's in the power sign only."""
    return eval(text.replace("^", "**"), {"__builtins__": {}}, names)


@named(LOOPS)
def test_slow_answer_against_a_state_matrix(loop):
    # det(zI - A) of the double-precision closed loop on a circle off the poles, where it is well conditioned.
    for gain in loop.gains:
        compensator = loop.compensator.in_z(gain, loop.period)
        polynomial = reference.closed_loop_polynomial(sampled(loop), *compensator)
        matrix = closed_loop_matrix(loop, gain)
        assert len(matrix) == len(polynomial) - 1 == len(exact_poles(loop, gain))
        for z in 1.5 * np.exp(1j * np.array([0.1, 1.2, 2.9])):
            exact = complex(mp.polyval(polynomial, z) / polynomial[0])
            assert np.linalg.det(z * np.eye(len(matrix)) - matrix) == pytest.approx(exact, rel=1e-8)


# A plant with feedthrough answers its own delayed self at once, whatever the period: it has no such limit.
@named(
    [
        loop
        for loop in SIMPLE
        if "1e-5" in loop.name and loop.compensator.text == "gain" and not loop.name.startswith("feedthrough")
    ]
)
def test_fast_sampling_tends_to_the_continuous_loop(loop):
    # The hold and a delay of a few samples shift the poles by T|s|/2 and d T|s|, some 1e-4 of themselves.
    top, bottom = loop.plant()
    for gain in loop.gains:
        wanted = np.roots([float(v) for v in reference.add(bottom, reference.multiply([number(gain)], top))])
        slow = sorted(exact_poles(loop, gain), key=lambda z: abs(z - 1))[: len(wanted)]
        assert pole_error(np.exp(wanted * float(loop.period)), slow, loop.period) < 1e-3
