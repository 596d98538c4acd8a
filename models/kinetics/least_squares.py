"""Weighted least squares of one rate law for many series at once, by variable projection.

For given shape constants the best amplitude is linear and eliminated (Golub and Pereyra 1973,
doi:10.1137/0710036; Kaufman 1975, doi:10.1007/BF01932995); what remains is a damped Gauss-Newton search on
the coordinates of the shape constants, any number of them. All arithmetic is elementwise over series and sums
levels one after another, so that a series gives the same bits in every batch. This module knows neither
plates nor weights' origin.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.kinetics.laws.law import Conditions, Floats, RateLaw
from models.statistics.sums import sum_rows

CHUNK = 4096
"""Series worked on together: small enough that a (levels, series) array stays in the processor's cache."""

_STEP_TOLERANCE = 1e-10
_LONGEST_STEP = 1.5
"""Of a logarithm; a constant without limits may move by its own size, and by this where it is near 0:"""
_LEAST_REACH = 1e-3
_ITERATIONS = 60
_ROUNDING = 4e-15

Flags = NDArray[np.bool_]


@dataclass(frozen=True)
class Minimum:
    """Least weighted squares of each series.

    Attributes
    ----------
    amplitude
        Best amplitude, shape (series,); 1 for a law without one.
    coordinates
        Coordinates of the shape constants, shape (constants, series).
    residual_sum
        Weighted sum of squared residuals, shape (series,).
    converged
        Whether the search came to rest inside the limits, shape (series,).
    """

    amplitude: Floats
    coordinates: Floats
    residual_sum: Floats
    converged: Flags


@dataclass
class _Point:
    """Where the search of each series stands: constants, cost, gradient, curvature (lower triangle)."""

    coordinates: Floats
    amplitude: Floats
    cost: Floats
    gradient: list[Floats]
    hessian: list[list[Floats]]

    def accept(self, other: _Point, where: Flags) -> None:
        """Move to another point where that is better."""
        np.copyto(self.coordinates, other.coordinates, where=where)
        np.copyto(self.amplitude, other.amplitude, where=where)
        np.copyto(self.cost, other.cost, where=where)
        for k, row in enumerate(self.hessian):
            np.copyto(self.gradient[k], other.gradient[k], where=where)
            for m in range(k + 1):
                np.copyto(row[m], other.hessian[k][m], where=where)

    def select(self, where: Flags) -> _Point:
        """Some of the series."""
        return _Point(
            self.coordinates[:, where],
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
    coordinates: Floats,
    amplitude: Floats | None,
) -> _Point:
    shape, slopes = law.evaluate(conditions, law.values(coordinates))
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
    return _Point(coordinates, best, cost, gradient, hessian)


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
        Coordinates of the shape constants, shape (constants, series).
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
    if law.amplitude is None:
        amplitude = np.ones(series_count)
    free = np.ones((count, series_count))
    if fixed is not None:
        free[fixed] = 0.0
    work = _Work(
        np.arange(series_count), conditions, rates, weights, sum_rows(weights * rates * rates), lower, upper,
        free, amplitude, np.full(series_count, 1e-8), np.full(series_count, np.inf),
        np.zeros(series_count, dtype=bool), np.full(series_count, np.nan), np.full(series_count, np.nan),
    )  # fmt: skip
    best_coordinates, best_amplitude = start.copy(), np.zeros(series_count)
    converged = np.zeros(series_count, dtype=bool)
    with np.errstate(all="ignore"):
        at = work.point(law, start.copy())
        nothing_to_move = fixed is not None and count == 1
        work.done |= ~np.isfinite(at.cost) | nothing_to_move
        converged |= np.isfinite(at.cost) & nothing_to_move
        for _ in range(_ITERATIONS):
            if np.count_nonzero(work.done) * 3 >= work.done.size:
                best_coordinates[:, work.series], best_amplitude[work.series] = at.coordinates, at.amplitude
                at, work = at.select(~work.done), work.select(~work.done)
                if work.series.size == 0:
                    break
            came_to_rest = _advance(law, work, at)
            converged[work.series[came_to_rest]] = True
        best_coordinates[:, work.series], best_amplitude[work.series] = at.coordinates, at.amplitude
        shape, _ = law.evaluate(conditions, law.values(best_coordinates))
        residual = rates - best_amplitude * shape
        residual_sum = sum_rows(weights * residual * residual)
    return Minimum(best_amplitude, best_coordinates, residual_sum, converged)


