"""Weights of rates: variance = standard error^2 + rate^2 (constant CV^2 + (substrate CV x order)^2).

Both CVs are pooled over the plate and the fitted, not the measured, rate is used, since a weight that follows
a rate's own noise favours low rates. This module chooses no law.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.kinetics.law_fits import LawFit, fit_law
from models.kinetics.laws.law import Array, Conditions, Floats, RateLaw
from models.kinetics.packing import Packed
from models.kinetics.robust import Loss, robust_factor
from models.statistics.pipetting import rate_variance, replicate_variance_components
from models.statistics.replicates import pooled_cv

Integers = NDArray[np.int_]

ROUNDS = 4
"""Rounds of fit and weights; each moves the constants a few hundred times less than the one before."""
ROBUST_ROUNDS = 12
_STEP = 1e-30
_FIRST_CV = 0.02
_FEWEST_DEGREES = 40
"""Replicate degrees of freedom below which a plate's two CVs are taken as equal: with fewer, chance alone
makes one of them 0 often enough to spoil the weights."""


@dataclass(frozen=True)
class Scatter:
    """Coefficients of variation beyond the rates' own standard errors, one a series or plate.

    Attributes
    ----------
    constant_cv
        Of what acts on every rate alike [1].
    substrate_cv
        Of the substrate in the well [1]: it moves a rate by the apparent order dlnv/dlnS.
    """

    constant_cv: Floats
    substrate_cv: Floats

    @classmethod
    def of_constant(cls, cv: Floats) -> Scatter:
        """All scatter acts on every rate alike."""
        return cls(cv, np.zeros_like(cv))

    def select(self, places: Integers) -> Scatter:
        """Values at some places."""
        return Scatter(self.constant_cv[places], self.substrate_cv[places])


@dataclass(frozen=True)
class WeightedFit:
    """A law's fit with its weights, and the scatter that they rest on."""

    fit: LawFit
    weights: Floats
    scatter: Scatter


def apparent_order(law: RateLaw, conditions: Conditions, constants: tuple[Array, ...]) -> Floats:
    """Apparent order in substrate dlnv/dlnS [1], shape (levels, series), exact by complex step."""
    moved = Conditions(
        conditions.substrate_um * (1.0 + 1j * _STEP),
        conditions.log_substrate + 1j * _STEP,
        conditions.modulator_um,
        conditions.enzyme_um,
        conditions.further,
    )
    with np.errstate(all="ignore"):
        rate = law.rate(moved, constants)
        order: Floats = np.imag(rate) / _STEP / np.real(rate)
    return np.where(np.isfinite(order), order, 0.0)


def variances(law: RateLaw, packed: Packed, constants: Floats, scatter: Scatter) -> Floats:
    """Variance of each rate [umol2/L2/s2] for a law's constants, shape (levels, series)."""
    fitted = law.rate(packed.conditions, tuple(constants))
    order = np.zeros_like(fitted)
    if np.any(scatter.substrate_cv > 0):
        order = apparent_order(law, packed.conditions, tuple(constants))
    return rate_variance(packed.standard_error, fitted, order, scatter.constant_cv, scatter.substrate_cv)


def to_weights(packed: Packed, variance: Floats) -> Floats:
    """One over the variance, 0 where there is no rate; equal weights for a series without any variance."""
    none = ~np.any(packed.present & (variance > 0), axis=0)
    largest = np.max(np.where(packed.present, variance, 0.0), axis=0)
    floored = np.where(none, 1.0, np.maximum(variance, 1e-12 * largest))
    return np.where(packed.present, 1.0 / floored, 0.0)


def fit_with_weights(
    law: RateLaw,
    packed: Packed,
    scatter: Scatter,
    start: Floats | None = None,
    rounds: int = ROUNDS,
    loss: Loss = "none",
) -> WeightedFit:
    """Fit a law with weights from its own fitted rates, for known scatter.

    Parameters
    ----------
    law
        The rate law.
    packed
        Rates, shape (levels, series).
    scatter
        Of each series' plate, shape (series,).
    start
        Constants to start from, shape (constants, series); None for the law's own starts.
    rounds
        Rounds of weights and fit.
    loss
        `huber` or `tukey` give rates far from the fit less weight, by further rounds.

    Returns
    -------
    WeightedFit
    """
    if start is None:
        size = np.max(np.abs(packed.rate), axis=0) * np.ones_like(packed.rate)
        cv = np.hypot(scatter.constant_cv, scatter.substrate_cv)
        first_guess = rate_variance(packed.standard_error, size, np.zeros_like(size), cv, np.zeros_like(cv))
        start = fit_law(law, packed.conditions, packed.rate, to_weights(packed, first_guess)).constants
    fit, weights = None, np.empty(0)
    for _ in range(rounds):
        weights = to_weights(packed, variances(law, packed, start, scatter))
        fit = fit_law(law, packed.conditions, packed.rate, weights, start)
        start = fit.constants
    assert fit is not None
    if loss != "none":
        for _ in range(ROBUST_ROUNDS):
            plain = to_weights(packed, variances(law, packed, start, scatter))
            residual = packed.rate - law.rate(packed.conditions, tuple(start))
            weights = plain * robust_factor(np.sqrt(plain) * residual, packed.present, loss)
            fit = fit_law(law, packed.conditions, packed.rate, weights, start)
            start = fit.constants
    return WeightedFit(fit, weights, scatter)


