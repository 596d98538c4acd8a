"""From readings to rates: which series there are, signal to product, and the rate of every well.

All plate reads of a batch are measured at once; the arithmetic itself is in models.kinetics.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

from flows.frames import rows
from flows.stages.work import PlateWork, RatedBatch
from models.identity import known, known_text, result_id
from models.kinetics.curves import CurveBatch
from models.kinetics.rates import RateSettings, measure_rates
from models.plates import well_position
from models.tables import RATES, SERIES

RATED_ROLES = ("sample", "reference", "blank", "enzyme_blank")
SERIES_ROLES = ("sample", "reference")
SERIES_SHARE = ("role", "lot", "enzyme_nm", "enzyme_ng_per_ml", "modulator", "modulator_um")


def rate_batch(plates: Sequence[PlateWork]) -> RatedBatch:
    """Measure the rate of every well of these plate reads.

    Parameters
    ----------
    plates
        Plate reads with map and recipe, at least one.

    Returns
    -------
    RatedBatch
        Wells, reads, rates and series of the batch.
    """
    wells = pd.concat([_wells_of(number, work) for number, work in enumerate(plates)], ignore_index=True)
    wells, series = _number_series(wells, plates)
    reads = pd.concat([_reads_of(work) for work in plates], ignore_index=True)
    rated = wells[wells["role"].isin(RATED_ROLES)].reset_index(drop=True)
    batch, reads, counts = _curves(rated, reads, plates)
    laws = [plates[plate].recipe.assay.laws for plate in series["plate"]]
    measured = measure_rates(batch, laws, _rate_settings(rated, plates))
    rates = pd.concat([rated[["analysis_id", "well"]], measured.reset_index(drop=True), counts], axis=1)
    return RatedBatch(tuple(plates), wells, reads, rates[RATES.column_names], series, batch)


def _wells_of(plate_number: int, work: PlateWork) -> pd.DataFrame:
    """Mapped wells of one plate read, and after them wells that were read but that the map leaves out."""
    mapped = work.wells.copy()
    unmapped = sorted(set(work.readings["well"]) - set(mapped["well"]), key=well_position)
    if unmapped:
        extra = pd.DataFrame({"well": unmapped, "role": "empty"})
        mapped = pd.concat([mapped, extra.reindex(columns=mapped.columns)], ignore_index=True)
    positions = [well_position(well) for well in mapped["well"]]
    mapped["row_number"] = [row for row, _ in positions]
    mapped["column_number"] = [column for _, column in positions]
    mapped["analysis_id"] = work.analysis_id
    mapped["plate"] = plate_number
    return mapped.sort_values(["row_number", "column_number"], ignore_index=True)


def _number_series(wells: pd.DataFrame, plates: Sequence[PlateWork]) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Find the series: wells of a plate read that share everything but the substrate."""
    member = wells["role"].isin(SERIES_ROLES) & (wells["substrate_um"] > 0)
    columns = ["plate", *SERIES_SHARE]
    wells = wells.assign(series=-1)
    wells.loc[member, "series"] = (
        wells.loc[member].groupby(columns, dropna=False, sort=True).ngroup().to_numpy()
    )
    heads = wells.loc[member].sort_values("series").drop_duplicates("series")
    series = heads[["series", "analysis_id", *columns]].reset_index(drop=True)
    series["assay"] = [plates[plate].recipe.assay_name for plate in series["plate"]]
    series["series_id"] = [
        result_id(
            "series",
            row.analysis_id,
            row.role,
            row.lot,
            known(row.enzyme_nm),
            known(row.enzyme_ng_per_ml),
            known_text(row.modulator),
            known(row.modulator_um),
        )
        for row in rows(series)
    ]
    names = dict(zip(series["series"], series["series_id"], strict=True))
    wells["series_id"] = [names.get(number) for number in wells["series"]]
    if not set(SERIES_SHARE) <= set(SERIES.column_names):
        raise KeyError("what a series shares must be columns of the series table")
    return wells, series


