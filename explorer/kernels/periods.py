"""Periods: realisations of plants and sensors in, every (scenario, period) pair as numbers for kernels.response out.

Between two samples y is stored as Bernstein polynomials over pieces so short that the rest of the Taylor series is
rounding. Plain NumPy, all pairs at once, the pairs along the last axis where no other order is said.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.bernstein import DEGREE, from_centred_powers, largest_magnitudes
from explorer.kernels.chains import ENDING, MEASURED, SAMPLED, SPREAD, chains_of_plants, exponentials, product, solved

MOST_PIECES = 48
_REST = 2e-13  # of an output's largest coefficient: what a piece may leave of the Taylor series
_FAINT = 1e-6  # of the largest output of all: smaller ones are as exact as that one alone
_WHOLE = 1e-12  # a load's dead time this close to a whole number of samples is that number
_CENTRED = from_centred_powers()
_ATTEMPTS = 60 + 2 * MOST_PIECES

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


class Pieces:
    """Polynomials of some outputs over time, piece by piece.

    count : (K,) pieces, 0 where they were more than MOST_PIECES; edges : (K, pieces + 1) [s]; table : (K, pieces,
    DEGREE+1, w). Unused places are 0.
    """

    def __init__(self, augmented: Complex, seen: Complex, start: Complex, length: Real) -> None:
        """seen exp(augmented t) start for 0 <= t <= length: (n+1, n+1, K), (n+1, K), (n+1, w, K), (K,)."""
        pairs, width = len(length), start.shape[1]
        self.count = np.zeros(pairs, np.int64)
        self.edges, self.table = np.zeros((pairs, 2)), np.zeros((pairs, 1, DEGREE + 1, width))
        position, step, largest = np.zeros(pairs), length.copy(), np.zeros((width, pairs))
        active = np.flatnonzero(length > 0.0)
        for _ in range(_ATTEMPTS):
            if not len(active):
                break
            step[active] = np.minimum(step[active], length[active] - position[active])
            terms = _taylor(augmented[..., active], seen[:, active], start[..., active], position[active], step[active])
            largest[:, active] = np.maximum(largest[:, active], np.abs(terms[:, 0]).max(axis=0))
            rest = np.maximum(np.abs(terms[0, DEGREE + 1]), np.abs(terms[2, DEGREE + 1]))
            size = np.maximum(largest[:, active], _FAINT * largest[:, active].max(axis=0))
            good = (rest <= 0.5 * _REST * size).all(axis=0)
            step[active[~good]] *= 0.5
            self._append(active[good], terms[1][..., good], position, step)
            done = position[active] >= length[active] * (1.0 - 1e-14)
            full = self.count[active] == MOST_PIECES
            self.count[active[full & ~done]] = 0
            active = active[~(done | full)]
        self.count[active] = 0

    def _append(self, own: NDArray[np.intp], terms: Real, position: Real, step: Real) -> None:
        if not len(own):
            return
        place = self.count[own]
        if place.max() >= self.table.shape[1]:
            more = ((0, 0), (0, self.table.shape[1]))
            self.edges, self.table = np.pad(self.edges, more), np.pad(self.table, (*more, (0, 0), (0, 0)))
        curve = product(_CENTRED[:, :, None, None], terms[:-1, None])[:, 0]
        self.table[own, place] = np.moveaxis(curve, -1, 0)
        position[own] += step[own]
        self.count[own] += 1
        self.edges[own, self.count[own]] = position[own]
        step[own] *= 2.0


def _taylor(augmented: Complex, seen: Complex, start: Complex, position: Real, step: Real) -> Real:
    """(3, DEGREE+2, w, K): seen · exp · (augmented step/2)^j/j! · start at begin, middle and end of a step."""
    pairs = len(step)
    times = np.concatenate([position + 0.5 * point * step for point in range(3)])
    augmented, start = np.tile(augmented, 3), np.tile(start, 3)
    row = product(np.tile(seen, 3)[None], exponentials(augmented, times))
    half = np.tile(0.5 * step, 3)
    terms = np.empty((DEGREE + 2, start.shape[1], 3 * pairs))
    for term in range(DEGREE + 2):
        terms[term] = product(row, start)[0].real
        row = product(row, augmented) * (half / (term + 1))
    return np.stack([terms[..., k * pairs : (k + 1) * pairs] for k in range(3)])


def describe_pairs(
    augmented: Complex, measured: Complex, seen: Complex, period: Real, advance: Real, load_delay: Real
) -> dict[str, Any]:
    """chain (K, 3, n), begun (K, n), and outputs, edges, table, pieces, load_from, load_most of response.Plants.

    Parameters
    ----------
    augmented : (n+1, n+1, K) [[0, 0], [start, state]] of plant and sensor in series, lower triangular [1/s]; measured,
    seen : (n+1, K) output rows [direct, output] of the sampler's input and of the plant's output. period, advance,
    load_delay : (K,) [s], see kernels.chains, and the plant's own dead time.
    """
    pairs, n = len(period), len(augmented) - 1
    with np.errstate(over="ignore", invalid="ignore"):
        own = chains_of_plants(augmented, period, advance)
        both = Pieces(
            np.tile(augmented, 2), np.tile(seen, 2), np.concatenate([own.before, own.after], axis=-1),
            np.concatenate([period - advance, advance]),
        )  # fmt: skip
        edges, table, count = _joined(both, period, advance)
        outputs = np.zeros((pairs, 4, n + 2))
        outputs[:, MEASURED] = product(measured[None], own.before)[0].real.T
        _chords(edges, table, count, outputs)
        whole, late = _late(load_delay, period)
        begun = solved(own.basis, (exponentials(augmented, late) - exponentials(augmented, advance))[1:, 0]).real
        most = _before_sample(augmented, seen, late)
        chain = np.moveaxis(own.chain, -1, 0)
        total = np.abs(chain).sum(axis=(1, 2)) + np.abs(outputs).sum(axis=(1, 2)) + np.abs(begun).sum(axis=0) + most
    return {
        "chain": chain, "outputs": outputs, "edges": edges, "table": table,
        "pieces": np.where(total < np.inf, count, 0), "begun": np.ascontiguousarray(begun.T),
        "drift": drifts(chain, outputs, edges, table, count), "load_from": whole, "load_most": most,
    }  # fmt: skip


def _joined(both: Pieces, period: Real, advance: Real) -> tuple[Real, Real, NDArray[np.int64]]:
    """Both parts of every period as one row of pieces: edges in periods, table, count."""
    pairs = len(period)
    first, second = both.count[:pairs], both.count[pairs:]
    count = np.where((first == 0) & (period > advance) | (second == 0) & (advance > 0.0), 0, first + second)
    count[count > MOST_PIECES] = 0
    room = max(1, int(count.max(initial=1)))
    edges, table = np.zeros((pairs, room + 1)), np.zeros((pairs, room, *both.table.shape[2:]))
    for piece in range(room):
        early = piece < first
        own = np.flatnonzero(piece < count)
        source = np.where(early, np.arange(pairs), pairs + np.arange(pairs))[own]
        place = np.where(early, piece, piece - first)[own]
        table[own, piece] = both.table[source, place]
        begin = np.where(early, 0.0, period - advance)[own]
        edges[own, piece + 1] = (begin + both.edges[source, place + 1]) / period[own]
    edges[np.arange(pairs), count] = np.where(count > 0, 1.0, 0.0)
    return edges, table, count


def _chords(edges: Real, table: Real, count: NDArray[np.int64], outputs: Real) -> None:
    """SAMPLED, ENDING and SPREAD of the outputs from the pieces."""
    pairs = np.arange(len(count))
    begin, end = table[:, 0, 0], table[pairs, np.maximum(count, 1) - 1, DEGREE]
    place = edges[:, :-1, None] + np.diff(edges)[..., None] * np.arange(DEGREE + 1) / DEGREE
    away = np.abs(table - begin[:, None, None] - (end - begin)[:, None, None] * place[..., None])
    used = np.arange(table.shape[1]) < count[:, None]
    spread = np.where(used[..., None, None], away, 0.0).max(axis=(1, 2))
    outputs[:, SAMPLED], outputs[:, ENDING] = begin, end
    outputs[:, SPREAD] = spread + _REST * np.maximum(np.abs(begin), np.abs(end))


def drifts(chain: Real, outputs: Real, edges: Real, table: Real, count: NDArray[np.int64]) -> Real:
    """(K, n+2) how far y leaves the straight line between two samples per change of each state and of the input.

    The way between two samples is written over the changes of the chain's states and of the input, which settle, not
    over their values: y rests where they do. The last column is what the last state itself adds, but for rounding 0.
    """
    n = chain.shape[2]
    seen = outputs[:, None, None, SAMPLED]
    place = edges[:, :-1, None] + np.diff(edges)[..., None] * np.arange(DEGREE + 1) / DEGREE
    way = table - seen
    d, lower, upper = (chain[:, row, None, None] for row in range(3))
    by_input = way[..., n + 1]
    result = np.zeros((*way.shape[:3], n + 2))
    result[..., n] = by_input - place * seen[..., n]
    before, own = np.zeros(by_input.shape), way[..., n] + by_input  # of the state before, and what drives this one
    for j in range(n):
        own = own / lower[..., j]
        result[..., j] = own - place * seen[..., j]
        left = way[..., j] - own * d[..., j] - (before * upper[..., j - 1] if j else 0.0)
        before, own = own, left
    result[..., n + 1] = own if n else 0.0
    used = np.arange(table.shape[1]) < count[:, None]
    return np.asarray(np.where(used[..., None, None], np.abs(result), 0.0).max(axis=(1, 2)))


def _late(delay: Real, period: Real) -> tuple[NDArray[np.int64], Real]:
    """The first sample at or after a delay, and the time from the delay's end to it."""
    samples = delay / period
    near = np.rint(samples)
    at_once = np.abs(samples - near) <= _WHOLE * np.maximum(1.0, samples)
    whole = np.where(at_once, near, np.ceil(samples))
    return whole.astype(np.int64), np.where(at_once, 0.0, np.minimum(whole * period - delay, period))


def _before_sample(augmented: Complex, seen: Complex, late: Real) -> Real:
    """Largest |y| from a load step's first effect to the next sample: 0 where there is no such time."""
    start = np.zeros((len(augmented), 1, len(late)), complex)
    start[0] = 1.0
    pieces = Pieces(augmented, seen, start, late)
    used = np.repeat(np.arange(len(late)), pieces.table.shape[1])
    most = largest_magnitudes(pieces.table[..., 0].reshape(-1, DEGREE + 1), used, len(late))
    return np.where((pieces.count == 0) & (late > 0.0), np.nan, most)
