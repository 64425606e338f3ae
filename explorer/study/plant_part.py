"""[plant] of a study: a validated section in, Plant and Parameters out, faults into the collector."""

from __future__ import annotations

import re
from typing import Any

from explorer.study.collect import SECOND, Collector, alike, units_of
from explorer.study.dimensions import DIMENSIONLESS, Measured
from explorer.study.expressions import FUNCTIONS, Name, Node, Number, closest, depends_on
from explorer.study.locate import Path
from explorer.study.model import RESERVED, Parameter, Plant
from explorer.study.quantities import Dimension, Quantity, QuantityError, read_quantity
from explorer.study.schema import ParameterSection, PlantSection, StatesSection, shown

MOST_PARAMETERS = 100
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
    if len(table) > MOST_PARAMETERS:
        collector.fault(("plant", "parameters"), f"found {len(table)}", f"allowed: at most {MOST_PARAMETERS}")
        collector.names_complete = False
        return {}, {}
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
    assert section.nominal is not None
    nominal = collector.quantity(section.nominal, (*path, "nominal"))
    half = _half_width(collector, section.tolerance, nominal, (*path, "tolerance"))
    if nominal is None or half is None:
        return None
    parameter = Parameter(name, nominal.value, nominal.value - half, nominal.value + half, *units_of(nominal))
    return parameter, Measured(nominal.dimension, not nominal.stated, nominal.stated)


def _half_width(
    collector: Collector, value: str | int | float | None, nominal: Quantity | None, path: Path
) -> float | None:
    """What a tolerance comes to in the unit of the nominal value; None with a fault."""
    tolerance = None if value is None else collector.quantity(value, path)
    if value is None or tolerance is None or nominal is None:
        return 0.0 if value is None else None
    half = tolerance.value
    if tolerance.unit == "%":
        half *= abs(nominal.value)
        if nominal.value == 0 and tolerance.value > 0:
            collector.fault(path, f"found {shown(value)} of a nominal 0", "any share of 0 is 0", "Give an amount.")
            return None
    elif not alike(tolerance, nominal) or tolerance.decibel:
        unit = f"in the unit of the nominal value, {nominal.unit}" if nominal.stated else "without a unit"
        amount = "" if nominal.decibel else f", or an amount {unit}"
        collector.fault(path, f"found {shown(value)}", f'allowed: a share such as "5 %"{amount}')
        return None
    if half < 0:
        collector.fault(path, f"found {shown(value)}", "allowed: 0 or more")
        return None
    return half


def _alike(collector: Collector, quantities: list[Quantity | None], path: Path) -> list[Quantity] | None:
    """The quantities when all were read and are of one kind (or all bare)."""
    known = [quantity for quantity in quantities if quantity is not None]
    if len(known) < len(quantities):
        return None
    for other in known[1:]:
        if not alike(known[0], other):
            collector.fault(
                path, f"found {shown(known[0].text)} and {shown(other.text)}", "allowed: one unit for all values"
            )
            return None
    return known


def _range(
    collector: Collector, name: str, section: ParameterSection, path: Path
) -> tuple[Parameter, Measured] | None:
    assert section.from_ is not None and section.to is not None
    ends = [collector.quantity(section.from_, (*path, "from")), collector.quantity(section.to, (*path, "to"))]
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
    in_z: bool,
    sampled_at: float,
    time_unit: str,
) -> Plant | None:
    """The plant by transfer in s or z, or by matrices; sampled_at 0 where not known, time_unit "s" or "sample"."""
    if section.transfer is None and section.states is None:
        if not collector.has_fault(("plant", "states")):
            collector.fault(("plant", "transfer"), "missing", "a plant is given by transfer or by states")
        return None
    if section.transfer is not None and section.states is not None:
        collector.fault(("plant", "states"), "found beside transfer", "allowed: transfer or states, one of them")
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
    assert section.transfer is not None
    node = collector.expression(section.transfer, ("plant", "transfer"), ["s", "z", *dimensions])
    if node is None:
        return None
    if depends_on(node, "z") and depends_on(node, "s"):
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
    allowed = 'allowed: a time such as "1.2 ms", or the name of a parameter'
    name = value.strip().replace("\u00b5", "\u03bc") if isinstance(value, str) else ""
    if name in dimensions:
        measured = dimensions[name]
        wanted = SECOND if time_unit == "s" else DIMENSIONLESS
        if not measured.bare and measured.dimension != wanted:
            unit = "[s]" if time_unit == "s" else "samples"
            collector.fault(path, f"{name} is in [{measured.dimension}]", f"allowed: a parameter in {unit}")
        return Name(name, 1)
    if isinstance(value, str) and name[:1] not in tuple("+-.0123456789"):
        if collector.names_complete:
            collector.fault(path, f"found {shown(value)}", allowed, closest(name, dimensions))
        return None
    samples = _samples(value) if sampled_at else None
    time = collector.time(value, path, time_unit) if samples is None else samples * sampled_at
    if time is not None and sampled_at and not whole(time / sampled_at):
        collector.fault(path, f"found {shown(value)}", "allowed: whole samples with a plant given in z")
    return Number(time, 1) if time else None


def whole(samples: float) -> bool:
    """Whether a delay is a whole number of samples but for rounding."""
    return abs(samples) < 1e9 and abs(samples - round(samples)) <= 1e-9 * max(1.0, abs(samples))


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
            if key == "A":
                return None
            continue
        nodes = [[collector.expression(entry, (*path, key), dimensions) for entry in row] for row in entries]
        if all(node is not None for row in nodes for node in row):
            result[key] = tuple(tuple(node for node in row if node is not None) for row in nodes)
    complete = all(key in result for key in ("A", "B", "C"))
    return result if complete else None


def parameter_bounds(
    collector: Collector, parameters: dict[str, Parameter], scale: float, times: set[str], sampled_at: float
) -> None:
    """Faults where a scaled tolerance changes a parameter's sign, or makes a time negative or no whole samples."""
    for parameter in parameters.values():
        low, high = parameter.reach(scale)
        if sampled_at and parameter.name in times:
            samples = [value / sampled_at for value in (*parameter.variants, parameter.nominal)]
            if parameter.varies or not all(whole(value) for value in samples):
                collector.fault(
                    ("plant", "parameters", parameter.name), "found a dead time between samples",
                    "allowed: whole samples with a plant given in z", "Give it as exact, or by any_of.",
                )  # fmt: skip
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
