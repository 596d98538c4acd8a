"""By how much each rate moves the constants that a law takes from all of them, to first order.

Looks at fits that are done: constants, conditions, residuals and weights. Fits, chooses and judges nothing.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from models.kinetics.laws import RateLaw, law
from models.kinetics.laws.law import Conditions, Floats, at_levels
from models.statistics.sums import sum_rows

INFLUENCE_COLUMNS = ("series", "row", "leverage")
"""Columns of `rate_influence` before those of the law's constants."""
_LEAST_RANK = 1e-12
"""Smallest eigenvalue of the information, its diagonal scaled to 1, that still tells the constants apart."""
_LEAST_SPARE = 1e-9


def influence(
    each: RateLaw, conditions: Conditions, constants: Floats, residuals: Floats, weights: Floats
) -> Floats:
    """Change of each constant when a rate is left out, to first order.

    d = -(J'WJ)^-1 j w r / (1 - h), with j the derivatives of the fitted rate and h = w j' (J'WJ)^-1 j its
    leverage: one Gauss-Newton step from the fit of all rates to that without one, weights held.

    Parameters
    ----------
    each
        The law.
    conditions
        Substrate and whatever else the law needs, shape (levels, series).
    constants
        The fit's constants, the amplitude first if there is one, shape (constants, series), or (constants,)
        for all series alike.
    residuals
        Rate less the law's [umol/L/s], shape (levels, series); any finite value where the weight is 0.
    weights
        One over the variance, up to a factor, same shape; 0 where there is no rate.

    Returns
    -------
    array
        Shape (constants, levels, series): change of the natural logarithm of a constant, or of the constant
        itself where it need not be positive. 0 for a rate without weight; NaN where the rates do not tell the
        constants apart, and for a rate without which they would not.

    References
    ----------
    Cook and Weisberg 1982, Residuals and Influence in Regression, ISBN 978-0-412-24280-9, section 3.4, and
    5.4 for curved laws.
    """
    values = np.broadcast_to(
        constants[:, None] if constants.ndim == 1 else constants, (each.constant_count, weights.shape[1])
    )
    shape, slopes = each.evaluate(conditions, tuple(values[each.first_shape :]))
    columns = list(slopes) if each.amplitude is None else [values[0] * each_one for each_one in slopes]
    if each.amplitude is not None:
        columns = [values[0] * shape, *columns]
    with np.errstate(all="ignore"):
        lengths = [np.sqrt(sum_rows(weights * column * column)) for column in columns]
        scaled = [np.sqrt(weights) * column / size for column, size in zip(columns, lengths, strict=True)]
        information = _products(scaled)
        told = np.all(np.isfinite(information), axis=(1, 2))
        safe = np.where(told[:, None, None], information, np.eye(len(columns)))
        told &= np.linalg.eigvalsh(safe)[:, 0] > _LEAST_RANK
        inverse = np.linalg.inv(np.where(told[:, None, None], safe, np.eye(len(columns))))
        reach = [
            sum_rows(np.stack([inverse[:, k, m] * column for m, column in enumerate(scaled)]))
            for k in range(len(columns))
        ]
        leverage = sum_rows(np.stack([near * column for near, column in zip(reach, scaled, strict=True)]))
        spare = np.where((1.0 - leverage > _LEAST_SPARE) & told, 1.0 - leverage, np.nan)
        pull = np.sqrt(weights) * residuals / spare
        moved = [-near * pull / size for near, size in zip(reach, lengths, strict=True)]
    return np.where(weights > 0, np.stack(moved), np.where(told, 0.0, np.nan))


def _products(columns: list[Floats]) -> Floats:
    """Sums of products of columns (levels, series), shape (series, columns, columns)."""
    count = len(columns)
    products = np.empty((columns[0].shape[1], count, count))
    for k in range(count):
        for m in range(k + 1):
            products[:, k, m] = products[:, m, k] = sum_rows(columns[k] * columns[m])
    return products


def rate_influence(
    points: pd.DataFrame, constants: pd.DataFrame, name: str = "michaelis_menten"
) -> pd.DataFrame:
    """Influence of every rate on the constants of one law without a modulator.

    Parameters
    ----------
    points
        Rates beside their fits, as `FitResult.points` holds them: series, law, row, substrate_um, v_um_per_s,
        fitted_um_per_s, v_sd_um_per_s (NaN for a rate without weight), leverage.
    constants
        Constants of the fits, as `FitResult.constants`: series, law, constant, value.
    name
        The law; series for which another was chosen are left out.

    Returns
    -------
    DataFrame
        Columns series, row and leverage (as in `points`) and one a constant; a row a rate, in the order of
        `points`.

    Raises
    ------
    UnknownName
        If the law is not in the registry.
    ValueError
        If the law needs a modulator or the enzyme, which `points` does not hold.
    """
    each = law(name)
    if each.fewest_modulator_levels or each.needs_enzyme:
        raise ValueError(f"the influence of rates on '{name}' needs its conditions: use influence()")
    mine = points[points["law"] == name]
    series, column = np.unique(mine["series"].to_numpy(dtype=np.intp), return_inverse=True)
    names = [constant.name for constant in each.constants]
    of_law = constants[constants["law"] == name]
    values = of_law.pivot(index="series", columns="constant", values="value").reindex(series, columns=names)
    frame = mine[list(INFLUENCE_COLUMNS)].reset_index(drop=True)
    if frame.empty:
        return frame.assign(**dict.fromkeys(names, 0.0))
    # Rates in an order of the series' own: sums must not depend on the order of the wells.
    order = np.lexsort(
        (mine["v_sd_um_per_s"], mine["fitted_um_per_s"], mine["v_um_per_s"], mine["substrate_um"], column)
    )
    place = np.empty(len(mine), dtype=np.intp)
    place[order] = np.arange(len(mine)) - np.searchsorted(column[order], column[order])
    laid = _Laid(place, np.asarray(column), (int(place.max()) + 1, series.size))
    with np.errstate(all="ignore"):
        weights = 1.0 / mine["v_sd_um_per_s"].to_numpy(dtype=np.float64) ** 2
    moved = influence(
        each,
        at_levels(laid.out(mine["substrate_um"].to_numpy(dtype=np.float64), 1.0)),
        values.to_numpy(dtype=np.float64).T,
        laid.out((mine["v_um_per_s"] - mine["fitted_um_per_s"]).to_numpy(dtype=np.float64), 0.0),
        laid.out(np.where(np.isfinite(weights), weights, 0.0), 0.0),
    )
    for k, constant in enumerate(names):
        frame[constant] = moved[k][laid.place, laid.column]
    return frame


class _Laid:
    """Where the rows of a frame stand in an array (levels, series)."""

    def __init__(self, place: NDArray[np.intp], column: NDArray[np.intp], shape: tuple[int, int]) -> None:
        self.place, self.column, self.shape = place, column, shape

    def out(self, values: Floats, empty: float) -> Floats:
        """Values of the rows laid out, a number where there is no row."""
        laid = np.full(self.shape, empty)
        laid[self.place, self.column] = values
        return laid
