"""Selwyn's test: whether curves with different enzyme superimpose when drawn against enzyme times time.

Knows neither wells nor laws: it is given curves at one substrate level, and how much enzyme each got.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import exprel
from scipy.stats import norm
from scipy.stats import t as t_distribution

Floats = NDArray[np.float64]
Integers = NDArray[np.integer[Any]]

FEWEST_READS = 5
"""Reads of a curve within the common range below which its bend says nothing."""

_DEGREE = 3
_ROUNDS = 25
_HALVINGS = 12
_SETTLED = 1e-8
_STEP = 1e-4
_WORST_CONDITION = 1e13
_FEWEST_CLUSTERS = 3
_LARGEST_LOSS = 20.0
"""Largest loss tried: exp(-20) is nothing left at the last read."""
_TELLING_SLOPE = 5.0


@dataclass(frozen=True)
class Inactivation:
    """First-order loss of activity that makes curves of different enzyme superimpose.

    Attributes
    ----------
    loss_per_s
        Rate constant of the loss [1/s]; negative where activity rises.
    standard_error
        Its standard error [1/s], the larger of those from the reads' noise and from the wells' differences.
    degrees_of_freedom
        That it carries.
    p_value
        Chance of as large a loss in an enzyme that loses nothing, one-sided.
    curve_count, read_count
        Curves and reads that took part.
    """

    loss_per_s: float
    standard_error: float
    degrees_of_freedom: float
    p_value: float
    curve_count: int
    read_count: int


def selwyn_test(
    curve: Integers, time_s: Floats, product_um: Floats, enzyme: Floats, most_product_um: float
) -> Inactivation | None:
    """Whether product depends on enzyme and time through their product alone.

    If nothing but the reaction changes, dP/dt = E f(P), so P is one function of E t for all enzyme levels; if
    the enzyme dies, curves with little enzyme, which need long for the same E t, fall behind (Selwyn 1965,
    Biochim. Biophys. Acta 105, 193-195, doi:10.1016/S0926-6593(65)80190-4, the DOI from memory). Here

        P = F(y),  y = s (1 - exp(-k t)) / k,  F(y) = y + b2 y^2 + b3 y^3

    is fitted to all curves at once by least squares, with b2, b3 and k common to all, and a start and an
    initial rate s of each curve's own, since enzyme dispensed to 2 % would else part the curves: what is
    tested is whether they bend alike at equal E t, not whether rates are in proportion to enzyme. k = 0 is
    Selwyn's superposition. Reads past the E t that two enzyme levels reach, or past `most_product_um`, say
    nothing about it and are left out.

    The standard error is the larger of two: from the noise of the reads, and, with more than three curves,
    from how the curves differ among themselves (clustered, as Liang and Zeger 1986,
    doi:10.1093/biomet/73.1.13), which wandering baselines need.

    Parameters
    ----------
    curve
        Curve of each read, counted from 0, shape (reads,).
    time_s
        Since the reaction began [s], shape (reads,). A start that is late by a little is harmless where it is
        alike in all curves and short against the read.
    product_um
        Product up to a constant of each curve, blank subtracted [umol/L], shape (reads,); NaN is left out.
    enzyme
        Enzyme of each curve, in any one unit, shape (curves,).
    most_product_um
        Product after which a curve is not followed, such as 40 % of the substrate [umol/L]: F is a cubic.

    Returns
    -------
    Inactivation or None
        None with fewer than two enzyme levels that have `FEWEST_READS` reads in the common range and a rate
        that stands out of the noise.
    """
    kept = np.isfinite(product_um) & np.isfinite(time_s)
    kept &= _in_common_range(curve, time_s, product_um, enzyme, most_product_um, kept)
    curve, time_s, product_um = curve[kept], time_s[kept], product_um[kept]
    while True:
        slope, slope_t = _slopes(curve, time_s, product_um, enzyme.size)
        telling = (np.bincount(curve, minlength=enzyme.size) >= FEWEST_READS) & (slope_t > _TELLING_SLOPE)
        if np.unique(enzyme[telling]).size < 2:
            return None
        if telling[curve].all():
            break
        kept = telling[curve]
        curve, time_s, product_um = curve[kept], time_s[kept], product_um[kept]
    _, curve = np.unique(curve, return_inverse=True)
    return _fit(curve, time_s, product_um, slope[telling])


def combine(tests: list[Inactivation]) -> Inactivation:
    """One loss from tests at several substrate levels, each weighted by one over its error squared.

    Parameters
    ----------
    tests
        At least one.
    """
    if len(tests) == 1:
        return tests[0]
    weight = np.array([1.0 / each.standard_error**2 for each in tests])
    loss = float(np.sum(weight * [each.loss_per_s for each in tests]) / np.sum(weight))
    error = float(1.0 / np.sqrt(np.sum(weight)))
    # Each test's own tail, not its error alone: few degrees of freedom must not pass for many.
    scores = np.array([norm.isf(np.clip(each.p_value, 1e-300, 1.0 - 1e-16)) for each in tests])
    p_value = float(norm.sf(np.sum(np.sqrt(weight) * scores) / np.sqrt(np.sum(weight))))
    return Inactivation(
        loss,
        error,
        sum(each.degrees_of_freedom for each in tests),
        p_value,
        sum(each.curve_count for each in tests),
        sum(each.read_count for each in tests),
    )


def _in_common_range(
    curve: Integers,
    time_s: Floats,
    product_um: Floats,
    enzyme: Floats,
    most_product_um: float,
    known: NDArray[np.bool_],
) -> NDArray[np.bool_]:
    """Reads up to the E t that a second enzyme level also reaches, before too much product is made."""
    inside = np.zeros(curve.size, dtype=bool)
    reach = np.zeros(enzyme.size)
    for number in range(enzyme.size):
        rows = np.flatnonzero(known & (curve == number))
        rows = rows[np.argsort(time_s[rows], kind="stable")]
        if rows.size < FEWEST_READS:
            continue
        made = product_um[rows] - product_um[rows[0]]
        past = np.flatnonzero(made > most_product_um)
        rows = rows[: past[0]] if past.size else rows
        inside[rows] = True
        reach[number] = enzyme[number] * time_s[rows[-1]] if rows.size else 0.0
    by_level = np.sort([reach[enzyme == level].max() for level in np.unique(enzyme)])
    common = by_level[-2] if by_level.size > 1 else 0.0
    return inside & (enzyme[curve] * time_s <= common * (1.0 + 1e-9))


def _slopes(curve: Integers, time_s: Floats, product_um: Floats, count: int) -> tuple[Floats, Floats]:
    """Mean slope of each curve, and its t value."""
    members = np.bincount(curve, minlength=count)
    with np.errstate(all="ignore"):
        t = time_s - (np.bincount(curve, time_s, count) / members)[curve]
        p = product_um - (np.bincount(curve, product_um, count) / members)[curve]
        spread = np.bincount(curve, t**2, count)
        slope = np.bincount(curve, t * p, count) / spread
        variance = np.bincount(curve, (p - slope[curve] * t) ** 2, count) / (members - 2.0)
        t_value = slope / np.sqrt(variance / spread)
    return np.where(members > 2, slope, np.nan), np.where(np.isnan(t_value), 0.0, t_value)


def _fit(curve: Integers, time_s: Floats, product_um: Floats, slope: Floats) -> Inactivation | None:
    """Gauss-Newton in initial rates, shape of F and loss; the start of each curve is taken out."""
    count = slope.size
    longest, highest = float(time_s.max()), float(np.max(slope[curve] * time_s))
    one_hot = np.equal(curve[:, None], np.arange(count)).astype(float)
    t, p = time_s / longest, product_um / highest
    rate = slope * longest / highest
    shape, loss = np.zeros(_DEGREE - 1), 0.0
    powers = np.arange(2, _DEGREE + 1)
    if curve.size <= 2 * count + _DEGREE + 1:
        return None
    members = np.bincount(curve).astype(np.float64)

    def centred(values: Floats) -> Floats:
        """Less the mean of each curve: its start is its own."""
        less: Floats = values - ((one_hot.T @ values).T / members).T[curve]
        return less

    def residuals(rate: Floats, shape: Floats, loss: float) -> Floats:
        y = rate[curve] * t * exprel(-loss * t)
        return centred(p - y - (shape * y[:, None] ** powers).sum(axis=1))

    def derivatives(rate: Floats, shape: Floats, loss: float) -> Floats:
        """Of the product by initial rates, shape and loss."""
        effective = t * exprel(-loss * t)
        y = rate[curve] * effective
        of_y = 1.0 + (powers * shape * y[:, None] ** (powers - 1)).sum(axis=1)
        by_loss = t * (exprel(-(loss + _STEP) * t) - exprel(-(loss - _STEP) * t)) / (2.0 * _STEP)
        columns = (one_hot * (of_y * effective)[:, None], y[:, None] ** powers, of_y * rate[curve] * by_loss)
        return centred(np.column_stack(columns))

    left = residuals(rate, shape, loss)
    best = float(left @ left)
    for _ in range(_ROUNDS):
        slopes = derivatives(rate, shape, loss)
        step = _solved(slopes.T @ slopes, slopes.T @ left)
        if step is None:
            return None
        for halving in range(_HALVINGS):
            part = step * 0.5**halving
            moved = (rate + part[:count], shape + part[count:-1], loss + float(part[-1]))
            if abs(moved[2]) <= _LARGEST_LOSS and float(np.sum(residuals(*moved) ** 2)) <= best:
                break
        else:
            break
        rate, shape, loss = moved
        left, before = residuals(*moved), best
        best = float(left @ left)
        if before - best <= _SETTLED * before:
            break
    slopes = derivatives(rate, shape, loss)
    degrees = float(curve.size - count - slopes.shape[1])
    of_loss = _solved(slopes.T @ slopes, np.eye(slopes.shape[1])[-1])
    if of_loss is None or best <= 0.0:
        return None
    error = float(np.sqrt(best / degrees * of_loss[-1]))
    if count > _FEWEST_CLUSTERS:
        by_curve = np.bincount(curve, (slopes @ of_loss) * left)
        clustered = float(np.sqrt(np.sum(by_curve**2) * count / (count - 1.0)))
        if clustered > error:
            error, degrees = clustered, count - 2.0
    return Inactivation(
        loss / longest,
        error / longest,
        degrees,
        float(t_distribution.sf(loss / error, degrees)),
        count,
        curve.size,
    )


def _solved(matrix: Floats, right: Floats) -> Floats | None:
    """Solution of a symmetric system, None where it has none to speak of."""
    scale = np.sqrt(np.diag(matrix))
    if np.any(scale <= 0.0) or not np.all(np.isfinite(matrix)):
        return None
    scaled = matrix / np.outer(scale, scale)
    if np.linalg.cond(scaled) > _WORST_CONDITION:
        return None
    solution: Floats = np.linalg.solve(scaled, right / scale) / scale
    return solution
