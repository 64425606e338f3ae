"""[loop] of a study: a validated section in, Loop out, faults into the collector; and the units around the loop."""

from __future__ import annotations

import math

from explorer.study.collect import SECOND, Collector
from explorer.study.dimensions import DIMENSIONLESS, Inference, Measured
from explorer.study.expressions import ExpressionError, Node, closest, depends_on
from explorer.study.model import Delay, Loop, Plant
from explorer.study.quantities import Dimension, QuantityError, read_quantity
from explorer.study.schema import LoopSection, shown

CONVERSIONS = ("backward difference", "bilinear", "matched poles and zeros", "bilinear, exact at")


def read_loop(
    collector: Collector,
    section: LoopSection,
    names: list[str],
    parameters: list[str],
    time_unit: str,
    in_z: bool,
) -> Loop | None:
    """The loop; `names` may stand in the compensator, `parameters` in the sensor; in_z: the plant is given in z."""
    compensator = collector.expression(section.compensator, ("loop", "compensator"), [*names, "s", "z"])
    conversion, exact_at = _conversion(collector, section, compensator)
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
    )


def _conversion(collector: Collector, section: LoopSection, compensator: Node | None) -> tuple[str, float]:
    """The rule's name and, for the bilinear rule, the frequency [rad/s] where it is exact (0: plain)."""
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
                        f"Add conversion = one of {', '.join(CONVERSIONS)} 12 Hz.")  # fmt: skip
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
        frequency = collector.in_unit(rule.removeprefix(CONVERSIONS[3]).strip(), path, "rad/s", lowest=0.0)
        if frequency == 0:
            collector.fault(path, f"found {shown(rule)}", "allowed: a frequency above 0, such as 12 Hz")
        return "bilinear", frequency or 0.0
    collector.fault(
        path, f"found {shown(rule)}", f"allowed: {', '.join(CONVERSIONS)} 12 Hz", closest(rule, CONVERSIONS)
    )
    return "", 0.0


def _computing_delay(collector: Collector, section: LoopSection, time_unit: str, in_z: bool) -> Delay | None:
    """A time, or a share of the sample period ("0.5 period", "1 sample"); whole samples for a plant in z."""
    path = ("loop", "computing_delay")
    try:
        quantity = read_quantity(section.computing_delay)
        share = quantity.value if quantity.periods == 1 or quantity.samples == 1 else None
    except QuantityError:
        share = None
    if share is not None:
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
    parts: list[str] = []
    for label, node, path, names in (
        ("plant", plant.transfer, ("plant", "transfer"), known),
        ("sensor", loop.sensor, ("loop", "sensor"), known),
        ("compensator", loop.compensator, ("loop", "compensator"), known | variables),
    ):
        if node is None:
            continue
        inference = Inference(names)
        try:
            measured = inference.of(node)
        except ExpressionError as error:
            collector.expression_fault(
                {"plant": plant.text, "sensor": loop.sensor_text}.get(label, loop.text), path, error
            )
            return
        collector.assumptions += [f"{'.'.join(path)}: {note}" for note in inference.assumptions]
        around = Measured(around.dimension * measured.dimension, around.bare or measured.open, True)
        parts.append(f"{label} [{measured.dimension}]")
    if around.dimension.is_dimensionless:
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
