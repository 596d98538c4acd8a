"""Plate maps: what each well of a plate holds, from CSV or xlsx with units in the header.

Every value is checked before it is believed; concentrations come out in the units of the tables. Knows
nothing of exports.
"""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from difflib import get_close_matches

import numpy as np
import pandas as pd

from flows.stages.read.map_rules import ROLES, Row, check_row
from flows.stages.read.numbers import OK, NumberRule, parse_numbers
from flows.stages.read.sheets import Sheet, TextSheet, decode, guess_separator, is_blank
from flows.stages.read.workbook import is_workbook, read_sheets
from models.errors import HalfsatError, PlateMapError, UnknownName
from models.plates import well_name, well_position
from models.records.units import concentration_factor

TEXT_COLUMNS = ("plate_id", "well", "role", "lot", "modulator", "assay")
QUANTITIES = ("substrate", "enzyme", "modulator", "product")
WELL_COLUMNS = (
    "well",
    "role",
    "lot",
    "substrate_um",
    "enzyme_nm",
    "enzyme_ng_per_ml",
    "modulator",
    "modulator_um",
    "product_um",
)
_REQUIRED = ("plate_id", "well", "role")
_HEADING = re.compile(r"(?P<name>[^\[\](){}]+?)\s*[\[(](?P<unit>[^\[\]()]+)[\])]")
_KNOWN_HEADINGS = (*TEXT_COLUMNS, *QUANTITIES)


@dataclass(frozen=True)
class PlateMap:
    """What the wells of one plate hold.

    Attributes
    ----------
    assay
        Name of the assay, where the map states it.
    wells
        The columns of WELL_COLUMNS, row by row over the plate; texts None and numbers NaN where the map
        leaves them empty. The substrate of an enzyme_blank is 0: it holds everything but substrate.
    """

    plate_id: str
    assay: str | None
    wells: pd.DataFrame


@dataclass(frozen=True)
class _Heading:
    """A column of the map: the column of `wells` that it fills, and the factor to that column's unit."""

    target: str
    factor: float | None = None


def is_plate_map(content: bytes, file_name: str) -> bool:
    """Whether the first filled line heads columns plate_id, well and role."""
    try:
        return any(_header_line(sheet) is not None for sheet in _sheets(content, file_name))
    except HalfsatError:
        return False


def read_plate_map(content: bytes, file_name: str) -> list[PlateMap]:
    """Plate maps of a file, in the order in which their plates first appear.

    Raises
    ------
    PlateMapError
        If a column, role, unit, well or number is unknown, a well stands twice, or a row contradicts its
        role. The message names file and line, and the nearest name.
    """
    for sheet in _sheets(content, file_name):
        header_line = _header_line(sheet)
        if header_line is not None:
            return _read_sheet(sheet, header_line)
    raise PlateMapError(
        "this is no plate map: no header line has plate_id, well and role",
        where=file_name,
        remedy="begin the file with the header plate_id, well, role, lot, substrate [umol/L] ...",
    )


def _sheets(content: bytes, file_name: str) -> list[Sheet]:
    if is_workbook(content):
        return list(read_sheets(content, file_name, "*", kind=PlateMapError))
    data, encoding = decode(content, "auto", file_name, kind=PlateMapError)
    return [TextSheet(file_name, data, guess_separator(data), encoding=encoding)]


def _header_line(sheet: Sheet) -> int | None:
    for index in range(sheet.line_count):
        fields = sheet.fields(index)
        if not is_blank(fields):
            names = {_normal(field) for field in fields}
            return index if set(_REQUIRED) <= names else None
    return None


def _normal(heading: str) -> str:
    return re.sub(r"[\s_-]+", "_", heading.strip().casefold())


