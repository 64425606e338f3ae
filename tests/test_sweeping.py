"""Sweeping: tiles, reduction over scenarios and labels of explorer.sweeping.

Neighbours: small_study writes studies; test_scenarios checks the table of plants, test_store the files.
"""

from __future__ import annotations

import numpy as np
import pytest
from small_study import LAG, SPREAD, same, study_of, swept

import explorer
from explorer.kernels.worst import keep_worst
from explorer.sweeping import tiles
from explorer.sweeping.dataset import Grid
from explorer.sweeping.estimate import estimate
from explorer.sweeping.scenarios import scenarios_of
from explorer.sweeping.tiles import Tile, compute, loops_by_delay, tiles_of

# 52 samples of dead time at 0.1 s nominally, 76 at half the tolerance, 100 at all of it: too many to solve
TOO_LONG = {
    "plant": LAG["plant"], "parameters": "transport = { from = 0.5, to = 10.0 }", "transfer": "1/(s + 1)",
    "gain": "{ values = [0.2, 0.5] }", "period": "{ values = [0.1, 2.0] }",
    "scenarios": "{ interior = 0, corners = true, seed = 1, tolerance_scales = [0, 0.5, 1.0] }",
}  # fmt: skip


def lag_poles(gain, period, row):
    """Poles z of one plant, worked out by hand: the lag sees u[k-1] up to the dead time, then u[k]."""
    strength, lag, transport, load, clock = row
    true_period = period * clock
    e, part = np.exp(-true_period / lag), np.exp(-(true_period - transport) / lag)
    # y[k+1] = e y[k] + (part - e) u[k-1] + (1 - part) u[k], all times the static gain
    around = gain * load * strength
    return np.roots([1, -e + around * (1 - part), around * (part - e)]).astype(complex), true_period


def by_hand(gain, period, row):
    """Spectral radius, damping ratio, settling time [s] of one plant."""
    z, true_period = lag_poles(gain, period, row)
    s = np.log(z)
    radius = np.abs(z).max()
    settling = true_period * np.log(50) / -np.log(radius) if radius < 1 else np.inf
    return radius, (-s.real / np.abs(s)).min(), settling


def test_worst_values_against_every_scenario_worked_out_by_hand():
    dataset = swept(**LAG)
    rows, enters = dataset["scenario_parameter"].values, dataset["scenario_scale"].values
    assert dataset["parameter"].values.tolist() == ["strength", "lag", "transport", "load", "clock"]
    assert len(rows) == 2 * (1 + 2 * (16 + 6))
    for column, period in enumerate(dataset["period"].values):
        for line, gain in enumerate(dataset["gain"].values):
            values = np.array([by_hand(gain, period, row) for row in rows])
            cell = dataset.isel(period=column, gain=line)
            # np.roots of a quadratic in z: some ten roundings, magnified by 1/ln|z| and by close poles
            assert cell["nominal_value"].values == pytest.approx(values[0], rel=1e-9)
            met = (values[:, 0] <= 0.75) & (values[:, 1] >= 0.3) & (values[:, 2] <= 9 * period)
            for index, scale in enumerate(dataset["tolerance_scale"].values):
                within = enters <= scale
                worst = np.array([values[within, 0].max(), values[within, 1].min(), values[within, 2].max()])
                assert cell["worst_value"].values[:, index] == pytest.approx(worst, rel=1e-9)
                blamed = cell["worst_scenario"].values[:, index]
                assert within[blamed].all()
                assert values[blamed, range(3)] == pytest.approx(worst, rel=1e-9)
                assert cell["share_met"].values[index] == pytest.approx(met[within].mean(), abs=1e-12)
    share = dataset["share_met"].values
    assert ((share > 0) & (share < 1)).any()  # the limits do tell plants apart


def test_one_unsolved_plant_makes_the_point_unknown():
    dataset = swept(**TOO_LONG)
    at_once, later = dataset.isel(period=0), dataset.isel(period=1)
    assert np.isfinite(dataset["nominal_value"]).all()
    assert np.isfinite(at_once["worst_value"].sel(tolerance_scale=[0, 0.5])).all()
    assert np.isnan(at_once["worst_value"].sel(tolerance_scale=1.0)).all()
    assert np.isfinite(later["worst_value"]).all()
    blamed = int(at_once["worst_scenario"].sel(tolerance_scale=1.0, measure="damped")[0])
    assert float(dataset["scenario_parameter"][blamed, 0]) == 10.0
    assert dataset.attrs["unknown_loops"] == 2
    tally = dataset.attrs["status_tally"]
    assert tally == "solved 18; unsolved 2 of 20 (dead time of too many samples), first at gain = 0.2, period = 100 ms"


