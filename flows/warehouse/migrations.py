"""Bringing a warehouse that an earlier version made up to the tables of this one, without losing a row.

What is new and may be unknown is added in place. Any other change is not guessed at: the file is set aside,
and the warehouse is made again from the lake, which has every row that was ever loaded.
"""

from __future__ import annotations

from dataclasses import dataclass

import duckdb

from flows.warehouse.bookkeeping import SCHEMA_VERSION, STORED
from models.errors import SiteError


class DamagedWarehouse(SiteError):
    """The loader's database cannot be opened as one, or not as one of this version."""


class OutdatedWarehouse(DamagedWarehouse):
    """The loader's database is of an earlier version, and must be made again from the lake."""


@dataclass(frozen=True)
class _Shape:
    """A table as a database has it: its key, and kind and nullability of each column."""

    key: tuple[str, ...]
    columns: dict[str, tuple[str, bool]]


@dataclass(frozen=True)
class Plan:
    """What there is to do to a database.

    Attributes
    ----------
    new_columns
        Table, name and DuckDB type of each column to add; NULL in every row that is there.
    empty_tables
        Tables without a row that are of another shape: they are made again.
    obstacle
        The first change that cannot be made in place; None where there is none.
    """

    new_columns: tuple[tuple[str, str, str], ...]
    empty_tables: tuple[str, ...]
    obstacle: str | None


def refuse_newer(version: int, where: str) -> None:
    """Refuse a database that a later version of halfsat made.

    Raises
    ------
    SiteError
        If its number is higher than this version's.
    """
    if version > SCHEMA_VERSION:
        raise SiteError(
            f"the warehouse was made by a newer halfsat (its tables are version {version}; "
            f"this one knows {SCHEMA_VERSION})",
            where=where,
            remedy="use that version of halfsat",
        )


def plan_migration(connection: duckdb.DuckDBPyConnection) -> Plan:
    """Compare the tables of a database with those of this version.

    Tables that are not there are left to `CREATE TABLE IF NOT EXISTS`.
    """
    present, declared = _catalog(connection), _declared()
    new_columns: list[tuple[str, str, str]] = []
    empty: list[str] = []
    obstacle: str | None = None
    for name, shape in present.items():
        if name not in declared:
            obstacle = obstacle or f"there is no table {name} any more"
            continue
        problem = _problem(name, shape, declared[name])
        if problem is None:
            new_columns += [
                (name, column, kind)
                for column, (kind, _) in declared[name].columns.items()
                if column not in shape.columns
            ]
        elif not connection.execute(f"SELECT 1 FROM {name} LIMIT 1").fetchall():
            empty.append(name)
        else:
            obstacle = obstacle or problem
    return Plan(tuple(new_columns), tuple(empty), obstacle)


def apply(connection: duckdb.DuckDBPyConnection, plan: Plan) -> None:
    """Carry out a plan without obstacle, within the caller's transaction."""
    for name in plan.empty_tables:
        connection.execute(f"DROP TABLE {name}")
    for name, column, kind in plan.new_columns:
        connection.execute(f"ALTER TABLE {name} ADD COLUMN {column} {kind}")


def _declared() -> dict[str, _Shape]:
    with duckdb.connect() as scratch:
        for table in STORED:
            for statement in table.duckdb_statements():
                scratch.execute(statement)
        return _catalog(scratch)


def _catalog(connection: duckdb.DuckDBPyConnection) -> dict[str, _Shape]:
    """Shape of every table of a database."""
    keys = {
        str(name): tuple(str(column) for column in columns)
        for name, columns in connection.execute(
            "SELECT table_name, constraint_column_names FROM duckdb_constraints() "
            "WHERE constraint_type = 'PRIMARY KEY' AND database_name = current_database()"
        ).fetchall()
    }
    found: dict[str, _Shape] = {}
    for name, column, kind, nullable in connection.execute(
        "SELECT c.table_name, c.column_name, c.data_type, c.is_nullable FROM duckdb_columns() c "
        "SEMI JOIN duckdb_tables() t ON t.table_oid = c.table_oid AND t.database_name = c.database_name "
        "WHERE c.database_name = current_database() AND NOT c.internal ORDER BY c.table_oid, c.column_index"
    ).fetchall():
        shape = found.setdefault(str(name), _Shape(keys.get(str(name), ()), {}))
        shape.columns[str(column)] = (str(kind), bool(nullable))
    return found


def _problem(name: str, present: _Shape, declared: _Shape) -> str | None:
    """Why a table cannot be brought up to date in place."""
    if present.key != declared.key:
        return f"{name} has another key"
    for column in present.columns:
        if column not in declared.columns:
            return f"{name} has no column {column} any more"
    for column, (kind, nullable) in declared.columns.items():
        if column not in present.columns:
            if not nullable:
                return f"{name}.{column} is new and must be known"
            continue
        old_kind, old_nullable = present.columns[column]
        if old_kind != kind:
            return f"{name}.{column} was {old_kind} and is {kind} now"
        if old_nullable != nullable:
            return f"{name}.{column} {'may be unknown now' if nullable else 'must be known now'}"
    return None
