"""One slice of a verdict over gain and period: Datasets and a decision in, arrays and words for maps out."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from explorer.errors import OptionError
from explorer.study.display import factor_of, format_shown
from explorer.study.quantities import format_quantity

Floats = npt.NDArray[np.float64]

_SENSES = {"at least": "≥", "at most": "≤", "below": "<"}


@dataclass(frozen=True)
class Axis:
    """A swept axis as it is shown: `values` in the shown unit, `factor` shown units per SI unit."""

    values: Floats
    factor: float
    label: str
    unit: str

    def words(self, shown: float) -> str:
        """A value on this axis for a sentence, from its shown number."""
        return format_shown(shown / self.factor, self.unit)


@dataclass(frozen=True)
class Requirement:
    """A requirement in words: its name, its measure, and what it asks, "damping ratio ≥ 0.6"."""

    name: str
    kind: str
    asks: str

    @property
    def full(self) -> str:
        """Name and what it asks, said once where they start alike."""
        return self.asks if self.asks.startswith(self.name) else f"{self.name}\n    {self.asks}"


@dataclass(frozen=True)
class Mark:
    """A point of the decision, in shown units and in words; `window` is the gains that hold there."""

    period: float
    gain: float
    text: str
    window: tuple[float, float] | None = None


@dataclass(frozen=True)
class Plane:
    """What one map shows.

    slack : (measure, gain, period), signed, >= 0 is met; +-inf is allowed, NaN is unknown
    least : (gain, period), the least slack; NaN wherever the verdict is unknown
    binding : (gain, period) int, index of the requirement with the least slack; -1 where unknown
    """

    period: Axis
    gain: Axis
    requirements: tuple[Requirement, ...]
    slack: Floats
    least: Floats
    binding: npt.NDArray[np.int64]
    tolerance_scale: float
    design: dict[str, float]
    box: str
    slice: str
    title: str
    provenance: str

    @property
    def unknown(self) -> npt.NDArray[np.bool_]:
        """(gain, period), True where nobody knows whether the requirements hold."""
        return np.isnan(self.least)

    @property
    def feasible(self) -> npt.NDArray[np.bool_]:
        """(gain, period), True where every requirement is known to hold."""
        return np.asarray(self.least >= 0)  # False for NaN

    def nearest(self) -> tuple[int, int] | None:
        """Row and column of the largest finite least slack; None when no point has one."""
        finite = np.where(np.isfinite(self.least), self.least, -np.inf)
        if not np.isfinite(finite).any():
            return None
        row, column = np.unravel_index(int(finite.argmax()), finite.shape)
        return int(row), int(column)


def take_plane(
    verdict: xr.Dataset,
    tolerance_scale: float = 1.0,
    design: Mapping[str, float] | None = None,
    decision: Mapping[str, Any] | None = None,
) -> Plane:
    """The slice at one tolerance scale and one value of every further design variable.

    Variables that `design` leaves out take the recommended (or nearest) design's value, else their first.
    Raises OptionError, saying what there is, when a scale, a variable or a value is not in the verdict.
    """
    scale = _on_axis(verdict, "tolerance_scale", tolerance_scale)
    at = {"tolerance_scale": scale} | _design(verdict, design or {}, decision or {})
    cut = verdict.sel(at).transpose("measure", "gain", "period", ...)
    least = np.asarray(cut["least_slack"], dtype=float)
    binding = np.asarray(cut["binding"], dtype=np.int64)
    design_at = {name: value for name, value in at.items() if name != "tolerance_scale"}
    best = (decision or {}).get("recommended") or {}
    named = [
        _named(name, at[name], (best.get("design") or {}).get(name), _unit(verdict[name]))
        for name in design_at
    ]
    return Plane(
        period=_axis("sample period", verdict["period"]),
        gain=_axis("gain", verdict["gain"]),
        requirements=_requirements(cut),
        slack=np.asarray(cut["slack"], dtype=float),
        least=np.where(binding < 0, np.nan, least),
        binding=np.where(np.isnan(least), -1, binding),
        tolerance_scale=scale,
        design=design_at,
        box=f"the tolerance box × {scale:g}" if scale else "the nominal plant (tolerance box × 0)",
        slice=", ".join(named),
        title=" ".join(str(verdict.attrs.get("title", "")).split()) or "Study without a title",
        provenance=_provenance(verdict, scale),
    )


def nominal_plane(verdict: xr.Dataset, plane: Plane) -> Plane | None:
    """The same slice for the nominal plant alone; None where this one is it or the verdict lacks it."""
    if not plane.tolerance_scale or "nominal_slack" not in verdict:
        return None
    cut = verdict["nominal_slack"].sel(plane.design).transpose("measure", "gain", "period")
    slack = np.asarray(cut, dtype=float)
    return replace(plane, slack=slack, least=slack.min(axis=0), binding=slack.argmin(axis=0))


def share_at(sweep: xr.Dataset, plane: Plane) -> Floats:
    """(gain, period) share of scenarios that meet everything, 0..1; NaN where the verdict is unknown."""
    cut = sweep["share_met"].sel({"tolerance_scale": plane.tolerance_scale} | plane.design)
    share = np.asarray(cut.transpose("gain", "period"), dtype=float)
    return np.where(plane.unknown, np.nan, share)


def marks(plane: Plane, decision: Mapping[str, Any] | None) -> dict[str, Mark]:
    """The decision's points that lie in this slice: "recommended", "slowest"; "nearest" in an empty region.

    A decision for another tolerance scale marks nothing; a point of another design is left out.
    """
    found: dict[str, Mark] = {}
    decided = decision or {}
    if decision and math.isclose(float(decided["tolerance_scale"]), plane.tolerance_scale, abs_tol=1e-12):
        best, slowest = decided.get("recommended"), decided.get("slowest_period")
        if best and _same_design(plane, best):
            text = f"least slack {_number(best['least_slack'])} ({best['binding']})"
            found["recommended"] = _mark(plane, best, text)
        if slowest and _same_design(plane, slowest):
            found["slowest"] = _slowest(plane, slowest)
    if not plane.feasible.any() and (place := plane.nearest()):
        row, column = place
        name = plane.requirements[plane.binding[place]].name
        text = f"{name} misses by {_number(-100 * plane.least[place])} %"
        period, gain = float(plane.period.values[column]), float(plane.gain.values[row])
        found["nearest"] = Mark(period, gain, f"{_point(plane, period, gain)}\n{text}")
    return found


def _mark(plane: Plane, point: Mapping[str, Any], text: str) -> Mark:
    period, gain = point["period"] * plane.period.factor, point["gain"] * plane.gain.factor
    return Mark(period, gain, f"{_point(plane, period, gain)}\n{text}")


def _slowest(plane: Plane, point: Mapping[str, Any]) -> Mark:
    """The slowest period, refined between the grid's; its window of gains is that of the last grid period."""
    period, gain = point["period"] * plane.period.factor, point["gain"] * plane.gain.factor
    # Rounded down: a slower period than this one would not hold.
    digits = 3 - math.floor(math.log10(period))
    shown = plane.period.words(math.floor(period * (1 + 1e-12) * 10.0**digits) / 10.0**digits)
    stop = "the period axis ends here" if point.get("at_axis_end") else f"stopped by {point['stopped_by']}"
    low, high = (bound * plane.gain.factor for bound in point["gain_window"])
    return Mark(period, gain, f"{shown}\n{stop}", (low, high))


