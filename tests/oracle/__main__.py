"""python -m tests.oracle: works measured.json out anew, in some minutes; with names, only those loops.

Neighbours: answers.py, measure_loops.py.
"""

import json
import sys
import time
from concurrent.futures import ProcessPoolExecutor

from .answers import KEPT, answer, kept
from .measure_loops import MEASURE_LOOPS


def worked(case):
    """One loop at one gain, and how long it took."""
    began = time.monotonic()
    return answer(*case), time.monotonic() - began


def main(names):
    chosen = [loop for loop in MEASURE_LOOPS if not names or loop.name in names]
    cases = [(loop, gain) for loop in chosen for gain in loop.gains]
    found = kept() if names else {}
    for loop in chosen:
        found[loop.name] = {}
    # Compensators hold functions that cannot be sent: the workers look the loop up by its place.
    places = [(MEASURE_LOOPS.index(loop), gain) for loop, gain in cases]
    with ProcessPoolExecutor() as pool:
        for (loop, gain), (measures, seconds) in zip(cases, pool.map(at_place, places), strict=True):
            found[loop.name][gain] = measures
            print(f"{seconds:7.1f} s  {loop.name}, gain {gain}", flush=True)
    ordered = {loop.name: found[loop.name] for loop in MEASURE_LOOPS if loop.name in found}
    KEPT.write_text(json.dumps(ordered, indent=1) + "\n", encoding="utf-8")


def at_place(place):
    index, gain = place
    return worked((MEASURE_LOOPS[index], gain))


if __name__ == "__main__":
    main(sys.argv[1:])
