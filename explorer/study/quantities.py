"""Quantities: numbers with units from a study file in, SI values with dimensions for study.reading out.

A strict reader: text that could mean two things is refused, never guessed, and nothing is evaluated.

    quantity = number [unit]    number = [+-] digits [. digits] [e [+-] digits]
    unit     = factor {("*" | "·" | "/") factor}, from left to right; "5/s" and "5 1/s" are the same
    factor   = symbol [power] | "(" unit ")" [power], one level deep | "1" before a "/"
    power    = "^" [-] digits | superscript digits, from -9 to 9

Radian, cycle, sample and period count as dimensions of their own: 40 Hz is 80π rad/s, 40 1/s is neither.
Every temperature is a difference: 5 °C is 5 K. A decibel is 20 lg of a ratio and stands alone.
Source: BIPM, The International System of Units (SI Brochure), 9th edition 2019, tables 2, 4, 7 and 8.
"""

from __future__ import annotations

import difflib
import math
import re
import sys
from dataclasses import dataclass
from fractions import Fraction

_NUMBER_FORM = "a number is written like 12, -0.5 or 1.5e-3"
_UNIT_FORM = "a unit is symbols joined by * or /, like ms, m/s/V or kg*m^2"

_NUMBER = re.compile(r"[+-]?[0-9]+(?:\.[0-9]+)?(?:[eE][+-]?([0-9]+))?")
_FACTOR = re.compile(  # a symbol, a group without further parentheses or the 1 of 1/s; then perhaps a power
    r"(?:([A-Za-zµμΩ°%π]+)|\(([^()]+)\)|1(?= */))(?:\^(-?[0-9])(?![0-9])|(⁻?[⁰¹²³⁴⁵⁶⁷⁸⁹])(?![⁰¹²³⁴⁵⁶⁷⁸⁹]))?"
)
_OPERATOR = re.compile(r" *([*·/]) *")
_ONE_PER = re.compile(r"1(?= */)")
_THOUSAND = re.compile(r"(?<=[0-9])[ ,_']([0-9]{3})(?![0-9])")
_SUPERSCRIPTS = str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789")
_BEYOND_ASCII = frozenset("µμΩ°·⁻⁰¹²³⁴⁵⁶⁷⁸⁹")

_BASE = ("m", "kg", "s", "A", "K", "mol", "cd")
_COUNTED = ("rad", "cycle", "sample", "period")  # dimensions here, though not in the SI
# fmt: off
_PREFIXES = {
    "y": -24, "z": -21, "a": -18, "f": -15, "p": -12, "n": -9, "µ": -6, "μ": -6, "u": -6, "m": -3, "c": -2,
    "d": -1, "da": 1, "h": 2, "k": 3, "M": 6, "G": 9, "T": 12, "P": 15, "E": 18, "Z": 21, "Y": 24,
}
# symbols, and how many of what they are, in terms of the rows before
_PREFIXED = (
    ("m", 1, "m"), ("s", 1, "s"), ("A", 1, "A"), ("K", 1, "K"), ("mol", 1, "mol"), ("cd", 1, "cd"),
    ("rad", 1, "rad"), ("g", "1/1000", "kg"), ("Hz", 1, "cycle/s"), ("N", 1, "kg*m/s^2"), ("Pa", 1, "N/m^2"),
    ("J", 1, "N*m"), ("W", 1, "J/s"), ("C", 1, "A*s"), ("V", 1, "W/A"), ("F", 1, "C/V"), ("Ω ohm", 1, "V/A"),
    ("S", 1, "A/V"), ("Wb", 1, "V*s"), ("T", 1, "Wb/m^2"), ("H", 1, "Wb/A"), ("sr", 1, "1"),
    ("lm", 1, "cd*sr"), ("lx", 1, "lm/m^2"), ("l L", "1/1000", "m^3"), ("bar", 100000, "Pa"),
)
_NEVER_PREFIXED = (
    ("min", 60, "s"), ("h", 3600, "s"), ("d", 86400, "s"), ("t", 1000, "kg"), ("inch", "0.0254", "m"),
    ("ft", "0.3048", "m"), ("°C degC", 1, "K"), ("deg °", "1/180", "π*rad"), ("rev", 2, "π*rad"),
    ("rpm", "1/60", "rev/s"), ("%", "1/100", "1"), ("count counts LSB", 1, "1"), ("samples", 1, "sample"),
    ("periods", 1, "period"),
)
_SPELLED_OUT = {"db": "dB", "sec": "s", "second": "s", "hour": "h", "degree": "deg", "percent": "%"}
_ENGINEERED = ("s", "m", "V", "A", "Hz", "N", "W", "J", "Pa", "Ω", "F", "H")
# fmt: on


