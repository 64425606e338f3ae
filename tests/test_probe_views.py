"""One probed design in words and pictures: what is judged, said and drawn, read back from an invented probe.

The invented loop has one pair of poles: every measure of it is a formula of its damping and natural frequency.
"""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pytest
import xarray as xr
from click.testing import CliRunner
from invented_run import by_gid, texts
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.path import Path as Outline
from scipy.optimize import brentq
from small_study import ONE_PLANT, text_of

from explorer.cli import main
from explorer.errors import OptionError, RunError
from explorer.views.loop_gain import loop_gain, margin_marks, unwrapped
from explorer.views.probe_folder import probe_folder, write_pictures
from explorer.views.probe_text import document, facts, probe_text
from explorer.views.probed import judged, value_words
from explorer.views.responses import corridor, final_value, responses
from explorer.views.tags import tags_look
from explorer.views.z_plane import z_plane

LIMITS = (
    ("damping ratio", "", "at_least", 0.5), ("natural frequency", "", "at_least", 5.0),
    ("settling time", "poles", "at_most", 1.0), ("overshoot", "poles", "at_most", 20.0),
    ("settling time", "response", "at_most", 0.9), ("overshoot", "response", "at_most", 25.0),
    ("time to peak", "response", "at_most", 0.6), ("peak effort", "response", "at_most", 150.0),
    ("gain margin", "", "at_least", 2.0), ("phase margin", "", "at_least", 30.0), ("stability", "", "", 1.0),
)  # fmt: skip
DAMPING = np.array([0.7, 0.6, 0.55, 0.45, 0.2])  # of the scenarios; the fourth misses, the last is beyond
FREQUENCY = np.array([10.0, 12.0, 8.0, 9.0, 9.0])  # rad/s
SCALE = np.array([0.0, 1.0, 1.0, 1.0, 1.5])
DELAY = 0.01  # s, in the loop gain


def study_text() -> str:
    rows = []
    for name, basis, sense, limit in LIMITS:
        rows += ["[[requirements]]", f'name = "{name} {basis}"'.replace(' "', '"'), f'measure = "{name}"']
        rows += [f'basis = "{basis}"'] if basis else []
        rows += [f"{sense} = {limit}"] if sense else []
    return text_of(requirements="\n".join(rows))


def margins(damping: float, frequency: float) -> tuple[float, float]:
    """Gain and phase margin of the invented loop, by root finding."""

    def phase(w: float) -> float:
        return float(-np.pi / 2 - np.arctan(w / (2 * damping * frequency)) - DELAY * w)

    def size(w: float) -> float:
        return float(frequency**2 / (w * np.hypot(w, 2 * damping * frequency)))

    turn, cross = brentq(lambda w: phase(w) + np.pi, 1.0, 1e3), brentq(lambda w: size(w) - 1, 0.1, 1e3)
    return 1 / size(turn), float(np.degrees(phase(cross) + np.pi))


