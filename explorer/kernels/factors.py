"""Factors: formulas over real quadratic factors of many polynomials at once, for the tracking kernel.

A monic polynomial of degree n is Π(x² + u_i x + v_i), times (x + t) when n is odd. A formula takes the rows
u_1, v_1, u_2, v_2, …, (t), so a set of factors is n rows. Nothing here branches; see lanes.

Sources: simultaneous corrections of all factors after Weierstrass and Börsch-Supan, in the quadratic form of
Dvorčuk (1969); logarithm by s = f/(2 + f) and its series, arctangent by argument halving, both textbook forms.
"""

from __future__ import annotations

import math
from typing import Any

from explorer.kernels.resolution import near_origin, resolved

Row = Any  # a lanes.Symbol or a NumPy array
Element = tuple[Row, Row]  # a·x + b modulo a quadratic factor

EPS = 2.220446049250313e-16
FLOOR = -800.0  # log|z| of a pole at z = 0
IN_Z = 100  # added to the degree: factors in z, not in w
NONE = -1000.0  # log|z| of a pair that does not exist


def product(factors: list[Row], degree: int, size: Any = None) -> list[Row]:
    """Coefficients c_1..c_n (monic) of the product; with size = absolute value, of the absolute product."""
    coefficients: list[Row] = []
    for index in range(degree // 2):
        u, v = factors[2 * index], factors[2 * index + 1]
        if size:
            u, v = size(u), size(v)
        coefficients = _times_quadratic(coefficients, u, v)
    if degree % 2:
        t = size(factors[-1]) if size else factors[-1]
        longer = [*coefficients, None]
        coefficients = [
            (t if k == 0 else coefficients[k - 1] * t) if longer[k] is None else
            (longer[k] + t if k == 0 else longer[k] + coefficients[k - 1] * t)
            for k in range(len(longer))
        ]  # fmt: skip
    return coefficients


def _times_quadratic(c: list[Row], u: Row, v: Row) -> list[Row]:
    result = []
    for k in range(len(c) + 2):
        terms = []
        if k < len(c):
            terms.append(c[k])
        if k == 0:
            terms.append(u)
        elif k <= len(c):
            terms.append(c[k - 1] * u)
        if k == 1:
            terms.append(v)
        elif k >= 2:
            terms.append(c[k - 2] * v)
        total = terms[0]
        for term in terms[1:]:
            total = total + term
        result.append(total)
    return result


def advanced(operations: Any, degree: int, *rows: Row) -> list[Row]:
    """Predict, correct once, check.

    rows : gain and four extrapolation weights (newest first); constant a_0..a_n; slope b_0..b_n; the factors of the
    last four gains, oldest first. Returns the factors, the residuals they leave, and the certificate of `judged`.
    Degrees 1 and 2 are their own factors.
    """
    gain, weights = rows[0], rows[1:5]
    constant, slope, past = rows[5 : 6 + degree], rows[6 + degree : 7 + 2 * degree], rows[7 + 2 * degree :]
    target = _monic(operations, constant, slope, gain)
    if degree <= 2:
        return _finite(operations, target)
    factors = []
    for row in range(degree):
        total = weights[0] * past[3 * degree + row]
        for age in range(1, 4):
            total = total + weights[age] * past[(3 - age) * degree + row]
        factors.append(total)
    residual = [p - c for p, c in zip(target, product(factors, degree), strict=True)]
    return judged(operations, degree, target, corrected(degree, residual, factors))


def repeated(operations: Any, degree: int, *rows: Row) -> list[Row]:
    """Correct once more what is not certified, and check; rows : gain, a_0..a_n, b_0..b_n, factors, certificate."""
    target = _monic(operations, rows[1 : 2 + degree], rows[2 + degree : 3 + 2 * degree], rows[0])
    if degree <= 2:
        return _finite(operations, target)
    factors, certified = list(rows[3 + 2 * degree : 3 + 3 * degree]), rows[3 + 3 * degree] == 1.0
    residual = [p - c for p, c in zip(target, product(factors, degree), strict=True)]
    better = corrected(degree, residual, factors)
    kept = [operations.where(certified, old, new) for old, new in zip(factors, better, strict=True)]
    return judged(operations, degree, target, kept)


def judged(operations: Any, degree: int, target: list[Row], factors: list[Row]) -> list[Row]:
    """The factors, and 1.0 in the lanes where |p - product|_k <= (4 + n) eps (absolute product)_k for every k."""
    made, absolute = product(factors, degree), product(factors, degree, operations.absolute)
    certified = absolute[0] == absolute[0]
    for p, c, a in zip(target, made, absolute, strict=True):
        fits = operations.absolute(p - c) <= a * ((4 + degree) * EPS)
        certified = certified & fits & (a < 1e200)  # inf would fit inf
    return [*factors, operations.where(certified, 1.0, 0.0)]


def _finite(operations: Any, target: list[Row]) -> list[Row]:
    """A polynomial of degree 1 or 2 is its own factor; certified unless it overflowed."""
    size = operations.absolute(target[0]) + operations.absolute(target[-1])
    return [*target, operations.where(size < 1e200, 1.0, 0.0)]


def _monic(operations: Any, constant: Any, slope: Any, gain: Row) -> list[Row]:
    leading = constant[0] + gain * slope[0]
    share = operations.if_any(leading != 1.0, lambda: 1.0 / leading, 1.0)
    return [(a + gain * b) * share for a, b in zip(constant[1:], slope[1:], strict=True)]


def corrected(degree: int, residual: list[Row], factors: list[Row]) -> list[Row]:
    """One simultaneous third-order correction of all factors; residual r_1..r_n = p - product.

    Modulo q_i the residual is δ_i Π_{j≠i} q_j to first order; each 1/q_j is a conjugate over the pair's resultant,
    which i and j share. The second-order part is the Börsch-Supan sum over the other factors' first corrections.
    """
    count, odd = degree // 2, degree % 2
    quadratics = [(factors[2 * i], factors[2 * i + 1]) for i in range(count)]
    inverse: dict[tuple[int, int], Element] = {}
    for i in range(count):
        for j in range(i + 1, count):
            a, b = quadratics[j][0] - quadratics[i][0], quadratics[j][1] - quadratics[i][1]
            low, high = b - a * quadratics[i][0], b - a * quadratics[j][0]
            share = 1.0 / (b * low + a * a * quadratics[i][1])
            inverse[i, j] = (-a * share, low * share)
            inverse[j, i] = (a * share, -(high * share))
    first = []
    for i, (u, v) in enumerate(quadratics):
        element = _remainder(residual, u, v)
        for j in range(count):
            if j != i:
                element = _times(element, inverse[i, j], u, v)
        first.append(element)
    if odd:
        return _corrected_odd(residual, factors[-1], quadratics, first, inverse)
    result = []
    for i, (u, v) in enumerate(quadratics):
        result += _applied(u, v, first, i, [_times(first[j], inverse[i, j], u, v) for j in range(count) if j != i])
    return result


def _corrected_odd(
    residual: list[Row], t: Row, quadratics: list[Element], first: list[Element], inverse: dict[Any, Element]
) -> list[Row]:
    """The same with a linear factor x + t, whose ring is the reals: x = -t."""
    shares = [1.0 / (t * (t - u) + v) for u, v in quadratics]
    value = residual[0]
    for r in residual[1:]:
        value = r - value * t
    for share in shares:
        value = value * share
    result = []
    with_linear = []
    for i, (u, v) in enumerate(quadratics):
        lone = (-shares[i], (t - u) * shares[i])
        with_linear.append(lone)
        first[i] = _times(first[i], lone, u, v)
    for i, (u, v) in enumerate(quadratics):
        others = [_times(first[j], inverse[i, j], u, v) for j in range(len(quadratics)) if j != i]
        result += _applied(u, v, first, i, [*others, (with_linear[i][0] * value, with_linear[i][1] * value)])
    total = None
    for (a, b), share in zip(first, shares, strict=True):
        term = (b - a * t) * share
        total = term if total is None else total + term
    return [*result, t + (value if total is None else value - value * total)]


def _applied(u: Row, v: Row, first: list[Element], i: int, others: list[Element]) -> list[Row]:
    """u, v after δ_i = W_i (1 - Σ W_j/q_j)."""
    a, b = first[i]
    if others:
        total = others[0]
        for other in others[1:]:
            total = (total[0] + other[0], total[1] + other[1])
        second = _times(first[i], total, u, v)
        a, b = a - second[0], b - second[1]
    return [u + a, v + b]


def _remainder(r: list[Row], u: Row, v: Row) -> Element:
    """r_1 x^(n-1) + … + r_n modulo x² + ux + v."""
    last, previous = r[0], None
    for coefficient in r[1:]:
        total = coefficient - last * u
        if previous is not None:
            total = total - previous * v
        last, previous = total, last
    assert previous is not None  # a quadratic factor means at least two coefficients
    return previous, last + previous * u


def _times(left: Element, right: Element, u: Row, v: Row) -> Element:
    (a, b), (c, d) = left, right
    square = a * c
    return a * d + b * c - square * u, b * d - square * v


# (2 artanh(s)/s - 2)/s² in s², |s| <= 0.172, and (arctan(t)/t - 1)/t² in t², |t| <= tan(π/8): interpolated at
# Chebyshev nodes at 40 digits; what they leave is below 1e-17 of the value
_LOG = (
    0.666666666666667, 0.3999999999989931, 0.2857142862606338, 0.22222211120449298, 0.1818289017031397,
    0.15331686868638428, 0.14616878919029822,
)  # fmt: skip
_ARCTAN = (
    -0.3333333333333333, 0.1999999999999552, -0.14285714284666542, 0.11111111015256361, -0.09090904578123903,
    0.07692183190826087, -0.06664511447381948, 0.0585814891280221, -0.0508544973794026, 0.03923165829558719,
    -0.01917688711906226,
)  # fmt: skip


def log_one_plus(operations: Any, x: Row) -> Row:
    """log(1 + x) to rounding for x > -1 and small |x| too; FLOOR for x = -1, NaN or less."""
    whole = 1.0 + x
    near = operations.absolute(x) < 0.25
    mantissa, exponent = operations.split(whole)
    f = operations.where(near, x, mantissa - 1.0)
    s = f / (2.0 + f)
    square = s * s
    series = s * 2.0 + s * square * _polynomial(_LOG, square)
    result = operations.where(near, series, exponent * math.log(2.0) + series)
    return operations.where(whole > 0.0, result, FLOOR)


def logarithm(operations: Any, x: Row) -> Row:
    """log x to rounding of x; FLOOR for 0, NaN and less."""
    mantissa, exponent = operations.split(x)
    s = (mantissa - 1.0) / (mantissa + 1.0)
    square = s * s
    result = exponent * math.log(2.0) + (s * 2.0 + s * square * _polynomial(_LOG, square))
    return operations.where(x > 1e-300, result, FLOOR)


def angle(operations: Any, x: Row, y: Row) -> Row:
    """The angle of (x, y) for y >= 0, in [0, π]; one division."""
    wide = operations.absolute(x)
    steep = y > wide
    small, large = operations.where(steep, wide, y), operations.where(steep, y, wide)
    middle = small > large * 0.41421356237309503  # beyond tan(π/8): turn back by π/4
    t = operations.where(middle, small - large, small) / operations.where(middle, small + large, large)
    square = t * t
    value = t + t * square * _polynomial(_ARCTAN, square)
    value = operations.where(middle, value + 0.25 * math.pi, value)
    value = operations.where(steep, 0.5 * math.pi - value, value)
    return operations.where(x < 0.0, math.pi - value, value)


def _polynomial(coefficients: tuple[float, ...], x: Row) -> Row:
    """Ascending coefficients, by Horner."""
    total = x * coefficients[-1] + coefficients[-2]
    for coefficient in reversed(coefficients[:-2]):
        total = total * x + coefficient
    return total


def reduced(operations: Any, code: int, *rows: Row) -> list[Row]:
    """Factors and their certificate to what measures need of the poles, s·T = log z.

    code : degree, for factors in w = z - 1; degree + IN_Z for factors in z. Returns largest log|z| (FLOOR for z = 0);
    least damping ratio; least |log z|²; log|z| and angle of the slowest pair of non-real z (NONE and 0 without one);
    and 1.0 where the factors are certified and the variable resolves all that matters, else 0.0, see `resolved`.
    """
    degree, in_z = code % IN_Z, code >= IN_Z
    poles, pairs = _poles(operations, degree, rows, in_z)
    slowest = poles[0][0]
    signed, square = _signed_square(operations, *poles[0])
    least = square
    for size, turn in poles[1:]:
        slowest = operations.maximum(size, slowest)
        own, both = _signed_square(operations, size, turn)
        weaker = own * square < signed * both
        signed, square = operations.where(weaker, own, signed), operations.where(weaker, both, square)
        least = operations.minimum(both, least)
    damping = operations.sqrt(operations.absolute(signed) / square)
    damping = operations.where(signed < 0.0, -damping, damping)
    zero = operations.absolute(slowest * 0.0)  # a row of zeros, none of them negative
    pair, turn = zero + NONE, zero
    for size, own_turn, exists in pairs:
        slower = exists & (size > pair)
        pair, turn = operations.where(slower, size, pair), operations.where(slower, own_turn, turn)
    factors = [(rows[2 * i], rows[2 * i + 1]) for i in range(degree // 2)]
    linear = rows[degree - 1] if degree % 2 else None
    # A pair near z = 0 decides the measures of pairs when no slower pair is there
    seen = operations.where(pair > NONE, operations.minimum(pair, slowest), slowest)
    if in_z:
        sharp = resolved(operations, factors, linear, damping, seen, in_z)
    else:
        sharp = operations.if_any(
            near_origin(factors, linear),
            lambda: resolved(operations, factors, linear, damping, seen, in_z),
            1.0,
        )
    return [slowest, damping, least, pair, turn, sharp * rows[degree]]


def _poles(
    operations: Any, degree: int, rows: Any, in_z: bool
) -> tuple[list[Element], list[tuple[Row, Row, Row]]]:
    """(log|z|, angle) of every pole, and (log|z|, angle, whether it is one) of every possible pair."""
    poles, pairs = [], []
    for index in range(degree // 2):
        u, v = rows[2 * index], rows[2 * index + 1]
        half = u * -0.5
        gap = half * half - v
        paired = gap < 0.0
        spread = operations.sqrt(operations.absolute(gap))
        far = operations.where(half < 0.0, half - spread, half + spread)
        divisor = operations.where(operations.absolute(far) > 0.0, far, 1.0)
        near = operations.if_any(gap >= 0.0, lambda v=v, divisor=divisor: v / divisor, 0.0)
        (first_size, first_turn), (near_size, near_turn) = (_real_pole(operations, x, in_z) for x in (far, near))
        square = v if in_z else v - u
        first = _logarithm(operations, operations.where(paired, square, first_size), in_z)
        first = operations.where(paired, first * 0.5, first)
        second = operations.if_any(gap >= 0.0, lambda x=near_size: _logarithm(operations, x, in_z), 0.0)
        across = half if in_z else 1.0 + half
        turn = operations.if_any(paired, lambda x=across, y=spread: angle(operations, x, y), 0.0)
        poles.append((first, operations.where(paired, turn, first_turn)))
        poles.append((operations.where(paired, first, second), operations.where(paired, turn, near_turn)))
        pairs.append((first, turn, paired))
    if degree % 2:
        size, turn = _real_pole(operations, -rows[degree - 1], in_z)
        poles.append((_logarithm(operations, size, in_z), turn))
    return poles, pairs


def _real_pole(operations: Any, root: Row, in_z: bool) -> Element:
    """What `_logarithm` takes for log|z| of a real root, and the angle of z: 0 or π."""
    if in_z:
        return operations.absolute(root), operations.where(root < 0.0, math.pi, 0.0)
    return operations.where(root < -1.0, -2.0 - root, root), operations.where(root < -1.0, math.pi, 0.0)


def _logarithm(operations: Any, x: Row, in_z: bool) -> Row:
    """log x for a size in z, log(1 + x) in w."""
    return logarithm(operations, x) if in_z else log_one_plus(operations, x)


def _signed_square(operations: Any, size: Row, turn: Row) -> Element:
    """±(Re log z)², positive for a decaying pole, and |log z|²: the signed square of the damping as a fraction."""
    return -(size * operations.absolute(size)), operations.maximum(size * size + turn * turn, 1e-300)
