"""Maps over gain and period: what they say and draw, read back from the Figures."""

from __future__ import annotations

from typing import Any

import numpy as np
import pytest
import xarray as xr
from invented_run import LIMITS, by_gid, covers, decide, nodes, pixels, run, texts, worst_values
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.text import Text

from explorer.views import layers, style
from explorer.views.maps import region_map, slack_map, slack_sheet
from explorer.views.plane import take_plane


@pytest.fixture(scope="module")
def patchy() -> tuple[xr.Dataset, xr.Dataset]:
    return run(unknown=(slice(10, 16), slice(30, 36)))


def test_region_map_says_what_it_shows_and_where_it_comes_from(patchy: Any) -> None:
    verdict = patchy[1]
    figure = region_map(verdict, decide(verdict))
    axes = figure.axes[0]
    title, subtitle, provenance, *legend = texts(figure)
    assert title == "Camera carriage, position loop"
    assert subtitle == "All requirements over the tolerance box × 1"
    for fact in ("3f2a9c81d07b ", "explorer 0.1.0", "seed 7", "2031-04-02", "113 scenarios", "unsolved 3"):
        assert fact in provenance
    assert axes.get_xlabel() == "sample period [ms]"
    assert axes.get_ylabel() == "gain [V/m]"
    assert axes.get_xscale() == axes.get_yscale() == "log"
    assert [label.get_text() for label in axes.get_xticklabels()][:4] == ["0.5", "0.7", "1", "2"]
    for words in (
        "1  well damped\n    damping ratio ≥ 0.5",
        "2  time to peak ≤ 180 ms",
        "4  stability: largest |z| < 1",
    ):
        assert words in legend
    assert "unknown: 36 of 4200 points" in legend
    assert min(text.get_fontsize() for text in figure.findobj(Text) if text.get_text()) >= 10
    assert "41 scenarios" in texts(region_map(verdict, tolerance_scale=0.5))[2]


def test_edges_run_where_the_slack_is_zero() -> None:
    axes = region_map(run()[1]).axes[0]
    for index in range(4):
        (edge,) = by_gid(axes, f"edge {index + 1}")
        period, gain = np.concatenate([path.vertices for path in edge.get_paths()]).T
        values = worst_values(1.0, 20e-3, xr.DataArray(period / 1e3), xr.DataArray(gain))[index]
        limit = 1.0 if index == 3 else LIMITS[index]
        # a grid step is 9 % of the gain: a straight line across one misses a hyperbola by some (0.09)²/4
        np.testing.assert_allclose(values, limit, rtol=4e-3)
    assert {edge.get_linestyle()[0][1] is None for edge in by_gid(axes, "edge 1")} == {True}  # solid
    assert len({str(by_gid(axes, f"edge {number}")[0].get_linestyle()) for number in (1, 2, 3, 4)}) == 4


def test_region_holds_every_feasible_point_and_no_other(patchy: Any) -> None:
    verdict = patchy[1]
    plane = take_plane(verdict)
    axes = region_map(verdict).axes[0]
    (bands,) = by_gid(axes, "bands")
    inside = np.sum([covers(path, nodes(plane, plane.feasible)) for path in bands.get_paths()], axis=0)
    assert inside.size > 400
    assert (inside == 1).all()
    for path in bands.get_paths():
        assert not covers(path, nodes(plane, ~plane.feasible)).any()


def test_lines_of_equal_slack_have_the_levels_they_name() -> None:
    assert layers.contour_levels(0.24) == [0.05, 0.1, 0.2]
    assert layers.contour_levels(0.03) == pytest.approx([0.01, 0.02])
    verdict = run()[1]
    axes = region_map(verdict).axes[0]
    (contours,) = by_gid(axes, "equal slack")
    best = float(verdict["least_slack"].sel(tolerance_scale=1.0).max())
    assert list(contours.levels) == layers.contour_levels(best)
    shown = {float(text.get_text()) for text in axes.texts if str(text.get_gid()).startswith("value ")}
    assert shown
    assert shown <= set(contours.levels)


def test_area_outside_is_given_to_the_requirement_that_binds(patchy: Any) -> None:
    verdict = patchy[1]
    plane = take_plane(verdict)
    axes = region_map(verdict).axes[0]
    seen = set(np.unique(plane.binding)) - {-1}
    assert len(seen) >= 3
    for index in seen:
        (patch,) = by_gid(axes, f"binds {index + 1}")
        assert patch.get_hatch() == style.stroke(index).hatch
        assert covers(patch.get_path(), nodes(plane, plane.binding == index)).all()
        assert not covers(patch.get_path(), nodes(plane, plane.binding != index)).any()


def test_unknown_is_drawn_as_unknown(patchy: Any) -> None:
    verdict = patchy[1]
    plane = take_plane(verdict)
    middle = nodes(plane, plane.unknown).mean(axis=0)[None, :]
    maps = [slack_map(verdict, show) for show in ("slack", "binding", "well damped")]
    for figure in (region_map(verdict), *maps):
        axes = figure.axes[0]
        (ground,) = by_gid(axes, "unknown")
        assert ground.get_hatch() == "xx"
        (known,) = by_gid(axes, "known")
        assert not covers(known.get_path(), nodes(plane, plane.unknown)).any()
        assert covers(known.get_path(), nodes(plane, ~plane.unknown)).all()
        red, green, blue = pixels(figure, axes, middle)[0]
        # charcoal under thin pale lines: dark, and without the hue of any region
        assert 0.25 < green < 0.5
        assert abs(red - blue) < 0.06