def _point(plane: Plane, period: float, gain: float) -> str:
    return f"{plane.period.words(period)}, gain {plane.gain.words(gain)}"


def _number(value: float | str) -> str:
    return f"{float(value):.3g}"  # decision.json spells infinity as a word


def _same_design(plane: Plane, point: Mapping[str, Any]) -> bool:
    """Whether the point's design is this slice's; a decision may leave out variables with one value."""
    there = point.get("design") or {}
    return all(
        math.isclose(there.get(name, value), value, rel_tol=1e-9) for name, value in plane.design.items()
    )


def _design(
    verdict: xr.Dataset, wanted: Mapping[str, float], decision: Mapping[str, Any]
) -> dict[str, float]:
    dims = verdict["least_slack"].dims
    others = [str(name) for name in dims if name not in ("tolerance_scale", "period", "gain")]
    if strange := [name for name in wanted if name not in others]:
        allowed = ", ".join(others) or "none: only gain and period were swept"
        raise OptionError(f"{strange[0]!r} is no further design variable of this run; there are: {allowed}")
    point = decision.get("recommended") or decision.get("nearest") or {}
    chosen = {name: float(verdict[name][0]) for name in others}
    chosen |= {name: value for name, value in (point.get("design") or {}).items() if name in chosen} | dict(
        wanted
    )
    return {name: _on_axis(verdict, name, value) for name, value in chosen.items()}


def _named(name: str, value: float, recommended: float | None, unit: str) -> str:
    """A design variable's value in this slice, and the recommended one where that is another."""
    text = f"{name} = {format_shown(value, unit)}"
    if recommended is None or math.isclose(recommended, value, rel_tol=1e-9):
        return text
    return f"{text} (recommended: {format_shown(recommended, unit)})"


