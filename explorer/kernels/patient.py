"""Patience: one loop whose response takes very many samples, by jumps with powers of its matrix, for kernels.response.

A stretch of 2^i periods is bounded by its values at both ends and what kernels.powers proves of the way between. Where
that bound cannot change what was found, the stretch is passed over; else it is halved, down to single periods, which
are exact. What is found is therefore the same as by stepping. Slow tails cost some hundred stretches, thousands of
oscillations some ten thousand; beyond `most_nodes` the loop stays undecided.

Method: branch and bound over time (Land and Doig 1960), powers by squaring as A^h - I.
"""

from __future__ import annotations

import functools
from typing import Any

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.advancing import DONE, INPUT_REST, MISSED, OUTPUT_REST
from explorer.kernels.apart import apart
from explorer.kernels.bernstein import DEGREE, ROOM, highest, last_crossing
from explorer.kernels.compiling import compiled
from explorer.kernels.contraction import loop_matrix, loop_rows
from explorer.kernels.entries import sources
from explorer.kernels.powers import (
    CHANGE,
    EVERYWHERE,
    INPUT,
    LEVELS,
    OFFSET,
    ROOM_ROWS,
    ROOT,
    ROOTS,
    SAMPLES,
    SEEN_INPUT,
    SPARE,
    WAITING,
    along,
    at_most,
    at_most_of,
    first_level,
    moved,
    raise_powers,
)  # fmt: skip
from explorer.kernels.powers import SEEN as SEEN_OUTPUT
from explorer.kernels.tasks import AT_SAMPLES, FIRST, LARGEST, LARGEST_INPUT, LAST, task_of
from explorer.kernels.watching import HIGH, HIGH_TIME, WANT_SIZE, balance

_SHARE = 1e-10  # of the largest |u|: what may be missed of it


@functools.cache
def pursuer() -> Any:
    """The compiled `_pursue_lanes`, see there; an entry, see kernels.entries."""
    checksum = sources()

    @compiled(cache=True)
    def run(*arguments: Any) -> None:
        """See `_pursue_lanes`."""
        if checksum:  # always true
            _pursue_lanes(*arguments)

    return run


@compiled(cache=False)
def _pursue_lanes(
    numbers: NDArray[Any], outputs: NDArray[Any], drift: NDArray[Any], edges: NDArray[Any], table: NDArray[Any],
    pieces: NDArray[Any], pairs: NDArray[Any], first: NDArray[Any], others: int, delay: int, wanted: NDArray[Any],
    bands: NDArray[Any], lanes: NDArray[Any], facts: NDArray[Any], begin: NDArray[Any], found: NDArray[Any],
    most_nodes: int,
) -> None:  # fmt: skip
    """Complete `found` of every lane that is not DONE; DONE becomes 1.0 where that is possible.

    See kernels.advancing for the arrays, kernels.powers for the work space.
    """
    n = outputs.shape[2] - 2
    m = n + others + delay
    jump, stray = np.zeros((LEVELS, m, m)), np.zeros((LEVELS, 2, m))
    room, rows = np.zeros((ROOM_ROWS, m)), np.zeros((4, m))
    searches, values = np.zeros((ROOM, DEGREE + 3)), np.zeros((3, max(DEGREE + 1, n + 2)))
    chain = np.zeros((3, n))
    for block in range(pairs.shape[0]):
        pair = pairs[block]
        for i in range(3):
            for j in range(n):
                chain[i, j] = numbers[pair, i * n + j]
        for lane in range(facts.shape[1]):
            if facts[block, lane, DONE] != 0.0:
                continue
            loop_rows(outputs[pair], lanes[block], lane, n, others, delay, rows)
            loop_matrix(chain, lanes[block], lane, n, others, delay, rows, jump[0])
            for j in range(m):
                room[ROOT, j] = begin[block, min(j, n + others), lane]
            first_level(outputs, drift, pair, n, rows, jump, stray, room)
            if _decided(
                first[block], pair, edges, table, pieces[pair], wanted, bands, facts[block, lane],
                found[block, lane], jump, stray, room, rows, searches, values, most_nodes,
            ):  # fmt: skip
                facts[block, lane, DONE] = 1.0


@compiled(cache=False)
def _decided(
    first: int, pair: int, edges: NDArray[Any], table: NDArray[Any], count: int, wanted: NDArray[Any],
    bands: NDArray[Any], facts: NDArray[Any], found: NDArray[Any], jump: NDArray[Any], stray: NDArray[Any],
    room: NDArray[Any], rows: NDArray[Any], searches: NDArray[Any], values: NDArray[Any], most_nodes: int,
) -> bool:  # fmt: skip
    """Every search that is wanted; whether all came to an end."""
    apart()
    top, nodes = raise_powers(jump, stray, room), 0
    if top < 0:
        return False
    for turn in range(6 + bands.shape[0]):
        kind, column, level = task_of(turn, wanted, bands, found)
        if kind < 0:
            continue
        nodes = _search(
            kind, column, level, facts[MISSED], facts[INPUT_REST], top, first, pair, edges, table, count, found, jump,
            stray, room, rows, searches, values, nodes, most_nodes,
        )  # fmt: skip
        if wanted[WANT_SIZE]:
            facts[MISSED] = _SHARE * balance(facts[OUTPUT_REST], found)
        if nodes > most_nodes:
            return False
    return True


