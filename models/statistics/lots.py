"""A lot's constant over its plate reads, with random effects.

Series of one plate read are pooled first; the variance between plate reads is estimated by Paule and Mandel's
moment equation, the interval is that of Hartung and Knapp. This module knows neither enzymes nor files.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import norm
from scipy.stats import t as t_distribution

from models.statistics.sums import order_free_sum

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]

LEVEL = 0.95


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
    """

    value: float
    standard_error: float
    low: float
    high: float
    between_plate_sd: float
    plate_read_count: int
    within_plate_only: bool


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
    2015 (doi:10.1186/s12874-015-0091-1) advise for few plates.

    Parameters
    ----------
    values, standard_errors
        Estimates and their standard errors, shape (estimates,). An estimate without a finite, positive
        standard error cannot be weighed and is left out if any other has one.
    plate_index
        Plate read of each estimate, shape (estimates,).
    low, high
        95 % intervals of the estimates, shape (estimates,): what is reported where one estimate is all there
        is.

    Returns
    -------
    LotValue
        With one plate read: no between-plate deviation, the within-plate interval, and `within_plate_only`
        set.
    """
    known = np.isfinite(values)
    weighed = known & np.isfinite(standard_errors) & (standard_errors > 0)
    used = weighed if weighed.any() else known
    plates = np.unique(plate_index[used])
    if plates.size == 0:
        return LotValue(np.nan, np.nan, np.nan, np.nan, np.nan, 0, False)
    if np.count_nonzero(used) == 1:
        only = int(np.flatnonzero(used)[0])
        ends = [np.nan if end is None else float(end[only]) for end in (low, high)]
        error = float(standard_errors[only]) if weighed[only] else np.nan
        return LotValue(float(values[only]), error, ends[0], ends[1], np.nan, 1, True)
    if not weighed.any():
        return LotValue(
            float(np.mean(np.sort(values[used]))),
            np.nan,
            np.nan,
            np.nan,
            np.nan,
            plates.size,
            plates.size == 1,
        )

    pooled = np.array(
        [
            _pool(values[used & (plate_index == p)], standard_errors[used & (plate_index == p)] ** 2)
            for p in plates
        ]
    )
    order = np.lexsort((pooled[:, 1], pooled[:, 0]))
    means, variances = pooled[order, 0], pooled[order, 1]
    if plates.size == 1:
        error = float(np.sqrt(variances[0]))
        reach = float(norm.ppf(0.5 + LEVEL / 2.0)) * error
        return LotValue(
            float(means[0]), error, float(means[0]) - reach, float(means[0]) + reach, np.nan, 1, True
        )

    between = between_variance(means, variances)
    mean, variance = _pool(means, variances + between)
    weights = 1.0 / (variances + between)
    scale = max(1.0, order_free_sum(weights * (means - mean) ** 2) / (plates.size - 1))
    error = float(np.sqrt(variance * scale))
    reach = float(t_distribution.ppf(0.5 + LEVEL / 2.0, plates.size - 1)) * error
    return LotValue(mean, error, mean - reach, mean + reach, float(np.sqrt(between)), plates.size, False)


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
