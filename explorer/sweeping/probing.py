"""Probing: a study and one design point in, poles, measures, responses and loop gain of every scenario out."""

from __future__ import annotations

import dataclasses
from collections.abc import Mapping
from typing import Any

import numpy as np
import xarray
from numpy.typing import NDArray

import explorer
from explorer.errors import OptionError
from explorer.kernels.roots import SOLVED, poles
from explorer.kernels.tracking import gain_steps
from explorer.loop.closing import Sampled, characteristic, groups_of, open_loop
from explorer.loop.compensator import Compensator
from explorer.loop.simulating import source_of
from explorer.loop.solving import solve
from explorer.loop.trajectories import Trajectories, trajectories
from explorer.measures.catalogue import CATALOGUE
from explorer.measures.measuring import STATUS_MEANING, Measuring, by_pair
from explorer.study.expressions import closest
from explorer.study.model import Axis, Measure, Requirement, Study
from explorer.study.quantities import QuantityError, read_in_unit
from explorer.study.requirement_part import unit_in
from explorer.sweeping.scenarios import Scenarios, scenarios_of
from explorer.sweeping.tiles import compensator_of, sampled_of

Real = NDArray[np.float64]
Place = Mapping[str, str | int | float]

_POINTS = 1200  # of the responses in time, sampling instants among them
_MOST_SAMPLES = 20_000
_FREQUENCIES = 500
_STRETCH = 6.0
_SHOWN = 1e-3  # of its start, down to which the slowest mode of the stable scenarios is shown


def probe(study: Study, at: Place) -> xarray.Dataset:
    """One design point under the glass.

    Parameters
    ----------
    at : gain, period (not for a plant given in z) and every further design variable that has several values; SI
        numbers or quantities ("40 V/m"). They need not lie on the axes.

    Returns
    -------
    Dataset : value (measure, scenario), the study's requirements; other_value (other_measure, scenario), every other
        measure of the catalogue; pole and pole_s (scenario, pole), z and s = ln(z)/T, complex, padded with NaN; status
        (scenario); scenario_parameter (scenario, parameter); time [s], output and effort (scenario, time) after a unit
        step of the reference; loop_gain (scenario, frequency), L on the unit circle. Scenario 0 is the nominal plant.
        NaN is unknown; +inf and -inf are bad ends.

    Raises OptionError for names or values that are not allowed; StudyError where an expression has no value there.
    """
    point, values = _at_point(study, at)
    scenarios = scenarios_of(point)
    table, period = scenarios.by_name(), point.period.values
    compensator = compensator_of(point, {axis.name: axis.values[0] for axis in point.design}, period)
    sampled = sampled_of(point, table, period)
    asked = len(point.requirements)
    whole = dataclasses.replace(point, requirements=(*point.requirements, *_others(point)))
    measured, status = _measured(whole, sampled, compensator, table)
    found = _poles(sampled, compensator, point.gain.values)
    motion = _motion(point, sampled, compensator, table, found)
    frequency, transfer = _loop_gain(sampled, compensator, point.gain.values, found)
    arrays = {
        "value": (("measure", "scenario"), measured[:asked]),
        "other_value": (("other_measure", "scenario"), measured[asked:]),
        "pole": (("scenario", "pole"), np.exp(found)),
        "pole_s": (("scenario", "pole"), _over(found, sampled.period), {"units": "rad/s"}),
        "status": ("scenario", status, {"meaning": "; ".join(f"{k} {v}" for k, v in STATUS_MEANING.items())}),
        "true_period": ("scenario", sampled.period[:, 0], {"units": point.time_unit}),
        "scenario_parameter": (("scenario", "parameter"), scenarios.values),
        "scenario_scale": ("scenario", scenarios.scale),
        "output": (("scenario", "time"), motion.output),
        "effort": (("scenario", "time"), motion.effort),
        "loop_gain": (("scenario", "frequency"), transfer),
    }
    coordinates = _coordinates(whole, asked, scenarios, motion.time)
    coordinates["frequency"] = ("frequency", frequency, {"units": f"rad/{point.time_unit}"})
    return xarray.Dataset(arrays, coordinates, _provenance(point, values))


def values_at(study: Study, at: Place, requirements: tuple[Requirement, ...]) -> tuple[Scenarios, Real]:
    """The scenarios, and the values (requirements, S) of other requirements at one design point."""
    point, _ = _at_point(dataclasses.replace(study, requirements=requirements), at)
    scenarios, period = scenarios_of(point), point.period.values
    compensator = compensator_of(point, {axis.name: axis.values[0] for axis in point.design}, period)
    table = scenarios.by_name()
    return scenarios, _measured(point, sampled_of(point, table, period), compensator, table)[0]