class QuantityError(ValueError):
    """Text that is no quantity, or one of the wrong kind: what was found, what is allowed, how to mend it."""

    def __init__(self, found: str, allowed: str = "", mend: str = "") -> None:
        super().__init__(found, allowed, mend)
        self.found, self.allowed, self.mend = found, allowed, mend

    def __str__(self) -> str:
        return "; ".join(part for part in (self.found, self.allowed, self.mend) if part)


@dataclass(frozen=True)
class Dimension:
    """Exponents of (m, kg, s, A, K, mol, cd); angles, cycles, samples and periods are not among them."""

    exponents: tuple[Fraction, ...] = (Fraction(0),) * len(_BASE)

    def __mul__(self, other: Dimension) -> Dimension:
        return Dimension(tuple(a + b for a, b in zip(self.exponents, other.exponents, strict=True)))

    def __truediv__(self, other: Dimension) -> Dimension:
        return self * other**-1

    def __pow__(self, power: int | Fraction) -> Dimension:
        return Dimension(tuple(exponent * power for exponent in self.exponents))

    @property
    def is_dimensionless(self) -> bool:
        """True when every exponent is zero."""
        return not any(self.exponents)

    def __str__(self) -> str:
        spellings = [_spelled(self, [])]
        # With a current involved V comes first: m/s/V equals A/N, and nobody would know it again.
        for derived in ("V", "Ω", "F", "H", "N/V", "Pa/V") if self.exponents[3] else ("N", "Pa", "W"):
            for power in (Fraction(1), Fraction(-1), Fraction(2), Fraction(-2)):
                rest = self / _read_unit(derived).dimension ** power
                if not rest.exponents[1]:  # it must take up the mass: m/s^2 is not to become N/kg
                    factors = zip(derived.split("/"), (power, -power), strict=False)
                    spellings.append(_spelled(rest, list(factors)))
        return min(spellings, key=lambda spelling: spelling[0])[1]  # the first of equals


def _spelled(base: Dimension, derived: list[tuple[str, Fraction]]) -> tuple[Fraction, str]:
    """The sum of all powers and the text; products come first, so that "V*s/m" can be read one way only."""
    m, kg, s, ampere, *others = zip(_BASE, base.exponents, strict=True)
    plain = [kg, ampere, m, s, *others]
    above = [(symbol, power) for symbol, power in derived + plain if power > 0]
    below = [(symbol, -power) for symbol, power in plain + derived if power < 0]
    raised = [
        f"{symbol}^{power if power.denominator == 1 else f'({power})'}".removesuffix("^1")
        for symbol, power in above + below
    ]
    text = "/".join(["*".join(raised[: len(above)]) or "1", *raised[len(above) :]])
    return sum((power for _, power in above + below), Fraction(0)), text


