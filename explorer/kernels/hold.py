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
_NEGLECTED = 1e-19  # first Taylor term left out, relative to the corner entry norm**k/k!, which is the smallest


@compiled()
def _exponential_minus_one(x: complex) -> complex:
    """exp(x) - 1 without cancellation."""
    if x.imag == 0.0:  # most plants; the sine and cosine cost more than the rest
        return complex(math.expm1(x.real), 0.0)
    half = math.sin(0.5 * x.imag)
    grown = math.exp(x.real)
    return complex(math.expm1(x.real) * math.cos(x.imag) - 2.0 * half * half, grown * math.sin(x.imag))


@compiled()
def _exponential(x: complex) -> complex:
    if x.imag == 0.0:
        return complex(math.exp(x.real), 0.0)
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
    for term in range(_terms(norm, size - 1), 0, -1):
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
def _terms(norm: float, corner: int) -> int:
    """Taylor terms that give an entry of the size norm**corner/corner! to rounding, for a norm of at most 1/2."""
    term, rest = corner, 1.0
    while rest > _NEGLECTED:
        term += 1
        rest *= norm / term
    return term


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
    """Add output (x I - M)^-1 start * Π(x - roots) to `total` (descending powers), times (slope + x) if shift.

    M has the roots on its diagonal and the off-diagonals of `step`. Row k of the solution has the denominator
    Π_{i<=k}(x - roots_i); `running[j]` is row j brought to the denominator reached so far.
    """
    n = roots.shape[0]
    something = False
    for k in range(n):
        something |= start[k] != 0.0
    if not something:  # nothing is held after its change when the dead time is whole
        return
    for power in range(n + 1):
        product[power] = 1.0 if power == 0 else 0.0
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
            total[n - power] += slope * value
            total[n - power - 1] += value
        else:
            total[n - power] += value


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
    advance: NDArray[Any],
    numerator: NDArray[Any],
    denominator: NDArray[Any],
) -> None:
    """Pulse-transfer polynomials of every (scenario, period).

    Parameters
    ----------
    state : (S, n, n) complex lower triangular [1/s]; start (input) : (S, n); output : (S, n); direct : (S,).
    period : (S, P) [s], true sample periods; advance : (S, P) [s], by which the total dead time falls short of
        `whole` periods, see `whole_samples`.
    numerator, denominator : (S, P, 2, n+1) out, descending powers; index 0 in w = z - 1, index 1 in z.
        The transfer is numerator / (denominator * z**whole). Infinite or NaN where it overflows.

    With direct feedthrough and a dead time of exactly `whole` periods, the sample sees u[k - whole].
    """
    scenarios, n = start.shape
    augmented = np.zeros((n + 1, n + 1), np.complex128)
    work = np.empty((4, n + 1, n + 1), np.complex128)
    rows = np.empty((6, n + 1), np.complex128)
    for scenario in range(scenarios):
        for i in range(n):
            augmented[i + 1, 0] = start[scenario, i]
            for j in range(n):
                augmented[i + 1, j + 1] = state[scenario, i, j]
        for column in range(period.shape[1]):
            time = period[scenario, column]
            _held_input(augmented, time, advance[scenario, column], work, rows)
            for variable in range(2):
                _transfer(
                    augmented,
                    time,
                    output[scenario],
                    direct[scenario],
                    variable,
                    work,
                    rows,
                    numerator[scenario, column, variable],
                    denominator[scenario, column, variable],
                )


@compiled()
def whole_samples(period: NDArray[Any], dead_time: NDArray[Any], whole: NDArray[Any], advance: NDArray[Any]) -> None:
    """dead_time = whole * period - advance with 0 <= advance < period.

    period, dead_time : (S, P) [s], the dead time in all, from sample taken to plant output. whole : (S, P) int64 out;
    advance : (S, P) [s] out.
    """
    for scenario in range(period.shape[0]):
        for column in range(period.shape[1]):
            time, delay = period[scenario, column], dead_time[scenario, column]
            samples = min(delay / time, _MOST_SAMPLES)
            count = round(samples)
            if abs(samples - count) <= _WHOLE * max(1.0, samples):
                whole[scenario, column], advance[scenario, column] = int(count), 0.0
            else:
                count = math.ceil(samples)
                whole[scenario, column], advance[scenario, column] = int(count), min(count * time - delay, time)


@compiled()
def _held_input(
    augmented: NDArray[Any], time: float, advance: float, work: NDArray[Any], rows: NDArray[Any]
) -> None:
    """work[0] = exp(augmented * time); rows[0], rows[1] = what one held sample adds to the state before its change
    (early) and after it (late), from entry 1 on. The rest of work is overwritten.

    augmented : [[0, 0], [start, state]]; the first column of its exponential is the integral of exp(state t) start.
    """
    full, part, rest, spare = work[0], work[1], work[2], work[3]
    for piece in range(1, 3):  # one call in a loop, for what is called twice is compiled twice
        exponential_of_triangle(augmented, advance if piece == 1 else time - advance, work[piece], spare)
    _multiply_triangles(part, rest, 1.0, full)
    _put_exact(augmented, time, full)
    early, late = rows[0], rows[1]
    for i in range(1, augmented.shape[0]):
        late[i], early[i] = part[i, 0], 0.0
        for j in range(1, i + 1):
            early[i] += part[i, j] * rest[j, 0]


@compiled()
def _transfer(
    augmented: NDArray[Any],
    time: float,
    output: NDArray[Any],
    direct: float,
    variable: int,
    work: NDArray[Any],
    rows: NDArray[Any],
    numerator: NDArray[Any],
    denominator: NDArray[Any],
) -> None:
    """Numerator and denominator, (n+1,) descending, in w (variable 0) or z (variable 1), of what `_held_input` found;
    work[1] and rows[2:] are overwritten.
    """
    n = output.shape[0]
    roots, below, product, running = rows[2, :n], rows[3], rows[4], work[1]
    for power in range(n + 1):
        below[power] = 1.0 if power == 0 else 0.0
    for i in range(n):
        exponent = augmented[i + 1, i + 1] * time
        roots[i] = _exponential_minus_one(exponent) if variable == 0 else _exponential(exponent)
        _times_root(below, roots[i], n + 1)
    slope = 1.0 if variable == 0 else 0.0  # z = 1 + w
    for power in range(n + 1):
        numerator[power] = 0.0
    step = work[0, 1:, 1:]
    for shift in range(2):
        _add_response(step, roots, rows[shift, 1:], output, shift, slope, numerator, running, product)
    for power in range(n + 1):
        denominator[n - power] = below[power].real
        numerator[n - power] += direct * below[power].real
