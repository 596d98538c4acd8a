"""How much replicate rates scatter beyond their own standard errors: a coefficient of variation a plate.

Solved as a moment equation in the manner of Paule and Mandel 1982 (doi:10.6028/jres.087.022): the excess that
makes the weighted scatter within the groups equal to its degrees of freedom.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]

_LARGEST_CV = 2.0
_BISECTIONS = 50


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
    degrees = np.bincount(plate_of_group, np.maximum(members - 1.0, 0.0), minlength=plate_count).astype(
        np.float64
    )
    low, high = np.zeros(plate_count), np.full(plate_count, _LARGEST_CV**2)
    variance = standard_error**2
    scale = _group_mean(group, size, np.ones_like(size), group_count)[group] ** 2

    def excess(cv_square: Floats) -> Floats:
        total = variance + cv_square[plate] * scale
        weight = 1.0 / np.maximum(total, 1e-300)
        centred = residual - _group_mean(group, residual, weight, group_count)[group]
        scatter: Floats = np.bincount(plate, weight * centred**2, minlength=plate_count) - degrees
        return scatter

    none = excess(low) <= 0
    for _ in range(_BISECTIONS):
        middle = 0.5 * (low + high)
        above = excess(middle) > 0
        low, high = np.where(above, middle, low), np.where(above, high, middle)
    cv = np.where(none | (degrees == 0), 0.0, np.sqrt(0.5 * (low + high)))
    return cv, degrees


def _group_mean(group: Integers, values: Floats, weights: Floats, group_count: int) -> Floats:
    total = np.bincount(group, weights, minlength=group_count)
    summed = np.bincount(group, weights * values, minlength=group_count)
    with np.errstate(all="ignore"):
        mean: Floats = summed / total
    return mean
