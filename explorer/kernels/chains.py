"""One sampled period as real numbers: triangular realisations in, chains in w = z - 1 and their outputs out.

The sampled plant becomes the chain of first-order sections 1/(w - w_1), 1/((w - w_1)(w - w_2)), … over its exact
poles w_i = exp(λ_i T) - 1, a pair of conjugate ones with two real states: x <- x + d·x + l·(state before) + s·(state
after). What lies between two samples is a fixed linear function of these states and of the two inputs that are held
in the period (kernels.periods). Plain NumPy, all pairs of scenario and period at once, the pairs along the last axis.

Sources: Åström and Wittenmark, Computer-Controlled Systems, 3rd ed., §2.3 (sampling with dead time); Newton's form of
(wI - D)^-1, Higham, Functions of Matrices, 2008, §1.2; McCurdy, Ng and Parlett (1984), Math. Comp. 43, 501-528
(exponential of a triangle with its exact diagonal).
"""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

MEASURED, SAMPLED, ENDING, SPREAD = 0, 1, 2, 3  # rows of `outputs`
_HALF = 0.5  # largest norm for the Taylor series
_NEGLECTED = 1e-19  # first term left out, relative to the corner entry, the smallest
_MOST_SQUARINGS = 1100

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


class Chains(NamedTuple):
    """chain : (3, n, K) d, l and s. before, after : (n+1, n+2, K) [held input, plant's state] at the sample and when
    the input changes, of (chain's states, input before and after the change); basis : (n, n, K) plant's states of the
    chain's.
    """

    chain: Real
    before: Complex
    after: Complex
    basis: Complex


def chains_of_plants(augmented: Complex, period: Real, advance: Real) -> Chains:
    """Chains of K pairs.

    augmented : (n+1, n+1, K) [[0, 0], [start, state]] [1/s], lower triangular; period, advance : (K,) [s], the total
    dead time is a whole number of periods less `advance`.
    """
    n = len(augmented) - 1
    times = np.concatenate([period, advance, period - advance])
    powers = exponentials(np.tile(augmented, 3), times)
    full, part, rest = (powers[..., k * len(period) : (k + 1) * len(period)] for k in range(3))
    # what one held sample adds before its change, and after it one sample later
    driven = product(part[1:, 1:], rest[1:, :1])[:, 0] + product(full[1:, 1:], part[1:, :1])[:, 0]
    chain, basis = _chain(augmented, full, period, driven)
    before, after = (np.zeros((n + 1, n + 2, len(period)), complex) for _ in range(2))
    before[0, n] = after[0, n + 1] = 1.0
    before[1:, :n], before[1:, n] = basis, part[1:, 0]
    after[1:, : n + 1] = product(rest[1:], before[:, : n + 1])
    return Chains(chain, before, after, basis)


def product(left: Any, right: Any) -> Any:
    """Matrices (i, k, K) times (k, j, K), summed one by one: the same numbers however many pairs there are."""
    total = left[:, 0, None] * right[None, 0]
    for k in range(1, left.shape[1]):
        total = total + left[:, k, None] * right[None, k]
    return total


def exponentials(matrix: Complex, time: Real) -> Complex:
    """exp(matrix * time) of lower triangular matrices (n, n, K) and times (K,), by scaling and squaring.

    The diagonal and the first subdiagonal are put in exactly after every squaring.
    """
    size = len(matrix)
    norm = np.abs(matrix).sum(axis=1).max(axis=0) * np.abs(time)
    with np.errstate(divide="ignore"):
        squarings = np.clip(np.ceil(np.log2(norm / _HALF)), 0, _MOST_SQUARINGS)
    scaled = time / 2.0**squarings
    unit = np.eye(size, dtype=complex)[:, :, None]
    result: Complex = np.zeros(matrix.shape, complex) + unit
    for term in range(_terms(size - 1), 0, -1):  # Horner: I + X(I + X/2(I + X/3(...)))
        result = product(matrix, result) * (scaled / term) + unit
    _put_exact(matrix, scaled, result)
    for squaring in range(int(squarings.max(initial=0))):
        still = np.flatnonzero(squaring < squarings)
        squared = product(result[..., still], result[..., still])
        _put_exact(matrix[..., still], time[still] / 2.0 ** (squarings[still] - 1 - squaring), squared)
        result[..., still] = squared
    return result


def _terms(corner: int) -> int:
    """Taylor terms that give an entry of the size norm**corner/corner! to rounding."""
    term, rest = corner, 1.0
    while rest > _NEGLECTED:
        term += 1
        rest *= _HALF / term
    return term


