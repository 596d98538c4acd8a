"""Fit every series and grid of a batch, hold the fits against the gates, and give all rows that are stored.

Three ways beside each other: rates of the clear wells, rates of all wells that are not void, and whole
progress curves. The fits are in models.kinetics, the gates in `checks`; this stage knows the order only.
"""

from __future__ import annotations

from dataclasses import dataclass

import pandas as pd

from checks.assess import Assessment, assess
from checks.gates.gate import GateInput
from checks.verdicts import (
    plate_read_standing,
    series_standings,
    well_standings,
    without_consequences,
    worst_standing,
)
from flows.stages.gate import gate_input, limits_by_recipe
from flows.stages.grids import fit_grids_of
from flows.stages.plate_statistics import plate_statistics
from flows.stages.stored_fits import StoredFits, joined, law_chosen, stored_fits
from flows.stages.suggestions import suggest_levels
from flows.stages.whole_curves import WholeCurves, fit_whole_curves
from flows.stages.work import FittedBatch, GatedBatch
from models.kinetics.fit_results import FitResult
from models.kinetics.fitting import FitSettings, fit_rates
from models.tables import (
    ANALYSES,
    COMPARISONS,
    FINDINGS,
    GRIDS,
    PLATE_STATISTICS,
    RATES,
    SERIES,
    SHIFTS,
    SUGGESTIONS,
    WELLS,
)

CLEAR, ALL, CURVES = "clear", "all", "curves"
STANDINGS_FITTED = {CLEAR: ("clear",), ALL: ("clear", "held")}


def fit_batch(gated: GatedBatch) -> FittedBatch:
    """Fit a batch, assess its series, and return all rows that are to be stored.

    Parameters
    ----------
    gated
        The batch with standings and findings of its wells.

    Returns
    -------
    FittedBatch
        Rows of analyses (ids and standing only) and of every table that hangs on them.
    """
    rated = gated.rated
    fitted = _fit(gated, CLEAR)
    by_fit = assess(
        "fit", _gate_input(gated, _series_rows(gated, fitted), fitted.stored), limits_by_recipe(rated.plates)
    )
    gated, changed = _held_further(gated, by_fit)
    if changed:
        fitted = _fit(gated, CLEAR)
    curves = fit_whole_curves(gated, fitted.result, CURVES)
    stored = joined([fitted.stored, _fit(gated, ALL).stored, curves.stored])

    series = _series_rows(gated, fitted)
    data = _gate_input(gated, series, stored, curves)
    by_series = assess("series", data, limits_by_recipe(rated.plates))
    findings = _together(gated.findings, without_consequences(by_series.findings))
    series["standing"] = series_standings(series, findings, gated.wells).to_numpy()
    assays = {work.analysis_id: work.recipe.assay for work in rated.plates}
    suggestions = suggest_levels(series, stored.estimates, findings, gated.wells, stored.points, assays)
    grids = fit_grids_of(gated, fitted.stored.estimates, findings, STANDINGS_FITTED)
    stored = joined([stored, *grids.stored])
    standing = plate_read_standing(gated.wells, pd.concat([series, grids.rows]), findings)
    analyses = pd.DataFrame(
        {
            "analysis_id": [work.analysis_id for work in rated.plates],
            "plate_read_id": [work.plate_read_id for work in rated.plates],
            "map_id": [work.map_id for work in rated.plates],
            "assay": [work.recipe.assay_name for work in rated.plates],
            "recipe_id": [work.recipe.recipe_id for work in rated.plates],
            "standing": [standing[work.analysis_id] for work in rated.plates],
        }
    )
    tables = {
        ANALYSES.name: analyses,
        WELLS.name: gated.wells[WELLS.column_names],
        RATES.name: rated.rates,
        FINDINGS.name: findings[FINDINGS.column_names],
        SERIES.name: series[SERIES.column_names],
        GRIDS.name: grids.rows[GRIDS.column_names],
        **stored.tables(),
        COMPARISONS.name: curves.comparisons[COMPARISONS.column_names],
        SHIFTS.name: grids.shifts[SHIFTS.column_names],
        SUGGESTIONS.name: suggestions[SUGGESTIONS.column_names],
        PLATE_STATISTICS.name: plate_statistics(data, {**gated.metrics, **by_series.metrics}),
    }
    return FittedBatch(rated.plates, tables, (*gated.runs, *by_series.runs))


