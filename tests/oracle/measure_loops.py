"""Loops whose responses and frequency measures are compared, and the study that asks for every measure of one.

Neighbours: loops.py (what a loop is), answers.py (the exact answer), measured.json (that answer as data),
test_measures.py.

All data are invented, and none sits on a jump: a relative change of the gain by up to 1e-5 moves no measure by more
than eleven times as much, so that no settling time is decided by a peak that touches its band and no margin by two
crossings that meet. (One exception: more gain makes "integrator, all poles at zero" overshoot and peak.)
"""

from collections.abc import Callable
from dataclasses import dataclass
from decimal import Decimal

from .loops import (
    BACKWARD,
    BILINEAR,
    LAG4,
    MATCHED,
    SERVO,
    Compensator,
    converted,
    fixed,
    integral,
    lead,
    loop,
    low_pass,
    proportional_integral,
    sensor,
)
from .reference import exactly, number

PER_CENT = 100


@dataclass(frozen=True)
class Asked:
    """One requirement of the study: its name, the measure, further keys, a limit with its sense, how it is compared.

    size: what a value near 0 is compared with; without one, an exact 0 must come out as 0.
    """

    name: str
    measure: str
    keys: str
    at_most: bool
    limit: str
    tolerance: float = 1e-9
    size: float | None = None

    def text(self):
        lines = ["[[requirements]]", f'name = "{self.name}"', f'measure = "{self.measure}"']
        lines += [self.keys] if self.keys else []
        return "\n".join([*lines, f"{'at_most' if self.at_most else 'at_least'} = {self.limit}", ""])

    @property
    def bad_end(self):
        """Value of an unstable loop."""
        return float("inf") if self.at_most else float("-inf")


RESPONSE = 'basis = "response"'
TIME = 1e-6  # relative, of times read off a response
# fmt: off
ASKED = (
    Asked("overshoot", "overshoot", RESPONSE, True, '"25 %"', size=PER_CENT),
    Asked("time to peak", "time to peak", RESPONSE, True, '"5 s"', TIME),
    Asked("undershoot", "undershoot", RESPONSE, True, '"25 %"', size=PER_CENT),
    Asked("rise time", "rise time", RESPONSE, True, '"5 s"', TIME),
    Asked("samples per rise time", "samples per rise time", RESPONSE, False, "4", TIME),
    Asked("settling time", "settling time", f'{RESPONSE}\nband = "2 %"', True, '"20 s"', TIME),
    Asked("settling time, 5 %", "settling time", f'{RESPONSE}\nband = "5 %"', True, '"20 s"', TIME),
    Asked("excess between samples", "excess between samples", RESPONSE, True, '"5 %"', size=PER_CENT),
    Asked("error after a step", "steady-state error", f'{RESPONSE}\ninput = "step"', True, "0.1", size=1),
    Asked("error after a ramp", "steady-state error", f'{RESPONSE}\ninput = "ramp"', True, "0.5", size=1),
    Asked("peak effort", "peak effort", RESPONSE, True, "10"),
    Asked("load step deviation", "load step deviation", RESPONSE, True, "2"),
    Asked("gain margin", "gain margin", "", False, "2"),
    Asked("gain reduction margin", "gain reduction margin", "", True, "0.5"),
    Asked("phase margin", "phase margin", "", False, '"40 deg"'),
    Asked("delay margin", "delay margin", "", False, '"0.05 s"'),
    Asked("modulus margin", "modulus margin", "", False, "0.5"),
    Asked("resonance peak", "resonance peak", "", True, "1.5"),
    Asked("crossover frequency", "crossover frequency", "", False, '"1 rad/s"'),
    Asked("bandwidth", "bandwidth", "", False, '"1 rad/s"'),
    Asked("phase lost to sampling", "phase lost to sampling", "", True, '"20 deg"'),
    Asked("noise gain", "noise gain", "", True, "10"),
    Asked("processor load", "processor load", "", True, '"60 %"'),
)
# fmt: on
SHARE = Decimal("0.3")  # of the period: the execution time


