"""Periods: realisations of plants and sensors in, every (scenario, period) pair as numbers for kernels.response out."""

from __future__ import annotations

import functools
import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.chains import describe
from explorer.kernels.compiling import compiled
from explorer.kernels.entries import sources

_WHOLE = 1e-12  # a load's dead time this close to a whole number of samples is that number


@functools.cache
def pair_describer() -> Any:
    """The compiled `_describe_pairs`, see there; an entry, see kernels.entries."""
    checksum = sources()

    @compiled(cache=True)
    def run(*arguments: Any) -> None:
        if checksum:  # always true
            _describe_pairs(*arguments)

    return run


@compiled(cache=False)
def _describe_pairs(
    state: NDArray[Any], start: NDArray[Any], measured: NDArray[Any], seen: NDArray[Any], scenario: NDArray[Any],
    period: NDArray[Any], advance: NDArray[Any], load_delay: NDArray[Any], delay: int, numbers: NDArray[Any],
    outputs: NDArray[Any], edges: NDArray[Any], table: NDArray[Any], pieces: NDArray[Any], begun: NDArray[Any],
    load_from: NDArray[Any], load_most: NDArray[Any],
) -> None:  # fmt: skip
    """Fill the arrays of response.Plants for M pairs.

    Parameters
    ----------
    state, start : (S, n, n), (S, n) of plant and sensor in series, lower triangular [1/s]; measured, seen :
    (S, n+1) output rows [direct, output] of the sampler's input and of the plant's output.
    scenario : (M,) ; period, advance, load_delay : (M,) [s], see chains.describe, and the plant's own dead time.
    """
    n = start.shape[1]
    augmented, chain = np.zeros((n + 1, n + 1), np.complex128), np.zeros((3, n))
    for pair in range(period.shape[0]):
        row = scenario[pair]
        for i in range(n):
            augmented[i + 1, 0] = start[row, i]
            for j in range(i + 1):
                augmented[i + 1, j + 1] = state[row, i, j]
        whole, late = _late(load_delay[pair], period[pair])
        pieces[pair], load_most[pair] = describe(
            augmented, measured[row], seen[row], period[pair], advance[pair], chain, outputs[pair], edges[pair],
            table[pair], late, begun[pair],
        )  # fmt: skip
        load_from[pair] = whole
        fill_numbers(chain, outputs[pair], delay, numbers[pair])
        total = load_most[pair]
        for value in numbers[pair]:
            total += abs(value)
        for value in begun[pair]:
            total += abs(value)
        if not total < np.inf:
            pieces[pair] = 0


@compiled(cache=False)
def fill_numbers(chain: NDArray[Any], outputs: NDArray[Any], delay: int, numbers: NDArray[Any]) -> None:
    """Coefficients in the order of stepping.plant_numbers."""
    n = chain.shape[1]
    for i in range(3):
        for j in range(n):
            numbers[i * n + j] = chain[i, j]
    for i in range(4):
        for j in range(n + 2):
            numbers[3 * n + i * (n + 2) + j] = outputs[i, j]
    numbers[-3], numbers[-2], numbers[-1] = 0.0, 0.0, 0.0
    numbers[-3 + min(delay, 2)] = 1.0


@compiled(cache=False)
def _late(delay: float, period: float) -> tuple[int, float]:
    """The first sample at or after a delay, and the time from the delay's end to it."""
    samples = delay / period
    whole = round(samples)
    if abs(samples - whole) <= _WHOLE * max(1.0, samples):
        return int(whole), 0.0
    whole = math.ceil(samples)
    return int(whole), min(whole * period - delay, period)
