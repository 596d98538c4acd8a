"""What each lot comes to over its plate reads, after a batch has been loaded.

The arithmetic is in models.statistics.lots; this stage chooses which estimates a lot's value rests on:
those of clear series without a modulator, of the law that fits the lot best over all its plate reads.
Where no series of a lot is clear, the held ones give a value that is marked held.
"""

from __future__ import annotations

import pandas as pd

from models.identity import result_id
from models.kinetics.laws import law
from models.kinetics.selection import choose_law
from models.statistics.lots import combine_plate_reads
from models.tables import LOT_VALUE_SOURCES, LOT_VALUES

# Vmax belongs to an enzyme level, not to a lot; where the enzyme's amount is known, kcat says what a lot can do.
LEVEL_BOUND = "vmax"
PER_ENZYME = ("kcat", "specific_activity")


def lot_values(current: pd.DataFrame, pass_id: str) -> tuple[pd.DataFrame, pd.DataFrame]:
    """Combine current estimates into lot values.

    Parameters
    ----------
    current
        A row an estimate of the clear wells of an unmodulated series that is not superseded: columns
        estimate_id, series_id, plate_read_id, assay, lot, role, law, constant, value, standard_error, low, high,
        unit, aicc, series_standing, measured_at.
    pass_id
        The pass that these values are written by.

    Returns
    -------
    tuple of DataFrame
        Rows of `lot_values` and of `lot_value_sources`.
    """
    values, sources = [], []
    for (assay, lot, role), of_lot in current.groupby(["assay", "lot", "role"], sort=True):
        held = of_lot["series_standing"] != "clear"
        rest = of_lot[~held] if (~held).any() else of_lot
        fitted = rest[rest["law"] == _law_of_lot(rest)]
        constants = set(fitted["constant"])
        for constant, rows in fitted.groupby("constant", sort=True):
            if constant == LEVEL_BOUND and constants & set(PER_ENZYME):
                continue
            value = combine_plate_reads(
                rows["value"].to_numpy(dtype=float),
                rows["standard_error"].to_numpy(dtype=float),
                pd.factorize(rows["plate_read_id"])[0],
                low=rows["low"].to_numpy(dtype=float),
                high=rows["high"].to_numpy(dtype=float),
            )
            estimate_ids = sorted(rows["estimate_id"])
            lot_value_id = result_id("lot_value", assay, lot, role, constant, estimate_ids)
            values.append(
                {
                    "lot_value_id": lot_value_id,
                    "pass_id": pass_id,
                    "assay": assay,
                    "lot": lot,
                    "role": role,
                    "constant": constant,
                    "value": value.value,
                    "standard_error": value.standard_error,
                    "low": value.low,
                    "high": value.high,
                    "unit": rows["unit"].iloc[0],
                    "between_plate_sd": value.between_plate_sd,
                    "plate_read_count": rows["plate_read_id"].nunique(),
                    "series_count": rows["series_id"].nunique(),
                    "held_series_count": of_lot.loc[held, "series_id"].nunique(),
                    "measured_at": rows["measured_at"].max(),
                    "standing": "held" if held.any() else "clear",
                }
            )
            sources.extend({"lot_value_id": lot_value_id, "estimate_id": each} for each in estimate_ids)
    return (
        pd.DataFrame(values, columns=LOT_VALUES.column_names),
        pd.DataFrame(sources, columns=LOT_VALUE_SOURCES.column_names),
    )


def _law_of_lot(rows: pd.DataFrame) -> str:
    """Law with the most evidence over all plate reads of a lot, among those fitted in every series."""
    per_series = rows.drop_duplicates(["series_id", "law"]).groupby("law")["aicc"]
    everywhere = per_series.count() == rows["series_id"].nunique()
    total = per_series.sum()[everywhere]
    if total.empty:
        return str(min(rows["law"], key=lambda name: law(name).rank))
    return choose_law({str(name): float(aicc) for name, aicc in total.items()})
