"""Measures by frequency: loop transfers from loop in, margins, peaks and bandwidths of every loop out for measuring."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.frequency import FOUND, frequency_measures
from explorer.loop.closing import Group, Sampled, open_loop
from explorer.loop.compensator import Compensator
from explorer.study.model import Delay

Real = NDArray[np.float64]

_LOST = "phase lost to sampling"
_CROSSOVER = "crossover frequency"


def by_frequency(
    names: Sequence[str],
    sampled: Sampled,
    compensator: Compensator,
    group: Group,
    gain: Real,
    computing_delay: Delay,
    stable: NDArray[np.bool_],
) -> tuple[dict[str, Real], NDArray[np.bool_]]:
    """The measures of that name, each (M, G), NaN where not stable or unknown; and which stable loops have unknowns.

    stable : (M, G) of the group's pairs. Source: see kernels.frequency.
    """
    loop, period = open_loop(sampled, compensator, group), sampled.period[group.rows, group.columns]
    asked = list(dict.fromkeys(_CROSSOVER if name == _LOST else name for name in names))
    found = frequency_measures(
        asked, loop.below, loop.fixed, loop.sloped, group.delay, gain, period, stable, loop.effort
    )
    values = dict(zip(asked, found.values, strict=True))
    if _LOST in names:
        late = computing_delay.seconds + (0.5 + computing_delay.periods) * period
        values[_LOST] = np.degrees(values[_CROSSOVER] * late[:, None])
    return values, stable & (found.status != FOUND)
