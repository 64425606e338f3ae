"""Decisions: sweep and verdict Datasets in, the answer as plain numbers and as sentences out.

Which period is the slowest, with which gain, what stops the loop from running slower, which design to take;
the same for the nominal plant alone; and where nothing holds, how near it comes.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import xarray
from numpy.typing import NDArray

from explorer.measures.asking import read_study
from explorer.names import GAIN, MEASURE, PARAMETER, PERIOD, SCALE
from explorer.study.display import format_shown
from explorer.verdict.promises import in_words, promises_kept
from explorer.verdict.region import gain_windows, slowest_period

Real = NDArray[np.float64]
Decision = dict[str, Any]

AS_STATED = 1.0  # the tolerance scale of the answer


def decide(sweep: xarray.Dataset, verdict: xarray.Dataset) -> Decision:
    """The decision with the tolerances as stated.

    Parameters
    ----------
    sweep, verdict : from sweep and judge, of one study.

    Returns
    -------
    dict : "answer" in words; "feasible"; "slowest_period" (None, or period, grid_period, gain, gain_window,
        design, stopped_by, scenario, at_axis_end); "recommended" (None, or period, gain, design, least_slack,
        binding, scenario, values); "nearest" where nothing holds; "nominal" with the first two for the nominal
        plant; "poles_against_response", see verdict.promises; "unknown_points" (cells, at the tolerances as stated);
        "units".
    """
    box = verdict.sel({SCALE: AS_STATED})
    worst = sweep.sel({SCALE: AS_STATED})
    toleranced = _Planes(box["slack"], worst["worst_value"], worst["worst_scenario"], sweep)
    nominal = _Planes(verdict["nominal_slack"], sweep["nominal_value"], None, sweep)
    decision: Decision = {
        "title": verdict.attrs["title"],
        "tolerance_scale": AS_STATED,
        "feasible": toleranced.holds_somewhere(),
        "slowest_period": toleranced.slowest(),
        "recommended": toleranced.best() if toleranced.holds_somewhere() else None,
        "nearest": None if toleranced.holds_somewhere() else toleranced.best(),
        "nominal": {
            "slowest_period": nominal.slowest(),
            "recommended": nominal.best() if nominal.holds_somewhere() else None,
        },
        "unknown_points": int(np.isnan(toleranced.least).sum()),
        "points": int(toleranced.least.size),
        "swept_periods": len(toleranced.period),
        "limits": verdict.attrs["limits"],
    }
    study = read_study(text=str(sweep.attrs["study"]))
    places = {"recommended design": decision["recommended"]}
    if not decision["feasible"]:
        places = {"nearest point": decision["nearest"]}
    elif len(toleranced.period) > 1:
        places["slowest period"] = decision["slowest_period"]
    decision["poles_against_response"] = promises_kept(study, places)
    provenance = ("study_sha256", "explorer_version", "seed", "created", "status_tally")
    decision |= _units(sweep, toleranced.design) | {name: verdict.attrs[name] for name in provenance}
    return decision | {"answer": answer_in_words(decision)}


def _units(sweep: xarray.Dataset, design: list[str]) -> Decision:
    """SI units of everything in the decision, and the units in which its sentences speak."""
    axes = (PERIOD, GAIN, *design)
    parameters = _words(sweep[PARAMETER])
    shown = dict(zip(parameters, _words(sweep["parameter_shown_unit"]), strict=True))
    return {
        "units": {name: sweep[name].attrs["units"] for name in axes},
        "measure_units": dict(zip(_words(sweep[MEASURE]), _words(sweep["measure_unit"]), strict=True)),
        "parameter_units": dict(zip(parameters, _words(sweep["parameter_unit"]), strict=True)),
        "shown_units": shown | {name: sweep[name].attrs["shown_unit"] for name in axes},
    }


class _Planes:
    """Slack per requirement over (designs, periods, gains), for the tolerance box or the nominal plant."""

    def __init__(
        self,
        slack: xarray.DataArray,
        value: xarray.DataArray,
        scenario: xarray.DataArray | None,
        sweep: xarray.Dataset,
    ) -> None:
        self.sweep = sweep
        self.design = [str(name) for name in slack.dims if name not in (MEASURE, PERIOD, GAIN)]
        order = (MEASURE, *self.design, PERIOD, GAIN)
        self.sizes = tuple(slack.sizes[name] for name in self.design)
        self.slack, self.value = (self._flat(array.transpose(*order).values) for array in (slack, value))
        self.scenario = None if scenario is None else self._flat(scenario.transpose(*order).values)
        self.least = self.slack.min(axis=0)
        self.period, self.gain = sweep[PERIOD].values, sweep[GAIN].values

    def _flat(self, array: NDArray[Any]) -> NDArray[Any]:
        return array.reshape(array.shape[0], -1, *array.shape[-2:])

    def holds_somewhere(self) -> bool:
        """Whether any point is feasible."""
        return bool((self.least >= 0).any())

    def slowest(self) -> Decision | None:
        """The slowest period over all designs; ties go to the design with more slack there."""
        found = [(slowest_period(plane, self.period), index) for index, plane in enumerate(self.least)]
        held = [
            (edge, self.least[index][edge[1], edge[2]], index) for edge, index in found if edge is not None
        ]
        if not held:
            return None
        (period, row, column), _, design = max(held, key=lambda one: (one[0][0], one[1]))
        windows = gain_windows(self.least[design][row], self.gain)
        window = next(one for one in windows if one[0] <= self.gain[column] <= one[1])
        at_end = row == len(self.period) - 1
        beyond = (design, row if at_end else row + 1, column)
        stopped_by = None if at_end else self._binding(beyond)
        return {
            "period": period,
            "grid_period": float(self.period[row]),
            "gain": float(self.gain[column]),
            "gain_window": [window[0], window[1]],
            "design": self._design_at(design),
            "stopped_by": stopped_by,
            "scenario": self._scenario_at(beyond, stopped_by),
            "at_axis_end": at_end,
        }

    def best(self) -> Decision | None:
        """The grid point with the largest least slack; None where every point is unknown."""
        if np.isnan(self.least).all():
            return None
        place = np.unravel_index(np.nanargmax(self.least), self.least.shape)
        design, row, column = (int(index) for index in place)
        binding = self._binding((design, row, column))
        names = _words(self.sweep[MEASURE])
        return {
            "period": float(self.period[row]),
            "gain": float(self.gain[column]),
            "design": self._design_at(design),
            "least_slack": float(self.least[place]),
            "binding": binding,
            "scenario": self._scenario_at((design, row, column), binding),
            "values": {name: float(self.value[(index, *place)]) for index, name in enumerate(names)},
        }

    def _binding(self, place: tuple[int, int, int]) -> str | None:
        """The requirement with the least slack; the first unknown one where a slack is unknown."""
        slack = self.slack[(slice(None), *place)]
        return _words(self.sweep[MEASURE])[int(np.where(np.isnan(slack), -np.inf, slack).argmin())]

    def _scenario_at(self, place: tuple[int, int, int], requirement: str | None) -> dict[str, float] | None:
        if self.scenario is None or requirement is None:
            return None
        index = _words(self.sweep[MEASURE]).index(requirement)
        row = self.sweep["scenario_parameter"].values[self.scenario[(index, *place)]]
        return dict(zip(_words(self.sweep[PARAMETER]), row.tolist(), strict=True))

    def _design_at(self, design: int) -> dict[str, float]:
        place = np.unravel_index(design, self.sizes) if self.sizes else ()
        return {name: float(self.sweep[name].values[at]) for name, at in zip(self.design, place, strict=True)}


def answer_in_words(decision: Decision) -> str:
    """The decision as a few sentences for the terminal and the printed page."""
    sentences = _held(decision) if decision["feasible"] else _nowhere(decision)
    nominal = decision["nominal"]["slowest_period"]
    if nominal is None:
        sentences.append("Even the nominal plant alone holds everything nowhere.")
    else:
        sentences.append(_nominal(decision, nominal))
    if decision["unknown_points"]:
        sentences.append(
            f"{decision['unknown_points']} of {decision['points']} points are unknown and count as not feasible."
        )
    sentences += in_words(decision["poles_against_response"])
    return " ".join(sentences)


def _held(decision: Decision) -> list[str]:
    slowest, best = decision["slowest_period"], decision["recommended"]
    low, high = _window(decision, slowest)
    if decision["swept_periods"] == 1:
        sentences = [
            f"With the tolerances as stated every requirement holds at the period of "
            f"{_period(decision, slowest['period'])} for gains from {low} to {high}{_design(decision, slowest)}."
        ]
    else:
        end = ", the end of the axis" if slowest["at_axis_end"] else ""
        sentences = [
            f"With the tolerances as stated every requirement holds up to a sample period of "
            f"{_period(decision, _within(slowest['period']))}{end}, at a gain of {_gain(decision, slowest['gain'])}"
            f"{_design(decision, slowest)}.",
            f"At {_period(decision, _within(slowest['grid_period']))} the gain may lie between {low} and {high}.",
        ]
    if slowest["stopped_by"]:
        sentences.append(f"Slower is stopped by “{slowest['stopped_by']}”{_plant(decision, slowest)}.")
    return [
        *sentences,
        f"Recommended: period {_period(decision, best['period'])}, gain {_gain(decision, best['gain'])}"
        f"{_design(decision, best)}, least slack {100 * best['least_slack']:.3g} %, "
        f"bound by “{best['binding']}”{_plant(decision, best)}.",
    ]


def _nominal(decision: Decision, slowest: Decision) -> str:
    low, high = _window(decision, slowest)
    if decision["swept_periods"] == 1:
        return f"The nominal plant alone would allow gains from {low} to {high}{_design(decision, slowest)}."
    end = ", the end of the axis" if slowest["at_axis_end"] else ""
    return f"The nominal plant alone would allow {_period(decision, _within(slowest['period']))}{end}."


def _nowhere(decision: Decision) -> list[str]:
    sentences = ["Nowhere on the swept axes does every requirement hold with the tolerances as stated."]
    nearest = decision["nearest"]
    if nearest is None:
        return [*sentences, "Every point is unknown."]
    missing = (
        ""
        if np.isneginf(nearest["least_slack"])
        else f" by {-100 * nearest['least_slack']:.3g} % of its scale"
    )
    return [
        *sentences,
        f"The nearest is period {_period(decision, nearest['period'])}, gain {_gain(decision, nearest['gain'])}"
        f"{_design(decision, nearest)}: “{nearest['binding']}” is missed{missing}{_plant(decision, nearest)}.",
    ]


def _window(decision: Decision, slowest: Decision) -> tuple[str, str]:
    low, high = slowest["gain_window"]
    return _gain(decision, _within(low, up=True)), _gain(decision, _within(high))


def _within(value: float, up: bool = False) -> float:
    """Rounded to four digits towards the inside of the region, so that no sentence promises more than there is."""
    if value == 0 or not np.isfinite(value):
        return value
    step = 10.0 ** (np.floor(np.log10(abs(value))) - 3)
    return float((np.ceil if up else np.floor)(value / step * (1 - 1e-12 if up else 1 + 1e-12)) * step)


def _period(decision: Decision, value: float) -> str:
    return format_shown(value, decision["shown_units"]["period"])


def _gain(decision: Decision, value: float) -> str:
    return format_shown(value, decision["shown_units"]["gain"])


def _design(decision: Decision, place: Decision) -> str:
    parts = [
        f"{name} = {format_shown(value, decision['shown_units'][name])}"
        for name, value in place["design"].items()
    ]
    return f" with {', '.join(parts)}" if parts else ""


def _plant(decision: Decision, place: Decision) -> str:
    """The scenario behind a binding requirement, in parentheses."""
    if not place["scenario"]:
        return ""
    units = decision["shown_units"]
    parts = [f"{name} = {format_shown(value, units[name])}" for name, value in place["scenario"].items()]
    return f" (worst plant: {', '.join(parts)})"


def _words(array: xarray.DataArray) -> list[str]:
    return [str(word) for word in array.values]
