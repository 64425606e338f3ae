"""Loops to compare: each states its numbers once and gives both the study text and the exact coefficients.

Neighbours: reference.py answers them at 40 digits, test_oracle.py compares the program with that answer.

All data are invented. Numbers are decimal texts: they go unchanged into the study (bare, so SI) and are read
as exact decimals by the reference. Gains are chosen so that no closed-loop pole is marginal and none is
multiple, except where `multiple` says so: elsewhere a relative change of the data changes no measure by more
than 3000 times as much, so that 1e-9 is within reach of double precision.
"""

from collections.abc import Callable
from dataclasses import dataclass

from mpmath import mp

from . import reference
from .reference import exactly, multiply, number, polynomial

Factors = tuple[tuple[str, ...], ...]  # ((coefficients, descending), ...): their product


@dataclass(frozen=True)
class Sensor:
    """Text as a study states it, and the same as coefficients in s."""

    text: str
    numerator: tuple
    denominator: tuple


@dataclass(frozen=True)
class Compensator:
    """Text as a study states it, its conversion, and the same as coefficients in z at a gain and a period."""

    text: str
    in_z: Callable
    conversion: str = ""


@dataclass(frozen=True)
class Loop:
    """One loop; the plant is a product of factors in s, or in z with the period as `sampled_at`."""

    name: str
    numerator: Factors
    denominator: Factors
    period: str
    gains: tuple[str, ...]
    compensator: Compensator
    dead_time: str = "0"
    computing_delay: str = "0"  # seconds, or "<number> period"
    sensor: Sensor = Sensor("1", (1,), (1,))
    parameters: tuple[tuple[str, str], ...] = ()  # names that may stand for coefficients or the dead time
    in_z: bool = False
    multiple: bool = False

    @exactly
    def total_delay(self):
        """Dead time of the plant and computing delay together, in s."""
        value, _, unit = self.computing_delay.partition(" ")
        computing = number(value) * (number(self.period) if unit == "period" else 1)
        return number(dict(self.parameters).get(self.dead_time, self.dead_time)) + computing

    def plant(self):
        """Numerator and denominator between the processor's output and its sampler, without the dead time."""
        named = dict(self.parameters)
        top, bottom = (
            product([[named.get(value, value) for value in factor] for factor in side])
            for side in (self.numerator, self.denominator)
        )
        return multiply(top, self.sensor.numerator), multiply(bottom, self.sensor.denominator)

    def sampled(self):
        """The plant as the processor sees it."""
        sample = reference.sampled_in_z if self.in_z else reference.sample
        return sample(*self.plant(), self.total_delay(), self.period)

    def study(self):
        """The study file."""
        variable = "z" if self.in_z else "s"
        transfer = fraction_text(self.numerator, self.denominator, variable)
        lines = [f'title = "{self.name}"', "", "[plant]", f'transfer = "{transfer}"']
        named = self.dead_time in dict(self.parameters)
        lines.append(f'dead_time = "{self.dead_time}"' if named else f"dead_time = {self.dead_time}")
        if self.in_z:
            lines.append(f'sampled_at = "{number(self.period) * 1000} ms"')
        lines += ["", "[plant.parameters]"]
        lines += [f"{name} = {{ nominal = {value} }}" for name, value in self.parameters]
        lines += ["", "[loop]", f'compensator = "{self.compensator.text}"']
        if self.compensator.conversion:
            lines.append(f'conversion = "{self.compensator.conversion}"')
        in_periods = self.computing_delay.endswith("period")
        delay = f'"{self.computing_delay}"' if in_periods else self.computing_delay
        lines.append(f"computing_delay = {delay}")
        if self.sensor.text != "1":
            lines.append(f'sensor = "{self.sensor.text}"')
        lines += ["", "[sweep]", f"gain = {{ values = [{', '.join(self.gains)}] }}"]
        if not self.in_z:
            lines.append(f"period = {{ values = [{self.period}] }}")
        lines.append("scenarios = { interior = 0, corners = false, seed = 1, tolerance_scales = [0, 1.0] }")
        return "\n".join(lines) + "\n" + REQUIREMENTS


