"""Plant: expressions from study in, lower triangular realisations (or a pulse transfer) for hold and closing out.

Every array has the scenarios first. Values of parameters come as a mapping name -> (S,) float.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from explorer.kernels.roots import polynomial_roots
from explorer.study.expressions import ExpressionError, Node
from explorer.study.rational import Rational, evaluate

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


@dataclass(frozen=True)
class Realisation:
    """state : (S, n, n) lower triangular [1/s], start : (S, n), output : (S, n), direct : (S,) real."""

    state: Complex
    start: Complex
    output: Complex
    direct: Real

    @property
    def order(self) -> int:
        """Number of states."""
        return int(self.start.shape[1])

    @property
    def poles(self) -> Complex:
        """(S, n) poles [1/s]."""
        return np.asarray(np.diagonal(self.state, axis1=1, axis2=2))


def rational_in(node: Node, variable: str, polynomial: list[float], values: Mapping[str, Real]) -> Rational:
    """A transfer over scenarios; see study.rational.evaluate. values : name -> (S,)."""
    return evaluate(node, variable, polynomial, {name: value[None] for name, value in values.items()})


def realise_transfer(node: Node, values: Mapping[str, Real], scenarios: int) -> Realisation:
    """A proper transfer in s as a chain of first-order sections (Newton form over its poles).

    Section k integrates section k-1 with pole λ_k, so 1/((s-λ_1)...(s-λ_k)) is read at its output and the
    numerator's Newton coefficients are the output weights.

    Raises
    ------
    ExpressionError : improper, or of an order that changes inside the tolerance box.
    """
    transfer = rational_in(node, "s", [1.0, 0.0], values)
    numerator = _spread(transfer.numerator()[0], scenarios)
    factors = [_spread(factor, scenarios) for factor in transfer.denominator_factors()]
    if any((factor[:, 0] == 0).any() for factor in factors):
        raise ExpressionError(
            1, "the order of the transfer changes inside the tolerance box (a leading coefficient is 0);"
        )
    leading = np.prod([factor[:, 0] for factor in factors], axis=0) if factors else np.ones(scenarios)
    poles = np.concatenate(
        [polynomial_roots(factor) for factor in factors] or [np.zeros((scenarios, 0), complex)], axis=1
    )
    order = poles.shape[1]
    if numerator.shape[1] - 1 > order:
        raise ExpressionError(
            1,
            f"the numerator is of degree {numerator.shape[1] - 1}, the denominator of {order}: no plant is;",
        )
    remaining = np.zeros((scenarios, order + 1), complex)
    remaining[:, order + 1 - numerator.shape[1] :] = numerator / leading[:, None]
    output = np.zeros((scenarios, order), complex)
    for k in range(order - 1, -1, -1):
        remaining, output[:, k] = _divide_by_root(remaining, poles[:, k])
    # A common rate puts all sections on one scale whatever the unit of time
    rate = np.abs(poles).max(axis=1, initial=0.0)
    rate[rate == 0] = 1.0
    state = np.zeros((scenarios, order, order), complex)
    state[:, np.arange(order), np.arange(order)] = poles
    state[:, np.arange(1, order), np.arange(order - 1)] = rate[:, None]
    start = np.zeros((scenarios, order), complex)
    start[:, :1] = 1.0
    output /= rate[:, None] ** np.arange(order)
    return Realisation(state, start, output, remaining[:, 0].real)


def realise_states(
    states: Mapping[str, tuple[tuple[Node, ...], ...]], values: Mapping[str, Real], scenarios: int
) -> Realisation:
    """State matrices (single input, single output) brought to lower triangular form by a unitary change of states.

    Source: complex Schur form after balancing, Golub and Van Loan, Matrix Computations, 4th ed., §7.1, §7.5.
    """
    matrix = {key: _matrix(rows, values, scenarios) for key, rows in states.items()}
    order = matrix["A"].shape[1]
    state = np.empty((scenarios, order, order), complex)
    start, output = np.empty((scenarios, order), complex), np.empty((scenarios, order), complex)
    for index in range(scenarios):
        balanced, scaling = scipy.linalg.matrix_balance(matrix["A"][index], permute=False)
        upper, unitary = scipy.linalg.schur(balanced, output="complex")
        scale = np.diag(scaling)
        state[index] = upper[::-1, ::-1]  # reversed states: upper becomes lower triangular
        start[index] = (unitary.conj().T @ (matrix["B"][index][:, 0] / scale))[::-1]
        output[index] = ((matrix["C"][index][0] * scale) @ unitary)[::-1]
    direct = matrix["D"][:, 0, 0] if "D" in matrix else np.zeros(scenarios)
    return Realisation(state, start, output, direct)


def in_series(first: Realisation, second: Realisation) -> Realisation:
    """The second fed by the first; still lower triangular."""
    scenarios, lead, tail = len(first.direct), first.order, second.order
    state = np.zeros((scenarios, lead + tail, lead + tail), complex)
    state[:, :lead, :lead] = first.state
    state[:, lead:, lead:] = second.state
    state[:, lead:, :lead] = second.start[:, :, None] * first.output[:, None, :]
    start = np.concatenate([first.start, second.start * first.direct[:, None]], axis=1)
    output = np.concatenate([first.output * second.direct[:, None], second.output], axis=1)
    return Realisation(state, start, output, first.direct * second.direct)


def _divide_by_root(polynomial: Complex, root: Complex) -> tuple[Complex, Complex]:
    """Quotient and remainder by (s - root), descending coefficients."""
    quotient = polynomial.copy()
    for index in range(1, polynomial.shape[1]):
        quotient[:, index] += root * quotient[:, index - 1]
    return quotient[:, :-1], quotient[:, -1]


def _matrix(rows: tuple[tuple[Node, ...], ...], values: Mapping[str, Real], scenarios: int) -> Real:
    result = np.empty((scenarios, len(rows), len(rows[0])))
    for i, row in enumerate(rows):
        for j, node in enumerate(row):
            result[:, i, j] = rational_in(node, "", [1.0, 0.0], values).scale[0]
    return result


def _spread(polynomial: Real, scenarios: int) -> Real:
    """One row per scenario, also where no parameter stood in the expression."""
    return np.broadcast_to(polynomial, (scenarios, polynomial.shape[-1])).copy()
