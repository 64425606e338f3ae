"""Words and numbers on a map, where they hide nothing: lines and areas in, placed texts for maps out."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt
from matplotlib.axes import Axes

from explorer.views import style
from explorer.views.plane import Floats, Mark, Plane


class Clearing:
    """Free room on axes: remembers what is drawn, by key, as boxes (n, 4) of centre and half size.

    All lengths are shares of the axes' width and height, so that room is judged as the eye sees it.
    """

    def __init__(self, axes: Axes) -> None:
        self.axes = axes
        page: Any = axes.figure
        self.inches: Floats = page.get_size_inches() * axes.get_position().size
        self._boxes: dict[str, Floats] = {}

    def shares(self, points: Any) -> Floats:
        """(n, 2) points of the data in shares of the axes."""
        transform = self.axes.transData + self.axes.transAxes.inverted()
        return np.asarray(transform.transform(np.atleast_2d(np.asarray(points, dtype=float))))

    def take(self, key: str, points: Any, half: Any = (0.0, 0.0), most: int = 300) -> None:
        """Points of the data that are in use from now on, `half` the half size of what stands there."""
        shares = self.shares(points)
        shares = shares[:: -(-len(shares) // most)]
        self._boxes[key] = np.column_stack([shares, np.broadcast_to(half, shares.shape)])

    def keep(self, key: str, spot: Floats, half: Floats) -> None:
        """A box at a place in shares that is in use from now on."""
        self._boxes[key] = np.concatenate([spot, half])[None, :]

    def forget(self, key: str) -> None:
        """What is no longer in the way."""
        self._boxes.pop(key, None)

    def half_size(self, text: str, size: float, bold: bool = False) -> Floats:
        """Half the width and height of a text in shares; a letter is 0.6 sizes wide, a bold one 0.74."""
        return np.array([(0.37 if bold else 0.3) * len(text) + 0.35, 0.75]) * size / 72 / self.inches

    def best(self, candidates: Floats, half: Floats, but: str = "") -> tuple[int, float]:
        """The candidate (n, 2) in shares with the most room for a box, and that room.

        Room counts in half sizes between the box's centre and what is next to it: below 1 they touch, and a
        box that leaves the frame has none. `but` is a key that may be covered.
        """
        boxes = [box for key, box in self._boxes.items() if key != but]
        room = np.min((np.minimum(candidates, 1 - candidates)) / half, axis=1)
        room = np.where(room < 1, -1.0, room)
        if boxes:
            taken = np.concatenate(boxes)
            apart = (np.abs(candidates[:, None, :] - taken[None, :, :2]) - taken[None, :, 2:]) / half
            room = np.minimum(room, apart.max(axis=2).min(axis=1))
        index = int(room.argmax())
        return index, float(room[index])


def label_marks(clearing: Clearing, points: Mapping[str, Mark]) -> None:
    """A word beside each point of the decision; where none fits, further off with a line to the point."""
    for kind, mark in points.items():
        text = "slowest period" if kind == "slowest" else kind
        half = clearing.half_size(text, 13, bold=True)
        ring = np.array([10.0, 11.0]) / 72 / clearing.inches  # clear of the mark itself
        if kind == "slowest":
            spot = clearing.shares((mark.period, clearing.axes.get_ylim()[0]))[0] + (0, 1.6 * half[1])
            rings = [np.array([[1.0, 0.0], [-1.0, 0.0]])]
        else:
            spot = clearing.shares((mark.period, mark.gain))[0]
            beside = np.array([[1.0, 1], [-1, 1], [1, -1], [-1, -1], [0, 1], [0, -1]])
            rings = [beside, *(beside * (1, far) for far in (2, 3.5, 5, 7))]
        found = [spot + around * (half * (1.0, 0.75) + ring) for around in rings]
        best = [clearing.best(candidates, half, but=kind) for candidates in found]
        near = next((number for number, (_, room) in enumerate(best) if room >= 1), 0)
        place = found[near][best[near][0]]
        if near:
            lead = {"arrowstyle": "-", "color": style.INK, "linewidth": 1.2, "shrinkA": 9, "shrinkB": 7}
            clearing.axes.annotate("", place, spot, xycoords="axes fraction", arrowprops=lead, zorder=9)
        _write(clearing, place, text, half, f"word {kind}", size=13, weight="bold", color=style.INK)


def label_contours(clearing: Clearing, contours: Any) -> None:
    """The value of each line of equal slack, on the line, where it fits between the others."""
    paths = zip(contours.levels, contours.get_paths(), strict=True)
    drawn = [(level, path.vertices) for level, path in paths if len(path.vertices)]
    for level, points in drawn:
        clearing.take(f"slack {level}", points)
    for level, points in drawn:
        text = style.plain(level)
        half = clearing.half_size(text, 11)
        candidates = clearing.shares(points[:: -(-len(points) // 100)])
        index, room = clearing.best(candidates, half, but=f"slack {level}")
        if room > 0.9:
            look = {"size": 11, "color": "white", "path_effects": style.halo(style.MET[-1], 2.4)}
            _write(clearing, candidates[index], text, half, f"value {text}", **look)


def tag_edges(clearing: Clearing, vertices: Mapping[int, Floats]) -> None:
    """Each edge's number in a disc on the line, as far as can be from everything else."""
    for index, points in vertices.items():
        candidates = clearing.shares(points)
        candidates = candidates[:: -(-len(candidates) // 100)]
        half = 10.0 / 72 / clearing.inches
        best, _ = clearing.best(candidates, half, but=f"edge {index}")
        color = style.stroke(index).line
        disc = {"boxstyle": "circle,pad=0.22", "facecolor": "white", "edgecolor": color, "linewidth": 1.4}
        look = {"size": 11, "weight": "bold", "color": color, "bbox": disc}
        _write(clearing, candidates[best], str(index + 1), half, f"tag {index + 1}", **look)


def name_areas(clearing: Clearing, plane: Plane, where: npt.NDArray[np.bool_]) -> None:
    """Name each binding area within `where` (gain, period): number and name, or the number if need be."""
    for index, requirement in enumerate(plane.requirements):
        box = {"boxstyle": "round,pad=0.25", "facecolor": style.stroke(index).tint, "edgecolor": "none"}
        look = {"size": 13, "color": style.stroke(index).line, "bbox": box, "zorder": 8}
        for text in (f"{index + 1}  {requirement.name}", str(index + 1)):
            half = clearing.half_size(text, 13)
            spot = _inside(clearing, plane, (plane.binding == index) & where, half)
            if spot is not None:
                _write(clearing, spot, text, half, f"area {index + 1}", **look)
                break


def name_region(clearing: Clearing, plane: Plane) -> None:
    """Say in the region that all requirements hold there, if there is room."""
    for text in ("all requirements hold", "all hold"):
        half = clearing.half_size(text, 13, bold=True)
        spot = _inside(clearing, plane, plane.feasible, half)
        if spot is not None:
            _write(clearing, spot, text, half, "region", size=13, weight="bold", color=style.INK)
            break


def say_empty(clearing: Clearing, plane: Plane) -> None:
    """Say in words that nothing holds, and whether that is known."""
    if plane.unknown.all():
        words = "Nothing is known here: no point could be judged."
    elif plane.unknown.any():
        words = "No point is known to meet every requirement."
    else:
        words = f"Nowhere{' in this slice' if plane.design else ''} do all requirements hold at once."
    box = {"boxstyle": "round,pad=0.5", "facecolor": "white", "edgecolor": style.INK}
    half = clearing.half_size(words, 16, bold=True) * (1.0, 1.4)
    look = {"size": 16, "weight": "bold", "color": style.INK, "bbox": box}
    _write(clearing, np.array([0.5, 0.93]), words, half, "empty", **look)


def _inside(clearing: Clearing, plane: Plane, mask: npt.NDArray[np.bool_], half: Floats) -> Floats | None:
    """The roomiest place (2,) in shares within a mask (gain, period); None when the box fits nowhere."""
    step = tuple(slice(None, None, -(-size // 36)) for size in mask.shape)
    gain, period = np.meshgrid(plane.gain.values, plane.period.values, indexing="ij")
    points = np.column_stack([period[step].ravel(), gain[step].ravel()])
    within = mask[step].ravel()
    if not within.any():
        return None
    outside = "outside the area"
    if not within.all():
        clearing.take(outside, points[~within], most=3000)
    candidates = clearing.shares(points[within])
    index, room = clearing.best(candidates, half)
    clearing.forget(outside)
    return candidates[index] if room >= 1 else None


def _write(clearing: Clearing, spot: Floats, text: str, half: Floats, gid: str, **given: Any) -> None:
    """Put a centred text at a place in shares, and keep that place."""
    look: dict[str, Any] = {"ha": "center", "va": "center", "zorder": 11, "parse_math": False}
    if "bbox" not in given:
        look["path_effects"] = style.halo(width=4.0)
    x, y = spot
    clearing.axes.text(float(x), float(y), text, transform=clearing.axes.transAxes, gid=gid, **(look | given))
    clearing.keep(gid, spot, half)
