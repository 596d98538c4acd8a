"""Fit the whole curves of a batch of series: start, weights, optimum, intervals, and each well's influence.

Arrays in, arrays out: what is refused or trusted is said elsewhere.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.kinetics.progress.intervals import profile_ends
from models.kinetics.progress.normal_equations import (
    Constants,
    Noise,
    Reduced,
    State,
    reduce,
    residuals,
    restored,
)
from models.kinetics.progress.scatter import LARGEST_CV, dispensing_cv, read_noise
from models.kinetics.progress.search import Found, Limits, minimise
from models.kinetics.progress.wells import Wells

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]
Flags = NDArray[np.bool_]

_SCATTER_STEPS = (240, 20, 20, 20)
"""Most steps towards the optimum before each estimate of the scatter: the optimum hardly moves with it."""
_SCATTER_SETTLED = 1e-6
_LAST_STEPS = 240
"""Where the law does not hold, the way to the optimum is long; elsewhere a few steps do."""
_FEWEST_SPARE_WELLS = 3
"""Wells beyond the constants from which dispensing errors can be estimated."""
_GUESSED_CV = 0.02
"""Start of the search for the dispensing CVs: 2 %, common practice, no source."""
_START_READS, _START_ROUNDS = 12, 2
_START_KM = np.geomspace(0.01, 100.0, 9)
"""Start values of Km over the geometric mean of the substrate levels."""


@dataclass(frozen=True)
class SeriesFits:
    """Fits of K series; arrays (constants, K) and (K,).

    Attributes
    ----------
    log_constants, log_covariance
        Logarithms of the constants and their covariance, shape (K, constants, constants); NaN where the
        curves do not tell the constants apart.
    low, high
        Ends of the 95 % intervals of the constants themselves; NaN where open.
    converged, full_rank
        Whether the search came to rest, and whether the curves tell the constants apart.
    at_limit
        Whether a constant lies at its limit, shape (constants, K).
    km_is_high
        Whether km lies above the middle of its limits.
    scatter_known
        Whether the dispensing errors were estimated or given.
    scatter_at_limit
        Whether an estimated dispensing error lies at its upper limit.
    noise
        Scatter in force.
    objective
        Weighted sum of squares.
    degrees
        Degrees of freedom of the intervals.
    read_count, well_count
        Reads and wells used.
    conversion
        Highest conversion that a read reached by the fit.
    correlation_z
        Serial correlation of neighbouring residuals over its standard error.
    influence
        Change of the logarithm of each constant when a well is left out, to first order, shape
        (constants, W).
    leverage
        Share of what a well pulls at the constants that its own part in the fit has taken up [1], shape (W,).
    """

    log_constants: Floats
    log_covariance: Floats
    low: Floats
    high: Floats
    converged: Flags
    full_rank: Flags
    at_limit: Flags
    km_is_high: Flags
    scatter_known: Flags
    scatter_at_limit: Flags
    noise: Noise
    objective: Floats
    degrees: Floats
    read_count: Floats
    well_count: Floats
    conversion: Floats
    correlation_z: Floats
    influence: Floats
    leverage: Floats


def fit_series(wells: Wells, constants: Constants, given_cv: tuple[float, float] | None) -> SeriesFits:
    """Fit every series.

    Parameters
    ----------
    wells
        Curves of K series, each with more reads than constants and offsets.
    constants
        Which constants are fitted.
    given_cv
        CV of enzyme and of substrate as dispensed [1]; None estimates them where there are wells enough and
        leaves them out where not.

    Returns
    -------
    SeriesFits
    """
    limits = _limits(wells, constants)
    well_count = wells.by_series(np.ones(wells.substrate_um.size))
    spare = well_count - constants.count
    estimated = np.full(spare.shape, given_cv is None) & (spare >= _FEWEST_SPARE_WELLS)
    # Below this, rounding and the last digit of a signal are all that is left.
    floor = np.maximum(1e-9 * _highest(wells, wells.product_um), 1e-300)
    read_sd = np.maximum(read_noise(wells), floor)
    state = _start(wells, constants, Noise(read_sd, np.full((2, read_sd.size), _GUESSED_CV)), limits)
    given = np.array(given_cv or (0.0, 0.0))[:, None]
    noise = Noise(read_sd, np.where(estimated, _GUESSED_CV, given))
    state = State(state.log_constants, np.zeros_like(state.dispensed), np.zeros_like(state.drift))
    for number, steps in enumerate(_SCATTER_STEPS):
        found = minimise(wells, constants, state, noise, limits, rounds=steps, settled=_SCATTER_SETTLED)
        state = found.state
        noise = _scatter(wells, constants, found, noise, estimated, floor, first=number == 0)
    found = minimise(wells, constants, state, noise, limits, rounds=_LAST_STEPS)
    state = found.state
    reduced = reduce(wells, constants, found.linear.gram, noise, state)
    residual, conversion = residuals(wells, constants, state)
    degrees = np.where(estimated, spare, np.maximum(_read_degrees(wells, constants, reduced), 1.0))
    log_covariance, full_rank = _covariance(reduced)
    low, high = profile_ends(wells, constants, found, noise, limits, degrees, log_covariance)
    margin = 1e-9
    influence, leverage = _influence(wells, reduced)
    return SeriesFits(
        log_constants=state.log_constants,
        log_covariance=log_covariance,
        low=low,
        high=high,
        converged=found.converged,
        full_rank=full_rank,
        at_limit=(state.log_constants <= limits.lower + margin)
        | (state.log_constants >= limits.upper - margin),
        km_is_high=state.log_constants[1] > 0.5 * (limits.lower[1] + limits.upper[1]),
        scatter_known=estimated | (given_cv is not None),
        scatter_at_limit=estimated & np.any(noise.cv >= 0.999 * LARGEST_CV, axis=0),
        noise=noise,
        objective=found.linear.objective,
        degrees=degrees,
        read_count=wells.by_series(wells.read_count),
        well_count=well_count,
        conversion=_highest(wells, conversion),
        correlation_z=_serial_correlation(wells, residual),
        influence=influence,
        leverage=leverage,
    )


def _limits(wells: Wells, constants: Constants) -> Limits:
    """Wide limits from the levels and times of each series; an optimum there is no estimate."""
    lowest, highest = np.full(wells.series_count, np.inf), np.zeros(wells.series_count)
    np.minimum.at(lowest, wells.series, wells.substrate_um)
    np.maximum.at(highest, wells.series, wells.substrate_um)
    longest = np.zeros(wells.series_count)
    np.maximum.at(longest, wells.series, np.max(wells.time_s, axis=0))
    shortest = np.full(wells.series_count, np.inf)
    steps = np.where(wells.used[1:], np.diff(wells.time_s, axis=0), np.inf)
    np.minimum.at(shortest, wells.series, np.min(np.where(steps > 0, steps, np.inf), axis=0))
    ranges = {
        # Km far above the levels is first order with the rate constant vmax/km: vmax must follow it.
        "vmax": (1e-6 * lowest / longest, 1e6 * highest / shortest),
        "km": (1e-4 * lowest, 1e4 * highest),
        "kp": (1e-4 * lowest, 1e4 * highest),
        "loss": (1e-4 / longest, 10.0 / shortest),
        "dead_time": (1e-4 * shortest, longest),
    }
    ends = np.log(np.array([ranges[name] for name in constants.names]))
    return Limits(ends[:, 0], ends[:, 1])


def _start(wells: Wells, constants: Constants, noise: Noise, limits: Limits) -> State:
    """The best of several Km, each with the Vmax that suits it, on a few reads of each well."""
    thin = wells.thinned(_START_READS)
    count = thin.series_count
    pair = Constants(("vmax", "km"))
    middle = np.exp(thin.by_series(np.log(thin.substrate_um)) / thin.by_series(np.ones(thin.series.size)))
    nothing = State(np.zeros((2, count)), np.zeros((2, thin.series.size)), np.zeros(thin.drift_series.size))
    pair_limits = Limits(limits.lower[:2], limits.upper[:2])
    best, best_at = np.full(count, np.inf), np.zeros((2, count))
    for factor in _START_KM:
        km = factor * middle
        log = np.clip(np.log(np.stack([_vmax_for(thin, km), km])), pair_limits.lower, pair_limits.upper)
        start = State(log, nothing.dispensed, nothing.drift)
        found = minimise(thin, pair, start, noise, pair_limits, held=1, rounds=_START_ROUNDS)
        better = found.linear.objective < best
        best = np.where(better, found.linear.objective, best)
        best_at = np.where(better, found.state.log_constants, best_at)
    # A hundred times what the reads can show at least.
    others = {name: row + np.log(1e2) for name, row in zip(constants.names, limits.lower, strict=True)}
    others["kp"] = np.log(10.0 * middle)
    log_constants = np.vstack([best_at, *(others[name][None] for name in constants.names[2:])])
    return State(
        np.clip(log_constants, limits.lower, limits.upper),
        np.zeros((2, wells.series.size)),
        np.zeros(wells.drift_series.size),
    )


def _vmax_for(wells: Wells, km: Floats) -> Floats:
    """Vmax from Vmax t = P + Km ln(S0/S), by least squares over all reads of a series, shape (K,)."""
    converted = np.clip(wells.product_um / wells.substrate_um, 0.0, 0.95)
    reach = wells.substrate_um * converted - km[wells.series] * np.log1p(-converted)
    over = wells.by_series(np.cumsum(wells.time_s * reach, axis=0)[-1])
    under = wells.by_series(np.cumsum(wells.time_s**2, axis=0)[-1])
    return np.maximum(over, 1e-300) / np.maximum(under, 1e-300)


def _read_degrees(wells: Wells, constants: Constants, reduced: Reduced) -> Floats:
    """Reads less what offsets, constants and the wells' own errors use up, shape (K,)."""
    wells_and_reads = wells.by_series(wells.read_count - 1.0)
    degrees: Floats = wells_and_reads - reduced.used_up - constants.count
    return degrees


