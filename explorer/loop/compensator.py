"""Compensator: its expression from study in, polynomials in w and z at every period and gain for closing out."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from explorer.loop.conversion import convert
from explorer.study.expressions import ExpressionError
from explorer.study.model import Loop
from explorer.study.rational import NotAffineError, Rational, evaluate

Real = NDArray[np.float64]


@dataclass(frozen=True)
class Compensator:
    """numerator : (2, K, P, n+1) and denominator : (2, G or 1, P, n+1), descending; index 0 in w, 1 in z.

    affine : K = 2 and the numerator is numerator[:, 0] + gain * numerator[:, 1]; the denominator has G = 1.
    Otherwise K = G = number of gains, one compensator per gain.
    """

    numerator: Real
    denominator: Real
    affine: bool


def compensator_on_axes(loop: Loop, values: Mapping[str, float], gain: Real, period: Real) -> Compensator:
    """The compensator for every gain and period at one value of the further design variables.

    Parameters
    ----------
    values : nominal plant parameters and design variables; gain : (G,); period : (P,) nominal [s].

    Raises
    ------
    ExpressionError : division by zero, not causal, or a leading coefficient that vanishes on the axes.
    """
    periods = len(period)
    try:
        names = {"gain": np.array([0.0, 1.0]).reshape(2, 1, 1)}
        return _as_compensator(*_both(loop, values, names, period), affine=True, shape=(1, periods))
    except NotAffineError:
        names = {"gain": gain.reshape(1, -1, 1)}
        return _as_compensator(*_both(loop, values, names, period), affine=False, shape=(len(gain), periods))


def _both(
    loop: Loop, values: Mapping[str, float], gain: dict[str, Real], period: Real
) -> tuple[Rational, Rational]:
    names = {name: np.full((1, 1, 1), value) for name, value in values.items()}
    names |= {"period": period.reshape(1, 1, -1)} | gain
    if not loop.conversion:
        return (
            evaluate(loop.compensator, "z", [1.0, 1.0], names),
            evaluate(loop.compensator, "z", [1.0, 0.0], names),
        )
    transfer = evaluate(loop.compensator, "s", [1.0, 0.0], names)
    steps = period.reshape(1, -1)
    return (
        convert(transfer, loop.conversion, loop.exact_at, steps, in_w=True),
        convert(transfer, loop.conversion, loop.exact_at, steps, in_w=False),
    )


def _as_compensator(in_w: Rational, in_z: Rational, affine: bool, shape: tuple[int, int]) -> Compensator:
    """Both readings padded to one length and spread over (gains, periods)."""
    numerators, denominators = [], []
    for rational in (in_w, in_z):
        numerator, denominator = rational.numerator(), rational.denominator()
        if (denominator[..., 0] == 0).any():
            raise ExpressionError(
                1, "the compensator's leading coefficient in z vanishes somewhere on the axes;"
            )
        length = denominator.shape[-1]
        if numerator.shape[-1] > length:
            raise ExpressionError(
                1,
                f"the numerator is of degree {numerator.shape[-1] - 1} in z, the denominator of {length - 1}: "
                "the compensator would need samples that are not taken yet;",
            )
        padded = np.zeros((2 if affine else 1, *shape, length))
        padded[: len(numerator), ..., length - numerator.shape[-1] :] = numerator
        numerators.append(padded[:, 0] if affine else padded[0])
        denominators.append(np.broadcast_to(denominator, (*shape, length)))
    return Compensator(np.stack(numerators), np.stack(denominators), affine)
