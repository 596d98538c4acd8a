"""Tables of what is said of lots and how it was checked: lot values, sources, gate runs, recipes."""

from models.tables import keys
from models.tables.table import Column, Table

LOT_VALUES = Table(
    "lot_values",
    "A constant of a lot over its plate reads with random effects, as it stood after one pass",
    ("lot_value_id",),
    (
        keys.LOT_VALUE_ID,
        keys.PASS_ID,
        keys.ASSAY,
        keys.LOT,
        Column("role", "text", "sample or reference"),
        keys.MODULATOR.optional("The modulator that the constant is about; NULL for one without"),
        keys.CONSTANT,
        keys.VALUE.optional("The constant, in the unit of its row; NULL where nothing clear could be fitted"),
        keys.STANDARD_ERROR,
        keys.LOW,
        keys.HIGH,
        keys.UNIT,
        Column(
            "between_plate_sd",
            "real",
            "Standard deviation between plate reads, in the row's unit; NULL with one plate read",
            nullable=True,
        ),
        Column("plate_read_count", "integer", "Plate reads the value rests on"),
        Column("series_count", "integer", "Series the value rests on"),
        Column("held_series_count", "integer", "Series of the lot that wait for a person and are left out"),
        Column(
            "measured_at",
            "timestamp",
            "Start of the latest plate read it rests on, UTC; its receipt where unknown",
        ),
        Column("standing", "text", "clear, or held where a series of the lot is"),
        Column("reason", "text", "Why there is no value, or why an end is open; NULL else", nullable=True),
    ),
    "warehouse",
)

LOT_VALUE_SOURCES = Table(
    "lot_value_sources",
    "Which estimates a lot's value rests on",
    ("lot_value_id", "estimate_id"),
    (keys.LOT_VALUE_ID, keys.ESTIMATE_ID),
    "warehouse",
)

GATE_RUNS = Table(
    "gate_runs",
    "One validation of a Great Expectations suite over the metrics of a batch, kept as JSON",
    ("gate_run_id",),
    (
        Column("gate_run_id", "text", "Digest of the suite, the recipe and the analyses it ran on"),
        keys.PASS_ID,
        keys.RECIPE_ID,
        Column("suite", "text", "structure, or phase and subject: wells.well, fit.well, series.series ..."),
        Column("expectation_count", "integer", "Expectations in the suite"),
        Column("row_count", "integer", "Rows of metrics it ran on"),
        Column("success", "flag", "Whether every row met every expectation"),
        Column("file", "text", "Where the suite and its result are kept, below the site folder"),
    ),
    "warehouse",
)

RECIPES = Table(
    "recipes",
    "Everything besides the data that fixes a result",
    ("recipe_id",),
    (
        keys.RECIPE_ID,
        keys.ASSAY,
        Column("profile", "text", "Name of the export profile"),
        Column("code_version", "text", "Version of halfsat and digest of the code that makes numbers"),
        Column("recipe", "text", "The recipe as canonical JSON"),
    ),
    "warehouse",
)
