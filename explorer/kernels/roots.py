"""Closed-loop poles: polynomials from loop in, logarithms of the poles for measures out.

Companion eigenvalues by LAPACK, batched, certified coefficient by coefficient. This is the robust way that
needs no start values; nothing here depends on neighbouring points.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.factors import FLOOR, NONE

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
HIGHEST_DEGREE = 96  # companion matrices beyond this are slow, and dead times that long are reported instead

# Which coefficient-wise backward error certifies a root set: rounding alone leaves about (4 + n) units; LAPACK
# is backward stable only in norm, so it is given a margin, still a thousandth of the accuracy promised.
_UNITS = 2000.0
_EXCUSED = 8.0  # units that rounding alone explains in the value of a polynomial at one root
_ENTRIES = 4_000_000  # of all companion matrices at once: 32 MB, and a few times that beside them
_REAL = 1e-12  # relative imaginary part that polishing leaves of a real root, far below what tells a pair apart
_RESOLVED = 1e-11  # estimated relative error of s up to which a root in w needs no second opinion in z


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
    block = max(1, _ENTRIES // (degree + 1) ** 2)
    for start in range(0, len(good) if degree else 0, block):
        rows = good[start : start + block]
        answer, sound = _solved(in_w[rows], in_z[rows])
        status[rows[~sound]] = UNCERTIFIED
        log_z[rows[sound]] = answer[sound]
    return Poles(log_z.reshape(*shape, degree), status.reshape(shape))


def reductions_of(log_z: Complex) -> Real:
    """What measures need of solved poles, as kernels.factors.reduced gives it: (5, ...) from (..., n), NaN for NaN."""
    size, turn = np.maximum(log_z.real, FLOOR), np.abs(log_z.imag)
    slowest = size.max(axis=-1, initial=FLOOR)
    absolute = np.hypot(size, turn)
    with np.errstate(invalid="ignore", divide="ignore"):
        damping = np.where(absolute == 0, 0.0, -size / absolute).min(axis=-1, initial=1.0)
    paired = (turn != 0) & (turn != np.pi) & (size > FLOOR)
    own = np.where(paired, size, NONE)
    place = own.argmax(axis=-1)[..., None] if log_z.shape[-1] else None
    unknown = np.isnan(slowest)
    pair = np.full(slowest.shape, NONE) if place is None else np.take_along_axis(own, place, -1)[..., 0]
    angle = np.zeros(slowest.shape) if place is None else np.take_along_axis(turn, place, -1)[..., 0]
    angle = np.where(pair == NONE, 0.0, angle)
    least = absolute.min(axis=-1, initial=-FLOOR) ** 2
    return np.stack([slowest, damping, least, np.where(unknown, np.nan, pair), np.where(unknown, np.nan, angle)])


@np.errstate(all="ignore")  # what leaves the numbers fails its certificate
def _solved(in_w: Real, in_z: Real) -> tuple[Complex, NDArray[np.bool_]]:
    """log z of admitted polynomials (M, n+1), and whether each set has its certificate."""
    roots, sound = _certified_roots(in_w)
    answer = logarithm_of_one_plus(roots)
    estimate = np.where(roots == 0, 0.0, error_of_logarithm(in_w, roots, 1 + roots, answer))  # z = 1 is exact
    doubtful = np.flatnonzero((estimate > _RESOLVED).any(axis=1))
    if len(doubtful):
        answer[doubtful] = _better_of(answer[doubtful], roots[doubtful], estimate[doubtful], in_z[doubtful])
    return answer, sound


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
    return _eigenvalues(matrix)


def _eigenvalues(matrix: Real) -> Complex:
    """Eigenvalues of many matrices; NaN for those on which LAPACK gives up, which no other may suffer from."""
    try:
        return np.linalg.eigvals(matrix).astype(complex)
    except np.linalg.LinAlgError:
        if matrix.ndim == 2:
            return np.full(len(matrix), np.nan, complex)
        return np.stack([_eigenvalues(one) for one in matrix])


def logarithm_of_one_plus(w: Complex) -> Complex:
    """log(1 + w), accurate for small |w| (numpy's complex log1p is not: it forms 1 + w first)."""
    x, y = w.real, w.imag
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        # |1 + w|² - 1 = x(2 + x) + y²: exact where w is small, and used only near |1 + w| = 1
        far = (np.abs(1 + w) < 0.5) | (np.abs(1 + w) > 2)
        size = np.where(far, np.log(np.abs(1 + w)), 0.5 * np.log1p(x * (2 + x) + y * y))
    return size + 1j * np.arctan2(y, 1 + x)


def _admitted(in_w: Real, in_z: Real) -> NDArray[np.int8]:
    status = np.zeros(len(in_w), np.int8)
    if in_w.shape[1] - 1 > HIGHEST_DEGREE:
        status[:] = TOO_LONG
        return status
    status[in_w[:, 0] == 0] = ILL_POSED
    with np.errstate(all="ignore"):
        finite = np.isfinite(in_w / in_w[:, :1]).all(axis=1) & np.isfinite(in_z / in_z[:, :1]).all(axis=1)
    status[~finite & (status == SOLVED)] = NOT_FINITE
    status[~np.isfinite(in_w).all(axis=1)] = NOT_FINITE
    return status


def _certified_roots(polynomial: Real) -> tuple[Complex, NDArray[np.bool_]]:
    """Roots, and whether each set has its certificate; those that fail at first are polished once more."""
    roots = polynomial_roots(polynomial)
    sound = certified(polynomial, roots)
    failed = np.flatnonzero(~sound)
    if len(failed):
        roots[failed] = _polished(polynomial[failed], roots[failed])
        sound[failed] = certified(polynomial[failed], roots[failed])
    return roots, sound


def error_of_logarithm(polynomial: Real, roots: Complex, z: Complex, log_z: Complex) -> Real:
    """First-order estimate of the relative error that rounding in the coefficients leaves in log z.

    eps Σ|p_k||x|^k / |p'(x)| is the root's own, Higham, Accuracy and Stability, 2nd ed. 2002, §26.3; one relative
    unit of z is 1/|log z| of its logarithm. inf for multiple roots and for z = 0.
    """
    size, slope, value = np.zeros(roots.shape), np.zeros_like(roots), np.zeros_like(roots)
    absolute = np.abs(roots)
    for index in range(polynomial.shape[-1]):
        slope = slope * roots + value
        value = value * roots + polynomial[..., index : index + 1]
        size = size * absolute + np.abs(polynomial[..., index : index + 1])
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        estimate = 4 * np.finfo(float).eps * size / (np.abs(slope) * np.abs(z) * np.abs(log_z))
    return np.where(np.isnan(estimate), np.inf, estimate)


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
    return np.asarray(((residual <= bound) & np.isfinite(bound)).all(axis=-1))


def _polished(polynomial: Real, roots: Complex, rounds: int = 8) -> Complex:
    """Simultaneous corrections (Aberth 1973, Math. Comp. 27, 339-344) of the roots that rounding does not excuse.

    One that solves its polynomial to rounding stays: a cluster such as the poles of a dead time would only scatter.
    """
    with np.errstate(all="ignore"):
        for _ in range(rounds):
            value, slope = np.zeros_like(roots), np.zeros_like(roots)
            size, absolute = np.zeros(roots.shape), np.abs(roots)
            for index in range(polynomial.shape[-1]):
                slope = slope * roots + value
                value = value * roots + polynomial[..., index : index + 1]
                size = size * absolute + np.abs(polynomial[..., index : index + 1])
            newton = value / slope
            gaps = roots[..., :, None] - roots[..., None, :]
            repulsion = np.where(gaps == 0, 0, 1 / gaps).sum(axis=-1)
            step = newton / (1 - newton * repulsion)
            inexact = np.abs(value) > _EXCUSED * np.finfo(float).eps * size
            roots = np.where(inexact & np.isfinite(step), roots - step, roots)
        return np.where(np.abs(roots.imag) <= _REAL * np.abs(roots), roots.real, roots)


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


def _better_of(first: Complex, roots: Complex, estimate: Real, in_z: Real) -> Complex:
    """Pair the certified roots in w (first, as log z) with those of the polynomial in z; keep the better of each.

    Near z = 0, and with many samples of dead time, only z resolves the poles; near z = 1 only w does. A root in z
    counts when it solves its polynomial to rounding by itself; the pairing keeps the set complete.
    """
    second = polynomial_roots(in_z)
    loose = np.flatnonzero(~_solves(in_z, second).all(axis=1))
    if len(loose):
        second[loose] = _polished(in_z[loose], second[loose])
    with np.errstate(divide="ignore"):
        logarithm = np.log(np.abs(second)) + 1j * np.arctan2(second.imag, second.real)
    doubt = np.where(second == 0, 0.0, error_of_logarithm(in_z, second, second, logarithm))
    doubt = np.where(_solves(in_z, second), doubt, np.inf)
    result, rows = first.copy(), np.arange(len(first))
    taken = np.zeros(second.shape, bool)
    for column in np.argsort(estimate, axis=1, kind="stable").T:  # the surest choose first
        distance = np.abs(second - (1 + roots[rows, column])[:, None])
        partner = np.where(taken, np.inf, distance).argmin(axis=1)
        taken[rows, partner] = True
        improved = doubt[rows, partner] < estimate[rows, column]
        result[rows, column] = np.where(improved, logarithm[rows, partner], first[rows, column])
    return result


def _solves(polynomial: Real, roots: Complex) -> NDArray[np.bool_]:
    """Which roots are roots to rounding, each by itself: |p(x)| small beside Σ|p_k||x|^k."""
    value, size, absolute = np.zeros_like(roots), np.zeros(roots.shape), np.abs(roots)
    for index in range(polynomial.shape[-1]):
        value = value * roots + polynomial[..., index : index + 1]
        size = size * absolute + np.abs(polynomial[..., index : index + 1])
    return np.asarray(np.abs(value) <= _UNITS * np.finfo(float).eps * size)
