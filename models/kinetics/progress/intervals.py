"""95 % profile-likelihood intervals of the constants of whole curves, open where the curves leave them open.

For each value of a constant everything else is fitted again, dispensing and drift included; the scatter stays
as estimated. The ends are where the sum of squares stands t^2 above its least: reached directly by steps on
the linearised curves (Venzon and Moolgavkar 1988, doi:10.2307/2347496), by a search where those fail.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.stats import t as t_distribution

from models.kinetics.progress.normal_equations import Constants, Noise, State, linearise, reduce
from models.kinetics.progress.search import Found, Limits, minimise
from models.kinetics.progress.wells import Wells

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]
Integers = NDArray[np.int_]

LEVEL = 0.95
_ROUNDS = 40
_TOLERANCE = 1e-6
_LARGEST_REACH = 2.0
_DIRECT_ROUNDS = 8
_NEAR_HEIGHT, _NEAR_GAIN = 1e-3, 1e-5
"""How far a direct step's start may stand from the height sought, and what moving everything else may still
gain, for the step to be the last: what it leaves is smaller by another such factor."""
_LONGEST_DIRECT_STEP = 1.5


def profile_ends(
    wells: Wells,
    constants: Constants,
    found: Found,
    noise: Noise,
    limits: Limits,
    degrees: Floats,
    log_covariance: Floats,
) -> tuple[Floats, Floats]:
    """Ends of every constant's 95 % interval.

    Parameters
    ----------
    wells, constants, noise, limits
        What was fitted.
    found
        The optimum.
    degrees
        Degrees of freedom of t, shape (K,).
    log_covariance
        Covariance of the logarithms, for the first step out, shape (K, constants, constants).

    Returns
    -------
    tuple of arrays
        Shape (constants, K), in the constants' own units; NaN where open.
    """
    low = np.full(found.state.log_constants.shape, np.nan)
    high = low.copy()
    target = np.asarray(t_distribution.ppf(0.5 + LEVEL / 2.0, degrees), dtype=np.float64)
    inside = (found.state.log_constants > limits.lower) & (found.state.log_constants < limits.upper)
    for index in range(constants.count):
        usable = np.flatnonzero(found.converged & inside[index])
        for side, ends in ((-1.0, low), (1.0, high)):
            end = _direct(wells, constants, found, noise, limits, target, usable, index, side)
            rest = usable[np.isnan(end[usable])]
            if rest.size:
                for_side = _Side(wells, constants, found, noise, limits, target, log_covariance, index, side)
                end[rest] = for_side.search(rest)[rest]
            ends[index] = np.exp(end)
    return low, high


def _direct(
    wells: Wells,
    constants: Constants,
    found: Found,
    noise: Noise,
    limits: Limits,
    target: Floats,
    usable: Integers,
    index: int,
    side: float,
) -> Floats:
    """Logarithm of one end by steps that keep all else at its best, NaN where they do not get there, (K,).

    On linearised curves the least sum of squares for a step a of the constant is q + (a - s)^2 / C, with C
    its variance, s its unrestricted step and q the least of all; the step aims where that is what is sought.
    """
    end = np.full(target.shape, np.nan)
    state = State(found.state.log_constants.copy(), found.state.dispensed.copy(), found.state.drift.copy())
    gram, objective = found.linear.gram.copy(), found.linear.objective.copy()
    active = usable
    for _ in range(_DIRECT_ROUNDS):
        if active.size == 0:
            break
        chosen = wells.select(active)
        part, at_wells, at_drifts = chosen.wells, chosen.well_places, chosen.drift_places
        here = State(state.log_constants[:, active], state.dispensed[:, at_wells], state.drift[at_drifts])
        scatter = Noise(noise.read_sd[active], noise.cv[:, active])
        reduced = reduce(part, constants, gram[:, :, at_wells], scatter, here)
        covariance = _inverse(reduced.information)
        free = np.sum(covariance * reduced.pull[:, None, :], axis=2)
        along = covariance[:, :, index]
        with np.errstate(all="ignore"):
            variance = along[:, index]
            gain = reduced.own_gain + np.sum(free * reduced.pull, axis=1)
            aim = found.linear.objective[active] + target[active] ** 2
            away = side * np.sqrt(variance * (aim - objective[active] + gain))
            step = free + along * (away / variance)[:, None]
            height = np.sqrt(objective[active] - found.linear.objective[active])
            others = gain - free[:, index] ** 2 / variance
            near = (np.abs(height - target[active]) < _NEAR_HEIGHT) & (others < _NEAR_GAIN)
            trial = here.log_constants + step.T
            possible = np.all(np.abs(step) < _LONGEST_DIRECT_STEP, axis=1) & np.all(
                (trial > limits.lower[:, active]) & (trial < limits.upper[:, active]), axis=0
            )
        last = near & possible
        end[active[last]] = trial[index, last]
        going = np.flatnonzero(possible & ~near)
        kept = chosen.wells.select(going)
        dispensed, drift = reduced.step(np.where(possible[None], step.T, 0.0))
        state.log_constants[:, active[going]] = trial[:, going]
        wells_on, drifts_on = at_wells[kept.well_places], at_drifts[kept.drift_places]
        state.dispensed[:, wells_on] = (here.dispensed + dispensed)[:, kept.well_places]
        state.drift[drifts_on] = (here.drift + drift)[kept.drift_places]
        active = active[going]
        if active.size:
            moved = State(
                state.log_constants[:, active], state.dispensed[:, wells_on], state.drift[drifts_on]
            )
            linear = linearise(
                kept.wells, constants, moved, Noise(noise.read_sd[active], noise.cv[:, active])
            )
            gram[:, :, wells_on], objective[active] = linear.gram, linear.objective
    return end


def _inverse(information: Floats) -> Floats:
    """Inverse of each matrix (K, n, n), NaN where it has none."""
    diagonal = np.einsum("kii->ki", information)
    with np.errstate(all="ignore"):
        scale = 1.0 / np.sqrt(diagonal)
        matrix = information * scale[:, :, None] * scale[:, None, :]
    good = np.all(np.isfinite(matrix), axis=(1, 2))
    eye = np.eye(information.shape[1])
    safe = np.where(good[:, None, None], matrix, eye)
    good &= np.linalg.eigvalsh(safe)[:, 0] > 1e-9
    inverse = np.linalg.inv(np.where(good[:, None, None], safe, eye))
    with np.errstate(all="ignore"):
        inverse = inverse * scale[:, :, None] * scale[:, None, :]
    return np.where(good[:, None, None], inverse, np.nan)


class _Side:
    """The search for one end of one constant, all series at once; holds its arguments and nothing else."""

    def __init__(
        self,
        wells: Wells,
        constants: Constants,
        found: Found,
        noise: Noise,
        limits: Limits,
        target: Floats,
        log_covariance: Floats,
        index: int,
        side: float,
    ) -> None:
        self.wells, self.constants, self.noise, self.limits = wells, constants, noise, limits
        self.best, self.target, self.index, self.side = found.linear.objective, target, index, side
        self.center = found.state.log_constants
        self.covariance = log_covariance
        self.at = State(
            found.state.log_constants.copy(), found.state.dispensed.copy(), found.state.drift.copy()
        )

    def height(self, series: Integers, value: Floats) -> Floats:
        """Root of how far the sum of squares stands above its least, at values of the constant."""
        chosen = self.wells.select(series)
        start = self.at.log_constants[:, series].copy()
        start[self.index] = value
        state = State(start, self.at.dispensed[:, chosen.well_places], self.at.drift[chosen.drift_places])
        noise = Noise(self.noise.read_sd[series], self.noise.cv[:, series])
        found = minimise(
            chosen.wells, self.constants, state, noise, self.limits.select(series), held=self.index
        )
        self.at.log_constants[:, series] = found.state.log_constants
        self.at.dispensed[:, chosen.well_places] = found.state.dispensed
        self.at.drift[chosen.drift_places] = found.state.drift
        return np.sqrt(np.maximum(found.linear.objective - self.best[series], 0.0))

    def search(self, usable: Integers) -> Floats:
        """Logarithm at which the height reaches the target, NaN where it does not within the limits, (K,).

        Steps out until the target is passed, then closes in by the Illinois rule (Dowell and Jarratt 1971,
        doi:10.1007/BF01934364).
        """
        center = self.center[self.index]
        edge = (self.limits.upper if self.side > 0 else self.limits.lower)[self.index]
        with np.errstate(all="ignore"):
            error = np.sqrt(self.covariance[:, self.index, self.index])
        reach = np.clip(np.where(np.isfinite(error), error * self.target, 0.5), 1e-9, _LARGEST_REACH)
        result = np.full(center.shape, np.nan)
        near, near_gap = center.copy(), -self.target.copy()
        far, far_gap = center.copy(), np.full(center.shape, np.nan)
        trial = self._within(center + self.side * reach, edge)
        last = np.zeros(center.shape)
        active = usable
        for _ in range(_ROUNDS):
            if active.size == 0:
                break
            gap = self.height(active, trial[active]) - self.target[active]
            outside = gap >= 0
            self._tighten(active, outside, trial, gap, (near, near_gap), (far, far_gap), last)
            bracketed = np.isfinite(far_gap[active])
            close = np.abs(far[active] - near[active]) <= 1e-10 * np.maximum(1.0, np.abs(near[active]))
            settled = (np.abs(gap) < _TOLERANCE) | (bracketed & close)
            stuck = ~bracketed & (self.side * (edge[active] - trial[active]) <= 0)
            result[active[settled]] = trial[active[settled]]
            active = active[~(settled | stuck)]
            reach[active] = np.minimum(2.0 * reach[active], _LARGEST_REACH)
            with np.errstate(all="ignore"):
                secant = far - far_gap * (far - near) / (far_gap - near_gap)
            wider = self._within(near + self.side * reach, edge)
            trial[active] = np.where(np.isfinite(far_gap), secant, wider)[active]
        return result

    def _within(self, value: Floats, edge: Floats) -> Floats:
        return np.minimum(value, edge) if self.side > 0 else np.maximum(value, edge)

    @staticmethod
    def _tighten(
        active: Integers,
        outside: Flags,
        trial: Floats,
        gap: Floats,
        near: tuple[Floats, Floats],
        far: tuple[Floats, Floats],
        last: Floats,
    ) -> None:
        """Move the end of the bracket that the trial replaces; halve the other's gap where it stays twice."""
        out, within = active[outside], active[~outside]
        far_gap, near_gap = far[1], near[1]
        far_gap[within] = np.where(last[within] < 0, 0.5 * far_gap[within], far_gap[within])
        near_gap[out] = np.where(last[out] > 0, 0.5 * near_gap[out], near_gap[out])
        near[0][within], near_gap[within] = trial[within], gap[~outside]
        far[0][out], far_gap[out] = trial[out], gap[outside]
        last[within], last[out] = -1.0, 1.0
