"""Slack: a sweep Dataset and limits in, the verdict Dataset out; nothing is swept again."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Mapping
from typing import Any

import numpy as np
import xarray
from numpy.typing import NDArray

from explorer.errors import OptionError
from explorer.measures.asking import read_study
from explorer.names import PARAMETER, PERIOD, VERDICT, dims_of
from explorer.study.collect import Collector
from explorer.study.expressions import closest
from explorer.study.model import Requirement, Study
from explorer.study.requirement_part import read_limit

Real = NDArray[np.float64]
Limits = Mapping[str, str | int | float]


def judge(dataset: xarray.Dataset, limits: Limits | None = None) -> xarray.Dataset:
    """Judge a sweep, with the study's own limits or with others.

    Parameters
    ----------
    dataset : from sweep; limits : requirement name -> limit as written in a study ("120 ms", "15 samples", 0.6).

    Returns
    -------
    Dataset : slack, least_slack, binding, feasible, nominal_slack, limit, sense (explorer.names.VERDICT). A NaN
        slack is unknown and never feasible; -inf says that the response never gets there.

    Raises
    ------
    OptionError : no such requirement, or a limit it cannot take.
    """
    study = read_study(text=str(dataset.attrs["study"]))
    requirements = with_limits(study, limits or {})
    period = dataset[PERIOD].values
    slack, nominal = np.empty(dataset["worst_value"].shape), np.empty(dataset["nominal_value"].shape)
    for index, one in enumerate(requirements):  # one after the other, for a long sweep fills the memory
        slack[index] = slack_of(one, dataset["worst_value"].values[index], period)
        nominal[index] = slack_of(one, dataset["nominal_value"].values[index], period)
    least, binding = _least(slack)
    arrays = {
        "slack": slack,
        "least_slack": least,
        "binding": binding,
        "feasible": least >= 0,  # false for NaN
        "nominal_slack": nominal,
        "limit": np.stack([one.limits(period) for one in requirements]),
        "sense": np.array([one.sense for one in requirements], dtype=object),
        "scenario_scale": dataset["scenario_scale"].values,
    }
    others = tuple(axis.name for axis in study.design)
    variables = {
        name: (dims_of(VERDICT[name], others), array, _attributes(name)) for name, array in arrays.items()
    }
    coordinates = {name: value for name, value in dataset.coords.items() if PARAMETER not in value.dims}
    attributes = dict(dataset.attrs) | {"limits": _stated(requirements)}
    return xarray.Dataset(variables, coordinates, attributes)


def with_limits(study: Study, limits: Limits) -> tuple[Requirement, ...]:
    """The study's requirements with some limits replaced; OptionError names every wrong one."""
    names = [one.name for one in study.requirements]
    problems = [
        f"no requirement {name!r}; there are: {', '.join(names)}. {closest(name, names)}".rstrip()
        for name in limits if name not in names
    ]  # fmt: skip
    result = []
    for one in study.requirements:
        if one.name not in limits:
            result.append(one)
            continue
        if not one.measure.takes_limit:
            problems.append(f"{one.name!r} takes no limit: it is met when the largest |z| is below 1")
            continue
        collector = Collector("", "")
        found = read_limit(collector, limits[one.name], ("limit", one.name), one.measure, one.unit)
        if found is None:
            problems += [str(fault).removeprefix(": ") for fault in collector.faults]
        elif found[0] == 0 and math.isnan(one.scale):
            problems.append(f"a limit of 0 for {one.name!r} needs the requirement's scale in the study")
        else:
            result.append(dataclasses.replace(one, limit=found[0], in_samples=found[1]))
    if problems:
        raise OptionError("\n".join(problems))
    return tuple(result)


def slack_of(requirement: Requirement, value: Real, period: Real) -> Real:
    """(limit - value)/scale or (value - limit)/scale, met when >= 0; value : (..., P, G).

    Stability must be strictly below 1: exactly 1 has the slack of the next number above it.
    """
    limit, scale = requirement.limits(period)[:, None], requirement.scales(period)[:, None]
    if requirement.sense == "below":
        return np.where(value == 1.0, -np.finfo(float).eps, 1.0 - value)
    difference = value - limit if requirement.sense == "at least" else limit - value
    return np.asarray(difference / scale)


def _least(slack: Real) -> tuple[Real, NDArray[np.int32]]:
    """Least slack over the requirements and which it is, NaN and -1 where one of them is unknown; slack : (R, ...)."""
    least, binding = slack[0].copy(), np.zeros(slack.shape[1:], np.int32)
    for index in range(1, len(slack)):
        lower = slack[index] < least
        binding[lower] = index
        least = np.minimum(least, slack[index])  # NaN wins
    binding[np.isnan(least)] = -1
    return least, binding


def _attributes(name: str) -> dict[str, Any]:
    stored = VERDICT[name]
    return {"long_name": stored.meaning} | ({"units": stored.unit} if stored.unit else {})


def _stated(requirements: tuple[Requirement, ...]) -> str:
    """The limits judged by, one per line, as provenance."""
    lines = []
    for one in requirements:
        unit = "samples" if one.in_samples else one.unit
        limit = "1" if one.sense == "below" else f"{one.limit:.12g} {unit}".removesuffix(" 1")
        lines.append(f"{one.name}: {one.sense} {limit}")
    return "\n".join(lines)
