"""Reading: a study file in, a Study for loop and sweep out, or every fault of the file together.

Nothing in the file is executed. A file that is no TOML has one fault; otherwise each part is read as far as it
goes and adds what it finds, then the parts are checked against each other.
"""

from __future__ import annotations

import hashlib
import re
import tomllib
from collections.abc import Sequence
from pathlib import Path as FilePath
from typing import Any

import numpy as np

from explorer.errors import Fault, StudyError
from explorer.study.collect import SECOND, Collector
from explorer.study.dimensions import DIMENSIONLESS, Measured
from explorer.study.expressions import ExpressionError, Name, depends_on, names_in, read_expression
from explorer.study.locate import Path
from explorer.study.loop_part import check_units, read_loop
from explorer.study.model import Axis, Loop, Measure, Parameter, Plant, Study
from explorer.study.plant_part import parameter_bounds, read_parameters, read_plant, whole
from explorer.study.quantities import QuantityError, read_quantity
from explorer.study.requirement_part import read_requirements
from explorer.study.schema import LoopSection, PlantSection, StudySection, keys_of, respelt, shown
from explorer.study.sweep_part import check_size, read_axes, read_scenarios, spelt_axes
from explorer.study.trial import try_values

LARGEST_FILE = 64 * 1024  # bytes; a study is a page of text
DEEPEST = 8  # tables and lists inside each other; state matrices take five
_DOTTED = re.compile(r"""(?<![\w.'"-])(?:[\w'"-]++\s*+\.\s*+){40}""")  # a.a.a..., which takes the parser seconds


def read_study_file(path: str | FilePath, catalogue: Sequence[Measure]) -> Study:
    """Read a study file. Raises StudyError with every fault; see read_study_text."""
    file = FilePath(path)
    try:
        with file.open("rb") as stream:
            raw = stream.read(LARGEST_FILE + 1)
        text = raw.decode("utf-8")
    except UnicodeDecodeError as error:
        fault = Fault(
            str(path), None, "", f"byte {error.start} is not UTF-8", "allowed: a TOML text", "Save it as UTF-8."
        )
        raise StudyError([fault]) from None
    except (OSError, ValueError) as error:  # ValueError: a path with a zero byte
        reason = getattr(error, "strerror", None) or str(error)
        raise StudyError([Fault(str(path), None, "", "cannot be read", reason)]) from None
    return read_study_text(text, str(path), catalogue)


def read_study_text(text: str, file: str, catalogue: Sequence[Measure]) -> Study:
    """Read a study from its text.

    Parameters
    ----------
    text : TOML; file : name for messages; catalogue : the measures a requirement may name.

    Raises
    ------
    StudyError : carrying all faults, each with line, key, what was found, what is allowed, how to mend it.
    """
    collector = Collector(text.removeprefix("\ufeff"), file)  # a mark that some editors put first
    data = _parsed(collector)
    if data is None:
        raise StudyError(collector.faults)
    study = _study(collector, data, catalogue)
    if collector.faults or study is None:
        raise StudyError(collector.faults)
    return study


def fault_in(study: Study, path: Path, found: str, error: ExpressionError) -> StudyError:
    """The error of an expression that only showed when it was evaluated over the tolerance box or the axes."""
    collector = Collector(study.text, study.file)
    collector.expression_fault(found, path, error)
    return StudyError(collector.faults)


def _parsed(collector: Collector) -> dict[str, Any] | None:
    text, file = collector.text, collector.file
    nested = Fault(file, None, "", "nested too deeply", "allowed: the tables of a study")
    if len(text.encode(errors="replace")) > LARGEST_FILE:
        collector.faults.append(
            Fault(file, None, "", "the file is too large", f"allowed: {LARGEST_FILE // 1024} KiB")
        )
        return None
    try:
        data = None if _DOTTED.search(text) else tomllib.loads(text)
        if data is not None and not _deeper(data, DEEPEST):
            return data
        collector.faults.append(nested)
    except RecursionError:
        collector.faults.append(nested)
    except tomllib.TOMLDecodeError as error:
        message, _, place = str(error).partition(" (at ")
        numbers = [int(word.strip(",)")) for word in place.split() if word.strip(",)").isdigit()]
        line, where = (numbers[0], f" at column {numbers[1]}") if len(numbers) > 1 else (text.count("\n") + 1, "")
        collector.faults.append(
            Fault(file, line, "", f"not TOML{where}: {message}", "a text stands in quotes, see toml.io")
        )
    except ValueError:  # from int(), which refuses thousands of digits
        digits = Fault(file, None, "", "holds a number of thousands of digits", "a number is written like 1.5e30")
        collector.faults.append(digits)
    return None


def _deeper(data: Any, levels: int) -> bool:
    """Whether tables and lists are nested deeper than that."""
    if not isinstance(data, dict | list):
        return False
    parts = data.values() if isinstance(data, dict) else data
    return levels == 0 or any(_deeper(part, levels - 1) for part in parts)


