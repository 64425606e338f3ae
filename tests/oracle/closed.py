"""One closed loop as a linear recursion at 80 digits: what it does from sample to sample, and between samples.

Neighbours: reference.py (exact exponentials), loops.py (the data), responses.py reads the motion off.

The state is (plant and sensor; past efforts, newest first; compensator). A row over (state, r, w) gives a
quantity that is linear in the state, the reference r and a load w at the plant's input.
"""

from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from mpmath import mp

from . import reference
from .loops import product
from .reference import exactly, number, split_delay, state_space

DIGITS = 80  # a million samples per time constant cost some 20 of them
DIED = mp.mpf(10) ** -20  # what is left of the motion at the horizon
LONGEST = 40  # doublings of one period before a loop counts as unstable
LONG = 2**17  # samples after which nothing moves visibly within one period, but for the fastest modes

precisely = mp.workdps(DIGITS)


def times(left, right):
    """Product of two matrices, given as lists of rows."""
    columns = list(zip(*right, strict=True))
    return [[mp.fdot(row, column) for column in columns] for row in left]


def applied(matrix, vector):
    """Product of a matrix and a vector."""
    return [mp.fdot(row, vector) for row in matrix]


def combined(factors, rows, size):
    """Sum of factor * row."""
    return [mp.fdot(factors, [row[i] for row in rows]) for i in range(size)]


@dataclass(frozen=True)
class Piece:
    """Stretch of every period with one held input; entry: rows over (state, r, w) for (plant state, input)."""

    start: mp.mpf
    duration: mp.mpf
    entry: list


@dataclass
class ClosedLoop:
    """Recursion of one closed loop.

    motion: generator of (plant state, held input) in continuous time; output: row that gives y from these;
    step: state to state over one period; drive: what r and w add to it; effort: row for u at the sample.
    """

    period: mp.mpf
    motion: list
    output: list
    pieces: list
    step: list
    drive: tuple
    effort: list
    powers: list = field(default_factory=list)

    @property
    def size(self):
        return len(self.step)

    @precisely
    def power(self, exponent):
        """The step taken 2**exponent times."""
        if not self.powers:
            self.powers.append(self.step)
        while len(self.powers) <= exponent:
            self.powers.append(times(self.powers[-1], self.powers[-1]))
        return self.powers[exponent]

    @cached_property
    def doublings(self):
        """How often one period is doubled until nothing of any motion is left; None for an unstable loop."""
        for exponent in range(LONGEST):
            size = max(abs(value) for row in self.power(exponent) for value in row)
            if size < DIED:
                return exponent
            if size > 1 / DIED:
                return None
        return None

    @precisely
    def after(self, state, periods):
        """State a whole number of periods later, nothing driving."""
        exponent = 0
        while periods:
            if periods & 1:
                state = applied(self.power(exponent), state)
            periods >>= 1
            exponent += 1
        return state

    @precisely
    def limit(self, which):
        """State that a constant r = 1 (which = 0) or w = 1 (which = 1) leads to."""
        return self.balance(self.drive[which])

    @exactly
    def balance(self, pushed):
        """Solution x of x = step x + pushed."""
        gap = mp.eye(self.size) - mp.matrix(self.step)
        return list(mp.lu_solve(gap, mp.matrix(pushed)))


def plant_alone(loop):
    """Numerator and denominator of the plant, without sensor and dead time."""
    named = dict(loop.parameters)
    return [
        product([[named.get(value, value) for value in part] for part in side])
        for side in (loop.numerator, loop.denominator)
    ]


def plant_and_sensor(loop):
    """A and B of both in series; rows (C, D) of the plant's output and of what the sampler sees."""
    a, b, c, through = state_space(*plant_alone(loop))
    fa, fb, fc, f_through = state_space(loop.sensor.numerator, loop.sensor.denominator)
    order, extra = a.rows, fa.rows
    whole = mp.zeros(order + extra)
    whole[:order, :order] = a
    if extra:
        whole[order:, order:] = fa
        whole[order:, :order] = fb * c
    column = list(b) + [value * through for value in fb]
    output = list(c) + [mp.zero] * extra + [through]
    seen = [f_through * value for value in c] + list(fc) + [f_through * through]
    return whole.tolist(), column, output, seen


def augmented(a, b):
    """Generator of (state, held input)."""
    return [[*row, value] for row, value in zip(a, b, strict=True)] + [[mp.zero] * (len(a) + 1)]


@exactly
def flow(motion, duration):
    """What the motion does to (state, held input) in a duration."""
    return reference.exponential(mp.matrix(motion) * duration).tolist()


@exactly
def close(loop, gain):
    """The recursion of a loop at a gain.

    The plant's input over one period is the effort of d periods ago for T - m, then that of d - 1 periods ago
    for m, where the whole delay is d T - m. The sample at kT sees the input that begins there.
    """
    period = number(loop.period)
    a, b, output, seen = plant_and_sensor(loop)
    whole, remainder = split_delay(loop.total_delay(), loop.period)
    ac, bc, cc, dc = state_space(*loop.compensator.in_z(gain, loop.period))
    order, through = len(a), seen[-1]
    size = order + whole + ac.rows
    width = size + 2
    unit = np.array(mp.eye(width).tolist(), dtype=object)
    plant, past, inner, r, w = unit[:order], unit[order : order + whole], unit[order + whole : size], *unit[size:]
    measured = sum((value * row for value, row in zip(seen[:-1], plant, strict=True)), 0 * r) + through * w
    if whole:
        measured = measured + through * past[-1]
    effort = sum((value * row for value, row in zip(list(cc), inner, strict=True)), 0 * r) + dc * (r - measured)
    if not whole:
        effort = effort / (1 + dc * through)
        measured = measured + through * effort
    older = past[-1] if whole else effort
    newer = past[-2] if whole > 1 else effort
    motion = augmented(a, b)
    pieces = [Piece(mp.zero, period - remainder, [list(row) for row in (*plant, older + w)])]
    if remainder:
        arrived = times(flow(motion, pieces[0].duration), pieces[0].entry)[:order]
        pieces.append(Piece(pieces[0].duration, remainder, [*arrived, list(newer + w)]))
    following = times(flow(motion, pieces[-1].duration), pieces[-1].entry)[:order]
    if whole:
        following += [list(effort)] + [list(row) for row in past[:-1]]
    error = r - measured
    for i in range(ac.rows):
        kept = sum((ac[i, j] * inner[j] for j in range(ac.rows)), 0 * r)
        following.append(list(kept + bc[i] * error))
    return ClosedLoop(
        period,
        motion,
        output,
        pieces,
        [row[:size] for row in following],
        tuple([row[column] for row in following] for column in (size, size + 1)),
        list(effort),
    )
