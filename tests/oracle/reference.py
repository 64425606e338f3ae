"""Slow, plain answer to one sampled loop at 40 digits: exact decimals in, poles and pole measures out.

Neighbours: loops.py holds the loops, test_oracle.py compares the program with this answer. Nothing here
shares code or method with the program: coefficients stay in z, every sum is carried with so many digits that
cancellation does not matter.

Polynomials are lists of mpf in descending powers. A coefficient may be given as a decimal text ("0.1" then
means exactly one tenth), an int, a float (its exact binary value) or an mpf.
"""

from dataclasses import dataclass

from mpmath import mp

DIGITS = 40  # what the answers are good for
WORKING_DIGITS = 160  # a fourfold pole keeps a quarter of these, a cluster 1e-11 wide loses 11 per member
ROOT_DIGITS = (60, 30)  # asked of the root finder in turn: the second is for multiple poles

exactly = mp.workdps(WORKING_DIGITS)


@dataclass(frozen=True)
class Sampled:
    """Plant as the processor sees it: y = numerator(z) / (denominator(z) z^delay) u."""

    numerator: list
    denominator: list
    delay: int


@exactly
def number(value):
    """Exact value of a decimal text, int, float or mpf."""
    return mp.mpf(value)


def polynomial(coefficients):
    """List of mpf with leading zeros removed; the zero polynomial is [0]."""
    numbers = [number(value) for value in coefficients]
    while len(numbers) > 1 and numbers[0] == 0:
        numbers.pop(0)
    return numbers


@exactly
def multiply(*factors):
    """Product of polynomials."""
    product = [mp.one]
    for factor in factors:
        longer = [mp.zero] * (len(product) + len(factor) - 1)
        for i, left in enumerate(product):
            for j, right in enumerate(factor):
                longer[i + j] += left * right
        product = longer
    return product


@exactly
def add(left, right):
    """Sum of two polynomials."""
    size = max(len(left), len(right))
    left = [mp.zero] * (size - len(left)) + list(left)
    right = [mp.zero] * (size - len(right)) + list(right)
    return [a + b for a, b in zip(left, right, strict=True)]


@exactly
def power(base, exponent):
    """A polynomial raised to a whole power."""
    return multiply(*[base] * exponent)


@exactly
def from_roots(roots):
    """Monic polynomial with the given roots, which are real or come in conjugate pairs."""
    product = [mp.one]
    for root in roots:
        product = multiply(product, [mp.one, -root])
    return [mp.re(value) for value in product]


@exactly
def exponential(matrix):
    """Matrix exponential: Taylor series of the matrix halved until small, then squared as often."""
    norm = mp.mnorm(matrix, 1)
    halvings = max(0, int(mp.ceil(mp.log(norm, 2))) + 6) if norm else 0
    small = matrix / mp.mpf(2) ** halvings
    total = term = mp.eye(matrix.rows)
    order = 0
    while mp.mnorm(term, 1) > mp.eps * mp.mpf(2) ** (-halvings - 8):
        order += 1
        term = term * small / order
        total = total + term
    for _ in range(halvings):
        total = total * total
    return total


@exactly
def state_space(numerator, denominator):
    """Controllable companion form (A, B, C, D) of a proper transfer function."""
    numerator, denominator = polynomial(numerator), polynomial(denominator)
    order = len(denominator) - 1
    if len(numerator) > len(denominator):
        raise ValueError("an improper plant cannot be sampled")
    monic = [value / denominator[0] for value in denominator]
    padded = [mp.zero] * (order + 1 - len(numerator)) + [value / denominator[0] for value in numerator]
    through = padded[0]
    a, b, c = mp.zeros(order), mp.zeros(order, 1), mp.zeros(1, order)
    for i in range(order):
        a[0, i] = -monic[i + 1]
        c[0, i] = padded[i + 1] - through * monic[i + 1]
        if i:
            a[i, i - 1] = 1
    if order:
        b[0] = 1
    return a, b, c, through


@exactly
def held(a, b, duration):
    """e^(A t) and the integral of e^(A s) B over s from 0 to t, from one augmented exponential."""
    order = a.rows
    augmented = mp.zeros(order + 1)
    augmented[:order, :order] = a * duration
    augmented[:order, order] = b * duration
    both = exponential(augmented)
    return both[:order, :order], both[:order, order]


