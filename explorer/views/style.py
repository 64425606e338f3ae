"""The look of every picture: colours, strokes, ticks, frame and saving, for maps and lines; knows no Dataset.

Everything is legible three ways: by colour, by lightness (what holds is always darker than what is missed)
and by stroke or hatch, so that a grey print and a colour-blind reader lose nothing. No pyplot, no settings.
"""

from __future__ import annotations

import math
import os
import textwrap
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Literal

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.legend_handler import HandlerTuple
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from matplotlib.patheffects import withStroke
from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullFormatter

from explorer.errors import OptionError, RunError

INK = "#1d2733"
QUIET_INK = "#5b6672"
FRAME = "#8a939c"
OUTSIDE = "#eceae6"
UNKNOWN = "#4c5057"
UNKNOWN_HATCH = "#d9dce0"
HATCH_WIDTH = 0.6
LEFT = 0.075  # where titles and axes start, as a share of the width

# Slack in bands: the same colour means the same slack in every picture. CIE lightness falls on both sides of
# zero, 97 to 79 where missed, 74 to 23 where met, so every met band is darker than every missed one.
SLACK_LEVELS = (-1.0, -0.5, -0.2, -0.1, -0.05, 0.0, 0.05, 0.1, 0.2, 0.5, 1.0)
MISSED = ("#f3b883", "#f4c597", "#f4d1ac", "#f5ddc2", "#f6e9d8", "#fbf6ef")  # most missed first
MET = ("#8abfc3", "#64a5b1", "#438a9b", "#2c6f84", "#1e546b", "#143a4f")  # just met first
SHARE_LEVELS = (0.0, 0.25, 0.5, 0.75, 0.9, 0.99, 1.0)
# The last is for every scenario.
SHARES = ("#fbf6ef", "#ede5d4", "#d3d3bc", "#a8c1b3", "#84aba7", "#579297", "#1e546b")

FORMATS = ("png", "svg", "pdf")
_METADATA: dict[str, dict[str, None]] = {
    "png": {"Software": None},
    "svg": {"Creator": None, "Date": None},
    "pdf": {"Creator": None, "Producer": None, "CreationDate": None},
}


@dataclass(frozen=True)
class Stroke:
    """How one requirement is drawn: its edge's colour, dashes and mark, and the area where it binds."""

    line: str
    dashes: Any
    marker: str
    tint: str
    hatch: str


_LINES = ("#00507f", "#9c4022", "#6b3f77", "#5d5500", "#1e5b34", "#8f2f4f", "#334e8a", "#4a4a4a")
_TINTS = ("#ddedfb", "#efd8d2", "#f4e7f6", "#e1ddcc", "#e2f1e5", "#f3d6de", "#e7eafb", "#dcdcdc")
_HATCHES = ("/", ".", "|", "\\", "o", "-", "+", "//", "O")  # one more than tints, so that pairs repeat late
_DASHES = (
    "solid",
    (0, (6, 2)),
    (0, (2, 1.5)),
    (0, (7, 2, 1.5, 2)),
    (0, (10, 3)),
    (0, (4, 1.5, 1, 1.5, 1, 1.5)),
)
_MARKERS = ("o", "s", "^", "D", "v", "p", "h")


def stroke(index: int) -> Stroke:
    """The stroke of requirement `index`; no two of the first 24 lines or the first 72 areas are alike."""
    color = index % len(_LINES)
    return Stroke(
        _LINES[color],
        _DASHES[index % len(_DASHES)],
        _MARKERS[index % len(_MARKERS)],
        _TINTS[color],
        _HATCHES[index % len(_HATCHES)],
    )


def halo(color: str = "white", width: float = 3.0) -> list[Any]:
    """A pale outline that keeps text and lines apart from what is under them."""
    return [withStroke(linewidth=width, foreground=color)]


def plain(value: float, _position: int | None = None) -> str:
    """A number as people write it, never as a power of ten: 0.002, 15, 40000."""
    return np.format_float_positional(float(f"{value:.6g}"), trim="-")