def asked_of(one):
    """Requirements of a loop; a plant given in z says nothing about the time between its samples."""
    return [asked for asked in ASKED if not (one.in_z and asked.keys)]


def study(one):
    """Study file of a loop with every requirement."""
    text = one.study().partition("\n[[requirements]]")[0]
    head, sweep, tail = text.partition("\n[sweep]")
    head += f"execution_time = {Decimal(one.period) * SHARE:f}\n"
    return "\n".join([head + sweep + tail, *[asked.text() for asked in asked_of(one)]])


@dataclass(frozen=True)
class Partly(Compensator):
    """Compensator only a part of which follows the gain; apart: numerator at a period of the part that does not."""

    apart: Callable = None


def rate_feedback(factor):
    """Gain + factor (z - 1)/(T z): the rate is fed back whatever the gain."""

    @exactly
    def apart(period):
        rate = number(factor) / number(period)
        return [rate, -rate]

    @exactly
    def in_z(gain, period):
        rate, less = apart(period)
        return [number(gain) + rate, less], [number(1), number(0)]

    return Partly(f"gain + {factor}*(z - 1)/(period*z)", in_z, "", apart)


# One loop a line or two: name, numerator, denominator, period, gains, then the rest.
# fmt: off
FIRST_ORDER = [
    loop("lag", "1", "1 1", "0.1", "2 25"),
    loop("lag with names", "strength", "lag 1", "0.02", "1.6", dead_time="transport",
         parameters=(("strength", "1.7"), ("lag", "0.13"), ("transport", "0.027"))),
    loop("lag, fractional delay", "1", "1 1", "0.25", "1.4", dead_time="0.37"),
    loop("lag, whole delay, PI", "1", "1 1", "0.25", "0.9", proportional_integral("0.8"), dead_time="0.5"),
    loop("lag, delay of 20 samples", "1", "1 1", "0.05", "0.8", dead_time="1"),
    loop("lag, delay of 20.3 samples, PI", "1", "1 1", "0.05", "0.6", proportional_integral("1.1"),
         dead_time="1.015"),
    loop("lag, integral action, ripple under a ramp", "1", "1 1", "0.5", "0.8", integral()),
    loop("lag, steep integral action, ripple under a ramp", "1", "0.2 1", "1", "1.3", integral()),
    loop("lag, double integral action, no error at the samples under a ramp", "1", "1 1", "0.5", "1.5",
         fixed("1 -0.8 * 1 -0.6", "1 -1 * 1 -1")),
    loop("unstable lag", "1", "1 -1", "0.2", "0.5 2.3"),
    loop("unstable lag, delay", "1", "1 -1", "0.1", "2", dead_time="0.13"),
    loop("integrator, all poles at zero", "1", "1 0", "0.25", "4"),
    loop("integrator, double pole", "1", "1 0", "0.25", "1", computing_delay="1 period"),
    loop("integrator, delay of 5.5 samples", "1", "1 0", "0.2", "0.4", dead_time="1", computing_delay="0.1"),
    loop("integrator, triple pole", "1", "1 0", "1", "1", fixed("0.28 -0.064", "1 -0.2"),
         computing_delay="1 period"),
    loop("lag, period 1e-5 of the time constant", "2", "0.5 1", "0.000005", "0.7",
         proportional_integral("0.2"), dead_time="0.0000137"),
    loop("lag, slow tail", "1", "1 1", "0.05", "12", fixed("1 -0.998", "1 -1")),
    loop("lag, very slow tail", "1", "1 1", "0.02", "14", fixed("1 -0.99997", "1 -1"), dead_time="0.01"),
]

