"""Folder: a run's Datasets in, its files on disk out, and back; every command that takes DIR goes through here."""

from __future__ import annotations

import gc
import json
import re
from collections.abc import Mapping
from pathlib import Path
from typing import Any, NamedTuple

import xarray
from matplotlib.figure import Figure

from explorer.errors import OptionError, RunError
from explorer.names import GAIN, PERIOD, SCALE, SWEEP, VERDICT
from explorer.study.quantities import QuantityError, read_in_unit
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
_DECIDED = {"answer", "feasible", "tolerance_scale", "slowest_period", "recommended", "nearest", "limits"}


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
    _put(region_map(verdict, decision), folder / REGION_FILE)
    _put(slack_sheet(verdict, decision=decision), folder / SLACK_FILE)
    return Run(verdict, decision)


def _put(figure: Figure, path: Path) -> None:
    """Save a picture and give its memory back: that of a large grid is as much as the run itself."""
    save(figure, path)
    figure.clear()
    gc.collect()


def draw(
    folder: Path, show: str | None, tolerance_scale: float, place: Mapping[str, str], kind: str
) -> Path:
    """Draw the region (show None) or one field of a run as it was last judged; returns the picture's path.

    place : further design variables and their values as written, "20 ms".
    """
    run = read_run(folder)
    design = {name: _in_axis_unit(run.verdict, name, value) for name, value in place.items()}
    if show is None:
        figure = region_map(run.verdict, run.decision, tolerance_scale, design)
    else:
        sweep = read_sweep(folder) if show == "share" else None
        figure = slack_map(run.verdict, show, sweep, tolerance_scale, design, run.decision)
    named = "least slack" if show == "slack" else show or "region"  # slack.png is the sheet of all requirements
    words = [re.sub(r"\W+", "-", named).strip("-").lower() or "requirement"]
    words += [f"scale-{tolerance_scale:g}"] if tolerance_scale != 1 else []
    words += [f"{name}-{value:g}" for name, value in design.items()]
    return save(figure, folder / f"{'-'.join(words)}.{kind}")


def read_sweep(folder: Path) -> xarray.Dataset:
    """The sweep of a run; RunError when there is none, or when it is none of explorer's."""
    sweep = read_dataset(folder / SWEEP_FILE)
    if not (SWEEP.keys() <= sweep.variables.keys() and "study" in sweep.attrs):
        raise RunError(f"{folder / SWEEP_FILE}: not the sweep of a study. Run `explorer sweep STUDY --fresh`.")
    return sweep


def read_run(folder: Path) -> Run:
    """Verdict and decision of a run as last judged; RunError when they are missing or damaged."""
    verdict = read_dataset(folder / VERDICT_FILE)
    file = folder / DECISION_FILE
    try:
        decision = json.loads(file.read_text(encoding="utf-8"))
    except (OSError, ValueError, RecursionError):
        decision = None
    again = f"Run `explorer judge {folder}` to write it again."
    if not VERDICT.keys() <= verdict.variables.keys():
        raise RunError(f"{folder / VERDICT_FILE}: not the verdict of a run. {again}")
    if not (isinstance(decision, dict) and decision.keys() >= _DECIDED):
        raise RunError(f"{file}: missing or damaged. {again}")
    return Run(verdict, decision)


def _in_axis_unit(verdict: xarray.Dataset, name: str, value: str) -> float:
    """A value of a further design variable in the unit of its axis; OptionError with the reason otherwise."""
    others = [str(other) for other in verdict["least_slack"].dims if other not in (SCALE, PERIOD, GAIN)]
    if name not in others:
        raise OptionError(f"--at: no further design variable {name!r}; this run has: {', '.join(others) or 'none'}")
    try:
        return read_in_unit(value, verdict[name].attrs["units"])
    except QuantityError as error:
        raise OptionError(f"--at: {name}: {error}") from None
