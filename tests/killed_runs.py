"""Killed runs: a sweep killed with SIGKILL at random moments, resumed, and held against one left alone.

Run by test_store as a process of its own: `python killed_runs.py FOLDER TRIALS SEED`. It prints how many trials were
killed before their end and how many tiles the killed runs left behind; it fails when any bit differs.
"""

from __future__ import annotations

import os
import random
import shutil
import signal
import sys
import time
from pathlib import Path

from small_study import SPREAD, same, study_of

import explorer
from explorer.sweeping import tiles
from explorer.sweeping.store import SWEEP_FILE, read_dataset

PERIODS = '{ from = 0.11, to = 0.4, points = 60, spacing = "linear" }'


def killed(study, folder: Path, after: float) -> bool:
    """Start a sweep into the folder and kill it after so many seconds; whether it was still running then."""
    child = os.fork()
    if not child:
        explorer.sweep(study, out=folder, jobs=2)
        os._exit(0)
    end = time.perf_counter() + after
    while time.perf_counter() < end:
        if os.waitpid(child, os.WNOHANG)[0]:
            return False
        time.sleep(0.001)
    os.kill(child, signal.SIGKILL)
    os.waitpid(child, 0)
    return True


def main(folder: Path, trials: int, seed: int) -> None:
    tiles.LOOPS_IN_TILE, tiles.FEWEST_LOOPS = 4_000, 1
    study = study_of(**SPREAD | {"period": PERIODS})
    undisturbed = explorer.sweep(study, jobs=1)
    explorer.sweep(study, out=folder / "first", jobs=1)  # loads all; no thread may live when this process forks
    start = time.perf_counter()
    killed(study, folder / "timed", after=60)
    duration = time.perf_counter() - start
    moments, stopped, left, trial = random.Random(seed), 0, 0, 0
    while stopped < trials and trial < 4 * trials:  # on a busy machine the times vary, and some end before
        trial += 1
        out = folder / f"trial-{trial}"
        stopped += killed(study, out, moments.uniform(0, duration))
        left += len(list(out.glob("tiles-*/tile-*.npz")))
        resumed = explorer.sweep(study, out=out, jobs=1)
        assert same(resumed, undisturbed), f"trial {trial} differs"
        assert same(read_dataset(out / SWEEP_FILE), undisturbed), f"file of trial {trial} differs"
        assert not list(out.glob("tiles-*")), f"trial {trial} left tiles behind"
        shutil.rmtree(out)
    print(stopped, left)


if __name__ == "__main__":
    main(Path(sys.argv[1]), int(sys.argv[2]), int(sys.argv[3]))
