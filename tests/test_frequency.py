"""Frequency measures: kernels.frequency against brute force at 40 digits, limits worked out by hand and symmetries.

The reference walks a dense grid of angles in doubles to bracket crossings and extrema and finishes them with mpmath;
its noise gain solves the covariance equations of the recursion. It shares no code with the kernel.
"""

from __future__ import annotations

import numpy as np
import pytest
from mpmath import mp

from explorer.kernels import noise
from explorer.kernels.frequency import FOUND, MEASURES, NOT_FINITE, UNRESOLVED, frequency_measures

PROMISED = 1e-9
GAINS = np.geomspace(1e-4, 1e4, 81)


class Loop:
    """K * above(w)/(below(w) z**delay); effort : compensator numerator times plant denominator, at gain 1."""

    def __init__(self, above, below, delay=0, period=1.0, effort=None):
        self.above, self.below = np.atleast_1d(above).astype(float), np.atleast_1d(below).astype(float)
        self.delay, self.period = delay, period
        self.effort = self.below if effort is None else np.atleast_1d(effort).astype(float)

    def stable(self, gain):
        if self.delay > 20:
            return gain * self.above[-1] * self.delay < 1  # integrators only, stable below about π/2
        closed = self.below
        for _ in range(self.delay):
            closed = np.append(closed, 0) + np.append(0, closed)
        closed = np.append(closed[: len(closed) - len(self.above)], closed[-len(self.above) :] + gain * self.above)
        w = np.roots(closed)
        return bool((2 * w.real + np.abs(w) ** 2 < -1e-7 * np.abs(w)).all())  # clear of the edge, where L = -1

    def measured(self, gain, names=MEASURES):
        gain = np.atleast_1d(np.asarray(gain, float))
        known = np.ones((1, len(gain)), bool)
        above, below, effort = (part[None, None] for part in (self.above, self.below, self.effort))
        return frequency_measures(
            names, below, 0 * above, above, self.delay, gain, np.array([self.period]), known, (0 * effort, effort)
        )


def transfer(loop, theta):
    """L at gain 1 and its derivative by θ, at 40 digits."""
    w = mp.expjpi(theta / mp.pi) - 1
    above, d_above = mp.polyval([mp.mpf(c) for c in loop.above], w, derivative=True)
    below, d_below = mp.polyval([mp.mpf(c) for c in loop.below], w, derivative=True)
    value = above / below * mp.expjpi(-loop.delay * theta / mp.pi)
    return value, value * (1j * (1 + w) * (d_above / above - d_below / below) - 1j * loop.delay)


def grid_of(loop):
    """Angles dense on a logarithmic scale and around every root of numerator and denominator."""
    roots = np.concatenate([np.roots(loop.below), np.roots(loop.above)])
    roots = roots[roots != 0]
    lowest = min(1.0, np.abs(roots).min(initial=1.0)) * 1e-12
    theta = [np.geomspace(lowest, np.pi, 50_000), np.linspace(0, np.pi, 2000)[1:]]
    for angle in np.abs(np.angle(1 + roots)):
        offset = angle * np.geomspace(1e-7, 0.5, 1000)
        theta += [angle + offset, angle - offset]
    theta = np.unique(np.concatenate(theta))
    theta = theta[(theta >= lowest) & (theta < np.pi)]
    w = -2 * np.sin(theta / 2) ** 2 + 1j * np.sin(theta)
    return theta, np.polyval(loop.above, w) / np.polyval(loop.below, w) * np.exp(-1j * loop.delay * theta)


def root(function, low, high):
    """The zero of a real function between two angles that bracket it."""
    low, high = mp.mpf(low), mp.mpf(high)
    return mp.findroot(function, (low, high), solver="anderson", tol=1e-50, maxsteps=200, verify=False)


def changes(values):
    return np.flatnonzero((values[1:] > 0) != (values[:-1] > 0))


