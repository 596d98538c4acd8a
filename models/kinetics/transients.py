"""Lag and burst: where a progress curve settles exponentially to its steady rate.

P = P0 + vs t + (v0 - vs) (1 - exp(-t / tau)) tau, the form of Morrison and Walsh 1988
(doi:10.1002/9780470123072.ch5). Only wells whose curvature has already been found come here, one by one.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

_GRID = 32
_FEWEST_READS = 6


@dataclass(frozen=True)
class Transient:
    """An exponential approach to the steady rate.

    Attributes
    ----------
    tau_s
        Time constant [s].
    initial_rate, steady_rate
        Rates at the first read and after the transient [umol/L/s].
    residual_sum
        Sum of squared residuals [umol2/L2].
    settles
        Whether the transient ends well within the reads.
    """

    tau_s: float
    initial_rate: float
    steady_rate: float
    residual_sum: float
    settles: bool


def fit_transient(time_s: Floats, product_um: Floats) -> Transient | None:
    """Fit the approach to the steady rate on a grid of time constants; the rest is linear.

    Parameters
    ----------
    time_s, product_um
        Usable reads of one well, shape (reads,).

    Returns
    -------
    Transient or None
        None with fewer than 6 reads.
    """
    if time_s.size < _FEWEST_READS:
        return None
    t = time_s - time_s[0]
    length = float(t[-1])
    best: Transient | None = None
    for tau in np.geomspace(0.5 * length / (t.size - 1), 2.0 * length, _GRID):
        design = np.stack([np.ones_like(t), t, tau * -np.expm1(-t / tau)], axis=1)
        coefficients, *_ = np.linalg.lstsq(design, product_um, rcond=None)
        residual = product_um - np.sum(design * coefficients, axis=1)
        left = float(np.sum(residual**2))
        if best is None or left < best.residual_sum:
            steady, extra = float(coefficients[1]), float(coefficients[2])
            best = Transient(float(tau), steady + extra, steady, left, bool(tau < length / 3.0))
    return best
