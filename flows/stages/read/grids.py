"""The shape `grids`: a block shaped like the plate for each time, with the time in a line above it."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from flows.stages.read.blocks import PlateBlock, matching_lines
from flows.stages.read.numbers import OK, UNREADABLE, parse_numbers
from flows.stages.read.raw import RawReadings, join, one_channel, well_positions
from flows.stages.read.reading import Reading
from flows.stages.read.sheets import Sheet, is_blank
from flows.stages.read.tables import unreadable_number
from flows.stages.read.times import parse_times
from models.errors import ExportError, UnknownName
from models.plates import PLATE_FORMATS, row_number
from models.records.export_profile import GridLayout

_FIELDS_OF_A_ROW = {plate.column_count: plate.row_count for plate in PLATE_FORMATS}
_LETTERS = re.compile(r"[A-Za-z]{1,2}")


@dataclass(frozen=True)
class Grid:
    """Where one grid stands: (field, plate column) of its columns, (line, plate row) of its rows."""

    columns: tuple[tuple[int, int], ...]
    rows: tuple[tuple[int, int], ...]
    first: int
    after: int

    @property
    def wells(self) -> tuple[tuple[int, ...], tuple[int, ...]]:
        """Plate rows and plate columns that the grid holds."""
        return tuple(row for _, row in self.rows), tuple(column for _, column in self.columns)


@dataclass(frozen=True)
class _Frame:
    grid: Grid
    channel: str
    time_s: float
    temperature_c: float


def read_grids(reading: Reading, block: PlateBlock) -> tuple[RawReadings, int]:
    """Readings of every grid of a plate, and the line where the first one begins.

    Raises
    ------
    ExportError
        If there is no grid, a grid has no time, a cell is no number, or a grid lacks wells that others have.
    """
    frames = _find_frames(reading, block)
    if not frames:
        raise ExportError(
            "there is no grid here",
            where=reading.sheet.where(block.first),
            remedy="check grids.row_labels and grids.column_numbers in the profile, or export the file again",
        )
    parts = []
    for channel in dict.fromkeys(frame.channel for frame in frames):
        own = [frame for frame in frames if frame.channel == channel]
        _refuse_torn(reading, own)
        parts.append(_readings(reading, channel, own))
    return join(parts), frames[0].grid.first


def _find_frames(reading: Reading, block: PlateBlock) -> list[_Frame]:
    sheet, profile = reading.sheet, reading.profile
    index, last = _limits(reading, block)
    time_s, temperature, channel = float("nan"), float("nan"), profile.channel
    counts: dict[str, int] = {}
    frames: list[_Frame] = []
    while index < last:
        grid = find_grid(sheet, index, last, profile.grids, profile.plate.format)
        if grid is None:
            line = sheet.line(index)
            if profile.blocks.channel and (found := re.search(profile.blocks.channel, line)):
                channel = found["channel"].strip()
            if profile.time.pattern and (found := re.search(profile.time.pattern, line)):
                time_s, temperature = _time_of(reading, found["time"], index), float("nan")
            if profile.temperature.pattern and (found := re.search(profile.temperature.pattern, line)):
                temperature = _temperature_of(reading, found["temperature"], index)
            index += 1
            continue
        if profile.time.interval_s is not None:
            time_s = counts.get(channel, 0) * profile.time.interval_s
        if not np.isfinite(time_s):
            raise ExportError(
                "no time stands above this grid",
                where=sheet.where(grid.first),
                remedy="check time.pattern in the profile",
            )
        counts[channel] = counts.get(channel, 0) + 1
        frames.append(_Frame(grid, channel, time_s, temperature))
        index = grid.after
    return frames


def _limits(reading: Reading, block: PlateBlock) -> tuple[int, int]:
    """First line to look at, and the line where the grids end by the profile's end pattern."""
    sheet, rules = reading.sheet, reading.profile.table
    first, last = min(block.first + rules.skip_lines, block.last), block.last
    for pattern, key in ((rules.after, "table.after"),):
        if pattern is not None:
            found = next(matching_lines(sheet, first, last, pattern), None)
            if found is None:
                raise ExportError(
                    f"no line has {pattern}", where=sheet.where(first), remedy=f"check {key} in the profile"
                )
            first = found[0] + 1
    if rules.end_pattern is not None:
        last = next((index for index, _ in matching_lines(sheet, first, last, rules.end_pattern)), last)
    return first, last


def _time_of(reading: Reading, text: str, index: int) -> float:
    if reading.times is None:
        return float("nan")
    time_s = float(parse_times([text], reading.times)[0])
    if not np.isfinite(time_s):
        raise ExportError(
            f"'{text[:40]}' is not a time in {reading.profile.time.notation}",
            where=reading.sheet.where(index),
            remedy="check time.notation and time.pattern in the profile",
        )
    return time_s


def _temperature_of(reading: Reading, text: str, index: int) -> float:
    values, states = parse_numbers([text], reading.numbers)
    if states[0] == UNREADABLE:
        raise ExportError(
            f"'{text[:40]}' is not a temperature",
            where=reading.sheet.where(index),
            remedy="check temperature.pattern in the profile",
        )
    return float(values[0])


def find_grid(sheet: Sheet, index: int, last: int, layout: GridLayout, well_count: int | None) -> Grid | None:
    """The grid that begins in this very line, or None."""
    fields = sheet.fields(index)
    if layout.column_numbers:
        columns = _numbered_columns(fields, layout.row_labels)
        if columns is None:
            return None
        rows = _rows(sheet, index + 1, last, layout, columns, well_count)
    else:
        columns = _plain_columns(fields, layout.row_labels)
        if columns is None:
            return None
        rows = _rows(sheet, index, last, layout, columns, well_count)
    if not rows:
        return None
    return Grid(columns, rows, index, rows[-1][0] + 1)