def _on_axis(verdict: xr.Dataset, name: str, value: float) -> float:
    """The axis value that `value` means, as stored: 0.1 + 0.2 finds 0.3."""
    values = np.asarray(verdict[name], dtype=float)
    there = np.flatnonzero(np.isclose(values, float(value), rtol=1e-9, atol=1e-15))
    if not there.size:
        unit = _unit(verdict[name])
        swept = ", ".join(format_shown(float(one), unit) for one in values)
        raise OptionError(f"{name} {format_shown(float(value), unit)} was not swept; there are: {swept}")
    return float(values[there[0]])


def _unit(values: xr.DataArray) -> str:
    """The unit to show: as written in the study where it is kept, else the stored one."""
    return str(values.attrs.get("shown_unit", values.attrs.get("units", "")))


def _axis(name: str, values: xr.DataArray) -> Axis:
    """Seconds in the multiple that suits the axis, others in their writer's unit, by a power of ten if they must."""
    unit = _unit(values)
    own = 1.0 / factor_of(unit)
    numbers = np.asarray(values, dtype=float) * own
    middle = math.sqrt(float(numbers.min()) * float(numbers.max())) if numbers.min() > 0 else 1.0
    thousands = math.floor(math.log10(middle / 0.3) / 3)
    if unit == "s":
        step = min(max(thousands, -3), 0)
        return Axis(
            numbers * 1000.0**-step, 1000.0**-step, f"{name} [{('s', 'ms', 'µs', 'ns')[-step]}]", unit
        )
    shown = "samples" if unit == "sample" else unit
    if -1 <= thousands <= 1:  # 0.0003 to 300000 in the middle: plain numbers can be read
        return Axis(numbers, own, f"{name} [{shown}]" if shown else name, unit)
    power = "10" + str(3 * thousands).translate(str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"))
    label = f"{name} [{power} {shown}]" if shown not in ("", "1") else f"{name} [{power}]"
    return Axis(numbers * 1000.0**-thousands, own * 1000.0**-thousands, label, unit)


def _requirements(cut: xr.Dataset) -> tuple[Requirement, ...]:
    rows = []
    for index, name in enumerate(str(name) for name in cut["measure"].values):
        kind, unit = str(cut["measure_kind"].values[index]), str(cut["measure_unit"].values[index])
        limit = np.asarray(cut["limit"][index], dtype=float)
        sense = _SENSES[str(np.ravel(cut["sense"])[index])]
        rows.append(
            Requirement(name, kind, _asks(kind, sense, limit, unit, np.asarray(cut["period"], dtype=float)))
        )
    return tuple(rows)


def _asks(kind: str, sense: str, limit: Floats, unit: str, period: Floats) -> str:
    """ "time to peak ≤ 120 ms"; a limit that grows with the period was stated in samples and is said so."""
    if kind == "stability":  # its limit is always 1
        return "stability: largest |z| < 1"
    samples = limit / period
    if np.ptp(limit) <= 1e-9 * np.max(np.abs(limit)):
        return f"{kind} {sense} {format_quantity(float(limit[0]), unit)}"
    if np.ptp(samples) <= 1e-9 * np.max(np.abs(samples)):
        return f"{kind} {sense} {format_quantity(float(samples[0]), 'sample')}"
    return f"{kind} {sense} limit set by the period"


def _provenance(verdict: xr.Dataset, scale: float) -> str:
    attrs = verdict.attrs
    facts = [
        f"study {str(attrs['study_sha256'])[:12]}" if "study_sha256" in attrs else "",
        f"explorer {attrs['explorer_version']}" if "explorer_version" in attrs else "",
        f"seed {attrs['seed']}" if "seed" in attrs else "",
        f"created {attrs['created']}" if "created" in attrs else "",
        _scenario_count(verdict, scale),
        str(attrs.get("status_tally", "")),
    ]
    return "\n".join(
        textwrap.wrap(" · ".join(fact for fact in facts if fact), 145, max_lines=2, placeholder=" …")
    )


def _scenario_count(verdict: xr.Dataset, scale: float) -> str:
    """How many scenarios stand behind this scale; "" when the verdict does not carry them."""
    if "scenario_scale" not in verdict:
        return ""
    count = int((verdict["scenario_scale"] <= scale * (1 + 1e-12)).sum())
    return f"{count} scenario" if count == 1 else f"{count} scenarios"