@dataclass(frozen=True)
class Quantity:
    """One quantity as read: `value` in SI, never NaN or infinite, Hz in cycles and rad, deg, rpm in radians.

    `angle`, `cycles`, `samples` and `periods` are the exponents of what `dimension` leaves out; for `decibel`
    the value is the ratio. `unit` is the unit as written, "" for a bare number, which is not `stated`.
    """

    value: float
    dimension: Dimension
    text: str
    stated: bool
    angle: Fraction = Fraction(0)
    cycles: Fraction = Fraction(0)
    decibel: bool = False
    unit: str = ""
    samples: Fraction = Fraction(0)
    periods: Fraction = Fraction(0)


def read_quantity(value: str | int | float) -> Quantity:
    """Read "12.5 ms", "0.9 m/s/V", "15 samples" or a bare number, which is in SI and states no unit.

    Raises QuantityError on anything else: NaN, infinity, what a double cannot hold, ambiguous text.
    """
    (exact, written), text = _split(value), str(value)
    if written == "dB":
        return Quantity(
            _nearest(exact, 0, text, decibel=True), Dimension(), text, stated=True, decibel=True, unit=written
        )
    unit = _read_unit(written)
    angle, cycles, samples, periods = (Fraction(exponent) for exponent in unit.counted)
    number, stated = _nearest(exact * unit.scale, unit.pi, text), written != ""
    return Quantity(number, unit.dimension, text, stated, angle, cycles, False, written, samples, periods)


def read_in_unit(value: str | int | float, unit: str) -> float:
    """Read a limit as a number of `unit`: ("120 ms", "s") is 0.12, ("40 Hz", "rad/s") is 80π.

    A bare number, in text or not, is already in `unit`. Unit "1" or "" takes ratios, % and dB; "dB" takes dB.
    Cycles convert to radians and back, 1/s to neither. Raises QuantityError, naming both units if need be.
    """
    target = _Unit() if unit == "dB" else _read_unit(unit)
    exact, written = _split(value)
    if written in ("", unit):
        return _nearest(exact, 0, str(value))
    if written == "dB" and unit in ("", "1"):
        return _nearest(exact, 0, str(value), decibel=True)
    source = _Unit() if written == "dB" else _read_unit(written)
    turns = source.counted[1] - target.counted[1]
    factor = source.times(_read_unit("rev/s/Hz"), turns).times(target, -1)  # each cycle becomes 2π radians
    if any(factor.exponents) or "dB" in (written, unit):
        raise _wrong_unit(str(value), written, unit, same_si=source.dimension == target.dimension)
    return _nearest(exact * factor.scale, factor.pi, str(value))


def format_quantity(value: float, unit: str) -> str:
    """For people: "12.5 ms" for (0.0125, "s"); 4 significant digits; NaN is "unknown", infinity "inf s".

    A single SI symbol gets a prefix for a power of 1000 (seconds only a small one); other units stay.
    """
    if math.isnan(value):
        return "unknown"
    if unit in ("sample", "period", "count") and not 0 < abs(value) <= 1:
        unit += "s"
    rounded = float(f"{value:.4g}") + 0.0  # before the prefix: 0.99999 s is no 1000 ms; + 0.0 mends -0
    if unit in _ENGINEERED and math.isfinite(value):
        thousands = int(f"{rounded:e}".partition("e")[2]) // 3
        prefix = {-5: "f", -4: "p", -3: "n", -2: "µ", -1: "m", 1: "k", 2: "M", 3: "G"}.get(thousands)
        if prefix and not (unit == "s" and thousands > 0):
            rounded, unit = rounded / 1000.0**thousands, prefix + unit
    number = f"{float(f'{rounded:.4g}'):.6g}"
    return number if unit in ("", "1") else f"{number} {unit}"


@dataclass(frozen=True)
class _Unit:
    """scale · π^pi · (SI units and counted dimensions to their exponents); exact, so 120 ms is 0.12 s."""

    scale: Fraction = Fraction(1)
    pi: int = 0
    exponents: tuple[int, ...] = (0,) * len(_BASE + _COUNTED)

    def times(self, other: _Unit, power: int = 1) -> _Unit:
        """The product with a power of another unit."""
        exponents = tuple(a + power * b for a, b in zip(self.exponents, other.exponents, strict=True))
        return _Unit(self.scale * other.scale**power, self.pi + power * other.pi, exponents)

    @property
    def dimension(self) -> Dimension:
        """The exponents of the SI base units."""
        return Dimension(tuple(Fraction(exponent) for exponent in self.exponents[: len(_BASE)]))

    @property
    def counted(self) -> tuple[int, ...]:
        return self.exponents[len(_BASE) :]


