"""Quantities: every unit against pint, every trap refused, conversions and texts there and back."""

import math
import pickle
import sys
from fractions import Fraction

import pint
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from explorer.study.quantities import Dimension, QuantityError, format_quantity, read_in_unit, read_quantity

NO_DEADLINE = settings(deadline=None, max_examples=200)

PREFIX_NAMES = {
    "y": "yocto", "z": "zepto", "a": "atto", "f": "femto", "p": "pico", "n": "nano", "µ": "micro",
    "μ": "micro", "u": "micro", "m": "milli", "c": "centi", "d": "deci", "da": "deca", "h": "hecto",
    "k": "kilo", "M": "mega", "G": "giga", "T": "tera", "P": "peta", "E": "exa", "Z": "zetta", "Y": "yotta",
}  # fmt: skip
PREFIXABLE_NAMES = {
    "m": "meter", "g": "gram", "s": "second", "A": "ampere", "K": "kelvin", "mol": "mole", "cd": "candela",
    "rad": "radian", "sr": "steradian", "Hz": "hertz", "N": "newton", "Pa": "pascal", "J": "joule",
    "W": "watt", "C": "coulomb", "V": "volt", "F": "farad", "Ω": "ohm", "ohm": "ohm", "S": "siemens",
    "Wb": "weber", "T": "tesla", "H": "henry", "lm": "lumen", "lx": "lux", "l": "liter", "L": "liter",
    "bar": "bar",
}  # fmt: skip
PLAIN_NAMES = {
    "kg": "kilogram", "min": "minute", "h": "hour", "d": "day", "t": "metric_ton", "inch": "inch",
    "ft": "foot", "°C": "delta_degree_Celsius", "degC": "delta_degree_Celsius", "deg": "degree",
    "°": "degree", "rev": "revolution", "rpm": "revolution/minute", "%": "percent", "count": "count",
    "counts": "count",
}  # fmt: skip
COMPOUND_NAMES = {
    "m/s/V": "m/s/V", "V*s/m": "V*s/m", "kg*m^2": "kg*m**2", "m^2/s^2": "m**2/s**2", "m²": "m**2",
    "mm³/s": "mm**3/s", "s⁻¹": "1/s", "kg·m²·s⁻²": "kg*m**2/s**2", "N/(rad/s)": "N/(rad/s)",
    "N*m/(rad/s)^2": "N*m/(rad/s)**2", "1/s": "1/s", "/s": "1/s", "mN*m/A": "mN*m/A", "µm/V": "µm/V",
    "V/(m/s)": "V/(m/s)", "m / s": "m/s", "(V)": "V", "W/(m^2*K)": "W/(m**2*K)", "J/kg*K": "J/kg*K",
    "l/min": "l/minute", "kg^-1": "1/kg", "m^0": "m/m", "%/K": "percent/delta_degree_Celsius",
    "m^9": "m**9",
}  # fmt: skip
PINT_BASE = ("[length]", "[mass]", "[time]", "[current]", "[temperature]", "[substance]", "[luminosity]")


@pytest.fixture(scope="module")
def pint_units() -> pint.UnitRegistry:
    return pint.UnitRegistry()


def agrees_with_pint(pint_units: pint.UnitRegistry, text: str, name: str) -> None:
    ours = read_quantity(f"2.5 {text}")
    theirs = (2.5 * pint_units.parse_units(name)).to_base_units()
    # pint multiplies floats step by step, up to a dozen roundings
    assert ours.value == pytest.approx(theirs.magnitude, rel=1e-14, abs=0), text
    powers = tuple(theirs.dimensionality.get(base, 0) for base in PINT_BASE)
    assert ours.dimension.exponents == powers, text


def test_every_prefix_with_every_symbol_is_what_pint_says(pint_units):
    for symbol, name in PREFIXABLE_NAMES.items():
        agrees_with_pint(pint_units, symbol, name)
        for prefix, prefix_name in PREFIX_NAMES.items():
            agrees_with_pint(pint_units, prefix + symbol, prefix_name + name)


@pytest.mark.parametrize(("text", "name"), (PLAIN_NAMES | COMPOUND_NAMES).items())
def test_plain_and_compound_units_are_what_pint_says(pint_units, text, name):
    agrees_with_pint(pint_units, text, name)


