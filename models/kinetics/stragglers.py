"""The few series that the batched search does not settle, one by one with SciPy.

Bounded trust-region least squares on the coordinates of the shape constants, the amplitude eliminated as
before.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
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
        Limits of the coordinates, shape (constants, series).

    Returns
    -------
    Minimum
    """
    if minimum.converged.all():
        return minimum
    amplitude, coordinates = minimum.amplitude.copy(), minimum.coordinates.copy()
    residual_sum, converged = minimum.residual_sum.copy(), minimum.converged.copy()
    for series in np.flatnonzero(~minimum.converged):
        problem = _Projected(law, conditions, rates, weights, int(series))
        low, high = lower[:, series], upper[:, series]
        start = np.clip(coordinates[:, series], low, high)
        if not np.all(np.isfinite(problem.residuals(start))):
            continue
        # SciPy wants a start strictly between the limits.
        inside = np.minimum(np.maximum(start, np.nextafter(low, np.inf)), np.nextafter(high, -np.inf))
        try:
            found = least_squares(
                problem.residuals,
                inside,
                jac=problem.jacobian,
                bounds=(low, high),
                x_scale="jac",
                xtol=1e-14,
                ftol=1e-15,
                gtol=1e-15,
                max_nfev=2000,
            )
        except (ValueError, np.linalg.LinAlgError):
            # Residuals or derivatives without a finite value on the way: the series stays unsettled.
            continue
        if 2.0 * found.cost <= residual_sum[series] * (1.0 + 1e-12):
            amplitude[series] = problem.amplitude(found.x)
            coordinates[:, series] = found.x
            residual_sum[series] = 2.0 * found.cost
        converged[series] = bool(found.success)
    return Minimum(amplitude, coordinates, residual_sum, converged)


class _Projected:
    """One series' residuals with the best amplitude for given shape constants."""

    def __init__(
        self, law: RateLaw, conditions: Conditions, rates: Floats, weights: Floats, series: int
    ) -> None:
        self._law = law
        # Without the places that only fill the batch's array: a sum over them would round otherwise.
        used = weights[:, series] > 0
        self._conditions = conditions.select(np.array([series])).points(used)
        self._rates = rates[used, series]
        self._root = np.sqrt(weights[used, series])

    def amplitude(self, coordinates: Floats) -> float:
        return self._solve(coordinates)[0]

    def residuals(self, coordinates: Floats) -> Floats:
        best, shape, _ = self._solve(coordinates)
        residuals: Floats = self._root * self._rates - best * shape
        return residuals

    def jacobian(self, coordinates: Floats) -> NDArray[np.float64]:
        """Kaufman's form: what is left of the derivatives beside the shape itself."""
        best, shape, slopes = self._solve(coordinates)
        if self._law.amplitude is not None:
            slopes = slopes - np.outer(shape, shape @ slopes) / float(shape @ shape)
        jacobian: NDArray[np.float64] = -best * slopes
        return jacobian

    def _solve(self, coordinates: Floats) -> tuple[float, Floats, Floats]:
        with np.errstate(all="ignore"):
            shape, slopes = self._law.evaluate(self._conditions, self._law.values(coordinates[:, None]))
        column = self._root * shape[:, 0]
        derivatives = np.stack([self._root * slope[:, 0] for slope in slopes], axis=1)
        if self._law.amplitude is None:
            return 1.0, column, derivatives
        best = float(np.sum(column * self._root * self._rates) / np.sum(column * column))
        return best, column, derivatives
