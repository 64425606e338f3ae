"""Maps of gain against sample period: a verdict and a decision in, Figures for folder and the commands out.

With one period or one gain there is no plane: the same question is then answered by lines (see lines).
"""

from __future__ import annotations

import textwrap
from collections.abc import Mapping
from itertools import pairwise
from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import BoundaryNorm, ListedColormap
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from explorer.errors import OptionError
from explorer.views import labels, layers, lines, style
from explorer.views.plane import Floats, Mark, Plane, Requirement, marks, nominal_plane, share_at, take_plane

_MAP = (style.LEFT, 0.135, 0.585, 0.715)
_LEGEND = (0.69, 0.85)
_BAR = (0.695, 0.49, 0.016, 0.36)
_SHEET = (0.13, 0.835)  # bottom and top of the panels


def region_map(
    verdict: xr.Dataset,
    decision: Mapping[str, Any] | None = None,
    tolerance_scale: float = 1.0,
    design: Mapping[str, float] | None = None,
) -> Figure:
    """Where every requirement holds, each requirement's edge, what binds outside, and the decision's points.

    The nominal plant's region is outlined too. NaN is drawn as unknown, an empty region is said in words. Of
    further design variables, `design` = {name: SI value} chooses the slice; by default the recommended one.
    Raises OptionError when the scale or the design was not swept.
    """
    plane = take_plane(verdict, tolerance_scale, design, decision)
    points = marks(plane, decision)
    if _is_line(plane):
        return lines.slack_lines(plane, points)
    figure, axes = _new_map(plane, f"All requirements over {plane.box}")
    entries = draw_region(axes, plane, points, nominal_plane(verdict, plane))
    style.add_legend(figure, entries, *_LEGEND, room=410)
    return figure


def draw_region(
    axes: Axes, plane: Plane, points: Mapping[str, Mark], nominal: Plane | None = None
) -> list[style.Entry]:
    """The region map's data on axes that `layers.prepare` has set up; returns the entries of its legend.

    `nominal` is the same slice for the nominal plant; its region is outlined.
    """
    held = layers.known_ground(axes, plane)
    areas = layers.binding_areas(axes, plane)
    entries, contours = layers.region(axes, plane)
    edges = layers.edges(axes, plane)
    clearing = _clearing(axes, plane, points)
    for index, vertices in edges.items():
        clearing.take(f"edge {index}", vertices)
    if nominal is not None and (outline := layers.nominal_outline(axes, nominal)):
        entries.append(outline[0])
        clearing.take("nominal", outline[1])
    entries += layers.draw_marks(axes, points)
    if not plane.feasible.any():
        labels.say_empty(clearing, plane)
    labels.label_marks(clearing, points)
    if contours is not None:
        labels.label_contours(clearing, contours)
    labels.tag_edges(clearing, edges)
    labels.name_areas(clearing, plane, ~plane.feasible)
    requirements = [
        _requirement_entry(plane, index, index in edges, areas) for index in range(len(plane.slack))
    ]
    return [*entries, style.Entry("Edges, and what binds outside"), *requirements, *held]


def slack_map(
    verdict: xr.Dataset,
    show: str = "slack",
    sweep: xr.Dataset | None = None,
    tolerance_scale: float = 1.0,
    design: Mapping[str, float] | None = None,
    decision: Mapping[str, Any] | None = None,
) -> Figure:
    """One field over the plane: `show` is "slack" (the least), "binding", "share" or a requirement's name.

    "share" needs the sweep's Dataset, and goes by the study's own limits, whatever the verdict was judged by.
    Slack beyond ±1, infinities included, takes the end colours. Raises OptionError for any other `show`.
    """
    plane = take_plane(verdict, tolerance_scale, design, decision)
    points = marks(plane, decision)
    names = [requirement.name for requirement in plane.requirements]
    allowed = ("slack", "binding", "share", *names)
    if show not in allowed:
        raise OptionError(f"nothing called {show!r} to show; there are: {', '.join(allowed)}")
    if show == "share":
        if sweep is None:
            raise OptionError("the share of scenarios is in the sweep, not in the verdict: give both")
        return _share_map(plane, share_at(sweep, plane), points)
    if _is_line(plane):
        return lines.slack_lines(plane, points, (names.index(show),) if show in names else None)
    if show == "binding":
        return _binding_map(plane, points)
    return _field_map(plane, points, names.index(show) if show in names else None)


