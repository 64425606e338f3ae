"""[plant] of a study: a validated section in, Plant and Parameters out, faults into the collector."""

from __future__ import annotations

import re
from typing import Any

from explorer.study.collect import SECOND, Collector, units_of
from explorer.study.dimensions import Measured
from explorer.study.expressions import FUNCTIONS, Name, Node, Number, closest, depends_on
from explorer.study.locate import Path
from explorer.study.model import RESERVED, Parameter, Plant
from explorer.study.quantities import Dimension, Quantity, QuantityError, read_quantity
from explorer.study.schema import ParameterSection, PlantSection, StatesSection, shown

_NAME = re.compile(r"[A-Za-z_μ][A-Za-z_0-9]{0,39}")


def usable_name(collector: Collector, name: str, path: Path) -> bool:
    """Whether a parameter or design variable may be called so; a fault if not."""
    if name in RESERVED or name in FUNCTIONS:
        taken = ", ".join((*RESERVED, *FUNCTIONS))
        collector.fault(
            path, f"the name {name!r} is taken", f"names of its own besides {taken}", "Choose another name."
        )
        return False
    if not _NAME.fullmatch(name.replace("\u00b5", "\u03bc")):
        collector.fault(
            path, f"found the name {shown(name)}", "letters, digits and _ only, at most 40, no digit first"
        )
        return False
    return True


def read_parameters(
    collector: Collector, table: dict[str, Any]
) -> tuple[dict[str, Parameter], dict[str, Measured]]:
    """All parameters by name, and their dimensions; faulty ones keep a place so that expressions still read."""
    parameters: dict[str, Parameter] = {}
    dimensions: dict[str, Measured] = {}
    for key, value in table.items():
        path: Path = ("plant", "parameters", key)
        if not usable_name(collector, key, path):
            continue
        name = key.replace("\u00b5", "\u03bc")
        section = collector.section(
            ParameterSection, value if isinstance(value, dict) else {"nominal": value}, path
        )
        found = _parameter(collector, name, section, path) if section else None
        parameters[name], dimensions[name] = found or (
            Parameter(name, 1.0, 1.0, 1.0, ""),
            Measured(Dimension(), True),
        )
    return parameters, dimensions


def _parameter(
    collector: Collector, name: str, section: ParameterSection, path: Path
) -> tuple[Parameter, Measured] | None:
    given = {
        key for key in ("nominal", "tolerance", "from_", "to", "any_of") if getattr(section, key) is not None
    }
    if given in ({"nominal"}, {"nominal", "tolerance"}):
        return _nominal(collector, name, section, path)
    if given in ({"from_", "to"}, {"from_", "to", "nominal"}):
        return _range(collector, name, section, path)
    if given in ({"any_of"}, {"any_of", "nominal"}):
        return _variants(collector, name, section, path)
    keys = ", ".join(sorted(key.rstrip("_") for key in given)) or "nothing"
    collector.fault(
        path,
        f"found {keys}",
        "allowed: nominal; nominal and tolerance; from and to (and nominal); any_of (and nominal)",
    )
    return None


def _nominal(
    collector: Collector, name: str, section: ParameterSection, path: Path
) -> tuple[Parameter, Measured] | None:
    nominal = collector.quantity(section.nominal or 0, (*path, "nominal"))
    if nominal is None:
        return None
    half = 0.0
    if section.tolerance is not None:
        tolerance = collector.quantity(section.tolerance, (*path, "tolerance"))
        if tolerance is None:
            return None
        if tolerance.unit == "%":
            half = abs(nominal.value) * tolerance.value
        elif tolerance.stated == nominal.stated and tolerance.dimension == nominal.dimension:
            half = tolerance.value
        else:
            unit = f"[{nominal.dimension}]" if nominal.stated else "a bare number"
            collector.fault(
                (*path, "tolerance"), f"found {shown(section.tolerance)}",
                f"allowed: a share such as \"5 %\", or an amount in the unit of the nominal value, {unit}",
            )  # fmt: skip
            return None
        if half < 0:
            collector.fault((*path, "tolerance"), f"found {shown(section.tolerance)}", "allowed: 0 or more")
            return None
    parameter = Parameter(name, nominal.value, nominal.value - half, nominal.value + half, *units_of(nominal))
    return parameter, Measured(nominal.dimension, not nominal.stated, nominal.stated)


