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
from scipy.ndimage import distance_transform_edt

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
    words = "1 point unknown" if count == 1 else f"{count} points unknown"
    return [style.Entry(f"{words}: not solved, not judged", style.swatch(style.UNKNOWN, "xx", style.UNKNOWN_HATCH))]


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


def region(axes: Axes, plane: Plane) -> list[style.Entry]:
    """The region where all hold, darker with more slack, lines of equal least slack, and its outline."""
    if not plane.feasible.any():
        return []
    field = _bounded(plane.least)
    levels = [level for level in style.SLACK_LEVELS if level >= 0]
    x, y = plane.period.values, plane.gain.values
    axes.contourf(x, y, field, [*levels, _BOUND], colors=style.MET, zorder=3)
    inner = contour_levels(float(np.nanmax(field)))
    entries = [style.Entry("all hold, the darker the more slack", style.swatch(style.MET[1]))]
    if inner:
        contours = axes.contour(x, y, field, inner, colors="white", linewidths=1.0, zorder=4)
        labels = axes.clabel(contours, fmt=style.plain, fontsize=11, colors="white", inline_spacing=8)
        for label in labels:
            label.set(path_effects=style.halo(style.MET[-1], 2.2), zorder=7)
        sample = Line2D([], [], color="white", linewidth=1.2)
        entries.append(style.Entry("line of equal least slack", (*style.swatch(style.MET[2]), sample)))
    zero_line(axes, plane, plane.least, colors="white", linewidths=6.0, zorder=5)
    return entries


def contour_levels(top: float) -> list[float]:
    """The levels between 0 and the best slack `top`: the fixed ones, finer where fewer than two fall inside."""
    fixed = [level for level in style.SLACK_LEVELS if 0 < level < top]
    if len(fixed) >= 2:
        return fixed
    return [float(level) for level in MaxNLocator(nbins=5, steps=[1, 2, 5, 10]).tick_values(0, top) if 0 < level < top]


def edges(axes: Axes, plane: Plane) -> dict[int, Floats]:
    """Each requirement's line of slack 0; returns its vertices, (n, 2) in shown units, for those that have one."""
    found = {}
    for index in range(len(plane.requirements)):
        look = style.stroke(index)
        path = zero_line(
            axes, plane, plane.slack[index], colors=look.line, linestyles=[look.dashes], linewidths=2.0, zorder=6
        )
        if path is not None:
            path.set(path_effects=style.halo("white", 3.2), gid=f"edge {index + 1}")
            found[index] = np.concatenate([np.asarray(one.vertices) for one in path.get_paths()])
    return found


def zero_line(axes: Axes, plane: Plane, field: Floats, zorder: float = 6, **look: Any) -> Any | None:
    """The line where a slack field crosses 0, as a ContourSet; None where it has one sign all over."""
    bounded = _bounded(field)
    known = bounded[~np.isnan(bounded)]
    if not known.size or not known.min() < 0 <= known.max():
        return None
    # A plateau at exactly 0 is met; traced a hair below, its edge is found too.
    return axes.contour(plane.period.values, plane.gain.values, bounded, [-1e-12], zorder=zorder, **look)


def nominal_outline(axes: Axes, plane: Plane, least: Floats) -> list[style.Entry]:
    """A thin line around the nominal plant's region: what the tolerances cost is between it and the region."""
    if zero_line(axes, plane, least, colors=style.INK, linewidths=1.1, linestyles=[(0, (1, 2))], zorder=5.5) is None:
        return []
    sample = Line2D([], [], color=style.INK, linewidth=1.1, linestyle=(0, (1, 2)))
    return [style.Entry("outline for the nominal plant alone", (sample,))]


def signed_field(axes: Axes, plane: Plane, field: Floats) -> None:
    """A slack field in the fixed bands, every met one darker than every missed one."""
    ends = [-_BOUND, *style.SLACK_LEVELS, _BOUND]
    colors = [*style.MISSED, *style.MET]
    axes.contourf(plane.period.values, plane.gain.values, _bounded(field), ends, colors=colors, zorder=3)


def share_field(axes: Axes, plane: Plane, share: Floats) -> None:
    """Shares 0..1 in bands, only exactly 1 in the darkest, and a bold line around it."""
    x, y = plane.period.values, plane.gain.values
    least = 1.0 - 1e-9  # what is less than one scenario in 1e9 is none
    bands = [-1e-9, *style.SHARE_LEVELS[1:-1], least, 1.0 + 1e-9]
    axes.contourf(x, y, share, bands, colors=style.SHARES, zorder=3)
    known = share[~np.isnan(share)]
    if known.size and known.min() < least < known.max():
        axes.contour(x, y, share, [least], colors=style.INK, linewidths=2.6, zorder=6)


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
        _label(axes, mark.period, axes.get_ylim()[0], "slowest period", (0, 12))
        sample = Line2D([], [], **dashed)
        entries.append(style.Entry(f"slowest period: {mark.text}", (sample,)))
    return entries


def _point(axes: Axes, mark: Mark, word: str, look: dict[str, Any]) -> style.Entry:
    axes.plot([mark.period], [mark.gain], linestyle="none", zorder=10, clip_on=False, gid=word, **look)
    _label(axes, mark.period, mark.gain, word, (0, 13))
    return style.Entry(f"{word}: {mark.text}", (Line2D([], [], linestyle="none", **look),))


