"""Region and decisions: windows, edges and answers from slack fields made by hand.

Neighbours: small_study sweeps a small study, whose labels and scenarios the hand-made slack is put into.
"""

from __future__ import annotations

import json

import numpy as np
import pytest
from small_study import swept

import explorer
from explorer.verdict.region import crossing, gain_windows, slowest_period
from explorer.views.plain import as_json

NAN, INF = np.nan, np.inf
GAIN = np.array([1.0, 2.0, 4.0, 8.0, 16.0])
PERIOD = np.array([0.1, 0.2, 0.4])


# Edges ----------------------------------------------------------------------------------------------------------


def test_crossing_by_hand():
    # a third of the way down: on a log axis at 2 * 4^(1/3), on one through zero at -1 + 3/3
    assert crossing(2.0, 8.0, 1.0, -2.0) == pytest.approx(2 * 4 ** (1 / 3), rel=1e-15)
    assert crossing(-1.0, 2.0, 1.0, -2.0) == pytest.approx(0.0, abs=1e-15)
    assert crossing(8.0, 2.0, 1.0, -1.0) == pytest.approx(4.0, rel=1e-15)
    assert crossing(2.0, 8.0, 0.0, -2.0) == 2.0  # exactly on the limit


@pytest.mark.parametrize(("inside", "outside"), [(1.0, NAN), (1.0, -INF), (INF, -1.0)])
def test_edge_stays_on_the_grid_where_there_is_no_slope(inside, outside):
    assert crossing(2.0, 8.0, inside, outside) == 2.0


@pytest.mark.parametrize(
    ("slack", "windows"),
    [
        ([-1, 1, 2, 1, -1], [(2**0.5, 8 * 2**0.5, 2)]),
        ([-1, 0, -1, -1, -1], [(2, 2, 1)]),
        ([1, 1, 3, 1, 1], [(1, 16, 2)]),
        ([3, -1, -1, 1, 1], [(1, 2**0.75, 0), (4 * 2**0.5, 16, 3)]),
        ([-1, -1, -1, -1, -1], []),
        ([NAN, 1, NAN, 1, NAN], [(2, 2, 1), (8, 8, 3)]),
        ([-INF, 1, 2, 2, -INF], [(2, 8, 2)]),
        ([NAN] * 5, []),
    ],
)
def test_gain_windows(slack, windows):
    found = gain_windows(np.array(slack, float), GAIN)
    assert len(found) == len(windows)
    for (low, high, best), expected in zip(found, windows, strict=True):
        assert (low, high) == pytest.approx(expected[:2], rel=1e-14)
        assert best == expected[2]


@pytest.mark.parametrize(
    ("slack", "expected"),
    [
        # the last row that holds anywhere, interpolated where it falls most slowly
        ([[1, 1], [1, 3], [-1, -1]], (0.2 * 2**0.75, 1, 1)),
        # the next row unknown or never reached: the edge stays on the grid, the larger slack is taken
        ([[1, 1], [1, 3], [NAN, -INF]], (0.2, 1, 1)),
        ([[1, 1], [3, 1], [NAN, -INF]], (0.2, 1, 0)),
        # a known slope beats an unknown neighbour, whatever the slack
        ([[1, 1], [9, 1], [NAN, -1]], (0.2 * 2**0.5, 1, 1)),
        # the end of the axis is the end
        ([[1, 1], [1, 1], [2, 5]], (0.4, 2, 1)),
        # a hole in between does not hide the slower island
        ([[1, 1], [-1, -1], [0, -1]], (0.4, 2, 0)),
        ([[-1, 2], [NAN, NAN], [-1, -1]], (0.1, 0, 1)),
    ],
)
def test_slowest_period(slack, expected):
    period, row, column = slowest_period(np.array(slack, float), PERIOD)
    assert period == pytest.approx(expected[0], rel=1e-14)
    assert (row, column) == expected[1:]


def test_nothing_feasible_has_no_slowest_period():
    assert slowest_period(np.array([[-1.0, NAN], [-INF, -0.1]]), PERIOD[:2]) is None


# Decisions ------------------------------------------------------------------------------------------------------

REQUIREMENTS = """
[[requirements]]
name = "damped"
measure = "damping ratio"
at_least = 0.5
[[requirements]]
name = "quick"
measure = "settling time"
basis = "poles"
at_most = "9 s"
"""
PLAIN = {
    "transfer": "strength/(s*(s + 1))",
    "parameters": 'strength = { nominal = 1.0, tolerance = "10 %" }',
    "gain": f"{{ values = {GAIN.tolist()} }}",
    "period": f"{{ values = {PERIOD.tolist()} }}",
    "scenarios": "{ interior = 0, corners = true, seed = 1, tolerance_scales = [0, 1.0] }",
    "requirements": REQUIREMENTS,
}
WITH_DESIGN = PLAIN | {
    "compensator": "gain*trim*slope", "axes": "trim = { values = [1, 2] }\nslope = { values = [3, 5, 7] }"
}  # fmt: skip


