"""Holds a plate read on which the reference lot is not what it has always been.

Purpose: the reference lot does not change, the assay might. Where a constant of the reference leaves the band
in which it has always lain, the other lots of the plate were measured under the same changed conditions.

Formula: |x - mean| / sd > limit, for the worst constant x of the plate's reference lots, over their series
without modulator, with mean and sd of the chart's base as the assay states them in chart_bases.

What it leaves to the chart: of the Western Electric rules only the first, one point beyond 3 sd, belongs
here. A plate read's findings must follow from its own bytes and recipe alone, so that the same bytes and the
same recipe give the same findings whenever they are replayed; rules on runs of points look at history, and
are the chart's. A reference lot without a stated base has no chart yet: not applicable.

Source: Western Electric Co., Statistical Quality Control Handbook, 1956, rule 1; W. A. Shewhart, Economic
Control of Quality of Manufactured Product, Van Nostrand 1931 (limits of 3 sd).

Default: 3 sd, which a plate read in control passes in 99.7 % for each constant on a chart.
"""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from checks.gates.chosen_fits import fits_that_count
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
from checks.gates.saturation_not_reached import CONSTANT_NAMES
from checks.gates.wording import beside

NAME = "reference_off_chart"
BASE_COLUMNS = ("recipe_id", "lot", "constant", "mean", "sd")


def metrics(data: GateInput) -> pd.DataFrame:
    """Largest distance of a reference lot's constants from their chart's mean, of plate reads with a base."""
    if data.series is None or data.estimates is None:
        raise ValueError(f"{NAME} judges fits: it needs series and estimates")
    bases = pd.DataFrame(
        [
            (recipe, base.lot, base.constant, base.mean, base.sd)
            for recipe, assay in data.assays.items()
            for base in assay.chart_bases
        ],
        columns=list(BASE_COLUMNS),
    )
    recipes = data.analyses[["analysis_id", "recipe_id"]]
    charted = recipes[recipes["recipe_id"].isin(bases["recipe_id"])]
    wells = data.wells.loc[data.wells["role"] == "reference", ["analysis_id", "lot"]].drop_duplicates()
    wells = wells.merge(charted, on="analysis_id")
    with_base = wells.merge(bases[["recipe_id", "lot"]].drop_duplicates(), on=["recipe_id", "lot"])
    bare = ~charted["analysis_id"].isin(wells["analysis_id"])
    plates = charted[bare | charted["analysis_id"].isin(with_base["analysis_id"])].reset_index(drop=True)
    worst = _worst(data.series, data.estimates, with_base.merge(bases, on=["recipe_id", "lot"]))
    worst = worst.reindex(plates["analysis_id"])
    distance = worst["distance"].to_numpy(dtype=float)
    reason = np.select(
        [plates["analysis_id"].isin(charted.loc[bare, "analysis_id"]), ~np.isfinite(distance)],
        [
            "the plate has no reference lot, for which the assay states a chart",
            "the reference lot has no clear estimate of a constant on its chart",
        ],
        default="",
    )
    names = ("lot", "constant", "value", "unit", "mean", "sd")
    return metrics_frame(
        "plate_read",
        plates,
        reason,
        distance_sd=np.where(reason == "", distance, np.nan),
        **{f"of_{name}": worst[name].to_numpy(dtype=object) for name in names},
    )


def _worst(series: pd.DataFrame, estimates: pd.DataFrame, charts: pd.DataFrame) -> pd.DataFrame:
    """The constant furthest from its chart's mean, one row an analysis."""
    # Charts are of the lot alone: what a modulator does to its constants is no drift.
    bare = (series["role"] == "reference") & ~(series["modulator_um"].astype(float) > 0)
    members = series.loc[bare, ["series_id", "analysis_id", "lot"]]
    columns = ["series_id", "constant", "value", "unit"]
    found = members.merge(fits_that_count(estimates)[columns], on="series_id")
    found = found.merge(charts, on=["analysis_id", "lot", "constant"])
    found["distance"] = (found["value"].astype(float) - found["mean"]).abs() / found["sd"]
    found = found.dropna(subset="distance")
    found = found.sort_values(["distance", "series_id", "constant"], ascending=[False, True, True])
    return found.drop_duplicates("analysis_id").set_index("analysis_id")


def expectations(limits: Limits, _subject: Subject) -> list[Any]:
    """Expect the reference within the limits of its chart."""
    from checks import expectations as expect

    return [expect.at_most(NAME, "distance_sd", number(limits, NAME, "limit"), rule="beyond_limit")]


def measure(row: Row, limits: Limits) -> Measure:
    """Distance from the chart's mean against its limit, both in sd of the chart."""
    return Measure(known_or_none(row["distance_sd"]), number(limits, NAME, "limit"), "1")


def sentence(row: Row, limits: Limits) -> str:
    """Which constant of which lot is off, by how much, and what that says of the plate."""
    measured, limit = beside(float(row["distance_sd"]), number(limits, NAME, "limit"))
    constant, unit = row["of_constant"], "" if row["of_unit"] == "1" else f" {row['of_unit']}"
    return (
        f"{CONSTANT_NAMES.get(constant, constant)} of the reference lot {row['of_lot']} is "
        f"{row['of_value']:.4g}{unit}, {measured} sd from the {row['of_mean']:.4g} of its chart (limit "
        f"{limit} sd): the plate read was not like those before it, and neither are its other lots."
    )


GATE = Gate(
    name=NAME,
    subjects=("plate_read",),
    phase="series",
    severity="hold",
    unassessed="clear",
    settings=(
        Setting(
            "limit",
            3.0,
            "1",
            "Standard deviations of the chart by which a constant of the reference may lie off its mean",
            "Western Electric rule 1",
            low=0.5,
            high=100.0,
        ),
    ),
    text=__doc__,
    needs={"plate_read": ("distance_sd",)},
    metrics=metrics,
    expectations=expectations,
    measure=measure,
    sentence=sentence,
)
