"""What the gates on fits share: the K of each series and the rates behind it, of the fit that counts.

That is the fit of the law chosen, to the wells that are clear. Holds no gate and no limit.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from checks.gates.gate import GateInput
from checks.gates.saturation_not_reached import CONSTANT_NAMES, K_NAMES, K_UNIT

CLEAR = "clear"


def fits_that_count(frame: pd.DataFrame) -> pd.DataFrame:
    """Rows of FITS or ESTIMATES that belong to a series' law chosen for its clear wells."""
    return frame[frame["chosen"].astype(bool) & (frame["wells"] == CLEAR) & frame["series_id"].notna()]


def of_series(frame: pd.DataFrame, series: pd.DataFrame, column: str) -> pd.Series:
    """A column of a frame with one row a series at most, in the order of `series`; NaN where it has none."""
    return frame.set_index("series_id")[column].reindex(series["series_id"])


def not_fitted(series: pd.DataFrame) -> np.ndarray:
    """Why each series has no fit, as a finding says it, shape (series,); empty where it has one."""
    refusal = series["refusal"].astype(object)
    why = "the series was not fitted: " + refusal.fillna("").astype(str)
    return np.where(refusal.notna(), why, "")


def half_saturation(series: pd.DataFrame, estimates: pd.DataFrame) -> pd.DataFrame:
    """K of each series, in the order of `series`.

    Returns
    -------
    pandas.DataFrame
        k_um (Km or K0.5 [umol/L]), k_name as print has it, hill_n (NaN for a hyperbola), and reason: why K is
        not known, empty where it is.
    """
    chosen = fits_that_count(estimates)
    of_k = chosen[chosen["constant"].isin(tuple(K_NAMES))].drop_duplicates("series_id")
    k_um = of_series(of_k, series, "value").to_numpy(dtype=float)
    unit = of_series(of_k, series, "unit").to_numpy(dtype=object)
    hill_n = of_series(chosen[chosen["constant"] == "hill_n"].drop_duplicates("series_id"), series, "value")
    known = np.isfinite(k_um) & (k_um > 0) & (unit == K_UNIT)
    why = not_fitted(series)
    return pd.DataFrame(
        {
            "k_um": np.where(known, k_um, np.nan),
            "k_name": of_series(of_k, series, "constant").map(CONSTANT_NAMES).to_numpy(dtype=object),
            "hill_n": hill_n.to_numpy(dtype=float),
            "reason": np.where(
                (why == "") & ~known, f"the law chosen has no K in {K_UNIT}", why.astype(object)
            ),
        }
    )


def clear_points(data: GateInput) -> pd.DataFrame:
    """Rates of the fits that count, in the order of `data.wells`.

    Returns
    -------
    pandas.DataFrame
        Columns of FIT_POINTS and series_id, with nominal_substrate_um of the well and v0_se_um_per_s of its
        rate.
    """
    if data.fits is None or data.points is None:
        raise ValueError("rates behind a fit are asked for before there is one")
    points = data.points[data.points["fit_id"].isin(fits_that_count(data.fits)["fit_id"])]
    keys = ["analysis_id", "well"]
    wells = data.wells[[*keys, "substrate_um"]].rename(columns={"substrate_um": "nominal_substrate_um"})
    errors = data.rates[[*keys, "v0_se_um_per_s"]]
    of_wells = wells.merge(points, on=keys, how="inner", validate="1:1")
    return of_wells.merge(errors, on=keys, how="left", validate="1:1")
