"""Expressions: text from a study in, a tree for dimensions and rational out; nothing is ever executed.

The grammar is closed: numbers, names, + - * / ** ^ ( ) and eight functions. A parser of its own (rather than
a host language's) knows nothing else, gives the column of every fault, and costs microseconds.
"""

from __future__ import annotations

import difflib
import re
import sys
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from fractions import Fraction

FUNCTIONS = ("sqrt", "exp", "log", "sin", "cos", "tan", "abs")
LONGEST = 2000  # characters
DEEPEST = 40  # nested parentheses, signs and powers
MOST_OPERATIONS = 400

_TOKEN = re.compile(
    r"(?P<number>(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)|(?P<name>[A-Za-z_µμ][A-Za-z_0-9]*)|(?P<sign>\*\*|[-+*/^()])"
)


class ExpressionError(ValueError):
    """The text is not an expression of the grammar; `column` counts from 1."""

    def __init__(self, column: int, message: str) -> None:
        self.column = column
        super().__init__(f"column {column}: {message}")


@dataclass(frozen=True)
class Number:
    """A number as written."""

    value: float
    column: int


@dataclass(frozen=True)
class Name:
    """A parameter, design variable, `s`, `z`, `gain`, `period` or `pi`."""

    name: str
    column: int


@dataclass(frozen=True)
class Operation:
    """`sign` is one of + - * / **; the column is the sign's."""

    sign: str
    left: Node
    right: Node
    column: int


@dataclass(frozen=True)
class Call:
    """One of the eight functions with its single argument."""

    function: str
    argument: Node
    column: int


Node = Number | Name | Operation | Call


def read_expression(text: str | int | float) -> Node:
    """Read an expression.

    Parameters
    ----------
    text : the expression, or a bare number.

    Raises
    ------
    ExpressionError : with the column and what is allowed there.
    """
    if isinstance(text, bool) or not isinstance(text, str | int | float):
        raise ExpressionError(1, f"{text!r} is neither an expression nor a number")
    if isinstance(text, str) and len(text) > LONGEST:
        raise ExpressionError(LONGEST, f"longer than {LONGEST} characters")
    if isinstance(text, int) and abs(text) > sys.float_info.max:  # its text may be of any length
        raise ExpressionError(1, "the number is beyond the largest a computer holds")
    return _Parser(str(text)).whole()


def names_in(node: Node) -> Iterator[Name]:
    """Every name of the tree, left to right, repeats included."""
    if isinstance(node, Name):
        yield node
    elif isinstance(node, Operation):
        yield from names_in(node.left)
        yield from names_in(node.right)
    elif isinstance(node, Call):
        yield from names_in(node.argument)


def depends_on(node: Node, name: str) -> bool:
    """Whether the name stands anywhere in the tree."""
    return any(found.name == name for found in names_in(node))


def constant(node: Node) -> Fraction | None:
    """The value of a tree of numbers and operators; None when names or functions stand in it."""
    if isinstance(node, Number):
        return Fraction(repr(node.value))  # the decimal as written: 1.0000001 is no whole number
    if not isinstance(node, Operation) or node.sign == "**":
        return None
    left, right = constant(node.left), constant(node.right)
    if left is None or right is None or (node.sign == "/" and right == 0):
        return None
    if node.sign == "*":
        return left * right
    if node.sign == "/":
        return left / right
    return left + right if node.sign == "+" else left - right


def nearest(word: str, known: Iterable[str]) -> str | None:
    """The known word a misspelt one was meant for, None when nothing is near."""
    folded = {name.lower(): name for name in known}
    near = difflib.get_close_matches(word[:60].lower(), list(folded), n=1, cutoff=0.6)
    return folded[near[0]] if near else None


def closest(word: str, known: Iterable[str]) -> str:
    """A "did you mean" sentence for a misspelt word, empty when nothing is near."""
    near = nearest(word, known)
    return f"Did you mean {near!r}?" if near else ""