def _alike(collector: Collector, quantities: list[Quantity | None], path: Path) -> list[Quantity] | None:
    """The quantities when all were read and share one dimension (or are all bare)."""
    known = [quantity for quantity in quantities if quantity is not None]
    if len(known) < len(quantities):
        return None
    first = known[0]
    for other in known[1:]:
        if other.stated != first.stated or other.dimension != first.dimension:
            collector.fault(
                path, f"found {shown(first.text)} and {shown(other.text)}", "allowed: one unit for all values"
            )
            return None
    return known


def _range(
    collector: Collector, name: str, section: ParameterSection, path: Path
) -> tuple[Parameter, Measured] | None:
    ends = [
        collector.quantity(section.from_ or 0, (*path, "from")),
        collector.quantity(section.to or 0, (*path, "to")),
    ]
    if section.nominal is not None:
        ends.append(collector.quantity(section.nominal, (*path, "nominal")))
    known = _alike(collector, ends, path)
    if known is None:
        return None
    low, high = known[0].value, known[1].value
    nominal = known[2].value if len(known) > 2 else 0.5 * (low + high)
    if low >= high:
        collector.fault(
            (*path, "to"), f"found {shown(section.to)}", f"allowed: more than from = {shown(section.from_)}"
        )
        return None
    if not low <= nominal <= high:
        collector.fault(
            (*path, "nominal"), f"found {shown(section.nominal)}",
            f"allowed: between {shown(section.from_)} and {shown(section.to)}",
        )  # fmt: skip
        return None
    return Parameter(name, nominal, low, high, *units_of(known[0])), Measured(
        known[0].dimension, not known[0].stated, known[0].stated
    )


def _variants(
    collector: Collector, name: str, section: ParameterSection, path: Path
) -> tuple[Parameter, Measured] | None:
    values = [collector.quantity(value, (*path, "any_of")) for value in section.any_of or ()]
    if section.nominal is not None:
        values.append(collector.quantity(section.nominal, (*path, "nominal")))
    known = _alike(collector, values, path)
    if known is None:
        return None
    numbers = [quantity.value for quantity in known]
    nominal = numbers.pop() if section.nominal is not None else numbers[0]
    if nominal not in numbers or len(set(numbers)) < len(numbers):
        collector.fault(
            (*path, "any_of"), f"found {shown(list(section.any_of or ()))} with nominal {shown(section.nominal)}",
            "allowed: different values, the nominal one among them",
        )  # fmt: skip
        return None
    ordered = (nominal, *(number for number in numbers if number != nominal))
    parameter = Parameter(name, nominal, nominal, nominal, *units_of(known[0]), ordered)
    return parameter, Measured(known[0].dimension, not known[0].stated, known[0].stated)


def read_plant(
    collector: Collector,
    section: PlantSection,
    dimensions: dict[str, Measured],
    sampled_at: float,
    time_unit: str,
) -> Plant | None:
    """The plant by transfer in s or z, or by matrices; sampled_at 0 for s, time_unit "s" or "sample"."""
    if (section.transfer is None) == (section.states is None):
        collector.fault(
            ("plant",),
            "found " + ("both" if section.transfer else "neither"),
            "allowed: transfer or states, one of them",
        )
        return None
    dead_time = _dead_time(collector, section, dimensions, sampled_at, time_unit)
    if section.states is not None:
        if section.sampled_at is not None:
            collector.fault(
                ("plant", "sampled_at"),
                "found with states",
                "allowed: only with a transfer in z",
                "Remove it.",
            )
        states = _states(collector, section.states, dimensions)
        return Plant("s", None, states, dead_time, None, "state matrices") if states else None
    node = collector.expression(section.transfer or 0, ("plant", "transfer"), ["s", "z", *dimensions])
    if node is None:
        return None
    in_z = depends_on(node, "z")
    if in_z and depends_on(node, "s"):
        collector.fault(
            ("plant", "transfer"),
            f"found {shown(section.transfer)} with s and z",
            "allowed: s or z, not both",
        )
        return None
    if in_z and section.sampled_at is None:
        collector.fault(
            ("plant", "transfer"), f"found {shown(section.transfer)} in z",
            "a transfer in z needs the period it was sampled at", 'Add sampled_at = "10 ms", or "1 sample".',
        )  # fmt: skip
        return None
    if section.sampled_at is not None and not in_z:
        collector.fault(("plant", "sampled_at"), f"found {shown(section.sampled_at)} with a transfer in s",
                        "allowed: only with a transfer in z", "Remove it.")  # fmt: skip
        return None
    return Plant("z" if in_z else "s", node, None, dead_time, None, str(section.transfer))