def _tabulate() -> dict[str, _Unit]:
    """Every symbol with its unit. None collide (day and inch take no prefix); a whole symbol would win."""
    names = _BASE + _COUNTED
    units = {name: _Unit(exponents=tuple(int(name == other) for other in names)) for name in names}
    units["π"] = _Unit(pi=1)
    for symbols, scale, definition in _PREFIXED + _NEVER_PREFIXED:
        multiple = _Unit(Fraction(scale)).times(_read_unit(definition, units))
        units |= dict.fromkeys(symbols.split(), multiple)
    for prefix, exponent in _PREFIXES.items():
        power_of_ten = _Unit(Fraction(10) ** exponent)
        for symbol in " ".join(symbols for symbols, *_ in _PREFIXED).split():
            units.setdefault(prefix + symbol, power_of_ten.times(units[symbol]))
    del units["π"], units["cycle"]  # only the rows may use them
    return units


def _read_unit(text: str, units: dict[str, _Unit] | None = None) -> _Unit:
    """A unit from its text, by the table unless `units` are given; "" and "1" are the dimensionless one."""
    if text in ("", "1"):
        return _Unit()
    units = _UNITS if units is None else units
    product, sign, position = _Unit(), 1, 0
    while factor := _FACTOR.match(text, position):
        symbol, group, power, superscript = factor.groups()
        if symbol and symbol not in units:
            raise _unknown_symbol(symbol, text)
        unit = units[symbol] if symbol else _read_unit(group or "", units)
        exponent = int(power or (superscript or "1").translate(_SUPERSCRIPTS))
        product, position = product.times(unit, sign * exponent), factor.end()
        if position == len(text):
            return product
        operator = _OPERATOR.match(text, position)
        if operator is None:
            break
        sign, position = -1 if operator[1] == "/" else 1, operator.end()
    raise _not_a_unit(text, position)


def _split(value: str | int | float) -> tuple[Fraction, str]:
    """The exact number and the unit as written. Later steps may trust text to be short and printable."""
    if not isinstance(value, str):
        if isinstance(value, bool) or not isinstance(value, int | float):
            found = f"found a value of type {type(value).__name__}"
            raise QuantityError(found, _NUMBER_FORM, 'write a quantity, like "12.5 ms"')
        if not abs(value) <= sys.float_info.max:  # a whole number's text may be of any length
            raise _out_of_range(str(value) if isinstance(value, float) else "the whole number")
        return Fraction(value), ""
    if len(value) > 60:
        found = f"{value[:20]!r}... has {len(value)} characters"
        raise QuantityError(found, "a quantity has at most 60", "write a shorter one")
    for character in value:
        if not character.isprintable() or not (character.isascii() or character in _BEYOND_ASCII):
            found, allowed = f"{value!r} has U+{ord(character):04X}", "allowed are ASCII and µ Ω ° · ² ³ ⁻"
            raise QuantityError(found, allowed, "type this character afresh (µ may be u, Ω may be ohm)")
    text = value.strip(" ")
    number = _NUMBER.match(text)
    rest = text[number.end() :].lstrip(" ") if number else ""
    if number is None or (rest[:1] in tuple("0123456789.,_'") and not _ONE_PER.match(rest)):
        raise _not_a_number(text)
    if len(number[1] or "") > 3:  # before any arithmetic: Fraction would write out every digit of 0e999999999
        raise _out_of_range(repr(text))
    return Fraction(number[0]), "1" + rest if rest.startswith("/") else rest


