"""Tables of what came in: passes, files, plate reads and their readings."""

from models.tables import keys
from models.tables.table import Column, Table

PASSES = Table(
    "passes",
    "One run of the overnight flow",
    ("pass_id",),
    (
        keys.PASS_ID,
        Column("started_at", "timestamp", "When the pass began, UTC"),
        Column("finished_at", "timestamp", "When its results were loaded, UTC"),
        Column("code_version", "text", "Version of halfsat and digest of the code that makes numbers"),
        Column("export_count", "integer", "Exports accepted in this pass"),
        Column("map_count", "integer", "Plate maps accepted in this pass"),
        Column("quarantined_count", "integer", "Files put into quarantine in this pass"),
        Column("analysis_count", "integer", "Plate reads analysed in this pass"),
    ),
    "warehouse",
)

FILES = Table(
    "files",
    "Every file ever pulled: exports, plate maps, and what had to be put into quarantine",
    ("file_id",),
    (
        Column("file_id", "text", "SHA-256 of the file's bytes"),
        Column("kind", "text", "export, plate_map or quarantined"),
        Column("file_name", "text", "Name under which the file was first seen"),
        Column("byte_count", "integer", "Size of the file", "byte"),
        Column("received_at", "timestamp", "When the file was first pulled, UTC"),
        Column(
            "profile",
            "text",
            "Export profile that read it; NULL for plate maps and quarantined files",
            nullable=True,
        ),
        Column("reason", "text", "Why the file is in quarantine; NULL where it was read", nullable=True),
        keys.PASS_ID,
    ),
    "warehouse",
)

PLATE_MAPS = Table(
    "plate_maps",
    "Which plates each accepted plate map describes; the latest map of a plate counts",
    ("map_id", "plate_id"),
    (
        keys.MAP_ID,
        keys.PLATE_ID,
        Column(
            "assay", "text", "Assay that the map names; NULL where it leaves that to the site", nullable=True
        ),
        Column("mapped_well_count", "integer", "Wells that the map describes on this plate"),
        Column("received_at", "timestamp", "When the map was first pulled, UTC"),
    ),
    "warehouse",
)

PLATE_READS = Table(
    "plate_reads",
    "One plate as one export recorded it",
    ("plate_read_id",),
    (
        keys.PLATE_READ_ID,
        keys.EXPORT_ID,
        Column("place_in_export", "integer", "Which plate of the file this is, counted from 1"),
        keys.PLATE_ID,
        Column("plate_format", "integer", "Wells of the plate: 96, 384 or 1536"),
        Column(
            "started_at",
            "timestamp",
            "When the read began, UTC; NULL where the export does not say",
            nullable=True,
        ),
        Column("well_count", "integer", "Wells that were read"),
        Column("read_count", "integer", "Reads of the best-read well in the busiest channel"),
        Column("channels", "text", "Channels in the file, separated by commas"),
        Column("duration_s", "real", "Time from the first to the last read", "s"),
        Column(
            "temperature_low_c", "real", "Lowest temperature reported during the read", "degC", nullable=True
        ),
        Column(
            "temperature_high_c",
            "real",
            "Highest temperature reported during the read",
            "degC",
            nullable=True,
        ),
    ),
    "warehouse",
)

READINGS = Table(
    "readings",
    "What the instrument wrote: one signal of one well at one time, and where in the export it stands",
    ("plate_read_id", "channel", "well", "read_number"),
    (
        keys.PLATE_READ_ID,
        keys.CHANNEL,
        keys.WELL,
        Column("read_number", "integer", "The well's reads in this channel, counted from 1"),
        Column("time_s", "real", "Time since the plate's first read", "s"),
        Column("signal", "real", "Signal as written; NULL where missing or overflowed", nullable=True),
        Column("state", "text", "ok, overflow or missing"),
        Column("temperature_c", "real", "Temperature reported with the read", "degC", nullable=True),
        Column("source_sheet", "text", "Sheet of a workbook; NULL for text files", nullable=True),
        Column("source_row", "integer", "Line of the text file or row of the sheet, counted from 1"),
        Column("source_column", "integer", "Field of the line or column of the sheet, counted from 1"),
    ),
    "lake",
)