MEASURES = (
    "stability",
    "spectral radius",
    "damping ratio",
    "natural frequency",
    "settling time",
    "time to peak",
    "overshoot",
)  # in the order of REQUIREMENTS

REQUIREMENTS = """
[[requirements]]
measure = "stability"

[[requirements]]
measure = "spectral radius"
at_most = 0.99

[[requirements]]
measure = "damping ratio"
at_least = 0.4

[[requirements]]
measure = "natural frequency"
at_least = 0.5

[[requirements]]
name = "settled, by the poles"
measure = "settling time"
basis = "poles"
at_most = 20

[[requirements]]
name = "peak, by the poles"
measure = "time to peak"
basis = "poles"
at_most = 5

[[requirements]]
name = "overshoot, by the poles"
measure = "overshoot"
basis = "poles"
at_most = 25
"""


def polynomial_text(coefficients, variable):
    """Text of a polynomial: ("0.1", "-1", "2") in s is 0.1*s^2 - s + 2."""
    text = ""
    for exponent, value in zip(range(len(coefficients) - 1, -1, -1), coefficients, strict=True):
        if value == "0":
            continue
        sign, size = ("-", value[1:]) if value.startswith("-") else ("+", value)
        factors = [] if size == "1" and exponent else [size]
        factors += [variable if exponent == 1 else f"{variable}^{exponent}"] if exponent else []
        term = "*".join(factors)
        text += f" {sign} {term}" if text else ("-" if sign == "-" else "") + term
    return text


def product_text(factors, variable):
    """Text of a product of factors, equal ones written as a power."""
    parts = []
    for factor in dict.fromkeys(factors):
        repeats = factors.count(factor)
        parts.append(f"({polynomial_text(factor, variable)})" + (f"^{repeats}" if repeats > 1 else ""))
    return "*".join(parts)


def fraction_text(numerator, denominator, variable):
    """Text of a quotient of two products."""
    return f"{product_text(numerator, variable)}/({product_text(denominator, variable)})"


def factors(text):
    """Factors from their descending coefficients: "1 0 * 0.1 1" is s*(0.1*s + 1)."""
    return tuple(tuple(part.split()) for part in text.split("*"))


def product(given):
    """Exact coefficients of a product of factors."""
    return multiply(*[polynomial(factor) for factor in given])


def sensor(numerator, denominator):
    """Sensor given by factors in s."""
    top, bottom = factors(numerator), factors(denominator)
    return Sensor(fraction_text(top, bottom, "s"), tuple(product(top)), tuple(product(bottom)))


@exactly
def low_pass(hertz):
    """First-order sensor filter given by its corner frequency."""
    return Sensor(f"1/(s/(2*pi*{hertz}) + 1)", (mp.one,), (1 / (2 * mp.pi * number(hertz)), mp.one))


def proportional():
    """The gain alone."""
    return Compensator("gain", lambda gain, period: ([number(gain)], [mp.one]))


def integral():
    """Gain times the sum of the errors times the period, this sample's included."""
    return Compensator(
        "gain*period*z/(z - 1)",
        exactly(lambda gain, period: ([number(gain) * number(period), mp.zero], [mp.one, -mp.one])),
    )


def proportional_integral(time):
    """1 + T/(time (z - 1)) = (z - 1 + T/time)/(z - 1)."""

    @exactly
    def in_z(gain, period):
        gain, ratio = number(gain), number(period) / number(time)
        return [gain, gain * (ratio - 1)], [mp.one, -mp.one]

    return Compensator(f"gain*(1 + period/({time}*(z - 1)))", in_z)


def lead(time, pole):
    """1 + r (z - 1)/(z - pole) = ((1 + r) z - (pole + r))/(z - pole), r = time/T."""

    @exactly
    def in_z(gain, period):
        gain, ratio, pole_at = number(gain), number(time) / number(period), number(pole)
        return [gain * (1 + ratio), -gain * (pole_at + ratio)], [mp.one, -pole_at]

    return Compensator(f"gain*(1 + {time}*(z - 1)/(period*(z - {pole})))", in_z)


