"""Running: a study in, its sweep Dataset out; tiles go through joblib and, given a folder, through the store."""

from __future__ import annotations

import functools
import hashlib
import warnings
from collections.abc import Callable, Iterator
from pathlib import Path

import joblib
import xarray

import explorer
from explorer.errors import OptionError, RunError
from explorer.names import SWEEP
from explorer.study.model import Study
from explorer.sweeping.cluster import computed_on_cluster
from explorer.sweeping.dataset import Grid
from explorer.sweeping.reduction import TileResult
from explorer.sweeping.scenarios import Scenarios, scenarios_of
from explorer.sweeping.store import SWEEP_FILE, TileStore, owned, read_dataset, write_dataset
from explorer.sweeping.tiles import Tile, compute, loops_by_delay, tiles_of

Progress = Callable[[int, int], None]  # tiles finished, tiles in all
Work = Callable[[list[Tile]], Iterator[tuple[Tile, TileResult]]]  # tiles in, their results as they finish out


def sweep(
    study: Study,
    out: str | Path | None = None,
    jobs: int = -1,
    fresh: bool = False,
    progress: Progress | None = None,
    cluster: str | None = None,
) -> xarray.Dataset:
    """Sweep a study over gain, period, further design variables and scenarios.

    Parameters
    ----------
    out : folder for sweep.nc; a stopped run there is continued. None keeps everything in memory.
    jobs : worker threads, -1 for one per core; the numbers do not depend on it.
    fresh : start over although a run of this study is there.
    progress : called after every tile.
    cluster : address of the scheduler of a running Dask cluster that computes the tiles; needs the extra `cluster`.

    Raises
    ------
    StudyError : an expression has no value somewhere on the axes; RunError : the folder or the cluster cannot be used;
    IncompleteError : some tiles could not be computed or written, the others stay in the folder.
    """
    if jobs != -1 and jobs < 1:
        raise OptionError(f"jobs: found {jobs}; allowed: 1 or more, or -1 for one per core")
    scenarios = scenarios_of(study)
    tiles = tiles_of(study, len(scenarios.scale))
    work = functools.partial(_computed, study, scenarios, jobs=jobs, cluster=cluster)
    if out is None:
        return _in_memory(study, scenarios, tiles, work, progress)
    folder = Path(out)
    with owned(folder):
        return _in_folder(study, scenarios, tiles, folder, work, fresh, progress)


def run_key(study: Study) -> str:
    """What two runs must share to share tiles: the study's text and the program's version."""
    return hashlib.sha256(f"{study.sha256} {explorer.__version__}".encode()).hexdigest()[:16]


def _in_memory(
    study: Study, scenarios: Scenarios, tiles: list[Tile], work: Work, progress: Progress | None
) -> xarray.Dataset:
    grid = Grid(study, scenarios)
    for done, (tile, result) in enumerate(work(tiles), 1):
        grid.put(tile, result)
        if progress:
            progress(done, len(tiles))
    return grid.dataset()


def _in_folder(
    study: Study,
    scenarios: Scenarios,
    tiles: list[Tile],
    folder: Path,
    work: Work,
    fresh: bool,
    progress: Progress | None,
) -> xarray.Dataset:
    store, file = TileStore(folder, run_key(study)), folder / SWEEP_FILE
    if fresh:
        store.clear_all()
    elif (known := _finished(study, file)) is not None:
        store.clear()  # a run killed at its very end leaves them
        return known
    store.refuse_others()
    grid = Grid(study, scenarios)
    missing = []
    for tile in tiles:
        stored = store.get(tile.number)
        if stored is None:
            missing.append(tile)
        else:
            grid.put(tile, stored)
    for done, (tile, result) in enumerate(work(missing), len(tiles) - len(missing) + 1):
        store.put(tile.number, result)
        grid.put(tile, result)
        if progress:
            progress(done, len(tiles))
    dataset = grid.dataset()
    write_dataset(dataset, file)
    store.clear()
    return dataset


def _finished(study: Study, file: Path) -> xarray.Dataset | None:
    """The Dataset of a finished run of this study by this version; None also where the file is damaged."""
    try:
        known = read_dataset(file)
    except RunError:
        return None
    same = (known.attrs.get("study_sha256"), known.attrs.get("explorer_version"))
    whole = all(name in known.variables for name in SWEEP)
    return known if whole and same == (study.sha256, explorer.__version__) else None


def _computed(
    study: Study, scenarios: Scenarios, tiles: list[Tile], jobs: int, cluster: str | None
) -> Iterator[tuple[Tile, TileResult]]:
    """Tiles as they finish. Threads: LAPACK and the kernels release the interpreter, and nothing is copied."""
    if not tiles:
        return
    if cluster is not None:
        yield from computed_on_cluster(study, tiles, cluster)
        return
    alike = loops_by_delay(study, scenarios)

    def solve(tile: Tile) -> tuple[Tile, TileResult]:
        """One tile and its result."""
        return tile, compute(study, scenarios, tile, alike)

    if jobs == 1:
        yield from map(solve, tiles)
        return
    work = (joblib.delayed(solve)(tile) for tile in tiles)
    workers = min(joblib.cpu_count() if jobs == -1 else jobs, len(tiles)) or 1
    finished = joblib.Parallel(n_jobs=workers, prefer="threads", return_as="generator_unordered")(work)
    try:
        # not yield from, which would close `finished` before the warning is silenced
        for pair in finished:  # noqa: UP028
            yield pair
    finally:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # joblib counts the tiles that a stopped run left unused
            finished.close()
