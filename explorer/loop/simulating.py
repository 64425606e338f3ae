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
from explorer.kernels.periods import describe_pairs, drifts
from explorer.kernels.response import SETTLING, UNDECIDED, Compensators, Plants, respond
from explorer.kernels.roots import polynomial_roots
from explorer.kernels.stepping import MOST_STATES
from explorer.loop.closing import Group, Sampled
from explorer.loop.compensator import Compensator
from explorer.loop.plant import Realisation, in_series, realise_transfer
from explorer.loop.sampling import dead_times, delays_of, realise
from explorer.study.model import Study

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]

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
    whole, rows = source.whole, group.rows
    period = source.sampled.period[rows, group.columns]
    augmented = np.zeros((whole.order + 1, whole.order + 1, len(rows)), complex)
    augmented[1:, 0], augmented[1:, 1:] = whole.start[rows].T, np.moveaxis(whole.state[rows], 0, -1)
    measured = np.concatenate([whole.direct[:, None].astype(complex), whole.output], axis=1)
    described = describe_pairs(
        augmented, measured[rows].T, source.seen[rows].T, period, source.advance[rows, group.columns],
        source.load_delay[rows],
    )  # fmt: skip
    return _with_numbers(described, period, group.delay)


def _with_numbers(described: dict[str, Any], period: Real, delay: int) -> Plants:
    pairs = len(period)
    where = np.eye(3)[[min(delay, 2)] * pairs]  # the input enters at once, after the change, or later
    parts = (described.pop("chain").reshape(pairs, -1), described["outputs"].reshape(pairs, -1), where)
    return Plants(np.concatenate(parts, axis=1), **described, period=period)


def _plants_in_z(source: Source, group: Group) -> Plants:
    """Only samples exist; the output is held between them."""
    numerator, denominator = (
        np.ascontiguousarray(part[group.rows, group.columns, 0])
        for part in (source.sampled.numerator, source.sampled.denominator)
    )
    chain, given, direct = chains_of(numerator[None], denominator)
    period = source.sampled.period[group.rows, group.columns]
    pairs, states = given.shape[1:]
    row = np.concatenate([given[0], direct[0][:, None], np.zeros((pairs, 1))], axis=1)
    outputs, table = np.zeros((pairs, 4, states + 2)), np.zeros((pairs, 1, DEGREE + 1, states + 2))
    outputs[:, :3], table[:, 0] = row[:, None], row[:, None]
    edges, pieces = np.tile([0.0, 1.0], (pairs, 1)), np.ones(pairs, np.int64)
    described = {
        "chain": chain, "outputs": outputs, "edges": edges, "table": table, "pieces": pieces,
        "drift": drifts(chain, outputs, edges, table, pieces), "begun": np.zeros((pairs, states)),
        "load_from": np.rint(source.load_delay[group.rows] / period).astype(np.int64), "load_most": np.zeros(pairs),
    }  # fmt: skip
    return _with_numbers(described, period, group.delay)


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
