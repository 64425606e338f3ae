"""Section "responses": step responses with output between samples, in lanes, against the same in vectorised NumPy.

One servo with a lead compensator and a fraction of a period of delay (degree 4) at several periods, 200 gains over a
decade and a half. NumPy steps all loops at once, takes the output at eight places in every period and knows how many
samples are enough, which the kernel has to prove.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.bernstein import basis_at
from explorer.kernels.chains import MEASURED
from explorer.kernels.response import DECIDED, EFFORT, OVERSHOOT, SETTLING, Compensators, Plants
from explorer.kernels.roots import poles
from explorer.loop.closing import Group, Sampled, characteristic, groups_of
from explorer.loop.compensator import Compensator, compensator_on_axes
from explorer.loop.sampling import sample
from explorer.loop.simulating import Source, compensator_chains, plants_of, simulate, source_of
from tests.small_study import study_of

from .table import Table, best_times

Real = NDArray[np.float64]

PERIODS, SCENARIOS, ROUNDS, PLACES, BAND = ("0.012", "0.006", "0.003"), 64, 5, 8, 0.02


class Loops(NamedTuple):
    """One period's loops: what simulating takes, and the largest log|z| (M, G)."""

    source: Source
    compensator: Compensator
    gain: Real
    group: Group
    slowest: Real


def table() -> Table:
    """The section; raises RuntimeError where the answers differ by more than the places between samples explain."""
    rows = [_row(period) for period in PERIODS]
    return Table(
        f"Responses: overshoot, settling time and peak effort, {SCENARIOS} scenarios x 200 gains, degree 4, one thread",
        ("period s", "samples", "numpy ns", "kernel ns", "ratio", "all measures ns", "undecided"),
        rows,
        (
            f"Nanoseconds per stable loop, best of {ROUNDS}, the ways taking turns. Samples: what numpy steps, a bound",
            f"from the slowest pole at the median gain to 1e-9. numpy looks at {PLACES} places in every period.",
        ),
    )


def loops(period: str) -> Loops:
    """The servo at one period."""
    case = study_of(
        transfer="0.9/(s*(lag*s + 1))", parameters="lag = { from = 0.028, to = 0.046 }", plant="dead_time = 0.0012",
        loop="computing_delay = 0.0004", compensator="gain*(1 + 0.02*(z - 1)/(period*(z - 0.4)))",
        gain='{ from = 5, to = 150, points = 200, spacing = "log" }', period=f"{{ values = [{period}] }}",
    )  # fmt: skip
    values = {"lag": np.linspace(0.028, 0.046, SCENARIOS), "clock": np.ones(SCENARIOS)}
    gain, times = case.gain.values, case.period.values
    sampled: Sampled = sample(case, values, times)
    compensator = compensator_on_axes(case.loop, {"lag": 0.037}, gain, times)
    (group,) = groups_of(sampled)
    both = (characteristic(sampled, compensator, group, variable) for variable in (0, 1))
    log_z = poles(*(constant + gain[:, None] * slope for constant, slope in both)).log_z
    return Loops(source_of(case, values, times, sampled), compensator, gain, group, log_z.real.max(axis=-1))


def _row(period: str) -> tuple[str, ...]:
    given = loops(period)
    stable = given.slowest < 0
    samples = int(np.log(1e-9) / np.median(given.slowest[stable])) + 1
    plants = plants_of(given.source, given.group)
    control = compensator_chains(given.compensator, given.gain, given.group.columns)
    wanted = (OVERSHOOT, EFFORT)
    rows = np.array([OVERSHOOT, SETTLING, EFFORT])

    def kernel(asked: tuple[int, ...] = wanted) -> Real:
        answer = simulate(
            given.source, given.compensator, given.gain, given.group, given.slowest, asked, (BAND,)
        )
        return np.where(answer.status == DECIDED, answer.rows[rows], np.nan)

    ways = {
        "kernel": kernel,
        "all": lambda: kernel(tuple(range(SETTLING))),
        "numpy": lambda: in_numpy(plants, control, given.group.delay, samples, stable),
    }
    kernel(), ways["all"]()  # compiled, not counted
    best = best_times(ways, ROUNDS, lambda answers: _agreeing(answers, -given.slowest * samples > 20))
    count = stable.sum() / 1e9
    undecided = np.isnan(kernel()[0][stable]).mean()
    return (
        period, str(samples), f"{best['numpy'] / count:.0f}", f"{best['kernel'] / count:.0f}",
        f"{best['numpy'] / best['kernel']:.0f}", f"{best['all'] / count:.0f}", f"{undecided:.2%}",
    )  # fmt: skip


