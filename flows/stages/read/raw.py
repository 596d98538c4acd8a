"""Readings of one plate as arrays in file order, and the plate read that becomes of them.

Puts readings in the order channel, well, file; never in the order of time: a clock that runs backwards must
stay visible. Knows no file format.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Sequence
from dataclasses import dataclass, replace

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
    channel: Integers
    position: Integers
    time_s: Reals
    signal: Reals
    state: States
    temperature_c: Reals
    line: Integers
    field: Integers

    def take(self, rows: npt.NDArray[np.bool_] | Integers) -> RawReadings:
        """The same with some of the rows, or with rows in another order."""
        return replace(
            self,
            channel=self.channel[rows],
            position=self.position[rows],
            time_s=self.time_s[rows],
            signal=self.signal[rows],
            state=self.state[rows],
            temperature_c=self.temperature_c[rows],
            line=self.line[rows],
            field=self.field[rows],
        )


def well_positions(places: Sequence[tuple[int, int]]) -> Integers:
    """Positions of wells given as (row, column), both counted from 1."""
    grid = np.array(places, dtype=np.int64).reshape(-1, 2)
    return (grid[:, 0] - 1) * _LARGEST.column_count + grid[:, 1] - 1


def join(parts: Sequence[RawReadings]) -> RawReadings:
    """Readings of several channels or blocks of one plate, in their order."""
    if len(parts) == 1:
        return parts[0]
    channels = tuple(dict.fromkeys(channel for part in parts for channel in part.channels))
    renumbered = [
        np.array([channels.index(name) for name in part.channels], dtype=np.int64)[part.channel]
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
    group = np.repeat(np.arange(len(starts)), group_lengths)
    _refuse_doubled(raw, times, group, starts, file_name, sheet)
    read_number = np.arange(len(times)) - np.repeat(starts, group_lengths) + 1
    distinct, codes = np.unique(raw.position[starts], return_inverse=True)
    names = [well_name(*(int(part) + 1 for part in divmod(each, _LARGEST.column_count))) for each in distinct]
    columns = {
        "channel": _text(raw.channels, raw.channel),
        "well": _text(names, np.repeat(codes, group_lengths)),
        "read_number": read_number,
        "time_s": times,
        "signal": raw.signal,
        "state": _text(STATE_NAMES, raw.state),
        "temperature_c": raw.temperature_c,
        "source_sheet": _text([sheet], np.zeros(len(times), dtype=np.int8)),
        "source_row": raw.line + 1,
        "source_column": raw.field + 1,
    }
    readings = pd.DataFrame(columns, copy=False)
    return StagedRead(plate_id, place_in_export, plate_format, started_at, readings)


def _plate_format(
    raw: RawReadings, stated: int | None, plate_id: str, file_name: str, sheet: str | None
) -> int:
    rows, columns = np.divmod(np.unique(raw.position), _LARGEST.column_count)
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
    key = raw.channel * _LARGEST.well_count + raw.position
    steps = np.diff(key)
    if (steps < 0).any():
        # The narrow type lets numpy sort by radix; a stable sort keeps the order of the file.
        narrow = key.astype(np.int16) if key.max() < 2**15 else key
        order = np.argsort(narrow, kind="stable")
        raw, key = raw.take(order), key[order]
        steps = np.diff(key)
    return raw, np.concatenate([[0], np.flatnonzero(steps) + 1])


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
    raw: RawReadings, times: Reals, group: Integers, starts: Integers, file_name: str, sheet: str | None
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
    row, column = divmod(int(raw.position[first]), _LARGEST.column_count)
    raise ExportError(
        f"well {well_name(row + 1, column + 1)} is read twice at {times[first]:g} s in channel "
        f"{raw.channels[int(raw.channel[first])]}, first in {_spot(raw, first, sheet)}",
        where=place(file_name, sheet, int(raw.line[second]), int(raw.field[second])),
        remedy="if these are two plates or two channels, state [blocks], columns.plate or columns.channel in the "
        "profile",
    )


def _spot(raw: RawReadings, index: int, sheet: str | None) -> str:
    words = ("line", "field") if sheet is None else ("row", "column")
    return f"{words[0]} {int(raw.line[index]) + 1}, {words[1]} {int(raw.field[index]) + 1}"


def _text(words: Sequence[str | None], codes: npt.NDArray[np.integer]) -> pd.api.extensions.ExtensionArray:
    """A text column from its distinct words and an index for each row."""
    array = pa.array(words, pa.large_string()).take(pa.array(codes))
    return pd.array(array, dtype=_TEXT_DTYPE)
