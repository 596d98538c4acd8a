"""Weighted least squares of one rate law for many series at once, by variable projection.

For given shape constants the best amplitude is linear and eliminated (Golub and Pereyra 1973,
doi:10.1137/0710036; Kaufman 1975, doi:10.1007/BF01932995); what remains is a damped Gauss-Newton search on
the logarithms of the shape constants. All arithmetic is elementwise over series and sums levels one after
another, so that a series gives the same bits in every batch. This module knows neither plates nor weights'
origin.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.kinetics.laws.law import Conditions, Floats, RateLaw
from models.statistics.sums import sum_rows

CHUNK = 1024
"""Series worked on together: small enough that a (levels, series) array stays in the processor's cache."""

_STEP_TOLERANCE = 1e-10
_LONGEST_STEP = 1.5
_ITERATIONS = 60
_ROUNDING = 4e-15

Flags = NDArray[np.bool_]


@dataclass(frozen=True)
class Minimum:
    """Least weighted squares of each series.

    Attributes
    ----------
    amplitude
        Best amplitude, shape (series,).
    log_constants
        Natural logarithms of the shape constants, shape (constants, series).
    residual_sum
        Weighted sum of squared residuals, shape (series,).
    converged
        Whether the search came to rest inside the limits, shape (series,).
    """

    amplitude: Floats
    log_constants: Floats
    residual_sum: Floats
    converged: Flags


@dataclass
class _Point:
    """Where the search of each series stands: constants, cost, gradient, curvature."""

    log_constants: Floats
    amplitude: Floats
    cost: Floats
    gradient: list[Floats]
    hessian: list[list[Floats]]

    def put(self, where: NDArray[np.intp], other: _Point, source: Flags) -> None:
        self.log_constants[:, where] = other.log_constants[:, source]
        self.amplitude[where] = other.amplitude[source]
        self.cost[where] = other.cost[source]
        for k, row in enumerate(self.hessian):
            self.gradient[k][where] = other.gradient[k][source]
            for m in range(k + 1):
                row[m][where] = other.hessian[k][m][source]

    def take(self, where: NDArray[np.intp]) -> _Point:
        return _Point(
            self.log_constants[:, where],
            self.amplitude[where],
            self.cost[where],
            [g[where] for g in self.gradient],
            [[h[where] for h in row] for row in self.hessian],
        )


def _point(
    law: RateLaw,
    conditions: Conditions,
    rates: Floats,
    weights: Floats,
    square_sum: Floats,
    log_constants: Floats,
    amplitude: Floats | None,
) -> _Point:
    shape, slopes = law.evaluate(conditions, tuple(np.exp(row) for row in log_constants))
    weighted = weights * shape
    shape_square = sum_rows(weighted * shape)
    shape_rate = sum_rows(weighted * rates)
    best = shape_rate / shape_square if amplitude is None else amplitude
    if amplitude is None:
        cost = square_sum - best * shape_rate
    else:
        cost = square_sum - 2.0 * best * shape_rate + best * best * shape_square
    gradient: list[Floats] = []
    hessian: list[list[Floats]] = []
    projections: list[Floats] = []
    weighted_slopes = [weights * slope for slope in slopes]
    for k, slope in enumerate(weighted_slopes):
        projection = sum_rows(slope * shape)
        gradient.append(best * (sum_rows(slope * rates) - best * projection))
        projections.append(projection)
        row = []
        for m in range(k + 1):
            product = sum_rows(slope * slopes[m])
            if amplitude is None:
                product = product - projection * projections[m] / shape_square
            row.append(best * best * product)
        hessian.append(row)
    return _Point(log_constants, best, cost, gradient, hessian)


def _solve(
    hessian: list[list[Floats]], gradient: list[Floats], damping: Floats, free: Floats
) -> list[Floats]:
    """Step of (H + damping diag H) step = gradient by an unrolled Cholesky factor, one system a series.

    Constants with free = 0 do not move. A pivot that rounding has made negative is replaced by its scale.
    """
    count = len(gradient)
    factor: list[list[Floats]] = [[np.zeros(0)] * count for _ in range(count)]
    forward: list[Floats] = []
    for k in range(count):
        for m in range(k + 1):
            entry = hessian[k][m] * free[k] * free[m]
            if k == m:
                scale = np.where(free[k] > 0, np.maximum(hessian[k][k], 1e-300), 1.0)
                entry = entry + damping * scale * free[k] + (1.0 - free[k])
            for j in range(m):
                entry = entry - factor[k][j] * factor[m][j]
            factor[k][m] = np.sqrt(np.maximum(entry, 1e-12 * scale)) if k == m else entry / factor[m][m]
        rest = gradient[k] * free[k]
        for j in range(k):
            rest = rest - factor[k][j] * forward[j]
        forward.append(rest / factor[k][k])
    steps: list[Floats] = [np.zeros(0)] * count
    for k in reversed(range(count)):
        rest = forward[k]
        for j in range(k + 1, count):
            rest = rest - factor[j][k] * steps[j]
        steps[k] = rest / factor[k][k]
    return steps


