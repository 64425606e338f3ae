"""Promises: a study and the places of a decision in, what poles promise there and what responses keep out."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from explorer.study.model import Study
from explorer.study.quantities import format_quantity
from explorer.sweeping.probing import twin_of, values_at

_AS_STATED = 1.0  # tolerance scale


def promises_kept(study: Study, places: Mapping[str, Mapping[str, Any] | None]) -> list[dict[str, Any]]:
    """How far the true response is from a requirement that is read from the poles.

    Parameters
    ----------
    places : name of a place ("recommended", "slowest period") -> its period, gain and design, or None.

    Returns
    -------
    A dict per place and requirement: requirement, place, by_poles and by_response, the worst of each over the scenarios
    within the tolerances as stated (unit of the measure, NaN unknown), and unit. Empty where none is read from poles.
    """
    pairs = [(one, twin) for one in study.requirements if (twin := twin_of(one)) is not None]
    if not pairs:
        return []
    requirements = tuple(one for pair in pairs for one in pair)
    found = []
    for name, place in places.items():
        if place is None:
            continue
        at = {"gain": place["gain"], **place["design"]}
        if study.plant.variable == "s":
            at["period"] = place.get("grid_period", place["period"])
        scenarios, values = values_at(study, at, requirements)
        inside = values[:, scenarios.within(_AS_STATED)]
        for index, (one, _) in enumerate(pairs):
            worst = np.min if one.sense == "at least" else np.max
            by_poles, by_response = (float(worst(inside[2 * index + k])) for k in range(2))
            found.append({
                "requirement": one.name, "place": name, "by_poles": by_poles, "by_response": by_response,
                "unit": one.unit, "measure": one.measure.name,
            })  # fmt: skip
    return found


def in_words(promises: list[dict[str, Any]]) -> list[str]:
    """A sentence per place."""
    sentences = []
    for place in dict.fromkeys(one["place"] for one in promises):
        parts = [
            f"{format_quantity(one['by_poles'], one['unit'])} {one['measure']}, the worst plant's response "
            f"{_shows(one['by_response'], one['unit'])}"
            for one in promises if one["place"] == place
        ]  # fmt: skip
        sentences.append(f"At the {place} the poles promise {'; '.join(parts)}.")
    return sentences


def _shows(value: float, unit: str) -> str:
    if np.isnan(value):
        return "is unknown"
    return "never gets there" if np.isinf(value) else f"shows {format_quantity(value, unit)}"
