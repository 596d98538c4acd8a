"""Write plates as their readers would: four shapes, as text in any encoding or as a workbook.

First the cells of the file are laid out, numbers still numbers; then they are written as text or workbook.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import datetime, timedelta
from decimal import Decimal

import numpy as np

from flows.demo.scenario import Dialect
from flows.demo.workbook import Cell, workbook
from models.plates import plate_format, well_name, well_position
from models.simulation import SimulatedPlate

# A turbidity read beside the assay's channel, as readers that take two wavelengths write it.
_SECOND_CHANNEL_SHARE = 0.04


@dataclass(frozen=True)
class PlateRead:
    """One simulated plate with what an export says about it besides the signal."""

    plate_id: str
    well_count: int
    started_at: datetime
    plate: SimulatedPlate


def write_export(dialect: Dialect, reads: Sequence[PlateRead]) -> bytes:
    """Bytes of one export file.

    Parameters
    ----------
    dialect
        How the reader writes.
    reads
        Plates in the file; only the `long` shape holds more than one.

    Raises
    ------
    ValueError
        If the shape cannot hold that many plates.
    """
    if len(reads) != 1 and dialect.shape != "long":
        raise ValueError(f"a file of shape {dialect.shape} holds one plate, not {len(reads)}")
    body = {"long": _long, "wide": _wide, "wells_by_rows": _wells_by_rows, "grids": _grids}[dialect.shape]
    rows: list[list[Cell]] = [[line] for line in _filled(dialect.preamble, reads[0])]
    rows += body(dialect, reads)
    rows += [[line] for line in _filled(dialect.trailer, reads[0])]
    if dialect.container == "xlsx":
        return workbook([("Read", rows)])
    return _text(dialect, rows)


def _long(dialect: Dialect, reads: Sequence[PlateRead]) -> list[list[Cell]]:
    rows: list[list[Cell]] = [["Plate", "Well", _time_head(dialect), "Temperature", "Value"]]
    for read in reads:
        signal = _cells(dialect, read.plate.signal)
        for t, temperature in enumerate(_temperatures(read)):
            when = _time(dialect, read, t)
            rows += [
                [read.plate_id, _well(dialect, name), when, temperature, signal[w][t]]
                for w, name in enumerate(read.plate.wells["well"])
            ]
    return rows


def _wide(dialect: Dialect, reads: Sequence[PlateRead]) -> list[list[Cell]]:
    read = reads[0]
    signal = _cells(dialect, read.plate.signal)
    head: list[Cell] = [_time_head(dialect), *(["Temp"] if dialect.temperature else [])]
    rows: list[list[Cell]] = [[*head, *(_well(dialect, name) for name in read.plate.wells["well"])]]
    for t, temperature in enumerate(_temperatures(read)):
        lead: list[Cell] = [_time(dialect, read, t), *([temperature] if dialect.temperature else [])]
        rows.append([*lead, *(curve[t] for curve in signal)])
    return rows


def _wells_by_rows(dialect: Dialect, reads: Sequence[PlateRead]) -> list[list[Cell]]:
    read = reads[0]
    signal = _cells(dialect, read.plate.signal)
    times: list[Cell] = [
        t + 1 if dialect.time == "none" else _time(dialect, read, t) for t in range(len(read.plate.time_s))
    ]
    rows: list[list[Cell]] = [["Well", *times]]
    rows += [
        [_well(dialect, name), *curve] for name, curve in zip(read.plate.wells["well"], signal, strict=True)
    ]
    return rows


def _grids(dialect: Dialect, reads: Sequence[PlateRead]) -> list[list[Cell]]:
    read = reads[0]
    plate = plate_format(read.well_count)
    channels = {dialect.channel: read.plate.signal}
    if dialect.second_channel is not None:
        base = np.nanmin(np.where(np.isfinite(read.plate.signal), read.plate.signal, np.nan), axis=1)
        channels[dialect.second_channel] = np.repeat(
            _SECOND_CHANNEL_SHARE * base[:, None], len(read.plate.time_s), axis=1
        )
    place_of = {well_position(name): place for place, name in enumerate(read.plate.wells["well"])}
    written = {channel: _cells(dialect, signal) for channel, signal in channels.items()}
    rows: list[list[Cell]] = []
    for channel, signal in written.items():
        rows += [[f"Channel {channel}"], []] if channel else []
        for t, temperature in enumerate(_temperatures(read)):
            title: list[Cell] = [f"Cycle {t + 1}", f"Time {_time(dialect, read, t)}"]
            title += [f"Temperature {_written(dialect, temperature)}"] if dialect.temperature else []
            rows += [title, ["", *range(1, plate.column_count + 1)]]
            for row in range(1, plate.row_count + 1):
                places = [place_of.get((row, column)) for column in range(1, plate.column_count + 1)]
                letter = well_name(row, 1)[:-1]
                rows.append([letter, *("" if place is None else signal[place][t] for place in places)])
            rows.append([])
    return rows


def _cells(dialect: Dialect, signal: np.ndarray) -> list[list[Cell]]:
    """Signals rounded as the reader rounds them, with its words for overflow and for a missing read."""

    def cell(value: float) -> Cell:
        if math.isnan(value):
            return dialect.missing
        if math.isinf(value):
            return dialect.overflow
        return _figure(value, dialect.decimals)

    return [[cell(value) for value in curve] for curve in signal.tolist()]


def _temperatures(read: PlateRead) -> list[Decimal]:
    """Reported temperatures: the plate's own with the small saw of a thermostat."""
    return [_figure(float(c) + 0.1 * (t // 4 % 2), 1) for t, c in enumerate(read.plate.temperature_c)]


def _time_head(dialect: Dialect) -> str:
    heads = {
        "seconds": "Time [s]",
        "minutes": "Time [min]",
        "milliseconds": "Time [ms]",
        "timestamp": "Read at",
    }
    return heads.get(dialect.time, "Time")


def _time(dialect: Dialect, read: PlateRead, t: int) -> Cell:
    seconds = float(read.plate.time_s[t])
    match dialect.time:
        case "minutes":
            return _figure(seconds / 60.0, 4)
        case "milliseconds":
            return round(seconds * 1000.0)
        case "clock":
            whole = round(seconds)
            return f"{whole // 3600}:{whole // 60 % 60:02d}:{whole % 60:02d}"
        case "timestamp":
            return (read.started_at + timedelta(seconds=seconds)).strftime("%Y-%m-%dT%H:%M:%S")
        case _:
            return round(seconds)


def _well(dialect: Dialect, name: str) -> str:
    row, column = well_position(name)
    match dialect.wells:
        case "padded":
            return f"{well_name(row, 1)[:-1]}{column:02d}"
        case "numbered":
            return f"R{row:02d}C{column:02d}"
        case _:
            return name


def _filled(lines: Sequence[str], read: PlateRead) -> list[str]:
    started = read.started_at
    return [
        line.format(plate=read.plate_id, day=started.strftime("%d.%m.%Y"), clock=started.strftime("%H:%M:%S"))
        for line in lines
    ]


def _figure(value: float, decimals: int) -> Decimal:
    """A number with exactly the digits that the reader writes."""
    return Decimal(f"{value:.{decimals}f}")


def _written(dialect: Dialect, cell: Cell) -> str:
    return str(cell).replace(".", dialect.decimal) if isinstance(cell, Decimal) else str(cell)


def _text(dialect: Dialect, rows: Sequence[Sequence[Cell]]) -> bytes:
    lines = [dialect.delimiter.join(_written(dialect, cell) for cell in row) for row in rows]
    return ("\r\n".join(lines) + "\r\n").encode(dialect.encoding)
