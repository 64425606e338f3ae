"""Closed-loop poles of a probed design in the z-plane, with the ground the requirements allow: probe in, Figure out.

Poles come in mirrored pairs, so the upper half is drawn. Everything is placed by z - 1, for fast sampling crowds the
poles at z = 1, where z itself has no digits left.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Polygon, Rectangle
from matplotlib.ticker import FuncFormatter, MaxNLocator

from explorer.views import style
from explorer.views.labels import Clearing
from explorer.views.probed import Floats, Probed, Row, judged
from explorer.views.tags import cloud_entry, name_plant, nominal_entry, tag, tags_look, worst_entries

_MAIN = (style.LEFT, 0.135, 0.585, 0.715)
_WIDE = (style.LEFT, 0.255, 0.585, 0.595)  # for the half circle
_SMALL = (0.7, 0.575, 0.28, 0.27)
_LEGEND_LEFT = 0.69
_CROWDED = 0.45  # a box below this share of the circle's width gets a picture of its own
_SLOW = 4.0  # poles that decay at most this many times faster than the slowest are looked at closely
_SEEN = 0.5  # |z| below which a pole is too quick to be what a study's damping is about
_OF_PAIR = ("overshoot by poles", "time to peak by poles")  # they bind the slowest pair alone


@dataclass(frozen=True)
class Border:
    """A requirement's edge over the angle of z: the allowed log|z| is at most `highest`, (A,); inf where any is."""

    row: Row
    highest: Floats


@dataclass(frozen=True)
class Window:
    """A part of the plane: centre and half size in w = z - 1, and how its axes count."""

    centre: complex
    half: tuple[float, float]
    power: int  # axes show w times 10 to this power, or z itself where it is 0

    def place(self, w: Any) -> tuple[Floats, Floats]:
        """Points of the plane in the numbers of the axes."""
        shift, factor = (1.0, 1.0) if self.power == 0 else (0.0, 10.0**self.power)
        return np.asarray(np.real(w) * factor + shift), np.asarray(np.imag(w) * factor)


def z_plane(dataset: xr.Dataset) -> Figure:
    """The poles of every scenario within the tolerances, nominal and worst ones marked, over the allowed ground.

    Where poles crowd, the slow ones are drawn large and the whole half circle small beside them.
    """
    probed = judged(dataset)
    subtitle = f"Closed-loop poles at {probed.point}"
    figure = style.new_figure(probed.title, subtitle, probed.provenance)
    poles = _poles(probed)
    close, reach = _window(poles, probed.within), _reach(poles, probed.within)
    if close is None or _hides_the_least_damped(probed, poles, close):
        large, window = style.new_axes(figure, _WIDE), _whole(_WIDE, reach)
        other, title = close and _shaped(close, _SMALL), "the slow poles"
        title += f": z less 1, in 10{_exponent(close)}" if close and close.power else ""
    else:
        large, window = style.new_axes(figure, _MAIN), close
        other, title = _whole(_SMALL, reach), "the upper half of the unit circle"
    entries = _draw(large, probed, poles, window, words=True)
    if other is None:
        style.add_legend(figure, entries, _LEGEND_LEFT, 0.85, room=410)
        return figure
    small = style.new_axes(figure, _SMALL)
    _draw(small, probed, poles, other, words=False)
    if other.half > window.half:
        _frame_of(small, other, window)
    else:
        _frame_of(large, window, other)
    small.set_title(title, fontsize=11, loc="left", color=style.QUIET_INK, pad=5)
    style.add_legend(figure, entries, _LEGEND_LEFT, 0.515, room=255)
    return figure


def borders(probed: Probed, angle: Floats) -> list[Border]:
    """The edges of the study's requirements on poles at these angles of z, (A,) in 0..π.

    Overshoot and time to peak by poles are left to `pair_borders`: other poles may lie beyond them.
    """
    found = []
    for row in probed.requirements:
        limits = probed.asked(row.kind)
        limit = next((limit for asked, limit in limits if asked is row), math.nan)
        highest = _highest(row, limit, angle, probed.period)
        if highest is not None:
            found.append(Border(row, highest))
    return found


def pair_borders(probed: Probed, angle: Floats) -> list[Border]:
    """The edges for the slowest pair of non-real poles alone."""
    found = []
    for kind in _OF_PAIR:
        for row, limit in probed.asked(kind):
            if row.better == "more":
                continue
            if kind.startswith("overshoot"):
                highest = angle * math.log(max(limit, 1e-300) / 100) / math.pi
            else:
                highest = np.where(angle >= math.pi * probed.period / limit, np.inf, -np.inf)
            found.append(Border(row, highest))
    return found


