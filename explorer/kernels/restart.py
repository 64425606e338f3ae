"""Restart: the slow and rare parts of tracking, one lane at a time and one compilation for every degree.

A lane leaves the fast path when two real roots that sit in different factors are about to meet: the resultant of
the factors vanishes. Then its real roots are paired anew, history included, or the polynomial is solved afresh.
"""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.compiling import compiled

Array = NDArray[Any]


@compiled()
def forget(past: Array, here: int, degree: int) -> None:
    """Take the certificate behind the factors at `here` away."""
    for lane in range(past.shape[1]):
        past[here + degree, lane] = 0.0


@compiled()
def pair_again(past: Array, here: int, degree: int, steps: Array, index: int, lane: int) -> None:
    """Pair the lane's real roots by which neighbours meet first, in the past too, and predict again.

    Only as far back as the number of real roots stayed the same; older points repeat the oldest good one.
    """
    ages = min(index, 4)
    roots, slots = np.empty((4, degree)), np.empty(degree, np.int64)
    count = _real_roots(past, here - degree, degree, lane, roots[0], slots)
    good, other = 1, np.empty(degree, np.int64)
    while good < ages and _real_roots(past, here - (good + 1) * degree, degree, lane, roots[good], other) == count:
        same = True
        for k in range(degree):
            same &= slots[k] == other[k]
        if not same:
            break
        good += 1
    order = _pairs(roots, count, good)
    for age in range(ages):
        first = here - (age + 1) * degree
        if age >= good:  # the complex factors of a point too old repeat as well
            for row in range(degree):
                past[first + row, lane] = past[here - good * degree + row, lane]
        else:
            _put_pairs(past, first, degree, lane, roots[age], slots, order, count)
    for row in range(degree):
        total = 0.0
        for age in range(ages):
            total += steps[index, 1 + age] * past[here - (age + 1) * degree + row, lane]
        past[here + row, lane] = total


@compiled()
def _real_roots(past: Array, first: int, degree: int, lane: int, roots: Array, slots: Array) -> int:
    """Real roots of the lane's factors, descending; slots : rows they come from (u rows, and the linear row)."""
    count, used = 0, 0
    for row in range(0, degree - 1, 2):
        half = -0.5 * past[first + row, lane]
        gap = half * half - past[first + row + 1, lane]
        if gap >= 0.0:
            spread = math.sqrt(gap)
            far = half + spread if half >= 0.0 else half - spread
            roots[count], roots[count + 1] = far, (past[first + row + 1, lane] / far if far != 0.0 else 0.0)
            slots[used] = row
            count, used = count + 2, used + 1
    if degree % 2:
        roots[count] = -past[first + degree - 1, lane]
        slots[used] = degree - 1
        count, used = count + 1, used + 1
    for rest in range(used, degree):
        slots[rest] = -1
    _sort(roots, count)
    return count


@compiled()
def _sort(values: Array, count: int) -> None:
    """The first `count` values descending, in place; numpy.sort takes seconds to compile."""
    for i in range(1, count):
        value, j = values[i], i - 1
        while j >= 0 and values[j] < value:
            values[j + 1] = values[j]
            j -= 1
        values[j + 1] = value


