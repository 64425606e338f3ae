"""Singular places: loop polynomials in, where their frequency curve changes quickly for cells and noise out.

Roots in w are seen from the circle as places in x = ln tan(θ/2): s = w/(2 + w) lies on the imaginary axis where w
lies on the circle, so a root has the complex place ln(s/j), whose imaginary part is what it is off the curve.
"""

from __future__ import annotations

import math
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.roots import polynomial_roots

Array = NDArray[Any]
Real = NDArray[np.float64]

_FAR = 12.5  # x beyond the slowest and fastest feature: R is its asymptote to 4e-6 there, |R| to its square
_LAST = 18.0  # largest x: 3e-8 short of half the sampling rate
_NEAR_MINUS_ONE = 1e3  # roots beyond this |s| may be a scattered multiple root at z = -1
_RESOLVED = 27.6  # ln 1e12: where such roots take |R| below this, only rounding is left
_WHERE_MINUS_ONE = 1e8  # roots beyond this |s| are at z = -1


class Curves(NamedTuple):
    """I curves above/(below z**delay). features : (I, F, 2) singular places in x; span : (I, 2) first and last x."""

    above: Real
    below: Real
    delay: int
    features: Real
    span: Real


@np.errstate(all="ignore")  # zeros and infinities are sorted out afterwards
def curves_of(above: Real, below: Real, delay: int, gain: Real) -> Curves:
    """Curves with their singular places and the range of x outside of which only asymptotes are left."""
    above, below = np.ascontiguousarray(above), np.ascontiguousarray(below)
    top, top_zeros, top_far = places_of(above)
    bottom, bottom_zeros, bottom_far = places_of(below)
    features = np.concatenate([top, bottom], axis=1)
    start = np.minimum(features[:, :, 0].min(axis=1), -math.log(2.0 * max(delay, 1)))
    end = np.maximum(features[:, :, 0].max(axis=1), math.log(max(delay, 1)))
    order, rows = top_zeros - bottom_zeros, np.arange(len(above))
    factor = above[rows, above.shape[1] - 1 - np.minimum(top_zeros, above.shape[1] - 1)]
    factor = np.abs(factor / below[rows, below.shape[1] - 1 - np.minimum(bottom_zeros, below.shape[1] - 1)])
    sizes = np.abs(gain[gain != 0])
    for size in (sizes.min(initial=np.inf), sizes.max(initial=0.0)):  # where the low asymptote has |K R| = 1
        crossing = -np.log(size * factor) / order - math.log(2.0)
        start = np.where((order != 0) & np.isfinite(crossing), np.minimum(start, crossing), start)
    far = np.maximum(top_far, bottom_far)
    end = np.minimum(np.where(far > 0, _RESOLVED / np.maximum(far, 1), end + _FAR), _LAST)
    return Curves(above, below, delay, features, np.stack([start - _FAR, end], axis=1))


def places_of(polynomial: Real) -> tuple[Real, Array, Array]:
    """Singular places (I, n + 1, 2) in x, along and aside; how many roots are at z = 1 exactly, and near z = -1."""
    count, degree = len(polynomial), polynomial.shape[1] - 1
    features = np.zeros((count, degree + 1, 2))  # the last one is that of z = 0 and z = infinity
    features[:, :, 1] = 0.5 * np.pi
    filled, far = polynomial != 0, np.zeros(count, int)
    leading, trailing = filled.argmax(axis=1), filled[:, ::-1].argmax(axis=1)
    for first, last in sorted(set(zip(leading.tolist(), trailing.tolist(), strict=True))):
        rows = np.flatnonzero((leading == first) & (trailing == last) & filled.any(axis=1))
        if not len(rows) or first + last == degree:
            continue
        roots = polynomial_roots(np.ascontiguousarray(polynomial[rows, first : degree + 1 - last]))
        s = roots / (2.0 + roots)
        ordinary = (np.abs(s) > 0) & (np.abs(s) < _WHERE_MINUS_ONE)
        along = np.where(ordinary, np.log(np.abs(s)), 0.0)
        aside = np.where(ordinary, np.abs(np.abs(np.angle(s)) - 0.5 * np.pi), 0.5 * np.pi)
        features[rows, : roots.shape[1]] = np.stack([along, aside], axis=-1)
        far[rows] = (~(np.abs(s) < _NEAR_MINUS_ONE)).sum(axis=1)
    return features, trailing, far