def _highest(row: Row, limit: float, angle: Floats, period: float) -> Floats | None:
    """Largest log|z| that meets one requirement at each angle; None for requirements that bind no single pole."""
    upright = row.better == ("more" if row.kind in ("damping ratio", "natural frequency") else "less")
    if not upright:
        return None  # asked the unusual way round, it holds somewhere among the poles, not for each of them
    if row.kind == "stability":
        return np.zeros_like(angle)
    if row.kind == "spectral radius":
        return np.full_like(angle, math.log(limit) if limit > 0 else -math.inf)
    if row.kind == "settling time by poles":
        band = row.requirement.band if row.requirement else 0.02
        return np.full_like(angle, math.log(band) * period / limit if limit > 0 else -math.inf)
    if row.kind == "damping ratio":
        if abs(limit) >= 1:
            return np.where(angle > 0, -math.inf, 0.0)
        return np.asarray(-angle * limit / math.sqrt(1 - limit**2))
    if row.kind == "natural frequency":
        reach = (limit * period) ** 2 - angle**2
        return np.where(reach > 0, -np.sqrt(np.maximum(reach, 0)), np.inf)
    return None


def _poles(probed: Probed) -> Any:
    """w = z - 1 of every pole with all its digits, (S, poles); NaN where there is none."""
    data = probed.dataset
    return np.expm1(data["pole_s"].values * data["true_period"].values[:, None])


def _aspect(place: tuple[float, float, float, float]) -> float:
    return place[3] * 7.5 / (place[2] * 13.333)


def _window(poles: Any, within: Any) -> Window | None:
    """The box around the slow poles, shaped like the page; None where it would be most of the circle."""
    log_z = np.log1p(poles[within])
    known = log_z[np.isfinite(log_z)]
    if not known.size:
        return None
    slowest = np.min(np.abs(log_z.real), axis=1, initial=np.inf, where=np.isfinite(log_z))
    rate = float(np.median(slowest[np.isfinite(slowest)]))
    slow = np.expm1(known[(np.abs(known.real) <= _SLOW * max(rate, 1e-12)) & (known.imag >= -1e-12)])
    if not slow.size:
        return None
    left, right = float(slow.real.min()), float(max(slow.real.max(), 0.0))
    high = float(slow.imag.max(initial=0.0))
    width = 1.25 * max(right - left, (high + 1e-300) / _aspect(_MAIN), 1e-12)
    if width > _CROWDED * 2:
        return None
    height = width * _aspect(_MAIN)
    bottom = -0.08 * height
    centre = complex(right - 0.42 * width, bottom + height / 2)
    power = 0 if width > 0.02 else 3 * math.ceil(-math.log10(width) / 3)
    return Window(centre, (width / 2, height / 2), power)


def _whole(place: tuple[float, float, float, float], reach: float) -> Window:
    """The upper half of the unit circle, and of what lies outside up to `reach`."""
    half = (reach, reach * _aspect(place))
    return Window(complex(-1, half[1] - 0.08 * reach), half, 0)


def _reach(poles: Any, within: Any) -> float:
    """How far from z = 0 the whole picture goes: past every pole, but no further than 3."""
    return float(np.clip(1.1 * np.abs(1 + poles[within][np.isfinite(poles[within])]).max(initial=1.0), 1.1, 3.0))


def _shaped(window: Window, place: tuple[float, float, float, float]) -> Window:
    """The same part of the plane for axes of another shape, none of it lost."""
    width = max(window.half[0], window.half[1] / _aspect(place))
    half = (width, width * _aspect(place))
    return Window(complex(window.centre.real, window.centre.imag - window.half[1] + half[1]), half, window.power)


def _hides_the_least_damped(probed: Probed, poles: Any, close: Window) -> bool:
    """Whether a study that asks for damping has its least damped poles outside the close view."""
    if not probed.asked("damping ratio"):
        return False
    log_z = np.log1p(poles[[0, *probed.drawn]])
    damping = np.where(np.isfinite(log_z) & (log_z != 0), -log_z.real / np.abs(log_z), np.inf)
    least = poles[[0, *probed.drawn]][np.arange(len(damping)), damping.argmin(axis=1)]
    apart = np.abs(np.column_stack([least.real - close.centre.real, np.abs(least.imag) - close.centre.imag]))
    known = (damping.min(axis=1) < 1) & (np.abs(1 + least) > _SEEN)
    return bool((known & (apart > close.half).any(axis=1)).any())


