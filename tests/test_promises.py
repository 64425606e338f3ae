"""Poles against response: explorer.verdict.promises and its sentences in the decision."""

from __future__ import annotations

import numpy as np
import pytest
from small_study import study_of

import explorer
from explorer.verdict.promises import in_words

# A zero at -1.2/s makes the response overshoot more than its pair of poles alone would
ZERO = {
    "transfer": "(s/1.2 + 1)/(s*(lag*s + 1))", "parameters": "lag = { from = 0.9, to = 1.1 }",
    "gain": "{ values = [1.0, 2.0] }", "period": "{ values = [0.05, 0.1] }",
    "scenarios": "{ interior = 0, corners = true, seed = 1, tolerance_scales = [1.0, 1.5] }",
}  # fmt: skip
OVERSHOOT = '[[requirements]]\nmeasure = "overshoot"\nbasis = "poles"\nat_most = "60 %"\n'
SETTLING = '[[requirements]]\nmeasure = "settling time"\nbasis = "poles"\nband = "5 %"\nat_most = 9\n'


def decided(requirements):
    study = study_of(**ZERO | {"requirements": requirements})
    sweep = explorer.sweep(study, jobs=1)
    return study, explorer.decide(sweep, explorer.judge(sweep))


def test_the_decision_says_what_the_response_makes_of_it():
    study, decision = decided(OVERSHOOT + SETTLING)
    told = {(one["requirement"], one["place"]): one for one in decision["poles_against_response"]}
    assert len(told) == 4
    best = decision["recommended"]
    found = explorer.probe(study, {"gain": best["gain"], "period": best["period"]})
    inside = found["scenario_scale"].values <= 1.0
    for name, other in (("overshoot", "overshoot by response"), ("settling time", "settling time by response")):
        one = told[name, "recommended design"]
        assert one["by_poles"] == pytest.approx(found["value"].sel(measure=name).values[inside].max(), rel=1e-12)
        by_response = found["other_value"].sel(other_measure=other).values[inside].max()  # in the study's band too
        assert one["by_response"] == pytest.approx(by_response, rel=1e-12)
    assert told["overshoot", "slowest period"]["place"] == "slowest period"
    assert "At the recommended design the poles promise" in decision["answer"]


def test_nothing_is_said_where_nothing_is_read_from_poles():
    _, decision = decided('[[requirements]]\nmeasure = "damping ratio"\nat_least = 0.1\n')
    assert decision["poles_against_response"] == []
    assert "promise" not in decision["answer"]


def test_sentences_for_what_is_unknown_and_what_never_ends():
    place = {"place": "nearest point", "requirement": "a", "measure": "overshoot", "by_poles": 4.6, "unit": "%"}
    assert in_words([place | {"by_response": np.nan}]) == [
        "At the nearest point the poles promise 4.6 % overshoot, the worst plant's response is unknown."
    ]
    assert in_words([place | {"by_response": np.inf}])[0].endswith("response never gets there.")
    assert in_words([place | {"by_response": 11.0}])[0].endswith("response shows 11 %.")