def log_ticks(low: float, high: float, most: int = 10) -> tuple[list[float], list[float]]:
    """Labelled and unlabelled ticks for a logarithmic axis from `low` to `high`, both > 0.

    Below a decade the labels are evenly spaced round numbers; above, the densest of 1-2-3-5-7, 1-2-5, 1-3 and
    1 per decade, thinned to every second decade and so on, that has at most `most` labels.
    """
    inside = (low * (1 - 1e-9), high * (1 + 1e-9))
    first, last = math.floor(math.log10(low)), math.ceil(math.log10(high))
    if high < 10 * low:
        even = MaxNLocator(nbins=min(most, 7), steps=[1, 2, 2.5, 5, 10]).tick_values(low, high)
        finer = MaxNLocator(nbins=5 * min(most, 7), steps=[1, 2, 2.5, 5, 10]).tick_values(low, high)
        return _within(even, *inside), _within(finer, *inside)
    powers = [10.0**power for power in range(first, last + 1)]
    fine = _within([digit * power for power in powers for digit in range(1, 10)], *inside)
    for digits in ((1, 2, 3, 5, 7), (1, 2, 5), (1, 3), (1,)):
        chosen = _within([digit * power for power in powers for digit in digits], *inside)
        if len(chosen) <= most:
            return chosen, fine
    return _within(powers[:: math.ceil(len(powers) / most)], *inside), fine


def _within(values: Any, low: float, high: float) -> list[float]:
    return [float(value) for value in values if low <= value <= high]


def scale_axis(axes: Axes, which: Literal["x", "y"], values: Any, label: str, most: int = 10) -> None:
    """Give the x or y axis its range, label and plain ticks: logarithmic where all values are positive.

    A single value gets room around it; values at or below zero leave the axis linear.
    """
    low, high = float(np.min(values)), float(np.max(values))
    axis = getattr(axes, f"{which}axis")
    if low > 0:
        getattr(axes, f"set_{which}scale")("log")
        limits = (low, high) if high > low else (low / 1.25, high * 1.25)
        labelled, unlabelled = log_ticks(*limits, most)
        axis.set_major_locator(FixedLocator(labelled))
        axis.set_minor_locator(FixedLocator(unlabelled))
    else:
        limits = (low, high) if high > low else (low - 1.0, high + 1.0)
        axis.set_major_locator(MaxNLocator(nbins=min(most, 8), steps=[1, 2, 2.5, 5, 10]))
    axis.set_major_formatter(FuncFormatter(plain))
    axis.set_minor_formatter(NullFormatter())
    getattr(axes, f"set_{which}lim")(*limits)
    getattr(axes, f"set_{which}label")(label, fontsize=14, color=INK, labelpad=7, parse_math=False)
    axes.tick_params(axis=which, which="major", labelsize=12, length=6, color=FRAME, labelcolor=INK)
    axes.tick_params(axis=which, which="minor", length=3, color=FRAME)


def new_axes(figure: Figure, place: tuple[float, float, float, float]) -> Axes:
    """Axes at `place` (left, bottom, width, height as shares of the figure) with a quiet frame."""
    axes = figure.add_axes(place)
    axes.set_axisbelow(False)
    for spine in axes.spines.values():
        spine.set_color(FRAME)
        spine.set_linewidth(1.0)
        spine.set_zorder(9)
    return axes


def new_figure(title: str, subtitle: str, provenance: str) -> Figure:
    """A page for a meeting, 13.33 × 7.5 inches: title and subtitle above, origin of the numbers below."""
    figure = Figure(figsize=(13.333, 7.5), dpi=150, facecolor="white")
    for y, text, size, least, weight, color in (
        (0.955, title, 20, 14, "bold", INK),
        (0.905, subtitle, 13, 10, "normal", QUIET_INK),
        (0.025, provenance, 10, 10, "normal", QUIET_INK),
    ):
        letter = 0.72 if weight == "bold" else 0.6  # width in sizes; the page has 960 points
        room = 0.92 * 960 / letter
        longest = max(map(len, text.splitlines()), default=0)
        if longest * least > room:
            text = textwrap.shorten(text, int(room / least), placeholder=" …")
        fitted = min(size, max(least, room / max(longest, 1)))
        figure.text(LEFT, y, text, size=fitted, weight=weight, color=color, va="center", parse_math=False)
    return figure


