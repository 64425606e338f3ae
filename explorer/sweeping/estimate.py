"""Estimate: a study in, loops, time and memory of its sweep on this machine out, from a short trial of its own."""

from __future__ import annotations

import dataclasses
import resource
import time
from typing import NamedTuple

import joblib
import numpy as np

from explorer.study.model import Study
from explorer.sweeping.dataset import Grid
from explorer.sweeping.scenarios import Scenarios, scenarios_of
from explorer.sweeping.tiles import LOOPS_AT_ONCE, Tile, compute, loops_by_delay, loops_in, tiles_of

_TRIAL_PERIODS, _TRIAL_SECONDS, _TRIAL_LOOPS = 12, 0.15, 400_000
_SECOND_WORKER = 0.85  # of what one worker does alone: they share the interpreter and the memory, measured
_WRITING = 40e6  # bytes of results per second into files, compressed, measured
_LOADING = 2.0  # most seconds of a first trial that are loading; the rest is compiling, which comes once per machine
_BYTES_PER_LOOP = 400  # reductions, certificates and measures of one loop while it is solved, and LAPACK's few


class Estimate(NamedTuple):
    """loops in all, seconds of sweeping, bytes the program takes at most in all, tiles."""

    loops: int
    seconds: float
    memory: int
    tiles: int


def estimate(study: Study) -> tuple[Scenarios, Estimate]:
    """The scenario table, and what the sweep will take; raises StudyError as the sweep would.

    A few periods spread over the axis are solved with ever more scenarios until that takes long enough to tell; the
    first trial, which loads and compiles, does not count.
    """
    scenarios = scenarios_of(study)
    loops, tiles = loops_in(study, len(scenarios.scale)), tiles_of(study, len(scenarios.scale))
    workers = min(joblib.cpu_count(), len(tiles))
    cells = loops // len(scenarios.scale)
    stored = cells * len(study.requirements) * (12 * len(study.scenarios.tolerance_scales) + 8)
    together = 1 + _SECOND_WORKER * (workers - 1)
    each, loading = _seconds_per_loop(study, scenarios)
    seconds = each * loops / together + stored / _WRITING + loading + _seconds_to_write(study, scenarios)
    at_once = min(loops, LOOPS_AT_ONCE) * _BYTES_PER_LOOP * workers
    now = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
    return scenarios, Estimate(loops, seconds, now + 4 * stored + at_once, len(tiles))  # results, verdict, copies


def _seconds_to_write(study: Study, scenarios: Scenarios) -> float:
    """For an empty result of one grid point: what loading the libraries for files takes."""
    start = time.perf_counter()
    axes = {name: dataclasses.replace(getattr(study, name), values=getattr(study, name).values[:1])
            for name in ("gain", "period")}  # fmt: skip
    Grid(dataclasses.replace(study, **axes), scenarios).dataset().to_netcdf(engine="h5netcdf")
    return time.perf_counter() - start


def _seconds_per_loop(study: Study, scenarios: Scenarios) -> tuple[float, float]:
    """On one worker, once everything is compiled; and the seconds of loading the kernels."""
    length = len(study.period.values)
    few = np.unique(((np.arange(_TRIAL_PERIODS) + 0.5) / _TRIAL_PERIODS * length).astype(int))
    part = dataclasses.replace(study, period=dataclasses.replace(study.period, values=study.period.values[few]))
    alike, each = loops_by_delay(study, scenarios), len(few) * len(study.gain.values)
    count, first = 1, 0.0
    while True:
        rows = np.unique(np.linspace(0, len(scenarios.scale) - 1, count).round().astype(int))
        table = dataclasses.replace(scenarios, values=scenarios.values[rows], scale=scenarios.scale[rows])
        start = time.perf_counter()
        compute(part, table, Tile(0, 0, 0, len(few)), alike)
        seconds = time.perf_counter() - start
        whole = len(rows) == len(scenarios.scale) or len(rows) * each >= _TRIAL_LOOPS
        if first and (seconds > _TRIAL_SECONDS or whole):
            return seconds / (len(rows) * each), min(first, _LOADING)
        first = first or seconds
        count = min(max(count * 4, 16), len(scenarios.scale))
