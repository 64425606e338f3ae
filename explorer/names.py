"""Names: every stored array declared once, with dimensions, unit and meaning; sweep, verdict and the docs read it."""

from __future__ import annotations

from typing import NamedTuple

MEASURE, SCALE, PERIOD, GAIN = "measure", "tolerance_scale", "period", "gain"
SCENARIO, PARAMETER, STATUS = "scenario", "parameter", "status"
OTHERS = "(others)"  # stands for the further design variables, each a dimension by its own name


class Stored(NamedTuple):
    """dims in order, unit ("" when it varies along the array), meaning."""

    dims: tuple[str, ...]
    unit: str
    meaning: str


SWEEP = {
    "worst_value": Stored(
        (MEASURE, SCALE, OTHERS, PERIOD, GAIN), "",
        "the measure's worst value over every scenario within the scale; NaN where one of them is unsolved",
    ),
    "nominal_value": Stored((MEASURE, OTHERS, PERIOD, GAIN), "", "the measure of the nominal plant; NaN: unsolved"),
    "worst_scenario": Stored(
        (MEASURE, SCALE, OTHERS, PERIOD, GAIN), "1",
        "scenario that gave the worst value, or the first unsolved one where the value is NaN",
    ),
    "share_met": Stored(
        (SCALE, OTHERS, PERIOD, GAIN), "1",
        "share of scenarios that meet every requirement with the study's own limits; unsolved ones do not",
    ),
    "scenario_parameter": Stored((SCENARIO, PARAMETER), "", "values in SI; clock is the true period over the nominal"),
    "scenario_scale": Stored((SCENARIO,), "1", "the tolerance scale at which the scenario enters"),
    "measure_kind": Stored((MEASURE,), "", "name of the measure in the catalogue, with its basis"),
    "measure_unit": Stored((MEASURE,), "", "unit of the measure's values"),
    "parameter_unit": Stored((PARAMETER,), "", "SI unit of the parameter, empty when none was stated"),
    "parameter_shown_unit": Stored((PARAMETER,), "", "unit in which people are shown the parameter"),
}  # fmt: skip

VERDICT = {
    "slack": Stored(
        (MEASURE, SCALE, OTHERS, PERIOD, GAIN), "1",
        "distance to the limit over the requirement's scale, >= 0 is met; -inf never reached; NaN unknown",
    ),
    "least_slack": Stored((SCALE, OTHERS, PERIOD, GAIN), "1", "least of the requirements; NaN where one is unknown"),
    "binding": Stored(
        (SCALE, OTHERS, PERIOD, GAIN), "1", "index of the requirement with the least slack; -1 where unknown"
    ),
    "feasible": Stored((SCALE, OTHERS, PERIOD, GAIN), "1", "every requirement met; false where unknown"),
    "nominal_slack": Stored((MEASURE, OTHERS, PERIOD, GAIN), "1", "slack of the nominal plant"),
    "limit": Stored((MEASURE, PERIOD), "", "the limit in the measure's unit at each period"),
    "sense": Stored((MEASURE,), "", "at least, at most or below"),
    "scenario_scale": Stored((SCENARIO,), "1", "the tolerance scale at which each scenario of the sweep enters"),
}  # fmt: skip


def dims_of(stored: Stored, others: tuple[str, ...]) -> tuple[str, ...]:
    """The dimensions with the further design variables put in."""
    return tuple(name for dim in stored.dims for name in (others if dim == OTHERS else (dim,)))
