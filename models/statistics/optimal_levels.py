"""Substrate levels that tell most about a law's constants beside the rates there are, and what they bring.

D-optimal for the law at its current constants, and only as good as those. Knows rate laws and errors of
rates; knows no gate, no assay and no table.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from scipy.optimize import minimize_scalar, nnls

from models.kinetics.intervals import profile_intervals
from models.kinetics.law_fits import fit_law
from models.kinetics.laws.law import Floats, RateLaw, at_levels

Range = tuple[float, float]

_GRID = 161
_ROUNDS = 100
_RIDGE = 1e-9
"""Share of one level's information lent to every constant while levels are too few to tell them apart."""


@dataclass(frozen=True)
class RateError:
    """How the error of a rate grows with it: variance = constant^2 + (relative rate)^2.

    Attributes
    ----------
    constant_um_per_s
        Part that all rates share [umol/L/s].
    relative
        Part in proportion to the rate [1].
    """

    constant_um_per_s: float
    relative: float

    def variance(self, rate_um_per_s: Floats) -> Floats:
        """Variance of rates [(umol/L/s)^2], shape as given."""
        variance: Floats = self.constant_um_per_s**2 + (self.relative * rate_um_per_s) ** 2
        return variance


@dataclass(frozen=True)
class Rates:
    """Rates of one series.

    Attributes
    ----------
    substrate_um, rate_um_per_s
        Level [umol/L] and rate [umol/L/s], shape (rates,).
    variance
        Variance of each rate [(umol/L/s)^2], shape (rates,).
    """

    substrate_um: Floats
    rate_um_per_s: Floats
    variance: Floats


@dataclass(frozen=True)
class Expected:
    """What a fit to old and new rates together is expected to give, by constant in the law's order.

    Attributes
    ----------
    standard_error
        In each constant's unit, shape (constants,).
    low, high
        95 % interval by profile likelihood, shape (constants,); NaN where an end stays open.
    """

    standard_error: Floats
    low: Floats
    high: Floats


def rate_error(rate_um_per_s: Floats, standard_deviation_um_per_s: Floats) -> RateError:
    """Constant and proportional part of the standard deviations that weights give to rates.

    Least squares of sd^2 = a^2 + b^2 v^2 over both parts, neither below zero, each rate's misfit counted
    relative to its own variance.

    Parameters
    ----------
    rate_um_per_s, standard_deviation_um_per_s
        Shape (rates,), the deviations above zero.
    """
    variance = standard_deviation_um_per_s**2
    parts, _ = nnls(np.column_stack([1.0 / variance, rate_um_per_s**2 / variance]), np.ones_like(variance))
    return RateError(float(np.sqrt(parts[0])), float(np.sqrt(parts[1])))


def information(law: RateLaw, constants: Floats, substrate_um: Floats, variance: Floats) -> Floats:
    """Information of independent rates, M = sum of g g' / variance, by the constants' coordinates.

    g is the derivative of the rate by each coordinate: the logarithm of a positive constant, the amplitude
    among them, or the constant itself. A determinant of M changes by a factor only where units change.

    Parameters
    ----------
    law
        A law of the substrate alone.
    constants
        In the law's order, shape (constants,).
    substrate_um, variance
        Shape (rates,).

    Returns
    -------
    array
        Shape (constants, constants).
    """
    weighted = _gradient(law, constants, substrate_um) / np.sqrt(variance)
    matrix: Floats = weighted @ weighted.T
    return matrix


