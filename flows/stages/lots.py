"""What each lot comes to over its plate reads, after a batch has been loaded.

The arithmetic is in models.statistics.lots; this stage chooses which estimates a lot's value rests on:
those of clear series without a modulator, of the law that fits the lot best over all its plate reads, and
what clear grids say of the modulator. Whole curves count where a series has no usable initial rates.
Where no series of a lot is clear, the held ones give a value that is marked held.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd

from flows.site.layout import Site
from flows.warehouse.writer import loader
from models.calibration.shared_error import add_shared_error, without_shared_error
from models.identity import known_text, result_id
from models.kinetics.laws import LAWS, law
from models.kinetics.progress.fitting import LAW as INTEGRATED_LAW
from models.statistics.lots import LotValue, combine_plate_reads
from models.tables import LOT_VALUE_SOURCES, LOT_VALUES

# Vmax belongs to an enzyme level, not to a lot; where the enzyme's amount is known, a turnover stands for it.
LEVEL_BOUND = "vmax"
PER_ENZYME = ("kcat", "specific_activity")
# The integrated law has the constants of the law that it integrates.
SAME_CONSTANTS = {INTEGRATED_LAW: "michaelis_menten"}
# What a grid says that no series can: the constants of its modulator.
OF_MODULATOR = {"ki"} | (
    {each.name for one in LAWS if one.fewest_modulator_levels for each in one.shape_constants}
    - {each.name for one in LAWS if not one.fewest_modulator_levels for each in one.constants}
)


def lot_values(current: pd.DataFrame, pass_id: str) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Combine current estimates into lot values.

    Parameters
    ----------
    current
        A row an estimate, not superseded, of the clear wells of a series without modulator or of a grid, or
        of the whole curves of a series that has no other: columns estimate_id, series_id (or the grid's id),
        modulator (None for a series), plate_read_id, assay, lot, role, law, chosen, constant, value,
        standard_error, low, high, unit, assay_relative_error, series_standing, measured_at.
    pass_id
        The pass that these values are written by.

    Returns
    -------
    tuple of DataFrame
        Rows of `lot_values` and of `lot_value_sources`.
    """
    values: list[dict[str, object]] = []
    sources: list[dict[str, str]] = []
    current = current.assign(law=current["law"].replace(SAME_CONSTANTS))
    told = current[current["modulator"].isna() | current["constant"].isin(OF_MODULATOR)]
    for _, of_lot in told.groupby(["assay", "lot", "role", "modulator"], dropna=False):
        assay, lot, role, modulator = (
            known_text(of_lot[name].iloc[0]) for name in ("assay", "lot", "role", "modulator")
        )
        held = of_lot["series_standing"] != "clear"
        rest = of_lot[~held] if (~held).any() else of_lot
        fitted = rest[rest["law"] == _law_of_lot(rest)]
        constants = set(fitted["constant"])
        for name, rows in fitted.groupby("constant", sort=True):
            constant = str(name)
            if constant == LEVEL_BOUND and constants & set(PER_ENZYME):
                continue
            value = _combined(rows)
            estimate_ids = sorted(rows["estimate_id"])
            held_count = of_lot.loc[held, "series_id"].nunique()
            lot_value_id = result_id(
                "lot_value", assay, lot, role, modulator, constant, estimate_ids, held_count
            )
            values.append(
                {
                    "lot_value_id": lot_value_id,
                    "pass_id": pass_id,
                    "assay": assay,
                    "lot": lot,
                    "role": role,
                    "modulator": modulator,
                    "constant": constant,
                    "value": value.value,
                    "standard_error": value.standard_error,
                    "low": value.low,
                    "high": value.high,
                    "unit": rows["unit"].iloc[0],
                    "between_plate_sd": value.between_plate_sd,
                    "plate_read_count": rows["plate_read_id"].nunique(),
                    "series_count": rows["series_id"].nunique(),
                    "held_series_count": held_count,
                    "measured_at": rows["measured_at"].max(),
                    "standing": "held" if held.any() else "clear",
                    "reason": value.reason,
                }
            )
            sources.extend({"lot_value_id": lot_value_id, "estimate_id": each} for each in estimate_ids)
    return (
        pd.DataFrame(values, columns=LOT_VALUES.column_names),
        pd.DataFrame(sources, columns=LOT_VALUE_SOURCES.column_names),
    )


def _combined(rows: pd.DataFrame) -> LotValue:
    """A constant over its plate reads; the error of the assay's calibration, in all alike, goes in last."""
    value, error, low, high = (
        rows[name].to_numpy(dtype=float) for name in ("value", "standard_error", "low", "high")
    )
    of_assay = rows["assay_relative_error"].to_numpy(dtype=float)
    if of_assay.any():
        own = without_shared_error(value, error, low, high, of_assay)
        error, low, high = own.standard_error, own.low, own.high
    plates = pd.factorize(rows["plate_read_id"])[0]
    combined = combine_plate_reads(value, error, plates, low=low, high=high)
    if not of_assay.any():
        return combined
    whole = add_shared_error(
        np.array(combined.value),
        np.array(combined.standard_error),
        np.array(combined.low),
        np.array(combined.high),
        float(of_assay.max()),
    )
    return replace(
        combined, standard_error=float(whole.standard_error), low=float(whole.low), high=float(whole.high)
    )


def _law_of_lot(rows: pd.DataFrame) -> str:
    """Law that most of a lot's series chose, among those fitted in every one; the simpler where as many did.

    Not the sum of AICc: plate reads that stray to opposite sides of a simpler law would add up against it.
    """
    per_series = rows.drop_duplicates(["series_id", "law"]).groupby("law")
    fitted, chosen = per_series.size(), per_series["chosen"].sum()
    everywhere = fitted.index[fitted == rows["series_id"].nunique()]
    candidates = [str(name) for name in (everywhere if len(everywhere) else fitted.index)]
    return min(candidates, key=lambda name: (-int(chosen[name]), law(name).rank))


_ESTIMATES_OF_LOTS = """
    SELECT e.estimate_id, coalesce(e.series_id, e.grid_id) AS series_id, g.modulator, c.plate_read_id,
           e.assay, e.lot, coalesce(s.role, g.role) AS role, e.law, e.constant,
           e.chosen, e.value, e.standard_error, e.low, e.high, e.unit, e.assay_relative_error,
           coalesce(s.standing, g.standing) AS series_standing, c.measured_at
    FROM estimates e
    LEFT JOIN series s ON s.series_id = e.series_id
    LEFT JOIN grids g ON g.grid_id = e.grid_id
    JOIN current_analyses c ON c.analysis_id = e.analysis_id
    SEMI JOIN wanted w ON w.assay = e.assay AND w.lot = e.lot
    WHERE (e.wells = 'clear' OR (e.wells = 'curves' AND e.chosen))
      AND (s.modulator IS NULL OR coalesce(s.modulator_um, 0) = 0)
    ORDER BY e.estimate_id
"""


def current_estimates(site: Site, series: pd.DataFrame) -> pd.DataFrame:
    """Current estimates, of all candidate laws, of every lot that these series belong to.

    Parameters
    ----------
    site
        The site; its warehouse holds the estimates already.
    series
        Rows with columns assay and lot.

    Returns
    -------
    DataFrame
        What `lot_values` takes.
    """
    with loader(site) as connection:
        connection.register("wanted", series[["assay", "lot"]].drop_duplicates())
        estimates: pd.DataFrame = connection.sql(_ESTIMATES_OF_LOTS).df()
        return estimates
