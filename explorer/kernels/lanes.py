"""Lanes: one straight-line formula written once, run as SIMD instructions over many scenarios, or by NumPy.

A formula is a Python function over an `Operations` object and values that know + - * / and comparisons. `emitted`
turns it into a function that compiled kernels call: while numba compiles, the formula runs once over symbols and
every operation becomes one vector instruction over LANES numbers. Run over NumPy arrays the same formula is its
own slow twin, which the tests use. No loop, no memory traffic but its inputs and outputs.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
from llvmlite import ir
from numba.core import config, types
from numba.core.errors import RequireLiteralValue
from numba.extending import intrinsic

LANES = 16
_DOUBLE = ir.DoubleType()
_VECTOR = ir.VectorType(_DOUBLE, LANES)
_BITS = ir.VectorType(ir.IntType(64), LANES)
_INDEX = ir.IntType(64)
_NONE = ir.Constant(ir.IntType(LANES), 0)
_FLAGS = ("contract",)  # a product and a sum may fuse; nothing else may be reordered

Formula = Callable[..., list[Any]]


class Symbol:
    """A vector of LANES numbers, or of LANES truths, inside a function being compiled."""

    def __init__(self, builder: ir.IRBuilder, value: ir.Value) -> None:
        self.builder, self.value = builder, value

    def _with(self, other: Any) -> ir.Value:
        return other.value if isinstance(other, Symbol) else _splat(float(other))

    def _make(self, value: ir.Value) -> Symbol:
        return Symbol(self.builder, value)

    def __add__(self, other: Any) -> Symbol:
        return self._make(self.builder.fadd(self.value, self._with(other), flags=_FLAGS))

    def __sub__(self, other: Any) -> Symbol:
        return self._make(self.builder.fsub(self.value, self._with(other), flags=_FLAGS))

    def __mul__(self, other: Any) -> Symbol:
        return self._make(self.builder.fmul(self.value, self._with(other), flags=_FLAGS))

    def __truediv__(self, other: Any) -> Symbol:
        return self._make(self.builder.fdiv(self.value, self._with(other), flags=_FLAGS))

    __hash__ = None  # type: ignore[assignment]

    def __radd__(self, other: Any) -> Symbol:
        return self.__add__(other)

    def __rmul__(self, other: Any) -> Symbol:
        return self.__mul__(other)

    def __rsub__(self, other: Any) -> Symbol:
        return self._make(self.builder.fsub(_splat(float(other)), self.value, flags=_FLAGS))

    def __rtruediv__(self, other: Any) -> Symbol:
        return self._make(self.builder.fdiv(_splat(float(other)), self.value, flags=_FLAGS))

    def __neg__(self) -> Symbol:
        return self._make(self.builder.fneg(self.value))

    def __eq__(self, other: Any) -> Symbol:  # type: ignore[override]
        return self._make(self.builder.fcmp_ordered("==", self.value, self._with(other)))

    def __ne__(self, other: Any) -> Symbol:  # type: ignore[override]
        return self._make(self.builder.fcmp_unordered("!=", self.value, self._with(other)))

    def __lt__(self, other: Any) -> Symbol:
        return self._make(self.builder.fcmp_ordered("<", self.value, self._with(other)))

    def __le__(self, other: Any) -> Symbol:
        return self._make(self.builder.fcmp_ordered("<=", self.value, self._with(other)))

    def __ge__(self, other: Any) -> Symbol:
        return self._make(self.builder.fcmp_ordered(">=", self.value, self._with(other)))

    def __gt__(self, other: Any) -> Symbol:
        return self._make(self.builder.fcmp_ordered(">", self.value, self._with(other)))

    def __and__(self, other: Symbol) -> Symbol:
        return self._make(self.builder.and_(self.value, other.value))

    def __or__(self, other: Symbol) -> Symbol:
        return self._make(self.builder.or_(self.value, other.value))


class SymbolOperations:
    """What formulas need beyond arithmetic, as instructions."""

    def __init__(self, builder: ir.IRBuilder) -> None:
        self.builder = builder

    def where(self, truth: Symbol, yes: Any, no: Any) -> Symbol:
        """Lane by lane choice."""
        return Symbol(self.builder, self.builder.select(truth.value, self._value(yes), self._value(no)))

    def sqrt(self, x: Symbol) -> Symbol:
        """Square root."""
        return self._call("llvm.sqrt", x)

    def absolute(self, x: Symbol) -> Symbol:
        """Absolute value."""
        return self._call("llvm.fabs", x)

    def maximum(self, x: Any, y: Any) -> Symbol:
        """The larger; y where either is NaN."""
        left = Symbol(self.builder, self._value(x))
        return self.where(left > y, left, y)

    def minimum(self, x: Any, y: Any) -> Symbol:
        """The smaller; y where either is NaN."""
        left = Symbol(self.builder, self._value(x))
        return self.where(left < y, left, y)

    def split(self, x: Symbol) -> tuple[Symbol, Symbol]:
        """x > 0 as m·2**e with m in [sqrt(1/2), sqrt(2)): (m, e)."""
        b = self.builder
        bits = b.bitcast(x.value, _BITS)
        shifted = b.add(bits, _bits(0x3FF0000000000000 - 0x3FE6A09E667F3BCD))
        exponent = b.sub(b.lshr(shifted, _bits(52)), _bits(1023))
        mantissa = b.sub(bits, b.shl(exponent, _bits(52)))
        return Symbol(b, b.bitcast(mantissa, _VECTOR)), Symbol(b, b.sitofp(exponent, _VECTOR))

    def if_any(self, truth: Symbol, compute: Callable[[], Symbol], otherwise: float) -> Symbol:
        """compute() if the truth holds in any lane, else skip it: the one branch there is."""
        b = self.builder
        before = b.block
        work, after = b.append_basic_block("work"), b.append_basic_block("after")
        b.cbranch(b.icmp_unsigned("!=", b.bitcast(truth.value, ir.IntType(LANES)), _NONE), work, after)
        b.position_at_end(work)
        value = compute().value
        end = b.block
        b.branch(after)
        b.position_at_end(after)
        result = b.phi(_VECTOR)
        result.add_incoming(_splat(otherwise), before)
        result.add_incoming(value, end)
        return Symbol(b, result)

    def _value(self, x: Any) -> ir.Value:
        return x.value if isinstance(x, Symbol) else _splat(float(x))

    def _call(self, name: str, x: Symbol) -> Symbol:
        module, full = self.builder.module, f"{name}.v{LANES}f64"
        function = module.globals.get(full) or ir.Function(module, ir.FunctionType(_VECTOR, [_VECTOR]), full)
        return Symbol(self.builder, self.builder.call(function, [x.value]))


class ArrayOperations:
    """The same over NumPy arrays."""

    where = staticmethod(np.where)
    sqrt = staticmethod(np.sqrt)
    absolute = staticmethod(np.abs)

    @staticmethod
    def maximum(x: Any, y: Any) -> Any:
        """The larger; y where either is NaN."""
        return np.where(x > y, x, y)

    @staticmethod
    def minimum(x: Any, y: Any) -> Any:
        """The smaller; y where either is NaN."""
        return np.where(x < y, x, y)

    @staticmethod
    def if_any(truth: Any, compute: Callable[[], Any], otherwise: float) -> Any:
        """compute() if the truth holds anywhere, else skip it."""
        return compute() if np.any(truth) else np.full(np.shape(truth), otherwise)

    @staticmethod
    def split(x: Any) -> tuple[Any, Any]:
        """x > 0 as m·2**e with m in [sqrt(1/2), sqrt(2)): (m, e)."""
        mantissa, exponent = np.frexp(x)
        low = mantissa < np.sqrt(0.5)
        return np.where(low, 2 * mantissa, mantissa), np.where(low, exponent - 1, exponent).astype(float)


def emitted(formula: Formula, inputs: Callable[[int], tuple[int, ...]]) -> Any:
    """A function (degree, source, row, …, target, row, apart) for kernels: target rows = formula(…, source rows).

    degree : a literal while numba compiles, so each degree has instructions of its own. Then one pair per entry of
    inputs(degree): a C array and the row to read from; an entry is how many rows of LANES numbers, or, negative, how
    many single numbers of a 2-D array's row, the same in every lane. Last the target, its first row and how far the
    next ones are apart; it must not overlap a source. Returns how many lanes of the last result row are 1.
    """

    if config.DISABLE_JIT:
        return _interpreted(formula, inputs)

    @_intrinsic
    def run(typingctx: Any, degree: Any, arguments: Any) -> Any:
        """The intrinsic, typed for one degree."""
        if not isinstance(degree, types.IntegerLiteral):
            raise RequireLiteralValue("degree")
        count = degree.literal_value

        def codegen(context: Any, builder: ir.IRBuilder, sig: Any, args: Any) -> Any:
            """Load the rows, run the formula over symbols, store its results."""
            items = [builder.extract_value(args[1], k) for k in range(len(sig.args[1]))]
            kinds = list(sig.args[1])
            rows = []
            for k, size in enumerate(inputs(count)):
                array = context.make_array(kinds[2 * k])(context, builder, items[2 * k])
                rows += _read(builder, array, items[2 * k + 1], size)
            results = formula(SymbolOperations(builder), count, *rows)
            target = context.make_array(kinds[-3])(context, builder, items[-3])
            base = builder.bitcast(target.data, _VECTOR.as_pointer())
            row = items[-2]
            for result in results:
                builder.store(result.value, builder.gep(base, [row])).align = 8
                row = builder.add(row, items[-1])
            return _count_ones(builder, results[-1])

        return types.int64(degree, arguments), codegen

    return run


def _interpreted(formula: Formula, inputs: Callable[[int], tuple[int, ...]]) -> Any:
    """The same function without a compiler, over NumPy arrays."""

    def run(degree: int, arguments: tuple[Any, ...]) -> int:
        """The formula over rows of NumPy arrays."""
        *sources, target, row, apart = arguments
        rows: list[Any] = []
        for array, first, size in zip(sources[::2], sources[1::2], inputs(degree), strict=True):
            rows += list(array[first : first + size]) if size > 0 else list(array[first, :-size])
        with np.errstate(all="ignore"):
            results = formula(ArrayOperations, degree, *rows)
        for index, result in enumerate(results):
            target[row + index * apart] = result
        return int((results[-1] == 1.0).sum())

    return run


def _read(builder: ir.IRBuilder, array: Any, row: ir.Value, size: int) -> list[Symbol]:
    if size > 0:
        base = builder.bitcast(array.data, _VECTOR.as_pointer())
        loads = [builder.load(builder.gep(base, [builder.add(row, ir.Constant(_INDEX, k))])) for k in range(size)]
        for load in loads:
            load.align = 8
        return [Symbol(builder, load) for load in loads]
    columns = builder.extract_value(array.shape, 1)
    first = builder.mul(row, columns)
    found = []
    for k in range(-size):
        number = builder.load(builder.gep(array.data, [builder.add(first, ir.Constant(_INDEX, k))]))
        single = builder.insert_element(ir.Constant(_VECTOR, ir.Undefined), number, ir.Constant(ir.IntType(32), 0))
        zeros = ir.Constant(ir.VectorType(ir.IntType(32), LANES), [ir.Constant(ir.IntType(32), 0)] * LANES)
        found.append(Symbol(builder, builder.shuffle_vector(single, single, zeros)))
    return found


def _count_ones(builder: ir.IRBuilder, row: Symbol) -> ir.Value:
    """How many lanes hold exactly 1.0."""
    truths = builder.fcmp_ordered("==", row.value, _splat(1.0))
    bits = builder.bitcast(truths, ir.IntType(LANES))
    return builder.zext(builder.ctpop(bits), _INDEX)


def _intrinsic(function: Any) -> Any:
    return intrinsic(function)


def _splat(number: float) -> ir.Constant:
    return ir.Constant(_VECTOR, [ir.Constant(_DOUBLE, number)] * LANES)


def _bits(number: int) -> ir.Constant:
    return ir.Constant(_BITS, [ir.Constant(ir.IntType(64), number)] * LANES)