def test_unsolved_does_not_count_as_met():
    # Limits that every solved loop meets: of the five plants at the full scale one is unsolved
    easy = '[[requirements]]\nmeasure = "spectral radius"\nat_most = 9\n[[requirements]]\nmeasure = "damping ratio"\n'
    dataset = swept(**TOO_LONG | {"requirements": f"{easy}at_least = -9"})
    assert dataset["share_met"].isel(period=0).values == pytest.approx(np.array([[1, 1], [1, 1], [0.8, 0.8]]))
    assert (dataset["share_met"].isel(period=1) == 1).all()
    assert not explorer.judge(dataset)["feasible"].isel(period=0).sel(tolerance_scale=1.0).any()


def test_loop_without_poles_and_without_answer_is_unknown():
    # u = -K (2 u): at K = -1/2 any u does; there is no pole that could carry the NaN
    dataset = swept(transfer="2", gain="{ values = [-0.5, 0.2] }")
    assert np.isnan(dataset["worst_value"].sel(gain=-0.5)).all()
    assert np.isnan(dataset["nominal_value"].sel(gain=-0.5)).all()
    assert (dataset["share_met"].sel(gain=-0.5) == 0).all()
    assert not explorer.judge(dataset)["feasible"].sel(gain=-0.5).any()
    assert explorer.judge(dataset)["feasible"].sel(gain=0.2).all()


def test_what_is_unknown_in_a_narrow_box_stays_so_in_a_wide_one():
    # as above, but only the nominal k has no answer: every plant of the wider scale is solved
    dataset = swept(
        transfer="k", parameters='k = { nominal = 2.0, tolerance = "10 %" }', gain="{ values = [-0.5, 0.2] }",
        scenarios="{ interior = 0, corners = true, seed = 1, tolerance_scales = [0, 0.5, 1.0] }",
    )  # fmt: skip
    assert dataset.attrs["unknown_loops"] == 2  # at two periods
    assert np.isnan(dataset["worst_value"].sel(gain=-0.5)).all()
    assert (dataset["worst_scenario"].sel(gain=-0.5) == 0).all()
    assert dataset["share_met"].sel(gain=-0.5).values == pytest.approx(np.array([[0.0] * 2, [2 / 3] * 2, [4 / 5] * 2]))


@pytest.mark.parametrize("turned", [False, True])
def test_equal_values_and_unknown_ones_are_put_down_to_the_first_scenario(turned):
    # one gain per case: a tie, two unknown, an unknown after a number; the groups in either order
    values = {0: [3.0, 1.0, 9.0], 1: [5.0, np.nan, 1.0], 2: [5.0, np.nan, np.nan]}
    worst, place = np.full((1, 1, 3), -np.inf), np.full((1, 1, 3), -1, np.int32)
    for scenario in sorted(values, reverse=turned):
        lanes, met = np.array(values[scenario]).reshape(1, 3, 1), np.ones((1, 3, 1), bool)
        first, limit = np.array([0]), np.array([4.0])
        keep_worst(lanes, 1, np.array([scenario]), first, first, 1.0, False, limit, met, worst, place)
        assert met.ravel().tolist() == [value <= 4.0 for value in values[scenario]]
    assert place.tolist() == [[[1, 1, 2]]]
    np.testing.assert_array_equal(worst, [[[5.0, np.nan, np.nan]]])


@pytest.fixture
def many_tiles(monkeypatch):
    """A cut so fine that these small sweeps take several tiles and several blocks of scenarios."""
    monkeypatch.setattr(tiles, "LOOPS_IN_TILE", 400)
    monkeypatch.setattr(tiles, "LOOPS_AT_ONCE", 30)
    monkeypatch.setattr(tiles, "FEWEST_LOOPS", 1)


def test_any_number_of_workers_gives_the_same_bits(many_tiles):
    study = study_of(**SPREAD)
    assert len(tiles_of(study, 90)) > 4
    assert same(explorer.sweep(study, jobs=1), explorer.sweep(study, jobs=2))


