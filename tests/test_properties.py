"""Symmetries of whole sweeps, which need no reference values: what must not matter, and what only one way.

Neighbours: small_study writes the studies; explorer.sweep and explorer.judge answer them.
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from small_study import swept

import explorer

KINDS = {  # measure and the power of time in its unit
    "spectral radius": 0, "damping ratio": 0, "natural frequency": -1, "settling time": 1, "time to peak": 1,
    "overshoot": 0,
}  # fmt: skip
BASIS = {"settling time", "time to peak", "overshoot"}


def requirement(kind, limit):
    sense = "at_least" if kind == "damping ratio" else "at_most"
    basis = 'basis = "poles"\n' if kind in BASIS else ""
    return f'[[requirements]]\nmeasure = "{kind}"\n{basis}{sense} = {limit}\n'


ALL_KINDS = "".join(requirement(kind, 1) for kind in KINDS)


def drive(stretch=1.0, **changes):
    """A drive with flexible parts, dead time, sensor and a lead; every time of it multiplied by `stretch`."""
    s = f"({stretch!r}*s)"
    parts = {
        "transfer": f"strength*({s}^2/9 + 0.1*{s} + 1)/({s}*({s}^2/4 + 0.2*{s} + 1)*(lag*s + 1))",
        "plant": f"dead_time = {0.13 * stretch!r}",
        "parameters": f'strength = {{ nominal = 0.5, tolerance = "20 %" }}\nlag = {{ from = {0.2 * stretch!r}, '
        f"to = {0.4 * stretch!r} }}",
        "compensator": f"gain*(1 + {0.3 * stretch!r}*(z - 1)/(period*(z - 0.3)))",
        "loop": f'computing_delay = {0.02 * stretch!r}\nsensor = "1/({0.01 * stretch!r}*s + 1)"\n'
        'clock_tolerance = "1 %"',
        "gain": "{ values = [0.2, 0.6, 1.5] }",
        "period": f"{{ values = {[0.05 * stretch, 0.11 * stretch, 0.4 * stretch]} }}",
        "scenarios": "{ interior = 4, corners = true, seed = 2, tolerance_scales = [0, 0.5, 1.0] }",
        "requirements": ALL_KINDS,
    }
    return swept(**parts | changes)


@pytest.fixture(scope="module")
def plain():
    return drive()


@pytest.mark.parametrize("stretch", [10.0, 1e-6, 1e9])
def test_stretching_every_time_changes_nothing_but_the_times(plain, stretch):
    slower = drive(stretch)
    for kind, power in KINDS.items():
        for name in ("worst_value", "nominal_value"):
            expected = plain[name].sel(measure=kind).values * stretch**power
            # Ten times a decimal is rounded anew; settling times magnify a rounding of z a hundredfold
            assert slower[name].sel(measure=kind).values == pytest.approx(expected, rel=1e-11), kind


def test_zero_gain_gives_the_open_loop_poles():
    # 1/((s^2 + s + 4)(2s + 1)) and the compensator's pole at z = 0.3; one delay more at z = 0
    dataset = swept(
        transfer="1/((s^2 + s + 4)*(2*s + 1))", compensator="gain/(z - 0.3)", plant="dead_time = 0.25",
        gain="{ values = [0.0] }", period="{ values = [0.25] }", requirements=ALL_KINDS,
    )  # fmt: skip
    value = dict(zip(KINDS, dataset["nominal_value"].values[:, 0, 0].tolist(), strict=True))
    turn = np.sqrt(15) / 2  # s = -1/2 ± j turn, |s| = 2
    assert value["spectral radius"] == pytest.approx(np.exp(-0.125), rel=1e-13)
    assert value["natural frequency"] == pytest.approx(0.5, rel=1e-12)
    assert value["damping ratio"] == pytest.approx(0.25, rel=1e-13)
    assert value["settling time"] == pytest.approx(2 * np.log(50), rel=1e-12)
    assert value["time to peak"] == pytest.approx(np.pi / turn, rel=1e-12)
    assert value["overshoot"] == pytest.approx(100 * np.exp(-np.pi / 2 / turn), rel=1e-12)


def test_what_stands_where_in_the_loop_does_not_matter(plain):
    s = "(1.0*s)"
    same = {
        "sensor in the plant": {
            "transfer": f"strength*({s}^2/9 + 0.1*{s} + 1)/({s}*({s}^2/4 + 0.2*{s} + 1)*(lag*s + 1)*(0.01*s + 1))",
            "loop": 'computing_delay = 0.02\nclock_tolerance = "1 %"',
        },
        "dead time in the processor": {
            "plant": "", "loop": 'computing_delay = 0.15\nsensor = "1/(0.01*s + 1)"\nclock_tolerance = "1 %"'
        },
        "gain in two places": {
            "compensator": "(gain/4)*(1 + 0.3*(z - 1)/(period*(z - 0.3)))",
            "transfer": f"4*strength*({s}^2/9 + 0.1*{s} + 1)/({s}*({s}^2/4 + 0.2*{s} + 1)*(lag*s + 1))",
        },
        "compensator multiplied out": {"compensator": "gain*((1 + 0.3/period)*z - 0.3 - 0.3/period)/(z - 0.3)"},
    }  # fmt: skip
    for name, changes in same.items():
        other = drive(**changes)
        assert other["worst_value"].values == pytest.approx(plain["worst_value"].values, rel=1e-10), name
        assert (other["scenario_parameter"].values == plain["scenario_parameter"].values).all()


def test_a_point_does_not_depend_on_the_rest_of_the_grid(plain):
    for column, period in enumerate(plain["period"].values):
        for line, gain in enumerate(plain["gain"].values):
            alone = drive(gain=f"{{ values = [{float(gain)!r}] }}", period=f"{{ values = [{float(period)!r}] }}")
            cell = plain.isel(period=[column], gain=[line])
            assert alone["worst_value"].values == pytest.approx(cell["worst_value"].values, rel=1e-11)
            assert (alone["share_met"].values == cell["share_met"].values).all()


def test_transfer_and_matrices_are_the_same_plant():
    parts = {
        "parameters": 'stiffness = { nominal = 9.0, tolerance = "20 %" }\ndamping = { from = 0.2, to = 0.6 }',
        "plant": "dead_time = 0.07", "loop": 'sensor = "1/(0.05*s + 1)"', "compensator": "gain/(z - 0.7)",
        "gain": "{ values = [0.3, 2.0] }", "requirements": ALL_KINDS,
        "scenarios": "{ interior = 3, corners = true, seed = 2, tolerance_scales = [0, 1.0] }",
    }  # fmt: skip
    by_transfer = swept(transfer="(s + 2)/(s^2 + damping*s + stiffness)", **parts)
    states = 'states = { A = [[0, 1], ["-stiffness", "-damping"]], B = [0, 1], C = [2, 1] }'
    by_states = swept(transfer="", **parts | {"plant": f"{parts['plant']}\n{states}"})
    # The matrices' poles come from a unitary change of states, exact to a few roundings of their norm
    assert by_states["worst_value"].values == pytest.approx(by_transfer["worst_value"].values, rel=1e-10)


def test_normalised_samples_are_seconds_over_the_period():
    parts = {"transfer": "(z + 0.8)/((z - 1)*(z - 0.6))", "period": "", "gain": "{ values = [0.05, 0.1] }"}
    in_seconds = swept(**parts, plant='sampled_at = "10 ms"', requirements=ALL_KINDS)
    in_samples = swept(**parts, plant='sampled_at = "1 sample"', requirements=ALL_KINDS)
    for kind, power in KINDS.items():
        expected = in_seconds["worst_value"].sel(measure=kind).values / 0.01**power
        assert in_samples["worst_value"].sel(measure=kind).values == pytest.approx(expected, rel=1e-13), kind
    assert in_samples["period"].attrs["units"] == "sample"


# What only one way changes ----------------------------------------------------------------------------------------


def test_a_wider_tolerance_never_enlarges_the_region(plain):
    verdict = explorer.judge(plain, {"damping ratio": 0.1, "settling time": 40, "overshoot": 80, "time to peak": 9})
    for narrow, wide in ((0, 0.5), (0.5, 1.0)):
        inside, outside = verdict.sel(tolerance_scale=narrow), verdict.sel(tolerance_scale=wide)
        assert (outside["least_slack"] <= inside["least_slack"]).all()
        assert (inside["feasible"] | ~outside["feasible"]).all()
        assert (outside["slack"] <= inside["slack"]).all()
    held = verdict["feasible"].sum(("period", "gain")).values
    assert held[0] > held[2] > 0
    nominal = verdict.sel(tolerance_scale=0.0)["slack"]
    assert (nominal == verdict["nominal_slack"]).all()


@pytest.fixture(scope="module")
def whole_region():
    """A sweep whose limits are met nearly everywhere."""
    loose = {"spectral radius": 2, "damping ratio": -2} | dict.fromkeys(list(KINDS)[2:], 1e6)
    requirements = "".join(requirement(kind, limit) for kind, limit in loose.items())
    return drive(gain="{ from = 0.05, to = 3, points = 12 }", requirements=requirements)


@settings(deadline=None, max_examples=30)
@given(kind=st.sampled_from(list(KINDS)), limit=st.floats(0.01, 100), factor=st.floats(1.0, 10.0))
def test_a_stiffer_limit_never_enlarges_the_region_and_a_looser_never_shrinks_it(whole_region, kind, limit, factor):
    stiff, loose = (limit * factor, limit) if kind == "damping ratio" else (limit, limit * factor)
    narrow, wide = (explorer.judge(whole_region, {kind: value})["feasible"].values for value in (stiff, loose))
    assert (wide | ~narrow).all()


def test_limits_decide_about_the_region(whole_region):
    # what the test above compares is neither empty nor everything
    for kind, limit in {"damping ratio": 0.1, "settling time": 60, "overshoot": 70}.items():
        held = explorer.judge(whole_region, {kind: limit})["feasible"].values
        assert 0 < held.sum() < explorer.judge(whole_region)["feasible"].values.sum()


def test_narrowing_one_tolerance_does_not_shrink_the_region_of_a_monotone_loop():
    # One lag and no delay: z = e - K k (1 - e) falls with k, so the ends of k are its worst values
    def feasible(tolerance):
        dataset = swept(
            transfer="k/(s + 1)", parameters=f'k = {{ nominal = 1.0, tolerance = "{tolerance} %" }}',
            gain="{ from = 0.1, to = 60, points = 60 }", period="{ from = 0.05, to = 1, points = 10 }",
            requirements=requirement("damping ratio", 0.3) + requirement("settling time", 2),
            scenarios="{ interior = 4, corners = true, seed = 2, tolerance_scales = [1.0] }",
        )  # fmt: skip
        return explorer.judge(dataset)["feasible"].values

    wide, narrow, none = feasible(40), feasible(20), feasible(0)
    assert (narrow | ~wide).all()
    assert (none | ~narrow).all()
    assert 0 < wide.sum() < narrow.sum() < none.sum()


def test_order_of_the_requirements_does_not_matter(plain):
    turned = drive(requirements="".join(requirement(kind, 1) for kind in reversed(KINDS)))
    assert turned["worst_value"].sel(measure=list(KINDS)).equals(plain["worst_value"])
    assert turned["share_met"].equals(plain["share_met"])
    first, second = explorer.judge(plain), explorer.judge(turned)
    assert first["least_slack"].equals(second["least_slack"])
    assert (first["measure"].values[first["binding"]] == second["measure"].values[second["binding"]]).all()