def twin_of(requirement: Requirement) -> Requirement | None:
    """The same requirement read from the response where it is read from the poles; None for measures without."""
    key = f"{requirement.measure.name} by response"
    measure = next((one for one in CATALOGUE if one.key == key), None)
    if requirement.measure.basis != "poles" or measure is None:
        return None
    return dataclasses.replace(requirement, measure=measure)


def _at_point(study: Study, at: Place) -> tuple[Study, dict[str, float]]:
    """The study with every axis cut down to the one value."""
    axes = {axis.name: axis for axis in (study.gain, study.period, *study.design)}
    free = [name for name in axes if not (name == "period" and study.plant.variable == "z")]
    problems = [f"no axis {name!r}; allowed: {', '.join(free)}. {closest(name, free)}".rstrip() for name in at
                if name not in free]  # fmt: skip
    values: dict[str, float] = {}
    for name, axis in axes.items():
        if name not in at or name not in free:
            if len(axis.values) > 1:
                reach = f"{axis.values[0]:g} to {axis.values[-1]:g} {axis.unit}".rstrip()
                problems.append(f"{name} is missing; it is swept from {reach}")
            values[name] = float(axis.values[0])
            continue
        try:
            values[name] = read_in_unit(at[name], axis.unit)
        except QuantityError as error:
            problems.append(f"{name}: {error}")
            continue
        if name == "period" and values[name] <= 0:
            problems.append(f"period: found {at[name]}; allowed: more than 0")
    if problems:
        raise OptionError("\n".join(f"at: {problem}" for problem in problems))

    def only(axis: Axis) -> Axis:
        """The axis cut down to its one value."""
        return dataclasses.replace(axis, values=np.array([values[axis.name]]))

    design = tuple(only(axis) for axis in study.design)
    return dataclasses.replace(study, gain=only(study.gain), period=only(study.period), design=design), values


def _others(study: Study) -> tuple[Requirement, ...]:
    """The catalogue's measures that the study does not ask for, without limits."""
    known = {(one.measure.key, one.reference) for one in study.requirements}
    stated = ["execution_time"] if study.loop.execution_time > 0 else []
    bands = [one.band for one in study.requirements if one.measure.band is not None]
    found = []
    for measure in CATALOGUE:
        for reference in measure.inputs or ("",):
            possible = all(key in stated for key in measure.needs)
            if measure.takes_limit and possible and (measure.key, reference) not in known:
                found.append(_without_limit(measure, reference, study.time_unit, bands))
    return tuple(found)


def _without_limit(measure: Measure, reference: str, time_unit: str, bands: list[float]) -> Requirement:
    """bands : of the study's own settling times; the first holds for the other reading of it too."""
    name = f"{measure.key}, {reference}" if reference else measure.key
    sense = "at least" if measure.better == "more" else "at most"
    band = np.nan if measure.band is None else [*bands, measure.band][0]
    return Requirement(name, measure, sense, np.nan, False, np.nan, band, reference, unit_in(measure, time_unit))


def _measured(
    study: Study, sampled: Sampled, compensator: Compensator, table: Mapping[str, Real]
) -> tuple[Real, NDArray[np.int8]]:
    """Values (requirements, S) and status (S,)."""
    measuring = Measuring(study, sampled, compensator, table, study.period.values)
    scenarios, steps = len(sampled.period), gain_steps(study.gain.values)
    values, status = np.empty((len(study.requirements), scenarios)), np.empty(scenarios, np.int8)
    for group in groups_of(sampled):
        found = measuring.of(group, solve(sampled, compensator, group, steps, alike=0))
        pairs = len(group.rows)
        for index, value in enumerate(found.values):
            values[index, group.rows] = by_pair(value, pairs)[:, 0]
        status[group.rows] = by_pair(found.status, pairs)[:, 0]
    return values, status


def _poles(sampled: Sampled, compensator: Compensator, gain: Real) -> NDArray[np.complex128]:
    """log z of every pole, (S, most), NaN where there is none or where it is unknown; slowest first."""
    parts = []
    for group in groups_of(sampled):
        pairs = [characteristic(sampled, compensator, group, variable) for variable in (0, 1)]
        found = poles(*((constant + gain[0] * slope)[:, 0] for constant, slope in pairs))
        log_z = np.where((found.status == SOLVED)[:, None], found.log_z, np.nan)
        order = np.argsort(-log_z.real, axis=1, kind="stable")
        parts.append((group.rows, np.take_along_axis(log_z, order, axis=1)))
    result = np.full((len(sampled.period), max(part.shape[1] for _, part in parts)), np.nan, complex)
    for rows, part in parts:
        result[rows, : part.shape[1]] = part
    return result