def test_printed_in_grey_the_region_is_darker_than_its_surroundings() -> None:
    verdict = run()[1]
    figure = region_map(verdict)
    points = np.array([[2.0, 60.0], [2.0, 3.0], [20.0, 200.0], [0.7, 60.0]])  # one inside, three outside
    grey = pixels(figure, figure.axes[0], points) @ [0.299, 0.587, 0.114]  # luma, ITU-R BT.601 (from memory)
    assert grey[0] < grey[1:].min() - 0.2


def test_words_do_not_cover_each_other_and_the_legend_not_the_data(patchy: Any) -> None:
    verdict = patchy[1]
    figure = region_map(verdict, decide(verdict))
    canvas = FigureCanvasAgg(figure)
    axes = figure.axes[0]
    boxes = [text.get_window_extent(canvas.get_renderer()) for text in axes.texts if text.get_text()]
    assert len(boxes) >= 8
    overlapping = [(one, two) for n, one in enumerate(boxes) for two in boxes[n + 1 :] if one.overlaps(two)]
    assert overlapping == []
    legend = figure.legends[0].get_window_extent(canvas.get_renderer())
    assert legend.x0 > axes.bbox.x1
    assert legend.x1 < figure.bbox.x1
    assert legend.y0 > 0


def test_decision_is_marked_where_it_lies() -> None:
    verdict = run()[1]
    decision = decide(verdict)
    axes = region_map(verdict, decision).axes[0]
    (ring,) = by_gid(axes, "recommended")
    best, slowest = decision["recommended"], decision["slowest_period"]
    assert ring.get_xydata() == pytest.approx(np.array([[1e3 * best["period"], best["gain"]]]))
    (line,), (bar,) = by_gid(axes, "slowest"), by_gid(axes, "slowest window")
    assert line.get_xdata()[0] == pytest.approx(1e3 * slowest["period"])
    assert list(bar.get_ydata()) == slowest["gain_window"]
    assert not by_gid(region_map(verdict, decision, tolerance_scale=0.5).axes[0], "recommended")


def test_empty_region_is_said_in_words_and_the_nearest_design_marked() -> None:
    verdict = run(limits=(0.6, 0.03, 10.0, np.nan))[1]
    least = verdict["least_slack"].sel(tolerance_scale=1.0)
    figure = region_map(verdict, decide(verdict))
    axes = figure.axes[0]
    assert by_gid(axes, "empty")[0].get_text() == "Nowhere do all requirements hold at once."
    point = least.isel(least.argmax(...))
    expected = np.array([[1e3 * float(point["period"]), float(point["gain"])]])
    assert by_gid(axes, "nearest")[0].get_xydata() == pytest.approx(expected)
    assert any(f"misses by {-100 * float(point):.3g} %" in text for text in texts(figure))
    assert not by_gid(axes, "bands")
    hidden = region_map(run(limits=(0.6, 0.03, 10.0, np.nan), unknown=(slice(0, 2), slice(0, 2)))[1]).axes[0]
    assert by_gid(hidden, "empty")[0].get_text() == "No point is known to meet every requirement."
    nothing = region_map(run(unknown=(slice(None), slice(None)))[1]).axes[0]
    assert by_gid(nothing, "empty")[0].get_text().startswith("Nothing is known")
    assert not by_gid(nothing, "nearest")


def test_infinities_and_one_sided_fields_are_drawn() -> None:
    verdict = run(periods=np.geomspace(2e-3, 3e-3, 8), gains=np.geomspace(50, 90, 9))[1]
    assert "4  stability: largest |z| < 1\n    met everywhere here" in texts(region_map(verdict))
    for value in (-np.inf, np.inf):
        same = verdict.assign({name: verdict[name] * 0 + value for name in ("slack", "least_slack")})
        said = texts(region_map(same))
        assert ("3  processor load ≤ 10 %\n    met nowhere here" in said) == (value < 0)
        for show in ("slack", "binding", "time to peak"):
            slack_map(same, show)
        slack_sheet(same)


def test_slack_map_bands_hold_the_slack_they_stand_for() -> None:
    verdict = run()[1]
    plane = take_plane(verdict)
    for show, field in (("slack", plane.least), ("well damped", plane.slack[0])):
        figure = slack_map(verdict, show)
        (bands,) = by_gid(figure.axes[0], "bands")
        limits = [-np.inf, *style.SLACK_LEVELS, np.inf]
        for low, high, path in zip(limits, limits[1:], bands.get_paths(), strict=False):
            within = (field > low + 1e-9) & (field < high - 1e-9)
            assert covers(path, nodes(plane, within)).all()
        labels = [label.get_text() for label in figure.axes[1].get_yticklabels()]
        assert labels[0] == "−1"
        assert labels[5] == "0"


def test_share_goes_by_the_sweep_even_when_judged_by_other_limits() -> None:
    sweep = run()[0]
    stricter = run(limits=(0.6, 0.12, 5.0, np.nan))[1]
    for verdict in (run()[1], stricter):
        plane = take_plane(verdict)
        axes = slack_map(verdict, "share", sweep).axes[0]
        (whole,) = by_gid(axes, "all scenarios")
        everything = sweep["share_met"].sel(tolerance_scale=1.0).transpose("gain", "period").values == 1.0
        assert covers(whole.get_path(), nodes(plane, everything)).all()
        assert not covers(whole.get_path(), nodes(plane, ~everything)).any()


def test_slack_sheet_has_a_panel_for_each_requirement_on_one_scale() -> None:
    figure = slack_sheet(run()[1])
    *panels, bar = figure.axes
    assert [axes.get_title(loc="left")[:6] for axes in panels] == ["1  wel", "2  tim", "3  pro", "4  sta"]
    scales = {tuple(by_gid(axes, "bands")[0].levels) for axes in panels}
    assert len(scales) == 1
    assert [axes.get_xlabel() != "" for axes in panels] == [False, False, True, True]
    assert bar.get_ylim()[0] < -1.0
