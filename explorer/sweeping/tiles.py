"""Tiles: one piece of the grid in, every scenario of it solved, measured and reduced to its worst out.

A tile is a run of neighbouring periods at one value of the further design variables, with all gains and all
scenarios. The cut depends on the study alone, never on the number of workers, so results do not either.
"""

from __future__ import annotations

from collections import Counter
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.lanes import LANES
from explorer.kernels.tracking import gain_steps
from explorer.loop.closing import Group, Sampled, groups_of
from explorer.loop.compensator import Compensator, compensator_on_axes
from explorer.loop.sampling import delays_of, sample
from explorer.loop.solving import solve
from explorer.loop.word_length import rounded
from explorer.measures.measuring import Measuring
from explorer.study.expressions import ExpressionError
from explorer.study.model import Study
from explorer.study.reading import fault_in
from explorer.sweeping.reduction import Reduction, TileResult
from explorer.sweeping.scenarios import Scenarios

Real = NDArray[np.float64]

_DELAYS_AT_ONCE = 1_000_000
LOOPS_IN_TILE = 2_000_000  # a fraction of a second of work, and what a killed run can lose
LOOPS_AT_ONCE = 100_000  # bounds memory; half of it or double are slower

FEWEST_TILES, FEWEST_LOOPS = 8, 50_000  # tiles for the workers to share, unless they would be smaller than that


class Tile(NamedTuple):
    """number in the run; design : index of the combination of further variables; periods start..stop."""

    number: int
    design: int
    start: int
    stop: int


def tiles_of(study: Study, scenarios: int) -> list[Tile]:
    """The cut of the grid; a tile of one scenario holds no more loops than are solved at once."""
    designs = int(np.prod([len(axis.values) for axis in study.design], dtype=int))
    length = len(study.period.values)
    gains = len(study.gain.values)
    shared = max(designs * length // FEWEST_TILES, FEWEST_LOOPS // (scenarios * gains) + 1)
    step = int(np.clip(min(LOOPS_IN_TILE // (scenarios * gains), LOOPS_AT_ONCE // gains, shared), 1, length))
    cuts = [(design, start) for design in range(designs) for start in range(0, length, step)]
    return [
        Tile(number, design, start, min(start + step, length)) for number, (design, start) in enumerate(cuts)
    ]


def design_values(study: Study, design: int) -> dict[str, float]:
    """The further design variables of one combination, the last axis running fastest."""
    shape = tuple(len(axis.values) for axis in study.design)
    place = np.unravel_index(design, shape) if shape else ()
    return {axis.name: float(axis.values[index]) for axis, index in zip(study.design, place, strict=True)}


def loops_by_delay(study: Study, scenarios: Scenarios) -> dict[int, int]:
    """How many loops of the whole sweep have each whole-sample delay, that is, one degree."""
    table, period, count = scenarios.by_name(), study.period.values, Counter[int]()
    step = max(1, _DELAYS_AT_ONCE // len(scenarios.scale))
    for start in range(0, len(period), step):
        delays, pairs = np.unique(delays_of(study, table, period[start : start + step])[1], return_counts=True)
        count.update(dict(zip(delays.tolist(), pairs.tolist(), strict=True)))
    each = loops_in(study, 1) // len(period)  # gains and designs of one pair of scenario and period
    return {delay: pairs * each for delay, pairs in count.items()}


def compute(study: Study, scenarios: Scenarios, tile: Tile, alike: dict[int, int]) -> TileResult:
    """Solve one tile.

    alike : from `loops_by_delay`.

    Raises StudyError where an expression has no value somewhere on the axes or in the tolerance box.
    """
    period, gain = study.period.values[tile.start : tile.stop], study.gain.values
    compensator = compensator_of(study, design_values(study, tile.design), period)
    table = scenarios.by_name()
    sampled = sampled_of(study, table, period)
    measuring = Measuring(study, sampled, compensator, table, period)
    reduction, steps = Reduction(study, scenarios, period), gain_steps(gain)
    pairs = max(LANES, LOOPS_AT_ONCE // len(gain) // LANES * LANES)
    for whole in groups_of(sampled):
        for start in range(0, len(whole.rows), pairs):
            part = slice(start, start + pairs)
            group = Group(whole.delay, whole.rows[part], whole.columns[part])
            solved = solve(sampled, compensator, group, steps, alike[whole.delay])
            reduction.add(group, measuring.of(group, solved))
    return reduction.result()


def compensator_of(study: Study, design: dict[str, float], period: Real) -> Compensator:
    """The compensator as the processor runs it; StudyError where its expression has no value."""
    values = {parameter.name: parameter.nominal for parameter in study.parameters} | design
    try:
        exact = compensator_on_axes(study.loop, values, study.gain.values, period)
    except ExpressionError as error:
        raise fault_in(study, ("loop", "compensator"), study.loop.text, error) from None
    bits = study.loop.coefficient_bits
    return rounded(exact, study.gain.values, bits) if bits else exact


def sampled_of(study: Study, table: dict[str, Real], period: Real) -> Sampled:
    """The sampled plants of a table of parameter values; StudyError where an expression has no value."""
    try:
        return sample(study, table, period)
    except ExpressionError as error:
        raise fault_in(study, ("plant",), study.plant.text, error) from None


def loops_in(study: Study, scenarios: int) -> int:
    """Number of closed loops of the whole sweep."""
    return scenarios * int(
        np.prod([len(axis.values) for axis in (*study.design, study.gain, study.period)], dtype=int)
    )
