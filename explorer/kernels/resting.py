"""Rest: where a closed loop ends after a step of the reference or of the load, and how it follows a ramp.

Exact linear algebra on the chains of kernels.chains: a section at w = 0 is an integrator, whose input is 0 at rest
and whose own state is then free; everything else follows from one number for the plant and one for the compensator.
"""

from __future__ import annotations

import functools
from typing import Any

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.apart import apart
from explorer.kernels.bernstein import DEGREE, ROOM, highest
from explorer.kernels.compiling import compiled
from explorer.kernels.contraction import loop_matrix, loop_rows
from explorer.kernels.entries import sources

_SAME = 1e-12  # a sensor whose gain at rest is this close to 1 has the gain 1


@compiled(cache=False)
def rest_of_chain(chain: NDArray[Any], rest: NDArray[Any]) -> bool:
    """States (n,) at rest for the input 1, or, where the chain integrates, for the input 0 and a last integrator at 1.

    chain : (3, n) d, l and s. Returns whether it integrates.
    """
    apart()
    n = rest.shape[0]
    last = -1
    for j in range(n):
        if chain[0, j] == 0.0 and chain[2, j] == 0.0 and (j == 0 or chain[2, j - 1] == 0.0):
            last = j
        rest[j] = 0.0
    driven, j = 1.0, 0
    if last >= 0:
        rest[last] = driven = 1.0
        j = last + 1
    while j < n:
        if chain[2, j] != 0.0:  # a pair: d x + s x' + l in = 0 and d x' + l' x = 0
            both = chain[0, j] * chain[0, j] - chain[2, j] * chain[1, j + 1]
            rest[j] = -chain[0, j] * chain[1, j] * driven / both
            rest[j + 1] = chain[1, j + 1] * chain[1, j] * driven / both
            j += 1
        else:
            rest[j] = -chain[1, j] * driven / chain[0, j]
        driven = rest[j]
        j += 1
    return last >= 0


@compiled(cache=False)
def at_rest(row: NDArray[Any], states: NDArray[Any], held: float) -> float:
    """An output row over (states, held input before and after) at rest."""
    total = (row[states.shape[0]] + row[states.shape[0] + 1]) * held
    for j in range(states.shape[0]):
        total += row[j] * states[j]
    return float(total)


@compiled(cache=False)
def loop_at_rest(
    measured: float, seen: float, integrates: bool, given: float, sums: bool, load: bool
) -> tuple[float, float, float, float, float]:
    """(plant, compensator, u, y, error of y) at rest; the first two multiply what `rest_of_chain` gave.

    measured, seen : outputs of the plant's chain at rest; given : output of the compensator's; integrates, sums :
    whether plant and compensator integrate; load : a unit step at the plant's input, else of the reference.
    """
    apart()
    if load:
        if sums:
            plant, other, u = 0.0, -1.0 / given, -1.0
        elif integrates:
            plant, other, u = 1.0 / (given * measured), -1.0 / given, -1.0
        else:
            plant = 1.0 / (1.0 + given * measured)
            other = -measured * plant
            u = given * other
        return plant, other, u, seen * plant, -seen * plant
    if integrates:
        plant, other, u, left = 1.0 / measured, 0.0, 0.0, 0.0
    elif sums:
        plant, left = 1.0 / measured, 0.0
        other, u = plant / given, plant
    else:
        left = 1.0 / (1.0 + given * measured)
        other = left
        plant = u = given * left
    gap = measured - seen if abs(measured - seen) > _SAME * abs(measured) else 0.0
    return plant, other, u, seen * plant, left + gap * plant


@functools.cache
def ramp_follower() -> Any:
    """The compiled `_ramp_errors`, see there; an entry, see kernels.entries."""
    checksum = sources()

    @compiled(cache=True)
    def run(*arguments: Any) -> None:
        """See `_ramp_errors`."""
        if checksum:  # always true
            _ramp_errors(*arguments)

    return run


