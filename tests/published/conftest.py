"""Small studies for the published checks: a loop's text goes into explorer.sweep, its measures come out."""

import pytest

import explorer

# A study has to state a limit for every measure it asks for. The checks read values, so any limit will do.
LIMITS = {
    "stability": "",
    "spectral radius": "at_most = 1",
    "damping ratio": "at_least = 0.1",
    "natural frequency": 'at_least = "1 rad/s"',
    "settling time": 'at_most = "1 s"',
    "time to peak": 'at_most = "1 s"',
    "overshoot": 'at_most = "10 %"',
    "rise time": 'at_most = "1 s"',
    "steady-state error": "at_most = 1",
    "peak effort": "at_most = 1",
    "excess between samples": 'at_most = "10 %"',
    "gain margin": "at_least = 2",
    "gain reduction margin": "at_most = 0.5",
    "phase margin": 'at_least = "45 deg"',
    "delay margin": 'at_least = "1 s"',
    "modulus margin": "at_least = 0.5",
    "resonance peak": "at_most = 2",
    "crossover frequency": 'at_least = "1 rad/s"',
    "bandwidth": 'at_least = "1 rad/s"',
    "noise gain": "at_most = 1",
    "phase lost to sampling": 'at_most = "10 deg"',
}
BASED_ON_RESPONSE = {"rise time", "steady-state error", "peak effort", "excess between samples"}
BASED_ON_EITHER = {"settling time", "time to peak", "overshoot"}


def study_text(
    transfer,
    measures,
    gain=(1.0,),
    period=(1.0,),
    compensator="gain",
    conversion=None,
    sampled_at=None,
    dead_time=None,
    computing_delay=None,
    basis="poles",
    option="",
):
    """One exact plant under unity feedback as a study; a plant in z states `sampled_at` and no period."""
    lines = ['title = "published loop"', "[plant]", f'transfer = "{transfer}"']
    lines += [f'dead_time = "{dead_time}"'] if dead_time else []
    lines += [f'sampled_at = "{sampled_at}"'] if sampled_at else []
    lines += ["[loop]", f'compensator = "{compensator}"']
    lines += [f'conversion = "{conversion}"'] if conversion else []
    lines += [f'computing_delay = "{computing_delay}"'] if computing_delay else []
    lines += ["[sweep]", f"gain = {{ values = {[float(value) for value in gain]} }}"]
    lines += [] if sampled_at else [f"period = {{ values = {[float(value) for value in period]} }}"]
    for measure in measures:
        lines += ["[[requirements]]", f'measure = "{measure}"', LIMITS[measure], option]
        if measure in BASED_ON_EITHER:
            lines.append(f'basis = "{basis}"')
        elif measure in BASED_ON_RESPONSE:
            lines.append('basis = "response"')
    return "\n".join(lines)


@pytest.fixture(scope="session")
def measured():
    """measured(transfer, measures, **loop): nominal values as {measure: array (period, gain)}, SI and %."""

    def values(transfer, measures, **loop):
        text = study_text(transfer, measures, **loop)
        nominal = explorer.sweep(explorer.read_study(text=text), jobs=1)["nominal_value"]
        return {name: nominal.sel(measure=name).transpose("period", "gain").to_numpy() for name in measures}

    return values


@pytest.fixture(scope="session")
def judged_stable():
    """judged_stable(transfer, **loop): the verdict on stability alone, bool (gain,), at the first period."""

    def verdict(transfer, **loop):
        text = study_text(transfer, ["stability"], **loop)
        judged = explorer.judge(explorer.sweep(explorer.read_study(text=text), jobs=1))
        return judged["feasible"].isel(tolerance_scale=-1, period=0).to_numpy()

    return verdict
