"""Patience: one loop whose response takes very many samples, by jumps with powers of its matrix, for kernels.response.

A stretch of 2^i periods is bounded by its values at both ends and what kernels.powers proves of the way between. Where
that bound cannot change what was found, the stretch is passed over; else it is halved, down to single periods, which
are exact. What is found is therefore the same as by stepping. Slow tails, time constants far apart and thousands of
oscillations cost some ten thousand stretches at most; beyond _MOST_NODES the loop stays undecided.

Method: branch and bound over time (Land and Doig 1960), powers by squaring as A^h - I.
"""

from __future__ import annotations

import functools
from typing import Any

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.advancing import DONE, INPUT_REST, MISSED, OUTPUT_REST
from explorer.kernels.apart import apart
from explorer.kernels.bernstein import DEGREE, highest, last_crossing
from explorer.kernels.compiling import compiled
from explorer.kernels.contraction import loop_matrix, loop_rows
from explorer.kernels.entries import sources
from explorer.kernels.powers import LEVELS, ROOTS, Powers, along, at_most, first_level, leap, powers_for, raise_powers
from explorer.kernels.watching import (
    HIGH,
    HIGH_TIME,
    LOW,
    OUTSIDE,
    RISE_LEVELS,
    SEEN,
    TENTH,
    USED,
    WANT_EFFORT,
    WANT_HIGH,
    WANT_LOW,
    WANT_RISE,
    WANT_SEEN,
    WANT_SIZE,
    balance,
    piece_of,
)  # fmt: skip

_MOST_NODES = 2_000_000
_SHARE = 1e-10  # of the largest |u|: what may be missed of it
# What is searched for: the largest of sign·y, of y at samples, of |u|; the last time outside; the first time above
_LARGEST, _AT_SAMPLES, _INPUT, _LAST, _FIRST = range(5)


@functools.cache
def pursuer() -> Any:
    """The compiled `_pursue_lanes`, see there; an entry, see kernels.entries."""
    checksum = sources()

    @compiled(cache=True)
    def run(*arguments: Any) -> None:
        if checksum:  # always true
            _pursue_lanes(*arguments)

    return run


@compiled(cache=False)
def _pursue_lanes(
    numbers: NDArray[Any], outputs: NDArray[Any], edges: NDArray[Any], table: NDArray[Any], pieces: NDArray[Any],
    pairs: NDArray[Any], first: NDArray[Any], others: int, delay: int, wanted: NDArray[Any], bands: NDArray[Any],
    lanes: NDArray[Any], facts: NDArray[Any], begin: NDArray[Any], found: NDArray[Any],
) -> None:  # fmt: skip
    """Complete `found` of every lane that is not DONE; DONE becomes 1.0 where that is possible.

    See kernels.advancing for the arrays.
    """
    n = outputs.shape[2] - 2
    m = n + others + delay
    powers = powers_for(n, m)
    chain = np.zeros((3, n))
    for block in range(pairs.shape[0]):
        pair = pairs[block]
        for i in range(3):
            for j in range(n):
                chain[i, j] = numbers[pair, i * n + j]
        for lane in range(facts.shape[1]):
            if facts[block, lane, DONE] != 0.0:
                continue
            loop_rows(outputs[pair], lanes[block], lane, n, others, delay, powers.rows)
            loop_matrix(chain, lanes[block], lane, n, others, delay, powers.rows, powers.jump[0])
            for j in range(m):
                powers.root[0, j] = begin[block, min(j, n + others), lane]
            first_level(outputs[pair], powers)
            if _decided(
                first[block], edges[pair], table[pair], pieces[pair], wanted, bands, facts[block, lane],
                found[block, lane], powers,
            ):  # fmt: skip
                facts[block, lane, DONE] = 1.0


@compiled(cache=False)
def _decided(
    first: int, edges: NDArray[Any], table: NDArray[Any], count: int, wanted: NDArray[Any], bands: NDArray[Any],
    facts: NDArray[Any], found: NDArray[Any], powers: Powers,
) -> bool:  # fmt: skip
    """Every search that is wanted; whether all came to an end."""
    top, nodes = raise_powers(powers), 0
    if top < 0:
        return False
    for turn in range(6 + bands.shape[0]):
        kind, column, level = _task(turn, wanted, bands, found)
        if kind >= 0:
            nodes = _search(
                kind, column, level, facts[MISSED], facts[INPUT_REST], top, first, edges, table, count, powers, found,
                nodes,
            )  # fmt: skip
            if wanted[WANT_SIZE]:
                facts[MISSED] = _SHARE * balance(facts[OUTPUT_REST], found)
            if nodes > _MOST_NODES:
                return False
    return True


