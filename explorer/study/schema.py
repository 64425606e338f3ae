"""Schema: the parsed tables of a study in, typed sections or a list of structural problems out, for reading.

Each section is validated on its own, so a misspelt key in one does not hide the faults of another; and a key
that is near enough to a missing one is read as that one, so that one slip has one message.
"""

from __future__ import annotations

import datetime
from collections.abc import Iterable, Mapping
from typing import Annotated, Any, TypeVar

from pydantic import BaseModel, ConfigDict, Field, PlainValidator, ValidationError

from explorer.study.expressions import closest, nearest

Found = tuple[tuple[str | int, ...], str, str, str]  # path inside the section, found, allowed, mend


def _scalar(value: Any) -> str | int | float:
    if isinstance(value, bool) or not isinstance(value, str | int | float):
        raise ValueError('a number or a text such as "12 ms"')
    return value


def _text(value: Any) -> str:
    if not isinstance(value, str) or not value.strip():
        raise ValueError("a text in quotes")
    if len(value) > 200 or not value.isprintable():  # a terminal or a page would obey the others
        raise ValueError("one line of at most 200 printable characters")
    return value


def _whole(value: Any) -> int:
    if isinstance(value, bool) or not isinstance(value, int) or value < 0:
        raise ValueError("a whole number, 0 or more")
    return value


def _flag(value: Any) -> bool:
    if not isinstance(value, bool):
        raise ValueError("true or false")
    return value


def _scales(value: Any) -> tuple[float, ...]:
    if not isinstance(value, list) or not 0 < len(value) <= 50:
        raise ValueError("a list of 1 to 50 numbers such as [0, 0.5, 1.0]")
    if any(
        isinstance(item, bool) or not isinstance(item, int | float) or not 0 <= item <= 100 for item in value
    ):
        raise ValueError("numbers from 0 to 100")
    return tuple(sorted({float(item) for item in value}))


def _scalars(value: Any) -> tuple[str | int | float, ...]:
    if not isinstance(value, list) or not 0 < len(value) <= 100_000:
        raise ValueError("a list of one or more values")
    return tuple(_scalar(item) for item in value)


def _rows(value: Any) -> tuple[tuple[str | int | float, ...], ...]:
    allowed = "a matrix: a list of rows, each a list of at most 24 numbers or expressions, all of one length"
    rows = [row if isinstance(row, list) else [row] for row in (value if isinstance(value, list) else [value])]
    if not 0 < len(rows) <= 24 or len({len(row) for row in rows}) != 1 or not 0 < len(rows[0]) <= 24:
        raise ValueError(allowed)
    return tuple(tuple(_scalar(item) for item in row) for row in rows)


def _table(value: Any) -> dict[str, Any]:
    if not isinstance(value, dict):
        raise ValueError("a table")
    return value


def _tables(value: Any) -> list[dict[str, Any]]:
    if not isinstance(value, list) or not value or not all(isinstance(item, dict) for item in value):
        raise ValueError("one or more tables, each under a line [[requirements]] with two brackets")
    return value


Scalar = Annotated[str | int | float, PlainValidator(_scalar)]
Text = Annotated[str, PlainValidator(_text)]
Whole = Annotated[int, PlainValidator(_whole)]
Flag = Annotated[bool, PlainValidator(_flag)]
Scales = Annotated[tuple[float, ...], PlainValidator(_scales)]
Scalars = Annotated[tuple[str | int | float, ...], PlainValidator(_scalars)]
Rows = Annotated[tuple[tuple[str | int | float, ...], ...], PlainValidator(_rows)]
Table = Annotated[dict[str, Any], PlainValidator(_table)]
Tables = Annotated[list[dict[str, Any]], PlainValidator(_tables)]


class _Section(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True, populate_by_name=False)


class StudySection(_Section):
    """The top level."""

    title: Text
    plant: Table
    loop: Table
    sweep: Table
    requirements: Tables


class StatesSection(_Section):
    """[plant] states."""

    A: Rows
    B: Rows
    C: Rows
    D: Rows | None = None


class PlantSection(_Section):
    """[plant]."""

    transfer: Scalar | None = None
    states: Table | None = None
    dead_time: Scalar = 0
    sampled_at: Scalar | None = None
    parameters: Table = Field(default_factory=dict)


class ParameterSection(_Section):
    """One entry of [plant.parameters]."""

    nominal: Scalar | None = None
    tolerance: Scalar | None = None
    from_: Scalar | None = Field(default=None, alias="from")
    to: Scalar | None = None
    any_of: Scalars | None = None