def invented(damping: Any = DAMPING, frequency: Any = FREQUENCY, period: float = 0.01) -> xr.Dataset:
    """A Dataset as `probe` returns it. Unstable where the damping is negative: measures at their bad ends."""
    s = -damping * frequency + 1j * frequency * np.sqrt(1 - damping**2)
    time = np.linspace(0.0, 2.0, 801) * period / 0.01
    swing = np.exp(np.multiply.outer(s, time))
    output = 1 - swing.real - (damping / np.sqrt(1 - damping**2))[:, None] * swing.imag
    held = np.floor(time / period + 1e-9) * period
    effort = frequency[:, None] ** 2 * np.exp(np.multiply.outer(s, held)).real
    over = 100 * np.exp(-np.pi * damping / np.sqrt(1 - damping**2))
    settle, stable = -np.log(0.02) / -s.real, damping > 0
    both = [margins(*one) if one[0] > 0 else (-np.inf, -np.inf) for one in zip(damping, frequency, strict=True)]
    gain, phase = np.array(both).T
    values = np.array([
        damping, frequency, np.where(stable, settle, np.inf), over, np.where(stable, 1.1 * settle, np.inf),
        np.where(stable, 1.2 * over, np.inf), np.where(stable, np.pi / s.imag, np.inf),
        np.where(stable, frequency**2, np.inf), gain, phase, np.exp(s.real * period),
    ])  # fmt: skip
    w = np.geomspace(0.3, 314.0, 500)
    loop = frequency[:, None] ** 2 / (1j * w * (1j * w + 2 * (damping * frequency)[:, None])) * np.exp(-1j * w * DELAY)
    pair = np.column_stack([s, s.conj()])
    arrays = {
        "value": (("measure", "scenario"), values),
        "other_value": (("other_measure", "scenario"), np.array([np.zeros(len(s)), 1.8 / frequency])),
        "pole": (("scenario", "pole"), np.exp(pair * period)),
        "pole_s": (("scenario", "pole"), pair, {"units": "rad/s"}),
        "true_period": ("scenario", np.full(len(s), period)),
        "scenario_parameter": (("scenario", "parameter"), np.column_stack([damping, frequency / 1e3, damping**0])),
        "scenario_scale": ("scenario", SCALE[: len(s)]),
        "output": (("scenario", "time"), output), "effort": (("scenario", "time"), effort),
        "loop_gain": (("scenario", "frequency"), loop),
    }  # fmt: skip
    coordinates = {
        "other_measure": ["steady-state error by response, step", "rise time by response"],
        "other_unit": ("other_measure", ["", "s"]), "other_better": ("other_measure", ["less", "less"]),
        "parameter": ["slip", "lag", "mass"], "parameter_unit": ("parameter", ["1", "s", "kg"]),
        "parameter_shown_unit": ("parameter", ["1", "s", "kg"]),
        "time": ("time", time, {"units": "s"}), "frequency": ("frequency", w, {"units": "rad/s"}),
    }  # fmt: skip
    attrs = {"title": "small", "study": study_text(), "study_sha256": 64 * "a", "explorer_version": "0.1.0",
             "at_gain": 0.002, "at_period": period, "shown_unit_gain": "V", "shown_unit_period": "s"}  # fmt: skip
    return xr.Dataset(arrays, coordinates, attrs)


def unknown_in(dataset: xr.Dataset, measure: int, *scenarios: int) -> xr.Dataset:
    values = dataset["value"].values.copy()
    values[measure, list(scenarios)] = np.nan
    return dataset.assign(value=(("measure", "scenario"), values))


def line_of(axes: Any, gid: str) -> Any:
    (line,) = by_gid(axes, gid)
    return np.column_stack([np.asarray(line.get_xdata(), float), np.asarray(line.get_ydata(), float)])


def test_only_scenarios_within_the_tolerances_decide() -> None:
    probed = judged(invented())
    damped = probed.requirements[0]
    assert damped.worst == 3
    assert damped.worst_slack == pytest.approx(-0.1)
    assert list(np.flatnonzero(probed.missed_by(damped))) == [3]
    assert not probed.met
    assert judged(invented(np.append(np.full(4, 0.7), 0.2))).met
    data = facts(probed)
    assert data["scenarios"] == {"count": 5, "within_tolerances": 4}
    assert "damping ratio" in data["beyond"][0]["missed"]
    assert data["beyond"][0]["tolerance_scale"] == 1.5


def test_unknown_is_counted_and_never_met() -> None:
    good = invented(np.full(4, 0.7), np.full(4, 10.0))
    assert judged(good).met
    probed = judged(unknown_in(good, 4, 2))
    assert not probed.met
    assert probed.requirements[4].worst == 0  # equal in all that are known: the first stands for them
    assert "Unknown: settling time response in 1 of 4." in probe_text(probed)
    assert facts(probed)["requirements"][4]["unknown_in"] == 1
    nothing = judged(unknown_in(good, 4, 0, 1, 2, 3))
    assert nothing.requirements[4].worst is None
    assert "settling time response in 4 of 4" in probe_text(nothing)