def fixed(numerator, denominator):
    """Factors in z that do not change with the period."""
    top, bottom = factors(numerator), factors(denominator)
    text = f"gain*{fraction_text(top, bottom, 'z')}"
    return Compensator(text, lambda gain, period: (multiply([number(gain)], product(top)), product(bottom)))


def converted(numerator, denominator, conversion, exact_at=None):
    """Factors in s, brought to z at each period."""
    convert = {
        "backward difference": reference.backward_difference,
        "bilinear": reference.bilinear,
        "matched poles and zeros": reference.matched,
    }[conversion]
    top, bottom = factors(numerator), factors(denominator)
    options = {"exact_at": exact_at} if exact_at else {}

    def in_z(gain, period):
        return convert(multiply([number(gain)], product(top)), product(bottom), period, **options)

    wording = f"{conversion}, exact at {exact_at} Hz" if exact_at else conversion
    return Compensator(f"gain*{fraction_text(top, bottom, 's')}", in_z, wording)


def loop(name, numerator, denominator, period, gains, compensator=None, **rest):
    """Loop from texts; proportional when no compensator is named."""
    return Loop(
        name,
        factors(numerator),
        factors(denominator),
        period,
        tuple(gains.split()),
        compensator or proportional(),
        **rest,
    )


BILINEAR, BACKWARD, MATCHED = "bilinear", "backward difference", "matched poles and zeros"
LAG4 = "1 1 * 1 1 * 1 1 * 1 1"
SERVO = "1 0 * 0.1 1"

# One loop a line or two: name, numerator, denominator, period, gains, then the rest.
# fmt: off
FIRST_ORDER = [
    loop("lag, slow sampling to fast", "1", "1 1", "0.1", "0.5 15 50"),
    loop("lag, period ten time constants", "1", "1 1", "10", "0.5 3"),
    loop("lag, period 1e-5 of the time constant", "2", "0.5 1", "0.000005", "0.7 40"),
    loop("lag with names", "strength", "lag 1", "0.02", "0.5 2", dead_time="transport",
         parameters=(("strength", "1.7"), ("lag", "0.13"), ("transport", "0.027"))),
    loop("unstable lag", "1", "1 -1", "0.2", "0.5 2 30"),
    loop("integrator", "1", "1 0", "0.3", "1 5 9"),
    loop("lag, fractional delay", "1", "1 1", "0.25", "0.6 1.4 6", dead_time="0.37"),
    loop("lag, delay below one sample", "3", "0.4 1", "0.3", "0.2 0.9", computing_delay="0.11"),
    loop("lag, whole delay", "1", "1 1", "0.25", "0.6 1.4 6", dead_time="0.5"),
    loop("lag, delay 7.3 samples", "1", "1 1", "0.1", "0.8 1.5 4", dead_time="0.73"),
    loop("lag, delay 10 samples", "1", "1 1", "0.07", "0.5 1.3 5", dead_time="0.7"),
    loop("integrator, delay 5.5 samples", "1", "1 0", "0.2", "0.2 0.6 3", dead_time="1",
         computing_delay="0.1"),
    loop("lag, fast sampling, delay 1.5 samples", "1", "1 1", "0.0001", "3 500",
         computing_delay="1.5 period"),
    loop("lag through a matched lag-lead", "1", "1 1", "0.1", "0.7 4",
         converted("0.5 1", "2 1", MATCHED)),
]

