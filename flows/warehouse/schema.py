"""Makes tables and views in a DuckDB file, says which version they are, and refuses a file of another one.

All of it is derived from models.tables, flows.warehouse.bookkeeping and flows.warehouse.views.
"""

from __future__ import annotations

import duckdb

from flows.site.layout import Site
from flows.warehouse.bookkeeping import SCHEMA, SCHEMA_VERSION, STORED
from flows.warehouse.view import View
from flows.warehouse.views import RESULT_VIEWS, reading_view
from models.errors import SiteError
from models.identity import digest


def all_views(site: Site) -> tuple[View, ...]:
    """Every view of a site's warehouse, each after those it uses."""
    return (*RESULT_VIEWS, reading_view(site.lake / "readings"))


def prepare(connection: duckdb.DuckDBPyConnection, site: Site) -> None:
    """Make what is missing: all tables in a new file, the views wherever they differ.

    Raises
    ------
    SiteError
        If the file was made by another version of halfsat.
    """
    table_statements = [line for each in STORED for line in each.duckdb_statements()]
    view_statements = [line for each in all_views(site) for line in each.duckdb_statements()]
    tables_digest, views_digest = digest(table_statements), digest(view_statements)
    known = _version(connection)
    if known is None:
        connection.begin()
        for line in (*table_statements, *view_statements):
            connection.execute(line)
        values = [SCHEMA_VERSION, tables_digest, views_digest]
        connection.execute(f"INSERT INTO {SCHEMA.name} VALUES (?, ?, ?)", values)
        connection.commit()
        return
    version, old_tables, old_views = known
    if (version, old_tables) != (SCHEMA_VERSION, tables_digest):
        raise SiteError(
            f"the warehouse was made by another version of halfsat (its tables are version {version})",
            where=str(site.loader_file),
            remedy="move this file away: the next pass makes it again from the lake",
        )
    if old_views != views_digest:
        connection.begin()
        for line in view_statements:
            connection.execute(line)
        connection.execute(f"UPDATE {SCHEMA.name} SET views_digest = ?", [views_digest])
        connection.commit()


def _version(connection: duckdb.DuckDBPyConnection) -> tuple[int, str, str] | None:
    # Fetched whole: an unfinished result would keep the connection from any other work.
    found = connection.execute(
        "SELECT table_name FROM duckdb_tables() WHERE table_name = ? AND NOT internal", [SCHEMA.name]
    ).fetchall()
    if not found:
        return None
    versions = connection.execute(
        f"SELECT schema_version, tables_digest, views_digest FROM {SCHEMA.name}"
    ).fetchall()
    return (int(versions[0][0]), str(versions[0][1]), str(versions[0][2])) if versions else None
