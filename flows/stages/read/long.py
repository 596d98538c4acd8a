"""The shape `long`: a row a reading."""

from __future__ import annotations

import numpy as np

from flows.stages.read.blocks import ChannelBlock, column_index, end_of_rows, find_table
from flows.stages.read.numbers import Reals
from flows.stages.read.raw import Narrow, RawReadings, constant_integer, constant_real, one_channel
from flows.stages.read.reading import (
    Reading,
    name_columns,
    need_rows,
    plain,
    row_times,
    row_well,
    table_positions,
)
from flows.stages.read.tables import LoadedTable, TextColumn
from models.errors import ExportError


def read_long(reading: Reading, block: ChannelBlock) -> tuple[RawReadings, int, TextColumn | None]:
    """A row a reading: readings, the line where the table begins, and each row's plate if the file says."""
    sheet, profile, columns = reading.sheet, reading.profile, reading.profile.columns
    span = find_table(sheet, block.first, block.last, profile)
    named = name_columns(reading, span)
    at = {
        key: column_index(span, sheet, column, f"columns.{key}")
        for key in ("signal", "time", "channel", "plate", "read", "temperature")
        if (column := getattr(columns, key)) is not None
    }
    last = end_of_rows(sheet, span, profile, lambda row: row_well(reading, row, named) is not None)
    timed_by_number = reading.times is not None and reading.times.numeric
    numbers = [at["signal"]]
    numbers += [at[key] for key in ("temperature", "read") if key in at]
    numbers += [at["time"]] if timed_by_number else []
    texts = [*named, *(at[key] for key in ("channel", "plate") if key in at)]
    texts += [at["time"]] if "time" in at and reading.times is not None and not timed_by_number else []
    table = reading.load(span, last, numbers, texts)
    need_rows(reading, span, len(table.lines))
    positions = table_positions(reading, table, named)
    channels: tuple[str, ...] = (block.channel,)
    channel = one_channel(len(table.lines))
    if "channel" in at:
        column = table.texts[at["channel"]]
        _refuse_blank(reading, table, at["channel"], "channel")
        channels, channel = tuple(column.texts), column.codes.astype(np.int16)
    plate = None
    if "plate" in at:
        _refuse_blank(reading, table, at["plate"], "plate")
        plate = table.texts[at["plate"]]
    if reading.times is None:
        read_place = numbers.index(at["read"]) if "read" in at else None
        times = _counted_times(reading, table, positions, channel, plate, read_place)
    else:
        times = row_times(reading, table, at["time"], numbers.index(at["time"]) if timed_by_number else None)
    temperature = (
        plain(table, numbers.index(at["temperature"]))
        if "temperature" in at
        else constant_real(np.nan, len(times))
    )
    raw = RawReadings(
        channels,
        channel,
        positions,
        times,
        table.values[:, 0],
        table.states[:, 0],
        temperature,
        table.lines,
        constant_integer(at["signal"], len(times)),
    )
    return raw, span.first if span.header_line < 0 else span.header_line, plate


def _counted_times(
    reading: Reading,
    table: LoadedTable,
    positions: Narrow,
    channel: Narrow,
    plate: TextColumn | None,
    read_place: int | None,
) -> Reals:
    """Times by the stated interval: by the read's number, or by the order of each well's rows."""
    interval = reading.profile.time.interval_s
    assert interval is not None
    if read_place is not None:
        numbers = plain(table, read_place)
        bad = np.flatnonzero(~np.isfinite(numbers))
        if len(bad):
            raise ExportError(
                "the number of the read is missing",
                where=reading.sheet.where(int(table.lines[bad[0]])),
                remedy="check columns.read in the profile",
            )
        return (numbers - 1) * interval
    plates = np.zeros(len(positions), dtype=np.int64) if plate is None else plate.codes.astype(np.int64)
    order = np.lexsort((np.arange(len(positions)), positions, channel, plates))
    keys = np.stack([plates, channel, positions])[:, order]
    begins = np.concatenate([[True], (np.diff(keys, axis=1) != 0).any(axis=0)])
    starts = np.maximum.accumulate(np.where(begins, np.arange(len(order)), 0))
    counted = np.empty(len(order))
    counted[order] = np.arange(len(order)) - starts
    return counted * interval


def _refuse_blank(reading: Reading, table: LoadedTable, field: int, what: str) -> None:
    column = table.texts[field]
    blank = column.rows_with(np.array([not text for text in column.texts], dtype=bool))
    if blank.any():
        line = int(table.lines[np.flatnonzero(blank)[0]])
        raise ExportError(
            f"the {what} is missing",
            where=reading.sheet.where(line, field),
            remedy=f"check columns.{what} in the profile; the file may be cut off",
        )
