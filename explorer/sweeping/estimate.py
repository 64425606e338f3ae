"""Estimate: a study in, loops, time and memory of its sweep on this machine out, from a short trial of its own."""

from __future__ import annotations

import dataclasses
import time
from typing import NamedTuple

import joblib
import numpy as np

from explorer.study.model import Study
from explorer.sweeping.scenarios import Scenarios, scenarios_of
from explorer.sweeping.tiles import LOOPS_AT_ONCE, Tile, compute, loops_in, tiles_of

_TRIAL_LOOPS = 8_000
_BYTES_PER_LOOP = (
    2_500  # companion matrices, roots and certificates of one loop of order 6 while it is solved
)


class Estimate(NamedTuple):
    """loops in all, seconds of sweeping, bytes beyond the program itself, tiles."""

    loops: int
    seconds: float
    memory: int
    tiles: int


def estimate(study: Study) -> tuple[Scenarios, Estimate]:
    """The scenario table, and what the sweep will take; raises StudyError as the sweep would.

    A few periods spread over the axis are solved twice, the second time with everything loaded and compiled.
    """
    scenarios = scenarios_of(study)
    loops, tiles = loops_in(study, len(scenarios.scale)), tiles_of(study, len(scenarios.scale))
    few = np.unique(np.linspace(0, len(study.period.values) - 1, 4).round().astype(int))
    count = max(1, min(len(scenarios.scale), _TRIAL_LOOPS // (len(few) * len(study.gain.values))))
    rows = np.unique(np.linspace(0, len(scenarios.scale) - 1, count).round().astype(int))
    part = dataclasses.replace(
        study, period=dataclasses.replace(study.period, values=study.period.values[few])
    )
    table = dataclasses.replace(scenarios, values=scenarios.values[rows], scale=scenarios.scale[rows])
    seconds = 0.0
    for _ in range(2):
        start = time.perf_counter()
        compute(part, table, Tile(0, 0, 0, len(few)), frozenset())
        seconds = time.perf_counter() - start
    workers = min(joblib.cpu_count(), len(tiles))
    cells = loops // len(scenarios.scale)
    stored = cells * len(study.requirements) * (12 * len(study.scenarios.tolerance_scales) + 8)
    at_once = min(loops, LOOPS_AT_ONCE) * _BYTES_PER_LOOP * workers
    time_needed = seconds * loops / (len(rows) * len(few) * len(study.gain.values)) / workers
    return scenarios, Estimate(loops, time_needed, 2 * stored + at_once, len(tiles))