def reference(loop, gain):
    """Every measure by brute force; the loop must be stable."""
    with mp.workdps(40):
        theta, grid = grid_of(loop)
        grid = gain * grid
        gain = mp.mpf(gain)
        ends = [limit(loop, gain, w) for w in (0, -2)]
        answer = crossing_measures(loop, gain, theta, grid)
        factors = [-1 / end.real for end in ends if mp.isfinite(end) and end.real < 0]
        for k in changes(grid.imag):
            if grid.real[k] < 0:
                place = root(lambda x: mp.im(transfer(loop, x)[0]), theta[k], theta[k + 1])
                factors.append(-1 / (gain * transfer(loop, place)[0].real))
        answer["gain margin"] = min([f for f in factors if f > 1], default=mp.inf)
        answer["gain reduction margin"] = max([f for f in factors if 0 < f < 1], default=mp.mpf(0))
        answer |= distance_measures(loop, gain, theta, grid, ends)
        answer["noise gain"] = noise_gain(loop, gain)
        return {name: float(answer[name]) for name in MEASURES}


def limit(loop, gain, w):
    above, below = (mp.polyval([mp.mpf(c) for c in part], w) for part in (loop.above, loop.below))
    return mp.inf if below == 0 else gain * above / below * (1 + w) ** loop.delay


def crossing_measures(loop, gain, theta, grid):
    places = [
        root(lambda x: mp.log(abs(gain * transfer(loop, x)[0])), theta[k], theta[k + 1])
        for k in changes(np.log(np.abs(grid)))
    ]
    phases = [mp.arg(-gain * transfer(loop, x)[0]) for x in places]
    none = 0 if abs(grid[0]) < 1 else mp.inf
    return {
        "phase margin": mp.degrees(min(phases, key=abs)) if places else mp.inf,
        "delay margin": min(
            (p % (2 * mp.pi) / x * loop.period for p, x in zip(phases, places, strict=True)), default=mp.inf
        ),
        "crossover frequency": max(places) / loop.period if places else none,
    }


def distance_measures(loop, gain, theta, grid, ends):
    def slope(x, inverse):
        value, change = transfer(loop, x)
        value, change = gain * value, gain * change
        if inverse:
            value, change = 1 / value, -change / value**2
        return mp.re(mp.conj(1 + value) * change)

    def least(curve, inverse):
        size = np.abs(1 + curve)
        best = size.min() * 1.01
        inner = 1 + np.flatnonzero((size[1:-1] <= size[:-2]) & (size[1:-1] <= size[2:]) & (size[1:-1] <= best))
        for k in sorted(inner, key=lambda k: size[k])[:3]:  # rounding makes more where the curve is flat
            for width in (1, 10, 100, 1000):
                low, high = theta[max(k - width, 0)], theta[min(k + width, len(theta) - 1)]
                if slope(mp.mpf(low), inverse) * slope(mp.mpf(high), inverse) < 0:
                    value = gain * transfer(loop, root(lambda x: slope(x, inverse), low, high))[0]
                    yield abs(1 + (1 / value if inverse else value))
                    break

    finite = [abs(1 + end) for end in ends if mp.isfinite(end)]
    inverted = [abs(1 + (1 / end if mp.isfinite(end) else 0)) for end in ends if end != 0]
    with np.errstate(divide="ignore"):
        answer = {
            "modulus margin": min([*least(grid, False), *finite]),
            "resonance peak": 1 / min([*least(1 / grid, True), *inverted]),
        }
    low = 1 if mp.isinf(ends[0]) else abs(ends[0] / (1 + ends[0]))
    closed = np.abs(grid / (1 + grid))
    below = np.flatnonzero(closed < float(low) / np.sqrt(2))
    answer["bandwidth"] = mp.inf
    if low > 0 and len(below):
        k = below[0]

        def level(x):
            value = gain * transfer(loop, x)[0]
            return mp.log(abs(value / (1 + value))) - mp.log(low / mp.sqrt(2))

        answer["bandwidth"] = root(level, theta[k - 1], theta[k]) / loop.period
    return answer


