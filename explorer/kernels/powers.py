"""Powers: jumps over 2^i samples of one closed loop, and how far its output can stray meanwhile, for kernels.patient.

Over h = 2^i periods from the state z the output keeps within D_i |z| (entry by entry) of the straight line between its
values at both ends, with D_2h = |c (A^h - I)²|/2 + max(D_h, D_h |A^h|): second order in h, so that smooth stretches are
passed over quickly. S_J with S_J |A^(2^J)| <= S_J bounds all of the future.
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.apart import apart
from explorer.kernels.bernstein import DEGREE, ROOM
from explorer.kernels.chains import ENDING, SAMPLED, SPREAD
from explorer.kernels.compiling import compiled

LEVELS = 46  # powers of two: 2**45 samples
ROOTS = 256  # stretches of the longest power
_SHRUNK = 0.98


class Powers(NamedTuple):
    """jump : (levels, m, m) A^(2^i) - I; stray : (levels, 2, m) D_i of y and of u; future : (2, m) S of y and of u;
    seen : (2, m) rows of y at the sample and of u; state : (levels + 2, m) of stretches that wait; root : states after
    the longest jumps; rows : from contraction.loop_rows; searches, values, spare : work space.
    """

    jump: NDArray[Any]
    stray: NDArray[Any]
    future: NDArray[Any]
    seen: NDArray[Any]
    state: NDArray[Any]
    root: NDArray[Any]
    rows: NDArray[Any]
    searches: NDArray[Any]
    values: NDArray[Any]
    spare: NDArray[Any]


@compiled(cache=False)
def powers_for(n: int, m: int) -> Powers:
    """Room for loops of m states, n of them the plant's."""
    return Powers(
        np.zeros((LEVELS, m, m)), np.zeros((LEVELS, 2, m)), np.zeros((2, m)), np.zeros((2, m)),
        np.zeros((LEVELS + 2, m)), np.zeros((ROOTS + 1, m)), np.zeros((4, m)), np.zeros((ROOM, DEGREE + 3)),
        np.zeros((3, max(DEGREE + 1, n + 2))), np.zeros((4, m)),
    )  # fmt: skip


@compiled(cache=False)
def first_level(outputs: NDArray[Any], powers: Powers) -> None:
    """One period, whose matrix and rows are there: rows of y at the sample and of u, and how far y may stray."""
    apart()
    seen, stray, future, jump, rows = powers.seen, powers.stray, powers.future, powers.jump[0], powers.rows
    m, n = seen.shape[1], outputs.shape[1] - 2
    for j in range(m):
        for which in range(2):
            seen[which, j] = outputs[SAMPLED, j] if j < n and which == 0 else 0.0
        seen[0, j] += outputs[SAMPLED, n] * rows[2, j] + outputs[SAMPLED, n + 1] * rows[3, j]
        seen[1, j] = rows[0, j]
    for j in range(m):
        spread = outputs[SPREAD, j] if j < n else 0.0
        spread += outputs[SPREAD, n] * abs(rows[2, j]) + outputs[SPREAD, n + 1] * abs(rows[3, j])
        end = outputs[ENDING, j] if j < n else 0.0
        end += outputs[ENDING, n] * rows[2, j] + outputs[ENDING, n + 1] * rows[3, j]
        following = seen[0, j]
        for i in range(m):
            following += seen[0, i] * jump[i, j]
        leap = abs(end - following)  # a plant with direct feedthrough jumps at the sample
        stray[0, 0, j], stray[0, 1, j] = spread + leap, 0.0
        future[0, j], future[1, j] = max(abs(seen[0, j]), abs(end)) + spread, abs(seen[1, j])


@compiled(cache=False)
def raise_powers(powers: Powers) -> int:
    """Square until the future is bounded; the level of the longest stretch, -1 when none does."""
    apart()
    stray, future, spare, m = powers.stray, powers.future, powers.spare, powers.seen.shape[1]
    for level in range(LEVELS - 1):
        jump = powers.jump[level]
        shrinks = True
        for which in range(2):
            for j in range(m):
                moved = 0.0
                for i in range(m):
                    moved += powers.seen[which, i] * jump[i, j]
                spare[which, j] = moved
            for j in range(m):
                bent, grown, ahead = 0.0, 0.0, 0.0
                for i in range(m):
                    entry = abs(jump[i, j] + (1.0 if i == j else 0.0))
                    bent += spare[which, i] * jump[i, j]
                    grown += stray[level, which, i] * entry
                    ahead += future[which, i] * entry
                stray[level + 1, which, j] = 0.5 * abs(bent) + max(stray[level, which, j], grown)
                spare[2 + which, j] = ahead
                shrinks = shrinks and ahead <= _SHRUNK * future[which, j]
        if shrinks:
            return level
        for which in range(2):
            for j in range(m):
                future[which, j] = max(future[which, j], spare[2 + which, j])
        for i in range(m):
            for j in range(m):
                total = 2.0 * jump[i, j]
                for k in range(m):
                    total += jump[i, k] * jump[k, j]
                powers.jump[level + 1, i, j] = total
    return -1


@compiled(cache=False)
def leap(jump: NDArray[Any], state: NDArray[Any], result: NDArray[Any]) -> None:
    """result = (I + jump) state."""
    apart()
    for i in range(state.shape[0]):
        total = 0.0
        for j in range(state.shape[0]):
            total += jump[i, j] * state[j]
        result[i] = state[i] + total


@compiled(cache=False)
def along(row: NDArray[Any], state: NDArray[Any]) -> float:
    """Scalar product."""
    total = 0.0
    for j in range(state.shape[0]):
        total += row[j] * state[j]
    return total


@compiled(cache=False)
def at_most(row: NDArray[Any], state: NDArray[Any]) -> float:
    """The same of the absolute values, of a row that is >= 0."""
    total = 0.0
    for j in range(state.shape[0]):
        total += row[j] * abs(state[j])
    return total
