"""One rate law fitted to a batch of series with given weights: constants, covariance, rank, limits.

This is the array interface beneath `models.kinetics.fitting`: no weights are made and nothing is chosen here.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.kinetics.laws.law import Conditions, Floats, RateLaw
from models.kinetics.least_squares import CHUNK, Minimum, best_start, minimise
from models.kinetics.stragglers import settle
from models.statistics.sums import sum_rows

Flags = NDArray[np.bool_]

_SMALLEST_PIVOT = 1e-10
"""Share of a constant's information that must be its own: below it, the Jacobian's rank is in doubt."""


@dataclass(frozen=True)
class LawFit:
    """Fits of one law.

    Attributes
    ----------
    law
        The law.
    constants
        Amplitude and shape constants, in the law's order and units, shape (constants, series).
    residual_sum
        Weighted sum of squared residuals, shape (series,).
    point_count
        Rates with a weight, shape (series,).
    covariance
        Of the constants, scaled by the residual variance, shape (series, constants, constants); NaN where the
        Jacobian has not full rank.
    converged
        Whether the search came to rest.
    at_limit
        Whether a shape constant lies at its limit.
    full_rank
        Whether the Jacobian has full rank.
    """

    law: RateLaw
    constants: Floats
    residual_sum: Floats
    point_count: Floats
    covariance: Floats
    converged: Flags
    at_limit: Flags
    full_rank: Flags

    @property
    def degrees_of_freedom(self) -> Floats:
        """Rates less constants, shape (series,)."""
        return self.point_count - self.law.constant_count

    @property
    def correlation(self) -> Floats:
        """Correlation of the constants, shape (series, constants, constants); NaN where it is not known."""
        with np.errstate(all="ignore"):
            errors = np.sqrt(np.diagonal(self.covariance, axis1=1, axis2=2))
            matrix: Floats = self.covariance / (errors[:, :, None] * errors[:, None, :])
        return matrix

    @property
    def standard_error(self) -> Floats:
        """Standard errors, shape (constants, series)."""
        with np.errstate(invalid="ignore"):
            errors: Floats = np.sqrt(np.diagonal(self.covariance, axis1=1, axis2=2).T)
        return errors


def fit_law(
    law: RateLaw,
    conditions: Conditions,
    rates: Floats,
    weights: Floats | None = None,
    start: Floats | None = None,
) -> LawFit:
    """Fit one law to every series of a batch by weighted least squares.

    Parameters
    ----------
    law
        The rate law.
    conditions
        Substrate and modulator, shape (levels, series).
    rates
        Rates, shape (levels, series); any finite value where the weight is 0.
    weights
        One over the variance up to a factor, shape (levels, series); None for equal weights.
    start
        Start values of the constants, shape (constants, series), the amplitude first if there is one (it is
        eliminated and its start not used). None takes the law's own.

    Returns
    -------
    LawFit
    """
    weights = np.ones_like(rates) if weights is None else weights
    series_count = rates.shape[1]
    parts = []
    for first in range(0, series_count, CHUNK):
        cut = slice(first, first + CHUNK)
        columns = np.arange(series_count)[cut]
        parts.append(
            _fit_chunk(
                law,
                conditions.select(columns),
                rates[:, columns],
                weights[:, columns],
                None if start is None else law.coordinates(start[law.first_shape :, columns]),
            )
        )
    return _joined(law, parts, series_count)


def _fit_chunk(
    law: RateLaw, conditions: Conditions, rates: Floats, weights: Floats, start: Floats | None
) -> LawFit:
    lower, upper = law.limits(conditions, weights)
    if start is None:
        start = best_start(law, conditions, rates, weights)
    start = np.clip(start, lower, upper)
    minimum = minimise(law, conditions, rates, weights, start, lower, upper)
    minimum = settle(law, conditions, rates, weights, minimum, lower, upper)
    return _described(law, conditions, weights, minimum, lower, upper)


def _described(
    law: RateLaw, conditions: Conditions, weights: Floats, minimum: Minimum, lower: Floats, upper: Floats
) -> LawFit:
    point_count = np.count_nonzero(weights > 0, axis=0).astype(np.float64)
    values = law.values(minimum.coordinates)
    shape, slopes = law.evaluate(conditions, values)
    columns = [minimum.amplitude * slope for slope in slopes]
    # Derivatives by the logarithm where a constant has one: the information is then free of units.
    per_coordinate = [
        value if constant.positive else np.ones_like(value)
        for constant, value in zip(law.shape_constants, values, strict=True)
    ]
    constants = np.array(values)
    if law.amplitude is not None:
        columns = [minimum.amplitude * shape, *columns]
        per_coordinate = [minimum.amplitude, *per_coordinate]
        constants = np.vstack([minimum.amplitude, constants])
    root = np.sqrt(weights)
    inverse, full_rank = _inverse_information([root * column for column in columns])
    with np.errstate(all="ignore"):
        scale = minimum.residual_sum / (point_count - law.constant_count)
    scale = np.where(point_count > law.constant_count, scale, np.nan)
    factor = np.array(per_coordinate).T
    covariance = inverse * (factor[:, :, None] * factor[:, None, :]) * scale[:, None, None]
    margin = 1e-9
    at_limit = np.any(
        (minimum.coordinates <= lower + margin) | (minimum.coordinates >= upper - margin), axis=0
    )
    return LawFit(
        law=law,
        constants=constants,
        residual_sum=minimum.residual_sum,
        point_count=point_count,
        covariance=np.where(full_rank[:, None, None], covariance, np.nan),
        converged=minimum.converged,
        at_limit=at_limit,
        full_rank=full_rank,
    )


def _inverse_information(columns: list[Floats]) -> tuple[Floats, Flags]:
    """Inverse of J'J of each series, shape (series, n, n), for the columns of J, each (levels, series).

    By modified Gram-Schmidt on columns of length one, which keeps twice the digits that J'J would (Bjorck
    1967, doi:10.1007/BF01934122); elementwise, so that a series gives the same bits in every batch. What is
    left of a column beside those before it tells the rank.
    """
    count = len(columns)
    factor: dict[tuple[int, int], Floats] = {}
    inverse: dict[tuple[int, int], Floats] = {}
    with np.errstate(all="ignore"):
        length = [np.sqrt(sum_rows(column * column)) for column in columns]
        rest = [column / size for column, size in zip(columns, length, strict=True)]
        smallest = np.full_like(length[0], np.inf)
        for k in range(count):
            size = np.sqrt(sum_rows(rest[k] * rest[k]))
            smallest = np.minimum(smallest, np.where(np.isfinite(size), size * size, 0.0))
            factor[k, k] = size
            rest[k] = rest[k] / size
            for m in range(k + 1, count):
                factor[k, m] = sum_rows(rest[k] * rest[m])
                rest[m] = rest[m] - factor[k, m] * rest[k]
        for m in range(count):
            inverse[m, m] = 1.0 / factor[m, m]
            for k in reversed(range(m)):
                total = factor[k, m] * inverse[m, m]
                for j in range(k + 1, m):
                    total = total + factor[k, j] * inverse[j, m]
                inverse[k, m] = -total / factor[k, k]
        product = np.empty((length[0].size, count, count))
        for k in range(count):
            for m in range(k, count):
                entry = inverse[k, m] * inverse[m, m]
                for j in range(m + 1, count):
                    entry = entry + inverse[k, j] * inverse[m, j]
                product[:, k, m] = product[:, m, k] = entry / (length[k] * length[m])
    return product, smallest > _SMALLEST_PIVOT


def _joined(law: RateLaw, parts: list[LawFit], series_count: int) -> LawFit:
    if len(parts) == 1:
        return parts[0]
    count = law.constant_count
    if not parts:
        none, flags = np.empty(0), np.empty(0, dtype=bool)
        shape = (series_count, count, count)
        return LawFit(law, np.empty((count, 0)), none, none, np.empty(shape), flags, flags, flags)
    return LawFit(
        law=law,
        constants=np.concatenate([part.constants for part in parts], axis=1),
        residual_sum=np.concatenate([part.residual_sum for part in parts]),
        point_count=np.concatenate([part.point_count for part in parts]),
        covariance=np.concatenate([part.covariance for part in parts]),
        converged=np.concatenate([part.converged for part in parts]),
        at_limit=np.concatenate([part.at_limit for part in parts]),
        full_rank=np.concatenate([part.full_rank for part in parts]),
    )
