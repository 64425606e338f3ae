"""Margins of one loop at many gains: nodes of its curve R from cells in, frequency measures of L = K R out.

What does not depend on the gain is done once: runs of monotone |R|, runs along which a gain finds at most one
stationary distance, and the gains that put a pole on the unit circle. Each gain then bisects the nodes of the few
runs that contain its crossing or minimum, starts from the cubic through two nodes and ends with an exact correction.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.cells import EXTREMUM, GAP, put
from explorer.kernels.compiling import compiled
from explorer.kernels.curve import BEND, CURL, LEVEL, PLACE, SIZE, SLOPE, TURN, TWIST, UNIT, Curve, angle_of, cubic_root

Array = NDArray[Any]

# Rows of a table over nodes, for C = R and again for C = 1/R: Re C'/|C|, Re(C' conj C)/|C|, their derivatives, Re C,
# Im C and how far C may leave the chord to the next node; then ln|R| and |1/R|².
_DIRECT, _INVERSE, _LEVELS, _SQUARE = 0, 7, 14, 15
TABLE_ROWS = 16
_RE, _IM, _REACH = 4, 5, 6

# Runs: of monotone |R|; with at most one stationary distance of R, and of 1/R.
_MONOTONE, _DIRECT_RUNS, _INVERSE_RUNS = 0, 1, 2

# Crossings: |R| = given, phase a multiple of 180°, |K + 1/R| = given. Passed on as np.int64: numba compiles a function
# once more for every literal.
_AT_LEVEL, _AT_REAL, _AT_DISTANCE = 0, 1, 2
_CLOSE = 3e-5  # of a cell: from here one correction of third order leaves about 1e-13 of it
_LEAST = 1e-11  # relative error left in the square of a least distance
_MISFIT = 0.03  # of |C|, several times what kernels.cells leaves between a cubic and the curve


@compiled()
def tabulate(nodes: Array, kinds: Array, count: int, table: Array) -> None:
    """Fill the first count columns of a table. The slope of |R| is exactly 0 where it has an extremum: at large K
    what rounding leaves of it would decide on the sign of α + K β.
    """
    for k in range(count):
        node = nodes[k]
        for inverse in range(2):
            a, b, da, db = _stationarity(node, inverse)
            row = _DIRECT + inverse * (_INVERSE - _DIRECT)
            b = 0.0 if kinds[k] & EXTREMUM else b
            table[row, k], table[row + 1, k], table[row + 2, k], table[row + 3, k] = a, b, da, db
            size = 1.0 / node[SIZE] if inverse else node[SIZE]
            table[row + _RE, k], table[row + _IM, k] = size * node[UNIT], size * node[TURN] * (1.0 - 2.0 * inverse)
            if k > 0:
                table[row + _REACH, k - 1] = _reach(table, row, nodes, k, inverse)
        table[_LEVELS, k], table[_SQUARE, k] = node[LEVEL], 1.0 / (node[SIZE] * node[SIZE])


@compiled()
def _reach(table: Array, row: int, nodes: Array, k: int, inverse: int) -> float:
    """How far C may leave its chord before node k: the cubic through both ends, and room for the misfit cells allow."""
    length, most, size = (1.0 - 2.0 * inverse) * (nodes[k, PLACE] - nodes[k - 1, PLACE]), 0.0, 0.0
    chord, chord_i = table[row + _RE, k] - table[row + _RE, k - 1], table[row + _IM, k] - table[row + _IM, k - 1]
    for end in range(k - 1, k + 1):
        c, ci, slope, twist = table[row + _RE, end], table[row + _IM, end], nodes[end, SLOPE], nodes[end, TWIST]
        real = length * (c * slope - ci * twist) - chord
        imaginary = length * (c * twist + ci * slope) - chord_i
        most = max(most, real * real + imaginary * imaginary)
        size = max(size, c * c + ci * ci)
    return 0.25 * math.sqrt(most) + _MISFIT * math.sqrt(size)


@compiled()
def _stationarity(node: Array, inverse: int) -> tuple[float, float, float, float]:
    """Re C'/|C|, Re(C' conj C)/|C| and their derivatives at a node, for C = R or 1/R."""
    sign = 1.0 - 2.0 * inverse
    size = 1.0 / node[SIZE] if inverse else node[SIZE]
    slope, twist, turn = sign * node[SLOPE], sign * node[TWIST], sign * node[TURN]
    bend, curl = sign * node[BEND], sign * node[CURL]
    first = node[UNIT] * slope - turn * twist
    change = node[UNIT] * (slope * slope - twist * twist + bend) - turn * (2.0 * slope * twist + curl)
    return first, size * slope, change - first * slope, size * (slope * slope + bend)


@compiled()
def _residual(node: Array, kind: int, a: float, b: float) -> tuple[float, float, float]:
    """A function of x that vanishes at a crossing, with two derivatives. a, b : see locate."""
    if kind == _AT_LEVEL:
        return node[LEVEL] - a, node[SLOPE], node[BEND]
    if kind == _AT_REAL:
        return math.atan(node[TURN] / node[UNIT]), node[TWIST], node[CURL]
    inverse = 1.0 / node[SIZE]
    first, second, d_first, d_second = _stationarity(node, np.int64(1))
    slope = a * first + second
    bend = a * d_first + d_second - slope * node[SLOPE]
    return inverse * inverse + 2.0 * a * inverse * node[UNIT] + (a * a - b), 2.0 * inverse * slope, 2.0 * inverse * bend


@compiled()
def _locate(curve: Curve, left: Array, right: Array, kind: int, a: float, b: float, node: Array) -> float:
    """Put a node beside the crossing between left and right and return the small step from it to the crossing.

    Halley's steps inside a bracket. a, b : ln|R| wanted and nothing; nothing; the gain K and |K + 1/R|² wanted.
    """
    f0, g0, _ = _residual(left, kind, a, b)
    f1, g1, _ = _residual(right, kind, a, b)
    low, high = left[PLACE], right[PLACE]
    length = high - low
    x = low + length * cubic_root(f0, g0 * length, f1, g1 * length)
    for _ in range(100):
        put(curve, x, node)
        f, g, c = _residual(node, kind, a, b)
        if (f < 0.0) == (f0 < 0.0):
            low = x
        else:
            high = x
        step: float = -f * g / (g * g - 0.5 * f * c)
        if not low <= x + step <= high:
            step = 0.5 * (low + high) - x
        elif abs(step) <= _CLOSE * length:
            return step
        x += step
    return 0.0


@compiled()
def critical_gains(curve: Curve, nodes: Array, kinds: Array, count: int, spare: Array, critical: Array) -> int:
    """Gains K with 1 + K R = 0 somewhere inside the half circle, of either sign; how many."""
    total = 0
    for k in range(count - 1):
        if kinds[k] & GAP or (nodes[k, TURN] < 0.0) == (nodes[k + 1, TURN] < 0.0):
            continue
        step = _locate(curve, nodes[k], nodes[k + 1], np.int64(_AT_REAL), 0.0, 0.0, spare)
        level = spare[LEVEL] + step * (spare[SLOPE] + 0.5 * step * spare[BEND])
        critical[total] = -math.copysign(math.exp(-level), spare[UNIT])
        total += 1
    return total


@compiled()
def _cell_of(table: Array, row: int, a: float, b: float, first: int, last: int) -> int:
    """The cell of a run, whose ends differ in the sign of a*table[row] + b*table[row + 1], that holds the change."""
    low, high = first, last
    negative = a * table[row, first] + b * table[row + 1, first] < 0.0
    while high - low > 1:
        middle = (low + high) >> 1
        if (a * table[row, middle] + b * table[row + 1, middle] < 0.0) == negative:
            low = middle
        else:
            high = middle
    return low


@compiled()
def _level_cell(table: Array, level: float, first: int, last: int) -> int:
    """The cell of a run of monotone |R| in which ln|R| passes a level."""
    low, high = first, last
    under = table[_LEVELS, first] < level
    while high - low > 1:
        middle = (low + high) >> 1
        if (table[_LEVELS, middle] < level) == under:
            low = middle
        else:
            high = middle
    return low


@compiled()
def crossovers(
    curve: Curve, nodes: Array, table: Array, runs: Array, counts: Array, gain: float, spare: Array
) -> tuple[float, float, float]:
    """Phase margin [rad], least of (phase in [0, 2π))/θ, highest θ with |K R| = 1; inf, inf, -1 when there is none."""
    level, turned = -math.log(abs(gain)), -math.copysign(1.0, gain)
    margin = least = math.inf
    highest = -1.0
    for r in range(counts[_MONOTONE]):
        first, last = runs[_MONOTONE, r, 0], runs[_MONOTONE, r, 1]
        if (table[_LEVELS, first] < level) == (table[_LEVELS, last] < level):
            continue
        k = _level_cell(table, level, first, last)
        step = _locate(curve, nodes[k], nodes[k + 1], np.int64(_AT_LEVEL), level, 0.0, spare)
        phase = math.atan2(turned * spare[TURN], turned * spare[UNIT])
        phase += step * (spare[TWIST] + 0.5 * step * spare[CURL])
        if phase > math.pi:
            phase -= 2.0 * math.pi
        elif phase <= -math.pi:
            phase += 2.0 * math.pi
        angle = angle_of(spare[PLACE] + step)
        if abs(phase) < abs(margin):
            margin = phase
        least = min(least, (phase if phase >= 0.0 else phase + 2.0 * math.pi) / angle)
        highest = max(highest, angle)
    return margin, least, highest


@compiled()
def _extreme_distance(
    curve: Curve, table: Array, inverse: int, a: float, b: float, nodes: Array, k: int, spare: Array
) -> float:
    """|a + b C|² at its stationary place between nodes k and k + 1, C = R or 1/R; spare is put beside the place.

    Newton's steps on half the derivative inside a bracket; the last value is corrected by the parabola through it.
    """
    row = _INVERSE if inverse else _DIRECT
    low, high = nodes[k, PLACE], nodes[k + 1, PLACE]
    length = high - low
    y, z = a * table[row, k] + b * table[row + 1, k], a * table[row, k + 1] + b * table[row + 1, k + 1]
    dy, dz = a * table[row + 2, k] + b * table[row + 3, k], a * table[row + 2, k + 1] + b * table[row + 3, k + 1]
    x = low + length * cubic_root(y, dy * length, z, dz * length)
    for _ in range(100):
        put(curve, x, spare)
        first, second, d_first, d_second = _stationarity(spare, inverse)
        size, turn = (1.0 / spare[SIZE], -spare[TURN]) if inverse else (spare[SIZE], spare[TURN])
        real, imaginary = a + b * size * spare[UNIT], b * size * turn
        value: float = real * real + imaginary * imaginary
        slope = a * first + b * second
        bend = a * d_first + b * d_second + slope * (-spare[SLOPE] if inverse else spare[SLOPE])
        if (slope < 0.0) == (y < 0.0):
            low = x
        else:
            high = x
        step = -slope / bend
        if not low <= x + step <= high:
            step = 0.5 * (low + high) - x
            if high - low <= 1e-12 * length:
                return value
        else:
            correction: float = b * size * slope * step
            if abs(correction * step) <= _LEAST * length * value:
                return value + correction
        x += step
    return value


@compiled()
def _clearance(table: Array, row: int, a: float, b: float, k: int) -> float:
    """|a + b C| is nowhere less between nodes k and k + 1: distance of the chord less the reach of the curve."""
    x, y = a + b * table[row + _RE, k], b * table[row + _IM, k]
    dx, dy = b * (table[row + _RE, k + 1] - table[row + _RE, k]), b * (table[row + _IM, k + 1] - table[row + _IM, k])
    square = dx * dx + dy * dy
    part = min(1.0, max(0.0, -(x * dx + y * dy) / square)) if square > 0.0 else 0.0
    x, y = x + part * dx, y + part * dy
    clear: float = math.sqrt(x * x + y * y) - abs(b) * table[row + _REACH, k]
    return clear


@compiled()
def least_distance(
    curve: Curve,
    nodes: Array,
    table: Array,
    runs: Array,
    counts: Array,
    inverse: int,
    gain: float,
    cells: Array,
    spare: Array,
) -> float:
    """Least |1 + K R|² or, inverse, |K + 1/R|² over the stationary places inside the half circle; inf if none.

    The minimum that looks least is computed first; others only if they could be less. Extrema of |R| count as
    well: one on the real axis is stationary for every gain. cells : room for indices.
    """
    a, b = (gain, 1.0) if inverse else (1.0, gain)
    own, row = _DIRECT_RUNS + inverse, _DIRECT + inverse * (_INVERSE - _DIRECT)
    found, first_of_all, lowest, least = 0, 0, math.inf, math.inf
    for r in range(counts[own]):
        first, last = runs[own, r, 0], runs[own, r, 1]
        start = b * (a * table[row, first] + b * table[row + 1, first])
        end = b * (a * table[row, last] + b * table[row + 1, last])
        if table[row + 1, last] == 0.0:
            real, imaginary = a + b * table[row + _RE, last], b * table[row + _IM, last]
            least = min(least, real * real + imaginary * imaginary)
        if start < 0.0 <= end:
            cells[found] = _cell_of(table, row, a, b, first, last)
            if counts[own] > 1:
                clear = _clearance(table, row, a, b, cells[found])
                if not clear >= lowest:
                    lowest, first_of_all = clear, found
            found += 1
    for k in range(found):
        place = (k + first_of_all) % found
        clear = _clearance(table, row, a, b, cells[place]) if k > 0 else 0.0
        if k == 0 or not (clear > 0.0 and clear * clear > least):
            least = min(least, _extreme_distance(curve, table, inverse, a, b, nodes, cells[place], spare))
    return least


@compiled()
def first_exit(
    curve: Curve, nodes: Array, table: Array, runs: Array, counts: Array, gain: float, square: float, spares: Array
) -> float:
    """Lowest θ at which |K + 1/R|² rises to a value it is below of at θ = 0; inf when there is none.

    Either a node is outside, or a largest distance between two nodes inside is.
    """
    found, right = spares[0], spares[1]
    count = runs[_INVERSE_RUNS, counts[_INVERSE_RUNS] - 1, 1] + 1
    outside, poked = 1, False
    rest = gain * gain - square
    while outside < count and table[_SQUARE, outside] + 2.0 * gain * table[_INVERSE + _RE, outside] + rest < 0.0:
        outside += 1
    for r in range(counts[_INVERSE_RUNS]):
        first, last = runs[_INVERSE_RUNS, r, 0], runs[_INVERSE_RUNS, r, 1]
        if first >= outside:
            break
        start = gain * table[_INVERSE, first] + table[_INVERSE + 1, first]
        end = gain * table[_INVERSE, last] + table[_INVERSE + 1, last]
        if not start >= 0.0 > end:
            continue
        k = _cell_of(table, np.int64(_INVERSE), gain, 1.0, first, last)
        if k + 1 < outside:
            top = _extreme_distance(curve, table, np.int64(1), gain, 1.0, nodes, k, right)
            if top >= square:
                outside, poked = k + 1, True
                break
    if outside == count:
        return math.inf
    if not poked:
        right = nodes[outside]
    step = _locate(curve, nodes[outside - 1], right, np.int64(_AT_DISTANCE), gain, square, found)
    angle: float = angle_of(found[PLACE] + step)
    return angle


@compiled()
def gains_clear_of_gaps(nodes: Array, kinds: Array, count: int) -> tuple[float, float]:
    """Between which |K| the loop has |L| > 2 beside each undamped pole's gap and |L| < 1/2 beside each zero's."""
    least, most = 0.0, math.inf
    for k in range(count - 1):
        if kinds[k] & GAP:
            if nodes[k, SLOPE] > 0.0:
                least = max(least, 2.0 / min(nodes[k, SIZE], nodes[k + 1, SIZE]))
            else:
                most = min(most, 0.5 / max(nodes[k, SIZE], nodes[k + 1, SIZE]))
    return least, most
