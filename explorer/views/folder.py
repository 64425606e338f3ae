"""Folder: a run's Datasets in, its files on disk out, and back; every command that takes DIR goes through here."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping
from pathlib import Path
from typing import Any, NamedTuple

import xarray

from explorer.errors import RunError
from explorer.sweeping.store import (
    DECISION_FILE,
    SWEEP_FILE,
    VERDICT_FILE,
    read_dataset,
    write_dataset,
    write_whole,
)
from explorer.verdict.decisions import decide
from explorer.verdict.slack import judge
from explorer.views.maps import region_map, slack_map, slack_sheet
from explorer.views.plain import as_json
from explorer.views.style import save

REGION_FILE, SLACK_FILE = "region.png", "slack.png"


class Run(NamedTuple):
    """The verdict and decision of a run."""

    verdict: xarray.Dataset
    decision: dict[str, Any]


def write_answer(folder: Path, sweep: xarray.Dataset, limits: Mapping[str, str] | None = None) -> Run:
    """Judge, decide and draw; writes verdict.nc, decision.json and both pictures into the folder."""
    verdict = judge(sweep, limits)
    decision = decide(sweep, verdict)
    write_dataset(verdict, folder / VERDICT_FILE)
    write_whole(folder / DECISION_FILE, as_json(decision).encode())
    save(region_map(verdict, decision), folder / REGION_FILE)
    save(slack_sheet(verdict, decision=decision), folder / SLACK_FILE)
    return Run(verdict, decision)


def draw(
    folder: Path, show: str | None, tolerance_scale: float, design: Mapping[str, float], kind: str
) -> Path:
    """Draw the region (show None) or one field of a run as it was last judged; returns the picture's path."""
    run = read_run(folder)
    if show is None:
        figure = region_map(run.verdict, run.decision, tolerance_scale, design)
    else:
        sweep = read_sweep(folder) if show == "share" else None
        figure = slack_map(run.verdict, show, sweep, tolerance_scale, design, run.decision)
    words = [re.sub(r"[^A-Za-z0-9]+", "-", show or "region").strip("-").lower()]
    words += [f"scale-{tolerance_scale:g}"] if tolerance_scale != 1 else []
    words += [f"{name}-{value:g}" for name, value in design.items()]
    return save(figure, folder / f"{'-'.join(words)}.{kind}")


def read_sweep(folder: Path) -> xarray.Dataset:
    """The sweep of a run; RunError when there is none."""
    return read_dataset(folder / SWEEP_FILE)


def read_run(folder: Path) -> Run:
    """Verdict and decision of a run as last judged; RunError when they are missing or damaged."""
    verdict = read_dataset(folder / VERDICT_FILE)
    file = folder / DECISION_FILE
    try:
        decision = json.loads(file.read_text(encoding="utf-8"))
    except (OSError, ValueError):
        raise RunError(
            f"{file}: missing or damaged. Run `explorer judge {folder}` to write it again."
        ) from None
    return Run(verdict, decision)
