"""An invented run for the pictures' tests, and readers of what a Figure shows."""

from __future__ import annotations

from typing import Any

import matplotlib
import numpy as np
import xarray as xr
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.path import Path
from scipy.ndimage import binary_dilation

SCALES = (0.0, 0.5, 1.0)
NAMES = ("well damped", "time to peak", "processor load", "stability")
KINDS = ("damping ratio", "time to peak", "processor load", "stability")
UNITS = ("1", "s", "%", "1")
SENSES = ("at least", "at most", "at most", "below")
LIMITS = (0.5, 0.18, 10.0, np.nan)


def worst_values(scale: float, lead: Any, period: Any, gain: Any) -> list[Any]:
    """Invented but plausible: a lag of 37 ms, a lead, half a period of delay; tolerances make it worse."""
    lag, fast, slow = 37e-3 + 9e-3 * scale, 0.9 * gain * (1 + 0.12 * scale), 0.9 * gain * (1 - 0.12 * scale)
    margin = np.pi / 2 - np.arctan(fast * lag) + np.arctan(fast * lead) - fast * (period / 2 + 1.6e-3)
    damping = (np.degrees(margin) / 100).clip(-1.0, 0.999)
    stable = damping > 0
    peak = np.pi / (slow * np.sqrt(1 - damping**2))
    load = 100 * 0.11e-3 / period + 0 * damping
    return [
        xr.where(stable, damping, -np.inf),
        xr.where(stable, peak, np.inf),
        xr.where(stable, load, np.inf),
        1 - 0.5 * damping,
    ]


def run(
    periods: Any = None, gains: Any = None, leads: tuple[float, ...] = (), limits: tuple[float, ...] = LIMITS,
    unknown: tuple[slice, slice] | None = None,
) -> tuple[xr.Dataset, xr.Dataset]:  # fmt: skip
    """A sweep and its verdict; `unknown` = (period, gain) slices left unsolved at every scale."""
    period = xr.DataArray(np.geomspace(0.5e-3, 40e-3, 60) if periods is None else periods, dims="period")
    gain = xr.DataArray(np.geomspace(1.0, 400.0, 70) if gains is None else gains, dims="gain")
    lead = xr.DataArray(np.array(leads or (20e-3,)), dims="lead")
    scales = [xr.concat(xr.broadcast(*worst_values(one, lead, period, gain)), "measure") for one in SCALES]
    order = ("measure", "tolerance_scale", "lead", "period", "gain")
    worst = xr.concat(scales, "tolerance_scale").transpose(*order)
    if not leads:
        worst = worst.isel(lead=0)
    if unknown:
        worst[{"period": unknown[0], "gain": unknown[1]}] = np.nan
    words = {"measure": NAMES, "measure_kind": KINDS, "measure_unit": UNITS, "sense": SENSES}
    by_measure = {name: ("measure", list(values)) for name, values in words.items()}
    worst = worst.assign_coords(
        period=("period", period.values, {"units": "s"}), gain=("gain", gain.values, {"units": "V/m"}),
        tolerance_scale=list(SCALES), **by_measure,
    )  # fmt: skip
    if leads:
        worst = worst.assign_coords(lead=("lead", list(leads), {"units": "s"}))
    attrs = {
        "title": "Camera carriage, position loop", "study_sha256": "3f2a9c81d07b" + 52 * "e", "seed": 7,
        "explorer_version": "0.1.0", "created": "2031-04-02T09:30:00Z",
        "status_tally": "solved 474600; unsolved 3",
    }  # fmt: skip
    scenario = {"scenario_scale": ("scenario", np.repeat(SCALES, (1, 40, 72)))}
    limit = xr.DataArray(np.array(limits), dims="measure")
    more = xr.where(worst["sense"] == "at least", worst - limit, limit - worst)
    slack = xr.where(worst["measure"] == "stability", 1 - worst, more / abs(limit))
    slack = slack.transpose(*worst.dims)
    least = slack.min("measure", skipna=False)
    binding = slack.fillna(0.0).argmin("measure").where(least.notnull(), -1).astype(int)
    share = np.exp(4 * least.clip(max=0.0))
    sweep = xr.Dataset({"worst_value": worst, "share_met": share, **scenario}, attrs=attrs)
    limits_by_period = limit.expand_dims(period=period.size).transpose("measure", "period")
    nominal = slack.sel(tolerance_scale=0.0, drop=True)
    fields = {"slack": slack, "least_slack": least, "binding": binding, "feasible": least >= 0}
    fields |= {"limit": limits_by_period, "nominal_slack": nominal}
    return sweep, xr.Dataset({**fields, **scenario}, attrs=attrs).assign_coords(worst.coords)


