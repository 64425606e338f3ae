"""Rational functions over many scenarios: expression trees in, coefficient arrays for loop out.

A value is scale * product of polynomial factors to whole powers. Factors stay apart until a sum forces them
together, so the poles of `1/(s*(lag*s + 1)**3)` are read off rather than solved for, and equal factors of two
fractions meet in one common denominator instead of being doubled.

Arrays carry a first axis for the power of the gain (length 1: free of the gain; 2: affine in it), then the
batch axes (scenarios, or design variables and periods), then the coefficients in descending powers.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from explorer.study.expressions import Call, ExpressionError, Name, Node, Number, Operation, constant

Array = NDArray[np.float64]
Factor = tuple[Array, int]

HIGHEST_DEGREE = 24
_FUNCTIONS = {
    "sqrt": np.sqrt, "exp": np.exp, "log": np.log, "sin": np.sin, "cos": np.cos, "tan": np.tan, "abs": np.abs
}  # fmt: skip
_SAME = 8 * np.finfo(float).eps  # factors equal but for a few roundings are one factor


class NotAffineError(ValueError):
    """The value is not affine in the gain: it has to be evaluated gain by gain."""


@dataclass(frozen=True)
class Rational:
    """scale * Π factor**power; scale : (gain power, *batch), factor : (gain power, *batch, degree + 1)."""

    scale: Array
    factors: tuple[Factor, ...] = ()

    def __mul__(self, other: Rational) -> Rational:
        scale = multiply(self.scale[..., None], other.scale[..., None])[..., 0]
        return Rational(scale, _merged(self.factors + other.factors))

    def inverse(self) -> Rational:
        """1/self; raises NotAffineError when the gain stands in it. Zeros must be excluded by the caller."""
        if self.scale.shape[0] > 1 or any(factor.shape[0] > 1 for factor, _ in self.factors):
            raise NotAffineError
        return Rational(1.0 / self.scale, tuple((factor, -power) for factor, power in self.factors))

    def __add__(self, other: Rational) -> Rational:
        below = _common(self.factors, other.factors)
        return _reduced(_add(self._over(below), other._over(below)), below)

    def _over(self, below: tuple[Factor, ...]) -> Array:
        """The expanded numerator after bringing self to the denominator `below` (powers negative)."""
        lift = Rational(
            self.scale, _merged(self.factors + tuple((factor, -power) for factor, power in below))
        )
        return lift.numerator()

    def numerator(self) -> Array:
        """Expanded numerator, (gain power, *batch, n+1) in descending powers."""
        product = self.scale[..., None]
        for factor, power in self.factors:
            for _ in range(power):
                product = multiply(product, factor)
        return product

    def degrees(self) -> tuple[int, int]:
        """Degrees of the numerator and of the denominator, without expanding them."""
        sizes = [(factor.shape[-1] - 1) * power for factor, power in self.factors]
        return sum(size for size in sizes if size > 0), -sum(size for size in sizes if size < 0)

    def denominator_factors(self) -> list[Array]:
        """Denominator factors, each (*batch, m+1) and repeated as often as it stands."""
        return [factor[0] for factor, power in self.factors for _ in range(-power)]

    def denominator(self) -> Array:
        """Expanded denominator, (*batch, m+1) in descending powers."""
        product = np.ones((1,) * self.scale.ndim)
        for factor in self.denominator_factors():
            product = multiply(product[None], factor[None])[0]
        return product


def multiply(left: Array, right: Array) -> Array:
    """Product of two polynomial arrays along the coefficients and along the gain powers.

    Raises NotAffineError when the product holds the gain's square.
    """
    if left.shape[0] > 1 and right.shape[0] > 1:
        raise NotAffineError
    degree = left.shape[-1] + right.shape[-1] - 2
    if degree > HIGHEST_DEGREE:
        raise ExpressionError(1, f"a polynomial of degree {degree}; at most {HIGHEST_DEGREE} is allowed")
    batch = np.broadcast_shapes(left.shape[:-1], right.shape[:-1])
    product = np.zeros((*batch, degree + 1))
    for power in range(right.shape[-1]):
        product[..., power : power + left.shape[-1]] += left * right[..., power : power + 1]
    return product


def evaluate(node: Node, variable: str, polynomial: list[float], names: Mapping[str, Array]) -> Rational:
    """The tree as a rational function of a polynomial variable.

    Parameters
    ----------
    variable : "s" or "z", the name that stands for the polynomial.
    polynomial : what the name stands for, descending powers: [1, 0] reads s or z as themselves, [1, 1] reads z
        as w + 1, so that `z - 1` is exact however fast the sampling.
    names : values, each (gain power, *batch), all of one number of axes; "gain" as [[0], [1]] stays symbolic.

    Raises
    ------
    ExpressionError : division by zero somewhere in the batch, a function of the variable, a degree too high.
    NotAffineError : the gain is symbolic and the tree is not affine in it.
    """
    axes = max((value.ndim for value in names.values()), default=1)
    reader = _Evaluation(
        variable, np.array(polynomial, dtype=float).reshape((1,) * axes + (-1,)), names, axes
    )
    with np.errstate(all="ignore"):
        result = reader.of(node)
    if not all(
        np.isfinite(array).all() for array in (result.scale, *(factor for factor, _ in result.factors))
    ):
        raise ExpressionError(
            1, "the value is not a finite number somewhere in the tolerance box or on an axis;"
        )
    return result


@dataclass(frozen=True)
class _Evaluation:
    variable: str
    polynomial: Array
    names: Mapping[str, Array]
    axes: int

    def of(self, node: Node) -> Rational:
        """The value of a part of the tree."""
        if isinstance(node, Number):
            return Rational(np.full((1,) * self.axes, node.value))
        if isinstance(node, Name):
            return self._name(node)
        if isinstance(node, Call):
            return self._call(node)
        left = self.of(node.left)
        if node.sign == "**":
            return self._power(node, left)
        right = self.of(node.right)
        if node.sign == "*":
            return left * right
        if node.sign == "/":
            return left * self._inverse(node, right)
        return left + (right if node.sign == "+" else Rational(-right.scale, right.factors))

    def _name(self, node: Name) -> Rational:
        if node.name == self.variable:
            return Rational(np.ones((1,) * self.axes), ((self.polynomial, 1),))
        if node.name == "pi":
            return Rational(np.full((1,) * self.axes, math.pi))
        return Rational(self.names[node.name])

    def _scalar(self, node: Node, what: str) -> Array:
        value = self.of(node)
        if value.factors:
            raise ExpressionError(node.column, f"{what} may not contain {self.variable}")
        if value.scale.shape[0] > 1:
            raise NotAffineError
        return value.scale

    def _call(self, node: Call) -> Rational:
        return Rational(
            _FUNCTIONS[node.function](self._scalar(node.argument, f"the argument of {node.function}()"))
        )

    def _inverse(self, node: Operation, value: Rational) -> Rational:
        dead = (value.scale == 0).all(axis=0)
        if dead.any():
            where = "" if dead.all() else " somewhere in the tolerance box or on an axis"
            raise ExpressionError(node.column, f"divides by zero{where}")
        return value.inverse()

    def _power(self, node: Operation, base: Rational) -> Rational:
        if not base.factors and base.scale.shape[0] == 1:
            return Rational(base.scale ** self._scalar(node.right, "an exponent"))
        exponent = constant(node.right)
        if exponent is None or exponent.denominator != 1 or abs(exponent) > HIGHEST_DEGREE:
            raise ExpressionError(
                node.column,
                f"the exponent here must be a whole number from -{HIGHEST_DEGREE} to {HIGHEST_DEGREE}",
            )
        power = int(exponent)
        if power < 0:
            return self._power_of(node, self._inverse(node, base), -power)
        return self._power_of(node, base, power)

    def _power_of(self, node: Operation, base: Rational, power: int) -> Rational:
        if base.scale.shape[0] > 1 and power > 1:
            raise NotAffineError
        highest = max((abs(own) * power for _, own in base.factors), default=0)
        if highest > HIGHEST_DEGREE:  # before powers of powers make lists of millions of factors
            raise ExpressionError(node.column, f"a power of {highest}; at most {HIGHEST_DEGREE} is allowed")
        return Rational(
            base.scale**power, tuple((factor, own * power) for factor, own in base.factors if power)
        )


def _same(left: Array, right: Array) -> bool:
    if left.shape[-1] != right.shape[-1] or left.shape[0] != right.shape[0]:
        return False
    return bool(np.all(np.abs(left - right) <= _SAME * np.abs(left)))


def _merged(factors: tuple[Factor, ...]) -> tuple[Factor, ...]:
    """Equal factors joined, their powers added, those of power zero dropped."""
    kept: list[Factor] = []
    for factor, power in factors:
        for index, (known, own) in enumerate(kept):
            if _same(known, factor):
                kept[index] = (known, own + power)
                break
        else:
            kept.append((factor, power))
    return tuple((factor, power) for factor, power in kept if power)


def _common(left: tuple[Factor, ...], right: tuple[Factor, ...]) -> tuple[Factor, ...]:
    """The least common denominator of two factor lists, powers negative."""
    below = [(factor, power) for factor, power in left if power < 0]
    for factor, power in right:
        if power >= 0:
            continue
        for index, (known, own) in enumerate(below):
            if _same(known, factor):
                below[index] = (known, min(own, power))
                break
        else:
            below.append((factor, power))
    return tuple(below)


def _add(left: Array, right: Array) -> Array:
    """Sum of two polynomial arrays, aligned at their constant terms."""
    length, powers = max(left.shape[-1], right.shape[-1]), max(left.shape[0], right.shape[0])
    total = np.zeros((powers, *np.broadcast_shapes(left.shape[1:-1], right.shape[1:-1]), length))
    for part in (left, right):
        total[: part.shape[0], ..., length - part.shape[-1] :] += part
    return total


def _reduced(numerator: Array, below: tuple[Factor, ...]) -> Rational:
    """numerator over below, leading zeros stripped and the leading coefficient moved into the scale."""
    while numerator.shape[-1] > 1 and not numerator[..., 0].any():
        numerator = numerator[..., 1:]
    if numerator.shape[-1] == 1:
        return Rational(numerator[..., 0], below)
    leading = numerator[..., 0]
    if numerator.shape[0] == 1 and (leading != 0).all():
        return Rational(leading, _merged(((numerator / leading[..., None], 1), *below)))
    return Rational(np.ones((1,) * leading.ndim), ((numerator, 1), *below))