class _Parser:
    """Recursive descent over the tokens: sum, product, signed, power, atom."""

    def __init__(self, text: str) -> None:
        self.tokens = list(_tokens(text))
        self.end = len(text) + 1
        self.position = 0
        self.depth = 0
        if len(self.tokens) > 2 * MOST_OPERATIONS:
            raise ExpressionError(
                self.tokens[2 * MOST_OPERATIONS][2], f"more than {MOST_OPERATIONS} operations"
            )

    def whole(self) -> Node:
        """The expression, to the end of the text."""
        node = self.sum()
        if self.position < len(self.tokens):
            kind, text, column = self.tokens[self.position]
            what = "an operator" if kind != "sign" else "an operator, or the end,"
            raise ExpressionError(column, f"{text!r} stands where {what} is expected")
        return node

    def sum(self) -> Node:
        """Terms with + and - between them."""
        node = self.product()
        while self.ahead() in ("+", "-"):
            sign, column = self.take()
            node = Operation(sign, node, self.product(), column)
        return node

    def product(self) -> Node:
        """Factors with * and / between them."""
        node = self.signed()
        while self.ahead() in ("*", "/"):
            sign, column = self.take()
            node = Operation(sign, node, self.signed(), column)
        return node

    def signed(self) -> Node:
        """A power, with a sign before it or none."""
        self.descend()
        if self.ahead() in ("+", "-"):
            sign, column = self.take()
            operand = self.signed()
            node = operand if sign == "+" else Operation("-", Number(0.0, column), operand, column)
        else:
            node = self.power()
        self.depth -= 1
        return node

    def power(self) -> Node:
        """An atom, raised or not."""
        base = self.atom()
        if self.ahead() in ("**", "^"):
            _, column = self.take()
            return Operation(
                "**", base, self.signed(), column
            )  # right-associative, binds tighter than a sign
        return base

    def atom(self) -> Node:
        """A number, a name, a call or a parenthesis."""
        if self.position >= len(self.tokens):
            raise ExpressionError(self.end, "the expression ends where a number, name or ( is expected")
        kind, text, column = self.tokens[self.position]
        self.position += 1
        if kind == "number":
            value = float(text)
            if value == float("inf"):
                raise ExpressionError(column, f"{text} is beyond the largest number a computer holds")
            return Number(value, column)
        if kind == "name":
            return self.call(text, column) if self.ahead() == "(" else self.name(text, column)
        if text == "(":
            return self.parenthesis(column)
        raise ExpressionError(column, f"{text!r} stands where a number, name or ( is expected")

    def name(self, text: str, column: int) -> Node:
        """A name, or the call of a known function."""
        if text in FUNCTIONS:
            raise ExpressionError(column, f"{text} needs its argument in parentheses: {text}(...)")
        return Name(text.replace("\u00b5", "\u03bc"), column)

    def call(self, text: str, column: int) -> Node:
        """A function and its argument."""
        if text not in FUNCTIONS:
            hint = closest(text, FUNCTIONS) or f"To multiply write {text}*(...)."
            raise ExpressionError(
                column, f"no function {text!r}; the functions are {', '.join(FUNCTIONS)}. {hint}"
            )
        _, opening = self.take()
        return Call(text, self.parenthesis(opening), column)

    def parenthesis(self, opening: int) -> Node:
        """What stands between ( and )."""
        self.descend()
        node = self.sum()
        if self.position >= len(self.tokens):
            raise ExpressionError(opening, "this ( is never closed")
        if self.ahead() != ")":
            _, text, column = self.tokens[self.position]
            raise ExpressionError(column, f"{text!r} stands where an operator or ) is expected")
        self.take()
        self.depth -= 1
        return node

    def descend(self) -> None:
        """One level deeper; ExpressionError where that is too deep."""
        self.depth += 1
        if self.depth > 2 * DEEPEST:  # each parenthesis passes one sign level too
            column = self.tokens[min(self.position, len(self.tokens) - 1)][2]
            raise ExpressionError(column, f"nested deeper than {DEEPEST} levels")

    def ahead(self) -> str:
        """The next sign without taking it."""
        if self.position >= len(self.tokens):
            return ""
        kind, text, _ = self.tokens[self.position]
        return text if kind == "sign" else ""

    def take(self) -> tuple[str, int]:
        """The next sign, taken."""
        _, text, column = self.tokens[self.position]
        self.position += 1
        return text, column


def _tokens(text: str) -> Iterator[tuple[str, str, int]]:
    position = 0
    while position < len(text):
        if text[position] in " \t\n\r":
            position += 1
            continue
        match = _TOKEN.match(text, position)
        if match is None:
            raise ExpressionError(
                position + 1,
                f"{text[position]!r} is not allowed; an expression holds numbers, names, + - * / ** ^ ( ) "
                f"and {' '.join(FUNCTIONS)} pi",
            )
        yield str(match.lastgroup), match.group(), position + 1
        position = match.end()
