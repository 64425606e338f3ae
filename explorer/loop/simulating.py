"""Simulating: plants, compensators and periods in, measures of the sampled loop's responses out for sweeping.

The continuous output is exact between the samples; see kernels.response for the method and what is proved.
"""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping, Sequence
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.bernstein import DEGREE
from explorer.kernels.chains import MOST_PIECES
from explorer.kernels.periods import pair_describer
from explorer.kernels.response import SETTLING, UNDECIDED, Compensators, Plants, respond
from explorer.kernels.roots import polynomial_roots
from explorer.kernels.stepping import MOST_STATES, plant_numbers
from explorer.loop.closing import Group, Sampled
from explorer.loop.compensator import Compensator
from explorer.loop.plant import Realisation, in_series, realise_transfer
from explorer.loop.sampling import dead_times, delays_of, realise
from explorer.study.model import Study

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

_USUAL_PIECES = 4  # per period; more are tried where these are not enough
_PAIRS_AT_ONCE = 1024  # to bound memory


class Simulated(NamedTuple):
    """rows : (SETTLING + B, M, G), see kernels.response; NaN where not asked, not stable or undecided.

    status : (M, G) int8, see kernels.response.STATUS_MEANING.
    """

    rows: Real
    status: NDArray[np.int8]


class Source(NamedTuple):
    """What simulating needs of the plants of S scenarios and P periods.

    whole : plant and sensor in series, or None for a plant given in z. seen : (S, n+1) output row [direct, output] of
    the plant before the sensor. period, advance : (S, P) [s]; load_delay : (S,) [s], the plant's own dead time.
    """

    whole: Realisation | None
    seen: Complex
    sampled: Sampled
    advance: Real
    load_delay: Real


def source_of(study: Study, values: Mapping[str, Real], period: Real, sampled: Sampled) -> Source:
    """Plants of a study at given parameter values and nominal periods (P,) [s]; sampled : from sampling.sample."""
    load_delay = dead_times(study, values)
    advance = delays_of(study, values, period)[2]
    if study.plant.variable == "z":
        return Source(None, np.zeros((len(load_delay), 0), complex), sampled, advance, load_delay)
    plant = realise(dataclasses.replace(study, loop=dataclasses.replace(study.loop, sensor=None)), values)
    seen = np.concatenate([plant.direct[:, None].astype(complex), plant.output], axis=1)
    if study.loop.sensor is None:
        return Source(plant, seen, sampled, advance, load_delay)
    sensor = realise_transfer(study.loop.sensor, values, len(load_delay))
    seen = np.concatenate([seen, np.zeros((len(load_delay), sensor.order))], axis=1)
    return Source(in_series(plant, sensor), seen, sampled, advance, load_delay)


def simulate(
    source: Source, compensator: Compensator, gain: Real, group: Group, slowest: Real, rows: Sequence[int],
    bands: Sequence[float] = (),
) -> Simulated:  # fmt: skip
    """Measures of every stable loop of a group's M pairs at gains (G,).

    slowest : (M, G) largest log|z| of each loop; < 0 is stable. rows : which of kernels.response's rows to compute;
    bands : a settling time for each.
    """
    chains = compensator_chains(compensator, gain, group.columns)
    wanted = np.zeros(SETTLING, bool)
    wanted[list(rows)] = True
    pairs, settling = len(group.rows), np.asarray(bands, float)
    answer = np.full((SETTLING + len(settling), pairs, len(gain)), np.nan)
    status = np.full((pairs, len(gain)), UNDECIDED, np.int8)
    for start in range(0, pairs, _PAIRS_AT_ONCE):
        part = slice(start, start + _PAIRS_AT_ONCE)
        plants = plants_of(source, Group(group.delay, group.rows[part], group.columns[part]))
        if max(plants.begun.shape[1], chains.given.shape[2]) < MOST_STATES:
            own = chains._replace(column=chains.column[part])
            answer[:, part], status[part] = respond(plants, own, slowest[part], wanted, settling, group.delay)
    return Simulated(answer, status)


def plants_of(source: Source, group: Group) -> Plants:
    """The pairs of a group as kernels.response takes them."""
    if source.whole is None:
        return _plants_in_z(source, group)
    capacity = _USUAL_PIECES
    plants = _described(source, group, capacity)
    if (plants.pieces == 0).any():
        plants = _described(source, group, MOST_PIECES)
    return plants


def _room_for(pairs: int, states: int, capacity: int) -> dict[str, Any]:
    return {
        "numbers": np.zeros((pairs, plant_numbers(states))),
        "outputs": np.zeros((pairs, 4, states + 2)),
        "edges": np.zeros((pairs, capacity + 1)),
        "table": np.zeros((pairs, capacity, DEGREE + 1, states + 2)),
        "pieces": np.zeros(pairs, np.int64),
        "begun": np.zeros((pairs, states)),
        "load_from": np.zeros(pairs, np.int64),
        "load_most": np.zeros(pairs),
    }


