"""Faults of a study: one slip gives one message with its place, many come together, hostile files are refused.

Neighbours: test_reading reads what is right, test_cli shows the same messages on the command line.
"""

from __future__ import annotations

import pytest
from carriage import CARRIAGE, COMPENSATOR, IN_S, SENSOR, TRANSFER, changed

import explorer
from explorer.errors import StudyError

LAG, GAIN = '{ from = "28 ms", to = "46 ms" }', '{ from = "1 V/m", to = "400 V/m", points = 24, spacing = "log" }'
PLAN = "{ interior = 96, corners = true, seed = 7, tolerance_scales = [0, 0.5, 1.0, 1.5] }"
FILTER = f"sensor          = {SENSOR}\n"

MISTAKES = [  # what is written instead, line, key, a phrase of the message
    ("title =", "titel =", 1, "titel", "Did you mean 'title'?"),
    ("title =", "# title =", 1, "title", "missing"),
    ('"Camera carriage, position loop"', "2020-01-01", 1, "title", "found 2020-01-01"),
    ('"Camera carriage, position loop"', '" "', 1, "title", "a text in quotes"),
    ("Camera", "Cam\\u001b[2Jera", 1, "title", "printable"),
    ("Camera", "Cam\u202eera", 1, "title", "printable"),
    ('title = "', "title = ", 1, "", "not TOML at column 9"),
    ("[plant]\n", "[plnat]\n", 3, "plnat", "Did you mean 'plant'?"),
    ("transfer  =", "tranfer =", 4, "plant.tranfer", "Did you mean 'transfer'?"),
    (f"transfer  = {TRANSFER}", "", 3, "plant.transfer", "by transfer or by states"),
    (TRANSFER, '""', 4, "plant.transfer", "ends where"),
    (TRANSFER, '"speed_gian/s"', 4, "plant.transfer", "column 1: unknown name 'speed_gian'"),
    (TRANSFER, '"speed_gain*s^2/(lag*s + 1)"', 4, "plant.transfer", "degree 2 in s, the denominator of 1"),
    (TRANSFER, '"speed_gain/(s - s)"', 4, "plant.transfer", "column 11: divides by zero"),
    (TRANSFER, '"0*speed_gain/s"', 4, "plant.transfer", "which is 0"),
    (TRANSFER, '"speed_gain/(s*(lag*s + speed_gain))"', 4, "plant.transfer", "adds [1] and [m/s/V]"),
    (TRANSFER, '"speed_gain*z/s"', 4, "plant.transfer", "s or z, not both"),
    (TRANSFER, '"speed_gain/(z - 1)"', 4, "plant.transfer", "sampled_at"),
    (TRANSFER, "true", 4, "plant.transfer", "found true"),
    (TRANSFER, f"{TRANSFER}\nstates = {{ A = [1], B = [1], C = [1] }}", 5, "plant.states", "one of them"),
    (TRANSFER, f'{TRANSFER}\nsampled_at = "1 ms"', 5, "plant.sampled_at", "only with a transfer in z"),
    (f"transfer  = {TRANSFER}", "states = { A = [[1, 2]], B = [1], C = [1] }", 4, "plant.states.A", "1 × 2 entries"),
    (f"transfer  = {TRANSFER}", "states = { A = [1], B = [1] }", 4, "plant.states.C", "must be given"),
    (f"transfer  = {TRANSFER}", 'states = { A = ["lag + s"], B = [1], C = [1] }', 4, "plant.states.A", "name 's'"),
    (f"transfer  = {TRANSFER}", "states = 5", 4, "plant.states", "a table"),
    ('= "transport"', '= "transprot"', 5, "plant.dead_time", "Did you mean 'transport'?"),
    ('= "transport"', '= "-1 ms"', 5, "plant.dead_time", "0 or more"),
    ('= "transport"', '= "1 m"', 5, "plant.dead_time", "a quantity in s"),
    ('= "transport"', '= "speed_gain"', 5, "plant.dead_time", "a parameter in [s]"),
    ("[plant.parameters]", "[plant.parmeters]", 7, "plant.parmeters", "Did you mean 'parameters'?"),
    ('"0.9 m/s/V"', '"0,9 m/s/V"', 8, "plant.parameters.speed_gain.nominal", "write 0.9 m/s/V"),
    ('"0.9 m/s/V"', '""', 8, "plant.parameters.speed_gain.nominal", "one number"),
    ('"0.9 m/s/V"', "nan", 8, "plant.parameters.speed_gain.nominal", "not finite"),
    ('"0.9 m/s/V"', "0x" + "f" * 5000, 8, "plant.parameters.speed_gain.nominal", "more than 60 digits"),
    ('"0.9 m/s/V"', "1" + "0" * 400, 8, "plant.parameters.speed_gain.nominal", "more than 60 digits"),
    ("tolerance =", "tolerence =", 8, "plant.parameters.speed_gain.tolerence", "Did you mean 'tolerance'?"),
    ('"12 %"', '"-12 %"', 8, "plant.parameters.speed_gain.tolerance", "0 or more"),
    ('"12 %"', '"12 ms"', 8, "plant.parameters.speed_gain.tolerance", "the unit of the nominal value, m/s/V"),
    (LAG, '{ from = "46 ms", to = "28 ms" }', 9, "plant.parameters.lag.to", "more than from"),
    (LAG, '{ from = "28 ms" }', 9, "plant.parameters.lag", "from and to"),
    (LAG, '{ from = "1 Hz", to = "46 rad/s" }', 9, "plant.parameters.lag", "one unit"),
    (LAG, '{ from = "0 ms", to = "46 ms" }', 4, "plant.transfer", "coefficient in s vanishes"),
    (LAG, '{ from = "1 ms", to = "46 ms" }', 9, "plant.parameters.lag", "a change of sign"),  # at scale 1.5
    (LAG, '{ from = "28 ms", to = "46 ms", nominal = "5 ms" }', 9, "plant.parameters.lag.nominal", "between"),
    (LAG, '{ nominal = "6 dB", tolerance = "1 dB" }', 9, "plant.parameters.lag.tolerance", "a share"),
    ('"1.2 ms" }', '"0 ms", tolerance = "5 %" }', 10, "plant.parameters.transport.tolerance", "share of 0"),
    ('"1.2 ms" }', '"0.5 period" }', 10, "plant.parameters.transport.nominal", "only computing_delay"),
    ("payload    =", "clock =", 11, "plant.parameters.clock", "is taken"),
    ("payload    =", '"pay load" =', 11, "plant.parameters.pay load", "letters, digits and _"),
    ('["1.2 kg", "3.4 kg"]', "[]", 11, "plant.parameters.payload.any_of", "one or more"),
    ('["1.2 kg", "3.4 kg"]', '["1 kg", "3.4 kg"]', 11, "plant.parameters.payload.any_of", "the nominal one among them"),
    ('["1.2 kg", "3.4 kg"]', '["1.2 kg", "3.4 m"]', 11, "plant.parameters.payload", "one unit"),
    ("[loop]", "[lop]", 13, "lop", "Did you mean 'loop'?"),
    (f"compensator     = {COMPENSATOR}", "", 13, "loop.compensator", "must be given"),
    (COMPENSATOR, '"lead/period"', 14, "loop.compensator", "Write gain*(...)"),
    (COMPENSATOR, '"gian*laed + lead/period"', 14, "loop.compensator", "'gian', column 6: unknown name 'laed'"),
    (COMPENSATOR, '"gain*(1 + lead*(z - 1)/period)"', 14, "loop.compensator", "samples that are not taken yet"),
    (COMPENSATOR, '"gain*lead/(lead - 20e-3)/period"', 14, "loop.compensator", "divides by zero somewhere"),
    (COMPENSATOR, IN_S, 14, "loop.compensator", 'Add conversion = "backward difference"'),
    (COMPENSATOR, f'{IN_S}\nconversion = "bilinaer"', 15, "loop.conversion", "Did you mean 'bilinear'?"),
    (COMPENSATOR, f'{IN_S}\nconversion = "bilinear, exact at 12 kHz"', 15, "loop.conversion", "half the sampling rate"),
    (COMPENSATOR, f'{COMPENSATOR}\nconversion = "bilinear"', 15, "loop.conversion", "only with a compensator in s"),
    ('"0.4 ms"', '"transport"', 15, "loop.computing_delay", 'such as "0.5 period"'),
    ('"0.4 ms"', '"-0.5 period"', 15, "loop.computing_delay", "0 or more"),
    (SENSOR, '"s/300"', 16, "loop.sensor", "degree 1 in s, the denominator of 0"),
    (SENSOR, '"1/(lead*s + 1)"', 16, "loop.sensor", "unknown name 'lead'"),
    ('"0.5 %"', '"60 %"', 17, "loop.clock_tolerance", "below 50 %"),
    ('"0.11 ms"', '"1 V"', 18, "loop.execution_time", "a quantity in s"),
    ("[sweep]", "[sweap]", 20, "sweap", "Did you mean 'sweep'?"),
    (f"gain   = {GAIN}", "", 20, "sweep.gain", "an axis for the gain"),
    ("gain   =", "gian =", 21, "sweep.gian", "Did you mean 'gain'?"),
    (GAIN, '"3 V/m"', 21, "sweep.gain", "a table with some of from, to"),
    ('from = "1 V/m"', 'from = "0 V/m"', 21, "sweep.gain", "a log axis starts above 0"),
    ('from = "1 V/m"', 'from = "1 V"', 21, "sweep.gain", "one unit"),
    ("points = 24", 'points = "24"', 21, "sweep.gain.points", "a whole number"),
    ("points = 24", "points = 0x" + "f" * 5000, 21, "sweep.gain.points", "2 to 100000"),
    ("points = 24,", "", 21, "sweep.gain", "missing points"),
    ('points = 24, spacing = "log"', 'points = 24, spacing = "lag"', 21, "sweep.gain.spacing", '"log" or "linear"'),
    ('from = "0.5 ms", to = "40 ms"', 'from = "0.5 m", to = "40 m"', 22, "sweep.period", "a time"),
    ("period =", "perod =", 22, "sweep.perod", "Did you mean 'period'?"),
    ('["40 ms", "20 ms"]', '["40 ms", "40 ms"]', 23, "sweep.lead.values", "different values"),
    ("lead   =", "lead = { values = [1] }\nidle =", 24, "sweep.idle", "does not stand in the compensator"),
    (PLAN, PLAN.replace("interior", "inteior"), 24, "sweep.scenarios.inteior", "Did you mean 'interior'?"),
    ("scenarios =", "scenario =", 24, "sweep.scenario", "Did you mean 'scenarios'?"),
    ("interior = 96", "interior = 100001", 24, "sweep.scenarios.interior", "up to 100000"),
    ("[0, 0.5, 1.0, 1.5]", "[0, 0.5]", 24, "sweep.scenarios.tolerance_scales", "Add 1.0"),
    ("seed = 7", "seed = -1", 24, "sweep.scenarios.seed", "0 or more"),
    ("well damped", "stability", 36, "requirements[3]", "stands twice"),
    ("well damped", "slack", 27, "requirements[1].name", "is taken"),
    ('"damping ratio"', '"dampnig ratio"', 28, "requirements[1].measure", "Did you mean 'damping ratio'?"),
    ("at_least = 0.6", "at_lest = 0.6", 29, "requirements[1].at_lest", "Did you mean 'at_least'?"),
    ("at_least = 0.6", "", 26, "requirements[1]", "needs at_least or at_most"),
    ("at_least = 0.6", 'at_least = "0.6 s"', 29, "requirements[1].at_least", "a ratio"),
    ('basis = "poles"', "", 31, "requirements[2]", 'basis = "poles"'),
    ('basis = "poles"', 'basis = "pole"', 33, "requirements[2].basis", 'basis = "poles"'),
    ('"120 ms"', '"-120 ms"', 34, "requirements[2].at_most", "0 or more"),
    ('"120 ms"', '"0 ms"', 34, "requirements[2].at_most", "scale"),
    ('"120 ms"', '"120 ms"\nband = "2 %"', 35, "requirements[2].band", "settling time"),
    ('= "stability"', '= "stability"\nat_most = 0.9', 38, "requirements[3].at_most", "takes no limit"),
]  # fmt: skip


