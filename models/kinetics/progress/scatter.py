"""How much reads scatter and how unevenly enzyme and substrate were dispensed, from the curves of a series.

Knows linearised curves only. What it returns are the weights of the fit and of its intervals.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from models.kinetics.progress.normal_equations import Constants, Noise, reduce
from models.kinetics.progress.wells import Wells

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

SMALLEST_CV, LARGEST_CV = 1e-4, 0.1
"""Wells that seem to differ by more than 10 % (common practice, no source) are not dispensed so: a law that
does not hold, such as an enzyme that decays unseen, would hide in them."""
_FIRST_STEP, _LATER_STEP, _LAST_STEP = np.log(4.0), 0.16, 0.01
_MOVES = np.array([(a, b) for a in (-1.0, 0.0, 1.0) for b in (-1.0, 0.0, 1.0) if (a, b) != (0.0, 0.0)])


def read_noise(wells: Wells) -> Floats:
    """Standard deviation of one read from second differences [umol/L], shape (K,).

    Gasser, Sroka and Jennen-Steinmetz (1986), doi:10.1093/biomet/73.3.625: no smooth curve disturbs it.
    """
    whole = wells.used[2:] & wells.used[1:-1] & wells.used[:-2]
    second = np.where(whole, wells.product_um[2:] - 2.0 * wells.product_um[1:-1] + wells.product_um[:-2], 0.0)
    total = np.cumsum(second**2, axis=0)[-1] / 6.0
    count = wells.by_series(np.count_nonzero(whole, axis=0).astype(np.float64))
    return np.sqrt(wells.by_series(total) / np.maximum(count, 1.0))


def restricted_loss(wells: Wells, constants: Constants, gram: Floats, noise: Noise) -> Floats:
    """Minus twice the restricted log-likelihood of the dispensing CVs, up to a constant, shape (K,).

    Patterson and Thompson (1971), doi:10.1093/biomet/58.3.545, on the curves linearised at the fit.

    Parameters
    ----------
    wells, constants
        What is fitted.
    gram
        With the residuals restored (`normal_equations.restored`).
    noise
        Scatter to be judged.
    """
    reduced = reduce(wells, constants, gram, noise)
    diagonal = np.einsum("kii->ki", reduced.information)
    scale = 1.0 / np.sqrt(np.maximum(diagonal, 1e-300))
    matrix = reduced.information * scale[:, :, None] * scale[:, None, :]
    # A constant that the curves do not tell must not make the rest unreadable.
    matrix = matrix + 1e-12 * np.eye(constants.count)
    _, log_determinant = np.linalg.slogdet(matrix)
    right = (reduced.pull * scale)[:, :, None]
    solved = np.linalg.solve(matrix, right)
    explained = np.sum(right * solved, axis=(1, 2))
    loss = reduced.log_determinant + log_determinant - 2.0 * np.sum(np.log(scale), axis=1)
    total = loss + reduced.square - explained
    return np.where(np.isfinite(total), total, np.inf)


def dispensing_cv(
    wells: Wells, constants: Constants, gram: Floats, noise: Noise, estimated: Flags, *, first: bool
) -> Floats:
    """CVs of enzyme and substrate as dispensed that the curves make most likely, shape (2, K).

    A search over both logarithms by ever smaller steps: two dimensions, no derivatives, and the end may lie
    at the smallest CV.

    Parameters
    ----------
    wells, constants, gram
        As in `restricted_loss`.
    noise
        Scatter to start from; its read noise stays.
    estimated
        Series whose CVs are sought; others keep theirs, shape (K,).
    first
        Whether the start is a guess, from which long steps are taken.
    """
    log_cv = np.log(np.clip(noise.cv, SMALLEST_CV, LARGEST_CV))
    best = restricted_loss(wells, constants, gram, Noise(noise.read_sd, np.exp(log_cv)))
    step = np.full(wells.series_count, _FIRST_STEP if first else _LATER_STEP)
    active = np.flatnonzero(estimated)
    while active.size:
        chosen = wells.select(active, reads=False)
        # All moves side by side, as if each were series of its own.
        tiled = chosen.wells.repeated(len(_MOVES))
        moved = log_cv[:, None, active] + _MOVES.T[:, :, None] * step[active]
        trial = np.clip(moved, np.log(SMALLEST_CV), np.log(LARGEST_CV))
        loss = restricted_loss(
            tiled,
            constants,
            np.tile(gram[:, :, chosen.well_places], len(_MOVES)),
            Noise(np.tile(noise.read_sd[active], len(_MOVES)), np.exp(trial).reshape(2, -1)),
        ).reshape(len(_MOVES), -1)
        move = np.argmin(loss, axis=0)
        here = np.arange(active.size)
        gained = loss[move, here] < best[active] - 1e-9
        taken = active[gained]
        best[taken] = loss[move, here][gained]
        log_cv[:, taken] = trial[:, move, here][:, gained]
        step[active[~gained]] *= 0.5
        active = active[step[active] > _LAST_STEP]
    return np.where(estimated, np.exp(log_cv), noise.cv)