def test_blocks_of_scenarios_do_not_matter(many_tiles, monkeypatch):
    study = study_of(**SPREAD)
    small = explorer.sweep(study, jobs=1)
    monkeypatch.undo()
    whole = explorer.sweep(study, jobs=1)
    for name in ("worst_value", "nominal_value", "share_met"):
        # a track begins where its neighbour began, so other blocks round otherwise
        np.testing.assert_allclose(small[name], whole[name], rtol=1e-10)


def test_tiles_may_finish_in_any_order(many_tiles):
    study = study_of(**TOO_LONG | {"period": "{ values = [0.08, 0.09, 0.1, 2.0] }"})
    scenarios = scenarios_of(study)
    cut = [Tile(index, 0, index, index + 1) for index in range(4)]
    results = [compute(study, scenarios, tile, loops_by_delay(study, scenarios)) for tile in cut]
    forward, backward = Grid(study, scenarios), Grid(study, scenarios)
    for tile, result in zip(cut, results, strict=True):
        forward.put(tile, result)
        backward.put(cut[-1 - tile.number], results[-1 - tile.number])
    assert same(forward.dataset(), backward.dataset())
    assert "period = 80 ms" in forward.dataset().attrs["status_tally"]


@pytest.mark.parametrize(("scenarios", "gains", "periods"), [(1, 1000, 400), (300, 40, 77), (5000, 200, 20)])
def test_cut_covers_every_period_once_and_bounds_the_loops_at_once(scenarios, gains, periods):
    study = study_of(
        gain=f"{{ from = 1, to = 2, points = {gains} }}", period=f"{{ from = 1, to = 2, points = {periods} }}",
        compensator="gain*lead", axes="lead = { values = [1, 2, 3] }",
    )  # fmt: skip
    cut = tiles_of(study, scenarios)
    assert [tile.number for tile in cut] == list(range(len(cut)))
    for design in range(3):
        covered = [row for tile in cut if tile.design == design for row in range(tile.start, tile.stop)]
        assert covered == list(range(periods))
    for tile in cut:
        length = tile.stop - tile.start
        assert length == 1 or length * gains <= tiles.LOOPS_AT_ONCE  # one scenario of it
        assert length == 1 or length * gains * scenarios <= tiles.LOOPS_IN_TILE


def test_design_variables_are_axes_of_their_own():
    dataset = swept(**SPREAD | {"axes": "lead = { values = [0.02, 0.0] }\nextra = { values = [1.0, 1.1] }",
                                "compensator": "gain*extra*(1 + lead*(z - 1)/(period*z))"})  # fmt: skip
    assert dataset["worst_value"].dims == ("measure", "tolerance_scale", "lead", "extra", "period", "gain")
    assert dataset["share_met"].dims == ("tolerance_scale", "lead", "extra", "period", "gain")
    assert dataset["lead"].values.tolist() == [0.0, 0.02]
    for lead in (0.0, 0.02):
        for extra in (1.0, 1.1):
            fixed = f"gain*{extra}*(1 + {lead}*(z - 1)/(period*z))"
            alone = swept(**SPREAD | {"axes": "", "compensator": fixed})
            found = dataset.sel(lead=lead, extra=extra)
            for name in ("worst_value", "nominal_value", "share_met"):
                assert found[name].values == pytest.approx(alone[name].values, rel=1e-12), name


def test_units_are_stored_as_si():
    dataset = swept(
        transfer="strength/(s*(lag*s + 1))",
        parameters='strength = { nominal = "3 mm/s/V" }\nlag = { nominal = "20 ms" }',
        gain='{ from = "1 V/mm", to = "4 V/mm", points = 3 }', period='{ values = ["10 ms", "5 ms"] }',
    )  # fmt: skip
    assert dataset["gain"].values == pytest.approx([1000, 2000, 4000])
    assert dataset["gain"].attrs["units"] == "V/m"
    assert dataset["period"].values.tolist() == [0.005, 0.01]
    assert dataset["scenario_parameter"].values == pytest.approx(np.array([[0.003, 0.02]]))
    assert dataset["parameter_unit"].values.tolist() == ["m/s/V", "s"]


def test_estimate_counts_what_will_be_swept():
    study = study_of(**SPREAD)
    scenarios, found = estimate(study)
    assert found.loops == len(scenarios.scale) * 2 * 9 * 4
    assert found.tiles == len(tiles_of(study, len(scenarios.scale)))
