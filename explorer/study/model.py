"""The study as understood: reading fills these frozen records, every floor above reads them.

All numbers are SI (requirement limits: the measure's unit) and every unit text is kept for people.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from explorer.study.expressions import Node

RESERVED = ("gain", "period", "s", "z", "pi", "clock")  # names a parameter or design variable cannot take


@dataclass(frozen=True)
class Measure:
    """One measure as users name it.

    basis : "poles", "response" or "" where only one reading exists; key : unique, name and basis together.
    better : "less" or "more", the direction in which a design improves; the worst scenario is the other end.
    takes_limit : False for stability, whose limit 1 is part of its definition.
    band : default band for measures that have one, else None; in_samples : a limit may count samples.
    family : what it is computed from, "poles", "response", "frequency" or "hardware"; unit : "" where it is that of the
    plant's output or input. inputs : references it may be asked for; needs : keys of [loop] it cannot do without.
    """

    name: str
    basis: str
    unit: str
    better: str
    definition: str
    source: str
    takes_limit: bool = True
    band: float | None = None
    in_samples: bool = False
    family: str = "poles"
    inputs: tuple[str, ...] = ()
    needs: tuple[str, ...] = ()

    @property
    def key(self) -> str:
        """Name and basis in one word group, e.g. "settling time by poles"."""
        return f"{self.name} by {self.basis}" if self.basis else self.name


@dataclass(frozen=True)
class Parameter:
    """A plant parameter: exact (low = high = nominal), a range, or discrete variants (nominal first).

    unit : SI, "" when none was stated; shown : the unit to show people, see study.display.
    """

    name: str
    nominal: float
    low: float
    high: float
    unit: str
    shown: str = ""
    variants: tuple[float, ...] = ()

    @property
    def varies(self) -> bool:
        """Whether tolerance scales move it."""
        return self.low < self.high

    def reach(self, scale: float) -> tuple[float, float]:
        """Lowest and highest value inside `scale` times the tolerance."""
        return self.nominal - scale * (self.nominal - self.low), self.nominal + scale * (
            self.high - self.nominal
        )


@dataclass(frozen=True)
class Axis:
    """One swept variable: values ascending, in SI; unit, and the one to show; spacing "log", "linear" or "values"."""

    name: str
    values: NDArray[np.float64]
    unit: str
    shown: str
    spacing: str


@dataclass(frozen=True)
class Plant:
    """Transfer in "s" or "z", or state matrices of expressions; sampled_at only for z ("sample" unit: 1.0)."""

    variable: str
    transfer: Node | None
    states: dict[str, tuple[tuple[Node, ...], ...]] | None
    dead_time: Node | None
    sampled_at: float | None
    text: str


@dataclass(frozen=True)
class Delay:
    """A time: `seconds` fixed, plus `periods` times the true sample period."""

    seconds: float = 0.0
    periods: float = 0.0


@dataclass(frozen=True)
class Loop:
    """Everything around the plant. conversion : "" for a compensator in z; exact_at [rad/s] for the bilinear one.

    sensor : transfer in s or None; clock_tolerance : relative; execution_time : s or NaN when not stated.
    coefficient_bits : word length of the compensator's coefficients, 0 for exact ones.
    """

    compensator: Node
    text: str
    conversion: str
    exact_at: float
    computing_delay: Delay
    sensor: Node | None
    sensor_text: str
    clock_tolerance: float
    execution_time: float
    coefficient_bits: int = 0


@dataclass(frozen=True)
class ScenarioPlan:
    """How the tolerance box is sampled: points inside per scale, corners or not, seed, ascending scales."""

    interior: int
    corners: bool
    seed: int
    tolerance_scales: tuple[float, ...]


@dataclass(frozen=True)
class Requirement:
    """One requirement: limit in the measure's unit, or in samples; scale divides the slack.

    limit : NaN for stability; sense : "at least", "at most" or "below"; band : settling band or NaN;
    reference : "step" or "ramp" where the measure knows both, else ""; unit : of its values and limit, "" when none.
    """

    name: str
    measure: Measure
    sense: str
    limit: float
    in_samples: bool
    scale: float
    band: float
    reference: str = ""
    unit: str = ""

    def limits(self, period: NDArray[np.float64]) -> NDArray[np.float64]:
        """The limit at each sample period, in the measure's unit (1 for stability)."""
        if self.sense == "below":
            return np.ones_like(period)
        return self.limit * period if self.in_samples else np.full_like(period, self.limit)

    def scales(self, period: NDArray[np.float64]) -> NDArray[np.float64]:
        """What the slack is divided by at each period: the stated scale, or the size of the limit."""
        if not np.isnan(self.scale):
            return np.full_like(period, self.scale)
        return np.abs(self.limits(period))


@dataclass(frozen=True)
class Study:
    """A whole question. period holds one value for a plant given in z; design are the further axes in order."""

    title: str
    plant: Plant
    parameters: tuple[Parameter, ...]
    loop: Loop
    gain: Axis
    period: Axis
    design: tuple[Axis, ...]
    scenarios: ScenarioPlan
    requirements: tuple[Requirement, ...]
    text: str
    sha256: str
    file: str
    assumptions: tuple[str, ...] = field(default=())

    @property
    def time_unit(self) -> str:
        """Unit of times: "s", or "sample" when the plant is sampled at one normalised sample."""
        return self.period.unit if self.period.unit == "sample" else "s"
