"""Whether a lot is equivalent to the reference lot: two one-sided tests on the logarithm of their ratio.

Plate reads that hold both are compared within themselves, so that what a plate does to both cancels. Knows
values, standard errors and plate numbers only; margins come from the site.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.stats import t as t_distribution

from models.statistics.lots import LARGEST_RELATIVE_ERROR, LotValue, combine_plate_reads

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]

EquivalenceDecision = Literal["equivalent", "not equivalent", "undecided"]
Design = Literal["paired", "independent"]

ALPHA = 0.05
FEWEST_PAIRS = 2
"""Shared plate reads from which on a lot and the reference are compared within plates."""


@dataclass(frozen=True)
class LogDifference:
    """Difference of two means on the logarithmic scale.

    Attributes
    ----------
    difference, standard_error
        ln(first / second) and its standard error.
    degrees
        Degrees of freedom of the standard error.
    """

    difference: float
    standard_error: float
    degrees: float


@dataclass(frozen=True)
class OneSidedTests:
    """Two one-sided tests; arrays of one shape.

    Attributes
    ----------
    p_below, p_above
        p value of the test against the lower margin (the ratio is not above it) and against the upper one.
    p_value
        The larger of both: equivalence is shown where it is at most alpha.
    low, high
        Interval of the difference at level 1 - 2 alpha; within the margins exactly where the p value is below
        alpha.
    """

    p_below: Floats
    p_above: Floats
    p_value: Floats
    low: Floats
    high: Floats


@dataclass(frozen=True)
class Equivalence:
    """A lot against the reference lot.

    Attributes
    ----------
    ratio, low, high
        Lot over reference and its interval at level 1 - 2 alpha; NaN where not known.
    level
        1 - 2 alpha.
    log_standard_error, degrees
        Standard error of the ratio's logarithm and its degrees of freedom; NaN where not known.
    p_value
        Of the two one-sided tests, the larger; NaN where not known.
    decision
        `equivalent` where the interval lies within the margins, `not equivalent` where it lies outside, else
        `undecided`.
    design
        Whether plate reads were paired.
    lot_plate_read_count, reference_plate_read_count
        Plate reads the comparison rests on.
    left_out_count
        Plate reads that a paired comparison has no use for: they hold one of both only, or no usable ratio.
    reason
        Why nothing can be said, or None.
    """

    ratio: float
    low: float
    high: float
    level: float
    log_standard_error: float
    degrees: float
    p_value: float
    decision: EquivalenceDecision
    design: Design
    lot_plate_read_count: int
    reference_plate_read_count: int
    left_out_count: int
    reason: str | None = None


def compare_with_reference(
    lot: tuple[Floats, Floats, Integers],
    reference: tuple[Floats, Floats, Integers],
    margins: tuple[float, float],
    alpha: float = ALPHA,
) -> Equivalence:
    """Compare a lot's constant with the reference lot's.

    Where at least `FEWEST_PAIRS` plate reads hold both, only those are used and the comparison is paired:
    ratios within plate reads, combined with random effects, on pairs - 1 degrees of freedom. Otherwise either
    lot is combined over its own plate reads and the difference has Welch and Satterthwaite's degrees; a plate
    read that both share then counts as two, which errs on the side of `undecided`.

    Parameters
    ----------
    lot, reference
        Estimates, their standard errors and the plate read of each, shape (estimates,); plate numbers are
        common to both. Standard errors must be without what lot and reference share, such as the error of the
        assay's calibration: it cancels in the ratio. An estimate that is not positive, has no standard error
        or one above its own value is left out.
    margins
        Lowest and highest ratio that count as equivalent, below and above 1.
    alpha
        Level of each one-sided test.

    Returns
    -------
    Equivalence
        Undecided, with the reason and no interval, where one plate read stands alone on a side: it says
        nothing of the spread between plates.

    Raises
    ------
    ValueError
        If margins do not enclose 1 or are not positive, or alpha is not between 0 and 0.5.

    References
    ----------
    Two one-sided tests: Schuirmann 1987 (doi:10.1007/BF01068419). Degrees: Welch 1947
    (doi:10.1093/biomet/34.1-2.28), Satterthwaite 1946 (doi:10.2307/3002019).
    """
    log_margins = _log_margins(margins)
    lot, reference = _usable(*lot), _usable(*reference)
    lot_plates, reference_plates = np.unique(lot[2]), np.unique(reference[2])
    shared = np.intersect1d(lot_plates, reference_plates)
    paired = shared.size >= FEWEST_PAIRS
    if paired:
        difference = paired_log_ratio(lot, reference)
        used = int(difference.degrees) + 1 if np.isfinite(difference.degrees) else shared.size
        counts = used, used
        left_out = int(np.union1d(lot_plates, reference_plates).size) - used
    else:
        difference = independent_log_ratio(lot, reference)
        counts, left_out = (lot_plates.size, reference_plates.size), 0
    design: Design = "paired" if paired else "independent"
    if not np.isfinite(difference.standard_error):
        ratio = float(np.exp(difference.difference))
        unknown = (np.nan,) * 2
        return Equivalence(
            ratio,
            *unknown,
            1.0 - 2.0 * alpha,
            *unknown,
            np.nan,
            "undecided",
            design,
            *counts,
            left_out,
            _why_unknown(*counts),
        )
    tests = two_one_sided_tests(
        difference.difference, difference.standard_error, difference.degrees, log_margins, alpha
    )
    low, high = float(tests.low), float(tests.high)
    decision: EquivalenceDecision = "undecided"
    if float(tests.p_value) <= alpha:
        decision = "equivalent"
    elif high < log_margins[0] or low > log_margins[1]:
        decision = "not equivalent"
    return Equivalence(
        float(np.exp(difference.difference)),
        float(np.exp(low)),
        float(np.exp(high)),
        1.0 - 2.0 * alpha,
        difference.standard_error,
        difference.degrees,
        float(tests.p_value),
        decision,
        design,
        *counts,
        left_out,
    )


def two_one_sided_tests(
    difference: ArrayLike,
    standard_error: ArrayLike,
    degrees: ArrayLike,
    margins: tuple[float, float],
    alpha: float = ALPHA,
) -> OneSidedTests:
    """Test a difference against either margin, each by a one-sided t test (Schuirmann 1987).

        t_L = (d - margin_L) / se,  t_U = (d - margin_U) / se

    Parameters
    ----------
    difference, standard_error, degrees
        Of the difference, on whatever scale, any shape. The classic slip is to give the margins as ratios and
        the difference as a logarithm: both stand on one scale.
    margins
        Lower and upper margin on the scale of the difference.
    alpha
        Level of each test.

    Raises
    ------
    ValueError
        If the lower margin is not below the upper one, a standard error or degrees are not positive, or alpha
        is not between 0 and 0.5.
    """
    if not margins[0] < margins[1]:
        raise ValueError("the lower margin lies below the upper one")
    if not 0.0 < alpha < 0.5:
        raise ValueError("alpha lies between 0 and 0.5")
    d, se, nu = np.broadcast_arrays(
        *(np.asarray(each, dtype=np.float64) for each in (difference, standard_error, degrees))
    )
    if np.any(se <= 0) or np.any(nu <= 0):
        raise ValueError("standard errors and degrees of freedom are above 0")
    p_below: Floats = np.asarray(t_distribution.sf((d - margins[0]) / se, nu))
    p_above: Floats = np.asarray(t_distribution.cdf((d - margins[1]) / se, nu))
    reach = t_distribution.isf(alpha, nu) * se
    return OneSidedTests(p_below, p_above, np.maximum(p_below, p_above), d - reach, d + reach)


def welch(
    means: tuple[float, float], standard_errors: tuple[float, float], degrees: tuple[float, float]
) -> LogDifference:
    """Difference of two independent means with Welch and Satterthwaite's degrees of freedom.

        nu = (s1^2 + s2^2)^2 / (s1^4 / nu1 + s2^4 / nu2)

    with s the standard errors of the means (Welch 1947, doi:10.1093/biomet/34.1-2.28).

    Raises
    ------
    ValueError
        If a standard error is negative, both are 0, or degrees are not positive.
    """
    variances = np.square(standard_errors)
    total = float(variances.sum())
    if min(standard_errors) < 0 or total == 0 or min(degrees) <= 0:
        raise ValueError("standard errors and degrees of freedom are above 0")
    nu = total**2 / float(np.sum(variances**2 / np.asarray(degrees)))
    return LogDifference(means[0] - means[1], float(np.sqrt(total)), nu)


def paired_log_ratio(
    lot: tuple[Floats, Floats, Integers], reference: tuple[Floats, Floats, Integers]
) -> LogDifference:
    """Logarithm of the ratio over the plate reads that hold both, each compared within itself.

    Estimates of one plate read are pooled first; the ratios are combined as `combine_plate_reads` does it.

    Returns
    -------
    LogDifference
        On pairs - 1 degrees of freedom; standard error and degrees NaN with one pair, all NaN with none.
    """
    shared = np.intersect1d(lot[2], reference[2])
    if shared.size == 0:
        return LogDifference(np.nan, np.nan, np.nan)
    ratio = np.empty(shared.size)
    relative_error = np.empty(shared.size)
    for place, plate in enumerate(shared):
        first, second = _on_plate(lot, plate), _on_plate(reference, plate)
        ratio[place] = first.value / second.value
        relative_error[place] = np.hypot(
            first.standard_error / first.value, second.standard_error / second.value
        )
    return _of_lot(combine_plate_reads(ratio, ratio * relative_error, shared))


def independent_log_ratio(
    lot: tuple[Floats, Floats, Integers], reference: tuple[Floats, Floats, Integers]
) -> LogDifference:
    """Logarithm of the ratio of two lots, each combined over its own plate reads, with Welch's degrees.

    Returns
    -------
    LogDifference
        Standard error and degrees NaN where either has one plate read only.
    """
    first, second = (
        _of_lot(combine_plate_reads(*each)) if each[0].size else LogDifference(np.nan, np.nan, np.nan)
        for each in (lot, reference)
    )
    if not (np.isfinite(first.standard_error) and np.isfinite(second.standard_error)):
        return LogDifference(first.difference - second.difference, np.nan, np.nan)
    return welch(
        (first.difference, second.difference),
        (first.standard_error, second.standard_error),
        (first.degrees, second.degrees),
    )


def _of_lot(value: LotValue) -> LogDifference:
    logarithm = float(np.log(value.value))
    if value.within_plate_only or value.plate_read_count < 2:
        return LogDifference(logarithm, np.nan, np.nan)
    return LogDifference(logarithm, value.standard_error / value.value, float(value.plate_read_count - 1))


def _on_plate(lot: tuple[Floats, Floats, Integers], plate: int) -> LotValue:
    mine = lot[2] == plate
    return combine_plate_reads(lot[0][mine], lot[1][mine], lot[2][mine])


def _usable(
    values: Floats, standard_errors: Floats, plate_index: Integers
) -> tuple[Floats, Floats, Integers]:
    with np.errstate(invalid="ignore"):
        kept = (
            np.isfinite(values)
            & (values > 0)
            & (standard_errors > 0)
            & (standard_errors <= LARGEST_RELATIVE_ERROR * values)
        )
    return values[kept], standard_errors[kept], plate_index[kept]


def _log_margins(margins: tuple[float, float]) -> tuple[float, float]:
    low, high = margins
    if not 0.0 < low < 1.0 < high:
        raise ValueError("margins are ratios, one below and one above 1")
    return float(np.log(low)), float(np.log(high))


def _why_unknown(lot_plate_reads: int, reference_plate_reads: int) -> str:
    for name, count in (("lot", lot_plate_reads), ("reference lot", reference_plate_reads)):
        if count == 0:
            return f"the {name} has no usable estimate"
    for name, count in (("lot", lot_plate_reads), ("reference lot", reference_plate_reads)):
        if count == 1:
            return f"the {name} has one plate read only, which does not show the spread between plate reads"
    return "fewer than two plate reads hold the ratio: in the others its standard error exceeds it"