def optimal_levels(
    law: RateLaw,
    constants: Floats,
    known: Floats,
    error: RateError,
    ranges: Sequence[Range],
    replicates: int,
) -> Floats:
    """Levels that, each measured in replicate, make det(M_known + M_new) largest (D-optimal).

    One level for each range. Exchange on a logarithmic grid (Fedorov 1972, Theory of Optimal Experiments,
    ISBN 978-0-12-250750-2), then each level in turn between its neighbours on the grid. The criterion is
    that of Box and Lucas 1959, doi:10.1093/biomet/46.1-2.77, for nonlinear laws at the constants as they are
    now known; of designs that add to what is measured, Atkinson, Donev and Tobias 2007, Optimum Experimental
    Designs, with SAS, ISBN 978-0-19-929660-6.

    Parameters
    ----------
    law, constants
        The law and its constants, shape (constants,).
    known
        Information of the rates that there are, shape (constants, constants); zeros for none.
    error
        Error of a rate.
    ranges
        Lowest and highest level allowed [umol/L], above zero, for each level sought.
    replicates
        Wells of each level.

    Returns
    -------
    array
        Levels [umol/L], in the order of the ranges, shape (ranges,). Two may be the same: more wells of that
        level.

    Raises
    ------
    ValueError
        If a range does not lie above zero, or old and new levels together cannot tell the constants apart.
    """
    if any(not 0.0 < low <= high for low, high in ranges):
        raise ValueError("a range of levels must lie above zero, its lower end first")
    grids = [np.geomspace(low, high, _GRID) if high > low else np.array([low]) for low, high in ranges]
    steps = [_steps(law, constants, grid, error, replicates) for grid in grids]
    size = max(float(np.max(np.trace(step, axis1=1, axis2=2))) for step in steps)
    ridge = _RIDGE * size * np.eye(len(known))
    # The ranges with the least room first: what is free can then be set beside what is not.
    order = sorted(range(len(ranges)), key=lambda place: ranges[place][1] / ranges[place][0])
    total = known + ridge
    places = [0] * len(ranges)
    for index in order:
        places[index] = int(np.argmax(_log_det(total + steps[index])))
        total = total + steps[index][places[index]]
    for _ in range(_ROUNDS):
        before = list(places)
        for index in order:
            rest = total - steps[index][places[index]]
            places[index] = int(np.argmax(_log_det(rest + steps[index])))
            total = rest + steps[index][places[index]]
        if places == before:
            break
    levels = [float(grid[place]) for grid, place in zip(grids, places, strict=True)]
    levels = _refined(law, constants, known, error, replicates, grids, levels)
    result = np.array(levels, dtype=np.float64)
    at_last = known + _steps(law, constants, result, error, replicates).sum(axis=0)
    scale = np.sqrt(np.diagonal(at_last))
    if not np.all(scale > 0) or np.linalg.eigvalsh(at_last / np.outer(scale, scale))[0] < 1e-10:
        raise ValueError(f"{len(ranges)} levels beside those measured cannot tell the constants apart")
    return result


def expected_fit(
    law: RateLaw, constants: Floats, measured: Rates, new_um: Floats, error: RateError, replicates: int
) -> Expected:
    """Errors and intervals that a fit to the measured rates and to new levels together is expected to have.

    The new rates are set on the law's curve, with a spread about it that leaves their mean there and adds to
    the sum of squares what is expected of them, so that constants and residual variance stay as they are and
    the intervals are those of the profile likelihood, open ends included.

    Parameters
    ----------
    law, constants
        The law and its best constants for the measured rates, shape (constants,).
    measured
        The rates that there are.
    new_um
        New levels [umol/L], shape (levels,).
    error
        Error of a new rate, on the scale of the variances of `measured`.
    replicates
        Wells of each new level, 2 or more.

    Raises
    ------
    ValueError
        If a level has one well only.
    """
    if replicates < 2:
        raise ValueError("what new levels bring is foretold for two wells a level or more")
    old = at_levels(measured.substrate_um[:, None])
    residual = measured.rate_um_per_s - law.rate(old, tuple(constants[:, None]))[:, 0]
    degrees = residual.size - law.constant_count
    scale = float(np.sum(residual**2 / measured.variance)) / degrees if degrees > 0 else 0.0
    # Without a residual to go by, the deviations are taken as they are stated.
    scale = scale if scale > 0 else 1.0
    curve = law.rate(at_levels(new_um[:, None]), tuple(constants[:, None]))[:, 0]
    variance = error.variance(curve)
    spread = np.linspace(-1.0, 1.0, replicates)
    spread *= np.sqrt(replicates / np.sum(spread**2))
    # A spread of unit mean square about the curve, whatever the number of wells.
    new_rates = curve[:, None] + spread * np.sqrt(scale * variance)[:, None]
    conditions = at_levels(np.concatenate([measured.substrate_um, np.repeat(new_um, replicates)])[:, None])
    rates = np.concatenate([measured.rate_um_per_s, new_rates.reshape(-1)])[:, None]
    weights = 1.0 / np.concatenate([measured.variance, np.repeat(variance, replicates)])[:, None]
    fit = fit_law(law, conditions, rates, weights, constants[:, None])
    low, high = profile_intervals(fit, conditions, rates, weights)
    return Expected(fit.standard_error[:, 0], low[:, 0], high[:, 0])


