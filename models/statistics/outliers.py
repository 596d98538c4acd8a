"""Outliers: Grubbs' test, Rosner's generalised ESD, and studentised residuals with Bonferroni's correction.

This module knows neither rates nor wells. A test says that a value is unlikely, never why: what becomes of it
is for others to decide.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import t as t_distribution

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]


@dataclass(frozen=True)
class Grubbs:
    """The value farthest from the mean of a sample.

    Attributes
    ----------
    position
        Where it stands in the values given.
    statistic
        Its distance from the mean in standard deviations of all values.
    p_value
        Chance of one so far out, on either side, in a normal sample; an upper bound that is exact where
        below about 0.1.
    """

    position: int
    statistic: float
    p_value: float


@dataclass(frozen=True, eq=False)
class GeneralisedEsd:
    """Steps of the generalised ESD procedure, one entry a step.

    Attributes
    ----------
    positions
        Value taken out at each step, as its place in the values given.
    statistics, critical
        Distance from the mean in standard deviations of what was left, and its critical value.
    outlier_count
        The last step whose statistic is above its critical value: the values taken out up to it are outliers,
        those of earlier steps too that stay below theirs, masked by the others.
    """

    positions: Integers
    statistics: Floats
    critical: Floats
    outlier_count: int

    @property
    def outliers(self) -> Integers:
        """Positions of the outliers, farthest first."""
        return self.positions[: self.outlier_count]


def grubbs(values: Floats) -> Grubbs:
    """Grubbs' test for one outlier on either side.

    G = max |x - mean| / s, and t^2 = n (n - 2) G^2 / ((n - 1)^2 - n G^2) with n - 2 degrees of freedom
    (Grubbs 1969, doi:10.1080/00401706.1969.10490657). Two outliers on one side mask each other: see
    `generalised_esd`.

    Parameters
    ----------
    values
        Shape (n,), n at least 3, all known.

    Returns
    -------
    Grubbs

    Raises
    ------
    ValueError
        If there are fewer than 3 values, or one that is not known.
    """
    count = _checked(values)
    position, statistic = _farthest(values)
    excess = (count - 1.0) ** 2 - count * statistic**2
    if excess <= 0.0:
        return Grubbs(position, statistic, 0.0)
    t_value = np.sqrt(count * (count - 2.0) * statistic**2 / excess)
    p_value = min(1.0, 2.0 * count * float(t_distribution.sf(t_value, count - 2)))
    return Grubbs(position, statistic, p_value)


def critical_distance(count: Floats | int, level: float, *, sides: int = 2) -> Floats:
    """Distance from the mean [standard deviations] that the farthest of a normal sample exceeds by chance.

    (n - 1) t / sqrt(n (n - 2 + t^2)) with t the upper level / (sides n) point of Student's distribution with
    n - 2 degrees of freedom (Grubbs 1969, as above).

    Parameters
    ----------
    count
        Values in the sample, at least 3.
    level
        Chance of exceeding it.
    sides
        2 where the farthest may lie on either side, 1 where only one side is looked at.
    """
    n = np.asarray(count, dtype=np.float64)
    t_value = t_distribution.isf(level / (sides * n), n - 2.0)
    found: Floats = (n - 1.0) * t_value / np.sqrt(n * (n - 2.0 + t_value**2))
    return found


def generalised_esd(values: Floats, most: int, level: float = 0.05) -> GeneralisedEsd:
    """Rosner's generalised extreme studentised deviate procedure for up to `most` outliers on either side.

    The farthest value is taken out `most` times over; R_i is compared with the critical value for what was
    left, and the number of outliers is the largest i with R_i above it (Rosner 1983,
    doi:10.1080/00401706.1983.10487848). The chance of finding any in a normal sample is `level`, well met
    from 25 values on.

    Parameters
    ----------
    values
        Shape (n,), all known.
    most
        Largest number of outliers looked for; at most n - 2.
    level
        Chance of finding an outlier where there is none.

    Returns
    -------
    GeneralisedEsd

    Raises
    ------
    ValueError
        If there are fewer than 3 values or one that is not known, or `most` is not from 1 to n - 2.
    """
    count = _checked(values)
    if not 1 <= most <= count - 2:
        raise ValueError(f"up to {count - 2} outliers can be looked for in {count} values, not {most}")
    places = np.arange(count)
    positions, statistics = np.empty(most, dtype=np.intp), np.empty(most)
    for step in range(most):
        position, statistics[step] = _farthest(values[places])
        positions[step] = places[position]
        places = np.delete(places, position)
    critical = critical_distance(count - np.arange(most, dtype=np.float64), level)
    above = np.flatnonzero(statistics > critical)
    return GeneralisedEsd(positions, statistics, critical, int(above[-1]) + 1 if above.size else 0)


def bonferroni_p(studentised: Floats, degrees_of_freedom: Floats, tried: Floats) -> Floats:
    """Chance that the farthest of several residuals lies this far out, by Bonferroni's inequality.

    min(1, n 2 P(T > |t|)), T of Student's distribution with the fit's degrees of freedom less one: the
    residual's own rate does not share in its scale. Cook and Weisberg 1982, Residuals and Influence in
    Regression, section 2.2.2 (ISBN 0-412-24280-X). Exact for linear models where it is small, near it for
    others.

    Parameters
    ----------
    studentised
        Externally studentised residuals, shape (n,); NaN where unknown.
    degrees_of_freedom
        Of the fit that each is of: points less constants, shape (n,).
    tried
        Points of that fit, shape (n,).

    Returns
    -------
    array
        p value of each, shape (n,); NaN where the residual is unknown or no degree of freedom is left.
    """
    left = degrees_of_freedom - 1.0
    tail = t_distribution.sf(np.abs(studentised), np.where(left >= 1, left, np.nan))
    return np.minimum(1.0, 2.0 * tried * np.asarray(tail, dtype=np.float64))


def _checked(values: Floats) -> int:
    if values.size < 3 or not np.all(np.isfinite(values)):
        raise ValueError("an outlier test needs at least 3 values, all of them known")
    return values.size


def _farthest(values: Floats) -> tuple[int, float]:
    """Place of the value farthest from the mean, and its distance in standard deviations."""
    centred = values - np.mean(values)
    position = int(np.argmax(np.abs(centred)))
    sd = float(np.sqrt(np.sum(centred**2) / (values.size - 1)))
    return position, float(abs(centred[position]) / sd) if sd > 0 else 0.0