def _dead_time(
    collector: Collector,
    section: PlantSection,
    dimensions: dict[str, Measured],
    sampled_at: float,
    time_unit: str,
) -> Node | None:
    """A parameter's name, a time, or whole samples for a plant in z; None for none."""
    value, path = section.dead_time, ("plant", "dead_time")
    if isinstance(value, str) and _NAME.fullmatch(value.strip()):
        name = value.strip()
        if name not in dimensions:
            collector.fault(path, f"found {shown(value)}", "allowed: a time, or the name of a parameter",
                            closest(name, list(dimensions)))  # fmt: skip
            return None
        measured = dimensions[name]
        if not measured.bare and measured.dimension != SECOND and time_unit == "s":
            collector.fault(path, f"{name} is in [{measured.dimension}]", "allowed: a parameter in [s]")
        return Name(name, 1)
    samples = _samples(value) if sampled_at else None
    time = collector.time(value, path, time_unit) if samples is None else samples * sampled_at
    if time is not None and sampled_at and abs(time / sampled_at - round(time / sampled_at)) > 1e-9:
        collector.fault(path, f"found {shown(value)}", "allowed: whole samples with a plant given in z")
    return Number(time, 1) if time else None


def _samples(value: str | int | float) -> float | None:
    """The number in "2 samples"; None for anything else."""
    try:
        quantity = read_quantity(value)
    except QuantityError:
        return None
    return quantity.value if quantity.samples == 1 and quantity.value >= 0 else None


def _states(
    collector: Collector, table: dict[str, Any], dimensions: dict[str, Measured]
) -> dict[str, tuple[tuple[Node, ...], ...]] | None:
    path: Path = ("plant", "states")
    section = collector.section(StatesSection, table, path)
    if section is None:
        return None
    order = len(section.A)
    wanted = {"A": (order, order), "B": (order, 1), "C": (1, order), "D": (1, 1)}
    result: dict[str, tuple[tuple[Node, ...], ...]] = {}
    for key, (rows, columns) in wanted.items():
        entries = getattr(section, key)
        if entries is None:
            continue
        if key == "C" and columns > 1 and len(entries) == columns and len(entries[0]) == 1:
            entries = (tuple(row[0] for row in entries),)  # C written as a plain list
        if (len(entries), len(entries[0])) != (rows, columns):
            collector.fault((*path, key), f"found {len(entries)} × {len(entries[0])} entries",
                            f"allowed: {rows} × {columns} (one input, one output, A of order {order})")  # fmt: skip
            continue
        nodes = [[collector.expression(entry, (*path, key), dimensions) for entry in row] for row in entries]
        if all(node is not None for row in nodes for node in row):
            result[key] = tuple(tuple(node for node in row if node is not None) for row in nodes)
    complete = all(key in result for key in ("A", "B", "C"))
    return result if complete else None


def parameter_bounds(
    collector: Collector, parameters: dict[str, Parameter], scale: float, times: set[str]
) -> None:
    """Faults where a scaled tolerance changes a parameter's sign, or makes a time negative."""
    for parameter in parameters.values():
        low, high = parameter.reach(scale)
        within = parameter.low * parameter.high > 0
        negative_time = parameter.name in times and min(low, *parameter.variants, parameter.low) < 0
        if negative_time or (within and low * high <= 0):
            what = "a negative time" if negative_time else "a change of sign"
            collector.fault(
                ("plant", "parameters", parameter.name),
                f"reaches {low:g} {parameter.unit} at tolerance scale {scale:g}, {what}",
                "allowed: one sign over the whole tolerance box",
                "Narrow the tolerance or lower the largest tolerance scale.",
            )