@compiled(cache=False)
def _search(
    kind: int, column: int, level: float, missed: float, rest: float, top: int, first: int, pair: int,
    edges: NDArray[Any], table: NDArray[Any], count: int, found: NDArray[Any], jump: NDArray[Any], stray: NDArray[Any],
    room: NDArray[Any], rows: NDArray[Any], searches: NDArray[Any], values: NDArray[Any], nodes: int,
    most_nodes: int,
) -> int:  # fmt: skip
    """One search over all of time, root stretch by root stretch; nodes so far, beyond most_nodes when given up."""
    apart()
    future = INPUT if kind == LARGEST_INPUT else EVERYWHERE
    roots, turned = 0, False
    while True:
        if not turned:  # as far as the future matters
            if at_most(room, future, ROOT + roots) <= _allowed(kind, column, level, missed, rest, found):
                turned = True
            elif roots == ROOTS:
                return most_nodes + 1
            else:
                moved(jump, top, room, ROOT + roots, ROOT + roots + 1, 1.0)
                roots += 1
        if turned and (kind != LAST or roots == 0):
            return nodes
        if kind == LAST and not turned:
            continue
        nodes, over = _descend(
            kind, column, level, rest, top, (roots - 1) * 2.0**top, first, roots - 1, pair, edges, table, count,
            found, jump, stray, room, rows, searches, values, nodes, most_nodes,
        )  # fmt: skip
        if over:
            return nodes
        if turned:
            roots -= 1


@compiled(cache=False)
def _allowed(kind: int, column: int, level: float, missed: float, rest: float, found: NDArray[Any]) -> float:
    """Deviations up to this cannot change what was found."""
    apart()
    allowed = level
    if kind == LARGEST:
        allowed = max(level * found[column], missed)
    elif kind == AT_SAMPLES:
        allowed = max(found[column], missed)
    elif kind == LARGEST_INPUT:
        allowed = max(found[column] - abs(rest), _SHARE * found[column])
    elif kind == FIRST:
        allowed = -level
    return allowed


@compiled(cache=False)
def _descend(
    kind: int, column: int, level: float, rest: float, top: int, place: float, first: int, own: int, pair: int,
    edges: NDArray[Any], table: NDArray[Any], count: int, found: NDArray[Any], jump: NDArray[Any], stray: NDArray[Any],
    room: NDArray[Any], rows: NDArray[Any], searches: NDArray[Any], values: NDArray[Any], nodes: int,
    most_nodes: int,
) -> tuple[int, bool]:  # fmt: skip
    """Search root stretch `own`: the earlier half first for FIRST, the later for LAST, else the one with the higher
    bound; nodes so far, and whether that decides.
    """
    apart()
    row = SEEN_INPUT if kind == LARGEST_INPUT else SEEN_OUTPUT
    m, last = room.shape[1], 0
    depth, ends = np.zeros(LEVELS + 2, np.int64), np.zeros((LEVELS + 2, 4))  # value, end, bound, first sample
    for j in range(m):
        room[WAITING, j] = room[ROOT + own, j]
    depth[0], ends[0, 3] = top, place
    ends[0, 0], ends[0, 1], ends[0, 2] = along(room, row, ROOT + own), along(room, row, ROOT + own + 1), np.inf
    while last >= 0:
        nodes += 1
        if nodes > most_nodes:
            return nodes, True
        if ends[last, 2] <= _reached(kind, column, level, found):
            last -= 1
            continue
        if depth[last] == 0:
            if kind != AT_SAMPLES and kind != LARGEST_INPUT and _exactly(
                kind, column, level, first + ends[last, 3], WAITING + last, pair, edges, table, count, found, room,
                rows, searches, values,
            ):  # fmt: skip
                return nodes, True
            last -= 1
            continue
        depth[last] -= 1
        depth[last + 1] = depth[last]
        moved(jump, depth[last], room, WAITING + last, WAITING + last + 1, 1.0)
        ends[last + 1, 3] = ends[last, 3] + 2.0 ** depth[last]
        ends[last + 1, 1] = ends[last, 1]
        ends[last, 1] = ends[last + 1, 0] = along(room, row, WAITING + last + 1)
        for half in range(last, last + 2):
            ends[half, 2] = _bound(
                kind, column, level, rest, first + ends[half, 3], depth[half], WAITING + half, ends[half, 0],
                ends[half, 1], found, jump, stray, room,
            )  # fmt: skip
        if kind == FIRST or (kind != LAST and ends[last, 2] > ends[last + 1, 2]):  # the one on top is next
            for j in range(m):
                held = room[WAITING + last, j]
                room[WAITING + last, j] = room[WAITING + last + 1, j]
                room[WAITING + last + 1, j] = held
            for j in range(4):
                held = ends[last, j]
                ends[last, j] = ends[last + 1, j]
                ends[last + 1, j] = held
        last += 1
    return nodes, False


