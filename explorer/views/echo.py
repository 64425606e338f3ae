"""Echo: a study as it was understood, as plain data for `check --json` and as text for the terminal."""

from __future__ import annotations

from typing import Any

import numpy as np
import scipy.linalg
from numpy.typing import NDArray

from explorer.kernels.roots import polynomial_roots
from explorer.loop.plant import rational_in
from explorer.loop.sampling import realise
from explorer.study.display import format_shown
from explorer.study.expressions import ExpressionError
from explorer.study.model import Axis, Requirement, Study
from explorer.study.quantities import format_quantity
from explorer.study.reading import fault_in
from explorer.sweeping.estimate import Estimate
from explorer.sweeping.scenarios import Scenarios


def understood(study: Study, scenarios: Scenarios, needed: Estimate) -> dict[str, Any]:
    """Everything `check` says, as plain data in SI."""
    poles, zeros = _poles_and_zeros(study)
    delay = study.loop.computing_delay
    return {
        "title": study.title,
        "file": study.file,
        "study_sha256": study.sha256,
        "plant": {
            "variable": study.plant.variable,
            "transfer": study.plant.text,
            "nominal_poles": [[pole.real, pole.imag] for pole in poles],
            "nominal_zeros": [[zero.real, zero.imag] for zero in zeros],
            "pole_unit": "1" if study.plant.variable == "z" else "1/s",
        },
        "parameters": {
            one.name: {"nominal": one.nominal, "low": one.low, "high": one.high, "unit": one.unit,
                       "variants": list(one.variants)}
            for one in study.parameters
        },
        "loop": {
            "compensator": study.loop.text,
            "conversion": study.loop.conversion,
            "computing_delay": {"seconds": delay.seconds, "periods": delay.periods},
            "sensor": study.loop.sensor_text,
            "clock_tolerance": study.loop.clock_tolerance,
            "execution_time": study.loop.execution_time,
        },
        "axes": {
            axis.name: {"from": axis.values[0], "to": axis.values[-1], "points": len(axis.values), "unit": axis.unit}
            for axis in (study.gain, study.period, *study.design)
        },
        "requirements": [
            {"name": one.name, "measure": one.measure.key, "sense": one.sense,
             "limit": None if one.sense == "below" else one.limit,
             "unit": "samples" if one.in_samples else one.unit}
            for one in study.requirements
        ],
        "scenarios": {
            "count": len(scenarios.scale),
            "by_scale": {
                f"{scale:g}": int(scenarios.within(scale).sum()) for scale in study.scenarios.tolerance_scales
            },
            "note": scenarios.note,
        },
        "assumptions": list(study.assumptions),
        "loops": needed.loops,
        "tiles": needed.tiles,
        "estimated_seconds": needed.seconds,
        "estimated_memory_bytes": needed.memory,
    }  # fmt: skip


def echo(study: Study, facts: dict[str, Any]) -> str:
    """The same for people."""
    plant = facts["plant"]
    lines = [study.title, ""]
    lines += _block("Plant", [f"in {plant['variable']}: {plant['transfer']}"])
    lines += _block(
        "  nominal poles", [_complex(pole, plant["pole_unit"]) for pole in plant["nominal_poles"]] or ["none"]
    )
    lines += _block(
        "  nominal zeros", [_complex(zero, plant["pole_unit"]) for zero in plant["nominal_zeros"]] or ["none"]
    )
    lines += _block("Parameters", [_parameter(study, one.name) for one in study.parameters] or ["none"])
    lines += _block("Loop", _loop(study))
    lines += _block("Axes", [_axis(axis) for axis in (study.gain, study.period, *study.design)])
    lines += _block("Requirements", [_requirement(study, one) for one in study.requirements])
    counts = ", ".join(f"{count} at scale {scale}" for scale, count in facts["scenarios"]["by_scale"].items())
    lines += _block(
        "Scenarios", [counts, *([facts["scenarios"]["note"]] if facts["scenarios"]["note"] else [])]
    )
    lines += _block("Assumed", facts["assumptions"] or ["nothing"])
    time, memory = _duration(facts["estimated_seconds"]), _size(facts["estimated_memory_bytes"])
    needed = f"{facts['loops']} closed loops, about {time} and {memory} here"
    return "\n".join(lines + _block("Sweep", [needed]))


