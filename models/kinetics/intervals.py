"""95 % profile-likelihood intervals, all series of a law at once, open where the data leave them open.

A constant's interval holds the values whose best weighted sum of squares, the other constants refitted, stays
below the least one times 1 + F / df (Bates and Watts 1988, doi:10.1002/9780470316757, section 6.1). The
search follows sqrt((S / Smin - 1) df), which is nearly straight in the logarithm of the constant.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import t as t_distribution

from models.kinetics.law_fits import LawFit
from models.kinetics.laws.law import Conditions, Floats, RateLaw
from models.kinetics.laws.michaelis_menten import MICHAELIS_MENTEN, constant_shape, straight_line_shape
from models.kinetics.least_squares import CHUNK, minimise
from models.statistics.sums import sum_rows

Flags = NDArray[np.bool_]

LEVEL = 0.95
_ROUNDS = 60
_TOLERANCE = 1e-8
_WIDEST = np.log(1e9)
"""A constant that may grow or shrink a thousand million times is not held at all."""
_SHOWN, _SHOWN_OPEN = 1.6, 3.0
"""How far a profile is shown: of the way to the interval's end; of t standard errors where it is open."""
_FARTHEST_STEPS = 1e4
"""Standard errors after which the search for an end of an unlimited constant's interval is given up."""


@dataclass(frozen=True)
class _Series:
    """The series whose intervals are sought: data, best fit and threshold."""

    law: RateLaw
    conditions: Conditions
    rates: Floats
    weights: Floats
    coordinates: Floats
    best_sum: Floats
    degrees: Floats
    target: Floats
    lower: Floats
    upper: Floats

    def select(self, series: NDArray[np.intp]) -> _Series:
        return _Series(
            self.law,
            self.conditions.select(series),
            self.rates[:, series],
            self.weights[:, series],
            self.coordinates[:, series],
            self.best_sum[series],
            self.degrees[series],
            self.target[series],
            self.lower[:, series],
            self.upper[:, series],
        )

    def height(self, residual_sum: Floats) -> Floats:
        """Signed-root height of a sum of squares over the least one, in units of the t distribution."""
        with np.errstate(all="ignore"):
            height: Floats = np.sqrt(np.maximum(residual_sum / self.best_sum - 1.0, 0.0) * self.degrees)
        return height


def profile_intervals(
    fit: LawFit, conditions: Conditions, rates: Floats, weights: Floats
) -> tuple[Floats, Floats]:
    """Lower and upper ends of every constant's 95 % interval.

    Parameters
    ----------
    fit
        Fits of one law.
    conditions, rates, weights
        What was fitted, shape (levels, series).

    Returns
    -------
    tuple of arrays
        Shape (constants, series); NaN where the data leave the end open, or where there is no fit.
    """
    low = np.full(fit.constants.shape, np.nan)
    high = np.full(fit.constants.shape, np.nan)
    usable = _usable(fit)
    for first in range(0, usable.size, CHUNK):
        part = usable[first : first + CHUNK]
        series = _series_of(fit, conditions, rates, weights, part)
        for index in range(fit.law.constant_count):
            step = _first_step(fit, part, index)
            for side, ends in ((-1.0, low), (1.0, high)):
                found = _search(series, index, side, step, _open_ends(series, side))
                ends[index, part] = np.exp(found) if fit.law.constants[index].positive else found
    exact = np.flatnonzero(fit.converged & (fit.degrees_of_freedom > 0) & (fit.residual_sum == 0))
    low[:, exact] = high[:, exact] = fit.constants[:, exact]
    return low, high


