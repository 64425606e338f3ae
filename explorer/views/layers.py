"""What a map is made of, layer by layer: axes and a plane in, artists drawn and entries of a legend for maps out.

Slack is bounded to ±2 before any line is traced, so that an infinite neighbour moves an edge by less than a cell;
quads that touch an unknown point are left open, and the ground under everything is the mark of the unknown.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.patches import PathPatch, Rectangle
from matplotlib.path import Path
from matplotlib.ticker import MaxNLocator

from explorer.views import style
from explorer.views.plane import Floats, Mark, Plane

_BOUND = 2.0


def prepare(axes: Axes, plane: Plane, most: int = 10) -> None:
    """Scales, labels and plain ticks of gain against sample period."""
    style.scale_axis(axes, "x", plane.period.values, plane.period.label, most)
    style.scale_axis(axes, "y", plane.gain.values, plane.gain.label, most)


def known_ground(axes: Axes, plane: Plane) -> list[style.Entry]:
    """The unknown hatch everywhere, and plain ground where all neighbours are known; the entry if any is unknown."""
    ground = Rectangle((0, 0), 1, 1, transform=axes.transAxes, linewidth=0, zorder=0, gid="unknown")
    ground.set(facecolor=style.UNKNOWN, edgecolor=style.UNKNOWN_HATCH, hatch="xx")
    ground.set_hatch_linewidth(style.HATCH_WIDTH)
    axes.add_patch(ground)
    _fill(axes, plane, np.where(plane.unknown, np.nan, 1.0), facecolor=style.OUTSIDE, zorder=1, gid="known")
    count = int(plane.unknown.sum())
    if not count:
        return []
    return [style.Entry(f"unknown: {count} of {plane.unknown.size} points", style.swatch(style.UNKNOWN, "xx", style.UNKNOWN_HATCH))]


def binding_areas(axes: Axes, plane: Plane) -> set[int]:
    """A pale tint and a quiet hatch for each requirement where it binds; returns the indices that bind somewhere."""
    # Signed and squeezed into ±1: infinities compare, and the borders between two areas fall between the points.
    large = np.clip(plane.slack, -1e9, 1e9)
    squeezed = large / (1 + np.abs(large))
    shown = set(range(len(plane.requirements))) & set(np.unique(plane.binding).tolist())
    lowest = squeezed.min(axis=0)
    for index in shown:  # the verdict's word on who binds is kept, ties between infinities included
        squeezed[index] = np.where(plane.binding == index, lowest - 1e-6, squeezed[index])
    for index in sorted(shown):
        others = np.delete(squeezed, index, axis=0)
        lead = np.min(others, axis=0) - squeezed[index] if len(others) else np.ones_like(plane.least)
        look = style.stroke(index)
        lead = np.where(plane.unknown, np.nan, lead)
        patch = _fill(axes, plane, lead, facecolor=look.tint, zorder=2, gid=f"binds {index + 1}")
        if patch is not None:
            patch.set(hatch=look.hatch, edgecolor=_quiet(look.line))
            patch.set_hatch_linewidth(style.HATCH_WIDTH)
    return shown


def region(axes: Axes, plane: Plane) -> tuple[list[style.Entry], Any | None]:
    """The region where all hold, darker with more slack, and lines of equal least slack; those are returned too."""
    if not plane.feasible.any():
        return [], None
    field = _bounded(plane.least)
    levels = [level for level in style.SLACK_LEVELS if level >= 0]
    x, y = plane.period.values, plane.gain.values
    axes.contourf(x, y, field, [*levels, _BOUND], colors=style.MET, zorder=3)
    inner = contour_levels(float(np.nanmax(field)))
    entries = [style.Entry("all hold, the darker the more slack", style.swatch(style.MET[1]))]
    contours = None
    if inner:
        contours = axes.contour(x, y, field, inner, colors="white", linewidths=1.0, zorder=4)
        sample = Line2D([], [], color="white", linewidth=1.2)
        entries.append(style.Entry("line of equal least slack", (*style.swatch(style.MET[2]), sample)))
    zero_line(axes, plane, plane.least, colors="white", linewidths=6.0, zorder=5)
    return entries, contours


def contour_levels(top: float) -> list[float]:
    """The levels between 0 and the best slack `top`: the fixed ones, finer where fewer than two fall inside."""
    fixed = [level for level in style.SLACK_LEVELS if 0 < level < top]
    if len(fixed) >= 2:
        return fixed
    return [float(level) for level in MaxNLocator(nbins=5, steps=[1, 2, 5, 10]).tick_values(0, top) if 0 < level < top]


def edges(axes: Axes, plane: Plane) -> dict[int, Floats]:
    """Each requirement's line of slack 0; returns its vertices, (n, 2) in shown units, for those that have one.

    Beyond the edge of a `stability` requirement every other slack is -inf: that edge is stability's alone.
    """
    kinds = [requirement.kind for requirement in plane.requirements]
    unstable = plane.slack[kinds.index("stability")] < 0 if "stability" in kinds else np.zeros_like(plane.unknown)
    found = {}
    for index, slack in enumerate(plane.slack):
        look = style.stroke(index)
        own = np.where(unstable & np.isneginf(slack), np.nan, slack)
        line = {"colors": look.line, "linestyles": [look.dashes], "linewidths": 2.0}
        traced = zero_line(axes, plane, own, **line)
        if traced is not None:
            traced.set(path_effects=style.halo("white", 3.2), gid=f"edge {index + 1}")
            found[index] = np.concatenate([np.asarray(path.vertices) for path in traced.get_paths()])
    return found


def zero_line(axes: Axes, plane: Plane, field: Floats, zorder: float = 6, **look: Any) -> Any | None:
    """The line where a slack field crosses 0, as a ContourSet; None where it has one sign all over."""
    bounded = _bounded(field)
    known = bounded[~np.isnan(bounded)]
    if not known.size or not known.min() < 0 <= known.max():
        return None
    # A plateau at exactly 0 is met; traced a hair below, its edge is found too. Below 0 dashes would be the default.
    look = {"linestyles": "solid"} | look
    return axes.contour(plane.period.values, plane.gain.values, bounded, [-1e-12], zorder=zorder, **look)


def nominal_outline(axes: Axes, plane: Plane, least: Floats) -> tuple[style.Entry, Floats] | None:
    """A thin line around the nominal plant's region, to show what the tolerances cost; its entry and vertices."""
    look = {"linewidths": 1.2, "linestyles": [(0, (1, 1.6))]}
    traced = zero_line(axes, plane, least, colors=style.INK, zorder=5.5, **look)
    if traced is None:
        return None
    traced.set_gid("nominal outline")
    sample = Line2D([], [], color=style.INK, linewidth=1.2, linestyle=(0, (1, 1.6)))
    entry = style.Entry("region of the nominal plant alone", (sample,))
    return entry, np.concatenate([np.asarray(path.vertices) for path in traced.get_paths()])


