"""Solving: characteristic polynomials from closing in, what measures need of the poles for sweeping out.

Where loops are many, poles are tracked along the gains for LANES pairs of scenario and period at a time, in w = z - 1
and, where w does
not resolve poles near z = 0 that matter, once more in z. All others go one by one through the companion
eigenvalues; what fails there is unknown.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.lanes import LANES
from explorer.kernels.roots import HIGHEST_DEGREE, SOLVED, TOO_LONG, poles, reductions_of
from explorer.kernels.tracking import REDUCTIONS, tracker
from explorer.loop.closing import Group, Sampled, characteristic, degree_of
from explorer.loop.compensator import Compensator

Real = NDArray[np.float64]

HIGHEST_TRACKED = 16
_WORTH_A_SECOND_RUN = 0.01  # of a block's loops: companion eigenvalues cost hundreds of times a tracked loop

# Tracking is compiled for each degree and variable, for seconds on a new machine: not worth it for fewer loops of the
# whole sweep. That depends on the study alone, so the numbers never depend on what is compiled already.
WORTH_TRACKING = 120_000

_LAPACK_AT_ONCE = 20_000  # polynomials, to bound memory


class Solved(NamedTuple):
    """reductions : (REDUCTIONS, blocks, G, LANES), see kernels.factors.reduced, NaN where not solved;
    status : (blocks, G, LANES) int8. Pair k of the group is lane k % LANES of block k // LANES; the last block is
    filled up with repeats of the last pair.
    """

    reductions: Real
    status: NDArray[np.int8]


def solve(sampled: Sampled, compensator: Compensator, group: Group, steps: Real, alike: int) -> Solved:
    """Reductions of all poles of a group's loops at every gain.

    steps : (G, 5) from kernels.tracking.gain_steps. alike : how many loops of this delay the whole sweep has: few
    ones all go through companion eigenvalues.
    """
    degree, pairs = degree_of(sampled, compensator, group.delay), len(group.rows)
    blocks, gain = -(-pairs // LANES), steps[:, 0]
    reductions = np.empty((REDUCTIONS, blocks, len(gain), LANES))
    certificates = reductions[-1]
    status = np.full((blocks, len(gain), LANES), SOLVED, np.int8)
    if degree > HIGHEST_DEGREE:
        status[:], reductions[:] = TOO_LONG, np.nan
        return Solved(reductions, status)
    in_w = characteristic(sampled, compensator, group, variable=0)
    tracked = alike >= WORTH_TRACKING and 0 < degree <= HIGHEST_TRACKED
    if tracked:
        constant, slope = (_in_lanes(part, blocks) for part in in_w)
        tracker(degree)(constant, slope, steps, reductions)
    else:
        certificates[:] = 0.0
    if (certificates == 1.0).all():
        return Solved(reductions, status)
    in_z = characteristic(sampled, compensator, group, variable=1)
    if tracked and (certificates != 1.0).mean() * alike >= WORTH_TRACKING:
        _track_in_z(degree, in_z, steps, reductions)
    _solve_rest(in_w, in_z, gain, reductions, status)
    return Solved(reductions, status)


def _in_lanes(polynomials: Real, blocks: int) -> Real:
    """(M, K, n+1) to (blocks, K*(n+1), LANES)."""
    pairs = polynomials.shape[0]
    rows = np.minimum(np.arange(blocks * LANES), pairs - 1)
    flat = polynomials.reshape(pairs, -1)[rows]
    return np.ascontiguousarray(flat.reshape(blocks, LANES, -1).transpose(0, 2, 1))


def _track_in_z(degree: int, in_z: tuple[Real, Real], steps: Real, reductions: Real) -> None:
    """Blocks in which w left much unresolved once more in z, in place."""
    certificates = reductions[-1]
    blocks = np.flatnonzero((certificates != 1.0).mean(axis=(1, 2)) > _WORTH_A_SECOND_RUN)
    if not len(blocks):
        return
    constant, slope = (_in_lanes(part, len(certificates))[blocks] for part in in_z)
    again = np.empty((REDUCTIONS, len(blocks), *certificates.shape[1:]))
    tracker(degree, in_z=True)(constant, slope, steps, again)
    better = (again[-1] == 1.0) & (certificates[blocks] != 1.0)
    reductions[:, blocks] = np.where(better, again, reductions[:, blocks])


def _solve_rest(
    in_w: tuple[Real, Real],
    in_z: tuple[Real, Real],
    gain: Real,
    reductions: Real,
    status: NDArray[np.int8],
) -> None:
    """Every loop without certificate by companion eigenvalues, in place."""
    pairs, own_gains = in_w[0].shape[:2]
    block, step, lane = np.nonzero(reductions[-1] != 1.0)
    pair = np.minimum(block * LANES + lane, pairs - 1)
    for start in range(0, len(block), _LAPACK_AT_ONCE):
        part = slice(start, start + _LAPACK_AT_ONCE)
        rows, at = pair[part], step[part] if own_gains > 1 else 0
        factor = gain[step[part], None]
        found = poles(*(constant[rows, at] + factor * slope[rows, at] for constant, slope in (in_w, in_z)))
        place = slice(None, REDUCTIONS - 1), block[part], step[part], lane[part]
        reductions[place] = np.where(found.status == SOLVED, reductions_of(found.log_z), np.nan)
        status[block[part], step[part], lane[part]] = found.status

