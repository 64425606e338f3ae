"""Many machines: explorer.sweeping.cluster with a scheduler and two workers on the loopback address.

Neighbours: small_study writes studies; test_store checks the files of a run.
"""

from __future__ import annotations

import json
import os
import pickle
import signal
import subprocess
import sys
import time

import pytest
from small_study import SPREAD, same, study_of

import explorer
from explorer.errors import Fault, IncompleteError, OptionError, RunError, StudyError
from explorer.sweeping import cluster, tiles
from explorer.sweeping.scenarios import scenarios_of

# What a worker loads before its first task: where to write which tiles it begins, and which of them kill it
PRELOAD = """
import os, signal, time
from pathlib import Path
from explorer.sweeping import cluster
from explorer.sweeping.tiles import compute  # a preload runs twice
def computed(study, scenarios, tile, alike):
    folder = Path({folder!r})
    (folder / f"tile-{{tile.number}}-{{os.getpid()}}").touch()
    if tile.number in {deadly}:
        os.kill(os.getpid(), signal.SIGKILL)
    time.sleep({pause})
    return compute(study, scenarios, tile, alike)
cluster.compute = computed
if {version!r}:
    import explorer
    explorer.__version__ = {version!r}
"""


class Machines:
    """A scheduler and its workers in processes of their own; everything listens on 127.0.0.1 alone."""

    def __init__(self, folder):
        self.folder, self.processes = folder, []
        self.address = ""

    def listen(self):
        """Start the scheduler and wait for its address."""
        file = self.folder / "scheduler.json"
        self.start("scheduler", "--host", "127.0.0.1", "--port", "0", "--no-dashboard", "--scheduler-file", file)
        while not (file.exists() and file.read_text().strip()):
            assert self.processes[0].poll() is None
            time.sleep(0.05)
        self.address = json.loads(file.read_text())["address"]

    def start(self, *words):
        command = [sys.executable, "-m", "dask", *map(str, words)]
        environment = os.environ | {"NUMBA_NUM_THREADS": "1"}
        with (self.folder / f"log-{len(self.processes)}").open("w") as log:
            process = subprocess.Popen(command, stdout=log, stderr=log, env=environment, start_new_session=True)
        self.processes.append(process)
        return self.processes[-1]

    def worker(self, deadly=(), pause=0.0, version="", nanny="--nanny"):
        preload = self.folder / f"preload-{len(self.processes)}.py"
        preload.write_text(PRELOAD.format(folder=str(self.folder), deadly=tuple(deadly), pause=pause, version=version))
        return self.start(
            "worker", self.address, "--host", "127.0.0.1", "--nthreads", "1", "--no-dashboard", nanny,
            "--preload", preload, "--local-directory", self.folder / f"work-{len(self.processes)}",
        )  # fmt: skip

    def computed(self):
        """(tile, process) of every beginning of a tile so far."""
        return [tuple(map(int, path.name.split("-")[1:])) for path in self.folder.glob("tile-*")]

    def stop(self):
        for process in reversed(self.processes):
            os.killpg(process.pid, signal.SIGKILL)
            process.wait()


@pytest.fixture
def machines(tmp_path, monkeypatch):
    monkeypatch.setattr(tiles, "LOOPS_IN_TILE", 400)
    monkeypatch.setattr(tiles, "FEWEST_LOOPS", 1)
    (tmp_path / "machines").mkdir()
    started = Machines(tmp_path / "machines")
    try:
        started.listen()
        yield started
    finally:
        started.stop()


def both_ready(machines, count):
    from distributed import Client

    with Client(machines.address, set_as_default=False) as client:
        client.wait_for_workers(count, timeout=60)


def test_two_workers_one_of_them_killed_give_the_same_bits(machines):
    study = study_of(**SPREAD)
    first, _ = machines.worker(pause=0.1, nanny="--no-nanny"), machines.worker(pause=0.1, nanny="--no-nanny")
    both_ready(machines, 2)
    begun = []

    def kill_one(done, total):
        begun.append(len({process for _, process in machines.computed()}))
        if done == 3:
            os.killpg(first.pid, signal.SIGKILL)

    found = explorer.sweep(study, cluster=machines.address, progress=kill_one)
    assert max(begun) == 2  # both worked
    assert same(found, explorer.sweep(study, jobs=1))


def test_a_tile_that_kills_its_workers_is_named_and_the_rest_finishes(machines, tmp_path):
    study = study_of(**SPREAD)
    for _ in range(2):
        machines.worker(deadly=[2])
    both_ready(machines, 2)
    with pytest.raises(IncompleteError, match=r"1 of \d+ tiles killed every worker they ran on \(tile 2, periods"):
        explorer.sweep(study, out=tmp_path / "run", cluster=machines.address)
    stored = {int(path.stem[5:]) for path in (tmp_path / "run").glob("tiles-*/*.npz")}
    assert 2 not in stored
    assert stored == set(range(len(tiles.tiles_of(study, len(scenarios_of(study).scale))))) - {2}
    resumed = explorer.sweep(study, out=tmp_path / "run", jobs=1)
    assert same(resumed, explorer.sweep(study, jobs=1))


def test_a_worker_with_another_version_is_refused(machines):
    machines.worker(version="0.0.1")
    with pytest.raises(RunError, match=rf"explorer 0\.0\.1 instead of explorer {explorer.__version__}"):
        explorer.sweep(study_of(**SPREAD), cluster=machines.address)


def test_a_worker_that_joins_later_is_asked_too():
    with pytest.raises(RunError, match="a worker that joined has other versions"):
        cluster.solve("", tiles.Tile(0, 0, 0, 1), ("explorer 0.0.1",))


@pytest.mark.parametrize(
    ("address", "error", "phrase"),
    [("tcp://127.0.0.1:9", RunError, "no scheduler answers"), ("nonsense://x", OptionError, "tcp://HOST:PORT")],
)
def test_a_wrong_address_is_said(address, error, phrase, monkeypatch):
    monkeypatch.setattr(cluster, "WAIT", 1)
    with pytest.raises(error, match=phrase):
        explorer.sweep(study_of(**SPREAD), cluster=address)


def test_without_the_extra_the_message_says_what_to_install(monkeypatch):
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(OptionError, match=r"explorer\[cluster\]"):
        explorer.sweep(study_of(**SPREAD), cluster="tcp://127.0.0.1:9")


def test_faults_of_a_study_come_back_from_a_worker():
    error = pickle.loads(pickle.dumps(StudyError([Fault("study", 3, "key", "found", "allowed", "mend")])))
    assert [fault.line for fault in error.faults] == [3]
