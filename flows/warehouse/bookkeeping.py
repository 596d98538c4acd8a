"""The warehouse's own tables: its schema version, which batches are in it, which lake files they rest on.

Declared like every other table, so that they are commented and documented the same way.
"""

from __future__ import annotations

from models.identity import Json, digest
from models.tables import TABLES, Column, Table

SCHEMA_VERSION = 2
"""Number of the tables' shape: raised with every change of tables, columns, kinds or keys."""
COLUMNS_DIGEST = "35214926f4c250ad"
"""Digest of that shape (`columns_digest`), so that a test can tell when the number must be raised."""

_BATCH_ID = Column("batch_id", "text", "Digest of the pass and of every row that was loaded together")

SCHEMA = Table(
    "schema_version",
    "Which version of the tables and views this warehouse holds",
    ("schema_version",),
    (
        Column("schema_version", "integer", "Version of the tables"),
        Column("tables_digest", "text", "Digest of the statements that made the tables"),
        Column("views_digest", "text", "Digest of the statements that made the views"),
    ),
    "warehouse",
)

LOADS = Table(
    "loads",
    "Every batch of rows in this warehouse: one transaction each",
    ("batch_id",),
    (
        _BATCH_ID,
        Column("ledger_seq", "integer", "Entry of the ledger that records the batch"),
        Column("loaded_at", "timestamp", "When the batch was recorded, UTC"),
    ),
    "warehouse",
)

LAKE_FILES = Table(
    "lake_files",
    "Files of the lake, with the digest of their bytes when they were written",
    ("path", "sha256"),
    (
        Column("path", "text", "Where the file is, below the site's folder"),
        Column("sha256", "text", "SHA-256 of the file's bytes"),
        Column("table_name", "text", "The table whose rows it holds"),
        Column("row_count", "integer", "Rows in the file"),
        Column("byte_count", "integer", "Size of the file", "byte"),
        _BATCH_ID,
    ),
    "warehouse",
)

STORED: tuple[Table, ...] = (
    *(each for each in TABLES if each.stored_in != "lake"),
    LAKE_FILES,
    LOADS,
    SCHEMA,
)
"""Every table that the warehouse itself holds; readings stay in the lake, behind the view `reading`."""


def columns_digest() -> str:
    """Digest of the shape of every stored table; meanings and units are no part of it."""
    shape: list[Json] = [
        [each.name, list(each.key), [[c.name, c.kind, c.nullable] for c in each.columns]] for each in STORED
    ]
    return digest(shape)[:16]
