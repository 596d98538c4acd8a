"""Holds a series in which replicates of one level differ by more than replicates may.

Purpose: replicates that disagree were not pipetted alike, or not read alike. One of them is wrong, and the
weights of the fit cannot know which.

Formula: CV = s / |mean| of the rates of the clear wells of a level > limit, at the worst level with two or
more of them. A level counts only if its scatter is more than the rates' own standard errors explain:
sum ((v - m) / SE)^2, with m the mean weighted by 1 / SE^2, beyond its chi-square of k - 1 degrees at 0.01
over the number of levels with replicates (Bonferroni). The blank's error, which replicates share, is in SE
too: the test errs on the side of silence.

What it leaves alone, and why: near the detection limit replicates scatter by 20 % and more though nothing
is wrong but that there is little to see; the fit gives such rates little weight.

Source: chi-square test of scatter against known errors: P. R. Bevington, D. K. Robinson, Data Reduction and
Error Analysis for the Physical Sciences, 3rd ed., McGraw-Hill 2003, ISBN 978-0-07-247227-1, chapter 11.

Default: 15 % (common practice, no source). Two dispensing steps of 2 % each make replicates of about 3 %.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from checks.gates.chosen_fits import clear_points, not_fitted
from checks.gates.gate import (
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
from checks.gates.wording import beside, listed

NAME = "replicate_scatter"
SIGNIFICANCE = 0.01
"""Chance, over all levels of a series, of taking for scatter what the rates' own errors explain."""


def metrics(data: GateInput) -> pd.DataFrame:
    """Worst CV of replicates of every series, of levels whose scatter their errors do not explain."""
    if data.series is None:
        raise ValueError(f"{NAME} judges fits: it needs series, fits and points")
    series = data.series.reset_index(drop=True)
    points = clear_points(data)
    row = pd.Index(series["series_id"]).get_indexer(points["series_id"])
    level_um = points["nominal_substrate_um"].to_numpy(dtype=float)
    kept = (row >= 0) & (level_um > 0)
    points, row, level_um = points[kept], row[kept], level_um[kept]
    levels, group = _levels(row, level_um)
    scatter = _scatter(
        group,
        points["v_um_per_s"].to_numpy(dtype=float),
        points["v0_se_um_per_s"].to_numpy(dtype=float),
        len(levels),
    )
    levels = levels.join(scatter).rename_axis("group").reset_index()
    levels = levels[levels["members"] > 1].copy()
    levels["cv"] = levels["cv"].where(_unexplained(levels, len(series)), 0.0)
    # Of levels that scatter alike the lowest tells, whatever order the rows came in.
    worst = levels.sort_values(["row", "cv", "level_um"], ascending=[True, False, True], kind="stable")
    worst = worst.drop_duplicates("row").set_index("row").reindex(range(len(series)))
    at_worst = np.isin(group, worst["group"])
    names = points.loc[at_worst, "well"].groupby(row[at_worst]).agg(tuple).reindex(range(len(series)))
    why = not_fitted(series)
    cv = worst["cv"].to_numpy(dtype=float)
    reason = np.where((why == "") & np.isnan(cv), "no level of the series has two clear wells", why)
    return metrics_frame(
        "series",
        series,
        reason,
        unexplained_cv=np.where(reason == "", cv, np.nan),
        explained_cv=worst["explained_cv"].to_numpy(dtype=float),
        level_um=worst["level_um"].to_numpy(dtype=float),
        wells=names.to_numpy(dtype=object),
    )


def _levels(row: np.ndarray, level_um: np.ndarray) -> tuple[pd.DataFrame, np.ndarray]:
    """Levels of the series (row of the series, level_um), and which one each rate belongs to."""
    order = np.lexsort((level_um, row))
    begins = np.ones(order.size, dtype=bool)
    begins[1:] = (np.diff(row[order]) != 0) | (np.diff(level_um[order]) != 0)
    group = np.empty(order.size, dtype=np.intp)
    group[order] = np.cumsum(begins) - 1
    first = order[begins]
    return pd.DataFrame({"row": row[first], "level_um": level_um[first]}), group


def _scatter(group: np.ndarray, rate: np.ndarray, error: np.ndarray, count: int) -> pd.DataFrame:
    """Of each level: members, their CV, the CV that their errors explain, and chi-square against those."""

    def total(values: np.ndarray) -> np.ndarray:
        return np.bincount(group, weights=values, minlength=count)

    members = np.bincount(group, minlength=count).astype(float)
    with np.errstate(divide="ignore", invalid="ignore"):
        mean = total(rate) / members
        sd = np.sqrt(total((rate - mean[group]) ** 2) / (members - 1.0))
        weight = 1.0 / error**2
        weighted_mean = total(weight * rate) / total(weight)
        chi_square = total(weight * (rate - weighted_mean[group]) ** 2)
        size = np.abs(mean)
        cv = np.where(sd == 0, 0.0, sd / size)
        explained_cv = np.sqrt(total(error**2) / members) / size
    return pd.DataFrame(
        {"members": members, "cv": cv, "explained_cv": explained_cv, "chi_square": chi_square}
    )


def _unexplained(levels: pd.DataFrame, series_count: int) -> np.ndarray:
    """Levels that scatter beyond their errors; errors that are not known explain nothing."""
    from scipy.stats import chi2

    tested = np.bincount(levels["row"], minlength=series_count)[levels["row"]]
    chance = chi2.sf(levels["chi_square"].to_numpy(), levels["members"].to_numpy() - 1.0)
    return ~(chance >= SIGNIFICANCE / tested)


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect replicates that agree."""
    from checks import expectations as expect

    return [expect.at_most(NAME, "unexplained_cv", number(limits, NAME, "limit"), rule="cv")]


def measure(row: Row, limits: Limits) -> Measure:
    """CV of the worst level against its limit."""
    return Measure(known_or_none(row["unexplained_cv"]), number(limits, NAME, "limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """Which level scatters, how much of it the errors explain, and what that means."""
    measured, limit = beside(float(row["unexplained_cv"]), number(limits, NAME, "limit"), 100)
    explained = known_or_none(row["explained_cv"])
    beyond = "" if explained is None else f", of which their own errors explain {explained * 100:.1f} %"
    return (
        f"Replicates at {row['level_um']:.6g} µM ({listed(row['wells'])}) scatter by {measured} % (limit "
        f"{limit} %){beyond}: not all of them can be right, and the fit rests on them alike."
    )


GATE = Gate(
    name=NAME,
    subjects=("series",),
    phase="series",
    severity="hold",
    unassessed="clear",
    settings=(
        Setting(
            "limit",
            0.15,
            "1",
            "Highest allowed coefficient of variation of replicate rates at a substrate level",
            "common practice, no source",
            low=0.001,
            high=10.0,
        ),
    ),
    text=__doc__,
    needs={"series": ("unexplained_cv",)},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
