"""How the answer to a query is written: a table on the terminal, CSV, JSON, Parquet or a workbook.

Files get the full values. Only the terminal's table shortens: ids to their first digits, numbers to
significant digits. What stands in a cell came from somebody else's file and is never taken as a command.
"""

from __future__ import annotations

import io
import json
import math
import re
from collections.abc import Callable, Sequence
from datetime import date, datetime
from typing import Any, Literal

import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet as pq
from openpyxl import Workbook
from openpyxl.cell.cell import Cell, WriteOnlyCell
from openpyxl.styles import Font
from rich import box
from rich.cells import cell_len
from rich.console import Console, Group, RenderableType
from rich.table import Table
from rich.text import Text

from flows.history.formats import FILE_FORMATS
from flows.wording import number
from models.errors import QueryError

WIDTH = 80
ROWS_SHOWN = 200
_ID_LENGTH = 12
_LONGEST_WORD = 28
_GAP = 2
_XLSX_ROWS, _XLSX_COLUMNS, _XLSX_CHARACTERS = 1_048_575, 16_384, 32_767
_LONG_ID = re.compile(r"[0-9a-f]{32}|[0-9a-f]{64}")
_CONTROLS = re.compile(r"[\x00-\x08\x0b\x0c\x0e-\x1f\x7f-\x9f\u202a-\u202e\u2066-\u2069]")
_COMMAND_SIGNS = ("=", "+", "-", "@", "\t", "\r")

Value = object
Column = Any


def encode(table: pa.Table, output_format: str) -> bytes:
    """An answer as the bytes of a file.

    Parameters
    ----------
    output_format
        csv, json, parquet or xlsx.

    Raises
    ------
    QueryError
        If the format is unknown, or cannot hold the answer.
    """
    writers: dict[str, Callable[[pa.Table], bytes]] = dict(
        zip(FILE_FORMATS, (to_csv, to_json, to_parquet, to_xlsx), strict=True)
    )
    if output_format not in writers:
        raise QueryError(f"there is no format '{output_format}'", remedy=f"formats are {', '.join(writers)}")
    return writers[output_format](table.rename_columns(_distinct(table.column_names)))


def to_csv(table: pa.Table) -> bytes:
    """CSV in UTF-8 with a head line; NULL is an empty field, an empty text is a pair of quotes."""
    columns = [_flat(column, _csv_value) for column in table.columns]
    flat = pa.Table.from_arrays(columns, names=table.column_names)
    sink = io.BytesIO()
    pa.csv.write_csv(flat, sink)
    return sink.getvalue()


def to_json(table: pa.Table) -> bytes:
    """A JSON list with one object a row; NULL and numbers that are not finite are null."""
    names = table.column_names
    rows = zip(*(column.to_pylist() for column in table.columns), strict=True)
    objects = [
        json.dumps(
            {name: _json_value(value) for name, value in zip(names, row, strict=True)}, ensure_ascii=False
        )
        for row in rows
    ]
    return ("[\n" + ",\n".join(objects) + "\n]\n").encode() if objects else b"[]\n"


def to_parquet(table: pa.Table) -> bytes:
    """Parquet, compressed with zstd."""
    sink = io.BytesIO()
    pq.write_table(table, sink, compression="zstd")
    return sink.getvalue()


def to_xlsx(table: pa.Table) -> bytes:
    """A workbook with one sheet. Text stays text, whatever it begins with; times are UTC, numbers 16 digits.

    Raises
    ------
    QueryError
        If the answer has more rows or columns than a sheet can hold.
    """
    if table.num_rows > _XLSX_ROWS or table.num_columns > _XLSX_COLUMNS:
        raise QueryError(
            f"a sheet holds {_XLSX_ROWS} rows and {_XLSX_COLUMNS} columns, and the answer is larger",
            remedy="write it as csv or parquet",
        )
    book = Workbook(write_only=True)
    sheet = book.create_sheet("answer")
    sheet.freeze_panes = "A2"

    def cell(value: Value, *, bold: bool = False) -> Cell:
        made = WriteOnlyCell(sheet)
        converted = _xlsx_value(value)
        if isinstance(converted, str):
            text = _CONTROLS.sub("\ufffd", converted)[:_XLSX_CHARACTERS]
            made.value = text
            # Never a formula; the quote prefix keeps it text when someone edits the cell.
            made.data_type = "s"
            made.quotePrefix = text.startswith(_COMMAND_SIGNS)
        else:
            made.value = converted
        if bold:
            made.font = Font(bold=True)
        return made

    sheet.append([cell(name, bold=True) for name in table.column_names])
    columns = [column.to_pylist() for column in table.columns]
    for row in zip(*columns, strict=True):
        sheet.append([cell(value) for value in row])
    sink = io.BytesIO()
    book.save(sink)
    return sink.getvalue()


def terminal_table(table: pa.Table, width: int = WIDTH, rows: int = ROWS_SHOWN) -> RenderableType:
    """An answer as it is shown on a terminal: side by side where it fits, else a block a row.

    Parameters
    ----------
    width
        Columns of the terminal; nothing is wider.
    rows
        Most rows that are shown; a last line says how many more there are.
    """
    names = _distinct(table.column_names)
    shown = table.slice(0, rows)
    kinds = [field.type for field in table.schema]
    cells = [
        [_cell(value, kind) for value in column.to_pylist()]
        for column, kind in zip(shown.columns, kinds, strict=True)
    ]
    right = [pa.types.is_integer(kind) or pa.types.is_floating(kind) for kind in kinds]
    note = Text(_count_line(table.num_rows, shown.num_rows), style="dim")
    heads = [plain(name) for name in names]
    bodies = [_body_width(column, is_number) for column, is_number in zip(cells, right, strict=True)]
    for made in (heads, [_broken(head, body) for head, body in zip(heads, bodies, strict=True)]):
        widths = [
            max(body, *map(cell_len, head.split("\n"))) for head, body in zip(made, bodies, strict=True)
        ]
        if sum(widths) + _GAP * (len(widths) - 1) <= width:
            return Group(_side_by_side(made, widths, cells, right), note)
    return Group(*_blocks(heads, cells), note)


