"""Responses: kernels.response through loop.simulating against a plain simulation at 30 digits, and against itself.

The reference shares nothing with the program: companion matrices in s, mpmath's matrix exponential, the compensator
as a difference equation in z, every extremum and crossing polished by Newton from a grid of 24 points a stretch. All
data are invented.
"""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from mpmath import mp
from oracle import reference
from small_study import study_of

from explorer.kernels import response
from explorer.kernels.roots import poles
from explorer.loop.closing import characteristic, groups_of
from explorer.loop.compensator import compensator_on_axes
from explorer.loop.sampling import sample
from explorer.loop.simulating import simulate, source_of
from explorer.loop.trajectories import trajectories

POINTS = 24  # a stretch of the reference: several to each oscillation of the plants below
ROWS = tuple(range(response.SETTLING))


class Reference:
    """One loop at 30 digits. plant, sensor : (numerator, denominator) texts; control : polynomials in z."""

    @mp.workdps(30)
    def __init__(self, plant, sensor, dead_time, computing, period, control, samples, kind="step"):
        a, b, c, d = reference.state_space(*plant)
        f, g, h, e = reference.state_space(*sensor)
        n, p = a.rows, f.rows
        self.matrix = mp.zeros(1 + n + p)  # of (held input, plant, sensor)
        self.matrix[1 : 1 + n, 0] = b
        self.matrix[1 : 1 + n, 1 : 1 + n] = a
        if p:
            self.matrix[1 + n :, 0] = g * d
            self.matrix[1 + n :, 1 : 1 + n] = g * c
            self.matrix[1 + n :, 1 + n :] = f
        self.seen, self.measured = mp.zeros(1, 1 + n + p), mp.zeros(1, 1 + n + p)
        self.seen[0], self.measured[0] = d, e * d
        for j in range(n):
            self.seen[1 + j], self.measured[1 + j] = c[j], e * c[j]
        for j in range(p):
            self.measured[1 + n + j] = h[j]
        self.period, self.kind = mp.mpf(period), kind
        total = mp.mpf(dead_time) + mp.mpf(computing)
        self.whole, self.short = split(total, self.period)
        self.load_time = mp.mpf(dead_time) if kind == "load" else mp.inf
        self.control = [[mp.mpf(value) for value in side] for side in control]
        self.stretches, self.inputs = [], []
        self.simulate(samples)

    def simulate(self, samples):
        """Stretches (begin, length, state there with its held input first)."""
        above, below = self.control
        above = [mp.zero] * (len(below) - len(above)) + above
        errors, outs = [mp.zero] * (len(below) - 1), [mp.zero] * (len(below) - 1)
        state, powers = mp.zeros(self.matrix.rows, 1), {}
        for k in range(samples):
            time = k * self.period
            reference_value = {"step": mp.one, "ramp": time, "load": mp.zero}[self.kind]
            load = mp.one if time >= self.load_time else mp.zero
            past = sum(x * y for x, y in zip(above[1:], errors, strict=True)) - sum(
                x * y for x, y in zip(below[1:], outs, strict=True)
            )
            if self.whole:
                state[0] = self.delayed(k - self.whole) + load
                error = reference_value - (self.measured * state)[0]
                u = (above[0] * error + past) / below[0]
            else:  # the sample sees its own input
                state[0] = load
                known, direct = (self.measured * state)[0], self.measured[0]
                u = (above[0] * (reference_value - known) + past) / (below[0] + above[0] * direct)
                error = reference_value - known - direct * u
            errors, outs = [error, *errors][: len(errors)], [u, *outs][: len(outs)]
            self.inputs.append(u)
            marks = {time, time + self.period}
            if self.short:
                marks.add(time + self.period - self.short)
            if time < self.load_time < time + self.period:
                marks.add(self.load_time)
            marks = sorted(marks)
            for begin, end in itertools.pairwise(marks):
                behind = k + 1 if self.short and begin >= time + self.period - self.short else k
                state[0] = self.delayed(behind - self.whole) + (1 if begin >= self.load_time else 0)
                length = end - begin
                self.stretches.append((begin, length, state.copy()))
                key = mp.nstr(length, 15)
                if key not in powers:
                    powers[key] = mp.expm(self.matrix * length, method="taylor")
                state = powers[key] * state

    def delayed(self, k):
        return self.inputs[k] if k >= 0 else mp.zero

    def output(self, stretch, time, slope=False):
        _, _, state = stretch
        row = self.seen * self.matrix if slope else self.seen
        return (row * mp.expm(self.matrix * time, method="taylor") * state)[0]

    def grid(self):
        """(stretches, POINTS+1) outputs, floats."""
        lengths = {mp.nstr(length, 15): length for _, length, _ in self.stretches}
        rows = {
            key: np.array(
                [
                    [float(x) for x in self.seen * mp.expm(self.matrix * length * i / POINTS, method="taylor")]
                    for i in range(POINTS + 1)
                ]
            )
            for key, length in lengths.items()
        }
        states = np.array([[float(x) for x in state] for _, _, state in self.stretches])
        keys = [mp.nstr(length, 15) for _, length, _ in self.stretches]
        return np.stack([rows[key] @ state for key, state in zip(keys, states, strict=True)])

    @mp.workdps(30)
    def highest(self, sign=1):
        """(largest sign*y, its time)."""
        values = sign * self.grid()
        best = (mp.zero, mp.zero)
        for flat in np.argsort(values, axis=None)[:-7:-1]:  # the highest lies beside one of the highest points
            row, point = divmod(int(flat), POINTS + 1)
            stretch = self.stretches[row]
            place = stretch[1] * point / POINTS
            value = sign * self.output(stretch, place)
            if value > best[0] + mp.mpf(10) ** -25:
                best = (value, stretch[0] + place)
            if 0 < point < POINTS and values[row, point] >= max(values[row, point - 1], values[row, point + 1]):
                low, high = (stretch[1] * (point + step) / POINTS for step in (-1, 1))
                place = mp.findroot(
                    lambda t, s=stretch: self.output(s, t, True), (low, high), solver="anderson", tol=1e-40
                )
                value = sign * self.output(stretch, place)
                if value > best[0]:
                    best = (value, stretch[0] + place)
        return best

    @mp.workdps(30)
    def crossing(self, level, first):
        """First time y >= level, or last time |y - 1| > level where y is relative to its final value."""
        values, final = self.grid(), self.final
        outside = values / float(final) >= level if first else np.abs(values / float(final) - 1) > level
        rows = np.flatnonzero(outside.any(axis=1))
        if not len(rows):
            return mp.zero
        row = rows[0] if first else rows[-1]
        stretch = self.stretches[row]
        points = np.flatnonzero(outside[row])
        point = points[0] if first else points[-1]
        if point == (0 if first else POINTS):
            return stretch[0] + (0 if first else stretch[1])
        side = 1 if first or values[row, point] / float(final) < 1 else -1
        target = final * (level if first else 1 - side * level)
        low, high = (stretch[1] * (point + step) / POINTS for step in ((-1, 0) if first else (0, 1)))
        return stretch[0] + mp.findroot(
            lambda t: self.output(stretch, t) - target, (low, high), solver="anderson", tol=1e-40
        )


