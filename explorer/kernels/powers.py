"""Powers: jumps over 2^i samples of one closed loop, and how far its output can stray meanwhile, for kernels.patient.

Over h periods from the state z the samples of an output c keep within h²/8 · max |c A^l (A - I)² z| of the straight
line between both ends, and y between two samples within what the change (A - I) z allows: both are taken from the
state itself, so that smooth stretches are passed over quickly once the fast modes have gone. Fast oscillations are
better served by D_i |z|, D_2h = |c (A^h - I)²|/2 + max(D_h, D_h |A^h|), entry by entry. A row S >= |row A^l| for
every l, entry by entry, comes from doubling: S <- max(S, S |A^(2^i)|) until S |A^(2^i)| <= 0.98 S.
"""

from __future__ import annotations

from typing import Any

from numpy.typing import NDArray

from explorer.kernels.apart import apart
from explorer.kernels.chains import ENDING, SAMPLED, SPREAD
from explorer.kernels.compiling import compiled

LEVELS = 46  # powers of two: 2**45 samples
ROOTS = 256  # stretches of the longest power
_SHRUNK = 0.98

# Rows of `room` (ROOM_ROWS, m): bounds S of |y| everywhere, of |u|, of y at samples, of y's way between two samples by
# the change of the state and by the state itself; rows of y at the sample and of u; spare; states of stretches that
# wait; states after the longest jumps
EVERYWHERE, INPUT, SAMPLES, CHANGE, OFFSET = range(5)
BOUNDS = 5
SEEN, SEEN_INPUT, SPARE, MOVED, WAITING = 5, 6, 7, 12, 13
ROOT = WAITING + LEVELS + 2
ROOM_ROWS = ROOT + ROOTS + 1


@compiled(cache=False)
def first_level(
    outputs: NDArray[Any], drift: NDArray[Any], pair: int, n: int, rows: NDArray[Any], jump: NDArray[Any],
    stray: NDArray[Any], room: NDArray[Any],
) -> None:  # fmt: skip
    """Rows of y at the sample and of u, and the bounds over one period; drift : (M, n+2), see periods.drifts."""
    apart()
    m = room.shape[1]
    for j in range(m):
        own = outputs[pair, SAMPLED, j] if j < n else 0.0
        end = outputs[pair, ENDING, j] if j < n else 0.0
        spread = outputs[pair, SPREAD, j] if j < n else 0.0
        change = drift[pair, j] if j < n else 0.0
        for which in range(2):
            held = rows[2 + which, j]
            own += outputs[pair, SAMPLED, n + which] * held
            end += outputs[pair, ENDING, n + which] * held
            spread += outputs[pair, SPREAD, n + which] * abs(held)
        room[SEEN, j], room[SEEN_INPUT, j] = own, rows[0, j]
        room[EVERYWHERE, j], room[INPUT, j] = max(abs(own), abs(end)) + spread, abs(rows[0, j])
        room[SAMPLES, j], room[CHANGE, j] = abs(own), change + drift[pair, n] * abs(rows[2, j])
        room[OFFSET, j] = drift[pair, n + 1] if j == n - 1 else 0.0
        stray[0, 0, j], stray[0, 1, j], room[SPARE, j] = spread, 0.0, end - own
    for j in range(m):  # a plant with direct feedthrough jumps at the sample
        gap = room[SPARE, j]
        for i in range(m):
            gap -= room[SEEN, i] * jump[0, i, j]
        stray[0, 0, j] += abs(gap)


@compiled(cache=False)
def raise_powers(jump: NDArray[Any], stray: NDArray[Any], room: NDArray[Any]) -> int:
    """Square until every bound holds for good; the level of the longest stretch, -1 when none does."""
    apart()
    m = room.shape[1]
    for level in range(LEVELS - 1):
        shrinks = True
        for which in range(BOUNDS):
            for j in range(m):
                ahead = 0.0
                for i in range(m):
                    ahead += room[which, i] * abs(jump[level, i, j] + (1.0 if i == j else 0.0))
                room[SPARE + which, j] = ahead
                shrinks = shrinks and ahead <= _SHRUNK * room[which, j]
        if shrinks:
            return level
        for which in range(2):
            for j in range(m):
                total = 0.0
                for i in range(m):
                    total += room[SEEN + which, i] * jump[level, i, j]
                room[MOVED, j] = total
            for j in range(m):
                bent, grown = 0.0, 0.0
                for i in range(m):
                    bent += room[MOVED, i] * jump[level, i, j]
                    grown += stray[level, which, i] * abs(jump[level, i, j] + (1.0 if i == j else 0.0))
                stray[level + 1, which, j] = 0.5 * abs(bent) + max(stray[level, which, j], grown)
        for which in range(BOUNDS):
            for j in range(m):
                room[which, j] = max(room[which, j], room[SPARE + which, j])
        for i in range(m):
            for j in range(m):
                total = 2.0 * jump[level, i, j]
                for k in range(m):
                    total += jump[level, i, k] * jump[level, k, j]
                jump[level + 1, i, j] = total
    return -1


@compiled(cache=False)
def moved(jump: NDArray[Any], level: int, room: NDArray[Any], source: int, target: int, whole: float) -> None:
    """Row `target` = (whole I + jump[level]) row `source`."""
    apart()
    apart()
    m = room.shape[1]
    for i in range(m):
        total = 0.0
        for j in range(m):
            total += jump[level, i, j] * room[source, j]
        room[target, i] = whole * room[source, i] + total


@compiled(cache=False)
def along(room: NDArray[Any], row: int, state: int) -> float:
    """Scalar product of two rows."""
    apart()
    total = 0.0
    for j in range(room.shape[1]):
        total += room[row, j] * room[state, j]
    return total


@compiled(cache=False)
def at_most(room: NDArray[Any], row: int, state: int) -> float:
    """The same of the absolute values, of a row that is >= 0."""
    apart()
    total = 0.0
    for j in range(room.shape[1]):
        total += room[row, j] * abs(room[state, j])
    return total


@compiled(cache=False)
def at_most_of(stray: NDArray[Any], level: int, which: int, room: NDArray[Any], state: int) -> float:
    """The same with a row of `stray` (LEVELS, 2, m): of y or of u over 2**level periods."""
    apart()
    total = 0.0
    for j in range(room.shape[1]):
        total += stray[level, which, j] * abs(room[state, j])
    return total