@compiled(cache=False)
def _reached(kind: int, column: int, level: float, found: NDArray[Any]) -> float:
    """Stretches whose bound is not above this cannot change what was found."""
    apart()
    if kind in (LAST, FIRST):
        return level
    return float(level * found[column] if kind == LARGEST else found[column])


@compiled(cache=False)
def _bound(
    kind: int, column: int, level: float, rest: float, time: float, depth: int, state: int, value: float, end: float,
    found: NDArray[Any], jump: NDArray[Any], stray: NDArray[Any], room: NDArray[Any],
) -> float:  # fmt: skip
    """The most that is searched for in a stretch; the value at its first sample counts at once.

    value, end : the searched output at both ends of the stretch; state : row of the state at its begin.
    """
    apart()
    if kind == LARGEST_INPUT:
        value, end = abs(rest + value), abs(rest + end)
    elif kind == LARGEST:
        value, end = level * value, level * end
    elif kind == LAST:
        value, end = abs(value), abs(end)
    if kind in (LARGEST_INPUT, LARGEST, AT_SAMPLES):
        sign = level if kind == LARGEST else 1.0
        if value > sign * found[column]:
            found[column] = sign * value
            if column == HIGH and kind == LARGEST:
                found[HIGH_TIME] = time
    everywhere, offset, samples = EVERYWHERE, 0.0, SAMPLES
    if kind == LARGEST_INPUT:
        everywhere, samples, offset = INPUT, INPUT, abs(rest)
    elif kind == AT_SAMPLES:
        everywhere = SAMPLES
    reached, highest_end = _reached(kind, column, level, found), max(value, end)
    way = at_most_of(stray, depth, 1 if kind == LARGEST_INPUT else 0, room, state)
    bound = min(highest_end + way, offset + at_most(room, everywhere, state))
    if bound <= reached or highest_end > reached:
        return float(bound)
    moved(jump, 0, room, state, SPARE, 0.0)
    moved(jump, 0, room, SPARE, SPARE + 1, 0.0)
    reach = 0.125 * 4.0**depth * at_most(room, samples, SPARE + 1) if depth > 0 else 0.0
    if kind in (LARGEST, LAST, FIRST):
        reach += at_most(room, CHANGE, SPARE) + at_most(room, OFFSET, state)
    return float(min(highest_end + reach, bound))


@compiled(cache=False)
def _exactly(
    kind: int, column: int, level: float, time: float, state: int, pair: int, edges: NDArray[Any],
    table: NDArray[Any], count: int, found: NDArray[Any], room: NDArray[Any], rows: NDArray[Any],
    searches: NDArray[Any], values: NDArray[Any],
) -> bool:  # fmt: skip
    """One period, exactly; whether that ends the search."""
    apart()
    n, m = table.shape[3] - 2, room.shape[1]
    for j in range(n):
        values[0, j] = room[state, j]
    for which in range(2):
        values[0, n + which] = 0.0
        for j in range(m):
            values[0, n + which] += rows[2 + which, j] * room[state, j]
    sign = level if kind == LARGEST else 1.0
    curve, slope = values[1, : DEGREE + 1], values[2]
    for turn in range(count):
        piece = count - 1 - turn if kind == LAST else turn
        for i in range(DEGREE + 1):
            total = 0.0
            for j in range(n + 2):
                total += table[pair, piece, i, j] * values[0, j]
            curve[i] = sign * total
        begin, length = time + edges[pair, piece], edges[pair, piece + 1] - edges[pair, piece]
        place = -1.0
        if kind == LARGEST:
            value, place = highest(curve, sign * found[column], searches, slope)
            if place >= 0.0:
                found[column] = sign * value
                if column == HIGH:
                    found[HIGH_TIME] = begin + place * length
            continue
        if kind == FIRST and curve[0] >= level:
            place = 0.0
        elif kind == LAST and abs(curve[DEGREE]) > level:
            place = 1.0
        else:
            for side in range(1 if kind == FIRST else 2):
                place = max(place, last_crossing(curve, level if side == 0 else -level, searches, kind == FIRST))
        if place >= 0.0:
            found[column] = begin + place * length
            return True
    return False
