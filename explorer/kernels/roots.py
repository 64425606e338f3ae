"""Closed-loop poles: polynomials from loop in, logarithms of the poles for measures out.

Companion eigenvalues by LAPACK, batched, certified coefficient by coefficient. This is the robust way that
needs no start values; nothing here depends on neighbouring points.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

SOLVED, NOT_FINITE, ILL_POSED, UNCERTIFIED, TOO_LONG = 0, 1, 2, 3, 4
STATUS_MEANING = {
    SOLVED: "solved",
    NOT_FINITE: "coefficients beyond the range of a computer number",
    ILL_POSED: "loop not well posed: the leading coefficient vanishes",
    UNCERTIFIED: "poles not certified by their residual",
    TOO_LONG: "dead time of too many samples",
}
HIGHEST_DEGREE = 48  # companion matrices beyond this are slow, and dead times that long are reported instead

# Which coefficient-wise backward error certifies a root set: rounding alone leaves about (4 + n) units; LAPACK
# is backward stable only in norm, so it is given a margin, still a thousandth of the accuracy promised.
_UNITS = 2000.0
_NEAR_ORIGIN = 0.1  # |z| below which w = z - 1 no longer resolves z


class Poles(NamedTuple):
    """log_z : (..., n) complex, s*T of each pole, principal branch; -inf for z = 0; NaN where status != 0.

    status : (...) int8, see STATUS_MEANING.
    """

    log_z: Complex
    status: NDArray[np.int8]


def poles(polynomial_w: Real, polynomial_z: Real) -> Poles:
    """Poles of many loops at once.

    Parameters
    ----------
    polynomial_w, polynomial_z : (..., n+1) float, the characteristic polynomial in w = z - 1 and again in z,
        descending powers. Both are needed: near z = 1 only w keeps its digits, near z = 0 only z does.

    Source: companion eigenvalues after balancing, Golub and Van Loan, Matrix Computations, 4th ed., §7.
    """
    shape, degree = polynomial_w.shape[:-1], polynomial_w.shape[-1] - 1
    in_w = np.ascontiguousarray(polynomial_w.reshape(-1, degree + 1))
    in_z = np.ascontiguousarray(polynomial_z.reshape(-1, degree + 1))
    status = _admitted(in_w, in_z)
    log_z = np.full((len(in_w), degree), np.nan, complex)
    good = np.flatnonzero(status == SOLVED)
    if len(good) and degree > 0:
        roots = _certified_roots(in_w[good], status, good)
        answer = logarithm_of_one_plus(roots)
        near = np.flatnonzero((np.abs(1 + roots) < _NEAR_ORIGIN).any(axis=1))
        if len(near):
            answer[near] = _with_small_poles(answer[near], roots[near], in_z[good[near]])
        log_z[good] = answer
        log_z[status != SOLVED] = np.nan
    return Poles(log_z.reshape(*shape, degree), status.reshape(shape))


def polynomial_roots(polynomial: Real) -> Complex:
    """All roots of real polynomials, (..., n+1) descending in, (..., n) complex out, conjugates adjacent.

    Degrees 1 and 2 in closed form; above, balanced companion eigenvalues. Leading coefficients must not be 0.

    """
    degree = polynomial.shape[-1] - 1
    monic = polynomial / polynomial[..., :1]
    if degree == 0:
        return np.zeros((*polynomial.shape[:-1], 0), complex)
    if degree == 1:
        return -monic[..., 1:].astype(complex)
    if degree == 2:
        return _quadratic(monic[..., 1], monic[..., 2])
    matrix = np.zeros((*monic.shape[:-1], degree, degree))
    matrix[..., 0, :] = -monic[..., 1:]
    matrix[..., np.arange(1, degree), np.arange(degree - 1)] = 1.0
    return np.linalg.eigvals(matrix).astype(complex)


def logarithm_of_one_plus(w: Complex) -> Complex:
    """log(1 + w), accurate for small |w| (numpy's complex log1p is not: it forms 1 + w first)."""
    x, y = w.real, w.imag
    with np.errstate(divide="ignore", invalid="ignore"):
        # |1 + w|² - 1 = x(2 + x) + y²: exact where w is small, and harmless where it is not
        size = np.where(np.abs(1 + w) < 0.5, np.log(np.abs(1 + w)), 0.5 * np.log1p(x * (2 + x) + y * y))
    return size + 1j * np.arctan2(y, 1 + x)


def _admitted(in_w: Real, in_z: Real) -> NDArray[np.int8]:
    status = np.zeros(len(in_w), np.int8)
    if in_w.shape[1] - 1 > HIGHEST_DEGREE:
        status[:] = TOO_LONG
        return status
    status[in_w[:, 0] == 0] = ILL_POSED
    status[~(np.isfinite(in_w).all(axis=1) & np.isfinite(in_z).all(axis=1))] = NOT_FINITE
    return status


def _certified_roots(polynomial: Real, status: NDArray[np.int8], where: NDArray[np.intp]) -> Complex:
    """Roots with their certificate; those that fail are polished once more, then given up."""
    roots = polynomial_roots(polynomial)
    failed = np.flatnonzero(~certified(polynomial, roots))
    if len(failed):
        roots[failed] = _polished(polynomial[failed], roots[failed])
        failed = failed[~certified(polynomial[failed], roots[failed])]
        status[where[failed]] = UNCERTIFIED
    return roots


def certified(polynomial: Real, roots: Complex) -> NDArray[np.bool_]:
    """Whether each root set reproduces its polynomial coefficient by coefficient.

    |p - p_0 Π(x - r)|_k <= (4 + n) * margin * eps * |p_0| * (Π(x + |r|))_k for every k; False for NaN.
    """
    degree = roots.shape[-1]
    product = np.zeros(polynomial.shape, complex)
    absolute = np.zeros(polynomial.shape)
    product[..., 0] = absolute[..., 0] = 1.0
    for index in range(degree):
        root = roots[..., index : index + 1]
        product[..., 1:] = product[..., 1:] - root * product[..., :-1]
        absolute[..., 1:] = absolute[..., 1:] + np.abs(root) * absolute[..., :-1]
    residual = np.abs(polynomial / polynomial[..., :1] - product)
    bound = (4 + degree) * _UNITS * np.finfo(float).eps * absolute
    return np.asarray((residual <= bound).all(axis=-1))


def _polished(polynomial: Real, roots: Complex, rounds: int = 8) -> Complex:
    """Simultaneous corrections of all roots (Aberth 1973, Math. Comp. 27, 339-344)."""
    with np.errstate(all="ignore"):
        for _ in range(rounds):
            value, slope = np.zeros_like(roots), np.zeros_like(roots)
            for index in range(polynomial.shape[-1]):
                slope = slope * roots + value
                value = value * roots + polynomial[..., index : index + 1]
            newton = value / slope
            gaps = roots[..., :, None] - roots[..., None, :]
            repulsion = np.where(gaps == 0, 0, 1 / gaps).sum(axis=-1)
            step = newton / (1 - newton * repulsion)
            roots = np.where(np.isfinite(step), roots - step, roots)
    return roots


def _quadratic(b: Real, c: Real) -> Complex:
    """Roots of x² + bx + c without cancellation."""
    half = -0.5 * b
    discriminant = half * half - c
    spread = np.sqrt(np.abs(discriminant))
    larger = half + np.copysign(spread, half)
    with np.errstate(divide="ignore", invalid="ignore"):
        smaller = np.where(larger == 0, 0.0, c / larger)
    real = discriminant >= 0
    first = np.where(real, larger, half) + 1j * np.where(real, 0.0, spread)
    second = np.where(real, smaller, half) - 1j * np.where(real, 0.0, spread)
    return np.stack([first, second], axis=-1)


def _with_small_poles(log_z: Complex, roots: Complex, in_z: Real) -> Complex:
    """Replace the poles near z = 0 by the smallest roots of the polynomial in z."""
    trailing = polynomial_roots(in_z)
    trailing = np.take_along_axis(trailing, np.argsort(np.abs(trailing), axis=-1, kind="stable"), -1)
    order = np.argsort(np.abs(1 + roots), axis=-1, kind="stable")
    count = (np.abs(1 + roots) < _NEAR_ORIGIN).sum(axis=-1)
    rank = np.arange(roots.shape[-1])
    with np.errstate(divide="ignore"):
        better = np.log(np.abs(trailing)) + 1j * np.arctan2(trailing.imag, trailing.real)
    sorted_log = np.take_along_axis(log_z, order, -1)
    np.put_along_axis(log_z, order, np.where(rank < count[:, None], better, sorted_log), -1)
    return log_z
