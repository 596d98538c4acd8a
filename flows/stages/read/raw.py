"""Readings of one plate as arrays in file order, and the plate read that becomes of them.

Puts readings in the order channel, well, file; never in the order of time: a clock that runs backwards must
stay visible. Knows no file format.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, TypeVar

import numpy as np
import numpy.typing as npt
import pandas as pd
import pyarrow as pa

from flows.stages.read.numbers import STATE_NAMES, Reals, States
from flows.stages.read.sheets import place
from flows.stages.read.times import TimeRule, unwrap_midnight
from models.errors import ExportError
from models.plates import PLATE_FORMATS, smallest_format, well_name

Integers = npt.NDArray[np.int64]
Narrow = npt.NDArray[np.int16]
Scalar = TypeVar("Scalar", bound=np.generic)

_LARGEST = PLATE_FORMATS[-1]
_TEXT_DTYPE = pd.StringDtype("pyarrow", na_value=np.nan)


@dataclass(frozen=True)
class StagedRead:
    """One plate as one export recorded it.

    Attributes
    ----------
    place_in_export
        Which plate of the file this is, counted from 1.
    plate_format
        Wells of the plate: 96, 384 or 1536.
    started_at
        When the read began, UTC; None where the export does not say.
    readings
        Columns of the table `readings` without `plate_read_id`, in the order channel, well, read.
    """

    plate_id: str
    place_in_export: int
    plate_format: int
    started_at: dt.datetime | None
    readings: pd.DataFrame


@dataclass(frozen=True)
class RawReadings:
    """Readings as arrays of one length n.

    Attributes
    ----------
    channel
        Index into `channels`.
    position
        Well as (row - 1) * 48 + (column - 1).
    time_s
        Time, s, from any zero.
    line, field
        Where the signal stands, counted from 0.
    """

    channels: tuple[str, ...]
    channel: Narrow
    position: Narrow
    time_s: Reals
    signal: Reals
    state: States
    temperature_c: Reals
    line: Integers
    field: Integers

    def take(self, rows: Integers) -> RawReadings:
        """The same with some of the rows, or with rows in another order."""
        return RawReadings(
            self.channels,
            _picked(self.channel, rows),
            _picked(self.position, rows),
            _picked(self.time_s, rows),
            _picked(self.signal, rows),
            _picked(self.state, rows),
            _picked(self.temperature_c, rows),
            _picked(self.line, rows),
            _picked(self.field, rows),
        )


def _picked(column: npt.NDArray[Scalar], rows: Integers) -> npt.NDArray[Scalar]:
    return np.broadcast_to(column[:1], rows.shape) if _is_constant(column) else column[rows]


def _is_constant(column: npt.NDArray[Scalar]) -> bool:
    return column.strides == (0,) and len(column) > 0


def constant_real(value: float, length: int) -> Reals:
    """One number as an array of that length, stored once."""
    return np.broadcast_to(np.array([value], dtype=np.float64), (length,))


def constant_integer(value: int, length: int) -> Integers:
    """One whole number as an array of that length, stored once."""
    return np.broadcast_to(np.array([value], dtype=np.int64), (length,))


def one_channel(length: int) -> Narrow:
    """The channel index 0 for every reading, stored once."""
    return np.broadcast_to(np.zeros(1, dtype=np.int16), (length,))


def well_positions(places: Sequence[tuple[int, int]]) -> Narrow:
    """Positions of wells given as (row, column), both counted from 1."""
    grid = np.array(places, dtype=np.int16).reshape(-1, 2)
    return (grid[:, 0] - 1) * _LARGEST.column_count + grid[:, 1] - 1


def join(parts: Sequence[RawReadings]) -> RawReadings:
    """Readings of several channels or blocks of one plate, in their order."""
    if len(parts) == 1:
        return parts[0]
    channels = tuple(dict.fromkeys(channel for part in parts for channel in part.channels))
    renumbered = [
        np.array([channels.index(name) for name in part.channels], dtype=np.int16)[part.channel]
        for part in parts
    ]
    return RawReadings(
        channels,
        np.concatenate(renumbered),
        np.concatenate([part.position for part in parts]),
        np.concatenate([part.time_s for part in parts]),
        np.concatenate([part.signal for part in parts]),
        np.concatenate([part.state for part in parts]),
        np.concatenate([part.temperature_c for part in parts]),
        np.concatenate([part.line for part in parts]),
        np.concatenate([part.field for part in parts]),
    )


def stage(
    raw: RawReadings,
    *,
    plate_id: str,
    place_in_export: int,
    stated_format: int | None,
    started_at: dt.datetime | None,
    rule: TimeRule | None,
    file_name: str,
    sheet: str | None,
) -> StagedRead:
    """Number the reads of each well in file order and count time from the plate's first read.

    Raises
    ------
    ExportError
        If a well lies outside the stated plate, or is read twice at one time.
    """
    plate_format = _plate_format(raw, stated_format, plate_id, file_name, sheet)
    first_in_file = float(raw.time_s[0])
    raw, starts = _by_well(raw)
    times = _without_midnight(raw.time_s, starts, rule, first_in_file)
    if started_at is None and rule is not None and rule.absolute:
        started_at = dt.datetime.fromtimestamp(float(times.min()), dt.UTC)
    times = times - times.min()
    group_lengths = np.diff(np.append(starts, len(times)))
    group = np.repeat(np.arange(len(starts), dtype=np.int32), group_lengths)
    _refuse_doubled(raw, times, group, starts, file_name, sheet)
    read_number = _counted(starts, group_lengths, len(times))
    names = [_name_at(int(position)) for position in raw.position[starts]]
    columns = {
        "channel": _text(raw.channels, raw.channel),
        "well": _text(names, group),
        "read_number": read_number,
        "time_s": times,
        "signal": raw.signal,
        "state": _text(STATE_NAMES, raw.state),
        "temperature_c": np.ascontiguousarray(raw.temperature_c),
        "source_sheet": _text([sheet], constant_integer(0, len(times))),
        "source_row": raw.line + 1,
        "source_column": raw.field + 1,
    }
    readings = pd.DataFrame(columns, copy=False)
    return StagedRead(plate_id, place_in_export, plate_format, started_at, readings)


def _plate_format(
    raw: RawReadings, stated: int | None, plate_id: str, file_name: str, sheet: str | None
) -> int:
    used = np.flatnonzero(np.bincount(raw.position, minlength=_LARGEST.well_count))
    rows, columns = np.divmod(used, _LARGEST.column_count)
    smallest = smallest_format([(int(rows.max()) + 1, int(columns.max()) + 1)]).well_count
    if stated is None or smallest <= stated:
        return stated or smallest
    farthest = well_name(int(rows.max()) + 1, int(columns.max()) + 1)
    raise ExportError(
        f"plate {plate_id} has wells out to {farthest}, which no plate of {stated} wells has",
        where=place(file_name, sheet),
        remedy="check plate.format and wells.pattern in the profile",
    )


def _by_well(raw: RawReadings) -> tuple[RawReadings, Integers]:
    """Readings ordered by channel and well, file order kept within, and where each well begins."""
    key = raw.channel.astype(np.int32) * np.int32(_LARGEST.well_count) + raw.position
    cycle = _cycle(key)
    if cycle is not None:
        # Every read lists the wells in one order, as most instruments do: no need to sort all readings.
        starts = np.arange(0, len(key), len(key) // cycle)
        order = np.argsort(key[:cycle])[:, None] + np.arange(0, len(key), cycle)[None, :]
        return raw.take(order.ravel()), starts
    if (np.diff(key) < 0).any():
        in_order = np.argsort(key, kind="stable")
        raw, key = raw.take(in_order), key[in_order]
    return raw, np.concatenate([[0], np.flatnonzero(np.diff(key)) + 1])


def _cycle(key: npt.NDArray[np.int32]) -> int | None:
    """After how many readings the same wells follow in the same order, to the end; None where they do not."""
    again = np.flatnonzero(key == key[0])
    cycle = int(again[1]) if len(again) > 1 else len(key)
    if len(key) % cycle or len(set(key[:cycle].tolist())) != cycle:
        return None
    return cycle if (key.reshape(-1, cycle) == key[:cycle]).all() else None


def _without_midnight(times: Reals, starts: Integers, rule: TimeRule | None, first_in_file: float) -> Reals:
    if rule is None or rule.notation != "timestamp" or rule.absolute:
        return times
    half_day = 43_200.0
    parts = []
    for part in np.split(times, starts[1:]):
        late = 2 * half_day if part[0] < first_in_file - half_day else 0.0
        parts.append(unwrap_midnight(part, rule) + late)
    return np.concatenate(parts)


def _refuse_doubled(
    raw: RawReadings,
    times: Reals,
    group: npt.NDArray[np.int32],
    starts: Integers,
    file_name: str,
    sheet: str | None,
) -> None:
    steps = np.diff(times)
    # The step from one well to the next is no step in time.
    steps[starts[1:] - 1] = 1.0
    if (steps > 0).all():
        return
    order = np.lexsort((times, group))
    same = (np.diff(times[order]) == 0) & (np.diff(group[order]) == 0)
    if not same.any():
        return
    first, second = (int(order[np.flatnonzero(same)[0] + step]) for step in (0, 1))
    raise ExportError(
        f"well {_name_at(int(raw.position[first]))} is read twice at {times[first]:g} s in channel "
        f"{raw.channels[int(raw.channel[first])]}, first in {_spot(raw, first, sheet)}",
        where=place(file_name, sheet, int(raw.line[second]), int(raw.field[second])),
        remedy="if these are two plates or two channels, state [blocks], columns.plate or columns.channel "
        "in the profile",
    )


def _spot(raw: RawReadings, index: int, sheet: str | None) -> str:
    words = ("line", "field") if sheet is None else ("row", "column")
    return f"{words[0]} {int(raw.line[index]) + 1}, {words[1]} {int(raw.field[index]) + 1}"


def _counted(starts: Integers, lengths: Integers, total: int) -> Integers:
    """Number of each reading within its well, from 1."""
    if (lengths == lengths[0]).all():
        return np.tile(np.arange(1, int(lengths[0]) + 1, dtype=np.int64), len(lengths))
    return np.arange(1, total + 1, dtype=np.int64) - np.repeat(starts, lengths)


def _name_at(position: int) -> str:
    row, column = divmod(position, _LARGEST.column_count)
    return well_name(row + 1, column + 1)


def _text(words: Sequence[str | None], codes: npt.NDArray[np.integer[Any]]) -> pd.Series[str]:
    """A text column from its distinct words and an index for each row."""
    if len(codes) and (_is_constant(codes) or codes.min() == codes.max()):
        array = pa.repeat(pa.scalar(words[int(codes[0])], pa.large_string()), len(codes))
    else:
        array = pa.array(words, pa.large_string()).take(pa.array(codes))
    return pd.Series(array, dtype=_TEXT_DTYPE, copy=False)
