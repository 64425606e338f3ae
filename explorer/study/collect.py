"""Collecting faults: every part of reading adds what it finds here, so that all come out together."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any

from explorer.errors import Fault
from explorer.study.display import shown_unit
from explorer.study.expressions import ExpressionError, Node, closest, names_in, read_expression
from explorer.study.locate import Path, line_of
from explorer.study.quantities import Dimension, Quantity, QuantityError, read_in_unit, read_quantity
from explorer.study.schema import Section, shown, validated

SECOND = read_quantity("1 s").dimension


@dataclass
class Collector:
    """The study's text and file name, and the faults and assumptions found so far."""

    text: str
    file: str
    faults: list[Fault] = field(default_factory=list)
    assumptions: list[str] = field(default_factory=list)

    def fault(self, path: Path, found: str, allowed: str, mend: str = "") -> None:
        """Add one fault at a key path; a second fault at the same place is usually a consequence and is dropped."""
        key = _key(path)
        if all(known.key != key for known in self.faults):
            self.faults.append(Fault(self.file, line_of(self.text, path), key, found, allowed, mend))

    def section(self, model: type[Section], data: Any, path: Path) -> Section | None:
        """A validated section, or None with its faults added."""
        section, problems = validated(model, data)
        for where, found, allowed, mend in problems:
            self.fault(path + where, found, allowed, mend)
        return section

    def quantity(self, value: str | int | float, path: Path) -> Quantity | None:
        """A quantity in SI, or None with a fault."""
        try:
            return read_quantity(value)
        except QuantityError as error:
            self._quantity_fault(value, path, error)
            return None

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
        return number

    def expression(self, value: str | int | float, path: Path, known: Iterable[str]) -> Node | None:
        """An expression over known names, or None with a fault that tells the column."""
        try:
            node = read_expression(value)
        except ExpressionError as error:
            self.expression_fault(value, path, error)
            return None
        names = [*known, "pi"]
        for name in names_in(node):
            if name.name not in names:
                self.fault(
                    path,
                    f"found {shown(value)}: column {name.column}: unknown name {name.name!r}",
                    f"known here: {', '.join(names)}",
                    closest(name.name, names),
                )
                return None
        return node

    def expression_fault(self, value: object, path: Path, error: ExpressionError) -> None:
        """A fault of an expression whose column and reason are known."""
        self.fault(path, f"found {shown(value)}", f"{str(error).rstrip(';')}")

    def _quantity_fault(self, value: object, path: Path, error: QuantityError) -> None:
        self.fault(path, f"found {shown(value)}: {error.found}", error.allowed, error.mend)


def of_kind(quantity: Quantity, dimension: Dimension) -> bool:
    """Whether a quantity is of this dimension, or bare and so may be."""
    return not quantity.stated or quantity.dimension == dimension


def units_of(quantity: Quantity) -> tuple[str, str]:
    """The SI unit text of a quantity and the one to show; "" twice when none was stated."""
    return (str(quantity.dimension) if quantity.stated else "", shown_unit(quantity))


def known_keys(table: Mapping[str, Any]) -> list[str]:
    """Keys of a table as text, for messages."""
    return [str(key) for key in table]


def _key(path: Path) -> str:
    parts = [f"[{part + 1}]" if isinstance(part, int) else f".{part}" for part in path]
    return "".join(parts).removeprefix(".")