def test_a_scenario_that_misses_by_rounding_is_not_hidden_by_one_that_meets() -> None:
    data = invented(np.full(4, 0.7), np.full(4, 10.0))
    values = data["value"].values.copy()
    values[0] = [0.5, np.nextafter(0.5, 0), 0.5, 0.5]
    probed = judged(data.assign(value=(("measure", "scenario"), values)))
    assert probed.requirements[0].worst == 1
    assert "0 % missed" in probe_text(probed)


@pytest.mark.parametrize(
    ("value", "unit", "kind", "better", "words"),
    [
        (0.0125, "s", "rise time by response", "less", "12.5 ms"),
        (np.inf, "s", "settling time by poles", "less", "never"),
        (np.inf, "s", "time to peak by poles", "less", "no peak"),
        (np.inf, "%", "overshoot by response", "less", "unbounded"),
        (np.inf, "1", "gain margin", "more", "unlimited"),
        (-np.inf, "1", "gain margin", "more", "none"),
        (2.0, "1", "gain margin", "more", "2 (6.02 dB)"),
        (np.nan, "s", "rise time by response", "less", "unknown"),
    ],
)
def test_values_are_words_where_numbers_say_nothing(value, unit, kind, better, words) -> None:
    assert value_words(value, unit, kind, better) == words


def test_text_says_the_point_the_worst_and_where_poles_and_response_part() -> None:
    text = probe_text(judged(invented()))
    counted = "At gain 2 mV, period 10 ms: 4 scenarios within the tolerances as stated, 1 beyond them (to × 1.5)"
    assert counted in " ".join(text.split())
    (row,) = (line for line in text.splitlines() if line.startswith("damping ratio"))
    assert row.split() == ["damping", "ratio", "≥", "0.5", "0.7", "0.45", "-10", "%", "missed", "3"]
    assert "   3  slip = 0.45, lag = 9 ms\n" in text  # the mass is the same in all
    promised = 100 * np.exp(-np.pi * 0.45 / np.sqrt(1 - 0.45**2))
    said = f"the poles promise {promised:.4g} % at worst, the worst plant's response shows {1.2 * promised:.4g} %"
    assert said in " ".join(text.split())
    paragraphs = [line for line in text.splitlines() if "  " not in line.strip()]
    assert max(map(len, paragraphs)) <= 96


def test_document_is_plain_and_in_si() -> None:
    data = facts(judged(invented(np.array([0.7, 0.6, -0.1]), np.array([10.0, 12.0, 9.0]))))
    assert data["at"] == {"gain": 0.002, "period": 0.01}
    settling = data["requirements"][2]
    assert settling["worst"] == np.inf
    assert settling["nominal"] == pytest.approx(-np.log(0.02) / 7.0)
    pole = data["nominal_poles"][0]
    assert (pole["natural_frequency"], pole["damping_ratio"]) == pytest.approx((10.0, 0.7))
    assert data["slowest_pole"]["largest"] == pytest.approx(np.exp(0.1 * 9 * 0.01))
    named = {one["scenario"]: one for one in data["worst_scenarios"]}
    assert named[2]["parameters"] == pytest.approx({"slip": -0.1, "lag": 0.009, "mass": 1.0})
    (over,) = (one for one in data["poles_against_response"] if one["measure"] == "overshoot")
    assert over["response"]["nominal"] == pytest.approx(1.2 * over["poles"]["nominal"])


