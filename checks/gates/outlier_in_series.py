"""Holds a well whose rate lies far off the curve that the other wells of its series make.

Purpose: a well that got another volume than planned, or lost its enzyme to a wall, moves Km and Vmax of all.
What is far is told by the scatter of the series itself, so that a noisy assay is not held for its noise.

Formula: p = min(1, n 2 P(T > |t|)) < limit, with t the externally studentised residual of the law chosen
(residual over its own standard error, scale from the fit without it), n the rates of the fit, and T of
Student's distribution with one degree of freedom less than the fit.

What it can see and what not: one well off is a clear case. Two wells off the same way mask each other: each
widens the scatter that the other is judged by, so that a pair in one triplicate is seen only where the series
has many wells, and then the third, right one may be blamed by a curve that the two have drawn to them. The
lowest and the highest level hold the curve most (high leverage): a well there must lie farther off to be
seen. A whole level, row or column that is off is no outlier: `replicate_scatter`, `fit_misfit` and
`plate_position` look for those. A curve of a wrong law makes no outlier by itself.

Source: externally studentised residuals and Bonferroni's bound: R. D. Cook, S. Weisberg, Residuals and
Influence in Regression, Chapman and Hall 1982, ISBN 978-0-412-24280-9, section 2.2.2.

Default: 0.01 over the whole series: one clean series in a hundred has a well held by chance (common
practice).
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from checks.gates.gate import (
    ENZYME_ROLES,
    Gate,
    GateInput,
    Limits,
    Measure,
    Row,
    Setting,
    Subject,
    known_or_none,
    metrics_frame,
    number,
)
from checks.gates.wording import plain
from models.statistics.outliers import bonferroni_p

NAME = "outlier_in_series"
KEY = ["analysis_id", "well"]


def metrics(data: GateInput) -> pd.DataFrame:
    """Studentised residual and its corrected p value of every well with a rate that belongs to a series."""
    if data.points is None or data.fits is None:
        raise ValueError("outlier_in_series judges fits: it needs fits and points")
    fits = data.fits[data.fits["chosen"].astype(bool) & (data.fits["wells"] == "clear")]
    points = data.points.merge(fits[["fit_id", "degrees_of_freedom", "point_count"]], on="fit_id")
    # A well that is fitted within a series and within a grid is judged by its series.
    of_grid = ~points["fit_id"].isin(fits.loc[fits["series_id"].notna(), "fit_id"])
    points = points.iloc[np.argsort(of_grid.to_numpy(), kind="stable")].drop_duplicates(KEY)
    rows = _wells_with_rates(data).merge(points.drop(columns="series_id"), on=KEY, how="left")
    studentised = rows["studentised_residual"].to_numpy(dtype=float)
    degrees = rows["degrees_of_freedom"].to_numpy(dtype=float)
    fitted = rows["fitted_um_per_s"].to_numpy(dtype=float)
    count = rows["point_count"].to_numpy(dtype=float)
    p_value = bonferroni_p(studentised, degrees, count)
    no_fit = rows["fit_id"].isna().to_numpy()
    spared = no_fit & rows["series_id"].isin(rows.loc[~no_fit, "series_id"]).to_numpy()
    reason = np.select(
        [no_fit, ~(degrees > 1), ~np.isfinite(p_value)],
        [
            "its series was not fitted",
            "its series has no rate to spare beyond what the law's constants need",
            "without this well the fit's scatter cannot be told",
        ],
        default="",
    )
    with np.errstate(all="ignore"):
        spare = 1.0 - rows["leverage"].to_numpy(dtype=float)
        residual = (rows["v_um_per_s"].to_numpy(dtype=float) - fitted) / spare
        off = residual / np.abs(fitted - residual * (1.0 - spare))
    frame = metrics_frame(
        "well",
        rows,
        reason,
        p_value=p_value,
        studentised_residual=studentised,
        relative_residual=off,
        point_count=count,
    )
    # Wells that other gates have held are not part of the fit: this gate has nothing to say about them.
    return frame[~spared].reset_index(drop=True)


def _wells_with_rates(data: GateInput) -> pd.DataFrame:
    rated = data.rates.loc[data.rates["v0_um_per_s"].notna(), KEY]
    wells = data.wells[data.wells["role"].isin(ENZYME_ROLES) & data.wells["series_id"].notna()]
    return wells[[*KEY, "series_id"]].merge(rated, on=KEY)


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect that chance explains how far each well lies off its curve."""
    from checks import expectations as expect

    return [expect.at_least(NAME, "p_value", number(limits, NAME, "limit"), rule="outlier")]


def measure(row: Row, limits: Limits) -> Measure:
    """Corrected p value against its limit."""
    return Measure(known_or_none(row["p_value"]), number(limits, NAME, "limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """How far off the well lies, and how likely chance is."""
    off = known_or_none(row["relative_residual"])
    far = "far from" if off is None else f"{abs(off) * 100:.0f} % {'above' if off > 0 else 'below'}"
    return (
        f"This well's rate is {far} the curve that the other wells of its series make, "
        f"{abs(float(row['studentised_residual'])):.1f} standard errors: among {row['point_count']:.0f} "
        f"wells chance does that with probability {float(row['p_value']):.2g} "
        f"(limit {plain(number(limits, NAME, 'limit'))})."
    )


GATE = Gate(
    name=NAME,
    subjects=("well",),
    phase="fit",
    severity="hold",
    unassessed="clear",
    settings=(
        Setting(
            "limit",
            0.01,
            "1",
            "Probability, over all wells of the series, below which chance does not explain an outlier",
            "one clean series in a hundred has a well held, common practice, no source",
            low=1e-12,
            high=0.5,
        ),
    ),
    text=__doc__,
    needs={"well": ("p_value",)},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
