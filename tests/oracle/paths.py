"""A motion that dies out, and its turning points and crossings: found on a grid in doubles, solved in 80 digits.

Neighbours: closed.py (the recursion), responses.py (asks). The grid only says where to look: each place is walked
to its true top in exact arithmetic and solved there by Taylor series, and both must agree.
"""

from dataclasses import dataclass

import numpy as np
from mpmath import mp

from .closed import LONG, applied, flow, precisely, times

STEP = 0.1  # of the fastest motion, in radians, between two points of the grid
FEWEST = 8  # steps of a piece
BLOCK = 14  # doublings of one period that are scanned in doubles at a time
CANDIDATES = 8
SAME = mp.mpf(10) ** -12  # tops closer than this are one height: the first of them counts
NEGLIGIBLE = mp.mpf(10) ** -78


@dataclass(frozen=True)
class Point:
    """A place within the period; lift: rows over the state for (plant state, held input) there."""

    piece: int
    time: mp.mpf
    lift: list
    row: list  # the output there
    width: mp.mpf  # to the next point of the same piece; 0 at its last


@dataclass(frozen=True)
class Stretch:
    """Points of one period in the order of time; a piece begins and ends with a point of its own."""

    points: list
    motion: list
    output: list

    @classmethod
    def of_row(cls, row):
        """One quantity at the samples, without anything between them."""
        return cls([Point(0, mp.zero, [row], row, mp.zero)], [[mp.zero]], [mp.one])

    def stretches(self):
        """Every two neighbours of one piece."""
        return [Segment(point, self.motion, self.output) for point in self.points if point.width]


@dataclass(frozen=True)
class Segment:
    """From one point of the grid to the next of its piece."""

    point: Point
    motion: list
    output: list

    @property
    def time(self):
        return self.point.time

    def value(self, state):
        """The output at its beginning."""
        return mp.fdot(self.point.row, state)

    def series(self, state):
        """Taylor coefficients of the output in the time since its beginning."""
        term = applied(self.point.lift, state)
        weight = max(abs(value) for value in self.output)
        smallest = NEGLIGIBLE * weight * max(abs(value) for value in term)
        coefficients, reach, order = [], mp.one, 0
        while not coefficients or weight * reach * max(abs(value) for value in term) > smallest:
            coefficients.append(mp.fdot(self.output, term))
            order += 1
            term = [value / order for value in applied(self.motion, term)]
            reach *= self.point.width
        return coefficients

    def extremes(self, series):
        """(value, time since the beginning) at both ends and where it turns between them."""
        width = self.point.width
        slope = [order * value for order, value in enumerate(series)][1:] or [mp.zero]
        places = [mp.zero, width]
        if at(slope, mp.zero) * at(slope, width) < 0:
            places.insert(1, crossing(slope, mp.zero, width))
        return [(at(series, place), place) for place in places]


def at(series, place):
    return mp.polyval(series[::-1], place)


def crossing(series, level, width):
    """Where a series takes a level between 0 and width: halving, then Newton steps that stay inside."""
    low, high = mp.zero, mp.mpf(width)
    rising = at(series, high) > level
    slope = [order * value for order, value in enumerate(series)][1:]
    for _ in range(24):
        middle = (low + high) / 2
        low, high = (low, middle) if (at(series, middle) > level) == rising else (middle, high)
    place = (low + high) / 2
    for _ in range(6):
        place -= (at(series, place) - level) / at(slope, place)
    if not low <= place <= high:
        raise ArithmeticError("a crossing got lost")
    return place


@precisely
def by_period(closed, of_everything=False, entry=None, duration=None):
    """Grid of one period, or of a stretch of its own with the given entry and duration.

    The lifts are over the state, or over (state, r, w) if of everything.
    """
    generator = np.array([[float(value) for value in row] for row in closed.motion])
    fastest = max(abs(np.linalg.eigvals(generator)))
    fewest = 1 if closed.doublings is not None and 2**closed.doublings > LONG else FEWEST
    if entry is None:
        columns = None if of_everything else closed.size
        pieces = [(one.start, one.duration, [row[:columns] for row in one.entry]) for one in closed.pieces]
    else:
        pieces = [(mp.zero, duration, entry)]
    points = []
    for index, (start, lasting, lift) in enumerate(pieces):
        steps = max(fewest, int(np.ceil(float(lasting) * fastest / STEP)))
        width = lasting / steps
        onward = flow(closed.motion, width)
        for step in range(steps + 1):
            row = times([closed.output], lift)[0]
            points.append(Point(index, start + step * width, lift, row, width if step < steps else mp.zero))
            lift = times(onward, lift)
    return Stretch(points, closed.motion, closed.output)