def test_edges_run_where_the_measure_is_at_its_limit() -> None:
    axes = z_plane(invented()).axes[0]

    def s_on(number: int) -> Any:
        x, y = line_of(axes, f"edge {number}").T
        seen = np.isfinite(x) & (y > 1e-6)
        return np.log(x[seen] + 1j * y[seen]) / 0.01

    np.testing.assert_allclose(-s_on(1).real / abs(s_on(1)), 0.5, rtol=1e-6)
    np.testing.assert_allclose(abs(s_on(2)), 5.0, rtol=1e-6)
    np.testing.assert_allclose(s_on(3).real, np.log(0.02), rtol=1e-6)  # in 1 s
    pair = s_on(4)
    np.testing.assert_allclose(100 * np.exp(np.pi * pair.real / pair.imag), 20.0, rtol=1e-6)


def test_allowed_ground_is_what_every_requirement_on_poles_allows() -> None:
    axes = z_plane(invented()).axes[0]
    (ground,) = by_gid(axes, "allowed")
    outline = Outline(ground.get_xy())
    s = np.multiply.outer(np.linspace(-30, -0.5, 37), np.ones(41)) + 1j * np.linspace(0.3, 60, 41)
    z = np.exp(0.01 * s).ravel()
    inside = outline.contains_points(np.column_stack([z.real, z.imag])).reshape(s.shape)
    damped, far, quick = -s.real / abs(s) - 0.5, abs(s) / 5 - 1, s.real / np.log(0.02) - 1
    met = np.minimum(np.minimum(damped, far), quick)
    sure = abs(met) > 1e-3  # the outline is straight between its points
    assert inside[sure].any()
    np.testing.assert_array_equal(inside[sure], met[sure] > 0)


def test_poles_are_drawn_where_they_lie() -> None:
    dataset = invented()
    figure = z_plane(dataset)
    axes = figure.axes[0]
    poles = dataset["pole"].values[:, 0]
    assert line_of(axes, "nominal") == pytest.approx(np.array([[poles[0].real, poles[0].imag]]))
    assert line_of(axes, "cloud")[:, 1] == pytest.approx(poles[:4].imag)  # the last lies beyond the tolerances
    assert by_gid(axes, "worst 3")
    assert by_gid(axes, "name 3")[0].get_text() == "plant 3"
    assert axes.get_aspect() == 1.0
    assert any(text.startswith("plant 3: worst for settling time") for text in texts(figure))


def test_fast_sampling_keeps_the_digits_of_the_poles() -> None:
    dataset = invented(period=1e-9)
    large, small = z_plane(dataset).axes
    s = dataset["pole_s"].values[0, 0]
    ((x, y),) = line_of(large, "nominal")
    assert large.get_xlabel() == "real part of z, less 1 [10⁻⁹]"
    assert complex(x, y) == pytest.approx(s, rel=1e-6)  # s T, in units of T
    assert by_gid(small, "the other view")


def test_output_has_dots_at_the_sampling_instants_and_a_corridor() -> None:
    dataset = invented()
    figure = responses(dataset)
    upper, lower = figure.axes
    np.testing.assert_allclose(line_of(upper, "nominal")[:, 1], dataset["output"].values[0])
    dots = line_of(upper, "samples")
    assert upper.get_xlim() == lower.get_xlim()
    assert lower.get_xlabel() == "time [ms]"
    np.testing.assert_allclose(dots[:, 0], 20.0 * np.arange(len(dots)))  # every second one, for there are over 100
    assert "at one in 2 sampling instants" in texts(figure)
    np.testing.assert_allclose(dots[:, 1], np.interp(dots[:, 0] / 1e3, dataset["time"], dataset["output"][0]))
    above, below = line_of(upper, "limit above by response"), line_of(upper, "limit below by response")
    assert above[0, 1] == pytest.approx(1.25)
    assert above[-1, 1] == pytest.approx(1.02)
    assert above[1, 0] == pytest.approx(900.0)
    assert below[-1, 1] == pytest.approx(0.98)
    assert np.isnan(below[0, 1])  # no limit on undershoot
    assert line_of(upper, "latest peak")[0, 0] == pytest.approx(600.0)
    assert by_gid(lower, "nominal")[0].get_drawstyle() == "steps-post"
    assert line_of(lower, "limit 150")[0, 1] == 150.0
    assert line_of(upper, "limit above by poles")[0, 1] == pytest.approx(1.2)
    for words in ("asked of the poles, not of a curve", "overshoot ≤ 25 %", "settling time ≤ 900 ms (± 2 %)"):
        assert any(words in text for text in texts(figure))


