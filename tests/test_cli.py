"""Command line: exit status, short messages on stderr, one JSON document, stopped and damaged runs.

Neighbours: test_faults has the messages of a study, test_sweeping the store beneath, test_maps the pictures.
"""

from __future__ import annotations

import json
import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from carriage import CARRIAGE, changed
from click.testing import CliRunner
from small_study import text_of

import explorer
from explorer.cli import main
from explorer.sweeping import running, store, tiles

ODD_NAME = "$x_{$ [red]a=b[/red]"  # markup, mathematics and the sign that --limit splits at
ODD_TITLE = "[bold]x[/bold] $$ {0} %s <b> \\\\alpha"
STUDY = text_of(
    gain='{ values = [0.2, 0.5, 1.0, 2.0, 40.0] }', period='{ values = ["0.1 s", "0.3 s", "1 s"] }',
    compensator="gain*(1 + lead*(z - 1)/(period*z))", axes='lead = { values = ["10 ms", "20 ms"] }',
    parameters="", scenarios="{ interior = 0, tolerance_scales = [0, 1.0] }",
    requirements=f'[[requirements]]\nname = "{ODD_NAME}"\nmeasure = "damping ratio"\nat_least = 0.4\n'
    '[[requirements]]\nmeasure = "settling time"\nbasis = "poles"\nat_most = "15 s"\n',
).replace('"small"', f'"{ODD_TITLE}"')  # fmt: skip


def explore(*words, **options):
    """Run a command; a traceback would be a result.exception other than SystemExit."""
    result = CliRunner(**options).invoke(main, [str(word) for word in words])
    assert result.exception is None or isinstance(result.exception, SystemExit), result.exception
    assert "Traceback" not in result.output
    return result


def refused(*words, status=2):
    """The message of a command that ends with that status and prints nothing on stdout."""
    result = explore(*words)
    assert result.exit_code == status, result.output
    assert result.stdout == ""
    assert 0 < len(result.stderr) < 1000
    return result.stderr


@pytest.fixture(scope="module")
def swept(tmp_path_factory):
    """A finished run, its study and what the command said."""
    folder = tmp_path_factory.mktemp("runs")
    (folder / "study.toml").write_text(STUDY, encoding="utf-8")
    result = explore("sweep", folder / "study.toml", "--out", folder / "run", "--jobs", 1)
    assert result.exit_code == 0, result.output
    return folder, result


@pytest.fixture
def run(swept, tmp_path):
    """A copy of the finished run to damage."""
    return Path(shutil.copytree(swept[0] / "run", tmp_path / "run"))


def test_a_sweep_answers_and_writes_its_folder(swept):
    folder, result = swept
    assert result.stdout.startswith("With the tolerances as stated every requirement holds")
    assert result.stderr == ""
    assert {path.name for path in (folder / "run").iterdir()} >= {
        "sweep.nc", "verdict.nc", "decision.json", "region.png", "slack.png"
    }  # fmt: skip
    assert not list((folder / "run").glob("*.part"))
    again = explore("sweep", folder / "study.toml", "--out", folder / "run")
    assert again.stdout == result.stdout


def test_check_says_what_was_understood(swept):
    folder, _ = swept
    said = explore("check", folder / "study.toml").stdout
    for words in (ODD_NAME, "lead: 10 ms to 20 ms, 2 points, values", "30 closed loops", "nominal poles 0 1/s",
                  "settling time by poles at most 15 s", "plant.transfer: column 9 adds [1/s] and [1]"):  # fmt: skip
        assert words in said
    assert said.splitlines()[0] == ODD_TITLE.replace("\\\\", "\\")


def test_json_is_one_document_and_nothing_else(swept, run):
    commands = {("check", swept[0] / "study.toml"): "loops", ("decide", run): "recommended", ("measures",): None}
    commands[("judge", run)] = "scales"
    for words, key in commands.items():
        result = explore(*words, "--json")
        assert (result.exit_code, result.stderr) == (0, "")
        document = json.loads(result.stdout, parse_constant=pytest.fail)  # NaN and Infinity are not JSON
        assert key is None or key in document


def test_other_limits_are_judged_without_sweeping(run):
    before = (run / "sweep.nc").read_bytes()
    said = explore("judge", run, "--limit", f"{ODD_NAME}=1.5", "--strict")
    assert said.exit_code == 1
    assert "Nowhere on the swept axes" in said.stdout
    assert (run / "sweep.nc").read_bytes() == before
    decided = explore("decide", run, "--strict")
    assert decided.exit_code == 1
    # an answer under other limits than the study's must not pass for the study's
    assert f"Limits: {ODD_NAME}: at least 1.5; settling time: at most 15 s." in decided.stdout
    assert not json.loads(explore("decide", run, "--json").stdout)["feasible"]


def test_maps_are_drawn_by_name(run):
    drawn = explore("map", run, "--show", ODD_NAME, "--at", "lead=10 ms", "--tolerance-scale", 0, "--format", "svg")
    assert drawn.exit_code == 0
    picture = Path(drawn.stdout.strip())
    assert picture.parent == run
    assert ODD_NAME.replace("$", "") in picture.read_text(encoding="utf-8").replace("$", "")
    sheet = (run / "slack.png").read_bytes()
    assert explore("map", run, "--show", "slack").stdout.strip() == str(run / "least-slack.png")
    assert (run / "slack.png").read_bytes() == sheet


