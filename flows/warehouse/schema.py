"""Makes tables and views in a DuckDB file, says which version they are, and brings an earlier one up to date.

All of it is derived from models.tables, flows.warehouse.bookkeeping and flows.warehouse.views.
"""

from __future__ import annotations

import duckdb

from flows.site.layout import Site
from flows.warehouse.bookkeeping import SCHEMA, SCHEMA_VERSION, STORED
from flows.warehouse.migrations import OutdatedWarehouse, apply, plan_migration, refuse_newer
from flows.warehouse.view import View
from flows.warehouse.views import RESULT_VIEWS, reading_view
from models.identity import digest


def all_views(site: Site) -> tuple[View, ...]:
    """Every view of a site's warehouse, each after those it uses."""
    return (*RESULT_VIEWS, reading_view(site.lake / "readings"))


def prepare(connection: duckdb.DuckDBPyConnection, site: Site) -> None:
    """Make what is missing: all tables in a new file, new tables and columns in an older one, views anew.

    Raises
    ------
    SiteError
        If the file was made by a newer version of halfsat.
    OutdatedWarehouse
        If it was made by an earlier one and cannot be brought up to date in place.
    """
    table_statements = [line for each in STORED for line in each.duckdb_statements()]
    view_statements = [line for each in all_views(site) for line in each.duckdb_statements()]
    tables_digest, views_digest = digest(table_statements), digest(view_statements)
    known = _version(connection)
    if known is not None:
        refuse_newer(known[0], str(site.loader_file))
        if known == (SCHEMA_VERSION, tables_digest, views_digest):
            return
    plan = None
    if known is not None and known[:2] != (SCHEMA_VERSION, tables_digest):
        plan = plan_migration(connection)
        if plan.obstacle is not None:
            raise OutdatedWarehouse(
                f"the warehouse was made by an earlier halfsat: {plan.obstacle}",
                where=str(site.loader_file),
                remedy="the next pass makes it again from the lake",
            )
    connection.begin()
    try:
        for name in _views(connection):
            connection.execute(f"DROP VIEW {name}")
        if plan is not None:
            apply(connection, plan)
        for line in (*table_statements, *view_statements):
            connection.execute(line)
        values = [SCHEMA_VERSION, tables_digest, views_digest]
        connection.execute(f"DELETE FROM {SCHEMA.name} WHERE schema_version <> ?", [SCHEMA_VERSION])
        connection.execute(f"INSERT OR REPLACE INTO {SCHEMA.name} VALUES (?, ?, ?)", values)
        connection.commit()
    except BaseException:
        connection.rollback()
        raise


def _views(connection: duckdb.DuckDBPyConnection) -> list[str]:
    found = connection.execute("SELECT view_name FROM duckdb_views() WHERE NOT internal").fetchall()
    return [str(row[0]) for row in found]


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