SECOND_ORDER = [
    loop("servo", "1", SERVO, "0.02", "2 20 70"),
    loop("servo, computing delay half a period", "1", SERVO, "0.02", "2 20", computing_delay="0.5 period"),
    loop("servo, period 1e-5 of the time constant", "1", SERVO, "0.000001", "1.5 30"),
    loop("servo, fast, delay 2.25 samples", "1", SERVO, "0.00001", "1.5 30", dead_time="0.0000225"),
    loop("servo, sensor filter", "0.9", "1 0 * 0.037 1", "0.004", "8 60", dead_time="0.0012",
         computing_delay="0.0004", sensor=low_pass("300")),
    loop("servo, lead in z", "0.9", "1 0 * 0.037 1", "0.004", "8 40", lead("0.02", "0.4"),
         dead_time="0.0012", computing_delay="0.0004"),
    loop("servo, PI", "1", SERVO, "0.02", "1.5 6", proportional_integral("2.5")),
    loop("double integrator, proportional", "1", "1 0 * 1 0", "0.1", "0.5 3"),
    loop("double integrator, lead in z", "1", "1 0 * 1 0", "0.1", "0.7 4 60", lead("1.1", "0.3")),
    loop("double integrator, bilinear lead", "1", "1 0 * 1 0", "0.1", "0.5 3 90",
         converted("1.5 1", "0.15 1", BILINEAR)),
    loop("double integrator, matched lead, delay", "2", "1 0 * 1 0", "0.1", "0.2 0.9 5",
         converted("1.5 1", "0.15 1", MATCHED), dead_time="0.13"),
    loop("double integrator, backward lead, fast", "1", "1 0 * 1 0", "0.00001", "0.5 3",
         converted("1.5 1", "0.15 1", BACKWARD)),
    loop("light resonance, integral", "1", "1 0.02 1", "0.1", "0.01 0.05", integral()),
    loop("light resonance, proportional, long delay", "1", "1 0.02 1", "0.3", "0.03 0.4", dead_time="1.7"),
    loop("resonance above half the sampling rate", "1", "0.0004 0.0008 1", "0.1", "0.05 0.9", integral()),
    loop("aliased resonance, fractional delay", "1", "0.0004 0.0008 1", "0.09", "0.02 0.6",
         proportional_integral("0.5"), computing_delay="0.031"),
    loop("wrong way first", "-0.5 1", "1 1 * 0.2 1", "0.1", "0.4 1.5 4"),
    loop("wrong way first, PI, delay", "-0.5 1", "1 1 * 0.2 1", "0.1", "0.2 0.6",
         proportional_integral("1.2"), dead_time="0.25"),
    loop("feedthrough, no delay", "1 2 * 1 3", "1 1 * 0.5 2", "0.2", "0.3 4"),
    loop("feedthrough, delay of exactly 3 samples", "1 2", "1 1", "0.1", "0.2 0.35 1.4",
         dead_time="0.1", computing_delay="0.2"),
    loop("feedthrough, resonant, fractional delay", "1 0.1 4", "1 0.2 1", "0.25", "0.05 0.4",
         computing_delay="0.1"),
    loop("feedthrough, whole delay, lead", "1 1.2 4", "1 2.2 1", "0.1", "0.05 0.11", lead("0.1", "0.5"),
         computing_delay="1 period"),
    loop("wide time constants, medium period", "1", "1000 1 * 0.001 1", "0.01", "30 5000"),
    loop("wide time constants, fast", "1", "1000 1 * 0.001 1", "0.0001", "30 900000"),
    loop("wide time constants, period 1e-5 of the fastest", "1", "1000 1 * 0.001 1", "0.00000001",
         "30 900000"),
    loop("light resonance, period 1e-5, PI", "1", "1 0.02 1", "0.00001", "0.4 3", proportional_integral("40"),
         dead_time="0.00003"),
    loop("feedthrough, period 1e-5, long delay", "0.1 2", "0.5 1", "0.000005", "0.7 4",
         dead_time="0.0000325"),
    loop("levitation, PD by backward difference", "25", "1 -5 * 1 5", "0.01", "1.6 4 40",
         converted("0.2 1", "0.01 1", BACKWARD), computing_delay="0.003"),
]

