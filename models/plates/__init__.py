"""Well names and geometry of 96-, 384- and 1536-well plates.

Geometry follows ANSI/SLAS 4-2004 (R2012): 8 x 12, 16 x 24 and 32 x 48 wells, rows lettered from A
(after Z comes AA), columns numbered from 1. A well's own name here is the row letters and the column
number without padding: `A1`, `H12`, `AF48`.
"""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass
from functools import cache

from models.errors import UnknownName

_PLAIN_NAME = re.compile(r"\s*([A-Za-z]{1,2})\s*0*([1-9]\d?)\s*\Z")


@dataclass(frozen=True)
class PlateFormat:
    """A plate's grid of wells.

    Attributes
    ----------
    well_count
        Number of wells: 96, 384 or 1536.
    row_count, column_count
        Size of the grid.
    """

    well_count: int
    row_count: int
    column_count: int

    def holds(self, row: int, column: int) -> bool:
        """Whether row and column, both counted from 1, lie on the plate."""
        return 1 <= row <= self.row_count and 1 <= column <= self.column_count

    def wells(self) -> list[str]:
        """All well names, row by row."""
        return [
            well_name(row, column)
            for row in range(1, self.row_count + 1)
            for column in range(1, self.column_count + 1)
        ]


PLATE_FORMATS: tuple[PlateFormat, ...] = (
    PlateFormat(96, 8, 12),
    PlateFormat(384, 16, 24),
    PlateFormat(1536, 32, 48),
)


def plate_format(well_count: int) -> PlateFormat:
    """Return the plate format with this many wells.

    Raises
    ------
    UnknownName
        If no plate has that many wells.
    """
    for plate in PLATE_FORMATS:
        if plate.well_count == well_count:
            return plate
    raise UnknownName(f"no plate has {well_count} wells", remedy="use 96, 384 or 1536")


def row_letters(row: int) -> str:
    """Letters of a row counted from 1: 1 is A, 26 is Z, 27 is AA, 32 is AF."""
    if row < 1:
        raise UnknownName(f"row {row} is not on a plate", remedy="rows count from 1")
    return chr(64 + row) if row <= 26 else "A" + chr(64 + row - 26)


def row_number(letters: str) -> int:
    """Row counted from 1 for its letters, or for a number written as text.

    Raises
    ------
    UnknownName
        If the text is neither row letters nor a positive number.
    """
    text = letters.strip().upper()
    if text.isascii() and text.isdigit() and int(text) > 0:
        return int(text)
    if len(text) == 1 and "A" <= text <= "Z":
        return ord(text) - 64
    if len(text) == 2 and text[0] == "A" and "A" <= text[1] <= "F":
        return 26 + ord(text[1]) - 64
    raise UnknownName(f"'{letters}' is not a plate row", remedy="rows run from A to AF, or from 1 to 32")


@cache
def well_name(row: int, column: int) -> str:
    """Name of the well in row and column, both counted from 1."""
    return f"{row_letters(row)}{column}"


@cache
def well_position(name: str, pattern: str | None = None) -> tuple[int, int]:
    """Row and column, counted from 1, of a well written in any notation.

    Parameters
    ----------
    name
        The well as a file writes it: `A1`, `a01`, `AF48`, or anything that `pattern` takes apart.
    pattern
        Regular expression with the named groups `row` and `column`, letters or numbers each. None reads
        row letters followed by a column number, padded or not.

    Raises
    ------
    UnknownName
        If the name does not fit, or lies on no plate.
    """
    match = _PLAIN_NAME.match(name) if pattern is None else re.fullmatch(pattern, name.strip())
    if match is None:
        remedy = "write wells as A1 or A01" if pattern is None else f"the profile's pattern is {pattern}"
        raise UnknownName(f"'{name}' is not a well name", remedy=remedy)
    row_text, column_text = (match[1], match[2]) if pattern is None else (match["row"], match["column"])
    row, column = row_number(row_text), _column_number(column_text)
    if not PLATE_FORMATS[-1].holds(row, column):
        raise UnknownName(f"'{name}' lies on no plate", remedy="the largest plate ends at AF48")
    return row, column


def _column_number(text: str) -> int:
    stripped = text.strip()
    return int(stripped) if stripped.isascii() and stripped.isdigit() else row_number(stripped)


def smallest_format(wells: Iterable[tuple[int, int]]) -> PlateFormat:
    """Smallest plate format that holds every (row, column) given."""
    positions = list(wells)
    for plate in PLATE_FORMATS:
        if all(plate.holds(row, column) for row, column in positions):
            return plate
    raise UnknownName("these wells fit on no plate", remedy="the largest plate ends at AF48")