def test_corridor_narrows_at_the_settling_time_alone() -> None:
    time, low, high = corridor(judged(invented()), end=2.0)
    assert list(time) == [0.0, 0.9, 0.9, 2.0]
    assert list(high) == pytest.approx([1.25, 1.25, 1.02, 1.02])
    assert list(low) == [-np.inf, -np.inf, 0.98, 0.98]


def test_final_value_is_on_the_side_where_the_output_rests() -> None:
    dataset = invented()
    other = dataset["other_value"].values.copy()
    other[0] = 0.2
    dataset = dataset.assign(other_value=(("other_measure", "scenario"), other))
    assert final_value(judged(dataset.assign(output=1.2 * dataset["output"]))) == pytest.approx(1.2)
    assert final_value(judged(dataset.assign(output=0.8 * dataset["output"]))) == pytest.approx(0.8)


def test_unstable_plants_leave_the_stable_ones_visible() -> None:
    figure = responses(invented(np.array([0.7, 0.6, -0.4]), np.array([10.0, 12.0, 9.0])))
    upper = figure.axes[0]
    gone = line_of(upper, "worst 2")[:, 1]
    assert np.isnan(gone[-1])
    assert np.nanmax(np.abs(gone)) < 1.5
    assert not np.isnan(line_of(upper, "worst 2")[0, 1])
    assert upper.get_ylim()[1] < 1.6
    assert any(text.startswith("unstable plants") for text in texts(figure))
    for draw in (z_plane, responses, loop_gain):
        FigureCanvasAgg(draw(invented(np.array([-0.1, -0.2]), np.array([10.0, 12.0])))).draw()


def test_nothing_known_is_said_and_drawn_as_that() -> None:
    dataset = invented()
    for rows in ([0], [0, 1, 2, 3, 4]):
        unknown = dataset.copy(deep=True)
        for name in ("value", "other_value", "pole", "pole_s", "output", "effort", "loop_gain"):
            unknown[name][{"scenario": rows}] = np.nan
        text = probe_text(judged(unknown))
        assert "The nominal plant's poles are unknown." in text
        assert ("No poles are known." in text) == (len(rows) == 5)
        json.loads(document(judged(unknown)))
        for draw in (z_plane, responses, loop_gain):
            FigureCanvasAgg(draw(unknown)).draw()


def test_margins_stand_where_they_are_read() -> None:
    dataset = invented()
    probed = judged(dataset)
    marks = margin_marks(probed, 0)
    gain, phase = margins(0.7, 10.0)
    at, decibels = marks["gain margin"]
    assert decibels == pytest.approx(20 * np.log10(gain))
    assert np.interp(at, dataset["frequency"], unwrapped(probed)[0]) == pytest.approx(-180.0, abs=0.1)
    axes = loop_gain(dataset).axes
    assert line_of(axes[0], "gain margin 0") == pytest.approx(np.array([[at, -decibels], [at, 0.0]]))
    bar = line_of(axes[1], "phase margin 0")
    assert bar[1, 1] - bar[0, 1] == pytest.approx(phase)
    assert bar[0, 1] == pytest.approx(-180.0, abs=0.2)  # the curve is straight between 500 frequencies
    assert line_of(axes[0], "crossover 0")[0, 0] == pytest.approx(bar[0, 0])
    none = judged(invented(np.array([-0.1]), np.array([10.0])))
    assert margin_marks(none, 0) == {}


