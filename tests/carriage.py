"""The carriage: one study that uses every key, and the same text with changes. All data are invented."""

from __future__ import annotations

CARRIAGE = '''\
title = "Camera carriage, position loop"

[plant]
transfer  = "speed_gain / (s*(lag*s + 1))"
dead_time = "transport"

[plant.parameters]
speed_gain = { nominal = "0.9 m/s/V", tolerance = "12 %" }
lag        = { from = "28 ms", to = "46 ms" }
transport  = { nominal = "1.2 ms" }
payload    = { any_of = ["1.2 kg", "3.4 kg"], nominal = "1.2 kg" }

[loop]
compensator     = "gain * (1 + lead*(z - 1)/(period*(z - 0.4)))"
computing_delay = "0.4 ms"
sensor          = "1/(s/(2*pi*300) + 1)"
clock_tolerance = "0.5 %"
execution_time  = "0.11 ms"

[sweep]
gain   = { from = "1 V/m", to = "400 V/m", points = 24, spacing = "log" }
period = { from = "0.5 ms", to = "40 ms", points = 20, spacing = "log" }
lead   = { values = ["40 ms", "20 ms"] }
scenarios = { interior = 96, corners = true, seed = 7, tolerance_scales = [0, 0.5, 1.0, 1.5] }

[[requirements]]
name = "well damped"
measure = "damping ratio"
at_least = 0.6

[[requirements]]
measure = "time to peak"
basis = "poles"
at_most = "120 ms"

[[requirements]]
measure = "stability"
'''
TRANSFER, SENSOR = '"speed_gain / (s*(lag*s + 1))"', '"1/(s/(2*pi*300) + 1)"'
COMPENSATOR = '"gain * (1 + lead*(z - 1)/(period*(z - 0.4)))"'
IN_S = '"gain*(lead*s + 1)/(lead/8*s + 1)"'


def changed(*changes: tuple[str, str], text: str = CARRIAGE) -> str:
    """The text with each first `old` replaced by `new`."""
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new, 1)
    return text