@dataclass(frozen=True)
class ScatterSource:
    """Series of one law that lend their replicates to the scatter of their plates.

    Attributes
    ----------
    law
        A law that follows them well enough.
    packed
        Their rates.
    plate
        Plate of each, shape (series,).
    level
        Nominal substrate of each place, shape (levels, series): equal values of a series, with an equal
        modulator, are replicates.
    """

    law: RateLaw
    packed: Packed
    plate: Integers
    level: Floats


def plate_scatter(sources: Sequence[ScatterSource], plate_count: int) -> Scatter:
    """Scatter of each plate from that of replicates about fits.

    Where a plate has few replicates, enzyme and substrate are taken to be dispensed with the same CV. Where
    it has none, the scatter about the fits themselves stands in, all of it acting on every rate alike.

    Parameters
    ----------
    sources
        Series by law.
    plate_count
        Number of plates.

    Returns
    -------
    Scatter
        Shape (plates,).
    """
    scatter = Scatter.of_constant(np.full(plate_count, _FIRST_CV))
    starts: list[Floats | None] = [None] * len(sources)
    for _ in range(3):
        fits = [
            fit_with_weights(source.law, source.packed, scatter.select(source.plate), start).fit
            for source, start in zip(sources, starts, strict=True)
        ]
        starts = [fit.constants for fit in fits]
        rows = _rows(sources, fits)
        found = replicate_variance_components(
            rows.plate, rows.group, rows.residual, rows.size, rows.order, rows.standard_error, plate_count
        )
        # A whole series as one group: its fit has used one degree of freedom more than a mean would, so this
        # CV is a little low; intervals do not follow, since they are scaled by the residuals.
        about_fit, _ = pooled_cv(
            rows.plate, rows.series, rows.residual, rows.size, rows.standard_error, plate_count
        )
        equal, degrees = pooled_cv(
            rows.plate,
            rows.group,
            rows.residual,
            rows.size * np.sqrt(1.0 + rows.order**2),
            rows.standard_error,
            plate_count,
        )
        none, few = degrees == 0, degrees < _FEWEST_DEGREES
        scatter = Scatter(
            np.where(none, about_fit, np.where(few, equal, found.constant_cv)),
            np.where(none, 0.0, np.where(few, equal, found.substrate_cv)),
        )
    return scatter


@dataclass(frozen=True)
class _Rows:
    """Rates of all sources in rows, in an order of each plate's own whatever else is in the batch."""

    plate: Integers
    series: Integers
    group: Integers
    residual: Floats
    size: Floats
    order: Floats
    standard_error: Floats


def _rows(sources: Sequence[ScatterSource], fits: Sequence[LawFit]) -> _Rows:
    parts: list[list[Floats]] = []
    for number, (source, fit) in enumerate(zip(sources, fits, strict=True)):
        packed, constants = source.packed, tuple(fit.constants)
        place, column = np.nonzero(packed.present)
        fitted = source.law.rate(packed.conditions, constants)
        modulator = packed.conditions.modulator_um
        columns = (
            packed.rate - fitted,
            packed.rate,
            packed.conditions.substrate_um,
            np.zeros_like(fitted) if modulator is None else modulator,
            source.level,
            np.abs(fitted),
            apparent_order(source.law, packed.conditions, constants),
            packed.standard_error,
        )
        own = np.stack([np.full(place.size, number), column, source.plate[column]]).astype(np.float64)
        parts.append([*own, *(values[place, column] for values in columns)])
    joined = [np.concatenate(column) for column in zip(*parts, strict=True)]
    source_number, column_of, plate, residual, rate, substrate, modulator_um, level, size, order, error = (
        joined
    )
    sorted_rows = np.lexsort((residual, rate, substrate, modulator_um, level, plate))

    def numbered(*keys: Floats) -> Integers:
        _, which = np.unique(np.stack(keys), axis=1, return_inverse=True)
        return np.asarray(which).reshape(-1)[sorted_rows]

    return _Rows(
        plate[sorted_rows].astype(np.intp),
        numbered(source_number, column_of),
        numbered(source_number, column_of, level, modulator_um),
        residual[sorted_rows],
        size[sorted_rows],
        order[sorted_rows],
        error[sorted_rows],
    )
