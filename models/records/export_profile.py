"""How to read one shape of export: where its table stands, how it writes wells, times and numbers.

One TOML file a profile; no instrument is built in. Nothing here reads a file.
"""

from __future__ import annotations

import re
from typing import Annotated, Literal

from pydantic import AfterValidator, Field, StringConstraints, model_validator

from models.records.record import Record
from models.records.site_settings import TimeZoneName
from models.tables.keys import ONLY_CHANNEL

Shape = Literal["long", "wide", "wells_by_rows", "grids"]
Notation = Literal["s", "min", "h", "ms", "mm:ss", "hh:mm:ss", "timestamp"]

# The base record strips blanks from text, but a blank may matter in a pattern, a delimiter or a token.
RawText = Annotated[str, StringConstraints(strip_whitespace=False, min_length=1)]


def _compiles(pattern: str) -> str:
    try:
        re.compile(pattern)
    except re.error as flaw:
        raise ValueError(f"'{pattern}' is not a regular expression: {flaw}") from flaw
    return pattern


Regex = Annotated[RawText, AfterValidator(_compiles)]
ColumnName = Annotated[str, Field(min_length=1)] | Annotated[int, Field(ge=1)]


def _needs_groups(pattern: str | None, key: str, *groups: str) -> None:
    if pattern is None:
        return
    missing = [group for group in groups if group not in re.compile(pattern).groupindex]
    if missing:
        wanted = " and ".join(f"(?P<{group}>...)" for group in missing)
        raise ValueError(f"{key} must hold the named group {wanted}")


class Detection(Record):
    """How an export of this profile is told from others; everything stated must hold."""

    file_name: tuple[str, ...] = ()
    """Patterns of the file name with * and ?, upper and lower case alike; one of them must fit."""
    head: tuple[Regex, ...] = ()
    """Regular expressions that must all be found, each in one of the first lines."""
    head_lines: int = Field(default=60, ge=1, le=10_000)
    """How many first lines count as the head."""

    @model_validator(mode="after")
    def _something(self) -> Detection:
        if not self.file_name and not self.head:
            raise ValueError("state file_name patterns or head patterns, or both")
        return self


class TextFile(Record):
    """How text is encoded and cut into fields."""

    encoding: Literal["auto", "utf-8", "utf-16", "utf-16-le", "utf-16-be", "latin-1"] = "auto"
    """Encoding; auto goes by the byte order mark, then tries utf-8, then latin-1."""
    delimiter: RawText = "auto"
    """What stands between fields: any text, or tab, space, whitespace (runs of blanks), or auto, which
    chooses among comma, semicolon, tab and bar."""
    quote: RawText = Field(default='"', max_length=1)
    """What may stand round a field."""

    @property
    def separator(self) -> str | None:
        """The delimiter itself; None where it is to be found out; a blank text for runs of blanks."""
        named = {"auto": None, "tab": "\t", "space": " ", "whitespace": "", "comma": ",", "semicolon": ";"}
        return named.get(self.delimiter, self.delimiter)


class Workbook(Record):
    """Which sheets of a workbook hold data."""

    sheet: str | None = Field(default=None, min_length=1)
    """Name or pattern with * and ?; every sheet that fits is read. Left out: the first sheet."""


class TableFinding(Record):
    """Where the table begins and ends within the file, or within each block of it."""

    skip_lines: int = Field(default=0, ge=0)
    """Lines to skip first."""
    after: Regex | None = None
    """The table stands somewhere after the first line in which this is found."""
    header: Regex | None = None
    """The header is the first line in which this is found; left out, the first line that is not empty."""
    has_header: bool = True
    """False where the table has no header line: columns are then named by number."""
    end: Literal["file", "blank_row", "first_unreadable_row"] = "file"
    """Where the table ends: with the file or block, at the first empty row, or at the first row whose time
    (wide) or well (long, wells_by_rows) cannot be read."""
    end_pattern: Regex | None = None
    """The table ends before the first line in which this is found, whatever `end` says."""
    short_rows: Literal["error", "missing"] = "error"
    """Whether a row with too few fields is a torn row, or leaves out missing reads at its end."""


class Blocks(Record):
    """Lines that begin a new plate or a new channel within one file."""

    plate: Regex | None = None
    """Each line in which this is found begins a new plate; the group `plate_id` may name it."""
    channel: Regex | None = None
    """Each line in which this is found begins a new channel, named by the group `channel`."""

    @model_validator(mode="after")
    def _groups(self) -> Blocks:
        _needs_groups(self.channel, "channel", "channel")
        return self


