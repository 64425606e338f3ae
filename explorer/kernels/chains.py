"""One sampled period as real numbers: a triangular realisation in, a chain in w = z - 1 and its outputs out.

The sampled plant becomes the chain of first-order sections 1/(w - w_1), 1/((w - w_1)(w - w_2)), … over its exact
poles w_i = exp(λ_i T) - 1, a pair of conjugate ones with two real states: x <- x + d·x + l·(state before) + s·(state
after). What lies between two samples is a fixed linear function of these states and of the two inputs that are held
in the period, stored as Bernstein polynomials over pieces so short that the rest of the Taylor series is rounding.

Sources: Åström and Wittenmark, Computer-Controlled Systems, 3rd ed., §2.3 (sampling with dead time); Newton's form of
(wI - D)^-1, Higham, Functions of Matrices, 2008, §1.2.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.apart import apart
from explorer.kernels.bernstein import DEGREE, ROOM, from_centred_powers, highest
from explorer.kernels.compiling import compiled
from explorer.kernels.hold import exponential_of_triangle

MOST_PIECES = 48
MEASURED, SAMPLED, ENDING, SPREAD = 0, 1, 2, 3  # rows of `outputs`
_REST = 2e-13  # of an output's largest coefficient: what a piece may leave of the Taylor series
_CENTRED = from_centred_powers()


@compiled(cache=False)
def _exponential(matrix: NDArray[Any], time: float, result: NDArray[Any], spare: NDArray[Any]) -> None:
    apart()
    exponential_of_triangle(matrix, time, result, spare)


@compiled(cache=False)
def describe(
    augmented: NDArray[Any],
    measured: NDArray[Any],
    seen: NDArray[Any],
    period: float,
    advance: float,
    chain: NDArray[Any],
    outputs: NDArray[Any],
    edges: NDArray[Any],
    table: NDArray[Any],
    late_load: float,
    begun: NDArray[Any],
) -> tuple[int, float]:
    """Chain, outputs and pieces of one period; (number of pieces, largest |y| while a load step has just begun).

    Parameters
    ----------
    augmented : (n+1, n+1) complex [[0, 0], [start, state]] [1/s], lower triangular; measured, seen : (n+1,) output
        rows [direct, output] of the sampler's input and of the plant's output y.
    period, advance : [s], the total dead time is a whole number of periods less `advance`.
    chain : (3, n) out, d, l and s. outputs : (4, n+2) out, over (states, held input before, after its change):
        MEASURED at the sample, SAMPLED y there, ENDING y just before the next, SPREAD the most by which y leaves the
        straight line between these two, entry by entry.
    edges : (MOST_PIECES+1,) out, ends of the pieces in periods; table : (MOST_PIECES, DEGREE+1, n+2) out.
    late_load : [s] by which a load step's first effect on y precedes a sample (0: at it).
    begun : (n,) out, states at that sample. No pieces (0) when MOST_PIECES are not enough or a number overflows.
    """
    apart()
    n = augmented.shape[0] - 1
    work = np.zeros((4, n + 1, n + 1), np.complex128)
    full, part, rest = work[0], work[1], work[2]
    for which, time in enumerate((period, advance, period - advance)):  # one place to call from: quick to compile
        _exponential(augmented, time, work[which], work[3])
    basis, driven = np.zeros((n, n), np.complex128), np.zeros(n, np.complex128)
    for i in range(n):  # what one held sample adds before its change, and after it one sample later
        for j in range(i + 1):
            driven[i] += part[i + 1, j + 1] * rest[j + 1, 0] + full[i + 1, j + 1] * part[j + 1, 0]
    _chain(augmented, full, period, driven, chain, basis)
    starts = np.zeros((3, n + 1, n + 2), np.complex128)
    _starts(basis, part, rest, starts)
    for column in range(n + 2):
        total = measured[0] * starts[0, 0, column]
        for i in range(n):
            total += measured[i + 1] * starts[0, i + 1, column]
        outputs[MEASURED, column] = total.real
    lengths, count, most = (late_load, period - advance, advance), 0, 0.0
    for turn in range(3):  # the begin of a load step, then both parts of a period
        if lengths[turn] == 0.0 or (turn == 2 and count == 0):
            continue
        begin = period - advance if turn == 2 else 0.0
        count = _pieces(augmented, seen, starts[turn - 1], begin, lengths[turn], count, edges, table, work)
        if turn == 0:
            most = _largest(count, table)
            count = 0
    for piece in range(count):
        edges[piece + 1] /= period
    edges[count] = 1.0
    if count > 0:
        _chords(count, edges, table, outputs)
    _exponential(augmented, late_load, work[0], work[3])
    right = work[0, 1:, 0] - part[1:, 0]
    _solve(basis, right)
    for i in range(n):
        begun[i] = right[i].real
    return count, most


@compiled(cache=False)
def _chain(
    augmented: NDArray[Any], full: NDArray[Any], time: float, driven: NDArray[Any], chain: NDArray[Any],
    basis: NDArray[Any],
) -> None:  # fmt: skip
    """Chain coefficients (3, n), and the plant's state at a sample as `basis` times the chain's state."""
    apart()
    n = basis.shape[0]
    exponents = np.zeros(n + 1, np.complex128)
    pairs = _paired(augmented, exponents)
    roots = np.zeros(n, np.complex128)
    largest = 0.0
    for j in range(n):
        roots[j] = _moved(exponents[j] * time)
        largest = max(largest, abs(roots[j]))
    rate = largest if largest > 0.0 else 1.0
    vector, following = driven.copy(), driven.copy()
    for j in range(n):
        root = roots[j]
        chain[0, j], chain[1, j], chain[2, j] = root.real, rate if j > 0 else 1.0, 0.0
        for i in range(n):
            basis[i, j] = vector[i]
        if pairs[j] == 1:
            chain[2, j] = -root.imag * root.imag / rate
        _less_root(augmented, full, time, root, vector, following, rate)
        if pairs[j] == 2:  # its first state is the real part alone: that one's imaginary part goes here
            turn = complex(0.0, -root.imag / rate)
            for i in range(n):
                basis[i, j] += turn * basis[i, j - 1]
        for i in range(n):
            vector[i] = following[i]


@compiled(cache=False)
def _moved(x: complex) -> complex:
    """exp(x) - 1 without cancellation."""
    half = np.sin(0.5 * x.imag)
    return complex(np.expm1(x.real) * np.cos(x.imag) - 2.0 * half * half, np.exp(x.real) * np.sin(x.imag))


@compiled(cache=False)
def _paired(augmented: NDArray[Any], exponents: NDArray[Any]) -> NDArray[Any]:
    """The eigenvalues with conjugates side by side; 1 where a pair begins, 2 at its second, 0 for real ones."""
    n = augmented.shape[0] - 1
    pairs, used = np.zeros(n + 1, np.int64), np.zeros(n, np.int64)
    place = 0
    for i in range(n):
        if used[i]:
            continue
        own = augmented[i + 1, i + 1]
        partner, distance = -1, abs(own.imag)
        for j in range(i + 1, n):
            gap = abs(augmented[j + 1, j + 1].conjugate() - own)
            if not used[j] and gap < distance:
                partner, distance = j, gap
        if partner < 0:  # rounding alone made it complex
            exponents[place] = own.real
            place += 1
        else:
            used[partner] = 1
            exponents[place] = 0.5 * (own + augmented[partner + 1, partner + 1].conjugate())
            exponents[place + 1] = exponents[place].conjugate()
            pairs[place], pairs[place + 1] = 1, 2
            place += 2
    return pairs


@compiled(cache=False)
def _less_root(
    augmented: NDArray[Any], full: NDArray[Any], time: float, root: complex, vector: NDArray[Any],
    result: NDArray[Any], rate: float,
) -> None:  # fmt: skip
    """result = (Φ - I - root) vector / rate, with the diagonal of Φ - I formed without cancellation."""
    for i in range(vector.shape[0]):
        total = (_moved(augmented[i + 1, i + 1] * time) - root) * vector[i]
        for j in range(i):
            total += full[i + 1, j + 1] * vector[j]
        result[i] = total / rate


@compiled(cache=False)
def _starts(basis: NDArray[Any], part: NDArray[Any], rest: NDArray[Any], starts: NDArray[Any]) -> None:
    """[held input, plant's state] (n+1) of (chain, inputs) (n+2): at the sample, when the input changes, for a load."""
    n = basis.shape[0]
    before, after = starts[0], starts[1]
    before[0, n], after[0, n + 1], starts[2, 0, 0] = 1.0, 1.0, 1.0
    for i in range(n):
        for j in range(n):
            before[i + 1, j] = basis[i, j]
        before[i + 1, n] = part[i + 1, 0]
    for i in range(1, n + 1):
        for column in range(n + 1):
            for j in range(i + 1):
                after[i, column] += rest[i, j] * before[j, column]


@compiled(cache=False)
def _pieces(
    augmented: NDArray[Any], seen: NDArray[Any], start: NDArray[Any], first: float, length: float, count: int,
    edges: NDArray[Any], table: NDArray[Any], work: NDArray[Any],
) -> int:  # fmt: skip
    """Append pieces for a stretch of constant input; their number so far, 0 when there is no room. work[2:] is used."""
    apart()
    width, position, step = start.shape[1], 0.0, length
    edges[count] = first
    terms, largest = np.zeros((3, DEGREE + 2, width)), np.zeros(width)
    for _ in range(60 + 2 * MOST_PIECES):
        step = min(step, length - position)
        for point in range(3):
            _exponential(augmented, position + 0.5 * point * step, work[2], work[3])
            _taylor(augmented, seen, work[2], 0.5 * step, start, terms[point])
            for column in range(width):
                largest[column] = max(largest[column], abs(terms[point, 0, column]))
        good = True
        for column in range(width):
            rest = max(abs(terms[0, DEGREE + 1, column]), abs(terms[2, DEGREE + 1, column]))
            good = good and rest <= 0.5 * _REST * largest[column]
        if not good:
            step *= 0.5
            continue
        if count == edges.shape[0] - 1:
            return 0
        for i in range(DEGREE + 1):
            for column in range(width):
                total = 0.0
                for j in range(DEGREE + 1):
                    total += _CENTRED[i, j] * terms[1, j, column]
                table[count, i, column] = total
        count += 1
        position += step
        edges[count] = first + position
        if position >= length * (1.0 - 1e-14):
            return count
        step *= 2.0
    return 0


@compiled(cache=False)
def _taylor(
    augmented: NDArray[Any], seen: NDArray[Any], power: NDArray[Any], half: float, start: NDArray[Any],
    terms: NDArray[Any],
) -> None:  # fmt: skip
    """terms[j] = seen · power · (augmented half)^j/j! · start, real, for j up to DEGREE + 1."""
    apart()
    size = augmented.shape[0]
    row = np.zeros(size, np.complex128)
    for j in range(size):
        for i in range(j, size):
            row[j] += seen[i] * power[i, j]
    for term in range(DEGREE + 2):
        for column in range(start.shape[1]):
            total = 0.0
            for i in range(size):
                total += (row[i] * start[i, column]).real
            terms[term, column] = total
        for j in range(size):  # ascending: entries after j are still those of this term
            following = 0.0 * row[j]
            for i in range(j, size):
                following += row[i] * augmented[i, j]
            row[j] = following * (half / (term + 1))


@compiled(cache=False)
def _chords(count: int, edges: NDArray[Any], table: NDArray[Any], outputs: NDArray[Any]) -> None:
    """SAMPLED, ENDING and SPREAD of the outputs from the pieces."""
    for column in range(table.shape[2]):
        begin, end, most = table[0, 0, column], table[count - 1, DEGREE, column], 0.0
        for piece in range(count):
            for i in range(DEGREE + 1):
                place = edges[piece] + (edges[piece + 1] - edges[piece]) * i / DEGREE
                most = max(most, abs(table[piece, i, column] - begin - (end - begin) * place))
        outputs[SAMPLED, column], outputs[ENDING, column] = begin, end
        outputs[SPREAD, column] = most + _REST * max(abs(begin), abs(end))


@compiled(cache=False)
def _largest(count: int, table: NDArray[Any]) -> float:
    """Largest |first column| over the pieces; nan when there are none."""
    apart()
    work, slope = np.zeros((ROOM, DEGREE + 3)), np.zeros(DEGREE + 1)
    most, curve = 0.0, np.zeros(DEGREE + 1)
    for piece in range(count):
        for sign in (1.0, -1.0):
            for i in range(DEGREE + 1):
                curve[i] = sign * table[piece, i, 0]
            most = highest(curve, most, work, slope)[0]
    return most if count > 0 else np.nan


@compiled(cache=False)
def _solve(matrix: NDArray[Any], right: NDArray[Any]) -> None:
    """right = matrix^-1 right by elimination with row pivots; a state that nothing reaches is 0."""
    apart()
    n = right.shape[0]
    for k in range(n):
        pivot = k
        for i in range(k + 1, n):
            if abs(matrix[i, k]) > abs(matrix[pivot, k]):
                pivot = i
        for j in range(n):
            matrix[k, j], matrix[pivot, j] = matrix[pivot, j], matrix[k, j]
        right[k], right[pivot] = right[pivot], right[k]
        for i in range(k + 1, n if matrix[k, k] != 0.0 else 0):
            factor = matrix[i, k] / matrix[k, k]
            for j in range(k, n):
                matrix[i, j] -= factor * matrix[k, j]
            right[i] -= factor * right[k]
    for k in range(n - 1, -1, -1):
        for j in range(k + 1, n):
            right[k] -= matrix[k, j] * right[j]
        right[k] = right[k] / matrix[k, k] if matrix[k, k] != 0.0 else 0.0 * right[k]
