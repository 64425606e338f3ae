"""Section "growth": what doubling one axis of the sweep, or the degree, does to the time of a whole sweep in memory."""

from __future__ import annotations

import functools
from collections.abc import Mapping, Sequence
from typing import NamedTuple

import numpy as np
import xarray

import explorer

from .study import Grid
from .sweep import counted
from .table import Table, best_times

BASE, ROUNDS = Grid(gains=200, periods=80, interior=32), 3
DEGREES = (2, 4, 8)

# Two states of the plant and whole samples of dead time. The data are invented.
WHOLE_SAMPLES = """
title = "Slide behind a slow bus"

[plant]
transfer = "speed_gain / (s*(lag*s + 1))"

[plant.parameters]
speed_gain = { nominal = "0.9 m/s/V", tolerance = "12 %" }
lag        = { from = "28 ms", to = "46 ms" }

[loop]
compensator     = "gain"
computing_delay = "SAMPLES period"

[sweep]
gain   = { from = "2 V/m", to = "400 V/m", points = GAINS, spacing = "log" }
period = { from = "2 ms", to = "40 ms", points = PERIODS, spacing = "log" }
scenarios = { interior = INTERIOR, corners = true, seed = 7, tolerance_scales = [0, 0.5, 1.0, 1.5] }

[[requirements]]
measure  = "damping ratio"
at_least = 0.5

[[requirements]]
measure = "settling time"
basis   = "poles"
band    = "2 %"
at_most = "300 ms"

[[requirements]]
measure = "stability"
"""


class Step(NamedTuple):
    """One sweep of a row of growing ones: what grows, its size, and the study's text."""

    what: str
    size: int
    text: str


def table(base: Grid = BASE, degrees: Sequence[int] = DEGREES, rounds: int = ROUNDS) -> Table:
    """The section; raises RuntimeError if a sweep leaves loops out or has any unsolved."""
    steps = steps_from(base, degrees)
    ways = {step.text: functools.partial(_sweep, step.text) for step in steps}  # the base is timed once
    for way in ways.values():
        way()  # compiled, not counted
    counts: dict[str, int] = {}
    best = best_times(ways, rounds, lambda answers: counts.update(_checked(answers)))
    rows, before = [], None
    for step in steps:
        seconds, loops, exponent = best[step.text], counts[step.text], ""
        if before is not None and before.what == step.what:
            exponent = f"{np.log(seconds / best[before.text]) / np.log(step.size / before.size):.2f}"
        rows.append(
            (step.what, str(step.size), f"{loops:,}", f"{seconds:.3f}", f"{seconds / loops * 1e9:.1f}", exponent)
        )
        before = step
    return Table(
        "Growth: a whole sweep in memory, one job, study text in, Dataset out",
        ("what grows", "size", "loops", "best [s]", "ns/loop", "exponent"),
        rows,
        (
            f"Best of {rounds}, all sweeps taking turns, after one of each that is not counted. Exponent: of the",
            "sweep's time, from the row above; 1 is a time per loop that does not change. Gains, periods and",
            "scenarios: degree 4. Degree: a plant of two states behind whole samples of dead time.",
        ),
    )


def steps_from(base: Grid, degrees: Sequence[int]) -> list[Step]:
    """Every axis of the grid as it is, twice and four times as long; then the degrees."""
    steps = []
    for factor in (1, 2, 4):
        gains, periods = base._replace(gains=factor * base.gains), base._replace(periods=factor * base.periods)
        inside = base._replace(interior=factor * (base.interior + 8) - 8)  # beside 8 corners
        steps += [
            Step("gains", gains.gains, gains.text()), Step("periods", periods.periods, periods.text()),
            Step("scenarios", 3 * (inside.interior + 8) + 1, inside.text()),
        ]  # fmt: skip
    steps.sort(key=lambda step: step.what)
    return steps + [Step("degree", degree, _of_degree(base, degree)) for degree in degrees]


def _of_degree(grid: Grid, degree: int) -> str:
    sizes = {"SAMPLES": degree - 2, "GAINS": grid.gains, "PERIODS": grid.periods, "INTERIOR": grid.interior}
    return functools.reduce(lambda text, item: text.replace(item[0], str(item[1])), sizes.items(), WHOLE_SAMPLES)


def _sweep(text: str) -> xarray.Dataset:
    return explorer.sweep(explorer.read_study(text=text), jobs=1)


def _checked(answers: Mapping[str, xarray.Dataset]) -> dict[str, int]:
    """Loops of every sweep."""
    for dataset in answers.values():
        if counted(dataset) != {"solved": dataset.sizes["scenario"] * dataset["share_met"][0].size}:
            raise RuntimeError(f"{dataset.attrs['title']}: {dataset.attrs['status_tally']}")
    return {text: counted(dataset)["solved"] for text, dataset in answers.items()}