def _frame_of(axes: Axes, window: Window, other: Window) -> None:
    """Where the other view lies in this one."""
    corners = np.array([other.centre - complex(*other.half), other.centre + complex(*other.half)])
    x, y = window.place(corners)
    frame: dict[str, Any] = {"facecolor": "none", "edgecolor": style.INK, "linewidth": 1.4, "zorder": 12}
    axes.add_patch(Rectangle((x[0], y[0]), x[1] - x[0], y[1] - y[0], gid="the other view", **frame))


def _exponent(window: Window) -> str:
    return str(-window.power).translate(str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"))


def _draw(axes: Axes, probed: Probed, poles: Any, window: Window, words: bool) -> list[style.Entry]:
    """One view of the plane; returns the legend."""
    angle = np.concatenate([[0.0], np.geomspace(1e-3 * window.half[1], math.pi, 700)])
    _frame(axes, window, words)
    entries = _ground(axes, probed, window, angle)
    circle = np.expm1(1j * angle)
    axes.plot(*window.place(circle), color=style.INK, linewidth=2.2, zorder=4, gid="unit circle")
    axes.plot(*window.place(np.array([-2.0, 0.0])), color=style.FRAME, linewidth=0.8, zorder=2)
    number = next((f"{n + 1}  " for n, row in enumerate(probed.requirements) if row.kind == "stability"), "")
    sample = Line2D([], [], color=style.INK, linewidth=2.2)
    entries.append(style.Entry(f"{number}unit circle: stable inside", (sample,)))
    clearing = Clearing(axes)
    marks = _marks(axes, probed, poles, window, words)
    if words:
        for key, size in (("cloud", 3.0), *((f"worst {scenario}", 6.0) for scenario in probed.drawn), ("nominal", 6.0)):
            _take(clearing, key, size)
    entries += _edges(axes, probed, window, angle, clearing if words else None)
    if words:
        _name_worst(clearing, probed, poles, window)
    return [*marks, *entries]


def _frame(axes: Axes, window: Window, words: bool) -> None:
    low, high = (window.place(window.centre + sign * complex(*window.half)) for sign in (-1, 1))
    axes.set_xlim(float(low[0]), float(high[0]))
    axes.set_ylim(float(low[1]), float(high[1]))
    axes.set_aspect("equal", adjustable="box")
    for axis, most in ((axes.xaxis, 7), (axes.yaxis, 6)):
        axis.set_major_locator(MaxNLocator(nbins=most if words else 4, steps=[1, 2, 2.5, 5, 10]))
        axis.set_major_formatter(FuncFormatter(style.plain))
    size = 12 if words else 10
    axes.tick_params(labelsize=size, length=6 if words else 3, color=style.FRAME, labelcolor=style.INK)
    if not words:
        return
    exponent = _exponent(window)
    names = ("real part of z", "imaginary part of z") if window.power == 0 else (
        f"real part of z, less 1 [10{exponent}]", f"imaginary part of z [10{exponent}]")  # fmt: skip
    axes.set_xlabel(names[0], fontsize=14, color=style.INK, labelpad=7)
    axes.set_ylabel(names[1], fontsize=14, color=style.INK, labelpad=7)


def _ground(axes: Axes, probed: Probed, window: Window, angle: Floats) -> list[style.Entry]:
    """Shade what all requirements on poles allow together, inside the unit circle."""
    found = borders(probed, angle)
    highest = np.min([np.zeros_like(angle), *[one.highest for one in found]], axis=0)
    # Nothing is lost at -inf: e to the power of -745 is the least number there is, and 0 beside any circle.
    rim = np.expm1(np.maximum(highest, -745.0) + 1j * angle)
    outline = np.append(rim, rim[:1])  # back along the real axis
    look: dict[str, Any] = {"facecolor": style.MET[0], "edgecolor": "none", "alpha": 0.55, "zorder": 1}
    axes.set_facecolor(style.MISSED[-1])
    axes.add_patch(Polygon(np.column_stack(window.place(outline)), closed=True, gid="allowed", **look))
    words = "allowed for every pole" if found else "stable; no requirement binds single poles"
    return [style.Entry(words, style.swatch("#bfdcde"))]


def _edges(axes: Axes, probed: Probed, window: Window, angle: Floats, clearing: Clearing | None) -> list[style.Entry]:
    entries = []
    for one in [*borders(probed, angle), *pair_borders(probed, angle)]:
        if one.row.kind == "stability":
            continue  # its edge is the unit circle
        index = next(number for number, row in enumerate(probed.requirements) if row is one.row)
        look = style.stroke(index)
        line: dict[str, Any] = {"color": look.line, "linestyle": look.dashes, "linewidth": 2.0}
        points = _edge_points(one, angle)
        x, y = window.place(points)
        axes.plot(x, y, zorder=5, gid=f"edge {index + 1}", **line)
        side = "above" if one.row.kind.startswith("time to peak") else "inside"
        pair = f"\n    for the slowest pair alone: {side}" if one.row.kind in _OF_PAIR else ""
        asks = f"{one.row.kind} {one.row.asks(probed.period)}{pair}"
        name = "" if one.row.full_name == one.row.kind else f"{one.row.name}\n    "
        entries.append(style.Entry(f"{index + 1}  {name}{asks}", (Line2D([], [], **line),)))
        if clearing is not None:
            inside = np.column_stack([x, y])[(np.abs(points - window.centre).real < 2 * max(window.half))]
            clearing.take(f"edge {index + 1}", inside[np.isfinite(inside).all(axis=1)])
            tag(clearing, inside, str(index + 1), look.line, f"edge {index + 1}")
    return entries


def _edge_points(one: Border, angle: Floats) -> Any:
    """The edge as points w; a bound on the angle alone is a ray from z = 0."""
    if np.isinf(one.highest).any() and one.row.kind.startswith("time to peak"):
        first = angle[np.flatnonzero(one.highest > 0)[:1]]
        return np.expm1(np.linspace(-7, 0, 60) + 1j * (first[0] if first.size else math.pi))
    finite = np.where(np.isfinite(one.highest), one.highest, np.nan)
    return np.expm1(finite + 1j * angle)


def _marks(axes: Axes, probed: Probed, poles: Any, window: Window, words: bool) -> list[style.Entry]:
    """The cloud, the worst plants and the nominal one, the last on top; small where there are many, as of dead time."""
    apart = _upper(poles[0]) - window.centre
    many = np.sum((np.abs(apart.real) < window.half[0]) & (np.abs(apart.imag) < window.half[1])) > 12
    size = (1.0 if words else 0.6) * (0.55 if many else 1.0)
    cloud = _upper(poles[probed.within].ravel())
    dots: dict[str, Any] = {"linestyle": "none", "marker": "o", "color": style.QUIET_INK, "markeredgewidth": 0}
    axes.plot(*window.place(cloud), markersize=4.5 * size, alpha=0.55, zorder=6, gid="cloud", **dots)
    for scenario, look in tags_look(probed).items():
        mark: dict[str, Any] = {
            "linestyle": "none", "marker": look.marker, "color": look.line, "markersize": 10 * size,
            "markeredgecolor": "white", "markeredgewidth": 0.8,
        }  # fmt: skip
        axes.plot(*window.place(_upper(poles[scenario])), zorder=8, gid=f"worst {scenario}", **mark)
    diamond: dict[str, Any] = {"linestyle": "none", "marker": "D", "markerfacecolor": "white", "color": style.INK,
                               "markersize": 9 * size, "markeredgewidth": 2.0 * size}  # fmt: skip
    axes.plot(*window.place(_upper(poles[0])), zorder=9, gid="nominal", **diamond)
    return [nominal_entry(probed, Line2D([], [], **diamond)), cloud_entry(probed, Line2D([], [], **dots)),
            *worst_entries(probed, marks=True)]  # fmt: skip


def _upper(poles: Any) -> Any:
    """The known poles of the upper half and the real axis."""
    return poles[np.isfinite(poles) & (poles.imag >= -1e-12 * np.abs(poles))]


def _take(clearing: Clearing, key: str, size: float) -> None:
    """What is drawn under that key keeps its place free of words."""
    for line in clearing.axes.lines:
        points = np.column_stack([np.asarray(line.get_xdata(), float), np.asarray(line.get_ydata(), float)])
        if line.get_gid() == key and len(points):
            clearing.take(key, points, size / 72 / clearing.inches)


def _name_worst(clearing: Clearing, probed: Probed, poles: Any, window: Window) -> None:
    """The number of each worst plant beside the pole that makes it the worst: the least damped, or the slowest."""
    kinds = {row.name: row.kind for row in probed.requirements}
    for scenario, look in tags_look(probed).items():
        own = _upper(poles[scenario])
        if kinds[probed.worst[scenario][0]] == "damping ratio":
            log_z = np.log1p(own)
            own = own[np.argsort(-log_z.real / np.maximum(np.abs(log_z), 1e-300), kind="stable")]
        spots = np.column_stack(window.place(own[:4]))
        if not name_plant(clearing, scenario, spots[:1], look.line):
            name_plant(clearing, scenario, spots[1:], look.line)
