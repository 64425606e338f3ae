"""One probed design point, judged: a Dataset of `probe` in, slack, worst plants and words for text and pictures out."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property

import numpy as np
import numpy.typing as npt
import xarray as xr

from explorer.measures.asking import read_study
from explorer.study.display import format_shown
from explorer.study.model import Requirement, Study
from explorer.study.quantities import format_quantity
from explorer.verdict.slack import slack_of

Floats = npt.NDArray[np.float64]
Flags = npt.NDArray[np.bool_]

MOST_NAMED = 4  # worst plants that a picture draws apart from the others
_ALIKE = 1e-9  # slack this close is equal but for rounding: the first scenario stands for all of them


@dataclass(frozen=True)
class Row:
    """One measure at the point: its value in every scenario, (S,); NaN is unknown.

    worst : the scenario within the tolerances that is furthest at the bad end, None when all are unknown.
    requirement, slack : None for a measure that the study does not ask for.
    """

    name: str
    kind: str
    unit: str
    better: str
    values: Floats
    worst: int | None
    requirement: Requirement | None = None
    slack: Floats | None = None

    @property
    def nominal(self) -> float:
        """Its value for the nominal plant."""
        return float(self.values[0])

    @property
    def worst_value(self) -> float:
        """Its worst value within the tolerances; NaN when nothing is known."""
        return math.nan if self.worst is None else float(self.values[self.worst])

    @property
    def worst_slack(self) -> float:
        """The slack there; NaN for a measure without a limit."""
        return math.nan if self.worst is None or self.slack is None else float(self.slack[self.worst])

    def words(self, value: float) -> str:
        """A value in a readable unit; infinities in words."""
        return value_words(value, self.unit, self.kind, self.better)

    @property
    def full_name(self) -> str:
        """The name, with the basis where it is that of its measure, "settling time by poles"."""
        return self.kind if self.requirement and self.name == self.requirement.measure.name else self.name

    def asks(self, period: float) -> str:
        """The limit in words, "≤ 15 samples (75 ms)"; "" for a measure without one."""
        one = self.requirement
        if one is None:
            return ""
        sign = {"at least": "≥", "at most": "≤", "below": "<"}[one.sense]
        limit = self.words(float(one.limits(np.array([period]))[0]))
        if one.in_samples and self.unit != "sample":
            return f"{sign} {format_quantity(one.limit, 'sample')} ({limit})"
        return f"{sign} {limit}"


@dataclass(frozen=True)
class Probed:
    """A Dataset of `probe` with what the study asks of it.

    within : (S,), the scenarios within the tolerances as stated; they alone decide what is worst and what is missed.
    """

    dataset: xr.Dataset
    study: Study
    period: float
    within: Flags
    requirements: tuple[Row, ...]
    others: tuple[Row, ...]

    @cached_property
    def worst(self) -> dict[int, tuple[str, ...]]:
        """Scenarios that are worst for a requirement, and for which; the least slack first."""
        found: dict[int, list[str]] = {}
        for row in sorted(self.requirements, key=lambda row: row.worst_slack):
            if row.worst is not None:
                found.setdefault(row.worst, []).append(row.name)
        return {scenario: tuple(names) for scenario, names in found.items()}

    @property
    def drawn(self) -> list[int]:
        """The worst plants that pictures draw apart: never the nominal one, which is drawn anyway."""
        return [scenario for scenario in self.worst if scenario > 0][:MOST_NAMED]

    @property
    def met(self) -> bool:
        """Whether every scenario within the tolerances is known to meet every requirement."""
        return not any((self.missed_by(row) | self.unknown_in(row)).any() for row in self.requirements)

    def missed_by(self, row: Row) -> Flags:
        """(S,) scenarios within the tolerances that are known to miss a requirement."""
        return np.zeros_like(self.within) if row.slack is None else self.within & (row.slack < 0)

    def unknown_in(self, row: Row) -> Flags:
        """(S,) scenarios within the tolerances where a measure is unknown."""
        return self.within & np.isnan(row.values)

    def row(self, kind: str, reference: str = "") -> Row | None:
        """The first requirement with that measure, else the measure itself; None when it was not computed."""
        named = f"{kind}, {reference}" if reference else kind
        for one in self.requirements:
            asked = one.requirement.reference if one.requirement else ""
            if one.kind == kind and asked == reference:
                return one
        return next((one for one in self.others if one.name == named), None)

    def asked(self, kind: str) -> list[tuple[Row, float]]:
        """Requirements with that measure, and the limit of each in its unit at this period."""
        rows = [row for row in self.requirements if row.kind == kind and row.requirement]
        return [(row, float(row.requirement.limits(np.array([self.period]))[0])) for row in rows if row.requirement]

    @property
    def point(self) -> str:
        """The design point in words."""
        attrs = self.dataset.attrs
        named = {key.removeprefix("at_"): value for key, value in attrs.items() if key.startswith("at_")}
        return ", ".join(
            f"{name} {format_shown(value, attrs.get(f'shown_unit_{name}', ''))}" for name, value in named.items()
        )

    @property
    def title(self) -> str:
        """The study's title on one line."""
        return " ".join(str(self.dataset.attrs["title"]).split()) or "Study without a title"

    @property
    def provenance(self) -> str:
        """Where the numbers come from."""
        attrs, unknown = self.dataset.attrs, int(np.any([self.unknown_in(row) for row in self.requirements], 0).sum())
        facts = [f"study {str(attrs['study_sha256'])[:12]}", f"explorer {attrs['explorer_version']}",
                 f"{self.within.sum()} scenarios within the tolerances as stated",
                 f"unknown in {unknown} of them" if unknown else ""]  # fmt: skip
        return " · ".join(fact for fact in facts if fact)

    def parameters(self, scenario: int, varying: bool = True) -> str:
        """The parameters of a scenario in words; by default those alone that are not the same in all of them."""
        table = self.dataset["scenario_parameter"].values
        shown = self.dataset["parameter_shown_unit"].values
        return ", ".join(
            f"{name} = {format_shown(float(table[scenario, index]), str(shown[index]))}"
            for index, name in enumerate(self.dataset["parameter"].values)
            if not varying or np.ptp(table[:, index]) > 0
        )


