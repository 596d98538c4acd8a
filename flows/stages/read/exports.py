"""An export as plate reads: from bytes to one staged read a plate, as the profile says.

Puts the parts together; each part knows its own job.
"""

from __future__ import annotations

import datetime as dt
import re
from collections.abc import Iterator
from dataclasses import dataclass, replace

import numpy as np

from flows.stages.read.blocks import PlateBlock, channel_blocks, plate_blocks
from flows.stages.read.grids import read_grids
from flows.stages.read.long import read_long
from flows.stages.read.numbers import number_rule
from flows.stages.read.raw import RawReadings, StagedRead, join, stage
from flows.stages.read.reading import Reading
from flows.stages.read.sheets import Sheet, TextSheet, decode, guess_separator
from flows.stages.read.times import parse_start, time_rule
from flows.stages.read.wells_by_rows import read_wells_by_rows
from flows.stages.read.wide import read_wide
from flows.stages.read.workbook import is_workbook, read_sheets
from models.errors import ExportError
from models.records.export_profile import ExportProfile


@dataclass(frozen=True)
class _Plate:
    """One plate before its reads are numbered."""

    sheet: Sheet
    plate_id: str
    started_at: dt.datetime | None
    raw: RawReadings


def read_export(content: bytes, file_name: str, profile: ExportProfile) -> list[StagedRead]:
    """Plate reads of an export, in the order in which they stand in it.

    Parameters
    ----------
    content
        The file as the instrument wrote it.
    file_name
        Its name, for barcode patterns and messages.
    profile
        How to read it.

    Raises
    ------
    ExportError
        If the file cannot be read as the profile says. The message names file, line and field, and a remedy.
    """
    plates: list[_Plate] = []
    for sheet in open_sheets(content, file_name, profile):
        for block in plate_blocks(sheet, profile):
            for plate in _read_block(block, file_name, profile):
                _add(plates, plate)
    rule = time_rule(profile, number_rule(profile))
    return [
        stage(
            plate.raw,
            plate_id=plate.plate_id,
            place_in_export=place,
            stated_format=profile.plate.format,
            started_at=plate.started_at,
            rule=rule,
            file_name=file_name,
            sheet=plate.sheet.name,
        )
        for place, plate in enumerate(plates, start=1)
    ]


def open_sheets(content: bytes, file_name: str, profile: ExportProfile) -> list[Sheet]:
    """The file as sheets of fields: one for a text, those that the profile names for a workbook.

    Raises
    ------
    ExportError
        If the file is empty, damaged, or not of the profile's kind.
    """
    if profile.container == "xlsx":
        return list(read_sheets(content, file_name, profile.workbook.sheet, profile.values.decimal))
    if is_workbook(content):
        raise ExportError(
            "this is a workbook (or another zip file), and the profile reads text",
            where=file_name,
            remedy='set container = "xlsx" in the profile, or export as text',
        )
    data, encoding = decode(content, profile.text.encoding, file_name)
    separator = profile.text.separator
    if separator is None:
        signs = [profile.values.thousands] + ([","] if profile.values.decimal == "," else [])
        separator = guess_separator(data, profile.text.quote, signs)
    return [TextSheet(file_name, data, separator, profile.text.quote, encoding)]


def _add(plates: list[_Plate], plate: _Plate) -> None:
    """Add a plate, or further channels to the plate before it; the same channel again is another read."""
    previous = plates[-1] if plates else None
    if (
        previous is not None
        and previous.plate_id == plate.plate_id
        and previous.sheet is plate.sheet
        and not set(previous.raw.channels) & set(plate.raw.channels)
    ):
        plates[-1] = replace(previous, raw=join([previous.raw, plate.raw]))
    else:
        plates.append(plate)


