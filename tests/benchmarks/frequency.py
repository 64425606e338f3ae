"""Section "frequency": the frequency kernel against the same measures by vectorised NumPy on a grid, by degree.

The loops are those of section "roots", 256 scenarios at 200 gains; unstable ones are left out by both ways, which find
out beforehand which these are. NumPy reads its measures off a grid of angles with straight lines between them: about
three digits, where the kernel has twelve.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.frequency import FOUND, MEASURES, frequency_measures

from .roots import GAIN, companions, eigenvalues, family
from .table import Table, best_times

Real = NDArray[np.float64]

DEGREES, FAMILIES, ROUNDS, PERIOD = (2, 3, 4, 6, 8), 4, 2, 1.0
POINTS = 600  # of the grid of angles
ON_GRID = tuple(name for name in MEASURES if name != "bandwidth")  # what one pass over the grid gives
MARGINS = ("gain margin", "phase margin", "delay margin", "modulus margin")


def table() -> Table:
    """The section; raises RuntimeError if the two ways differ by more than the grid explains."""
    return Table(
        f"Frequency kernel: {FAMILIES} families of 256 scenarios x {len(GAIN)} gains per degree",
        ("degree", "stable", "margins ns", "NumPy ns", "ratio", "all ns", "NumPy ns", "ratio", "unresolved"),
        [_row(degree) for degree in DEGREES],
        (
            f"Nanoseconds per stable loop, one thread, best of {ROUNDS}, taking turns. Margins: gain, phase, delay",
            f"and modulus margin; all: every measure, in NumPy without bandwidth. NumPy's grid has {POINTS} angles.",
        ),
    )


class Job:
    """A family with its stable loops, made before the clock starts."""

    def __init__(self, degree: int, seed: int) -> None:
        self.below, self.above = family(degree, seed)
        roots = eigenvalues(companions(self.below, self.above))
        self.stable = (2 * roots.real + np.abs(roots) ** 2 < -1e-9).all(axis=-1)

    def kernel(self, names: Sequence[str]) -> Real:
        """Values (measures, M, G)."""
        below, above = self.below[:, None], self.above[:, None]
        period = np.full(len(below), PERIOD)
        found = frequency_measures(names, below, 0 * above, above, 0, GAIN, period, self.stable, (0 * below, below))
        self.unresolved = float((found.status != FOUND).mean())
        return found.values

    def grid(self, names: Sequence[str]) -> Real:
        """The same read off a grid of angles; scenario by scenario, so that everything stays in the cache."""
        values = np.full((len(names), *self.stable.shape), np.nan)
        theta = np.append(0.0, np.geomspace(1e-4, np.pi, POINTS - 1))
        w = -2 * np.sin(theta / 2) ** 2 + 1j * np.sin(theta)
        for row in range(len(self.below)):
            below, above = np.polyval(self.below[row], w), np.polyval(self.above[row], w)
            with np.errstate(all="ignore"):
                some = _on_grid(names, theta, above / below, GAIN[self.stable[row]])
            values[:, row, self.stable[row]] = some
        return values


def _on_grid(names: Sequence[str], theta: Real, curve: NDArray[np.complex128], gain: Real) -> Real:
    loop = gain[:, None] * curve
    size, found = np.abs(loop), {}
    crossing = (size[:, 1:] >= 1) != (size[:, :-1] >= 1)
    share = np.where(crossing, -np.log(size[:, :-1]) / np.log(size[:, 1:] / size[:, :-1]), 0.0)
    angle = theta[:-1] + share * np.diff(theta)
    phase = np.angle(-(loop[:, :-1] + share[:, :, None][..., 0] * np.diff(loop, axis=1)))
    margin = np.where(crossing, phase, np.inf)
    found["phase margin"] = np.degrees(np.take_along_axis(margin, np.abs(margin).argmin(1)[:, None], 1)[:, 0])
    found["delay margin"] = np.where(crossing, np.mod(phase, 2 * np.pi) / angle * PERIOD, np.inf).min(axis=1)
    found["crossover frequency"] = np.where(crossing, angle / PERIOD, 0.0).max(axis=1)
    turn = (curve.imag[1:] > 0) != (curve.imag[:-1] > 0)
    real = curve.real[:-1] - curve.imag[:-1] * np.diff(curve.real) / np.diff(curve.imag)
    critical = np.append(-1 / real[turn], -1 / curve.real[[0, -1]])
    factor = critical[critical > 0] / gain[:, None]
    found["gain margin"] = np.where(factor > 1, factor, np.inf).min(axis=1, initial=np.inf)
    found["gain reduction margin"] = np.where(factor < 1, factor, 0.0).max(axis=1, initial=0.0)
    found["modulus margin"] = np.abs(1 + loop).min(axis=1)
    if "resonance peak" in names:
        closed = 1 / (1 + loop)
        found["resonance peak"] = np.nanmax(np.abs(loop * closed), axis=1)
        power = (gain[:, None] * np.abs(closed)) ** 2
        found["noise gain"] = np.sqrt(np.trapezoid(power, theta, axis=1) / np.pi)
    return np.stack([found[name] for name in names])


def _row(degree: int) -> tuple[str, ...]:
    times, share, lost = [], [], 0.0
    for seed in range(FAMILIES):
        job = Job(degree, seed)
        job.kernel(MEASURES)  # compiled, not counted
        ways = {
            "margins": lambda j=job: j.kernel(MARGINS), "all": lambda j=job: j.kernel(MEASURES),
            "margins grid": lambda j=job: j.grid(MARGINS), "all grid": lambda j=job: j.grid(ON_GRID),
        }  # fmt: skip
        best = best_times(ways, ROUNDS, _agreeing)
        times.append(np.array([best[way] for way in ways]) / job.stable.sum() * 1e9)
        share.append(job.stable.mean())
        lost = max(lost, job.unresolved)
    margins, everything, grid, whole = np.mean(times, axis=0)
    return (
        str(degree), f"{np.mean(share):.0%}", f"{margins:.0f}", f"{grid:.0f}", f"{grid / margins:.0f}",
        f"{everything:.0f}", f"{whole:.0f}", f"{whole / everything:.0f}", f"{lost:.2%}",
    )  # fmt: skip


def _agreeing(answers: Mapping[str, Real]) -> None:
    for name, exact, rough in (
        *((n, answers["margins"][k], answers["margins grid"][k]) for k, n in enumerate(MARGINS)),
        *((n, answers["all"][MEASURES.index(n)], answers["all grid"][k]) for k, n in enumerate(ON_GRID)),
    ):
        if name in ("resonance peak", "noise gain"):  # the sharper the peak, the less a grid sees of it
            exact, rough = 1 / exact, 1 / rough
        same = np.isclose(exact, rough, rtol=0.05, atol=0.03, equal_nan=True)  # neighbouring angles: 2 % apart
        if same.mean() < 0.95:  # a peak between two angles, a crossover that only touches
            raise RuntimeError(f"{name}: only {same.mean():.1%} agree")
