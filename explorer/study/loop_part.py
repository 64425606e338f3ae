"""[loop] of a study: a validated section in, Loop out, faults into the collector; and the units around the loop."""

from __future__ import annotations

import math

from explorer.study.collect import SECOND, Collector
from explorer.study.dimensions import DIMENSIONLESS, Inference, Measured
from explorer.study.expressions import ExpressionError, Node, closest, depends_on
from explorer.study.locate import Path
from explorer.study.model import Delay, Loop, Plant
from explorer.study.quantities import Dimension, QuantityError, read_quantity
from explorer.study.schema import LoopSection, shown

CONVERSIONS = ("backward difference", "bilinear", "matched poles and zeros", "bilinear, exact at")
MOST_BITS = 24  # word length of coefficients: beyond that doubles could not shift them to w exactly
_RULES = '"backward difference", "bilinear", "matched poles and zeros" or "bilinear, exact at 12 Hz"'


def read_loop(
    collector: Collector,
    section: LoopSection,
    names: list[str],
    parameters: list[str],
    time_unit: str,
    in_z: bool,
) -> Loop | None:
    """The loop; `names` may stand in the compensator, `parameters` in the sensor; in_z: the plant is given in z."""
    compensator = None
    if section.compensator is None:
        collector.fault(("loop", "compensator"), "missing", "compensator must be given")
    else:
        compensator = collector.expression(section.compensator, ("loop", "compensator"), [*names, "s", "z"])
    conversion, exact_at = _conversion(collector, section, compensator, time_unit)
    delay = _computing_delay(collector, section, time_unit, in_z)
    sensor = None
    if section.sensor != 1:
        sensor = collector.expression(section.sensor, ("loop", "sensor"), ["s", *parameters])
        if in_z:
            collector.fault(("loop", "sensor"), f"found {shown(section.sensor)}",
                            "a plant given in z includes its sensor already", "Remove it.")  # fmt: skip
    clock = collector.in_unit(section.clock_tolerance, ("loop", "clock_tolerance"), "1", lowest=0.0)
    if clock is not None and (clock >= 0.5 or (clock > 0 and in_z)):
        allowed = (
            "none with a plant given in z, which is known at one period only"
            if in_z
            else "allowed: below 50 %"
        )
        collector.fault(("loop", "clock_tolerance"), f"found {shown(section.clock_tolerance)}", allowed)
    execution = math.nan
    if section.execution_time is not None:
        execution = collector.time(section.execution_time, ("loop", "execution_time")) or math.nan
    if compensator is None or delay is None or clock is None:
        return None
    if not depends_on(compensator, "gain"):
        collector.fault(("loop", "compensator"), f"found {shown(section.compensator)} without gain",
                        "the swept gain must stand in the compensator", "Write gain*(...).")  # fmt: skip
    bits = section.coefficient_bits or 0
    if section.coefficient_bits is not None and not 2 <= bits <= MOST_BITS:
        collector.fault(("loop", "coefficient_bits"), f"found {bits}", f"allowed: 2 to {MOST_BITS}, or left out")
    return Loop(
        compensator,
        str(section.compensator),
        conversion,
        exact_at,
        delay,
        sensor,
        str(section.sensor),
        clock,
        execution,
        bits,
    )


def _conversion(
    collector: Collector, section: LoopSection, compensator: Node | None, time_unit: str
) -> tuple[str, float]:
    """The rule's name and, for the bilinear rule, the frequency [rad/s or rad/sample] where it is exact (0: plain)."""
    path = ("loop", "conversion")
    if compensator is None:
        return "", 0.0
    in_s, in_z = depends_on(compensator, "s"), depends_on(compensator, "z")
    rule = section.conversion
    if in_s and in_z:
        collector.fault(
            ("loop", "compensator"),
            f"found {shown(section.compensator)} with s and z",
            "allowed: s or z, not both",
        )
        return "", 0.0
    if in_s and rule is None:
        collector.fault(("loop", "compensator"), f"found {shown(section.compensator)} in s",
                        "a compensator in s needs a conversion",
                        f"Add conversion = {_RULES}.")  # fmt: skip
        return "", 0.0
    if rule is None:
        return "", 0.0
    if not in_s:
        collector.fault(
            path,
            f"found {shown(rule)} with a compensator in z",
            "allowed: only with a compensator in s",
            "Remove it.",
        )
        return "", 0.0
    if rule in CONVERSIONS[:3]:
        return rule, 0.0
    if rule.startswith(CONVERSIONS[3]):
        unit = f"rad/{time_unit}"
        frequency = collector.in_unit(rule.removeprefix(CONVERSIONS[3]).strip(), path, unit, lowest=0.0)
        if frequency == 0:
            collector.fault(path, f"found {shown(rule)}", "allowed: a frequency above 0")
        return "bilinear", frequency or 0.0
    collector.fault(path, f"found {shown(rule)}", f"allowed: {_RULES}", closest(rule, CONVERSIONS))
    return "", 0.0