def _read_block(block: PlateBlock, file_name: str, profile: ExportProfile) -> Iterator[_Plate]:
    numbers = number_rule(profile)
    reading = Reading(block.sheet, profile, numbers, time_rule(profile, numbers))
    if profile.shape == "grids":
        raw, table_line = read_grids(reading, block)
        yield _named(block, raw, table_line, file_name, profile)
        return
    channels = channel_blocks(block, profile)
    if profile.shape == "long":
        yield from _read_long_blocks(reading, block, file_name)
        return
    read = read_wide if profile.shape == "wide" else read_wells_by_rows
    parts = [read(reading, channel) for channel in channels]
    yield _named(block, _joined([raw for raw, _ in parts], block), parts[0][1], file_name, profile)


def _joined(parts: list[RawReadings], block: PlateBlock) -> RawReadings:
    names = [name for part in parts for name in part.channels]
    doubled = {name for name in names if names.count(name) > 1}
    if doubled:
        raise ExportError(
            f"channel {min(doubled)} stands twice in one plate",
            where=block.sheet.where(block.first),
            remedy="if these are two plates, state blocks.plate in the profile",
        )
    return join(parts)


def _read_long_blocks(reading: Reading, block: PlateBlock, file_name: str) -> Iterator[_Plate]:
    profile = reading.profile
    parts: list[RawReadings] = []
    table_line = block.first
    for channel in channel_blocks(block, profile):
        raw, table_line, plate = read_long(reading, channel)
        if plate is None:
            parts.append(raw)
            continue
        preamble = _Preamble(block, table_line, file_name, profile)
        for code, plate_id in enumerate(plate.texts):
            own = plate.codes == code
            if own.any():
                yield _Plate(block.sheet, plate_id, preamble.started_at(), raw.take(np.flatnonzero(own)))
    if parts:
        yield _named(block, _joined(parts, block), table_line, file_name, profile)


def _named(
    block: PlateBlock, raw: RawReadings, table_line: int, file_name: str, profile: ExportProfile
) -> _Plate:
    preamble = _Preamble(block, table_line, file_name, profile)
    return _Plate(block.sheet, preamble.plate_id(), preamble.started_at(), raw)


@dataclass(frozen=True)
class _Preamble:
    """What stands before a plate's table, and in the names of file and sheet."""

    block: PlateBlock
    table_line: int
    file_name: str
    profile: ExportProfile

    def plate_id(self) -> str:
        """Barcode of the plate.

        Raises
        ------
        ExportError
            If no pattern finds it.
        """
        source = self.profile.plate
        found = (
            self.block.plate_id
            or self._search(source.id_in_preamble, "plate_id", self.block.first)
            or _find(source.id_in_sheet_name, "plate_id", self.block.sheet.title)
            or _find(source.id_in_file_name, "plate_id", self.file_name)
        )
        if found is None:
            raise ExportError(
                "the plate's barcode is not where the profile looks for it",
                where=self.block.sheet.where(self.block.first),
                remedy="check plate.id_in_preamble, plate.id_in_sheet_name, plate.id_in_file_name and "
                "blocks.plate in the profile",
            )
        return found

    def started_at(self) -> dt.datetime | None:
        """Start of the read, UTC; None where the file does not hold it.

        Raises
        ------
        ExportError
            If it is found but not written as the profile says.
        """
        source = self.profile.plate
        found = (
            self._search(source.started_in_preamble, "started", self.block.first)
            or (self._search(source.started_in_preamble, "started", 0) if self.block.marked else None)
            or _find(source.started_in_file_name, "started", self.file_name)
        )
        if found is None:
            return None
        started_at = parse_start(found, source.started_format, source.time_zone)
        if started_at is None:
            raise ExportError(
                f"'{found[:60]}' is not a start written as {source.started_format or 'ISO 8601'}",
                where=self.block.sheet.where(),
                remedy="check plate.started_format in the profile",
            )
        return started_at

    def _search(self, pattern: str | None, group: str, first: int) -> str | None:
        if pattern is None:
            return None
        for index in range(first, max(self.table_line, first + 1)):
            found = _find(pattern, group, self.block.sheet.line(index))
            if found is not None:
                return found
        return None


def _find(pattern: str | None, group: str, text: str) -> str | None:
    match = re.search(pattern, text) if pattern is not None else None
    if match is None or match[group] is None:
        return None
    return match[group].strip() or None
