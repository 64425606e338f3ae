"""Stepping: one sample of LANES loops, from states and held inputs to the next states and what measures watch.

Deviations from the rest the loop tends to are stepped, so that there is no input and all of them decay. The plant's
coefficients are the same in every lane, the compensator's differ.
"""

from __future__ import annotations

from typing import Any

from explorer.kernels.lanes import emitted

MOST_STATES = 64  # of plant or compensator: code = MOST_STATES * plant states + compensator states
# Rows after the states of one record: extremes so far of …
CREST, TROUGH, TOP, EFFORT, INPUT, WEIGHT, PULL = range(7)  # … bounds of y, y at samples, |u|, |u's deviation|, bounds
WATCHED = 7
INPUT_NOW, OUTPUT, ENDING, SPREAD = range(7, 11)  # … and of this step alone
STEP_ROWS = 11

Row = Any


def plant_numbers(n: int) -> int:
    """How many coefficients a plant of n states has: chain, outputs, then where the input now enters."""
    return 3 * n + (n + 2) * 4 + 3


def lane_rows(n: int, nc: int) -> int:
    """Rows of a compensator and weights: chain, output, direct, scale, input at rest, weights of y and of u."""
    return 4 * nc + 3 + 2 * (n + nc)


def _tridiagonal(state: list[Row], d: Any, lower: Any, upper: Any, driven: Row) -> list[Row]:
    result = []
    for i, own in enumerate(state):
        change = d[i] * own + lower[i] * (state[i - 1] if i else driven)
        if i + 1 < len(state):
            change = change + upper[i] * state[i + 1]
        result.append(own + change)
    return result


def _product(row: Any, values: list[Row]) -> Row:
    total = row[0] * values[0]
    for factor, value in zip(row[1:], values[1:], strict=True):
        total = total + factor * value
    return total


def _split(rows: tuple[Row, ...], *sizes: int) -> list[list[Row]]:
    parts, start = [], 0
    for size in sizes:
        parts.append(list(rows[start : start + size]))
        start += size
    return parts


def stepped(operations: Any, code: int, *rows: Row) -> list[Row]:
    """The next record: states, what was watched so far with this step, and this step's own rows.

    rows : plant coefficients (see plant_numbers), lane rows (see lane_rows), the record's states and watched rows,
    then the inputs held before and after the change in this period as far as earlier steps gave them.
    """
    n, nc = divmod(code, MOST_STATES)
    w = n + 2
    plant, lanes, state, other, watched, held = _split(
        rows, plant_numbers(n), lane_rows(n, nc), n, nc, WATCHED, 2
    )
    d, lower, upper, measured, seen, ending, spread, where = _split(tuple(plant), n, n, n, w, w, w, w, 3)
    cd, cl, cu, out, (direct, scale, rest), wy, wu = _split(tuple(lanes), nc, nc, nc, nc, 3, n + nc, n + nc)
    now, next_now, earlier = where  # 1.0 where this sample's input is held at once, after the change, or neither
    known = held[0] * (1.0 - now)
    sampled = _product(measured[: n + 1], [*state, known])
    u = (_product(out, other) - direct * sampled if nc else -(direct * sampled)) * scale
    before = known + u * now
    after = held[1] * earlier + u * next_now
    error = -(sampled + measured[n] * (u * now))
    inputs = [*state, before]
    y, end = _product(seen[: n + 1], inputs), _product(ending, [*inputs, after])
    size = operations.absolute
    room = _product(spread, [size(value) for value in [*inputs, after]])
    everything = [size(value) for value in [*state, *other]]
    most, least = operations.maximum, operations.minimum
    deviation = size(u)
    watched = [
        most(watched[CREST], most(y, end) + room),
        least(watched[TROUGH], least(y, end) - room),
        most(watched[TOP], y),
        most(watched[EFFORT], size(u + rest)),
        most(watched[INPUT], deviation),
        most(watched[WEIGHT], _product(wy, everything)) if everything else watched[WEIGHT],
        most(watched[PULL], _product(wu, everything)) if everything else watched[PULL],
    ]
    following = _tridiagonal(state, d, lower, upper, before)
    return [*following, *_tridiagonal(other, cd, cl, cu, error), *watched, u, y, end, room]


def _inputs(code: int) -> tuple[int, ...]:
    n, nc = divmod(code, MOST_STATES)
    return (-plant_numbers(n), lane_rows(n, nc), n + nc + WATCHED, 1, 1)


step = emitted(stepped, _inputs)
