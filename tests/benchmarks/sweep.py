"""Section "sweep": the whole study by plain, by vectorised and by the program, in loops per second.

What the program does besides, in its time: it reads the study's text, lays out the scenarios, certifies every
pole set, and reduces nominal values, worst scenarios and the share that meets every requirement.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

import explorer

from . import plain, vectorised
from .study import Cases, Grid, Real, cases_of
from .table import Table, best_times

WARM_UP = Grid(gains=8, periods=6, interior=2)
FULL = Grid(gains=100, periods=66, interior=32)  # two tiles: work for two jobs; grow it with the program
PLAIN_PERIODS, VECTORISED_PERIODS = 2, 22  # random ones of the full grid, where the whole would take too long
ROUNDS = 3

# Rounding alone separates the ways. The points nearest to the stability limit decide: a damping ratio of 4e-4
# or a settling time a hundred times the usual one magnifies the rounding of a pole as much. The plain script,
# with polynomials in z, stands farthest from the others: 5e-10 seen, and a margin.
AGREEMENT = 1e-8


class Way(NamedTuple):
    """One way of computing: the periods of the grid it takes, and how."""

    label: str
    periods: NDArray[np.intp]
    run: Callable[[], Real]


def table() -> Table:
    """The section; raises RuntimeError, and prints no time, if the ways disagree."""
    _measured(WARM_UP, rounds=1)
    return _as_table(*_measured(FULL, ROUNDS))


def program(grid: Grid, jobs: int) -> Real:
    """Study text in, worst values out: (measure, tolerance scale, period, gain)."""
    dataset = explorer.sweep(explorer.read_study(text=grid.text()), jobs=jobs)
    return np.asarray(dataset["worst_value"].squeeze("lead").values)


def layout(grid: Grid) -> Cases:
    """The program's axes and plants of a grid."""
    return cases_of(explorer.sweep(explorer.read_study(text=grid.text()), jobs=1))


def largest_difference(first: Real, second: Real) -> float:
    """Largest relative difference; equal infinities do not differ, a NaN differs from everything."""
    with np.errstate(invalid="ignore"):
        difference = np.abs(first - second) / np.abs(second)
    difference = np.where(first == second, 0.0, np.where(np.isfinite(difference), difference, np.inf))
    return float(difference.max())


def ways_on(grid: Grid, cases: Cases) -> dict[str, Way]:
    """All ways; those that are slow take a random part of the periods, with all gains and plants."""
    every = np.arange(len(cases.period))
    generator = np.random.default_rng(1)
    few, many = (
        np.sort(generator.choice(every, min(count, len(every)), replace=False))
        for count in (PLAIN_PERIODS, VECTORISED_PERIODS)
    )
    some, part = cases.at_periods(few), cases.at_periods(many)
    return {
        "plain": Way("plain script, one loop at a time", few, lambda: plain.worst_values(some)),
        "vectorised": Way("vectorised NumPy and SciPy", many, lambda: vectorised.worst_values(part)),
        "one job": Way("explorer, 1 job", every, lambda: program(grid, 1)),
        "two jobs": Way("explorer, 2 jobs", every, lambda: program(grid, 2)),
    }


def _measured(grid: Grid, rounds: int) -> tuple[Grid, Cases, dict[str, Way], dict[str, float], float]:
    cases = layout(grid)
    ways = ways_on(grid, cases)
    differences = []

    def check(answers: Mapping[str, Real]) -> None:
        for name, answer in answers.items():
            difference = largest_difference(answer, answers["one job"][:, :, ways[name].periods])
            if difference > AGREEMENT:
                raise RuntimeError(
                    f"{ways[name].label}: worst values differ by {difference:.1e} of themselves"
                )
            differences.append(difference)

    best = best_times({name: way.run for name, way in ways.items()}, rounds, check)
    return grid, cases, ways, best, max(differences)


def _as_table(
    grid: Grid, cases: Cases, ways: Mapping[str, Way], best: Mapping[str, float], difference: float
) -> Table:
    loops = {name: cases.at_periods(way.periods).loops for name, way in ways.items()}
    rate = {name: loops[name] / best[name] for name in ways}
    rows = [
        (
            way.label,
            f"{loops[name]:,}",
            f"{best[name]:.3f}",
            f"{rate[name]:,.0f}",
            f"{cases.loops / rate[name]:.2f}",
            f"{rate[name] / rate['plain']:.2f}",
            f"{rate[name] / rate['vectorised']:.2f}",
        )
        for name, way in ways.items()
    ]
    title = (
        f"Sweep: degree 4, dead time a fraction of the period; {grid.gains} gains x {grid.periods} periods x "
        f"{len(cases.lag)} plants = {cases.loops:,} loops"
    )
    headings = ("way", "loops timed", "best [s]", "loops/s", "whole grid [s]", "x plain", "x vectorised")
    notes = (
        f"Best of {ROUNDS}, the ways taking turns, after a warm-up that is not counted; one BLAS thread.",
        f"Plain and vectorised are timed at {PLAIN_PERIODS} and {VECTORISED_PERIODS} random periods, "
        "all gains and plants; their times for",
        "the whole grid are extrapolated. Every way samples a plant once per period, not once per gain.",
        "Worst values of all ways agree, checked before any time is printed: largest relative difference "
        f"{difference:.0e},",
        f"allowed {AGREEMENT:.0e}.",
    )
    return Table(title, headings, rows, notes)
