"""Cells of a frequency curve: polynomials and their roots in, nodes with a simple curve between them for margins out.

Between neighbouring nodes nothing happens that the nodes do not show: |R| and the phase are monotone there, the
phase turns by less than a quarter turn, and both distance functions |1 + K R| and |K + 1/R| have at most one
stationary place for every gain K. This is why no crossing and no minimum is missed:

- Where R can change quickly is known: at the images of the roots of numerator and denominator in the complex x plane
  (and of z = 0 and infinity). No cell is longer than a fixed part of its distance to the nearest of them, so ln R
  has a Taylor series on it that converges geometrically; a lightly damped mode forces nodes at its own width.
- A cell stands when the cubic through its ends meets the curve in its middle, when its turn is small and when the
  tangents of both slopes show no dip to zero between nodes, nor the bow of a Wronskian; else it is halved.
- The places where d|R|, the turn or one of the two Wronskians below changes sign are found and become nodes.

Stationary places: with R' = dR/dx, |1 + K R|² is stationary where α + K β = 0, α = Re R', β = Re(R' conj R). As K
runs over all numbers this is one curve (α, β) in the plane, independent of the gain; between the zeros of its
Wronskian α'β - αβ' and of β it turns by less than half a turn, and each gain meets it at most once.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.compiling import compiled
from explorer.kernels.curve import (
    BEND,
    CURL,
    INVERSE_WRONSKIAN,
    LEVEL,
    PLACE,
    SIZE,
    SLOPE,
    TURN,
    TWIST,
    UNIT,
    WRONSKIAN,
    Curve,
    point,
)

Array = NDArray[Any]

# Kinds of nodes: extremum of |R|, of the phase, zero of a Wronskian of R, of 1/R; cell with an undamped root.
EXTREMUM, TURNING, FOLD, INVERSE_FOLD, GAP = 1, 2, 4, 8, 16
EVENTS = 4

_LONGEST = 2.0  # of a pair of cells, in x
_ROOM = 0.6  # longest pair of cells relative to the distance to the nearest singular place
_RISE, _TURN = 2.4, 1.2  # of ln|R| and of the phase along a pair of cells, as its first slopes tell
_MISFIT = 0.02  # of the cubic in the middle of a pair of cells; a sixteenth of it is left on each
_SHORTEST = 1e-7  # relative to the room; shorter ones stand whatever they show
_UNDAMPED = 1e-9  # roots this close to the circle in x are on it: a gap of this half width is left around them
_NOISE = 1e-13  # slopes below this are rounding
_BOW = 0.5  # of the least value of a Wronskian at three nodes
_TINY = 1e-300
_ROUNDS = 12  # of looking closer at valleys of a Wronskian


@compiled()
def put(curve: Curve, x: float, node: Array) -> None:
    """Fill a node with the curve at x."""
    node[PLACE] = x
    (
        node[LEVEL], node[SIZE], node[UNIT], node[TURN], node[SLOPE], node[TWIST], node[BEND], node[CURL]
    ) = point(curve, x)  # fmt: skip


@compiled()
def _copy(source: Array, row: int, target: Array, place: int) -> None:
    """One node; assigning slices compiles slowly."""
    for k in range(source.shape[1]):
        target[place, k] = source[row, k]


@compiled()
def room(features: Array, x: float) -> tuple[float, float]:
    """Distance to the nearest singular place, and to the next undamped one if x has come to its gap, else 0."""
    nearest, gap = math.inf, 0.0
    for k in range(features.shape[0]):
        ahead, aside = features[k, 0] - x, features[k, 1]
        distance = math.sqrt(ahead * ahead + aside * aside)
        if aside < _UNDAMPED and 0.0 <= ahead < 2.0 * _UNDAMPED:
            gap = max(gap, 2.0 * ahead + 1e-3 * _UNDAMPED)
        nearest = min(nearest, distance)
    return nearest, gap


@compiled()
def _dips(first: float, slope: float, last: float, end_slope: float, length: float) -> bool:
    """Whether a function of one sign at both ends may touch zero between them, judged by its tangents.

    The tangents of a convex function stay below it: above zero where they meet, it has no zero.
    """
    if first * last <= 0.0 or first * slope >= 0.0 or last * end_slope <= 0.0 or abs(first) + abs(last) < _NOISE:
        return False
    meet = (last - end_slope * length - first) / (slope - end_slope)
    return (first + slope * meet) * first <= 0.0


@compiled()
def _bows(first: float, middle: float, last: float) -> bool:
    """Whether a function of one sign at three equally spaced places may touch zero between them.

    It bows towards zero there, and by more than its own size: then three places are too few to tell.
    """
    bow, tilt = 0.5 * (first + last) - middle, 0.5 * (last - first)
    if first * middle <= 0.0 or middle * last <= 0.0 or bow * middle <= 0.0 or abs(tilt) >= 4.0 * abs(bow):
        return False
    return abs(bow) > _BOW * min(abs(first), abs(middle), abs(last))


@compiled()
def _simple(left: Array, middle: Array, right: Array) -> bool:
    """Whether two cells may stand: cubic through left and right fits the middle, little turn, no dips."""
    length = right[PLACE] - left[PLACE]
    half = 0.5 * length
    if not (
        left[UNIT] * middle[UNIT] + left[TURN] * middle[TURN] > 0.7
        and middle[UNIT] * right[UNIT] + middle[TURN] * right[TURN] > 0.7
    ):
        return False
    level = 0.5 * (left[LEVEL] + right[LEVEL]) + 0.125 * length * (left[SLOPE] - right[SLOPE])
    whole = math.atan2(
        right[TURN] * left[UNIT] - right[UNIT] * left[TURN], right[UNIT] * left[UNIT] + right[TURN] * left[TURN]
    )
    part = math.asin(min(1.0, max(-1.0, middle[TURN] * left[UNIT] - middle[UNIT] * left[TURN])))
    turn = 0.5 * whole + 0.125 * length * (left[TWIST] - right[TWIST])
    if abs(level - middle[LEVEL]) > _MISFIT or abs(turn - part) > _MISFIT:
        return False
    for k in range(4):
        start, stop = (left, middle) if k < 2 else (middle, right)
        a, b = SLOPE + (k & 1), BEND + (k & 1)
        if _dips(start[a], start[b], stop[a], stop[b], half):
            return False
    return not (
        _bows(left[WRONSKIAN], middle[WRONSKIAN], right[WRONSKIAN])
        or _bows(left[INVERSE_WRONSKIAN], middle[INVERSE_WRONSKIAN], right[INVERSE_WRONSKIAN])
    )


@compiled()
def march(curve: Curve, features: Array, start: float, end: float, nodes: Array, kinds: Array) -> int:
    """Nodes from start to end; how many, or -1 when there is no space for all. Every cell is simple or a gap."""
    count, first, last, pair, length, shortest = 0, 0, 0, False, 0.0, 0.0
    nodes[0, PLACE] = start
    while True:
        for k in range(first, last + 1):  # the one place where nodes are filled: compiling it takes long
            put(curve, nodes[k, PLACE], nodes[k])
            _put_wronskians(nodes[k])
            kinds[k] = 0
        if pair and length > shortest and not _simple(nodes[count - 1], nodes[count], nodes[count + 1]):
            length *= 0.5
            _copy(nodes, count, nodes, count + 1)
            nodes[count, PLACE] = nodes[count - 1, PLACE] + 0.5 * length
            first = last = count
            continue
        count += 2 if pair else 1
        x = nodes[count - 1, PLACE]
        if x > end - 1e-9:
            return count
        if count + 2 > nodes.shape[0]:
            return -1
        space_ahead, gap = room(features, x)
        pair, first, last = gap == 0.0, count, count
        if pair:
            slope, twist = abs(nodes[count - 1, SLOPE]), abs(nodes[count - 1, TWIST])
            length = min(_LONGEST, _ROOM * space_ahead, end - x, _RISE / (slope + 1e-9), _TURN / (twist + 1e-9))
            shortest = _SHORTEST * min(1.0, space_ahead)
            nodes[count, PLACE], nodes[count + 1, PLACE], last = x + 0.5 * length, x + length, count + 1
        else:
            kinds[count - 1], nodes[count, PLACE] = GAP, x + gap


@compiled()
def _event(node: Array, which: int) -> float:
    """A function whose sign change makes a node: 0 slope of |R|, 1 turn, 2 Wronskian of R, 3 Wronskian of 1/R.

    The Wronskians relative to their two terms, so that they neither grow nor vanish with the curve.
    """
    slope, twist = node[SLOPE], node[TWIST]
    if which < 2:
        value = slope if which == 0 else twist
        return value if abs(value) > _NOISE else 0.0
    sign = 1.0 if which == 2 else -1.0  # 1/R has the negative slopes and the conjugate unit vector
    bend = slope * slope - twist * twist + sign * node[BEND]
    curl = 2.0 * slope * twist + sign * node[CURL]
    turn = sign * node[TURN]
    first = sign * slope * (node[UNIT] * bend - turn * curl)
    second = sign * (node[UNIT] * slope - turn * twist) * (2.0 * slope * slope + sign * node[BEND])
    value = (first - second) / (abs(first) + abs(second) + _TINY)
    return value if abs(value) > 10.0 * _NOISE else 0.0


@compiled()
def _put_wronskians(node: Array) -> None:
    node[WRONSKIAN], node[INVERSE_WRONSKIAN] = _event(node, np.int64(2)), _event(node, np.int64(3))


@compiled()
def _at_valley(nodes: Array, k: int, count: int) -> bool:
    """Whether a Wronskian of one sign is at node k less than half of what it is at both neighbours."""
    if not 0 < k < count - 1:
        return False
    for column in range(WRONSKIAN, INVERSE_WRONSKIAN + 1):
        before, here, after = nodes[k - 1, column], nodes[k, column], nodes[k + 1, column]
        if before * here > 0.0 and here * after > 0.0 and 2.0 * abs(here) < min(abs(before), abs(after)):
            return True
    return False


@compiled()
def _with_middles(curve: Curve, nodes: Array, kinds: Array, count: int, fine: Array, fine_kinds: Array) -> int:
    """Nodes and new ones in the middle of cells beside valleys; how many, -1 when there is no space."""
    total = 0
    for k in range(count):
        if total + 2 > fine.shape[0]:
            return -1
        _copy(nodes, k, fine, total)
        fine_kinds[total] = kinds[k]
        total += 1
        if not kinds[k] & GAP and k + 1 < count and (_at_valley(nodes, k, count) or _at_valley(nodes, k + 1, count)):
            put(curve, 0.5 * (nodes[k, PLACE] + nodes[k + 1, PLACE]), fine[total])
            _put_wronskians(fine[total])
            fine_kinds[total] = 0
            total += 1
    return total


@compiled()
def _place_of_event(curve: Curve, left: Array, right: Array, which: int, spare: Array) -> float:
    """Where the event function changes sign: regula falsi, its stale end halved (Illinois), to 1e-9 of the cell."""
    a, b, fa, fb = left[PLACE], right[PLACE], _event(left, which), _event(right, which)
    x: float = a
    tolerance, side = 1e-9 * (b - a), 0
    for step in range(60):
        last, x = x, (a * fb - b * fa) / (fb - fa)
        if not a < x < b or step > 20:
            x = 0.5 * (a + b)
        put(curve, x, spare)
        f = _event(spare, which)
        if f == 0.0 or abs(x - last) < tolerance:
            break
        if f * fa < 0.0:
            b, fb = x, f
            if side < 0:
                fa *= 0.5
            side = -1
        else:
            a, fa = x, f
            if side > 0:
                fb *= 0.5
            side = 1
    return x


@compiled()
def _with_events(
    curve: Curve,
    events: int,
    nodes: Array,
    kinds: Array,
    count: int,
    fine: Array,
    fine_kinds: Array,
) -> int:
    """Nodes and those of the events between them, into fine; how many, -1 when there is no space.

    events : sum of the kinds that are needed.
    """
    spare, total = fine[fine.shape[0] - 1], 0
    for k in range(count):
        if total + EVENTS + 3 > fine.shape[0]:
            return -1
        _copy(nodes, k, fine, total)
        fine_kinds[total] = kinds[k]
        first = total
        total += 1
        if k + 1 == count or kinds[k] & GAP:
            continue
        for which in range(EVENTS):
            column = SLOPE + which if which < 2 else WRONSKIAN - 2 + which
            a, b = nodes[k, column], nodes[k + 1, column]
            if not events & (1 << which) or not a * b < 0.0 or min(abs(a), abs(b)) < _NOISE:
                continue
            x = _place_of_event(curve, nodes[k], nodes[k + 1], which, spare)
            place = total
            while place - 1 > first and fine[place - 1, PLACE] > x:
                _copy(fine, place - 1, fine, place)
                fine_kinds[place] = fine_kinds[place - 1]
                place -= 1
            _copy(fine, fine.shape[0] - 1, fine, place)
            _put_wronskians(fine[place])
            fine_kinds[place] = 1 << which
            total += 1
    return total


@compiled()
def refine(
    curve: Curve,
    events: int,
    nodes: Array,
    kinds: Array,
    count: int,
    spare: Array,
    spare_kinds: Array,
) -> int:
    """Add the nodes of events to those of march, in place; how many, -1 when there is no space.

    First extrema: beside one that lies almost on the real axis a Wronskian is small and may have two zeros. Then nodes
    around all valleys of the Wronskians, and last what changes sign between any two nodes.
    """
    count = _with_events(curve, events & (EXTREMUM | TURNING), nodes, kinds, count, spare, spare_kinds)
    for _ in range(_ROUNDS):
        if count < 0:
            break
        before = count
        count = _with_middles(curve, spare, spare_kinds, count, nodes, kinds)
        for k in range(count):
            _copy(nodes, k, spare, k)
            spare_kinds[k] = kinds[k]
        if count == before:
            break
    if count > 0:
        count = _with_events(curve, events & (FOLD | INVERSE_FOLD), spare, spare_kinds, count, nodes, kinds)
    return count


@compiled()
def runs_of(kinds: Array, count: int, mask: int, runs: Array) -> int:
    """Stretches of cells between nodes of the masked kinds and gaps, as first and last node; how many."""
    total, start = 0, 0
    for k in range(1, count):
        if kinds[k - 1] & GAP:
            start = k
            continue
        if kinds[k] & (mask | GAP) or k + 1 == count:
            runs[total, 0], runs[total, 1] = start, k
            total += 1
            start = k
    return total
