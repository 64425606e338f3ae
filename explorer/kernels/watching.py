"""Watching: stretches of stepped samples in, extremes, crossings and last exits between the samples out.

The bounds that kernels.stepping carries along say which stretches need a look; inside a period the exact output is
asked, piece by piece. All values are deviations y - y_final.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.apart import apart
from explorer.kernels.bernstein import DEGREE, highest, last_crossing
from explorer.kernels.compiling import compiled
from explorer.kernels.stepping import CREST, EFFORT, ENDING, OUTPUT, SPREAD, STEP_ROWS, TOP, TROUGH

# Columns of `found`: highest and lowest deviation, highest at samples, largest |u|, when highest, when first at 10 %
# and 90 % (nan: not yet), then the last time outside each band
HIGH, LOW, SEEN, USED, HIGH_TIME, TENTH, NINE_TENTHS, OUTSIDE = range(8)
WANT_HIGH, WANT_LOW, WANT_SEEN, WANT_EFFORT, WANT_RISE, WANT_SIZE = range(6)  # SIZE: HIGH and LOW together as |y|
RISE_LEVELS = (-0.9, -0.1)  # deviations from a final value of 1 at 10 % and 90 %


@compiled(cache=False)
def watch(
    history: NDArray[Any], inputs: NDArray[Any], lane: int, states: int, first: int, length: int, edges: NDArray[Any],
    table: NDArray[Any], count: int, wanted: NDArray[Any], bands: NDArray[Any], found: NDArray[Any],
    searches: NDArray[Any], room: NDArray[Any],
) -> None:  # fmt: skip
    """Bring `found` (columns above) of one lane up to date with `length` stepped samples from sample `first` on.

    history : rows of records, see kernels.stepping; inputs : row k what is held at sample first + k. Times are in
    periods. states : of plant and compensator. edges, table : pieces, see kernels.chains.
    """
    apart()
    stride = states + STEP_ROWS
    last = length * stride + states
    crest, trough = history[last + CREST, lane], history[last + TROUGH, lane]
    values, curve, slope = room[0, : table.shape[2]], room[1, : DEGREE + 1], room[2]
    for which in range(2):
        if wanted[WANT_RISE] and np.isnan(found[TENTH + which]) and crest >= RISE_LEVELS[which]:
            found[TENTH + which] = _first_at(
                RISE_LEVELS[which], history, inputs, lane, stride, states, first, length, edges, table, count, values,
                curve, searches,
            )  # fmt: skip
    for which in range(2):
        due = (crest > found[HIGH]) if which == 0 else (trough < found[LOW])
        if wanted[WANT_HIGH + which] and due:
            _extreme(
                1.0 - 2.0 * which, history, inputs, lane, stride, states, first, length, edges, table, count, values,
                curve, searches, slope, found,
            )  # fmt: skip
    for which in range(bands.shape[0]):
        if max(crest, -trough) > bands[which]:
            time = _last_outside(
                bands[which], history, inputs, lane, stride, states, first, length, edges, table, count, values,
                curve, searches,
            )  # fmt: skip
            if time >= 0.0:
                found[OUTSIDE + which] = time


@compiled(cache=False)
def due(
    history: NDArray[Any], lane: int, last: int, end: int, wanted: NDArray[Any], bands: NDArray[Any],
    found: NDArray[Any],
) -> bool:  # fmt: skip
    """Whether a stretch that ends at sample `end`, bounds in rows from `last` on, leaves anything to `watch`."""
    apart()
    crest, trough = history[last + CREST, lane], history[last + TROUGH, lane]
    found[SEEN] = max(found[SEEN], history[last + TOP, lane])
    found[USED] = max(found[USED], history[last + EFFORT, lane])
    needed = (wanted[WANT_HIGH] and crest > found[HIGH]) or (wanted[WANT_LOW] and trough < found[LOW])
    needed = needed or (wanted[WANT_RISE] and np.isnan(found[NINE_TENTHS]))
    for which in range(bands.shape[0]):
        if abs(history[last + ENDING, lane]) > bands[which]:
            found[OUTSIDE + which] = end
        else:
            needed = needed or max(crest, -trough) > bands[which]
    return bool(needed)


@compiled(cache=False)
def balance(rest: float, found: NDArray[Any]) -> float:
    """Where only |y| is wanted: the largest so far, as a bound on both sides."""
    most = max(found[HIGH] + rest, -(found[LOW] + rest))
    found[HIGH], found[LOW] = most - rest, -most - rest
    return float(most)


@compiled(cache=False)
def gather(
    history: NDArray[Any], inputs: NDArray[Any], lane: int, row: int, k: int, values: NDArray[Any]
) -> None:
    """values = plant states and held inputs of step k, whose record begins at `row`."""
    apart()
    n = values.shape[0] - 2
    for i in range(n):
        values[i] = history[row + i, lane]
    values[n], values[n + 1] = inputs[k, lane], inputs[k + 1, lane]


@compiled(cache=False)
def piece_of(table: NDArray[Any], values: NDArray[Any], sign: float, curve: NDArray[Any]) -> None:
    """Bernstein coefficients of sign * y on one piece, table (DEGREE+1, n+2)."""
    apart()
    for i in range(DEGREE + 1):
        total = 0.0
        for j in range(values.shape[0]):
            total += table[i, j] * values[j]
        curve[i] = sign * total


@compiled(cache=False)
def _first_at(
    level: float, history: NDArray[Any], inputs: NDArray[Any], lane: int, stride: int, states: int, first: int,
    length: int, edges: NDArray[Any], table: NDArray[Any], count: int, values: NDArray[Any], curve: NDArray[Any],
    searches: NDArray[Any],
) -> float:  # fmt: skip
    """First time y >= level; nan when never."""
    apart()
    for k in range(length):
        own = (k + 1) * stride + states
        if max(history[own + OUTPUT, lane], history[own + ENDING, lane]) + history[own + SPREAD, lane] < level:
            continue
        gather(history, inputs, lane, k * stride, k, values)
        for piece in range(count):
            piece_of(table[piece], values, 1.0, curve)
            time = first + k + edges[piece]
            if curve[0] >= level:
                return float(time)
            place = last_crossing(curve, level, searches, True)
            if place >= 0.0:
                return float(time + place * (edges[piece + 1] - edges[piece]))
    return np.nan


@compiled(cache=False)
def _last_outside(
    band: float, history: NDArray[Any], inputs: NDArray[Any], lane: int, stride: int, states: int, first: int,
    length: int, edges: NDArray[Any], table: NDArray[Any], count: int, values: NDArray[Any], curve: NDArray[Any],
    searches: NDArray[Any],
) -> float:  # fmt: skip
    """Last time |y| > band; -1.0 when never."""
    apart()
    for k in range(length - 1, -1, -1):
        own = (k + 1) * stride + states
        most = max(abs(history[own + OUTPUT, lane]), abs(history[own + ENDING, lane]))
        if most + history[own + SPREAD, lane] <= band:
            continue
        gather(history, inputs, lane, k * stride, k, values)
        for piece in range(count - 1, -1, -1):
            piece_of(table[piece], values, 1.0, curve)
            if abs(curve[DEGREE]) > band:
                return float(first + k + edges[piece + 1])
            place = max(last_crossing(curve, band, searches, False), last_crossing(curve, -band, searches, False))
            if place >= 0.0:
                return float(first + k + edges[piece] + place * (edges[piece + 1] - edges[piece]))
    return -1.0


@compiled(cache=False)
def _extreme(
    sign: float, history: NDArray[Any], inputs: NDArray[Any], lane: int, stride: int, states: int, first: int,
    length: int, edges: NDArray[Any], table: NDArray[Any], count: int, values: NDArray[Any], curve: NDArray[Any],
    searches: NDArray[Any], slope: NDArray[Any], found: NDArray[Any],
) -> None:  # fmt: skip
    """Highest (sign 1) or lowest (-1) deviation; the period beside the largest sample first, which rules out most."""
    apart()
    most, at = -np.inf, 0
    for k in range(length):
        own = (k + 1) * stride + states
        here = max(sign * history[own + OUTPUT, lane], sign * history[own + ENDING, lane])
        if here > most:
            most, at = here, k
    column = HIGH if sign > 0.0 else LOW
    best, when = sign * found[column], found[HIGH_TIME]
    for turn in range(length + 3):
        k = turn - 3 if turn >= 3 else at + (turn + 1) % 3 - 1
        if k < 0 or k >= length or (turn >= 3 and abs(k - at) <= 1):
            continue
        own = (k + 1) * stride + states
        here = max(sign * history[own + OUTPUT, lane], sign * history[own + ENDING, lane])
        if here + history[own + SPREAD, lane] <= best:
            continue
        gather(history, inputs, lane, k * stride, k, values)
        for piece in range(count):
            piece_of(table[piece], values, sign, curve)
            value, place = highest(curve, best, searches, slope)
            if place >= 0.0:
                best = value
                when = first + k + edges[piece] + place * (edges[piece + 1] - edges[piece])
    found[column] = sign * best
    if sign > 0.0:
        found[HIGH_TIME] = when