THIRD_ORDER = [
    loop("triple integrator, double lead", "1", "1 0 * 1 0 * 1 0", "0.05", "0.2 2",
         converted("2 1 * 2 1", "0.1 1 * 0.1 1", BILINEAR)),
    loop("three equal lags", "1", "1 1 * 1 1 * 1 1", "0.4", "0.5 3 12"),
    loop("three equal lags, period 1e-5", "1", "1 1 * 1 1 * 1 1", "0.00001", "3 12",
         computing_delay="1 period"),
    loop("three lags, period ten of the fastest", "1", "1 1 * 0.4 1 * 0.1 1", "1", "0.5 2"),
    loop("servo with armature, notch exact at its resonance", "4", "1 0 * 0.004 0.002 1", "0.01", "0.1 0.9",
         converted("0.004 0.01 1", "0.004 0.12 1", BILINEAR, exact_at="2.5")),
    loop("servo with armature, matched notch", "4", "1 0 * 0.004 0.002 1", "0.02", "0.1 0.9",
         converted("0.004 0.01 1", "0.004 0.12 1", MATCHED), computing_delay="0.012"),
    loop("PI in s, matched", "2", "1 1 * 0.3 1 * 0.05 1", "0.05", "0.4 2.5",
         converted("1.2 1", "1 0", MATCHED)),
    loop("low pass in s, matched, two zeros at infinity", "1", "1 0.4 * 0.2 1 * 0.05 1", "0.04", "0.3 3",
         converted("1", "0.02 0.2 1", MATCHED)),
    loop("double integrator in the compensator, matched", "0.5", "0.4 1 * 0.03 1 * 0.02 1", "0.05", "0.3 2",
         converted("3 1 * 2 1", "1 0 * 1 0", MATCHED)),
    loop("differentiating compensator, matched", "2 1", "1 0.3 * 1 0.2 * 0.3 1", "0.1", "0.9 3",
         converted("1 0", "0.2 1 * 0.1 1", MATCHED)),
    loop("unstable lag, actuator and sensor", "3", "1 -2 * 0.05 1", "0.01", "0.4 3 20",
         sensor=sensor("0.002 1", "0.01 1"), dead_time="0.004"),
    loop("triple integrator, period 1e-5, matched double lead, delay", "1", "1 0 * 1 0 * 1 0", "0.000001",
         "0.2 2", converted("2 1 * 2 1", "0.1 1 * 0.1 1", MATCHED), dead_time="0.0000084"),
    loop("wide time constants, three", "1", "1000 1 * 1 1 * 0.001 1", "0.002", "200 9000"),
    loop("wide time constants, three, period 1e-5", "1", "1000 1 * 1 1 * 0.001 1", "0.00000001", "200 9000"),
]

HIGHER_ORDER = [
    loop("four equal lags", "1", LAG4, "0.5", "0.5 2 9"),
    loop("four equal lags, period 1e-5", "1", LAG4, "0.00001", "2 9"),
    loop("four equal lags, delay 8.6 samples", "1", LAG4, "0.25", "0.3 1.1", dead_time="2.15"),
    loop("four lags, lead exact at a frequency", "1", "1 1 * 0.5 1 * 0.2 1 * 0.1 1", "0.1", "0.5 3 14",
         converted("0.5 1", "0.05 1", BILINEAR, exact_at="0.4")),
    loop("two resonances", "1", "1 0.02 1 * 0.04 0.004 1", "0.2", "0.02 0.3", integral(), dead_time="0.05"),
    loop("two masses on a spring", "20", "1 0 * 1 0 * 1 0.1 40", "0.05", "0.05 0.4", lead("1.2", "0.2"),
         computing_delay="0.02"),
    loop("five lags, PI", "1", "2 1 * 1 1 * 0.5 1 * 0.25 1 * 0.125 1", "0.2", "0.4 1.5",
         proportional_integral("3"), computing_delay="0.05"),
    loop("five lags, fast", "1", "2 1 * 1 1 * 0.5 1 * 0.25 1 * 0.125 1", "0.0000125", "2 20"),
    loop("carriage with two resonances", "3 1 * 900", "1 0 * 1 0.5 90 * 1 1 400", "0.02", "0.7 6",
         converted("0.4 1", "0.04 1", BACKWARD), dead_time="0.013"),
    loop("six equal lags", "1", LAG4 + " * 1 1 * 1 1", "0.6", "0.4 1.6 5"),
    loop("six equal lags, period 1e-5", "1", LAG4 + " * 1 1 * 1 1", "0.00001", "1.6 5"),
    loop("six equal lags, period 1e-5, PI, delay", "1", LAG4 + " * 1 1 * 1 1", "0.00001", "0.7 3",
         proportional_integral("6"), dead_time="0.000035"),
    loop("order six, unstable, fast, fractional delay", "1",
         "2.24 1 * 0.0145 0.00241 1 * 0.299 1 * 0.649 -1 * 1 0", "0.0000297", "0.0831 0.7",
         dead_time="0.0000102"),
    loop("order five, unstable twice, fast, PI, fractional delay", "1",
         "1.85 0.0272 1 * 0.146 -1 * 8.71 -1 * 0.227 1", "0.00000609", "0.119 2",
         proportional_integral("3.49"), dead_time="0.0000138"),
    loop("six lags, period ten of the fastest", "2", "1 1 * 0.8 1 * 0.6 1 * 0.4 1 * 0.2 1 * 0.1 1", "1",
         "0.2 1.2", dead_time="5.3"),
    loop("six lags, wide", "1", "100 1 * 20 1 * 4 1 * 0.8 1 * 0.16 1 * 0.03 1", "0.05", "3 40",
         dead_time="0.08"),
    loop("six lags, wide, fast", "1", "100 1 * 20 1 * 4 1 * 0.8 1 * 0.16 1 * 0.03 1", "0.0000003", "3 40",
         sensor=sensor("1", "0.05 1")),
    loop("three resonances, period ten of the fastest", "1", "1 0.1 1 * 0.1 0.05 1 * 0.0004 0.01 1", "0.5",
         "0.05 0.6", proportional_integral("2"), computing_delay="0.1 period"),
]