def profile_curve(
    fit: LawFit,
    conditions: Conditions,
    rates: Floats,
    weights: Floats,
    series: int,
    constant: int,
    ends: tuple[float, float],
    points: int = 61,
) -> tuple[Floats, Floats, float]:
    """Profile of one constant of one series: how much worse the best fit becomes as it is held elsewhere.

    Parameters
    ----------
    fit, conditions, rates, weights
        As given to `profile_intervals`.
    series, constant
        Which, by number.
    ends
        Of its 95 % interval, NaN where open: what is shown reaches some way past them.
    points
        Values of the constant, odd so that the best is one of them.

    Returns
    -------
    tuple
        Values and rise of the weighted sum of squares over the residual variance, shape (points,); NaN where
        no rise is known. The rise at which the 95 % interval ends: the square of t.
    """
    data = _series_of(fit, conditions, rates, weights, np.array([series]))
    step = float(_first_step(fit, np.array([series]), constant)[0])
    best = float(data.coordinates[constant, 0])
    target = float(data.target[0])
    positive = fit.law.constants[constant].positive
    half = points // 2
    steps = np.arange(1, half + 1) / half
    values, rises = np.full(2 * half + 1, best), np.full(2 * half + 1, np.nan)
    if series not in _usable(fit):
        return np.exp(values) if positive else values, rises, target**2
    rises[half] = 0.0
    profile, place = _profile(data, constant), constant - fit.law.first_shape
    for side, end in ((-1, ends[0]), (1, ends[1])):
        with np.errstate(all="ignore"):
            distance = abs((np.log(end) if positive else end) - best)
        reach = _SHOWN * distance if np.isfinite(distance) else _SHOWN_OPEN * step * target
        if place >= 0:
            limit = float((data.upper if side > 0 else data.lower)[place, 0])
            reach = min(reach, abs(limit - best))
        others = data.coordinates[fit.law.first_shape :].copy()
        # Outwards, each from where the one before it came to rest.
        for number, share in enumerate(steps, start=1):
            values[half + side * number] = value = best + side * share * reach
            height, others = profile(np.array([0]), np.array([value]), others)
            rises[half + side * number] = height[0] ** 2
    return np.exp(values) if positive else values, rises, target**2


def _usable(fit: LawFit) -> NDArray[np.intp]:
    """Numbers of the series whose constants have a profile."""
    usable = (
        fit.converged
        & ~fit.at_limit
        & (fit.degrees_of_freedom > 0)
        & (fit.residual_sum > 0)
        & np.isfinite(fit.constants).all(axis=0)
    )
    if fit.law.amplitude is not None:
        usable &= fit.constants[0] > 0
    return np.flatnonzero(usable)


def _series_of(
    fit: LawFit, conditions: Conditions, rates: Floats, weights: Floats, part: NDArray[np.intp]
) -> _Series:
    part_conditions, part_weights = conditions.select(part), weights[:, part]
    lower, upper = fit.law.limits(part_conditions, part_weights)
    # The other constants may go further while one is held than they may in a fit.
    wide = np.array([[_WIDEST if c.is_concentration else 0.0] for c in fit.law.shape_constants])
    degrees = fit.degrees_of_freedom[part]
    return _Series(
        fit.law,
        part_conditions,
        rates[:, part],
        part_weights,
        _coordinates(fit.law, fit.constants[:, part]),
        fit.residual_sum[part],
        degrees,
        np.asarray(t_distribution.ppf(0.5 + LEVEL / 2.0, degrees), dtype=np.float64),
        lower - wide,
        upper + wide,
    )


def _coordinates(law: RateLaw, constants: Floats) -> Floats:
    """Coordinates of all constants, the amplitude's (its logarithm) first if there is one."""
    shape = law.coordinates(constants[law.first_shape :])
    if law.amplitude is None:
        return shape
    both: Floats = np.vstack([np.log(constants[0]), shape])
    return both


def _first_step(fit: LawFit, part: NDArray[np.intp], index: int) -> Floats:
    """One standard error in the constant's coordinate, kept within reason."""
    error, value = fit.standard_error[index, part], fit.constants[index, part]
    if not fit.law.constants[index].positive:
        guess = np.maximum(0.1 * np.abs(value), 1e-6)
        known: Floats = np.where(np.isfinite(error) & (error > 0), error, guess)
        return known
    with np.errstate(all="ignore"):
        step = error / value
    return np.clip(np.where(np.isfinite(step), step, 0.5), 1e-6, 1.0)


def _open_ends(series: _Series, side: float) -> Flags:
    """Ends that are open for certain, shape (constants, series), decided from the limits of the law itself.

    Michaelis-Menten for Km to infinity is the straight line through zero, for Km to zero a constant. Where
    the line stays below the threshold, Km and Vmax are both open above; where the constant does, Km is open
    below.
    """
    count = series.coordinates.shape[0]
    ends = np.zeros((count, series.best_sum.size), dtype=bool)
    if series.law is not MICHAELIS_MENTEN:
        return ends
    shape = (straight_line_shape if side > 0 else constant_shape)(series.conditions)
    weighted = series.weights * shape
    slope = sum_rows(weighted * series.rates) / sum_rows(weighted * shape)
    residual = series.rates - slope * shape
    is_open = series.height(sum_rows(series.weights * residual * residual)) <= series.target
    ends[1] = is_open
    if side > 0:
        ends[0] = is_open
    return ends


