"""Section "estimates": the time and memory that `explorer check` foretells beside those of the sweep, by study."""

from __future__ import annotations

import json
import tempfile
from collections.abc import Sequence
from pathlib import Path

from .children import ROOT, best_runs
from .study import Grid
from .table import Table

STUDIES = tuple(sorted((ROOT / "configs").glob("*.toml")))
LARGE = Grid(gains=200, periods=160, interior=408)  # 40 million loops
FACTOR, ROUNDS = 2.0, 2  # an estimate within this factor is one to plan by
SWEEP = "import sys, explorer; explorer.sweep(explorer.read_study(sys.argv[1]), out=sys.argv[2], fresh=True)"


def table(studies: Sequence[Path] = STUDIES, large: Grid = LARGE, rounds: int = ROUNDS) -> Table:
    """The section; raises RuntimeError if a command fails. A bad estimate is marked, not an error."""
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "large.toml"
        path.write_text(large.text(), encoding="utf-8")
        rows = [_row(study, Path(folder) / "run", rounds) for study in (*studies, path)]
    return Table(
        "Estimates: what `explorer check` foretells beside what the sweep takes, each in a process of its own",
        ("study", "loops", "told s", "sweep s", "ratio", "command s", "told MiB", "command MiB", "ratio", ""),
        rows,
        (
            "Told: by the last run, when nothing is left to compile. Sweep: process start, study file in, sweep.nc",
            f"out; command: `explorer sweep`, with verdict and pictures. Best times and largest peaks of {rounds}, in",
            f"turns; ratio: told over taken, ! where one is beyond a factor of {FACTOR:g}.",
        ),
    )


def _row(study: Path, folder: Path, rounds: int) -> tuple[str, ...]:
    check = ["-m", "explorer", "check", str(study), "--json"]
    commands = {
        "check": check, "sweep": ["-c", SWEEP, str(study), str(folder)],
        "command": ["-m", "explorer", "sweep", str(study), "--out", str(folder), "--fresh"],
    }  # fmt: skip
    if rounds > 1:  # else it is a trial, and may compile
        best_runs({"check": check}, rounds=1)
    best = best_runs(commands, rounds)
    told = json.loads(best["check"].output)
    seconds, memory = told["estimated_seconds"], told["estimated_memory_bytes"]
    ratios = seconds / best["sweep"].seconds, memory / best["command"].peak
    beyond = any(max(ratio, 1 / ratio) > FACTOR for ratio in ratios)
    return (
        study.stem, f"{told['loops']:,}", f"{seconds:.2f}", f"{best['sweep'].seconds:.2f}", f"{ratios[0]:.2f}",
        f"{best['command'].seconds:.2f}", f"{memory / 2**20:,.0f}", f"{best['command'].peak / 2**20:,.0f}",
        f"{ratios[1]:.2f}", "!" if beyond else "",
    )  # fmt: skip
