"""Section "hold": sampling with hold and dead time by the kernel, by batched expm and by cont2discrete, by order.

The plants are chains of lags, from order 2 on behind a lightly damped pair; every dead time is some periods and a
fraction. Only the kernel goes on to the pulse transfer: the others stop at the two matrix exponentials it needs.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import scipy.linalg
from numpy.typing import NDArray
from scipy.signal import cont2discrete

from explorer.kernels.hold import sample_with_hold, whole_samples
from explorer.loop.plant import realise_transfer
from explorer.study.expressions import read_expression

from .table import Table, best_times

Real = NDArray[np.float64]

ORDERS, SCENARIOS, PERIODS, ROUNDS = (1, 2, 4, 6), 128, 50, 3
ONE_BY_ONE = 2  # scenarios for cont2discrete, which takes one matrix at a time
ANGLES = np.array([0.3, 1.0, 2.5])  # of z on the unit circle, where transfers are compared

# The transfer of state matrices loses what (z - matrix) is ill-conditioned by; 8e-12 seen at order 6
AGREEMENT = 1e-10


def table(orders: tuple[int, ...] = ORDERS, scenarios: int = SCENARIOS, periods: int = PERIODS) -> Table:
    """The section; raises RuntimeError, and prints no time, if the ways disagree."""
    Job(1, ONE_BY_ONE, 1).kernel()  # compiled, not counted
    return Table(
        f"Hold kernel: {scenarios} plants x {periods} periods per order, dead time some periods and a fraction",
        ("order", "kernel ns", "expm ns", "ratio", "cont2discrete ns", "ratio"),
        [_row(Job(order, scenarios, periods)) for order in orders],
        (
            f"Nanoseconds per plant and period, one thread, best of {ROUNDS}, taking turns. Kernel: whole samples and",
            "fraction, pulse transfer in w and in z. scipy.linalg.expm on the batch and scipy.signal.cont2discrete one",
            "by one: only the two matrix exponentials on either side of the input's change. Transfers of all three",
            f"agree to {AGREEMENT:.0e}, checked before any time is printed.",
        ),
    )


class Job:
    """Plants of one order as the kernel and as SciPy want them, with room for the kernel's answer.

    All is made before the clock starts, and the two times between the input's changes too for expm and cont2discrete.
    """

    def __init__(self, order: int, scenarios: int, periods: int) -> None:
        generator = np.random.default_rng(order)
        lags = [f"lag_{number}" for number in range(order - 2 if order > 1 else 1)]
        values = {name: 10.0 ** generator.uniform(-1, 0, scenarios) for name in lags}  # [s]
        values["frequency"], values["damping"] = generator.uniform([[3.0], [0.1]], [[8.0], [0.4]], (2, scenarios))
        factors = [f"({name}*s + 1)" for name in lags]
        if order > 1:
            factors.append("((s/frequency)^2 + 2*damping*s/frequency + 1)")
        self.order, self.scenarios = order, scenarios
        self.plant = realise_transfer(read_expression(f"1/({'*'.join(factors)})"), values, scenarios)
        self.augmented = _augmented(order, lags, values)
        self.period = np.tile(np.geomspace(0.05, 0.5, periods), (scenarios, 1))
        self.dead_time = np.repeat(generator.uniform(0.02, 1.0, (scenarios, 1)), periods, axis=1)
        self.whole, self.advance = np.empty(self.period.shape, np.int64), np.empty(self.period.shape)
        whole_samples(self.period, self.dead_time, self.whole, self.advance)
        self.times = np.stack([self.advance, self.period - self.advance], axis=-1)
        self.above, self.below = (np.empty((scenarios, periods, 2, order + 1)) for _ in range(2))

    def kernel(self) -> tuple[Real, Real]:
        """Numerators and denominators."""
        plant = self.plant
        whole_samples(self.period, self.dead_time, self.whole, self.advance)
        sample_with_hold(
            plant.state, plant.start, plant.output, plant.direct, self.period, self.advance, self.above, self.below
        )
        return self.above, self.below

    def exponentials(self) -> Real:
        """(S, P, 2, n+1, n+1), the held input last."""
        return np.asarray(scipy.linalg.expm(self.augmented[:, None, None] * self.times[..., None, None]))

    def one_by_one(self) -> Real:
        """The first n rows of the same, of the first scenarios."""
        n = self.order
        found = np.empty((*self.times[:ONE_BY_ONE].shape, n, n + 1))
        output, direct = np.ones((1, n)), np.zeros((1, 1))
        for place in np.ndindex(found.shape[:3]):
            state, start = self.augmented[place[0], :n, :n], self.augmented[place[0], :n, n:]
            found[place] = np.hstack(cont2discrete((state, start, output, direct), self.times[place])[:2])
        return found


def _augmented(order: int, lags: list[str], values: Mapping[str, Real]) -> Real:
    """(S, n+1, n+1): real state matrices, last column the input; the output is the last state."""
    matrix = np.zeros((len(values["damping"]), order + 1, order + 1))
    before = order  # the column that drives the next section
    for row, name in enumerate(lags[: order - 2] if order > 1 else lags):
        matrix[:, row, before], matrix[:, row, row] = 1 / values[name], -1 / values[name]
        before = row
    if order > 1:
        speed, place, frequency = order - 2, order - 1, values["frequency"]
        matrix[:, place, speed] = matrix[:, speed, before] = frequency
        matrix[:, speed, place], matrix[:, speed, speed] = -frequency, -2 * values["damping"] * frequency
    return matrix


def transfers_of_polynomials(above: Real, below: Real) -> NDArray[np.complex128]:
    """(2, S, P, angles): read in w and in z, without the whole samples of delay."""
    z, w = np.exp(1j * ANGLES), 2j * np.sin(ANGLES / 2) * np.exp(0.5j * ANGLES)
    read = [
        np.polynomial.polynomial.polyval(points, np.moveaxis(both[..., variable, ::-1], -1, 0))
        for variable, points in enumerate((w, z))
        for both in (above, below)
    ]
    return np.stack([read[0] / read[1], read[2] / read[3]])


def transfers_of_matrices(exponentials: Real) -> NDArray[np.complex128]:
    """(S, P, angles) of (..., 2, n or n+1, n+1): the input changes between the second and the first of the two."""
    n = exponentials.shape[-1] - 1
    state, held = exponentials[..., :n, :n], exponentials[..., :n, n]
    step = state[..., 0, :, :] @ state[..., 1, :, :]
    early, late = (state[..., 0, :, :] @ held[..., 1, :, None])[..., 0], held[..., 0, :]
    z = np.exp(1j * ANGLES)
    start = early[..., None, :] + z[:, None] * late[..., None, :]
    resolvent = z[:, None, None] * np.eye(n) - step[..., None, :, :]
    return np.asarray(np.linalg.solve(resolvent, start[..., None])[..., -1, 0])


def largest_difference(answers: Mapping[str, Any]) -> float:
    """Of the transfers of all ways, relative to expm's."""
    exact = transfers_of_matrices(answers["expm"])
    few = transfers_of_matrices(answers["one by one"])
    found = transfers_of_polynomials(*answers["kernel"])
    some = exact[: len(few)]
    return float(max(np.abs(found / exact - 1).max(), np.abs(few / some - 1).max()))


def _agreeing(answers: Mapping[str, Any]) -> None:
    difference = largest_difference(answers)
    if not difference <= AGREEMENT:
        raise RuntimeError(f"transfers differ by {difference:.1e} of themselves")


def _row(job: Job) -> tuple[str, ...]:
    ways = {"kernel": job.kernel, "expm": job.exponentials, "one by one": job.one_by_one}
    best = best_times(ways, ROUNDS, _agreeing)
    pairs, few = job.period.size, job.period[:ONE_BY_ONE].size
    kernel, batched, alone = best["kernel"] / pairs, best["expm"] / pairs, best["one by one"] / few
    return (
        str(job.order), f"{kernel * 1e9:,.0f}", f"{batched * 1e9:,.0f}", f"{batched / kernel:.1f}",
        f"{alone * 1e9:,.0f}", f"{alone / kernel:.1f}",
    )  # fmt: skip
