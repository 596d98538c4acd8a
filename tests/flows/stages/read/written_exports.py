"""Writes plates as exports in any shape and notation, so that the tests can read them back.

Written on its own: nothing here comes from the code under test but the profile record.
"""

from __future__ import annotations

import csv
import datetime as dt
import io
from dataclasses import dataclass, field
from typing import Any

import openpyxl

from models.records.export_profile import ExportProfile

LETTERS = "ABCDEFGHIJKLMNOP"
CODECS = {"utf-8": "utf-8", "utf-8 with BOM": "utf-8-sig", "utf-16": "utf-16", "latin-1": "latin-1"}
START = dt.datetime(2026, 3, 2, 21, 15, 0, tzinfo=dt.UTC)
OVERFLOW, MISSING = "OVER", "n/a"


@dataclass(frozen=True)
class Plate:
    """Signals as text, by well and read; `times_s` as the instrument counted them."""

    wells: list[tuple[int, int]]
    times_s: list[float]
    cells: dict[tuple[int, int], list[str]]
    temperatures: list[str] | None = None


@dataclass(frozen=True)
class Style:
    shape: str
    notation: str = "s"
    decimal: str = "."
    delimiter: str = ","
    encoding: str = "utf-8"
    newline: str = "\n"
    well_style: str = "A1"
    container: str = "text"
    blank_rows: bool = False
    trailing: bool = False
    unit_word: str = "µ-plate"
    extra: dict[str, Any] = field(default_factory=dict)


def well_text(well: tuple[int, int], style: str) -> str:
    row, column = well
    if style == "A1":
        return f"{LETTERS[row - 1]}{column}"
    return f"{LETTERS[row - 1]}{column:02d}" if style == "A01" else f"R{row}C{column:02d}"


def time_text(time_s: float, notation: str, decimal: str) -> str:
    whole = round(time_s)
    minutes, seconds = divmod(whole, 60)
    hours, over = divmod(minutes, 60)
    texts = {
        "s": lambda: repr(time_s),
        "ms": lambda: repr(time_s * 1000),
        "min": lambda: repr(time_s / 60),
        "h": lambda: repr(time_s / 3600),
        "mm:ss": lambda: f"{minutes:02d}:{seconds:02d}",
        "hh:mm:ss": lambda: f"{hours}:{over:02d}:{seconds:02d}",
        "timestamp": lambda: (START + dt.timedelta(seconds=whole)).strftime("%d.%m.%Y %H:%M:%S"),
    }
    text = texts[notation]()
    return text.replace(".", decimal) if notation in ("s", "ms", "min", "h") else text


def write(plate: Plate, style: Style) -> tuple[bytes, ExportProfile]:
    """The export's bytes and the profile that describes it."""
    rows = [["Barcode: P7", ""], [style.unit_word], []]
    rows += _interleaved(_table(plate, style), style.blank_rows)
    if style.trailing:
        rows += [[], ["Averages"], ["all", "0", "1"]]
    return _render(rows, style), _profile(plate, style)


def cell_at(content: bytes, style: Style, row: int, column: int) -> str:
    """What stands at a line and field of the file, read without the code under test."""
    if style.container == "xlsx":
        sheet = openpyxl.load_workbook(io.BytesIO(content)).worksheets[0]
        value = sheet.cell(row, column).value
        return "" if value is None else str(value)
    text = content.decode(CODECS[style.encoding])
    line = text.split(style.newline)[row - 1]
    return next(csv.reader([line], delimiter=style.delimiter))[column - 1]


def _table(plate: Plate, style: Style) -> list[list[str]]:
    times = [time_text(time_s, style.notation, style.decimal) for time_s in plate.times_s]
    warmth = plate.temperatures
    names = {well: well_text(well, style.well_style) for well in plate.wells}
    if style.shape == "wide":
        head = [["Time", *(["Temp"] if warmth else []), *names.values()]]
        return head + [
            [times[n], *([warmth[n]] if warmth else []), *(plate.cells[well][n] for well in plate.wells)]
            for n in range(len(times))
        ]
    if style.shape == "wells_by_rows":
        body = [[names[well], *plate.cells[well]] for well in plate.wells]
        return [["Well", *times], *body, *([["Temp", *warmth]] if warmth else [])]
    if style.shape == "long":
        head = [["Well", "Time", "Signal", *(["Temp"] if warmth else [])]]
        return head + [
            [names[well], times[n], plate.cells[well][n], *([warmth[n]] if warmth else [])]
            for n in range(len(times))
            for well in plate.wells
        ]
    columns = sorted({column for _, column in plate.wells})
    grids: list[list[str]] = []
    for n, time in enumerate(times):
        grids += [["Read at", time, *([f"T={warmth[n]}"] if warmth else [])], ["", *map(str, columns)]]
        for row in sorted({row for row, _ in plate.wells}):
            grids.append([LETTERS[row - 1], *(plate.cells[row, column][n] for column in columns)])
    return grids


def _interleaved(rows: list[list[str]], blank_rows: bool) -> list[list[str]]:
    return [each for row in rows for each in (row, [""] * len(row))] if blank_rows else rows


def _render(rows: list[list[str]], style: Style) -> bytes:
    if style.container == "xlsx":
        book = openpyxl.Workbook()
        for row in rows:
            book.worksheets[0].append(row)
        stream = io.BytesIO()
        book.save(stream)
        return stream.getvalue()
    text = io.StringIO()
    writer = csv.writer(text, delimiter=style.delimiter, lineterminator=style.newline)
    writer.writerows(rows)
    return text.getvalue().encode(CODECS[style.encoding])


def _profile(plate: Plate, style: Style) -> ExportProfile:
    separated = r"[,;|\t]"
    shape: dict[str, Any] = {
        "wide": {"columns": {"time": "Time"}, "table": {"header": "^Time"}},
        "long": {
            "columns": {"well": "Well", "time": "Time", "signal": "Signal"},
            "table": {"header": "^Well"},
        },
        "wells_by_rows": {"columns": {"well": "Well"}, "table": {"header": "^Well"}},
        "grids": {"time": {"pattern": rf'^Read at{separated}"?(?P<time>[\d:. ,]*\d)'}, "table": {}},
    }[style.shape]
    time = {"notation": style.notation, **shape.pop("time", {})}
    if style.notation == "timestamp":
        time["format"] = "%d.%m.%Y %H:%M:%S"
    warmth: dict[str, Any] = {}
    if plate.temperatures and style.shape in ("wide", "long"):
        shape["columns"]["temperature"] = "Temp"
    elif plate.temperatures and style.shape == "grids":
        warmth = {"pattern": r"T=(?P<temperature>[\d.,]*\d)"}
    elif plate.temperatures:
        warmth = {"row": "Temp"}
    if style.trailing:
        shape["table"]["end_pattern"] = "^Averages"
    content = {
        "shape": style.shape,
        "container": style.container,
        "detect": {"head": ["^Barcode"]},
        "plate": {"id_in_preamble": r"Barcode: (?P<plate_id>\w+)"},
        "time": time,
        "temperature": warmth,
        "values": {"decimal": style.decimal, "overflow": [OVERFLOW], "missing": [MISSING]},
        "wells": {"pattern": r"R(?P<row>\d+)C(?P<column>\d+)"} if style.well_style == "R1C1" else {},
        **shape,
    }
    return ExportProfile.model_validate(content | style.extra)
