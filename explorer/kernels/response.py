"""Responses: chains of sampled plants and compensators in, what happens after a step of reference or load out.

LANES gains of one pair of scenario and period are stepped side by side, as deviations from rest. A loop is done when
kernels.contraction bounds everything after the last sample below what has been seen: every largest value and every
last exit is proved, not assumed. Loops that need more samples than kernels.advancing steps are pursued one by one
with jumps (kernels.patient). Between samples y is exact to 2e-13 of its largest coefficient (kernels.chains).

Every stage is compiled by itself and runs over many blocks; only kernels.advancing depends on the numbers of states.
"""

from __future__ import annotations

import functools
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.advancing import (
    DONE,
    ERROR,
    FACTS,
    INPUT_REST,
    MISSED,
    OTHER,
    OUTPUT_REST,
    PLANT,
    advancer,
    weigher,
)  # fmt: skip
from explorer.kernels.chains import MEASURED, SAMPLED
from explorer.kernels.compiling import compiled
from explorer.kernels.entries import sources
from explorer.kernels.lanes import LANES
from explorer.kernels.patient import pursuer
from explorer.kernels.resting import at_rest, loop_at_rest, ramp_follower, rest_of_chain
from explorer.kernels.stepping import lane_rows
from explorer.kernels.watching import HIGH, HIGH_TIME, LOW, NINE_TENTHS, OUTSIDE, SEEN, TENTH, USED

Real = NDArray[np.float64]

DECIDED, SKIPPED, UNDECIDED = 0, 1, 2
STATUS_MEANING = {
    DECIDED: "decided",
    SKIPPED: "not simulated: not stable",
    UNDECIDED: "response not decided within bounded work",
}
# Rows of the answer; settling times, one per band, come from SETTLING on
(OVERSHOOT, PEAK_TIME, UNDERSHOOT, RISE_TIME, STEP_ERROR, RAMP_ERROR, EFFORT, EXCESS, LOAD_PEAK, SETTLING) = range(10)

_UNSEEN = 5e-10  # of the final value: what no measure reports; overshoot below 1e-7 % is 0
_REPORTED = 1e-9
_SHARE = 1e-10  # of a largest value: what may be missed of it
_GONE = 1e13  # |y| beyond so many final values: the final value is 0 but for rounding
_AT_ONCE = 1024  # blocks, to bound memory
_STRETCHES = 256  # that are stepped
_MOST_NODES = 2_000_000  # stretches that are looked at when jumping


class Plants(NamedTuple):
    """M pairs of scenario and period.

    numbers : (M, 3n + 4(n+2) + 3) see stepping.plant_numbers. outputs : (M, 4, n+2) over (states, held input before,
    after its change): y at the sample as MEASURED by the sensor, SAMPLED itself, ENDING just before the next sample,
    SPREAD the most by which y leaves the straight line between these two. drift : (M, n+2) see periods.drifts.
    edges : (M, pieces + 1) ends of the pieces in periods; table : (M, pieces, DEGREE+1, n+2) their Bernstein
    coefficients; pieces : (M,) their number, 0 where none describe the period. begun : (M, n) states at load_from,
    (M,) the first sample after a load step's first effect; load_most : (M,) largest |y| before it; period : (M,) [s].
    """

    numbers: Real
    outputs: Real
    drift: Real
    edges: Real
    table: Real
    pieces: NDArray[np.int64]
    begun: Real
    load_from: NDArray[np.int64]
    load_most: Real
    period: Real


class Compensators(NamedTuple):
    """chain : (P, G, 3, nc) d, l, s; given : (P, G, nc) output; direct : (P, G); column : (M,) the pair's period."""

    chain: Real
    given: Real
    direct: Real
    column: NDArray[np.intp]


