"""Tasks: what is wanted of a response in, one search after the other out, for kernels.patient."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.apart import apart
from explorer.kernels.compiling import compiled
from explorer.kernels.watching import (
    HIGH,
    LOW,
    OUTSIDE,
    RISE_LEVELS,
    SEEN,
    TENTH,
    USED,
    WANT_EFFORT,
    WANT_HIGH,
    WANT_LOW,
    WANT_RISE,
    WANT_SEEN,
)  # fmt: skip

# What is searched for: the largest of sign·y, of y at samples, of |u|; the last time outside; the first time above
LARGEST, AT_SAMPLES, LARGEST_INPUT, LAST, FIRST = range(5)


@compiled(cache=False)
def task_of(turn: int, wanted: NDArray[Any], bands: NDArray[Any], found: NDArray[Any]) -> tuple[int, int, float]:
    """(what to search, column of found, level); (-1, 0, 0.0) when this turn has nothing to do."""
    apart()
    kind, column, level = -1, 0, 0.0
    if turn == 0 and wanted[WANT_HIGH]:
        kind, column, level = LARGEST, HIGH, 1.0
    elif turn == 1 and wanted[WANT_LOW]:
        kind, column, level = LARGEST, LOW, -1.0
    elif turn == 2 and wanted[WANT_SEEN]:
        kind, column, level = AT_SAMPLES, SEEN, 1.0
    elif turn == 3 and wanted[WANT_EFFORT]:
        kind, column = LARGEST_INPUT, USED
    elif turn in (4, 5) and wanted[WANT_RISE] and np.isnan(found[TENTH + turn - 4]):
        kind, column, level = FIRST, TENTH + turn - 4, RISE_LEVELS[turn - 4]
    elif turn > 5:
        kind, column, level = LAST, OUTSIDE + turn - 6, bands[turn - 6]
    return kind, column, level