def _label(axes: Axes, x: float, y: float, text: str, offset: tuple[float, float]) -> None:
    """A word beside a point, on the side where the axes have room."""
    across, up = axes.transAxes.inverted().transform(axes.transData.transform((x, y)))
    left = across > 0.8
    axes.annotate(
        text, (x, y), xytext=(-11 if left else 11, -offset[1] if up > 0.9 else offset[1]), textcoords="offset points",
        ha="right" if left else "left", va="center", size=13, weight="bold", color=style.INK, zorder=11,
        path_effects=style.halo(width=4.0),
    )  # fmt: skip


def tag_edges(axes: Axes, vertices: Mapping[int, Floats]) -> None:
    """Each edge's number in a disc on the line, as far as can be from the other edges, tags and the frame."""
    shares = {index: _shares(axes, points) for index, points in vertices.items()}
    placed: list[Floats] = []
    for index, points in shares.items():
        candidates = points[:: max(1, len(points) // 80)]
        others = [other[:: max(1, len(other) // 200)] for key, other in shares.items() if key != index]
        room = np.minimum(_gap(candidates, others), 0.08) + np.minimum(_gap(candidates, placed), 0.3)
        frame = np.minimum(candidates, 1 - candidates).min(axis=1)
        best = int(np.argmax(room + np.where(frame < 0.03, -1.0, 0.0)))
        placed.append(candidates[best : best + 1])
        color = style.stroke(index).line
        axes.text(
            *candidates[best], str(index + 1), transform=axes.transAxes, size=11, weight="bold", color=color,
            ha="center", va="center", zorder=9, gid=f"tag {index + 1}",
            bbox={"boxstyle": "circle,pad=0.22", "facecolor": "white", "edgecolor": color, "linewidth": 1.4},
        )  # fmt: skip


def name_areas(axes: Axes, plane: Plane, everywhere: bool = False) -> None:
    """Name each binding area where it is widest: number and name if there is room, the number if there is little."""
    inches = axes.get_position().width * axes.figure.get_figwidth()
    for index, requirement in enumerate(plane.requirements):
        mask = plane.binding == index
        if not everywhere:
            mask &= ~plane.feasible
        depth = distance_transform_edt(np.pad(mask, 1))[1:-1, 1:-1]
        row, column = np.unravel_index(int(depth.argmax()), depth.shape)
        share = depth[row, column] / max(mask.shape)
        if share < 0.03:
            continue
        fits = 0.115 * len(requirement.name) < 2 * share * inches * 1.2
        look = style.stroke(index)
        axes.text(
            plane.period.values[column], plane.gain.values[row],
            f"{index + 1} {requirement.name}" if fits else str(index + 1), size=13, color=look.line, ha="center",
            va="center", zorder=8, parse_math=False, gid=f"area {index + 1}",
            bbox={"boxstyle": "round,pad=0.25", "facecolor": look.tint, "edgecolor": "none"},
        )  # fmt: skip


def say_inside(axes: Axes, plane: Plane) -> None:
    """Write in the region that all requirements hold there."""
    depth = distance_transform_edt(np.pad(plane.feasible, 1))[1:-1, 1:-1]
    row, column = np.unravel_index(int(depth.argmax()), depth.shape)
    _label(axes, float(plane.period.values[column]), float(plane.gain.values[row]), "all hold", (0, 0))


def say_empty(axes: Axes, plane: Plane) -> None:
    """Say in words that nothing holds, and how much of the plane is unknown."""
    if plane.unknown.all():
        words = "Nothing is known here: no point could be judged."
    elif plane.unknown.any():
        words = "No point is known to meet every requirement."
    else:
        words = "Nowhere do all requirements hold at once."
    axes.text(
        0.5, 0.93, words, transform=axes.transAxes, size=16, weight="bold", color=style.INK, ha="center", va="center",
        zorder=12, gid="empty", bbox={"boxstyle": "round,pad=0.5", "facecolor": "white", "edgecolor": style.INK},
    )  # fmt: skip


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
    return np.ma.masked_invalid(np.clip(field, -_BOUND, _BOUND))  # clip keeps NaN, and only NaN is masked


def _fill(axes: Axes, plane: Plane, field: Floats, zorder: float, facecolor: str, gid: str) -> PathPatch | None:
    """One patch where a field is at least 0; None where it nowhere is."""
    known = field[~np.isnan(field)]
    if not known.size or known.max() < 0:
        return None
    masked = np.ma.masked_invalid(field)
    traced = axes.contourf(plane.period.values, plane.gain.values, masked, [0.0, known.max() + 1.0])
    path: Path = traced.get_paths()[0]
    traced.remove()
    patch = PathPatch(path, facecolor=facecolor, linewidth=0, zorder=zorder, gid=gid)
    return axes.add_patch(patch)  # type: ignore[no-any-return]


def _shares(axes: Axes, points: Floats) -> Floats:
    """Points in shares of the axes' width and height."""
    return np.asarray(axes.transAxes.inverted().transform(axes.transData.transform(points)))


def _gap(points: Floats, others: list[Floats]) -> Floats:
    """Distance of each point to the nearest of the others, in shares of the axes; inf without others."""
    if not others:
        return np.full(len(points), np.inf)
    everything = np.concatenate(others)
    return np.sqrt(((points[:, None, :] - everything[None, :, :]) ** 2).sum(axis=2)).min(axis=1)
