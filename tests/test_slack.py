"""Slack: explorer.judge against signs, limits and scales worked out by hand.

Neighbours: small_study sweeps a small study; its values are then replaced by round ones.
"""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr
from small_study import swept

import explorer
from explorer.errors import OptionError
from explorer.sweeping.store import read_dataset, write_dataset

EPS = np.finfo(float).eps
REQUIREMENTS = """
[[requirements]]
measure = "stability"
[[requirements]]
name = "damped"
measure = "damping ratio"
at_least = 0.5
[[requirements]]
name = "quick"
measure = "settling time"
basis = "poles"
at_most = "10 samples"
[[requirements]]
name = "swing"
measure = "overshoot"
basis = "poles"
at_most = "0 %"
scale = "20 %"
[[requirements]]
name = "slow enough"
measure = "natural frequency"
at_most = "8 rad/s"
"""
STABILITY, DAMPED, QUICK, SWING, SLOW = range(5)
MEETS_ALL = [0.9, 0.6, 0.5, 0.0, 4.0]


@pytest.fixture(scope="module")
def empty():
    """A sweep of two scales, periods 0.1 s and 0.2 s and three gains; everything in it meets every limit."""
    dataset = swept(
        requirements=REQUIREMENTS, period="{ values = [0.1, 0.2] }",
        scenarios="{ interior = 0, corners = false, seed = 1, tolerance_scales = [0.5, 1.0] }",
    )  # fmt: skip
    for name in ("worst_value", "nominal_value"):
        shape = (5,) + (1,) * (dataset[name].ndim - 1)
        dataset[name] = xr.zeros_like(dataset[name]) + np.array(MEETS_ALL).reshape(shape)
    return dataset


@pytest.fixture
def dataset(empty):
    return empty.copy(deep=True)


def judged(dataset, requirement, value, limits=None):
    """Slack of one requirement at scale 1, period 0.2 s, first gain, where its worst value is `value`."""
    dataset["worst_value"][requirement, 1, 1, 0] = value
    return float(explorer.judge(dataset, limits)["slack"][requirement, 1, 1, 0])


@pytest.mark.parametrize(
    ("requirement", "value", "slack"),
    [
        (STABILITY, 0.9, 0.1),
        (STABILITY, 1.2, -0.2),
        (DAMPED, 0.6, 0.2),
        (DAMPED, 0.5, 0.0),
        (DAMPED, 0.2, -0.6),
        (DAMPED, -np.inf, -np.inf),
        (QUICK, 1.5, 0.25),  # ten samples of 0.2 s are 2 s
        (QUICK, 2.0, 0.0),
        (QUICK, 3.0, -0.5),
        (QUICK, np.inf, -np.inf),
        (SWING, 5.0, -0.25),  # of the 20 % stated, the limit itself being 0
        (SWING, 0.0, 0.0),
        (SLOW, 4.0, 0.5),
        (SLOW, np.inf, -np.inf),
    ],
)
def test_slack_is_the_distance_to_the_limit_over_its_scale(dataset, requirement, value, slack):
    assert judged(dataset, requirement, value) == pytest.approx(slack, rel=4 * EPS, abs=2 * EPS)


def test_limits_in_samples_grow_with_the_period(dataset):
    verdict = explorer.judge(dataset)
    assert verdict["limit"].values[QUICK] == pytest.approx([1.0, 2.0], rel=EPS)
    assert verdict["slack"].values[QUICK, 0, :, 0] == pytest.approx([0.5, 0.75], rel=4 * EPS)
    assert (verdict["limit"].values[STABILITY] == 1).all()
    assert verdict["sense"].values.tolist() == ["below", "at least", "at most", "at most", "at most"]


def test_stability_is_strictly_below_one(dataset):
    for value, met in ((1 - EPS / 2, True), (1.0, False), (1 + EPS, False), (0.0, True)):
        slack = judged(dataset, STABILITY, value)
        assert (slack >= 0) == met
        assert bool(explorer.judge(dataset)["feasible"][1, 1, 0]) == met


def test_least_slack_names_what_binds(dataset):
    dataset["worst_value"][DAMPED, 1, 1, 0] = 0.4  # -0.2
    dataset["worst_value"][QUICK, 1, 1, 0] = 3.0  # -0.5
    verdict = explorer.judge(dataset)
    assert float(verdict["least_slack"][1, 1, 0]) == pytest.approx(-0.5, rel=4 * EPS)
    assert int(verdict["binding"][1, 1, 0]) == QUICK
    assert not bool(verdict["feasible"][1, 1, 0])
    # elsewhere the limit of 0 on the swing is met with nothing to spare
    assert float(verdict["least_slack"][0, 0, 1]) == 0
    assert int(verdict["binding"][0, 0, 1]) == SWING
    assert bool(verdict["feasible"][0, 0, 1])
    assert (verdict["least_slack"] == verdict["slack"].min("measure", skipna=False)).all()


