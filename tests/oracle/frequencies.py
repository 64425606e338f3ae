"""Frequency measures of one loop at 40 digits, every crossing and extremum a counted root of a polynomial.

Neighbours: reference.py (the sampled plant), sturm.py (counts the roots), answers.py.

On the unit circle z = (1 + jv)/(1 - jv), v = tan(wT/2), a real polynomial of degree n is
(E(q) + jv O(q))/(1 - jv)^n with q = v^2 and real E, O: what is sought are the positive roots of real polynomials in
q, and a Sturm chain counts them, so that none is missed. q = 0 and q = inf are z = 1 and z = -1. Polynomials in z
are in descending powers, those in q in ascending ones.
"""

from dataclasses import dataclass

from mpmath import mp

from .closed import applied, times
from .reference import add, exactly, multiply, number, polynomial, state_space
from .sturm import positive_roots

CANCELLED = mp.mpf(10) ** -100  # part of its terms below which a sum is 0
LOST = mp.mpf(10) ** -60  # the same for sums of products of such sums
DIED = mp.mpf(10) ** -40  # of the step over many periods: what is left of the covariance to be summed
FREQUENCIES = (
    "gain margin",
    "gain reduction margin",
    "phase margin",
    "delay margin",
    "modulus margin",
    "resonance peak",
    "crossover frequency",
    "bandwidth",
    "phase lost to sampling",
    "noise gain",
)


@dataclass(frozen=True)
class Opened:
    """L = (apart + moved)/bottom, polynomials in z; only moved follows the gain."""

    apart: list
    moved: list
    bottom: list

    @property
    def top(self):
        return add(self.apart, self.moved)

    @property
    def closed(self):
        return add(self.bottom, self.top)


def opened(loop, gain):
    """The loop cut open at the sampler."""
    sampled = loop.sampled()
    numerator, denominator = loop.compensator.in_z(gain, loop.period)
    apart = loop.compensator.apart(loop.period) if hasattr(loop.compensator, "apart") else [mp.zero]
    following = add(polynomial(numerator), [-value for value in polynomial(apart)])
    bottom = multiply([*sampled.denominator, *[mp.zero] * sampled.delay], polynomial(denominator))
    return Opened(multiply(sampled.numerator, polynomial(apart)), multiply(sampled.numerator, following), bottom)


@exactly
def frequencies(loop, gain):
    """Every frequency measure of a stable loop by name.

    Frequencies in rad/s, phases in degrees, the delay margin in s.
    """
    cut, period = opened(loop, gain), number(loop.period)
    factors = gain_factors(cut)
    phases = [(phase(cut, q), angle(q) / period) for q in level_places(cut.top, cut.bottom, mp.one)]
    above = abs(mp.polyval(cut.top, -1)) > abs(mp.polyval(cut.bottom, -1))
    crossover = max((w for _, w in phases), default=mp.inf if above else mp.zero)
    delay = loop.total_delay() - number(dict(loop.parameters).get(loop.dead_time, loop.dead_time))
    found = {
        "gain margin": min((f for f in factors if f > 1), default=mp.inf),
        "gain reduction margin": max((f for f in factors if 0 < f < 1), default=mp.zero),
        "phase margin": min((p for p, _ in phases), key=abs, default=mp.inf),
        "delay margin": min((mp.radians(p % 360) / w for p, w in phases), default=mp.inf),
        "modulus margin": mp.sqrt(min(square_extremes(cut.closed, cut.bottom))),
        "resonance peak": mp.sqrt(max(square_extremes(cut.top, cut.closed))),
        "crossover frequency": crossover,
        "bandwidth": bandwidth(cut, period),
        "phase lost to sampling": mp.degrees(crossover * (period / 2 + delay)),
        "noise gain": noise_gain(loop, gain),
    }
    return {name: found[name] for name in FREQUENCIES}


def angle(q):
    """wT of a place."""
    return 2 * mp.atan(mp.sqrt(q))


def phase(cut, q):
    """arg(-L) in degrees, in (-180, 180]."""
    z = mp.expj(angle(q))
    return mp.degrees(mp.arg(-mp.polyval(cut.top, z) / mp.polyval(cut.bottom, z)))


def cleared(values, bounds, part):
    """Values with those set to 0 that are nothing but the rounding of their terms."""
    return [mp.zero if abs(value) <= part * bound else value for value, bound in zip(values, bounds, strict=True)]


def on_circle(coefficients):
    """E and O of a polynomial in z."""
    degree = len(coefficients) - 1
    total = [mp.zero] * (degree + 1)
    for exponent, value in enumerate(reversed(coefficients)):
        part = multiply([value], *[[1, 1]] * exponent, *[[-1, 1]] * (degree - exponent))
        total = [a + b for a, b in zip(total, reversed(part), strict=True)]
    size = mp.mpf(2) ** degree * sum(abs(value) for value in coefficients)
    total = cleared(total, [size] * (degree + 1), CANCELLED)
    return [[(-1) ** order * value for order, value in enumerate(total[odd::2])] or [mp.zero] for odd in (0, 1)]


