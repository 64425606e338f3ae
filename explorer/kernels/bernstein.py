"""Bernstein polynomials on [0, 1]: coefficients in, highest point and crossings out, for kernels.response.

The coefficients bound the polynomial, and as many sign changes as they have, at most so many roots there are: every
search below halves the interval until that decides, so no extremum and no crossing can be missed.

Source: Farouki (2012), Computer Aided Geometric Design 29, 379-419 (variation diminishing, subdivision).
"""

from __future__ import annotations

from math import comb
from typing import Any

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.apart import apart
from explorer.kernels.compiling import compiled

DEGREE = 11
ROOM = 64  # rows of work space: one per halving, and 2**-45 is the narrowest
_NARROW = 2.0**-45
_NOISE = 4e-16  # of the largest coefficient: what rounding alone does
_ROUNDS = 100
_HALVINGS = 45
_NEWTON = 12  # the value at a peak is right to the square of the place
_CLOSE = 1e-9  # two guesses so close: the error falls faster than linearly, so the last one is far better


def from_centred_powers() -> NDArray[np.float64]:
    """(DEGREE+1, DEGREE+1): row i gives Bernstein coefficient i on [0, 1] of powers t**j, t = 2x - 1.

    Entry (i, j) is the coefficient of q**j in (1 + q)**i (1 - q)**(n-i), over the binomial (blossom of t**j).
    """
    matrix = np.zeros((DEGREE + 1, DEGREE + 1))
    for i in range(DEGREE + 1):
        for j in range(DEGREE + 1):
            total = sum(comb(i, j - k) * comb(DEGREE - i, k) * (-1) ** k for k in range(j + 1))
            matrix[i, j] = total / comb(DEGREE, j)
    return matrix


def basis_at(x: NDArray[np.float64], degree: int = DEGREE) -> NDArray[np.float64]:
    """(N, degree+1) values of the Bernstein polynomials at x (N,)."""
    powers = np.arange(degree + 1)
    counts = np.array([float(comb(degree, k)) for k in powers])
    return np.asarray(counts * x[:, None] ** powers * (1.0 - x[:, None]) ** (degree - powers))


def largest_magnitudes(
    curves: NDArray[np.float64], owner: NDArray[np.intp], owners: int
) -> NDArray[np.float64]:
    """(owners,) largest magnitude on [0, 1] of each owner's polynomials; curves (N, DEGREE+1), owner (N,). NumPy."""
    best = np.zeros(owners)
    curves, owner = np.concatenate([curves, -curves]), np.concatenate([owner, owner])
    halves = _halving()
    for _ in range(_HALVINGS):
        np.maximum.at(best, owner, np.maximum(curves[:, 0], curves[:, DEGREE]))
        higher = curves.max(axis=1) > best[owner] + _NOISE * np.abs(curves).max(axis=1)
        curves, owner = curves[higher], owner[higher]
        signs = np.sign(np.diff(curves))
        for i in range(1, DEGREE):
            signs[:, i] = np.where(signs[:, i] == 0, signs[:, i - 1], signs[:, i])
        changes = (signs[:, 1:] * signs[:, :-1] < 0).sum(axis=1)
        peak = (changes == 1) & (signs[:, 0] > 0)
        np.maximum.at(best, owner[peak], _peaks(curves[peak]))
        curves, owner = curves[changes > 1], owner[changes > 1]
        if not len(curves):
            break
        curves, owner = np.concatenate([curves @ half for half in halves]), np.concatenate([owner, owner])
    return best


def _halving() -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Two matrices: coefficients times them are those of the left and of the right half."""
    left = np.array([[comb(j, i) * 0.5**j for j in range(DEGREE + 1)] for i in range(DEGREE + 1)])
    return left, left[::-1, ::-1]


def _peaks(curves: NDArray[np.float64]) -> NDArray[np.float64]:
    """Largest value of polynomials that rise first and fall then: Newton's steps on the slope, kept in the bracket."""
    slope = np.diff(curves)
    bend = np.diff(slope) * (DEGREE - 1)
    low, high = np.zeros(len(curves)), np.ones(len(curves))
    x = np.full(len(curves), 0.5)
    for _ in range(_NEWTON):
        rise = (slope * basis_at(x, DEGREE - 1)).sum(axis=1)
        low, high = np.where(rise > 0, x, low), np.where(rise > 0, high, x)
        with np.errstate(divide="ignore", invalid="ignore"):
            following = x - rise / (bend * basis_at(x, DEGREE - 2)).sum(axis=1)
        x = np.where((following > low) & (following < high), following, 0.5 * (low + high))
    return np.asarray((curves * basis_at(x)).sum(axis=1))


