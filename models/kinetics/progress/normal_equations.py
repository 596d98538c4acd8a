"""What one well of a series adds to the fit of all: its linearised curve, with its own errors eliminated.

A well's offset, its enzyme and substrate as dispensed, and the drift of its blank are not constants of the
enzyme; they are solved for and taken out well by well, so that only the shared constants are left (mixed
model equations: Henderson 1975, doi:10.2307/2529430).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.kinetics.progress.integrated import progress, slopes
from models.kinetics.progress.wells import Wells
from models.statistics.sums import sum_rows

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

ENZYME, SUBSTRATE, DRIFT, FIRST_OTHER = 0, 1, 2, 3
_BLOCK = 192
"""Wells worked on together, so that their reads stay in the processor's cache."""


@dataclass(frozen=True)
class Constants:
    """Which constants the curves share, in order; vmax and km always come first and second."""

    names: tuple[str, ...]

    @property
    def columns(self) -> list[int]:
        """Column of each constant in the Gram matrix: vmax shares the enzyme's, since both scale the rate."""
        return [ENZYME, *range(FIRST_OTHER, FIRST_OTHER + len(self.names) - 1)]

    @property
    def count(self) -> int:
        """Number of constants."""
        return len(self.names)


@dataclass(frozen=True)
class State:
    """Where a search stands.

    Attributes
    ----------
    log_constants
        Natural logarithms, shape (constants, K).
    dispensed
        Natural logarithm of enzyme and substrate as dispensed over planned, shape (2, W).
    drift
        Slope error of the blanks [umol/L/s], shape (drifts,).
    """

    log_constants: Floats
    dispensed: Floats
    drift: Floats


@dataclass(frozen=True)
class Noise:
    """What the scatter of a series is taken to be.

    Attributes
    ----------
    read_sd
        Standard deviation of one read [umol/L], shape (K,).
    cv
        Coefficient of variation of enzyme and of substrate as dispensed [1], shape (2, K).
    """

    read_sd: Floats
    cv: Floats


@dataclass(frozen=True)
class Linear:
    """Curves linearised at a state.

    Attributes
    ----------
    gram
        Products of the columns (enzyme, substrate, drift, other constants, residual), each less its mean
        over the well and over the read noise, summed over the reads, shape (columns, columns, W).
    objective
        Sum of squares: reads over read noise, dispensing and drift over theirs, shape (K,).
    read_sum
        The reads' part of it, shape (K,).
    """

    gram: Floats
    objective: Floats
    read_sum: Floats


def linearise(wells: Wells, constants: Constants, state: State, noise: Noise) -> Linear:
    """Compute the curves of a state, their derivatives by the logarithm of everything, and what is left."""
    weight = 1.0 / noise.read_sd[wells.series]
    size = FIRST_OTHER + constants.count
    gram = np.empty((size, size, weight.size))
    for start in range(0, weight.size, _BLOCK):
        block = slice(start, start + _BLOCK)
        part = wells.cut(block)
        of_part = State(state.log_constants, state.dispensed[:, block], state.drift)
        gram[:, :, block] = _products(_columns(part, constants, of_part), part, weight[block])
    read_sum = wells.by_series(gram[-1, -1])
    scaled, drift = _scaled(wells, state, noise)
    objective = read_sum + wells.by_series(np.sum(scaled**2, axis=0)) + wells.drifts_by_series(drift**2)
    return Linear(gram, np.where(np.isfinite(objective), objective, np.inf), read_sum)


def _products(columns: Floats, wells: Wells, weight: Floats) -> Floats:
    """Sums of products of the columns (T, columns, W), each less its mean, (columns, columns, W)."""
    mean = sum_rows(columns) / np.maximum(wells.read_count, 1.0)
    centred = np.where(wells.used[:, None, :], (columns - mean) * weight, 0.0)
    each = [np.ascontiguousarray(centred[:, k]) for k in range(centred.shape[1])]
    gram = np.empty((len(each), len(each), weight.size))
    for k, left in enumerate(each):
        for m in range(k + 1):
            gram[k, m] = gram[m, k] = sum_rows(left * each[m])
    return gram