def print_answer(table: pa.Table, console: Console, rows: int = ROWS_SHOWN) -> None:
    """Print an answer as wide as the console is."""
    console.print(terminal_table(table, console.width, rows))


def _side_by_side(
    heads: Sequence[str], widths: Sequence[int], cells: Sequence[Sequence[str]], right: Sequence[bool]
) -> Table:
    made = Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1, 0, 0), show_edge=False)
    for head, width, is_number in zip(heads, widths, right, strict=True):
        justify: Literal["left", "right"] = "right" if is_number else "left"
        made.add_column(Text(head), justify=justify, overflow="fold", min_width=width)
    for row in zip(*cells, strict=True):
        made.add_row(*(Text(text) for text in row))
    return made


def _blocks(names: Sequence[str], cells: Sequence[Sequence[str]]) -> list[RenderableType]:
    blocks: list[RenderableType] = []
    for place, row in enumerate(zip(*cells, strict=True), start=1):
        made = Table.grid(padding=(0, 2))
        made.add_column(style="dim", overflow="fold", max_width=32)
        made.add_column(overflow="fold")
        for name, text in zip(names, row, strict=True):
            made.add_row(Text(name), Text(text))
        blocks += [Text(f"row {place}", style="bold"), made, Text("")]
    return blocks


def _body_width(column: Sequence[str], is_number: bool) -> int:
    """Width that a column needs: numbers and short texts whole, long texts folded between words."""
    widest = max((cell_len(text) for text in column), default=1)
    if is_number or widest <= _ID_LENGTH:
        return widest
    longest_word = max((cell_len(word) for text in column for word in text.split()), default=1)
    return min(widest, max(_ID_LENGTH, min(longest_word, _LONGEST_WORD)))


def _broken(head: str, width: int) -> str:
    """A column's name over several lines, broken after underscores where it is wider than its column."""
    pieces = re.findall(r"[^_]*_|[^_]+", head)
    widest = max([width, *map(cell_len, pieces)])
    lines = [""]
    for piece in pieces:
        if lines[-1] and cell_len(lines[-1] + piece) > widest:
            lines.append("")
        lines[-1] += piece
    return "\n".join(lines)


def _cell(value: Value, kind: pa.DataType) -> str:
    if value is None:
        return "–"
    if isinstance(value, bool):
        return "yes" if value else "no"
    if isinstance(value, float):
        return number(value, digits=4) if math.isfinite(value) else str(value)
    if isinstance(value, datetime):
        return value.strftime("%Y-%m-%d %H:%M")
    if isinstance(value, str):
        text = plain(value)
        return text[:_ID_LENGTH] if _LONG_ID.fullmatch(text) else text
    if pa.types.is_nested(kind):
        return plain(json.dumps(_json_value(value), ensure_ascii=False))
    return plain(str(value))


def plain(text: str) -> str:
    """Text without signs that steer a terminal or turn the direction of writing."""
    return _CONTROLS.sub("\ufffd", text.replace("\t", " "))


def _count_line(total: int, shown: int) -> str:
    if total == 0:
        return "no rows"
    line = f"{total} row{'s' if total != 1 else ''}"
    return line if shown == total else f"{line}, the first {shown} shown; --format csv writes them all"


def _distinct(names: Sequence[str]) -> list[str]:
    """Column names, a second one of the same name numbered."""
    taken: set[str] = set()
    distinct: list[str] = []
    for name in names:
        candidate, place = name, 1
        while candidate in taken:
            place += 1
            candidate = f"{name}_{place}"
        taken.add(candidate)
        distinct.append(candidate)
    return distinct


def _flat(column: Column, convert: Callable[[Value], Value]) -> Column:
    simple = (pa.types.is_string, pa.types.is_integer, pa.types.is_floating, pa.types.is_boolean)
    if any(test(column.type) for test in simple):
        return column
    return pa.array([convert(value) for value in column.to_pylist()], pa.string())


def _csv_value(value: Value) -> Value:
    if value is None:
        return None
    converted = _json_value(value)
    return converted if isinstance(converted, str) else json.dumps(converted, ensure_ascii=False)


def _json_value(value: Value) -> Value:
    if value is None or isinstance(value, (bool, int, str)):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, (datetime, date)):
        return value.isoformat().replace("+00:00", "Z")
    if isinstance(value, dict):
        return {str(key): _json_value(each) for key, each in value.items()}
    if isinstance(value, (list, tuple)):
        return [_json_value(each) for each in value]
    return value.hex() if isinstance(value, bytes) else str(value)


def _xlsx_value(value: Value) -> float | str | date | None:
    if isinstance(value, datetime):
        return value.replace(tzinfo=None)
    if value is None or isinstance(value, (bool, str, date)):
        return value
    if isinstance(value, float):
        return value if math.isfinite(value) else None
    if isinstance(value, int) and abs(value) < 2**53:
        return value
    converted = _json_value(value)
    return converted if isinstance(converted, str) else json.dumps(converted, ensure_ascii=False)