@exactly
def resolvent(phi):
    """det(zI - phi) and the matrices of adj(zI - phi), descending powers (Faddeev-Leverrier recursion)."""
    order = phi.rows
    coefficients, adjugate = [mp.one], [mp.eye(order)]
    for k in range(1, order + 1):
        product = phi * adjugate[-1]
        coefficients.append(-sum(product[i, i] for i in range(order)) / k)
        adjugate.append(product + coefficients[-1] * mp.eye(order))
    return coefficients, adjugate[:order]  # the last one is zero (Cayley and Hamilton)


@exactly
def split_delay(dead_time, period):
    """Whole samples d and remainder m of a dead time: dead_time = d*period - m with 0 <= m < period."""
    ratio = number(dead_time) / number(period)
    nearest = mp.nint(ratio)
    if abs(ratio - nearest) < mp.mpf(10) ** -DIGITS:  # decimals that divide evenly but for rounding
        return int(nearest), mp.zero
    whole = int(mp.ceil(ratio))
    return whole, whole * number(period) - number(dead_time)


@exactly
def sample(numerator, denominator, dead_time, period):
    """Zero-order-hold equivalent of numerator(s)/denominator(s) e^(-dead_time s).

    With dead_time = d T - m the plant's input over one period is the sample of d periods ago for T - m, then
    the one of d - 1 periods ago for m:
        x[k+1] = phi x[k] + older u[k-d] + newer u[k-d+1],   y[k] = C x[k] + D u[k-d]
    (K. J. Astrom, B. Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, section 2.3, from memory).
    """
    period = number(period)
    a, b, c, through = state_space(numerator, denominator)
    whole, remainder = split_delay(dead_time, period)
    if a.rows == 0:
        return Sampled([through], [mp.one], whole)
    phi, _ = held(a, b, period)
    after, newer = held(a, b, remainder)
    _, first = held(a, b, period - remainder)
    older = after * first
    characteristic, adjugate = resolvent(phi)
    sampled = [through * value for value in characteristic]
    for shift, effect in ((0, older), (1, newer)):
        part = [(c * matrix * effect)[0] for matrix in adjugate]
        sampled = add(sampled, part + [mp.zero] * shift)
    return Sampled(sampled, characteristic, whole)


@exactly
def sampled_in_z(numerator, denominator, dead_time, period):
    """Plant already given in z, delayed by a whole number of samples."""
    whole, remainder = split_delay(dead_time, period)
    if remainder:
        raise ValueError("a plant in z takes whole samples of delay")
    return Sampled(polynomial(numerator), polynomial(denominator), whole)


def substituted(coefficients, upper, lower, degree):
    """Numerator of p(upper/lower) over lower^degree."""
    total = [mp.zero]
    for exponent, value in enumerate(reversed(coefficients)):
        total = add(total, multiply([value], power(upper, exponent), power(lower, degree - exponent)))
    return total


@exactly
def backward_difference(numerator, denominator, period):
    """Compensator in s read at s = (z - 1)/(T z); returns numerator and denominator in z."""
    numerator, denominator = polynomial(numerator), polynomial(denominator)
    degree = max(len(numerator), len(denominator)) - 1
    upper, lower = [mp.one, -mp.one], [number(period), mp.zero]
    return substituted(numerator, upper, lower, degree), substituted(denominator, upper, lower, degree)


@exactly
def bilinear(numerator, denominator, period, exact_at=None):
    """Compensator in s read at s = c (z - 1)/(z + 1), c = 2/T.

    To be exact at w = 2 pi exact_at, c = w/tan(w T/2): then z = e^(jwT) stands for s = jw.
    """
    numerator, denominator = polynomial(numerator), polynomial(denominator)
    degree = max(len(numerator), len(denominator)) - 1
    scale = 2 / number(period)
    if exact_at is not None:
        frequency = 2 * mp.pi * number(exact_at)
        scale = frequency / mp.tan(frequency * number(period) / 2)
    upper, lower = [scale, -scale], [mp.one, mp.one]
    return substituted(numerator, upper, lower, degree), substituted(denominator, upper, lower, degree)


@exactly
def matched(numerator, denominator, period):
    """Matched poles and zeros: s_i -> e^(s_i T), every zero at infinity -> -1, gain matched as s -> 0.

    Near s = 0 the factor s of a pole or zero at the origin is (z - 1)/T: C(s) ~ level s^(zeros - poles) on
    one side, gain (T s)^(zeros - poles) top(1)/bottom(1) on the other.
    """
    period = number(period)
    upper, zeros = without_origins(polynomial(numerator))
    lower, poles = without_origins(polynomial(denominator))
    excess = len(lower) + poles - len(upper) - zeros
    if excess < 0:
        raise ValueError("an improper compensator has poles at infinity")
    top = from_roots([mp.exp(root * period) for root in roots(upper)] + [-mp.one] * excess)
    bottom = from_roots([mp.exp(root * period) for root in roots(lower)])
    level = upper[-1] / lower[-1]
    gain = level * period ** (poles - zeros) * sum(bottom) / sum(top)
    return (
        multiply([gain], from_roots([mp.one] * zeros), top),
        multiply(from_roots([mp.one] * poles), bottom),
    )


