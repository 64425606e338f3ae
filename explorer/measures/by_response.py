"""Measures by response: simulated step responses from loop in, one value per loop and requirement out for measuring."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.response import (
    EFFORT,
    EXCESS,
    LOAD_PEAK,
    OVERSHOOT,
    PEAK_TIME,
    RAMP_ERROR,
    RISE_TIME,
    SETTLING,
    STEP_ERROR,
    UNDECIDED,
    UNDERSHOOT,
)
from explorer.loop.closing import Group
from explorer.loop.compensator import Compensator
from explorer.loop.simulating import Source, simulate
from explorer.study.model import Requirement

Real = NDArray[np.float64]

_ROW = {
    "time to peak": PEAK_TIME,
    "overshoot": OVERSHOOT,
    "undershoot": UNDERSHOOT,
    "rise time": RISE_TIME,
    "samples per rise time": RISE_TIME,
    "peak effort": EFFORT,
    "excess between samples": EXCESS,
    "load step deviation": LOAD_PEAK,
}
_ERROR = {"step": STEP_ERROR, "ramp": RAMP_ERROR}


def by_response(
    requirements: Sequence[Requirement],
    source: Source,
    compensator: Compensator,
    group: Group,
    gain: Real,
    slowest: Real,
) -> tuple[list[Real], NDArray[np.bool_]]:
    """A value (M, G) per requirement, NaN where not stable or undecided; and which stable loops are undecided.

    slowest : (M, G) largest log|z|, below 0 when stable. Source: see kernels.response.
    """
    bands = list(dict.fromkeys(one.band for one in requirements if one.measure.band is not None))
    rows = [_row(one, bands) for one in requirements]
    found = simulate(source, compensator, gain, group, slowest, sorted({row for row in rows if row < SETTLING}), bands)
    period = source.sampled.period[group.rows, group.columns][:, None]
    values = [
        found.rows[row] / period if one.measure.name == "samples per rise time" else found.rows[row]
        for one, row in zip(requirements, rows, strict=True)
    ]
    return values, (slowest < 0) & (found.status == UNDECIDED)


def _row(requirement: Requirement, bands: Sequence[float]) -> int:
    if requirement.measure.band is not None:
        return SETTLING + bands.index(requirement.band)
    return _ERROR[requirement.reference] if requirement.reference else _ROW[requirement.measure.name]
