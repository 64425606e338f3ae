"""Region: least slack on the grid in, the feasible region's windows and slowest period out, for decisions.

Edges lie between grid points: the slack is interpolated linearly along the axis (along its logarithm where the
axis is all positive). A neighbour that is unknown or at -inf gives no slope, and the edge stays on the grid.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Real = NDArray[np.float64]


def slowest_period(slack: Real, period: Real) -> tuple[float, int, int] | None:
    """Edge of the region towards longer periods.

    Parameters
    ----------
    slack : (P, G) least slack, NaN unknown; period : (P,) ascending.

    Returns
    -------
    (interpolated period, row, column) of the slowest point, None when nothing is feasible.
    """
    rows = np.flatnonzero((slack >= 0).any(axis=1))
    if not len(rows):
        return None
    row = int(rows[-1])
    columns = np.flatnonzero(slack[row] >= 0)
    if row == len(period) - 1:
        return float(period[row]), row, int(columns[slack[row, columns].argmax()])
    edges = np.array(
        [crossing(period[row], period[row + 1], slack[row, g], slack[row + 1, g]) for g in columns]
    )
    best = np.lexsort((slack[row, columns], edges))[-1]
    return float(edges[best]), row, int(columns[best])


def gain_windows(slack: Real, gain: Real) -> list[tuple[float, float, int]]:
    """Every run of feasible gains of one row: (lower edge, upper edge, column of the largest slack).

    slack : (G,), NaN unknown; gain : (G,) ascending. An edge at the axis' end is the end itself.
    """
    held = np.concatenate([[False], slack >= 0, [False]])
    starts, stops = np.flatnonzero(~held[:-1] & held[1:]), np.flatnonzero(held[:-1] & ~held[1:]) - 1
    windows = []
    for start, stop in zip(starts, stops, strict=True):
        low, high = gain[start], gain[stop]
        if start > 0:
            low = crossing(gain[start], gain[start - 1], slack[start], slack[start - 1])
        if stop < len(gain) - 1:
            high = crossing(gain[stop], gain[stop + 1], slack[stop], slack[stop + 1])
        windows.append((float(low), float(high), int(start + slack[start : stop + 1].argmax())))
    return windows


def crossing(inside: float, outside: float, slack_inside: float, slack_outside: float) -> float:
    """Where the slack falls to 0 between a point that holds and one that does not."""
    if not (np.isfinite(slack_outside) and np.isfinite(slack_inside)):
        return float(inside)
    share = slack_inside / (slack_inside - slack_outside)
    if inside > 0 and outside > 0:
        return float(inside * (outside / inside) ** share)
    return float(inside + share * (outside - inside))
