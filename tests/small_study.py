"""Small studies for the tests: parts of a study file in, its text, Study or sweep out. All data are invented."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
import xarray as xr

import explorer
from explorer.kernels.roots import HIGHEST_DEGREE, TOO_LONG, Poles, poles
from explorer.loop.closing import characteristic, degree_of, groups_of
from explorer.study.model import Study

ONE_PLANT = "{ interior = 0, corners = false, seed = 1, tolerance_scales = [1.0] }"

BY_POLES = """
[[requirements]]
measure = "stability"
[[requirements]]
name = "damped"
measure = "damping ratio"
at_least = 0.4
[[requirements]]
name = "quick"
measure = "settling time"
basis = "poles"
at_most = 5
"""


# A lag with two ranges, a dead time, variants and an inexact clock; then over further periods and a design variable
LAG = {
    "transfer": "load*strength/(lag*s + 1)",
    "plant": 'dead_time = "transport"',
    "parameters": 'strength = { nominal = 1.5, tolerance = "20 %" }\nlag = { from = 0.3, to = 0.5 }\n'
    'transport = { nominal = 0.02, tolerance = "50 %" }\nload = { any_of = [1.0, 1.3], nominal = 1.0 }',
    "loop": 'clock_tolerance = "1 %"',
    "gain": "{ values = [0.4, 1.2, 2.9, 4.0] }",
    "period": "{ values = [0.11, 0.2] }",
    "scenarios": "{ interior = 6, corners = true, seed = 3, tolerance_scales = [0, 0.5, 1.0] }",
    "requirements": """
[[requirements]]
measure = "spectral radius"
at_most = 0.75
[[requirements]]
measure = "damping ratio"
at_least = 0.3
[[requirements]]
name = "quick"
measure = "settling time"
basis = "poles"
at_most = "9 samples"
""",
}
SPREAD = LAG | {
    "period": '{ from = 0.11, to = 0.4, points = 9, spacing = "linear" }',
    "compensator": "gain*(1 + lead*(z - 1)/(period*z))", "axes": "lead = { values = [0.0, 0.02] }",
}  # fmt: skip


def text_of(
    transfer: str = "1/(s*(s + 1))",
    plant: str = "",
    parameters: str = "",
    compensator: str = "gain",
    loop: str = "",
    gain: str = "{ values = [0.5, 1.0, 2.0] }",
    period: str = "{ values = [0.1, 0.3] }",
    axes: str = "",
    scenarios: str = ONE_PLANT,
    requirements: str = BY_POLES,
) -> str:
    """Text of a study; `plant`, `loop` and `axes` are further lines of their tables, an empty one is left out."""
    lines = ['title = "small"', "[plant]", f'transfer = "{transfer}"' if transfer else "", plant]
    lines += ["[plant.parameters]", parameters, "[loop]", f'compensator = "{compensator}"', loop]
    lines += ["[sweep]", f"gain = {gain}", f"period = {period}" if period else "", axes]
    return "\n".join([*lines, f"scenarios = {scenarios}", requirements])


def study_of(**parts: Any) -> Study:
    """The Study of text_of(**parts)."""
    return explorer.read_study(text=text_of(**parts))


def swept(**parts: Any) -> xr.Dataset:
    """The sweep of text_of(**parts), one worker."""
    return explorer.sweep(study_of(**parts), jobs=1)


def same(left, right):
    """Bit for bit, apart from the time of writing."""
    assert {**left.attrs, "created": ""} == {**right.attrs, "created": ""}
    return left.identical(right.assign_attrs(left.attrs))


class Found(NamedTuple):
    """The poles of those (scenario, period) pairs that share one delay: found.log_z (M, G, degree)."""

    rows: np.ndarray
    columns: np.ndarray
    found: Poles


def closed_loop_poles(sampled, compensator, gain):
    """All poles by companion eigenvalues, one group per whole-sample delay."""
    for group in groups_of(sampled):
        if degree_of(sampled, compensator, group.delay) > HIGHEST_DEGREE:
            shape = (len(group.rows), len(gain))
            found = Poles(np.full((*shape, 1), np.nan + 0j), np.full(shape, TOO_LONG, np.int8))
        else:
            both = (characteristic(sampled, compensator, group, variable) for variable in (0, 1))
            found = poles(*(constant + gain[None, :, None] * slope for constant, slope in both))
        yield Found(group.rows, group.columns, found)