def judged(dataset: xr.Dataset) -> Probed:
    """A Dataset of `probe`, judged by the limits of its own study."""
    study = read_study(text=str(dataset.attrs["study"]))
    period = float(dataset.attrs["at_period"])
    scale = dataset["scenario_scale"].values
    within = np.asarray(scale <= 1 + 1e-12)
    rows = []
    for one, values in zip(study.requirements, dataset["value"].values, strict=True):
        slack = slack_of(one, values[None, :], np.array([period]))[0]
        worst = _lowest(np.where(within, slack, np.nan))
        better = "more" if one.sense == "at least" else "less"
        rows.append(Row(one.name, one.measure.key, one.unit, better, values, worst, one, slack))
    units = {one.measure.name: one.unit for one in study.requirements if one.unit}
    others = []
    words = (dataset[name].values for name in ("other_measure", "other_unit", "other_better", "other_value"))
    for name, unit, better, values in zip(*words, strict=True):
        worst = _lowest(np.where(within, values if better == "more" else -values, np.nan))
        kind = str(name).partition(",")[0]
        others.append(Row(str(name), kind, str(unit) or _same_unit(kind, units), str(better), values, worst))
    return Probed(dataset, study, period, within, tuple(rows), tuple(others))


def value_words(value: float, unit: str, kind: str, better: str) -> str:
    """A measure's value for people: "never" for a time that does not come, "none" for a margin that is not there."""
    if math.isinf(value):
        if better == "more" or kind in ("gain reduction margin", "natural frequency"):
            return "unlimited" if value > 0 and better == "more" else "none"
        if kind.startswith("time to peak"):
            return "no peak"
        return "never" if unit in ("s", "sample") else "unbounded"
    text = format_quantity(value, unit)
    if kind in ("gain margin", "gain reduction margin") and value > 0:
        return f"{text} ({20 * math.log10(value):.3g} dB)"
    return text


def share_words(slack: float) -> str:
    """Slack in percent; infinite and unknown slack in words."""
    if math.isnan(slack):
        return "unknown"
    if math.isinf(slack):
        return "unlimited" if slack > 0 else "out of reach"
    percent = 100 * slack
    return f"{percent:.0f} %" if abs(percent) >= 1000 else f"{percent if abs(percent) >= 1e-3 else 0:.3g} %"


def _same_unit(kind: str, units: dict[str, str]) -> str:
    """The unit of a measure of the plant's output where a requirement states it: the output has one unit."""
    lengths = ("steady-state error", "load step deviation")
    name = kind.removesuffix(" by response")
    return next((units[one] for one in lengths if name in lengths and one in units), "")


def _lowest(values: Floats) -> int | None:
    """The first index whose value is the lowest but for rounding; None when all are NaN."""
    if np.isnan(values).all():
        return None
    least = float(np.nanmin(values))
    highest = least if math.isinf(least) else least + _ALIKE * max(1.0, abs(least))
    alike = (values <= highest) & ((values < 0) == (least < 0))  # what is met never stands for what is missed
    return int(np.flatnonzero(alike)[0])