def _poles_and_zeros(study: Study) -> tuple[NDArray[np.complex128], NDArray[np.complex128]]:
    values = {one.name: np.array([one.nominal]) for one in study.parameters} | {"clock": np.ones(1)}
    try:
        if study.plant.transfer is None:
            realisation = realise(study, values)
            return realisation.poles[0], _pencil_zeros(
                realisation.state[0], realisation.start[0], realisation.output[0], realisation.direct[0]
            )
        transfer = rational_in(study.plant.transfer, study.plant.variable, [1.0, 0.0], values)
        factors = [polynomial_roots(factor[0]) for factor in transfer.denominator_factors()]
        return np.concatenate([*factors, np.zeros(0, complex)]), polynomial_roots(
            _stripped(transfer.numerator()[0, 0])
        )
    except ExpressionError as error:
        raise fault_in(study, ("plant", "transfer"), study.plant.text, error) from None


def _stripped(polynomial: NDArray[np.float64]) -> NDArray[np.float64]:
    nonzero = np.flatnonzero(polynomial)
    return polynomial[nonzero[0] :] if len(nonzero) else np.ones(1)


def _pencil_zeros(
    state: NDArray[Any], start: NDArray[Any], output: NDArray[Any], direct: float
) -> NDArray[np.complex128]:
    """Invariant zeros: finite eigenvalues of the pencil [A - sI, B; C, D] (Golub and Van Loan, 4th ed., §7.7)."""
    n = len(start)
    left = np.block([[state, start[:, None]], [output[None], np.array([[direct]])]])
    right = np.zeros_like(left)
    right[:n, :n] = np.eye(n)
    above, below = scipy.linalg.eigvals(left, right, homogeneous_eigvals=True)
    finite = np.abs(below) > 1e-10 * np.abs(np.hypot(np.abs(above), np.abs(below)))
    return np.asarray(above[finite] / below[finite])


def _block(title: str, rows: list[str]) -> list[str]:
    return [f"{title if index == 0 else '':<16}{row}" for index, row in enumerate(rows)]


def _complex(value: list[float], unit: str) -> str:
    real, imaginary = value
    real += 0.0  # no minus zero
    number = (
        f"{real:.6g}"
        if imaginary == 0
        else f"{real:.6g} {'+' if imaginary > 0 else '-'} {abs(imaginary):.6g}j"
    )
    return number if unit == "1" else f"{number} {unit}"


def _parameter(study: Study, name: str) -> str:
    one = next(parameter for parameter in study.parameters if parameter.name == name)
    nominal = f"{name} = {format_shown(one.nominal, one.shown)}"
    if one.variants:
        return f"{nominal}, or {', '.join(format_shown(value, one.shown) for value in one.variants[1:])}"
    if one.varies:
        return (
            f"{nominal}, from {format_shown(one.low, one.shown)} to {format_shown(one.high, one.shown)}"
        )
    return f"{nominal}, exact"


def _loop(study: Study) -> list[str]:
    loop = study.loop
    rows = [f"compensator: {loop.text}" + (f", converted by {loop.conversion}" if loop.conversion else "")]
    if loop.computing_delay.periods:
        rows.append(f"computing delay: {loop.computing_delay.periods:g} of the period")
    elif loop.computing_delay.seconds:
        rows.append(f"computing delay: {format_quantity(loop.computing_delay.seconds, study.time_unit)}")
    if loop.sensor is not None:
        rows.append(f"sensor: {loop.sensor_text}")
    if not np.isnan(loop.execution_time):
        rows.append(f"execution time: {format_quantity(loop.execution_time, 's')}")
    if loop.clock_tolerance:
        rows.append(f"clock tolerance: ± {100 * loop.clock_tolerance:g} %")
    return rows


def _axis(axis: Axis) -> str:
    first, last = (format_shown(value, axis.shown) for value in (axis.values[0], axis.values[-1]))
    if len(axis.values) == 1:
        return f"{axis.name} = {first}"
    return f"{axis.name}: {first} to {last}, {len(axis.values)} points, {axis.spacing}"


def _requirement(study: Study, one: Requirement) -> str:
    if one.sense == "below":
        return f"{one.name}: every pole inside the unit circle"
    unit = "sample" if one.in_samples else one.unit
    return f"{one.name}: {one.measure.key} {one.sense} {format_quantity(one.limit, unit)}"


def _duration(seconds: float) -> str:
    if seconds < 90:
        return f"{max(seconds, 0.1):.1f} s"
    return f"{seconds / 60:.0f} min" if seconds < 5400 else f"{seconds / 3600:.1f} h"


def _size(size: float) -> str:
    return f"{size / 2**20:.0f} MiB" if size < 2**30 else f"{size / 2**30:.1f} GiB"
