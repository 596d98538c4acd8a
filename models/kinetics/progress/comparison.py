"""Constants of whole curves against those of initial rates of the same wells, with their joint uncertainty.

Both estimates rest on the same wells and err together; each well's influence on either tells how far apart
chance may bring them. Fits nothing and holds nothing.
"""

from __future__ import annotations

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.stats import f as f_distribution
from scipy.stats import t as t_distribution

from models.kinetics.progress.fitting import ProgressResult

Floats = NDArray[np.float64]

COMPARISON_COLUMNS = (
    "series",
    "km_ratio",
    "km_ratio_low",
    "km_ratio_high",
    "vmax_ratio",
    "vmax_ratio_low",
    "vmax_ratio_high",
    "p_value",
)
LEVEL = 0.95
_COMPARED = ["km", "vmax"]
_LEAST_RANK = 1e-12


def compare_with_rates(
    progress: ProgressResult, rate_influence: pd.DataFrame, rate_constants: pd.DataFrame
) -> pd.DataFrame:
    """Compare the constants of every series that has both estimates.

    With d = (ln km, ln vmax) of the whole curves less that of the rates, and u_i well i's influence on either
    (the change when it is left out), d has the covariance V = sum D_i D_i', where

        D_i = u_i(curves) sqrt(1 - h_i(curves)) - u_i(rates) sqrt(1 - h_i(rates)),

    with h the well's leverage. That is the jackknife of a fit, linearised (infinitesimal jackknife: Jaeckel
    1972, Bell Laboratories memorandum MM 72-1215-11; Efron 1982, doi:10.1137/1.9781611970319), with the
    correction for leverage that makes it unbiased where the weights are right (HC2: MacKinnon and White 1985,
    doi:10.1016/0304-4076(85)90158-7). The test is Hotelling's (1931, doi:10.1214/aoms/1177732979): for n
    wells, d' V^-1 d (n - 2) / (2 (n - 1)) against F with 2 and n - 2 degrees of freedom; intervals by t with
    n - 2. Simulated with 8 to 24 wells it finds a difference where there is none in no more than the nominal
    share of series, mostly in fewer: `python -m tests.benchmarks.progress` prints how many.

    Parameters
    ----------
    progress
        Fits of whole curves.
    rate_influence
        Columns series, well (row in the batch that `progress` was fitted to), vmax and km (change of their
        logarithms when the well's rate is left out) and leverage, as `models.kinetics.influence` gives them.
    rate_constants
        Columns series, constant, value: vmax and km of the Michaelis-Menten law from the initial rates.

    Returns
    -------
    DataFrame
        Columns of COMPARISON_COLUMNS, a row a series that has both, by number: whole curves over initial
        rates, their 95 % intervals, and the chance of both lying this far from 1 together. Intervals and
        p_value are NaN where the wells do not tell them.
    """
    curves, rates = _logarithms(progress.constants), _logarithms(rate_constants)
    series = curves.index.intersection(rates.index).sort_values()
    difference = (curves.loc[series] - rates.loc[series]).to_numpy(dtype=np.float64)
    together = (
        _scaled(progress.influence)
        .add_suffix("_curves")
        .join(_scaled(rate_influence).add_suffix("_rates"), how="outer")
    )
    # A well that only one of the two rests on moves the other by nothing; one whose influence is not known
    # stays unknown.
    for suffix, of_side in (("_curves", progress.influence), ("_rates", rate_influence)):
        absent = ~together.index.isin(_places(of_side))
        together.loc[absent, _names(suffix)] = 0.0
    moved = together[_names("_curves")].to_numpy() - together[_names("_rates")].to_numpy()
    of_well = together.index.get_level_values("series").to_numpy()
    # Wells in an order of their own: a sum's last bit must not depend on how they are stored.
    order = np.lexsort((moved[:, 1], moved[:, 0], of_well))
    moved, of_well = moved[order], of_well[order]
    rows = []
    for k, number in enumerate(series.to_numpy(dtype=np.int64)):
        first, last = np.searchsorted(of_well, [number, number + 1])
        rows.append(_compared(int(number), difference[k], moved[first:last]))
    return pd.DataFrame(rows, columns=list(COMPARISON_COLUMNS)).astype({"series": np.int64})


def _logarithms(constants: pd.DataFrame) -> pd.DataFrame:
    """ln km and ln vmax by series, of those that have both."""
    mine = constants[constants["constant"].isin(_COMPARED)]
    table = mine.pivot(index="series", columns="constant", values="value")
    known = table.reindex(columns=_COMPARED).astype(np.float64).dropna()
    return pd.DataFrame(np.log(known.to_numpy()), index=known.index, columns=_COMPARED)


def _places(influence: pd.DataFrame) -> pd.MultiIndex:
    return pd.MultiIndex.from_frame(influence[["series", "well"]].astype(np.int64))


def _scaled(influence: pd.DataFrame) -> pd.DataFrame:
    """Influence on km and vmax corrected for leverage, by series and well."""
    spare = np.sqrt(1.0 - influence["leverage"].to_numpy(dtype=np.float64))
    values = influence[_COMPARED].to_numpy(dtype=np.float64) * spare[:, None]
    return pd.DataFrame(values, index=_places(influence), columns=_COMPARED)


def _names(suffix: str) -> list[str]:
    return [name + suffix for name in _COMPARED]


def _compared(number: int, difference: Floats, moved: Floats) -> tuple[float, ...]:
    wells = len(moved)
    covariance = np.array([[_sum(moved[:, i] * moved[:, j]) for j in range(2)] for i in range(2)])
    ratio = np.exp(difference)
    ends, p_value = np.full((2, 2), np.nan), np.nan
    if wells > 2 and np.all(np.isfinite(covariance)) and np.all(np.diagonal(covariance) > 0):
        error = np.sqrt(np.diagonal(covariance))
        reach = float(t_distribution.ppf(0.5 + LEVEL / 2.0, wells - 2)) * error
        ends = np.exp(np.stack([difference - reach, difference + reach]))
        correlation = covariance[0, 1] / (error[0] * error[1])
        if 1.0 - correlation**2 > _LEAST_RANK:
            first, second = difference / error
            distance = (first**2 - 2.0 * correlation * first * second + second**2) / (1.0 - correlation**2)
            p_value = float(f_distribution.sf(distance * (wells - 2) / (2.0 * (wells - 1)), 2, wells - 2))
    return (
        number,
        float(ratio[0]),
        float(ends[0, 0]),
        float(ends[1, 0]),
        float(ratio[1]),
        float(ends[0, 1]),
        float(ends[1, 1]),
        p_value,
    )


def _sum(values: Floats) -> float:
    return float(np.cumsum(values)[-1]) if values.size else 0.0
