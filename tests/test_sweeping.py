"""Sweeping: tiles, reduction over scenarios, labels, files and resumed runs of explorer.sweeping.

Neighbours: small_study writes studies; test_scenarios checks the table of plants.
"""

from __future__ import annotations

import gc

import numpy as np
import pytest
import xarray as xr
from small_study import study_of, swept, text_of

import explorer
from explorer.errors import OptionError, RunError
from explorer.sweeping import running, tiles
from explorer.sweeping.dataset import Grid
from explorer.sweeping.estimate import estimate
from explorer.sweeping.scenarios import scenarios_of
from explorer.sweeping.store import SWEEP_FILE, TileStore, owned
from explorer.sweeping.tiles import Tile, compute, tiles_of

LAG = {
    "transfer": "load*strength/(lag*s + 1)",
    "plant": 'dead_time = "transport"',
    "parameters": 'strength = { nominal = 1.5, tolerance = "20 %" }\nlag = { from = 0.3, to = 0.5 }\n'
    'transport = { nominal = 0.02, tolerance = "50 %" }\nload = { any_of = [1.0, 1.3], nominal = 1.0 }',
    "loop": 'clock_tolerance = "1 %"',
    "gain": "{ values = [0.4, 1.2, 2.9, 4.0] }",
    "period": "{ values = [0.11, 0.2] }",
    "scenarios": "{ interior = 6, corners = true, seed = 3, tolerance_scales = [0, 0.5, 1.0] }",
    "requirements": """
[[requirements]]
measure = "spectral radius"
at_most = 0.75
[[requirements]]
measure = "damping ratio"
at_least = 0.3
[[requirements]]
name = "quick"
measure = "settling time"
basis = "poles"
at_most = "9 samples"
""",
}
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


def same(left, right):
    """Bit for bit, apart from the time of writing."""
    assert {**left.attrs, "created": ""} == {**right.attrs, "created": ""}
    return left.identical(right.assign_attrs(left.attrs))


@pytest.fixture
def many_tiles(monkeypatch):
    """A cut so fine that these small sweeps take several tiles and several blocks of scenarios."""
    monkeypatch.setattr(tiles, "LOOPS_IN_TILE", 400)
    monkeypatch.setattr(tiles, "LOOPS_AT_ONCE", 30)


SPREAD = LAG | {
    "period": '{ from = 0.11, to = 0.4, points = 9, spacing = "linear" }',
    "compensator": "gain*(1 + lead*(z - 1)/(period*z))", "axes": "lead = { values = [0.0, 0.02] }",
}  # fmt: skip


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
    results = [compute(study, scenarios, tile) for tile in cut]
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


# Files ----------------------------------------------------------------------------------------------------------


def interrupted(study, folder, after, jobs=1):
    """A run stopped by the user after some tiles."""

    def stop(done, total):
        if done == after:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        explorer.sweep(study, out=folder, jobs=jobs, progress=stop)


def counted(monkeypatch):
    """The numbers of the tiles computed from here on."""
    numbers: list[int] = []

    def compute_and_count(study, scenarios, tile):
        numbers.append(tile.number)
        return compute(study, scenarios, tile)

    monkeypatch.setattr(running, "compute", compute_and_count)
    return numbers


def test_a_stopped_run_goes_on_and_gives_the_same_bits(many_tiles, monkeypatch, tmp_path):
    study = study_of(**SPREAD)
    whole, total = explorer.sweep(study, jobs=1), len(tiles_of(study, len(scenarios_of(study).scale)))
    interrupted(study, tmp_path, after=5)
    assert not (tmp_path / SWEEP_FILE).exists()
    stored = sorted(tmp_path.glob("tiles-*/tile-*.npz"))
    assert len(stored) == 5
    stored[1].unlink()
    stored[3].write_bytes(stored[3].read_bytes()[:-100])
    numbers, reports = counted(monkeypatch), []
    resumed = explorer.sweep(study, out=tmp_path, jobs=1, progress=lambda *report: reports.append(report))
    assert numbers == [1, 3, *range(5, total)]
    assert reports == [(done, total) for done in range(4, total + 1)]
    assert same(whole, resumed)
    assert not list(tmp_path.glob("tiles-*"))
    # finished: read again, not computed again, unless asked to
    numbers.clear()
    assert same(whole, explorer.sweep(study, out=tmp_path, jobs=1))
    assert numbers == []
    explorer.sweep(study, out=tmp_path, jobs=1, fresh=True)
    assert len(numbers) == total


