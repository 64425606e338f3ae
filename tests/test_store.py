"""Files of a run: explorer.sweeping.store and .running, stopped runs, damage and the stored Dataset.

Neighbours: small_study writes studies; test_sweeping checks what is computed.
"""

from __future__ import annotations

import dataclasses
import gc
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from small_study import LAG, SPREAD, same, study_of, text_of

import explorer
from explorer.errors import OptionError, RunError
from explorer.sweeping import running, tiles
from explorer.sweeping.scenarios import scenarios_of
from explorer.sweeping.store import SWEEP_FILE, TileStore, owned
from explorer.sweeping.tiles import Tile, compute, tiles_of


@pytest.fixture
def many_tiles(monkeypatch):
    """A cut so fine that a small sweep takes many tiles."""
    monkeypatch.setattr(tiles, "LOOPS_IN_TILE", 400)


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

    def compute_and_count(study, scenarios, tile, alike):
        numbers.append(tile.number)
        return compute(study, scenarios, tile, alike)

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


def test_runs_killed_at_random_moments_go_on_to_the_same_bits(tmp_path):
    words = [sys.executable, str(Path(__file__).with_name("killed_runs.py")), str(tmp_path), "50", "1"]
    done = subprocess.run(words, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    stopped, left = map(int, done.stdout.split())
    assert stopped == 50  # killed before their end
    assert left >= 25  # tiles to go on from


def test_tiles_of_another_study_are_kept_or_thrown_away_never_mixed(many_tiles, tmp_path):
    study, other = study_of(**SPREAD), study_of(**SPREAD | {"gain": "{ values = [0.5, 1.3] }"})
    interrupted(study, tmp_path, after=3)
    with pytest.raises(RunError, match=r"holds 3 finished tiles .* --fresh throws them away"):
        explorer.sweep(other, out=tmp_path, jobs=1)
    assert len(list(tmp_path.glob("tiles-*/tile-*.npz"))) == 3
    assert same(explorer.sweep(other, out=tmp_path, jobs=1, fresh=True), explorer.sweep(other, jobs=1))
    assert not list(tmp_path.glob("tiles-*"))


FULL = """
import resource, sys
import explorer
from explorer.errors import IncompleteError
from explorer.sweeping import tiles
from small_study import SPREAD, study_of
tiles.LOOPS_IN_TILE, tiles.FEWEST_LOOPS = 400, 1
resource.setrlimit(resource.RLIMIT_FSIZE, (int(sys.argv[2]), -1))  # a disk that takes no larger file
try:
    explorer.sweep(study_of(**SPREAD), out=sys.argv[1], jobs=1)
except IncompleteError as error:
    print(error)
"""


@pytest.mark.parametrize(("size", "name"), [(100, "tile-"), (9_000, "sweep.nc")])
def test_a_full_disk_is_said_and_loses_nothing(many_tiles, size, name, tmp_path):
    words = [sys.executable, "-c", "import signal; signal.signal(signal.SIGXFSZ, signal.SIG_IGN)\n" + FULL]
    done = subprocess.run([*words, str(tmp_path), str(size)], capture_output=True, text=True, check=True,
                          cwd=Path(__file__).parent)  # fmt: skip
    assert name in done.stdout
    assert "what was finished before stays" in done.stdout
    assert not list(tmp_path.glob("**/*.part"))
    study = study_of(**SPREAD)
    assert same(explorer.sweep(study, out=tmp_path, jobs=1), explorer.sweep(study, jobs=1))


def test_no_damage_to_a_tile_goes_unseen(tmp_path):
    study = study_of(gain="{ values = [1.0] }", period="{ values = [0.1] }")
    result, store = compute(study, scenarios_of(study), Tile(0, 0, 0, 1), {0: 3}), TileStore(tmp_path, "key")
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


def test_a_header_that_asks_for_less_does_not_hide_the_rest(tmp_path):
    # numpy reads as much as the header says, and a long array never comes to the checksum at its end
    study = study_of(gain="{ values = [1.0] }", period="{ values = [0.1] }")
    result = compute(study, scenarios_of(study), Tile(0, 0, 0, 1), {0: 3})
    store = TileStore(tmp_path, "key")
    store.put(0, dataclasses.replace(result, nominal=np.zeros((1, 1, 4000))))
    (file,) = tmp_path.glob("tiles-key/*")
    file.write_bytes(file.read_bytes().replace(b"'shape': (1, 1, 4000)", b"'shape': (1, 1, 2000)"))
    assert store.get(0) is None


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