def split(total, period):
    whole = int(mp.ceil(total / period - mp.mpf(10) ** -12))
    short = whole * period - total
    return whole, short if short > mp.mpf(10) ** -12 * period else mp.zero


# name: plant numerator, denominator (s), sensor, dead time, computing delay, period, compensator text and in z, gain
LOOPS = {
    "servo with lead": (
        ("0.9", "0.035 1 0"), ("1", "1"), "0.0012", "0.0004", "0.006",
        "gain*(1 + 0.02*(z - 1)/(period*(z - 0.4)))",
        lambda g, T: ([g * (1 + 0.02 / T), -g * (0.4 + 0.02 / T)], [1, -0.4]), "120", lambda g: mp.one,
    ),
    "two lags, PI": (
        ("2", "0.06 0.5 1"), ("1", "1"), "0", "0", "0.1",
        "gain*(1 + period/(0.4*(z - 1)))",
        lambda g, T: ([g, g * (T / 0.4 - 1)], [1, -1]), "0.9", lambda g: mp.one,
    ),
    "type 0": (
        ("2", "0.06 0.5 1"), ("1", "1"), "0.25", "0", "0.1",
        "gain",
        lambda g, T: ([g], [1]), "0.35", lambda g: 2 * g / (1 + 2 * g),
    ),
    "slow sampling of a light pair": (
        ("5", "1 0.6 40"), ("1", "1"), "0", "0.03", "0.7", "gain*period*z/(z - 1)", lambda g, T: ([g * T, 0], [1, -1]),
        "1.5", lambda g: mp.one,
    ),
    "wrong way first": (
        ("-0.3 1", "1 3 3 1"), ("1", "1"), "0.1", "0", "0.2",
        "gain",
        lambda g, T: ([g], [1]), "0.9", lambda g: g / (1 + g),
    ),
    "feedthrough": (
        ("1 3 5", "1 1 4"), ("1", "1"), "0", "0", "0.25",
        "gain*period/(z - 1)",
        lambda g, T: ([g * T], [1, -1]), "0.5", lambda g: mp.one,
    ),
    "feedthrough at once": (
        ("1 3 5", "1 1 4"), ("1", "1"), "0", "0", "0.25",
        "gain*z/(z - 0.5)",
        lambda g, T: ([g, 0], [1, -0.5]), "0.1", lambda g: 2.5 * g / (1 + 2.5 * g),
    ),
    "feedthrough within": (
        ("1 3 5", "1 1 4"), ("1", "1"), "0.1", "0", "0.25",
        "gain*period/(z - 1)",
        lambda g, T: ([g * T], [1, -1]), "0.3", lambda g: mp.one,
    ),
    "sensor": (
        ("1", "0.5 1"), ("1", "0.0005 0.03 1"), "0.01", "0.02", "0.05",
        "gain*(1 + period/(0.5*(z - 1)))",
        lambda g, T: ([g, g * (T / 0.5 - 1)], [1, -1]), "3", lambda g: mp.one,
    ),
    "fast lag": (
        ("1", "0.001 0.501 1 0"), ("1", "1"), "0.05", "0", "0.2",
        "gain",
        lambda g, T: ([g], [1]), "0.9", lambda g: mp.one,
    ),
}  # fmt: skip