class PlateSource(Record):
    """Where barcode and start of the read are found."""

    id_in_preamble: Regex | None = None
    """Finds the barcode, group `plate_id`, in the lines before the table."""
    id_in_file_name: Regex | None = None
    """Finds the barcode, group `plate_id`, in the file name; used where the preamble does not hold it."""
    id_in_sheet_name: Regex | None = None
    """Finds the barcode, group `plate_id`, in the name of the workbook's sheet."""
    started_in_preamble: Regex | None = None
    """Finds the start of the read, group `started`, in the lines before the table."""
    started_in_file_name: Regex | None = None
    """Finds the start of the read, group `started`, in the file name."""
    started_format: str | None = Field(default=None, min_length=2)
    """How the start is written, such as %d.%m.%Y %H:%M:%S; left out, ISO 8601."""
    time_zone: TimeZoneName = "UTC"
    """Time zone of the instrument's clock, such as Europe/Vienna."""
    format: Literal[96, 384, 1536] | None = None
    """Wells of the plate; left out, the smallest plate that holds every well read."""

    @model_validator(mode="after")
    def _groups(self) -> PlateSource:
        for key in ("id_in_preamble", "id_in_file_name", "id_in_sheet_name"):
            _needs_groups(getattr(self, key), key, "plate_id")
        for key in ("started_in_preamble", "started_in_file_name"):
            _needs_groups(getattr(self, key), key, "started")
        if self.started_format is not None and not (self.started_in_preamble or self.started_in_file_name):
            raise ValueError("started_format needs started_in_preamble or started_in_file_name")
        return self


class TimeSource(Record):
    """How times are written, or the interval where the file has none."""

    notation: Notation | None = None
    """s, min, h or ms; mm:ss; hh:mm:ss (past 24 h too, and d.hh:mm:ss); or timestamp."""
    format: str | None = Field(default=None, min_length=2)
    """How a timestamp is written, such as %Y-%m-%d %H:%M:%S; a clock time without date may pass midnight."""
    interval_s: float | None = Field(default=None, gt=0)
    """Time between reads, s, where the file has no times: reads then count from 0 in file order."""
    pattern: Regex | None = None
    """Finds the time, group `time`, in a header cell (wells_by_rows) or in a line above a grid (grids)."""

    @model_validator(mode="after")
    def _one_source(self) -> TimeSource:
        if (self.notation is None) == (self.interval_s is None):
            raise ValueError("state notation, or interval_s where the file has no times")
        if (self.notation == "timestamp") != (self.format is not None):
            raise ValueError('notation = "timestamp" and format go together')
        _needs_groups(self.pattern, "pattern", "time")
        return self


class TemperatureSource(Record):
    """Where the temperature of each read stands, in degC."""

    row: str | None = Field(default=None, min_length=1)
    """What stands in the well column of the row that holds temperatures (wells_by_rows)."""
    pattern: Regex | None = None
    """Finds the temperature, group `temperature`, in a line above a grid (grids)."""

    @model_validator(mode="after")
    def _groups(self) -> TemperatureSource:
        _needs_groups(self.pattern, "pattern", "temperature")
        return self


class Values(Record):
    """How numbers are written, and what stands where there is none."""

    decimal: Literal[".", ","] = "."
    """Decimal sign."""
    thousands: Annotated[str, StringConstraints(strip_whitespace=False, max_length=1)] = ""
    """Sign between groups of three digits, if any."""
    overflow: tuple[str, ...] = ()
    """What stands where the detector overflowed."""
    missing: tuple[str, ...] = ()
    """What stands where a read is missing, beside the empty cell."""

    @model_validator(mode="after")
    def _distinct(self) -> Values:
        if self.decimal == self.thousands:
            raise ValueError("decimal and thousands must differ")
        both = set(self.overflow) & set(self.missing)
        if both:
            raise ValueError(f"'{min(both)}' stands in both overflow and missing")
        return self


class Wells(Record):
    """How wells are named."""

    pattern: Regex | None = None
    """Takes a well's name apart into the groups `row` and `column`, letters or numbers each; left out, the
    names are A1 or A01."""

    @model_validator(mode="after")
    def _groups(self) -> Wells:
        _needs_groups(self.pattern, "pattern", "row", "column")
        return self


class Columns(Record):
    """Which column holds what: the text of its header, or its number counted from 1."""

    well: ColumnName | None = None
    """The well (long, wells_by_rows)."""
    row: ColumnName | None = None
    """The well's row, where row and column of the plate stand apart (long, wells_by_rows)."""
    column: ColumnName | None = None
    """The well's column, where row and column of the plate stand apart (long, wells_by_rows)."""
    time: ColumnName | None = None
    """The time (long, wide)."""
    signal: ColumnName | None = None
    """The signal (long)."""
    channel: ColumnName | None = None
    """The channel (long)."""
    plate: ColumnName | None = None
    """The plate's barcode (long)."""
    read: ColumnName | None = None
    """The number of the read counted from 1, which gives the time together with interval_s (long)."""
    temperature: ColumnName | None = None
    """The temperature of the read, degC (long, wide)."""
    ignore: tuple[ColumnName, ...] = ()
    """Further columns that hold no reads (wide, wells_by_rows)."""