def _refined(
    law: RateLaw,
    constants: Floats,
    known: Floats,
    error: RateError,
    replicates: int,
    grids: Sequence[Floats],
    levels: list[float],
) -> list[float]:
    """Levels moved off the grid, one at a time, until none moves."""
    for _ in range(_ROUNDS):
        before = list(levels)
        for index, grid in enumerate(grids):
            rest = known + _steps(
                law, constants, np.array(levels[:index] + levels[index + 1 :]), error, replicates
            ).sum(axis=0)
            place = int(np.argmin(np.abs(np.log(grid / levels[index]))))
            low, high = grid[max(place - 1, 0)], grid[min(place + 1, grid.size - 1)]
            if high > low:
                levels[index] = _best_between(law, constants, rest, error, replicates, low, high)
        if np.allclose(levels, before, rtol=1e-9, atol=0.0):
            break
    return levels


def _best_between(
    law: RateLaw, constants: Floats, rest: Floats, error: RateError, replicates: int, low: float, high: float
) -> float:
    def loss(log_level: float) -> float:
        step = _steps(law, constants, np.exp(np.array([log_level])), error, replicates)
        return -float(_log_det(rest + step)[0])

    inside = minimize_scalar(
        loss, bounds=(np.log(low), np.log(high)), method="bounded", options={"xatol": 1e-10}
    )
    ends = [(loss(float(np.log(level))), level) for level in (low, high)]
    return min([(float(inside.fun), float(np.exp(inside.x))), *ends])[1]


def _steps(
    law: RateLaw, constants: Floats, substrate_um: Floats, error: RateError, replicates: int
) -> Floats:
    """Information that each level adds, shape (levels, constants, constants)."""
    rate = law.rate(at_levels(substrate_um[:, None]), tuple(constants[:, None]))[:, 0]
    gradient = _gradient(law, constants, substrate_um)
    steps: Floats = np.einsum("il,jl->lij", gradient, gradient)
    steps *= (replicates / error.variance(rate))[:, None, None]
    return steps


def _gradient(law: RateLaw, constants: Floats, substrate_um: Floats) -> Floats:
    """Derivative of the rate by each coordinate, shape (constants, levels)."""
    values = tuple(constants[law.first_shape :, None])
    shape, slopes = law.evaluate(at_levels(substrate_um[:, None]), values)
    if law.amplitude is None:
        return np.array([slope[:, 0] for slope in slopes], dtype=np.float64)
    return np.array([constants[0] * column[:, 0] for column in (shape, *slopes)], dtype=np.float64)


def _log_det(matrices: Floats) -> Floats:
    """Logarithm of determinants, minus infinity where there is none above zero."""
    sign, value = np.linalg.slogdet(matrices)
    log_det: Floats = np.where(sign > 0, value, -np.inf)
    return log_det