def without_origins(coefficients):
    """A polynomial divided by its roots at exactly 0, and their number."""
    largest = max(abs(value) for value in coefficients)
    ended = list(coefficients)
    while len(ended) > 1 and abs(ended[-1]) <= largest * mp.mpf(10) ** (20 - WORKING_DIGITS):
        ended.pop()
    return ended, len(coefficients) - len(ended)


@exactly
def roots(coefficients):
    """All roots, as many as the degree; roots at exactly 0 come out as exactly 0."""
    rest, origins = without_origins(polynomial(coefficients))
    found = []
    for digits in ROOT_DIGITS:
        extra = int((WORKING_DIGITS - digits) * mp.log(10, 2))
        try:
            with mp.workdps(digits):
                found = mp.polyroots(rest, maxsteps=2000, extraprec=extra)
            break
        except mp.NoConvergence:
            if digits == ROOT_DIGITS[-1]:
                raise
    rebuilt = multiply([rest[0]], from_roots(found))
    largest = max(abs(value) for value in rest)
    if any(abs(a - b) > largest * mp.mpf(10) ** -25 for a, b in zip(rest, rebuilt, strict=True)):
        raise ArithmeticError("the roots do not give the polynomial back")
    return [*found, *[mp.zero] * origins]


@exactly
def closed_loop_polynomial(sampled, numerator, denominator):
    """a(z) z^d ac(z) + b(z) bc(z) of the plant b/(a z^d) under the compensator bc/ac, negative feedback."""
    delayed = [*sampled.denominator, *[mp.zero] * sampled.delay]
    opened = multiply(delayed, polynomial(denominator))
    return polynomial(add(opened, multiply(sampled.numerator, polynomial(numerator))))


@exactly
def closed_loop_poles(sampled, numerator, denominator):
    """All closed-loop poles z."""
    return roots(closed_loop_polynomial(sampled, numerator, denominator))


@exactly
def continuous(z, period):
    """Pole s = ln z/T on the principal branch: Im s = pi/T at negative real z, -inf at z = 0."""
    if z == 0:
        return mp.mpc(mp.ninf, 0)
    angle = mp.arg(z)
    if is_real(z):
        angle = mp.pi if mp.re(z) < 0 else mp.zero
    return mp.mpc(mp.log(abs(z)), angle) / number(period)


def is_real(z):
    """Whether a pole is real: a multiple one leaves the root finder as a ring of its last digits."""
    return abs(mp.im(z)) <= abs(z - 1) * mp.mpf(10) ** -20


def damping_ratio(s):
    """-Re s/|s|; 1 for a pole at z = 0."""
    return mp.one if mp.isinf(mp.re(s)) else -mp.re(s) / abs(s)


@exactly
def measures(poles, period, band="0.02"):
    """Every measure that the closed-loop poles z decide: times in s, frequencies in rad/s, overshoot in %.

    Nothing is special about an unstable loop, except that it never settles (+inf).
    """
    radius = max(abs(z) for z in poles)
    all_s = [continuous(z, period) for z in poles]
    decay = mp.inf if radius == 0 else -mp.log(radius) / number(period)
    pairs = [z for z in poles if not is_real(z)]
    time_to_peak, overshoot = mp.inf, mp.zero
    if pairs:
        slowest = continuous(max(pairs, key=abs), period)
        ratio = damping_ratio(slowest)
        time_to_peak = mp.pi / abs(mp.im(slowest))
        overshoot = 100 * mp.exp(-mp.pi * ratio / mp.sqrt(1 - ratio**2))
    return {
        "stability": radius,
        "spectral radius": radius,
        "damping ratio": min(damping_ratio(s) for s in all_s),
        "natural frequency": min(mp.inf if mp.isinf(mp.re(s)) else abs(s) for s in all_s),
        "settling time": mp.log(1 / number(band)) / decay if decay > 0 else mp.inf,
        "time to peak": time_to_peak,
        "overshoot": overshoot,
    }
