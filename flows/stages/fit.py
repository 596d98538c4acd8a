"""Fit every series of a batch, with the clear wells and beside it with all that are not void.

The fits are in models.kinetics, the gates on them in `checks`; this stage gives ids and puts the rows that
are stored in order.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from checks.assess import Assessment, assess
from checks.verdicts import plate_read_standing, series_standings, without_consequences
from flows.frames import rows
from flows.stages.constants import stored_constants
from flows.stages.gate import gate_input, limits_by_recipe
from flows.stages.work import FittedBatch, GatedBatch, RatedBatch
from models.identity import result_id
from models.kinetics.fitting import FitResult, fit_rates
from models.tables import ANALYSES, ESTIMATES, FINDINGS, FITS, RATES, SERIES, WELLS

CLEAR, ALL = "clear", "all"


def fit_batch(gated: GatedBatch) -> FittedBatch:
    """Fit a batch both ways, assess its series, and return all rows that are to be stored.

    Parameters
    ----------
    gated
        The batch with standings and findings of its wells.

    Returns
    -------
    FittedBatch
        Rows of analyses (ids and standing only), wells, rates, findings, series, fits and estimates.
    """
    rated = gated.rated
    fits, estimates, refusals = [], [], pd.Series(dtype=object)
    for name, standings in ((CLEAR, ("clear",)), (ALL, ("clear", "held"))):
        used = gated.wells["standing"].isin(standings)
        result = fit_rates(_rates_to_fit(gated, used), _laws(rated))
        some_fits, some_estimates = _stored(rated, result, name)
        fits.append(some_fits)
        estimates.append(some_estimates)
        if name == CLEAR:
            refusals = result.refusals.set_index("series")["reason"]
    all_fits = pd.concat(fits, ignore_index=True)
    all_estimates = pd.concat(estimates, ignore_index=True)

    series = _series_rows(gated, all_fits, refusals)
    assessment = _assess_series(rated, series, all_estimates)
    series_findings = without_consequences(assessment.findings)
    findings = pd.concat([gated.findings, series_findings], ignore_index=True)
    series["standing"] = series_standings(series, findings, gated.wells).to_numpy()
    standing = plate_read_standing(gated.wells, series, findings)
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
        FITS.name: all_fits[FITS.column_names],
        ESTIMATES.name: all_estimates[ESTIMATES.column_names],
    }
    return FittedBatch(rated.plates, tables, (*gated.runs, *assessment.runs))


def _laws(rated: RatedBatch) -> list[tuple[str, ...]]:
    return [rated.plates[plate].recipe.assay.laws for plate in rated.series["plate"]]


def _rates_to_fit(gated: GatedBatch, used: pd.Series) -> pd.DataFrame:
    """Rates of the wells of series that may be fitted, each with the mean substrate over its window."""
    wells = gated.wells.loc[
        used & (gated.wells["series"] >= 0), ["analysis_id", "well", "series", "plate", "substrate_um"]
    ]
    joined = wells.merge(gated.rated.rates, on=["analysis_id", "well"], how="inner", validate="1:1")
    frame = pd.DataFrame(
        {
            "series": joined["series"],
            "plate": joined["plate"],
            "substrate_um": joined["mean_substrate_um"],
            "nominal_substrate_um": joined["substrate_um"],
            "v_um_per_s": joined["v0_um_per_s"],
            "v_se_um_per_s": joined["v0_se_um_per_s"],
        }
    )
    return frame[frame["v_um_per_s"].notna()].reset_index(drop=True)


def _stored(rated: RatedBatch, result: FitResult, wells_fitted: str) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Fits and estimates of one way of fitting, with the ids and names of their series."""
    of_series = rated.series.set_index("series")
    fits = result.fits.join(of_series[["series_id", "analysis_id"]], on="series")
    fits = fits.assign(wells=wells_fitted, grid_id=None, lack_of_fit_p=np.nan, runs_p=np.nan)
    fits["fit_id"] = [result_id("fit", row.series_id, row.law, wells_fitted) for row in rows(fits)]
    constants = stored_constants(rated, result)
    constants = constants.join(of_series[["series_id", "analysis_id", "assay", "lot"]], on="series")
    constants = constants.merge(
        fits[["series_id", "law", "fit_id"]], on=["series_id", "law"], how="left", validate="m:1"
    )
    constants = constants.assign(wells=wells_fitted, grid_id=None)
    constants["estimate_id"] = [result_id("estimate", row.fit_id, row.constant) for row in rows(constants)]
    return fits, constants


def _series_rows(gated: GatedBatch, fits: pd.DataFrame, refusals: pd.Series) -> pd.DataFrame:
    """Series with counts of their wells, the law chosen for the clear wells, or why there is none."""
    series = gated.rated.series.set_index("series")
    wells = gated.wells[gated.wells["series"] >= 0]
    clear = wells[wells["standing"] == "clear"].groupby("series")["substrate_um"]
    series["well_count"] = wells.groupby("series").size()
    series["clear_well_count"] = clear.size().reindex(series.index, fill_value=0)
    series["level_count"] = clear.nunique().reindex(series.index, fill_value=0)
    series["lowest_substrate_um"] = clear.min().reindex(series.index)
    series["highest_substrate_um"] = clear.max().reindex(series.index)
    chosen = fits[fits["chosen"] & (fits["wells"] == CLEAR)].set_index("series")["law"]
    series["law"] = chosen.reindex(series.index).astype(object)
    series["refusal"] = refusals.reindex(series.index).astype(object)
    return series.reset_index()


def _assess_series(rated: RatedBatch, series: pd.DataFrame, estimates: pd.DataFrame) -> Assessment:
    of_clear_wells = estimates[(estimates["wells"] == CLEAR) & estimates["chosen"]]
    data = gate_input(rated, series.drop(columns="series"), of_clear_wells[ESTIMATES.column_names])
    return assess("series", data, limits_by_recipe(rated.plates))
