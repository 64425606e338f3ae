"""Contraction: the matrices of LANES closed loops in, weights that bound everything later out, for kernels.response.

z[k+1] = A z[k] in deviations from rest. With M = 2^i and rows g so that |row A^M| = g for an output (entry by entry)
and g |A^M| <= g, induction gives |output[k]| <= max over K - M < j <= K of g |z[j]| for every k > K: a bound on the
whole future from the last M samples. Powers come by squaring, as A^M - I, so that fast sampling loses nothing.
"""

from __future__ import annotations

from typing import Any

from numpy.typing import NDArray

from explorer.kernels.apart import apart
from explorer.kernels.compiling import compiled
from explorer.kernels.lanes import LANES, emitted

_WIDE = 4  # terms at once; sizes are padded to a multiple
_SHRUNK = 0.98  # g |A^M| <= this times g


def _dot(operations: Any, count: int, *rows: Any) -> list[Any]:
    total = rows[2 * count]
    for k in range(count):
        total = total + rows[k] * rows[count + k]
    return [total]


_add_products = emitted(_dot, lambda count: (count, count, 1))


@compiled(cache=False)
def padded(size: int) -> int:
    """The size that matrices are stored in."""
    return (size + _WIDE - 1) // _WIDE * _WIDE


@compiled(cache=False)
def square(power: NDArray[Any], turned: NDArray[Any], result: NDArray[Any], size: int) -> None:
    """power = (I + power)² - I; all (size², LANES), size a multiple of _WIDE; turned and result are overwritten."""
    apart()
    for i in range(size):
        for j in range(size):
            for lane in range(LANES):
                turned[j * size + i, lane] = power[i * size + j, lane]
    for i in range(size):
        for j in range(size):
            at = i * size + j
            for lane in range(LANES):
                result[at, lane] = 2.0 * power[at, lane]
            for k in range(0, size, _WIDE):
                _add_products(_WIDE, (power, i * size + k, turned, j * size + k, result, at, result, at, 1))
    for at in range(size * size):
        for lane in range(LANES):
            power[at, lane] = result[at, lane]


@compiled(cache=False)
def _add(target: NDArray[Any], row: int, factor: float, source: NDArray[Any], own: int) -> None:
    """target[row] += factor * source[own]; a loop, since array assignments cost numba seconds to compile."""
    apart()
    for j in range(source.shape[1]):
        target[row, j] += factor * source[own, j]


@compiled(cache=False)
def loop_rows(
    outputs: NDArray[Any], lanes: NDArray[Any], lane: int, states: int, others: int, delay: int,
    rows: NDArray[Any],
) -> None:  # fmt: skip
    """rows (4, m) over z = (plant, compensator, u[k-1] … u[k-delay]): u, the error, input before and after the change.

    lanes : see kernels.stepping.lane_rows.
    """
    apart()
    for i in range(rows.shape[0]):
        for j in range(rows.shape[1]):
            rows[i, j] = 0.0
    own, last = 4 * others, states + others + delay - 1
    direct, scale = lanes[own, lane], lanes[own + 1, lane]
    for j in range(states):
        rows[0, j] = -direct * outputs[0, j] * scale
        rows[1, j] = -outputs[0, j]
    for j in range(others):
        rows[0, states + j] = lanes[3 * others + j, lane] * scale
    if delay > 0:
        rows[0, last] = -direct * outputs[0, states] * scale
        rows[1, last] = -outputs[0, states]
        rows[2, last] = 1.0
        if delay > 1:
            rows[3, last - 1] = 1.0
        else:
            _add(rows, 3, 1.0, rows, 0)
    else:
        _add(rows, 2, 1.0, rows, 0)
        _add(rows, 1, -outputs[0, states], rows, 0)


@compiled(cache=False)
def loop_matrix(
    chain: NDArray[Any], lanes: NDArray[Any], lane: int, states: int, others: int, delay: int, rows: NDArray[Any],
    matrix: NDArray[Any],
) -> None:  # fmt: skip
    """matrix (m, m) = A - I."""
    apart()
    for i in range(matrix.shape[0]):
        for j in range(matrix.shape[1]):
            matrix[i, j] = 0.0
    for j in range(states):
        matrix[j, j] += chain[0, j]
        if j > 0:
            matrix[j, j - 1] += chain[1, j]
        else:
            _add(matrix, 0, chain[1, 0], rows, 2)
        if j + 1 < states:
            matrix[j, j + 1] += chain[2, j]
    for j in range(others):
        at = states + j
        matrix[at, at] += lanes[j, lane]
        if j > 0:
            matrix[at, at - 1] += lanes[others + j, lane]
        else:
            _add(matrix, at, lanes[others, lane], rows, 1)
        if j + 1 < others:
            matrix[at, at + 1] += lanes[2 * others + j, lane]
    for j in range(delay):
        at = states + others + j
        matrix[at, at] -= 1.0
        if j == 0:
            _add(matrix, at, 1.0, rows, 0)
        else:
            matrix[at, at - 1] += 1.0


@compiled(cache=False)
def weigh(
    power: NDArray[Any], size: int, lane: int, states: int, span: NDArray[Any], rows: NDArray[Any],
    weights: NDArray[Any],
) -> bool:  # fmt: skip
    """weights (2, m) = bounds of y and of u after I + power, and whether they shrink under it.

    span : (n+2,) the most y has of every state and held input anywhere in a period; rows : from `loop_rows`.
    """
    apart()
    m = rows.shape[1]
    for j in range(m):
        total, u, before, after = 0.0, 0.0, 0.0, 0.0
        for i in range(m):
            entry = power[i * size + j, lane] + (1.0 if i == j else 0.0)
            if i < states:
                total += span[i] * abs(entry)
            u += rows[0, i] * entry
            before += rows[2, i] * entry
            after += rows[3, i] * entry
        weights[0, j] = total + span[states] * abs(before) + span[states + 1] * abs(after)
        weights[1, j] = abs(u)
    for j in range(m):
        total, pull = 0.0, 0.0
        for i in range(m):
            entry = abs(power[i * size + j, lane] + (1.0 if i == j else 0.0))
            total += weights[0, i] * entry
            pull += weights[1, i] * entry
        if not (total <= _SHRUNK * weights[0, j] and pull <= _SHRUNK * weights[1, j]):
            return False
    return True
