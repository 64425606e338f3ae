"""Advancing: LANES loops from a start to the sample after which nothing more can happen, for kernels.response.

A block is up to LANES gains of one pair of scenario and period; arrays have the blocks first. See kernels.response.
"""

from __future__ import annotations

import functools
from typing import Any

import numpy as np
from numba import literally
from numpy.typing import NDArray

from explorer.kernels.apart import apart
from explorer.kernels.bernstein import DEGREE, ROOM
from explorer.kernels.compiling import compiled
from explorer.kernels.contraction import loop_matrix, loop_rows, padded, square, weigh
from explorer.kernels.entries import sources
from explorer.kernels.lanes import LANES
from explorer.kernels.stepping import INPUT, INPUT_NOW, MOST_STATES, PULL, STEP_ROWS, TROUGH, WATCHED, WEIGHT, step
from explorer.kernels.watching import (
    HIGH,
    LOW,
    NINE_TENTHS,
    SEEN,
    USED,
    WANT_EFFORT,
    WANT_HIGH,
    WANT_LOW,
    WANT_RISE,
    WANT_SEEN,
    WANT_SIZE,
    balance,
    due,
    watch,
)  # fmt: skip

# Columns of `facts`: plant and compensator at rest (factors), u and y at rest, error of y, stretches in the window of
# the bound (0: none found), what the line of delayed inputs weighs in the bounds of y and of u, what may be missed
# of y, 1.0 when done
PLANT, OTHER, INPUT_REST, OUTPUT_REST, ERROR, WINDOW, LINE, LINE_PULL, MISSED, DONE = range(10)
FACTS = 10
_STRETCH = 32  # samples between two looks at the bound
_SQUARINGS = 12  # the longest window is 2**this samples
_FIRST = 5  # 2**5 samples are a stretch
_SHARE = 1e-10  # of the largest |u| or |y|: what may be missed of it
_SLOWEST = 4.0 / (32 * 256)  # -log|z| below which a loop is not even begun here


@functools.cache
def weigher() -> Any:
    """The compiled `_weigh_blocks`, see there; an entry, see kernels.entries."""
    checksum = sources()

    @compiled(cache=True)
    def run(*arguments: Any) -> None:
        """See `_weigh_blocks`."""
        if checksum:  # always true
            _weigh_blocks(*arguments)

    return run


@compiled(cache=False)
def _weigh_blocks(
    numbers: NDArray[Any], outputs: NDArray[Any], table: NDArray[Any], pieces: NDArray[Any], slowest: NDArray[Any],
    pairs: NDArray[Any], gains: NDArray[Any], others: int, delay: int, lanes: NDArray[Any], facts: NDArray[Any],
) -> None:  # fmt: skip
    """Weights of the bounds, into lanes and facts, with the shortest window that proves them.

    numbers … pieces : see response.Plants; slowest : (M, G) largest log|z|; pairs : (B,); gains : (B, LANES).
    """
    n = outputs.shape[2] - 2
    m = n + others + delay
    size, first = padded(m), 4 * others + 3
    work = np.zeros((3, size * size, LANES))
    power, rows, matrix, weights = work[0], np.zeros((4, m)), np.zeros((m, m)), np.zeros((2, m))
    chain, span = np.zeros((3, n)), np.zeros(n + 2)
    for block in range(pairs.shape[0]):
        pair, own, known = pairs[block], lanes[block], facts[block]
        _spans(numbers[pair], table[pair], pieces[pair], chain, span)
        for row in range(size * size):
            for lane in range(LANES):
                power[row, lane] = 0.0
        for lane in range(LANES):
            loop_rows(outputs[pair], own, lane, n, others, delay, rows)
            loop_matrix(chain, own, lane, n, others, delay, rows, matrix)
            for i in range(m):
                for j in range(m):
                    power[i * size + j, lane] = matrix[i, j]
            known[lane, WINDOW] = 0.0
        for row in range(first, own.shape[0]):
            for lane in range(LANES):
                own[row, lane] = 0.0
        for squaring in range(1, _SQUARINGS + 1):
            square(power, work[1], work[2], size)
            missing = 0
            for lane in range(LANES if squaring >= _FIRST else 0):
                rate = -slowest[pair, gains[block, lane]]
                if known[lane, WINDOW] == 0.0 and rate > _SLOWEST:
                    missing += 1
                    if rate * 2.0**squaring >= 1.0:
                        loop_rows(outputs[pair], own, lane, n, others, delay, rows)
                        if weigh(power, size, lane, n, span, rows, weights):
                            missing -= 1
                            _keep(own, known[lane], weights, lane, n + others, first, 2.0 ** (squaring - _FIRST))
            if squaring >= _FIRST and missing == 0:
                break


