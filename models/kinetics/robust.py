"""Robust losses: less weight for rates far from the fit, by iteratively reweighted least squares.

Off unless asked for. This module fits nothing.
"""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Loss = Literal["none", "huber", "tukey"]

LOSSES: tuple[Loss, ...] = ("none", "huber", "tukey")
_HUBER, _TUKEY = 1.345, 4.685
"""95 % efficiency under normal errors (Huber 1964, doi:10.1214/aoms/1177703732; Beaton and Tukey 1974,
doi:10.1080/00401706.1974.10489171)."""
_TO_SIGMA = 1.4826


def robust_factor(residual: Floats, present: NDArray[np.bool_], loss: Loss) -> Floats:
    """Factor on each weight, 0 to 1, shape as given.

    Parameters
    ----------
    residual
        Residuals over their standard deviations up to a factor, shape (points, series).
    present
        Points that count.
    loss
        `huber`: 1 up to 1.345 scales, then falling as one over the residual. `tukey`: the biweight, 0 beyond
        4.685 scales. The scale is 1.4826 times the median absolute residual.
    """
    if loss == "none":
        return np.ones_like(residual)
    size = np.where(present, np.abs(residual), np.nan)
    with np.errstate(all="ignore"):
        scale = _TO_SIGMA * np.nanmedian(size, axis=0)
        distance = np.abs(residual) / scale
    distance = np.where(np.isfinite(distance), distance, 0.0)
    if loss == "huber":
        return np.where(distance > _HUBER, _HUBER / np.maximum(distance, _HUBER), 1.0)
    factor: Floats = np.maximum(1.0 - (distance / _TUKEY) ** 2, 0.0) ** 2
    return factor