SECOND_ORDER = [
    loop("servo", "1", SERVO, "0.02", "2 20"),
    loop("servo, sensor filter", "0.9", "1 0 * 0.037 1", "0.004", "22", dead_time="0.0012",
         computing_delay="0.0004", sensor=low_pass("60")),
    loop("servo, lead in z", "0.9", "1 0 * 0.037 1", "0.004", "40", lead("0.02", "0.4"), dead_time="0.0012",
         computing_delay="0.0004"),
    loop("servo, PI, no error under a ramp", "1", SERVO, "0.08", "3", proportional_integral("2.5")),
    loop("servo, period 1e-5 of the time constant", "1", SERVO, "0.000001", "20"),
    loop("servo, ripple between the samples", "1", "1 0 * 1 1", "1", "1.4", fixed("1 -0.37", "1 0.7")),
    loop("double integrator, all poles at zero", "1", "1 0 * 1 0", "1", "2.5", fixed("1 -0.6", "1 0.75")),
    loop("double integrator, lead in z", "1", "1 0 * 1 0", "0.1", "0.7", lead("1.1", "0.3")),
    loop("double integrator, bilinear lead", "1", "1 0 * 1 0", "0.1", "3", converted("1.5 1", "0.15 1", BILINEAR)),
    loop("double integrator, matched lead, delay", "2", "1 0 * 1 0", "0.1", "0.4",
         converted("1.5 1", "0.15 1", MATCHED), dead_time="0.13"),
    loop("double integrator, backward lead, period 1e-5", "1", "1 0 * 1 0", "0.0000015", "3",
         converted("1.5 1", "0.15 1", BACKWARD)),
    loop("double integrator, rate fed back apart from the gain", "1", "1 0 * 1 0", "0.1", "2",
         rate_feedback("2.5")),
    loop("light resonance, integral", "1", "1 0.02 1", "0.1", "0.011", integral()),
    loop("very light resonance, hundreds of swings", "1", "1 0.004 1", "0.01", "0.3"),
    loop("resonance above half the sampling rate", "1", "0.0004 0.0008 1", "0.1", "0.9", integral()),
    loop("aliased resonance, fractional delay", "1", "0.0004 0.0008 1", "0.09", "0.05",
         proportional_integral("0.05"), computing_delay="0.031"),
    loop("resonance, period 1e-5, PI", "1", "1 0.6 1", "0.00001", "0.5", proportional_integral("1.2"),
         dead_time="0.00003"),
    loop("wrong way first", "-0.5 1", "1 1 * 0.2 1", "0.1", "0.4 1.2"),
    loop("wrong way first, PI, delay", "-0.5 1", "1 1 * 0.2 1", "0.1", "0.4", proportional_integral("1.2"),
         dead_time="0.25"),
    loop("feedthrough, no delay", "1 2 * 1 3", "1 1 * 0.5 2", "0.2", "0.3"),
    loop("feedthrough, whole delay", "1 2", "1 1", "0.1", "0.2", dead_time="0.1", computing_delay="0.2"),
    loop("feedthrough, resonant, fractional delay", "1 0.1 4", "1 0.2 1", "0.25", "0.05", computing_delay="0.1"),
    loop("feedthrough, sensor filter, integral", "1 1.2 4", "1 2.2 1", "0.1", "0.3", integral(),
         sensor=sensor("1", "0.2 1"), dead_time="0.1"),
    loop("no final value", "1 0", "1 0.5 2", "0.2", "1.2"),
    loop("wide time constants", "1", "1000 1 * 0.001 1", "0.01", "5000"),
    loop("wide time constants, fast", "1", "1000 1 * 0.001 1", "0.0001", "900000"),
    loop("levitation, PD by backward difference", "25", "1 -5 * 1 5", "0.01", "1.7",
         converted("0.2 1", "0.01 1", BACKWARD), computing_delay="0.003"),
]

