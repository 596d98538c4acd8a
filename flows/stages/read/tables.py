"""One table of a sheet as arrays: fast where it is regular, cell by cell where it is not.

A regular text table goes through Arrow's CSV reader. Whatever that refuses (blanks round tokens, thousands,
ragged rows) is read field by field, which also finds the place to name. Knows nothing of plates.
"""

from __future__ import annotations

import io
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
import pyarrow as pa
import pyarrow.csv

from flows.stages.read.numbers import (
    MISSING,
    OK,
    UNREADABLE,
    NumberRule,
    Reals,
    States,
    parse_numbers,
    token_state,
)
from flows.stages.read.sheets import Sheet, TextSheet, is_blank
from models.errors import ExportError

Integers = npt.NDArray[np.int64]

_BLOCK_BYTES = 1 << 20


@dataclass(frozen=True)
class TextColumn:
    """A column of text: the distinct texts, and which of them each row holds."""

    codes: npt.NDArray[np.int32]
    texts: list[str]

    def rows_with(self, wanted: npt.NDArray[np.bool_]) -> npt.NDArray[np.bool_]:
        """Rows whose text is one of the wanted ones, given a flag for each distinct text."""
        return wanted[self.codes]


@dataclass(frozen=True)
class LoadedTable:
    """Rows of a table that are not blank.

    Attributes
    ----------
    lines
        Index of each row's line in the sheet, shape (R,).
    values, states
        Number columns in the order asked for, shape (R, N).
    texts
        Text columns by field index.
    """

    lines: Integers
    values: Reals
    states: States
    texts: dict[int, TextColumn]

    def keep(self, rows: npt.NDArray[np.bool_]) -> LoadedTable:
        """The same table with some of its rows."""
        if rows.all():
            return self
        texts = {field: TextColumn(column.codes[rows], column.texts) for field, column in self.texts.items()}
        return LoadedTable(self.lines[rows], self.values[rows], self.states[rows], texts)


def load_table(
    sheet: Sheet,
    first: int,
    last: int,
    width: int,
    numbers: Sequence[int],
    texts: Sequence[int],
    rule: NumberRule,
    *,
    short_rows: str = "error",
) -> LoadedTable:
    """Read the lines from `first` up to but not including `last`.

    Parameters
    ----------
    width
        Fields that a row must have.
    numbers, texts
        Indices of the fields to read as numbers and as text.
    short_rows
        "missing" to take absent fields as empty.

    Raises
    ------
    ExportError
        If a row has too few or too many fields, or a cell that must be a number is none; file, line and
        field are named.
    """
    loaded = None
    if isinstance(sheet, TextSheet) and len(sheet.separator) == 1 and not rule.thousands and first < last:
        loaded = _load_regular(sheet, first, last, width, numbers, texts, rule)
    if loaded is None:
        loaded = _load_cells(sheet, first, last, width, numbers, texts, rule, short_rows)
    filled = np.zeros(len(loaded.lines), dtype=bool)
    for place in range(len(numbers)):
        filled |= loaded.states[:, place] != MISSING
    for column in loaded.texts.values():
        filled |= column.rows_with(np.array([bool(text) for text in column.texts], dtype=bool))
    return loaded.keep(filled)


def _load_regular(
    sheet: TextSheet,
    first: int,
    last: int,
    width: int,
    numbers: Sequence[int],
    texts: Sequence[int],
    rule: NumberRule,
) -> LoadedTable | None:
    """The table by Arrow's reader, or None where it is not regular enough for that."""
    names = [str(field) for field in range(width)]
    wanted = [names[field] for field in (*texts, *numbers)]
    column_types: dict[str, pa.DataType] = {names[field]: pa.float64() for field in numbers}
    column_types |= {names[field]: pa.string() for field in texts}
    span = sheet.span(first, last)
    try:
        table = pyarrow.csv.read_csv(
            io.BytesIO(span),
            read_options=pyarrow.csv.ReadOptions(column_names=names, block_size=_BLOCK_BYTES),
            parse_options=pyarrow.csv.ParseOptions(delimiter=sheet.separator, quote_char=sheet.quote),
            convert_options=pyarrow.csv.ConvertOptions(
                column_types=column_types,
                include_columns=wanted,
                null_values=["", *sorted(rule.missing | rule.overflow)],
                strings_can_be_null=False,
                decimal_point=rule.decimal,
            ),
        )
    except pa.ArrowInvalid:
        return None
    lines = _lines_of_rows(sheet, first, last, table.num_rows)
    if lines is None:
        return None
    values = np.empty((table.num_rows, len(numbers)), order="F")
    states = np.zeros(values.shape, dtype=np.uint8, order="F")
    for place, field in enumerate(numbers):
        begin = 0
        for chunk in table.column(names[field]).chunks:
            rows = slice(begin, begin := begin + len(chunk))
            values[rows, place] = chunk.to_numpy(zero_copy_only=False)
            if chunk.null_count:
                states[rows, place] = np.where(chunk.is_null(), MISSING, OK)
    finite = np.isfinite(values)
    if not finite.all() and not (finite | (states == MISSING)).all():
        return None
    if rule.overflow and (states == MISSING).any() and not _tell_tokens(sheet, lines, numbers, states, rule):
        return None
    return LoadedTable(lines, values, states, {field: _text_column(table, names[field]) for field in texts})


