"""Choice between candidate rate laws by Akaike's criterion, corrected for few points.

AICc after Hurvich and Tsai 1989 (doi:10.1093/biomet/76.2.297); evidence weights after Burnham and Anderson
2002 (doi:10.1007/b97636). The simpler law wins inside 2 units. This module fits nothing.
"""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray

from models.kinetics.laws import law

Floats = NDArray[np.float64]

UNITS_OF_GRACE = 2.0


def aicc(residual_sum: Floats, log_variance_sum: Floats, point_count: Floats, constant_count: int) -> Floats:
    """Corrected Akaike criterion of weighted least squares with an unknown common factor of the variances.

    Parameters
    ----------
    residual_sum
        Weighted sum of squared residuals, weights one over the variances given, shape (series,).
    log_variance_sum
        Sum of the logarithms of those variances: laws whose weights differ are compared by it, shape
        (series,).
    point_count
        Rates, shape (series,).
    constant_count
        Constants of the law; the common factor is counted beside them.

    Returns
    -------
    array
        -2 ln L + 2 k n / (n - k - 1), k = constants + 1; NaN where n is too small, shape (series,).
    """
    k = constant_count + 1
    with np.errstate(all="ignore"):
        deviance = point_count * (1.0 + np.log(2.0 * np.pi * residual_sum / point_count)) + log_variance_sum
        penalty = 2.0 * k * point_count / (point_count - k - 1.0)
        value = np.where(point_count - k - 1.0 > 0, deviance + penalty, np.nan)
    return np.where(np.isfinite(value), value, np.nan)


def choose_law(aicc_of: Mapping[str, float]) -> str:
    """Return the simplest law within 2 units of the best; the simplest of all where none has a criterion.

    Raises
    ------
    ValueError
        If there is no candidate.
    UnknownName
        If a candidate is no law.
    """
    if not aicc_of:
        raise ValueError("there is no candidate law to choose from")
    simplest_first = sorted(aicc_of, key=lambda name: law(name).rank)
    known = [value for value in aicc_of.values() if math.isfinite(value)]
    if not known:
        return simplest_first[0]
    bar = min(known) + UNITS_OF_GRACE
    return next(name for name in simplest_first if math.isfinite(aicc_of[name]) and aicc_of[name] <= bar)


def evidence_weights(aicc_of: Mapping[str, float]) -> dict[str, float]:
    """Akaike weight of each candidate; NaN for one without a criterion."""
    known = [value for value in aicc_of.values() if math.isfinite(value)]
    if not known:
        return dict.fromkeys(aicc_of, math.nan)
    best = min(known)
    relative = {
        name: math.exp(-0.5 * (value - best)) for name, value in aicc_of.items() if math.isfinite(value)
    }
    total = math.fsum(relative.values())
    return {name: relative[name] / total if name in relative else math.nan for name in aicc_of}
