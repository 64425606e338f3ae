"""Catalogue: every measure declared once, read by the study schema, the sweep, the commands and the docs."""

from __future__ import annotations

from explorer.study.model import Measure

_POLES = "Åström and Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, §3.2: s = ln(z)/T"
_SECOND_ORDER = "Franklin, Powell and Emami-Naeini, Feedback Control of Dynamic Systems, §3.4"
_RESPONSE = "of the sampled loop, exact between samples; terms as in Ogata, Modern Control Engineering, §5.3"
_MARGINS = "Åström and Murray, Feedback Systems, 2008, §9.3, for the sampled loop on the unit circle"
_NOISE = "Åström, Introduction to Stochastic Control Theory, 1970, §5.2"
_WORDS = "common practice, no source"

BY_POLES = (
    Measure(
        name="stability", basis="", unit="1", better="less", takes_limit=False,
        definition="largest |z| over the closed-loop poles; met when below 1",
        source="Jury, Theory and Application of the z-Transform Method, 1964: all poles inside the unit circle",
    ),
    Measure(
        name="spectral radius", basis="", unit="1", better="less",
        definition="largest |z| over the closed-loop poles",
        source="Horn and Johnson, Matrix Analysis, 2nd ed. 2013, §1.2",
    ),
    Measure(
        name="damping ratio", basis="", unit="1", better="more",
        definition="least -Re s/|s| over all poles, s = ln(z)/T; negative real z: Im s = pi/T; z = 0: 1; z = 1: 0",
        source=_POLES,
    ),
    Measure(
        name="natural frequency", basis="", unit="rad/s", better="more",
        definition="least |s| over all poles",
        source=_POLES,
    ),
    Measure(
        name="settling time", basis="poles", unit="s", better="less", band=0.02, in_samples=True,
        definition="ln(1/band)/sigma with sigma = -ln(largest |z|)/T; +inf when not stable; band 2 % unless stated",
        source=f"{_SECOND_ORDER}, with the exact logarithm",
    ),
    Measure(
        name="time to peak", basis="poles", unit="s", better="less", in_samples=True,
        definition="pi/|Im s| of the slowest-decaying pair of non-real z; +inf when there is none",
        source=_SECOND_ORDER,
    ),
    Measure(
        name="overshoot", basis="poles", unit="%", better="less",
        definition="100 exp(-pi zeta/sqrt(1 - zeta^2)) of the slowest-decaying pair of non-real z; 0 when none",
        source=_SECOND_ORDER,
    ),
)  # fmt: skip

BY_RESPONSE = (
    Measure(
        name="settling time", basis="response", unit="s", better="less", band=0.02, in_samples=True, family="response",
        definition="last time at which the step response is further than the band from its final value",
        source=_RESPONSE,
    ),
    Measure(
        name="time to peak", basis="response", unit="s", better="less", in_samples=True, family="response",
        definition="time of the largest step response where it exceeds its final value; +inf when it never does",
        source=_RESPONSE,
    ),
    Measure(
        name="overshoot", basis="response", unit="%", better="less", family="response",
        definition="largest step response over its final value, less 1; between samples included; below 1e-7 it is 0",
        source=_RESPONSE,
    ),
    Measure(
        name="undershoot", basis="response", unit="%", better="less", family="response",
        definition="how far the step response goes the wrong way, over its final value",
        source=_RESPONSE,
    ),
    Measure(
        name="rise time", basis="response", unit="s", better="less", in_samples=True, family="response",
        definition="first time at 90 % less first time at 10 % of the final value",
        source=_RESPONSE,
    ),
    Measure(
        name="steady-state error", basis="response", unit="", better="less", family="response",
        inputs=("step", "ramp"),
        definition="largest |reference - output| as time goes on, for a unit step or (input = \"ramp\") a unit ramp",
        source="Ogata, Discrete-Time Control Systems, 2nd ed. 1995, §4.4, with what remains between samples",
    ),
    Measure(
        name="peak effort", basis="response", unit="", better="less", family="response",
        definition="largest |processor output| after a unit step of the reference",
        source=_RESPONSE,
    ),
    Measure(
        name="excess between samples", basis="response", unit="%", better="less", family="response",
        definition="overshoot with the output between samples less overshoot at the samples",
        source="Jury, Hidden oscillations in sampled-data control systems, AIEE Transactions 75, 1957, from memory",
    ),
    Measure(
        name="load step deviation", basis="response", unit="", better="less", family="response",
        definition="largest |output| after a unit step added at the plant's input, reference 0",
        source=_WORDS,
    ),
)  # fmt: skip

BY_FREQUENCY = (
    Measure(
        name="gain margin", basis="", unit="1", better="more", family="frequency",
        definition="smallest factor above 1 on the gain that puts a pole on the unit circle; +inf when none does",
        source=_MARGINS,
    ),
    Measure(
        name="gain reduction margin", basis="", unit="1", better="less", family="frequency",
        definition="largest factor below 1 on the gain that puts a pole on the unit circle; 0 when none does",
        source=_MARGINS,
    ),
    Measure(
        name="phase margin", basis="", unit="deg", better="more", family="frequency",
        definition="arg(-L) where |L| = 1, the one of smallest magnitude; +inf when |L| is nowhere 1",
        source=_MARGINS,
    ),
    Measure(
        name="delay margin", basis="", unit="s", better="more", in_samples=True, family="frequency",
        definition="least arg(-L), taken in [0, 360) deg, over omega where |L| = 1; +inf when |L| is nowhere 1",
        source=_MARGINS,
    ),
    Measure(
        name="modulus margin", basis="", unit="1", better="more", family="frequency",
        definition="least |1 + L| on the unit circle",
        source=_MARGINS,
    ),
    Measure(
        name="resonance peak", basis="", unit="1", better="less", family="frequency",
        definition="largest |L/(1 + L)| on the unit circle",
        source="Åström and Murray, Feedback Systems, 2008, §11.3",
    ),
    Measure(
        name="crossover frequency", basis="", unit="rad/s", better="more", family="frequency",
        definition="highest omega with |L| = 1; 0 when |L| < 1 everywhere, +inf when |L| > 1 everywhere",
        source=_MARGINS,
    ),
    Measure(
        name="bandwidth", basis="", unit="rad/s", better="more", family="frequency",
        definition="lowest omega with |L/(1 + L)| at 1/sqrt(2) of its value at omega -> 0; +inf when none",
        source="Franklin, Powell and Emami-Naeini, Feedback Control of Dynamic Systems, §6.1",
    ),
    Measure(
        name="noise gain", basis="", unit="1", better="less", family="frequency",
        definition="standard deviation of the processor's output per that of white measurement noise",
        source=_NOISE,
    ),
)  # fmt: skip

BY_HARDWARE = (
    Measure(
        name="processor load", basis="", unit="%", better="less", family="hardware", needs=("execution_time",),
        definition="execution_time over the sample period",
        source=_WORDS,
    ),
    Measure(
        name="samples per rise time", basis="response", unit="1", better="more", family="response",
        definition="rise time over the sample period",
        source="Åström and Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, §3.9",
    ),
    Measure(
        name="phase lost to sampling", basis="", unit="deg", better="less", family="frequency",
        definition="crossover frequency times half a sample period plus the computing delay",
        source="Franklin, Powell and Workman, Digital Control of Dynamic Systems, 3rd ed. 1998, §4.3",
    ),
)  # fmt: skip

CATALOGUE: tuple[Measure, ...] = (*BY_POLES, *BY_RESPONSE, *BY_FREQUENCY, *BY_HARDWARE)
