"""Word length: an exact compensator in, the one that a processor with few bits runs out, for closing the loop.

The coefficients of its difference equation u[k] = Σ e_i y[k-i] - Σ c_i u[k-i] are kept in two's complement with one
power of two as scale for all e_i and one for all c_i, the smallest that holds the largest of them.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from explorer.loop.compensator import Compensator

Real = NDArray[np.float64]


def rounded(compensator: Compensator, gain: Real, bits: int) -> Compensator:
    """The compensator with coefficients of `bits` bits, sign included, at every gain; gain : (G,).

    Rounding makes it another compensator at every gain. A rounded coefficient is a whole number of steps below 2**bits,
    so forming the polynomials in w from it is exact.
    """
    numerator, denominator = compensator.numerator[1], compensator.denominator[1]
    if compensator.affine:
        numerator = numerator[0] + gain[:, None, None] * numerator[1]
    leading = denominator[..., :1]
    above = _to_steps(numerator / leading, bits)
    below = np.broadcast_to(np.ones(1), denominator.shape).copy()
    below[..., 1:] = _to_steps(denominator[..., 1:] / leading, bits)
    below = np.broadcast_to(below, above.shape).copy()
    return Compensator(np.stack([_shifted(above), above]), np.stack([_shifted(below), below]), affine=False)


def _to_steps(coefficients: Real, bits: int) -> Real:
    """Rounded to nearest in the smallest scale that holds every one of them, rounded, in two's complement."""
    if not coefficients.shape[-1]:
        return coefficients
    _, exponent = np.frexp(np.abs(coefficients).max(axis=-1, keepdims=True))  # the largest lies below 2**exponent
    step = np.ldexp(1.0, exponent - (bits - 1))
    overflows = (np.rint(coefficients / step) >= 2.0 ** (bits - 1)).any(axis=-1, keepdims=True)
    step = np.where(overflows, 2 * step, step)
    return np.asarray(np.rint(coefficients / step) * step)


def _shifted(polynomial: Real) -> Real:
    """A polynomial in z, descending, as one in w = z - 1."""
    degree = polynomial.shape[-1] - 1
    result = np.zeros_like(polynomial)
    for power in range(degree + 1):  # c z^power = c (1 + w)^power
        for lower in range(power + 1):
            result[..., degree - lower] += polynomial[..., degree - power] * math.comb(power, lower)
    return result
