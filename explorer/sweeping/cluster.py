"""Cluster: tiles to the workers of a running Dask cluster, their results back to running; needs the extra `cluster`.

Tiles are futures of their own: one that keeps killing its worker is given up and named while the rest finishes, and
workers may die or join at any time. The numbers do not depend on which worker computed a tile.
"""

from __future__ import annotations

import functools
from collections.abc import Iterator
from typing import Any

import explorer
from explorer.errors import ExplorerError, IncompleteError, OptionError, RunError
from explorer.measures.asking import read_study
from explorer.study.model import Study
from explorer.sweeping.reduction import TileResult
from explorer.sweeping.scenarios import Scenarios, scenarios_of
from explorer.sweeping.tiles import Tile, compute, loops_by_delay

WAIT = 20  # seconds for the scheduler to answer, and for a first worker
_AHEAD = 3  # tiles handed out per worker thread, so that none waits and few results lie about


def computed_on_cluster(study: Study, tiles: list[Tile], address: str) -> Iterator[tuple[Tile, TileResult]]:
    """Tiles as they finish.

    Raises
    ------
    OptionError : the extra is not installed or the address is none. RunError : nobody answers there, there is no
        worker, or one has other versions. IncompleteError, after all others : tiles that killed all their workers.
    """
    distributed = _distributed()
    try:
        client = distributed.Client(address, timeout=WAIT, set_as_default=False)
    except (OSError, TimeoutError) as error:
        raise RunError(f"--cluster: no scheduler answers at {address} ({error or 'no answer'})") from None
    except ValueError as error:
        allowed = "allowed: tcp://HOST:PORT or tls://HOST:PORT"
        raise OptionError(f"--cluster: found {address!r}; {allowed} ({error})") from None
    with client:
        _check_workers(client, address)
        yield from _finished(distributed, client, study, tiles)


def _distributed() -> Any:
    try:
        import distributed
    except ImportError:
        raise OptionError("--cluster needs the extra: pip install 'explorer[cluster]'") from None
    return distributed


def versions() -> tuple[str, ...]:
    """What client and workers must share for their numbers to be the same."""
    import llvmlite
    import numba
    import numpy
    import scipy

    named = (("explorer", explorer), ("numpy", numpy), ("scipy", scipy), ("numba", numba), ("llvmlite", llvmlite))
    return tuple(f"{name} {module.__version__}" for name, module in named)


def _check_workers(client: Any, address: str) -> None:
    try:
        client.wait_for_workers(1, timeout=WAIT)
    except TimeoutError:
        raise RunError(f"--cluster: the scheduler at {address} has no worker; start one with `dask worker`") from None
    found = client.run(versions, on_error="return")
    problems = [f"{worker}: {_difference(answer)}" for worker, answer in found.items() if answer != versions()]
    if problems:
        rule = "--cluster: workers must have what this machine has, or their numbers differ:"
        raise RunError("\n".join([rule, *problems]))


def _difference(answer: Any) -> str:
    if not isinstance(answer, tuple):
        return f"cannot run explorer ({answer}); install it there"
    pairs = zip(answer, versions(), strict=True)
    return ", ".join(f"{theirs} instead of {ours}" for theirs, ours in pairs if theirs != ours)


@functools.lru_cache(maxsize=2)
def _prepared(text: str) -> tuple[Study, Scenarios, dict[int, int]]:
    """A study on a worker, read once for all its tiles."""
    study = read_study(text=text)
    scenarios = scenarios_of(study)
    return study, scenarios, loops_by_delay(study, scenarios)


def solve(text: str, tile: Tile, wanted: tuple[str, ...]) -> TileResult:
    """One tile on a worker, which may have joined after the others were asked for their versions."""
    if versions() != wanted:
        raise RunError(f"--cluster: a worker that joined has other versions: {', '.join(versions())}")
    study, scenarios, alike = _prepared(text)
    return compute(study, scenarios, tile, alike)


def _finished(distributed: Any, client: Any, study: Study, tiles: list[Tile]) -> Iterator[tuple[Tile, TileResult]]:
    waiting, given_up, wanted = list(reversed(tiles)), [], versions()
    running: dict[Any, Tile] = {}

    def hand_out() -> list[Any]:
        """Futures of further tiles, as many as keep the workers busy."""
        threads = max(1, sum(client.nthreads().values()))
        fresh = []
        while waiting and len(running) < _AHEAD * threads:
            tile = waiting.pop()
            future = client.submit(solve, study.text, tile, wanted, pure=False)
            running[future] = tile
            fresh.append(future)
        return fresh

    finished = distributed.as_completed(hand_out(), loop=client.loop, raise_errors=False)
    for future in finished:
        tile, error = running.pop(future), future.exception()
        if error is None:
            yield tile, future.result()
        elif isinstance(error, distributed.KilledWorker):
            given_up.append(tile)
        elif isinstance(error, ExplorerError):
            raise error
        else:
            raise IncompleteError(f"--cluster: {_place(study, tile)} failed with {type(error).__name__}: {error}")
        future.release()
        finished.update(hand_out())
    if given_up:
        places = "; ".join(_place(study, tile) for tile in given_up)
        raise IncompleteError(
            f"--cluster: {len(given_up)} of {len(tiles)} tiles killed every worker they ran on ({places}). The others "
            "are finished and stay; the same command tries these again, with --jobs 1 on this machine for instance."
        )


def _place(study: Study, tile: Tile) -> str:
    period = study.period.values
    return f"tile {tile.number}, periods {period[tile.start]:.4g} to {period[tile.stop - 1]:.4g} {study.time_unit}"
