"""The few series that the batched search does not settle, one by one with SciPy.

Bounded trust-region least squares on the logarithms of the shape constants, the amplitude eliminated as
before.
"""

from __future__ import annotations

import numpy as np
from scipy.optimize import least_squares

from models.kinetics.laws.law import Conditions, Floats, RateLaw
from models.kinetics.least_squares import Minimum


def settle(
    law: RateLaw,
    conditions: Conditions,
    rates: Floats,
    weights: Floats,
    minimum: Minimum,
    lower: Floats,
    upper: Floats,
) -> Minimum:
    """Search on in the series that have not converged; the others are returned as they are.

    Parameters
    ----------
    law, conditions, rates, weights
        As given to the batched search, shape (levels, series).
    minimum
        What it found.
    lower, upper
        Limits of the logarithms, shape (constants, series).

    Returns
    -------
    Minimum
    """
    if minimum.converged.all():
        return minimum
    amplitude, log_constants = minimum.amplitude.copy(), minimum.log_constants.copy()
    residual_sum, converged = minimum.residual_sum.copy(), minimum.converged.copy()
    for series in np.flatnonzero(~minimum.converged):
        problem = _Projected(law, conditions, rates, weights, int(series))
        low, high = lower[:, series], upper[:, series]
        start = np.clip(log_constants[:, series], low, high)
        if not np.all(np.isfinite(problem.residuals(start))):
            continue
        found = least_squares(
            problem.residuals, start, bounds=(low, high), xtol=1e-12, ftol=1e-15, gtol=1e-15
        )
        if 2.0 * found.cost <= residual_sum[series] * (1.0 + 1e-12):
            amplitude[series] = problem.amplitude(found.x)
            log_constants[:, series] = found.x
            residual_sum[series] = 2.0 * found.cost
        converged[series] = bool(found.success)
    return Minimum(amplitude, log_constants, residual_sum, converged)


class _Projected:
    """One series' residuals with the best amplitude for given shape constants."""

    def __init__(
        self, law: RateLaw, conditions: Conditions, rates: Floats, weights: Floats, series: int
    ) -> None:
        self._law = law
        self._conditions = conditions.select(np.array([series]))
        self._rates = rates[:, series]
        self._root = np.sqrt(weights[:, series])

    def amplitude(self, logs: Floats) -> float:
        return self._solve(logs)[0]

    def residuals(self, logs: Floats) -> Floats:
        return self._solve(logs)[1]

    def _solve(self, logs: Floats) -> tuple[float, Floats]:
        shape, _ = self._law.evaluate(self._conditions, tuple(np.array([value]) for value in np.exp(logs)))
        column = self._root * shape[:, 0]
        best = float(np.sum(column * self._root * self._rates) / np.sum(column * column))
        return best, self._root * self._rates - best * column