def respond(
    plants: Plants, compensators: Compensators, slowest: Real, rows: NDArray[np.bool_], bands: Real, delay: int
) -> tuple[Real, NDArray[np.int8]]:
    """Every measure asked for, of every stable loop of M pairs that share a whole-sample delay, at G gains.

    Parameters
    ----------
    slowest : (M, G) largest log|z|; loops where it is not < 0 are SKIPPED. rows : (SETTLING,) which rows of the answer
        are asked for; bands : (B,) relative settling bands, a row each. delay : whole samples.

    Returns
    -------
    answer : (SETTLING + B, M, G), rows as named above: %, s, %, s, output units (two), input units, %, output units, s.
        NaN where not asked, skipped or undecided; +inf where the response never gets there or y tends to 0.
    status : (M, G) int8, see STATUS_MEANING.
    """
    answer = np.full((SETTLING + len(bands), *slowest.shape), np.nan)
    stable = slowest < 0
    status = np.where(stable, UNDECIDED, SKIPPED).astype(np.int8)
    pairs, gains, real = blocks_of(stable & (plants.pieces > 0)[:, None])
    for start in range(0, len(pairs), _AT_ONCE):
        part = slice(start, start + _AT_ONCE)
        block = Blocks(plants, compensators, slowest, pairs[part], gains[part], delay)
        found, done = block.measures(rows, bands)
        place = real[part]
        lines = np.broadcast_to(pairs[part, None], place.shape)[place]
        columns = gains[part][place]
        status[lines, columns] = np.where(done[place], DECIDED, UNDECIDED)
        answer[:, lines, columns] = np.where(done[place], found[:, place], np.nan)
    return answer, status


