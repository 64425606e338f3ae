"""Where only one period or one gain was swept: slack along the other axis as lines, for maps out."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D

from explorer.views import labels, style
from explorer.views.plane import Axis, Floats, Mark, Plane

_PLACE = (style.LEFT, 0.135, 0.585, 0.715)
_LEGEND = (0.69, 0.85)
_LOWEST, _HIGHEST = -1.0, 1.5  # slack that is shown; what lies beyond leaves the frame


def slack_lines(plane: Plane, points: Mapping[str, Mark], chosen: Sequence[int] | None = None) -> Figure:
    """Slack of the `chosen` requirements (default: all) against the swept axis; where all hold is shaded.

    Infinite slack leaves the frame; unknown spans carry the mark of the unknown.
    """
    axis, fixed = _axes_of(plane)
    shown = list(range(len(plane.requirements))) if chosen is None else list(chosen)
    heading = f"Slack of each requirement over {plane.box}, at {fixed}"
    figure, axes = _new_lines(plane, heading, axis)
    rows = [plane.slack[index].ravel() for index in shown]
    low, high = _range(rows)
    entries = [*_spans(axes, axis, plane.least.ravel()), *_marks(axes, axis, plane, points)]
    axes.axhline(0.0, color=style.INK, linewidth=2.2, zorder=4)
    entries.append(style.Entry("Requirements: slack, met from 0 up"))
    for index, row in zip(shown, rows, strict=True):
        look = style.stroke(index)
        every = max(1, axis.values.size // 12)
        line: dict[str, Any] = {
            "color": look.line, "linestyle": look.dashes, "linewidth": 2.2, "marker": look.marker,
            "markersize": 7, "markerfacecolor": "white", "markeredgewidth": 1.6,
        }  # fmt: skip
        start = (index * every // max(1, len(shown))) % every
        drawn = np.clip(row, low - 2.0, high + 2.0)
        axes.plot(axis.values, drawn, markevery=(start, every), zorder=5, gid=f"slack {index + 1}", **line)
        text = f"{index + 1}  {plane.requirements[index].full}"
        entries.append(style.Entry(text, (Line2D([], [], **line),)))
    if not plane.feasible.any():
        labels.say_empty(labels.Clearing(axes), plane)
        high += 0.17 * (high - low)  # room for the words above the lines
    axes.set_ylim(low, high)
    axes.set_ylabel("slack, as a share of the limit", fontsize=14, color=style.INK, labelpad=7)
    style.add_legend(figure, entries, *_LEGEND, room=410)
    return figure


def share_lines(plane: Plane, share: Floats) -> Figure:
    """Share of scenarios that meet every requirement, in percent, against the swept axis."""
    axis, fixed = _axes_of(plane)
    heading = f"Share of scenarios that meet the study's own limits, within {plane.box}, at {fixed}"
    figure, axes = _new_lines(plane, heading, axis)
    entries = _spans(axes, axis, plane.least.ravel())
    look: dict[str, Any] = {"color": style.MET[-1], "linewidth": 2.4, "marker": "o", "markersize": 5}
    axes.plot(axis.values, 100 * share.ravel(), zorder=5, gid="share", **look)
    axes.set_ylim(-3.0, 103.0)
    axes.set_ylabel("scenarios that meet everything [%]", fontsize=14, color=style.INK, labelpad=7)
    entries.append(style.Entry("share of scenarios", (Line2D([], [], **look),)))
    style.add_legend(figure, entries, *_LEGEND, room=410)
    return figure


def spans(values: Floats, least: Floats) -> list[tuple[float, float]]:
    """Where the least slack is at least 0: (from, to) in the axis' unit, ends by a line between points.

    Next to an unknown or infinite point a span ends at the last point that holds.
    """
    held = least >= 0  # False for NaN
    starts = np.flatnonzero(held & ~np.append(False, held[:-1]))
    stops = np.flatnonzero(held & ~np.append(held[1:], False))
    return [
        (_end(values, least, first, first - 1), _end(values, least, last, last + 1))
        for first, last in zip(starts.tolist(), stops.tolist(), strict=True)
    ]


def _end(values: Floats, least: Floats, inside: int, outside: int) -> float:
    """The crossing of 0 as the drawn line has it: on a logarithmic axis by ratios."""
    near = float(values[inside])
    if not 0 <= outside < values.size or not np.isfinite(least[[inside, outside]]).all():
        return near
    part = float(least[inside] / (least[inside] - least[outside]))
    far = float(values[outside])
    return near * (far / near) ** part if values.min() > 0 else near + part * (far - near)


def _axes_of(plane: Plane) -> tuple[Axis, str]:
    """The axis along which is drawn, and the other one's only value in words."""
    if plane.period.values.size == 1:
        return plane.gain, f"sample period {plane.period.words(float(plane.period.values[0]))}"
    return plane.period, f"gain {plane.gain.words(float(plane.gain.values[0]))}"