def _scatter(
    wells: Wells,
    constants: Constants,
    found: Found,
    noise: Noise,
    estimated: Flags,
    floor: Floats,
    *,
    first: bool,
) -> Noise:
    gram = found.linear.gram
    reduced = reduce(wells, constants, gram, noise, found.state)
    degrees = np.maximum(_read_degrees(wells, constants, reduced), 1.0)
    ratio = np.sqrt(found.linear.read_sum / degrees)
    read_sd = np.maximum(noise.read_sd * np.where(np.isfinite(ratio), ratio, 1.0), floor)
    # The Gram matrix is over the old read noise.
    gram = restored(wells, gram, found.state) * ((noise.read_sd / read_sd) ** 2)[wells.series]
    renewed = Noise(read_sd, noise.cv)
    return Noise(read_sd, dispensing_cv(wells, constants, gram, renewed, estimated, first=first))


def _covariance(reduced: Reduced) -> tuple[Floats, Flags]:
    diagonal = np.einsum("kii->ki", reduced.information)
    with np.errstate(all="ignore"):
        scale = 1.0 / np.sqrt(diagonal)
        scale = np.where(np.isfinite(scale), scale, 0.0)
    matrix = reduced.information * scale[:, :, None] * scale[:, None, :]
    eigenvalues = np.linalg.eigvalsh(matrix)
    full_rank = eigenvalues[:, 0] > 1e-9
    safe = np.where(full_rank[:, None, None], matrix, np.eye(matrix.shape[1]))
    covariance = np.linalg.inv(safe) * scale[:, :, None] * scale[:, None, :]
    return np.where(full_rank[:, None, None], covariance, np.nan), full_rank


