"""The least sum of squares of whole curves: damped Gauss-Newton steps, all series at once, each by itself.

A series moves, settles and stops by its own measure alone, so that its result does not depend on the batch.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.kinetics.progress.normal_equations import (
    Constants,
    Linear,
    Noise,
    Reduced,
    State,
    linearise,
    reduce,
)
from models.kinetics.progress.wells import Wells

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]
Integers = NDArray[np.int_]

_ROUNDS = 80
_SETTLED = 1e-12
"""What the next step would still gain, in units where the interval's threshold is about 4."""
_ROUNDING = 1e-8
_HARDLY_DAMPED = 1e-3
_SHORTENED = 100.0
_LARGEST_STEP = 1.5
_LARGEST_DAMPING = 1e12


@dataclass(frozen=True)
class Limits:
    """Lower and upper limit of the logarithm of each constant, shape (constants, K)."""

    lower: Floats
    upper: Floats

    def select(self, series: Integers) -> Limits:
        """Limits of some of the series."""
        return Limits(self.lower[:, series], self.upper[:, series])


@dataclass(frozen=True)
class Found:
    """The end of a search: the state, its curves, and whether it came to rest, shape (K,)."""

    state: State
    linear: Linear
    converged: Flags


def minimise(
    wells: Wells,
    constants: Constants,
    start: State,
    noise: Noise,
    limits: Limits,
    held: int | None = None,
    rounds: int = _ROUNDS,
    settled: float = _SETTLED,
) -> Found:
    """Minimise the sum of squares over the shared constants and the wells' own errors.

    Parameters
    ----------
    wells, constants
        What is fitted.
    start
        Where to begin.
    noise
        Scatter that the squares are over; held.
    limits
        Limits of the constants.
    held
        A constant that stays where it starts, or None.
    rounds
        Most steps to take.
    settled
        Gain of a next step below which a series is at rest.

    Returns
    -------
    Found
    """
    count = wells.series_count
    state = State(start.log_constants.copy(), start.dispensed.copy(), start.drift.copy())
    linear = linearise(wells, constants, state, noise)
    gram, objective, read_sum = linear.gram.copy(), linear.objective.copy(), linear.read_sum.copy()
    damping, converged = np.zeros(count), np.zeros(count, dtype=bool)
    active = np.flatnonzero(np.isfinite(objective))
    for _ in range(rounds):
        if active.size == 0:
            break
        chosen = wells.select(active)
        part, at_wells, at_drifts = chosen.wells, chosen.well_places, chosen.drift_places
        here = State(state.log_constants[:, active], state.dispensed[:, at_wells], state.drift[at_drifts])
        scatter = Noise(noise.read_sd[active], noise.cv[:, active])
        reduced = reduce(part, constants, gram[:, :, at_wells], scatter, here)
        step, gain = _step(reduced, here, limits.select(active), damping[active], held)
        dispensed, drift = reduced.step(step)
        # Damping holds the shared constants alone; where the wells' own errors overshoot, all goes less far.
        share = 1.0 / (1.0 + _SHORTENED * damping[active])
        trial = State(
            here.log_constants + share * step,
            here.dispensed + share[part.series] * dispensed,
            here.drift + share[part.drift_series] * drift,
        )
        tried = linearise(part, constants, trial, scatter)
        better = tried.objective <= objective[active]
        undamped = damping[active] <= _HARDLY_DAMPED
        # Where the next step is refused though it would gain next to nothing, rounding decides.
        idle = undamped & ((gain <= settled) | (~better & (gain <= _ROUNDING)))
        taken = better[part.series]
        state.log_constants[:, active[better]] = trial.log_constants[:, better]
        state.dispensed[:, at_wells[taken]] = trial.dispensed[:, taken]
        drift_taken = better[part.drift_series]
        state.drift[at_drifts[drift_taken]] = trial.drift[drift_taken]
        gram[:, :, at_wells[taken]] = tried.gram[:, :, taken]
        objective[active[better]] = tried.objective[better]
        read_sum[active[better]] = tried.read_sum[better]
        grown = np.maximum(damping[active] * 8.0, 1e-4)
        shrunk = np.where(damping[active] > 1e-7, damping[active] / 8.0, 0.0)
        damping[active] = np.where(better, shrunk, grown)
        converged[active[idle]] = True
        active = active[~idle & (damping[active] < _LARGEST_DAMPING)]
    return Found(state, Linear(gram, objective, read_sum), converged)


def _step(
    reduced: Reduced, here: State, limits: Limits, damping: Floats, held: int | None
) -> tuple[Floats, Floats]:
    """Change of the shared constants (constants, K) and what it would gain (K,)."""
    size = reduced.pull.shape[1]
    moving = np.ones((reduced.pull.shape[0], size), dtype=bool)
    if held is not None:
        moving[:, held] = False
    step = np.zeros_like(reduced.pull)
    for _ in range(size):
        step = _solve(reduced, moving, damping)
        at = here.log_constants.T
        outward = ((at <= limits.lower.T) & (step < 0)) | ((at >= limits.upper.T) & (step > 0))
        if not np.any(outward & moving):
            break
        moving &= ~outward
    size_of_step = np.max(np.abs(step), axis=1, initial=0.0)
    step = step * np.minimum(1.0, _LARGEST_STEP / np.maximum(size_of_step, 1e-300))[:, None]
    bounded = np.where(
        moving, np.clip(here.log_constants.T + step, limits.lower.T, limits.upper.T) - here.log_constants.T, 0
    )
    return bounded.T, np.sum(bounded * reduced.pull, axis=1) + reduced.own_gain


def _solve(reduced: Reduced, moving: Flags, damping: Floats) -> Floats:
    pair = moving[:, :, None] & moving[:, None, :]
    eye = np.eye(moving.shape[1])
    diagonal = np.where(moving, np.einsum("kii->ki", reduced.information), 1.0)
    scale = 1.0 / np.sqrt(np.maximum(diagonal, 1e-300))
    matrix = np.where(pair, reduced.information, 0.0) * scale[:, :, None] * scale[:, None, :]
    matrix = matrix + eye * (np.where(moving, damping[:, None] + 1e-14, 1.0))[:, None, :]
    right = np.where(moving, reduced.pull, 0.0) * scale
    with np.errstate(all="ignore"):
        solution = np.linalg.solve(
            np.where(np.isfinite(matrix), matrix, eye), np.where(np.isfinite(right), right, 0.0)[:, :, None]
        )[:, :, 0]
    return np.asarray(solution * scale, dtype=np.float64)