@pytest.fixture(scope="module")
def plain():
    dataset = swept(**PLAIN)
    return dataset, explorer.judge(dataset)


@pytest.fixture(scope="module")
def with_design():
    dataset = swept(**WITH_DESIGN)
    return dataset, explorer.judge(dataset)


def decided(run, damped, quick=9.0, nominal=9.0, blamed=2):
    """The decision on slack fields; worst values are 100 + slack, and one scenario is to blame for all."""
    dataset, verdict = (one.copy(deep=True) for one in run)
    for index, field in enumerate((damped, quick)):
        verdict["slack"][index] = -7.0  # other tolerance scales must not matter
        verdict["slack"][index, 1] = field
        verdict["nominal_slack"][index] = nominal
    dataset["worst_value"][:] = 100 + verdict["slack"].values
    dataset["worst_scenario"][:] = blamed
    answer = explorer.decide(dataset, verdict)
    json.loads(as_json(answer))
    return answer


FIELD = np.array([[-1.0, 1, 2, 1, -1], [-1, 0.5, 1, 0.5, -1], [-2, -1, -3, -1, -2]])


def test_answer_of_a_plain_region(plain):
    answer = decided(plain, FIELD)
    assert answer["feasible"]
    assert answer["tolerance_scale"] == 1.0
    slowest, best = answer["slowest_period"], answer["recommended"]
    # from 0.2 s columns 1 and 3 reach 0 after a third of the step, column 2 after a quarter
    assert slowest["period"] == pytest.approx(0.2 * 2 ** (1 / 3), rel=1e-14)
    assert slowest["grid_period"] == 0.2
    assert slowest["gain"] in (2.0, 8.0)
    assert slowest["gain_window"] == pytest.approx([2 ** (1 - 1 / 3), 8 * 2 ** (1 / 3)], rel=1e-14)
    assert not slowest["at_axis_end"]
    assert slowest["stopped_by"] == "damped"
    assert slowest["scenario"] == {"strength": pytest.approx(1.1)}
    assert (best["period"], best["gain"], best["least_slack"]) == (0.1, 4.0, 2.0)
    assert best["binding"] == "damped"
    assert best["values"] == {"damped": 102.0, "quick": 109.0}
    assert answer["nearest"] is None
    assert answer["unknown_points"] == 0
    assert answer["units"] == {"period": "s", "gain": plain[0]["gain"].attrs["units"]}
    assert "recommended" in answer["answer"].lower()


def test_another_requirement_may_stop_the_slower_period(plain):
    quick = np.where(PERIOD[:, None] > 0.3, -5.0, 9.0)
    answer = decided(plain, FIELD, quick)
    assert answer["slowest_period"]["stopped_by"] == "quick"
    # the least slack there is -5 at column 1: the edge follows the requirement that falls first
    assert answer["slowest_period"]["period"] == pytest.approx(0.2 * 2 ** (1 / 6), rel=1e-14)
    assert answer["recommended"]["binding"] == "damped"


def test_at_the_end_of_the_axis_nothing_stops_it(plain):
    answer = decided(plain, np.abs(FIELD))
    slowest = answer["slowest_period"]
    assert slowest["at_axis_end"]
    assert (slowest["period"], slowest["gain"]) == (0.4, 4.0)
    assert slowest["stopped_by"] is None
    assert slowest["scenario"] is None
    assert "the end of the axis" in answer["answer"]


def test_nothing_holds(plain):
    answer = decided(plain, -np.abs(FIELD) - 0.5, nominal=-1.0)
    assert not answer["feasible"]
    assert answer["slowest_period"] is None
    assert answer["recommended"] is None
    nearest = answer["nearest"]
    assert (nearest["period"], nearest["gain"], nearest["least_slack"]) == (0.2, 2.0, -1.0)
    assert nearest["binding"] == "damped"
    assert answer["nominal"] == {"slowest_period": None, "recommended": None}
    assert "Nowhere" in answer["answer"]


def test_nothing_is_reached_anywhere(plain):
    answer = decided(plain, -INF)
    assert answer["nearest"]["least_slack"] == -INF
    assert answer["nearest"]["binding"] == "damped"


