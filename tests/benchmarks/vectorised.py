"""Vectorised: Cases from study in, worst values out, with whole arrays of loops handed to NumPy and SciPy.

Closed-loop state matrices of all scenarios and gains of one period at a time: that bounds the memory, and
more at once is no faster.
"""

from __future__ import annotations

import numpy as np
import scipy.linalg

from .study import BAND, FILTER_POLE, LEAD, Cases, Real, worst_of


def worst_values(cases: Cases) -> Real:
    """(measure, tolerance scale, period, gain)."""
    worst = np.empty((3, len(cases.within), len(cases.period), len(cases.gain)))
    for column, period in enumerate(cases.period):
        constant, slope = state_matrices(cases, period)
        matrices = constant[:, None] + cases.gain[:, None, None] * slope[:, None]
        poles = np.linalg.eigvals(matrices).astype(complex)
        exponent = np.log(poles)
        damping = (-exponent.real / np.abs(exponent)).min(axis=-1)
        slowest = exponent.real.max(axis=-1)
        with np.errstate(divide="ignore"):
            settling = np.where(slowest < 0, np.log(BAND) * period / slowest, np.inf)
        worst[:, :, column] = worst_of(np.stack([damping, settling, np.exp(slowest)]), cases.within)
    return worst


def state_matrices(cases: Cases, period: float) -> tuple[Real, Real]:
    """(S, 4, 4) twice: the closed loop's state matrix is the first plus gain times the second.

    States: position, speed, the input of the sample before, the compensator's own.
    """
    count = len(cases.lag)
    plant = np.zeros((count, 3, 3))  # the last row and column carry the held input
    plant[:, 0, 1] = 1.0
    plant[:, 1, 1] = -1.0 / cases.lag
    plant[:, 1, 2] = cases.speed_gain / cases.lag
    dead_time = cases.dead_time[:, None, None]
    before = scipy.linalg.expm(plant * dead_time)
    after = scipy.linalg.expm(plant * (period - dead_time))
    constant, start = np.zeros((count, 4, 4)), np.zeros((count, 4, 1))
    constant[:, :2, :3] = after[:, :2, :2] @ before[:, :2]
    constant[:, 3, 0], constant[:, 3, 3] = -1.0, FILTER_POLE
    start[:, :2, 0], start[:, 2, 0] = after[:, :2, 2], 1.0
    lead = LEAD / period
    feedback = np.array([[-(1 + lead), 0.0, 0.0, (FILTER_POLE - 1) * lead]])
    return constant, start @ feedback
