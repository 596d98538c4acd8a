"""The shape `wells_by_rows`: a row a well, a column a time."""

from __future__ import annotations

import re

import numpy as np

from flows.stages.read.blocks import ChannelBlock, TableSpan, column_index, end_of_rows, find_table
from flows.stages.read.numbers import MISSING, OK, Reals
from flows.stages.read.raw import RawReadings, one_channel
from flows.stages.read.reading import Reading, name_columns, need_rows, row_well, table_positions
from flows.stages.read.tables import LoadedTable
from flows.stages.read.times import parse_times
from models.errors import ExportError


def read_wells_by_rows(reading: Reading, block: ChannelBlock) -> tuple[RawReadings, int]:
    """A row a well, a column a time: readings, and the line where the table begins."""
    sheet, columns, profile = reading.sheet, reading.profile.columns, reading.profile
    span = find_table(sheet, block.first, block.last, profile)
    named = name_columns(reading, span)
    ignored = {column_index(span, sheet, each, "columns.ignore") for each in columns.ignore}
    if span.header:
        fields = [f for f, text in enumerate(span.header) if text and f not in {*named, *ignored}]
    else:
        fields = [f for f in range(span.width) if f not in {*named, *ignored}]
    times = _header_times(reading, span, fields)
    label = profile.temperature.row
    last = end_of_rows(
        sheet,
        span,
        profile,
        lambda row: (
            row_well(reading, row, named) is not None
            or (label is not None and row[named[0]].strip() == label)
        ),
    )
    table = reading.load(span, last, fields, named)
    temperature = np.full(len(fields), np.nan)
    if label is not None:
        labelled = np.array([text == label for text in table.texts[named[0]].texts], dtype=bool)
        rows = table.texts[named[0]].rows_with(labelled)
        if rows.any():
            place = int(np.flatnonzero(rows)[0])
            temperature = np.where(table.states[place] == OK, table.values[place], np.nan)
        table = table.keep(~rows)
    need_rows(reading, span, len(table.lines))
    positions = table_positions(reading, table, named)
    if not span.header:
        fields, times, temperature, table = _without_empty_end(fields, times, temperature, table)
    wells, reads = len(table.lines), len(fields)
    raw = RawReadings(
        (block.channel,),
        one_channel(wells * reads),
        np.repeat(positions, reads),
        np.tile(times, wells),
        table.values.ravel(),
        table.states.ravel(),
        np.tile(temperature, wells),
        np.repeat(table.lines, reads),
        np.tile(np.array(fields, dtype=np.int64), wells),
    )
    return raw, span.first if span.header_line < 0 else span.header_line


def _without_empty_end(
    fields: list[int], times: Reals, temperature: Reals, table: LoadedTable
) -> tuple[list[int], Reals, Reals, LoadedTable]:
    """Without a header, columns at the end that no row fills come from delimiters, not from missing reads."""
    filled = np.flatnonzero((table.states != MISSING).any(axis=0))
    count = int(filled[-1]) + 1 if len(filled) else len(fields)
    cut = LoadedTable(table.lines, table.values[:, :count], table.states[:, :count], table.texts)
    return fields[:count], times[:count], temperature[:count], cut


def _header_times(reading: Reading, span: TableSpan, fields: list[int]) -> Reals:
    if not fields:
        raise ExportError(
            "the header has no column of reads",
            where=reading.sheet.where(max(span.header_line, 0)),
            remedy="check table.header and text.delimiter in the profile",
        )
    time = reading.profile.time
    if reading.times is None:
        assert time.interval_s is not None
        return np.arange(len(fields), dtype=np.float64) * time.interval_s
    texts = [span.header[field] for field in fields]
    if time.pattern is not None:
        found = [re.search(time.pattern, text) for text in texts]
        texts = ["" if match is None else match["time"] for match in found]
    times = parse_times(texts, reading.times)
    bad = np.flatnonzero(~np.isfinite(times))
    if len(bad):
        field = fields[int(bad[0])]
        raise ExportError(
            f"'{span.header[field][:40]}' heads a column but is no time",
            where=reading.sheet.where(span.header_line, field),
            remedy="check time.notation and time.pattern in the profile, or list the column under "
            "columns.ignore",
        )
    return times