def _numbered_columns(fields: Sequence[str], labelled: bool) -> tuple[tuple[int, int], ...] | None:
    """Fields that hold consecutive column numbers, at least two; a word may stand over the row letters."""
    start = 1 if labelled else 0
    filled = [(field, text.strip()) for field, text in enumerate(fields) if text.strip() and field >= start]
    numbers = [
        (field, int(text)) for field, text in filled if text.isascii() and text.isdigit() and len(text) < 3
    ]
    if len(numbers) < 2 or len(numbers) != len(filled):
        return None
    first_field, first_column = numbers[0]
    expected = [(first_field + step, first_column + step) for step in range(len(numbers))]
    on_plate = first_column >= 1 and numbers[-1][1] <= PLATE_FORMATS[-1].column_count
    return tuple(numbers) if numbers == expected and on_plate else None


def _plain_columns(fields: Sequence[str], labelled: bool) -> tuple[tuple[int, int], ...] | None:
    """Fields of a grid without column numbers: as many as a plate has columns, from its first row on."""
    start = 1 if labelled else 0
    if labelled and (not fields or _row_of(fields[0]) != 1):
        return None
    count = len(fields) - start
    while count > 0 and count not in _FIELDS_OF_A_ROW and not fields[start + count - 1].strip():
        count -= 1
    if count not in _FIELDS_OF_A_ROW or is_blank(fields[start:]):
        return None
    return tuple((start + step, step + 1) for step in range(count))


def _rows(
    sheet: Sheet,
    first: int,
    last: int,
    layout: GridLayout,
    columns: tuple[tuple[int, int], ...],
    well_count: int | None,
) -> tuple[tuple[int, int], ...]:
    """Lines of the grid's rows; empty lines between them are passed over."""
    rows: list[tuple[int, int]] = []
    limit = _row_limit(columns, well_count)
    for index in range(first, last):
        fields = sheet.fields(index)
        if is_blank(fields):
            continue
        row = _row_of(fields[0]) if layout.row_labels else len(rows) + 1
        if row is None or (rows and row != rows[-1][1] + 1) or row > limit:
            break
        rows.append((index, row))
    return tuple(rows)


def _row_limit(columns: tuple[tuple[int, int], ...], well_count: int | None) -> int:
    if well_count is not None:
        return next(plate.row_count for plate in PLATE_FORMATS if plate.well_count == well_count)
    widest = columns[-1][1]
    return next(plate.row_count for plate in PLATE_FORMATS if plate.column_count >= widest)


def _row_of(label: str) -> int | None:
    text = label.strip()
    if not _LETTERS.fullmatch(text):
        return None
    try:
        return row_number(text)
    except UnknownName:
        return None


def _refuse_torn(reading: Reading, frames: Sequence[_Frame]) -> None:
    """Every grid of a channel holds the same wells; one that does not was cut off or is something else."""
    usual = frames[0].grid.wells
    for frame in frames:
        if frame.grid.wells != usual:
            raise ExportError(
                f"this grid has {len(frame.grid.rows)} rows and {len(frame.grid.columns)} columns "
                f"where the first has {len(usual[0])} and {len(usual[1])}, or other wells",
                where=reading.sheet.where(frame.grid.first),
                remedy="the file may be cut off: export it again; if this is no grid of reads, state "
                "table.end_pattern",
            )


def _readings(reading: Reading, channel: str, frames: Sequence[_Frame]) -> RawReadings:
    cells: list[str] = []
    for frame in frames:
        for line, _ in frame.grid.rows:
            cells += _cells(reading, line, frame.grid)
    values, states = parse_numbers(cells, reading.numbers)
    lines = np.array(
        [line for frame in frames for line, _ in frame.grid.rows for _ in frame.grid.columns], dtype=np.int64
    )
    fields = np.array(
        [field for frame in frames for _ in frame.grid.rows for field, _ in frame.grid.columns],
        dtype=np.int64,
    )
    bad = np.flatnonzero(states == UNREADABLE)
    if len(bad):
        first = int(bad[0])
        raise unreadable_number(reading.sheet, int(lines[first]), int(fields[first]), cells[first])
    places = [(row, column) for _, row in frames[0].grid.rows for _, column in frames[0].grid.columns]
    count = len(places)
    return RawReadings(
        (channel,),
        one_channel(len(cells)),
        np.tile(well_positions(places), len(frames)),
        np.repeat([frame.time_s for frame in frames], count),
        np.where(states == OK, values, np.nan),
        states,
        np.repeat([frame.temperature_c for frame in frames], count),
        lines,
        fields,
    )


def _cells(reading: Reading, line: int, grid: Grid) -> list[str]:
    fields = reading.sheet.fields(line)
    needed = grid.columns[-1][0] + 1
    if len(fields) < needed:
        if reading.profile.table.short_rows == "error":
            raise ExportError(
                f"the line has {len(fields)} fields where the grid has {needed}",
                where=reading.sheet.where(line),
                remedy="the file may be cut off: export it again; if absent fields are missing reads, set "
                'table.short_rows = "missing"',
            )
        fields = fields + [""] * (needed - len(fields))
    return [fields[field] for field, _ in grid.columns]
