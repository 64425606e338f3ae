"""Section "sweep": the whole study by plain, by vectorised and by the program, in loops per second.

What the program does besides, in its time: it reads the study's text, lays out the scenarios, certifies every
pole set, reduces nominal values, worst scenarios and the share that meets every requirement, keeps finished tiles on
disk and writes sweep.nc.
"""

from __future__ import annotations

import tempfile
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import NamedTuple

import numpy as np
import xarray
from numpy.typing import NDArray

import explorer

from . import plain, vectorised
from .study import Cases, Grid, Real, cases_of
from .table import Table, best_times

FULL = Grid(gains=200, periods=160, interior=408)  # 40 million loops, a second or more
PART = Grid(gains=200, periods=160, interior=5)  # of it plain and vectorised take some periods
PLAIN_PERIODS, VECTORISED_PERIODS = 1, 12  # random ones
ROUNDS = 3

# Rounding alone separates the ways. The points nearest to the stability limit decide: a damping ratio of 4e-4
# or a settling time a hundred times the usual one magnifies the rounding of a pole as much. The plain script,
# with polynomials in z, stands farthest from the others: 5e-10 seen, and a margin.
AGREEMENT = 1e-8


class Way(NamedTuple):
    """One way of computing: its name in the table, how many loops it takes, and how."""

    label: str
    loops: int
    run: Callable[[], Real]


def table(full: Grid = FULL, part: Grid = PART, rounds: int = ROUNDS) -> Table:
    """The section; raises RuntimeError, and prints no time, if the ways disagree."""
    cases, whole = layout(part), layout(full).loops
    few, many = _periods_of(part)
    some, more = cases.at_periods(few), cases.at_periods(many)
    on_part = program(part, jobs=1)
    differences = []

    def check(answers: Mapping[str, Real]) -> None:
        for name, periods in (("plain", few), ("vectorised", many)):
            differences.append(largest_difference(answers[name], on_part[:, :, periods]))
            if differences[-1] > AGREEMENT:
                raise RuntimeError(f"{name}: worst values differ by {differences[-1]:.1e} of themselves")
        if not np.array_equal(answers["one job"], answers["two jobs"]):
            raise RuntimeError("one job and two do not give the same numbers")

    with tempfile.TemporaryDirectory() as folder:
        ways = {
            "plain": Way("plain script, one loop at a time", some.loops, lambda: plain.worst_values(some)),
            "vectorised": Way("vectorised NumPy and SciPy", more.loops, lambda: vectorised.worst_values(more)),
            "one job": Way("explorer, 1 job", whole, lambda: program(full, 1, Path(folder))),
            "two jobs": Way("explorer, 2 jobs", whole, lambda: program(full, 2, Path(folder))),
        }
        best = best_times({name: way.run for name, way in ways.items()}, rounds, check)
    title = f"Sweep: degree 4, dead time a fraction of the period; study text in, sweep.nc on disk; {whole:,} loops"
    return _as_table(title, ways, best, rounds, max(differences))


def program(grid: Grid, jobs: int, folder: Path | None = None) -> Real:
    """Study text in, worst values out: (measure, tolerance scale, period, gain); sweep.nc in the folder, if any."""
    dataset = explorer.sweep(explorer.read_study(text=grid.text()), out=folder, jobs=jobs, fresh=True)
    return np.asarray(dataset["worst_value"].squeeze("lead").values)


def layout(grid: Grid) -> Cases:
    """The program's axes and plants of a grid."""
    return cases_of(explorer.sweep(explorer.read_study(text=grid.text()), jobs=1))


def counted(dataset: xarray.Dataset) -> dict[str, int]:
    """Loops of each status in a sweep."""
    parts = (part.rsplit(maxsplit=1) for part in dataset.attrs["status_tally"].split(";"))
    return {status: int(count) for status, count in parts}


def largest_difference(first: Real, second: Real) -> float:
    """Largest relative difference; equal infinities do not differ, a NaN differs from everything."""
    with np.errstate(invalid="ignore"):
        difference = np.abs(first - second) / np.abs(second)
    difference = np.where(first == second, 0.0, np.where(np.isfinite(difference), difference, np.inf))
    return float(difference.max())


def _periods_of(grid: Grid) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Which periods plain and vectorised take."""
    generator = np.random.default_rng(1)
    few, many = (
        np.sort(generator.choice(grid.periods, min(count, grid.periods), replace=False))
        for count in (PLAIN_PERIODS, VECTORISED_PERIODS)
    )
    return few, many


def _as_table(
    title: str, ways: Mapping[str, Way], best: Mapping[str, float], rounds: int, difference: float
) -> Table:
    rate = {name: way.loops / best[name] for name, way in ways.items()}
    rows = [
        (
            way.label, f"{way.loops:,}", f"{best[name]:.3f}", f"{rate[name]:,.0f}",
            f"{rate[name] / rate['plain']:.2f}", f"{rate[name] / rate['vectorised']:.2f}",
        )
        for name, way in ways.items()
    ]  # fmt: skip
    headings = ("way", "loops timed", "best [s]", "loops/s", "x plain", "x vectorised")
    notes = (
        f"Best of {rounds}, the ways taking turns, warm: nothing is compiled in their time; one BLAS thread.",
        f"Plain and vectorised take {PLAIN_PERIODS} and {VECTORISED_PERIODS} random periods and fewer plants, at all",
        "gains, and write nothing. Every way samples a plant once per period, not once per gain.",
        f"Worst values agree, checked before any time is printed: largest relative difference {difference:.0e},",
        f"allowed {AGREEMENT:.0e}; with one job and with two they are the same bit for bit.",
    )
    return Table(title, headings, rows, notes)
