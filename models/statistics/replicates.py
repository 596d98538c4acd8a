"""How much replicate rates scatter beyond their own standard errors: a coefficient of variation a plate.

By restricted maximum likelihood within the groups (Patterson and Thompson 1971,
doi:10.1093/biomet/58.3.545), which lets each level speak by what it can tell: slow wells, whose own standard
errors drown the scatter, hardly at all.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]

LEVEL = 0.95

_LARGEST_CV = 2.0
_BISECTIONS = 50


@dataclass(frozen=True, eq=False)
class ReplicateCv:
    """How much replicates scatter, all of it: their own standard errors are not taken out.

    Attributes
    ----------
    cv, low, high
        Pooled coefficient of variation [1] and its 95 % interval; NaN without replicates.
    degrees_of_freedom
        Replicates less groups, of the groups that count.
    group_cv
        Coefficient of variation of each group [1], shape (groups,); NaN for a group of one, or of a mean not
        above 0.
    """

    cv: float
    low: float
    high: float
    degrees_of_freedom: int
    group_cv: Floats


def replicate_cv(values: Floats, group: Integers) -> ReplicateCv:
    """Pooled coefficient of variation of replicates, as a method's repeatability is reported.

    Root mean square of the groups' coefficients, each weighing by its degrees of freedom (for pairs: Hyslop
    and White 2009, doi:10.3155/1047-3289.59.9.1032); interval from chi-square, as if all groups scattered
    alike. The classic slip is to average the coefficients themselves: that of pairs comes out a fifth low.
    For the scatter beyond the rates' standard errors, which weights need, see `pooled_cv`.

    Parameters
    ----------
    values
        Rates or any other positive quantity, shape (n,); NaN is left out.
    group
        Replicate group of each, counted from 0, shape (n,).

    Returns
    -------
    ReplicateCv
    """
    group_count = int(group.max(initial=-1)) + 1
    known = np.isfinite(values)
    values, group = values[known], group[known]
    members = _sum_by(group, np.ones_like(values), group_count)
    with np.errstate(all="ignore"):
        mean = _sum_by(group, values, group_count) / members
        variance = _sum_by(group, (values - mean[group]) ** 2, group_count) / (members - 1.0)
        of_group = np.where((members > 1) & (mean > 0), np.sqrt(variance) / mean, np.nan)
    counts = np.isfinite(of_group)
    degrees = int(np.sum(members[counts] - 1.0))
    if degrees == 0:
        return ReplicateCv(np.nan, np.nan, np.nan, 0, of_group)
    cv = float(np.sqrt(np.sum((members[counts] - 1.0) * of_group[counts] ** 2) / degrees))
    tail = 0.5 - LEVEL / 2.0
    low, high = (cv * float(np.sqrt(degrees / chi2.isf(share, degrees))) for share in (tail, 1.0 - tail))
    return ReplicateCv(cv, low, high, degrees, of_group)


def pooled_cv(
    plate: Integers, group: Integers, residual: Floats, size: Floats, standard_error: Floats, plate_count: int
) -> tuple[Floats, Floats]:
    """Coefficient of variation of replicates beyond their standard errors, one a plate.

    Parameters
    ----------
    plate, group
        Plate and replicate group of each rate, counted from 0, shape (n,). The rows of a plate must come in
        an order that does not depend on the batch.
    residual
        Rate less its fitted value, shape (n,).
    size
        Fitted rate that the coefficient multiplies, shape (n,).
    standard_error
        Of each rate, shape (n,).
    plate_count
        Number of plates.

    Returns
    -------
    tuple of arrays
        Coefficient of variation [1] and its degrees of freedom, both of shape (plates,); 0 and 0 where a
        plate has no replicates.
    """
    group_count = int(group.max(initial=-1)) + 1
    members = np.bincount(group, minlength=group_count)
    plate_of_group = np.zeros(group_count, dtype=np.intp)
    plate_of_group[group] = plate
    degrees = _sum_by(plate_of_group, np.maximum(members - 1.0, 0.0), plate_count)
    low, high = np.zeros(plate_count), np.full(plate_count, _LARGEST_CV**2)
    variance = standard_error**2
    scale = _group_mean(group, size, np.ones_like(size), group_count)[group] ** 2

    # Rates without any error of their own would else weigh infinitely much at a CV of 0.
    floor = np.maximum(1e-24 * scale, 1e-150)

    def score(cv_square: Floats) -> Floats:
        """Derivative of the restricted log-likelihood by the square of the CV, times two."""
        weight = 1.0 / np.maximum(variance + cv_square[plate] * scale, floor)
        centred = residual - _group_mean(group, residual, weight, group_count)[group]
        own_share = weight / _sum_by(group, weight, group_count)[group]
        terms = scale * weight * (weight * centred**2 - (1.0 - own_share))
        return _sum_by(plate, terms, plate_count)

    none = score(low) <= 0
    for _ in range(_BISECTIONS):
        middle = 0.5 * (low + high)
        above = score(middle) > 0
        low, high = np.where(above, middle, low), np.where(above, high, middle)
    cv = np.where(none | (degrees == 0), 0.0, np.sqrt(0.5 * (low + high)))
    return cv, degrees


def _group_mean(group: Integers, values: Floats, weights: Floats, group_count: int) -> Floats:
    with np.errstate(all="ignore"):
        mean: Floats = _sum_by(group, weights * values, group_count) / _sum_by(group, weights, group_count)
    return mean


def _sum_by(group: Integers, values: Floats, count: int) -> Floats:
    """Sum of the values of each group, added one after another in the order of the rows."""
    return np.bincount(group, values, minlength=count).astype(np.float64)
