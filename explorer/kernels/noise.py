"""Noise gain: loop polynomials in w in, standard deviation of u per that of white measurement noise for measures out.

H = E/(D z^d + N) has noise gain sqrt((1/2π)∫|H|² dθ). With s = w/(2 + w) = j tan(θ/2) on the circle, dθ is
2 dt/(1 + t²): the same number is the integral of |B/A|² along the imaginary axis for B/A = sqrt(2) H/(1 + s), and
the poles, however fast the sampling, are no closer to each other in relation to their size than those of the plant.

Source of the recursion: Åström, Introduction to Stochastic Control Theory (1970), ch. 5, evaluation of loss functions
for continuous-time systems; Åström, Jury and Agniel (1970), IEEE Trans. Autom. Control 15, 458-461 (from memory).

Rounding of the coefficients in s grows like 2^(degree/2), so beyond _LONGEST the integral over x = ln t is taken, by
Gauss's rule with eight points on intervals no longer than a part of their distance to the roots of D, halved until
two halves agree with the whole to 1e-11. Gauss's rule converges geometrically there: the halves, which
are what is kept, are better than that by about a factor 2^16, far below the 1e-9 promised.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.cells import room
from explorer.kernels.compiling import compiled
from explorer.kernels.curve import unit_power
from explorer.kernels.places import curves_of

Array = NDArray[Any]
Real = NDArray[np.float64]
Parts = tuple[Array, Array, Array, Array, Array]  # D, N and its slope by the gain, E and its slope

_LONGEST = 40  # degree of the characteristic polynomial for the recursion: about 1e-12 relative error is left there
_AGREE = 1e-11  # of the whole integral
_DEPTH = 50
_ROWS = 9  # of a tabulated point: weight, both parts of E and of D z^d + N, each with its slope by the gain
_PLACES, _WEIGHTS = np.polynomial.legendre.leggauss(8)


def noise_gains(
    below: Real,
    fixed: Real,
    sloped: Real,
    effort_fixed: Real,
    effort_sloped: Real,
    delay: int,
    gain: Real,
    wanted: NDArray[np.bool_],
) -> Real:
    """(M, G), NaN where not wanted or not resolved; arguments as kernels.frequency.frequency_measures has them."""
    degree = below.shape[-1] - 1 + delay
    result = np.full(wanted.shape, np.nan)
    if degree > _LONGEST:
        curves = curves_of(fixed[:, 0] + sloped[:, 0], below[:, 0], delay, gain)  # where the spectrum may turn
        parts = [np.ascontiguousarray(part) for part in (below, fixed, sloped, effort_fixed, effort_sloped)]
        _integrals(*parts, delay, curves.features, curves.span, gain, wanted, result)
        return result
    base = _with_factor(_in_s(below), +1.0, delay)
    short = degree - (effort_fixed.shape[-1] - 1)
    if short == 0:
        base = _with_factor(base, +1.0, 1)
    numerator = [
        _with_factor(_in_s(part), -1.0, degree + 1 - part.shape[-1]) for part in (fixed, sloped)
    ]  # of L, to the degree of the characteristic polynomial
    if short == 0:
        numerator = [_with_factor(part, +1.0, 1) for part in numerator]
    above = [_with_factor(_in_s(part), +1.0, max(short - 1, 0)) for part in (effort_fixed, effort_sloped)]
    constant = np.ascontiguousarray(base + numerator[0])
    arrays = [np.ascontiguousarray(part) for part in (constant, numerator[1], *above)]
    _recursion(*arrays, gain, wanted, result)
    return result


def _in_s(polynomial: Real) -> Real:
    """(1 - s)^n p(w) as a polynomial in s, w = 2s/(1 - s); descending powers, batched."""
    degree = polynomial.shape[-1] - 1
    result = np.zeros(polynomial.shape)
    for power in range(degree + 1):
        for k in range(degree - power + 1):
            factor = 2.0**power * math.comb(degree - power, k) * (-1.0) ** k
            result[..., degree - power - k] += factor * polynomial[..., degree - power]
    return result


def _with_factor(polynomial: Real, sign: float, times: int) -> Real:
    """polynomial * (1 + sign s)**times."""
    result = np.array(polynomial)
    for _ in range(times):
        longer = np.zeros((*result.shape[:-1], result.shape[-1] + 1))
        longer[..., 1:] = result
        longer[..., :-1] += sign * result
        result = longer
    return result


@compiled()
def _recursion(
    constant: Array, slope: Array, above: Array, above_slope: Array, gain: Array, wanted: Array, result: Array
) -> None:
    """Square roots of the loss integrals. A = constant + K slope of degree n, B = above + K above_slope of n - 1."""
    n = constant.shape[2] - 1
    a, b = np.empty(n + 1), np.empty(n)
    for i in range(wanted.shape[0]):
        for g in range(wanted.shape[1]):
            if not wanted[i, g]:
                continue
            ka, ks = g % constant.shape[1], g % slope.shape[1]
            for k in range(n + 1):
                a[k] = constant[i, ka, k] + gain[g] * slope[i, ks, k]
            kb, kt = g % above.shape[1], g % above_slope.shape[1]
            for k in range(n):
                b[k] = above[i, kb, k] + gain[g] * above_slope[i, kt, k]
            result[i, g] = math.sqrt(2.0 * _loss(a, b))


@compiled()
def _loss(a: Array, b: Array) -> float:
    """(1/2πj)∫ B(s)B(-s)/(A(s)A(-s)) ds for A with all roots left; NaN otherwise. a, b are overwritten."""
    n, total = b.shape[0], 0.0
    for k in range(n):
        if not a[k] * a[k + 1] > 0.0:
            return math.nan
        alpha, beta = a[k] / a[k + 1], b[k] / a[k + 1]
        total += 0.5 * beta * beta / alpha
        for j in range(k + 2, n, 2):  # A less alpha s times its odd part, B less beta times that part
            b[j] -= beta * a[j + 1]
            a[j] -= alpha * a[j + 1]
    return total


@compiled()
def _integrals(
    below: Array,
    fixed: Array,
    sloped: Array,
    effort_fixed: Array,
    effort_sloped: Array,
    delay: int,
    features: Array,
    span: Array,
    gain: Array,
    wanted: Array,
    result: Array,
) -> None:
    """Square roots of the integrals; arguments as noise_gains has them, one set of features per pair.

    Polynomials at the points of all first intervals and their halves are tabulated, for all gains where they are
    common to all.
    """
    common = below.shape[1] == fixed.shape[1] == sloped.shape[1] == effort_fixed.shape[1] == effort_sloped.shape[1] == 1
    for i in range(wanted.shape[0]):
        edges = _edges(features[i], span[i, 0], span[i, 1], delay)
        table, fresh = np.empty((3 * (edges.shape[0] - 1), _PLACES.shape[0], _ROWS)), True
        for g in range(wanted.shape[1]):
            if not wanted[i, g]:
                continue
            parts = (
                below[i, g % below.shape[1]], fixed[i, g % fixed.shape[1]], sloped[i, g % sloped.shape[1]],
                effort_fixed[i, g % effort_fixed.shape[1]], effort_sloped[i, g % effort_sloped.shape[1]],
            )  # fmt: skip
            if fresh:
                _tabulate(parts, delay, edges, table)
                fresh = not common
            result[i, g] = math.sqrt(_integral(parts, delay, gain[g], edges, table) / math.pi)


@compiled()
def _tabulate(parts: Parts, delay: int, edges: Array, table: Array) -> None:
    """Every first interval, then its halves: (3 intervals, points, _ROWS)."""
    for k in range(table.shape[0]):
        a, b = edges[k // 3], edges[k // 3 + 1]
        middle = 0.5 * (a + b)
        low, high = (a, b) if k % 3 == 0 else (a, middle) if k % 3 == 1 else (middle, b)
        for point in range(table.shape[1]):
            _fill(parts, delay, 0.5 * (low + high + (high - low) * _PLACES[point]), table[k, point])
            table[k, point, 0] *= 0.5 * (high - low) * _WEIGHTS[point]


@compiled()
def _sum(rows: Array, gain: float) -> float:
    """Gauss's sum over the points of an interval."""
    total = 0.0
    for point in range(rows.shape[0]):
        total += _density(rows[point], gain)
    return total