@compiled(cache=False)
def _spans(numbers: NDArray[Any], table: NDArray[Any], count: int, chain: NDArray[Any], span: NDArray[Any]) -> None:
    """The chain from the coefficients, and the most that y has of each state and input anywhere in the period."""
    apart()
    n = chain.shape[1]
    for i in range(3):
        for j in range(n):
            chain[i, j] = numbers[i * n + j]
    for column in range(n + 2):
        span[column] = 0.0
        for piece in range(count):
            for i in range(DEGREE + 1):
                span[column] = max(span[column], abs(table[piece, i, column]))


@compiled(cache=False)
def _keep(
    lanes: NDArray[Any], facts: NDArray[Any], weights: NDArray[Any], lane: int, states: int, first: int, window: float
) -> None:
    """Weights of the states go to the lane's rows, those of the delayed inputs are added up."""
    apart()
    facts[WINDOW], facts[LINE], facts[LINE_PULL] = window, 0.0, 0.0
    for j in range(states):
        lanes[first + j, lane] = weights[0, j]
        lanes[first + states + j, lane] = weights[1, j]
    for j in range(states, weights.shape[1]):
        facts[LINE] += weights[0, j]
        facts[LINE_PULL] += weights[1, j]


@functools.cache
def advancer(states: int, others: int) -> Any:
    """The compiled `_advance` for plants (with sensor) of so many states and compensators of `others`."""
    checksum, code = sources(), MOST_STATES * states + others

    @compiled(cache=True)
    def run(
        numbers: NDArray[Any], edges: NDArray[Any], table: NDArray[Any], pieces: NDArray[Any], pairs: NDArray[Any],
        first: NDArray[Any], delay: int, wanted: NDArray[Any], bands: NDArray[Any], lanes: NDArray[Any],
        facts: NDArray[Any], begin: NDArray[Any], found: NDArray[Any], stretches: int,
    ) -> None:  # fmt: skip
        """See `_advance`."""
        if checksum:  # always true, see kernels.entries
            _advance(
                code, numbers, edges, table, pieces, pairs, first, delay, wanted, bands, lanes, facts, begin, found,
                stretches,
            )  # fmt: skip

    return run