def _nearest(exact: Fraction, pi: int, text: str, decibel: bool = False) -> float:
    """The double nearest to exact · π^pi (but for π's own rounding), or the ratio of `exact` decibels."""
    try:
        number = 10.0 ** (float(exact) / 20) if decibel else float(exact) * math.pi**pi
    except OverflowError:
        number = math.inf
    if exact and not sys.float_info.min <= abs(number) <= sys.float_info.max:
        raise _out_of_range(repr(text))
    return float(number)


def _not_a_number(text: str) -> QuantityError:
    """Text that does not begin with one number, with the mend for the usual slips."""
    mend = "write one number and one unit, like 12.5 ms"
    if text.count(",") == 1:
        mend = f"write {text.replace(',', '.')}"  # and 1,000 may have meant either
        mend += f" or {text.replace(',', '')}" if _THOUSAND.search(text) else ""
    elif _THOUSAND.search(text):
        mend = "write " + _THOUSAND.sub(r"\1", text)
    return QuantityError(f"{text!r} does not begin with one number", _NUMBER_FORM, mend)


def _not_a_unit(text: str, position: int) -> QuantityError:
    """A unit that cannot be read on at `position`."""
    rest, before = text[position:].lstrip(" "), text[:position].rstrip(" ")
    found = f"the unit {text!r} " + (f"cannot be read from {rest!r} on" if rest else "ends too early")
    mend = "write one number and one unit, like 12.5 ms"
    if rest.startswith("("):
        mend = "use parentheses one level deep, after * or /"
    elif rest[:1] in tuple("*^⁻⁰¹²³⁴⁵⁶⁷⁸⁹"):
        mend = "write powers with ^, from m^-9 to m^9"
    elif text[position : position + 1].isdigit() and before[-1:].isalpha():
        mend = f"write {before}^{rest} for a power"
    elif rest[:1].isalpha():
        mend = f"write {before}*{rest} for a product"
    return QuantityError(found, _UNIT_FORM, mend)


def _unknown_symbol(symbol: str, text: str) -> QuantityError:
    """A symbol that is in no table, with those it may have been meant for."""
    if symbol == "dB":
        return QuantityError(f"{text!r} combines dB with another unit", "dB stands alone", "write a ratio")
    word = symbol.casefold().removesuffix("s")
    meant = [_SPELLED_OUT[word]] if word in _SPELLED_OUT else []
    meant = meant or [name for name in _UNITS if name.casefold() == symbol.casefold()][:2]
    if symbol[-1] in "ms" and symbol[:-1] in _UNITS:
        meant.append(f"{symbol[:-1]}*{symbol[-1]}")  # Nm, Vs
    meant = meant or difflib.get_close_matches(symbol[:10], [name for name in _UNITS if len(name) > 2], n=3)
    found = f"unknown unit {symbol!r}" + (f" in {text!r}" if symbol != text else "")
    mend = f"did you mean {' or '.join(meant)}?" if meant else "write an SI symbol"
    return QuantityError(found, _UNIT_FORM, mend)


def _wrong_unit(text: str, written: str, unit: str, same_si: bool) -> QuantityError:
    """A quantity that is no multiple of `unit`."""
    allowed, mend = f"allowed is a quantity in {unit}", f"write it in {unit}"
    if unit in ("", "1"):
        allowed, mend = "allowed is a ratio (unit 1)", "write a number without a unit, or in %"
    elif same_si and unit in ("rad/s", "Hz", "rpm"):
        allowed, mend = f"{allowed}, and the radian counts as a dimension", "write rad/s or Hz"
    return QuantityError(f"{text!r} is in {written}", allowed, mend)


def _out_of_range(found: str) -> QuantityError:
    allowed = "allowed are 0 and sizes from 1e-307 to 1e307"
    return QuantityError(f"{found} is not finite, too large or too small", allowed, "write such a number")


_UNITS = _tabulate()
