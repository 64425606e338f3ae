"""Tracking: polynomials constant + gain·slope of many scenarios in, their poles' reductions along the gains out.

Real quadratic factors are predicted from the last gains, corrected together, and certified; LANES scenarios at a
time run through the same instructions (see factors, lanes). What does not certify is solved afresh by itself, and
what still does not is marked for the companion eigenvalues of kernels.roots, never left with an old answer.
"""

from __future__ import annotations

import functools
from typing import Any

import numpy as np
from numba import literally
from numpy.typing import NDArray

from explorer.kernels.compiling import compiled
from explorer.kernels.entries import sources
from explorer.kernels.factors import IN_Z, advanced, reduced, repeated
from explorer.kernels.lanes import LANES, emitted
from explorer.kernels.restart import forget, pair_again, solve_afresh

REDUCTIONS = 6  # rows of factors.reduced
_MOST_ROUNDS = 6
_WITHIN = ("compiling", "factors", "lanes", "resolution", "restart", "tracking")  # files in a tracker's machine code

_advance = emitted(advanced, lambda degree: (-5, degree + 1, degree + 1, 4 * degree))
_repeat = emitted(repeated, lambda degree: (-1, degree + 1, degree + 1, degree + 1))
_reduce = emitted(reduced, lambda code: (code % IN_Z + 1,))


@functools.cache
def tracker(degree: int, in_z: bool = False) -> Any:
    """The compiled function (constant, slope, steps, reductions) for one degree; see `_track`.

    in_z : the polynomials are in z, not in w = z - 1.

    Each degree has instructions of its own, compiled when first called and kept in numba's cache on disk. The
    cache knows a kernel by this file and by what it closes over: `sources` brings the formulas' files in.
    """
    checksum, code = sources(*_WITHIN), degree + (IN_Z if in_z else 0)

    @compiled(cache=True)
    def run(
        constant: NDArray[Any],
        slope: NDArray[Any],
        steps: NDArray[Any],
        reductions: NDArray[Any],
    ) -> None:
        """See `_track`."""
        if checksum:  # always true; see above
            _track(degree, code, constant, slope, steps, reductions)

    return run


@compiled(cache=False)  # its callers are cached, with it inside
def _track(
    degree: int,
    code: int,
    constant: NDArray[Any],
    slope: NDArray[Any],
    steps: NDArray[Any],
    reductions: NDArray[Any],
) -> None:
    """Follow the poles of every scenario along the gains.

    Parameters
    ----------
    degree, code : literals, see factors.reduced; constant, slope : (blocks, degree+1, LANES) descending powers of w.
    steps : (G, 5) from `gain_steps`. reductions : (REDUCTIONS, blocks, G, LANES) out, see factors.reduced: the last
        is 1.0 where the poles are certified and resolved; elsewhere the others mean nothing.
    """
    degree, code = literally(degree), literally(code)
    gains, blocks = steps.shape[0], constant.shape[0]
    loops = blocks * gains
    found = reductions.reshape(REDUCTIONS * loops, LANES)
    past = np.zeros(((gains + 4) * degree + 1, LANES))  # factors of all gains, four rows of room before them
    stride = 0 if constant.shape[1] == degree + 1 else degree + 1
    for block in range(blocks):
        below, above = constant[block], slope[block]
        for index in range(gains):
            here, at = (index + 4) * degree, index * stride
            if index > 0:
                good = _advance(degree, (steps, index, below, at, above, at, past, here - 4 * degree, past, here, 1))
            else:  # the block before began nearby
                forget(past, here, degree)
                good = _repeat(degree, (steps, 0, below, at, above, at, past, here, past, here, 1))
            for attempt in range(3):
                for _ in range(_MOST_ROUNDS):
                    if good == LANES:
                        break
                    good = _repeat(degree, (steps, index, below, at, above, at, past, here, past, here, 1))
                if good == LANES or attempt == 2:
                    break
                for lane in range(LANES):
                    if past[here + degree, lane] != 1.0:
                        if attempt == 0 and index > 0:
                            pair_again(past, here, degree, steps, index, lane)
                        else:
                            solve_afresh(below, above, at, degree, steps[index, 0], lane, past, here)
            row = block * gains + index
            _reduce(code, (past, here, found, row, loops))


def gain_steps(gain: NDArray[np.float64]) -> NDArray[np.float64]:
    """(G, 5): each gain, and the weights of the last four points, newest first, that extrapolate to it.

    Cubic in log gain where all gains are positive, in the gain otherwise; the first points use what there is.
    """
    place = np.log(gain) if (gain > 0).all() else gain
    steps = np.zeros((len(gain), 5))
    steps[:, 0] = gain
    for known in range(1, 5):  # number of points to extrapolate from
        rows = np.arange(known, len(gain)) if known == 4 else np.arange(known, min(known + 1, len(gain)))
        past = place[rows[:, None] - 1 - np.arange(known)]
        for own in range(known):
            others = np.delete(past, own, axis=1)
            steps[rows, 1 + own] = np.prod((place[rows, None] - others) / (past[:, own, None] - others), axis=1)
    return steps