def _profile(
    series: _Series, index: int
) -> Callable[[NDArray[np.intp], Floats, Floats], tuple[Floats, Floats]]:
    """Height of the profile at a value of constant `index`, from start values of the others."""

    def height(which: NDArray[np.intp], value: Floats, start: Floats) -> tuple[Floats, Floats]:
        here = series.select(which)
        shape_start = np.clip(start, here.lower, here.upper)
        place = index - series.law.first_shape
        amplitude, fixed = (np.exp(value), None) if place < 0 else (None, place)
        lower, upper = here.lower, here.upper
        if fixed is not None:
            shape_start[fixed] = value
            lower, upper = np.minimum(lower, shape_start), np.maximum(upper, shape_start)
        found = minimise(
            here.law,
            here.conditions,
            here.rates,
            here.weights,
            shape_start,
            lower,
            upper,
            amplitude=amplitude,
            fixed=fixed,
        )
        return here.height(found.residual_sum), found.coordinates

    return height


def _search(series: _Series, index: int, side: float, step: Floats, open_ends: Flags) -> Floats:
    """Coordinate at which the profile crosses the threshold on one side, NaN where it never does.

    Steps outwards until the threshold is passed, then closes in by the Illinois rule (Dowell and Jarratt
    1971, doi:10.1007/BF01934364).
    """
    profile = _profile(series, index)
    best, place = series.coordinates[index], index - series.law.first_shape
    limit = best + side * _WIDEST
    if place >= 0:
        limit = np.where(side > 0, series.upper[place], series.lower[place])
        limit = np.where(np.isfinite(limit), limit, best + side * step * _FARTHEST_STEPS)
    result = np.full(best.shape, np.nan)
    near, near_gap = best.copy(), -series.target
    far, far_gap = best + side * step * series.target, np.full(best.shape, np.nan)
    others = series.coordinates[series.law.first_shape :].copy()
    weight = np.ones(best.shape)
    active = np.flatnonzero(~open_ends[index])
    far = np.where(side > 0, np.minimum(far, limit), np.maximum(far, limit))
    trial = far.copy()
    reach = step * series.target
    for _ in range(_ROUNDS):
        if active.size == 0:
            break
        height, found = profile(active, trial[active], others[:, active])
        gap = height - series.target[active]
        others[:, active] = found
        outside = gap >= 0
        bracketed = np.isfinite(far_gap[active])
        # Inside: the near end moves out. Outside: the far end moves in.
        inside_at, outside_at = active[~outside], active[outside]
        repeated = weight[inside_at] > 1.0
        far_gap[inside_at] = np.where(repeated, far_gap[inside_at] * 0.5, far_gap[inside_at])
        near[inside_at], near_gap[inside_at] = trial[inside_at], gap[~outside]
        weight[inside_at] = 2.0
        repeated = weight[outside_at] < 1.0
        near_gap[outside_at] = np.where(repeated, near_gap[outside_at] * 0.5, near_gap[outside_at])
        far[outside_at], far_gap[outside_at] = trial[outside_at], gap[outside]
        weight[outside_at] = 0.5
        bracketed = np.isfinite(far_gap[active])
        result[active] = np.where(bracketed, trial[active], np.nan)
        settled = (np.abs(gap) < _TOLERANCE) | (bracketed & (np.abs(far[active] - near[active]) < 1e-12))
        stuck = ~bracketed & (side * (limit[active] - trial[active]) <= 0)
        result[active[settled]] = trial[active[settled]]
        result[active[stuck & ~settled]] = np.nan
        active = active[~(settled | stuck)]
        reach[active] = reach[active] * 2.0
        with np.errstate(all="ignore"):
            secant = far[active] - far_gap[active] * (far[active] - near[active]) / (
                far_gap[active] - near_gap[active]
            )
        wider = near[active] + side * reach[active]
        wider = np.where(side > 0, np.minimum(wider, limit[active]), np.maximum(wider, limit[active]))
        trial[active] = np.where(np.isfinite(far_gap[active]), secant, wider)
    return result
