"""Measuring: solved groups of loops in, a value per loop for every requirement of the study out, for sweeping.

Only the families that the study asks for are computed. A loop that is not stable is at the bad end of every response
and frequency measure: +inf where the limit is an upper one, -inf where it is a lower one.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from explorer.kernels import roots
from explorer.kernels.lanes import LANES
from explorer.kernels.roots import SOLVED
from explorer.loop.closing import Group, Sampled
from explorer.loop.compensator import Compensator
from explorer.loop.solving import Solved
from explorer.measures.by_poles import BY_POLES, Reduced
from explorer.study.model import Requirement, Study

Real = NDArray[np.float64]

UNDECIDED, UNRESOLVED = 5, 6  # after those of kernels.roots
STATUS_MEANING = roots.STATUS_MEANING | {
    UNDECIDED: "response not decided within bounded work",
    UNRESOLVED: "frequency curve not resolved",
}


class Measured(NamedTuple):
    """values : (blocks, G, LANES) per requirement, NaN unknown; status : (blocks, G, LANES), see STATUS_MEANING.

    Pairs lie in lanes as in loop.solving.Solved.
    """

    values: list[Real]
    status: NDArray[np.int8]


class Measuring:
    """The measures of one tile."""

    def __init__(
        self, study: Study, sampled: Sampled, compensator: Compensator, table: Mapping[str, Real], period: Real
    ) -> None:
        """table : parameter name -> (S,) values; period : (P,) nominal periods of the tile [s]."""
        self.study, self.sampled, self.compensator = study, sampled, compensator
        self.gain = study.gain.values
        self.of_family = {
            family: [index for index, one in enumerate(study.requirements) if one.measure.family == family]
            for family in ("poles", "response", "frequency", "hardware")
        }
        if self.of_family["response"]:
            from explorer.loop.simulating import source_of

            self.source = source_of(study, table, period, sampled)

    def of(self, group: Group, solved: Solved) -> Measured:
        """Every requirement's value of a group's loops."""
        pairs = len(group.rows)
        lanes = np.minimum(np.arange(len(solved.status) * LANES), pairs - 1).reshape(-1, LANES)
        period = self.sampled.period[group.rows, group.columns][lanes][:, None]
        poles = Reduced(*solved.reductions[: len(Reduced._fields)])
        values: dict[int, Real] = {
            index: BY_POLES[one.measure.key](poles, period, one.band)
            for index in self.of_family["poles"] for one in [self.study.requirements[index]]
        }  # fmt: skip
        for index in self.of_family["hardware"]:
            load = 100.0 * self.study.loop.execution_time / period
            values[index] = np.broadcast_to(load, solved.status.shape).copy()
        status = solved.status
        if self.of_family["response"] or self.of_family["frequency"]:
            status = status.copy()
            self._simulated(group, solved, lanes, values, status)
        return Measured([values[index] for index in range(len(values))], status)

    def _simulated(
        self, group: Group, solved: Solved, lanes: NDArray[np.intp], values: dict[int, Real], status: NDArray[np.int8]
    ) -> None:
        """Response and frequency measures into `values`, and loops in which one is unknown into `status`."""
        slowest = by_pair(solved.reductions[0], len(group.rows))
        for family, code in (("response", UNDECIDED), ("frequency", UNRESOLVED)):
            indices = self.of_family[family]
            if not indices:
                continue
            asked = [self.study.requirements[index] for index in indices]
            found, unknown = (self._responses if family == "response" else self._margins)(asked, group, slowest)
            for index, one, value in zip(indices, asked, found, strict=True):
                values[index] = _with_bad_end(value, slowest, one)[lanes].transpose(0, 2, 1)
            status[unknown[lanes].transpose(0, 2, 1) & (status == SOLVED)] = code

    def _responses(
        self, asked: list[Requirement], group: Group, slowest: Real
    ) -> tuple[list[Real], NDArray[np.bool_]]:
        from explorer.measures.by_response import by_response

        return by_response(asked, self.source, self.compensator, group, self.gain, slowest)

    def _margins(self, asked: list[Requirement], group: Group, slowest: Real) -> tuple[list[Real], NDArray[np.bool_]]:
        from explorer.measures.by_frequency import by_frequency

        names, delay = [one.measure.name for one in asked], self.study.loop.computing_delay
        found, unknown = by_frequency(
            names, self.sampled, self.compensator, group, self.gain, delay, slowest < 0
        )
        return [found[name] for name in names], unknown


def by_pair(rows: NDArray[Any], pairs: int) -> NDArray[Any]:
    """Values in lanes, (blocks, G, LANES), by pair: (M, G)."""
    return rows.transpose(0, 2, 1).reshape(-1, rows.shape[1])[:pairs]


def _with_bad_end(value: Real, slowest: Real, requirement: Requirement) -> Real:
    """The value where the loop is stable, the bad end where it is not, NaN where its poles are unknown."""
    worst = -np.inf if requirement.sense == "at least" else np.inf
    return np.where(slowest < 0, value, np.where(np.isnan(slowest), np.nan, worst))