def _put_exact(matrix: Complex, time: Real, result: Complex) -> None:
    size = len(matrix)
    exponents = np.stack([matrix[i, i] for i in range(size)]) * time
    grown = np.exp(exponents)
    for i in range(size):
        result[i, i] = grown[i]
        if i > 0:
            x, y = exponents[i], exponents[i - 1]
            low = x.real <= y.real  # from the side that cannot overflow
            gap = np.where(low, x - y, y - x)
            with np.errstate(divide="ignore", invalid="ignore"):
                rise = np.where(gap == 0, 1.0, moved(gap) / gap)
            result[i, i - 1] = matrix[i, i - 1] * time * np.where(low, grown[i - 1], grown[i]) * rise


def moved(x: Any) -> Any:
    """exp(x) - 1 without cancellation."""
    half = np.sin(0.5 * x.imag)
    real = np.expm1(x.real) * np.cos(x.imag) - 2.0 * half * half
    return real + 1j * (np.exp(x.real) * np.sin(x.imag))


def _chain(augmented: Complex, full: Complex, time: Real, driven: Complex) -> tuple[Real, Complex]:
    """Chain coefficients (3, n, K), and the plant's state at a sample as `basis` (n, n, K) times the chain's state."""
    n, pairs = driven.shape
    exponents, kinds = _paired(np.stack([augmented[i + 1, i + 1] for i in range(n)]).reshape(n, pairs))
    roots = moved(exponents * time)
    rate = np.abs(roots).max(axis=0, initial=0.0)
    rate = np.where(rate > 0.0, rate, 1.0)
    diagonal = moved(np.stack([augmented[i + 1, i + 1] for i in range(n)]).reshape(n, pairs) * time)
    chain, basis, vector = np.zeros((3, n, pairs)), np.zeros((n, n, pairs), complex), driven
    for j in range(n):
        chain[0, j], chain[1, j] = roots[j].real, rate if j > 0 else 1.0
        chain[2, j] = np.where(kinds[j] == 1, -roots[j].imag * roots[j].imag / rate, 0.0)
        basis[:, j] = vector
        following = (diagonal - roots[j]) * vector  # (Φ - I - root) vector, its diagonal without cancellation
        for i in range(1, n):
            for k in range(i):
                following[i] += full[i + 1, k + 1] * vector[k]
        if j > 0:  # the first state of a pair is the real part alone: that one's imaginary part goes here
            turn = np.where(kinds[j] == 2, -roots[j].imag / rate, 0.0)
            basis[:, j] += 1j * turn * basis[:, j - 1]
        vector = following / rate
    return chain, basis


def _paired(own: Complex) -> tuple[Complex, NDArray[np.int64]]:
    """Eigenvalues (n, K) with conjugates side by side; 1 where a pair begins, 2 at its second, 0 for real ones."""
    exponents, kinds = own.real.astype(complex), np.zeros(own.shape, np.int64)
    for pair in np.flatnonzero((own.imag != 0).any(axis=0)):
        waiting, place = list(own[:, pair]), 0
        while waiting:
            first = waiting.pop(0)
            gaps = [abs(other.conjugate() - first) for other in waiting]
            if not gaps or min(gaps) >= abs(first.imag):  # rounding alone made it complex
                exponents[place, pair] = first.real
                place += 1
                continue
            mean = 0.5 * (first + waiting.pop(int(np.argmin(gaps))).conjugate())
            exponents[place : place + 2, pair] = mean, mean.conjugate()
            kinds[place : place + 2, pair] = 1, 2
            place += 2
    return exponents, kinds


def solved(matrix: Complex, right: Complex) -> Complex:
    """matrix^-1 right, (n, n, K) and (n, K), by elimination with row pivots; a state that nothing reaches is 0."""
    matrix, right = matrix.copy(), right.copy()
    n, every = len(right), np.arange(right.shape[-1])
    with np.errstate(divide="ignore", invalid="ignore"):
        for k in range(n):
            pivot = k + np.abs(matrix[k:, k]).argmax(axis=0)
            swapped = matrix[pivot, :, every].T.copy()
            matrix[pivot, :, every], matrix[k] = matrix[k].T, swapped
            held = right[pivot, every]
            right[pivot, every], right[k] = right[k], held
            for i in range(k + 1, n):
                factor = np.where(matrix[k, k] == 0, 0.0, matrix[i, k] / matrix[k, k])
                matrix[i] = matrix[i] - factor * matrix[k]
                right[i] = right[i] - factor * right[k]
        for k in range(n - 1, -1, -1):
            for j in range(k + 1, n):
                right[k] = right[k] - matrix[k, j] * right[j]
            right[k] = np.where(matrix[k, k] == 0, 0.0, right[k] / matrix[k, k])
    return right