def _influence(wells: Wells, reduced: Reduced) -> tuple[Floats, Floats]:
    """One step towards the fit without each well (Cook and Weisberg 1982, section 5), (constants, W), and the
    share of its own pull that a well's part in the fit has taken away already, (W,)."""
    diagonal = np.einsum("kii->ki", reduced.information)
    scale = 1.0 / np.sqrt(np.maximum(diagonal, 1e-300))[wells.series]
    pair = scale[:, :, None] * scale[:, None, :]
    whole = reduced.information[wells.series] * pair + 1e-12 * np.eye(scale.shape[1])
    right = (reduced.well_pull * scale)[:, :, None]
    solved = np.linalg.solve(whole - reduced.well_information * pair, right)
    influence: Floats = -(solved[:, :, 0] * scale).T
    with np.errstate(all="ignore"):
        kept = np.sum(right * np.linalg.solve(whole, right), axis=(1, 2)) / np.sum(
            right * solved, axis=(1, 2)
        )
    return influence, np.where(np.isfinite(kept), np.clip(1.0 - kept, 0.0, 1.0), np.nan)


def _highest(wells: Wells, values: Floats) -> Floats:
    """Largest size of the values (T, W) in each series, shape (K,)."""
    highest = np.zeros(wells.series_count)
    np.maximum.at(highest, wells.series, np.max(np.abs(values), axis=0, initial=0.0))
    return highest


def _serial_correlation(wells: Wells, residual: Floats) -> Floats:
    """Von Neumann's ratio pooled over the wells, as a normal deviate; positive where neighbours agree.

    von Neumann (1941), doi:10.1214/aoms/1177731677. For n reads and q smooth functions taken out of them the
    lag-one products have mean about -q/n and variance about 1/n.
    """
    both = wells.used[1:] & wells.used[:-1]
    product = np.cumsum(np.where(both, residual[1:] * residual[:-1], 0.0), axis=0)[-1]
    square = np.cumsum(residual**2, axis=0)[-1]
    count = wells.by_series(wells.read_count)
    with np.errstate(all="ignore"):
        correlation = wells.by_series(product) / wells.by_series(square)
        z = correlation * np.sqrt(count)
    return np.where(np.isfinite(z), z, 0.0)