def test_phase_has_no_jumps_and_starts_at_its_low_frequency_value() -> None:
    dataset = invented()
    w = dataset["frequency"].values
    late = dataset.assign(loop_gain=dataset["loop_gain"] * np.exp(-1j * w * 0.05))  # some 1000° at the right end
    phase = unwrapped(judged(late))
    assert phase[0, 0] == pytest.approx(-90.0, abs=3.0)
    assert abs(np.diff(phase, axis=1)).max() < 30
    assert phase[0, -1] == pytest.approx(-180.0 - np.degrees(0.06 * w[-1]), abs=3.0)
    negative = judged(dataset.assign(loop_gain=-abs(dataset["loop_gain"]) + 0j))
    assert unwrapped(negative)[0] == pytest.approx(-180.0)


def test_plants_differ_without_colour_and_keep_their_look() -> None:
    probed = judged(invented())
    looks = tags_look(probed)
    assert len(looks) >= 2
    assert len({str(look.dashes) for look in looks.values()} | {"solid"}) == len(looks) + 1
    assert len({look.marker for look in looks.values()}) == len({look.line for look in looks.values()}) == len(looks)
    for axes in (responses(probed.dataset).axes[0], loop_gain(probed.dataset).axes[0], z_plane(probed.dataset).axes[0]):
        for scenario, look in looks.items():
            assert by_gid(axes, f"worst {scenario}")[0].get_color() == look.line


@pytest.mark.parametrize("draw", [z_plane, responses, loop_gain])
def test_words_do_not_cover_each_other_and_stay_on_the_page(draw: Any) -> None:
    figure = draw(invented())
    canvas = FigureCanvasAgg(figure)
    canvas.draw()
    for axes in figure.axes:
        boxes = [text.get_window_extent(canvas.get_renderer()) for text in axes.texts if text.get_text()]
        assert not any(one.overlaps(two) for n, one in enumerate(boxes) for two in boxes[n + 1 :])
    legend = figure.legends[0].get_window_extent(canvas.get_renderer())
    assert legend.x0 > figure.axes[0].bbox.x1
    assert legend.y0 > 0
    assert legend.x1 < figure.bbox.x1


def test_pictures_are_written_and_refused(tmp_path: Any) -> None:
    written = write_pictures(tmp_path / "a" / "b", invented())
    assert [path.name for path in written] == ["z-plane.png", "responses.png", "loop-gain.png"]
    assert all(path.stat().st_size > 10_000 for path in written)
    (tmp_path / "file").write_text("")
    with pytest.raises(RunError, match="cannot be made"):
        write_pictures(tmp_path / "file" / "b", invented())
    with pytest.raises(OptionError, match="--out: found nothing"):
        probe_folder(tmp_path / "x.toml", "")
    assert probe_folder(tmp_path / "x.toml", None).as_posix() == "outputs/x-probe"


def test_command_answers_strictly_and_in_one_document(tmp_path: Any) -> None:
    study = tmp_path / "study.toml"
    study.write_text(text_of(scenarios=ONE_PLANT), encoding="utf-8")

    def probe(*words: str) -> Any:
        return CliRunner().invoke(main, ["probe", str(study), *words])

    done = probe("--at", "gain=0.5,period=0.1", "--out", str(tmp_path / "out"))
    assert done.exit_code == 0, done.output
    assert "nominal poles, z" in done.stdout
    assert len(list((tmp_path / "out").iterdir())) == 3
    strict = probe("--at", "gain=0.5", "--at", "period=100 ms", "--json", "--strict")
    data = json.loads(strict.stdout)
    assert strict.exit_code == (0 if data["met"] else 1)
    assert data["met"] is False  # settling: about ln(50)/0.5 s, asked 5 s
    assert data["at"] == {"gain": 0.5, "period": 0.1}
    wrong = probe("--at", "gain=0.5,perod=0.1")
    assert wrong.exit_code == 2
    assert wrong.stdout == ""
    assert "period" in wrong.stderr