def _read_sheet(sheet: Sheet, header_line: int) -> list[PlateMap]:
    headings = _headings(sheet, header_line)
    lines = [i for i in range(header_line + 1, sheet.line_count) if not is_blank(sheet.fields(i))]
    if not lines:
        raise PlateMapError("the map has no wells", where=sheet.where(header_line), remedy="add a row a well")
    cells = [_fitted(sheet, line, len(headings)) for line in lines]
    numbers = _numbers(sheet, lines, cells, headings)
    rows = [
        _row(sheet, line, fields, headings, numbers, at)
        for at, (line, fields) in enumerate(zip(lines, cells, strict=True))
    ]
    plates: dict[str, list[Row]] = {}
    for row in rows:
        plates.setdefault(row.plate_id, []).append(row)
    return [_plate_map(sheet, plate_id, own) for plate_id, own in plates.items()]


def _headings(sheet: Sheet, header_line: int) -> list[_Heading | None]:
    headings: list[_Heading | None] = []
    seen: dict[str, int] = {}
    for field, text in enumerate(sheet.fields(header_line)):
        heading = _heading(sheet, header_line, field, text.strip()) if text.strip() else None
        headings.append(heading)
        if heading is None:
            continue
        if heading.target in seen:
            raise PlateMapError(
                f"the columns {seen[heading.target] + 1} and {field + 1} both give {heading.target}",
                where=sheet.where(header_line),
                remedy="leave one of them out",
            )
        seen[heading.target] = field
    while headings and headings[-1] is None:
        headings.pop()
    return headings


def _heading(sheet: Sheet, header_line: int, field: int, text: str) -> _Heading:
    where = sheet.where(header_line, field)
    match = _HEADING.fullmatch(text)
    name = _normal(match["name"] if match else text)
    if match is None and name in TEXT_COLUMNS:
        return _Heading(name)
    if name in QUANTITIES:
        if match is None:
            raise PlateMapError(
                f"the column {name} has no unit",
                where=where,
                remedy=f"head it {name} [umol/L], or in another unit",
            )
        return _quantity(name, match["unit"], where)
    near = get_close_matches(name, _KNOWN_HEADINGS, n=1, cutoff=0.5)
    meant = f"did you mean {near[0]}? " if near else ""
    raise PlateMapError(
        f"there is no column '{text[:40]}'",
        where=where,
        remedy=f"{meant}columns are {', '.join(_KNOWN_HEADINGS)}",
    )


def _quantity(name: str, unit: str, where: str) -> _Heading:
    try:
        kind, factor = concentration_factor(unit)
    except UnknownName as unknown:
        raise PlateMapError(unknown.what, where=where, remedy=unknown.remedy) from unknown
    if name == "enzyme":
        return (
            _Heading("enzyme_nm", factor * 1000.0)
            if kind == "amount"
            else _Heading("enzyme_ng_per_ml", factor)
        )
    if kind == "mass":
        raise PlateMapError(
            f"{name} is given by mass [{unit}]",
            where=where,
            remedy="give it by amount, such as umol/L: the map holds no molar mass",
        )
    return _Heading(f"{name}_um", factor)


def _fitted(sheet: Sheet, line: int, width: int) -> list[str]:
    fields = [field.strip() for field in sheet.fields(line)]
    if len(fields) > width and not is_blank(fields[width:]):
        raise PlateMapError(
            f"the line has {len(fields)} fields and the header {width}",
            where=sheet.where(line),
            remedy="put a text that holds the delimiter in quotes",
        )
    return (fields + [""] * width)[:width]


def _numbers(
    sheet: Sheet, lines: Sequence[int], cells: Sequence[Sequence[str]], headings: Sequence[_Heading | None]
) -> dict[str, list[float]]:
    rule = NumberRule(decimal=_decimal(sheet, cells, headings))
    columns: dict[str, list[float]] = {}
    for field, heading in enumerate(headings):
        if heading is None or heading.factor is None:
            continue
        texts = [row[field] for row in cells]
        values, states = parse_numbers(texts, rule)
        bad = np.flatnonzero(((states != OK) & np.array([bool(text) for text in texts])) | (values < 0))
        if len(bad):
            at = int(bad[0])
            raise PlateMapError(
                f"'{texts[at][:40]}' is not a concentration",
                where=sheet.where(lines[at], field),
                remedy="write a number of 0 or more with a decimal point, or leave the cell empty",
            )
        columns[heading.target] = [float(value) * heading.factor for value in values]
    return columns