def _computing_delay(collector: Collector, section: LoopSection, time_unit: str, in_z: bool) -> Delay | None:
    """A time, or a share of the sample period ("0.5 period", "1 sample"); whole samples for a plant in z."""
    path = ("loop", "computing_delay")
    try:
        quantity = read_quantity(section.computing_delay)
    except QuantityError as error:
        collector.fault(path, f"found {shown(section.computing_delay)}: {error.found}",
                        'allowed: a time such as "0.4 ms", or a share such as "0.5 period"', error.mend)  # fmt: skip
        return None
    if quantity.periods == 1 or quantity.samples == 1:
        share = quantity.value
        if share < 0 or (in_z and share != round(share)):
            allowed = "allowed: whole periods with a plant given in z" if in_z else "allowed: 0 or more"
            collector.fault(path, f"found {shown(section.computing_delay)}", allowed)
            return None
        return Delay(periods=share)
    time = collector.time(section.computing_delay, path, time_unit)
    return None if time is None else Delay(seconds=time)


def check_units(
    collector: Collector,
    plant: Plant,
    loop: Loop,
    parameters: dict[str, Measured],
    variables: dict[str, Measured],
) -> None:
    """The gain around the loop must come out dimensionless as far as units are stated.

    Notes what bare numbers were taken to mean; a contradiction no bare number explains is a fault.
    """
    per_second = Dimension() / SECOND
    known = parameters | {
        "s": Measured(per_second),
        "z": Measured(DIMENSIONLESS),
        "pi": Measured(DIMENSIONLESS),
    }
    around = Measured(DIMENSIONLESS, bare=plant.states is not None)
    for key, rows in (plant.states or {}).items():
        for entry in (entry for row in rows for entry in row):
            _dimension(collector, entry, f"an entry of {key}", ("plant", "states", key), known)
    parts: list[str] = []
    contradictory = False
    for label, node, path, names in (
        ("plant", plant.transfer, ("plant", "transfer"), known),
        ("sensor", loop.sensor, ("loop", "sensor"), known),
        ("compensator", loop.compensator, ("loop", "compensator"), known | variables),
    ):
        if node is None:
            continue
        text = {"plant": plant.text, "sensor": loop.sensor_text}.get(label, loop.text)
        measured = _dimension(collector, node, text, path, names)
        if measured is None:
            contradictory = True
            continue
        around = Measured(around.dimension * measured.dimension, around.bare or measured.open, True)
        parts.append(f"{label} [{measured.dimension}]")
    if contradictory or around.dimension.is_dimensionless:
        return
    if around.bare:
        collector.assumptions.append(
            f"the units stated around the loop leave [{around.dimension}] ({', '.join(parts)}); "
            "bare numbers are taken to carry the rest"
        )
        return
    collector.fault(
        ("loop", "compensator"), f"the gain around the loop is in [{around.dimension}]: {', '.join(parts)}",
        "allowed: units that cancel around the loop", "Check the unit of the gain and of the plant's parameters.",
    )  # fmt: skip


def _dimension(
    collector: Collector, node: Node, text: str, path: Path, names: dict[str, Measured]
) -> Measured | None:
    """The dimension of an expression, with what was assumed noted; None with a fault where units contradict."""
    inference = Inference(names)
    try:
        measured = inference.of(node)
    except ExpressionError as error:
        collector.expression_fault(text, path, error)
        return None
    place = ".".join(str(part) for part in path)
    collector.assumptions += [f"{place}: {note}" for note in inference.assumptions]
    return measured
