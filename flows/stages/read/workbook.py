"""Sheets of an xlsx workbook as rows of text, and the guards against workbooks that are not what they seem.

Knows nothing of plates. A workbook that unpacks to far more than an export ever is gets refused unread.
"""

from __future__ import annotations

import datetime as dt
import io
import re
import zipfile
import zlib
from fnmatch import fnmatchcase

import python_calamine

from flows.stages.read.sheets import CellSheet
from models.errors import ExportError, HalfsatError

ZIP_SIGNATURE = b"PK\x03\x04"
_OLD_SIGNATURE = b"\xd0\xcf\x11\xe0"
_MOST_UNPACKED_BYTES = 300_000_000
_MOST_CELLS = 5_000_000
_MOST_PARTS = 2_000
_CELL_PLACE = re.compile(rb"""<(?:\w+:)?(?:c|row)\s[^>]*?\br=["']([A-Z]{0,3})(\d+)["']""")
# Serial day 0 of a workbook's calendar; a duration of a day or more shown as a clock time counts from here.
_CALENDAR_START = dt.datetime.fromisoformat("1899-12-31")
_FIRST_REAL_YEAR = 1905


def is_workbook(content: bytes) -> bool:
    """Whether the bytes begin like an xlsx file."""
    return content.startswith(ZIP_SIGNATURE)


def read_sheets(
    content: bytes,
    file_name: str,
    sheet: str | None,
    decimal: str = ".",
    kind: type[HalfsatError] = ExportError,
) -> list[CellSheet]:
    """Sheets of a workbook whose name fits, in their order; the first one if no name is given.

    Parameters
    ----------
    sheet
        Name or pattern with * and ?.
    decimal
        Decimal sign with which numeric cells are written, so that they read back under the profile's rule.

    Raises
    ------
    HalfsatError
        Of the given kind: if it is no workbook, is damaged or outsized, or no sheet fits.
    """
    _refuse_what_is_no_workbook(content, file_name, kind)
    _refuse_outsized(content, file_name, kind)
    try:
        book = python_calamine.load_workbook(io.BytesIO(content))
        names = list(book.sheet_names)
        chosen = names[:1] if sheet is None else [name for name in names if fnmatchcase(name, sheet)]
        cells = [(name, book.get_sheet_by_name(name).to_python(skip_empty_area=False)) for name in chosen]
    except (KeyboardInterrupt, SystemExit):
        raise
    # A parser written in Rust may panic on a damaged file, and its panic is no Exception.
    except BaseException as flaw:
        raise kind(
            f"the workbook cannot be read ({flaw})", where=file_name, remedy="export it again"
        ) from flaw
    if not cells:
        raise kind(
            f"no sheet is called '{sheet}'" if sheet else "the workbook has no sheet",
            where=file_name,
            remedy=f"its sheets are {', '.join(names) or 'none'}; see workbook.sheet in the profile",
        )
    return [
        CellSheet(file_name, name, [[_as_text(cell, decimal) for cell in row] for row in rows])
        for name, rows in cells
    ]


def _refuse_what_is_no_workbook(content: bytes, file_name: str, kind: type[HalfsatError]) -> None:
    if not content:
        raise kind("the file is empty", where=file_name, remedy="export it again")
    if content.startswith(_OLD_SIGNATURE):
        raise kind(
            "this is an old or password-protected workbook", where=file_name, remedy="save it as plain xlsx"
        )
    if not is_workbook(content):
        raise kind("this is not an xlsx workbook", where=file_name, remedy="export it as xlsx")


def _refuse_outsized(content: bytes, file_name: str, kind: type[HalfsatError]) -> None:
    """Unpack every part once, counting, and hold the places that cells claim against a plate's needs."""
    too_big = kind(
        "the workbook unpacks to far more than an export holds",
        where=file_name,
        remedy="export one run a file; a workbook may also be made to exhaust memory",
    )
    try:
        with zipfile.ZipFile(io.BytesIO(content)) as archive:
            parts = archive.infolist()
            if len(parts) > _MOST_PARTS or sum(part.file_size for part in parts) > _MOST_UNPACKED_BYTES:
                raise too_big
            for part in parts:
                unpacked = archive.read(part)
                if part.filename.startswith("xl/worksheets/") and _claimed_cells(unpacked) > _MOST_CELLS:
                    raise too_big
    except (
        zipfile.BadZipFile,
        zlib.error,
        EOFError,
        RuntimeError,
        NotImplementedError,
        OSError,
        ValueError,
    ) as flaw:
        raise kind(
            f"the workbook is damaged or cut off ({flaw})", where=file_name, remedy="export it again"
        ) from flaw


def _claimed_cells(part: bytes) -> int:
    """Cells of the rectangle that a sheet's farthest row and column span."""
    places: list[tuple[bytes, bytes]] = _CELL_PLACE.findall(part)
    if not places:
        return 0
    names = {name for name, _ in places}
    columns = max(
        sum((letter - 64) * 26**power for power, letter in enumerate(reversed(name))) for name in names
    )
    # A row number of a dozen digits is no row, and int() would take its time over a longer one.
    rows = max(int(row) if len(row) < 12 else _MOST_CELLS + 1 for _, row in places)
    return int(max(columns, 1) * rows)


def _as_text(cell: object, decimal: str) -> str:
    if isinstance(cell, str):
        return cell
    if isinstance(cell, bool):
        return str(cell).upper()
    if isinstance(cell, float):
        text = str(int(cell)) if cell.is_integer() and abs(cell) < 1e15 else repr(cell)
        return text.replace(".", decimal)
    if isinstance(cell, dt.datetime):
        if cell.year < _FIRST_REAL_YEAR:
            return _duration_text(cell - _CALENDAR_START, decimal)
        return cell.isoformat(sep=" ")
    if isinstance(cell, dt.timedelta):
        return _duration_text(cell, decimal)
    if isinstance(cell, dt.time):
        whole = dt.timedelta(
            hours=cell.hour, minutes=cell.minute, seconds=cell.second, microseconds=cell.microsecond
        )
        return _duration_text(whole, decimal)
    return "" if cell is None else str(cell)


def _duration_text(duration: dt.timedelta, decimal: str) -> str:
    """A duration as h:mm:ss with as many decimals as it has; hours go on past 24."""
    seconds, micro = divmod(round(duration.total_seconds() * 1e6), 1_000_000)
    hours, rest = divmod(seconds, 3600)
    fraction = f"{decimal}{micro:06d}".rstrip("0") if micro else ""
    return f"{hours}:{rest // 60:02d}:{rest % 60:02d}{fraction}"