def _decimal(sheet: Sheet, cells: Sequence[Sequence[str]], headings: Sequence[_Heading | None]) -> str:
    """Comma where fields are cut by semicolons and no number has a point: so a spreadsheet writes it."""
    if not isinstance(sheet, TextSheet) or sheet.separator != ";":
        return "."
    fields = [field for field, heading in enumerate(headings) if heading and heading.factor is not None]
    texts = [row[field] for row in cells for field in fields]
    return "," if any("," in text for text in texts) and not any("." in text for text in texts) else "."


def _row(
    sheet: Sheet,
    line: int,
    fields: Sequence[str],
    headings: Sequence[_Heading | None],
    numbers: Mapping[str, Sequence[float]],
    at: int,
) -> Row:
    texts = {
        heading.target: fields[field] or None
        for field, heading in enumerate(headings)
        if heading is not None and heading.factor is None
    }
    for name in _REQUIRED:
        if texts.get(name) is None:
            raise PlateMapError(
                f"{name} is empty", where=sheet.where(line), remedy="fill it, or delete the row"
            )
    well, role = str(texts["well"]), _role(sheet, line, str(texts["role"]))
    try:
        position = well_position(well)
    except UnknownName as unknown:
        raise PlateMapError(unknown.what, where=sheet.where(line), remedy=unknown.remedy) from unknown
    row = Row(
        line=line,
        plate_id=str(texts["plate_id"]),
        position=position,
        role=role,
        lot=texts.get("lot"),
        modulator=texts.get("modulator"),
        assay=texts.get("assay"),
        numbers={name: values[at] for name, values in numbers.items()},
    )
    problem = check_row(row)
    if problem is not None:
        what, remedy = problem
        raise PlateMapError(f"well {well_name(*position)}: {what}", where=sheet.where(line), remedy=remedy)
    return row


def _role(sheet: Sheet, line: int, text: str) -> str:
    role = _normal(text)
    if role in ROLES:
        return role
    near = get_close_matches(role, ROLES, n=1, cutoff=0.4)
    meant = f"did you mean {near[0]}? " if near else ""
    raise PlateMapError(
        f"there is no role '{text[:40]}'",
        where=sheet.where(line),
        remedy=f"{meant}roles are {', '.join(ROLES)}",
    )


def _plate_map(sheet: Sheet, plate_id: str, rows: Sequence[Row]) -> PlateMap:
    first_line: dict[tuple[int, int], int] = {}
    for row in rows:
        if row.position in first_line:
            raise PlateMapError(
                f"well {well_name(*row.position)} of plate {plate_id} stands twice, first in "
                f"{'row' if sheet.name else 'line'} {first_line[row.position] + 1}",
                where=sheet.where(row.line),
                remedy="delete one of the two",
            )
        first_line[row.position] = row.line
    assays = {row.assay: row.line for row in rows if row.assay is not None}
    if len(assays) > 1:
        names = " and ".join(sorted(assays)[:2])
        raise PlateMapError(
            f"plate {plate_id} names two assays, {names}",
            where=sheet.where(max(assays.values())),
            remedy="one plate has one assay",
        )
    ordered = sorted(rows, key=lambda row: row.position)
    wells = pd.DataFrame(
        {
            "well": pd.Series([well_name(*row.position) for row in ordered], dtype=object),
            "role": pd.Series([row.role for row in ordered], dtype=object),
            "lot": pd.Series([row.lot for row in ordered], dtype=object),
            "substrate_um": [row.number("substrate_um") for row in ordered],
            "enzyme_nm": [row.number("enzyme_nm") for row in ordered],
            "enzyme_ng_per_ml": [row.number("enzyme_ng_per_ml") for row in ordered],
            "modulator": pd.Series([row.modulator for row in ordered], dtype=object),
            "modulator_um": [row.number("modulator_um") for row in ordered],
            "product_um": [row.number("product_um") for row in ordered],
        },
        columns=list(WELL_COLUMNS),
    )
    return PlateMap(plate_id, next(iter(assays), None), wells)