def blocks_of(chosen: NDArray[np.bool_]) -> tuple[NDArray[np.intp], NDArray[np.intp], NDArray[np.bool_]]:
    """Chosen loops (M, G) in blocks of one pair: pairs (B,), gains (B, LANES), and which lanes are not repeats."""
    lines, columns = np.nonzero(chosen)
    counts = chosen.sum(axis=1)
    blocks = -(-counts // LANES)
    pairs = np.repeat(np.arange(len(counts)), blocks)
    before = np.cumsum(counts) - counts
    order = np.arange(len(pairs)) - np.repeat(np.cumsum(blocks) - blocks, blocks)
    lane = order[:, None] * LANES + np.arange(LANES)
    inside = lane < counts[pairs][:, None]
    place = before[pairs][:, None] + np.minimum(lane, counts[pairs][:, None] - 1)
    return pairs, columns[place] if len(lines) else np.zeros((0, LANES), np.intp), inside


class Blocks:
    """Some blocks with the arrays that the stages share."""

    def __init__(
        self, plants: Plants, compensators: Compensators, slowest: Real, pairs: NDArray[np.intp],
        gains: NDArray[np.intp], delay: int,
    ) -> None:  # fmt: skip
        self.plants, self.compensators, self.delay = plants, compensators, delay
        self.slowest, self.pairs, self.gains = slowest, pairs, gains
        self.states, self.others = plants.begun.shape[1], compensators.given.shape[2]
        self.lanes = np.zeros((len(pairs), lane_rows(self.states, self.others), LANES))
        self.facts = np.zeros((len(pairs), LANES, FACTS))
        self.begin = np.zeros((len(pairs), self.states + self.others + 1, LANES))

    def measures(self, rows: NDArray[np.bool_], bands: Real) -> tuple[Real, NDArray[np.bool_]]:
        """(rows, blocks, LANES) and whether each loop is decided."""
        wanted = np.array([
            rows[OVERSHOOT] or rows[PEAK_TIME] or rows[EXCESS], rows[UNDERSHOOT], rows[EXCESS], rows[EFFORT],
            rows[RISE_TIME], False,
        ])  # fmt: skip
        answer = np.full((SETTLING + len(bands), len(self.pairs), LANES), np.nan)
        done = np.ones(answer.shape[1:], bool)
        period = self.plants.period[self.pairs][:, None]
        self._begin(load=False)
        if wanted.any() or len(bands) or rows[LOAD_PEAK]:
            weigher()(
                *self._plants("numbers", "outputs", "table", "pieces"), self.slowest, self.pairs, self.gains,
                self.others, self.delay, self.lanes, self.facts,
            )  # fmt: skip
        answer[STEP_ERROR] = np.abs(self.facts[..., ERROR])
        if rows[RAMP_ERROR]:
            ramp_follower()(
                *self._plants("numbers", "outputs", "edges", "table", "pieces", "period"), self.pairs, self.others,
                self.delay, self.lanes, self.begin, self.facts[..., OUTPUT_REST], self.facts[..., ERROR],
                answer[RAMP_ERROR],
            )  # fmt: skip
        if wanted.any() or len(bands):
            found = self._reference(wanted, bands)
            done &= self.facts[..., DONE] == 1.0
            _measure(found, self.facts[..., OUTPUT_REST], period, answer)
        if rows[LOAD_PEAK]:
            answer[LOAD_PEAK] = self._load()
            done &= self.facts[..., DONE] == 1.0
        answer[:SETTLING][~rows] = np.nan
        return answer, done

    def _plants(self, *names: str) -> list[Any]:
        return [getattr(self.plants, name) for name in names]

    def _begin(self, load: bool) -> None:
        beginner()(
            *self._plants("numbers", "outputs", "begun"), *self.compensators, self.pairs, self.gains, load, self.delay,
            self.lanes, self.facts, self.begin,
        )  # fmt: skip

    def _reference(self, wanted: NDArray[np.bool_], bands: Real) -> Real:
        found = np.zeros((len(self.pairs), LANES, OUTSIDE + len(bands)))
        found[..., LOW], found[..., USED] = -1.0, np.abs(self.facts[..., INPUT_REST])
        found[..., HIGH_TIME], found[..., TENTH : NINE_TENTHS + 1] = np.inf, np.nan
        self.facts[..., MISSED], self.facts[..., DONE] = _UNSEEN, 0.0
        self._advance(np.zeros(len(self.pairs), np.int64), wanted, bands, found)
        return found

    def _load(self) -> Real:
        self._begin(load=True)
        rest = self.facts[..., OUTPUT_REST]
        most = np.maximum(np.abs(rest), self.plants.load_most[self.pairs][:, None])
        found = np.zeros((len(self.pairs), LANES, OUTSIDE))
        found[..., HIGH], found[..., LOW] = most - rest, -most - rest
        self.facts[..., MISSED], self.facts[..., DONE] = _SHARE * most, 0.0
        wanted = np.array([True, True, False, False, False, True])
        self._advance(self.plants.load_from[self.pairs], wanted, np.zeros(0), found)
        return np.maximum(found[..., HIGH] + rest, -(found[..., LOW] + rest))

    def _advance(self, first: NDArray[np.int64], wanted: NDArray[np.bool_], bands: Real, found: Real) -> None:
        shared = self._plants("edges", "table", "pieces")
        advancer(self.states, self.others)(
            self.plants.numbers, *shared, self.pairs, first, self.delay, wanted, bands, self.lanes, self.facts,
            self.begin, found, _STRETCHES,
        )  # fmt: skip
        if (self.facts[..., DONE] == 0.0).any():
            pursuer()(
                *self._plants("numbers", "outputs", "drift"), *shared, self.pairs, first, self.others, self.delay,
                wanted, bands, self.lanes, self.facts, self.begin, found, _MOST_NODES,
            )  # fmt: skip


def _measure(found: Real, rest: Real, period: Real, answer: Real) -> None:
    """Measures of the reference step from what was found, relative to the final value `rest`."""
    lost = (rest == 0.0) | (found[..., HIGH] > _GONE) | (found[..., LOW] < -_GONE)
    over, under = found[..., HIGH], -1.0 - found[..., LOW]
    answer[OVERSHOOT] = np.where(over >= _REPORTED, 100.0 * over, 0.0)
    answer[PEAK_TIME] = np.where(over >= _REPORTED, found[..., HIGH_TIME] * period, np.inf)
    answer[UNDERSHOOT] = np.where(under >= _REPORTED, 100.0 * under, 0.0)
    answer[RISE_TIME] = (found[..., NINE_TENTHS] - found[..., TENTH]) * period
    answer[EXCESS] = 100.0 * (over - found[..., SEEN])
    answer[SETTLING:] = np.moveaxis(found[..., OUTSIDE:], -1, 0) * period
    for row in (OVERSHOOT, PEAK_TIME, UNDERSHOOT, RISE_TIME, EXCESS, *range(SETTLING, len(answer))):
        answer[row][lost] = np.inf
    answer[EFFORT] = found[..., USED] * np.where(rest == 0.0, 1.0, np.abs(rest))


@functools.cache
def beginner() -> Any:
    """The compiled `_begin_blocks`, see there; an entry, see kernels.entries."""
    checksum = sources()

    @compiled(cache=True)
    def run(*arguments: Any) -> None:
        """See `_begin_blocks`."""
        if checksum:  # always true
            _begin_blocks(*arguments)

    return run


@compiled(cache=False)
def _begin_blocks(
    numbers: NDArray[Any], outputs: NDArray[Any], begun: NDArray[Any], chains: NDArray[Any], givens: NDArray[Any],
    directs: NDArray[Any], columns: NDArray[Any], pairs: NDArray[Any], gains: NDArray[Any], load: bool, delay: int,
    lanes: NDArray[Any], facts: NDArray[Any], begin: NDArray[Any],
) -> None:  # fmt: skip
    """Compensators into lanes, rest into facts, and the deviations to begin with into begin.

    After a reference step they are relative to the final value of y, where there is one.
    """
    n, nc = begun.shape[1], givens.shape[2]
    rest, other, chain = np.zeros(n), np.zeros(nc), np.zeros((3, n))
    for block in range(pairs.shape[0]):
        pair, own = pairs[block], lanes[block]
        for i in range(3):
            for j in range(n):
                chain[i, j] = numbers[pair, i * n + j]
        integrates = rest_of_chain(chain, rest)
        held, column = 0.0 if integrates else 1.0, columns[pair]
        measured = at_rest(outputs[pair, MEASURED], rest, held)
        seen = at_rest(outputs[pair, SAMPLED], rest, held)
        for lane in range(LANES):
            gain, known = gains[block, lane], facts[block, lane]
            direct = directs[column, gain]
            sums = rest_of_chain(chains[column, gain], other)
            given = 0.0 if sums else direct
            for j in range(nc):
                given += givens[column, gain, j] * other[j]
                for i in range(3):
                    own[i * nc + j, lane] = chains[column, gain, i, j]
                own[3 * nc + j, lane] = givens[column, gain, j]
            known[PLANT], known[OTHER], known[INPUT_REST], known[OUTPUT_REST], known[ERROR] = loop_at_rest(
                measured, seen, integrates, given, sums, load
            )
            scale = 1.0
            if not load and known[OUTPUT_REST] != 0.0:
                scale = 1.0 / known[OUTPUT_REST]
                known[INPUT_REST] *= scale
            own[4 * nc, lane] = direct
            own[4 * nc + 1, lane] = 1.0 / (1.0 + direct * outputs[pair, MEASURED, n]) if delay == 0 else 1.0
            own[4 * nc + 2, lane] = known[INPUT_REST]
            for j in range(n):
                begin[block, j, lane] = (begun[pair, j] if load else 0.0) - scale * known[PLANT] * rest[j]
            for j in range(nc):
                begin[block, n + j, lane] = -scale * known[OTHER] * other[j]
            begin[block, n + nc, lane] = -known[INPUT_REST]