def slack_sheet(
    verdict: xr.Dataset,
    tolerance_scale: float = 1.0,
    design: Mapping[str, float] | None = None,
    decision: Mapping[str, Any] | None = None,
) -> Figure:
    """Every requirement's slack in a panel of its own, one colour scale; the region outlined in each."""
    plane = take_plane(verdict, tolerance_scale, design, decision)
    if _is_line(plane):
        return lines.slack_lines(plane, marks(plane, decision))
    heading = f"Slack of each requirement over {plane.box}; outlined: where all hold"
    heading += "; hatched: unknown" if plane.unknown.any() else ""
    figure = style.new_figure(plane.title, _subtitle(plane, heading), plane.provenance)
    count = len(plane.requirements)
    columns = int(np.ceil(np.sqrt(count)))
    for index in range(count):
        _panel(figure, plane, index, columns)
    _slack_bar(figure, (0.885, _SHEET[0], 0.014, _SHEET[1] - _SHEET[0]))
    return figure


def _panel(figure: Figure, plane: Plane, index: int, columns: int) -> None:
    """One requirement's slack; only the outer panels carry the axes' names."""
    count = len(plane.requirements)
    rows = -(-count // columns)
    row, column = divmod(index, columns)
    bottom, top = _SHEET
    across, down = 0.82 / columns, (top - bottom + 0.075) / rows
    place = (style.LEFT + across * column, top - down * row - (down - 0.075), across - 0.045, down - 0.075)
    axes = style.new_axes(figure, place)
    layers.prepare(axes, plane, most=7 if columns < 3 else 5)
    layers.known_ground(axes, plane)
    layers.signed_field(axes, plane, plane.slack[index])
    layers.zero_line(axes, plane, plane.least, colors="white", linewidths=3.6)
    layers.zero_line(axes, plane, plane.least, colors=style.INK, linewidths=1.6)
    room = int((across - 0.045) * 150)  # letters of 11 points in the panel's width
    named = f"{index + 1}  {_once(plane.requirements[index])}"
    if len(named) > room:
        named = textwrap.shorten(f"{index + 1} {plane.requirements[index].name}", room, placeholder=" …")
    axes.set_title(named, loc="left", size=11, color=style.INK, parse_math=False)
    if column:
        axes.set_ylabel("")
    if index + columns < count:
        axes.set_xlabel("")


def _field_map(plane: Plane, points: Mapping[str, Mark], index: int | None) -> Figure:
    """The slack of requirement `index`, or the least of all for None."""
    if index is None:
        heading, field = f"Least slack of all requirements over {plane.box}", plane.least
    else:
        heading, field = f"Slack of {_once(plane.requirements[index])}, over {plane.box}", plane.slack[index]
    figure, axes = _new_map(plane, heading)
    held = layers.known_ground(axes, plane)
    layers.signed_field(axes, plane, field)
    edge = layers.zero_line(axes, plane, field, colors=style.INK, linewidths=2.6)
    outline = None
    entries = [style.Entry("slack 0: the edge", (Line2D([], [], color=style.INK, linewidth=2.6),))]
    if index is not None and plane.feasible.any():
        outline = layers.zero_line(axes, plane, plane.least, colors="white", linewidths=1.6)
        sample = Line2D([], [], color="white", linewidth=1.6)
        sample.set_path_effects(style.halo(style.QUIET_INK, 3.0))
        entries.append(style.Entry("where all requirements hold", (sample,)))
    entries += layers.draw_marks(axes, points) + held
    labels.label_marks(_clearing(axes, plane, points, edge, outline), points)
    _slack_bar(figure, _BAR)
    style.add_legend(figure, entries, _LEGEND[0], _BAR[1] - 0.06, room=200)
    return figure


def _binding_map(plane: Plane, points: Mapping[str, Mark]) -> Figure:
    figure, axes = _new_map(plane, f"Which requirement has the least slack, over {plane.box}")
    held = layers.known_ground(axes, plane)
    entries = [style.Entry("Least slack has")]
    for index in sorted(layers.binding_areas(axes, plane)):
        text = f"{index + 1}  {plane.requirements[index].full}"
        entries.append(style.Entry(text, layers.area_sample(index)))
    outline = layers.zero_line(axes, plane, plane.least, colors="white", linewidths=5.0)
    if outline is not None:
        layers.zero_line(axes, plane, plane.least, colors=style.INK, linewidths=2.6)
        entries.append(style.Entry("edge of the region", (Line2D([], [], color=style.INK, linewidth=2.6),)))
    entries += layers.draw_marks(axes, points) + held
    clearing = _clearing(axes, plane, points, outline)
    labels.label_marks(clearing, points)
    labels.name_region(clearing, plane)
    labels.name_areas(clearing, plane, np.ones_like(plane.feasible))
    style.add_legend(figure, entries, *_LEGEND, room=410)
    return figure


def _share_map(plane: Plane, share: Floats, points: Mapping[str, Mark]) -> Figure:
    if _is_line(plane):
        return lines.share_lines(plane, share)
    figure, axes = _new_map(plane, f"Share of scenarios that meet the study's own limits, within {plane.box}")
    held = layers.known_ground(axes, plane)
    traced = layers.share_field(axes, plane, share)
    texts = [f"{low:.0%} to {high:.0%}" for low, high in pairwise(style.SHARE_LEVELS)] + ["all"]
    shades = [
        style.Entry(text.replace("%", " %"), style.swatch(color))
        for text, color in zip(texts, style.SHARES, strict=True)
    ]
    edge = style.Entry("edge: every scenario", (Line2D([], [], color=style.INK, linewidth=2.6),))
    entries = [style.Entry("Scenarios that meet everything"), *reversed(shades), edge]
    entries += layers.draw_marks(axes, points) + held
    labels.label_marks(_clearing(axes, plane, points, traced), points)
    style.add_legend(figure, entries, *_LEGEND, room=410)
    return figure


def _new_map(plane: Plane, heading: str) -> tuple[Figure, Axes]:
    figure = style.new_figure(plane.title, _subtitle(plane, heading), plane.provenance)
    axes = style.new_axes(figure, _MAP)
    layers.prepare(axes, plane)
    return figure, axes


def _clearing(axes: Axes, plane: Plane, points: Mapping[str, Mark], *traced: Any | None) -> labels.Clearing:
    """The free room beside traced lines, the unknown, the decision's points and the slowest period's line."""
    clearing = labels.Clearing(axes)
    for number, line in enumerate(traced):
        if line is not None:
            clearing.take(f"line {number}", layers.vertices(line))
    if plane.unknown.any():
        row, column = np.nonzero(plane.unknown)
        clearing.take("unknown", np.column_stack([plane.period.values[column], plane.gain.values[row]]))
    for kind, mark in points.items():
        clearing.take(kind, [(mark.period, mark.gain)], half=11 / 72 / clearing.inches)
    if slowest := points.get("slowest"):
        bottom, top = axes.get_ylim()
        line = np.geomspace(bottom, top, 100) if bottom > 0 else np.linspace(bottom, top, 100)
        clearing.take("slowest line", np.column_stack([np.full(100, slowest.period), line]))
    return clearing


def _subtitle(plane: Plane, heading: str) -> str:
    return f"{heading}; {plane.slice}" if plane.slice else heading


def _slack_bar(figure: Figure, place: tuple[float, float, float, float]) -> None:
    """The scale of the signed field: bands of equal height, their limits in plain numbers."""
    axes = figure.add_axes(place)
    colors = ListedColormap([*style.MISSED, *style.MET])
    edges = [style.SLACK_LEVELS[0] - 1, *style.SLACK_LEVELS, style.SLACK_LEVELS[-1] + 1]
    bar = figure.colorbar(
        ScalarMappable(BoundaryNorm(edges, colors.N), colors),
        cax=axes,
        spacing="uniform",
        ticks=style.SLACK_LEVELS,
    )
    bar.ax.set_yticklabels([style.plain(level).replace("-", "−") for level in style.SLACK_LEVELS], size=11)
    bar.ax.tick_params(length=0, labelcolor=style.INK)
    bar.minorticks_off()
    bar.ax.axhline(0.0, color=style.INK, linewidth=2.6)
    bar.outline.set_edgecolor(style.FRAME)
    for height, word in ((0.25, "missed"), (0.75, "met")):
        bar.ax.text(
            4.0, height, word, transform=bar.ax.transAxes, size=11, color=style.INK, va="center", rotation=90
        )


def _requirement_entry(plane: Plane, index: int, has_edge: bool, areas: set[int]) -> style.Entry:
    text = f"{index + 1}  {plane.requirements[index].full}"
    known = plane.slack[index][~np.isnan(plane.slack[index])]
    if not has_edge and known.size:
        met = known >= 0
        where = (
            "everywhere here" if met.all() else "wherever the loop is stable" if met.any() else "nowhere here"
        )
        text += f"\n    met {where}"
    artists = layers.area_sample(index) if index in areas else ()
    return style.Entry(text, (*artists, *layers.edge_sample(index)))


def _once(requirement: Requirement) -> str:
    return requirement.full.replace("\n    ", ": ")


def _is_line(plane: Plane) -> bool:
    return min(plane.period.values.size, plane.gain.values.size) == 1
