"""The page that lists every table and view with its columns: `python -m flows.warehouse.page` prints it.

Written from the same declarations as the warehouse itself; a test holds TABLES.md against it.
"""

from __future__ import annotations

import sys
from collections.abc import Sequence
from pathlib import Path

from flows.warehouse.bookkeeping import LAKE_FILES, LOADS, SCHEMA
from flows.warehouse.view import View
from flows.warehouse.views import RESULT_VIEWS
from models.tables import READINGS, TABLES, Column, Table

PAGE = Path(__file__).with_name("TABLES.md")

_OPENING = """\
# What the warehouse holds

Written by `python -m flows.warehouse.page` from the declarations in `models/tables` and `flows/warehouse`; do
not edit it. The same texts are comments in the database: `SELECT * FROM duckdb_columns()` shows them.

Views see current results only: what a later analysis superseded is left out. Tables keep every revision.
Times are UTC. What is not known is NULL, never 0.
"""


def table_page() -> str:
    """The page as Markdown."""
    reading = View("reading", READINGS.meaning, READINGS.columns, "")
    views = [*RESULT_VIEWS, reading]
    parts = [_OPENING, "## Views\n", _index(views)]
    parts += [_section(each.name, each.meaning, each.columns) for each in views]
    stored = [each for each in TABLES if each.stored_in != "lake"]
    parts += ["## Tables\n", _index(stored)]
    parts += [_section(each.name, each.meaning, each.columns, each.key) for each in stored]
    own = [LOADS, LAKE_FILES, SCHEMA]
    parts += ["## The warehouse's own tables\n", _index(own)]
    parts += [_section(each.name, each.meaning, each.columns, each.key) for each in own]
    return "\n".join(parts)


def _index(entries: Sequence[Table | View]) -> str:
    return "\n".join(f"- [`{each.name}`](#{each.name}): {each.meaning}" for each in entries) + "\n"


def _section(name: str, meaning: str, columns: Sequence[Column], key: tuple[str, ...] = ()) -> str:
    lines = [f"### {name}\n", f"{meaning}.\n"]
    if key:
        lines.append(f"A row is one {', '.join(f'`{column}`' for column in key)}.\n")
    lines += ["| column | kind | unit | meaning |", "| --- | --- | --- | --- |"]
    for column in columns:
        unknown = "" if not column.nullable or "NULL" in column.meaning else "; NULL where not known"
        meaning_cell = (column.meaning + unknown).replace("|", "\\|")
        lines.append(f"| `{column.name}` | {column.kind} | {column.unit or ''} | {meaning_cell} |")
    return "\n".join(lines) + "\n"


if __name__ == "__main__":
    sys.stdout.write(table_page())
