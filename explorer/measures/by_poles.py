"""Measures by poles: reductions of the poles from loop in, one value per closed loop out for sweeping.

Every function takes what is left of a loop's poles (see Reduced) and returns float of the same shape; NaN in, NaN
out. A loop without poles, or with all of them at z = 0, settles at once: radius 0, damping 1.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.factors import FLOOR

Real = NDArray[np.float64]


class Reduced(NamedTuple):
    """slowest : largest log|z|, FLOOR for z = 0; damping : least -Re s/|s|; frequency : least (|s|T)²;
    pair, turn : log|z| and angle of the slowest pair of non-real z, NONE and 0 when there is none.
    """

    slowest: Real
    damping: Real
    frequency: Real
    pair: Real
    turn: Real


def spectral_radius(poles: Reduced) -> Real:
    """Largest |z| [1]."""
    return np.asarray(np.exp(poles.slowest))


def natural_frequency(poles: Reduced, period: Real) -> Real:
    """Least |s| [rad/s]; +inf when every pole is at z = 0."""
    return np.where(poles.slowest <= FLOOR, np.inf, np.sqrt(poles.frequency) / period)


def settling_time(poles: Reduced, period: Real, band: float) -> Real:
    """ln(1/band)/sigma [s]; +inf when the slowest pole does not decay, 0 when all poles are at z = 0."""
    with np.errstate(divide="ignore"):
        time = np.asarray((np.log(band) * period) / poles.slowest)
    np.putmask(time, poles.slowest >= 0, np.inf)
    np.putmask(time, poles.slowest <= FLOOR, 0.0)
    return time


def time_to_peak(poles: Reduced, period: Real) -> Real:
    """pi/|Im s| of the slowest-decaying pair of non-real z [s]; +inf when there is none."""
    with np.errstate(divide="ignore"):
        return np.asarray((np.pi * period) / poles.turn)


def overshoot(poles: Reduced) -> Real:
    """100 exp(-pi zeta/sqrt(1 - zeta²)) of the slowest-decaying pair of non-real z [%]; 0 when there is none."""
    with np.errstate(divide="ignore", over="ignore"):
        return np.asarray(100.0 * np.exp(np.pi * poles.pair / poles.turn))  # zeta/sqrt(1 - zeta²) = -Re s/|Im s|


BY_POLES: dict[str, Callable[[Reduced, Real, float], Real]] = {
    "stability": lambda poles, period, band: spectral_radius(poles),
    "spectral radius": lambda poles, period, band: spectral_radius(poles),
    "damping ratio": lambda poles, period, band: poles.damping,
    "natural frequency": lambda poles, period, band: natural_frequency(poles, period),
    "settling time by poles": settling_time,
    "time to peak by poles": lambda poles, period, band: time_to_peak(poles, period),
    "overshoot by poles": lambda poles, period, band: overshoot(poles),
}