def polynomial_text(text, variable="s"):
    parts = text.split()
    return " + ".join(f"({value})*{variable}^{len(parts) - 1 - k}" for k, value in enumerate(parts))


def study(name, gain=None, period=None):
    plant, sensor, dead, computing, own, text, _, own_gain, _ = LOOPS[name]
    loop = f"computing_delay = {computing}\n"
    if sensor != ("1", "1"):
        loop += f'sensor = "({polynomial_text(sensor[0])})/({polynomial_text(sensor[1])})"\n'
    return study_of(
        transfer=f"({polynomial_text(plant[0])})/({polynomial_text(plant[1])})",
        plant=f"dead_time = {dead}", compensator=text, loop=loop,
        gain=f"{{ values = [{gain or own_gain}] }}", period=f"{{ values = [{period or own}] }}",
    )  # fmt: skip


def answers(case, bands=(0.02,), rows=ROWS):
    """(rows + bands, P, G) of a study at its nominal plant."""
    values = {parameter.name: np.array([parameter.nominal]) for parameter in case.parameters} | {"clock": np.ones(1)}
    nominal = {parameter.name: parameter.nominal for parameter in case.parameters}
    period, gain = case.period.values, case.gain.values
    sampled = sample(case, values, period)
    source = source_of(case, values, period, sampled)
    compensator = compensator_on_axes(case.loop, nominal, gain, period)
    found = np.full((response.SETTLING + len(bands), len(period), len(gain)), np.nan)
    marks = np.full((len(period), len(gain)), -1)
    for group in groups_of(sampled):
        parts = [characteristic(sampled, compensator, group, variable) for variable in (0, 1)]
        log_z = poles(*(constant + gain[:, None] * slope for constant, slope in parts)).log_z
        slowest = log_z.real.max(axis=-1, initial=-700.0)
        simulated = simulate(source, compensator, gain, group, slowest, rows, bands)
        found[:, group.columns], marks[group.columns] = simulated.rows, simulated.status
    return found, marks


