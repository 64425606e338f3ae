"""Frequency measures: loop polynomials in w in, margins, peaks, bandwidths and noise gains for measures out."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.cells import EXTREMUM, FOLD, INVERSE_FOLD, TURNING, march, refine, runs_of
from explorer.kernels.compiling import compiled
from explorer.kernels.curve import COLUMNS, LEVEL, SIZE, Curve
from explorer.kernels.margins import (
    TABLE_ROWS,
    critical_gains,
    crossovers,
    first_exit,
    gains_clear_of_gaps,
    least_distance,
    tabulate,
)
from explorer.kernels.noise import noise_gains
from explorer.kernels.places import curves_of

Array = NDArray[Any]
Real = NDArray[np.float64]

MEASURES = (
    "gain margin", "gain reduction margin", "phase margin", "delay margin", "modulus margin", "resonance peak",
    "crossover frequency", "bandwidth", "noise gain",
)  # fmt: skip
_ON_CURVE = len(MEASURES) - 1  # all but the last come from the frequency curve
_UP, _DOWN, _PHASE, _DELAY, _MODULUS, _PEAK, _CROSSOVER, _BANDWIDTH = range(_ON_CURVE)
_MOST_NODES = 100_000  # 30 MB; enough for some thousand samples of delay
_RUN_ENDS = np.array([EXTREMUM, EXTREMUM | FOLD, EXTREMUM | INVERSE_FOLD])  # of the runs in kernels.margins
_WITHOUT_LOOP = np.array([np.inf, 0.0, np.inf, np.inf, 1.0, 0.0, 0.0, np.inf])  # where L = 0, in that order

FOUND, NOT_FINITE, UNRESOLVED = 0, 1, 2
STATUS_MEANING = {
    FOUND: "found",
    NOT_FINITE: "coefficients beyond the range of a computer number",
    UNRESOLVED: "frequency curve not resolved: too intricate, or |L| = 1 where an undamped root hides it",
}


class Frequency(NamedTuple):
    """values : (measures, M, G), NaN where not asked for (not stable) or unknown. status : (M, G) int8, why unknown.

    See STATUS_MEANING. A noise gain may be unknown alone.
    """

    values: Real
    status: NDArray[np.int8]


def frequency_measures(
    names: Sequence[str],
    below: Real,
    fixed: Real,
    sloped: Real,
    delay: int,
    gain: Real,
    period: Real,
    stable: NDArray[np.bool_],
    effort: tuple[Real, Real] | None = None,
) -> Frequency:
    """Frequency measures of the loops L = (fixed + K sloped)/(below z**delay) for M pairs and G gains K.

    Parameters
    ----------
    names : of MEASURES, in any order; only these are computed, and the first axis of the values follows them.
    below : (M, 1 or G, nD+1), fixed, sloped : (M, 1 or G, nN+1), real, descending powers of w = z - 1, nN <= nD.
        With G polynomials (own ones per gain) sloped is zero and the factor of both gain margins multiplies the whole
        numerator; otherwise it multiplies the gain, so sloped alone.
    delay : whole samples, any number. gain : (G,), of any sign. period : (M,) [s]. stable : (M, G).
    effort : for "noise gain", fixed and sloped part of compensator numerator x plant denominator, shaped as those;
        without it that row is NaN.

    Returns
    -------
    Units and conventions: margins on the gain are factors, +inf and 0 when there is none; phase margin [deg] in
    (-180, 180], +inf without crossover; delay margin [s]; crossover frequency and bandwidth [rad/s], crossover
    frequency 0 or +inf without crossover when |L| < 1 or > 1; bandwidth +inf when the level is never crossed or
    L = 0 at frequency 0; resonance peak and modulus margin over the closed circle, limits included. Poles and zeros
    of L on the circle are as good as others: |L| is infinite or 0 there. Only within 1e-9 of one nothing is seen, and
    a loop that has |L| = 1 there is unknown.

    Methods: crossings and stationary distances on a curve cut into simple cells, see kernels.cells for why none is
    missed (own method); Halley's and Newton's steps inside brackets (textbook); the Illinois rule, Dowell and Jarratt
    1971, BIT 11, 168-174 (from memory). Noise gain: Åström 1970, ch. 5 (from memory), and Gauss's rule, see
    kernels.noise. Margins: Åström and Murray, Feedback Systems, ch. 10 and 12 (from memory).

    Accuracy: 1e-9 relative or better for polynomials as given. Speed: where L is proportional to the gain and
    the compensator affine in it, the work on the curve is shared by all gains; otherwise each gain has its own.
    No errors: what fails has a status and NaN. Every pair is computed by itself, so batches do not matter.
    """
    pairs, gains = stable.shape
    values = np.full((len(names), pairs, gains), np.nan)
    status = np.zeros((pairs, gains), np.int8)
    parts = [np.asarray(part, float) for part in (below, fixed, sloped)]
    finite = np.isfinite(parts[0]).all((1, 2)) & np.isfinite(parts[1]).all((1, 2)) & np.isfinite(parts[2]).all((1, 2))
    wanted = np.ascontiguousarray(stable & finite[:, None])
    status[stable & ~finite[:, None]] = NOT_FINITE
    row = np.array([names.index(name) if name in names else -1 for name in MEASURES[:_ON_CURVE]])
    gain, period = np.ascontiguousarray(gain, float), np.ascontiguousarray(period, float)
    if (row >= 0).any():
        _fill(parts, delay, gain, period, wanted, row, values, status)
    if "noise gain" in names and effort is not None:
        level = noise_gains(parts[0], parts[1], parts[2], effort[0], effort[1], delay, gain, wanted)
        values[names.index("noise gain")] = level
        status[wanted & np.isnan(level) & (status == FOUND)] = UNRESOLVED
    return Frequency(values, status)


def _fill(
    parts: list[Real], delay: int, gain: Real, period: Real, wanted: Array, row: Array, values: Real, status: Array
) -> None:
    """Everything but noise gains, in place."""
    below, fixed, sloped = parts
    own = below.shape[1] > 1 or fixed.shape[1] > 1 or sloped.shape[1] > 1
    shared = np.full(len(wanted), not own) & ~fixed.any((1, 2))
    _on_curves(sloped[:, 0], below[:, 0], delay, gain, period, wanted & shared[:, None], row, values, status)
    rest = wanted & ~shared[:, None]
    if not rest.any():
        return
    margins = np.where((np.arange(_ON_CURVE) <= _DOWN) & (not own), row, -1)
    if (margins >= 0).any():  # the factor multiplies the sloped part alone: the rest belongs below
        closed = _with_delay(below[:, 0], delay)
        closed[:, closed.shape[1] - fixed.shape[2] :] += fixed[:, 0]
        _on_curves(sloped[:, 0], closed, 0, gain, period, rest, margins, values, status)
    pair, step = np.nonzero(rest)  # every loop is a curve of its own
    b, f, s = (step if part.shape[1] > 1 else 0 for part in parts)
    above = fixed[pair, f] + gain[step, None] * sloped[pair, s]
    some, marks = np.full((len(values), len(pair), 1), np.nan), np.zeros((len(pair), 1), np.int8)
    others, every = np.where(margins >= 0, -1, row), np.ones((len(pair), 1), bool)
    _on_curves(above, below[pair, b], delay, np.ones(1), period[pair], every, others, some, marks)
    for place in others[others >= 0]:
        values[place, pair, step] = some[place, :, 0]
    status[pair, step] = np.maximum(status[pair, step], marks[:, 0])


def _on_curves(
    above: Real,
    below: Real,
    delay: int,
    gain: Real,
    period: Real,
    wanted: Array,
    row: Array,
    values: Real,
    status: Array,
) -> None:
    """Measures of K above/(below z**delay) for I curves at all gains, in place."""
    todo = np.where(wanted.any(axis=1), np.where(above.any(axis=1), 2, 1), 0)
    if todo.any() and (row >= 0).any():
        curves = curves_of(above, below, delay, gain)
        _measure(*curves, gain, period, wanted, todo, row, values, status)


def _with_delay(polynomial: Real, delay: int) -> Real:
    """polynomial * (1 + w)**delay, batched."""
    result = np.array(polynomial)
    for _ in range(delay):
        result = np.pad(result, ((0, 0), (0, 1))) + np.pad(result, ((0, 0), (1, 0)))
    return result


@compiled()
def _measure(
    above: Array,
    below: Array,
    delay: int,
    features: Array,
    span: Array,
    gain: Array,
    period: Array,
    wanted: Array,
    todo: Array,
    row: Array,
    values: Array,
    status: Array,
) -> None:
    """All curves at all gains.

    todo : (I,) 0 nothing, 1 no loop (R = 0), 2 all. row : where each measure goes in values, -1 if nowhere.
    """
    space = min(1000 + 200 * features.shape[1] + 32 * delay, _MOST_NODES)
    nodes, others = np.empty((space, COLUMNS)), np.empty((space, COLUMNS))
    kinds, other_kinds = np.empty(space, np.int64), np.empty(space, np.int64)
    table, critical = np.empty((TABLE_ROWS, space)), np.empty(space)
    runs, counts = np.empty((3, space, 2), np.int64), np.empty(3, np.int64)
    ends, spares, found = np.empty((2, 2)), np.empty((2, COLUMNS)), np.empty(_ON_CURVE)
    events = EXTREMUM | TURNING | (FOLD if row[_MODULUS] >= 0 else 0)
    events |= INVERSE_FOLD if max(row[_PEAK], row[_BANDWIDTH]) >= 0 else 0
    for i in range(above.shape[0]):
        if todo[i] == 0:
            continue
        curve, count, known, least, most = (above[i], below[i], delay), 0, 0, math.inf, math.inf
        if todo[i] == 2:
            count = march(curve, features[i], span[i, 0], span[i, 1], nodes, kinds)
            if count > 0:
                count = refine(curve, events, nodes, kinds, count, others, other_kinds)
            if count > 0:
                tabulate(nodes, kinds, count, table)
                for k in range(3):
                    counts[k] = runs_of(kinds, count, _RUN_ENDS[k], runs[k])
                known = critical_gains(curve, nodes, kinds, count, spares[0], critical)
                known = _limits(curve, ends, critical, known)
                least, most = gains_clear_of_gaps(nodes, kinds, count)
                size = nodes[count - 1, SIZE]  # beside z = -1, which is a gap as well where it is a root
                least, most = (
                    max(least, 2.0 / size if ends[1, 1] == 0.0 else 0.0),
                    min(most, 0.5 / size if ends[1, 0] == 0.0 else most),
                )
        for g in range(gain.shape[0]):
            if not wanted[i, g]:
                continue
            if gain[g] == 0.0 or count == 0:
                for which in range(_ON_CURVE):
                    found[which] = _WITHOUT_LOOP[which]
            elif least <= abs(gain[g]) <= most:
                _gain_margins(critical[:known], gain[g], found)
                _crossing_measures(curve, nodes, table, runs, counts, gain[g], period[i], row, spares, found)
                _distance_measures(
                    curve, nodes, table, runs, counts, ends, gain[g], period[i], row, other_kinds, spares, found
                )
            else:
                status[i, g] = UNRESOLVED
                continue
            for which in range(_ON_CURVE):
                if row[which] >= 0:
                    values[row[which], i, g] = found[which]
                    if math.isnan(found[which]):
                        status[i, g] = UNRESOLVED


@compiled()
def _limits(curve: Curve, ends: Array, critical: Array, known: int) -> int:
    """Fill ends: numerator and denominator at z = 1 and -1, and add the gains that put a pole there; how many now."""
    above, below, delay = curve
    ends[0, 0], ends[0, 1] = above[-1], below[-1]
    ends[1, 0], ends[1, 1] = _at_minus_one(above), _at_minus_one(below) * (-1.0 if delay & 1 else 1.0)
    for k in range(2):
        if ends[k, 0] != 0.0:
            critical[known] = -ends[k, 1] / ends[k, 0]
            known += 1
    return known


@compiled()
def _at_minus_one(polynomial: Array) -> float:
    """Value at w = -2, 0 where that is all that rounding leaves."""
    value = size = 0.0
    for k in range(polynomial.shape[0]):
        value, size = polynomial[k] - 2.0 * value, abs(polynomial[k]) + 2.0 * size
    return value if abs(value) > 4e-15 * size else 0.0


@compiled()
def _gain_margins(critical: Array, gain: float, found: Array) -> None:
    found[_UP], found[_DOWN] = math.inf, 0.0
    for k in range(critical.shape[0]):
        factor = critical[k] / gain
        if factor > 1.0:
            found[_UP] = min(found[_UP], factor)
        elif factor > 0.0:
            found[_DOWN] = max(found[_DOWN], factor)


@compiled()
def _crossing_measures(
    curve: Curve,
    nodes: Array,
    table: Array,
    runs: Array,
    counts: Array,
    gain: float,
    period: float,
    row: Array,
    spares: Array,
    found: Array,
) -> None:
    if row[_PHASE] < 0 and row[_DELAY] < 0 and row[_CROSSOVER] < 0:
        return
    margin, least, highest = crossovers(curve, nodes, table, runs, counts, gain, spares[0])
    found[_PHASE], found[_DELAY] = margin * (180.0 / math.pi), least * period
    if highest < 0.0:
        highest = math.inf if math.log(abs(gain)) + nodes[0, LEVEL] > 0.0 else 0.0
    found[_CROSSOVER] = highest / period


@compiled()
def _distance_measures(
    curve: Curve,
    nodes: Array,
    table: Array,
    runs: Array,
    counts: Array,
    ends: Array,
    gain: float,
    period: float,
    row: Array,
    cells: Array,
    spares: Array,
    found: Array,
) -> None:
    """Least distances inside the half circle and, as limits, at z = 1 and -1. cells : room for indices."""
    for inverse in range(2):
        which = _PEAK if inverse else _MODULUS
        if row[which] < 0:
            continue
        least = least_distance(curve, nodes, table, runs, counts, inverse, gain, cells, spares[0])
        for k in range(2):
            top, bottom = ends[k, 0], ends[k, 1]
            if inverse and top != 0.0:
                least = min(least, (gain + bottom / top) ** 2)
            elif not inverse and bottom != 0.0:
                least = min(least, (1.0 + gain * top / bottom) ** 2)
        found[which] = abs(gain) / math.sqrt(least) if inverse else math.sqrt(least)
    if row[_BANDWIDTH] >= 0:
        angle = math.inf
        if ends[0, 0] != 0.0:
            level = 2.0 * (gain + ends[0, 1] / ends[0, 0]) ** 2
            angle = first_exit(curve, nodes, table, runs, counts, gain, level, spares)
        found[_BANDWIDTH] = angle / period
