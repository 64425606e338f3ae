"""What a map is made of, layer by layer: axes and a plane in, artists and entries of a legend for maps out.

Slack is bounded to ±2 before any line is traced, so that an infinite neighbour moves an edge by less than a
cell. The region is traced from the least slack at the grid points, so it never exceeds what edges enclose.
What touches an unknown point is left open, and the ground under everything is the mark of the unknown.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
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
    """The unknown's hatch everywhere, plain ground on all that is known; an entry if anything is unknown."""
    ground = Rectangle((0, 0), 1, 1, transform=axes.transAxes, linewidth=0, zorder=0, gid="unknown")
    ground.set(facecolor=style.UNKNOWN, edgecolor=style.UNKNOWN_HATCH, hatch="xx")
    ground.set_hatch_linewidth(style.HATCH_WIDTH)
    axes.add_patch(ground)
    _fill(axes, plane, np.where(plane.unknown, np.nan, 1.0), facecolor=style.OUTSIDE, zorder=1, gid="known")
    count = int(plane.unknown.sum())
    if not count:
        return []
    return [
        style.Entry(
            f"unknown: {count} of {plane.unknown.size} points",
            style.swatch(style.UNKNOWN, "xx", style.UNKNOWN_HATCH),
        )
    ]


def binding_areas(axes: Axes, plane: Plane) -> set[int]:
    """A pale tint and a quiet hatch where each requirement binds; returns the indices that bind somewhere."""
    # Signed and squeezed into ±1: infinities compare, and the border of two areas falls between the points.
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
    """The region, darker with more slack, and lines of equal least slack, which are returned too."""
    if not plane.feasible.any():
        return [], None
    field = _bounded(plane.least)
    levels = [level for level in style.SLACK_LEVELS if level >= 0]
    x, y = plane.period.values, plane.gain.values
    _bands(axes, plane, field, [*levels, _BOUND], style.MET)
    inner = contour_levels(float(field.max()))
    entries = [style.Entry("all hold, the darker the more slack", style.swatch(style.MET[1]))]
    contours = None
    if inner:
        look: dict[str, Any] = {"colors": "white", "linewidths": 1.0, "corner_mask": False, "zorder": 4}
        contours = axes.contour(x, y, field, inner, **look)
        contours.set_gid("equal slack")
        sample = Line2D([], [], color="white", linewidth=1.2)
        entries.append(style.Entry("line of equal least slack", (*style.swatch(style.MET[2]), sample)))
    zero_line(axes, plane, plane.least, colors=style.INK, linewidths=1.2, zorder=5)
    return entries, contours


def contour_levels(top: float) -> list[float]:
    """The levels between 0 and the best slack `top`: the fixed ones, or finer ones if those are below two."""
    fixed = [level for level in style.SLACK_LEVELS if 0 < level < top]
    if len(fixed) >= 2:
        return fixed
    return [
        float(level)
        for level in MaxNLocator(nbins=5, steps=[1, 2, 5, 10]).tick_values(0, top)
        if 0 < level < top
    ]


def edges(axes: Axes, plane: Plane) -> dict[int, Floats]:
    """Each requirement's line of slack 0; returns vertices, (n, 2) in shown units, of those that have one.

    Beyond the edge of a `stability` requirement every other slack is -inf: that edge is stability's alone.
    """
    kinds = [requirement.kind for requirement in plane.requirements]
    own = plane.slack
    if "stability" in kinds:
        unstable = plane.slack[kinds.index("stability")] < 0
        own = np.where(unstable & np.isneginf(plane.slack), np.nan, plane.slack)
    found = {}
    for index, slack in enumerate(own):
        look = style.stroke(index)
        line: dict[str, Any] = {"colors": look.line, "linestyles": [look.dashes], "linewidths": 2.0}
        traced = zero_line(axes, plane, slack, **line)
        if traced is not None:
            traced.set(path_effects=style.halo("white", 3.2), gid=f"edge {index + 1}")
            found[index] = vertices(traced)
    return found


def vertices(traced: Any) -> Floats:
    """(n, 2) points of a traced line, in shown units."""
    return np.concatenate([np.asarray(path.vertices) for path in traced.get_paths()])


def zero_line(axes: Axes, plane: Plane, field: Floats, zorder: float = 6, **look: Any) -> Any | None:
    """The line where a slack field crosses 0, as a ContourSet; None where it has one sign all over."""
    bounded = _bounded(field)
    known = bounded[~np.isnan(bounded)]
    if not known.size or not known.min() < 0 <= known.max():
        return None
    # A plateau at exactly 0 is met; traced a hair below, its edge is found too. The default there is dashes.
    look = {"linestyles": "solid", "corner_mask": False} | look
    return axes.contour(plane.period.values, plane.gain.values, bounded, [-1e-12], zorder=zorder, **look)


