"""Step responses of a probed design: output over effort, and the corridor that is allowed: probe in, Figure out."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
import xarray as xr
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Polygon
from matplotlib.ticker import FuncFormatter, MaxNLocator

from explorer.views import style
from explorer.views.labels import Clearing
from explorer.views.probed import Floats, Probed, judged
from explorer.views.tags import fan, fan_entries, name_curves, panel, words_entry

_OUTPUT = (style.LEFT, 0.405, 0.585, 0.445)
_EFFORT = (style.LEFT, 0.125, 0.585, 0.245)
_LEGEND = (0.69, 0.85)
_DOTS = 90  # more of them are a line, not dots
_LONGEST = 2.0  # times the settling of the quick plants that are shown of slower ones, or of limits
_DIVERGED = 3.0  # where no plant is stable, the output is shown up to here
_FAR = 10.0  # times the final value: beyond every frame
_CORRIDOR = "#d7e9ea"


def responses(dataset: xr.Dataset) -> Figure:
    """Output and processor output after a unit step of the reference, every scenario within the tolerances.

    The corridor is what the requirements by response allow, about the nominal plant's final value; limits by poles
    bind no curve, and are dotted for comparison.
    """
    probed = judged(dataset)
    figure = style.new_figure(probed.title, f"Unit step of the reference at {probed.point}", probed.provenance)
    upper, lower = style.new_axes(figure, _OUTPUT), style.new_axes(figure, _EFFORT)
    unit, factor = _time_unit(probed)
    time = dataset["time"].values * factor
    end = _end(probed) * factor
    output, effort = dataset["output"].values, dataset["effort"].values
    final = final_value(probed)
    entries = _corridor(upper, probed, final, factor, end)
    entries += _effort_limit(lower, probed, effort, end)
    fan(upper, probed, time, _until_it_leaves(output, _stable(probed)))
    fan(lower, probed, time, _until_it_leaves(effort, _stable(probed)), drawstyle="steps-post")
    if (probed.within & ~_stable(probed)).any():
        entries.append(words_entry("unstable plants are drawn until they\n    leave the others behind"))
    entries = [*fan_entries(probed), *_samples(upper, probed, factor, end), *entries]
    for axes, values, label in ((upper, output, f"output{_unit_of(probed, 'load step deviation by response')}"),
                                (lower, effort, f"effort{_unit_of(probed, 'peak effort by response')}")):  # fmt: skip
        panel(axes, label)
        axes.set_xlim(0.0, end)
        axes.set_ylim(*_limits(axes, probed, values[:, time <= end]))
        axes.yaxis.set_major_locator(MaxNLocator(nbins=7 if axes is upper else 4, steps=[1, 2, 2.5, 5, 10]))
        axes.yaxis.set_major_formatter(FuncFormatter(style.plain))
        axes.xaxis.set_major_formatter(FuncFormatter(style.plain))
    upper.tick_params(labelbottom=False)
    lower.set_xlabel(f"time [{unit}]", fontsize=14, color=style.INK, labelpad=5)
    name_curves(Clearing(upper), probed, time, output)
    style.add_legend(figure, entries, *_LEGEND, room=410)
    return figure


def final_value(probed: Probed) -> float:
    """Where the nominal plant's output comes to rest after a unit step; NaN when it does not."""
    error = probed.row("steady-state error by response", "step")
    left = math.nan if error is None else error.nominal
    if not math.isfinite(left):
        return math.nan
    last = float(probed.dataset["output"].values[0, -1])
    # the error is measured by its size; the curve's end tells the side
    return 1.0 - left if abs(1.0 - left - last) <= abs(1.0 + left - last) else 1.0 + left


def _time_unit(probed: Probed) -> tuple[str, float]:
    """The unit that suits the picture, and how many of it are in one of the study's."""
    if probed.study.time_unit == "sample":
        return "samples", 1.0
    end = _end(probed)
    return ("s", 1.0) if end >= 2 else ("ms", 1e3) if end >= 2e-3 else ("µs", 1e6)


def _end(probed: Probed) -> float:
    """How long the picture is: until the stable plants have settled to half a percent, and past the limits in time.

    Plants that take far longer than the nominal one and than half of them run out of the picture.
    """
    time, output = probed.dataset["time"].values, probed.dataset["output"].values
    stable = np.flatnonzero(_stable(probed))
    if not stable.size:
        return float(time[min(40 * _steps(probed), len(time) - 1)])
    rest = output[stable][:, -1:]
    away = np.abs(output[stable] - rest) > 0.005 * np.maximum(np.abs(rest), 1e-300)
    last = time[np.max(np.where(away, np.arange(len(time)), 0), axis=1)]
    quick = min(float(np.median(last)), float(last[0]))  # the first is the nominal plant, if that is stable
    settled = min(float(last.max()), _LONGEST * quick)
    limits = [limit for kind in ("settling time", "time to peak") for _, limit in probed.asked(f"{kind} by response")]
    near = [1.15 * limit for limit in limits if limit < _LONGEST * settled]
    return float(min(time[-1], max(1.1 * settled, time[min(5, len(time) - 1)], *near, 0.0)))


