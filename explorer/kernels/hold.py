"""Exact zero-order-hold sampling: triangular state matrices in, pulse-transfer polynomials for loop out.

A lower triangular state matrix keeps the eigenvalues on its diagonal, so that every polynomial is built from
known roots w_i = exp(λ_i T) - 1 and from divided differences of the exponential. For real stable poles no
subtraction occurs at all; nothing is expanded in z and shifted afterwards.

Sources: McCurdy, Ng and Parlett (1984), Math. Comp. 43, 501-528 (divided differences of the exponential by
scaling and squaring with exact diagonals); Åström and Wittenmark, Computer-Controlled Systems, 3rd ed., §2.3
(sampling with dead time).
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.compiling import compiled

_WHOLE = 1e-12  # dead times this close to a whole number of samples are that number
_MOST_SAMPLES = 1e9  # dead times beyond this are this: no loop is solved with anything like it
_TERMS = 20  # Taylor terms for a norm of at most 1/2: the remainder is below 0.5**20/20! = 4e-25


@compiled()
def _exponential_minus_one(x: complex) -> complex:
    """exp(x) - 1 without cancellation."""
    half = math.sin(0.5 * x.imag)
    grown = math.exp(x.real)
    return complex(math.expm1(x.real) * math.cos(x.imag) - 2.0 * half * half, grown * math.sin(x.imag))


@compiled()
def _exponential(x: complex) -> complex:
    grown = math.exp(x.real)
    return complex(grown * math.cos(x.imag), grown * math.sin(x.imag))


@compiled()
def _divided_difference(x: complex, y: complex) -> complex:
    """exp[x, y] = (exp x - exp y)/(x - y), from the side that cannot overflow."""
    if x == y:
        result: complex = _exponential(x)
    elif x.real > y.real:
        result = _exponential(x) * _exponential_minus_one(y - x) / (y - x)
    else:
        result = _exponential(y) * _exponential_minus_one(x - y) / (x - y)
    return result


@compiled()
def exponential_of_triangle(
    matrix: NDArray[Any], time: float, result: NDArray[Any], spare: NDArray[Any]
) -> None:
    """result = exp(matrix * time) for a lower triangular complex matrix (n, n); spare is overwritten.

    Scaling and squaring with the diagonal and the first subdiagonal put in exactly after every squaring.
    """
    size = matrix.shape[0]
    norm = 0.0
    for i in range(size):
        row = 0.0
        for j in range(i + 1):
            row += abs(matrix[i, j])
        norm = max(norm, row * abs(time))
    squarings = 0
    while norm > 0.5 and squarings < 1100:
        norm *= 0.5
        squarings += 1
    scaled = time / 2.0**squarings
    for i in range(size):  # Taylor by Horner: result = I + X(I + X/2(I + X/3(...)))
        for j in range(size):
            result[i, j] = 1.0 if i == j else 0.0
    for term in range(_TERMS, 0, -1):
        _multiply_triangles(matrix, result, scaled / term, spare)
        for i in range(size):
            for j in range(i + 1):
                result[i, j] = spare[i, j] + (1.0 if i == j else 0.0)
    _put_exact(matrix, scaled, result)
    for squaring in range(squarings):
        _multiply_triangles(result, result, 1.0, spare)
        for i in range(size):
            for j in range(i + 1):
                result[i, j] = spare[i, j]
        _put_exact(matrix, time / 2.0 ** (squarings - 1 - squaring), result)


@compiled()
def _multiply_triangles(
    left: NDArray[Any], right: NDArray[Any], factor: float, product: NDArray[Any]
) -> None:
    for i in range(left.shape[0]):
        for j in range(i + 1):
            total = 0.0 + 0.0j
            for k in range(j, i + 1):
                total += left[i, k] * right[k, j]
            product[i, j] = total * factor


@compiled()
def _put_exact(matrix: NDArray[Any], time: float, result: NDArray[Any]) -> None:
    for i in range(matrix.shape[0]):
        result[i, i] = _exponential(matrix[i, i] * time)
        if i > 0:
            difference = _divided_difference(matrix[i, i] * time, matrix[i - 1, i - 1] * time)
            result[i, i - 1] = matrix[i, i - 1] * time * difference


@compiled()
def _add_response(
    step: NDArray[Any],
    roots: NDArray[Any],
    start: NDArray[Any],
    output: NDArray[Any],
    shift: int,
    slope: float,
    total: NDArray[Any],
    running: NDArray[Any],
    product: NDArray[Any],
) -> None:
    """Add output (x I - M)^-1 start * Π(x - roots) to `total` (ascending powers), times (slope + x) if shift.

    M has the roots on its diagonal and the off-diagonals of `step`. Row k of the solution has the denominator
    Π_{i<=k}(x - roots_i); `running[j]` is row j brought to the denominator reached so far.
    """
    n = roots.shape[0]
    product[:] = 0.0
    product[0] = 1.0
    for k in range(n):
        for power in range(n):
            value = start[k] * product[power]
            for j in range(k):
                value += step[k, j] * running[j, power]
            running[k, power] = value
        for j in range(k):
            _times_root(running[j], roots[k], n)
        _times_root(product, roots[k], n + 1)
    for power in range(n):
        value = 0.0
        for k in range(n):
            value += (output[k] * running[k, power]).real
        if shift:
            total[power] += slope * value
            total[power + 1] += value
        else:
            total[power] += value


@compiled()
def _times_root(polynomial: NDArray[Any], root: complex, length: int) -> None:
    """polynomial *= (x - root), ascending powers, the top coefficient known to be free."""
    for power in range(length - 1, 0, -1):
        polynomial[power] = polynomial[power - 1] - root * polynomial[power]
    polynomial[0] = -root * polynomial[0]


@compiled()
def sample_with_hold(
    state: NDArray[Any],
    start: NDArray[Any],
    output: NDArray[Any],
    direct: NDArray[Any],
    period: NDArray[Any],
    dead_time: NDArray[Any],
    numerator: NDArray[Any],
    denominator: NDArray[Any],
    whole: NDArray[Any],
) -> None:
    """Pulse-transfer polynomials of every (scenario, period).

    Parameters
    ----------
    state : (S, n, n) complex lower triangular [1/s]; start (input) : (S, n); output : (S, n); direct : (S,).
    period : (S, P) [s], true sample periods; dead_time : (S, P) [s], total from sample taken to plant output.
    numerator, denominator : (S, P, 2, n+1) out, descending powers; index 0 in w = z - 1, index 1 in z.
        The transfer is numerator / (denominator * z**whole). Infinite or NaN where it overflows.
    whole : (S, P) int64 out, whole samples of delay.

    With direct feedthrough and a dead time of exactly `whole` periods, the sample sees u[k - whole].
    """
    scenarios, n = start.shape
    augmented = np.zeros((n + 1, n + 1), np.complex128)
    full = np.empty_like(augmented)
    early, late = np.empty(n, np.complex128), np.empty(n, np.complex128)
    for scenario in range(scenarios):
        augmented[1:, 0] = start[scenario]
        augmented[1:, 1:] = state[scenario]
        for column in range(period.shape[1]):
            time = period[scenario, column]
            count, advance = _whole_samples(dead_time[scenario, column], time)
            whole[scenario, column] = count
            _held_input(augmented, time, advance, full, early, late)
            for variable in range(2):
                _transfer(
                    state[scenario],
                    full,
                    time,
                    early,
                    late,
                    output[scenario],
                    direct[scenario],
                    variable,
                    numerator[scenario, column, variable],
                    denominator[scenario, column, variable],
                )


@compiled()
def _whole_samples(delay: float, time: float) -> tuple[int, float]:
    """delay = count * time - advance with 0 <= advance < time."""
    samples = min(delay / time, _MOST_SAMPLES)
    count = round(samples)
    if abs(samples - count) <= _WHOLE * max(1.0, samples):
        return int(count), 0.0
    count = math.ceil(samples)
    return int(count), min(count * time - delay, time)


@compiled()
def _held_input(
    augmented: NDArray[Any],
    time: float,
    advance: float,
    full: NDArray[Any],
    early: NDArray[Any],
    late: NDArray[Any],
) -> None:
    """exp(augmented * time), and what one held sample adds to the state before (early) and after its change (late).

    augmented : [[0, 0], [start, state]]; the first column of its exponential is the integral of exp(state t) start.
    """
    n = early.shape[0]
    spare = np.empty_like(full)
    exponential_of_triangle(augmented, time, full, spare)
    if advance == 0.0:
        early[:] = full[1:, 0]
        late[:] = 0.0
        return
    part, rest = np.empty_like(full), np.empty_like(full)
    exponential_of_triangle(augmented, advance, part, spare)
    exponential_of_triangle(augmented, time - advance, rest, spare)
    late[:] = part[1:, 0]
    for i in range(n):
        early[i] = 0.0
        for j in range(i + 1):
            early[i] += part[i + 1, j + 1] * rest[j + 1, 0]


@compiled()
def _transfer(
    state: NDArray[Any],
    full: NDArray[Any],
    time: float,
    early: NDArray[Any],
    late: NDArray[Any],
    output: NDArray[Any],
    direct: float,
    variable: int,
    numerator: NDArray[Any],
    denominator: NDArray[Any],
) -> None:
    """Numerator and denominator, (n+1,) descending, in w (variable 0) or z (variable 1)."""
    n = early.shape[0]
    roots, below = np.empty(n, np.complex128), np.zeros(n + 1, np.complex128)
    running, product = np.empty((n, n + 1), np.complex128), np.empty(n + 1, np.complex128)
    above = np.zeros(n + 2)
    below[0] = 1.0
    for i in range(n):
        exponent = state[i, i] * time
        roots[i] = _exponential_minus_one(exponent) if variable == 0 else _exponential(exponent)
        _times_root(below, roots[i], n + 1)
    slope = 1.0 if variable == 0 else 0.0  # z = 1 + w
    step = full[1:, 1:]
    _add_response(step, roots, early, output, 0, slope, above, running, product)
    _add_response(step, roots, late, output, 1, slope, above, running, product)
    for power in range(n + 1):
        numerator[n - power] = above[power] + direct * below[power].real
        denominator[n - power] = below[power].real