def summed(*terms):
    """Sum of products of polynomials in q, exact cancellations cleared."""
    size = max(sum(len(factor) - 1 for factor in term) for term in terms) + 1
    total, bound = [mp.zero] * size, [mp.zero] * size
    for term in terms:
        for into, factors in ((total, term), (bound, [[abs(value) for value in factor] for factor in term])):
            for order, value in enumerate(multiply(*factors)):
                into[order] += value
    return cleared(total, bound, LOST)


def square(coefficients):
    """|p|^2 (1 + q)^degree of a polynomial in z."""
    even, odd = on_circle(coefficients)
    return summed([even, even], [[mp.zero, mp.one], odd, odd])


def derivative(coefficients):
    return [order * value for order, value in enumerate(coefficients)][1:] or [mp.zero]


def negative(coefficients):
    return [-value for value in coefficients]


def without_delay(coefficients):
    """A polynomial in z without its leading zeros and without its roots at 0, which do not count on the circle."""
    largest = max(abs(value) for value in coefficients)
    kept = [index for index, value in enumerate(coefficients) if abs(value) > CANCELLED * largest]
    return coefficients[kept[0] : kept[-1] + 1]


def excess(top, bottom):
    """Powers of 1 + q on both sides of |top|^2/|bottom|^2 = square(top)/square(bottom) * (1 + q)^excess."""
    return len(bottom) - len(top)


def powers(exponent):
    """(1 + q)^exponent for the side it belongs to: (numerator, denominator)."""
    one = [mp.one, mp.one]
    return multiply(*[one] * max(exponent, 0)), multiply(*[one] * max(-exponent, 0))


def level_places(top, bottom, level):
    """All q > 0 where |top/bottom|^2 is a level."""
    top, bottom = without_delay(top), without_delay(bottom)
    above, below = powers(excess(top, bottom))
    return positive_roots(summed([square(top), above], [[-level], square(bottom), below]))


def square_extremes(top, bottom):
    """|top/bottom|^2 at both ends of the circle and where it turns: f' = 0 of f = A (1 + q)^e/B."""
    top, bottom = without_delay(top), without_delay(bottom)
    a, b, exponent = square(top), square(bottom), excess(top, bottom)
    one = [mp.one, mp.one]
    turning = summed([one, derivative(a), b], [one, negative(a), derivative(b)], [[mp.mpf(exponent)], a, b])
    values = [abs(end_value(top, bottom, z)) ** 2 for z in (1, -1)]
    for q in positive_roots(turning):
        values.append(mp.polyval(a[::-1], q) / mp.polyval(b[::-1], q) * (1 + q) ** exponent)
    return values


def end_value(top, bottom, z):
    """top/bottom at z = 1 or -1; inf at a pole there."""
    above, below = (cleared_value(coefficients, z) for coefficients in (top, bottom))
    return above / below if below else mp.inf


def cleared_value(coefficients, z):
    size = sum(abs(value) for value in coefficients)
    value = mp.polyval(coefficients, z)
    return mp.zero if abs(value) <= CANCELLED * size else value


def gain_factors(cut):
    """All f for which bottom + apart + f moved has a root on the unit circle: -(bottom + apart)/moved is real."""
    fixed = add(cut.bottom, cut.apart)
    size = max(len(fixed), len(cut.moved))
    fixed, moved = ([mp.zero] * (size - len(side)) + list(side) for side in (fixed, cut.moved))
    (even, odd), (moved_even, moved_odd) = on_circle(fixed), on_circle(moved)
    factors = []
    for q in positive_roots(summed([odd, moved_even], [negative(even), moved_odd])):
        z = mp.expj(angle(q))
        factors.append(-mp.re(mp.polyval(fixed, z) / mp.polyval(moved, z)))
    ends = [-end_value(fixed, moved, z) for z in (1, -1)]
    return factors + [factor for factor in ends if mp.isfinite(factor)]


def bandwidth(cut, period):
    """Lowest w > 0 with half the square that |L/(1 + L)| tends to as w tends to 0."""
    level = abs(end_value(cut.top, cut.closed, 1)) ** 2 / 2
    if not level:
        return mp.inf
    return min((angle(q) / period for q in level_places(cut.top, cut.closed, level)), default=mp.inf)


@exactly
def noise_gain(loop, gain):
    """sqrt(d^2 + c P c') of u under white noise at the sampler, P = sum of A^k b b' A'^k summed by doubling.

    (A, b, c, d) stands for C/(1 + L) of a stable loop.
    """
    numerator, _ = loop.compensator.in_z(gain, loop.period)
    sampled = loop.sampled()
    delayed = [*sampled.denominator, *[mp.zero] * sampled.delay]
    a, b, c, through = state_space(multiply(numerator, delayed), opened(loop, gain).closed)
    step, covariance = a.tolist(), (b * b.T).tolist()
    while max(abs(value) for row in step for value in row) > DIED:
        transposed = [list(column) for column in zip(*step, strict=True)]
        more = times(times(step, covariance), transposed)
        covariance = [[a + b for a, b in zip(*rows, strict=True)] for rows in zip(covariance, more, strict=True)]
        step = times(step, step)
    seen = list(c)
    return mp.sqrt(through**2 + mp.fdot(seen, applied(covariance, seen)))