@compiled(cache=False)
def _ramp_errors(
    numbers: NDArray[Any], outputs: NDArray[Any], edges: NDArray[Any], table: NDArray[Any], pieces: NDArray[Any],
    period: NDArray[Any], pairs: NDArray[Any], others: int, delay: int, lanes: NDArray[Any], begin: NDArray[Any],
    rest: NDArray[Any], error: NDArray[Any], answer: NDArray[Any],
) -> None:  # fmt: skip
    """Largest |t - y| over a period after a long time behind the reference r = t, (B, LANES); +inf when it grows.

    begin : deviations of a reference step, relative to the final value `rest`; error : of y after it. At rest z[k] =
    k T z_step + a with (A - I) a = T z_step. See kernels.advancing for the other arrays.
    """
    n = outputs.shape[2] - 2
    m = n + others + delay
    rows, matrix, state, chain = np.zeros((4, m)), np.zeros((m, m)), np.zeros(m), np.zeros((3, n))
    values, curve, work = np.zeros(n + 2), np.zeros((2, DEGREE + 1)), np.zeros((ROOM, DEGREE + 3))
    for block in range(pairs.shape[0]):
        pair = pairs[block]
        for i in range(3):
            for j in range(n):
                chain[i, j] = numbers[pair, i * n + j]
        for lane in range(lanes.shape[2]):
            answer[block, lane] = np.inf
            if error[block, lane] != 0.0 or rest[block, lane] == 0.0:
                continue
            loop_rows(outputs[pair], lanes[block], lane, n, others, delay, rows)
            loop_matrix(chain, lanes[block], lane, n, others, delay, rows, matrix)
            for j in range(m):
                state[j] = -begin[block, min(j, n + others), lane] * rest[block, lane] * period[pair]
            solve_in_place(matrix, state)
            for j in range(n):
                values[j] = state[j]
            values[n], values[n + 1] = 0.0, 0.0
            for j in range(m):
                values[n] += rows[2, j] * state[j]
                values[n + 1] += rows[3, j] * state[j]
            answer[block, lane] = _largest_lag(
                edges[pair], table[pair], pieces[pair], period[pair], values, curve, work
            )


@compiled(cache=False)
def _largest_lag(
    edges: NDArray[Any], table: NDArray[Any], count: int, period: float, values: NDArray[Any], curve: NDArray[Any],
    work: NDArray[Any],
) -> float:  # fmt: skip
    """Largest |time into the period - y|."""
    most = 0.0
    for piece in range(count):
        for sign in (1.0, -1.0):
            for i in range(DEGREE + 1):
                total = (edges[piece] + (edges[piece + 1] - edges[piece]) * i / DEGREE) * period
                for j in range(values.shape[0]):
                    total -= table[piece, i, j] * values[j]
                curve[0, i] = sign * total
            most = highest(curve[0], most, work, curve[1])[0]
    return most


@compiled(cache=False)
def solve_in_place(matrix: NDArray[Any], right: NDArray[Any]) -> None:
    """right = matrix^-1 right by elimination with row pivots; infinite or nan where singular."""
    apart()
    n = right.shape[0]
    for k in range(n):
        pivot = k
        for i in range(k + 1, n):
            if abs(matrix[i, k]) > abs(matrix[pivot, k]):
                pivot = i
        for j in range(k, n):
            matrix[k, j], matrix[pivot, j] = matrix[pivot, j], matrix[k, j]
        right[k], right[pivot] = right[pivot], right[k]
        for i in range(k + 1, n):
            factor = matrix[i, k] / matrix[k, k]
            if factor != 0.0:
                for j in range(k + 1, n):
                    matrix[i, j] -= factor * matrix[k, j]
                right[i] -= factor * right[k]
    for k in range(n - 1, -1, -1):
        for j in range(k + 1, n):
            right[k] -= matrix[k, j] * right[j]
        right[k] /= matrix[k, k]