def residuals(wells: Wells, constants: Constants, state: State) -> tuple[Floats, Floats]:
    """What the curves of a state leave [umol/L], each well's mean taken out, and their conversion [1].

    Both have shape (T, W) and are 0 where a read is not used.
    """
    left = _columns(wells, constants, state)[:, -1]
    mean = sum_rows(left) / np.maximum(wells.read_count, 1.0)
    at = progress(*_arguments(wells, constants, state))
    conversion = np.where(wells.used, -np.expm1(-at.extent), 0.0)
    return np.where(wells.used, left - mean, 0.0), conversion


def _arguments(wells: Wells, constants: Constants, state: State) -> tuple[Floats, ...]:
    """Arguments of the integrated law, well by well."""
    shared = {name: np.exp(state.log_constants[k])[wells.series] for k, name in enumerate(constants.names)}
    none = np.zeros(wells.series.size)
    return (
        wells.substrate_um * np.exp(state.dispensed[1]),
        shared["vmax"] * np.exp(state.dispensed[0]),
        shared["km"],
        wells.time_s + shared.get("dead_time", none),
        shared.get("kp", none + np.inf),
        shared.get("loss", none),
    )


def _columns(wells: Wells, constants: Constants, state: State) -> Floats:
    """Derivatives and residual, 0 where a read is not used, shape (T, columns, W)."""
    arguments = _arguments(wells, constants, state)
    substrate, vmax, km, time, kp, loss = arguments
    at = progress(*arguments)
    by = slopes(at, *arguments)
    drift = state.drift[wells.drift] * wells.time_s
    columns = [by.vmax * vmax, by.substrate * substrate, wells.time_s]
    dead_time = time[0] - wells.time_s[0]
    of = {"km": by.km * km, "loss": by.loss * loss, "dead_time": at.rate_um_per_s * dead_time}
    if "kp" in constants.names:
        of["kp"] = by.kp * kp
    columns += [of[name] for name in constants.names[1:]]
    columns.append(wells.product_um - at.product_um - drift)
    return np.where(wells.used[:, None, :], np.stack(columns, axis=1), 0.0)


def _scaled(wells: Wells, state: State, noise: Noise) -> tuple[Floats, Floats]:
    """Dispensing and drift over their standard deviations; 0 where these are 0."""
    return (
        _over(state.dispensed, noise.cv[:, wells.series]),
        _over(state.drift, wells.drift_error),
    )


def _over(value: Floats, scale: Floats) -> Floats:
    return np.where(scale > 0, value / np.where(scale > 0, scale, 1.0), 0.0)


@dataclass(frozen=True)
class Reduced:
    """Normal equations of the shared constants, all else eliminated.

    Attributes
    ----------
    information, pull
        Matrix (K, constants, constants) and right-hand side (K, constants).
    well_information, well_pull
        What each well adds before drifts are eliminated, shape (W, constants, constants), (W, constants).
    log_determinant, square
        For the likelihood: logarithm of the determinant of what was eliminated, and the sum of squares that
        no constant has explained yet, shape (K,).
    used_up
        Reads' degrees of freedom that the eliminated errors use up, shape (K,).
    own_gain
        What the eliminated errors would gain if the constants stayed, shape (K,).
    """

    information: Floats
    pull: Floats
    well_information: Floats
    well_pull: Floats
    log_determinant: Floats
    square: Floats
    used_up: Floats
    own_gain: Floats
    _back: _Back

    def step(self, shared: Floats) -> tuple[Floats, Floats]:
        """Change of dispensing (2, W) and drift (drifts,) that goes with a change (constants, K) of the
        shared."""
        return self._back.step(shared)


@dataclass(frozen=True)
class _Back:
    wells: Wells
    cv: Floats
    inner: Floats
    mixed: Floats
    start: Floats
    drift_pivot: Floats
    drift_shared: Floats
    drift_pull: Floats

    def step(self, shared: Floats) -> tuple[Floats, Floats]:
        of_drift = shared[:, self.wells.drift_series]
        drift = (self.drift_pull - _dot(self.drift_shared, of_drift)) / self.drift_pivot
        outer = np.vstack([drift[self.wells.drift][None], shared[:, self.wells.series]])
        # M^-1 (Z'r - z - Z'Y [drift; shared])
        left = [self.start[i] - _dot(self.mixed[i], outer) for i in range(2)]
        change = np.stack([self.inner[i, 0] * left[0] + self.inner[i, 1] * left[1] for i in range(2)])
        return change * self.cv, drift * self.wells.drift_error


