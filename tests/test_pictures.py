"""What all pictures share: the look, the words, the slice they show, lines in place of a map, and saving."""

from __future__ import annotations

from typing import Any

import matplotlib
import numpy as np
import pytest
import xarray as xr
from invented_run import LIMITS, NAMES, by_gid, decide, lightness, run, texts, worst_values
from matplotlib.backends.backend_agg import FigureCanvasAgg

from explorer.errors import OptionError, RunError
from explorer.views import style
from explorer.views.lines import spans
from explorer.views.maps import region_map, slack_map, slack_sheet
from explorer.views.plane import take_plane


def test_what_holds_is_darker_than_what_is_missed() -> None:
    met, missed = [lightness(color) for color in style.MET], [lightness(color) for color in style.MISSED]
    assert met == sorted(met, reverse=True)
    assert missed == sorted(missed)
    assert max(met) < min(missed) - 4  # an L* step of 4 is seen side by side (no source)
    tints = [lightness(style.stroke(index).tint) for index in range(8)]
    assert max(met) < min(tints) - 4
    shares = [lightness(color) for color in style.SHARES]
    assert shares == sorted(shares, reverse=True)


def test_requirements_differ_without_colour() -> None:
    strokes = [style.stroke(index) for index in range(24)]
    assert len({(one.line, str(one.dashes)) for one in strokes}) == 24
    assert len({(one.tint, one.hatch) for one in strokes}) == 24
    assert len({one.hatch for one in strokes[:8]}) == 8
    assert len({str(one.dashes) for one in strokes[:6]}) == 6


def test_slowest_period_is_never_rounded_up() -> None:
    verdict = run()[1]
    decision = decide(verdict)
    decision["slowest_period"]["period"] = 0.0191999
    assert "slowest period: 19.19 ms\nstopped by well damped" in texts(region_map(verdict, decision))
    decision["slowest_period"] |= {"period": 0.04, "at_axis_end": True, "stopped_by": None}
    assert "slowest period: 40 ms\nthe period axis ends here" in texts(region_map(verdict, decision))


def test_single_period_draws_slack_against_gain() -> None:
    gains = np.geomspace(1.0, 400.0, 60)
    sweep, verdict = run(periods=np.array([10e-3]), gains=gains, unknown=(slice(0, 1), slice(50, 52)))
    figure = region_map(verdict, decide(verdict))
    axes = figure.axes[0]
    assert axes.get_xlabel() == "gain [V/m]"
    assert texts(figure)[1].endswith("at sample period 10 ms")
    low, high = axes.get_ylim()
    for index in range(4):
        (line,) = by_gid(axes, f"slack {index + 1}")
        expected = verdict["slack"].sel(tolerance_scale=1.0).isel(measure=index, period=0).values
        drawn = np.asarray(line.get_ydata())
        seen = (expected > low) & (expected < high)
        assert drawn[seen] == pytest.approx(expected[seen])
        assert np.array_equal(np.isnan(drawn), np.isnan(expected))
    (held,) = by_gid(axes, "all hold")
    left, right = held.get_x(), held.get_x() + held.get_width()
    slack = [worst_values(1.0, 20e-3, xr.DataArray(10e-3), xr.DataArray(gain)) for gain in (left, right)]
    assert float(slack[0][1]) == pytest.approx(LIMITS[1], rel=0.01)  # a grid step is 11 % of the gain
    assert float(slack[1][0]) == pytest.approx(LIMITS[0], rel=0.01)
    (unknown,) = by_gid(axes, "unknown")
    assert [unknown.get_x(), unknown.get_x() + unknown.get_width()] == pytest.approx([gains[49], gains[52]])
    share = slack_map(verdict, "share", sweep).axes[0]
    assert np.nanmax(by_gid(share, "share")[0].get_ydata()) == 100.0
    assert len([line for line in slack_map(verdict, "well damped").axes[0].lines if line.get_gid()]) == 1


def test_single_gain_draws_slack_against_period() -> None:
    axes = slack_sheet(run(gains=np.array([30.0]))[1]).axes[0]
    assert axes.get_xlabel() == "sample period [ms]"
    assert len(by_gid(axes, "slack 1")[0].get_xdata()) == 60


def test_spans_end_between_points_and_never_in_the_unknown() -> None:
    axis = np.array([1.0, 10.0, 100.0, 1000.0])
    assert spans(axis, np.array([-1.0, 1.0, 1.0, -3.0])) == [pytest.approx((10**0.5, 10**2.25))]
    assert spans(axis, np.array([np.nan, 1.0, -np.inf, 0.0])) == [(10.0, 10.0), (1000.0, 1000.0)]
    assert spans(axis - 1, np.array([-1.0, 1.0, np.nan, np.nan])) == [pytest.approx((4.5, 9.0))]
    assert spans(axis, np.full(4, np.nan)) == []


