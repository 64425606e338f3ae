"""Dimensions: expression trees in, the physical dimension of their value out, for reading's check of units.

A bare number may carry any unit that its writer left out, so it never causes a refusal: in a sum it takes the
other side's dimension (and that is noted when it is not 1), in a product it makes the result `bare` too. The
same goes for a term without any parameter, such as the middle one of s^2 + s + 400, where a factor 1 may carry
the unit. Only a contradiction between stated units is a fault.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction

from explorer.study.expressions import Call, ExpressionError, Name, Node, Number, Operation, constant
from explorer.study.quantities import Dimension
from explorer.study.rational import HIGHEST_DEGREE

DIMENSIONLESS = Dimension()


@dataclass(frozen=True)
class Measured:
    """A dimension; bare : a number without unit stands in it and may carry what is missing; stated : a unit does."""

    dimension: Dimension
    bare: bool = False
    stated: bool = False

    @property
    def open(self) -> bool:
        """Whether a missing unit can be explained: by a bare number, or by a factor 1 nobody wrote."""
        return self.bare or not self.stated


@dataclass
class Inference:
    """The known dimensions by name; `assumptions` collects what bare numbers were taken to mean."""

    names: Mapping[str, Measured]
    assumptions: list[str] = field(default_factory=list)

    def of(self, node: Node) -> Measured:
        """The dimension of a tree.

        Raises
        ------
        ExpressionError : two stated units contradict each other; the column is the operator's.
        """
        if isinstance(node, Number):
            return Measured(DIMENSIONLESS, bare=True)
        if isinstance(node, Name):
            return self.names[node.name]
        if isinstance(node, Call):
            return self._function(node)
        left, right = self.of(node.left), self.of(node.right)
        if node.sign in "+-":
            return self._sum(node, left, right)
        if node.sign == "**":
            return self._power(node, left, right)
        dimension = left.dimension * right.dimension if node.sign == "*" else left.dimension / right.dimension
        return Measured(dimension, left.bare or right.bare, left.stated or right.stated)

    def _sum(self, node: Operation, left: Measured, right: Measured) -> Measured:
        if isinstance(node.left, Number) and node.left.value == 0.0:  # a leading minus
            return right
        stated = left.stated or right.stated
        if left.dimension == right.dimension:
            return Measured(left.dimension, left.bare and right.bare, stated)
        if not (left.open or right.open):
            raise ExpressionError(
                node.column,
                f"adds [{left.dimension}] and [{right.dimension}]; both sides of {node.sign} need one unit",
            )
        self._note(node, f"adds [{left.dimension}] and [{right.dimension}]")
        if left.open and right.open:
            return Measured(right.dimension, left.bare and right.bare, stated)
        return Measured((right if left.open else left).dimension, stated=stated)

    def _power(self, node: Operation, base: Measured, exponent: Measured) -> Measured:
        if not (exponent.open or exponent.dimension.is_dimensionless):
            raise ExpressionError(
                node.column, f"an exponent has no unit; this one is in [{exponent.dimension}]"
            )
        if base.dimension.is_dimensionless:
            return base
        power = constant(node.right)
        if power is None or abs(power) > HIGHEST_DEGREE:
            raise ExpressionError(
                node.column, f"[{base.dimension}] may only be raised to a plain number up to {HIGHEST_DEGREE}"
            )
        return Measured(base.dimension**power, base.bare, base.stated)

    def _function(self, node: Call) -> Measured:
        inner = self.of(node.argument)
        if node.function == "sqrt":
            return Measured(inner.dimension ** Fraction(1, 2), inner.bare, inner.stated)
        if node.function == "abs":
            return inner
        if not inner.dimension.is_dimensionless:
            if not inner.open:
                raise ExpressionError(
                    node.column, f"{node.function}() takes a pure number, found [{inner.dimension}]"
                )
            self._note(node, f"takes {node.function}() of [{inner.dimension}]")
        return Measured(DIMENSIONLESS)

    def _note(self, node: Operation | Call, found: str) -> None:
        note = f"column {node.column} {found}; a bare number, or a factor 1 not written, is taken to make up for it"
        if note not in self.assumptions:
            self.assumptions.append(note)
