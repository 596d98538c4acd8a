"""Variances from few degrees of freedom, steadied by those of the whole plate.

Each well's residual variance is drawn towards the plate's typical one, by as much as the wells' variances
agree (Smyth 2004, doi:10.2202/1544-6115.1027, equations from section 6.2). This module knows no wells or
curves.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import digamma, polygamma

from models.statistics.sums import order_free_sum

Floats = NDArray[np.float64]

_LARGEST_PRIOR = 1e6
"""Prior degrees of freedom that stand for 'all wells share one variance'."""


@dataclass(frozen=True)
class ModeratedVariances:
    """Steadied variances.

    Attributes
    ----------
    variance
        Steadied variance of each entry, shape as given; NaN where nothing is known.
    degrees_of_freedom
        Degrees of freedom that it carries, shape as given.
    prior_variance, prior_degrees
        The plate's typical variance and the degrees of freedom that it counts for; NaN and 0 where unknown.
    """

    variance: Floats
    degrees_of_freedom: Floats
    prior_variance: float
    prior_degrees: float


def moderate_variances(variances: Floats, degrees_of_freedom: Floats) -> ModeratedVariances:
    """Steady variances that belong to one plate.

    Parameters
    ----------
    variances
        Residual variance of each fit, shape (n,); NaN where unknown.
    degrees_of_freedom
        Of each, shape (n,); 0 where there is none.

    Returns
    -------
    ModeratedVariances
    """
    known = np.isfinite(variances) & (degrees_of_freedom > 0)
    prior_variance, prior_degrees = _prior(variances[known], degrees_of_freedom[known])
    degrees = np.where(known, degrees_of_freedom, 0.0)
    own = np.where(known, variances, 0.0)
    if not np.isfinite(prior_variance):
        return ModeratedVariances(np.where(known, own, np.nan), degrees, np.nan, 0.0)
    total = prior_degrees + degrees
    steadied = (prior_degrees * prior_variance + degrees * own) / total
    return ModeratedVariances(steadied, total, prior_variance, prior_degrees)


def _prior(variances: Floats, degrees: Floats) -> tuple[float, float]:
    """Prior variance and degrees of freedom from mean and spread of the logarithms."""
    positive = variances > 0
    if np.count_nonzero(positive) < 3:
        return (float(np.median(variances)) if variances.size else np.nan), (1.0 if variances.size else 0.0)
    # A variance of exactly 0 (noise-free reads, or a detector's step) would send the logarithm to minus
    # infinity.
    floored = np.maximum(variances, 1e-5 * float(np.median(variances[positive])))
    half = degrees / 2.0
    entries = np.log(floored) - digamma(half) + np.log(half)
    count = entries.size
    centre = order_free_sum(entries) / count
    spread = (
        order_free_sum((entries - centre) ** 2) / (count - 1) - order_free_sum(polygamma(1, half)) / count
    )
    if spread <= 0.0:
        # No more spread than chance: one variance for all, best estimated by pooling.
        return order_free_sum(degrees * variances) / order_free_sum(degrees), _LARGEST_PRIOR
    prior_degrees = min(2.0 * _inverse_trigamma(spread), _LARGEST_PRIOR)
    log_prior = centre + float(digamma(prior_degrees / 2.0)) - np.log(prior_degrees / 2.0)
    return float(np.exp(log_prior)), prior_degrees


def _inverse_trigamma(value: float) -> float:
    """Solve trigamma(y) = value by Newton's method on 1 / trigamma, which is convex and nearly straight."""
    if value > 1e7:
        return float(1.0 / np.sqrt(value))
    if value < 1e-6:
        return 1.0 / value
    y = 0.5 + 1.0 / value
    for _ in range(50):
        trigamma = float(polygamma(1, y))
        step = trigamma * (1.0 - trigamma / value) / float(polygamma(2, y))
        y += step
        if -step / y < 1e-10:
            break
    return y