def minimise(
    law: RateLaw,
    conditions: Conditions,
    rates: Floats,
    weights: Floats,
    start: Floats,
    lower: Floats,
    upper: Floats,
    *,
    amplitude: Floats | None = None,
    fixed: int | None = None,
) -> Minimum:
    """Least squares of every series from given starts.

    Parameters
    ----------
    law
        The rate law.
    conditions, rates, weights
        Shape (levels, series); a point that is not there has weight 0 and any finite values.
    start, lower, upper
        Logarithms of the shape constants, shape (constants, series).
    amplitude
        Keeps the amplitude at these values instead of eliminating it, shape (series,).
    fixed
        Index of a shape constant kept at its start.

    Returns
    -------
    Minimum
        The best point found in each series.
    """
    count, series_count = start.shape
    square_sum = sum_rows(weights * rates * rates)
    free_constant = np.ones((count, series_count))
    if fixed is not None:
        free_constant[fixed] = 0.0
    with np.errstate(all="ignore"):
        at = _point(law, conditions, rates, weights, square_sum, start.copy(), amplitude)
        converged = np.full(series_count, fixed is not None and count == 1)
        damping = np.full(series_count, 1e-8)
        active = np.flatnonzero(~converged & np.isfinite(at.cost))
        for _ in range(_ITERATIONS):
            if active.size == 0:
                break
            here = at.take(active)
            low, high = lower[:, active], upper[:, active]
            free = _movable(here, low, high, free_constant[:, active])
            step = np.array(_solve(here.hessian, here.gradient, damping[active], free))
            step = np.clip(step, -_LONGEST_STEP, _LONGEST_STEP)
            trial_log = np.clip(here.log_constants + step, low, high)
            moved = trial_log - here.log_constants
            part = conditions.select(active)
            fixed_amplitude = None if amplitude is None else amplitude[active]
            trial = _point(
                law,
                part,
                rates[:, active],
                weights[:, active],
                square_sum[active],
                trial_log,
                fixed_amplitude,
            )
            slack = _ROUNDING * square_sum[active]
            better = trial.cost <= here.cost + slack
            small = np.max(np.abs(moved), axis=0) < _STEP_TOLERANCE
            at.put(active[better], trial, better)
            damping[active] = np.where(
                better, np.maximum(damping[active] * 0.1, 1e-12), damping[active] * 30.0
            )
            # A step that is refused although tiny is refused by rounding: nothing is left to gain.
            exhausted = ~better & (np.max(np.abs(moved), axis=0) < 1e-7)
            done = (better & small & (damping[active] < 1e-2)) | exhausted
            converged[active[done]] = True
            active = active[~done & (damping[active] < 1e12)]
        residual_sum = _residual_sum(law, conditions, rates, weights, at)
    return Minimum(at.amplitude, at.log_constants, residual_sum, converged)


def _movable(here: _Point, low: Floats, high: Floats, free: Floats) -> Floats:
    """Constants that may move: not at a limit that the gradient presses against."""
    gradient = np.array(here.gradient)
    pressed = ((here.log_constants <= low) & (gradient < 0)) | ((here.log_constants >= high) & (gradient > 0))
    movable: Floats = np.where(pressed, 0.0, free)
    return movable


def _residual_sum(law: RateLaw, conditions: Conditions, rates: Floats, weights: Floats, at: _Point) -> Floats:
    shape, _ = law.evaluate(conditions, tuple(np.exp(row) for row in at.log_constants))
    residual = rates - at.amplitude * shape
    return sum_rows(weights * residual * residual)


def best_start(law: RateLaw, conditions: Conditions, rates: Floats, weights: Floats) -> Floats:
    """Logarithms of the best of the law's own start values, shape (constants, series)."""
    candidates = law.starts(conditions, weights)
    best_gain = np.full(rates.shape[1], -np.inf)
    best = candidates[0].copy()
    with np.errstate(all="ignore"):
        for candidate in candidates:
            shape, _ = law.evaluate(conditions, tuple(candidate))
            weighted = weights * shape
            explained = sum_rows(weighted * rates)
            gain = explained * np.abs(explained) / sum_rows(weighted * shape)
            better = gain > best_gain
            best_gain = np.where(better, gain, best_gain)
            best = np.where(better, candidate, best)
    logs: Floats = np.log(best)
    return logs