@compiled(cache=False)
def value_at(c: NDArray[Any], count: int, x: float) -> float:
    """The polynomial of degree count - 1 with coefficients c[:count] at x."""
    y, power, binomial = 1.0 - x, 1.0, 1.0
    total = c[0] * y
    degree = count - 1
    for i in range(1, degree):
        power *= x
        binomial *= (degree - i + 1) / i
        total = (total + power * binomial * c[i]) * y
    return float(total + power * x * c[degree])


@compiled(cache=False)
def _halve(work: NDArray[Any], top: int) -> None:
    """Row `top` becomes the right half and row top + 1 the left half."""
    size = work.shape[1] - 2
    low, width = work[top, size], 0.5 * work[top, size + 1]
    for level in range(size):
        work[top + 1, level] = work[top, 0]
        for i in range(size - 1 - level):
            work[top, i] = 0.5 * (work[top, i] + work[top, i + 1])
    # what is left in the row after all rounds is the right half, ascending
    work[top + 1, size], work[top + 1, size + 1] = low, width
    work[top, size], work[top, size + 1] = low + width, width


@compiled(cache=False)
def _changes(c: NDArray[Any], count: int, level: float) -> int:
    """Sign changes in c - level, zeros skipped."""
    changes, last = 0, 0.0
    for i in range(count):
        value = c[i] - level
        if value != 0.0:
            if last * value < 0.0:
                changes += 1
            last = 1.0 if value > 0.0 else -1.0
    return changes


@compiled(cache=False)
def _bracketed(c: NDArray[Any], count: int, level: float) -> float:
    """The only root in [0, 1] of the polynomial less the level; false position with the Illinois weights."""
    apart()
    low, high = 0.0, 1.0
    below, above = c[0] - level, c[count - 1] - level
    if below == 0.0:
        return 0.0
    if above == 0.0:
        return 1.0
    side, before = 0, 2.0
    for _ in range(_ROUNDS):
        x = high - above * (high - low) / (above - below)
        if abs(x - before) < _CLOSE or not low < x < high:
            return float(min(max(x, low), high))
        before = x
        value = value_at(c, count, x) - level
        if value == 0.0:
            return float(x)
        if (value > 0.0) == (above > 0.0):
            high, above = x, value
            below = 0.5 * below if side == 1 else below
            side = 1
        else:
            low, below = x, value
            above = 0.5 * above if side == -1 else above
            side = -1
    return 0.5 * (low + high)


@compiled(cache=False)
def highest(c: NDArray[Any], best: float, work: NDArray[Any], slope: NDArray[Any]) -> tuple[float, float]:
    """The largest value above `best` of the polynomial c on [0, 1] and the first place of it; (best, -1.0) if none.

    work : (ROOM, DEGREE+3); slope : (>= DEGREE,) overwritten.
    """
    apart()
    size, place, noise = c.shape[0], -1.0, 0.0
    for i in range(size):
        work[0, i] = c[i]
        noise = max(noise, _NOISE * abs(c[i]))
    work[0, size], work[0, size + 1] = 0.0, 1.0
    top = 0
    while top >= 0:
        row = work[top]
        low, width = row[size], row[size + 1]
        largest = row[0]
        for i in range(1, size):
            largest = max(largest, row[i])
        if row[0] > best:
            best, place = row[0], low
        if row[size - 1] > best:
            best, place = row[size - 1], low + width
        if largest <= best + noise:
            top -= 1
            continue
        for i in range(size - 1):
            slope[i] = row[i + 1] - row[i]
        changes = _changes(slope, size - 1, 0.0)
        if changes == 1 and slope[0] > 0.0:
            x = _bracketed(slope, size - 1, 0.0)
            value = value_at(row, size, x)
            if value > best:
                best, place = value, low + x * width
        if changes <= 1 or width < _NARROW or top + 2 > work.shape[0] - 1:
            top -= 1
            continue
        _halve(work, top)
        top += 1
    return best, place


@compiled(cache=False)
def last_crossing(c: NDArray[Any], level: float, work: NDArray[Any], backwards: bool) -> float:
    """The last place in [0, 1] where the polynomial crosses the level, or the first one if backwards; -1.0 if none."""
    apart()
    size = c.shape[0]
    for i in range(size):
        work[0, i] = c[size - 1 - i] if backwards else c[i]
    work[0, size], work[0, size + 1] = 0.0, 1.0
    top, place = 0, -1.0
    while top >= 0:
        row = work[top]
        changes = _changes(row, size, level)
        if changes == 0:
            top -= 1
            continue
        if changes == 1:
            place = row[size] + row[size + 1] * _bracketed(row, size, level)
            break
        if row[size + 1] < _NARROW or top + 2 > work.shape[0] - 1:
            place = row[size]
            break
        _halve(work, top)
        _swap(work, top)
        top += 1
    return place if place < 0.0 or not backwards else 1.0 - place


@compiled(cache=False)
def _swap(work: NDArray[Any], top: int) -> None:
    for i in range(work.shape[1]):
        work[top, i], work[top + 1, i] = work[top + 1, i], work[top, i]