def noise_gain(loop, gain):
    """Covariances of 1/A driven by white noise from their linear equations, then those of B/A; digits to spare."""
    with mp.workdps(60 + 12 * (len(loop.below) + loop.delay)):
        below, above, effort = (in_z(part) for part in (loop.below, loop.above, loop.effort))
        a = below + [mp.mpf(0)] * loop.delay
        for k, value in enumerate(above):
            a[len(a) - len(above) + k] += gain * value
        n = len(a)
        matrix, right = mp.zeros(n, n), mp.zeros(n, 1)
        for i in range(n):
            for j in range(n):
                matrix[i, abs(i - j)] += a[j]
        right[0] = 1 / a[0]
        covariance = mp.lu_solve(matrix, right)
        total = sum(p * q * covariance[abs(i - j)] for i, p in enumerate(effort) for j, q in enumerate(effort))
        return gain * mp.sqrt(total)


def in_z(polynomial):
    result = [mp.mpf(0)]
    for value in polynomial:
        result = [x - y for x, y in zip([*result, 0], [0, *result], strict=True)]
        result[-1] += mp.mpf(value)
    return result[1:]


def polynomial(roots):
    """Real coefficients in w."""
    return np.atleast_1d(np.poly(roots)).real


def drawn(random, most=8):
    """A random loop: real, lightly damped and integrating poles, zeros, delays, any sampling speed."""
    degree, period = int(random.integers(1, most + 1)), 10.0 ** random.uniform(-5, 0)
    poles = list(-(10.0 ** random.uniform(-1.5, 0, degree)).astype(complex))
    if degree > 2 and random.random() < 0.5:
        damping, frequency = 10.0 ** random.uniform(-4, -0.3), 10.0 ** random.uniform(-1, 0.3)
        poles[:2] = frequency * np.array([-damping + 1j, -damping - 1j])
    if random.random() < 0.4:
        poles[-1] = 0.0
    below = polynomial(np.expm1(np.array(poles) * period))
    count = int(random.integers(0, degree + (random.random() < 0.3)))
    zeros = np.where(
        random.random(count) < 0.5,
        random.uniform(-1.3, -0.7, count),
        -period * 10.0 ** random.uniform(-1.5, 0.5, count),
    )
    above = polynomial(zeros)
    theta = min(3.0, 0.3 * period)
    w = np.expm1(1j * theta)
    above = above * abs(np.polyval(below, w) / np.polyval(above, w))
    return Loop(above, below, int(random.choice([0, 0, 1, 5, 20])), period)


