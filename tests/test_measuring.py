"""All families of measures in one sweep: explorer.measures.measuring, by_frequency, by_response, and probe.

Neighbours: oracle.test_measures compares values with 40 digits; test_frequency and test_response_kernel the kernels.
"""

from __future__ import annotations

import numpy as np
import pytest
from small_study import same, study_of

import explorer
from explorer.errors import OptionError, StudyError
from explorer.measures.measuring import UNDECIDED, UNRESOLVED
from explorer.sweeping import tiles

MIXED = """
[[requirements]]
measure = "damping ratio"
at_least = 0.3
[[requirements]]
measure = "overshoot"
basis = "response"
at_most = "20 %"
[[requirements]]
measure = "phase margin"
at_least = "40 deg"
[[requirements]]
name = "reduction"
measure = "gain reduction margin"
at_most = 0.5
[[requirements]]
measure = "processor load"
at_most = "30 %"
[[requirements]]
measure = "phase lost to sampling"
at_most = "20 deg"
"""
SERVO = {
    "transfer": "strength/(s*(lag*s + 1))",
    "parameters": 'strength = { nominal = 1.0, tolerance = "20 %" }\nlag = { from = 0.08, to = 0.12 }',
    "loop": 'computing_delay = "0.5 period"\nexecution_time = "2 ms"',
    "gain": "{ values = [1.0, 4.0, 1000.0] }", "period": "{ values = [0.01, 0.03, 0.05] }",
    "scenarios": "{ interior = 4, corners = true, seed = 3, tolerance_scales = [0, 1.0] }",
    "requirements": MIXED,
}  # fmt: skip


@pytest.fixture(scope="module")
def mixed():
    return explorer.sweep(study_of(**SERVO), jobs=1)


def test_an_unstable_loop_is_at_the_bad_end_of_every_measure(mixed):
    values = mixed["worst_value"].sel(gain=1000.0, tolerance_scale=1.0)
    assert (values.sel(measure="overshoot") == np.inf).all()
    assert (values.sel(measure="phase margin") == -np.inf).all()
    assert (values.sel(measure="reduction") == np.inf).all()
    assert (values.sel(measure="phase lost to sampling") == np.inf).all()
    verdict = explorer.judge(mixed)
    assert not verdict["feasible"].sel(gain=1000.0).any()
    assert not np.isnan(verdict["slack"]).any()


def test_a_marginal_loop_counts_as_not_stable():
    # an integrator under gain 2/T has its pole at z = -1, in these numbers exactly
    study = study_of(
        transfer="1/s", gain="{ values = [4.0] }", period="{ values = [0.5] }", requirements=MIXED,
        loop='execution_time = "2 ms"',
    )  # fmt: skip
    found = explorer.sweep(study, jobs=1)["nominal_value"].isel(gain=0, period=0)
    assert found.sel(measure="overshoot") == np.inf
    assert found.sel(measure="phase margin") == -np.inf


def test_hardware_measures_by_hand(mixed):
    load = mixed["worst_value"].sel(measure="processor load", tolerance_scale=1.0, gain=1.0)
    assert load.values == pytest.approx(100 * 0.002 / mixed["period"].values, rel=1e-15)
    at = {"gain": 4.0, "period": 0.03}
    found = explorer.probe(study_of(**SERVO), at)
    lost = found["value"].sel(measure="phase lost to sampling").values
    crossover = found["other_value"].sel(other_measure="crossover frequency").values
    assert lost == pytest.approx(np.degrees(crossover * 0.03), rel=1e-14)  # half a period, and half of computing
    rise = found["other_value"].sel(other_measure="rise time by response").values
    samples = found["other_value"].sel(other_measure="samples per rise time by response").values
    assert samples == pytest.approx(rise / 0.03, rel=1e-14)


