"""The night at a glance: plates that wait for a person, oldest first, what holds them, and what came clear.

Reads; draws nothing.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import datetime
from typing import Any

import duckdb

from flows.morning.asking import ask
from models.plates import plate_format

PLATES_SHOWN = 60
_PLATES = """
    SELECT c.analysis_id, c.plate_id, c.assay, c.measured_at, c.revision, c.standing, p.plate_format,
           (SELECT count(*) FROM wells w
            WHERE w.analysis_id = c.analysis_id AND w.standing = 'held') AS held_well_count,
           (SELECT count(*) FROM wells w
            WHERE w.analysis_id = c.analysis_id AND w.standing = 'void') AS void_well_count,
           (SELECT count(*) FROM series s
            WHERE s.analysis_id = c.analysis_id AND s.standing = 'held') AS held_series_count
    FROM current_analyses c JOIN plate_reads p USING (plate_read_id)
"""
_WAITING = "c.standing = 'held'"


@dataclass(frozen=True)
class PlateGlance:
    """One plate read as the night's page shows it.

    Attributes
    ----------
    row
        analysis_id, plate_id, assay, measured_at, revision, standing and counts.
    rows, columns
        Of the plate.
    wells
        row_number, column_number, role and standing of each mapped well.
    """

    row: Any
    rows: int
    columns: int
    wells: list[Any]


@dataclass(frozen=True)
class Night:
    """What the page of the night shows.

    Attributes
    ----------
    pass_at
        When the last pass ended, UTC; None before the first.
    waiting, clear
        Plates that need a person, oldest first, and others of the last pass.
    waiting_count
        All that wait, also those beyond what is shown.
    gates
        gate, finding_count and plate_count of what waits.
    quarantined
        Files in quarantine.
    """

    pass_at: datetime | None
    waiting: list[PlateGlance]
    clear: list[PlateGlance]
    waiting_count: int
    gates: list[Any]
    quarantined: int


def the_night(connection: duckdb.DuckDBPyConnection) -> Night:
    """Read the night."""
    last = ask(connection, "SELECT pass_id, finished_at FROM passes ORDER BY started_at DESC LIMIT 1")
    waiting = ask(
        connection,
        f"{_PLATES} WHERE {_WAITING} ORDER BY c.measured_at, c.plate_id, c.analysis_id LIMIT {PLATES_SHOWN}",
    )
    clear = ask(
        connection,
        f"{_PLATES} WHERE NOT ({_WAITING}) AND c.pass_id = $1 ORDER BY c.measured_at, c.plate_id, "
        f"c.analysis_id LIMIT {PLATES_SHOWN}",
        last[0].pass_id if last else "",
    )
    return Night(
        last[0].finished_at if last else None,
        _glances(connection, waiting),
        _glances(connection, clear),
        int(ask(connection, f"SELECT count(*) AS n FROM current_analyses c WHERE {_WAITING}")[0].n),
        ask(
            connection,
            "SELECT f.gate, count(*) AS finding_count, count(DISTINCT f.analysis_id) AS plate_count "
            "FROM findings f JOIN current_analyses c USING (analysis_id) "
            f"WHERE f.outcome = 'breach' AND {_WAITING} GROUP BY f.gate ORDER BY finding_count DESC, f.gate",
        ),
        int(ask(connection, "SELECT count(*) AS n FROM files WHERE kind = 'quarantined'")[0].n),
    )


def _glances(connection: duckdb.DuckDBPyConnection, plates: list[Any]) -> list[PlateGlance]:
    wells = ask(
        connection,
        "SELECT analysis_id, row_number, column_number, role, standing FROM wells "
        "WHERE analysis_id IN (SELECT unnest($1::VARCHAR[])) ORDER BY row_number, column_number",
        [plate.analysis_id for plate in plates],
    )
    by_plate: dict[str, list[Any]] = {}
    for well in wells:
        by_plate.setdefault(well.analysis_id, []).append(well)
    return [
        PlateGlance(plate, shape.row_count, shape.column_count, by_plate.get(plate.analysis_id, []))
        for plate in plates
        for shape in (plate_format(plate.plate_format),)
    ]
