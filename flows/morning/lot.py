"""A lot as the reviewer sees it: constants over its plate reads, and each plate read's own. Reads only."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import duckdb

from flows.morning.asking import NotFound, ask


@dataclass(frozen=True)
class Lot:
    """What the page of a lot shows.

    Attributes
    ----------
    values
        Rows of lot_latest.
    plates
        Current estimates of its series by plate read, oldest first: measured_at, plate_id, constant, value,
        low, high, unit, series_standing, series_id, analysis_id.
    """

    assay: str
    lot: str
    values: list[Any]
    plates: list[Any]


def the_lot(connection: duckdb.DuckDBPyConnection, assay: str, lot: str) -> Lot:
    """Read a lot.

    Raises
    ------
    NotFound
        If the assay has no such lot.
    """
    values = ask(
        connection,
        "SELECT * FROM lot_latest WHERE assay = $1 AND lot = $2 ORDER BY modulator NULLS FIRST, constant",
        assay,
        lot,
    )
    plates = ask(
        connection,
        "SELECT * FROM current_estimates WHERE assay = $1 AND lot = $2 AND wells = 'clear' "
        "AND series_id IS NOT NULL ORDER BY constant, measured_at, plate_id, series_id",
        assay,
        lot,
    )
    if not values and not plates:
        raise NotFound(f"there is no lot {lot} of {assay}")
    return Lot(assay, lot, values, plates)
