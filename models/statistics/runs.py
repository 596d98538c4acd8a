"""Runs of residuals of one sign along the substrate: whether a curve lies above its rates and then below.

This module knows neither rate laws nor plates: it is given residuals and where each stands in order.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.special import gammaln

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]

LEAST_TELLING_P = 0.05
"""Where even two runs, the fewest that two signs can make, are likelier than this, the signs tell nothing."""


def too_few_runs(fit: Integers, order: Floats, residual: Floats, fit_count: int) -> Floats:
    """Chance of as few runs of one sign, in residuals taken in order; exact for any number of points.

    With n1 signs of one kind and n2 of the other, in random order, the number of runs R has

        P(R = 2k)     = 2 C(n1-1, k-1) C(n2-1, k-1) / C(n1+n2, n1)
        P(R = 2k + 1) = (C(n1-1, k) C(n2-1, k-1) + C(n1-1, k-1) C(n2-1, k)) / C(n1+n2, n1)

    (Wald and Wolfowitz 1940, doi:10.1214/aoms/1177731909); the p value is P(R <= runs seen).

    Points at the same place in the order share whatever misfit the curve has there and come in no order among
    themselves: each place counts once, by the sign of its mean. So replicates must be given one and the same
    `order` (their nominal substrate, not the mean over each one's own window). Means of exactly 0 have no
    sign and are left out.

    A fitted curve crosses its rates about once for each constant, so that residuals of a true curve have more
    runs than signs in random order: the p value is too high rather than too low. With two constants there are
    hardly ever fewer than three runs, of which p is 0.11 for 8 places and 0.013 for 12.

    Parameters
    ----------
    fit
        Fit of each point, counted from 0, shape (points,).
    order
        Where each point stands, in any unit, shape (points,); equal for replicates.
    residual
        Observed less fitted, in any unit, shape (points,). Points with NaN here or in `order` are left out.
    fit_count
        Number of fits.

    Returns
    -------
    array
        p value of each fit, shape (fits,); NaN where two runs would have a p value above `LEAST_TELLING_P`
        (fewer than 8 places, or hardly any of one sign).
    """
    known = np.isfinite(residual) & np.isfinite(order)
    fit, order, residual = fit[known], order[known], residual[known]
    rank = np.lexsort((residual, order, fit))
    fit, order, residual = fit[rank], order[rank], residual[rank]
    first = np.ones(fit.size, dtype=bool)
    first[1:] = (fit[1:] != fit[:-1]) | (order[1:] != order[:-1])
    place = np.cumsum(first) - 1
    place_fit = fit[first]
    total = np.bincount(place, residual, minlength=place_fit.size)
    signed = total != 0
    place_fit, above = place_fit[signed], total[signed] > 0
    begins = np.ones(place_fit.size, dtype=bool)
    begins[1:] = (place_fit[1:] != place_fit[:-1]) | (above[1:] != above[:-1])

    positive, negative, runs = (
        np.bincount(place_fit[chosen], minlength=fit_count).astype(np.float64)
        for chosen in (above, ~above, begins)
    )
    tail = runs_tail(runs, positive, negative)
    tells = runs_tail(np.full(fit_count, 2.0), positive, negative) <= LEAST_TELLING_P
    return np.where(tells, tail, np.nan)


def runs_tail(runs: Floats, positive: Floats, negative: Floats) -> Floats:
    """Chance of this many runs or fewer among signs in random order, exact.

    Parameters
    ----------
    runs, positive, negative
        Runs, and signs of each kind, whole numbers, shape (n,).

    Returns
    -------
    array
        P(R <= runs), shape (n,); NaN where a kind of sign does not occur.
    """
    both = (positive > 0) & (negative > 0)
    n1, n2 = np.where(both, positive, 1.0), np.where(both, negative, 1.0)
    orders = _log_choose(n1 + n2, n1)
    total = np.zeros_like(n1)
    for count in range(2, int(np.max(runs, initial=0.0)) + 1):
        half, odd = divmod(count, 2)
        if odd:
            ways = np.exp(_log_choose(n1 - 1, half) + _log_choose(n2 - 1, half - 1) - orders)
            ways += np.exp(_log_choose(n1 - 1, half - 1) + _log_choose(n2 - 1, half) - orders)
        else:
            ways = 2.0 * np.exp(_log_choose(n1 - 1, half - 1) + _log_choose(n2 - 1, half - 1) - orders)
        total += np.where(count <= runs, ways, 0.0)
    return np.where(both, np.minimum(total, 1.0), np.nan)


def _log_choose(of: Floats, chosen: Floats | float) -> Floats:
    """Logarithm of the binomial coefficient; minus infinity where more are chosen than there are."""
    possible = chosen <= of
    taken = np.where(possible, chosen, 0.0)
    logarithm = gammaln(of + 1.0) - gammaln(taken + 1.0) - gammaln(of - taken + 1.0)
    return np.where(possible, logarithm, -np.inf)