@compiled()
def _density(row: Array, gain: float) -> float:
    """Weight times |E/(D z^d + N)|²."""
    e, ei = row[1] + gain * row[3], row[2] + gain * row[4]
    n, ni = row[5] + gain * row[7], row[6] + gain * row[8]
    scale = 1.0 / max(abs(n), abs(ni))
    e, ei, n, ni = e * scale, ei * scale, n * scale, ni * scale
    result: float = row[0] * (e * e + ei * ei) / (n * n + ni * ni)
    return result


@compiled()
def _edges(features: Array, start: float, end: float, delay: int) -> Array:
    """Ends of the first intervals: not long beside their distance to a root of D, little turn of z**delay."""
    edges, count = np.empty(min(1000 + 200 * features.shape[0] + 8 * delay, 20_000)), 1
    edges[0] = start
    while edges[count - 1] < end and count < edges.shape[0]:
        x = edges[count - 1]
        nearest = max(room(features, x)[0], 1e-8)
        turn = delay / math.cosh(x)
        edges[count] = min(x + min(0.6 * nearest, 1.0, 1.0 / (turn + 1e-9)), end)
        count += 1
    edges[count - 1] = end
    return edges[:count]


@compiled()
def _integral(parts: Parts, delay: int, gain: float, edges: Array, table: Array) -> float:
    """∫|E/(D z^d + N)|² dθ over the half circle."""
    spare, total, bound = np.empty((1, 1, _ROWS)), 0.0, 0.0
    for k in (0, edges.shape[0] - 1):  # beyond the ends the spectrum is flat, and dθ/dx there is the angle left
        _fill(parts, delay, edges[k], spare[0, 0])
        total += _density(spare[0, 0], gain)
    for k in range(0, table.shape[0], 3):
        bound += _sum(table[k], gain)
    bound = _AGREE * (bound + total)
    halves, stack, ends = np.empty((3, _PLACES.shape[0], _ROWS)), np.empty((_DEPTH + 2, 3)), np.empty(2)
    for k in range(edges.shape[0] - 1):
        whole, first, second = _sum(table[3 * k], gain), _sum(table[3 * k + 1], gain), _sum(table[3 * k + 2], gain)
        if abs(first + second - whole) <= bound:
            total += first + second
            continue
        stack[0, 0], stack[0, 1], stack[0, 2], depth = edges[k], edges[k + 1], whole, 1
        while depth > 0:
            ends[0], ends[1], whole = stack[depth - 1, 0], stack[depth - 1, 1], stack[depth - 1, 2]
            middle = 0.5 * (ends[0] + ends[1])
            _tabulate(parts, delay, ends, halves)
            first, second = _sum(halves[1], gain), _sum(halves[2], gain)
            depth -= 1
            if not abs(first + second - whole) > bound or depth + 2 > _DEPTH:
                total += first + second
            else:
                stack[depth, 0], stack[depth, 1], stack[depth, 2] = ends[0], middle, first
                stack[depth + 1, 0], stack[depth + 1, 1], stack[depth + 1, 2] = middle, ends[1], second
                depth += 2
    return total


@compiled()
def _fill(parts: Parts, delay: int, x: float, row: Array) -> None:
    """dθ/dx and both parts of E and of D z^d + N at a place x."""
    below, fixed, sloped, effort_fixed, effort_sloped = parts
    t = math.exp(x)
    whole = 1.0 + t * t
    sine, cosine = 2.0 * t / whole, (1.0 - t) * (1.0 + t) / whole
    w, wi = -t * sine, sine
    row[0] = sine
    row[1], row[2] = _value(effort_fixed, w, wi)
    row[3], row[4] = _value(effort_sloped, w, wi)
    d, di = _value(below, w, wi)
    n, ni = _value(fixed, w, wi)
    v, vi = unit_power(cosine, sine, delay)
    row[5], row[6] = n + d * v - di * vi, ni + d * vi + di * v
    row[7], row[8] = _value(sloped, w, wi)


@compiled()
def _value(polynomial: Array, real: float, imaginary: float) -> tuple[float, float]:
    """Horner's rule."""
    a = ai = 0.0
    for k in range(polynomial.shape[0]):
        a, ai = a * real - ai * imaginary + polynomial[k], a * imaginary + ai * real
    return a, ai