@dataclass
class _Work:
    """The series still searched, with their data; `done` marks those that wait to be put aside.

    `last_step` is the Gauss-Newton step before the last move, and `last_way` that move, of a lone constant;
    NaN where there was none.
    """

    series: NDArray[np.intp]
    conditions: Conditions
    rates: Floats
    weights: Floats
    square_sum: Floats
    lower: Floats
    upper: Floats
    free: Floats
    amplitude: Floats | None
    damping: Floats
    last_move: Floats
    done: Flags
    last_step: Floats
    last_way: Floats

    def point(self, law: RateLaw, coordinates: Floats) -> _Point:
        return _point(
            law, self.conditions, self.rates, self.weights, self.square_sum, coordinates, self.amplitude
        )

    def select(self, where: Flags) -> _Work:
        return _Work(
            self.series[where],
            self.conditions.select(where),
            self.rates[:, where],
            self.weights[:, where],
            self.square_sum[where],
            self.lower[:, where],
            self.upper[:, where],
            self.free[:, where],
            None if self.amplitude is None else self.amplitude[where],
            self.damping[where],
            self.last_move[where],
            self.done[where],
            self.last_step[where],
            self.last_way[where],
        )


def _advance(law: RateLaw, work: _Work, at: _Point) -> Flags:
    """One damped Gauss-Newton step of every series at work; returns which have now come to rest."""
    steps = _solve(at.hessian, at.gradient, work.damping, _movable(at, work))
    if len(steps) == 1:
        plain, steps = steps[0], [_secant_step(steps[0], work)]
    trial_at = np.empty_like(at.coordinates)
    longest = np.zeros(work.series.size)
    for k, step in enumerate(steps):
        here, wanted = at.coordinates[k], trial_at[k]
        if law.shape_constants[k].positive:
            longest_step: float | Floats = _LONGEST_STEP
            scale: float | Floats = 1.0
        else:
            # A constant without limits has no scale but its own size.
            limited, size = np.isfinite(work.lower[k]) & np.isfinite(work.upper[k]), np.abs(here)
            longest_step = np.where(limited, np.inf, np.maximum(size, _LEAST_REACH))
            scale = np.where(limited, 1.0, np.maximum(size, 1e-300))
        np.maximum(step, -longest_step, out=wanted)
        np.minimum(wanted, longest_step, out=wanted)
        wanted += here
        np.maximum(wanted, work.lower[k], out=wanted)
        np.minimum(wanted, work.upper[k], out=wanted)
        np.maximum(longest, np.abs(wanted - here) / scale, out=longest)
    trial = work.point(law, trial_at)
    open_still = ~work.done
    better = (trial.cost <= at.cost + _ROUNDING * work.square_sum) & open_still
    # A step that is refused although tiny is refused by rounding: nothing is left to gain.
    exhausted = ~better & (longest < 1e-7)
    # Steps shrink by a steady factor near the optimum: what is left is told by the next one.
    next_move = longest * np.minimum(longest / work.last_move, 1.0)
    at_rest = (longest < _STEP_TOLERANCE) | ((longest < 1e-7) & (next_move < _STEP_TOLERANCE))
    rests = open_still & ((better & at_rest & (work.damping < 1e-2)) | exhausted)
    work.last_move = np.where(better, longest, np.inf)
    if len(steps) == 1:
        work.last_step = np.where(better, plain, np.nan)
        work.last_way = trial_at[0] - at.coordinates[0]
    at.accept(trial, better)
    work.damping = np.where(better, np.maximum(work.damping * 0.1, 1e-12), work.damping * 30.0)
    work.done |= rests | (work.damping > 1e12)
    return rests


def _secant_step(step: Floats, work: _Work) -> Floats:
    """Gauss-Newton step of a lone constant, lengthened or shortened to where its steps end.

    Near the optimum they shrink by a steady factor that depends on the residuals; the secant through the last
    two gets there at once (Traub 1964, Iterative Methods for the Solution of Equations, from memory).
    """
    ratio = work.last_way / (work.last_step - step)
    return np.where((ratio > 0.5) & (ratio < 2.0), step * ratio, step)


def _movable(at: _Point, work: _Work) -> Floats:
    """1 for constants that may move, 0 at a limit that the gradient presses against (constants, series)."""
    at_lower, at_upper = at.coordinates <= work.lower, at.coordinates >= work.upper
    if not (at_lower.any() or at_upper.any()):
        return work.free
    movable = work.free.copy()
    for k, gradient in enumerate(at.gradient):
        movable[k][(at_lower[k] & (gradient < 0)) | (at_upper[k] & (gradient > 0))] = 0.0
    return movable


def best_start(law: RateLaw, conditions: Conditions, rates: Floats, weights: Floats) -> Floats:
    """Coordinates of the best of the law's own start values, shape (constants, series)."""
    candidates = law.starts(conditions, weights)
    best_gain = np.full(rates.shape[1], -np.inf)
    best = candidates[0].copy()
    with np.errstate(all="ignore"):
        for candidate in candidates:
            shape, _ = law.evaluate(conditions, tuple(candidate))
            weighted = weights * shape
            explained, size = sum_rows(weighted * rates), sum_rows(weighted * shape)
            free_gain = explained * np.abs(explained) / size
            gain = 2.0 * explained - size if law.amplitude is None else free_gain
            better = gain > best_gain
            best_gain = np.where(better, gain, best_gain)
            best = np.where(better, candidate, best)
    return law.coordinates(best)
