"""Reduction: measured groups of loops in, the worst of each requirement over the scenarios of a scale out."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.lanes import LANES
from explorer.kernels.roots import SOLVED
from explorer.kernels.worst import count_met, keep_worst
from explorer.loop.closing import Group
from explorer.measures.measuring import STATUS_MEANING, Measured
from explorer.study.model import Study
from explorer.sweeping.scenarios import Scenarios

Real = NDArray[np.float64]


@dataclass
class TileResult:
    """R requirements, X scales, P periods of the tile, G gains.

    nominal (R, P, G); worst, worst_scenario (R, X, P, G); share (X, P, G); tally : loops per status;
    first : (statuses, 2) gain and period of the first loop of each status, NaN where none.
    """

    nominal: Real
    worst: Real
    worst_scenario: NDArray[np.int32]
    share: Real
    tally: NDArray[np.int64] = field(default_factory=lambda: np.zeros(len(STATUS_MEANING), np.int64))
    first: Real = field(default_factory=lambda: np.full((len(STATUS_MEANING), 2), np.nan))


class Reduction:
    """Worst values over scenarios, one class per entering scale; groups may come in any order."""

    def __init__(self, study: Study, scenarios: Scenarios, period: Real) -> None:
        self.study, self.gain, self.period = study, study.gain.values, period
        scales = np.array(study.scenarios.tolerance_scales)
        self.entry = np.searchsorted(scales, scenarios.scale)  # first scale that contains the scenario
        self.limits = [one.limits(period) for one in study.requirements]
        shape = (len(study.requirements), len(scales), len(period), len(self.gain))
        self.signs = np.array([-1.0 if one.sense == "at least" else 1.0 for one in study.requirements])
        self.worst = np.full(shape, -np.inf)  # sign * value, so that the worst is the largest; NaN unknown
        self.place = np.full(shape, -1, np.int32)
        self.met = np.zeros(shape[1:], np.int64)
        self.nominal = np.full((shape[0], *shape[2:]), np.nan)
        self.tally = np.zeros(len(STATUS_MEANING), np.int64)
        self.first = np.full((len(STATUS_MEANING), 2), np.nan)

    def add(self, group: Group, measured: Measured) -> None:
        """Merge a group's measured loops."""
        pairs, scale = len(group.rows), self.entry[group.rows]
        self._count(measured.status, group, pairs)
        met = np.ones(measured.status.shape, bool)
        for index, (one, value) in enumerate(zip(self.study.requirements, measured.values, strict=True)):
            keep_worst(
                value, pairs, group.rows, group.columns, scale, self.signs[index], one.sense == "below",
                self.limits[index], met, self.worst[index], self.place[index],
            )  # fmt: skip
            for pair in np.flatnonzero(group.rows == 0):
                self.nominal[index, group.columns[pair]] = value[pair // LANES, :, pair % LANES]
        count_met(met, pairs, group.columns, scale, self.met)

    def _count(self, status: NDArray[np.int8], group: Group, pairs: int) -> None:
        """Tally the status of every loop and remember the first of each that failed."""
        if not status.any():
            self.tally[SOLVED] += pairs * len(self.gain)
            return
        own = status.transpose(0, 2, 1).reshape(-1, len(self.gain))[:pairs]
        self.tally += np.bincount(own.ravel(), minlength=len(self.tally))
        for code in np.unique(own):
            if code != SOLVED and np.isnan(self.first[code, 0]):
                pair, step = np.argwhere(own == code)[0]
                self.first[code] = self.gain[step], self.period[group.columns[pair]]

    def result(self) -> TileResult:
        """Accumulate the scales: a wider one contains every narrower one."""
        for scale in range(1, self.worst.shape[1]):
            before, now = (slice(None), scale - 1), (slice(None), scale)
            worse = np.isnan(self.worst[before]) | (self.worst[before] >= self.worst[now]) | (self.place[now] < 0)
            inherit = worse & (self.place[before] >= 0)
            self.worst[now] = np.where(inherit, self.worst[before], self.worst[now])
            self.place[now] = np.where(inherit, self.place[before], self.place[now])
        worst = self.signs[:, None, None, None] * self.worst
        scales = len(self.study.scenarios.tolerance_scales)
        counts = np.cumsum(np.bincount(self.entry, minlength=scales))[:, None, None]
        share = np.cumsum(self.met, axis=0) / counts
        return TileResult(self.nominal, worst, self.place, share, self.tally, self.first)
