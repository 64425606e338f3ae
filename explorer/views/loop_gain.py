"""Loop gain of a probed design over frequency: magnitude and phase with the margins marked: probe in, Figure out."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.ticker import FuncFormatter, MaxNLocator, MultipleLocator

from explorer.views import style
from explorer.views.labels import Clearing
from explorer.views.probed import Floats, Probed, Row, judged
from explorer.views.tags import fan, fan_entries, name_curves, panel, tags_look, words_entry

_MAGNITUDE = (style.LEFT, 0.5, 0.585, 0.35)
_PHASE = (style.LEFT, 0.125, 0.585, 0.345)
_LEGEND = (0.69, 0.85)
_NEAR = 0.05  # relative, within which a crossing of the drawn curve is the one the measure speaks of
_DEEPEST = -60.0  # dB; the phase is shown down to there too, for what lies deeper tells nothing about the margins


def loop_gain(dataset: xr.Dataset) -> Figure:
    """L on the unit circle up to half the sampling rate, every scenario within the tolerances.

    Gain and phase margin stand as bars on the nominal and the worst plants' curves, where the loops are stable.
    """
    probed = judged(dataset)
    figure = style.new_figure(probed.title, f"Gain around the loop at {probed.point}", probed.provenance)
    upper, lower = style.new_axes(figure, _MAGNITUDE), style.new_axes(figure, _PHASE)
    frequency = probed.dataset["frequency"].values
    magnitude, phase = decibels(probed), unwrapped(probed)
    fan(upper, probed, frequency, magnitude)
    fan(lower, probed, frequency, phase)
    panel(upper, "magnitude [dB]")
    panel(lower, "phase [deg]")
    unit = probed.dataset["frequency"].attrs["units"]
    for axes, label in ((upper, ""), (lower, f"frequency [{unit}]")):
        style.scale_axis(axes, "x", frequency, label)
    upper.tick_params(labelbottom=False)
    _scales(upper, lower, magnitude[probed.within], phase[probed.within])
    upper.axhline(0.0, color=style.INK, linewidth=1.2, zorder=3.5, gid="gain 1")
    entries = fan_entries(probed)
    entries += _half_turns(lower)
    entries += _margins(upper, lower, probed, magnitude, phase)
    clearing = Clearing(upper)
    for line in (line for line in upper.lines if str(line.get_gid()).startswith("gain margin")):
        ends = np.column_stack([np.asarray(line.get_xdata(), float), np.asarray(line.get_ydata(), float)])
        bar = ends[0] + np.linspace(0.0, 1.0, 12)[:, None] * (ends[1] - ends[0])
        clearing.take(str(line.get_gid()), bar, 5.0 / 72 / clearing.inches)
    name_curves(clearing, probed, frequency, magnitude)
    entries.append(words_entry("the right end is half the sampling rate"))
    style.add_legend(figure, entries, *_LEGEND, room=410)
    return figure


def decibels(probed: Probed) -> Floats:
    """|L| of every scenario in dB, (S, F); -inf where it vanishes."""
    with np.errstate(divide="ignore"):
        return np.asarray(20 * np.log10(np.abs(probed.dataset["loop_gain"].values)))


def unwrapped(probed: Probed) -> Floats:
    """arg L of every scenario in degrees, (S, F), without jumps, from -270° to 90° at the lowest frequency."""
    loop = probed.dataset["loop_gain"].values
    known = np.isfinite(loop)
    phase = np.degrees(np.unwrap(np.angle(np.where(known, loop, 1.0)), axis=1))
    # a start at +180° is the -180° of two integrators or of a reversed sign
    start = phase[:, :1]
    return np.where(known, phase - 360.0 * np.ceil((start - 90.0) / 360.0), np.nan)


def margin_marks(probed: Probed, scenario: int) -> dict[str, tuple[float, float]]:
    """Where the margins of a scenario lie on its curves: {"gain margin": (frequency, dB), "phase margin": (…, deg)}.

    The values are those of the measures; a margin that is infinite, unknown or not found on the curve is left out.
    """
    frequency = probed.dataset["frequency"].values
    magnitude, phase = decibels(probed)[scenario], unwrapped(probed)[scenario]
    found = {}
    gain, turn = probed.row("gain margin"), probed.row("phase margin")
    if gain is not None and 0 < gain.values[scenario] < math.inf:
        asked = 20 * math.log10(gain.values[scenario])
        at = _crossing(frequency, (phase + 180.0) / 360.0, magnitude, -asked, whole=True)
        if at is not None:
            found["gain margin"] = (at, asked)
    if turn is not None and math.isfinite(turn.values[scenario]):
        asked = float(turn.values[scenario])
        at = _crossing(frequency, magnitude, (phase - 180.0 - asked + 180.0) % 360.0 - 180.0, 0.0)
        if at is not None:
            found["phase margin"] = (at, asked)
    return found


def _crossing(x: Floats, level: Floats, other: Floats, wanted: float, whole: bool = False) -> float | None:
    """Where `level` crosses 0 (or, with `whole`, any whole number) with `other` nearest to `wanted`; None when far."""
    ahead = np.floor(level[1:]) != np.floor(level[:-1]) if whole else (level[1:] >= 0) != (level[:-1] >= 0)
    places: list[tuple[float, float]] = []
    for index in np.flatnonzero(ahead & np.isfinite(level[1:]) & np.isfinite(level[:-1])).tolist():
        first, last = level[index], level[index + 1]
        target = math.floor(max(first, last)) if whole else 0.0
        part = (target - first) / (last - first)
        value = other[index] + part * (other[index + 1] - other[index])
        places.append((abs(value - wanted), float(x[index] * (x[index + 1] / x[index]) ** part)))
    if whole and np.isfinite(level[-1]) and abs(level[-1] - round(level[-1])) < 1e-6:  # half the sampling rate
        places.append((abs(other[-1] - wanted), float(x[-1])))
    if not places:
        return None
    distance, place = min(places)
    return place if distance <= max(1.0, _NEAR * abs(wanted)) else None


def _scales(upper: Axes, lower: Axes, magnitude: Floats, phase: Floats) -> None:
    finite = magnitude[np.isfinite(magnitude)]
    low = max(float(finite.min(initial=0.0)), _DEEPEST)
    high = max(float(finite.max(initial=0.0)), 10.0)
    upper.set_ylim(low - 4.0, high + 4.0)
    upper.yaxis.set_major_locator(MaxNLocator(nbins=6, steps=[1, 2, 4, 5, 10]))
    known = phase[np.isfinite(phase) & (np.where(np.isfinite(magnitude), magnitude, -np.inf) > low)]
    deepest, highest = float(known.min(initial=-180.0)), float(known.max(initial=-180.0))
    lower.set_ylim(max(deepest, -1000.0) - 15.0, max(highest, -150.0) + 15.0)
    step = 45.0 if np.ptp(lower.get_ylim()) <= 300 else 90.0 if np.ptp(lower.get_ylim()) <= 600 else 180.0
    lower.yaxis.set_major_locator(MultipleLocator(step))
    for axes in (upper, lower):
        axes.yaxis.set_major_formatter(FuncFormatter(style.plain))


def _half_turns(axes: Axes) -> list[style.Entry]:
    """The phases at which L is negative: -180° and whole turns from it."""
    low, high = axes.get_ylim()
    line: dict[str, Any] = {"color": style.INK, "linewidth": 1.2}
    for level in np.arange(-180.0 - 360.0 * 10, 541.0, 360.0):
        if low < level < high:
            axes.axhline(level, zorder=3.5, gid="half turn", **line)
    return [style.Entry("gain 1, and phase −180° (± 360°)", (Line2D([], [], **line),))]


def _margins(upper: Axes, lower: Axes, probed: Probed, magnitude: Floats, phase: Floats) -> list[style.Entry]:
    """Bars between curve and limit line: gain margin above, phase margin below."""
    frequency = probed.dataset["frequency"].values
    rows = [row for row in (probed.row("gain margin"), probed.row("phase margin")) if row is not None]
    shown = {row.worst: style.QUIET_INK for row in rows if row.worst is not None} | {0: style.INK}
    shown |= {scenario: look.line for scenario, look in tags_look(probed).items()}
    for scenario, color in shown.items():
        look: dict[str, Any] = {
            "color": color, "linewidth": 3.6 if scenario == 0 else 2.6, "zorder": 8, "solid_capstyle": "butt",
            "marker": "_", "markersize": 10, "markeredgewidth": 2.0,
        }  # fmt: skip
        for name, (at, size) in margin_marks(probed, scenario).items():
            if name == "gain margin":
                upper.plot([at, at], [-size, 0.0], gid=f"{name} {scenario}", **look)
            else:
                here = float(np.interp(math.log(at), np.log(frequency), phase[scenario]))
                upper.plot([at], [0.0], color=color, marker="o", markersize=5, zorder=8, gid=f"crossover {scenario}")
                lower.plot([at, at], [here - size, here], gid=f"{name} {scenario}", **look)
    bar = Line2D([], [], color=style.INK, linewidth=3.6, marker="_", markersize=10, markeredgewidth=2.0)
    return [style.Entry(_margin_words(probed, row), (bar,)) for row in rows]


def _margin_words(probed: Probed, row: Row) -> str:
    """ "gain margin 12 dB; worst 9 dB, plant 7", in the unit of the axis."""

    def words(value: float) -> str:
        """The margin as people read it."""
        known = 0 < value < math.inf
        return f"{20 * math.log10(value):.3g} dB" if known and row.kind == "gain margin" else row.words(value)

    worst = "" if row.worst in (None, 0) else f"; worst {words(row.worst_value)}, plant {row.worst}"
    limits = [f"\n    asked: ≥ {words(limit)}" for asked, limit in probed.asked(row.kind) if asked is row]
    return f"{row.kind} {words(row.nominal)}{worst}{''.join(limits)}"
