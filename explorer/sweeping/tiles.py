"""Tiles: one piece of the grid in, every scenario of it solved, measured and reduced to its worst out.

A tile is a run of neighbouring periods at one value of the further design variables, with all gains and all
scenarios. The cut depends on the study alone, never on the number of workers, so results do not either.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.roots import SOLVED, STATUS_MEANING
from explorer.loop.closing import Sampled, closed_loop_poles
from explorer.loop.compensator import Compensator, compensator_on_axes
from explorer.loop.sampling import sample
from explorer.measures.by_poles import BY_POLES
from explorer.study.expressions import ExpressionError
from explorer.study.model import Study
from explorer.study.reading import fault_in
from explorer.sweeping.scenarios import Scenarios

Real = NDArray[np.float64]

LOOPS_IN_TILE = 400_000  # a second or two of work, and what a killed run can lose
LOOPS_AT_ONCE = 40_000  # bounds memory: about 60 kB per thousand loops of order 6


class Tile(NamedTuple):
    """number in the run; design : index of the combination of further variables; periods start..stop."""

    number: int
    design: int
    start: int
    stop: int


@dataclass
class TileResult:
    """R requirements, X scales, P periods of the tile, G gains.

    nominal (R, P, G); worst, worst_scenario (R, X, P, G); share (X, P, G); tally : loops per status (5,);
    first : (5, 2) gain and period of the first loop of each status, NaN where none.
    """

    nominal: Real
    worst: Real
    worst_scenario: NDArray[np.int32]
    share: Real
    tally: NDArray[np.int64] = field(default_factory=lambda: np.zeros(len(STATUS_MEANING), np.int64))
    first: Real = field(default_factory=lambda: np.full((len(STATUS_MEANING), 2), np.nan))


def tiles_of(study: Study, scenarios: int) -> list[Tile]:
    """The cut of the grid; a tile of one scenario holds no more loops than are solved at once."""
    designs = int(np.prod([len(axis.values) for axis in study.design], dtype=int))
    length = len(study.period.values)
    gains = len(study.gain.values)
    step = int(np.clip(min(LOOPS_IN_TILE // (scenarios * gains), LOOPS_AT_ONCE // gains), 1, length))
    cuts = [(design, start) for design in range(designs) for start in range(0, length, step)]
    return [
        Tile(number, design, start, min(start + step, length)) for number, (design, start) in enumerate(cuts)
    ]


def design_values(study: Study, design: int) -> dict[str, float]:
    """The further design variables of one combination, the last axis running fastest."""
    shape = tuple(len(axis.values) for axis in study.design)
    place = np.unravel_index(design, shape) if shape else ()
    return {axis.name: float(axis.values[index]) for axis, index in zip(study.design, place, strict=True)}


def compute(study: Study, scenarios: Scenarios, tile: Tile) -> TileResult:
    """Solve one tile.

    Raises StudyError where an expression has no value somewhere on the axes or in the tolerance box.
    """
    period = study.period.values[tile.start : tile.stop]
    compensator = _compensator(study, design_values(study, tile.design), period)
    reduction = _Reduction(study, scenarios, period)
    block = max(1, LOOPS_AT_ONCE // (len(period) * len(study.gain.values)))
    table = scenarios.by_name()
    for start in range(0, len(scenarios.scale), block):
        chosen = slice(start, min(start + block, len(scenarios.scale)))
        sampled = _sampled(study, {name: values[chosen] for name, values in table.items()}, period)
        values = np.full(
            (len(study.requirements), len(sampled.whole), len(period), len(study.gain.values)), np.nan
        )
        for rows, columns, found in closed_loop_poles(sampled, compensator, study.gain.values):
            reduction.count(found.status, period[columns])
            true_period = sampled.period[rows, columns][:, None]
            for index, requirement in enumerate(study.requirements):
                measure = BY_POLES[requirement.measure.key]
                value = measure(found.log_z, true_period, requirement.band)
                values[index, rows, columns] = np.where(found.status == SOLVED, value, np.nan)
        reduction.add(values, start)
    return reduction.result()


def _compensator(study: Study, design: dict[str, float], period: Real) -> Compensator:
    values = {parameter.name: parameter.nominal for parameter in study.parameters} | design
    try:
        return compensator_on_axes(study.loop, values, study.gain.values, period)
    except ExpressionError as error:
        raise fault_in(study, ("loop", "compensator"), study.loop.text, error) from None


def _sampled(study: Study, table: dict[str, Real], period: Real) -> Sampled:
    try:
        return sample(study, table, period)
    except ExpressionError as error:
        raise fault_in(study, ("plant",), study.plant.text, error) from None


class _Reduction:
    """Worst values over scenarios that arrive block by block, in order, one class per entering scale."""

    def __init__(self, study: Study, scenarios: Scenarios, period: Real) -> None:
        self.study, self.gain = study, study.gain.values
        scales = np.array(study.scenarios.tolerance_scales)
        self.entry = np.searchsorted(scales, scenarios.scale)  # first scale that contains the scenario
        self.limits = {one.name: one.limits(period) for one in study.requirements}
        shape = (len(study.requirements), len(scales), len(period), len(self.gain))
        self.signs = np.array([-1.0 if one.sense == "at least" else 1.0 for one in study.requirements])
        self.worst = np.full(shape, -np.inf)  # sign * value, so that the worst is the largest
        self.place = np.full(shape, -1, np.int32)
        self.unsolved = np.zeros(shape, bool)
        self.met = np.zeros(shape[1:], np.int64)
        self.nominal = np.full((shape[0], *shape[2:]), np.nan)
        self.tally = np.zeros(len(STATUS_MEANING), np.int64)
        self.first = np.full((len(STATUS_MEANING), 2), np.nan)

    def count(self, status: NDArray[np.int8], period: Real) -> None:
        """Tally the status of (M, G) loops at (M,) periods."""
        self.tally += np.bincount(status.ravel(), minlength=len(self.tally))
        for code in np.unique(status):
            if code != SOLVED and np.isnan(self.first[code, 0]):
                row, column = np.argwhere(status == code)[0]
                self.first[code] = self.gain[column], period[row]

    def add(self, values: Real, start: int) -> None:
        """values : (R, block, P, G) of the scenarios from `start` on."""
        if start == 0:
            self.nominal = values[:, 0].copy()
        entry = self.entry[start : start + values.shape[1]]
        met = self._met(values)
        for scale in np.unique(entry):
            inside = np.flatnonzero(entry == scale)
            self.met[scale] += met[inside].sum(axis=0)
            for index, sign in enumerate(self.signs):
                self._take(index, int(scale), sign * values[index, inside], start + inside)

    def _take(self, index: int, scale: int, signed: Real, numbers: NDArray[np.intp]) -> None:
        """Merge one block; a NaN wins over every number and its first scenario is the one reported."""
        worst, place, unsolved = (
            self.worst[index, scale],
            self.place[index, scale],
            self.unsolved[index, scale],
        )
        failed = np.isnan(signed)
        key = np.where(failed, np.inf, signed)
        where = np.where(failed.any(axis=0), failed.argmax(axis=0), key.argmax(axis=0))
        value = np.take_along_axis(key, where[None], 0)[0]
        fresh = failed.any(axis=0)
        better = ~unsolved & (fresh | (value > worst) | (place < 0))
        place[better] = numbers[where][better]
        worst[better] = value[better]
        unsolved |= fresh

    def _met(self, values: Real) -> NDArray[np.bool_]:
        met = np.ones(values.shape[1:], bool)
        for one, value in zip(self.study.requirements, values, strict=True):
            if one.sense == "below":
                met &= value < 1.0
                continue
            limit = self.limits[one.name][:, None]
            met &= value >= limit if one.sense == "at least" else value <= limit
        return met

    def result(self) -> TileResult:
        """Accumulate the scales: a wider one contains every narrower one."""
        for scale in range(1, self.worst.shape[1]):
            before, now = (slice(None), scale - 1), (slice(None), scale)
            inherit = self.unsolved[before] | ~self.unsolved[now] & (self.worst[before] >= self.worst[now])
            inherit &= self.place[before] >= 0
            self.worst[now] = np.where(inherit, self.worst[before], self.worst[now])
            self.place[now] = np.where(inherit, self.place[before], self.place[now])
            self.unsolved[now] |= self.unsolved[before]
        worst = np.where(self.unsolved, np.nan, self.signs[:, None, None, None] * self.worst)
        scales = len(self.study.scenarios.tolerance_scales)
        counts = np.cumsum(np.bincount(self.entry, minlength=scales))[:, None, None]
        share = np.cumsum(self.met, axis=0) / counts
        return TileResult(self.nominal, worst, self.place, share, self.tally, self.first)


def loops_in(study: Study, scenarios: int) -> int:
    """Number of closed loops of the whole sweep."""
    return scenarios * int(
        np.prod([len(axis.values) for axis in (*study.design, study.gain, study.period)], dtype=int)
    )