@compiled(cache=False)
def _task(turn: int, wanted: NDArray[Any], bands: NDArray[Any], found: NDArray[Any]) -> tuple[int, int, float]:
    """(what to search, column of found, level); (-1, 0, 0.0) when this turn has nothing to do."""
    kind, column, level = -1, 0, 0.0
    if turn == 0 and wanted[WANT_HIGH]:
        kind, column, level = _LARGEST, HIGH, 1.0
    elif turn == 1 and wanted[WANT_LOW]:
        kind, column, level = _LARGEST, LOW, -1.0
    elif turn == 2 and wanted[WANT_SEEN]:
        kind, column, level = _AT_SAMPLES, SEEN, 1.0
    elif turn == 3 and wanted[WANT_EFFORT]:
        kind, column = _INPUT, USED
    elif turn in (4, 5) and wanted[WANT_RISE] and np.isnan(found[TENTH + turn - 4]):
        kind, column, level = _FIRST, TENTH + turn - 4, RISE_LEVELS[turn - 4]
    elif turn > 5:
        kind, column, level = _LAST, OUTSIDE + turn - 6, bands[turn - 6]
    return kind, column, level


@compiled(cache=False)
def _search(
    kind: int, column: int, level: float, missed: float, rest: float, top: int, first: int, edges: NDArray[Any],
    table: NDArray[Any], count: int, powers: Powers, found: NDArray[Any], nodes: int,
) -> int:  # fmt: skip
    """One search over all of time, root stretch by root stretch; nodes so far, beyond _MOST_NODES when given up."""
    apart()
    which = 1 if kind == _INPUT else 0
    roots, root = 0, powers.root
    while True:  # as far as the future matters
        if at_most(powers.future[which], root[roots]) <= _allowed(kind, column, level, missed, rest, found):
            break
        if roots == ROOTS:
            return _MOST_NODES + 1
        leap(powers.jump[top], root[roots], root[roots + 1])
        roots += 1
        if kind != _LAST:
            nodes, over = _descend(
                kind, column, level, rest, top, (roots - 1) * 2.0**top, first, roots - 1, edges, table, count,
                powers, found, nodes,
            )  # fmt: skip
            if over:
                return nodes
    while kind == _LAST and roots > 0:
        roots -= 1
        nodes, over = _descend(
            kind, column, level, rest, top, roots * 2.0**top, first, roots, edges, table, count, powers, found,
            nodes,
        )  # fmt: skip
        if over:
            return nodes
    return nodes


@compiled(cache=False)
def _allowed(kind: int, column: int, level: float, missed: float, rest: float, found: NDArray[Any]) -> float:
    """Deviations up to this cannot change what was found."""
    allowed = level
    if kind == _LARGEST:
        allowed = max(level * found[column], missed)
    elif kind == _AT_SAMPLES:
        allowed = max(found[column], missed)
    elif kind == _INPUT:
        allowed = max(found[column] - abs(rest), _SHARE * found[column])
    elif kind == _FIRST:
        allowed = -level
    return allowed