HIGHER_ORDER = [
    loop("triple integrator, double lead", "1", "1 0 * 1 0 * 1 0", "0.05", "2",
         converted("2 1 * 2 1", "0.1 1 * 0.1 1", BILINEAR)),
    loop("three equal lags", "1", "1 1 * 1 1 * 1 1", "0.4", "0.5 3"),
    loop("three equal lags, period 1e-5", "1", "1 1 * 1 1 * 1 1", "0.00001", "3", computing_delay="1 period"),
    loop("servo with armature, notch exact at its resonance", "4", "1 0 * 0.004 0.002 1", "0.01", "0.9",
         converted("0.004 0.01 1", "0.004 0.12 1", BILINEAR, exact_at="2.5")),
    loop("servo with armature, matched notch", "4", "1 0 * 0.004 0.002 1", "0.02", "0.5",
         converted("0.004 0.01 1", "0.004 0.12 1", MATCHED), computing_delay="0.012"),
    loop("PI in s, matched", "2", "1 1 * 0.3 1 * 0.05 1", "0.05", "1.5", converted("1.2 1", "1 0", MATCHED)),
    loop("unstable lag, actuator and sensor", "3", "1 -2 * 0.05 1", "0.01", "3",
         sensor=sensor("0.002 1", "0.01 1"), dead_time="0.004"),
    loop("four lags, lead exact at a frequency", "1", "1 1 * 0.5 1 * 0.2 1 * 0.1 1", "0.1", "3",
         converted("0.5 1", "0.05 1", BILINEAR, exact_at="0.4")),
    loop("four equal lags, delay of 8.6 samples", "1", LAG4, "0.25", "1.1", dead_time="2.15"),
    loop("two resonances", "1", "1 0.1 1 * 0.04 0.01 1", "0.2", "0.05", integral(), dead_time="0.05"),
    loop("two masses on a spring", "20", "1 0 * 1 0 * 1 0.8 40", "0.05", "0.06", lead("1.2", "0.2")),
    loop("three slow lags, double lead, unstable between two gains", "1", "10 1 * 10 1 * 10 1", "0.02", "5000",
         converted("1 1 * 1 1", "0.02 1 * 0.02 1", BILINEAR)),
    loop("carriage with a double lead and a resonance", "1 0.4 1.1", "1 0 * 1 0 * 1 0.3 9 * 0.02 1", "0.04", "2",
         converted("1.4 1 * 0.9 1", "0.03 1 * 0.05 1", BILINEAR)),
    loop("five lags, PI", "1", "2 1 * 1 1 * 0.5 1 * 0.25 1 * 0.125 1", "0.2", "1.5", proportional_integral("3"),
         computing_delay="0.05"),
    loop("carriage with two resonances", "3 1 * 900", "1 0 * 1 0.5 90 * 1 1 400", "0.02", "0.7",
         converted("0.4 1", "0.04 1", BACKWARD), dead_time="0.013"),
    loop("six equal lags", "1", LAG4 + " * 1 1 * 1 1", "0.6", "1.1"),
    loop("six equal lags, period 1e-5, PI, delay", "1", LAG4 + " * 1 1 * 1 1", "0.00001", "0.7",
         proportional_integral("6"), dead_time="0.000035"),
    loop("six lags, wide", "1", "100 1 * 20 1 * 4 1 * 0.8 1 * 0.16 1 * 0.03 1", "0.05", "3", dead_time="0.08"),
]

GIVEN_IN_Z = [
    loop("in z, delays of plant and processor", "0.1 0.05", "1 -1.7 0.8", "0.01", "0.2", in_z=True,
         dead_time="0.03", computing_delay="1 period"),
    loop("in z, with compensator", "0.3 0.2", "1 -1.2 0.52 * 1 -0.9", "0.01", "0.1", fixed("1 -0.8", "1 -0.1"),
         in_z=True),
    loop("in z, seven samples of delay, PI", "0.4", "1 -0.6", "0.01", "0.2", proportional_integral("0.05"),
         in_z=True, dead_time="0.07"),
]
# fmt: on

MEASURE_LOOPS = FIRST_ORDER + SECOND_ORDER + HIGHER_ORDER + GIVEN_IN_Z
