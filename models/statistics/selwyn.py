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
_POWERS = np.arange(2, _DEGREE + 1)
_SPEEDS = (4.0, 10.0, 25.0, 60.0)
"""Rate constants of a lag or burst to start from, over the longest time."""
_SLOWEST, _FASTEST = 3.0, 200.0
"""A slower transient is a loss or a gain, a faster one is over before the second read."""
_LAG, _BURST = -0.9, 0.5
"""Sizes of a transient to start from: nearly no activity at first, or half as much again."""
_PLAIN_TRANSIENT = 20.0
"""F of a transient, with one degree of freedom, below which there is none: p of about 1e-5."""
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

    A lag of a coupling enzyme, or a burst, also parts curves at equal E t: where the residuals plainly ask
    for it, an activity 1 + A exp(-q t) common to all curves is fitted beside the loss. Transients slower than
    a third of the read cannot be told from a loss or a gain.

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
    """Fit all curves without a transient, and again with one where the residuals ask for it."""
    longest, highest = float(time_s.max()), float(np.max(slope[curve] * time_s))
    curves = _Curves(
        curve,
        np.equal(curve[:, None], np.arange(slope.size)).astype(float),
        np.bincount(curve).astype(np.float64),
        time_s / longest,
        product_um / highest,
    )
    if curve.size <= 2 * slope.size + _DEGREE + 3:
        return None
    start = np.concatenate([slope * longest / highest, np.zeros(_DEGREE - 1), [0.0]])
    fitted = _least_squares(curves, start)
    if fitted is None:
        return None
    if _asks_for_transient(curves, fitted):
        fits = [
            each
            for speed in _SPEEDS
            for size in (_LAG, _BURST)
            if (each := _least_squares(curves, np.append(fitted, [size, np.log(speed)]))) is not None
        ]
        fitted = min([fitted, *fits], key=lambda each: float(np.sum(curves.residuals(each) ** 2)))
    return _result(curves, fitted, longest)


@dataclass(frozen=True, eq=False)
class _Curves:
    """Reads of all curves, time and product over their largest values; `one_hot` is (reads, curves)."""

    curve: Integers
    one_hot: Floats
    members: Floats
    time: Floats
    product: Floats

    @property
    def count(self) -> int:
        return self.members.size

    def centred(self, values: Floats) -> Floats:
        """Less the mean of each curve: its start is its own."""
        less: Floats = values - ((self.one_hot.T @ values).T / self.members).T[self.curve]
        return less

    def parts(self, constants: Floats) -> tuple[Floats, Floats, float]:
        """Initial rates, shape of F, and loss; a transient's size and log speed may follow."""
        place = self.count + _DEGREE - 1
        return constants[: self.count], constants[self.count : place], float(constants[place])

    def residuals(self, constants: Floats) -> Floats:
        """What the constants leave of the product, less each curve's start."""
        rate, shape, _ = self.parts(constants)
        y = rate[self.curve] * self.effective(constants)
        return self.centred(self.product - y - (shape * y[:, None] ** _POWERS).sum(axis=1))

    def derivatives(self, constants: Floats) -> Floats:
        """Of the product by all constants, shape (reads, constants)."""
        rate, shape, _ = self.parts(constants)
        effective = self.effective(constants)
        y = rate[self.curve] * effective
        by_y = 1.0 + (_POWERS * shape * y[:, None] ** (_POWERS - 1)).sum(axis=1)
        columns = [self.one_hot * (by_y * effective)[:, None], y[:, None] ** _POWERS]
        for place in range(self.count + _DEGREE - 1, constants.size):
            step = np.zeros(constants.size)
            step[place] = _STEP
            slope = (self.effective(constants + step) - self.effective(constants - step)) / (2.0 * _STEP)
            columns.append((by_y * rate[self.curve] * slope)[:, None])
        return self.centred(np.hstack(columns))

    def effective(self, constants: Floats) -> Floats:
        """Integral of the activity exp(-k t) (1 + A exp(-q t)), time over the longest."""
        _, _, loss = self.parts(constants)
        steady: Floats = self.time * exprel(-loss * self.time)
        if constants.size == self.count + _DEGREE:
            return steady
        size, log_speed = constants[-2:]
        with_transient: Floats = steady + size * self.time * exprel(-(loss + np.exp(log_speed)) * self.time)
        return with_transient

    def allowed(self, constants: Floats) -> bool:
        """Whether the loss, and the speed of a transient, are within their limits."""
        fine = abs(self.parts(constants)[2]) <= _LARGEST_LOSS
        if constants.size > self.count + _DEGREE:
            fine = fine and np.log(_SLOWEST) <= constants[-1] <= np.log(_FASTEST)
        return bool(fine)


def _least_squares(curves: _Curves, start: Floats) -> Floats | None:
    """Gauss-Newton with halved steps; None where the curves do not tell the constants apart."""
    constants, left = start, curves.residuals(start)
    best = float(left @ left)
    for _ in range(_ROUNDS):
        slopes = curves.derivatives(constants)
        step = _solved(slopes.T @ slopes, slopes.T @ left)
        if step is None:
            return None
        for halving in range(_HALVINGS):
            moved = constants + step * 0.5**halving
            if curves.allowed(moved):
                moved_left = curves.residuals(moved)
                if float(moved_left @ moved_left) <= best:
                    break
        else:
            break
        constants, left, before = moved, moved_left, best
        best = float(left @ left)
        if before - best <= _SETTLED * before:
            break
    return constants


def _asks_for_transient(curves: _Curves, constants: Floats) -> bool:
    """Whether a transient of some speed would plainly explain what is left, by the score test."""
    slopes, left = curves.derivatives(constants), curves.residuals(constants)
    total = float(left @ left)
    for speed in _SPEEDS:
        column = curves.derivatives(np.append(constants, [0.0, np.log(speed)]))[:, -2]
        explained = _solved(slopes.T @ slopes, slopes.T @ column)
        if explained is None:
            return False
        own = column - slopes @ explained
        length = float(own @ own)
        if length <= 1e-12 * float(column @ column):
            continue
        gained = float(own @ left) ** 2 / length
        if gained * (left.size - curves.count - constants.size - 1) > _PLAIN_TRANSIENT * (total - gained):
            return True
    return False


def _result(curves: _Curves, constants: Floats, longest: float) -> Inactivation | None:
    slopes, left = curves.derivatives(constants), curves.residuals(constants)
    place = curves.count + _DEGREE - 1
    degrees = float(left.size - curves.count - constants.size)
    of_loss = _solved(slopes.T @ slopes, np.eye(constants.size)[place])
    total = float(left @ left)
    if of_loss is None or total <= 0.0:
        return None
    loss, error = float(constants[place]), float(np.sqrt(total / degrees * of_loss[place]))
    if curves.count > _FEWEST_CLUSTERS:
        by_curve = np.bincount(curves.curve, (slopes @ of_loss) * left)
        clustered = float(np.sqrt(np.sum(by_curve**2) * curves.count / (curves.count - 1.0)))
        if clustered > error:
            error, degrees = clustered, curves.count - 2.0
    return Inactivation(
        loss / longest,
        error / longest,
        degrees,
        float(t_distribution.sf(loss / error, degrees)),
        curves.count,
        left.size,
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
