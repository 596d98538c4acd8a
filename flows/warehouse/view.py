"""What a view is: its name, meaning, columns with their meaning and unit, and the SQL behind it.

A column that a view takes from a table unchanged takes its meaning from there.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, replace

from models.tables import Column, Table


@dataclass(frozen=True)
class View:
    """A question that the warehouse answers under a name.

    Attributes
    ----------
    columns
        The columns in the order of the SELECT, each with meaning and unit.
    sql
        The SELECT.
    """

    name: str
    meaning: str
    columns: tuple[Column, ...]
    sql: str

    def duckdb_statements(self) -> list[str]:
        """CREATE VIEW and one COMMENT for the view and each column."""
        return [
            f"CREATE OR REPLACE VIEW {self.name} AS {self.sql}",
            f"COMMENT ON VIEW {self.name} IS {quoted(self.meaning)}",
            *(f"COMMENT ON COLUMN {self.name}.{c.name} IS {quoted(c.comment)}" for c in self.columns),
        ]


def taken(source: Table | View, *names: str) -> list[Column]:
    """Columns of a table or view, by name, as they are declared there."""
    declared = {column.name: column for column in source.columns}
    return [declared[name] for name in names]


def renamed(column: Column, name: str) -> Column:
    """The same column under another name."""
    return replace(column, name=name)


def columns(*parts: Column | Iterable[Column]) -> tuple[Column, ...]:
    """Columns one after the other, single or in groups."""
    flat: list[Column] = []
    for part in parts:
        flat.extend([part] if isinstance(part, Column) else part)
    return tuple(flat)


def quoted(text: str) -> str:
    """Text as a SQL string."""
    return "'" + text.replace("'", "''") + "'"