def _steps(probed: Probed) -> int:
    """Points of the time axis in one period, at least 1."""
    return max(1, round(probed.period / float(probed.dataset["time"].values[1])))


def _until_it_leaves(values: Floats, stable: Any) -> Floats:
    """The curves, an unstable one only until it is larger than the stable ones ever are: the rest would hide them."""
    finite = values[stable] if stable.any() else np.full((1, 1), _DIVERGED)
    far = 1.1 * float(np.max(np.abs(finite), initial=0.0, where=np.isfinite(finite)))
    gone = np.maximum.accumulate(~(np.abs(values) <= far), axis=1)
    return np.where(gone & ~stable[:, None], np.nan, values)


def _stable(probed: Probed) -> Any:
    size = np.abs(probed.dataset["pole"].values)
    return probed.within & (np.nan_to_num(size, nan=0.0).max(axis=1) < 1) & ~np.isnan(size).all(axis=1)


def _limits(axes: Axes, probed: Probed, values: Floats) -> tuple[float, float]:
    """Range of the vertical axis: the stable plants and the limits drawn; what diverges leaves the frame."""
    stable = _stable(probed)
    rows = values[stable] if stable.any() else np.clip(values[:1], -_DIVERGED, _DIVERGED)
    drawn = [np.asarray(line.get_ydata(), float) for line in axes.lines if str(line.get_gid()).startswith("limit")]
    numbers = np.concatenate([[0.0], rows.ravel(), *drawn])
    numbers = numbers[np.isfinite(numbers)]
    room = 0.08 * (np.ptp(numbers) or 1.0)
    return float(numbers.min() - room), float(numbers.max() + room)


def _unit_of(probed: Probed, kind: str) -> str:
    """The unit of what a measure is about, for a label; "" when no requirement states it."""
    row = probed.row(kind)
    return f" [{row.unit}]" if row is not None and row.unit not in ("", "1") else ""


def corridor(probed: Probed, end: float, basis: str = "response") -> tuple[Floats, Floats, Floats] | None:
    """Times (N,) and the lowest and highest output that the requirements of one basis allow; None without any.

    Relative to the final value 1; -inf and inf where nothing is asked.
    """
    over = min((limit for _, limit in probed.asked(f"overshoot by {basis}")), default=math.inf) / 100
    under = min((limit for _, limit in probed.asked(f"undershoot by {basis}")), default=math.inf) / 100
    settled = sorted((limit, row.requirement.band) for row, limit in probed.asked(f"settling time by {basis}")
                     if row.requirement and limit < end)  # fmt: skip
    if not settled and math.isinf(over) and math.isinf(under):
        return None
    time = np.array([0.0, *(moment for limit, _ in settled for moment in (limit, limit)), end])
    low, high = np.full(len(time), -under), np.full(len(time), 1 + over)
    for index, (_, band) in enumerate(settled):
        after = slice(2 * index + 2, None)
        low[after], high[after] = np.maximum(low[after], 1 - band), np.minimum(high[after], 1 + band)
    return time, low, high


def _corridor(axes: Axes, probed: Probed, final: float, factor: float, end: float) -> list[style.Entry]:
    entries = []
    for basis in ("response", "poles"):
        found = corridor(probed, end / factor, basis) if math.isfinite(final) else None
        if found is None:
            continue
        line: dict[str, Any] = {"color": style.MET[3], "linewidth": 1.4}
        line |= {} if basis == "response" else {"linestyle": (0, (1, 1.6)), "linewidth": 1.8}
        time, low, high = found
        x, below, above = time * factor, np.maximum(low, -_FAR) * final, np.minimum(high, _FAR) * final
        for name, bound in (("above", above), ("below", below)):
            shown = np.where(np.abs(bound) < _FAR * abs(final), bound, np.nan)
            axes.plot(x, shown, zorder=2, gid=f"limit {name} by {basis}", **line)
        words = _corridor_words(probed, basis)
        if basis == "response":
            shape = np.column_stack([np.append(x, x[::-1]), np.append(above, below[::-1])])
            axes.set_facecolor(style.MISSED[-1])
            axes.add_patch(Polygon(shape, closed=True, facecolor=_CORRIDOR, edgecolor="none", zorder=1, gid="corridor"))
            entries.append(style.Entry(f"allowed corridor\n{words}", style.swatch(_CORRIDOR, edge=style.MET[3])))
        else:
            entries.append(style.Entry(f"asked of the poles, not of a curve\n{words}", (Line2D([], [], **line),)))
    return entries + _peak_limit(axes, probed, factor) + _rise_limit(axes, probed, final, factor)


