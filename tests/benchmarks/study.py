"""Study: the question all ways answer, as text for the program and as Cases for plain and vectorised.

The loop is of degree 4 everywhere: two states of the plant, one sample of delay because the total dead time
is a fraction of every period, one pole of the compensator. The data are invented.
"""

from __future__ import annotations

import dataclasses
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import xarray
from numpy.typing import NDArray

Real = NDArray[np.float64]

BAND = 0.02  # of the settling time
COMPUTING_DELAY = 0.6e-3  # [s]
LEAD = 15e-3  # [s]
FILTER_POLE = 0.4  # of the compensator, in z
DAMPING, SETTLING, RADIUS = range(3)  # the requirements in the study's order
SENSES = np.array([-1.0, 1.0, 1.0])  # worst is the largest of sense * value

TEMPLATE = f"""
title = "Slide, position loop"

[plant]
transfer  = "speed_gain / (s*(lag*s + 1))"
dead_time = "bus"

[plant.parameters]
speed_gain = {{ nominal = "0.9 m/s/V", tolerance = "12 %" }}
lag        = {{ from = "28 ms", to = "46 ms" }}
bus        = {{ nominal = "0.9 ms", tolerance = "20 %" }}

[loop]
compensator     = "gain * (1 + lead*(z - 1)/(period*(z - {FILTER_POLE})))"
computing_delay = "{COMPUTING_DELAY} s"

[sweep]
gain   = {{ from = "2 V/m", to = "400 V/m", points = GAINS, spacing = "log" }}
period = {{ from = "2 ms", to = "40 ms", points = PERIODS, spacing = "log" }}
lead   = {{ values = ["{LEAD} s"] }}
scenarios = {{ interior = INTERIOR, corners = true, seed = 7, tolerance_scales = [0, 0.5, 1.0, 1.5] }}

[[requirements]]
measure  = "damping ratio"
at_least = 0.5

[[requirements]]
measure = "settling time"
basis   = "poles"
band    = "{100 * BAND:g} %"
at_most = "300 ms"

[[requirements]]
measure = "stability"
"""


class Grid(NamedTuple):
    """Points of the gain and period axes, and scenarios inside the tolerance box per tolerance scale."""

    gains: int
    periods: int
    interior: int

    def text(self) -> str:
        """The study on this grid."""
        return (
            TEMPLATE.replace("GAINS", str(self.gains))
            .replace("PERIODS", str(self.periods))
            .replace("INTERIOR", str(self.interior))
        )


@dataclass(frozen=True)
class Cases:
    """The same grid as plain arrays, SI.

    gain : (G,); period : (P,); speed_gain, lag, dead_time : (S,), dead_time with the computing delay;
    within : (X, S) which scenarios lie inside each tolerance scale.
    """

    gain: Real
    period: Real
    speed_gain: Real
    lag: Real
    dead_time: Real
    within: NDArray[np.bool_]

    @property
    def loops(self) -> int:
        """Closed loops in all."""
        return len(self.gain) * len(self.period) * len(self.lag)

    def at_periods(self, chosen: NDArray[np.intp]) -> Cases:
        """The part of the grid at some of its periods."""
        return dataclasses.replace(self, period=self.period[chosen])


def cases_of(dataset: xarray.Dataset) -> Cases:
    """Axes and plants as the program laid them out, so that a difference in the answers is one of computing.

    Raises ValueError if a dead time is not a fraction of every period: the loop would not be of degree 4.
    """
    plants = dataset["scenario_parameter"]
    speed_gain, lag, bus = (plants.sel(parameter=name).values for name in ("speed_gain", "lag", "bus"))
    scales = dataset["tolerance_scale"].values
    dead_time, period = bus + COMPUTING_DELAY, dataset["period"].values
    if not 0 < dead_time.min() <= dead_time.max() < period.min():
        raise ValueError("every dead time must be longer than 0 and shorter than the shortest period")
    within = dataset["scenario_scale"].values <= scales[:, None]
    return Cases(dataset["gain"].values, period, speed_gain, lag, dead_time, within)


def worst_of(values: Real, within: NDArray[np.bool_]) -> Real:
    """values : (3, S, ...) in, (3, X, ...) worst over the scenarios within each tolerance scale out."""
    signed = SENSES.reshape(3, *[1] * (values.ndim - 1)) * values
    worst = np.stack([signed[:, chosen].max(axis=1) for chosen in within], axis=1)
    return np.asarray(SENSES.reshape(3, *[1] * (worst.ndim - 1)) * worst)