@compiled()
def _pairs(roots: Array, count: int, good: int) -> Array:
    """An order of the sorted real roots in which neighbours that meet first stand together at the front."""
    time = np.empty(max(count - 1, 1))
    for k in range(count - 1):
        gap = roots[0, k] - roots[0, k + 1]
        before = roots[1, k] - roots[1, k + 1] if good > 1 else gap
        time[k] = gap / (before - gap) if before > gap else math.inf
        if good == 1:
            time[k] = gap
    free = np.ones(max(count, 1), np.bool_)
    order, filled = np.empty(max(count, 1), np.int64), 0
    for _ in range(count // 2):
        best, soonest = -1, math.inf
        for k in range(count - 1):
            if free[k] and free[k + 1] and time[k] < soonest:
                best, soonest = k, time[k]
        if best < 0:
            break
        free[best] = free[best + 1] = False
        order[filled], order[filled + 1] = best, best + 1
        filled += 2
    for k in range(count):
        if free[k]:
            order[filled] = k
            filled += 1
    return order


@compiled()
def _put_pairs(
    past: Array, first: int, degree: int, lane: int, roots: Array, slots: Array, order: Array, count: int
) -> None:
    for used in range(count // 2):
        one, two = roots[order[2 * used]], roots[order[2 * used + 1]]
        past[first + slots[used], lane], past[first + slots[used] + 1, lane] = -(one + two), one * two
    if degree % 2:
        past[first + degree - 1, lane] = -roots[order[count - 1]]


@compiled()
def solve_afresh(
    constant: Array, slope: Array, at: int, degree: int, gain: float, lane: int, past: Array, here: int
) -> None:
    """All roots of the lane's polynomial (rows from `at` on) by simultaneous iteration, as factors at `here`.

    Aberth (1973), Math. Comp. 27, 339-344; start radii from the Newton polygon, Bini (1996), Numer. Algorithms 13.
    """
    target, leading = np.empty(degree), constant[at, lane] + gain * slope[at, lane]
    for row in range(degree):
        target[row] = (constant[at + row + 1, lane] + gain * slope[at + row + 1, lane]) / leading
    roots = _start(target)
    for _ in range(60):
        largest = 0.0
        for i in range(degree):
            x = roots[i]
            value, tangent = 1.0 + 0.0j, 0.0 + 0.0j
            for k in range(degree):
                tangent = tangent * x + value
                value = value * x + target[k]
            if value == 0.0:
                continue
            repulsion = 0.0 + 0.0j
            for j in range(degree):
                if j != i and roots[j] != x:
                    repulsion += 1.0 / (x - roots[j])
            step = value / (tangent - value * repulsion)
            if not (math.isfinite(step.real) and math.isfinite(step.imag)):
                continue
            roots[i] = x - step
            largest = max(largest, abs(step) / max(abs(x), 1e-300))
        if largest < 1e-15:
            break
    _group(roots, lane, past, here)


@compiled()
def _start(target: Array) -> Array:
    """Start values on the circles of the upper hull of (k, log|coefficient of x^k|)."""
    degree = target.shape[0]
    height = np.full(degree + 1, -math.inf)
    height[degree] = 0.0
    for k in range(degree):
        size = abs(target[degree - 1 - k])
        if size > 0.0:
            height[k] = math.log(size)
    roots = np.zeros(degree, np.complex128)
    left, filled = 0, 0
    while left < degree and height[left] == -math.inf:
        left, filled = left + 1, filled + 1  # exact roots at 0
    while left < degree:
        right, steepest = left + 1, -math.inf
        for k in range(left + 1, degree + 1):
            if height[k] > -math.inf and (height[k] - height[left]) / (k - left) >= steepest:
                right, steepest = k, (height[k] - height[left]) / (k - left)
        radius = math.exp(-steepest)
        for k in range(right - left):
            turn = 2.0 * math.pi * (k + 0.3) / (right - left) + 0.7 * left
            roots[filled] = radius * complex(math.cos(turn), math.sin(turn))
            filled += 1
        left = right
    return roots


@compiled()
def _group(roots: Array, lane: int, past: Array, here: int) -> None:
    """Roots to real factors: those off the real axis with their mirror images, real ones with their neighbours."""
    degree = roots.shape[0]
    free = np.ones(degree, np.bool_)
    row, reals = 0, np.empty(degree)
    for i in range(degree):
        x = roots[i]
        if not free[i] or abs(x.imag) <= 1e-9 * abs(x):
            continue
        mirror, nearest = -1, math.inf
        for j in range(degree):
            if j != i and free[j] and abs(roots[j] - x.conjugate()) < nearest:
                mirror, nearest = j, abs(roots[j] - x.conjugate())
        if mirror < 0 or nearest > 1e-3 * abs(x.imag) or row + 1 >= degree:
            continue
        free[i] = free[mirror] = False
        past[here + row, lane], past[here + row + 1, lane] = -2.0 * x.real, x.real * x.real + x.imag * x.imag
        row += 2
    count = 0
    for i in range(degree):
        if free[i]:
            reals[count] = roots[i].real
            count += 1
    _sort(reals, count)
    for k in range(0, count - 1, 2):
        past[here + row, lane], past[here + row + 1, lane] = -(reals[k] + reals[k + 1]), reals[k] * reals[k + 1]
        row += 2
    if degree % 2:
        past[here + degree - 1, lane] = -reals[count - 1]