def _study(collector: Collector, data: dict[str, Any], catalogue: Sequence[Measure]) -> Study | None:
    top = collector.section(StudySection, data, ())
    spelt = respelt(data, keys_of(StudySection))
    plant_table, loop_table, sweep_table = (_table(spelt.get(key)) for key in ("plant", "loop", "sweep"))
    plant_section = collector.section(PlantSection, plant_table, ("plant",)) if plant_table is not None else None
    raw = plant_section.parameters if plant_section else {}
    collector.names_complete = sweep_table is not None and not collector.has_fault(("plant",), ("plant", "parameters"))
    parameters, dimensions = read_parameters(collector, raw)
    in_z = _in_z(plant_section)
    sampled_at = _sampled_at(collector, plant_section) if in_z else None
    period, time_unit = sampled_at or (0.0, "s")
    plant = read_plant(collector, plant_section, dimensions, in_z, period, time_unit) if plant_section else None
    axes: dict[str, Axis] = {}
    variables: dict[str, Measured] = {}
    scenarios = None
    if sweep_table is not None:
        sweep_table = spelt_axes(collector, sweep_table, in_z)
        axes, variables = read_axes(collector, sweep_table, list(parameters), sampled_at is not None)
        scenarios = read_scenarios(collector, sweep_table.get("scenarios", {}))
    if sampled_at:
        axes["period"] = Axis("period", np.array([period]), time_unit, time_unit, "values")
    variables["period"] = Measured(SECOND, stated=True) if time_unit == "s" else Measured(DIMENSIONLESS, bare=True)
    loop = None
    if loop_table is not None and (section := collector.section(LoopSection, loop_table, ("loop",))):
        names = [*dimensions, *variables]
        loop = read_loop(collector, section, names, list(dimensions), time_unit, sampled_at is not None)
    requirements = read_requirements(collector, spelt.get("requirements"), catalogue, time_unit, list(loop_table or {}))
    if plant and loop:
        check_units(collector, plant, loop, dimensions, variables)
        _check_together(collector, plant, loop, axes)
    if scenarios and plant:
        known_time = isinstance(plant.dead_time, Name) and not collector.has_fault(("plant", "dead_time"))
        times = {name.name for name in names_in(plant.dead_time)} if plant.dead_time and known_time else set()
        parameter_bounds(collector, parameters, max(scenarios.tolerance_scales), times, period)
        check_size(collector, axes, parameters, scenarios)
    if scenarios and loop and loop.clock_tolerance * max(scenarios.tolerance_scales) >= 1:
        collector.fault(("sweep", "scenarios"), f"the clock's tolerance times {max(scenarios.tolerance_scales):g}",
                        "allowed: tolerance scales at which every sample period stays above 0")  # fmt: skip
    if plant or loop:
        try_values(collector, plant, loop, parameters, axes, scenarios.tolerance_scales if scenarios else (1.0,))
    if not (top and plant and loop and scenarios and "gain" in axes and "period" in axes):
        return None
    _note_unused(collector, plant, loop, parameters)
    design = tuple(axis for name, axis in axes.items() if name not in ("gain", "period"))
    return Study(
        title=top.title, plant=plant, parameters=tuple(parameters.values()), loop=loop, gain=axes["gain"],
        period=axes["period"], design=design, scenarios=scenarios, requirements=tuple(requirements),
        text=collector.text, sha256=hashlib.sha256(collector.text.encode()).hexdigest(), file=collector.file,
        assumptions=tuple(collector.assumptions),
    )  # fmt: skip


def _table(value: Any) -> dict[str, Any] | None:
    return value if isinstance(value, dict) else None


def _in_z(section: PlantSection | None) -> bool:
    """Whether the plant is meant in z: by its transfer or, where that has neither s nor z, by sampled_at."""
    if section is None or section.transfer is None:
        return False
    sampled = section.sampled_at is not None
    try:
        node = read_expression(section.transfer)
    except ExpressionError:
        return sampled
    return depends_on(node, "z") or (sampled and not depends_on(node, "s"))


def _sampled_at(collector: Collector, section: PlantSection | None) -> tuple[float, str] | None:
    """Period and its unit for a plant in z: seconds, or ("1 sample") one normalised sample."""
    if section is None or section.sampled_at is None:
        return None
    path: Path = ("plant", "sampled_at")
    try:
        normalised = read_quantity(section.sampled_at)
    except QuantityError:
        normalised = None
    if normalised is not None and normalised.samples == 1:
        if normalised.value != 1:
            collector.fault(path, f"found {shown(section.sampled_at)}", 'allowed: a time, or "1 sample"')
        return 1.0, "sample"
    time = collector.time(section.sampled_at, path)
    if time == 0:
        collector.fault(path, f"found {shown(section.sampled_at)}", "allowed: a period above 0")
    return (time, "s") if time else None


def _check_together(collector: Collector, plant: Plant, loop: Loop, axes: dict[str, Axis]) -> None:
    """What only shows when two parts meet: unused axes, a prewarping frequency or delay the period cannot have."""
    for name in axes:
        if name not in ("gain", "period") and not depends_on(loop.compensator, name):
            collector.fault(("sweep", name), f"{name!r} is swept but does not stand in the compensator",
                            "allowed: axes that change the loop", "Use it there or remove it.")  # fmt: skip
    if "period" not in axes:
        return
    period = axes["period"].values
    if loop.exact_at * period[-1] >= np.pi:
        unit = f"cycles per {axes['period'].unit}"
        collector.fault(
            ("loop", "conversion"), f"exact at {loop.exact_at / (2 * np.pi):g} {unit}",
            f"allowed: below half the sampling rate at the longest period, {0.5 / period[-1]:g} {unit}",
        )  # fmt: skip
    if plant.variable == "z" and not whole(loop.computing_delay.seconds / period[0]):
        collector.fault(("loop", "computing_delay"), f"found {loop.computing_delay.seconds:g} s",
                        "allowed: a whole number of periods with a plant given in z")  # fmt: skip


def _note_unused(collector: Collector, plant: Plant, loop: Loop, parameters: dict[str, Parameter]) -> None:
    """A parameter that stands nowhere is allowed, but its writer should know."""
    states = [node for rows in (plant.states or {}).values() for row in rows for node in row]
    nodes = [plant.transfer, plant.dead_time, loop.compensator, loop.sensor, *states]
    used = {name.name for node in nodes if node is not None for name in names_in(node)}
    collector.assumptions += [f"{name} stands in no expression, so it changes nothing" for name in parameters
                              if name not in used]  # fmt: skip