def in_numpy(
    plants: Plants, control: Compensators, delay: int, samples: int, stable: NDArray[np.bool_]
) -> Real:
    """(3, M, G) overshoot %, settling time s, peak effort; nan where not stable. Final value 1, delay >= 1."""
    n, period = plants.begun.shape[1], plants.period[:, None]
    chain = plants.numbers[:, : 3 * n].reshape(-1, 3, n)[:, None]
    own, given, direct = (part[control.column] for part in (control.chain, control.given, control.direct))
    rows = _places(plants)
    state, other = np.zeros((*stable.shape, n)), np.zeros(given.shape)
    line = [np.zeros(stable.shape)] * delay
    highest, last, effort = np.zeros(stable.shape), np.zeros(stable.shape), np.zeros(stable.shape)
    with np.errstate(over="ignore", invalid="ignore"):
        for k in range(samples):
            held = line[0]
            measured = plants.outputs[:, None, MEASURED]
            error = 1.0 - (measured[..., :n] * state).sum(axis=-1) - measured[..., n] * held
            u = (given * other).sum(axis=-1) + direct * error
            line = [*line[1:], u]
            values = np.concatenate([state, held[..., None], line[0][..., None]], axis=-1)
            y = np.matmul(values, rows)
            highest = np.maximum(highest, y.max(axis=-1) - 1.0)
            effort = np.maximum(effort, np.abs(u))
            outside = np.abs(y - 1.0) > BAND
            place = PLACES - 1 - outside[..., ::-1].argmax(axis=-1)
            last = np.where(outside.any(axis=-1), (k + (place + 1) / PLACES) * period, last)
            state, other = _next(chain, state, held), _next(own, other, error)
    return np.where(stable, np.stack([100.0 * highest, last, effort]), np.nan)


def _places(plants: Plants) -> Real:
    """(M, n+2, PLACES) outputs at evenly spread places of a period, from the pieces."""
    rows = np.empty((len(plants.period), plants.table.shape[3], PLACES))
    for place in range(PLACES):
        at = place / PLACES
        for pair, edges in enumerate(plants.edges):
            piece = int(np.searchsorted(edges[1 : plants.pieces[pair]], at, side="right"))
            inside = (at - edges[piece]) / (edges[piece + 1] - edges[piece])
            rows[pair, :, place] = basis_at(np.array([inside]))[0] @ plants.table[pair, piece]
    return rows


def _next(chain: Real, state: Real, driven: Real) -> Real:
    before = np.concatenate([driven[..., None], state[..., :-1]], axis=-1)
    after = np.concatenate([state[..., 1:], np.zeros((*driven.shape, 1))], axis=-1)
    return np.asarray(
        state + chain[..., 0, :] * state + chain[..., 1, :] * before + chain[..., 2, :] * after, dtype=float
    )


def _agreeing(answers: Mapping[str, Real], settled: NDArray[np.bool_]) -> None:
    kernel, plain = answers["kernel"], answers["numpy"]
    known = settled & np.isfinite(kernel[0]) & np.isfinite(plain[0])
    gap = np.abs(kernel - plain)[:, known]
    # the highest place is within one eighth of a period of the peak; a last exit within the same
    if gap[0].max() > 0.5 or (gap[2] / plain[2][known]).max() > 1e-9:
        raise RuntimeError(f"overshoot differs by {gap[0].max():.1e} %, effort by {gap[2].max():.1e}")
