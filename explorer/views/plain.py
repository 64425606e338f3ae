"""Plain data: Datasets and decisions in, JSON text that every reader takes out."""

from __future__ import annotations

import json
import math
from typing import Any

import numpy as np
import xarray


def as_json(data: Any) -> str:
    """One JSON document; infinities become "inf" and "-inf", NaN (unknown) becomes null."""
    return json.dumps(_plain(data), ensure_ascii=False, indent=2, allow_nan=False)


def verdict_summary(verdict: xarray.Dataset) -> dict[str, Any]:
    """Per tolerance scale: how many points hold, are unknown, and how often each requirement binds outside."""
    names = [str(name) for name in verdict["measure"].values]
    rows = []
    for scale in verdict["tolerance_scale"].values:
        cut = verdict.sel(tolerance_scale=scale)
        least, binding = cut["least_slack"].values, cut["binding"].values
        rows.append({
            "tolerance_scale": float(scale),
            "points": int(least.size),
            "feasible": int(cut["feasible"].values.sum()),
            "unknown": int(np.isnan(least).sum()),
            "binding_outside": {
                name: int(((binding == index) & (least < 0)).sum()) for index, name in enumerate(names)
            },
        })  # fmt: skip
    return {"title": verdict.attrs["title"], "limits": verdict.attrs["limits"].splitlines(), "scales": rows}


def summary_text(summary: dict[str, Any]) -> str:
    """The verdict's counts for people."""
    lines = [*summary["limits"], ""]
    for row in summary["scales"]:
        unknown = f", {row['unknown']} unknown" if row["unknown"] else ""
        outside = ", ".join(f"{name} {count}" for name, count in row["binding_outside"].items() if count)
        stopped = f"; outside binds: {outside}" if outside else ""
        lines.append(
            f"tolerances × {row['tolerance_scale']:g}: {row['feasible']} of {row['points']} points hold"
            f"{unknown}{stopped}"
        )
    return "\n".join(lines)


def _plain(data: Any) -> Any:
    if isinstance(data, dict):
        return {str(key): _plain(value) for key, value in data.items()}
    if isinstance(data, list | tuple):
        return [_plain(value) for value in data]
    if isinstance(data, np.generic):
        data = data.item()
    if isinstance(data, float) and not math.isfinite(data):
        return None if math.isnan(data) else "inf" if data > 0 else "-inf"
    return data