BAD_OPTIONS = [
    (("sweep", "STUDY", "--jobs", "0"), "1 or more"), (("sweep", "STUDY", "--jobs", "two"), "not a valid integer"),
    (("sweep", "STUDY", "--out", ""), "a folder"), (("sweep", "STUDY", "--out", "STUDY"), "File exists"),
    (("sweep", "STUDY", "--out", "/proc/none/x"), "Choose another folder"),
    (("sweep", "STUDY", "--nosuch"), "No such option"), (("sweep",), "Missing argument"),
    (("check", "NOWHERE"), "cannot be read"), (("check", "."), "Is a directory"), (("nosuch",), "No such command"),
    (("judge", "NOWHERE"), "explorer sweep STUDY"), (("decide", "STUDY"), "explorer sweep STUDY"),
    (("judge", "RUN", "--limit", "settling time"), "NAME=VALUE"), (("judge", "RUN", "--limit", "=5"), "NAME=VALUE"),
    (("judge", "RUN", "--limit", "setling time=5"), "Did you mean 'settling time'?"),
    (("judge", "RUN", "--limit", "settling time=5 V"), "a quantity in s"),
    (("judge", "RUN", "--limit", "settling time=-5 s"), "0 or more"),
    (("judge", "RUN", "--limit", "settling time=nan"), "one number"),
    (("judge", "RUN", "--limit", "settling time=1", "--limit", "settling time=2"), "stands twice"),
    (("map", "RUN", "--show", "nosuch"), "there are: slack, binding, share"),
    (("map", "RUN", "--tolerance-scale", "3"), "there are: 0, 1"),
    (("map", "RUN", "--tolerance-scale", "nan"), "there are: 0, 1"),
    (("map", "RUN", "--tolerance-scale", "x"), "not a valid float"),
    (("map", "RUN", "--format", "bmp"), "'png', 'svg'"),
    (("map", "RUN", "--at", "lead"), "NAME=VALUE"), (("map", "RUN", "--at", "lead=15 ms"), "there are: 10 ms, 20 ms"),
    (("map", "RUN", "--at", "lead=10 V"), "a quantity in s"), (("map", "RUN", "--at", "gain=1"), "this run has: lead"),
    (("measures", "x"), "unexpected extra argument"),
]  # fmt: skip


@pytest.mark.parametrize(("words", "phrase"), BAD_OPTIONS, ids=[" ".join(words) for words, _ in BAD_OPTIONS])
def test_a_bad_word_is_refused_with_what_is_allowed(swept, tmp_path, words, phrase):
    folder, _ = swept
    places = {"STUDY": folder / "study.toml", "RUN": folder / "run", "NOWHERE": tmp_path / "nowhere"}
    assert phrase in refused(*(places.get(word, word) for word in words))


def test_a_study_with_eight_faults_lists_them_and_writes_nothing(tmp_path, monkeypatch):
    slips = [
        ('"Camera carriage, position loop"', "5"), ('"12 %"', '"12 V"'), ("lead*(z", "laed*(z"),
        ('"0.5 %"', '"60 %"'), ("seed = 7", "seed = 1.5"), ('"damping ratio"', '"dampnig ratio"'),
        ('"120 ms"', '"120 V"'), ('= "transport"', '= "transprot"'),
    ]  # fmt: skip
    monkeypatch.chdir(tmp_path)
    file = tmp_path / "study.toml"
    file.write_text(changed(*slips), encoding="utf-8")
    for command in ("check", "sweep"):
        result = explore(command, "study.toml")
        assert (result.exit_code, result.stdout) == (2, "")
        *faults, count = result.stderr.splitlines()
        assert [fault.split(": ")[0] for fault in faults] == [f"study.toml:{n}" for n in (1, 5, 8, 14, 17, 24, 28, 34)]
        assert count == "8 faults; nothing was computed"
    assert list(tmp_path.iterdir()) == [file]


def test_debug_shows_the_traceback_and_keeps_the_status(tmp_path):
    for words in (("--debug", "check", tmp_path), ("check", tmp_path, "--debug")):
        result = CliRunner().invoke(main, [str(word) for word in words])
        assert result.exit_code == 2
        assert "Traceback" in result.stderr


def test_what_nobody_foresaw_ends_with_three_and_a_message(tmp_path, monkeypatch):
    (tmp_path / "study.toml").write_text(STUDY, encoding="utf-8")
    for error, phrase in ((ZeroDivisionError("of zero"), "--debug"), (MemoryError(), "Out of memory"),
                          (OSError(28, "No space left on device", "disk"), "No space left")):  # fmt: skip
        monkeypatch.setattr(running, "scenarios_of", lambda study, error=error: (_ for _ in ()).throw(error))
        assert phrase in refused("sweep", tmp_path / "study.toml", "--out", tmp_path / "run", status=3)


