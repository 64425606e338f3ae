"""[[requirements]] of a study: tables and the catalogue of measures in, Requirements out, faults collected."""

from __future__ import annotations

import math
import re
from collections.abc import Sequence
from typing import Any

from explorer.study.collect import Collector, units_of
from explorer.study.expressions import closest
from explorer.study.locate import Path
from explorer.study.model import Measure, Requirement
from explorer.study.quantities import QuantityError, read_quantity
from explorer.study.schema import RequirementSection, shown

_PICTURES = ("slack", "binding", "share")  # what a map shows besides requirements
_NEVER_NEGATIVE = ("s", "sample", "rad/s", "rad/sample", "%")
_SAMPLES = re.compile(r"\s*(\S+)\s+samples?\s*")


def read_requirements(
    collector: Collector, tables: Any, catalogue: Sequence[Measure], time_unit: str, stated: Sequence[str]
) -> list[Requirement]:
    """All requirements in the study's order; time_unit "sample" for a normalised plant; stated : keys of [loop]."""
    requirements: list[Requirement] = []
    for index, table in enumerate(tables if isinstance(tables, list) else []):
        if not isinstance(table, dict):
            continue
        path: Path = ("requirements", index)
        section = collector.section(RequirementSection, table, path)
        found = _requirement(collector, section, path, catalogue, time_unit) if section else None
        if found is None:
            continue
        for key in found.measure.needs:
            if key not in stated:
                collector.fault(path, f"{found.measure.name} without {key}", "it is computed from that",
                                f"Add {key} to [loop].")  # fmt: skip
        if any(found.name == other.name for other in requirements):
            place = (*path, "name") if section and section.name else path
            collector.fault(
                place, f"the name {shown(found.name)} stands twice", "names are unique", 'Add name = "...".'
            )
            continue
        requirements.append(found)
    return requirements


def _requirement(
    collector: Collector,
    section: RequirementSection,
    path: Path,
    catalogue: Sequence[Measure],
    time_unit: str,
) -> Requirement | None:
    measure = _measure(collector, section, path, catalogue)
    if measure is None:
        return None
    name = section.name if section.name is not None else measure.name
    if name in _PICTURES:
        collector.fault((*path, "name"), f"the name {shown(name)} is taken",
                        f"{', '.join(_PICTURES)} name pictures already", "Choose another name.")  # fmt: skip
    if section.band is not None and measure.band is None:
        collector.fault(
            (*path, "band"), f"found with {measure.name}", "allowed: only with a settling time", "Remove it."
        )
    band, reference = _band(collector, section, measure, path), _reference(collector, section, measure, path)
    if not measure.takes_limit:
        for key in ("at_least", "at_most", "scale"):
            if getattr(section, key) is not None:
                collector.fault((*path, key), f"found with {measure.name}", "it takes no limit", "Remove it.")
        return Requirement(name, measure, "below", math.nan, False, math.nan, band, reference, measure.unit)
    given = [key for key in ("at_least", "at_most") if getattr(section, key) is not None]
    if len(given) != 1:
        found = "found at_least and at_most" if given else "no limit"
        collector.fault(path, found, f"{measure.name} needs at_least or at_most, one of them",
                        "Write two requirements." if given else "")  # fmt: skip
        return None
    place, value = (*path, given[0]), getattr(section, given[0])
    unit = unit_in(measure, time_unit) if measure.unit else _stated_unit(value)
    limit = read_limit(collector, value, place, measure, unit)
    scale: float | None = math.nan
    if section.scale is not None:
        scale = collector.in_unit(section.scale, (*path, "scale"), unit, lowest=0.0)
        if scale == 0:
            collector.fault((*path, "scale"), f"found {shown(section.scale)}", "allowed: more than 0")
    if limit is None or scale is None:
        return None
    if limit[0] == 0 and math.isnan(scale):
        collector.fault((*path, given[0]), "found a limit of 0", "its slack has no natural scale",
                        f'Add scale = "... {unit}": the change that counts as 100 %.')  # fmt: skip
        return None
    return Requirement(name, measure, given[0].replace("_", " "), *limit, scale, band, reference, unit)


def read_limit(
    collector: Collector, value: str | int | float, path: Path, measure: Measure, unit: str
) -> tuple[float, bool] | None:
    """A limit in a requirement's unit, and whether it counts samples (then the number is in samples)."""
    counted = _SAMPLES.fullmatch(value) if isinstance(value, str) and len(value) < 80 else None
    if counted and measure.in_samples and unit != "sample":
        number = collector.in_unit(counted.group(1), path, "1", lowest=0.0)
        return None if number is None else (number, True)
    never_negative = unit in _NEVER_NEGATIVE or not measure.unit
    number = collector.in_unit(value, path, unit, lowest=0.0 if never_negative else -math.inf)
    return None if number is None else (number, False)


def unit_in(measure: Measure, time_unit: str) -> str:
    """The measure's unit in this study: times count samples when the plant is normalised."""
    if time_unit == "s":
        return measure.unit
    return {"s": "sample", "rad/s": "rad/sample"}.get(measure.unit, measure.unit)


def _stated_unit(value: str | int | float) -> str:
    """The SI unit of a limit whose measure has that of the plant's output or input; "" for a bare or faulty one."""
    try:
        return units_of(read_quantity(value))[0]
    except QuantityError:
        return ""


def _measure(
    collector: Collector, section: RequirementSection, path: Path, catalogue: Sequence[Measure]
) -> Measure | None:
    named = [measure for measure in catalogue if measure.name == section.measure]
    if not named:
        names = list(dict.fromkeys(measure.name for measure in catalogue))
        collector.fault((*path, "measure"), f"unknown measure {shown(section.measure)}",
                        f"allowed: one of the {len(names)} that `explorer measures` lists",
                        closest(section.measure, names))  # fmt: skip
        return None
    bases = [measure.basis for measure in named if measure.basis]
    if not bases:
        if section.basis is not None:
            collector.fault(
                (*path, "basis"), f"found with {section.measure}", "it has one reading only", "Remove it."
            )
        return named[0]
    if section.basis not in bases:
        found = "no basis" if section.basis is None else f"found {shown(section.basis)}"
        place = path if section.basis is None else (*path, "basis")
        allowed = " or ".join(f'"{basis}"' for basis in bases)
        collector.fault(place, found, f"{section.measure} needs basis = {allowed}")
        return named[0]  # to read the limit with
    return next(measure for measure in named if measure.basis == section.basis)


def _reference(collector: Collector, section: RequirementSection, measure: Measure, path: Path) -> str:
    """ "step" unless stated, "" for a measure that knows no other."""
    allowed = " or ".join(f'"{word}"' for word in measure.inputs)
    if section.input is not None and section.input not in measure.inputs:
        rule = f"allowed: {allowed}" if allowed else "allowed: only with a steady-state error"
        collector.fault((*path, "input"), f"found {shown(section.input)}", rule)
    return section.input or (measure.inputs[0] if measure.inputs else "")


def _band(collector: Collector, section: RequirementSection, measure: Measure, path: Path) -> float:
    if measure.band is None:
        return math.nan
    if section.band is None:
        return measure.band
    band = collector.in_unit(section.band, (*path, "band"), "1")
    if band is not None and not 0 < band < 1:
        collector.fault(
            (*path, "band"), f"found {shown(section.band)}", 'allowed: between 0 and 100 %, such as "2 %"'
        )
    return band if band is not None else measure.band