def test_unknown_points_are_counted_and_never_chosen(plain):
    field = FIELD.copy()
    field[0, 2] = NAN
    answer = decided(plain, field)
    assert answer["unknown_points"] == 1
    assert answer["recommended"]["gain"] != 4.0
    assert "1 of 15 points are unknown" in answer["answer"]
    # one unknown requirement is enough, however good the other
    answer = decided(plain, FIELD, np.where(np.arange(15).reshape(3, 5) == 2, NAN, 9.0))
    assert answer["recommended"]["gain"] != 4.0


def test_everything_unknown(plain):
    answer = decided(plain, NAN, nominal=NAN)
    assert not answer["feasible"]
    assert answer["nearest"] is None
    assert answer["unknown_points"] == 15
    assert "Every point is unknown." in answer["answer"]


def test_slower_stopped_by_the_unknown(plain):
    field = FIELD.copy()
    field[2] = NAN
    slowest = decided(plain, field)["slowest_period"]
    assert (slowest["period"], slowest["gain"]) == (0.2, 4.0)
    assert slowest["stopped_by"] == "damped"  # the unknown one


def test_nominal_plant_alone_is_judged_by_its_own_slack(plain):
    answer = decided(plain, -1.0, nominal=FIELD)
    assert not answer["feasible"]
    nominal = answer["nominal"]
    assert nominal["slowest_period"]["period"] == pytest.approx(0.2 * 2 ** (1 / 3), rel=1e-14)
    assert nominal["slowest_period"]["scenario"] is None
    assert (nominal["recommended"]["gain"], nominal["recommended"]["least_slack"]) == (4.0, 2.0)


def test_two_separate_gain_windows_report_the_one_of_the_slowest_period(plain):
    field = np.array([[-1.0, -1, -1, -1, -1], [1, -1, -1, 3, 1], [-1, -1, -1, -1, -1]])
    slowest = decided(plain, field)["slowest_period"]
    assert slowest["gain"] == 8.0
    assert slowest["gain_window"] == pytest.approx([8 / 2**0.75, 16.0], rel=1e-14)


def test_design_variables_are_chosen_too(with_design):
    field = np.full((2, 3, 3, 5), -1.0)
    field[1, 2] = FIELD  # trim 2, slope 7: the slowest
    field[0, 1, 0, 3] = 5.0  # trim 1, slope 5: the largest slack, at the shortest period
    answer = decided(with_design, field)
    assert answer["slowest_period"]["design"] == {"trim": 2.0, "slope": 7.0}
    assert answer["slowest_period"]["grid_period"] == 0.2
    best = answer["recommended"]
    assert best["design"] == {"trim": 1.0, "slope": 5.0}
    assert (best["period"], best["gain"]) == (0.1, 8.0)
    assert answer["units"].keys() == {"period", "gain", "trim", "slope"}
    assert "trim = 2" in answer["answer"]


def test_equally_slow_designs_go_by_their_slack(with_design):
    field = np.full((2, 3, 3, 5), -1.0)
    field[0, 0, 2, 1], field[1, 1, 2, 1], field[1, 2, 2, 1] = 1.0, 2.0, 0.5
    slowest = decided(with_design, field)["slowest_period"]
    assert slowest["period"] == 0.4
    assert slowest["design"] == {"trim": 2.0, "slope": 5.0}


def test_plant_in_z_answers_with_gains_alone():
    dataset = swept(
        transfer="1/(z - 0.9)", plant='sampled_at = "10 ms"', period="", gain="{ values = [0.1, 0.4, 0.9, 3.0] }",
        requirements='[[requirements]]\nmeasure = "spectral radius"\nat_most = 0.6',
    )  # fmt: skip
    # z = 0.9 - K: |z| <= 0.6 for K in [0.3, 1.5]; the slack is linear in z, the edge interpolated over log K
    answer = explorer.decide(dataset, explorer.judge(dataset))
    assert answer["swept_periods"] == 1
    assert answer["slowest_period"]["at_axis_end"]
    low, high = answer["slowest_period"]["gain_window"]
    assert 0.1 < low < 0.4 < 0.9 < high < 3.0
    assert answer["recommended"]["gain"] == 0.9
    assert "at the period of 10 ms for gains from" in answer["answer"]


def test_sentences_never_promise_more_than_there_is(plain):
    slowest = decided(plain, FIELD)["slowest_period"]
    words = decided(plain, FIELD)["answer"]
    shown = float(words.split("up to a sample period of ")[1].split()[0])
    unit = words.split("up to a sample period of ")[1].split()[1].rstrip(",")
    seconds = shown * {"s": 1.0, "ms": 1e-3}[unit]
    assert seconds <= slowest["period"]
    assert seconds == pytest.approx(slowest["period"], rel=1e-3)
