"""Frequency curve: polynomials in w and a place on the unit circle in, the loop's value and slopes for cells out.

A place on the circle is x = ln tan(θ/2), θ = ωT: w = exp(jθ) - 1 = 2jt/(1 - jt) with t = exp(x), so that no digit
is lost however small θ is, and every rational loop has logarithmic slopes that level off towards both ends.
"""

from __future__ import annotations

import math
from typing import Any

from numpy.typing import NDArray

from explorer.kernels.compiling import compiled

Array = NDArray[Any]
Curve = tuple[Array, Array, int]  # R = above/(below z**delay): polynomials in descending powers of w, whole samples

# A node: place, ln of size, size, R/|R| as two numbers, the first and second derivative of ln R by x; and, where cells
# are made, the Wronskians of R and of 1/R.
COLUMNS = 11
PLACE, LEVEL, SIZE, UNIT, TURN, SLOPE, TWIST, BEND, CURL, WRONSKIAN, INVERSE_WRONSKIAN = range(COLUMNS)


_SAFE = 1e-280  # squares smaller than this or larger than its inverse are formed again from scaled values


@compiled()
def _logarithm(polynomial: Array, real: float, imaginary: float) -> tuple[float, ...]:
    """Value, its square, the scale of both, P'/P and (P'/P)' of a real polynomial; descending powers.

    Horner's rule for the value and two derivatives.
    """
    a = ai = b = bi = c = ci = 0.0
    for k in range(polynomial.shape[0]):
        c, ci = c * real - ci * imaginary + b, c * imaginary + ci * real + bi
        b, bi = b * real - bi * imaginary + a, b * imaginary + bi * real + ai
        a, ai = a * real - ai * imaginary + polynomial[k], a * imaginary + ai * real
    square, scale = a * a + ai * ai, 1.0
    if not _SAFE < square < 1.0 / _SAFE:
        scale = 1.0 / max(abs(a), abs(ai))
        a, ai, b, bi, c, ci = a * scale, ai * scale, b * scale, bi * scale, c * scale, ci * scale
        square = a * a + ai * ai
    factor = 1.0 / square
    first = (b * a + bi * ai) * factor
    first_i = (bi * a - b * ai) * factor
    second = 2.0 * (c * a + ci * ai) * factor - first * first + first_i * first_i
    second_i = 2.0 * (ci * a - c * ai) * factor - 2.0 * first * first_i
    return a, ai, square, scale, first, first_i, second, second_i


@compiled()
def unit_power(real: float, imaginary: float, power: int) -> tuple[float, float]:
    """(real + j imaginary)**power of a unit vector by repeated squaring."""
    result, result_i = 1.0, 0.0
    while power > 0:
        if power & 1:
            result, result_i = result * real - result_i * imaginary, result * imaginary + result_i * real
        real, imaginary = real * real - imaginary * imaginary, 2.0 * real * imaginary
        power >>= 1
    return result, result_i


@compiled()
def point(curve: Curve, x: float) -> tuple[float, ...]:
    """R at x: ln|R|, |R|, R/|R| (two numbers), (ln R)' (two), (ln R)'' (two)."""
    above, below, delay = curve
    t = math.exp(x)
    whole = 1.0 + t * t
    sine, cosine = 2.0 * t / whole, (1.0 - t) * (1.0 + t) / whole
    u, ui, square, scale, q, qi, s, si = _logarithm(above, -t * sine, sine)
    v, vi, other, stretch, p, pi, r, ri = _logarithm(below, -t * sine, sine)
    size = math.sqrt(square / other)
    unit = 1.0 / (size * other)
    u, ui = (u * v + ui * vi) * unit, (ui * v - u * vi) * unit
    if scale != stretch:
        size *= stretch / scale
    q, qi, s, si = q - p, qi - pi, s - r, si - ri
    if delay > 0:
        v, vi = unit_power(cosine, -sine, delay)
        u, ui = u * v - ui * vi, u * vi + ui * v
    w, wi = -sine * sine, sine * cosine  # dw/dx = j sin θ z without cancellation
    slope = w * q - wi * qi
    twist = w * qi + wi * q
    bend = cosine * slope - sine * twist + (w * w - wi * wi) * s - 2.0 * w * wi * si
    curl = cosine * twist + sine * slope + (w * w - wi * wi) * si + 2.0 * w * wi * s
    twist -= delay * sine
    curl -= delay * sine * cosine
    return math.log(size), size, u, ui, slope, twist, bend, curl


@compiled()
def angle_of(x: float) -> float:
    """θ of a place."""
    return 2.0 * math.atan(math.exp(x))


@compiled()
def cubic_root(y: float, dy: float, z: float, dz: float) -> float:
    """A root in [0, 1] of the cubic with values y, z of different sign and slopes dy, dz at the ends, roughly."""
    low, high, u = 0.0, 1.0, y / (y - z)
    c, d = 3.0 * (z - y) - 2.0 * dy - dz, dy + dz - 2.0 * (z - y)
    for _ in range(3):
        f = y + u * (dy + u * (c + u * d))
        if (f < 0.0) == (y < 0.0):
            low = u
        else:
            high = u
        slope = dy + u * (2.0 * c + 3.0 * u * d)
        new = u - f / slope
        u = new if low < new < high else 0.5 * (low + high)
    return u
