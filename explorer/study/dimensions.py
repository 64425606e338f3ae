"""Dimensions: expression trees in, the physical dimension of their value out, for reading's check of units.

A bare number may carry any unit that its writer left out, so it never causes a refusal: in a sum it takes the
other side's dimension (and that is noted when it is not 1), in a product it makes the result `bare` too. Only
a contradiction between stated units is a fault.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from fractions import Fraction

from explorer.study.expressions import Call, ExpressionError, Name, Node, Number, Operation, constant
from explorer.study.quantities import Dimension

DIMENSIONLESS = Dimension()


@dataclass(frozen=True)
class Measured:
    """A dimension, and whether a bare number stands in it and may carry the unit that is missing."""

    dimension: Dimension
    bare: bool = False


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
        bare = left.bare or right.bare
        if node.sign == "*":
            return Measured(left.dimension * right.dimension, bare)
        return Measured(left.dimension / right.dimension, bare)

    def _sum(self, node: Operation, left: Measured, right: Measured) -> Measured:
        if isinstance(node.left, Number) and node.left.value == 0.0:  # a leading minus
            return right
        if left.dimension == right.dimension:
            return Measured(left.dimension, left.bare and right.bare)
        if not (left.bare or right.bare):
            raise ExpressionError(
                node.column, f"adds [{left.dimension}] and [{right.dimension}]; both sides of {node.sign} need one unit"
            )
        if left.bare and right.bare:
            self._note(node, "bare numbers are taken to carry what makes both sides one unit")
            return Measured(right.dimension, bare=True)
        known = right if left.bare else left
        self._note(node, f"the bare number is taken to be in [{known.dimension}]")
        return Measured(known.dimension)

    def _power(self, node: Operation, base: Measured, exponent: Measured) -> Measured:
        if not (exponent.bare or exponent.dimension.is_dimensionless):
            raise ExpressionError(node.column, f"an exponent has no unit; this one is in [{exponent.dimension}]")
        if base.dimension.is_dimensionless:
            return base
        power = constant(node.right)
        if power is None:
            raise ExpressionError(node.column, f"[{base.dimension}] may only be raised to a plain number")
        return Measured(base.dimension**power, base.bare)

    def _function(self, node: Call) -> Measured:
        inner = self.of(node.argument)
        if node.function == "sqrt":
            return Measured(inner.dimension ** Fraction(1, 2), inner.bare)
        if node.function == "abs":
            return inner
        if not inner.dimension.is_dimensionless:
            if not inner.bare:
                raise ExpressionError(node.column, f"{node.function}() takes a pure number, found [{inner.dimension}]")
            self._note(node, "the bare number is taken to carry the argument's unit")
        return Measured(DIMENSIONLESS)

    def _note(self, node: Operation | Call, assumption: str) -> None:
        note = f"column {node.column}: {assumption}"
        if note not in self.assumptions:
            self.assumptions.append(note)
