"""Tables of what was measured on a plate read and how it was judged: analysis, wells, rates, findings."""

from models.tables import keys
from models.tables.table import Column, Table

ANALYSES = Table(
    "analyses",
    "One revision of one plate read's results",
    ("analysis_id",),
    (
        keys.ANALYSIS_ID,
        keys.PLATE_READ_ID,
        keys.MAP_ID,
        keys.ASSAY,
        keys.RECIPE_ID,
        keys.PASS_ID,
        Column("revision", "integer", "Revisions of this plate read's results, counted from 1"),
        Column("computed_at", "timestamp", "When the results were loaded, UTC"),
        keys.STANDING,
        Column(
            "superseded_by",
            "text",
            "The analysis that replaced this one; NULL while it is current",
            nullable=True,
        ),
    ),
    "warehouse",
)

WELLS = Table(
    "wells",
    "What each well of an analysed plate read held, and its standing",
    ("analysis_id", "well"),
    (
        keys.ANALYSIS_ID,
        keys.WELL,
        Column("row_number", "integer", "Plate row, counted from 1"),
        Column("column_number", "integer", "Plate column, counted from 1"),
        Column("role", "text", "sample, reference, blank, enzyme_blank, standard or empty"),
        keys.LOT.optional("The enzyme lot; NULL in wells without enzyme"),
        keys.SUBSTRATE_UM.optional("Nominal substrate at the start; NULL where the map does not say"),
        keys.ENZYME_NM,
        keys.ENZYME_NG_PER_ML,
        keys.MODULATOR,
        keys.MODULATOR_UM,
        Column("product_um", "real", "Known product in a standard", "umol/L", nullable=True),
        keys.SERIES_ID.optional("The series this well belongs to; NULL in blanks, standards and empty wells"),
        keys.STANDING,
    ),
)

RATES = Table(
    "rates",
    "Initial rate of each well that was read for one, over its window, blank subtracted for enzyme wells",
    ("analysis_id", "well"),
    (
        keys.ANALYSIS_ID,
        keys.WELL,
        Column("v0_um_per_s", "real", "Initial rate, blank subtracted", "umol/L/s", nullable=True),
        Column(
            "v0_se_um_per_s",
            "real",
            "Standard error of the rate, blank's error included",
            "umol/L/s",
            nullable=True,
        ),
        Column(
            "raw_rate_um_per_s", "real", "Slope before the blank is subtracted", "umol/L/s", nullable=True
        ),
        Column(
            "blank_rate_um_per_s",
            "real",
            "Slope of the matching blank over the same window",
            "umol/L/s",
            nullable=True,
        ),
        Column(
            "blank_rate_se_um_per_s", "real", "Standard error of the blank's slope", "umol/L/s", nullable=True
        ),
        Column("blank_source", "text", "same_level, plate or none: which blanks were matched"),
        Column(
            "mean_substrate_um",
            "real",
            "Mean substrate over the window: what the rate is paired with",
            "umol/L",
            nullable=True,
        ),
        Column("window_first_read", "integer", "First read of the window, counted from 1", nullable=True),
        Column("window_last_read", "integer", "Last read of the window", nullable=True),
        Column("window_start_s", "real", "Time of the window's first read", "s", nullable=True),
        Column("window_end_s", "real", "Time of the window's last read", "s", nullable=True),
        Column("window_point_count", "integer", "Usable reads in the window"),
        Column(
            "conversion",
            "real",
            "Share of what can be consumed that is consumed at the window's end",
            "1",
            nullable=True,
        ),
        Column(
            "shortest_conversion",
            "real",
            "The same at the end of the shortest usable window",
            "1",
            nullable=True,
        ),
        Column(
            "slope_change",
            "real",
            "Relative change of slope over the window beyond what depletion explains",
            "1",
            nullable=True,
        ),
        Column("slope_change_t", "real", "t value of that change", "1", nullable=True),
        Column(
            "depletion_slope_change",
            "real",
            "Relative change of slope over the window that depletion explains",
            "1",
            nullable=True,
        ),
        Column(
            "early_slope_change",
            "real",
            "Change of slope beyond depletion over all reads before the conversion limit, relative",
            "1",
            nullable=True,
        ),
        Column("early_slope_change_t", "real", "t value of that change", "1", nullable=True),
        Column(
            "lag_s",
            "real",
            "Time before the window that was left out as lag; 0 where there is none",
            "s",
            nullable=True,
        ),
        Column("shape", "text", "straight, falling, lag, burst, or unread where there is no rate"),
        Column(
            "rate_basis",
            "text",
            "What the rate is: line, the slope over the window; steady_state, vs of the lag's exponential; "
            "initial, v0 of the burst's; NULL where there is no rate",
            nullable=True,
        ),
        Column(
            "transient_v0_um_per_s",
            "real",
            "Lag or burst: rate at the first read, from its exponential approach to a steady rate; NULL "
            "where the reads do not tell it",
            "umol/L/s",
            nullable=True,
        ),
        Column(
            "transient_v0_se_um_per_s",
            "real",
            "Standard error of that rate, blank's error included",
            "umol/L/s",
            nullable=True,
        ),
        Column(
            "transient_vs_um_per_s",
            "real",
            "Lag or burst: the steady rate that the exponential approaches, at the same substrate",
            "umol/L/s",
            nullable=True,
        ),
        Column(
            "transient_vs_se_um_per_s",
            "real",
            "Standard error of that rate, blank's error included",
            "umol/L/s",
            nullable=True,
        ),
        Column(
            "transient_k_per_s", "real", "Lag or burst: rate constant of the approach", "1/s", nullable=True
        ),
        Column(
            "transient_k_se_per_s",
            "real",
            "Standard error of that rate constant, blank's error included",
            "1/s",
            nullable=True,
        ),
        Column("overflow_count", "integer", "Reads past the linear limit or overflowed, all of the curve"),
        Column("missing_count", "integer", "Reads missing in the curve"),
    ),
)

FINDINGS = Table(
    "findings",
    "One gate's outcome on one subject where it did not pass",
    ("finding_id",),
    (
        Column("finding_id", "text", "Digest of the analysis, the gate and its subject"),
        keys.ANALYSIS_ID,
        Column("gate", "text", "Name of the gate"),
        Column("subject", "text", "well, series, lot (all of a lot on the plate) or plate_read"),
        keys.WELL.optional("The well; NULL where the subject is none"),
        keys.SERIES_ID.optional("The series; NULL where the subject is none"),
        keys.LOT.optional("The lot; NULL where the subject is none"),
        Column("outcome", "text", "breach, or not_assessed where the gate could not be computed"),
        Column("severity", "text", "hold or void; none for not_assessed"),
        Column("measured", "real", "What was measured, in the unit of its row", nullable=True),
        Column("limit_value", "real", "The limit in force, in the unit of its row", nullable=True),
        keys.UNIT,
        Column("sentence", "text", "What a reviewer reads: measured value, limit, and what it does"),
    ),
)