class GridLayout(Record):
    """What frames each grid."""

    row_labels: bool = True
    """Whether each row begins with its letters."""
    column_numbers: bool = True
    """Whether a line with the column numbers stands above each grid."""


class ExportProfile(Record):
    """How to read one shape of export."""

    shape: Shape
    """long (a row a reading), wide (a row a time, a column a well), wells_by_rows (a row a well, a column a
    time), or grids (a block shaped like the plate for each time)."""
    container: Literal["text", "xlsx"] = "text"
    """What kind of file it is."""
    channel: str = Field(default=ONLY_CHANNEL, min_length=1)
    """Name of the channel where the file does not name one."""
    detect: Detection
    """How an export of this profile is told from others."""
    text: TextFile = TextFile()
    """How text is encoded and cut into fields."""
    workbook: Workbook = Workbook()
    """Which sheets of a workbook hold data."""
    table: TableFinding = TableFinding()
    """Where the table begins and ends."""
    blocks: Blocks = Blocks()
    """Lines that begin a new plate or channel."""
    plate: PlateSource = PlateSource()
    """Where barcode and start of the read are found."""
    time: TimeSource
    """How times are written."""
    temperature: TemperatureSource = TemperatureSource()
    """Where temperatures stand."""
    values: Values = Values()
    """How numbers are written."""
    wells: Wells = Wells()
    """How wells are named."""
    columns: Columns = Columns()
    """Which column holds what."""
    grids: GridLayout = GridLayout()
    """What frames each grid."""

    @model_validator(mode="after")
    def _plate_is_named(self) -> ExportProfile:
        block = self.blocks.plate is not None and "plate_id" in re.compile(self.blocks.plate).groupindex
        plate = self.plate
        if not (
            block
            or plate.id_in_preamble
            or plate.id_in_file_name
            or plate.id_in_sheet_name
            or self.columns.plate is not None
        ):
            raise ValueError(
                "say where the plate's barcode stands: plate.id_in_preamble, plate.id_in_file_name, "
                "plate.id_in_sheet_name, blocks.plate with a group plate_id, or columns.plate"
            )
        return self

    @model_validator(mode="after")
    def _shape_is_complete(self) -> ExportProfile:
        columns, timed = self.columns, self.time.interval_s is None
        needed: dict[str, bool] = {}
        if self.shape in ("long", "wells_by_rows"):
            apart = columns.row is not None and columns.column is not None
            needed["columns.well (or columns.row and columns.column)"] = columns.well is not None or apart
        if self.shape == "long":
            needed["columns.signal"] = columns.signal is not None
        if self.shape in ("long", "wide") and timed:
            needed["columns.time"] = columns.time is not None
        if self.shape == "grids" and timed:
            needed["time.pattern"] = self.time.pattern is not None
        missing = [key for key, given in needed.items() if not given]
        if missing:
            raise ValueError(f'shape = "{self.shape}" needs {", ".join(missing)}')
        return self

    @model_validator(mode="after")
    def _keys_fit_the_shape(self) -> ExportProfile:
        """A key that this shape never looks at is a mistake, not a comment."""
        columns, shape = self.columns, self.shape
        belongs = {
            "columns.well": (columns.well, ("long", "wells_by_rows")),
            "columns.row": (columns.row, ("long", "wells_by_rows")),
            "columns.column": (columns.column, ("long", "wells_by_rows")),
            "columns.time": (columns.time, ("long", "wide")),
            "columns.signal": (columns.signal, ("long",)),
            "columns.channel": (columns.channel, ("long",)),
            "columns.plate": (columns.plate, ("long",)),
            "columns.read": (columns.read, ("long",)),
            "columns.temperature": (columns.temperature, ("long", "wide")),
            "columns.ignore": (columns.ignore or None, ("wide", "wells_by_rows")),
            "temperature.row": (self.temperature.row, ("wells_by_rows",)),
            "temperature.pattern": (self.temperature.pattern, ("grids",)),
            "time.pattern": (self.time.pattern, ("wells_by_rows", "grids")),
        }
        for key, (value, shapes) in belongs.items():
            if value is not None and shape not in shapes:
                raise ValueError(f'{key} has no meaning in shape = "{shape}"')
        if columns.read is not None and self.time.interval_s is None:
            raise ValueError("columns.read gives the time only together with time.interval_s")
        if not self.table.has_header and shape in ("wide", "wells_by_rows") and not self._works_headless():
            raise ValueError(f'shape = "{shape}" needs a header line here: it names wells or times')
        return self

    def _works_headless(self) -> bool:
        return self.shape == "wells_by_rows" and self.time.interval_s is not None
