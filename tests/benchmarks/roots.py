"""Section "roots": the tracking kernel with its reduction against bare batched companion eigenvalues, by degree.

256 scenarios of one plant family at 200 gains over three decades; eight families per degree, drawn at random: real
and complex poles, sampled at periods from a hundredth to half of the time constants, and a compensator's zeros.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from typing import Any

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.lanes import LANES
from explorer.kernels.tracking import REDUCTIONS, gain_steps, tracker

from .table import Table, best_times

Real = NDArray[np.float64]

DEGREES, FAMILIES, SCENARIOS, ROUNDS = (2, 3, 4, 6, 8, 12), 8, 256, 3
REPEATS = 10  # of the kernel
GAIN = np.geomspace(0.05, 50.0, 200)
STEPS = gain_steps(GAIN)


def table(degrees: Sequence[int] = DEGREES, families: int = FAMILIES) -> Table:
    """The section; raises RuntimeError if a certified spectral radius differs from LAPACK's."""
    with ThreadPoolExecutor(2) as threads:
        rows = [_row(degree, families, threads) for degree in degrees]
    return Table(
        f"Root kernel: {families} families of {SCENARIOS} scenarios x {len(GAIN)} gains per degree",
        ("degree", "eigvals ns", "kernel ns", "ratio mean", "ratio least", "2 threads ns", "gain", "handed over"),
        rows,
        (
            f"Nanoseconds per polynomial, best of {ROUNDS}, in turns, {REPEATS} runs of the kernel each, which holds",
            "certificates and reduction to radius, damping, frequency and slowest pair; numpy.linalg.eigvals is bare.",
            "Two threads: half of the scenarios each; gain: one thread's time over theirs, 2 where nothing is shared.",
            "Handed over: share of polynomials left to companion eigenvalues because they were not certified or not",
            "resolved in w; the sweep tries these in z first.",
        ),
    )


def family(degree: int, seed: int) -> tuple[Real, Real]:
    """(SCENARIOS, degree+1) coefficients in w, constant and slope."""
    generator = np.random.default_rng([degree, seed])
    period = 10.0 ** generator.uniform(-2, -0.3)
    poles = -(10.0 ** generator.uniform(-1, 1, degree)).astype(complex)
    if degree > 1 and generator.random() < 0.5:
        poles[:2] = -0.3 + 3j, -0.3 - 3j
    zeros = -1 + 0.3 * generator.uniform(-1, 1, max(degree - 3, 0))
    zeros = np.append(zeros, -period * generator.uniform(0.5, 2)) if degree > 2 else zeros
    numerator = np.atleast_1d(np.poly(zeros))
    constant, slope = np.empty((SCENARIOS, degree + 1)), np.zeros((SCENARIOS, degree + 1))
    for row in range(SCENARIOS):
        spread = 1 + 0.1 * generator.uniform(-1, 1, degree)
        spread[1:2] = spread[:1]  # a pair stays one
        moved = np.expm1(poles * spread * period)
        constant[row] = np.poly(moved).real
        slope[row, degree + 1 - len(numerator) :] = numerator * np.prod(np.abs(moved)) / abs(numerator[-1])
    return constant, slope


class Job:
    """A family laid out for the kernel, with room for its answer; both are made before the clock starts."""

    def __init__(self, degree: int, constant: Real, slope: Real) -> None:
        blocks = len(constant) // LANES
        self.lanes = [
            np.ascontiguousarray(part.reshape(blocks, LANES, -1).transpose(0, 2, 1)) for part in (constant, slope)
        ]
        self.reductions = np.zeros((REDUCTIONS, blocks, len(GAIN), LANES))
        self.kernel = tracker(degree)

    def repeat(self) -> Job:
        """Track REPEATS times: once is over before a second thread is awake."""
        for _ in range(REPEATS):
            self.run()
        return self

    def run(self) -> Job:
        """Track; the answer is in reductions."""
        self.kernel(*self.lanes, STEPS, self.reductions)
        return self


def eigenvalues(polynomial: Real) -> Real:
    """Bare batched eigenvalues of companion matrices made beforehand."""
    return np.linalg.eigvals(polynomial)


def companions(constant: Real, slope: Real) -> Real:
    """(SCENARIOS, G, n, n)."""
    polynomial = constant[:, None] + GAIN[:, None] * slope[:, None]
    degree = polynomial.shape[-1] - 1
    matrix = np.zeros((*polynomial.shape[:2], degree, degree))
    matrix[..., 0, :] = -polynomial[..., 1:] / polynomial[..., :1]
    matrix[..., np.arange(1, degree), np.arange(degree - 1)] = 1.0
    return matrix


def _row(degree: int, families: int, threads: ThreadPoolExecutor) -> tuple[str, ...]:
    times, handed = [], []
    Job(degree, *family(degree, 0)).run()  # compiled, not counted
    for seed in range(families):
        constant, slope = family(degree, seed)
        matrix, job = companions(constant, slope), Job(degree, constant, slope)
        halves = [Job(degree, *both) for both in zip(np.split(constant, 2), np.split(slope, 2), strict=True)]
        ways = {
            "kernel": job.repeat, "bare": lambda m=matrix: eigenvalues(m),
            "two threads": lambda two=halves: list(threads.map(Job.repeat, two)),
        }  # fmt: skip
        best = best_times(ways, ROUNDS, _agreeing)
        times.append([best[way] / (SCENARIOS * len(GAIN)) * 1e9 for way in ways])
        handed.append(float((job.reductions[-1] != 1.0).mean()))
    kernel, bare, two = np.array(times).T / [[REPEATS], [1], [REPEATS]]
    ratio = bare / kernel
    return (
        str(degree), f"{bare.mean():.0f}", f"{kernel.mean():.1f}", f"{ratio.mean():.0f}", f"{ratio.min():.0f}",
        f"{two.mean():.1f}", f"{(kernel / two).mean():.2f}", f"{np.mean(handed):.2%}",
    )  # fmt: skip


def _agreeing(answers: Mapping[str, Any]) -> None:
    radius = np.abs(1 + answers["bare"]).max(axis=-1).reshape(-1, LANES, len(GAIN)).transpose(0, 2, 1)
    # One thread's numbers and two's differ in the last bits: a block's first gain starts from the block before
    for jobs in ([answers["kernel"]], answers["two threads"]):
        reductions = np.concatenate([job.reductions for job in jobs], axis=1)
        sure = np.concatenate([job.reductions[-1] for job in jobs]) == 1.0
        difference = np.abs(np.exp(reductions[0]) - radius)[sure] / radius[sure]
        if difference.max() > 1e-6:  # nearly double roots move by the square root of rounding
            raise RuntimeError(f"spectral radii differ by {difference.max():.1e}")
