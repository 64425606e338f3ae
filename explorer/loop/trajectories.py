"""Trajectories: one design point's plants and compensator in, output and effort over time for every scenario out.

The same chains and pieces as loop.simulating, so that the curves carry the extremes that the measures name.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.bernstein import basis_at
from explorer.kernels.chains import MEASURED
from explorer.kernels.response import Compensators, Plants
from explorer.loop.closing import groups_of
from explorer.loop.compensator import Compensator
from explorer.loop.simulating import Source, compensator_chains, plants_of

Real = NDArray[np.float64]


class Trajectories(NamedTuple):
    """time : (N,) [s]; output : (S, N) of the plant, before the sensor; effort : (S, N) as held at the plant's input
    (the dead time is the plant's own). inf or nan where an unstable loop leaves the numbers.
    """

    time: Real
    output: Real
    effort: Real


def trajectories(
    source: Source, compensator: Compensator, gain: float, index: int, time: Real
) -> Trajectories:
    """Response to a unit step of the reference at time 0, from rest.

    Parameters
    ----------
    source, compensator : at one period; gain : the gain, index : its place among those of `compensator`.
    time : (N,) >= 0, ascending [s].
    """
    scenarios = len(source.load_delay)
    output, effort = np.zeros((scenarios, len(time))), np.zeros((scenarios, len(time)))
    chosen = compensator if compensator.affine else _only(compensator, index)
    for group in groups_of(source.sampled):
        plants = plants_of(source, group)
        control = compensator_chains(chosen, np.array([gain]), group.columns)
        samples = int(np.ceil(time[-1] / plants.period.min())) + 2
        states, inputs = _stepped(plants, control, group.delay, samples)
        for pair, row in enumerate(group.rows):
            period = plants.period[pair]
            output[row] = _between(plants, pair, states[pair], inputs[pair], group.delay, time / period)
            delay = group.delay * period - source.advance[row, group.columns[pair]] - source.load_delay[row]
            place = np.floor(time / period - delay / period + 1e-9).astype(int)
            effort[row] = np.where(place >= 0, inputs[pair, np.clip(place, 0, samples - 1)], 0.0)
    return Trajectories(time, output, effort)


def _only(compensator: Compensator, index: int) -> Compensator:
    chosen = slice(index, index + 1)
    return Compensator(compensator.numerator[:, chosen], compensator.denominator[:, chosen], False)


@np.errstate(over="ignore", invalid="ignore")
def _stepped(plants: Plants, control: Compensators, delay: int, samples: int) -> tuple[Real, Real]:
    """Chain states (M, samples, n) and inputs (M, samples)."""
    pairs, n = plants.begun.shape
    nc, column = control.given.shape[2], control.column
    chain = plants.numbers[:, : 3 * n].reshape(pairs, 3, n)
    own, given, direct = control.chain[column, 0], control.given[column, 0], control.direct[column, 0]
    measured = plants.outputs[:, MEASURED]
    states, inputs = np.zeros((pairs, samples + 1, n)), np.zeros((pairs, samples))
    state, other = np.zeros((pairs, n)), np.zeros((pairs, nc))
    for k in range(samples):
        states[:, k] = state
        known = (measured[:, :n] * state).sum(axis=1)
        held = inputs[:, k - delay] if 0 < delay <= k else np.zeros(pairs)
        u = (given * other).sum(axis=1) + direct * (1.0 - known - measured[:, n] * held)
        if delay == 0:  # the sample sees its own input
            held = u = u / (1.0 + direct * measured[:, n])
        inputs[:, k] = u
        state = state + _change(chain, state, held)
        other = other + _change(own, other, 1.0 - known - measured[:, n] * held)
    return states, inputs


def _change(chain: Real, state: Real, driven: Real) -> Real:
    result = chain[:, 0] * state
    if state.shape[1]:
        before = np.concatenate([driven[:, None], state[:, :-1]], axis=1)
        after = np.concatenate([state[:, 1:], np.zeros((len(state), 1))], axis=1)
        result = result + chain[:, 1] * before + chain[:, 2] * after
    return np.asarray(result)


@np.errstate(over="ignore", invalid="ignore")
def _between(plants: Plants, pair: int, states: Real, inputs: Real, delay: int, place: Real) -> Real:
    """y at times counted in periods."""
    sample = np.floor(place + 1e-9).astype(int)
    inside = np.clip(place - sample, 0.0, 1.0)
    edges = plants.edges[pair, : plants.pieces[pair] + 1]
    piece = np.clip(np.searchsorted(edges, inside, side="right") - 1, 0, plants.pieces[pair] - 1)
    local = (inside - edges[piece]) / (edges[piece + 1] - edges[piece])
    padded = np.concatenate([np.zeros(delay), inputs, np.zeros(2)])
    values = np.column_stack([states[sample], padded[sample], padded[sample + 1]])
    table = plants.table[pair, piece]
    return np.asarray(np.einsum("ti,tij,tj->t", basis_at(local), table, values))
