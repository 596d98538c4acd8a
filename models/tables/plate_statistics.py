"""Table of how well a plate ran: one statistic a row, whether or not a gate looks at it."""

from models.tables import keys
from models.tables.table import Column, Table

PLATE_STATISTICS = Table(
    "plate_statistics",
    "How well each plate read ran: room from blank to reference, scatter of replicates, place on the plate",
    ("analysis_id", "statistic"),
    (
        keys.ANALYSIS_ID,
        Column(
            "statistic",
            "text",
            "z_prime and signal_to_blank, of the reference's best-filled condition against its blanks; "
            "replicate_cv, of rates, pooled over levels; position_effect, the row, column or edge that "
            "stands out most, and read_order_drift, from the first to the last well read, both of rates "
            "relative to their fit",
        ),
        Column("statistic_value", "real", "The statistic; NULL where it cannot be known", "1", nullable=True),
        Column(
            "p_value",
            "real",
            "Chance of an effect as large on a plate that has none; NULL where nothing is tested",
            "1",
            nullable=True,
        ),
        Column("where_on_plate", "text", "Row, column or edge that stands out, such as row C", nullable=True),
        Column("well_count", "integer", "Wells that it rests on", nullable=True),
        Column("reason", "text", "Why it is not known; NULL where it is", nullable=True),
    ),
)