def signed_field(axes: Axes, plane: Plane, field: Floats) -> None:
    """A slack field in the fixed bands, every met one darker than every missed one."""
    ends = [-_BOUND, *style.SLACK_LEVELS, _BOUND]
    colors = [*style.MISSED, *style.MET]
    axes.contourf(plane.period.values, plane.gain.values, _bounded(field), ends, colors=colors, zorder=3)


def share_field(axes: Axes, plane: Plane, share: Floats) -> None:
    """Shares 0..1 in bands; where all scenarios meet everything, which is the region, the darkest and a bold line."""
    bands = [-1e-9, *style.SHARE_LEVELS[1:-1], 1.0 + 1e-9]
    masked = np.ma.masked_invalid(share)
    axes.contourf(plane.period.values, plane.gain.values, masked, bands, colors=style.SHARES[:-1], zorder=3)
    # A plateau at 1 has no slope to trace its edge by; the least slack crosses 0 at the same place and has.
    _fill(axes, plane, plane.least, facecolor=style.SHARES[-1], zorder=4, gid="all scenarios")
    zero_line(axes, plane, plane.least, colors=style.INK, linewidths=2.6)


def draw_marks(axes: Axes, plane: Plane, points: Mapping[str, Mark]) -> list[style.Entry]:
    """The decision's points: a ring for the recommended design, a dashed line with a bar for the slowest period."""
    entries = []
    if mark := points.get("recommended"):
        look = {"marker": "o", "markersize": 13, "markerfacecolor": "white", "markeredgecolor": style.INK}
        entries.append(_point(axes, mark, "recommended", look | {"markeredgewidth": 3.2}))
    if mark := points.get("nearest"):
        look = {"marker": "D", "markersize": 11, "markerfacecolor": "white", "markeredgecolor": style.INK}
        entries.append(_point(axes, mark, "nearest to holding", look | {"markeredgewidth": 2.6}))
    if mark := points.get("slowest"):
        dashed = {"color": style.INK, "linewidth": 1.6, "linestyle": (0, (5, 3)), "zorder": 7}
        axes.axvline(mark.period, gid="slowest", path_effects=style.halo(width=3.4), **dashed)
        bar = {"color": style.INK, "marker": "_", "markersize": 14, "markeredgewidth": 3, "linewidth": 5, "zorder": 8}
        axes.plot([mark.period] * 2, mark.window or (mark.gain, mark.gain), gid="slowest window", **bar)
        sample = Line2D([], [], **dashed)
        entries.append(style.Entry(f"slowest period: {mark.text}", (sample,)))
    return entries


def _point(axes: Axes, mark: Mark, word: str, look: dict[str, Any]) -> style.Entry:
    axes.plot([mark.period], [mark.gain], linestyle="none", zorder=10, clip_on=False, gid=word, **look)
    return style.Entry(f"{word}: {mark.text}", (Line2D([], [], linestyle="none", **look),))


def area_sample(index: int) -> tuple[Any, ...]:
    """The legend's sample of a binding area."""
    look = style.stroke(index)
    return style.swatch(look.tint, look.hatch, _quiet(look.line))


def edge_sample(index: int) -> tuple[Any, ...]:
    """The legend's sample of a requirement's edge."""
    look = style.stroke(index)
    return (Line2D([], [], color=look.line, linewidth=2.0, linestyle=look.dashes, path_effects=style.halo("white", 3.2)),)


def _quiet(color: str) -> tuple[float, float, float]:
    """The colour halfway to white, for hatches that do not shout."""
    red, green, blue = (int(color[at : at + 2], 16) / 255 for at in (1, 3, 5))
    return (0.5 + red / 2, 0.5 + green / 2, 0.5 + blue / 2)


def _bounded(field: Floats) -> np.ma.MaskedArray[Any, Any]:
    return np.ma.masked_array(np.clip(field, -_BOUND, _BOUND), np.isnan(field))  # clip keeps NaN, and only NaN is masked


def _fill(axes: Axes, plane: Plane, field: Floats, zorder: float, facecolor: str, gid: str) -> PathPatch | None:
    """One patch where a field is at least 0; None where it nowhere is."""
    bounded = _bounded(field)
    if bounded.mask.all() or bounded.max() < 0:
        return None
    traced = axes.contourf(plane.period.values, plane.gain.values, bounded, [0.0, _BOUND + 1.0])
    path: Path = traced.get_paths()[0]
    traced.remove()
    patch = PathPatch(path, facecolor=facecolor, linewidth=0, zorder=zorder, gid=gid)
    return axes.add_patch(patch)  # type: ignore[no-any-return]
