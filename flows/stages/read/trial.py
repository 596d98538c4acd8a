"""What an export profile makes of a file, before it goes live: plates, wells, times, first values, problems.

Returns a plain record; how it is shown is the command's business. Never raises what a file can cause.
"""

from __future__ import annotations

import datetime as dt
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import pandas as pd

from flows.stages.read.choice import missed
from flows.stages.read.exports import open_sheets, read_export
from flows.stages.read.raw import StagedRead
from flows.stages.read.sheets import TextSheet
from models.errors import HalfsatError
from models.records.export_profile import ExportProfile

FIRST_VALUES = 5
_SEPARATOR_NAMES = {"\t": "tab", " ": "space", "": "runs of blanks"}


@dataclass(frozen=True)
class FirstValue:
    """A reading with its place in the file, for comparison by eye."""

    channel: str
    well: str
    time_s: float
    signal: float | None
    state: str
    source_row: int
    source_column: int


@dataclass(frozen=True)
class TrialPlate:
    """What was made of one plate of the file.

    Attributes
    ----------
    interval_s
        Median time between reads of a well; None where there is one read only.
    """

    plate_id: str
    place_in_export: int
    plate_format: int
    started_at: dt.datetime | None
    well_count: int
    first_well: str
    last_well: str
    channels: tuple[str, ...]
    read_count: int
    duration_s: float
    interval_s: float | None
    temperature_low_c: float | None
    temperature_high_c: float | None
    overflow_count: int
    missing_count: int
    first_values: tuple[FirstValue, ...]


@dataclass(frozen=True)
class TrialReport:
    """What a profile makes of a file; `problems` is empty where there is nothing to mend."""

    file_name: str
    byte_count: int
    encoding: str | None
    delimiter: str | None
    sheets: tuple[str, ...]
    plates: tuple[TrialPlate, ...]
    problems: tuple[str, ...]


def trial_report(content: bytes, file_name: str, profile: ExportProfile) -> TrialReport:
    """Try a profile on a file.

    Parameters
    ----------
    content, file_name
        The export.
    profile
        The profile to try, whether or not its [detect] fits.
    """
    problems: list[str] = []
    miss = missed(content, file_name, profile)
    if miss is not None:
        problems.append(f"[detect] would pass this file over: {miss}")
    encoding = delimiter = None
    sheets: tuple[str, ...] = ()
    reads: list[StagedRead] = []
    try:
        opened = open_sheets(content, file_name, profile)
        encoding = opened[0].encoding
        sheets = tuple(sheet.name for sheet in opened if sheet.name is not None)
        if isinstance(opened[0], TextSheet):
            delimiter = _SEPARATOR_NAMES.get(opened[0].separator, opened[0].separator)
        reads = read_export(content, file_name, profile)
    except HalfsatError as error:
        problems.append(str(error))
    for read in reads:
        problems += _problems(read, profile)
    plates = tuple(_plate(read) for read in reads)
    return TrialReport(file_name, len(content), encoding, delimiter, sheets, plates, tuple(problems))


def _plate(read: StagedRead) -> TrialPlate:
    readings = read.readings
    wells = list(dict.fromkeys(readings["well"]))
    steps = readings.groupby(["channel", "well"], sort=False)["time_s"].diff().dropna()
    temperature = readings["temperature_c"].dropna()
    return TrialPlate(
        plate_id=read.plate_id,
        place_in_export=read.place_in_export,
        plate_format=read.plate_format,
        started_at=read.started_at,
        well_count=len(wells),
        first_well=wells[0],
        last_well=wells[-1],
        channels=tuple(dict.fromkeys(readings["channel"])),
        read_count=int(readings["read_number"].max()),
        duration_s=float(readings["time_s"].max()),
        interval_s=float(steps.median()) if len(steps) else None,
        temperature_low_c=float(temperature.min()) if len(temperature) else None,
        temperature_high_c=float(temperature.max()) if len(temperature) else None,
        overflow_count=int((readings["state"] == "overflow").sum()),
        missing_count=int((readings["state"] == "missing").sum()),
        first_values=tuple(_first_values(readings)),
    )


def _first_values(readings: pd.DataFrame) -> Iterator[FirstValue]:
    for row in readings.head(FIRST_VALUES).to_dict("records"):
        signal = float(row["signal"])
        yield FirstValue(
            channel=str(row["channel"]),
            well=str(row["well"]),
            time_s=float(row["time_s"]),
            signal=None if np.isnan(signal) else signal,
            state=str(row["state"]),
            source_row=int(row["source_row"]),
            source_column=int(row["source_column"]),
        )


def _problems(read: StagedRead, profile: ExportProfile) -> Iterator[str]:
    readings, name = read.readings, f"plate {read.plate_id}"
    groups = readings.groupby(["channel", "well"], sort=False)
    backwards = readings.loc[groups["time_s"].diff() < 0, "well"]
    if len(backwards):
        yield f"{name}: time runs backwards in {backwards.nunique()} wells, such as {backwards.iloc[0]}"
    counts = groups.agg(reads=("read_number", "size"), signals=("signal", "count")).reset_index()
    most, fewest = counts["reads"].max(), counts["reads"].min()
    if most != fewest:
        well = counts.loc[counts["reads"] == fewest, "well"].iloc[0]
        yield f"{name}: wells have {fewest} to {most} reads; {well} has the fewest"
    unread = counts.loc[counts["signals"] == 0, "well"]
    if len(unread):
        yield f"{name}: {len(unread)} wells have no signal at all, such as {unread.iloc[0]}"
    if (profile.plate.started_in_preamble or profile.plate.started_in_file_name) and read.started_at is None:
        yield f"{name}: the start of the read is not where the profile looks for it"
    warmth = profile.temperature
    stated = profile.columns.temperature or warmth.row or warmth.pattern
    if stated is not None and readings["temperature_c"].isna().all():
        yield f"{name}: the profile names a temperature, and none was found"
