"""What the table shapes share: cells of a block, times of its rows, and the wells that its rows name.

Which lines are the table is decided in `blocks`, how cells are read in `tables` and `times`.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from flows.stages.read.blocks import TableSpan, column_index
from flows.stages.read.numbers import OK, NumberRule, Reals
from flows.stages.read.raw import Narrow, well_positions
from flows.stages.read.sheets import Sheet
from flows.stages.read.tables import LoadedTable, load_table
from flows.stages.read.times import TimeRule, parse_times, to_seconds
from models.errors import ExportError, UnknownName
from models.plates import well_position
from models.records.export_profile import ExportProfile

_APART = r"(?P<row>[A-Za-z]{1,2}|\d+)\|(?P<column>[A-Za-z]{1,2}|\d+)"


@dataclass(frozen=True)
class Reading:
    """What a shape needs to read a block: the sheet, the profile, and its rules for numbers and times."""

    sheet: Sheet
    profile: ExportProfile
    numbers: NumberRule
    times: TimeRule | None

    def load(self, span: TableSpan, last: int, numbers: Sequence[int], texts: Sequence[int]) -> LoadedTable:
        """Read the rows of a table."""
        return load_table(
            self.sheet,
            span.first,
            last,
            span.width,
            numbers,
            texts,
            self.numbers,
            short_rows=self.profile.table.short_rows,
        )

    def position(self, name: str) -> tuple[int, int] | None:
        """Row and column of a well as the file names it, or None."""
        try:
            return well_position(name, self.profile.wells.pattern)
        except UnknownName:
            return None


def row_times(reading: Reading, table: LoadedTable, time_at: int | None, place: int | None) -> Reals:
    """Time of each row, s: from number column `place`, text column `time_at`, or the stated interval."""
    if reading.times is None or time_at is None:
        assert reading.profile.time.interval_s is not None
        return np.arange(len(table.lines), dtype=np.float64) * reading.profile.time.interval_s
    if place is not None:
        times = to_seconds(plain(table, place), reading.times)
    else:
        column = table.texts[time_at]
        times = parse_times(column.texts, reading.times)[column.codes]
    if not np.isfinite(times).all():
        bad = np.flatnonzero(~np.isfinite(times))
        raise _no_time(reading, int(table.lines[bad[0]]), time_at)
    return times


def _no_time(reading: Reading, line: int, field: int) -> ExportError:
    text = reading.sheet.fields(line)[field].strip()[:40]
    notation = reading.profile.time.notation
    written = f"as {reading.profile.time.format}" if notation == "timestamp" else f"in {notation}"
    return ExportError(
        f"'{text}' is not a time {written}" if text else "the time is missing",
        where=reading.sheet.where(line, field),
        remedy="check time.notation in the profile; if a block after the table begins here, state table.end",
    )


def plain(table: LoadedTable, place: int) -> Reals:
    """Values of a number column, NaN where the cell gave none."""
    if not table.states[:, place].any():
        return table.values[:, place]
    return np.where(table.states[:, place] == OK, table.values[:, place], np.nan)


def need_rows(reading: Reading, span: TableSpan, rows: int) -> None:
    """Refuse a table without rows."""
    if rows == 0:
        raise ExportError(
            "the table has no rows",
            where=reading.sheet.where(max(span.header_line, 0)),
            remedy="the file may be cut off: export it again; or check table.end in the profile",
        )


def name_columns(reading: Reading, span: TableSpan) -> list[int]:
    """Field of the well's name, or fields of its row and column."""
    columns, sheet = reading.profile.columns, reading.sheet
    if columns.well is not None:
        return [column_index(span, sheet, columns.well, "columns.well")]
    assert columns.row is not None
    assert columns.column is not None
    return [
        column_index(span, sheet, columns.row, "columns.row"),
        column_index(span, sheet, columns.column, "columns.column"),
    ]


def row_well(reading: Reading, row: Sequence[str], named: Sequence[int]) -> tuple[int, int] | None:
    """Row and column of the well that a row names, or None."""
    if max(named) >= len(row):
        return None
    return _joined_position(reading, [row[field].strip() for field in named])


def _joined_position(reading: Reading, parts: Sequence[str]) -> tuple[int, int] | None:
    if len(parts) == 1:
        return reading.position(parts[0])
    try:
        return well_position(f"{parts[0]}|{parts[1]}", _APART)
    except UnknownName:
        return None


def table_positions(reading: Reading, table: LoadedTable, named: Sequence[int]) -> Narrow:
    """Well of each row as a position; a row that names none is an error."""
    columns = [table.texts[field] for field in named]
    codes = columns[0].codes
    names = [[text] for text in columns[0].texts]
    if len(columns) == 2:
        count = len(columns[1].texts)
        codes = codes * np.int32(count) + columns[1].codes
        names = [[row, column] for row in columns[0].texts for column in columns[1].texts]
    used = np.bincount(codes, minlength=len(names)) > 0
    places = [_joined_position(reading, name) if used[code] else (1, 1) for code, name in enumerate(names)]
    for code, place in enumerate(places):
        if place is None:
            line = int(table.lines[np.flatnonzero(codes == code)[0]])
            text = " ".join(names[code]).strip()[:40]
            raise ExportError(
                f"'{text}' is not a well" if text else "the well is missing",
                where=reading.sheet.where(line, named[0]),
                remedy="check wells.pattern in the profile; "
                "if a block after the table begins here, state table.end",
            )
    return well_positions([place for place in places if place is not None])[codes]
