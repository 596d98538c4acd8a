"""What a table and a column are, and what is derived from them: Parquet schema, DDL, comments, docs.

A column is declared once, with its kind, unit and meaning. This module holds no table.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Literal

import pandas as pd
import pyarrow as pa

Kind = Literal["text", "integer", "real", "flag", "timestamp"]

_ARROW: dict[Kind, pa.DataType] = {
    "text": pa.string(),
    "integer": pa.int64(),
    "real": pa.float64(),
    "flag": pa.bool_(),
    "timestamp": pa.timestamp("us", tz="UTC"),
}
_DUCKDB: dict[Kind, str] = {
    "text": "VARCHAR",
    "integer": "BIGINT",
    "real": "DOUBLE",
    "flag": "BOOLEAN",
    "timestamp": "TIMESTAMP WITH TIME ZONE",
}


@dataclass(frozen=True)
class Column:
    """One column: its name (unit included), kind, meaning and unit.

    Attributes
    ----------
    unit
        A unit that pint parses, or None where a unit makes no sense (names, ids, flags, counts).
    nullable
        Whether the value may be unknown. What is not known is NULL, never 0.
    """

    name: str
    kind: Kind
    meaning: str
    unit: str | None = None
    nullable: bool = False

    def optional(self, meaning: str | None = None) -> Column:
        """The same column where it may be unknown."""
        return replace(self, nullable=True, meaning=meaning or self.meaning)

    @property
    def comment(self) -> str:
        """Meaning with its unit, as stored beside the column."""
        return f"{self.meaning} [{self.unit}]" if self.unit else self.meaning


@dataclass(frozen=True)
class Table:
    """One stored table: its columns in order and the columns that make a row unique."""

    name: str
    meaning: str
    key: tuple[str, ...]
    columns: tuple[Column, ...]
    stored_in: Literal["lake", "warehouse", "both"] = "both"

    def __post_init__(self) -> None:
        names = [column.name for column in self.columns]
        if len(set(names)) != len(names) or not set(self.key) <= set(names):
            raise ValueError(f"table {self.name}: a column name is doubled or a key column is missing")

    @property
    def column_names(self) -> list[str]:
        """Names of the columns in order."""
        return [column.name for column in self.columns]

    def arrow_schema(self) -> pa.Schema:
        """Schema for Parquet and Arrow, meaning and unit kept as field metadata."""
        return pa.schema(
            [
                pa.field(c.name, _ARROW[c.kind], c.nullable, {"meaning": c.meaning, "unit": c.unit or ""})
                for c in self.columns
            ]
        )

    def duckdb_statements(self) -> list[str]:
        """CREATE TABLE and one COMMENT for the table and each column."""
        lines = [f"{c.name} {_DUCKDB[c.kind]}{'' if c.nullable else ' NOT NULL'}" for c in self.columns]
        lines.append(f"PRIMARY KEY ({', '.join(self.key)})")
        body = ",\n  ".join(lines)
        return [
            f"CREATE TABLE IF NOT EXISTS {self.name} (\n  {body}\n)",
            f"COMMENT ON TABLE {self.name} IS {_quoted(self.meaning)}",
            *(f"COMMENT ON COLUMN {self.name}.{c.name} IS {_quoted(c.comment)}" for c in self.columns),
        ]

    def to_arrow(self, frame: pd.DataFrame) -> pa.Table:
        """Rows of a data frame as an Arrow table with exactly this table's columns and types.

        NaN, NaT and None all become NULL.

        Raises
        ------
        KeyError
            If the frame lacks a column.
        pyarrow.ArrowInvalid
            If a value does not fit the column's type, or a column that must be known has a NULL.
        """
        arrays: list[pa.Array[pa.Scalar[pa.DataType]]] = []
        for column in self.columns:
            array = pa.array(frame[column.name], type=_ARROW[column.kind], from_pandas=True)
            if isinstance(array, pa.ChunkedArray):
                array = array.combine_chunks()
            if array.null_count and not column.nullable:
                raise pa.ArrowInvalid(
                    f"{self.name}.{column.name} holds {array.null_count} NULLs but must be known"
                )
            arrays.append(array)
        return pa.Table.from_arrays(arrays, schema=self.arrow_schema())

    def empty(self) -> pd.DataFrame:
        """A data frame with this table's columns and no rows."""
        frame: pd.DataFrame = self.arrow_schema().empty_table().to_pandas()
        return frame


def _quoted(text: str) -> str:
    return "'" + text.replace("'", "''") + "'"
