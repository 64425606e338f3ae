"""One loop told in the order of time, in plain doubles: a check of the exact responses.

Neighbours: test_answers.py. Nothing of closed.py is used: each effort waits in a queue until its delay is over.
"""

import numpy as np
import scipy.linalg

from .closed import plant_alone
from .reference import number, state_space


def doubles(values):
    return np.array([float(value) for value in values]).reshape(values.rows, values.cols)


def moving(numerator, denominator):
    """(A, B, C, D) in doubles."""
    *matrices, through = state_space(numerator, denominator)
    return *[doubles(matrix) for matrix in matrices], float(through)


class Chronicle:
    """The loop from rest under a reference held from t = 0 on and a load at the plant's input."""

    FINE = 200  # places looked at between two events

    def __init__(self, one, gain, reference, load):
        self.reference, self.load, self.period = reference, load, float(one.period)
        a, b, c, d = moving(*plant_alone(one))
        fa, fb, fc, fd = moving(one.sensor.numerator, one.sensor.denominator)
        order = len(a) + len(fa)
        generator = np.zeros((order + 1, order + 1))
        generator[: len(a), : len(a)], generator[: len(a), -1:] = a, b
        generator[len(a) : -1, len(a) : -1], generator[len(a) : -1, : len(a)] = fa, fb @ c
        generator[len(a) : -1, -1:] = fb * d
        self.output = np.concatenate([c[0], np.zeros(len(fa)), [d]])
        self.seen = np.concatenate([fd * c[0], fc[0], [fd * d]])
        self.generator, self.flows = generator, {}
        controller = one.compensator.in_z(gain, one.period)
        top, bottom = (np.array([float(value) for value in side]) for side in controller)
        self.top = np.concatenate([np.zeros(len(bottom) - len(top)), top]) / bottom[0]
        self.bottom = bottom / bottom[0]
        self.delay = float(one.total_delay())
        self.load_time = float(number(dict(one.parameters).get(one.dead_time, one.dead_time)))
        self.errors, self.efforts = [0.0] * len(bottom), [0.0] * len(bottom)

    def sampled(self, state, held):
        """Effort of this sample; without delay it is in the measurement already."""
        rest = self.top[1:] @ self.errors[: len(self.top) - 1] - self.bottom[1:] @ self.efforts[: len(self.top) - 1]
        known = self.reference - self.seen @ np.append(state, held)
        effort = self.top[0] * known + rest
        if self.delay == 0:
            effort /= 1 + self.top[0] * self.seen[-1]
            known -= self.seen[-1] * effort
        self.errors.insert(0, known)
        self.efforts.insert(0, effort)
        return effort

    def flow(self, duration):
        """Motions over FINE parts of a duration and over all of it."""
        key = round(duration / self.period, 9)
        if key not in self.flows:
            part = scipy.linalg.expm(self.generator * duration / self.FINE)
            powers = [np.eye(len(part))]
            for _ in range(self.FINE):
                powers.append(powers[-1] @ part)
            self.flows[key] = np.array([self.output @ power for power in powers]), powers[-1]
        return self.flows[key]

    def run(self, until):
        """Times, outputs (both sides of every jump) and efforts."""
        near = 1e-9 * self.period
        state, held, load, now, sample = np.zeros(len(self.generator) - 1), 0.0, 0.0, 0.0, 0
        queue, told, times = [], [], []
        events = [self.load_time] if self.load else []
        while now < until:
            if self.load and now >= self.load_time - near:
                load = self.load
            while queue and queue[0][0] <= now + near:
                held = queue.pop(0)[1]
            if now >= sample * self.period - near:
                effort = self.sampled(state, held * (self.delay > 0) + load)
                queue.append((sample * self.period + self.delay, effort))
                sample += 1
                continue
            coming = [sample * self.period, *[time for time, _ in queue], *[e for e in events if e > now + near]]
            then = min(coming)
            rows, whole = self.flow(then - now)
            told.append(rows @ np.append(state, held + load))
            times.append(np.linspace(now, then, self.FINE + 1))
            state, now = (whole @ np.append(state, held + load))[:-1], then
        return np.concatenate(times), np.concatenate(told), np.array(self.efforts[::-1])