NUMBERS = [
    ("12.5 ms", 0.0125), ("12.5ms", 0.0125), ("120 ms", 0.12), ("1.5e-3 s", 0.0015), ("1.5E+3s", 1500.0),
    ("-5 V", -5.0), ("+5 V", 5.0), ("0 m", 0.0), ("12 %", 0.12), ("100%", 1.0), ("0.5", 0.5),
    ("  3 V ", 3.0), ("5/s", 5.0), ("5 1/s", 5.0), ("1/s", 1.0), ("3 LSB", 3.0), ("5 °C", 5.0),
    ("7 min", 420.0),  # a minute, no milli-inch
    ("2 d", 172800.0),  # a day, no prefix
    ("3 h", 10800.0),  # an hour, no prefix
    ("1 Ms", 1e6), ("2 dam", 20.0),
    ("1 inch", 0.0254),  # exact since the international yard and pound agreement of 1959
]  # fmt: skip


@pytest.mark.parametrize(("text", "value"), NUMBERS)
def test_numbers_are_the_nearest_double(text, value):
    # exact rational arithmetic inside, so "120 ms" is the very double 0.12
    assert read_quantity(text).value == value


SYMBOLS = [
    ("min", "s"), ("Pa", "N/m^2"), ("cd", "cd"), ("T", "kg/A/s^2"), ("h", "s"), ("d", "s"), ("mm", "m"),
    ("mol", "mol"), ("PV", "kg*m^2/s^3/A"), ("ft", "m"), ("ml", "m^3"), ("kg", "kg"), ("t", "kg"),
]  # fmt: skip


@pytest.mark.parametrize(("symbol", "dimension"), SYMBOLS)
def test_symbols_that_could_be_split_otherwise(symbol, dimension):
    assert read_quantity(f"1 {symbol}").dimension == read_quantity(f"1 {dimension}").dimension


COUNTED = [
    ("40 Hz", 0, 1, 0, 0), ("40 1/s", 0, 0, 0, 0), ("3 rad/s", 1, 0, 0, 0), ("90 deg", 1, 0, 0, 0),
    ("90°", 1, 0, 0, 0), ("60 rpm", 1, 0, 0, 0), ("2 rev", 1, 0, 0, 0), ("3 N*m/(mrad/s)", -1, 0, 0, 0),
    ("2 kHz/V", 0, 1, 0, 0), ("15 samples", 0, 0, 1, 0), ("1 sample", 0, 0, 1, 0),
    ("2 ms/sample", 0, 0, -1, 0), ("0.5 period", 0, 0, 0, 1), ("2 periods", 0, 0, 0, 1),
    ("12 counts", 0, 0, 0, 0),
]  # fmt: skip


@pytest.mark.parametrize(("text", "angle", "cycles", "samples", "periods"), COUNTED)
def test_angles_cycles_samples_and_periods_are_kept_apart(text, angle, cycles, samples, periods):
    quantity = read_quantity(text)
    assert (quantity.angle, quantity.cycles) == (angle, cycles)
    assert (quantity.samples, quantity.periods) == (samples, periods)


def test_cycles_are_counted_and_turns_are_radians():
    assert read_quantity("40 Hz").value == 40.0
    assert read_quantity("60 rpm").value == pytest.approx(2 * math.pi, rel=1e-15, abs=0)  # one rounding of π
    assert read_quantity("180 deg").value == math.pi


def test_what_was_written_is_kept():
    written, bare, number = read_quantity(" 12.5 m/s/V"), read_quantity("0.6"), read_quantity(4)
    assert (written.text, written.unit, written.stated) == (" 12.5 m/s/V", "m/s/V", True)
    assert (bare.text, bare.unit, bare.stated) == ("0.6", "", False)
    assert (number.text, number.value, number.stated) == ("4", 4.0, False)
    assert read_quantity("3 °C").unit == "°C"
    assert read_quantity("5 %").stated


def test_decibels_become_a_ratio():
    gain = read_quantity("20 dB")
    assert (gain.value, gain.decibel, gain.dimension.is_dimensionless) == (10.0, True, True)
    assert read_quantity("-40 dB").value == pytest.approx(0.01, rel=1e-15, abs=0)
    assert read_quantity("0 dB").value == 1.0
    assert not read_quantity("2").decibel


