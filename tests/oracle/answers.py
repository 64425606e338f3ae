"""The exact measures of every compared loop, and where they are kept as data.

Neighbours: responses.py and frequencies.py work them out, measure_loops.py holds the loops, __main__.py writes
measured.json, test_measures.py reads it.
"""

import json
from pathlib import Path

from mpmath import mp

from .frequencies import frequencies
from .measure_loops import PER_CENT, SHARE, asked_of
from .responses import responses

KEPT = Path(__file__).with_name("measured.json")
KEPT_DIGITS = 25


def answer(loop, gain):
    """Every requirement of the loop's study by name, as decimal text; "+inf" and "-inf" are the ends."""
    found = {"processor load": mp.mpf(str(PER_CENT * SHARE))}
    reached = {} if loop.in_z else responses(loop, gain)
    if reached is not None:
        found |= reached | frequencies(loop, gain)
    worked = {asked.name: found.get(asked.name, mp.mpf(asked.bad_end)) for asked in asked_of(loop)}
    return {name: mp.nstr(value, KEPT_DIGITS) for name, value in worked.items()}


def kept():
    """{loop: {gain: {requirement: decimal text}}} as it was last worked out."""
    return json.loads(KEPT.read_text(encoding="utf-8"))
