"""Closing the loop: a sampled plant and a compensator in, open-loop and characteristic polynomials out.

The coefficients are formed here and nowhere else: a(w)·(1 + w)^d·c(w) + b(w)·e(w) for the plant b/(a z^d) and
the compensator e/c, as a function of gain, period and parameters.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from explorer.loop.compensator import Compensator

Real = NDArray[np.float64]


class Sampled(NamedTuple):
    """The plant between hold and sampler for S scenarios and P periods.

    numerator, denominator : (S, P, 2, n+1), descending; index 0 in w, 1 in z. whole : (S, P) delay in samples.
    period : (S, P) true sample periods [s].
    """

    numerator: Real
    denominator: Real
    whole: NDArray[np.int64]
    period: Real


class Group(NamedTuple):
    """Those (scenario, period) pairs that share one whole-sample delay, so one degree.

    rows, columns : (M,) scenario and period of each pair, the periods one after the other.
    """

    delay: int
    rows: NDArray[np.intp]
    columns: NDArray[np.intp]


def groups_of(sampled: Sampled) -> Iterator[Group]:
    """The pairs of a sampled plant by delay."""
    for delay in np.unique(sampled.whole):
        columns, rows = np.nonzero(delay == sampled.whole.T)
        yield Group(int(delay), rows, columns)


def degree_of(sampled: Sampled, compensator: Compensator, delay: int) -> int:
    """Degree of the characteristic polynomial."""
    return int(sampled.denominator.shape[-1] + compensator.denominator.shape[-1] - 2 + delay)


@np.errstate(over="ignore", invalid="ignore")  # a plant beyond the numbers becomes a status of kernels.roots
def characteristic(
    sampled: Sampled, compensator: Compensator, group: Group, variable: int
) -> tuple[Real, Real]:
    """The polynomial constant + gain * slope of the pairs of a group; variable : 0 in w, 1 in z.

    Both results are (M, K, n+1), descending powers: K = 1 when the compensator is affine in the gain; otherwise
    K = gains and the slope is zero.
    """
    below = sampled.denominator[group.rows, group.columns, variable][:, None]
    above = sampled.numerator[group.rows, group.columns, variable][:, None]
    under = np.moveaxis(compensator.denominator[variable][:, group.columns], 0, 1)
    over = np.moveaxis(compensator.numerator[variable][:, group.columns], 0, 1)
    open_loop = _product(_product(below, power_of_z(group.delay, variable)), under)
    if not compensator.affine:
        constant = _sum(open_loop, _product(above, over))
        return constant, np.zeros_like(constant)
    return _sum(open_loop, _product(above, over[:, :1])), _sum(0 * open_loop, _product(above, over[:, 1:]))


class OpenLoop(NamedTuple):
    """The loop transfer L = (fixed + gain * sloped)/(below z**delay) of M pairs, in w, descending powers.

    below : (M, 1 or G, n+1); fixed, sloped : (M, 1 or G, n+1), with G own polynomials per gain and sloped 0 when the
    compensator is not affine in the gain. effort : fixed and sloped numerator of the transfer from measurement noise
    to the processor's output, C/(1 + L) = (fixed + gain * sloped) z**delay/characteristic.
    """

    below: Real
    fixed: Real
    sloped: Real
    effort: tuple[Real, Real]


def open_loop(sampled: Sampled, compensator: Compensator, group: Group) -> OpenLoop:
    """What frequency measures need of the pairs of a group."""
    below = sampled.denominator[group.rows, group.columns, 0][:, None]
    above = sampled.numerator[group.rows, group.columns, 0][:, None]
    under = np.moveaxis(compensator.denominator[0][:, group.columns], 0, 1)
    over = np.moveaxis(compensator.numerator[0][:, group.columns], 0, 1)
    fixed, sloped = (over[:, :1], over[:, 1:]) if compensator.affine else (over, np.zeros_like(over))
    return OpenLoop(
        _product(below, under), _product(above, fixed), _product(above, sloped),
        (_product(below, fixed), _product(below, sloped)),
    )  # fmt: skip


def power_of_z(delay: int, variable: int) -> Real:
    """z**delay, descending powers of w (variable 0: binomials, all positive) or of z (variable 1)."""
    if variable == 0:
        return np.array([math.comb(delay, k) for k in range(delay + 1)], float)
    return np.array([1.0] + [0.0] * delay)


def _product(left: Real, right: Real) -> Real:
    """Polynomial product along the last axis; the others broadcast."""
    batch = np.broadcast_shapes(left.shape[:-1], right.shape[:-1])
    result = np.zeros((*batch, left.shape[-1] + right.shape[-1] - 1))
    for power in range(right.shape[-1]):
        result[..., power : power + left.shape[-1]] += left * right[..., power : power + 1]
    return result


def _sum(larger: Real, smaller: Real) -> Real:
    """Sum of two polynomials, the first of at least the second's degree."""
    result = np.array(
        np.broadcast_to(
            larger, (*np.broadcast_shapes(larger.shape[:-1], smaller.shape[:-1]), larger.shape[-1])
        )
    )
    result[..., larger.shape[-1] - smaller.shape[-1] :] += smaller
    return result