TRAPS = [
    ("1 000 s", "write 1000 s"), ("1 000 000 s", "write 1000000 s"), ("1_000 s", "write 1000 s"),
    ("1'000 s", "write 1000 s"), ("1,5 s", "write 1.5 s"), ("1,000 s", "write 1.000 s or 1000 s"),
    ("1,000,000 s", "write 1000000 s"), ("1.000.000 s", "write one number"),
    ("2 m 3", "write one number and one unit"), ("2 3 m", "write one number"),
    ("1 1/2 s", "write one number"), ("1/2 s", "write one number"), ("5 m2", "write m^2"),
    ("5 N m", "write N*m"), ("5 Nm", "N*m"), ("5 m**2", "write powers with ^"),
    ("5 m^10", "from m^-9 to m^9"), ("5 m^0.5", "write one number"), ("5 m^(2)", "write powers with ^"),
    ("5 m²³", "from m^-9 to m^9"), ("5 m^2^3", "from m^-9 to m^9"), ("5 m.s", "write one number"),
    ("5 N/((rad/s))", "parentheses one level deep"), ("5 (m", "parentheses"),
    ("5 m)", "write one number"), ("5 m/", "write one number"), ("5 //s", "write one number"),
    ("5 dB/s", "write a ratio"), ("5 kdB", "did you mean"), ("5 ms ms", "write ms*ms"),
    ("9**9**9 m", "write powers with ^"), ("s", "write one number"), ("", "write one number"),
    ("- 5 V", "write one number"), ("--5 V", "write one number"), (".5 s", "write one number"),
    ("5. s", "write one number"), ("0x10", "unknown unit"), ("5 e3", "unknown unit 'e'"),
    ("inf s", "a number is written"), ("-infinity", "a number is written"),
    ("nan", "a number is written"), ("1e400 s", "too large or too small"),
    ("1e-400 s", "too large or too small"), ("1e300 Ym", "too large or too small"),
    ("1e-300 ym", "too large or too small"), ("7000 dB", "too large or too small"),
    ("-7000 dB", "too large or too small"), ("0e999999999 s", "too large or too small"),
    ("5 KHz", "did you mean kHz?"), ("5 MHZ", "did you mean mHz or MHz?"), ("5 sec", "did you mean s?"),
    ("5 seconds", "did you mean s?"), ("5 hz", "Hz"), ("5 in", "inch"), ("5 db", "did you mean dB?"),
    ("5 cycles", "unknown unit"), ("5 kmin", "min"), ("5 kkg", "unknown unit"),
    ("5 zorkmids", "write an SI symbol"),
    ("5 \u2126", "U+2126"),  # the ohm sign, which looks like the Greek letter
    ("5 \u043c", "U+043C"),  # Cyrillic m
    ("\uff15 m", "U+FF15"),  # a full-width digit, which float() would take
    ("\u0665 m", "U+0665"),  # an Arabic digit, likewise
    ("\u22125 m", "U+2212"),  # a minus sign
    ("5\u00a0ms", "U+00A0"),  # a space that does not break
    ("5\tms", "U+0009"), ("5 ms\n", "U+000A"), ("5 \x1b[31mms", "U+001B"), ("5 π", "U+03C0"),
    (True, "type bool"), (None, "type NoneType"), ([1], "type list"), (1j, "type complex"),
    (math.nan, "nan is not finite"), (math.inf, "inf is not finite"), (10**400, "whole number"),
    (5e-324, "too large or too small"),  # has one significant digit left
]  # fmt: skip


@pytest.mark.parametrize(("value", "mend"), TRAPS)
def test_traps_are_refused_with_a_mend(value, mend):
    with pytest.raises(QuantityError) as caught:
        read_quantity(value)
    message = str(caught.value)
    assert mend in message
    assert message.isprintable()  # one line, no escape sequences
    assert caught.value.found and caught.value.allowed and caught.value.mend


def test_a_whole_number_too_long_to_print_is_refused():
    with pytest.raises(QuantityError, match="whole number"):
        read_quantity(-(10**5000))  # str() of it is an error of Python's own


