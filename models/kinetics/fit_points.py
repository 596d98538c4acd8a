"""How each rate stands to the law fitted to its series: leverage, studentised residual, lack of fit, runs.

Looks at fits that are done; nothing is fitted, chosen or judged here.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.kinetics.laws.law import Floats, RateLaw
from models.kinetics.packing import Packed
from models.kinetics.replicate_weights import WeightedFit
from models.statistics.lack_of_fit import lack_of_fit
from models.statistics.runs import too_few_runs

Integers = NDArray[np.int_]


@dataclass(frozen=True)
class FitPoints:
    """Rates of a batch of series beside their fits.

    Attributes
    ----------
    fitted, standard_deviation
        Rate that the law gives, and the standard deviation that the weights give the rate up to the fit's
        common factor [umol/L/s], shape (levels, series); NaN for a rate that a robust loss gave no weight.
    leverage
        Share of the fitted rate that the rate itself makes [1], same shape; NaN where the Jacobian has not
        full rank.
    studentised
        Externally studentised residual [1], same shape; NaN where no point is to spare.
    lack_of_fit_p
        p value of lack of fit against replicates, shape (series,); NaN without replicates.
    runs_p
        p value of so few runs of signs in order of substrate, shape (series,); NaN where there are too few
        levels, and for laws with a modulator, which have no one order.
    """

    fitted: Floats
    standard_deviation: Floats
    leverage: Floats
    studentised: Floats
    lack_of_fit_p: Floats
    runs_p: Floats


def fit_points(packed: Packed, weighted: WeightedFit, level: Floats) -> FitPoints:
    """Set each rate of a batch beside its fit.

    Leverage h = w g' C g with g the derivatives of the fitted rate and C the inverse of the information;
    residual over its own error with the scale of the fit without it (Cook and Weisberg 1982, Residuals and
    Influence in Regression, ISBN 978-0-412-24280-9, section 2.2; by the tangent plane for curved laws).

    Parameters
    ----------
    packed
        Rates, shape (levels, series).
    weighted
        Their fit with its weights.
    level
        Nominal substrate of each place, shape (levels, series): equal values, with an equal modulator, are
        replicates.

    Returns
    -------
    FitPoints
    """
    fit, weights = weighted.fit, weighted.weights
    law = fit.law
    fitted = law.rate(packed.conditions, tuple(fit.constants))
    residual = np.where(packed.present, packed.rate - fitted, 0.0)
    degrees = fit.degrees_of_freedom
    with np.errstate(all="ignore"):
        scale = fit.residual_sum / degrees
        leverage = weights * _variance_of_fit(law, packed, fit.constants, fit.covariance) / scale
        spare = np.maximum(1.0 - leverage, 0.0)
        square = weights * residual**2
        without = (fit.residual_sum - square / spare) / (degrees - 1.0)
        studentised = np.sqrt(weights / (without * spare)) * residual
        told = packed.present & (weights > 0) & (spare > 1e-9) & (degrees > 1) & (without > 0)
        deviation = np.where(weights > 0, 1.0 / np.sqrt(weights), np.nan)
    lack_p, runs_p = _of_series(law, packed, residual, weights, level)
    return FitPoints(
        fitted,
        deviation,
        leverage,
        np.where(told & np.isfinite(studentised), studentised, np.nan),
        lack_p,
        runs_p,
    )


def _variance_of_fit(law: RateLaw, packed: Packed, constants: Floats, covariance: Floats) -> Floats:
    """Variance of each fitted rate, shape (levels, series)."""
    gradient = law.gradient(packed.conditions, tuple(constants))
    total = np.zeros_like(packed.rate)
    for j, left in enumerate(gradient):
        for k, right in enumerate(gradient):
            total = total + left * covariance[:, j, k] * right
    return total


def _of_series(
    law: RateLaw, packed: Packed, residual: Floats, weights: Floats, level: Floats
) -> tuple[Floats, Floats]:
    place, column = np.nonzero(packed.present & (weights > 0))
    # An order of each series' own, so that a sum's last bit is the same in every batch.
    sorted_rows = np.lexsort((place, column))
    place, column = place[sorted_rows], column[sorted_rows]
    modulator = packed.conditions.modulator_um
    of_modulator = np.zeros_like(level) if modulator is None else modulator
    keys = np.stack([column.astype(np.float64), level[place, column], of_modulator[place, column]])
    _, group = np.unique(keys, axis=1, return_inverse=True)
    count = packed.series.size
    lack = lack_of_fit(
        column,
        np.asarray(group).reshape(-1),
        residual[place, column],
        weights[place, column],
        np.full(count, float(law.constant_count)),
    )
    if law.fewest_modulator_levels:
        return lack.p_value, np.full(count, np.nan)
    standardised = np.sqrt(weights[place, column]) * residual[place, column]
    return lack.p_value, too_few_runs(column, level[place, column], standardised, count)
