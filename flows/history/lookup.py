"""Finding things in the published warehouse: what an id or its first digits mean, and a result's readings."""

from __future__ import annotations

import re

import duckdb

from models.errors import QueryError

SHORTEST_PREFIX = 4

IDS: dict[str, tuple[str, str]] = {
    "lot value": ("lot_values", "lot_value_id"),
    "estimate": ("estimates", "estimate_id"),
    "fit": ("fits", "fit_id"),
    "series": ("series", "series_id"),
    "grid": ("grids", "grid_id"),
    "analysis": ("analyses", "analysis_id"),
    "plate read": ("plate_reads", "plate_read_id"),
    "file": ("files", "file_id"),
    "recipe": ("recipes", "recipe_id"),
}
"""Table and column of each kind of id that a person may type."""
HOW_TO_FIND = (
    'ids are listed by: halfsat history "SELECT estimate_id, lot, constant, value FROM current_estimates"'
)


def find_id(connection: duckdb.DuckDBPyConnection, prefix: str) -> tuple[str, str]:
    """Kind and whole of the one id that begins like this.

    Raises
    ------
    QueryError
        If there is none, or several begin like this.
    """
    wanted = prefix.strip().lower()
    if not re.fullmatch(rf"[0-9a-f]{{{SHORTEST_PREFIX},64}}", wanted):
        raise QueryError(
            f"'{prefix}' is no id: ids are at least {SHORTEST_PREFIX} digits of 0-9 and a-f",
            remedy=HOW_TO_FIND,
        )
    search = " UNION ALL ".join(
        f"SELECT '{kind}' AS kind, {column} AS id FROM {name} WHERE starts_with({column}, $prefix)"
        for kind, (name, column) in IDS.items()
    )
    found = connection.execute(f"{search} ORDER BY kind, id LIMIT 9", {"prefix": wanted}).fetchall()
    if not found:
        raise QueryError(f"nothing here has an id that begins with '{wanted}'", remedy=HOW_TO_FIND)
    if len(found) > 1:
        some = ", ".join(f"{kind} {full_id[: len(wanted) + 8]}" for kind, full_id in found[:4])
        raise QueryError(f"several ids begin with '{wanted}': {some}", remedy="type more digits")
    return str(found[0][0]), str(found[0][1])


def readings_file(
    connection: duckdb.DuckDBPyConnection, plate_read_id: str, analysis_id: str | None
) -> tuple[str, str] | None:
    """Path and digest of the readings that an analysis used: the last written before it; None without any."""
    found = connection.execute(
        "SELECT f.path, f.sha256 FROM lake_files f JOIN loads l USING (batch_id) "
        "LEFT JOIN analyses a ON a.analysis_id = $2 "
        "WHERE f.path = 'lake/readings/' || $1 || '.parquet' "
        "ORDER BY coalesce(l.loaded_at <= a.computed_at, true) DESC, l.ledger_seq DESC LIMIT 1",
        [plate_read_id, analysis_id],
    ).fetchall()
    return (str(found[0][0]), str(found[0][1])) if found else None