def test_probe_and_sweep_agree(mixed):
    study = study_of(**SERVO)
    for gain in (1.0, 4.0):
        found = explorer.probe(study, {"gain": gain, "period": "30 ms"})
        assert found["value"].isel(scenario=0).values == pytest.approx(
            mixed["nominal_value"].sel(gain=gain, period=0.03).values, rel=1e-12
        )
        worst = mixed["worst_value"].sel(gain=gain, period=0.03, tolerance_scale=1.0)
        for name, end in (("overshoot", np.max), ("phase margin", np.min), ("damping ratio", np.min)):
            value = end(found["value"].sel(measure=name).values)
            assert value == pytest.approx(float(worst.sel(measure=name)), rel=1e-12)


def test_batches_and_workers_give_the_same_bits(mixed, monkeypatch):
    study = study_of(**SERVO)
    monkeypatch.setattr(tiles, "FEWEST_LOOPS", 1)
    assert len(tiles.tiles_of(study, 9)) > 1
    assert same(explorer.sweep(study, jobs=2), explorer.sweep(study, jobs=1))


def test_an_undecided_response_is_unknown_counted_and_not_feasible(monkeypatch):
    from explorer.kernels import response
    from explorer.measures import by_response

    whole = by_response.simulate

    def undecided(*words):
        found = whole(*words)
        status = found.status.copy()
        status[0, 0] = response.UNDECIDED
        rows = found.rows.copy()
        rows[:, 0, 0] = np.nan
        return found._replace(rows=rows, status=status)

    monkeypatch.setattr(by_response, "simulate", undecided)
    dataset = explorer.sweep(study_of(**SERVO | {"period": "{ values = [0.03] }"}), jobs=1)
    assert "unsolved 1 of 27 (response not decided within bounded work)" in dataset.attrs["status_tally"]
    assert np.isnan(dataset["nominal_value"].sel(measure="overshoot").values[0, 0])
    assert not explorer.judge(dataset)["feasible"].isel(period=0, gain=0).any()
    assert UNDECIDED != UNRESOLVED


@pytest.mark.parametrize(
    ("at", "phrase"),
    [
        ({"gain": 1.0}, "period is missing; it is swept from 0.01 to 0.05 s"),
        ({"gain": 1.0, "period": "3 V"}, "period: "),
        ({"gain": 1.0, "period": -1.0}, "more than 0"),
        ({"gain": 1.0, "period": 0.1, "lead": 2}, "no axis 'lead'; allowed: gain, period"),
    ],
)
def test_a_wrong_place_is_refused(at, phrase):
    with pytest.raises(OptionError, match=phrase):
        explorer.probe(study_of(**SERVO), at)


def test_probe_answers_for_every_scenario():
    found = explorer.probe(study_of(**SERVO), {"gain": 4.0, "period": 0.03})
    assert dict(found.sizes)["scenario"] == 9
    assert {"value", "pole", "scenario_parameter", "output", "effort"} <= set(found.variables)
    assert np.abs(found["pole"].values[:, 0]) == pytest.approx(
        found["other_value"].sel(other_measure="spectral radius").values, rel=1e-12
    )
    peak = found["output"].isel(scenario=0).max() / 1.0  # an integrator in the plant: it ends at 1
    overshoot = found["value"].sel(measure="overshoot").values[0]
    assert 100 * (float(peak) - 1) == pytest.approx(overshoot, abs=0.05)  # the curve is drawn at points


@pytest.mark.parametrize(
    ("requirement", "phrase"),
    [
        ('measure = "processor load"\nat_most = "30 %"', "processor load without execution_time"),
        ('measure = "rise time"\nat_most = "1 s"', r'rise time needs basis = "response"'),
        ('measure = "steady-state error"\nbasis = "response"\ninput = "sine"\nat_most = 1', '"step" or "ramp"'),
        ('measure = "stability"\ninput = "step"', "only with a steady-state error"),
    ],
)
def test_slips_in_requirements_are_said(requirement, phrase):
    with pytest.raises(StudyError, match=phrase):
        study_of(requirements=f"[[requirements]]\n{requirement}\n")
