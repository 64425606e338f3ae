"""Scenarios: the tolerance box of a study in, a table of plants for the sweep out.

Scenario 0 is the nominal plant. Each tolerance scale adds the corners of its box and a low-discrepancy set
inside it, so the scenarios of a wider scale contain those of every narrower one. Discrete variants are not
tolerances: every one of them is crossed with every row and belongs to every scale.
"""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from explorer.study.model import Parameter, Study

Real = NDArray[np.float64]

MOST_CORNERS = 1024  # per tolerance scale; more parameters than ten have a stated subset instead
CLOCK = "clock"  # true sample period / nominal one


@dataclass(frozen=True)
class Scenarios:
    """values : (S, parameters) SI; scale : (S,) scale at which each enters; note : "" or what was left out."""

    names: tuple[str, ...]
    units: tuple[str, ...]
    shown: tuple[str, ...]
    values: Real
    scale: Real
    note: str

    def by_name(self) -> dict[str, Real]:
        """Parameter name -> (S,) values; "clock" is always there."""
        table = {name: self.values[:, index] for index, name in enumerate(self.names)}
        table.setdefault(CLOCK, np.ones(len(self.values)))
        return table

    def within(self, scale: float) -> NDArray[np.bool_]:
        """Which scenarios lie inside that scale of the tolerance box."""
        return self.scale <= scale


def scenarios_of(study: Study) -> Scenarios:
    """The scenario table of a study, the same for the same text and seed (scrambled Halton points, Owen 2017)."""
    parameters = list(study.parameters)
    if study.loop.clock_tolerance > 0:
        slack = study.loop.clock_tolerance
        parameters.append(Parameter(CLOCK, 1.0, 1.0 - slack, 1.0 + slack, "1"))
    moving = [index for index, parameter in enumerate(parameters) if parameter.varies]
    nominal = np.array([parameter.nominal for parameter in parameters])
    variants = _variants(parameters, nominal)
    rows, scales = [variants], [np.zeros(len(variants))]
    signs, note = _corner_signs(len(moving)) if study.scenarios.corners else (np.zeros((0, len(moving))), "")
    inside = _interior(study, len(moving))
    for scale in study.scenarios.tolerance_scales:
        if scale == 0 or not moving:
            continue
        unit = np.concatenate([signs, inside])
        points = np.repeat(nominal[None], len(unit), axis=0)
        for column, index in enumerate(moving):
            low, high = parameters[index].reach(scale)
            share = 0.5 * (1.0 + unit[:, column])
            points[:, index] = np.where(share == 1.0, high, low + share * (high - low))
        crossed = _crossed(points, variants, parameters)
        rows.append(crossed)
        scales.append(np.full(len(crossed), scale))
    return Scenarios(
        tuple(parameter.name for parameter in parameters),
        tuple(parameter.unit for parameter in parameters),
        tuple(parameter.shown for parameter in parameters),
        np.concatenate(rows),
        np.concatenate(scales),
        note,
    )


def _variants(parameters: list[Parameter], nominal: Real) -> Real:
    """Every combination of discrete variants at the nominal values, the nominal combination first."""
    choices = [parameter.variants or (parameter.nominal,) for parameter in parameters]
    rows = list(itertools.product(*choices))
    return np.array(rows, dtype=float).reshape(len(rows), len(nominal))


def _crossed(points: Real, variants: Real, parameters: list[Parameter]) -> Real:
    discrete = [index for index, parameter in enumerate(parameters) if parameter.variants]
    crossed = np.repeat(points, len(variants), axis=0)
    crossed[:, discrete] = np.tile(variants[:, discrete], (len(points), 1))
    return crossed


def _corner_signs(count: int) -> tuple[Real, str]:
    """All 2**count corners as -1 and +1; beyond the limit a stated subset of them."""
    if 2**count <= MOST_CORNERS:
        rows = list(itertools.product((-1.0, 1.0), repeat=count))
        return np.array(rows, dtype=float).reshape(len(rows), count), ""
    patterns = {(-1.0,) * count, (1.0,) * count}
    for index in range(count):
        for lone in (-1.0, 1.0):
            patterns.add(tuple(lone if k == index else -lone for k in range(count)))
    generator = np.random.default_rng(count)
    while len(patterns) < MOST_CORNERS:
        patterns.add(tuple(generator.choice((-1.0, 1.0), size=count).tolist()))
    note = (
        f"{MOST_CORNERS} of the 2^{count} = {2**count} corners are used per tolerance scale: all low, all high, each "
        "parameter alone against the others, and a fixed random set; make parameters exact to have all corners"
    )
    return np.array(sorted(patterns)), note


def _interior(study: Study, count: int) -> Real:
    """Points in [-1, 1]^count."""
    if study.scenarios.interior == 0 or count == 0:
        return np.zeros((0, count))
    return 2.0 * scrambled_halton(count, study.scenarios.interior, study.scenarios.seed) - 1.0


def scrambled_halton(dimensions: int, points: int, seed: int) -> Real:
    """Points of [0, 1)^dimensions, (points, dimensions): digits of the index in a prime base each, permuted at random.

    Source: Owen (2017), A randomized Halton algorithm in R, arXiv 1706.02808. The numbers are those of
    scipy.stats.qmc.Halton, bit for bit, without the second that loading scipy.stats takes in every command.
    """
    (generator,), result = np.random.default_rng(seed).spawn(1), np.zeros((points, dimensions))
    for column, base in enumerate(_primes(dimensions)):
        digits = math.ceil(54 / math.log2(base)) - 1  # those that a double can tell
        permutations = np.repeat(np.arange(base)[None], digits, axis=0)
        for permutation in permutations:
            generator.shuffle(permutation)
        rest, place = np.arange(points), 1.0
        for permutation in permutations:
            place /= base
            result[:, column] += permutation[rest % base] * place
            rest //= base
    return result


def _primes(count: int) -> list[int]:
    found: list[int] = []
    number = 2
    while len(found) < count:
        if all(number % prime for prime in found):
            found.append(number)
        number += 1
    return found
