"""The shape `wide`: a row a time, a column a well."""

from __future__ import annotations

from collections.abc import Collection, Sequence

import numpy as np

from flows.stages.read.blocks import ChannelBlock, TableSpan, column_index, end_of_rows, find_table
from flows.stages.read.numbers import OK, parse_numbers
from flows.stages.read.raw import RawReadings, one_channel, well_positions
from flows.stages.read.reading import Reading, need_rows, plain, row_times
from flows.stages.read.times import parse_times
from models.errors import ExportError


def read_wide(reading: Reading, block: ChannelBlock) -> tuple[RawReadings, int]:
    """A row a time, a column a well: readings, and the line where the table begins."""
    sheet, columns = reading.sheet, reading.profile.columns
    span = find_table(sheet, block.first, block.last, reading.profile)
    time_at = None if columns.time is None else column_index(span, sheet, columns.time, "columns.time")
    temperature_at = (
        None
        if columns.temperature is None
        else column_index(span, sheet, columns.temperature, "columns.temperature")
    )
    ignored = {column_index(span, sheet, each, "columns.ignore") for each in columns.ignore}
    fields, places = _well_columns(reading, span, [*ignored, time_at, temperature_at])
    last = end_of_rows(sheet, span, reading.profile, lambda row: _has_time(reading, row, time_at))
    timed_by_number = reading.times is not None and reading.times.numeric
    extra = [at for at in (time_at if timed_by_number else None, temperature_at) if at is not None]
    texts = [] if time_at is None or timed_by_number else [time_at]
    table = reading.load(span, last, [*fields, *extra], texts)
    reads = len(table.lines)
    need_rows(reading, span, reads)
    times = row_times(reading, table, time_at, len(fields) if timed_by_number else None)
    temperature = (
        np.full(reads, np.nan) if temperature_at is None else plain(table, len(fields) + len(extra) - 1)
    )
    wells = len(fields)
    raw = RawReadings(
        (block.channel,),
        one_channel(wells * reads),
        np.repeat(well_positions(places), reads),
        np.tile(times, wells),
        table.values[:, :wells].ravel(order="F"),
        table.states[:, :wells].ravel(order="F"),
        np.tile(temperature, wells),
        np.tile(table.lines, wells),
        np.repeat(np.array(fields, dtype=np.int64), reads),
    )
    return raw, span.first if span.header_line < 0 else span.header_line


def _well_columns(
    reading: Reading, span: TableSpan, known: Collection[int | None]
) -> tuple[list[int], list[tuple[int, int]]]:
    fields, places = [], []
    for field, name in enumerate(span.header):
        if field in known or not name:
            continue
        place = reading.position(name)
        if place is None:
            raise ExportError(
                f"'{name[:40]}' heads a column but is no well",
                where=reading.sheet.where(span.header_line, field),
                remedy="check wells.pattern in the profile, or list the column under columns.ignore",
            )
        fields.append(field)
        places.append(place)
    if not fields:
        raise ExportError(
            "the header names no well",
            where=reading.sheet.where(span.header_line),
            remedy="check table.header and wells.pattern in the profile",
        )
    return fields, places


def _has_time(reading: Reading, row: Sequence[str], time_at: int | None) -> bool:
    if time_at is None or reading.times is None:
        return any(state == OK for state in parse_numbers(row, reading.numbers)[1])
    return time_at < len(row) and bool(np.isfinite(parse_times([row[time_at]], reading.times)[0]))
