"""Section "memory": wall time and peak memory of the whole command `explorer sweep`, by the number of loops."""

from __future__ import annotations

import tempfile
from collections.abc import Sequence
from pathlib import Path

from explorer.views.folder import read_sweep

from .children import Finished, best_runs
from .study import Grid
from .sweep import counted
from .table import Table

SIZES = (Grid(40, 20, 408), Grid(100, 80, 408), Grid(400, 200, 408))  # 1249 plants: 1e6, 1e7, 1e8 loops
WITH_LARGEST = (*SIZES, Grid(1000, 800, 408))
ROUNDS = 2


def table(grids: Sequence[Grid] = SIZES, rounds: int = ROUNDS) -> Table:
    """The section; raises RuntimeError if a command fails or a sweep leaves loops unsolved."""
    with tempfile.TemporaryDirectory() as folder:
        commands = {str(number): _command(grid, Path(folder) / str(number)) for number, grid in enumerate(grids)}
        if rounds > 1:  # else it is a trial, and may compile
            best_runs({"warm-up": commands["0"]}, rounds=1)
        best = best_runs(commands, rounds)
        rows = [_row(grid, best[name], Path(folder) / name) for name, grid in zip(best, grids, strict=True)]
    return Table(
        "Memory: the command `explorer sweep` in a process of its own, one worker per core, pictures included",
        ("loops", "plants", "gains", "periods", "best [s]", "loops/s", "largest peak [MiB]"),
        rows,
        (
            f"Best time and largest peak of resident memory of {rounds}, the sizes taking turns. Four tolerance scales",
            "and three requirements; the results alone grow with gains x periods.",
        ),
    )


def _command(grid: Grid, folder: Path) -> list[str]:
    folder.mkdir()
    study = folder / "study.toml"
    study.write_text(grid.text(), encoding="utf-8")
    return ["-m", "explorer", "sweep", str(study), "--out", str(folder), "--fresh"]


def _row(grid: Grid, best: Finished, folder: Path) -> tuple[str, ...]:
    swept = read_sweep(folder)
    plants, solved = swept.sizes["scenario"], counted(swept)
    loops = plants * grid.gains * grid.periods
    if solved != {"solved": loops}:
        raise RuntimeError(f"{loops} loops, but {swept.attrs['status_tally']}")
    return (
        f"{loops:,}", str(plants), str(grid.gains), str(grid.periods), f"{best.seconds:.2f}",
        f"{loops / best.seconds:,.0f}", f"{best.peak / 2**20:,.0f}",
    )  # fmt: skip