def _new_lines(plane: Plane, heading: str, axis: Axis) -> tuple[Figure, Axes]:
    subtitle = f"{heading}; {plane.slice}" if plane.slice else heading
    figure = style.new_figure(plane.title, subtitle, plane.provenance)
    axes = style.new_axes(figure, _PLACE)
    style.scale_axis(axes, "x", axis.values, axis.label)
    axes.tick_params(axis="y", labelsize=12, color=style.FRAME, labelcolor=style.INK)
    axes.set_axisbelow(True)
    axes.grid(axis="y", color=style.OUTSIDE, linewidth=0.8, zorder=0.5)
    return figure, axes


def _range(rows: Sequence[Floats]) -> tuple[float, float]:
    finite = np.concatenate([row[np.isfinite(row)] for row in rows] + [np.array([-0.2, 0.2])])
    return max(_LOWEST, float(finite.min())) - 0.06, min(_HIGHEST, float(finite.max())) + 0.06


def _spans(axes: Axes, axis: Axis, least: Floats) -> list[style.Entry]:
    entries = []
    for low, high in spans(axis.values, least):
        axes.axvspan(low, high, facecolor=style.MET[0], linewidth=0, zorder=1, gid="all hold")
        for end in (low, high):
            axes.axvline(end, color=style.MET[3], linewidth=1.6, zorder=2)
        span = f": about {axis.words(low)} to {axis.words(high)}" if high > low else f" at {axis.words(low)}"
        entries.append(style.Entry(f"all hold{span}", style.swatch(style.MET[0])))
    unknown = np.isnan(least)
    if unknown.any():
        _unknown_spans(axes, axis, unknown)
        text = f"unknown: {int(unknown.sum())} of {unknown.size} points"
        entries.append(style.Entry(text, style.swatch(style.UNKNOWN, "xx", style.UNKNOWN_HATCH)))
    return entries


def _unknown_spans(axes: Axes, axis: Axis, unknown: Any) -> None:
    """From the last known point to the next known one: in between, nobody knows."""
    last = axis.values.size - 1
    starts = np.flatnonzero(unknown & ~np.append(False, unknown[:-1]))
    stops = np.flatnonzero(unknown & ~np.append(unknown[1:], False))
    for first, end in zip(starts.tolist(), stops.tolist(), strict=True):
        low, high = axis.values[max(first - 1, 0)], axis.values[min(end + 1, last)]
        span = axes.axvspan(low, high, linewidth=0, zorder=3, gid="unknown")
        span.set(facecolor=style.UNKNOWN, edgecolor=style.UNKNOWN_HATCH, hatch="xx")
        span.set_hatch_linewidth(style.HATCH_WIDTH)


def _marks(axes: Axes, axis: Axis, plane: Plane, points: Mapping[str, Mark]) -> list[style.Entry]:
    """Vertical lines at the recommended (or nearest) design; the slowest period where the period is drawn."""
    entries = []
    looks = {"recommended": "solid", "nearest": "solid", "slowest": (0, (5, 3))}
    for kind, mark in points.items():
        if kind == "slowest" and axis is plane.gain:
            continue
        at = mark.gain if axis is plane.gain else mark.period
        look: dict[str, Any] = {"color": style.INK, "linewidth": 1.6, "linestyle": looks[kind]}
        axes.axvline(at, zorder=6, gid=kind, **look)
        word = "slowest period" if kind == "slowest" else kind
        entries.append(style.Entry(f"{word}: {mark.text}", (Line2D([], [], **look),)))
    return entries
