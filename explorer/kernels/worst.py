"""Worst over scenarios: values of many loops in, the worst of each scale, period and gain kept, for sweeping."""

from __future__ import annotations

import math
from typing import Any

from numpy.typing import NDArray

from explorer.kernels.compiling import compiled

Array = NDArray[Any]


@compiled()
def keep_worst(
    values: Array,
    pairs: int,
    scenario: Array,
    column: Array,
    scale: Array,
    sign: float,
    strict: bool,
    limit: Array,
    met: Array,
    worst: Array,
    place: Array,
) -> None:
    """Merge the values of one requirement.

    Parameters
    ----------
    values : (blocks, G, LANES); pair k is lane k % LANES of block k // LANES. scenario, column, scale : (M,) of each
        pair, scenarios ascending within a column.
    sign : +1 when larger is worse, -1 when smaller is. strict : whether a value at the limit misses it.
    limit : (P,); met : (blocks, G, LANES) bool, made false where the limit is missed or the value NaN.
    worst : (scales, P, G) of sign * value, NaN unknown, in place; place : (scales, P, G) int32, -1 where nothing was
        seen. The first NaN wins over every number; of equal values the lowest scenario stays.
    """
    lanes = values.shape[2]
    for pair in range(pairs):
        block, lane = pair // lanes, pair % lanes
        level, period, number = scale[pair], column[pair], scenario[pair]
        bound = sign * limit[period]
        for step in range(values.shape[1]):
            value = sign * values[block, step, lane]
            met[block, step, lane] &= value < bound or (value == bound and not strict)
            old, known = worst[level, period, step], place[level, period, step]
            if known < 0:
                worst[level, period, step], place[level, period, step] = value, number
            elif math.isnan(old):
                if math.isnan(value) and number < known:
                    place[level, period, step] = number
            elif math.isnan(value) or value > old or (value == old and number < known):
                worst[level, period, step], place[level, period, step] = value, number


@compiled()
def count_met(met: Array, pairs: int, column: Array, scale: Array, count: Array) -> None:
    """Add to count (scales, P, G) the loops of `met` (blocks, G, LANES) bool."""
    lanes = met.shape[2]
    for pair in range(pairs):
        block, lane = pair // lanes, pair % lanes
        level, period = scale[pair], column[pair]
        for step in range(met.shape[1]):
            count[level, period, step] += met[block, step, lane]
