"""Children: commands from memory and estimates in, the wall time and peak memory of each in a process of its own out.

Linux hands the peak of a process on to what it starts: a command started from here, with NumPy and more loaded,
could never be seen to take less than that. So this file, run by itself, starts it, and loads next to nothing.
"""

from __future__ import annotations

import json
import resource
import subprocess
import sys
import time
from collections.abc import Mapping, Sequence
from pathlib import Path
from typing import NamedTuple

ROOT = Path(__file__).parents[2]
PEAK_UNIT = 1 if sys.platform == "darwin" else 1024  # of ru_maxrss, in bytes


class Finished(NamedTuple):
    """seconds from start to end of the process; peak of its resident memory [bytes]; output : what it printed."""

    seconds: float
    peak: int
    output: str


def best_runs(commands: Mapping[str, Sequence[str]], rounds: int) -> dict[str, Finished]:
    """Arguments of Python for each, run in turns: the shortest time, the largest peak and the last output of each."""
    best: dict[str, Finished] = {}
    for _ in range(rounds):
        for name, command in commands.items():
            now, known = alone(command), best.get(name)
            if known:
                now = Finished(min(now.seconds, known.seconds), max(now.peak, known.peak), now.output)
            best[name] = now
    return best


def alone(command: Sequence[str]) -> Finished:
    """One run of Python with these arguments, in the repository's root; RuntimeError if it fails."""
    starter = [sys.executable, "-P", __file__, sys.executable, *command]
    told = json.loads(subprocess.run(starter, cwd=ROOT, capture_output=True, text=True, check=True).stdout)
    if told.pop("status") != 0:
        raise RuntimeError(f"python {' '.join(command)}:\n{told['output']}")
    return Finished(**told)


def _start(command: Sequence[str]) -> None:
    """Run a command and print what is to be known of it as JSON."""
    start = time.perf_counter()
    done = subprocess.run(command, stdout=subprocess.PIPE, stderr=subprocess.STDOUT, text=True, check=False)
    seconds = time.perf_counter() - start
    peak = resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss * PEAK_UNIT
    print(json.dumps({"status": done.returncode, "seconds": seconds, "peak": peak, "output": done.stdout}))


if __name__ == "__main__":
    _start(sys.argv[1:])