def _described(source: Source, group: Group, capacity: int) -> Plants:
    whole = source.whole
    assert whole is not None
    period = source.sampled.period[group.rows, group.columns]
    room = _room_for(len(period), whole.order, capacity)
    measured = np.concatenate([whole.direct[:, None].astype(complex), whole.output], axis=1)
    pair_describer()(
        whole.state, whole.start, measured, np.ascontiguousarray(source.seen), group.rows, period,
        source.advance[group.rows, group.columns], source.load_delay[group.rows], group.delay, *room.values(),
    )  # fmt: skip
    return Plants(**room, period=period)


def _plants_in_z(source: Source, group: Group) -> Plants:
    """Only samples exist; the output is held between them."""
    numerator, denominator = (
        np.ascontiguousarray(part[group.rows, group.columns, 0])
        for part in (source.sampled.numerator, source.sampled.denominator)
    )
    chain, given, direct = chains_of(numerator[None], denominator)
    period = source.sampled.period[group.rows, group.columns]
    pairs, states = given.shape[1:]
    room = _room_for(pairs, states, 1)
    row = np.concatenate([given[0], direct[0][:, None], np.zeros((pairs, 1))], axis=1)
    room["outputs"][:, :3] = row[:, None]
    room["edges"][:, 1] = 1.0
    room["table"][:, 0] = row[:, None]
    room["pieces"][:] = 1
    room["load_from"][:] = np.rint(source.load_delay[group.rows] / period)
    room["numbers"][:] = np.concatenate(
        [chain.reshape(pairs, -1), room["outputs"].reshape(pairs, -1), np.eye(3)[[min(group.delay, 2)] * pairs]], axis=1
    )
    return Plants(**room, period=period)


def compensator_chains(compensator: Compensator, gain: Real, columns: NDArray[np.intp]) -> Compensators:
    """Compensators of every period and gain; columns : (M,) the period of each pair."""
    numerator, denominator = compensator.numerator[0], compensator.denominator[0]
    if compensator.affine:
        chain, given, direct = chains_of(numerator, denominator[0])
        shape = (chain.shape[0], len(gain))
        chain = np.broadcast_to(chain[:, None], (*shape, *chain.shape[1:]))
        given = given[0][:, None] + gain[:, None] * given[1][:, None]
        direct = direct[0][:, None] + gain * direct[1][:, None]
    else:
        chain, given, direct = chains_of(numerator[None], denominator)
        chain, given, direct = (np.moveaxis(part, 0, 1) for part in (chain, given[0], direct[0]))
    chain, given, direct = (np.ascontiguousarray(part) for part in (chain, given, direct))
    return Compensators(chain, given, direct, np.ascontiguousarray(columns))


def chains_of(numerator: Real, denominator: Real) -> tuple[Real, Real, Real]:
    """Transfers in w as chains of first-order sections, see kernels.chains.

    numerator : (K, ..., n+1) and denominator : (..., n+1), descending powers. Returns chain (..., 3, n), output
    (K, ..., n) and direct (K, ...). A pair of conjugate roots takes two real states.
    """
    roots = _roots(denominator)
    order = roots.shape[-1]
    remaining = np.broadcast_to(numerator / denominator[..., :1], numerator.shape).astype(complex)
    rate = np.abs(roots).max(axis=-1, initial=0.0)
    rate = np.where(rate == 0, 1.0, rate)
    chain = np.zeros((*roots.shape[:-1], 3, order))
    weights = np.zeros((*numerator.shape[:-1], order), complex)
    for k in range(order - 1, -1, -1):
        quotient = _synthetic(remaining, roots[..., k])
        remaining, weights[..., k] = quotient[..., :-1], quotient[..., -1]
    weights /= rate[..., None] ** np.arange(order)
    chain[..., 0, :] = roots.real
    chain[..., 1, :] = rate[..., None]
    chain[..., 1, :1] = 1.0
    given = weights.real.copy()
    second = np.zeros(roots.shape[:-1], bool)
    for k in range(order - 1):
        first = (roots[..., k].imag != 0) & ~second
        turn = np.where(first, roots[..., k].imag, 0.0)
        chain[..., 2, k] = -turn * turn / rate
        given[..., k + 1] -= turn / rate * weights[..., k].imag
        second = first
    return chain, given, remaining[..., 0].real


def _synthetic(polynomial: Complex, root: Complex) -> Complex:
    """Quotient by (w - root) and, last, the remainder; descending powers."""
    result = polynomial.copy()
    for index in range(1, result.shape[-1]):
        result[..., index] += root * result[..., index - 1]
    return result


def _roots(denominator: Real) -> Complex:
    """(..., n) roots, conjugates side by side; roots at 0 are exact."""
    used = np.flatnonzero(np.abs(denominator).reshape(-1, denominator.shape[-1]).max(axis=0))
    at_zero = denominator.shape[-1] - 1 - int(used[-1])
    kept = denominator[..., : denominator.shape[-1] - at_zero]
    found = polynomial_roots(kept)
    return np.concatenate([found, np.zeros((*found.shape[:-1], at_zero), complex)], axis=-1)
