"""Dataset: tile results in, the labelled sweep Dataset out; the only place where labels meet plain arrays."""

from __future__ import annotations

from datetime import UTC, datetime
from typing import Any

import numpy as np
import xarray
from numpy.typing import NDArray

import explorer
from explorer.kernels.roots import SOLVED
from explorer.measures.measuring import STATUS_MEANING
from explorer.names import GAIN, MEASURE, PARAMETER, PERIOD, SCALE, SCENARIO, SWEEP, dims_of
from explorer.study.display import format_shown
from explorer.study.model import Axis, Study
from explorer.sweeping.reduction import TileResult
from explorer.sweeping.scenarios import Scenarios
from explorer.sweeping.tiles import Tile


class Grid:
    """The sweep's arrays, filled tile by tile."""

    def __init__(self, study: Study, scenarios: Scenarios) -> None:
        self.study, self.scenarios = study, scenarios
        designs = int(np.prod([len(axis.values) for axis in study.design], dtype=int))
        plane = (designs, len(study.period.values), len(study.gain.values))
        measures, scales = len(study.requirements), len(study.scenarios.tolerance_scales)
        self.nominal = np.full((measures, *plane), np.nan)
        self.worst = np.full((measures, scales, *plane), np.nan)
        self.worst_scenario = np.full((measures, scales, *plane), -1, np.int32)
        self.share = np.zeros((scales, *plane))
        self.tally = np.zeros(len(STATUS_MEANING), np.int64)
        self.first = np.full((len(STATUS_MEANING), 2), np.nan)
        self.first_tile = np.full(len(STATUS_MEANING), np.iinfo(np.int64).max)

    def put(self, tile: Tile, result: TileResult) -> None:
        """Place one tile; tiles may come in any order: first examples are those of the first tile."""
        place = (..., tile.design, slice(tile.start, tile.stop), slice(None))
        self.nominal[place], self.worst[place] = result.nominal, result.worst
        self.worst_scenario[place], self.share[place] = result.worst_scenario, result.share
        self.tally += result.tally
        earlier = ~np.isnan(result.first[:, 0]) & (tile.number < self.first_tile)
        self.first[earlier], self.first_tile[earlier] = result.first[earlier], tile.number

    def dataset(self) -> xarray.Dataset:
        """The Dataset of the contract."""
        study = self.study
        others = tuple(axis.name for axis in study.design)
        sizes = tuple(len(axis.values) for axis in study.design)

        def shaped(array: NDArray[Any], lead: int) -> NDArray[Any]:
            """The axis of designs unfolded into one axis per design variable."""
            return array.reshape(*array.shape[:lead], *sizes, *array.shape[lead + 1 :])

        arrays = {
            "worst_value": shaped(self.worst, 2),
            "nominal_value": shaped(self.nominal, 1),
            "worst_scenario": shaped(self.worst_scenario, 2),
            "share_met": shaped(self.share, 1),
            "scenario_parameter": self.scenarios.values,
            "scenario_scale": self.scenarios.scale,
        }
        variables = {
            name: (dims_of(SWEEP[name], others), array, _attributes(name)) for name, array in arrays.items()
        }
        return xarray.Dataset(variables, self._coordinates(), self._provenance())

    def _coordinates(self) -> dict[str, Any]:
        study, scenarios = self.study, self.scenarios
        requirements = study.requirements
        return {
            MEASURE: _text([one.name for one in requirements]),
            "measure_kind": (MEASURE, _text([one.measure.key for one in requirements]), _attributes("measure_kind")),
            "measure_unit": (
                MEASURE, _text([one.unit for one in requirements]),
                _attributes("measure_unit"),
            ),
            SCALE: (SCALE, np.array(study.scenarios.tolerance_scales), {"units": "1", "long_name": "scale"}),
            **{axis.name: _axis(axis, axis.name) for axis in study.design},
            PERIOD: _axis(study.period, "sample period"),
            GAIN: _axis(study.gain, "gain"),
            SCENARIO: np.arange(len(scenarios.scale)),
            PARAMETER: _text(list(scenarios.names)),
            "parameter_unit": (PARAMETER, _text(list(scenarios.units)), _attributes("parameter_unit")),
            "parameter_shown_unit": (PARAMETER, _text(list(scenarios.shown)), _attributes("parameter_shown_unit")),
        }  # fmt: skip

    def _provenance(self) -> dict[str, Any]:
        study = self.study
        return {
            "title": study.title,
            "study": study.text,
            "study_sha256": study.sha256,
            "explorer_version": explorer.__version__,
            "seed": study.scenarios.seed,
            "created": datetime.now(UTC).isoformat(timespec="seconds"),
            "status_tally": self._status_tally(),
            "unknown_loops": int(self.tally.sum() - self.tally[SOLVED]),
            "scenario_note": self.scenarios.note,
        }

    def _status_tally(self) -> str:
        """ "solved 40000" and, per other status, how many and where first."""
        parts = [f"solved {self.tally[SOLVED]}"]
        for code, meaning in STATUS_MEANING.items():
            if code != SOLVED and self.tally[code]:
                gain, period = self.first[code]
                where = f"gain = {format_shown(gain, self.study.gain.shown)}"
                when = f"period = {format_shown(period, self.study.period.shown)}"
                count = f"{self.tally[code]} of {self.tally.sum()}"
                parts.append(f"unsolved {count} ({meaning}), first at {where}, {when}")
        return "; ".join(parts)


def _axis(axis: Axis, label: str) -> tuple[str, NDArray[np.float64], dict[str, str]]:
    return axis.name, axis.values, {
        "units": axis.unit, "shown_unit": axis.shown, "long_name": label, "spacing": axis.spacing
    }  # fmt: skip


def _attributes(name: str) -> dict[str, str]:
    stored = SWEEP[name]
    return {"long_name": stored.meaning} | ({"units": stored.unit} if stored.unit else {})


def _text(words: list[str]) -> NDArray[Any]:
    """Variable-length text, which netCDF readers of every language take."""
    return np.array(words, dtype=object)
