"""Collecting faults: every part of reading adds what it finds here, so that all come out together."""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass, field
from typing import Any

from explorer.errors import Fault
from explorer.study.display import shown_unit
from explorer.study.expressions import ExpressionError, Node, closest, names_in, read_expression
from explorer.study.locate import Path, line_of
from explorer.study.quantities import Quantity, QuantityError, read_in_unit, read_quantity
from explorer.study.schema import Section, shown, validated

SECOND = read_quantity("1 s").dimension
LARGEST = 1e100  # of any quantity, so that products of a few stay inside a double
MOST_FAULTS = 25  # finding a line parses the study some times over


@dataclass
class Collector:
    """The study's text and file name, and the faults and assumptions found so far."""

    text: str
    file: str
    faults: list[Fault] = field(default_factory=list)
    assumptions: list[str] = field(default_factory=list)
    names_complete: bool = True  # False where a whole table of names is missing: unknown ones are a consequence

    def has_fault(self, *paths: Path) -> bool:
        """Whether a fault was found at one of the paths."""
        keys = [_key(path) for path in paths]
        return any(known.key in keys for known in self.faults)

    def fault(self, path: Path, found: str, allowed: str, mend: str = "") -> None:
        """Add one fault at a key path; one at the same key, or at the table right above it, is a consequence of it."""
        key = _key(path)
        if any(known.key == key or known.key.rpartition(".")[0] == key != "" for known in self.faults):
            return
        if len(self.faults) < MOST_FAULTS:
            self.faults.append(Fault(self.file, line_of(self.text, path), key, found, allowed, mend))
        elif len(self.faults) == MOST_FAULTS:
            last = self.text.count("\n") + 1
            self.faults.append(Fault(self.file, last, "", "further faults are not listed", "mend these first"))

    def section(self, model: type[Section], data: Any, path: Path) -> Section | None:
        """A validated section, or None with its faults added."""
        section, problems = validated(model, data)
        for where, found, allowed, mend in problems:
            self.fault(path + where, found, allowed, mend)
        return section

    def quantity(self, value: str | int | float, path: Path) -> Quantity | None:
        """A quantity in SI, or None with a fault."""
        try:
            quantity = read_quantity(value)
        except QuantityError as error:
            self._quantity_fault(value, path, error)
            return None
        if quantity.periods:
            self.fault(path, f"found {shown(value)}", "only computing_delay may be a share of the period")
            return None
        return quantity if self._within_reach(quantity.value, value, path) else None

    def time(self, value: str | int | float, path: Path, unit: str = "s") -> float | None:
        """A time that is not negative, in `unit` ("s" or "sample"); None with a fault."""
        return self.in_unit(value, path, unit, lowest=0.0)

    def in_unit(
        self, value: str | int | float, path: Path, unit: str, lowest: float = -float("inf")
    ) -> float | None:
        """A number converted into a unit and not below `lowest`; None with a fault."""
        try:
            number = read_in_unit(value, unit)
        except QuantityError as error:
            self._quantity_fault(value, path, error)
            return None
        if number < lowest:
            self.fault(path, f"found {shown(value)}", f"allowed: {lowest:g} or more")
            return None
        return number if self._within_reach(number, value, path) else None

    def expression(self, value: str | int | float, path: Path, known: Iterable[str]) -> Node | None:
        """An expression over known names, or None with a fault that tells the column."""
        try:
            node = read_expression(value)
        except ExpressionError as error:
            self.expression_fault(value, path, error)
            return None
        names = [*known, "pi"]
        unknown: dict[str, int] = {}
        for name in names_in(node):
            if name.name not in names:
                unknown.setdefault(name.name, name.column)
        if unknown and self.names_complete:
            columns = [f"column {column}: unknown name {name!r}" for name, column in unknown.items()]
            hints = [closest(name, names) for name in unknown]
            self.fault(path, f"found {shown(value)}: {', '.join(columns)}", f"known here: {', '.join(names)}",
                       " ".join(hint for hint in hints if hint))  # fmt: skip
        return None if unknown else node

    def expression_fault(self, value: object, path: Path, error: ExpressionError) -> None:
        """A fault of an expression whose column and reason are known."""
        self.fault(path, f"found {shown(value)}", f"{str(error).rstrip(';')}")

    def _within_reach(self, number: float, value: object, path: Path) -> bool:
        if abs(number) > LARGEST:
            self.fault(path, f"found {shown(value)}", f"allowed: sizes up to {LARGEST:g}")
        return abs(number) <= LARGEST

    def _quantity_fault(self, value: object, path: Path, error: QuantityError) -> None:
        self.fault(path, f"found {shown(value)}: {error.found}", error.allowed, error.mend)


def alike(one: Quantity, other: Quantity) -> bool:
    """Whether two quantities are of one kind; Hz is not rad/s, and a decibel is no share."""
    return (one.stated, one.dimension, one.cycles, one.decibel) == (
        other.stated, other.dimension, other.cycles, other.decibel
    )  # fmt: skip


def units_of(quantity: Quantity) -> tuple[str, str]:
    """The SI unit text of a quantity and the one to show; "" twice when none was stated."""
    return (str(quantity.dimension) if quantity.stated else "", shown_unit(quantity))


def _key(path: Path) -> str:
    parts = [f"[{part + 1}]" if isinstance(part, int) else f".{_as_written(part)}" for part in path]
    return "".join(parts).removeprefix(".")


def _as_written(part: str) -> str:
    return part if re.fullmatch(r"[ \w-]+", part) else shown(part)
