"""Sampling: the plant of a study at given parameter values and periods in, pulse transfers for closing out."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from explorer.kernels.hold import sample_with_hold, whole_samples
from explorer.loop.closing import Sampled
from explorer.loop.plant import Realisation, in_series, rational_in, realise_states, realise_transfer
from explorer.study.expressions import ExpressionError
from explorer.study.model import Study

Real = NDArray[np.float64]


def realise(study: Study, values: Mapping[str, Real]) -> Realisation:
    """Plant and sensor of a study as one realisation over scenarios; the plant in s or by matrices.

    values : parameter name -> (S,) float. Raises ExpressionError, see loop.plant.
    """
    scenarios = _count(values)
    plant = study.plant
    if plant.states is not None:
        realisation = realise_states(plant.states, values, scenarios)
    else:
        assert plant.transfer is not None
        realisation = realise_transfer(plant.transfer, values, scenarios)
    if study.loop.sensor is not None:
        realisation = in_series(realisation, realise_transfer(study.loop.sensor, values, scenarios))
    return realisation


def sample(study: Study, values: Mapping[str, Real], period: Real) -> Sampled:
    """The pulse transfer from the processor's output to its next sample, exactly.

    Parameters
    ----------
    values : parameter name -> (S,) float, with "clock" = true period / nominal period.
    period : (P,) nominal sample periods [s].

    Source: modified z-transform, Jury 1964; total dead time d·T - m with whole samples d and advance m.
    """
    if study.plant.variable == "z":
        return _sampled_already(study, values, period)
    realisation = realise(study, values)
    scenarios, order = realisation.start.shape
    true_period, whole, advance = delays_of(study, values, period)
    numerator = np.empty((scenarios, len(period), 2, order + 1))
    denominator = np.empty_like(numerator)
    sample_with_hold(
        realisation.state, realisation.start, realisation.output, realisation.direct,
        true_period, advance, numerator, denominator,
    )  # fmt: skip
    return Sampled(numerator, denominator, whole, true_period)


def delays_of(study: Study, values: Mapping[str, Real], period: Real) -> tuple[Real, NDArray[np.int64], Real]:
    """True periods [s], whole samples of delay, and the advance [s] that whole samples have on the true delay.

    Each is (S, P); (S, 1) for a plant given in z, where only whole samples of delay exist and the advance is 0.
    """
    delay = study.loop.computing_delay
    if study.plant.variable == "z":
        samples = dead_times(study, values) / period[0] + delay.seconds / period[0] + delay.periods
        whole = np.rint(samples).astype(np.int64)[:, None]
        return np.full(whole.shape, period[0]), whole, np.zeros(whole.shape)
    true_period = np.multiply.outer(values["clock"], period)
    dead_time = dead_times(study, values)[:, None] + delay.seconds + delay.periods * true_period
    whole, advance = np.empty(true_period.shape, np.int64), np.empty(true_period.shape)
    whole_samples(true_period, dead_time, whole, advance)
    return true_period, whole, advance


def dead_times(study: Study, values: Mapping[str, Real]) -> Real:
    """The plant's dead time per scenario, (S,) [s] (samples for a normalised plant); 0 where none is given."""
    if study.plant.dead_time is None:
        return np.zeros(_count(values))
    scale = rational_in(study.plant.dead_time, "", [1.0, 0.0], values).scale[0]
    return np.broadcast_to(scale, (_count(values),)).copy()


def _sampled_already(study: Study, values: Mapping[str, Real], period: Real) -> Sampled:
    """A plant given in z, read straight into w and into z; only whole-sample delays exist for it."""
    scenarios = _count(values)
    assert study.plant.transfer is not None
    parts = []
    for polynomial in ([1.0, 1.0], [1.0, 0.0]):
        transfer = rational_in(study.plant.transfer, "z", polynomial, values)
        numerator, denominator = transfer.numerator()[0], transfer.denominator()
        if (denominator[..., 0] == 0).any():
            raise ExpressionError(
                1, "the order of the transfer changes inside the tolerance box (a leading coefficient is 0);"
            )
        padded = np.zeros((scenarios, denominator.shape[-1]))
        if numerator.shape[-1] > denominator.shape[-1]:
            raise ExpressionError(
                1, f"the numerator is of degree {numerator.shape[-1] - 1}, the denominator of "
                f"{denominator.shape[-1] - 1}: no real plant answers before it is asked;"
            )  # fmt: skip
        padded[:, denominator.shape[-1] - numerator.shape[-1] :] = numerator
        parts.append((padded, np.broadcast_to(denominator, padded.shape)))
    true_period, whole, _ = delays_of(study, values, period)
    return Sampled(
        np.stack([above for above, _ in parts], axis=1)[:, None],
        np.stack([below for _, below in parts], axis=1)[:, None],
        whole,
        true_period,
    )


def _count(values: Mapping[str, Real]) -> int:
    return len(values["clock"])