def test_errors_survive_the_way_between_processes():
    error = QuantityError("found", "allowed", "mend")
    assert str(pickle.loads(pickle.dumps(error))) == "found; allowed; mend"


LIMITS = [
    ("120 ms", "s", 0.12), (0.12, "s", 0.12), ("0.12", "s", 0.12), ("40 Hz", "rad/s", 80 * math.pi),
    ("1 rad/s", "Hz", 1 / (2 * math.pi)), ("60 rpm", "Hz", 1.0), ("1 Hz", "rpm", 60.0),
    ("2 kHz/V", "rad/s/V", 4000 * math.pi), ("20 deg", "deg", 20.0), ("1 rad", "deg", 180 / math.pi),
    ("6 dB", "1", 10 ** (6 / 20)), ("6 dB", "", 10 ** (6 / 20)), ("6 dB", "dB", 6.0), (6, "dB", 6.0),
    ("4.6 %", "%", 4.6), (4.6, "%", 4.6), ("0.046", "%", 0.046), ("5 %", "1", 0.05), ("0.6", "1", 0.6),
    (0.6, "1", 0.6), ("1 V/mV", "%", 100000.0), ("15 samples", "sample", 15.0),
    ("0.5 period", "period", 0.5), ("2.5 mm", "µm", 2500.0), ("3 m/s/V", "mm/s/V", 3000.0),
    ("7", "m/s/V", 7.0),
]  # fmt: skip


@pytest.mark.parametrize(("value", "unit", "expected"), LIMITS)
def test_limits_come_in_the_unit_asked_for(value, unit, expected):
    # two roundings: of π or of the power, and of the product
    assert read_in_unit(value, unit) == pytest.approx(expected, rel=4e-16, abs=0)


WRONG_LIMITS = [
    ("1/s", "rad/s", ["1/s", "rad/s", "write rad/s or Hz"]),
    ("5 1/s", "Hz", ["1/s", "Hz", "write rad/s or Hz"]), ("5 Hz", "1/s", ["Hz", "1/s"]),
    ("5 deg", "1", ["deg", "unit 1"]), ("5 m", "s", ["in m;", "in s;"]),
    ("5 V", "1", ["in V;", "unit 1"]), ("15 samples", "s", ["in samples;", "in s;"]),
    ("0.5 period", "sample", ["in period;", "in sample;"]), ("6 dB", "s", ["in dB;", "in s;"]),
    ("6 dB", "%", ["in dB;", "in %;"]), ("5 %", "dB", ["in %;", "in dB;"]),
    ("5 V", "dB", ["in V;", "in dB;"]), ("5 s", "fortnight", ["unknown unit 'fortnight'"]),
    (5, "fortnight", ["unknown unit 'fortnight'"]), (True, "s", ["type bool"]),
    (math.nan, "s", ["not finite"]),
]  # fmt: skip


@pytest.mark.parametrize(("value", "unit", "words"), WRONG_LIMITS)
def test_limits_in_another_unit_are_refused(value, unit, words):
    with pytest.raises(QuantityError) as caught:
        read_in_unit(value, unit)
    assert [word for word in words if word not in str(caught.value)] == []


WRITTEN = [
    (0.0125, "s", "12.5 ms"), (0.99999, "s", "1 s"), (999.96e-6, "s", "1 ms"), (0.0, "s", "0 s"),
    (-0.0, "V", "0 V"), (-0.02, "m", "-20 mm"), (1234.56, "s", "1235 s"), (2.2e-6, "s", "2.2 µs"),
    (1e-30, "s", "1e-30 s"), (1.5e7, "Hz", "15 MHz"), (47000.0, "Ω", "47 kΩ"), (0.001, "kg", "0.001 kg"),
    (123456.0, "rad/s", "123500 rad/s"), (0.04567891, "m/s/V", "0.04568 m/s/V"), (0.6, "1", "0.6"),
    (0.6, "", "0.6"), (4.6, "%", "4.6 %"), (45.0, "deg", "45 deg"), (1.0, "sample", "1 sample"),
    (3.0, "sample", "3 samples"), (0.0, "sample", "0 samples"), (0.5, "period", "0.5 period"),
    (2.0, "period", "2 periods"), (math.inf, "s", "inf s"), (-math.inf, "1", "-inf"),
    (math.nan, "s", "unknown"),
]  # fmt: skip