def faults_of(text):
    with pytest.raises(StudyError) as caught:
        explorer.read_study(text=text)
    return caught.value.faults


@pytest.mark.parametrize(("old", "new", "line", "key", "phrase"), MISTAKES, ids=[
    f"{line}-{key}-{index}" for index, (_, _, line, key, _) in enumerate(MISTAKES)])  # fmt: skip
def test_one_slip_gives_one_message_in_its_place(old, new, line, key, phrase):
    (fault,) = faults_of(changed((old, new)))
    assert (fault.line, fault.key) == (line, key)
    assert phrase in str(fault)
    assert str(fault).startswith(f"study:{line}: ")
    assert str(fault).isprintable()
    assert len(str(fault)) < 420


def test_every_line_that_says_something_has_a_slip():
    spoken = {number for number, line in enumerate(CARRIAGE.splitlines(), 1) if line}
    # an array of tables and its keys share their first, middle and last lines with the others of their kind
    assert spoken - {line for _, _, line, _, _ in MISTAKES} <= {32, 37}


SLIPS = [
    ('"Camera carriage, position loop"', "5"), ('= "transport"', '= "transprot"'), ('"12 %"', '"12 V"'),
    ('to = "46 ms"', 'to = "26 ms"'), ("lead*(z", "laed*(z"), ('"0.5 %"', '"60 %"'), ("sensor  ", "senser  "),
    ('points = 24, spacing = "log"', 'points = 24, spacing = "lag"'), ("seed = 7", "seed = 1.5"),
    ('"damping ratio"', '"dampnig ratio"'), ('"120 ms"', '"120 V"'),
    ("speed_gain / (s", "speed_gain / (s*s - s*s) / (s"),
]  # fmt: skip