class Path:
    """Motion from a state with nothing driving; its points are numbered through all periods."""

    def __init__(self, closed, grid, start):
        self.closed, self.grid, self.start = closed, grid, start
        self.last = (len(grid.points) << closed.doublings) - 1
        self.states = {0: start}

    def state(self, period):
        """State at the beginning of a period."""
        if period not in self.states:
            self.states[period] = self.closed.after(self.start, period)
        return self.states[period]

    def placed(self, number):
        """Period and point of a number."""
        period, index = divmod(number, len(self.grid.points))
        return period, self.grid.points[index]

    def value(self, number):
        period, point = self.placed(number)
        return mp.fdot(point.row, self.state(period))

    def time(self, number):
        period, point = self.placed(number)
        return period * self.closed.period + point.time

    def segment(self, number):
        """The segment that begins at a point and its series; None where the next one is of another piece."""
        period, point = self.placed(number)
        if not point.width:
            return None
        segment = Segment(point, self.grid.motion, self.grid.output)
        return segment, segment.series(self.state(period))

    def blocks(self):
        """(number of the first, values in doubles) of one block after the other."""
        doublings = min(BLOCK, self.closed.doublings)
        rows = np.array([[float(value) for value in point.row] for point in self.grid.points])
        steps = [np.array(self.closed.power(exponent), dtype=float) for exponent in range(doublings)]
        state = self.start
        for block in range(2 ** (self.closed.doublings - doublings)):
            states = np.array(state, dtype=float)[:, None]
            for step in steps:
                states = np.hstack([states, step @ states])
            yield (block << doublings) * len(rows), (rows @ states).T.ravel()
            state = applied(self.closed.power(doublings), state)


def tops(path, sign):
    """Numbers of the highest points of the grid that have no higher neighbour."""
    found = []
    for first, values in path.blocks():
        heights = np.concatenate([[-np.inf], sign * values, [-np.inf]])
        inner = heights[1:-1]
        places = np.flatnonzero((inner >= heights[:-2]) & (inner >= heights[2:]))
        best = places[np.argsort(-inner[places], kind="stable")[:CANDIDATES]]
        found = sorted(found + [(-inner[place], first + int(place)) for place in best])[:CANDIDATES]
    return found


def climbed(path, sign, number):
    """The top next to a point, in exact arithmetic: strides double while they lead up.

    The last strides are 2 and 1: where two pieces meet, two points are the same place.
    """
    here, stride = sign * path.value(number), 4
    while stride:
        for way in (stride, -stride):
            there = number + way
            if 0 <= there <= path.last and sign * path.value(there) > here:
                number, here, stride = there, sign * path.value(there), 2 * stride
                break
        else:
            stride //= 2
    return number


@precisely
def extreme(path, sign):
    """(value, time) of the largest sign * value, the limit 0 not counted; the first of equal ones."""
    solved = []
    for height, number in tops(path, sign):
        top = climbed(path, sign, number)
        best = (sign * path.value(top), path.time(top))
        for start in range(max(0, top - 2), min(top + 2, path.last)):
            found = path.segment(start)
            if found:
                turns = found[0].extremes(found[1])
                best = max([best, *((sign * value, path.time(start) + place) for value, place in turns)])
        if best[0] < -height - 1e-6 * abs(height):
            raise ArithmeticError("the exact top is below the grid")
        solved.append(best)
    highest = max(value for value, _ in solved)
    time = min(time for value, time in solved if value >= highest - SAME * abs(highest))
    return sign * highest, time


def meeting(path, number, level):
    """Time between a point and the next at which the value is level; a jump meets every level."""
    found = path.segment(number)
    if not found:
        return path.time(number + 1)
    return path.time(number) + crossing(found[1], level, found[0].point.width)


@precisely
def first_above(path, sign, level):
    """First time at which sign * value is at least level."""
    for first, values in path.blocks():
        reached = np.flatnonzero(sign * values >= float(level))
        if reached.size:
            number = first + int(reached[0])
            break
    else:
        raise ArithmeticError("a level below the limit is never reached")
    while sign * path.value(number) < level:
        number += 1
    while number and sign * path.value(number - 1) >= level:
        number -= 1
    return meeting(path, number - 1, sign * level) if number else mp.zero


@precisely
def last_outside(path, band):
    """Last time at which |value| is above band; 0 if never."""
    number = -1
    for first, values in path.blocks():
        outside = np.flatnonzero(np.abs(values) > float(band))
        number = first + int(outside[-1]) if outside.size else number
    while abs(path.value(number + 1)) > band:
        number += 1
    while number >= 0 and abs(path.value(number)) <= band:
        number -= 1
    if number < 0:
        return mp.zero
    return meeting(path, number, band if path.value(number) > 0 else -band)