@dataclass(frozen=True)
class _Fitted:
    """Series fitted to the rates of some wells, as they came and as they are stored."""

    result: FitResult
    stored: StoredFits


def _fit(gated: GatedBatch, wells_fitted: str) -> _Fitted:
    rated = gated.rated
    used = gated.wells["standing"].isin(STANDINGS_FITTED[wells_fitted])
    assays = [rated.plates[plate].recipe.assay for plate in rated.series["plate"]]
    settings = FitSettings([assay.loss for assay in assays])
    result = fit_rates(series_rates(gated, used), [assay.laws for assay in assays], settings)
    subjects = rated.series.set_index("series")
    return _Fitted(result, stored_fits(rated.plates, subjects, "series", result, wells_fitted))


def series_rates(gated: GatedBatch, used: pd.Series) -> pd.DataFrame:
    """Known rates of the wells used that belong to a series, by (analysis_id, well), as `fit_rates` takes
    them: each with the mean substrate over its window.
    """
    wells = gated.wells.loc[
        used & (gated.wells["series"] >= 0), ["analysis_id", "well", "series", "plate", "substrate_um"]
    ]
    joined_rates = wells.merge(gated.rated.rates, on=["analysis_id", "well"], how="inner", validate="1:1")
    frame = pd.DataFrame(
        {
            "series": joined_rates["series"],
            "plate": joined_rates["plate"],
            "substrate_um": joined_rates["mean_substrate_um"],
            "nominal_substrate_um": joined_rates["substrate_um"],
            "v_um_per_s": joined_rates["v0_um_per_s"],
            "v_se_um_per_s": joined_rates["v0_se_um_per_s"],
        }
    )
    frame.index = pd.MultiIndex.from_frame(joined_rates[["analysis_id", "well"]])
    return frame[frame["v_um_per_s"].notna()]


def _series_rows(gated: GatedBatch, fitted: _Fitted) -> pd.DataFrame:
    """Series with counts of their wells, the law chosen for the clear wells, or why there is none."""
    series = gated.rated.series.set_index("series")
    wells = gated.wells[gated.wells["series"] >= 0]
    clear = wells[wells["standing"] == "clear"].groupby("series")["substrate_um"]
    series["well_count"] = wells.groupby("series").size()
    series["clear_well_count"] = clear.size().reindex(series.index, fill_value=0)
    series["level_count"] = clear.nunique().reindex(series.index, fill_value=0)
    series["lowest_substrate_um"] = clear.min().reindex(series.index)
    series["highest_substrate_um"] = clear.max().reindex(series.index)
    series["law"] = law_chosen(fitted.result).reindex(series.index)
    refusals = fitted.result.refusals.set_index("series")["reason"]
    series["refusal"] = refusals.reindex(series.index).astype(object)
    return series.reset_index()


def _gate_input(
    gated: GatedBatch, series: pd.DataFrame, stored: StoredFits, curves: WholeCurves | None = None
) -> GateInput:
    return gate_input(
        gated.rated,
        series=series.drop(columns="series"),
        estimates=stored.estimates,
        fits=stored.fits,
        points=stored.points,
        comparisons=None if curves is None else curves.comparisons,
    )


def _held_further(gated: GatedBatch, by_fit: Assessment) -> tuple[GatedBatch, bool]:
    """The batch with what a first fit says of its wells, and whether any well's standing changed by it."""
    further = without_consequences(by_fit.findings)
    standing = worst_standing(gated.wells["standing"], well_standings(gated.wells, further))
    changed = not standing.equals(gated.wells["standing"])
    wells = gated.wells.assign(standing=standing)
    findings = _together(gated.findings, further)
    runs, metrics = (*gated.runs, *by_fit.runs), {**gated.metrics, **by_fit.metrics}
    return GatedBatch(gated.rated, wells, findings, runs, metrics), changed


def _together(first: pd.DataFrame, second: pd.DataFrame) -> pd.DataFrame:
    """Findings of two phases in one frame."""
    parts = [part for part in (first, second) if len(part)]
    return pd.concat(parts, ignore_index=True) if parts else FINDINGS.empty()
