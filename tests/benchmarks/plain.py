"""Plain: Cases from study in, worst values out, one loop at a time as one would write it in an afternoon.

The sampled plant is computed once for all gains, as any such script would; everything else is done per loop.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.signal import cont2discrete, ss2tf

from .study import BAND, FILTER_POLE, LEAD, Cases, Real, worst_of


def worst_values(cases: Cases) -> Real:
    """(measure, tolerance scale, period, gain)."""
    values = np.empty((3, len(cases.lag), len(cases.period), len(cases.gain)))
    for row, (speed_gain, lag, dead_time) in enumerate(
        zip(cases.speed_gain, cases.lag, cases.dead_time, strict=True)
    ):
        for column, period in enumerate(cases.period):
            above, below = pulse_transfer(speed_gain, lag, dead_time, period)
            lead = LEAD / period
            over, under = [1 + lead, -(FILTER_POLE + lead)], [1.0, -FILTER_POLE]
            open_loop, slope = np.polymul(below, under), np.polymul(above, over)
            for place, gain in enumerate(cases.gain):
                poles = np.roots(np.polyadd(open_loop, gain * slope))
                values[:, row, column, place] = measures(poles, period)
    return worst_of(values, cases.within)


def pulse_transfer(speed_gain: float, lag: float, dead_time: float, period: float) -> tuple[Real, Real]:
    """Numerator and denominator in z, descending, of the plant behind hold and dead time < period, both [s].

    The input of the sample before still acts for `dead_time`, the new one for the rest of the period; the
    former is a third state. Source: Åström and Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, §2.3.
    """
    plant = (
        np.array([[0.0, 1.0], [0.0, -1.0 / lag]]),
        np.array([[0.0], [speed_gain / lag]]),
        np.array([[1.0, 0.0]]),
        np.zeros((1, 1)),
    )
    before, late, *_ = cont2discrete(plant, dead_time)
    after, early, *_ = cont2discrete(plant, period - dead_time)
    state = np.block([[after @ before, after @ late], [np.zeros((1, 3))]])
    start = np.vstack([early, [[1.0]]])
    output = np.array([[1.0, 0.0, 0.0]])
    numerator, denominator = ss2tf(state, start, output, np.zeros((1, 1)))
    return numerator[0], denominator


def measures(poles: NDArray[np.inexact], period: float) -> tuple[float, float, float]:
    """Damping ratio [1], settling time [s] (+inf when unstable) and largest |z| of one loop."""
    exponent = np.log(poles.astype(complex))
    damping = (-exponent.real / np.abs(exponent)).min()
    radius = np.abs(poles).max()
    settling = -np.log(BAND) * period / -np.log(radius) if radius < 1 else np.inf
    return damping, settling, radius
