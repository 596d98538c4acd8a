"""Where in the export the reads of a rate's window stand: lines and fields, or rows and columns of a sheet.

Reads one file of the lake.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import duckdb
import pandas as pd
import pyarrow.parquet as pq

from flows import lake
from flows.site.layout import Site

_COLUMNS = ["channel", "well", "read_number", "source_sheet", "source_row", "source_column"]


@dataclass(frozen=True)
class Span:
    """The part of an export that holds a window's reads.

    Attributes
    ----------
    sheet
        Sheet of a workbook; None in a text file.
    first_row, last_row, first_column, last_column
        Lines and fields, or rows and columns, counted from 1.
    """

    sheet: str | None
    first_row: int
    last_row: int
    first_column: int
    last_column: int

    @property
    def text(self) -> str:
        """The place as a person reads it."""
        row, column = ("line", "field") if self.sheet is None else ("row", "column")
        place = f"{_range(row, self.first_row, self.last_row)}, "
        place += f"{_range(column, self.first_column, self.last_column)}"
        return place if self.sheet is None else f"{place}, sheet {self.sheet}"

    @property
    def facts(self) -> tuple[tuple[str, str | int | None], ...]:
        """The place as values."""
        return (
            ("source_sheet", self.sheet),
            ("source_first_row", self.first_row),
            ("source_last_row", self.last_row),
            ("source_first_column", self.first_column),
            ("source_last_column", self.last_column),
        )


def source_spans(
    site: Site, file: tuple[str, str], recipe: str, rates: Sequence[Mapping[str, object]]
) -> dict[str, Span]:
    """Where each rate's reads stand, by well; a rate without a window has all its reads.

    Parameters
    ----------
    file
        Path and digest of the readings in the lake. A file that is lost or changed gives no spans.
    recipe
        The recipe as JSON: its assay names the channel.
    rates
        Rows of the `rates` table.
    """
    path = lake.locate(site, *file)
    if path is None or not rates:
        return {}
    readings = pq.ParquetFile(path).read(_COLUMNS)
    channel = json.loads(recipe)["assay"]["signal"]["channel"]
    windows = pd.DataFrame(rates)[["well", "window_first_read", "window_last_read"]].astype(
        {"window_first_read": "Int64", "window_last_read": "Int64"}
    )
    with duckdb.connect() as connection:
        connection.register("readings", readings)
        connection.register("windows", windows)
        found = connection.execute(
            """
            SELECT r.well, min(source_sheet), min(source_row), max(source_row),
                   min(source_column), max(source_column)
            FROM readings r JOIN windows w USING (well)
            WHERE ($channel IS NULL OR r.channel = $channel)
              AND (w.window_first_read IS NULL
                   OR r.read_number BETWEEN w.window_first_read AND w.window_last_read)
            GROUP BY r.well
            """,
            {"channel": channel},
        ).fetchall()
    return {str(well): Span(*place) for well, *place in found}


def _range(word: str, first: int, last: int) -> str:
    return f"{word} {first}" if first == last else f"{word}s {first} to {last}"
