"""Reading: every rule of a study file, every fault with its line, and hostile files.

Neighbours: test_quantities and test_expressions have the grammar of values, test_locate the lines.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from carriage import CARRIAGE, COMPENSATOR, IN_S, SENSOR, TRANSFER, changed
from hypothesis import given, settings
from hypothesis import strategies as st
from small_study import study_of

import explorer
from explorer.errors import StudyError


def read(*changes):
    return explorer.read_study(text=changed(*changes))


def parameter(definition):
    """The parameter `lag` under another definition."""
    study = read(('{ from = "28 ms", to = "46 ms" }', definition))
    return next(one for one in study.parameters if one.name == "lag")


PARAMETERS = [
    ('{ nominal = "37 ms" }', 0.037, 0.037, 0.037), ('"37 ms"', 0.037, 0.037, 0.037), ("0.037", 0.037, 0.037, 0.037),
    ('{ nominal = "40 ms", tolerance = "10 %" }', 0.04, 0.036, 0.044),
    ('{ nominal = "40 ms", tolerance = "3000 us" }', 0.04, 0.037, 0.043),
    ("{ nominal = 0.04, tolerance = 0.003 }", 0.04, 0.037, 0.043),
    ('{ from = "30 ms", to = "40 ms" }', 0.035, 0.03, 0.04),
    ('{ from = "30 ms", to = "40 ms", nominal = "31 ms" }', 0.031, 0.03, 0.04),
    ('{ any_of = ["30 ms", "40 ms"] }', 0.03, 0.03, 0.03),
    ('{ any_of = ["30 ms", "40 ms"], nominal = "40 ms" }', 0.04, 0.04, 0.04),
]  # fmt: skip


@pytest.mark.parametrize(("definition", "nominal", "low", "high"), PARAMETERS)
def test_every_kind_of_parameter(definition, nominal, low, high):
    found = parameter(definition)
    # one rounding of nominal ± share
    assert (found.nominal, found.low, found.high) == pytest.approx((nominal, low, high), rel=1e-15)
    assert found.unit == ("" if definition in ("0.037", "{ nominal = 0.04, tolerance = 0.003 }") else "s")
    if "any_of" in definition:
        assert found.variants == (nominal, {0.03: 0.04, 0.04: 0.03}[nominal])
        assert not found.varies


def test_the_rest_of_the_study_is_what_it_says():
    study = read()
    assert study.title == "Camera carriage, position loop"
    assert [one.name for one in study.parameters] == ["speed_gain", "lag", "transport", "payload"]
    assert (study.loop.computing_delay.seconds, study.loop.computing_delay.periods) == (0.0004, 0)
    assert (study.loop.clock_tolerance, study.loop.execution_time) == (0.005, 0.00011)
    assert (study.gain.values[0], study.gain.values[-1], len(study.gain.values)) == (1.0, 400.0, 24)
    np.testing.assert_allclose(np.diff(np.log(study.gain.values)), math.log(400) / 23, rtol=1e-12)  # sums of roundings
    assert (study.gain.unit, study.period.unit, study.design[0].unit) == ("V/m", "s", "s")
    assert study.design[0].values.tolist() == [0.02, 0.04]
    plan = study.scenarios
    assert (plan.interior, plan.corners, plan.seed, plan.tolerance_scales) == (96, True, 7, (0, 0.5, 1, 1.5))
    assert [one.name for one in study.requirements] == ["well damped", "time to peak", "stability"]
    assert [one.limit for one in study.requirements[:2]] == [0.6, 0.12]
    assert "payload stands in no expression, so it changes nothing" in study.assumptions


def test_axes_by_values_or_evenly_and_scenarios_by_default():
    study = read(('points = 24, spacing = "log"', 'points = 5, spacing = "linear"'), ("points = 20", "points = 2"),
                 ("scenarios =", "# "))  # fmt: skip
    assert study.gain.values.tolist() == [1.0, 100.75, 200.5, 300.25, 400.0]
    assert study.period.values.tolist() == [0.0005, 0.04]
    assert study.scenarios.tolerance_scales == (0.0, 1.0)
    lone = read(('from = "1 V/m", to = "400 V/m", points = 24, spacing = "log"', 'values = ["2 V/mm"]'))
    assert lone.gain.values.tolist() == [2000.0]


DEAD_TIMES = [('"transport"', "transport"), ('"1.2 ms"', 0.0012), ("0.0012", 0.0012), ("0", None), ('"0 s"', None)]


@pytest.mark.parametrize(("written", "understood"), DEAD_TIMES)
def test_dead_time_by_name_or_quantity(written, understood):
    node = read(('dead_time = "transport"', f"dead_time = {written}")).plant.dead_time
    assert understood == (None if node is None else getattr(node, "name", getattr(node, "value", None)))


DELAYS = [('"0.4 ms"', 0.0004, 0), ("0.001", 0.001, 0), ('"0.5 period"', 0, 0.5), ('"1 sample"', 0, 1), ("0", 0, 0)]


@pytest.mark.parametrize(("written", "seconds", "periods"), DELAYS)
def test_computing_delay_as_time_or_share_of_the_period(written, seconds, periods):
    delay = read(('"0.4 ms"', written)).loop.computing_delay
    assert (delay.seconds, delay.periods) == (seconds, periods)


CONVERSIONS = [
    ("backward difference", "backward difference", 0), ("bilinear", "bilinear", 0),
    ("matched poles and zeros", "matched poles and zeros", 0), ("bilinear, exact at 12 Hz", "bilinear", 24 * math.pi),
    ("bilinear, exact at 75 rad/s", "bilinear", 75),
]  # fmt: skip


@pytest.mark.parametrize(("written", "rule", "exact_at"), CONVERSIONS)
def test_all_conversions(written, rule, exact_at):
    loop = read((COMPENSATOR, f'{IN_S}\nconversion = "{written}"')).loop
    assert loop.conversion == rule
    assert loop.exact_at == pytest.approx(exact_at, rel=1e-15)  # one rounding of 2π


LIMITS = [
    ("at_most = 0.12", 0.12, False), ('at_most = "15 samples"', 15, True), ('at_most = "1.5 samples"', 1.5, True),
    ('at_least = "20 ms"', 0.02, False), ('at_most = "0 s"\nscale = "10 ms"', 0, False),
]  # fmt: skip


@pytest.mark.parametrize(("written", "limit", "in_samples"), LIMITS)
def test_limits_and_scales(written, limit, in_samples):
    one = read(('at_most = "120 ms"', written)).requirements[1]
    assert (one.limit, one.in_samples) == (limit, in_samples)
    assert one.limits(np.array([0.01])) == pytest.approx(limit * (0.01 if in_samples else 1), rel=1e-15)
    assert one.scales(np.array([0.01])) == (0.01 if "scale" in written else one.limits(np.array([0.01])))


def test_bands_and_frequencies_in_hertz():
    settled = 'measure = "settling time"\nbasis = "poles"\nat_most = 1'
    study = read(('measure = "stability"', settled), ('measure = "damping ratio"\nat_least = 0.6',
                 'measure = "natural frequency"\nat_least = "2 Hz"'))  # fmt: skip
    assert study.requirements[2].band == 0.02
    assert study.requirements[0].limit == pytest.approx(4 * math.pi, rel=1e-15)  # one rounding of 2π
    assert read(('measure = "stability"', settled + '\nband = "5 %"')).requirements[2].band == 0.05


IN_Z = '''
title = "in z"
[plant]
transfer = "k*(z + 0.8)/((z - 1)*(z - 0.6))"
sampled_at = "10 ms"
dead_time = "1 sample"
[plant.parameters]
k = { nominal = 0.1, tolerance = "10 %" }
d = { any_of = ["20 ms", "30 ms"] }
[loop]
compensator = "gain"
[sweep]
gain = { from = 0.1, to = 10, points = 5 }
[[requirements]]
measure = "settling time"
basis = "poles"
at_most = "15 samples"
'''


def test_a_plant_in_z_fixes_the_period():
    study = explorer.read_study(text=IN_Z)
    assert (study.plant.variable, study.period.values.tolist(), study.time_unit) == ("z", [0.01], "s")
    assert (study.plant.dead_time.value, study.requirements[0].in_samples) == (0.01, True)
    normalised = explorer.read_study(text=changed(('"10 ms"', '"1 sample"'), text=IN_Z))
    assert (normalised.period.values.tolist(), normalised.time_unit) == ([1.0], "sample")
    assert (normalised.plant.dead_time.value, normalised.requirements[0].limit) == (1.0, 15)
    assert explorer.read_study(text=changed(('"1 sample"', '"d"'), text=IN_Z)).plant.dead_time.name == "d"
    static = changed(('"k*(z + 0.8)/((z - 1)*(z - 0.6))"', '"k"'), text=IN_Z)
    assert explorer.read_study(text=static).plant.variable == "z"


MATRICES = [
    "B = [[0], [1]], C = [[1, 0]]", 'B = [0, "1"], C = [1, 0], D = "0*lag"', "B = [0, 1], C = [1, 0], D = [[0]]",
]  # fmt: skip


@pytest.mark.parametrize("rest", MATRICES)
def test_a_plant_by_matrices(rest):
    states = f'states = {{ A = [[0, 1], [0, "-1/lag"]], {rest} }}'
    study = read((f"transfer  = {TRANSFER}", states))
    assert study.plant.transfer is None
    assert {key: (len(rows), len(rows[0])) for key, rows in study.plant.states.items() if key != "D"} == {
        "A": (2, 2), "B": (2, 1), "C": (1, 2)
    }  # fmt: skip


def test_units_around_the_loop():
    without_bare_numbers = [(f"sensor          = {SENSOR}", "")]
    assert read(*without_bare_numbers).assumptions == ("payload stands in no expression, so it changes nothing",)
    wrong_gain = ('from = "1 V/m", to = "400 V/m"', 'from = "1 V", to = "400 V"')
    with pytest.raises(StudyError, match=r"the gain around the loop is in \[m\]: plant \[m/V\], compensator \[V\]"):
        read(*without_bare_numbers, wrong_gain)
    notes = "\n".join(read(wrong_gain).assumptions)
    assert "loop.sensor: column 17 adds [1/s] and [1]" in notes
    assert "the units stated around the loop leave [m]" in notes
    bare = read(*without_bare_numbers, ('from = "1 V/m", to = "400 V/m"', "from = 1, to = 400"))
    assert "bare numbers are taken to carry the rest" in "\n".join(bare.assumptions)


def test_marks_and_line_ends_of_other_editors_are_read(tmp_path):
    plain, file = read(), tmp_path / "study.toml"
    for raw in (b"\xef\xbb\xbf" + CARRIAGE.encode(), CARRIAGE.replace("\n", "\r\n").encode()):
        file.write_bytes(raw)
        study = explorer.read_study(file)
        assert (study.title, study.gain.values.tolist()) == (plain.title, plain.gain.values.tolist())


@settings(deadline=None, max_examples=60)
@given(st.integers(0, len(CARRIAGE)), st.integers(0, 40), st.one_of(st.text(max_size=8), st.sampled_from(
    ["[", "]]", "{", '"', "=", "0x", "1e999", "nan", "\n[plant]\n", "s^", "/0", "%", "-", ".", "1 V", "gain", "true"])))
def test_a_damaged_study_is_read_or_refused_and_nothing_else(place, length, put):
    try:
        explorer.read_study(text=CARRIAGE[:place] + put + CARRIAGE[place + length :])
    except StudyError as error:
        assert error.faults


def test_a_clock_may_not_run_backwards_at_any_tolerance_scale():
    with pytest.raises(StudyError, match=r"the clock's tolerance times 2.5; allowed: tolerance scales at which every"):
        study_of(
            loop='clock_tolerance = "40 %"',
            scenarios="{ interior = 0, corners = true, seed = 1, tolerance_scales = [1.0, 2.5] }",
        )