@pytest.mark.parametrize("name", LOOPS)
def test_against_thirty_digits(name):
    plant, sensor, dead, computing, period, _, control, gain, final = LOOPS[name]
    found, marks = answers(study(name))
    assert (marks == response.DECIDED).all()
    found = found[:, 0, 0]
    plant, sensor = ([side.split() for side in part] for part in (plant, sensor))
    with mp.workdps(30):
        polynomials = control(mp.mpf(gain), mp.mpf(period))
        step = Reference(plant, sensor, dead, computing, period, polynomials, 250)
        step.final = final = final(mp.mpf(gain))
        high, when = step.highest()
        low = -step.highest(-1)[0]
        tenth, ninety, settled = step.crossing(0.1, True), step.crossing(0.9, True), step.crossing(0.02, False)
        load = Reference(plant, sensor, dead, computing, period, polynomials, 120, "load")
        over = max(high / final - 1, 0)
        seen = max(step.output(stretch, 0) for stretch in step.stretches[:: 2 if step.short else 1])
        expected = {
            response.OVERSHOOT: 100 * over, response.PEAK_TIME: when if over > 1e-9 else mp.inf,
            response.UNDERSHOOT: 100 * max(-low / final, 0), response.RISE_TIME: ninety - tenth,
            response.STEP_ERROR: abs(1 - final), response.EFFORT: max(abs(u) for u in step.inputs),
            response.EXCESS: 100 * (over - max(seen / final - 1, 0)),
            response.LOAD_PEAK: max(load.highest()[0], load.highest(-1)[0]), response.SETTLING: settled,
        }  # fmt: skip
    for row, value in expected.items():
        times = row in (response.PEAK_TIME, response.RISE_TIME, response.SETTLING)
        # values: 1e-9 relative, and 1e-9 of the final value where the measure is a difference; times: 1e-6
        assert found[row] == pytest.approx(float(value), rel=1e-7 if times else 1e-9, abs=1e-8), row


RAMPS = {  # name: the ripple between samples included, from the reference behind a ramp
    "servo with lead": 200, "two lags, PI": 400, "fast lag": 200, "sensor": 300,
}  # fmt: skip


@pytest.mark.parametrize("name", RAMPS)
def test_ramp_against_thirty_digits(name):
    plant, sensor, dead, computing, period, _, control, gain, _ = LOOPS[name]
    found, _ = answers(study(name), rows=(response.RAMP_ERROR,), bands=())
    plant, sensor = ([side.split() for side in part] for part in (plant, sensor))
    with mp.workdps(30):
        polynomials = control(mp.mpf(gain), mp.mpf(period))
        ramp = Reference(plant, sensor, dead, computing, period, polynomials, RAMPS[name], "ramp")
        last = ramp.stretches[-2 if ramp.short else -1 :]
        lag = max(
            abs(begin + length * i / 200 - ramp.output((begin, length, state), length * i / 200))
            for begin, length, state in last
            for i in range(201)
        )
    # the grid misses a few (1/200)² of a ripple
    assert found[response.RAMP_ERROR, 0, 0] == pytest.approx(float(lag), rel=2e-6)


def grid_of_servo(period="{ values = [0.003, 0.006] }"):
    _, _, dead, computing, _, text, *_ = LOOPS["servo with lead"]
    return study_of(
        transfer="0.9/(s*(0.035*s + 1))", plant=f"dead_time = {dead}", compensator=text,
        loop=f"computing_delay = {computing}", period=period,
        gain='{ from = 5, to = 150, points = 37, spacing = "log" }',
    )  # fmt: skip


def test_jumping_finds_what_stepping_finds(monkeypatch):
    stepped, marks = answers(grid_of_servo(), bands=(0.02, 1e-3))

    def jumping(self, first, wanted, bands, found):
        shared = self._plants("edges", "table", "pieces")
        response.pursuer()(
            self.plants.numbers, self.plants.outputs, self.plants.drift, *shared, self.pairs, first, self.others,
            self.delay, wanted, bands, self.lanes, self.facts, self.begin, found, 2_000_000,
        )  # fmt: skip

    monkeypatch.setattr(response.Blocks, "_advance", jumping)
    jumped, others = answers(grid_of_servo(), bands=(0.02, 1e-3))
    assert (marks == response.DECIDED).all() and (others == marks).all()
    # exact in the same pieces, states by other roundings; what no measure reports (5e-10) may be missed
    np.testing.assert_allclose(jumped, stepped, rtol=1e-9, atol=1e-10)