class LoopSection(_Section):
    """[loop]."""

    compensator: Scalar | None = None
    conversion: Text | None = None
    computing_delay: Scalar = 0
    sensor: Scalar = 1
    clock_tolerance: Scalar = 0
    execution_time: Scalar | None = None
    coefficient_bits: Whole | None = None


class AxisSection(_Section):
    """One axis of [sweep]."""

    from_: Scalar | None = Field(default=None, alias="from")
    to: Scalar | None = None
    points: Whole | None = None
    spacing: Text | None = None
    values: Scalars | None = None


class ScenarioSection(_Section):
    """[sweep] scenarios."""

    interior: Whole = 64
    corners: Flag = True
    seed: Whole = 1
    tolerance_scales: Scales = (0.0, 1.0)


class RequirementSection(_Section):
    """One [[requirements]]."""

    measure: Text
    name: Text | None = None
    basis: Text | None = None
    at_least: Scalar | None = None
    at_most: Scalar | None = None
    scale: Scalar | None = None
    band: Scalar | None = None
    input: Text | None = None


Section = TypeVar("Section", bound=BaseModel)


def validated(model: type[Section], data: Any) -> tuple[Section | None, list[Found]]:
    """The section as read without its faulty keys (None where that leaves too little), and everything wrong with it."""
    known = keys_of(model)
    if not isinstance(data, dict):
        return None, [((), f"found {shown(data)}", f"allowed: a table with some of {', '.join(known)}", "")]
    try:
        return model.model_validate(data), []
    except ValidationError as error:
        items = error.errors(include_url=False)
    spelt = respelt(data, known)
    meant = spelt.keys() - data.keys()
    problems = [
        _described(dict(item), known)
        for item in items
        if not (item["type"] == "missing" and item["loc"][0] in meant)
    ]
    faulty = {item["loc"][0] for item in items} - meant
    try:
        return model.model_validate({key: value for key, value in spelt.items() if key not in faulty}), problems
    except ValidationError:
        return None, problems


def keys_of(model: type[BaseModel]) -> list[str]:
    """The keys of a section as written in a study."""
    return [field.alias or name for name, field in model.model_fields.items()]


def respelt(table: Mapping[str, Any], known: Iterable[str]) -> dict[str, Any]:
    """The table with unknown keys renamed to the known ones they are near to, where those are not given.

    A misspelt header of a table that stands under a right one too, [plnat] and [plant.parameters], joins it.
    """
    names = list(known)
    result: dict[str, Any] = {}
    for key, value in table.items():
        free = (name for name in names if _joined(result.get(name, table.get(name)), value) is not None)
        place = key if key in names else nearest(key, free) or key
        result[place] = _joined(result.get(place), value)
    return result


def _joined(one: Any, other: Any) -> Any:
    """What one key holds when both are given: tables without common keys together; None where that cannot be."""
    if one is None or other is None:
        return other if one is None else one
    together = isinstance(one, dict) and isinstance(other, dict) and not one.keys() & other.keys()
    return {**one, **other} if together else None


def _described(item: dict[str, Any], known: list[str]) -> Found:
    path = tuple(item["loc"])
    if item["type"] == "extra_forbidden":
        key = str(path[-1])
        return path, f"unknown key {shown(key)}", f"allowed here: {', '.join(known)}", closest(key, known)
    if item["type"] == "missing":
        return path, "missing", f"{path[-1]} must be given", ""
    allowed = item["msg"].removeprefix("Value error, ")
    return path, f"found {shown(item['input'])}", f"allowed: {allowed}", ""


def shown(value: Any) -> str:
    """A value as its writer would recognise it, control characters escaped and at most 60 characters long."""
    if isinstance(value, str):
        text = f'"{value}"' if value.isprintable() else ascii(value)
    elif isinstance(value, bool):
        text = str(value).lower()
    elif isinstance(value, int) and abs(value) >= 10**60:  # its digits may be too many to write out
        text = "a whole number of more than 60 digits"
    elif isinstance(value, list | tuple):
        text = f"[{', '.join(shown(item) for item in value[:60])}]"
    elif isinstance(value, datetime.date | datetime.time):
        text = str(value)
    else:
        text = "a table" if isinstance(value, dict) else repr(value)
    return text if len(text) <= 60 else text[:57] + "..."