def decide(verdict: xr.Dataset, scale: float = 1.0) -> dict[str, Any]:
    """The decision a verdict leads to, on the grid."""
    least = verdict["least_slack"].sel(tolerance_scale=scale)
    point = least.isel(least.argmax(...))
    best = {
        "period": float(point["period"]), "gain": float(point["gain"]), "least_slack": float(point),
        "design": {"lead": float(point["lead"])} if "lead" in least.dims else {},
        "binding": NAMES[int(verdict["binding"].sel(point.coords))],
    }  # fmt: skip
    if float(point) < 0:
        nothing = {"slowest_period": None, "recommended": None}
        return {"tolerance_scale": scale, "feasible": False, "nearest": best} | nothing
    held = verdict["feasible"].sel(tolerance_scale=scale).sel(best["design"])
    period = held["period"].values[held.any("gain").values][-1]
    gains = held["gain"].values[held.sel(period=period).values]
    slowest = {
        "period": float(period), "gain": float(gains[0]), "gain_window": [float(gains[0]), float(gains[-1])],
        "design": best["design"], "stopped_by": "well damped", "scenario": {}, "at_axis_end": False,
    }  # fmt: skip
    return {"tolerance_scale": scale, "feasible": True, "slowest_period": slowest, "recommended": best}


def texts(figure: Any) -> list[str]:
    """Everything written on a figure outside its axes, and in its legend."""
    written = [text.get_text() for text in figure.texts]
    return written + [text.get_text() for legend in figure.legends for text in legend.get_texts()]


def by_gid(axes: Any, gid: str) -> list[Any]:
    return [artist for artist in axes.get_children() if artist.get_gid() == gid]


def nodes(plane: Any, mask: Any) -> Any:
    """(n, 2) shown period and gain of the grid points in a mask (gain, period).

    Left out are the grid's rim and what touches an unknown point: they may lie right on a polygon's edge.
    """
    inner = np.zeros_like(mask)
    inner[1:-1, 1:-1] = True
    beside = binary_dilation(plane.unknown, np.ones((3, 3))) & ~plane.unknown
    row, column = np.nonzero(mask & inner & ~beside)
    return np.column_stack([plane.period.values[column], plane.gain.values[row]])


def covers(path: Any, points: Any) -> Any:
    """(n,) whether each point lies in a path with holes; matplotlib's own test fills the holes."""
    crossed = np.zeros(len(points), dtype=bool)
    for ring in path.to_polygons():
        crossed ^= Path(ring).contains_points(points)
    return crossed


def lightness(color: str) -> float:
    """CIE L* of an sRGB colour. CIE 15:2004 §8.2.1.1; IEC 61966-2-1 for the luminance (from memory)."""
    encoded = np.array(matplotlib.colors.to_rgb(color))
    linear = np.where(encoded <= 0.04045, encoded / 12.92, ((encoded + 0.055) / 1.055) ** 2.4)
    luminance = float(linear @ [0.2126, 0.7152, 0.0722])
    return 116 * luminance ** (1 / 3) - 16


def pixels(figure: Any, axes: Any, points: Any) -> Any:
    """Mean colours (n, 3), 0..1, of 15 × 15 pixels around points of the data."""
    canvas = FigureCanvasAgg(figure)
    canvas.draw()
    image = np.asarray(canvas.buffer_rgba())[::-1, :, :3] / 255
    columns, rows = np.round(axes.transData.transform(points)).astype(int).T
    around = range(-7, 8)
    return np.mean([image[rows + down, columns + across] for down in around for across in around], axis=0)
