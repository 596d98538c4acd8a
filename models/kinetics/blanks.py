"""What a plate's blanks say about a well: their mean curve, smoothed, and its slope over any window.

A blank's drift is smooth while its reads are noisy, so the mean curve of the matching blanks is described by
the lowest polynomial that fits it; only where none does (a wandering baseline) is it taken read by read. This
module knows no enzyme.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import f as f_distribution

from models.kinetics.windows import windows_from

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]
Flags = NDArray[np.bool_]

_HIGHEST_DEGREE = 5
_FEWEST_READS = 4
_DOUBT = 1e-3
"""A higher degree, or reading point by point, is taken only where chance has less than this probability."""


@dataclass(frozen=True)
class BlankCurve:
    """The smoothed mean curve of some blanks.

    Attributes
    ----------
    value_um
        The curve at every read of the plate [umol/L], shape (reads,); NaN where it is not known.
    basis
        Orthonormal basis whose coefficients have variance `read_variance`, shape (reads, functions).
    read_variance
        Variance of one read of the mean curve about the smooth one [umol2/L2].
    slope_excess
        Variance between the blanks' slopes beyond their noise, over the number of blanks [umol2/L2/s2].
    """

    value_um: Floats
    basis: Floats
    read_variance: float
    slope_excess: float


@dataclass(frozen=True)
class MatchedBlanks:
    """The blank curve of each well.

    Attributes
    ----------
    source
        same_level, plate or none, shape (wells,).
    value_um
        Blank curve at each read of each well [umol/L], shape (reads, wells); 0 without blanks.
    curve
        Index of each well's curve in `curves`, -1 for none, shape (wells,).
    curves
        The distinct curves.
    """

    source: NDArray[np.object_]
    value_um: Floats
    curve: Integers
    curves: tuple[BlankCurve, ...]

    def slope(self, time_s: Floats, used: Flags) -> tuple[Floats, Floats]:
        """Least-squares slope of each well's blank curve over the reads used, and its standard error.

        Parameters
        ----------
        time_s
            Shape (reads, wells).
        used
            Reads of each well's window, shape (reads, wells).

        Returns
        -------
        tuple of arrays
            Slope and standard error [umol/L/s], shape (wells,); NaN without blanks.
        """
        weights = _slope_weights(time_s, used)
        with np.errstate(invalid="ignore"):
            slope = np.sum(np.where(used, weights * self.value_um, 0.0), axis=0)
        error = np.full(slope.shape, np.nan)
        for number, curve in enumerate(self.curves):
            wells = np.flatnonzero(self.curve == number)
            # Column by column: a matrix product would round differently in another batch.
            share = sum(np.sum(weights[:, wells] * column[:, None], axis=0) ** 2 for column in curve.basis.T)
            error[wells] = np.sqrt(curve.read_variance * share + curve.slope_excess)
        return np.where(self.curve >= 0, slope, np.nan), error


def _slope_weights(time_s: Floats, used: Flags) -> Floats:
    """Weights that turn values into a least-squares slope, shape (reads, wells)."""
    with np.errstate(all="ignore"):
        count = np.sum(used, axis=0)
        mean = np.sum(np.where(used, time_s, 0.0), axis=0) / count
        centred = np.where(used, time_s - mean, 0.0)
        weights: Floats = centred / np.sum(centred * centred, axis=0)
    return weights


def match_blanks(
    time_s: Floats, product_um: Floats, is_blank: Flags, takes_blank: Flags, substrate_um: Floats
) -> MatchedBlanks:
    """Find each well's blanks on its plate and smooth their mean curve.

    Parameters
    ----------
    time_s, product_um
        Curves of one plate read, shape (reads, wells).
    is_blank
        Wells that are blanks, shape (wells,).
    takes_blank
        Wells from which a blank is subtracted, shape (wells,).
    substrate_um
        Nominal substrate [umol/L], shape (wells,); NaN where a blank's is not known.

    Returns
    -------
    MatchedBlanks
        Blanks of the same level where there are any, else all the plate's blanks.
    """
    wells = time_s.shape[1]
    readable = np.count_nonzero(np.isfinite(product_um), axis=0) >= _FEWEST_READS
    blanks = np.flatnonzero(is_blank & readable)
    source = np.full(wells, "none", dtype=object)
    which = np.full(wells, -1)
    value = np.zeros_like(product_um)
    curves: list[BlankCurve] = []
    if blanks.size == 0:
        return MatchedBlanks(source, value, which, ())
    level_um = substrate_um[blanks]
    level_blanks = {float(s): blanks[level_um == s] for s in np.unique(level_um[np.isfinite(level_um)])}
    alike = [*level_blanks.values(), blanks[~np.isfinite(level_um)]]
    excess = _slope_excess(time_s, product_um, [group for group in alike if group.size])

    def assign(members: Integers, receivers: Integers, name: str) -> None:
        if receivers.size:
            curve = _smooth_mean(time_s[:, members], product_um[:, members], excess / members.size)
            source[receivers] = name
            which[receivers] = len(curves)
            value[:, receivers] = _at_times(time_s[:, members], curve.value_um, time_s[:, receivers])
            curves.append(curve)

    matched = np.zeros(wells, dtype=bool)
    for level, members in level_blanks.items():
        receivers = np.flatnonzero(takes_blank & (substrate_um == level))
        matched[receivers] = True
        assign(members, receivers, "same_level")
    assign(blanks, np.flatnonzero(takes_blank & ~matched), "plate")
    return MatchedBlanks(source, value, which, tuple(curves))


def _at_times(blank_time_s: Floats, curve_um: Floats, time_s: Floats) -> Floats:
    """The curve at each well's own read times, which differ from the blanks' where wells are read in turn."""
    shared = _mean_rows(blank_time_s)
    known = np.isfinite(shared) & np.isfinite(curve_um)
    moved = np.isfinite(time_s) & (np.abs(time_s - shared[:, None]) > 1e-9 * np.nanmax(shared))
    values = np.broadcast_to(curve_um[:, None], time_s.shape).copy()
    for well in np.flatnonzero(moved.any(axis=0)):
        values[:, well] = np.interp(time_s[:, well], shared[known], curve_um[known])
    return values


def _mean_rows(values: Floats) -> Floats:
    """Mean over the second axis of what is known, in an order of its own; NaN where nothing is."""
    ordered = np.sort(values, axis=1)
    known = np.isfinite(ordered)
    with np.errstate(all="ignore"):
        mean: Floats = np.sum(np.where(known, ordered, 0.0), axis=1) / np.sum(known, axis=1)
    return mean


def _slope_excess(time_s: Floats, product_um: Floats, groups: list[Integers]) -> float:
    """Variance between the slopes of blanks that should be alike, beyond what their reads' noise explains."""
    last = np.full(time_s.shape[1], time_s.shape[0] - 1)
    fits = windows_from(time_s, product_um, np.zeros(time_s.shape[1], dtype=np.intp)).pick(last)
    degrees = sum(group.size - 1 for group in groups)
    if degrees < 1:
        return 0.0
    scatter = sum(float(np.sum((np.sort(fits.slope[g]) - _mean(fits.slope[g])) ** 2)) for g in groups)
    # Read to read noise, not the residual about a line: a shared curvature is not a difference between
    # blanks.
    members = np.concatenate(groups)
    noise = _mean(
        np.array([_read_noise(product_um[:, well]) for well in members]) * fits.slope_factor[members]
    )
    excess = scatter / degrees - noise
    return max(float(excess), 0.0)


