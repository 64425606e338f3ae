"""Resolution: formulas that tell whether rounding leaves enough of the poles near z = 0 or z = 1, for factors.

In w = z - 1 poles near z = 0 lose their digits, in z those near z = 1. Neither matters for a pole that decides no
measure: two real z > 0 have damping 1 however inexact, and a pole that decays at once is rarely the least damped.
"""

from __future__ import annotations

from typing import Any

Row = Any  # a lanes.Symbol or a NumPy array

EPS = 2.220446049250313e-16
WANTED = 1e-9  # relative error of a measure


def near_origin(factors: list[tuple[Row, Row]], linear: Row | None) -> Row:
    """Whether some factor in w has |z|² < 0.5."""
    small = [1.0 + (v - u) for u, v in factors]
    small += [] if linear is None else [(1.0 - linear) * (1.0 - linear)]
    near = small[0] <= 0.5
    for one in small[1:]:
        near = near | (one <= 0.5)
    return near


def resolved(
    operations: Any, factors: list[tuple[Row, Row]], linear: Row | None, damping: Row, seen: Row, in_z: bool
) -> Row:
    """1.0 where rounding leaves what measures need at WANTED, else 0.0.

    The error of a factor is about 4 eps (absolute product at its roots' size)/sqrt(Π resultants with the others). It
    is held against |z|², which is at |w| = 1, and, for factors in z, against |w|², which is at |z| = 1.
    """
    at_one = _bound(operations, factors, linear, 1.0)
    good = at_one < 1e200
    for i, (u, v) in enumerate(factors):
        apart = operations.absolute(v * 0.0 + 1.0)
        for j, (other_u, other_v) in enumerate(factors):
            if j != i:
                a, b = other_u - u, other_v - v
                apart = apart * operations.absolute(b * (b - a * u) + a * a * v)
        if linear is not None:
            apart = apart * operations.absolute(linear * (linear - u) + v)
        small, total = (v, -u) if in_z else (1.0 + (v - u), 2.0 - u)  # product and sum of the two z
        both = operations.sqrt(operations.absolute(small))
        real = u * u >= v * 4.0
        larger = operations.where(real, operations.maximum(operations.absolute(total), both), both)
        least = operations.absolute(small) / larger
        allowed = _bound(operations, factors, linear, least) if in_z else at_one
        sharp = apart * (small * small) * _leniency(operations, least) >= allowed
        if in_z:  # the larger of the two has a bound of its own
            square = larger * larger
            own = _bound(operations, factors, linear, larger)
            sharp = sharp & (apart * (square * square) * _leniency(operations, larger) >= own)
        positive = real & (total > 0.0) & (small > 0.0)
        good = good & (sharp | positive | _harmless(small, damping, seen))
        if in_z:
            beside = 1.0 + u + v
            good = good & (apart * (beside * beside) >= at_one)
    if linear is not None:
        z = -linear if in_z else 1.0 - linear
        apart = operations.absolute(z * 0.0 + 1.0)
        for u, v in factors:
            value = linear * (linear - u) + v
            apart = apart * (value * value)
        allowed = _bound(operations, factors, linear, operations.absolute(z)) if in_z else at_one
        sharp = apart * (z * z) * _leniency(operations, operations.absolute(z)) >= allowed
        good = good & (sharp | (z > 0.0) | _harmless(z * z, damping, seen))
        if in_z:
            good = good & (apart * ((1.0 - z) * (1.0 - z)) >= at_one)
    return operations.where(good, 1.0, 0.0)


def _bound(operations: Any, factors: list[tuple[Row, Row]], linear: Row | None, size: Any) -> Row:
    """(4 eps/WANTED · absolute product at |x| = size)²."""
    terms = [size * size + operations.absolute(u) * size + operations.absolute(v) for u, v in factors]
    terms += [] if linear is None else [operations.absolute(linear) + size]
    total = terms[0]
    for term in terms[1:]:
        total = total * term
    return total * total * (4.0 * EPS / WANTED) ** 2


def _leniency(operations: Any, size: Row) -> Row:
    """How much larger the relative error of |z| may be than that of a damping ratio, squared, at |z| = size.

    With σ = -log|z| the ratio σ/sqrt(σ² + π²) changes by π²/(σ(σ² + π²)) times the change of |z|; a step function
    below the inverse of that.
    """
    result: Any = 4.0
    for bound, factor in ((1e-2, 14.0), (1e-4, 88.0), (1e-6, 280.0)):
        result = operations.where(size < bound, factor * factor, result)
    return result


def _harmless(small: Row, damping: Row, seen: Row) -> Row:
    """A factor that is not near z = 0 (small : |z|²), or cannot be the least damped one.

    With |z|² < 0.04 no damping ratio is below 0.45, with |z|² < 0.5 none below 0.1; the slowest pole and the slowest
    pair are others when their log|z|, `seen`, is above that of all such factors.
    """
    return (small > 0.5) | ((seen > -0.35) & (((damping < 0.45) & (small < 0.04)) | (damping < 0.1)))
