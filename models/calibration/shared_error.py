"""The error that all wells of a calibration share, added to constants that are in proportion to product.

It multiplies vmax, kcat, specific activity and kcat over K alike and does not touch K or n; more wells do not
lessen it, and with one calibration for several plates, neither do more plates.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.stats import norm
from scipy.stats import t as t_distribution

Floats = NDArray[np.float64]

LEVEL = 0.95


@dataclass(frozen=True, eq=False)
class WithSharedError:
    """Standard error and 95 % interval with the shared error in; low and high stay NaN where open."""

    standard_error: Floats
    low: Floats
    high: Floats


def add_shared_error(
    value: Floats,
    standard_error: Floats,
    low: Floats,
    high: Floats,
    relative_error: Floats | float,
    degrees_of_freedom: Floats | float = np.inf,
) -> WithSharedError:
    """Widen standard errors and intervals by a relative error that is independent of the fit's own.

    Each half-width and t times the shared error add as squares, on a logarithmic scale, where an interval
    stays positive (JCGM 100:2008, 5.1.2, for a product). The classic slip is to add it to the variance of
    each well: the fit would then average it away.

    Parameters
    ----------
    value, standard_error, low, high
        Constants with their own uncertainty, arrays that broadcast. Values must be above 0 for an interval;
        an end at or below 0 is treated on the plain scale.
    relative_error
        Relative standard error that is shared [1], such as `Calibration.relative_error_shared`.
    degrees_of_freedom
        That it rests on; endless where it is taken as known.

    Returns
    -------
    WithSharedError
    """
    finite = np.isfinite(degrees_of_freedom)
    with np.errstate(all="ignore"):
        reach = np.where(
            finite,
            t_distribution.ppf(0.5 + LEVEL / 2.0, np.where(finite, degrees_of_freedom, 1.0)),
            norm.ppf(0.5 + LEVEL / 2.0),
        )
        shared = reach * relative_error
        total = np.hypot(standard_error, value * relative_error)
        ends = []
        for end, side in ((low, -1.0), (high, 1.0)):
            by_log = value * np.exp(side * np.hypot(np.log(end / value), shared))
            plain = value + side * np.hypot(end - value, value * shared)
            ends.append(np.where(end * value > 0, by_log, plain))
    return WithSharedError(np.asarray(total), ends[0], ends[1])


def without_shared_error(
    value: Floats, standard_error: Floats, low: Floats, high: Floats, relative_error: Floats
) -> WithSharedError:
    """Take a relative error out again that `add_shared_error` put in, with endless degrees of freedom.

    What plates share must not be averaged over plates: it comes out before they are combined and goes in
    after.

    Parameters
    ----------
    value, standard_error, low, high
        Constants above 0 with the shared error in, arrays that broadcast.
    relative_error
        Relative standard error that is in them [1].

    Returns
    -------
    WithSharedError
    """
    with np.errstate(all="ignore"):
        shared = norm.ppf(0.5 + LEVEL / 2.0) * relative_error
        own_error = np.sqrt(np.maximum(standard_error**2 - (value * relative_error) ** 2, 0.0))
        ends = []
        for end, side in ((low, -1.0), (high, 1.0)):
            own = np.sqrt(np.maximum(np.log(end / value) ** 2 - shared**2, 0.0))
            ends.append(np.asarray(value * np.exp(side * own)))
    return WithSharedError(np.asarray(own_error), ends[0], ends[1])


def relative_error_of_factors(*relative_errors: float) -> float:
    """Relative error of a product or quotient of independent factors: the root of the sum of squares [1]."""
    return float(np.sqrt(sum(error * error for error in relative_errors)))
