"""Trial: expressions read for Plant and Loop in, faults of their values out, so that these come with all the others.

Evaluated at the corners of the tolerance box and along the axes (at their ends where they are long); what shows only
inside the box is found by the sweep.
"""

from __future__ import annotations

import math

import numpy as np

from explorer.study.collect import LARGEST, Collector
from explorer.study.expressions import ExpressionError, Node, names_in
from explorer.study.locate import Path
from explorer.study.model import Axis, Loop, Parameter, Plant
from explorer.study.rational import HIGHEST_DEGREE, Array, NotAffineError, Rational, evaluate
from explorer.study.schema import shown

Names = dict[str, Array]

MOST_COMBINATIONS = 5000


def try_values(
    collector: Collector,
    plant: Plant | None,
    loop: Loop | None,
    parameters: dict[str, Parameter],
    axes: dict[str, Axis],
    scales: tuple[float, ...],
) -> None:
    """Faults of an expression that has no value, answers before it is asked, is of too high an order, or is 0."""
    box = {one.name: _choices(one, scales) for one in parameters.values()}
    if plant and plant.transfer is not None:
        _try(collector, plant.transfer, plant.text, ("plant", "transfer"), plant.variable, box)
    for key, rows in (plant.states or {}).items() if plant else ():
        for node in (node for row in rows for node in row):
            _value(collector, node, f"an entry of {key}", ("plant", "states", key), "", box)
    if not loop:
        return
    if loop.sensor is not None:
        _try(collector, loop.sensor, loop.sensor_text, ("loop", "sensor"), "s", box)
    nominal = {one.name: np.array([one.nominal]) for one in parameters.values()}
    grid = {name: axis.values for name, axis in axes.items()}
    variable = "s" if loop.conversion else "z"
    _try(collector, loop.compensator, loop.text, ("loop", "compensator"), variable, nominal | grid)


def _choices(parameter: Parameter, scales: tuple[float, ...]) -> Array:
    """The values of a parameter that corners and variants are made of, ascending."""
    ends = [end for scale in scales for end in parameter.reach(scale)]
    return np.unique([*ends, parameter.nominal, *parameter.variants])


def _crossed(choices: Names) -> Names:
    """Every combination, each name with (1, combinations) values; of long lists only the ends, or those together."""
    if math.prod(len(values) for values in choices.values()) > MOST_COMBINATIONS:
        choices = {name: values[[0, -1]] for name, values in choices.items()}
    if 2 ** len(choices) > MOST_COMBINATIONS:
        return {name: values[None] for name, values in choices.items()}
    crossed = np.meshgrid(*choices.values(), indexing="ij")
    return {name: values.reshape(1, -1) for name, values in zip(choices, crossed, strict=True)}


def _try(collector: Collector, node: Node, text: str, path: Path, variable: str, names: Names) -> None:
    value = _value(collector, node, text, path, variable, names)
    if value is None:
        return
    above, below = value.degrees()
    if below > HIGHEST_DEGREE:
        collector.fault(path, f"the denominator is of degree {below}", f"allowed: up to {HIGHEST_DEGREE}")
    elif not value.numerator().any():
        collector.fault(path, f"found {shown(text)}, which is 0", "allowed: a transfer that lets something through")
    elif any((factor[..., 0] == 0).all(axis=0).any() for factor, power in value.factors if power < 0):
        collector.fault(
            path, f"the denominator's leading coefficient in {variable} vanishes somewhere",
            "allowed: one order over the whole tolerance box and all axes",
        )  # fmt: skip
    elif above > below and not (path == ("loop", "compensator") and variable == "s"):
        early = "it would need samples that are not taken yet" if variable == "z" else "nothing real is so quick"
        collector.fault(
            path, f"the numerator is of degree {above} in {variable}, the denominator of {below}: {early}",
            "allowed: up to the denominator's degree", "Add the lag or the delay that it has in truth.",
        )  # fmt: skip


def _value(
    collector: Collector, node: Node, text: str, path: Path, variable: str, choices: Names
) -> Rational | None:
    """The value; None with a fault, or where one of its names is missing or faulty itself."""
    needed = {name.name for name in names_in(node)} - {variable, "pi"}
    faulty = {part for fault in collector.faults for part in fault.key.split(".")}
    if not needed <= choices.keys() or needed & faulty:
        return None
    try:
        value, sizes = _evaluated(node, variable, {name: choices[name] for name in needed})
    except ExpressionError as error:
        collector.expression_fault(text, path, error)
        return None
    if not np.max(sizes) < LARGEST**2:
        collector.fault(path, f"found {shown(text)}", f"allowed: coefficients up to {LARGEST**2:g}")
        return None
    return value


@np.errstate(all="ignore")  # what leaves the numbers shows in the sizes
def _evaluated(node: Node, variable: str, choices: Names) -> tuple[Rational, list[Array]]:
    """The value with the gain as [[0], [1]], or gain by gain where that meets itself; and sizes of its coefficients."""
    free = {name: values for name, values in choices.items() if name != "gain"}
    symbolic = {"gain": np.array([[0.0], [1.0]])} if "gain" in choices else {}
    try:
        value = evaluate(node, variable, [1.0, 0.0], _crossed(free) | symbolic)
        numerator = value.numerator()
    except NotAffineError:
        value = evaluate(node, variable, [1.0, 0.0], _crossed(choices))
        numerator = value.numerator()
    return value, [np.abs(part).max() for part in (numerator, *(factor for factor, _ in value.factors))]