def _dot(first: Floats, second: Floats) -> Floats:
    """Sum of products over the first axis, row after row."""
    return sum_rows(first * second)


def reduce(
    wells: Wells, constants: Constants, gram: Floats, noise: Noise, state: State | None = None
) -> Reduced:
    """Eliminate dispensing and drift from the linearised curves.

    Parameters
    ----------
    wells, constants
        What is fitted.
    gram
        As `Linear.gram`.
    noise
        Its scatter.
    state
        Where the errors stand; None where the residuals hold them in full (`restored`).

    Returns
    -------
    Reduced
    """
    count = constants.count
    cv = noise.cv[:, wells.series]
    drift_error = wells.drift_error[wells.drift]
    if state is None:
        scaled, drift_scaled = np.zeros_like(cv), np.zeros_like(wells.drift_error)
    else:
        scaled, drift_scaled = _scaled(wells, state, noise)
    outer = [DRIFT, *constants.columns]
    scale = np.vstack([drift_error[None], np.ones((count, drift_error.size))])
    m00 = 1.0 + cv[0] ** 2 * gram[0, 0]
    m01 = cv[0] * cv[1] * gram[0, 1]
    m11 = 1.0 + cv[1] ** 2 * gram[1, 1]
    determinant = m00 * m11 - m01 * m01
    inner = np.array([[m11, -m01], [-m01, m00]]) / determinant
    mixed = np.stack([cv[i] * gram[i, outer] * scale for i in range(2)])
    start = np.stack([cv[i] * gram[i, -1] - scaled[i] for i in range(2)])
    solved = np.stack([inner[i, 0] * mixed[0] + inner[i, 1] * mixed[1] for i in range(2)])
    width = count + 1
    matrix = np.empty((width, width, drift_error.size))
    right = np.empty((width, drift_error.size))
    for i in range(width):
        right[i] = gram[outer[i], -1] * scale[i] - solved[0, i] * start[0] - solved[1, i] * start[1]
        for j in range(width):
            own = gram[outer[i], outer[j]] * scale[i] * scale[j]
            matrix[i, j] = own - solved[0, i] * mixed[0, j] - solved[1, i] * mixed[1, j]
    reach = start[0] * (inner[0, 0] * start[0] + inner[0, 1] * start[1])
    reach = reach + start[1] * (inner[1, 0] * start[0] + inner[1, 1] * start[1])

    pivot = 1.0 + wells.by_drift(matrix[0, 0])
    drift_shared = wells.by_drift(matrix[0, 1:])
    drift_pull = wells.by_drift(right[0]) - drift_scaled
    information = wells.by_series(matrix[1:, 1:]) - wells.drifts_by_series(
        drift_shared[:, None] * drift_shared[None, :] / pivot
    )
    pull = wells.by_series(right[1:]) - wells.drifts_by_series(drift_shared * drift_pull / pivot)
    own_gain = wells.by_series(reach) + wells.drifts_by_series(drift_pull**2 / pivot)
    used_up = wells.by_series(2.0 - (inner[0, 0] + inner[1, 1])) + wells.drifts_by_series(1.0 - 1.0 / pivot)
    return Reduced(
        information=np.moveaxis(information, 2, 0),
        pull=pull.T,
        well_information=np.moveaxis(matrix[1:, 1:], 2, 0),
        well_pull=right[1:].T,
        log_determinant=wells.by_series(np.log(determinant)) + wells.drifts_by_series(np.log(pivot)),
        square=wells.by_series(gram[-1, -1]) - own_gain,
        used_up=used_up,
        own_gain=own_gain,
        _back=_Back(wells, cv, inner, mixed, start, pivot, drift_shared, drift_pull),
    )


def restored(wells: Wells, gram: Floats, state: State) -> Floats:
    """Gram matrix with the residual as it would be before dispensing and drift were taken out of it."""
    total = gram.copy()
    parts = [*state.dispensed, state.drift[wells.drift]]
    column = gram[:, -1] + sum(part * gram[:, i] for i, part in enumerate(parts))
    square = gram[-1, -1].copy()
    for i, part in enumerate(parts):
        square += 2.0 * part * gram[i, -1]
        for j, other in enumerate(parts):
            square += part * other * gram[i, j]
    total[:, -1] = column
    total[-1, :] = column
    total[-1, -1] = square
    return total
