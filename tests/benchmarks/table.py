"""Table: ways of computing from a section in, best times, the machine's name and printed text out."""

from __future__ import annotations

import importlib.metadata
import os
import platform
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path
from typing import Any, TypeVar

import numpy as np
import scipy

Answer = TypeVar("Answer")


@dataclass(frozen=True)
class Table:
    """One section's result: a title, one line of headings, rows of text and notes below."""

    title: str
    headings: Sequence[str]
    rows: Sequence[Sequence[str]]
    notes: Sequence[str] = ()

    def text(self) -> str:
        """Columns as wide as their longest entry, the first to the left and the others to the right."""
        lines = [self.headings, *self.rows]
        widths = [max(len(line[column]) for line in lines) for column in range(len(self.headings))]
        body = [
            "  ".join(
                entry.ljust(width) if column == 0 else entry.rjust(width)
                for column, (entry, width) in enumerate(zip(line, widths, strict=True))
            ).rstrip()
            for line in lines
        ]
        rule = "-" * (sum(widths) + 2 * (len(widths) - 1))
        return "\n".join([self.title, rule, body[0], rule, *body[1:], rule, *self.notes])


def best_times(
    ways: Mapping[str, Callable[[], Answer]], rounds: int, check: Callable[[Mapping[str, Answer]], None]
) -> dict[str, float]:
    """Best of `rounds` wall times [s] of each way.

    The ways take turns, so a slow spell of the machine meets all of them. The answers of every round go to
    `check`, which raises if they are wrong; nothing is returned then.
    """
    best = dict.fromkeys(ways, np.inf)
    for _ in range(rounds):
        answers = {}
        for name, way in ways.items():
            start = time.perf_counter()
            answers[name] = way()
            best[name] = min(best[name], time.perf_counter() - start)
        check(answers)
    return best


def machine() -> str:
    """Processor, system, versions, date and load, one line each."""
    libraries = ", ".join(f"{name} {importlib.metadata.version(name)}" for name in ("numba", "xarray"))
    entries = {
        "date": datetime.now().astimezone().isoformat(timespec="minutes"),
        "processor": f"{_processor()}, {os.cpu_count()} cores, {platform.machine()}",
        "system": f"{platform.system()} {platform.release()}, load {_load()} before the run",
        "python": f"{platform.python_version()}, {libraries}",
        "numpy": f"{np.__version__} with {_lapack(np.show_config(mode='dicts'))}",
        "scipy": f"{scipy.__version__} with {_lapack(scipy.show_config(mode='dicts'))}",
        "BLAS threads": os.environ.get("OPENBLAS_NUM_THREADS", "not limited"),
    }
    return "\n".join(f"{name:<13} {value}" for name, value in entries.items())


def _lapack(configuration: Mapping[str, Any] | None) -> str:
    known = ((configuration or {}).get("Build Dependencies") or {}).get("lapack", {})
    return f"LAPACK of {known.get('name', 'unknown origin')} {known.get('version', '')}".rstrip()


def _processor() -> str:
    """The model's name where the system tells it."""
    try:
        lines = Path("/proc/cpuinfo").read_text(encoding="utf-8").splitlines()
    except OSError:
        lines = []
    names = [line.partition(":")[2].strip() for line in lines if line.startswith("model name")]
    return names[0] if names else platform.processor() or "processor of unknown name"


def _load() -> str:
    """The last minute's average number of running processes; a busy machine spoils the times."""
    return f"{os.getloadavg()[0]:.1f}" if hasattr(os, "getloadavg") else "unknown"