@pytest.mark.parametrize(("value", "unit", "text"), WRITTEN)
def test_quantities_are_written_for_people(value, unit, text):
    assert format_quantity(value, unit) == text


@NO_DEADLINE
@given(
    size=st.floats(1e-20, 1e20),
    sign=st.sampled_from([-1.0, 1.0]),
    unit=st.sampled_from(["s", "m", "V", "A", "Hz", "kg", "rad/s", "m/s/V", "1", "%", "deg", "sample", "dB"]),
)
@example(size=0.99995, sign=1.0, unit="s")
def test_what_is_written_reads_back(size, sign, unit):
    value = sign * size
    # four significant digits leave half a unit in the fourth, at most 0.5/1000
    assert read_in_unit(format_quantity(value, unit), unit) == pytest.approx(value, rel=5.001e-4, abs=0)


@NO_DEADLINE
@given(st.lists(st.integers(-3, 3), min_size=7, max_size=7))
def test_a_dimension_reads_back_from_its_text(powers):
    dimension = Dimension(tuple(map(Fraction, powers)))
    text = str(dimension)
    quantity = read_quantity("1" if text == "1" else f"1 {text}")
    assert quantity.dimension == dimension
    assert quantity.value == 1.0  # only coherent units


SPELLINGS = (
    "m/s/V V*s/m N/m N*m kg*m^2 m/s^2 V/m m/V 1/V 1/s kg/s N/V Pa/V m^3/s/Pa K/W A*s Ω F H W Pa V*s V^2"
)


@pytest.mark.parametrize("text", SPELLINGS.split())
def test_dimensions_are_spelled_as_engineers_do(text):
    assert str(read_quantity(f"1 {text}").dimension) == text


def test_dimensions_multiply_divide_and_take_roots():
    metre, second = read_quantity("1 m").dimension, read_quantity("1 s").dimension
    assert str(metre / second**2) == "m/s^2"
    assert (metre * second / second / metre).is_dimensionless
    assert not metre.is_dimensionless
    assert (metre**2) ** Fraction(1, 2) == metre
    assert str(metre ** Fraction(1, 2)) == "m^(1/2)"
    assert str(Dimension()) == "1"


@NO_DEADLINE
@given(
    st.text(st.sampled_from("0123456789.,eE+-*/^()· _'msVkgHzradBπµΩ°%²⁻\x00\n\u202e\ud800naif"), max_size=70)
)
@example("1 " + "(ym^9)^9*" * 6 + "m")
def test_any_text_is_read_or_refused_on_one_line(text):
    try:
        assert math.isfinite(read_quantity(text).value)
    except QuantityError as error:
        assert str(error).isprintable()


def calls_made(value) -> int:
    """Function calls, built-in ones included, that reading takes: work that no machine's load can change."""
    calls = 0

    def count(_frame, event, _argument):
        nonlocal calls
        calls += event in ("call", "c_call")

    before = sys.getprofile()
    sys.setprofile(count)
    try:
        read_quantity(value)
    except QuantityError:
        pass
    finally:
        sys.setprofile(before)
    return calls


@pytest.mark.parametrize("piece", ["9", " ", "m*", "(", "\x00", "1,", "1e9"])
def test_a_megabyte_costs_no_more_than_a_line(piece):
    # a refusal by length alone: the length, a message and an exception
    assert calls_made("5 " + piece * 10**6) < 30


HOSTILE = [
    "5 " + "(" * 58, "5 " + "(m" * 29, "5 " + "m*" * 28 + "m", "5 " + "(Ym^9)^9*" * 6 + "m",
    "5 " + "(Ym^9)^9/(ym^9)^9*" * 3 + "m", "5 " + "m" * 58, "5 m^" + "9" * 55, "1e" + "9" * 58,
    "0e-" + "9" * 57, "9" * 60, "1 " + "000 " * 14, "1,1" * 20,
]  # fmt: skip


@pytest.mark.parametrize("text", HOSTILE)
def test_a_hostile_line_costs_little(text):
    # about 60 characters are looked at, each by a few calls; the list of similar symbols has some 700 entries
    assert calls_made(text) < 6000
