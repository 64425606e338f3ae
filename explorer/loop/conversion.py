"""Conversions: a compensator in s in, the same in w = z - 1 or in z at every period out, for compensator.

Each factor of the rational function is converted on its own, so factors stay factors and poles stay exact.
Sources: Franklin, Powell and Workman, Digital Control of Dynamic Systems, 3rd ed., chapter 6 (all four rules).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.roots import polynomial_roots
from explorer.study.expressions import ExpressionError
from explorer.study.rational import NotAffineError, Rational, multiply

Real = NDArray[np.float64]

BACKWARD, BILINEAR, MATCHED = "backward difference", "bilinear", "matched poles and zeros"
EXACT_AT = "bilinear, exact at "  # followed by a frequency


def convert(transfer: Rational, rule: str, exact_at: float, period: Real, in_w: bool) -> Rational:
    """A transfer in s by one of the rules.

    Parameters
    ----------
    rule : BACKWARD, BILINEAR (exact_at [rad/s] > 0 makes it exact there, 0 the plain rule) or MATCHED.
    period : [s], broadcastable to the batch axes of the transfer.
    in_w : result in w = z - 1, else in z.
    """
    if rule == MATCHED:
        return _matched(transfer, period, in_w)
    forward, one = np.ones_like(period), np.ones_like(period)
    if rule == BACKWARD:  # s = (z - 1)/(T z)
        gain, above, below = 1 / period, [forward, -one], [forward, 0 * one]
    else:  # s = (2/T)(z - 1)/(z + 1), or the factor that is exact at one frequency
        gain = exact_at / np.tan(exact_at * period / 2) if exact_at else 2 / period
        above, below = [forward, -one], [forward, one]
    if in_w:  # z = w + 1
        above, below = [above[0], above[1] + above[0]], [below[0], below[1] + below[0]]
    return _substituted(transfer, gain, np.stack(above, axis=-1), np.stack(below, axis=-1))


def _substituted(transfer: Rational, gain: Real, above: Real, below: Real) -> Rational:
    """s = gain * above/below in every factor: q(s) of degree m becomes (Σ q_k (gain above)^k below^(m-k))/below^m."""
    result = Rational(transfer.scale)
    rate = (gain[..., None] * above)[None]
    under = below[None]
    for factor, power in transfer.factors:
        degree = factor.shape[-1] - 1
        total = factor[..., :1]
        weight = np.ones((1,) * factor.ndim)
        for index in range(1, degree + 1):  # Horner, homogeneous
            weight = multiply(weight, under)
            lower = factor[..., index : index + 1] * weight
            total = multiply(total, rate) + lower
        result = result * Rational(
            np.ones((1,) * transfer.scale.ndim), ((total, power), (under, -degree * power))
        )
    return result


def _matched(transfer: Rational, period: Real, in_w: bool) -> Rational:
    """Every root s_i at exp(s_i T), missing zeros at z = -1, equal to the original as s goes to 0.

    A root at s = 0 becomes (z - 1)/T. A missing pole (a transfer with more zeros than poles) goes to z = 0.
    Raises ExpressionError where a factor loses its leading coefficient, and with it a root.
    """
    result, lacking = Rational(transfer.scale), 0
    for factor, power in transfer.factors:
        if factor.shape[0] > 1:
            raise NotAffineError
        lacking -= power * (factor.shape[-1] - 1)
        result = result * _matched_factor(factor, power, period, in_w)
    if lacking:
        point = 1.0 if lacking > 0 else 0.0  # zeros at z = -1, poles at z = 0
        scale = 2.0 if lacking > 0 else 1.0
        polynomial = np.array([1.0, point + (1.0 if in_w else 0.0)]) / scale
        shape = (1,) * transfer.scale.ndim
        result = result * Rational(np.ones(shape), ((polynomial.reshape(*shape, 2), lacking),))
    return result


def _matched_factor(factor: Real, power: int, period: Real, in_w: bool) -> Rational:
    batch = np.broadcast_shapes(factor.shape[1:-1], period.shape)
    spread = np.broadcast_to(factor[0], (*batch, factor.shape[-1]))
    if (spread[..., 0] == 0).any():
        raise ExpressionError(1, "the order changes somewhere on the axes (a leading coefficient is 0);")
    roots = polynomial_roots(spread) * period[..., None]
    moved = np.expm1(roots)
    positions = moved if in_w else np.exp(roots)
    at_origin = roots == 0
    with np.errstate(divide="ignore", invalid="ignore"):
        share = np.where(
            at_origin, 1 / period[..., None], -roots / period[..., None] / np.where(at_origin, 1, -moved)
        )
    scale = spread[..., 0] * np.prod(share, axis=-1).real
    product = np.ones((*batch, 1), complex)
    for index in range(roots.shape[-1]):
        longer = np.concatenate([product, np.zeros((*batch, 1))], axis=-1)
        longer[..., 1:] -= positions[..., index : index + 1] * product
        product = longer
    return Rational(np.asarray(scale**power)[None], ((product.real[None], power),))