def test_batch_does_not_matter():
    both, _ = answers(grid_of_servo())
    for index, period in enumerate((0.003, 0.006)):
        single, _ = answers(grid_of_servo(f"{{ values = [{period}] }}"))
        np.testing.assert_array_equal(single[:, 0], both[:, index])


@pytest.mark.parametrize(("gain", "period"), [("1", "1e-6"), ("1e4", "1e-5"), ("0.26", "0.001")])
def test_very_fast_sampling(gain, period):
    """1/(s(s+1)): a million samples a time constant; 130 oscillations in 800 000 samples. By powers at 40 digits."""
    found, marks = answers(study_of(gain=f"{{ values = [{gain}] }}", period=f"{{ values = [{period}] }}"))
    assert (marks == response.DECIDED).all()
    with mp.workdps(40):
        g, step = mp.mpf(gain), mp.mpf(period)

        def within(time):  # of (velocity, error)
            fall = mp.exp(-time)
            return mp.matrix([[fall, (1 - fall) * g], [fall - 1, 1 - (time - 1 + fall) * g]])

        whole = within(step)

        def error_at(time):
            k = int(mp.floor(time / step))
            return (within(time - k * step) * (whole**k) * mp.matrix([0, 1]))[1]

        peak, settled = mp.mpf(found[response.PEAK_TIME, 0, 0]), mp.mpf(found[response.SETTLING, 0, 0])
        assert found[response.OVERSHOOT, 0, 0] == pytest.approx(float(-100 * error_at(peak)), rel=1e-9)
        for side in (-1, 1):
            assert error_at(peak * (1 + side * mp.mpf("1e-6"))) > error_at(peak)
        early, late = (abs(error_at(settled * (1 + side * mp.mpf("1e-9")))) for side in (-1, 1))
        assert early > 0.02 > late


def test_plant_in_z():
    """Only samples exist; y is held between them. The difference equation says the same."""
    case = study_of(
        transfer="(z + 0.8)/((z - 1)*(z - 0.6))", plant='sampled_at = "1 sample"', compensator="gain*(z - 0.5)/z",
        gain="{ values = [0.15] }", period="",
        requirements="[[requirements]]\nmeasure = \"stability\"\n",
    )  # fmt: skip
    found, marks = answers(case)
    y, u, e = np.zeros(300), np.zeros(300), np.zeros(300)
    for k in range(300):
        y[k] = (1.6 * y[k - 1] - 0.6 * y[k - 2] + u[k - 1] + 0.8 * u[k - 2]) if k > 1 else (u[0] if k else 0.0)
        e[k] = 1 - y[k]
        u[k] = 0.15 * (e[k] - 0.5 * e[k - 1]) if k else 0.15 * e[0]
    assert (marks == response.DECIDED).all()
    assert found[response.OVERSHOOT, 0, 0] == pytest.approx(100 * (y.max() - 1), rel=1e-9)
    assert found[response.PEAK_TIME, 0, 0] == y.argmax()
    assert found[response.SETTLING, 0, 0] == np.flatnonzero(abs(y - 1) > 0.02)[-1] + 1
    assert found[response.EFFORT, 0, 0] == pytest.approx(abs(u).max(), rel=1e-12)
    assert found[response.EXCESS, 0, 0] == pytest.approx(0.0, abs=1e-12)


def test_curves_pass_through_the_measures():
    case = study("servo with lead")
    values, period, gain = {"clock": np.ones(1)}, case.period.values, case.gain.values
    sampled = sample(case, values, period)
    source = source_of(case, values, period, sampled)
    found, _ = answers(case)
    peak = found[response.PEAK_TIME, 0, 0]
    curve = trajectories(
        source, compensator_on_axes(case.loop, {}, gain, period), gain[0], 0, np.array([0.0, peak / 2, peak])
    )
    assert curve.output[0, 0] == 0.0
    assert curve.output[0, 2] == pytest.approx(1 + found[response.OVERSHOOT, 0, 0] / 100, rel=1e-12)


def test_unstable_is_skipped_and_unasked_is_nan():
    found, marks = answers(study("servo with lead", gain="1e5"))
    assert (marks == response.SKIPPED).all() and np.isnan(found).all()
    found, _ = answers(study("servo with lead"), bands=(), rows=(response.EFFORT,))
    assert np.isfinite(found[response.EFFORT]).all() and np.isnan(np.delete(found, response.EFFORT, axis=0)).all()
