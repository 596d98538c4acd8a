"""The conversion course that a series' own fit predicts for each of its wells.

Windows chosen from it do not follow a well's own noise: the longest window whose own noisy slope stays under
the limit would favour low slopes. This module chooses no window.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.kinetics.laws import RateLaw, at_levels, law
from models.kinetics.packing import pack
from models.kinetics.replicate_weights import Scatter, fit_with_weights
from models.kinetics.selection import aicc, choose_law
from models.statistics.sums import sum_rows

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]
Flags = NDArray[np.bool_]

_ASSUMED_CV = 0.03
"""Replicate CV assumed for the prediction alone, where only a rough balance of fast and slow wells
matters."""


@dataclass(frozen=True)
class SeriesCourse:
    """What the fits of a plate's series predict for its wells.

    Attributes
    ----------
    known
        Wells whose series could be fitted, shape (wells,).
    laws
        Law and constants of each series that could be fitted: wells and constants (constants, wells).
    """

    known: Flags
    laws: tuple[tuple[RateLaw, Integers, Floats], ...]

    def rate(self, substrate_um: Floats) -> Floats:
        """Rate of each well at a substrate concentration [umol/L/s], shape (wells,); 0 where not known."""
        rates = np.zeros_like(substrate_um)
        for each, wells, constants in self.laws:
            conditions = at_levels(np.maximum(substrate_um[wells], 1e-300)[None, :])
            rates[wells] = each.rate(conditions, tuple(constants))[0]
        return rates

    def consumed(self, time_s: Floats, start_s: Floats, substrate_um: Floats) -> Floats:
        """Substrate consumed since `start_s` at each read [umol/L], shape (reads, wells).

        Follows dS/dt = -v(S) read by read with the exponential midpoint rule, which keeps S positive.

        Parameters
        ----------
        time_s
            Shape (reads, wells).
        start_s
            When the course starts [s], shape (wells,); nothing is consumed before.
        substrate_um
            Substrate then [umol/L], shape (wells,).
        """
        left = np.maximum(substrate_um, 0.0)
        consumed = np.zeros_like(time_s)
        clock = start_s.copy()
        for read, now in enumerate(time_s):
            step = np.where(now > clock, now - clock, 0.0)
            middle = left * np.exp(-0.5 * step * self._turnover(left))
            left = left * np.exp(-step * self._turnover(middle))
            clock = clock + step
            consumed[read] = substrate_um - left
        return np.where(self.known, consumed, 0.0)

    def _turnover(self, substrate_um: Floats) -> Floats:
        """v(S) / S [1/s], 0 where nothing is left."""
        some = substrate_um > 0
        return np.where(some, self.rate(substrate_um) / np.where(some, substrate_um, 1.0), 0.0)


def no_course(well_count: int) -> SeriesCourse:
    """Nothing is predicted."""
    return SeriesCourse(np.zeros(well_count, dtype=bool), ())


def predict_courses(
    series: Integers,
    series_laws: Sequence[tuple[str, ...]],
    usable: Flags,
    mean_substrate_um: Floats,
    nominal_um: Floats,
    rate_um_per_s: Floats,
    standard_error_um_per_s: Floats,
) -> SeriesCourse:
    """Fit each series' law to rates paired with mean substrate.

    Parameters
    ----------
    series
        Series of each well, -1 for none, shape (wells,).
    series_laws
        Names of the candidate laws of each series.
    usable
        Wells that may shape the fit, shape (wells,).
    mean_substrate_um, nominal_um, rate_um_per_s, standard_error_um_per_s
        Of each well, shape (wells,).

    Returns
    -------
    SeriesCourse
        Of the law chosen by AICc; wells of a series that cannot be fitted are not known.
    """
    fittable = usable & (series >= 0) & np.isfinite(rate_um_per_s) & (mean_substrate_um > 0)
    best: dict[int, dict[str, tuple[float, Floats]]] = {}
    for name in sorted({name for number in np.unique(series[fittable]) for name in series_laws[number]}):
        candidate = law(name)
        mine = fittable & np.array([s >= 0 and name in series_laws[s] for s in series])
        for number in np.unique(series[mine]):
            members = mine & (series == number)
            if np.unique(nominal_um[members]).size < candidate.fewest_levels:
                mine &= ~members
        if not mine.any():
            continue
        packed = pack(np.where(mine, series, -1), mean_substrate_um, rate_um_per_s, standard_error_um_per_s)
        scatter = Scatter.of_constant(np.full(packed.series.size, _ASSUMED_CV))
        weighted = fit_with_weights(candidate, packed, scatter, rounds=2)
        fit = weighted.fit
        log_variance = np.where(packed.present, -np.log(np.where(packed.present, weighted.weights, 1.0)), 0.0)
        criterion = aicc(fit.residual_sum, sum_rows(log_variance), fit.point_count, candidate.constant_count)
        sound = fit.converged & (fit.constants[0] > 0)
        for column in np.flatnonzero(sound):
            of_series = best.setdefault(int(packed.series[column]), {})
            of_series[name] = (float(criterion[column]), fit.constants[:, column])
    known = np.zeros(series.size, dtype=bool)
    found = []
    for number, candidates in sorted(best.items()):
        name = choose_law({key: value for key, (value, _) in candidates.items()})
        wells = np.flatnonzero(series == number)
        known[wells] = True
        constants = candidates[name][1]
        found.append((law(name), wells, np.repeat(constants[:, None], wells.size, axis=1)))
    return SeriesCourse(known, tuple(found))