def test_all_faults_come_together_in_the_order_of_their_lines():
    faults = faults_of(changed(*SLIPS))
    assert [fault.line for fault in faults] == [1, 5, 8, 9, 14, 16, 17, 21, 24, 28, 34]
    # the transfer's division by zero waits for its parameters; the rest is not hidden by anything
    assert len(faults_of(changed(*SLIPS[:2], *SLIPS[4:]))) == 10


def test_thousands_of_faults_end_somewhere():
    faults = faults_of("\n".join(f"key{number} = 1" for number in range(5000)))
    assert len(faults) == 26
    assert "not listed" in str(faults[-1])


MANY_PARAMETERS = "\n".join(f"p{number} = 1" for number in range(4000))
MANY_VARIANTS = "".join(f"p{number}.any_of = {list(range(1, 30))}\n" for number in range(9))

HOSTILE = {
    "empty": "", "a comment": "# nothing", "keys twice": CARRIAGE + "[plant]\n", "plant is a list": "plant = [1]",
    "nested lists": CARRIAGE + "x = " + "[" * 20000 + "]" * 20000, "dotted keys": "loop" + ".a" * 20000 + " = 1",
    "lists in lists": changed((TRANSFER, "[" * 300 + "]" * 300)), "dots and blanks": "loop" + " . a" * 9000 + " = 1",
    "inline tables": changed((TRANSFER, "{a=" * 200 + "1" + "}" * 200)), "a megabyte": CARRIAGE + "#" * 10**6,
    "zero byte": changed(("Camera", "Cam\0era")), "surrogate": changed(("Camera", "\ud800")),
    "thousands of digits": changed(("0.6\n", "9" * 5000 + "\n")), "tower": changed((TRANSFER, '"9**9**9**9"')),
    "thousands of parameters": changed(("[loop]", f"{MANY_PARAMETERS}\n[loop]")),
    "millions of variants": changed(("[loop]", f"{MANY_VARIANTS}\n[loop]")),
    "billions of points": changed(("points = 24", "points = 100000"), ("points = 20", "points = 100000")),
    "power of powers": changed((TRANSFER, '"1/(((((s + 1)^24)^24)^24)^24)^24"')),
    "code": changed((TRANSFER, "\"__import__('os').system('touch hacked')\"")),
    "key with line": CARRIAGE.replace("title", '"a\\nb"'), "key with bracket": '"a[b" = 1\n' + CARRIAGE,
    "empty key": '"" = 1\n' + CARRIAGE,
    "one bracket": CARRIAGE[: CARRIAGE.index("[[")] + '[requirements]\nmeasure = "stability"\n',
}  # fmt: skip


@pytest.mark.parametrize("name", HOSTILE)
def test_hostile_text_is_refused_with_short_messages(name):
    for fault in faults_of(HOSTILE[name]):
        assert str(fault).isprintable()
        assert len(str(fault)) < 420


def test_hostile_files_are_refused(tmp_path):
    contents = {"binary": bytes(range(256)), "utf-16": CARRIAGE.encode("utf-16"), "half": CARRIAGE.encode() + b"\xc3"}
    for name, content in contents.items():
        (tmp_path / name).write_bytes(content)
        with pytest.raises(StudyError, match="is not UTF-8"):
            explorer.read_study(tmp_path / name)
    (tmp_path / "loop").symlink_to(tmp_path / "loop")
    for path in (tmp_path, tmp_path / "none.toml", tmp_path / "half" / "x", tmp_path / "loop", "a\0b", "a" * 5000):
        with pytest.raises(StudyError, match="cannot be read"):
            explorer.read_study(path)
    with pytest.raises(StudyError, match="too large"):
        explorer.read_study("/dev/zero")