def _mean(values: Floats) -> float:
    return float(np.sum(np.sort(values)) / values.size)


def _read_noise(values: Floats) -> float:
    """Variance of one read from second differences (Gasser, Sroka and Jennen-Steinmetz 1986,
    doi:10.1093/biomet/73.3.625), which no smooth curve disturbs."""
    known = values[np.isfinite(values)]
    return float(np.mean(np.diff(known, 2) ** 2) / 6.0)


def _smooth_mean(time_s: Floats, product_um: Floats, slope_excess: float) -> BlankCurve:
    """Mean curve of some blanks, smoothed."""
    shared = _mean_rows(time_s)
    # Each blank's own offset is taken out before averaging, so that a missing read leaves no step.
    complete = np.all(np.isfinite(product_um), axis=1)
    reference = complete if complete.any() else np.ones(complete.size, dtype=bool)
    offset = np.array([_mean(c[np.isfinite(c)]) for c in product_um[reference].T])
    mean = _mean_rows(product_um - offset) + _mean(offset)
    known = np.isfinite(mean) & np.isfinite(shared)
    basis, coefficients, variance = _lowest_polynomial(shared, mean, known)
    value = np.full(mean.shape, np.nan)
    value[known] = sum(c * column[known] for c, column in zip(coefficients, basis.T, strict=True))
    noise = _read_noise(mean[known])
    left_over = (mean - value)[known]
    if _wanders(left_over, noise):
        value, basis, variance = np.where(known, mean, np.nan), np.eye(mean.size), noise
    return BlankCurve(value, np.where(np.isfinite(basis), basis, 0.0), variance, slope_excess)


def _lowest_polynomial(time_s: Floats, mean: Floats, known: Flags) -> tuple[Floats, list[float], float]:
    """Orthonormal polynomials up to the lowest degree that leaves nothing two more would explain."""
    t = time_s[known]
    x = (t - t.mean()) / max(float(np.ptp(t)), 1e-300) * 2.0
    highest = int(min(_HIGHEST_DEGREE, (t.size - 2) // 2))
    columns: list[Floats] = []
    for degree in range(highest + 1):
        column = x**degree
        for _ in range(2):
            for other in columns:
                column = column - np.sum(other * column) * other
        columns.append(column / np.sqrt(np.sum(column * column)))
    coefficients = [float(np.sum(column * mean[known])) for column in columns]
    left = [
        float(
            np.sum(
                (mean[known] - sum(c * q for c, q in zip(coefficients[: d + 1], columns, strict=False))) ** 2
            )
        )
        for d in range(highest + 1)
    ]
    degree = min(1, highest)
    for candidate in range(degree + 1, highest + 1):
        freedom = t.size - candidate - 1
        gained = left[degree] - left[candidate]
        if freedom < 1 or gained <= 0:
            continue
        ratio = gained / (candidate - degree) / max(left[candidate] / freedom, 1e-300)
        if f_distribution.sf(ratio, candidate - degree, freedom) < _DOUBT:
            degree = candidate
    variance = left[degree] / max(t.size - degree - 1, 1)
    basis = np.full((mean.size, degree + 1), np.nan)
    basis[known] = np.array(columns[: degree + 1]).T
    return basis, coefficients[: degree + 1], variance


def _wanders(left_over: Floats, noise: float) -> bool:
    """Whether what a polynomial leaves is still smooth: its scatter well beyond the read to read noise."""
    if left_over.size < 12 or noise <= 0.0:
        return False
    ratio = float(np.mean(left_over**2)) / noise
    return bool(ratio > 1.0 + 5.0 * np.sqrt(3.0 / left_over.size))
