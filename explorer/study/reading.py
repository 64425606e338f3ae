"""Reading: a study file in, a Study for loop and sweep out, or every fault of the file together.

Nothing in the file is executed. A file that is no TOML has one fault; otherwise each part is read as far as it
goes and adds what it finds, then the parts are checked against each other.
"""

from __future__ import annotations

import hashlib
import tomllib
from collections.abc import Sequence
from pathlib import Path as FilePath
from typing import Any

import numpy as np

from explorer.errors import Fault, StudyError
from explorer.study.collect import SECOND, Collector
from explorer.study.dimensions import Measured
from explorer.study.expressions import ExpressionError, Name, depends_on
from explorer.study.locate import Path
from explorer.study.loop_part import check_units, read_loop
from explorer.study.model import Axis, Loop, Measure, Plant, Study
from explorer.study.plant_part import parameter_bounds, read_parameters, read_plant
from explorer.study.quantities import QuantityError, read_quantity
from explorer.study.requirement_part import read_requirements
from explorer.study.schema import LoopSection, PlantSection, StudySection, shown
from explorer.study.sweep_part import read_axes, read_scenarios

LARGEST_FILE = 64 * 1024  # bytes; a study is a page of text


def read_study_file(path: str | FilePath, catalogue: Sequence[Measure]) -> Study:
    """Read a study file. Raises StudyError with every fault; see read_study_text."""
    file = FilePath(path)
    try:
        with file.open("rb") as stream:
            raw = stream.read(LARGEST_FILE + 1)
        text = raw.decode("utf-8")
    except OSError as error:
        raise StudyError(
            [Fault(str(path), None, "", "cannot be read", error.strerror or str(error))]
        ) from None
    except UnicodeDecodeError as error:
        raise StudyError(
            [Fault(str(path), None, "", f"byte {error.start} is not UTF-8", "allowed: a TOML text in UTF-8")]
        ) from None
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
    collector = Collector(text, file)
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
    if len(text.encode()) > LARGEST_FILE:
        collector.faults.append(
            Fault(file, None, "", "the file is too large", f"allowed: {LARGEST_FILE // 1024} KiB")
        )
        return None
    try:
        return tomllib.loads(text)
    except RecursionError:
        collector.faults.append(Fault(file, None, "", "nested too deeply", "allowed: the tables of a study"))
    except (tomllib.TOMLDecodeError, ValueError) as error:
        message, _, place = str(error).partition(" (at ")
        numbers = [int(word.strip(",)")) for word in place.split() if word.strip(",)").isdigit()]
        where = f" at column {numbers[1]}" if len(numbers) > 1 else ""
        collector.faults.append(
            Fault(
                file,
                numbers[0] if numbers else None,
                "",
                f"not TOML{where}: {message}",
                "see toml.io for the format",
            )
        )
    return None


def _study(collector: Collector, data: dict[str, Any], catalogue: Sequence[Measure]) -> Study | None:
    top = collector.section(StudySection, data, ())
    tables: dict[str, Any] = {
        key: data.get(key) if isinstance(data.get(key), dict) else {} for key in ("plant", "loop", "sweep")
    }
    plant_table, loop_table, sweep_table = tables["plant"] or {}, tables["loop"] or {}, tables["sweep"] or {}
    plant_section = collector.section(PlantSection, plant_table, ("plant",)) if "plant" in data else None
    raw = plant_table.get("parameters")
    parameters, dimensions = read_parameters(collector, raw if isinstance(raw, dict) else {})
    sampled_at = _sampled_at(collector, plant_section)
    time_unit = sampled_at[1] if sampled_at else "s"
    in_z = plant_section is not None and plant_section.sampled_at is not None
    period = sampled_at[0] if sampled_at else 0.0
    plant = read_plant(collector, plant_section, dimensions, period, time_unit) if plant_section else None
    axes, variables = read_axes(collector, sweep_table, list(parameters), in_z)
    scenarios = read_scenarios(collector, sweep_table.get("scenarios", {}))
    if in_z and sampled_at:
        axes["period"] = Axis("period", np.array([sampled_at[0]]), time_unit, time_unit, "values")
    variables["period"] = Measured(SECOND, stated=True)
    loop = _loop(collector, data, loop_table, [*dimensions, *variables], list(dimensions), time_unit, in_z)
    wanted = data.get("requirements")
    rows = [row for row in wanted if isinstance(row, dict)] if isinstance(wanted, list) else []
    requirements = read_requirements(collector, rows, catalogue, time_unit)
    if plant and loop:
        check_units(collector, plant, loop, dimensions, variables)
        _check_together(collector, plant, loop, axes)
    if scenarios and plant:
        times = {plant.dead_time.name} if isinstance(plant.dead_time, Name) else set()
        parameter_bounds(collector, parameters, max(scenarios.tolerance_scales), times)
    if not (top and plant and loop and scenarios and "gain" in axes and "period" in axes):
        return None
    design = tuple(axis for name, axis in axes.items() if name not in ("gain", "period"))
    return Study(
        title=top.title, plant=plant, parameters=tuple(parameters.values()), loop=loop, gain=axes["gain"],
        period=axes["period"], design=design, scenarios=scenarios, requirements=tuple(requirements),
        text=collector.text, sha256=hashlib.sha256(collector.text.encode()).hexdigest(), file=collector.file,
        assumptions=tuple(collector.assumptions),
    )  # fmt: skip


def _loop(
    collector: Collector, data: dict[str, Any], table: dict[str, Any],
    names: list[str], parameters: list[str], time_unit: str, in_z: bool,
) -> Loop | None:  # fmt: skip
    if "loop" not in data:
        return None
    section = collector.section(LoopSection, table, ("loop",))
    return read_loop(collector, section, names, parameters, time_unit, in_z) if section else None


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
        collector.fault(
            ("loop", "conversion"), f"exact at {loop.exact_at / (2 * np.pi):g} Hz",
            f"allowed: below half the sampling rate at the longest period, {0.5 / period[-1]:g} Hz",
        )  # fmt: skip
    if plant.variable == "z":
        shares = loop.computing_delay.seconds / period[0]
        if abs(shares - round(shares)) > 1e-9:
            collector.fault(("loop", "computing_delay"), f"found {loop.computing_delay.seconds:g} s",
                            "allowed: a whole number of periods with a plant given in z")  # fmt: skip
