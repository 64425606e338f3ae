"""Every section of the benchmarks runs, at a size too small to time anything, and says what was not right."""

import re

import numpy as np
import pytest

from explorer import read_study
from explorer.loop.sampling import delays_of, realise
from explorer.sweeping.scenarios import scenarios_of

from . import __main__ as command
from . import estimates, growth, hold, memory, roots, sweep
from .children import alone
from .study import Grid
from .table import Table

TINY = Grid(gains=6, periods=5, interior=2)


def column(table: Table, heading: str) -> list[float]:
    place = list(table.headings).index(heading)
    return [float(row[place].replace(",", "")) for row in table.rows]


def test_roots():
    table = roots.table(degrees=(2,), families=1)
    assert min(column(table, "kernel ns") + column(table, "gain")) > 0


@pytest.mark.parametrize("order", hold.ORDERS)
def test_hold_kernel_expm_and_cont2discrete_agree(order):
    job = hold.Job(order, scenarios=4, periods=5)
    answers = {"kernel": job.kernel(), "expm": job.exponentials(), "one by one": job.one_by_one()}
    assert hold.largest_difference(answers) < hold.AGREEMENT
    assert job.whole.min() < 2 < job.whole.max()
    answers["kernel"][1][-1, -1, 1, 0] *= 1 + 1e-6  # one coefficient in z of one plant
    assert hold.largest_difference(answers) > hold.AGREEMENT


def test_hold():
    assert column(hold.table(orders=(1, 2), scenarios=3, periods=2), "order") == [1, 2]


def test_sweep():
    table = sweep.table(full=TINY, part=TINY, rounds=1)
    plants = 3 * (8 + TINY.interior) + 1
    assert column(table, "loops timed")[2:] == 2 * [plants * TINY.gains * TINY.periods]


def test_growth_doubles_one_axis_at_a_time():
    base = Grid(gains=6, periods=4, interior=2)
    table = growth.table(base, degrees=(2, 3), rounds=1)
    sizes = np.array(column(table, "loops")).reshape(-1, 1)[:9].reshape(3, 3)
    # gains, periods, and scenarios, of which the nominal one is not doubled
    assert np.allclose(sizes / sizes[:, :1], [1, 2, 4], rtol=0.1)
    assert [row[0] for row in table.rows[-2:]] == ["degree", "degree"]


@pytest.mark.parametrize("degree", growth.DEGREES)
def test_growth_by_degree_is_of_that_degree(degree):
    study = read_study(text=growth.steps_from(TINY, [degree])[-1].text)
    values = scenarios_of(study).by_name()
    assert realise(study, values).order + delays_of(study, values, study.period.values)[1].max() == degree


def test_memory():
    table = memory.table((TINY,), rounds=1)
    assert column(table, "gains") == [TINY.gains]
    assert 50 < column(table, "largest peak [MiB]")[0] < 2000  # neither nothing nor in another unit


def test_estimates():
    table = estimates.table(studies=(), large=TINY, rounds=1)
    told, taken, ratio = (column(table, heading)[0] for heading in ("told s", "sweep s", "ratio"))
    assert ratio == pytest.approx(told / taken, abs=0.02)  # of rounded numbers


def test_a_child_does_not_inherit_the_peak_of_this_process():
    filled = np.ones(40_000_000)  # 320 MB
    assert alone(["-c", "pass"]).peak < filled.nbytes / 4


def test_a_child_that_fails_is_an_error():
    with pytest.raises(RuntimeError, match="no such thing"):
        alone(["-c", "import sys; sys.exit('no such thing')"])


def test_sections_are_named_and_there(monkeypatch, capsys):
    monkeypatch.setattr(command, "SECTIONS", (*command.SECTIONS, "nothing"))
    assert command.main(["rots"]) == 2
    assert re.search("unknown section rots; sections: roots, hold", capsys.readouterr().err)
    assert command.main(["nothing"]) == 2
    assert "tests/benchmarks/nothing.py is not there" in capsys.readouterr().err
