"""What the pictures of a probe share: strokes of the worst plants, their legend, numbers in discs; for pictures out."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.lines import Line2D

from explorer.views import style
from explorer.views.labels import Clearing
from explorer.views.probed import Floats, Probed

CLOUD = "#a7aeb6"  # the other plants
MOST_LINES = 60


def tags_look(probed: Probed) -> dict[int, style.Stroke]:
    """The stroke of each worst plant that is drawn apart, the same in every picture of a probe.

    The colour is that of the requirement it is worst for, unless taken; dashes and mark differ whatever the colour.
    """
    names = [row.name for row in probed.requirements]
    looks: dict[int, style.Stroke] = {}
    for rank, scenario in enumerate(probed.drawn):
        first = names.index(probed.worst[scenario][0])
        taken = {look.line for look in looks.values()}
        color = next(line for line in (style.stroke(first + step).line for step in range(8)) if line not in taken)
        apart = style.stroke(rank + 1)  # the first is solid, as the nominal plant
        looks[scenario] = replace(apart, line=color)
    return looks


def worst_entries(probed: Probed, marks: bool = False) -> list[style.Entry]:
    """The legend of the worst plants: number, and what they are worst for."""
    entries = []
    for scenario, look in tags_look(probed).items():
        names = probed.worst[scenario]
        more = f" and {len(names) - 2} more" if len(names) > 2 else ""
        text = f"plant {scenario}: worst for {', '.join(names[:2])}{more}"
        given: dict[str, Any] = {"linestyle": look.dashes, "linewidth": 2.0, "color": look.line}
        if marks:
            given |= {"linestyle": "none", "marker": look.marker, "markersize": 9}
        entries.append(style.Entry(text, (Line2D([], [], **given),)))
    return entries


def nominal_entry(probed: Probed, artist: Any) -> style.Entry:
    """The legend of the nominal plant, which may be the worst one too."""
    names = probed.worst.get(0, ())
    more = f" and {len(names) - 2} more" if len(names) > 2 else ""
    return style.Entry("nominal plant" + (f": worst for {', '.join(names[:2])}{more}" if names else ""), (artist,))


def cloud_entry(probed: Probed, artist: Any) -> style.Entry:
    """The legend of the cloud: how many plants it stands for."""
    return style.Entry(f"all {int(probed.within.sum())} scenarios within the tolerances", (artist,))


def fan(axes: Axes, probed: Probed, x: Floats, values: Floats, **given: Any) -> None:
    """The curves (S, N) of all scenarios: thin lines of some for the texture, nominal and worst ones on top."""
    inside = [int(row) for row in probed.within.nonzero()[0]]
    for row in inside[:: -(-len(inside) // MOST_LINES)]:
        axes.plot(x, values[row], color=CLOUD, linewidth=0.8, alpha=0.8, zorder=3, gid="cloud", **given)
    for scenario, look in tags_look(probed).items():
        line: dict[str, Any] = {"color": look.line, "linestyle": look.dashes, "linewidth": 1.9}
        axes.plot(x, values[scenario], zorder=5, gid=f"worst {scenario}", **line, **given)
    axes.plot(x, values[0], color=style.INK, linewidth=2.6, zorder=4.5, gid="nominal", **given)


def name_curves(clearing: Clearing, probed: Probed, x: Floats, values: Floats) -> None:
    """ "plant 74" beside the curve of each worst plant (S, N), where it is far from the nominal one."""
    low, high = clearing.axes.get_xlim()
    for row in [0, *np.flatnonzero(probed.within)[:: -(-int(probed.within.sum()) // 15)], *probed.drawn]:
        seen = np.isfinite(values[row]) & (x >= low) & (x <= high)
        if seen.any():
            clearing.take(f"curve {row}", np.column_stack([x[seen], values[row][seen]]))
    for scenario, look in tags_look(probed).items():
        seen = np.isfinite(values[scenario]) & (x >= low) & (x <= high)
        apart = np.nan_to_num(np.abs(values[scenario] - values[0]))[seen]
        far = np.flatnonzero(apart >= 0.5 * apart.max(initial=0.0))
        order = far[np.argsort(-apart[far], kind="stable")]
        points = np.column_stack([x[seen], values[scenario][seen]])[order[:: -(-len(order) // 25) or 1]]
        name_plant(clearing, scenario, points, look.line)


def words_entry(text: str) -> style.Entry:
    """A line of the legend that is neither a heading nor has a sample."""
    return style.Entry(text, (Line2D([], [], linestyle="none"),))


def fan_entries(probed: Probed) -> list[style.Entry]:
    """The legend of a fan."""
    nominal = Line2D([], [], color=style.INK, linewidth=2.6)
    return [nominal_entry(probed, nominal), cloud_entry(probed, Line2D([], [], color=CLOUD, linewidth=1.2)),
            *worst_entries(probed)]  # fmt: skip


def tag(clearing: Clearing, points: Any, text: str, color: str, own: str) -> None:
    """A requirement's number in a disc at the one of `points` (n, 2) of its line with the most room.

    `own` is the key it may cover; nothing is written where the line does not come inside.
    """
    candidates = clearing.shares(points) if len(points) else np.empty((0, 2))
    candidates = candidates[((candidates > 0.02) & (candidates < 0.98)).all(axis=1)]
    candidates = candidates[:: -(-len(candidates) // 100) or 1]
    if len(candidates):
        half = 10.0 / 72 / clearing.inches
        best, _ = clearing.best(candidates, half, but=own)
        disc = {"boxstyle": "circle,pad=0.22", "facecolor": "white", "edgecolor": color, "linewidth": 1.4}
        look: dict[str, Any] = {"size": 11, "weight": "bold", "color": color, "bbox": disc}
        _write(clearing, candidates[best], text, half, f"tag {text}", **look)


def name_plant(clearing: Clearing, scenario: int, spots: Any, color: str) -> bool:
    """ "plant 74" in words beside one of the `spots` (n, 2) of the data, joined to it where it must stand further off.

    The first spot that has room near it is taken. Returns whether there was room: none is where all lie outside.
    """
    text = f"plant {scenario}"
    half = clearing.half_size(text, 11, bold=True)
    shares = clearing.shares(spots) if len(spots) else np.empty((0, 2))
    shares = shares[((shares > 0.0) & (shares < 1.0)).all(axis=1)]
    beside = np.array([[1.0, 1], [-1, 1], [1, -1], [-1, -1], [0, 1], [0, -1]])
    for far in (1.0, 1.6, 2.4, 3.6, 5.0):
        for spot in shares:
            around = spot + beside * far * (half * (1.0, 0.8) + 7.0 / 72 / clearing.inches)
            index, room = clearing.best(around, half)
            if room < 1:
                continue
            if far > 1:
                lead = {"arrowstyle": "-", "color": color, "linewidth": 1.0, "shrinkA": 8, "shrinkB": 4}
                clearing.axes.annotate("", around[index], spot, xycoords="axes fraction", arrowprops=lead, zorder=9)
            look: dict[str, Any] = {"size": 11, "weight": "bold", "color": color, "path_effects": style.halo(width=4.0)}
            _write(clearing, around[index], text, half, f"name {scenario}", **look)
            return True
    return False


def _write(clearing: Clearing, spot: Floats, text: str, half: Floats, gid: str, **look: Any) -> None:
    x, y = spot
    place: dict[str, Any] = {"transform": clearing.axes.transAxes, "ha": "center", "va": "center", "zorder": 11}
    clearing.axes.text(float(x), float(y), text, gid=gid, **place, **look)
    clearing.keep(gid, spot, half)


def panel(axes: Axes, label: str) -> None:
    """Ticks, faint grid and the label of a vertical axis."""
    axes.tick_params(labelsize=12, color=style.FRAME, labelcolor=style.INK)
    axes.set_axisbelow(True)
    axes.grid(color=style.OUTSIDE, linewidth=0.8, zorder=0.5)
    axes.set_ylabel(label, fontsize=13, color=style.INK, labelpad=7, parse_math=False)
