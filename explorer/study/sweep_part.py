"""[sweep] of a study: axes and scenario plan out, faults into the collector."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from explorer.study.collect import Collector, alike, units_of
from explorer.study.dimensions import DIMENSIONLESS, Measured
from explorer.study.expressions import closest
from explorer.study.locate import Path
from explorer.study.model import Axis, Parameter, ScenarioPlan
from explorer.study.plant_part import usable_name
from explorer.study.quantities import Quantity
from explorer.study.schema import AxisSection, ScenarioSection, keys_of, respelt, shown

MOST_POINTS = 100_000
MOST_CELLS = 10_000_000  # points of all axes together; their results are held in memory
MOST_SCENARIOS = 1_000_000
MOST_VARIABLES = 20  # files and arrays end at 32 dimensions
_PLAN_KEYS = set(keys_of(ScenarioSection))


def spelt_axes(collector: Collector, table: dict[str, Any], in_z: bool) -> dict[str, Any]:
    """[sweep] with a misspelt gain, period or scenarios under its right name; faults for these and missing axes."""
    required = ("gain",) if in_z else ("gain", "period")
    plans = [key for key, value in table.items() if isinstance(value, dict) and value.keys() & _PLAN_KEYS]
    spelt = respelt({key: value for key, value in table.items() if key not in plans}, required)
    spelt |= respelt({key: table[key] for key in plans}, ("scenarios",))
    for key in table.keys() - spelt.keys():
        collector.fault(
            ("sweep", key), f"found {shown(key)}", "gain, period and scenarios are spelt so",
            closest(key, (*required, "scenarios")),
        )  # fmt: skip
    for name in required:
        if name not in spelt:
            collector.fault(("sweep", name), "missing", f"an axis for the {name} must be given")
    return spelt


def read_axes(
    collector: Collector, table: dict[str, Any], taken: list[str], fixed_period: bool
) -> tuple[dict[str, Axis], dict[str, Measured]]:
    """Every axis of [sweep] by name in the file's order, and the dimension of each.

    taken : parameter names; fixed_period : the plant is given in z, which leaves no period to sweep.
    """
    axes: dict[str, Axis] = {}
    dimensions = {"gain": Measured(DIMENSIONLESS, bare=True)}
    further = [key for key in table if key not in ("gain", "period", "scenarios")]
    if len(further) > MOST_VARIABLES:
        collector.fault(
            ("sweep", further[MOST_VARIABLES]), f"found {len(further)} design variables besides gain and period",
            f"allowed: at most {MOST_VARIABLES}",
        )  # fmt: skip
    for key, value in table.items():
        path: Path = ("sweep", key)
        if key == "scenarios":
            continue
        if key == "period" and fixed_period:
            collector.fault(
                path, "found a period axis", "a plant given in z is known at one period only", "Remove it."
            )
            continue
        if key in further and not usable_name(collector, key, path):
            continue
        if key in taken:
            collector.fault(
                path, f"the name {key!r} is a plant parameter too", "allowed: one meaning per name"
            )
            continue
        name = key.replace("\u00b5", "\u03bc")
        dimensions[name] = Measured(DIMENSIONLESS, bare=True)
        section = collector.section(AxisSection, value, path)
        found = _axis(collector, name, section, path) if section else None
        if found:
            axes[name], dimensions[name] = found
    return axes, dimensions


def read_scenarios(collector: Collector, table: Any) -> ScenarioPlan | None:
    """The scenario plan, with defaults where nothing is said."""
    path: Path = ("sweep", "scenarios")
    section = collector.section(ScenarioSection, table, path)
    if section is None:
        return None
    if 1.0 not in section.tolerance_scales:
        collector.fault(
            (*path, "tolerance_scales"), f"found {list(section.tolerance_scales)}",
            "the answer is given at scale 1, the tolerances as stated", "Add 1.0.",
        )  # fmt: skip
        return None
    if section.interior > MOST_POINTS or section.seed >= 2**63:
        key = "interior" if section.interior > MOST_POINTS else "seed"
        collector.fault(
            (*path, key),
            f"found {shown(getattr(section, key))}",
            f"allowed: up to {MOST_POINTS if key == 'interior' else '2^63 - 1'}",
        )
        return None
    return ScenarioPlan(section.interior, section.corners, section.seed, section.tolerance_scales)


def check_size(
    collector: Collector, axes: dict[str, Axis], parameters: dict[str, Parameter], plan: ScenarioPlan
) -> None:
    """Faults where the grid or the table of scenarios would not fit into a computer."""
    cells = math.prod(len(axis.values) for axis in axes.values())
    if cells > MOST_CELLS:
        collector.fault(("sweep",), f"the axes hold {cells:.3g} points together", f"allowed: up to {MOST_CELLS:.0e}",
                        "Give an axis fewer points.")  # fmt: skip
    variants = math.prod(len(parameter.variants) or 1 for parameter in parameters.values())
    corners = 2 ** min(10, sum(parameter.varies for parameter in parameters.values())) if plan.corners else 0
    scales = sum(scale > 0 for scale in plan.tolerance_scales)
    scenarios = variants * (1 + scales * (corners + plan.interior))
    if scenarios > MOST_SCENARIOS:
        collector.fault(
            ("sweep", "scenarios"), f"these and {variants} combinations of any_of make {scenarios:.3g} scenarios",
            f"allowed: up to {MOST_SCENARIOS:.0e}", "Lower interior, or name fewer variants or scales.",
        )  # fmt: skip


def _axis(collector: Collector, name: str, section: AxisSection, path: Path) -> tuple[Axis, Measured] | None:
    if section.values is not None:
        spare = [key for key in ("from_", "to", "points", "spacing") if getattr(section, key) is not None]
        if spare:
            collector.fault(
                path,
                f"found values and {spare[0].rstrip('_')}",
                "allowed: values alone, or from, to, points, spacing",
            )
            return None
        quantities = [collector.quantity(value, (*path, "values")) for value in section.values]
        return _checked(collector, name, quantities, None, "values", (*path, "values"))
    if section.from_ is None or section.to is None or section.points is None:
        lacking = [key.rstrip("_") for key in ("from_", "to", "points") if getattr(section, key) is None]
        collector.fault(
            path, f"missing {', '.join(lacking)}", "an axis is from, to, points (and spacing), or values"
        )
        return None
    spacing = section.spacing or "log"
    if spacing not in ("log", "linear"):
        collector.fault((*path, "spacing"), f"found {shown(spacing)}", 'allowed: "log" or "linear"')
        return None
    if not 2 <= section.points <= MOST_POINTS:
        collector.fault(
            (*path, "points"),
            f"found {shown(section.points)}",
            f"allowed: 2 to {MOST_POINTS} (one value: values = [...])",
        )
        return None
    ends = [collector.quantity(section.from_, (*path, "from")), collector.quantity(section.to, (*path, "to"))]
    return _checked(collector, name, ends, section.points, spacing, path)


def _checked(
    collector: Collector,
    name: str,
    quantities: list[Quantity | None],
    points: int | None,
    spacing: str,
    path: Path,
) -> tuple[Axis, Measured] | None:
    known = [quantity for quantity in quantities if quantity is not None]
    if len(known) < len(quantities):
        return None
    first = known[0]
    for other in known[1:]:
        if not alike(first, other):
            collector.fault(
                path, f"found {shown(first.text)} and {shown(other.text)}", "allowed: one unit along an axis"
            )
            return None
    if name == "period" and first.stated and str(first.dimension) != "s":
        collector.fault(path, f"found {shown(first.text)}", 'allowed: a time such as "2 ms"')
        return None
    numbers = [quantity.value for quantity in known]
    if points is not None and numbers[0] >= numbers[1]:
        collector.fault(
            (*path, "to"), f"found {shown(known[1].text)}", f"allowed: more than from = {shown(first.text)}"
        )
        return None
    if min(numbers) <= 0 and (name == "period" or spacing == "log"):
        reason = "a period is above 0" if name == "period" else "a log axis starts above 0"
        collector.fault(path, f"found {shown(known[numbers.index(min(numbers))].text)}", f"allowed: {reason}")
        return None
    if len(set(numbers)) < len(numbers):
        collector.fault(path, "found one value twice", "allowed: different values")
        return None
    units = ("s", "s") if name == "period" else units_of(first)
    axis = Axis(name, _spaced(numbers, points, spacing), *units, spacing)
    return axis, Measured(first.dimension, not first.stated, first.stated)


def _spaced(numbers: list[float], points: int | None, spacing: str) -> np.ndarray[Any, np.dtype[np.float64]]:
    if points is None:
        return np.array(sorted(numbers))
    space = np.geomspace if spacing == "log" else np.linspace
    values = space(numbers[0], numbers[1], points)
    values[0], values[-1] = numbers  # the ends as written, not as rounded
    return np.asarray(values)
