"""Positive roots of a real polynomial, each of them found: a Sturm chain counts, halving isolates, Newton ends.

Neighbours: frequencies.py. Coefficients in ascending powers. Roots are simple: rounding splits a
multiple one or hides it.
"""

from itertools import pairwise

from mpmath import mp

CHAIN_DIGITS = 500  # each remainder of a chain of sixty loses a few
GONE = mp.mpf(10) ** -300  # part of its terms below which a remainder is the end of the chain


@mp.workdps(CHAIN_DIGITS)
def positive_roots(coefficients):
    """All roots above 0 in rising order."""
    kept = [index for index, value in enumerate(coefficients) if value]
    if not kept:
        return []
    rest = [mp.mpf(value) for value in coefficients[kept[0] : kept[-1] + 1]]
    if len(rest) < 2:
        return []
    chain = sturm_chain(rest)
    # Cauchy's bound for the largest root, and for that of the reversed polynomial.
    high = 1 + max(abs(value / rest[-1]) for value in rest)
    low = 1 / (1 + max(abs(value / rest[0]) for value in rest))
    found = []
    waiting = [(low, high, changes(chain, low), changes(chain, high))]
    while waiting:
        low, high, before, after = waiting.pop()
        if before == after:
            continue
        if before - after == 1 and high < 1.5 * low:
            found.append(solved(chain, low, high, before))
            continue
        middle = mp.sqrt(low * high)
        between = changes(chain, middle)
        waiting += [(low, middle, before, between), (middle, high, between, after)]
    return sorted(found)


def remainder(upper, lower):
    """Rest of a division of polynomials."""
    rest = list(upper)
    while len(rest) >= len(lower):
        factor = rest.pop() / lower[-1]
        shift = len(rest) + 1 - len(lower)
        for order, value in enumerate(lower[:-1]):
            rest[shift + order] -= factor * value
    return rest


def sturm_chain(coefficients):
    """p, p', then each the negative rest of the two before, divided by its size."""
    chain = [coefficients, [order * value for order, value in enumerate(coefficients)][1:]]
    while len(chain[-1]) > 1:
        size = max(abs(value) for value in chain[-2])
        rest = remainder(chain[-2], chain[-1])
        largest = max(abs(value) for value in rest)
        while rest and abs(rest[-1]) <= GONE * largest:
            rest.pop()
        if not rest or largest <= GONE * size:
            break
        chain.append([-value / largest for value in rest])
    return chain


def changes(chain, place):
    """Changes of sign along the chain."""
    signs = [value > 0 for value in (mp.polyval(one[::-1], place) for one in chain) if value]
    return sum(a != b for a, b in pairwise(signs))


def solved(chain, low, high, before):
    """The single root between two places."""
    polynomial, slope = chain[0][::-1], chain[1][::-1]
    for _ in range(12):
        middle = (low + high) / 2
        low, high = (low, middle) if changes(chain, middle) != before else (middle, high)
    place = (low + high) / 2
    for _ in range(12):
        place -= mp.polyval(polynomial, place) / mp.polyval(slope, place)
    if not low <= place <= high:
        raise ArithmeticError("a root got lost")
    return place
