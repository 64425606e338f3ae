"""Measures by poles: logarithms of the poles from kernels in, one value per loop out for sweep.

Every function takes log_z : (..., n) complex = s*T of the poles (-inf for a pole at z = 0, NaN where unsolved)
and returns (...) float; NaN in, NaN out. A loop with no pole at all settles at once: radius 0, damping 1.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

Real = NDArray[np.float64]
Complex = NDArray[np.complex128]


def spectral_radius(log_z: Complex) -> Real:
    """Largest |z| [1]."""
    return np.asarray(np.exp(_slowest(log_z)))


def damping_ratio(log_z: Complex) -> Real:
    """Least -Re s/|s| [1]; z = 0 counts 1 and z = 1, where the ratio has no limit, counts 0."""
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = -log_z.real / np.abs(log_z)
    ratio = np.where(np.isneginf(log_z.real), 1.0, np.where(log_z == 0, 0.0, ratio))
    return np.asarray(ratio.min(axis=-1, initial=1.0))


def natural_frequency(log_z: Complex, period: Real) -> Real:
    """Least |s| [rad/s]; +inf when every pole is at z = 0."""
    return np.asarray(np.abs(log_z).min(axis=-1, initial=np.inf)) / period


def settling_time(log_z: Complex, period: Real, band: float) -> Real:
    """ln(1/band)/sigma [s]; +inf when the slowest pole does not decay, 0 when all poles are at z = 0."""
    decay = -_slowest(log_z)
    with np.errstate(divide="ignore"):
        return np.where(decay <= 0, np.inf, -np.log(band) * period / decay)


def time_to_peak(log_z: Complex, period: Real) -> Real:
    """pi/|Im s| of the slowest-decaying pair of non-real z [s]; +inf when there is none."""
    pair, exists = _slowest_pair(log_z)
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(
            exists, np.pi * period / np.abs(pair.imag), np.where(np.isnan(pair.real), np.nan, np.inf)
        )


def overshoot(log_z: Complex) -> Real:
    """100 exp(-pi zeta/sqrt(1 - zeta²)) of the slowest-decaying pair of non-real z [%]; 0 when there is none."""
    pair, exists = _slowest_pair(log_z)
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        value = 100.0 * np.exp(np.pi * pair.real / np.abs(pair.imag))  # zeta/sqrt(1 - zeta²) = -Re s/|Im s|
    return np.where(exists, value, np.where(np.isnan(pair.real), np.nan, 0.0))


BY_POLES: dict[str, Callable[[Complex, Real, float], Real]] = {
    "stability": lambda log_z, period, band: spectral_radius(log_z),
    "spectral radius": lambda log_z, period, band: spectral_radius(log_z),
    "damping ratio": lambda log_z, period, band: damping_ratio(log_z),
    "natural frequency": lambda log_z, period, band: natural_frequency(log_z, period),
    "settling time by poles": settling_time,
    "time to peak by poles": lambda log_z, period, band: time_to_peak(log_z, period),
    "overshoot by poles": lambda log_z, period, band: overshoot(log_z),
}


def _slowest(log_z: Complex) -> Real:
    """Largest ln|z|."""
    return np.asarray(log_z.real.max(axis=-1, initial=-np.inf))


def _slowest_pair(log_z: Complex) -> tuple[Complex, NDArray[np.bool_]]:
    """The non-real z of largest modulus and whether there is one; the first pole (NaN if unsolved) otherwise."""
    if log_z.shape[-1] == 0:
        return np.zeros(log_z.shape[:-1], complex), np.zeros(log_z.shape[:-1], bool)
    paired = (log_z.imag != 0) & (np.abs(log_z.imag) != np.pi) & np.isfinite(log_z.real)
    index = np.where(paired, log_z.real, -np.inf).argmax(axis=-1)
    chosen = np.take_along_axis(log_z, index[..., None], -1)[..., 0]
    return chosen, np.take_along_axis(paired, index[..., None], -1)[..., 0]