@compiled(cache=False)
def _descend(
    kind: int, column: int, level: float, rest: float, top: int, place: float, first: int, own: int,
    edges: NDArray[Any], table: NDArray[Any], count: int, powers: Powers, found: NDArray[Any], nodes: int,
) -> tuple[int, bool]:  # fmt: skip
    """Search root stretch `own`: the earlier half first for _FIRST, the later for _LAST, else the one with the higher
    bound; nodes so far, and whether that decides.
    """
    apart()
    waiting, row = powers.state, powers.seen[1 if kind == _INPUT else 0]
    m, last = row.shape[0], 0
    depth, begin, ends = np.zeros(LEVELS + 2, np.int64), np.zeros(LEVELS + 2), np.zeros((LEVELS + 2, 3))
    for j in range(m):
        waiting[0, j] = powers.root[own, j]
    depth[0], begin[0] = top, place
    ends[0, 0], ends[0, 1], ends[0, 2] = along(row, powers.root[own]), along(row, powers.root[own + 1]), np.inf
    while last >= 0:
        nodes += 1
        if nodes > _MOST_NODES:
            return nodes, True
        if ends[last, 2] <= _reached(kind, column, level, found):
            last -= 1
            continue
        if depth[last] == 0:
            if _exactly(kind, column, level, first + begin[last], waiting[last], edges, table, count, powers, found):
                return nodes, True
            last -= 1
            continue
        depth[last] -= 1
        depth[last + 1] = depth[last]
        leap(powers.jump[depth[last]], waiting[last], waiting[last + 1])
        begin[last + 1] = begin[last] + 2.0 ** depth[last]
        ends[last + 1, 1] = ends[last, 1]
        ends[last, 1] = ends[last + 1, 0] = along(row, waiting[last + 1])
        for half in (last, last + 1):
            ends[half, 2] = _bound(
                kind, column, level, rest, first + begin[half], depth[half], waiting[half], ends[half], powers, found
            )
        if kind == _FIRST or (kind != _LAST and ends[last, 2] > ends[last + 1, 2]):  # the one on top is next
            for j in range(m):
                waiting[last, j], waiting[last + 1, j] = waiting[last + 1, j], waiting[last, j]
            for j in range(3):
                ends[last, j], ends[last + 1, j] = ends[last + 1, j], ends[last, j]
            begin[last], begin[last + 1] = begin[last + 1], begin[last]
        last += 1
    return nodes, False


@compiled(cache=False)
def _reached(kind: int, column: int, level: float, found: NDArray[Any]) -> float:
    """Stretches whose bound is not above this cannot change what was found."""
    if kind in (_LAST, _FIRST):
        return level
    return float(level * found[column] if kind == _LARGEST else found[column])


@compiled(cache=False)
def _bound(
    kind: int, column: int, level: float, rest: float, time: float, depth: int, state: NDArray[Any],
    ends: NDArray[Any], powers: Powers, found: NDArray[Any],
) -> float:  # fmt: skip
    """The most that is searched for in a stretch; the value at its first sample counts at once.

    ends : the searched output at both ends of the stretch.
    """
    apart()
    which = 1 if kind == _INPUT else 0
    value, end = ends[0], ends[1]
    if kind == _INPUT:
        value, end = abs(rest + value), abs(rest + end)
    elif kind == _LARGEST:
        value, end = level * value, level * end
    elif kind == _LAST:
        value, end = abs(value), abs(end)
    reach = at_most(powers.stray[depth, which], state)
    if kind in (_INPUT, _LARGEST, _AT_SAMPLES):
        sign = level if kind == _LARGEST else 1.0
        if value > sign * found[column]:
            found[column] = sign * value
            if column == HIGH and kind == _LARGEST:
                found[HIGH_TIME] = time
    return float(max(value, end) + reach)


@compiled(cache=False)
def _exactly(
    kind: int, column: int, level: float, time: float, state: NDArray[Any], edges: NDArray[Any], table: NDArray[Any],
    count: int, powers: Powers, found: NDArray[Any],
) -> bool:  # fmt: skip
    """One period, exactly; whether that ends the search. Samples and inputs are done by their values alone."""
    apart()
    if kind in (_AT_SAMPLES, _INPUT):
        return False
    n, m = table.shape[2] - 2, state.shape[0]
    values, curve, slope = powers.values[0, : n + 2], powers.values[1, : DEGREE + 1], powers.values[2]
    for j in range(n):
        values[j] = state[j]
    values[n], values[n + 1] = 0.0, 0.0
    for j in range(m):
        values[n] += powers.rows[2, j] * state[j]
        values[n + 1] += powers.rows[3, j] * state[j]
    sign = level if kind == _LARGEST else 1.0
    for turn in range(count):
        piece = count - 1 - turn if kind == _LAST else turn
        piece_of(table[piece], values, sign, curve)
        begin, length = time + edges[piece], edges[piece + 1] - edges[piece]
        if kind == _LARGEST:
            value, place = highest(curve, sign * found[column], powers.searches, slope)
            if place >= 0.0:
                found[column] = sign * value
                if column == HIGH:
                    found[HIGH_TIME] = begin + place * length
            continue
        place = 1.0 if abs(curve[DEGREE]) > level else -1.0
        if kind == _FIRST:
            place = 0.0 if curve[0] >= level else last_crossing(curve, level, powers.searches, True)
        elif place < 0.0:
            place = max(
                last_crossing(curve, level, powers.searches, False),
                last_crossing(curve, -level, powers.searches, False),
            )
        if place >= 0.0:
            found[column] = begin + place * length
            return True
    return False