def _over(log_z: NDArray[np.complex128], period: Real) -> NDArray[np.complex128]:
    """s = ln(z)/T; a pole at z = 0 is infinitely fast."""
    with np.errstate(invalid="ignore"):
        return log_z / period


def _motion(
    study: Study, sampled: Sampled, compensator: Compensator, table: Mapping[str, Real], log_z: NDArray[np.complex128]
) -> Trajectories:
    """Responses until the slowest mode of the stable scenarios has gone, or a few samples where none is stable.

    A plant that hardly decays may stretch the time of the nominal one, or of the fastest, so many times and no more.
    """
    period = float(study.period.values[0])
    slowest = np.nanmax(np.where(np.isnan(log_z.real), -np.inf, log_z.real), axis=1, initial=-np.inf)
    rates = -slowest[(slowest < 0) & np.isfinite(slowest)]
    usual = -slowest[0] if slowest[0] < 0 and np.isfinite(slowest[0]) else rates.max(initial=0.0)
    samples = np.log(1 / _SHOWN) / max(rates.min(), usual / _STRETCH) if len(rates) else 40.0
    samples = float(np.clip(np.ceil(samples + sampled.whole.max() + 4), 12, _MOST_SAMPLES))
    between = max(1, int(_POINTS // samples))
    if between > 1:
        time = period * np.arange(int(samples) * between + 1) / between
    else:
        time = period * np.unique(np.linspace(0, samples, _POINTS).round())
    source = source_of(study, table, study.period.values, sampled)
    return trajectories(source, compensator, float(study.gain.values[0]), 0, time)


def _loop_gain(
    sampled: Sampled, compensator: Compensator, gain: Real, log_z: NDArray[np.complex128]
) -> tuple[Real, NDArray[np.complex128]]:
    """Frequencies up to half the sampling rate of the fastest clock [rad/s], and L (S, frequencies)."""
    highest = np.pi / sampled.period.max()
    rates = np.abs(log_z[np.isfinite(log_z)]) / sampled.period.max()
    lowest = np.clip(rates.min(initial=highest) / 30, highest * 1e-5, highest / 100)
    frequency = np.geomspace(lowest, highest, _FREQUENCIES)
    found = np.empty((len(sampled.period), len(frequency)), complex)
    for group in groups_of(sampled):
        loop = open_loop(sampled, compensator, group)
        turn = 1j * frequency * sampled.period[group.rows, 0][:, None]
        w, above = np.expm1(turn), loop.fixed[:, 0] + gain[0] * loop.sloped[:, 0]
        with np.errstate(divide="ignore", invalid="ignore"):
            found[group.rows] = _at(above, w) / (_at(loop.below[:, 0], w) * np.exp(group.delay * turn))
    return frequency, found


def _at(polynomial: Real, w: NDArray[np.complex128]) -> NDArray[np.complex128]:
    """Values (M, F) of polynomials (M, n+1), descending, at w (M, F)."""
    total = np.zeros_like(w)
    for power in range(polynomial.shape[1]):
        total = total * w + polynomial[:, power, None]
    return total


def _coordinates(study: Study, asked: int, scenarios: Scenarios, time: Real) -> dict[str, Any]:
    def words(items: Any) -> NDArray[Any]:
        """Texts as an array."""
        return np.array(list(items), dtype=object)

    own, others = study.requirements[:asked], study.requirements[asked:]
    return {
        "measure": words(one.name for one in own),
        "measure_kind": ("measure", words(one.measure.key for one in own)),
        "measure_unit": ("measure", words(one.unit for one in own)),
        "other_measure": words(one.name for one in others),
        "other_unit": ("other_measure", words(one.unit for one in others)),
        "other_better": ("other_measure", words(one.measure.better for one in others)),
        "scenario": np.arange(len(scenarios.scale)),
        "parameter": words(scenarios.names),
        "parameter_unit": ("parameter", words(scenarios.units)),
        "parameter_shown_unit": ("parameter", words(scenarios.shown)),
        "time": ("time", time, {"units": study.time_unit}),
    }


def _provenance(study: Study, values: Mapping[str, float]) -> dict[str, Any]:
    axes = {axis.name: axis for axis in (study.gain, study.period, *study.design)}
    place = {f"at_{name}": value for name, value in values.items()}
    shown = {f"shown_unit_{name}": axis.shown for name, axis in axes.items()}
    return {
        "title": study.title, "study": study.text, "study_sha256": study.sha256,
        "explorer_version": explorer.__version__, **place, **shown,
    }  # fmt: skip
