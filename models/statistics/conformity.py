"""Whether a value with its uncertainty meets its specification limits, and the risks of saying so.

Pure arithmetic on values, standard uncertainties and limits in one unit; knows neither lots nor constants.
Source throughout: JCGM 106:2012, Evaluation of measurement data - The role of measurement uncertainty in
conformity assessment (doi:10.59161/JCGM106-2012); its clauses are named where they are used.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from itertools import pairwise
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.integrate import quad
from scipy.stats import norm
from scipy.stats import t as t_distribution

Floats = NDArray[np.float64]
Texts = NDArray[np.str_]

Decision = Literal["conforms", "does not conform", "undecided"]
CONFORMS: Decision = "conforms"
DOES_NOT_CONFORM: Decision = "does not conform"
UNDECIDED: Decision = "undecided"

COVERAGE_FACTOR = 2.0
"""k of the expanded uncertainty U = k u that a guard band is a share of (JCGM 106, 8.3.2)."""
# Beyond this many standard deviations a normal density holds less than 1e-30.
_REACH = 12.0


@dataclass(frozen=True)
class Acceptance:
    """Where a measured value must lie for a decision, in the unit of the limits.

    Attributes
    ----------
    lower, upper
        Acceptance limits: within them, ends included, it conforms; NaN where there is no limit.
    outer_lower, outer_upper
        Rejection limits: beyond them it does not conform; NaN where there is no limit.
    guard_band
        w, the distance between a specification limit and its acceptance limit.
    empty
        Whether the guard bands leave no value that could conform: U is too large for these limits.
    """

    lower: Floats
    upper: Floats
    outer_lower: Floats
    outer_upper: Floats
    guard_band: Floats
    empty: NDArray[np.bool_]


@dataclass(frozen=True)
class Risks:
    """Global risks of a decision rule over a production (JCGM 106, 9.5).

    Attributes
    ----------
    consumer
        Chance that an item does not conform and is accepted.
    producer
        Chance that an item conforms and is not accepted.
    """

    consumer: float
    producer: float


def conformity_probability(
    value: ArrayLike,
    standard_uncertainty: ArrayLike,
    lower: ArrayLike = np.nan,
    upper: ArrayLike = np.nan,
    degrees: ArrayLike = np.inf,
) -> Floats:
    r"""Probability that the true value lies within the specification limits.

        p_c = F((T_U - y) / u) - F((T_L - y) / u)

    (JCGM 106, 7.2 and 7.4), F the standard normal distribution, or Student's t where u was found with few
    degrees of freedom (JCGM 101:2008, 6.4.9; doi:10.59161/JCGM101-2008): y + u t then describes what is known
    of the quantity. No knowledge beside the measurement is used.

    A constant combined as a logarithm is judged on that scale: pass the logarithms of value and limits, and
    the relative standard uncertainty (`log_scale`).

    Parameters
    ----------
    value, standard_uncertainty
        Measured values and their standard uncertainties, any shape; NaN where not known.
    lower, upper
        Specification limits, same unit; NaN for a side without a limit.
    degrees
        Degrees of freedom of the standard uncertainty; infinite for a normal distribution.

    Returns
    -------
    array
        Probability, broadcast shape; NaN where value, uncertainty or degrees are not known. With a standard
        uncertainty of 0 it is 1 or 0.

    Raises
    ------
    ValueError
        If there is neither limit, a lower limit lies above its upper one, an uncertainty is negative, or
        degrees are not positive.
    """
    y, u, low, high, nu = _checked(value, standard_uncertainty, lower, upper, degrees)
    with np.errstate(divide="ignore", invalid="ignore"):
        to_low = np.where(np.isnan(low), -np.inf, _standardised(low - y, u))
        to_high = np.where(np.isnan(high), np.inf, _standardised(high - y, u))
    # Differences of two numbers near 1 lose all digits: the upper tail is taken from its own side.
    flip = to_low > 0
    first, last = np.where(flip, -to_high, to_low), np.where(flip, -to_low, to_high)
    probability: Floats = _cumulative(last, nu) - _cumulative(first, nu)
    exact = u == 0
    inside = ~((y < low) | (y > high))
    probability = np.where(exact, inside.astype(np.float64), np.clip(probability, 0.0, 1.0))
    return np.where(np.isfinite(y) & np.isfinite(u) & (nu > 0), probability, np.nan)


def log_scale(
    value: ArrayLike, standard_uncertainty: ArrayLike, lower: ArrayLike = np.nan, upper: ArrayLike = np.nan
) -> tuple[Floats, Floats, Floats, Floats]:
    """Value, uncertainty and limits of a positive quantity as logarithms (GUM, JCGM 100:2008, 5.1.6).

    Returns
    -------
    tuple of arrays
        ln y, u / y, ln T_L and ln T_U, each NaN where it is not known. A lower limit of 0 is no limit to a
        positive quantity and becomes NaN.

    Raises
    ------
    ValueError
        If a value or an upper limit is not positive, or a lower limit is negative.
    """
    y, u, low, high = (
        np.asarray(each, dtype=np.float64) for each in (value, standard_uncertainty, lower, upper)
    )
    if np.any(y <= 0) or np.any(high <= 0) or np.any(low < 0):
        raise ValueError("logarithms need values and limits above 0")
    with np.errstate(divide="ignore"):
        of_low = np.log(low)
    return np.log(y), u / y, np.where(np.isneginf(of_low), np.nan, of_low), np.log(high)


def acceptance(
    standard_uncertainty: ArrayLike,
    lower: ArrayLike = np.nan,
    upper: ArrayLike = np.nan,
    guard_band_factor: float = 1.0,
    coverage_factor: float = COVERAGE_FACTOR,
) -> Acceptance:
    """Acceptance and rejection limits from a guard band w = r U with U = k u (JCGM 106, 8.3.2 and 8.3.3).

    Parameters
    ----------
    standard_uncertainty
        u, any shape, in the unit of the limits.
    lower, upper
        Specification limits; NaN for a side without one.
    guard_band_factor
        r: 0 accepts and rejects at the limits themselves (simple acceptance), 1 asks for a whole U.
    coverage_factor
        k.

    Raises
    ------
    ValueError
        As `conformity_probability`, or if r is negative or k not positive.
    """
    if guard_band_factor < 0 or coverage_factor <= 0:
        raise ValueError("a guard band factor is 0 or more, and a coverage factor above 0")
    _, u, low, high, _ = _checked(0.0, standard_uncertainty, lower, upper, np.inf)
    band = guard_band_factor * coverage_factor * u
    inner = low + band, high - band
    with np.errstate(invalid="ignore"):
        empty = inner[0] > inner[1]
    return Acceptance(*inner, low - band, high + band, band, empty)


def decide_by_guard_band(
    value: ArrayLike,
    standard_uncertainty: ArrayLike,
    lower: ArrayLike = np.nan,
    upper: ArrayLike = np.nan,
    guard_band_factor: float = 1.0,
    coverage_factor: float = COVERAGE_FACTOR,
) -> Texts:
    """Decision with a guard band on either side of each limit (JCGM 106, 8.3.2 and 8.3.3).

    Guarded acceptance and guarded rejection together: it conforms within the acceptance limits, does not
    conform beyond the rejection limits, and is undecided between them. With r = 0 nothing is undecided.

    Parameters
    ----------
    value, standard_uncertainty, lower, upper, guard_band_factor, coverage_factor
        As for `acceptance`; a value or uncertainty that is not known leaves the decision undecided.

    Returns
    -------
    array of text
        `conforms`, `does not conform` or `undecided`, broadcast shape.
    """
    y = np.asarray(value, dtype=np.float64)
    zones = acceptance(standard_uncertainty, lower, upper, guard_band_factor, coverage_factor)
    known = np.isfinite(y) & np.isfinite(zones.guard_band)
    inside = known & ~(y < zones.lower) & ~(y > zones.upper)
    outside = known & ((y < zones.outer_lower) | (y > zones.outer_upper))
    return _words(inside, outside)


def decide_by_probability(probability: ArrayLike, minimum: float) -> Texts:
    """Decision by conformity probability (JCGM 106, 8.3.1: acceptance where p_c is at least what is asked).

    Parameters
    ----------
    probability
        p_c, any shape; NaN leaves the decision undecided.
    minimum
        Least p_c that conforms, from 0.5 up. It does not conform where 1 - p_c is as much.

    Raises
    ------
    ValueError
        If the minimum lies outside 0.5 to 1: below 0.5 one value would both conform and not.
    """
    if not 0.5 <= minimum < 1.0:
        raise ValueError("a minimum conformity probability lies from 0.5 to below 1")
    chance = np.asarray(probability, dtype=np.float64)
    inside = chance >= minimum
    return _words(inside, ~inside & (1.0 - chance >= minimum))


def specific_risk(probability: ArrayLike, decision: ArrayLike) -> Floats:
    """Chance that a decision on one item is wrong (JCGM 106, 9.3.2).

    The consumer's where it was said to conform, R_C* = 1 - p_c; the producer's where it was said not to,
    R_P* = p_c; NaN where nothing was decided.
    """
    chance = np.asarray(probability, dtype=np.float64)
    words = np.asarray(decision)
    return np.select([words == CONFORMS, words == DOES_NOT_CONFORM], [1.0 - chance, chance], default=np.nan)


def global_risks(
    prior_mean: float,
    prior_sd: float,
    measurement_sd: float,
    specification: tuple[float, float],
    accepted: tuple[float, float],
) -> Risks:
    """Consumer's and producer's risk of a rule over a normal production measured with a normal error.

    R_C = int over eta outside the specification of g0(eta) P(accepted | eta), and R_P = int over eta inside
    of g0(eta) (1 - P(accepted | eta)) (JCGM 106, 9.5.2, equations 17 to 20), by quadrature.

    Parameters
    ----------
    prior_mean, prior_sd
        Of the items produced, before any is measured.
    measurement_sd
        Standard uncertainty of the measurement.
    specification, accepted
        Lower and upper specification and acceptance limits, all in one unit; NaN for a side without one.

    Raises
    ------
    ValueError
        If a standard deviation is not positive or a lower limit lies above its upper one.
    """
    if not (prior_sd > 0 and measurement_sd > 0):
        raise ValueError("standard deviations are above 0")
    t_low, t_high = _open_ends(specification)
    a_low, a_high = _open_ends(accepted)

    def density(z: float) -> float:
        return float(norm.pdf(z))

    def chance_accepted(z: float) -> float:
        eta = prior_mean + prior_sd * z
        first, last = (a_low - eta) / measurement_sd, (a_high - eta) / measurement_sd
        if first > 0:
            first, last = -last, -first
        return float(norm.cdf(last) - norm.cdf(first))

    def consumer(z: float) -> float:
        return density(z) * chance_accepted(z)

    def producer(z: float) -> float:
        return density(z) * (1.0 - chance_accepted(z))

    edges = [(t_low - prior_mean) / prior_sd, (t_high - prior_mean) / prior_sd]
    low, high = (float(np.clip(edge, -_REACH, _REACH)) for edge in edges)
    steps = [
        (end + shift * measurement_sd - prior_mean) / prior_sd
        for end in (a_low, a_high)
        if np.isfinite(end)
        for shift in (-6.0, 0.0, 6.0)
    ]
    outside = _integral(consumer, -_REACH, low, steps) + _integral(consumer, high, _REACH, steps)
    return Risks(outside, _integral(producer, low, high, steps))


def _integral(function: Callable[[float], float], low: float, high: float, steps: list[float]) -> float:
    """Quadrature in pieces that end where the integrand has its steep places."""
    ends = [low, *sorted(step for step in steps if low < step < high), high]
    pieces = (
        quad(function, first, last, epsabs=1e-13, epsrel=1e-12)[0]
        for first, last in pairwise(ends)
        if last > first
    )
    return float(sum(pieces))


def _open_ends(limits: tuple[float, float]) -> tuple[float, float]:
    low, high = (-np.inf if np.isnan(limits[0]) else limits[0], np.inf if np.isnan(limits[1]) else limits[1])
    if low > high:
        raise ValueError("a lower limit lies above its upper limit")
    return low, high


def _checked(
    value: ArrayLike, standard_uncertainty: ArrayLike, lower: ArrayLike, upper: ArrayLike, degrees: ArrayLike
) -> tuple[Floats, Floats, Floats, Floats, Floats]:
    given = (value, standard_uncertainty, lower, upper, degrees)
    y, u, low, high, nu = np.broadcast_arrays(*(np.asarray(each, dtype=np.float64) for each in given))
    if np.any(np.isnan(low) & np.isnan(high)):
        raise ValueError("a specification has a lower limit, an upper limit, or both")
    if np.any(low > high):
        raise ValueError("a lower limit lies above its upper limit")
    if np.any(u < 0):
        raise ValueError("a standard uncertainty is never negative")
    if np.any(nu <= 0):
        raise ValueError("degrees of freedom are above 0")
    return y, u, low, high, nu


def _standardised(distance: Floats, u: Floats) -> Floats:
    return np.where(u > 0, distance / np.where(u > 0, u, 1.0), np.nan)


def _cumulative(z: Floats, degrees: Floats) -> Floats:
    normal = np.isposinf(degrees)
    few = np.where(normal | np.isnan(degrees), 1.0, degrees)
    return np.where(normal, norm.cdf(z), t_distribution.cdf(z, few))


def _words(inside: NDArray[np.bool_], outside: NDArray[np.bool_]) -> Texts:
    return np.select([inside, outside], [CONFORMS, DOES_NOT_CONFORM], default=UNDECIDED)
