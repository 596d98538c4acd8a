"""A lot's constant over its plate reads, with random effects.

Series of one plate read are pooled first; the variance between plate reads is estimated by Paule and Mandel's
moment equation, the interval is that of Hartung and Knapp. Positive constants are combined as logarithms, so
that neither value nor interval can pass zero. This module knows neither enzymes nor files.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.stats import norm
from scipy.stats import t as t_distribution

from models.statistics.sums import order_free_sum

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]
Flags = NDArray[np.bool_]

LEVEL = 0.95
LARGEST_RELATIVE_ERROR = 1.0
"""An estimate whose standard error exceeds its value is no value: its order of magnitude is not known."""
_OPEN_SHARE = 0.5


@dataclass(frozen=True)
class LotValue:
    """A constant of a lot.

    Attributes
    ----------
    value, standard_error
        Weighted mean over plate reads and its standard error, in the constant's unit; NaN where unknown.
    low, high
        95 % interval; NaN where an end is open or not known.
    between_plate_sd
        Standard deviation between plate reads beyond what their standard errors explain; NaN with one plate
        read.
    plate_read_count
        Plate reads the value rests on.
    within_plate_only
        Whether the interval says nothing of the spread between plate reads, because there is one only.
    reason
        Why there is no value, or why an end of the interval is open; None where there is nothing to say.
    """

    value: float
    standard_error: float
    low: float
    high: float
    between_plate_sd: float
    plate_read_count: int
    within_plate_only: bool
    reason: str | None = None


def combine_plate_reads(
    values: Floats,
    standard_errors: Floats,
    plate_index: Integers,
    low: Floats | None = None,
    high: Floats | None = None,
) -> LotValue:
    """Combine estimates of one constant over plate reads.

    Between-plate variance: Paule and Mandel 1982 (doi:10.6028/jres.087.022). Interval: Hartung and Knapp 2001
    (doi:10.1002/sim.791) on plates - 1 degrees of freedom, its scale not below 1 as Rover, Knapp and Friede
    2015 (doi:10.1186/s12874-015-0091-1) advise for few plates. Where all values are positive, logarithms with
    the variances (standard error / value)^2 are combined and transformed back (GUM, JCGM 100:2008, 5.1.6);
    where one is not, the values themselves.

    Parameters
    ----------
    values, standard_errors
        Estimates and their standard errors, shape (estimates,). An estimate without a finite, positive
        standard error cannot be weighed and is left out if any other has one; so is a positive one whose
        standard error exceeds `LARGEST_RELATIVE_ERROR` times its value.
    plate_index
        Plate read of each estimate, shape (estimates,).
    low, high
        95 % intervals of the estimates, shape (estimates,), NaN where open. An end is open in the result too
        where more than half of the weight rests on estimates that are open there.

    Returns
    -------
    LotValue
        With one plate read: no between-plate deviation, the within-plate interval, and `within_plate_only`
        set. Where no estimate holds the constant: no value, the reason, and an interval as open as theirs.
    """
    known = np.isfinite(values)
    weighed = known & np.isfinite(standard_errors) & (standard_errors > 0)
    if not known.any():
        return LotValue(np.nan, np.nan, np.nan, np.nan, np.nan, 0, False, "no estimate is known")
    if not weighed.any():
        return _unweighed(values[known], plate_index[known])
    positive = bool(np.all(values[weighed] > 0))
    held = weighed
    if positive:
        held = weighed & (standard_errors <= LARGEST_RELATIVE_ERROR * values)
        if not held.any():
            return _not_held(plate_index[weighed], _cut(low, weighed), _cut(high, weighed))
    values, standard_errors, plate_index = values[held], standard_errors[held], plate_index[held]
    low, high = _cut(low, held), _cut(high, held)
    if values.size == 1:
        first, last = (np.nan if end is None else float(end[0]) for end in (low, high))
        reason = _open_reason(low is not None and np.isnan(first), high is not None and np.isnan(last))
        return LotValue(float(values[0]), float(standard_errors[0]), first, last, np.nan, 1, True, reason)

    scale = np.log(values) if positive else values
    variances = (standard_errors / values) ** 2 if positive else standard_errors**2
    combined, weights = _random_effects(scale, variances, plate_index)
    if positive:
        value = float(np.exp(combined.value))
        combined = replace(
            combined,
            value=value,
            standard_error=value * combined.standard_error,
            low=float(np.exp(combined.low)),
            high=float(np.exp(combined.high)),
            between_plate_sd=value * combined.between_plate_sd,
        )
    is_open = [
        end is not None and order_free_sum(weights * np.isnan(end)) > _OPEN_SHARE for end in (low, high)
    ]
    return replace(
        combined,
        low=np.nan if is_open[0] else combined.low,
        high=np.nan if is_open[1] else combined.high,
        reason=_open_reason(*is_open),
    )


def _cut(ends: Floats | None, where: Flags) -> Floats | None:
    return None if ends is None else ends[where]


def _open_reason(low: bool | np.bool_, high: bool | np.bool_) -> str | None:
    if not (low or high):
        return None
    side = "on both sides" if low and high else "below" if low else "above"
    return f"the plate reads leave the interval open {side}"


def _unweighed(values: Floats, plate_index: Integers) -> LotValue:
    """Plain mean where no estimate has a usable standard error; geometric where all are positive."""
    ordered = np.sort(values)
    mean = float(np.exp(np.mean(np.log(ordered)))) if np.all(ordered > 0) else float(np.mean(ordered))
    plates = np.unique(plate_index).size
    reason = "no estimate has a standard error"
    return LotValue(mean, np.nan, np.nan, np.nan, np.nan, plates, plates == 1, reason)


def _not_held(plate_index: Integers, low: Floats | None, high: Floats | None) -> LotValue:
    """No value: every standard error exceeds its value. The interval spans those of the estimates."""
    plates = np.unique(plate_index).size
    first = np.nan if low is None else float(np.min(low))
    last = np.nan if high is None else float(np.max(high))
    reason = "no plate read holds the constant: every standard error exceeds its value"
    return LotValue(np.nan, np.nan, first, last, np.nan, plates, plates == 1, reason)


def _random_effects(values: Floats, variances: Floats, plate_index: Integers) -> tuple[LotValue, Floats]:
    """Random-effects mean of at least two estimates, and the share that each has in it."""
    plates = np.unique(plate_index)
    members = [plate_index == plate for plate in plates]
    pooled = np.array([_pool(values[mine], variances[mine]) for mine in members])
    order = np.lexsort((pooled[:, 1], pooled[:, 0]))
    means, plate_variances = pooled[order, 0], pooled[order, 1]
    within = np.select(members, list(pooled[:, 1])) / variances
    if plates.size == 1:
        error = float(np.sqrt(plate_variances[0]))
        reach = float(norm.ppf(0.5 + LEVEL / 2.0)) * error
        mean = float(means[0])
        return LotValue(mean, error, mean - reach, mean + reach, np.nan, 1, True), within

    between = between_variance(means, plate_variances)
    mean, variance = _pool(means, plate_variances + between)
    plate_weights = 1.0 / (plate_variances + between)
    scale = max(1.0, order_free_sum(plate_weights * (means - mean) ** 2) / (plates.size - 1))
    error = float(np.sqrt(variance * scale))
    reach = float(t_distribution.ppf(0.5 + LEVEL / 2.0, plates.size - 1)) * error
    shares = within * np.select(members, list(variance / (pooled[:, 1] + between)))
    value = LotValue(mean, error, mean - reach, mean + reach, float(np.sqrt(between)), plates.size, False)
    return value, shares


def between_variance(means: Floats, variances: Floats) -> float:
    """Variance between plate reads that makes the weighted scatter equal to its degrees of freedom; 0 if none
    does.

    Parameters
    ----------
    means, variances
        Mean of each plate read and its squared standard error, shape (plates,), at least two.
    """

    def excess(between: float) -> float:
        weights = 1.0 / (variances + between)
        mean = order_free_sum(weights * means) / order_free_sum(weights)
        return order_free_sum(weights * (means - mean) ** 2) - (means.size - 1)

    if excess(0.0) <= 0.0:
        return 0.0
    low, high = 0.0, order_free_sum((means - np.mean(means)) ** 2)
    while excess(high) > 0.0:
        high *= 2.0
    for _ in range(200):
        middle = 0.5 * (low + high)
        if middle in (low, high):
            break
        low, high = (middle, high) if excess(middle) > 0.0 else (low, middle)
    return 0.5 * (low + high)


def _pool(values: Floats, variances: Floats) -> tuple[float, float]:
    """Inverse-variance mean and its variance."""
    weights = 1.0 / variances
    total = order_free_sum(weights)
    return order_free_sum(weights * values) / total, 1.0 / total