def test_a_terminal_without_all_letters_shows_the_rest(run):
    said, whole = explore("decide", run, charset="latin-1").stdout, explore("decide", run).stdout
    assert "“" in whole
    assert said == whole.replace("“", "?").replace("”", "?")


DAMAGED = ["", "{", "[1]", "{}", '{"answer": "yes", "feasible": true}', "[" * 9000, "\0\1\2"]


@pytest.mark.parametrize("content", DAMAGED, ids=range(len(DAMAGED)))
def test_a_damaged_decision_says_how_to_write_it_again(run, content):
    (run / "decision.json").write_text(content)
    for command in ("decide", "map"):
        assert "explorer judge" in refused(command, run)


@pytest.mark.parametrize(("file", "commands"), [("sweep.nc", ["judge"]), ("verdict.nc", ["decide", "map"])])
def test_damaged_data_are_named(run, file, commands):
    whole = (run / file).read_bytes()
    foreign = run / "foreign.nc"
    xr.Dataset({"a": ("x", np.arange(3.0))}).to_netcdf(foreign, engine="h5netcdf")
    for content in (b"", b"nonsense", whole[: len(whole) // 2], foreign.read_bytes()):
        (run / file).write_bytes(content)
        for command in commands:
            assert file in refused(command, run)
    (run / file).unlink()
    (run / file).mkdir()
    for command in commands:
        assert file in refused(command, run)


def test_a_second_run_in_one_folder_is_refused(swept, tmp_path):
    with store.owned(tmp_path / "run"):
        assert "another run is writing here" in refused("sweep", swept[0] / "study.toml", "--out", tmp_path / "run")
    assert not (tmp_path / "run" / "sweep.nc").exists()


DRIVER = """
import signal, sys, time
signal.signal(signal.SIGINT, signal.default_int_handler)  # a job in the background may inherit that it is ignored
from explorer.sweeping import running, tiles
tiles.LOOPS_IN_TILE = 40
compute = running.compute
running.compute = lambda *words: (time.sleep(0.25), compute(*words))[1]
from explorer.cli import main
main(sys.argv[1:])
"""


def test_an_interrupted_sweep_goes_on_to_the_same_numbers(tmp_path, monkeypatch):
    slow = changed(("interior = 96", "interior = 1"), ("points = 24", "points = 4"), ("points = 20", "points = 40"))
    (tmp_path / "study.toml").write_text(slow, encoding="utf-8")
    words = ["sweep", str(tmp_path / "study.toml"), "--out", str(tmp_path / "run"), "--jobs", "1"]
    process = subprocess.Popen([sys.executable, "-c", DRIVER, *words], stderr=subprocess.PIPE, text=True)
    while not list(tmp_path.glob("run/tiles-*/*.npz")):
        assert process.poll() is None
        time.sleep(0.01)
    process.send_signal(signal.SIGINT)
    _, said = process.communicate(timeout=60)
    assert process.returncode == 3
    assert said.strip() == "Interrupted. What was finished stays; the same command goes on from there."
    stored = list(tmp_path.glob("run/tiles-*/*.npz"))
    assert 0 < len(stored) < 80
    assert not list(tmp_path.glob("run/**/*.part"))
    monkeypatch.setattr(tiles, "LOOPS_IN_TILE", 40)
    monkeypatch.setattr(running, "compute", only_others(running.compute, {int(path.stem[5:]) for path in stored}))
    resumed = explorer.sweep(explorer.read_study(tmp_path / "study.toml"), out=tmp_path / "run", jobs=1)
    monkeypatch.undo()
    undisturbed = explorer.sweep(explorer.read_study(text=slow), jobs=1)
    for name in ("worst_value", "nominal_value", "worst_scenario", "share_met"):
        assert resumed[name].identical(undisturbed[name])
    assert not list(tmp_path.glob("run/tiles-*"))


def only_others(compute, finished):
    """compute, which fails when it is asked for a finished tile again."""

    def checked(study, scenarios, tile, alike):
        assert tile.number not in finished
        return compute(study, scenarios, tile, alike)

    return checked


LIGHT = """
import sys
from explorer.cli import main
main(["--help"], standalone_mode=False)
print(sorted({"numpy", "numba", "xarray", "matplotlib", "rich", "pydantic"} & sys.modules.keys()))
"""


def test_help_needs_nothing_heavy_and_kernels_no_writable_cache(tmp_path):
    done = subprocess.run([sys.executable, "-c", LIGHT], capture_output=True, text=True, check=True)
    assert "Exit status: 0 done" in done.stdout
    assert done.stdout.splitlines()[-1] == "[]"
    (tmp_path / "study.toml").write_text(CARRIAGE, encoding="utf-8")
    imports = "import explorer.kernels.hold, explorer.kernels.roots"
    for folder in ("/proc/none/cache", str(tmp_path / "study.toml")):
        done = subprocess.run([sys.executable, "-c", imports], env=os.environ | {"NUMBA_CACHE_DIR": folder},
                              capture_output=True, text=True, check=False)  # fmt: skip
        assert (done.returncode, done.stderr) == (0, "")
