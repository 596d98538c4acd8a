"""Where the tables of a sheet stand: blocks of plates and channels, header lines, ends, and preambles.

Goes by the profile's patterns alone; knows nothing of wells or values.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass

from flows.stages.read.sheets import Sheet, is_blank
from models.errors import ExportError
from models.records.export_profile import ExportProfile


@dataclass(frozen=True)
class PlateBlock:
    """The lines of a sheet that belong to one plate.

    Attributes
    ----------
    first, last
        Lines from `first` up to but not including `last`; `first` is the marker where there is one.
    marked
        Whether a marker line begins it.
    plate_id
        The plate's name, where the marker gives it.
    """

    sheet: Sheet
    first: int
    last: int
    marked: bool = False
    plate_id: str | None = None


@dataclass(frozen=True)
class ChannelBlock:
    """The lines of a plate that belong to one channel."""

    first: int
    last: int
    channel: str


@dataclass(frozen=True)
class TableSpan:
    """A table within a sheet: its header fields, and its rows from `first` to before `last`.

    Attributes
    ----------
    header_line
        Line of the header; -1 where the table has none.
    width
        Fields that each row must have.
    """

    header_line: int
    header: tuple[str, ...]
    first: int
    last: int
    width: int


def matching_lines(sheet: Sheet, first: int, last: int, pattern: str) -> Iterator[tuple[int, re.Match[str]]]:
    """Lines in which a pattern is found."""
    search = re.compile(pattern).search
    for index in range(first, last):
        match = search(sheet.line(index))
        if match is not None:
            yield index, match


def plate_blocks(sheet: Sheet, profile: ExportProfile) -> list[PlateBlock]:
    """Blocks of the sheet's plates; all of the sheet where the profile states no marker.

    Raises
    ------
    ExportError
        If a marker is stated and no line has it.
    """
    marker = profile.blocks.plate
    if marker is None:
        return [PlateBlock(sheet, 0, sheet.line_count)]
    found = list(matching_lines(sheet, 0, sheet.line_count, marker))
    if not found:
        raise ExportError(
            f"no line has the plate marker {marker}", where=sheet.where(), remedy="check blocks.plate"
        )
    ends = [index for index, _ in found[1:]] + [sheet.line_count]
    return [
        PlateBlock(sheet, index, end, True, _group(match, "plate_id"))
        for (index, match), end in zip(found, ends, strict=True)
    ]


def channel_blocks(block: PlateBlock, profile: ExportProfile) -> list[ChannelBlock]:
    """Blocks of a plate's channels; all of the plate where the profile states no marker."""
    start = block.first + block.marked
    marker = profile.blocks.channel
    if marker is None:
        return [ChannelBlock(start, block.last, profile.channel)]
    # A line that names the plate may name its channel too.
    found = list(matching_lines(block.sheet, block.first, block.last, marker))
    if not found:
        raise ExportError(
            f"no line has the channel marker {marker}",
            where=block.sheet.where(block.first),
            remedy="check blocks.channel",
        )
    ends = [index for index, _ in found[1:]] + [block.last]
    return [
        ChannelBlock(index + 1, end, match["channel"].strip())
        for (index, match), end in zip(found, ends, strict=True)
    ]


def find_table(
    sheet: Sheet,
    first: int,
    last: int,
    profile: ExportProfile,
) -> TableSpan:
    """Header and first row of the table in these lines; its end is the block's or the end pattern's.

    Raises
    ------
    ExportError
        If the marker or the header is not found, or nothing follows the header.
    """
    rules = profile.table
    start = min(first + rules.skip_lines, last)
    if rules.after is not None:
        start = 1 + _first_match(sheet, start, last, rules.after, "table.after")
    if rules.header is not None:
        start = _first_match(sheet, start, last, rules.header, "table.header")
    else:
        start = _first_filled(sheet, start, last)
    if not rules.has_header:
        end = _end_by_pattern(sheet, start, last, rules.end_pattern)
        return TableSpan(-1, (), start, end, len(_trimmed(sheet.fields(start))))
    header = _trimmed([field.strip() for field in sheet.fields(start)])
    end = _end_by_pattern(sheet, start + 1, last, rules.end_pattern)
    body = _first_filled(sheet, start + 1, end, after=start)
    row = sheet.fields(body)
    # A delimiter may end each row: fields beyond the header are part of the table as long as they are empty.
    width = max(len(header), len(row)) if is_blank(row[len(header) :]) else len(header)
    return TableSpan(start, tuple(header), body, end, width)


def end_of_rows(
    sheet: Sheet,
    span: TableSpan,
    profile: ExportProfile,
    readable: Callable[[Sequence[str]], bool],
) -> int:
    """Where the table's rows end, by the profile's rule.

    Parameters
    ----------
    readable
        Whether the fields of a row hold the time or well that a row of this shape must have.
    """
    rule = profile.table.end
    if rule == "file":
        return span.last
    for index in range(span.first, span.last):
        fields = sheet.fields(index)
        if is_blank(fields):
            if rule == "blank_row":
                return index
        elif rule == "first_unreadable_row" and not readable(fields):
            return index
    return span.last


def column_index(span: TableSpan, sheet: Sheet, column: str | int, key: str) -> int:
    """Field index of a column given by its header's text or its number.

    Raises
    ------
    ExportError
        If the header does not hold it once.
    """
    if isinstance(column, int):
        if column > span.width:
            raise ExportError(
                f"the table has {span.width} fields and {key} asks for field {column}",
                where=sheet.where(max(span.header_line, 0)),
                remedy=f"check {key} in the profile",
            )
        return column - 1
    places = [index for index, text in enumerate(span.header) if text.casefold() == column.casefold()]
    if len(places) != 1:
        shown = ", ".join(text for text in span.header[:12] if text)
        problem = "the header has no column" if not places else "the header has several columns"
        raise ExportError(
            f"{problem} '{column}'",
            where=sheet.where(max(span.header_line, 0)),
            remedy=f"check {key} in the profile; the header reads: {shown}"[:300],
        )
    return places[0]


def _group(match: re.Match[str], name: str) -> str | None:
    text = match.groupdict().get(name)
    return text.strip() if text and text.strip() else None


def _first_match(sheet: Sheet, first: int, last: int, pattern: str, key: str) -> int:
    for index, _ in matching_lines(sheet, first, last, pattern):
        return index
    raise ExportError(
        f"no line has {pattern}", where=sheet.where(), remedy=f"check {key} in the profile, or export again"
    )


def _first_filled(sheet: Sheet, first: int, last: int, after: int | None = None) -> int:
    for index in range(first, last):
        if not is_blank(sheet.fields(index)):
            return index
    raise ExportError(
        "there is no table here" if after is None else "no data follow the header",
        where=sheet.where(min(first, max(sheet.line_count - 1, 0)) if after is None else after),
        remedy="the file may be cut off: export it again; or check [table] and [blocks] in the profile",
    )


def _end_by_pattern(sheet: Sheet, first: int, last: int, pattern: str | None) -> int:
    if pattern is None:
        return last
    return next((index for index, _ in matching_lines(sheet, first, last, pattern)), last)


def _trimmed(fields: Sequence[str]) -> list[str]:
    filled = [index for index, field in enumerate(fields) if field.strip()]
    return list(fields[: filled[-1] + 1]) if filled else []