def _lines_of_rows(sheet: TextSheet, first: int, last: int, row_count: int) -> Integers | None:
    """Line of each row that Arrow returned: it leaves out empty lines."""
    lines = np.arange(first, last, dtype=np.int64)
    if row_count == len(lines):
        return lines
    starts = np.concatenate([[0], sheet.ends])[first:last]
    data = np.frombuffer(sheet.data, dtype=np.uint8)
    filled = ~np.isin(data[starts], np.array([10, 13], dtype=np.uint8))
    return lines[filled] if int(filled.sum()) == row_count else None


def _tell_tokens(
    sheet: TextSheet, lines: Integers, numbers: Sequence[int], states: States, rule: NumberRule
) -> bool:
    """Look up what stands in the cells that gave no number; False where one cannot be looked up."""
    for row in np.flatnonzero((states == MISSING).any(axis=1)):
        fields = sheet.fields(int(lines[row]))
        for place in np.flatnonzero(states[row] == MISSING).tolist():
            if numbers[place] >= len(fields):
                return False
            states[row, place] = token_state(fields[numbers[place]].strip(), rule)
    return bool((states <= MISSING).all())


def _text_column(table: pa.Table, name: str) -> TextColumn:
    column = table.column(name).combine_chunks().dictionary_encode()
    codes = column.indices.to_numpy(zero_copy_only=False)
    return _merged([str(text).strip() for text in column.dictionary.to_pylist()], codes)


def _merged(texts: Sequence[str], codes: npt.NDArray[np.int32]) -> TextColumn:
    """The column with texts that differ by blanks alone made one."""
    distinct = list(dict.fromkeys(texts))
    if len(distinct) == len(texts):
        return TextColumn(codes, distinct)
    index = {text: place for place, text in enumerate(distinct)}
    renumbered = np.array([index[text] for text in texts], dtype=np.int32)
    return TextColumn(renumbered[codes], distinct)


def _load_cells(
    sheet: Sheet,
    first: int,
    last: int,
    width: int,
    numbers: Sequence[int],
    texts: Sequence[int],
    rule: NumberRule,
    short_rows: str,
) -> LoadedTable:
    rows: list[list[str]] = []
    lines: list[int] = []
    for index in range(first, last):
        fields = sheet.fields(index)
        if is_blank(fields):
            continue
        rows.append(_fitted(sheet, index, fields, width, short_rows))
        lines.append(index)
    values = np.empty((len(rows), len(numbers)))
    states = np.empty(values.shape, dtype=np.uint8)
    for place, field in enumerate(numbers):
        values[:, place], states[:, place] = parse_numbers([row[field] for row in rows], rule)
    if (states == UNREADABLE).any():
        row, place = np.argwhere(states == UNREADABLE)[0]
        raise unreadable_number(sheet, lines[row], numbers[place], rows[row][numbers[place]])
    columns = {}
    for field in texts:
        cells = [row[field].strip() for row in rows]
        index_of = {text: code for code, text in enumerate(dict.fromkeys(cells))}
        codes = np.fromiter((index_of[cell] for cell in cells), np.int32, len(cells))
        columns[field] = TextColumn(codes, list(index_of))
    return LoadedTable(np.array(lines, dtype=np.int64), values, states, columns)


def _fitted(sheet: Sheet, index: int, fields: list[str], width: int, short_rows: str) -> list[str]:
    if len(fields) > width and is_blank(fields[width:]):
        return fields[:width]
    if len(fields) > width:
        raise ExportError(
            f"the line has {len(fields)} fields where the table has {width}",
            where=sheet.where(index),
            remedy="if a block after the table begins here, state table.end or table.end_pattern",
        )
    if len(fields) < width and short_rows == "error":
        raise ExportError(
            f"the line has {len(fields)} fields where the table has {width}",
            where=sheet.where(index),
            remedy="the file may be cut off: export it again; if a block after the table begins here, state "
            'table.end; if absent fields are missing reads, set table.short_rows = "missing"',
        )
    return fields + [""] * (width - len(fields))


def unreadable_number(sheet: Sheet, index: int, field: int, text: str) -> ExportError:
    """The error for a cell that is neither number nor known token."""
    return ExportError(
        f"'{text.strip()[:40]}' is not a number",
        where=sheet.where(index, field),
        remedy="if it stands for an overflow or a missing read, list it under values.overflow or "
        "values.missing in the profile; if a block after the table begins here, state table.end or "
        "table.end_pattern; otherwise check values.decimal",
    )