def test_further_design_variable_chooses_the_slice() -> None:
    verdict = run(leads=(20e-3, 40e-3))[1]
    decision = decide(verdict)
    assert decision["recommended"]["design"] == {"lead": 40e-3}
    assert texts(region_map(verdict, decision))[1].endswith("box × 1; lead = 40 ms")
    assert texts(region_map(verdict))[1].endswith("; lead = 20 ms")
    other = region_map(verdict, decision, design={"lead": 0.02})
    assert texts(other)[1].endswith("lead = 20 ms (recommended: 40 ms)")
    assert not by_gid(other.axes[0], "recommended")
    alone = verdict.sel(lead=20e-3, drop=True)
    np.testing.assert_array_equal(take_plane(verdict, design={"lead": 0.02}).slack, take_plane(alone).slack)
    with pytest.raises(OptionError, match="30 ms was not swept; there are: 20 ms, 40 ms"):
        region_map(verdict, design={"lead": 0.03})
    with pytest.raises(OptionError, match="'lag' is no further design variable of this run; there are: lead"):
        region_map(verdict, design={"lag": 0.03})


def test_requests_that_cannot_be_met_say_what_there_is() -> None:
    verdict = run()[1]
    with pytest.raises(OptionError, match=r"tolerance_scale 2 was not swept; there are: 0, 0\.5, 1"):
        region_map(verdict, tolerance_scale=2.0)
    with pytest.raises(OptionError, match="'overshoot' to show; there are: slack, binding, share, well"):
        slack_map(verdict, "overshoot")
    with pytest.raises(OptionError, match="in the sweep"):
        slack_map(verdict, "share")


def test_limits_in_samples_and_foreign_text_are_written_as_they_are() -> None:
    verdict = run()[1]
    limit = verdict["limit"].values.copy()
    limit[1] = 15 * verdict["period"].values
    verdict["limit"] = (verdict["limit"].dims, limit)
    verdict.attrs["title"] = "A $1 loop_{with} 100 % \\frac"
    figure = region_map(verdict.assign_coords(measure=["costs $x^$ more", *NAMES[1:]]))
    FigureCanvasAgg(figure).draw()  # mathematics in there would not even parse
    assert "2  time to peak ≤ 15 samples" in texts(figure)
    assert texts(figure)[0] == "A $1 loop_{with} 100 % \\frac"


@pytest.mark.parametrize(
    ("gains", "unit", "label", "scale"),
    [
        (np.linspace(-5.0, 80.0, 9), "V/m", "gain [V/m]", "linear"),
        (np.geomspace(1e-7, 8e-6, 9), "N*m*s/rad", "gain [10⁻⁶ N*m*s/rad]", "log"),
        (np.geomspace(2e6, 3e7, 9), "1", "gain [10⁶]", "log"),
        (np.geomspace(2.0, 3.0, 9), "", "gain", "log"),
    ],
)
def test_axes_show_real_units(gains: Any, unit: str, label: str, scale: str) -> None:
    verdict = run(periods=np.geomspace(2e-6, 30e-6, 8), gains=np.geomspace(10.0, 90.0, 9))[1]
    figure = region_map(verdict.assign_coords(gain=("gain", gains, {"units": unit})))
    axes = figure.axes[0]
    assert axes.get_xlabel() == "sample period [µs]"
    assert (axes.get_ylabel(), axes.get_yscale()) == (label, scale)
    FigureCanvasAgg(figure).draw()
    assert all("10^" not in tick.get_text() for tick in axes.get_yticklabels())
    assert sum(tick.get_text() != "" for tick in axes.get_yticklabels()) >= 3


@pytest.mark.parametrize(
    ("low", "high", "expected"),
    [
        (0.5, 40.0, ["0.5", "1", "2", "5", "10", "20"]),
        (2.0, 3.0, ["2", "2.2", "2.4", "2.6", "2.8", "3"]),
        (95.0, 130.0, ["95", "100", "105", "110", "115", "120", "125", "130"]),
        (0.001, 100.0, ["0.001", "0.01", "0.1", "1", "10", "100"]),
        (1e-9, 1e9, ["0.000000001", "0.000001", "0.001", "1", "1000", "1000000", "1000000000"]),
    ],
)
def test_ticks_are_plain_numbers(low: float, high: float, expected: list[str]) -> None:
    assert [style.plain(tick) for tick in style.log_ticks(low, high, most=8)[0]] == expected


@pytest.mark.parametrize("format", style.FORMATS)
def test_saving_twice_gives_the_same_bytes(tmp_path: Any, format: str) -> None:
    before = dict(matplotlib.rcParams)
    verdict = run(periods=np.geomspace(1e-3, 20e-3, 12), gains=np.geomspace(5.0, 200.0, 14))[1]
    saved = [style.save(region_map(verdict, decide(verdict)), tmp_path / f"{n}.{format}") for n in (1, 2)]
    first, second = (path.read_bytes() for path in saved)
    assert first == second
    assert len(first) > 10_000
    assert b"Matplotlib" not in first
    assert dict(matplotlib.rcParams) == before
    assert sorted(path.name for path in tmp_path.iterdir()) == [f"1.{format}", f"2.{format}"]


def test_saving_refuses_what_it_cannot_write(tmp_path: Any) -> None:
    figure = style.new_figure("title", "subtitle", "provenance")
    with pytest.raises(OptionError, match="formats: png, svg, pdf"):
        style.save(figure, tmp_path / "picture.gif")
    with pytest.raises(RunError, match="cannot be written: No such file"):
        style.save(figure, tmp_path / "nowhere" / "picture.png")
    assert list(tmp_path.iterdir()) == []
