"""Responses of one loop at 40 digits: where the output turns and crosses is solved, not taken from a grid.

Neighbours: closed.py (the recursion), paths.py (a motion and its turning points), answers.py.

Nothing here shares code or method with the program: no poles, no residues; the state is carried from sample to
sample by exact exponentials and matrix powers, and between two points of a grid by its Taylor series.
"""

from mpmath import mp

from .closed import close, flow, precisely, times
from .paths import Path, Stretch, by_period, extreme, first_above, last_outside
from .reference import number, split_delay

LEAST = mp.mpf(10) ** -7  # per cent: an overshoot below this is none
NOTHING = mp.mpf(10) ** -13  # a final value below this part of the largest value is none
EXACT_ZERO = mp.mpf(10) ** -50  # what is left of an exact cancellation
BANDS = {"settling time": "0.02", "settling time, 5 %": "0.05"}
AFTER_A_STEP = ("overshoot", "time to peak", "undershoot", "rise time", "samples per rise time", *BANDS)
RESPONSES = (
    *AFTER_A_STEP,
    "excess between samples",
    "error after a step",
    "error after a ramp",
    "peak effort",
    "load step deviation",
)


@precisely
def responses(loop, gain):
    """Every response measure by name; None for an unstable loop.

    Times in s, overshoots in %, the errors and deviations in the output's unit, the effort in the input's.
    """
    closed = close(loop, gain)
    if closed.doublings is None:
        return None
    final = closed.limit(0)
    settled = snapped(mp.fdot(closed.output, [mp.fdot(row, [*final, 1, 0]) for row in closed.pieces[0].entry]))
    start = [-value for value in final]
    found = {
        **after_a_step(closed, start, settled),
        "error after a step": abs(snapped(1 - settled)),
        "error after a ramp": error_after_a_ramp(closed),
        "peak effort": peak_effort(closed, start, mp.fdot(closed.effort, [*final, 1, 0])),
        "load step deviation": load_step_deviation(closed, loop),
    }
    return {name: found[name] for name in RESPONSES}


def snapped(value):
    return mp.zero if abs(value) < EXACT_ZERO else value


def after_a_step(closed, start, settled):
    """What is measured relative to the final value; start is the state less its limit."""
    between = Path(closed, by_period(closed), start)
    sign = -1 if settled < 0 else 1
    highest, highest_at = extreme(between, sign)
    lowest, _ = extreme(between, -sign)
    size = abs(settled)
    if size <= NOTHING * max(abs(settled + highest), abs(settled + lowest)):
        return {**dict.fromkeys(AFTER_A_STEP, mp.inf), "excess between samples": mp.inf}
    sampled = Path(closed, Stretch.of_row(between.grid.points[0].row), start)
    seen, _ = extreme(sampled, sign)
    overshoot = 100 * max(mp.zero, sign * highest / size)
    undershoot = 100 * max(mp.zero, -sign * lowest / size - 1)
    rise = first_above(between, sign, size * number("-0.1")) - first_above(between, sign, size * number("-0.9"))
    return {
        "overshoot": mp.zero if overshoot < LEAST else overshoot,
        "time to peak": mp.inf if overshoot < LEAST else highest_at,
        "undershoot": mp.zero if undershoot < LEAST else undershoot,
        "rise time": rise,
        "samples per rise time": rise / closed.period,
        **{name: last_outside(between, size * number(band)) for name, band in BANDS.items()},
        "excess between samples": snapped(overshoot - 100 * max(mp.zero, sign * seen / size)),
    }


def peak_effort(closed, start, settled):
    """Largest |u|; the limit counts, since u may come towards it from below for ever."""
    path = Path(closed, Stretch.of_row(closed.effort[: closed.size]), start)
    return max(abs(settled), *(abs(settled + extreme(path, sign)[0]) for sign in (1, -1)))


def error_after_a_ramp(closed):
    """Largest |r - y| of the steady motion under r = t, which is x[k] = a + b k: from x[k+1] = step x[k] + drive k T
    follow (1 - step) b = drive T and (1 - step) a = -b."""
    rate = closed.balance([value * closed.period for value in closed.drive[0]])
    offset = closed.balance([-value for value in rate])
    largest = mp.zero
    for stretch in by_period(closed, of_everything=True).stretches():
        slope = stretch.value([*rate, closed.period, 0])
        if abs(slope - closed.period) > EXACT_ZERO * closed.period:
            return mp.inf
        series = stretch.series([*offset, 0, 0])
        error = [-value for value in series] + [mp.zero] * max(0, 2 - len(series))
        error[0] += stretch.time
        error[1] += 1
        largest = max([largest, *(abs(value) for value, _ in stretch.extremes(error))])
    return snapped(largest)


def load_step_deviation(closed, loop):
    """Largest |y| after a unit step at the plant's input at t = 0, before the dead time.

    It arrives in the middle of a period unless the dead time is whole: until the next sample the plant then
    moves from rest under the load alone.
    """
    final = closed.limit(1)
    settled = mp.fdot(closed.output, [mp.fdot(row, [*final, 0, 1]) for row in closed.pieces[0].entry])
    _, remainder = split_delay(dict(loop.parameters).get(loop.dead_time, loop.dead_time), loop.period)
    order = len(closed.motion) - 1
    state, largest = [mp.zero] * closed.size, abs(settled)
    if remainder:
        pushed = [mp.zero] * order + [mp.one]
        first = by_period(closed, entry=[[value] for value in pushed], duration=remainder)
        for stretch in first.stretches():
            series = stretch.series([mp.one])
            largest = max([largest, *(abs(value) for value, _ in stretch.extremes(series))])
        moved = times(flow(closed.motion, remainder), [[value] for value in pushed])
        state[:order] = [row[0] for row in moved[:order]]
    path = Path(closed, by_period(closed), [now - then for now, then in zip(state, final, strict=True)])
    return max([largest, *(abs(settled + extreme(path, sign)[0]) for sign in (1, -1))])
