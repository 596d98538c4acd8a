"""Workbooks whose bytes depend on their cells alone: no clock in the archive or in the properties."""

from __future__ import annotations

import io
import re
import zipfile
from collections.abc import Sequence
from decimal import Decimal

from openpyxl import Workbook

Cell = str | int | Decimal

# The earliest time that a zip archive can hold.
_NO_TIME = (1980, 1, 1, 0, 0, 0)
_CLOCK = re.compile(rb"(<dcterms:(?:created|modified)[^>]*>)[^<]*")


def workbook(sheets: Sequence[tuple[str, Sequence[Sequence[Cell]]]]) -> bytes:
    """Bytes of an xlsx file.

    Parameters
    ----------
    sheets
        Name and rows of each sheet; an empty text leaves its cell empty.
    """
    book = Workbook(write_only=True)
    book.properties.creator = "reader"
    for name, rows in sheets:
        sheet = book.create_sheet(name)
        for row in rows:
            sheet.append([None if cell == "" else cell for cell in row])
    saved = io.BytesIO()
    book.save(saved)
    return _without_clock(saved.getvalue())


def _without_clock(archive: bytes) -> bytes:
    """Write the archive's members again with one fixed time, uncompressed, the times of making taken out."""
    written = io.BytesIO()
    with zipfile.ZipFile(io.BytesIO(archive)) as source, zipfile.ZipFile(written, "w") as target:
        for member in sorted(source.namelist()):
            content = _CLOCK.sub(rb"\g<1>1980-01-01T00:00:00Z", source.read(member))
            target.writestr(zipfile.ZipInfo(member, _NO_TIME), content)
    return written.getvalue()