def _corridor_words(probed: Probed, basis: str) -> str:
    names = [f"{name} by {basis}" for name in ("overshoot", "undershoot", "settling time")]
    lines = []
    for row in (row for row in probed.requirements if row.kind in names):
        band = f" (± {100 * row.requirement.band:g} %)" if row.requirement and row.kind.startswith("settling") else ""
        lines.append(f"    {row.kind.removesuffix(f' by {basis}')} {row.asks(probed.period)}{band}")
    return "\n".join(lines)


def _peak_limit(axes: Axes, probed: Probed, factor: float) -> list[style.Entry]:
    """The latest time at which the output may peak."""
    entries = []
    for row, limit in probed.asked("time to peak by response"):
        line: dict[str, Any] = {"color": style.stroke(2).line, "linestyle": (0, (2, 1.5)), "linewidth": 1.8}
        axes.axvline(limit * factor, zorder=4, gid="latest peak", **line)
        entries.append(style.Entry(f"latest peak {row.asks(probed.period)}", (Line2D([], [], **line),)))
    return entries


def _rise_limit(axes: Axes, probed: Probed, final: float, factor: float) -> list[style.Entry]:
    """The longest rise allowed, from where the nominal plant passes 10 %, to be compared with its 90 %."""
    entries = []
    time, output = probed.dataset["time"].values, probed.dataset["output"].values[0]
    passed = np.flatnonzero(output >= 0.1 * final) if final > 0 else np.empty(0, int)
    for row, limit in probed.asked("rise time by response"):
        if not passed.size:
            continue
        after = int(passed[0])
        start = float(np.interp(0.1 * final, output[after - 1 : after + 1], time[after - 1 : after + 1]))
        line: dict[str, Any] = {"color": style.stroke(3).line, "linewidth": 1.8, "marker": "|", "markersize": 11,
                                "markeredgewidth": 1.8}  # fmt: skip
        span = np.array([start, start + limit]) * factor
        axes.plot(span, [0.9 * final] * 2, zorder=7, gid="longest rise", **line)
        entries.append(style.Entry(f"longest rise, 10 to 90 %, {row.asks(probed.period)}\n"
                                   "    from the nominal plant's 10 %", (Line2D([], [], **line),)))  # fmt: skip
    return entries


def _effort_limit(axes: Axes, probed: Probed, effort: Floats, end: float) -> list[style.Entry]:
    """± the largest effort allowed, where it is near enough to be drawn; its side in use alone."""
    entries = []
    for row, limit in probed.asked("peak effort by response"):
        shown = effort[_stable(probed)] if _stable(probed).any() else effort[:1]
        most = float(np.max(np.abs(shown[np.isfinite(shown)]), initial=0.0))
        words = f"peak effort {row.asks(probed.period)}"
        line: dict[str, Any] = {"color": style.MET[3], "linewidth": 1.4}
        if limit > 3 * most:
            entries.append(words_entry(f"{words}: far beyond this picture"))
            continue
        axes.axhspan(-limit, limit, facecolor=_CORRIDOR, zorder=0.4, gid="allowed effort")
        axes.set_facecolor(style.MISSED[-1])
        sides = [side for side in (limit, -limit) if side > 0 or shown.min(initial=0.0) < -0.3 * limit]
        for side in sides:
            axes.plot([0, end], [side, side], zorder=2, gid=f"limit {side:g}", **line)
        entries.append(style.Entry(f"{words} (lower panel)", (Line2D([], [], **line),)))
    return entries


def _samples(axes: Axes, probed: Probed, factor: float, end: float) -> list[style.Entry]:
    """Dots where the nominal plant's output meets the sampling instants, as far as the Dataset's times hold them."""
    time, output = probed.dataset["time"].values, probed.dataset["output"].values[0]
    count = time / float(probed.dataset["true_period"].values[0])
    instants = np.flatnonzero((np.abs(count - count.round()) < 1e-6 * np.maximum(count, 1)) & (time * factor <= end))
    every = -(-len(instants) // _DOTS)
    chosen = instants[::every]
    dots: dict[str, Any] = {"linestyle": "none", "marker": "o", "markersize": 5.5, "markerfacecolor": "white",
                            "markeredgecolor": style.INK, "markeredgewidth": 1.4}  # fmt: skip
    axes.plot(time[chosen] * factor, output[chosen], zorder=7, gid="samples", **dots)
    steps = round(float(np.max(np.diff(count[chosen]), initial=1.0)))
    name = "at the sampling instants" if steps == 1 else f"at one in {steps} sampling instants"
    entries = [style.Entry(name, (Line2D([], [], **dots),))]
    if np.max(np.diff(count)) > 1.5:  # a slow plant stretched the Dataset's time
        entries.append(words_entry("curves skip samples, to reach as far as\n    the slowest plant"))
    return entries
