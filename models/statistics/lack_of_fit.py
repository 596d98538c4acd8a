"""Lack of fit against pure error: whether a curve misses the means of replicates by more than they scatter.

This module knows neither rate laws nor standard curves: it is given residuals and groups.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import f as f_distribution

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]


@dataclass(frozen=True)
class LackOfFit:
    """Lack of fit of several fits, one value each, shape (fits,).

    Attributes
    ----------
    f_value, p_value
        Ratio of the mean squares and its upper tail; NaN where a fit has no replicates or no more groups than
        constants, or where replicates agree exactly.
    lack_degrees, pure_degrees
        Degrees of freedom: groups less constants, and rates less groups.
    pure_error_variance
        Weighted mean square within groups: the scale of the weights if all is well; NaN without replicates.
    """

    f_value: Floats
    p_value: Floats
    lack_degrees: Floats
    pure_degrees: Floats
    pure_error_variance: Floats


def lack_of_fit(
    fit: Integers, group: Integers, residual: Floats, weight: Floats, constant_count: Floats
) -> LackOfFit:
    """Split each fit's weighted residual sum into what replicates explain and what they do not.

    F = (sum w (mean of group)^2 / (groups - constants)) / (sum w (residual - mean)^2 / (rates - groups)); see
    Draper and Smith 1998, section 2.1 (doi:10.1002/9781118625590), and Bates and Watts 1988, section 1.3.2
    (doi:10.1002/9780470316757). The tail is exact for linear models, near it for others.

    Parameters
    ----------
    fit, group
        Fit and replicate group of each point, counted from 0, shape (points,). A group belongs to one fit.
    residual, weight
        Observed less fitted, and the weight that it had, shape (points,).
    constant_count
        Fitted constants of each fit, shape (fits,).

    Returns
    -------
    LackOfFit
    """
    count = constant_count.size
    group_count = int(group.max(initial=-1)) + 1
    fit_of_group = np.zeros(group_count, dtype=np.intp)
    fit_of_group[group] = fit
    occupied = np.bincount(group, minlength=group_count) > 0
    mass = _sums(group, weight, group_count)
    with np.errstate(all="ignore"):
        mean = _sums(group, weight * residual, group_count) / mass
        pure = _sums(fit, weight * (residual - mean[group]) ** 2, count)
        lack = _sums(fit, weight * mean[group] ** 2, count)
        groups = np.bincount(fit_of_group[occupied], minlength=count).astype(np.float64)
        points = np.bincount(fit, minlength=count).astype(np.float64)
        lack_degrees, pure_degrees = np.maximum(groups - constant_count, 0.0), points - groups
        pure_variance = np.where(pure_degrees > 0, pure / pure_degrees, np.nan)
        f_value = np.where(lack_degrees > 0, lack / lack_degrees, np.nan) / pure_variance
    f_value = np.where(np.isfinite(f_value), f_value, np.nan)
    p_value = np.asarray(f_distribution.sf(f_value, lack_degrees, pure_degrees), dtype=np.float64)
    return LackOfFit(f_value, p_value, lack_degrees, pure_degrees, pure_variance)


def _sums(index: Integers, values: Floats, count: int) -> Floats:
    """Sum of the values of each index, added one after another in the order of the rows."""
    return np.bincount(index, values, minlength=count).astype(np.float64)