def test_a_stopped_run_of_several_workers_goes_on(many_tiles, tmp_path):
    study = study_of(**SPREAD)
    interrupted(study, tmp_path, after=5, jobs=2)
    gc.collect()  # the workers' generator ends here at the latest, and without a word
    assert same(explorer.sweep(study, jobs=1), explorer.sweep(study, out=tmp_path, jobs=2))


def test_a_damaged_result_is_computed_again(tmp_path):
    study = study_of()
    first = explorer.sweep(study, out=tmp_path, jobs=1)
    (tmp_path / SWEEP_FILE).write_bytes(b"not netCDF at all")
    assert same(first, explorer.sweep(study, out=tmp_path, jobs=1))
    assert same(first, xr.load_dataset(tmp_path / SWEEP_FILE))


def test_another_study_in_the_same_folder_is_not_taken_for_this_one(tmp_path):
    first = explorer.sweep(study_of(), out=tmp_path, jobs=1)
    other = study_of(transfer="1/(s*(2*s + 1))")
    assert not first.equals(explorer.sweep(other, out=tmp_path, jobs=1))
    interrupted(study_of(), tmp_path, after=1)
    assert same(explorer.sweep(other, jobs=1), explorer.sweep(other, out=tmp_path, jobs=1))


def test_no_damage_to_a_tile_goes_unseen(tmp_path):
    study = study_of(gain="{ values = [1.0] }", period="{ values = [0.1] }")
    result, store = compute(study, scenarios_of(study), Tile(0, 0, 0, 1)), TileStore(tmp_path, "key")
    store.put(0, result)
    (file,) = tmp_path.glob("tiles-key/*")
    whole = file.read_bytes()
    for place in range(0, len(whole), 3):
        file.write_bytes(whole[:place] + bytes([whole[place] ^ 0x08]) + whole[place + 1 :])
        found = store.get(0)  # None, or a byte was hit that says nothing, such as a date
        if found is not None:
            assert all(np.array_equal(vars(found)[name], value, equal_nan=True) for name, value in vars(result).items())
    file.write_bytes(whole)
    assert store.get(0) is not None
    assert store.get(1) is None


def test_wrong_options_and_folders_in_use_are_refused(tmp_path):
    with pytest.raises(OptionError, match="jobs"):
        explorer.sweep(study_of(), jobs=0)
    with owned(tmp_path), pytest.raises(RunError, match="another run is writing here"):
        explorer.sweep(study_of(), out=tmp_path, jobs=1)
    occupied = tmp_path / "file"
    occupied.touch()
    with pytest.raises(RunError, match="cannot be written"):
        explorer.sweep(study_of(), out=occupied, jobs=1)


@pytest.mark.parametrize("parts", [LAG, SPREAD, {}], ids=["parameters", "design", "nothing"])
def test_stored_dataset_keeps_the_contract(parts, tmp_path):
    study = study_of(**parts)
    kept = explorer.sweep(study, out=tmp_path, jobs=1)
    design = ("lead",) if "axes" in parts else ()
    with xr.open_dataset(tmp_path / SWEEP_FILE) as stored:
        assert stored.identical(kept)
        plane = (*design, "period", "gain")
        assert {name: stored[name].dims for name in stored.data_vars} == {
            "worst_value": ("measure", "tolerance_scale", *plane),
            "nominal_value": ("measure", *plane),
            "worst_scenario": ("measure", "tolerance_scale", *plane),
            "share_met": ("tolerance_scale", *plane),
            "scenario_parameter": ("scenario", "parameter"),
            "scenario_scale": ("scenario",),
        }
        assert stored["measure"].values.tolist() == [one.name for one in study.requirements]
        assert stored["period"].attrs["units"] == "s"
        assert stored["gain"].attrs["units"] == study.gain.unit
        assert stored["measure_unit"].values.tolist() == [one.measure.unit for one in study.requirements]
        assert set(stored["measure"].coords) >= {"measure_kind", "measure_unit"}
        attrs = stored.attrs
        assert (attrs["study"], attrs["seed"]) == (text_of(**parts), study.scenarios.seed)
        assert {"title", "study_sha256", "explorer_version", "created", "status_tally"} <= set(attrs)


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