def special():
    """Loops made to be missed."""
    h = 0.01
    pair = np.array([-1e-4 + 1j, -1e-4 - 1j])
    lead = polynomial([-0.3 * h, -0.35 * h])
    yield "conditionally stable", Loop(h * lead, polynomial([0, 0, 0]), 0, h)
    yield "conditionally stable late", Loop(h * lead, polynomial([0, 0, 0]), 5, h)
    yield "double integrator", Loop(h * polynomial([-0.2 * h]), polynomial([0, 0, np.expm1(-5 * h)]), 1, h)
    yield (
        "light mode, small residue",
        Loop(
            h * polynomial(np.expm1(1.001 * pair * h)),
            polynomial(np.append(np.expm1(pair * h), np.expm1(-0.3 * h))),
            0,
            h,
        ),
    )
    yield "two light modes", Loop(
        h**2 * polynomial(np.expm1(np.append(1.005 * pair, -0.3) * h)),
        polynomial(np.expm1(np.concatenate([pair, 1.01 * pair]) * h)), 0, h,
    )  # fmt: skip
    undamped = np.array([np.exp(0.3j) - 1, np.exp(-0.3j) - 1])
    yield "undamped mode", Loop(0.1 * polynomial([0.0]), polynomial(undamped), 0, 0.3)
    yield "undamped zeros", Loop(0.1 * polynomial(undamped), polynomial([0, -0.4, -0.5]), 1, 0.3)
    yield "zero at z = -1", Loop(0.01 * polynomial([-2.0]), polynomial([0.0, -0.1]), 0, 0.1)
    yield "pole at z = -1", Loop([0.01], polynomial([-2.0, -0.5]), 0, 0.1)
    yield "double zero at z = -1", Loop(0.01 * polynomial([-2.0, -2.0]), polynomial([0.0, -0.1, -0.3]), 1, 0.1)
    yield "feedthrough", Loop([0.5, 0.2], [1.0, 0.3], 0, 0.1)
    yield "pure delay", Loop([0.5], [1.0], 20, 0.1)
    yield "static", Loop([0.5], [1.0], 0, 0.1)
    yield "multiple poles", Loop([1e-12], polynomial([-1e-3] * 4), 5, 1e-3)
    yield "long delay", Loop([1e-3], polynomial([0.0]), 45, 0.01)
    yield "slow sampling", Loop(polynomial([-1.1]), polynomial([-0.9, -0.95, -0.99]), 1, 10.0)


NAMED = dict(special())


def compared(loop, gains):
    """Largest relative error over measures, with its name; both must agree on what is infinite."""
    found = loop.measured(gains)
    assert (found.status == FOUND).all()
    worst = (0.0, "")
    for k, gain in enumerate(gains):
        exact = reference(loop, gain)
        for row, name in enumerate(MEASURES):
            value, wanted = found.values[row, 0, k], exact[name]
            if value == wanted:
                continue
            worst = max(
                worst, (abs(value - wanted) / abs(wanted) if np.isfinite(value) else np.inf, f"{name} at {gain}")
            )
    return worst


def stable_gains(loop, most):
    gains = [gain for gain in GAINS if loop.stable(gain)]
    return np.array(gains)[np.unique(np.linspace(0, len(gains) - 1, most).round().astype(int))] if gains else None


@pytest.mark.parametrize("name", NAMED)
def test_special_loops(name):
    gains = stable_gains(NAMED[name], 4)
    assert gains is not None
    error, where = compared(NAMED[name], gains)
    assert error <= PROMISED, where


@pytest.mark.parametrize("seed", range(24))
def test_random_loops(seed):
    random, gains = np.random.default_rng(seed), None
    while gains is None:
        loop = drawn(random, most=20 if seed % 4 == 3 else 8)
        gains = stable_gains(loop, 2)
    error, where = compared(loop, gains)
    assert error <= PROMISED, where


@pytest.mark.parametrize("delay", [2, 15, 36])
@pytest.mark.parametrize("light", [0.3, 0.01])
def test_noise_gain_by_recursion_and_by_integral(delay, light, monkeypatch):
    """Two methods that share nothing but the question, up to a thousandth before the stability limit."""
    step = 1 / delay
    poles = np.array([-light + 3j, -light - 3j, -3, 0])
    loop = Loop([step**4], polynomial(np.expm1(poles * step)), delay, step)
    limit = 1e-6 * loop.measured(1e-6, ["gain margin"]).values[0, 0, 0]
    gains = limit * np.array([0.01, 0.5, 0.999])
    recursion = loop.measured(gains, ["noise gain"]).values
    monkeypatch.setattr(noise, "_LONGEST", 0)
    assert loop.measured(gains, ["noise gain"]).values == pytest.approx(recursion, rel=PROMISED)


