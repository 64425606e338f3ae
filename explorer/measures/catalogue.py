"""Catalogue: every measure declared once, read by the study schema, the sweep, the commands and the docs."""

from __future__ import annotations

from explorer.study.model import Measure

_POLES = "Åström and Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, §3.2: s = ln(z)/T"

CATALOGUE: tuple[Measure, ...] = (
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
        source="Franklin, Powell and Emami-Naeini, Feedback Control of Dynamic Systems, §3.4, with the exact logarithm",
    ),
    Measure(
        name="time to peak", basis="poles", unit="s", better="less", in_samples=True,
        definition="pi/|Im s| of the slowest-decaying pair of non-real z; +inf when there is none",
        source="Franklin, Powell and Emami-Naeini, Feedback Control of Dynamic Systems, §3.4",
    ),
    Measure(
        name="overshoot", basis="poles", unit="%", better="less",
        definition="100 exp(-pi zeta/sqrt(1 - zeta^2)) of the slowest-decaying pair of non-real z; 0 when none",
        source="Franklin, Powell and Emami-Naeini, Feedback Control of Dynamic Systems, §3.4",
    ),
)  # fmt: skip