def _reads_of(work: PlateWork) -> pd.DataFrame:
    """Reads of one plate with their state: past_limit where the signal no longer says how much product."""
    reads = work.readings[["well", "read_number", "time_s", "signal", "state"]].copy()
    reads.insert(0, "analysis_id", work.analysis_id)
    signal = reads["signal"].to_numpy(dtype=float)
    limit = work.recipe.assay.signal.linear_limit
    beyond = ~work.conversion.readable(signal) | (signal > (np.inf if limit is None else limit))
    reads["state"] = reads["state"].astype(object).where(~beyond | (reads["state"] != "ok"), "past_limit")
    return reads


def _curves(
    rated: pd.DataFrame, reads: pd.DataFrame, plates: Sequence[PlateWork]
) -> tuple[CurveBatch, pd.DataFrame, pd.DataFrame]:
    """Lay the reads out as one row a well, product where the read is usable; the reads get it too."""
    row_of = pd.Series(np.arange(len(rated)), index=pd.MultiIndex.from_frame(rated[["analysis_id", "well"]]))
    row = row_of.reindex(pd.MultiIndex.from_frame(reads[["analysis_id", "well"]])).to_numpy()
    kept = ~np.isnan(row)
    row, kept_reads = row[kept].astype(np.intp), reads.loc[kept]
    column = kept_reads["read_number"].to_numpy(dtype=np.intp) - 1
    shape = (len(rated), int(column.max(initial=0)) + 1)
    time_s, signal = np.full(shape, np.nan), np.full(shape, np.nan)
    time_s[row, column] = kept_reads["time_s"].to_numpy(dtype=float)
    state = kept_reads["state"].to_numpy()
    usable = state == "ok"
    signal[row[usable], column[usable]] = kept_reads["signal"].to_numpy(dtype=float)[usable]

    plate = rated["plate"].to_numpy(dtype=np.intp)
    assays = [work.recipe.assay for work in plates]
    turnover_um = np.full(shape, np.nan)
    for number, work in enumerate(plates):
        of_plate = plate == number
        turnover_um[of_plate] = work.conversion.turnover_um(list(rated["well"][of_plate]), signal[of_plate])
    product_um = np.full(len(reads), np.nan)
    product_um[kept] = turnover_um[row, column]
    substrate_um = rated["substrate_um"].to_numpy(dtype=float)
    consumable_um = np.array(
        [assays[p].consumable_um(s) if s > 0 else np.nan for p, s in zip(plate, substrate_um, strict=True)]
    )
    from_blank = np.array([assay.signal.product_zero == "blank" for assay in assays])
    batch = CurveBatch(
        time_s=time_s,
        product_um=turnover_um,
        plate=plate,
        series=rated["series"].to_numpy(dtype=np.intp),
        is_blank=(rated["role"] == "blank").to_numpy(),
        is_enzyme_blank=(rated["role"] == "enzyme_blank").to_numpy(),
        substrate_um=substrate_um,
        consumable_um=consumable_um,
        product_zero_is_blank=from_blank[plate],
    )
    beyond = np.isin(state, ("overflow", "past_limit"))
    counts = pd.DataFrame(
        {
            "overflow_count": np.bincount(row[beyond], minlength=len(rated)),
            "missing_count": np.bincount(row[state == "missing"], minlength=len(rated)),
        }
    )
    return batch, reads.assign(product_um=product_um), counts


def _rate_settings(rated: pd.DataFrame, plates: Sequence[PlateWork]) -> RateSettings:
    """Window rules, well by well, from each plate's own gate limits and assay."""
    plate = rated["plate"].to_numpy(dtype=np.intp)

    def limit(gate: str, setting: str) -> np.ndarray:
        of_plates = np.array([float(work.recipe.limits[gate][setting]) for work in plates])
        return np.asarray(of_plates[plate])

    return RateSettings(
        depletion_limit=limit("substrate_depletion", "limit"),
        slope_change_limit=limit("initial_slope_nonlinear", "limit"),
        slope_change_t_limit=limit("initial_slope_nonlinear", "t_limit"),
        shortest_points=np.array([work.recipe.assay.window.shortest_points for work in plates])[plate],
    )