def test_integrator_by_hand():
    """L = K/(z - 1): pole at 1 - K; |z - 1| = 2 sin(θ/2), its argument 90° + θ/2."""
    gain, period = np.array([0.1, 0.5, 1.5]), 0.2
    values = dict(zip(MEASURES, Loop([1.0], [1.0, 0.0], 0, period).measured(gain).values[:, 0], strict=True))
    theta = 2 * np.arcsin(gain / 2)
    assert values["gain margin"] == pytest.approx(2 / gain, rel=1e-12)  # z = -1
    assert (values["gain reduction margin"] == 0).all()
    assert values["phase margin"] == pytest.approx(90 - np.degrees(theta / 2), rel=1e-12)
    assert values["delay margin"] == pytest.approx(np.radians(values["phase margin"]) / theta * period, rel=1e-12)
    assert values["modulus margin"] == pytest.approx(1 - gain / 2, rel=1e-12)
    assert values["resonance peak"] == pytest.approx(np.maximum(1.0, gain / (2 - gain)), rel=1e-12)
    assert values["crossover frequency"] == pytest.approx(theta / period, rel=1e-12)
    assert values["noise gain"] == pytest.approx(gain * np.sqrt(2 / (2 - gain)), rel=1e-12)
    # |K/(z - 1 + K)|² = 1/2 where 2K² = K² + (1 - K) |z - 1|²
    half = np.minimum(gain[:2] / (2 * np.sqrt(1 - gain[:2])), 1)
    assert values["bandwidth"][:2] == pytest.approx(2 * np.arcsin(half) / period, rel=1e-12)
    assert values["bandwidth"][2] == np.inf  # all above 1 at K > 1


def test_pure_delay_by_hand():
    """L = K z^-d with K < 1: the circle of radius K, d/2 times around."""
    gain = np.array([0.2, 0.9])
    values = dict(zip(MEASURES, Loop([1.0], [1.0], 7).measured(gain).values[:, 0], strict=True))
    assert values["gain margin"] == pytest.approx(1 / gain, rel=1e-12)
    assert values["modulus margin"] == pytest.approx(1 - gain, rel=1e-12)
    assert values["resonance peak"] == pytest.approx(gain / (1 - gain), rel=1e-12)
    assert (values["phase margin"] == np.inf).all() and (values["crossover frequency"] == 0).all()
    assert values["noise gain"] == pytest.approx(gain / np.sqrt(1 - gain**2), rel=1e-12)
    assert (values["bandwidth"] == np.inf).all()  # 1/(1 + K) at zero frequency is the least there is


def test_no_gain_is_no_loop():
    values = dict(zip(MEASURES, NAMED["multiple poles"].measured(0.0).values[:, 0, 0], strict=True))
    nothing = {"gain reduction margin", "resonance peak", "crossover frequency", "noise gain"}
    for name, value in values.items():
        assert value == (1.0 if name == "modulus margin" else 0.0 if name in nothing else np.inf), name


def several(loops):
    """Arguments for pairs of one delay, of equal lengths."""
    above, below, effort = (np.stack([getattr(one, part) for one in loops])[:, None] for part in PARTS)
    return above, below, effort, np.array([one.period for one in loops])


PARTS = ("above", "below", "effort")
SOME = [
    Loop([0.02, 0.01 * k], polynomial([0.0, -0.1 * k, -0.3]), 2, 0.1 * k) for k in (1.0, 1.3, 1.7, 2.0, 2.2, 2.5, 2.9)
]
FEW = np.array([0.05, 0.2, 0.4])


def measured_together(loops, names=MEASURES):
    above, below, effort, period = several(loops)
    known = np.ones((len(loops), len(FEW)), bool)
    return frequency_measures(names, below, 0 * above, above, 2, FEW, period, known, (0 * effort, effort))


def test_batches_do_not_matter():
    together = measured_together(SOME)
    assert (together.status == FOUND).all() and np.isfinite(together.values[4]).all()
    backwards = measured_together(SOME[::-1])
    assert np.array_equal(together.values, backwards.values[:, ::-1])
    for k, loop in enumerate(SOME):
        assert np.array_equal(together.values[:, k], loop.measured(FEW).values[:, 0])