GIVEN_IN_Z = [
    loop("pole and integrator in z", "1 0.8", "1 -1 * 1 -0.6", "0.01", "0.02 0.2 2", in_z=True),
    loop("in z, two samples of delay", "1 0.8", "1 -1 * 1 -0.6", "0.01", "0.02 0.2", in_z=True,
         dead_time="0.02"),
    loop("in z, delays of plant and processor", "0.1 0.05", "1 -1.7 0.8", "0.01", "0.2 1.6", in_z=True,
         dead_time="0.03", computing_delay="1 period"),
    loop("in z, with compensator", "0.3 0.2", "1 -1.2 0.52 * 1 -0.9", "0.01", "0.1 0.8",
         fixed("1 -0.8", "1 -0.1"), in_z=True),
    loop("in z, feedthrough and a zero at the origin", "0.5 0.2 0", "1 -0.4 0.3", "0.01", "0.7 5",
         in_z=True),
    loop("in z, seven samples of delay, PI", "0.4", "1 -0.6", "0.01", "0.2 0.9",
         proportional_integral("0.05"), in_z=True, dead_time="0.07"),
    loop("in z, order six", "0.1 0.02 0.01", "1 -1.5 0.7 * 1 -0.8 0.4 * 1 0.3 * 1 -0.5", "0.01", "0.3 4",
         in_z=True),
]

# Poles that are multiple, exactly or but for the rounding of the data.
MULTIPLE = [
    loop("four equal lags, no gain", "1", LAG4, "0.5", "0", multiple=True),
    loop("three equal lags, hardly any gain", "1", "1 1 * 1 1 * 1 1", "0.3", "0.000000001", multiple=True),
    loop("two equal resonances, no gain", "1", "1 0.4 1 * 1 0.4 1", "0.3", "0", multiple=True),
    loop("servo next to critical damping, fast", "1", SERVO, "0.000001", "2.5", multiple=True),
    # (z - 0.7)(z - 0.9) + 0.01 = (z - 0.8)^2
    loop("in z, double real pole", "1", "1 -0.7 * 1 -0.9", "0.01", "0.01", in_z=True, multiple=True),
    # (z^2 - 1.4 z + 0.74)^2 = z^4 - 2.8 z^3 + 3.44 z^2 - 2.072 z + 0.5476 at gain 0.7
    loop("in z, double pair", "1", "1 -2.8 3.44 -2.072 -0.1524", "0.01", "0.7", in_z=True, multiple=True),
]
# fmt: on

LOOPS = FIRST_ORDER + SECOND_ORDER + THIRD_ORDER + HIGHER_ORDER + GIVEN_IN_Z + MULTIPLE
