"""Table of what to measure again: levels that would settle a series held for the reach of its substrate."""

from models.tables import keys
from models.tables.table import Column, Table

SUGGESTIONS = Table(
    "suggestions",
    "Substrate levels that would settle a series held for its range of substrate, and what they would bring",
    ("series_id", "place"),
    (
        keys.SERIES_ID,
        Column("place", "integer", "Place among the series' levels, lowest first, counted from 1"),
        keys.ANALYSIS_ID,
        Column("gates", "text", "Gates that hold the series and are to be settled, separated by commas"),
        Column(
            "settles",
            "flag",
            "Whether all levels of the series together would settle it, were its constants as now estimated",
        ),
        Column(
            "substrate_um", "real", "Level to measure; NULL where none can be named", "umol/L", nullable=True
        ),
        Column("replicates", "integer", "Wells of this level; NULL where none can be named", nullable=True),
        Column(
            "highest_allowed_um",
            "real",
            "Highest level that was allowed; NULL where none could be worked out",
            "umol/L",
            nullable=True,
        ),
        Column(
            "allowed_by",
            "text",
            "What allows it: solubility, the assay's stated limit; or reach, a multiple of K or the highest "
            "level measured, where the assay states none",
        ),
        keys.CONSTANT.optional("The half-saturation constant whose interval is foretold: km or k_half"),
        Column(
            "expected_highest_ratio",
            "real",
            "Expected (highest substrate / K)^n with these levels, n the Hill coefficient or 1",
            "1",
            nullable=True,
        ),
        Column(
            "expected_lowest_ratio",
            "real",
            "Expected lowest substrate / K with these levels",
            "1",
            nullable=True,
        ),
        Column(
            "expected_standard_error_um",
            "real",
            "Expected standard error of K with these levels",
            "umol/L",
            nullable=True,
        ),
        Column(
            "expected_low_um",
            "real",
            "Expected lower end of the 95 % interval of K; NULL where it would stay open",
            "umol/L",
            nullable=True,
        ),
        Column(
            "expected_high_um",
            "real",
            "Expected upper end of the 95 % interval of K; NULL where it would stay open",
            "umol/L",
            nullable=True,
        ),
        Column(
            "sentence", "text", "What a reviewer reads: the levels, what they bring, and what allows them"
        ),
    ),
)