def test_only_what_is_asked():
    all_of_them = measured_together(SOME).values
    for names in (["noise gain", "gain margin"], ["bandwidth"], ["modulus margin", "phase margin"]):
        some = measured_together(SOME, names).values
        assert np.array_equal(some, all_of_them[[MEASURES.index(name) for name in names]])


def test_own_polynomials_for_every_gain():
    """The same loops with the gain inside; the factor then multiplies the whole numerator."""
    above, below, effort, period = several(SOME)
    known = np.ones((len(SOME), len(FEW)), bool)
    known[0, 1] = False
    scaled, nothing = FEW[:, None] * above, 0 * above
    found = frequency_measures(
        MEASURES, below, scaled, nothing, 2, FEW, period, known, (FEW[:, None] * effort, 0 * effort)
    )
    expected = measured_together(SOME).values
    assert np.isnan(found.values[:, 0, 1]).all() and (found.status == FOUND).all()
    assert found.values[:, known] == pytest.approx(expected[:, known], rel=1e-11)


def test_fixed_part_of_the_numerator():
    """Margins on the gain move the sloped part alone; all else sees the whole numerator."""
    above, below, effort, period = several(SOME)
    known = np.ones((len(SOME), len(FEW)), bool)
    fixed = 0.1 * above * np.array([1.0, 1.5])
    found = frequency_measures(MEASURES, below, fixed, above, 2, FEW, period, known, (0.1 * effort, effort)).values
    for k, loop in enumerate(SOME):
        for g, gain in enumerate(FEW):
            whole = Loop(fixed[k, 0] + gain * above[k, 0], loop.below, 2, loop.period)
            alike = whole.measured(1.0).values[:8, 0, 0]
            assert found[2:8, k, g] == pytest.approx(alike[2:], rel=1e-11)
        rest = np.append(np.append(loop.below, [0, 0]) + 2 * np.append([0], np.append(loop.below, 0)), 0)[:6]
        rest[2:] += loop.below  # z² = w² + 2w + 1
        rest[-2:] += fixed[k, 0]
        assert found[:2, k] == pytest.approx(Loop(loop.above, rest).measured(FEW).values[:2, 0], rel=1e-9)


def test_negative_gain_of_a_negative_plant():
    loop = SOME[0]
    mirrored = Loop(-loop.above, loop.below, 2, loop.period, -loop.effort)
    assert np.array_equal(mirrored.measured(-FEW).values[:8], loop.measured(FEW).values[:8])


def test_what_fails_says_so_alone():
    above, below, effort, period = several(SOME[:3])
    below[1, 0, 0] = np.nan
    known = np.ones((3, len(FEW)), bool)
    known[2, 0] = False
    found = frequency_measures(MEASURES, below, 0 * above, above, 2, FEW, period, known, (0 * effort, effort))
    assert (found.status[1] == NOT_FINITE).all() and np.isnan(found.values[:, 1]).all()
    assert np.isnan(found.values[:, 2, 0]).all() and found.status[2, 0] == FOUND  # not asked for
    good = measured_together(SOME[:3]).values
    assert np.array_equal(found.values[:, 0], good[:, 0])


def test_overflow_is_unknown():
    with np.errstate(all="ignore"):
        found = Loop([1e-250], [1.0, 1.0], 1).measured(1.0, ["bandwidth", "modulus margin"])
    assert found.status[0, 0] == UNRESOLVED and np.isnan(found.values[0, 0, 0])


def test_crossover_lost_beside_an_undamped_mode_is_unknown():
    """A residue so small that |L| = 1 lies within 1e-9 of the pole: nobody can say at which phase."""
    undamped = polynomial([np.exp(0.3j) - 1, np.exp(-0.3j) - 1])
    found = Loop(1e-14 * polynomial([0.0]), undamped).measured(1.0)
    assert found.status[0, 0] == UNRESOLVED and np.isnan(found.values[:8]).all()