def nominal_outline(axes: Axes, nominal: Plane) -> tuple[style.Entry, Floats] | None:
    """A thin line around the nominal plant's region, to show what tolerances cost; its entry and vertices."""
    dots = (0, (1, 1.6))
    look: dict[str, Any] = {"colors": style.INK, "linewidths": 1.2, "linestyles": [dots]}
    traced = zero_line(axes, nominal, nominal.least, zorder=5.5, **look)
    if traced is None:
        return None
    traced.set_gid("nominal outline")
    sample = Line2D([], [], color=style.INK, linewidth=1.2, linestyle=dots)
    return style.Entry("region of the nominal plant alone", (sample,)), vertices(traced)


def signed_field(axes: Axes, plane: Plane, field: Floats) -> None:
    """A slack field in the fixed bands, every met one darker than every missed one."""
    _bands(axes, plane, _bounded(field), [-_BOUND, *style.SLACK_LEVELS, _BOUND], [*style.MISSED, *style.MET])


def share_field(axes: Axes, plane: Plane, share: Floats) -> Any | None:
    """Shares 0..1 in bands, the darkest where all scenarios meet everything; returns the line around it."""
    levels = [-1e-9, *style.SHARE_LEVELS[1:-1], 1.0 + 1e-9]
    _bands(axes, plane, np.ma.masked_invalid(share), levels, style.SHARES[:-1])
    # A plateau at 1 has no slope to place its edge by. The least slack has, if judged by the same limits.
    whole = np.where(plane.unknown, np.nan, share - (1.0 - 1e-9))
    field = plane.least if np.array_equal(whole >= 0, plane.feasible) else whole
    _fill(axes, plane, field, facecolor=style.SHARES[-1], zorder=4, gid="all scenarios")
    return zero_line(axes, plane, field, colors=style.INK, linewidths=2.6)


def draw_marks(axes: Axes, points: Mapping[str, Mark]) -> list[style.Entry]:
    """The decision's points: a ring for the recommended design, a dashed line for the slowest period."""
    entries = []
    rings = {"recommended": ("o", 13.0, 3.2), "nearest": ("D", 11.0, 2.6)}
    for kind, (marker, size, width) in rings.items():
        if mark := points.get(kind):
            look: dict[str, Any] = {"linestyle": "none", "marker": marker, "markersize": size}
            look |= {"markeredgewidth": width, "markerfacecolor": "white", "markeredgecolor": style.INK}
            axes.plot([mark.period], [mark.gain], zorder=10, clip_on=False, gid=kind, **look)
            entries.append(style.Entry(f"{kind}: {mark.text}", (Line2D([], [], **look),)))
    if mark := points.get("slowest"):
        look = {"color": style.INK, "linewidth": 1.6, "linestyle": (0, (5, 3)), "zorder": 7}
        axes.axvline(mark.period, gid="slowest", clip_on=False, path_effects=style.halo(width=3.4), **look)
        entries.append(style.Entry(f"slowest period: {mark.text}", (Line2D([], [], **look),)))
        look = {"color": style.INK, "marker": "_", "markersize": 14, "markeredgewidth": 3, "zorder": 8}
        gains = mark.window or (mark.gain, mark.gain)
        axes.plot([mark.period] * 2, gains, linewidth=5, gid="slowest window", clip_on=False, **look)
    return entries


def area_sample(index: int) -> tuple[Any, ...]:
    """The legend's sample of a binding area."""
    look = style.stroke(index)
    return style.swatch(look.tint, look.hatch, _quiet(look.line))


def edge_sample(index: int) -> tuple[Any, ...]:
    """The legend's sample of a requirement's edge."""
    look = style.stroke(index)
    line = Line2D([], [], color=look.line, linewidth=2.0, linestyle=look.dashes)
    line.set_path_effects(style.halo("white", 3.2))
    return (line,)


def _quiet(color: str) -> str:
    """The colour halfway to white, for hatches that do not shout."""
    halves = (128 + int(color[at : at + 2], 16) // 2 for at in (1, 3, 5))
    return "#" + "".join(f"{min(half, 255):02x}" for half in halves)


def _bounded(field: Floats) -> np.ma.MaskedArray[Any, Any]:
    """Infinities become ±2, NaN alone is masked."""
    return np.ma.MaskedArray(np.clip(field, -_BOUND, _BOUND), np.isnan(field))


def _bands(axes: Axes, plane: Plane, field: Any, levels: Sequence[float], colors: Sequence[str]) -> None:
    x, y = plane.period.values, plane.gain.values
    axes.contourf(x, y, field, levels, colors=colors, corner_mask=False, zorder=3).set_gid("bands")


def _fill(
    axes: Axes, plane: Plane, field: Floats, zorder: float, facecolor: str, gid: str
) -> PathPatch | None:
    """One patch where a field is at least 0; None where it nowhere is."""
    bounded = _bounded(field)
    if bounded.mask.all() or bounded.max() < 0:
        return None
    x, y = plane.period.values, plane.gain.values
    traced = axes.contourf(x, y, bounded, [0.0, _BOUND + 1.0], corner_mask=False)
    path: Path = traced.get_paths()[0]
    traced.remove()
    patch = PathPatch(path, facecolor=facecolor, linewidth=0, zorder=zorder, gid=gid)
    axes.add_patch(patch)
    return patch