@dataclass(frozen=True)
class Entry:
    """One line of the legend: words, and artists drawn one over the other; without any it is a heading."""

    text: str
    artists: tuple[Any, ...] = ()


def swatch(
    color: str, hatch: str | None = None, hatch_color: str = QUIET_INK, edge: str = FRAME
) -> tuple[Any, ...]:
    """A legend's sample of an area: its colour, its hatch, and a thin frame."""
    inner = Patch(facecolor=color, edgecolor=hatch_color, hatch=hatch, linewidth=0)
    inner.set_hatch_linewidth(HATCH_WIDTH)
    return inner, Patch(facecolor="none", edgecolor=edge, linewidth=0.8)


def add_legend(figure: Figure, entries: Sequence[Entry], left: float, top: float, room: float) -> None:
    """The legend, beside the data: `left` and `top` as shares of the figure, `room` its height in points.

    Texts are wrapped, and shortened where they do not all fit in `room`, so that nothing runs off the page.
    """
    size, texts = _fitted([entry.text for entry in entries], room)
    nothing = (Line2D([], [], linestyle="none"),)
    handles: list[Any] = [entry.artists or nothing for entry in entries]
    legend = figure.legend(
        handles, texts, loc="upper left", bbox_to_anchor=(left, top),
        handler_map={tuple: HandlerTuple(ndivide=1, pad=0.0)}, handlelength=3.2, handleheight=1.5,
        fontsize=size, labelspacing=0.5, borderaxespad=0.0, borderpad=0.0, labelcolor=INK, handletextpad=0.8,
        frameon=False,
    )  # fmt: skip
    for entry, text in zip(entries, legend.get_texts(), strict=True):
        text.set_parse_math(False)
        if not entry.artists:
            text.set_fontweight("bold")


def _fitted(texts: Sequence[str], room: float) -> tuple[float, list[str]]:
    """Size and texts that fit: 11 points wrapped, 10 points wrapped, lines cut, texts cut to a line."""
    attempts = [
        (11.0, [_wrapped(text, 40, 2) for text in texts]),
        (10.0, [_wrapped(text, 44, 2) for text in texts]),
        (10.0, [_wrapped(text, 44, 1) for text in texts]),
    ]
    last = (10.0, [textwrap.shorten(text, 44, placeholder=" …") for text in texts])
    return next((attempt for attempt in attempts if _height(attempt[1], attempt[0]) <= room), last)


def _wrapped(text: str, width: int, most: int) -> str:
    """Each line of the text wrapped into at most `most`."""
    lines = [
        textwrap.wrap(line, width, max_lines=most, placeholder=" …", subsequent_indent="    ")
        for line in text.splitlines()
    ]
    return "\n".join(part for line in lines for part in line)


def _height(texts: Sequence[str], size: float) -> float:
    return sum(max(1.5, 1.25 * (text.count("\n") + 1)) + 0.5 for text in texts) * size


def save(figure: Figure, path: str | os.PathLike[str], format: str | None = None) -> Path:
    """Write the figure as png, svg or pdf (by default what the path's ending says); returns the path.

    The same figure gives the same bytes: no dates, no program names, no random identifiers inside. The file
    appears whole or not at all.

    Raises OptionError for another format, RunError when the file cannot be written.
    """
    path = Path(path)
    format = format or path.suffix.removeprefix(".").lower()
    if format not in FORMATS:
        raise OptionError(f"a picture cannot be written as {format!r}; formats: {', '.join(FORMATS)}")
    part = path.with_name(path.name + ".part")
    try:
        # The salt is the one setting matplotlib offers no argument for; it is put back at once.
        with matplotlib.rc_context({"svg.hashsalt": "explorer"}):
            figure.savefig(part, format=format, dpi=figure.dpi, metadata=_METADATA[format])
        os.replace(part, path)
    except OSError as error:
        part.unlink(missing_ok=True)
        raise RunError(f"{path} cannot be written: {error.strerror or error}") from error
    return path
