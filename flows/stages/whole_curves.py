"""Whole progress curves of a batch fitted by the integrated rate law, beside the initial rates.

The second estimate of every series, and the only one where the initial rates give none. Which wells and
series take part is said here; the fits and the comparison are in models.kinetics.progress.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import pandas as pd

from flows.stages.stored_fits import StoredFits, joined, law_chosen, stored_fits
from flows.stages.work import GatedBatch
from models.kinetics.fit_results import FIT_COLUMNS, FitResult
from models.kinetics.influence import rate_influence
from models.kinetics.progress.comparison import compare_with_rates
from models.kinetics.progress.fitting import LAW, ProgressOptions, ProgressResult, fit_progress
from models.records.assay import Assay
from models.records.assay import WholeCurves as Stated
from models.tables import COMPARISONS

DIFFERENTIAL_LAW = "michaelis_menten"
"""The law of rates whose integral is fitted: a series whose candidates lack it has no such estimate."""
MENDED_BY_WHOLE_CURVES = "substrate_depletion"
"""The gate whose held wells the integrated law can use: it knows how substrate is used up."""


@dataclass(frozen=True)
class WholeCurves:
    """Rows of the fits to whole curves, and of their comparison with initial rates."""

    stored: StoredFits
    comparisons: pd.DataFrame


def fit_whole_curves(gated: GatedBatch, initial: FitResult, wells_fitted: str) -> WholeCurves:
    """Fit the whole curves of every series whose law can be integrated here.

    Parameters
    ----------
    gated
        The batch with standings and findings of its wells.
    initial
        Fits of its series to the initial rates of the clear wells.
    wells_fitted
        What such fits are called in `estimates.wells`.
    """
    rated = gated.rated
    assays = [rated.plates[plate].recipe.assay for plate in rated.series["plate"]]
    batch = rated.curves
    usable = _usable_wells(gated, initial)
    stored, comparisons = [], []
    for stated in dict.fromkeys(assay.whole_curves for assay in assays if _integrable(assay)):
        of_stated = np.array([_integrable(each) and each.whole_curves == stated for each in assays])
        mine = usable & of_stated[batch.series] & (batch.series >= 0)
        curves = replace(batch, series=np.where(mine, batch.series, -1))
        progress = fit_progress(curves, len(assays), _options(stated))
        result = _as_fits(progress, initial)
        subjects = rated.series.set_index("series")
        stored.append(stored_fits(rated.plates, subjects, "series", result, wells_fitted, stored_as=LAW))
        comparisons.append(_compared(gated, progress, initial))
    if not stored:
        none = _as_fits(fit_progress(batch, 0), initial)
        subjects = rated.series.set_index("series")
        return WholeCurves(
            stored_fits(rated.plates, subjects, "series", none, wells_fitted, stored_as=LAW),
            COMPARISONS.empty(),
        )
    return WholeCurves(joined(stored), pd.concat(comparisons, ignore_index=True))


def _compared(gated: GatedBatch, progress: ProgressResult, initial: FitResult) -> pd.DataFrame:
    """Rows of `comparisons`: whole curves against initial rates, of series whose law was chosen for these."""
    rated = gated.rated
    row_of = {key: row for row, key in enumerate(_well_keys(rated.rates))}
    of_rates = rate_influence(initial.points, initial.constants, DIFFERENTIAL_LAW)
    of_rates["well"] = [row_of[key] for key in of_rates["row"]]
    constants = initial.constants
    counted = constants["chosen"].astype(bool) & (constants["law"] == DIFFERENTIAL_LAW)
    compared = compare_with_rates(progress, of_rates, constants[counted])
    ids = rated.series.set_index("series")[["series_id", "analysis_id"]]
    return compared.join(ids, on="series")[COMPARISONS.column_names]


def _well_keys(frame: pd.DataFrame) -> pd.MultiIndex:
    return pd.MultiIndex.from_frame(frame[["analysis_id", "well"]])


def _integrable(assay: Assay) -> bool:
    return assay.whole_curves.fit and DIFFERENTIAL_LAW in assay.laws and assay.limiting_reagent is None


def _usable_wells(gated: GatedBatch, initial: FitResult) -> np.ndarray:
    """Whether each curve may be used, shape (W,).

    The wells that the initial rates rest on; where a series has no fit to these, also wells that depletion
    alone holds. In a series whose other wells are not depleted, one that is has more enzyme than mapped.
    """
    of_wells = gated.findings[(gated.findings["subject"] == "well") & (gated.findings["outcome"] == "breach")]
    by_well = of_wells.groupby(["analysis_id", "well"])["gate"].agg(set)
    depleted = by_well.index[[gates == {MENDED_BY_WHOLE_CURVES} for gates in by_well]]
    key = _well_keys(gated.wells)
    no_rates = ~gated.wells["series"].isin(law_chosen(initial).index)
    usable = (gated.wells["standing"] == "clear") | (no_rates & key.isin(depleted))
    return pd.Series(usable.to_numpy(), index=key).reindex(_well_keys(gated.rated.rates)).to_numpy(dtype=bool)


def _options(stated: Stated) -> ProgressOptions:
    return ProgressOptions(
        product_inhibition=stated.product_inhibition,
        enzyme_loss=stated.enzyme_loss,
        dead_time_s=stated.dead_time_s,
    )


def _as_fits(progress: ProgressResult, initial: FitResult) -> FitResult:
    """Fits to whole curves as fits to rates are described, by the law whose integral they are.

    Chosen are those whose series has no fit to its initial rates.
    """
    fitted = set(law_chosen(initial).index)
    fits = progress.fits.assign(law=DIFFERENTIAL_LAW, chosen=~progress.fits["series"].isin(fitted))
    fits = fits.reindex(columns=list(FIT_COLUMNS))
    constants = progress.constants.assign(
        law=DIFFERENTIAL_LAW, chosen=~progress.constants["series"].isin(fitted)
    )
    covariance = {}
    for number, of_logarithms in progress.covariance.items():
        value = constants.loc[constants["series"] == number, "value"].to_numpy(dtype=float)
        covariance[number, DIFFERENTIAL_LAW] = of_logarithms * np.outer(value, value)
    return FitResult(fits, constants, progress.refusals, initial.points[:0], covariance, {})
