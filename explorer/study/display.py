"""Display: SI values and the unit their writer used in, text for people out, for decisions and views."""

from __future__ import annotations

from explorer.study.quantities import Quantity, format_quantity, read_quantity


def shown_unit(quantity: Quantity) -> str:
    """The unit to show a quantity in: as written where it is compound (A/mm), else the SI unit, which takes prefixes.

    "" when none was stated.
    """
    if not quantity.stated:
        return ""
    return quantity.unit if any(sign in quantity.unit for sign in "*·/^") else str(quantity.dimension)


def factor_of(unit: str) -> float:
    """SI units in one unit of that text: 1000 for A/mm, 1 for SI units and for none."""
    return 1.0 if unit in ("", "1", "sample") else read_quantity(f"1 {unit}").value


def format_shown(value: float, unit: str) -> str:
    """An SI value in the unit to show: format_shown(2000, "A/mm") is "2 A/mm", format_shown(0.01, "s") "10 ms"."""
    return format_quantity(value / factor_of(unit), unit)
