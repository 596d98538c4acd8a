"""Weights of rates: variance = standard error^2 + (replicate CV x fitted rate)^2.

The CV is pooled over the plate and the fitted, not the measured, rate is used, since a weight that follows a
rate's own noise favours low rates. This module chooses no law.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.kinetics.law_fits import LawFit, fit_law
from models.kinetics.laws.law import Floats, RateLaw
from models.kinetics.packing import Packed
from models.statistics.replicates import pooled_cv

Integers = NDArray[np.int_]

ROUNDS = 4
"""Rounds of fit and weights; each moves the constants a few hundred times less than the one before."""


@dataclass(frozen=True)
class WeightedFit:
    """A law's fit with its weights, and the CV of each series' plate."""

    fit: LawFit
    weights: Floats
    cv: Floats


def variances(packed: Packed, fitted: Floats, cv: Floats) -> Floats:
    """Variance of each rate [umol2/L2/s2], shape (levels, series), for the CV of each series."""
    variance: Floats = packed.standard_error**2 + (cv * fitted) ** 2
    return variance


def to_weights(packed: Packed, variance: Floats) -> Floats:
    """One over the variance, 0 where there is no rate; equal weights for a series without any variance."""
    none = ~np.any(packed.present & (variance > 0), axis=0)
    largest = np.max(np.where(packed.present, variance, 0.0), axis=0)
    floored = np.where(none, 1.0, np.maximum(variance, 1e-12 * largest))
    return np.where(packed.present, 1.0 / floored, 0.0)


def fitted_rates(packed: Packed, fit: LawFit) -> Floats:
    """Fitted rate at each place, shape (levels, series)."""
    rates: Floats = fit.law.rate(packed.conditions, tuple(fit.constants))
    return rates


def fit_with_weights(
    law: RateLaw, packed: Packed, cv: Floats, start: Floats | None = None, rounds: int = ROUNDS
) -> WeightedFit:
    """Fit a law with weights from its own fitted rates, for a known CV.

    Parameters
    ----------
    law
        The rate law.
    packed
        Rates, shape (levels, series).
    cv
        Coefficient of variation of each series' plate [1], shape (series,).
    start
        Constants to start from, shape (constants, series); None for the law's own starts.
    rounds
        Rounds of weights and fit.

    Returns
    -------
    WeightedFit
    """
    if start is None:
        first_guess = variances(packed, np.max(np.abs(packed.rate), axis=0) * np.ones_like(packed.rate), cv)
        start = fit_law(law, packed.conditions, packed.rate, to_weights(packed, first_guess)).constants
    fit, weights = None, np.empty(0)
    for _ in range(rounds):
        fitted = law.rate(packed.conditions, tuple(start))
        weights = to_weights(packed, variances(packed, fitted, cv))
        fit = fit_law(law, packed.conditions, packed.rate, weights, start)
        start = fit.constants
    assert fit is not None
    return WeightedFit(fit, weights, cv)


def plate_cv(
    law: RateLaw, packed: Packed, plate: Integers, level: Floats, usable: NDArray[np.bool_], plate_count: int
) -> Floats:
    """Replicate CV of each plate from the scatter of replicates about one law's fit.

    Where a plate has no replicates, the scatter about the fits themselves stands in for it.

    Parameters
    ----------
    law
        A law simple enough for every series.
    packed
        Rates, shape (levels, series).
    plate
        Plate of each series, shape (series,).
    level
        Nominal substrate of each place, shape (levels, series): equal values in a series are replicates.
    usable
        Series that may lend their scatter, shape (series,).
    plate_count
        Number of plates.

    Returns
    -------
    array
        CV of each plate [1], shape (plates,).
    """
    cv = np.full(plate_count, 0.02)
    start = None
    rows = packed.present & usable
    place, column = np.nonzero(rows)
    # An order of each plate's own, whatever else is in the batch and however its series are numbered.
    order = np.lexsort(
        (
            packed.rate[place, column],
            packed.conditions.substrate_um[place, column],
            level[place, column],
            plate[column],
        )
    )
    place, column = place[order], column[order]
    replicate = _group_numbers(column, level[place, column])
    for _ in range(3):
        fitted_with = fit_with_weights(law, packed, cv[plate], start)
        start = fitted_with.fit.constants
        fitted = fitted_rates(packed, fitted_with.fit)
        residual = (packed.rate - fitted)[place, column]
        size, error = np.abs(fitted)[place, column], packed.standard_error[place, column]
        cv, degrees = pooled_cv(plate[column], replicate, residual, size, error, plate_count)
        # A whole series as one group: its fit has used one degree of freedom more than a mean would, so this
        # CV is a little low; intervals do not follow, since they are scaled by the residuals.
        about_fit, _ = pooled_cv(plate[column], column, residual, size, error, plate_count)
        cv = np.where(degrees > 0, cv, about_fit)
    return cv


def _group_numbers(column: Integers, level: Floats) -> Integers:
    pairs = np.stack([column.astype(np.float64), level])
    _, number = np.unique(pairs, axis=1, return_inverse=True)
    return np.asarray(number).reshape(-1)