def test_what_is_never_reached_binds(dataset):
    dataset["worst_value"][SLOW, 1, 1, 0] = np.inf
    verdict = explorer.judge(dataset)
    assert float(verdict["least_slack"][1, 1, 0]) == -np.inf
    assert int(verdict["binding"][1, 1, 0]) == SLOW


@pytest.mark.parametrize("others", [None, -np.inf, 0.1])
def test_unknown_is_never_feasible_whatever_the_others_say(dataset, others):
    dataset["worst_value"][QUICK, 1, 1, 0] = np.nan
    if others is not None:
        dataset["worst_value"][DAMPED, 1, 1, 0] = others
    verdict = explorer.judge(dataset)
    assert np.isnan(verdict["least_slack"][1, 1, 0])
    assert not bool(verdict["feasible"][1, 1, 0])
    assert int(verdict["binding"][1, 1, 0]) == -1
    assert int(np.isnan(verdict["least_slack"]).sum()) == 1
    assert int(verdict["feasible"].sum()) == verdict["feasible"].size - 1


def test_other_limits_without_another_sweep(dataset):
    limits = {"damped": 0.7, "quick": "300 ms", "swing": "10 %", "slow enough": "6 rad/s"}
    verdict = explorer.judge(dataset, limits)
    expected = [0.1, -0.1 / 0.7, -0.2 / 0.3, 10 / 20, 2 / 6]
    assert verdict["slack"].values[:, 1, 1, 0] == pytest.approx(expected, rel=1e-14)
    assert verdict["limit"].values[QUICK].tolist() == [0.3, 0.3]
    assert not verdict["feasible"].any()
    assert "quick: at most 0.3 s" in verdict.attrs["limits"]
    back = explorer.judge(dataset, {"quick": "10 samples"})
    assert back["slack"].equals(explorer.judge(dataset)["slack"])
    assert "quick: at most 10 samples" in back.attrs["limits"]


@pytest.mark.parametrize(
    ("limits", "fault"),
    [
        ({"dampd": 0.3}, "no requirement 'dampd'"),
        ({"stability": 0.9}, "takes no limit"),
        ({"quick": "3 V"}, "quick"),
        ({"quick": "ten"}, "quick"),
        ({"damped": "nan"}, "damped"),
        ({"damped": float("inf")}, "damped"),
        ({"damped": 0}, "scale"),
        ({"damped": "3 samples"}, "damped"),
    ],
)
def test_wrong_limits_are_refused(dataset, limits, fault):
    with pytest.raises(OptionError, match=fault):
        explorer.judge(dataset, limits)


def test_all_wrong_limits_are_named_at_once(dataset):
    with pytest.raises(OptionError) as caught:
        explorer.judge(dataset, {"dampd": 1, "stability": 1, "quick": "3 V"})
    assert all(word in str(caught.value) for word in ("dampd", "stability", "quick"))


def test_a_looser_limit_of_zero_has_a_stated_scale(dataset):
    assert judged(dataset, SWING, 5.0, {"swing": "15 %"}) == pytest.approx(0.5, rel=4 * EPS)


def test_the_sweep_is_left_as_it_was(dataset):
    before = dataset.copy(deep=True)
    explorer.judge(dataset, {"damped": 0.9})
    assert dataset.identical(before)


def test_verdict_keeps_the_contract_on_disk(dataset, tmp_path):
    dataset["worst_value"][QUICK, 1, 1, 0] = np.nan
    verdict = explorer.judge(dataset)
    write_dataset(verdict, tmp_path / "verdict.nc")
    stored = read_dataset(tmp_path / "verdict.nc")
    assert stored.identical(verdict)
    assert {name: stored[name].dims for name in ("slack", "least_slack", "binding", "feasible", "nominal_slack")} == {
        "slack": ("measure", "tolerance_scale", "period", "gain"),
        "least_slack": ("tolerance_scale", "period", "gain"),
        "binding": ("tolerance_scale", "period", "gain"),
        "feasible": ("tolerance_scale", "period", "gain"),
        "nominal_slack": ("measure", "period", "gain"),
    }
    assert stored["feasible"].dtype == bool
    assert stored["binding"].dtype.kind == "i"
    assert stored["period"].attrs["units"] == "s"
    for name in ("study", "study_sha256", "explorer_version", "seed", "created", "status_tally"):
        assert stored.attrs[name] == dataset.attrs[name]
    # what was judged from disk is what was judged in memory
    write_dataset(dataset, tmp_path / "sweep.nc")
    assert explorer.judge(read_dataset(tmp_path / "sweep.nc")).identical(verdict)


def test_nominal_slack_is_that_of_the_nominal_plant(dataset):
    dataset["nominal_value"][DAMPED, 1, 0] = 0.4
    dataset["nominal_value"][QUICK, 0, 0] = np.nan
    slack = explorer.judge(dataset)["nominal_slack"].values
    assert slack[DAMPED, 1, 0] == pytest.approx(-0.2, rel=4 * EPS)
    assert np.isnan(slack[QUICK, 0, 0])
    assert explorer.judge(dataset)["feasible"].all()  # the box was judged by its own worst values