@compiled(cache=False)
def _advance(
    code: int, numbers: NDArray[Any], edges: NDArray[Any], table: NDArray[Any], pieces: NDArray[Any],
    pairs: NDArray[Any], first: NDArray[Any], delay: int, wanted: NDArray[Any], bands: NDArray[Any],
    lanes: NDArray[Any], facts: NDArray[Any], begin: NDArray[Any], found: NDArray[Any], stretches: int,
) -> None:  # fmt: skip
    """Step every block until facts[..., DONE] is 1 in every lane, or so many stretches.

    first : (B,) sample to begin at; begin : (B, states + 1, LANES) deviations there, the last row what the line of
    delayed inputs holds; found : (B, LANES, columns), see kernels.watching. Lanes that are DONE already, and those
    without a window, are stepped but not watched.
    """
    code = literally(code)
    states = code // MOST_STATES + code % MOST_STATES
    stride = states + STEP_ROWS
    history, inputs = np.zeros(((_STRETCH + 1) * stride, LANES)), np.zeros((delay + _STRETCH + 2, LANES))
    past, searches = np.zeros((3 * stretches, LANES)), np.zeros((ROOM, DEGREE + 3))
    values = np.zeros((3, max(DEGREE + 1, table.shape[3])))
    for block in range(pairs.shape[0]):
        pair, own, known = pairs[block], lanes[block], facts[block]
        for row in range(states):
            _copy(history, row, begin[block], row)
        for row in range(inputs.shape[0]):
            _copy(inputs, row, begin[block], states)
        for stretch in range(stretches):
            for row in range(WATCHED):
                history[states + row] = -np.inf if row != TROUGH else np.inf
            for k in range(_STRETCH):
                at = k * stride
                step(
                    code,
                    (numbers, pair, own, 0, history, at, inputs, k, inputs, k + 1, history, at + stride, 1),
                )
                _copy(inputs, k + delay, history, (k + 1) * stride + states + INPUT_NOW)
            left = 0
            for lane in range(LANES):
                if known[lane, DONE] == 0.0 and known[lane, WINDOW] > 0.0:
                    if due(
                        history, lane, _STRETCH * stride + states, first[block] + (stretch + 1) * _STRETCH, wanted,
                        bands, found[block, lane],
                    ):  # fmt: skip
                        watch(
                            history, inputs, lane, states, first[block] + stretch * _STRETCH, _STRETCH, edges[pair],
                            table[pair], pieces[pair], wanted, bands, found[block, lane], searches, values,
                        )  # fmt: skip
                    if wanted[WANT_SIZE]:
                        known[lane, MISSED] = _SHARE * balance(known[lane, OUTPUT_REST], found[block, lane])
                    if _over(
                        history, past, lane, stretch, states, delay, wanted, bands, known[lane], found[block, lane]
                    ):
                        known[lane, DONE] = 1.0
                    else:
                        left += 1
            if left == 0:
                break
            for row in range(states):
                _copy(history, row, history, _STRETCH * stride + row)
            for row in range(delay):
                _copy(inputs, row, inputs, _STRETCH + row)


@compiled(cache=False)
def _copy(target: NDArray[Any], row: int, source: NDArray[Any], own: int) -> None:
    for lane in range(LANES):
        target[row, lane] = source[own, lane]


@compiled(cache=False)
def _over(
    history: NDArray[Any], past: NDArray[Any], lane: int, stretch: int, states: int, delay: int, wanted: NDArray[Any],
    bands: NDArray[Any], facts: NDArray[Any], found: NDArray[Any],
) -> bool:  # fmt: skip
    """Whether the bound on everything after this stretch rules out any change of what was found."""
    apart()
    last = _STRETCH * (states + STEP_ROWS) + states
    past[3 * stretch, lane] = history[last + WEIGHT, lane]
    past[3 * stretch + 1, lane] = history[last + PULL, lane]
    past[3 * stretch + 2, lane] = history[last + INPUT, lane]
    window = int(facts[WINDOW])
    if stretch + 1 < window or (wanted[WANT_RISE] and np.isnan(found[NINE_TENTHS])):
        return False
    allowed = np.inf
    if wanted[WANT_HIGH]:
        allowed = min(allowed, max(found[HIGH], facts[MISSED]))
    if wanted[WANT_LOW]:
        allowed = min(allowed, max(-found[LOW], facts[MISSED]))
    if wanted[WANT_SEEN]:
        allowed = min(allowed, max(found[SEEN], facts[MISSED]))
    for which in range(bands.shape[0]):
        allowed = min(allowed, bands[which])
    pull = np.inf
    if wanted[WANT_EFFORT]:
        pull = max(found[USED] - abs(facts[INPUT_REST]), _SHARE * found[USED])
    if not (past[3 * stretch, lane] <= allowed and past[3 * stretch + 1, lane] <= pull):
        return False
    earliest = stretch + 1 - window - (delay + _STRETCH - 1) // _STRETCH
    most = abs(facts[INPUT_REST]) if earliest < 0 else 0.0
    bound = draw = 0.0
    for own in range(max(earliest, 0), stretch + 1):
        most = max(most, past[3 * own + 2, lane])
        if own > stretch - window:
            bound, draw = max(bound, past[3 * own, lane]), max(draw, past[3 * own + 1, lane])
    return bool(bound + facts[LINE] * most <= allowed and draw + facts[LINE_PULL] * most <= pull)
