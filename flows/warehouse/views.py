"""The views that a lab asks for. Each sees current results only: analyses that nothing has superseded.

Meanings of columns come from the tables they are taken from; what a view adds is said here.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

from flows.warehouse.view import View, columns, quoted, renamed, taken
from models.tables import (
    ANALYSES,
    ESTIMATES,
    FILES,
    FINDINGS,
    FITS,
    LOT_VALUES,
    PLATE_READS,
    READINGS,
    RECIPES,
    SERIES,
    WELLS,
    Column,
)

_MEASURED_AT = Column(
    "measured_at", "timestamp", "Start of the plate read, UTC; receipt of its export where unknown"
)
_SERIES_STANDING = replace(
    taken(SERIES, "standing")[0],
    name="series_standing",
    meaning="Standing of the series or grid: clear, held (waits for a person) or void (cannot be used)",
)

CURRENT_ANALYSES = View(
    "current_analyses",
    "The current revision of every analysed plate read, with its plate and when it was measured",
    columns(
        taken(ANALYSES, "analysis_id", "plate_read_id", "assay"),
        taken(PLATE_READS, "plate_id"),
        _MEASURED_AT,
        taken(ANALYSES, "revision", "standing", "computed_at", "pass_id", "recipe_id", "map_id"),
        taken(PLATE_READS, "export_id", "place_in_export"),
    ),
    """
    SELECT a.analysis_id, a.plate_read_id, a.assay, p.plate_id,
           coalesce(p.started_at, f.received_at, a.computed_at) AS measured_at,
           a.revision, a.standing, a.computed_at, a.pass_id, a.recipe_id, a.map_id,
           p.export_id, p.place_in_export
    FROM analyses a
    JOIN plate_reads p USING (plate_read_id)
    LEFT JOIN files f ON f.file_id = p.export_id
    WHERE a.superseded_by IS NULL
    """,
)

CURRENT_ESTIMATES = View(
    "current_estimates",
    "Every constant of the chosen laws in current results, of series and of grids, by what they rest on",
    columns(
        taken(ESTIMATES, "assay", "lot", "constant", "value", "standard_error", "low", "high", "unit"),
        taken(ESTIMATES, "law", "wells"),
        taken(SERIES, "role", "enzyme_nm", "enzyme_ng_per_ml", "modulator"),
        taken(SERIES, "modulator_um")[0].optional("Modulator concentration; NULL for none or a whole grid"),
        _SERIES_STANDING,
        taken(FITS, "trusted"),
        taken(CURRENT_ANALYSES, "plate_id", "measured_at", "plate_read_id"),
        taken(ESTIMATES, "analysis_id", "series_id", "grid_id", "fit_id", "estimate_id"),
    ),
    """
    SELECT e.assay, e.lot, e.constant, e.value, e.standard_error, e.low, e.high, e.unit,
           e.law, e.wells,
           coalesce(s.role, g.role) AS role,
           coalesce(s.enzyme_nm, g.enzyme_nm) AS enzyme_nm,
           coalesce(s.enzyme_ng_per_ml, g.enzyme_ng_per_ml) AS enzyme_ng_per_ml,
           coalesce(s.modulator, g.modulator) AS modulator, s.modulator_um,
           coalesce(s.standing, g.standing) AS series_standing, t.trusted,
           c.plate_id, c.measured_at, c.plate_read_id,
           e.analysis_id, e.series_id, e.grid_id, e.fit_id, e.estimate_id
    FROM estimates e
    JOIN current_analyses c USING (analysis_id)
    LEFT JOIN series s USING (series_id)
    LEFT JOIN grids g USING (grid_id)
    JOIN fits t USING (fit_id)
    WHERE e.chosen
    """,
)

HELD_WELLS = View(
    "held_wells",
    "Wells that wait for a person, with the gates that hold them and what these found",
    columns(
        taken(CURRENT_ANALYSES, "plate_id", "measured_at", "assay"),
        taken(WELLS, "well", "role", "lot", "substrate_um", "enzyme_nm", "enzyme_ng_per_ml"),
        Column("gates", "text", "Gates that breached on the well or its plate read, separated by commas"),
        Column("sentences", "text", "What they found, as a reviewer reads it"),
        taken(WELLS, "series_id"),
        taken(CURRENT_ANALYSES, "plate_read_id", "analysis_id"),
    ),
    """
    SELECT c.plate_id, c.measured_at, c.assay,
           w.well, w.role, w.lot, w.substrate_um, w.enzyme_nm, w.enzyme_ng_per_ml,
           string_agg(f.gate, ', ' ORDER BY f.subject DESC, f.gate) AS gates,
           string_agg(f.sentence, ' ' ORDER BY f.subject DESC, f.gate) AS sentences,
           w.series_id, c.plate_read_id, c.analysis_id
    FROM wells w
    JOIN current_analyses c USING (analysis_id)
    LEFT JOIN findings f
      ON f.analysis_id = w.analysis_id AND f.outcome = 'breach'
     AND (f.subject = 'plate_read' OR (f.subject = 'well' AND f.well = w.well))
    WHERE w.standing = 'held'
    GROUP BY ALL
    """,
)

GATE_TALLY = View(
    "gate_tally",
    "How often each gate spoke in current results",
    columns(
        taken(ANALYSES, "assay"),
        taken(FINDINGS, "gate", "subject", "outcome", "severity"),
        Column("finding_count", "integer", "Findings of the gate"),
        Column("plate_read_count", "integer", "Plate reads in which it spoke"),
        Column("plate_read_share", "real", "Share of the assay's plate reads in which it spoke", "1"),
    ),
    """
    SELECT c.assay, f.gate, f.subject, f.outcome, f.severity,
           count(*) AS finding_count,
           count(DISTINCT c.plate_read_id) AS plate_read_count,
           count(DISTINCT c.plate_read_id) / any_value(n.plate_read_count) AS plate_read_share
    FROM findings f
    JOIN current_analyses c USING (analysis_id)
    JOIN (SELECT assay, count(*) AS plate_read_count FROM current_analyses GROUP BY assay) n USING (assay)
    GROUP BY c.assay, f.gate, f.subject, f.outcome, f.severity
    """,
)

# A lot value is current while none of the estimates under it belongs to a superseded analysis.
_CURRENT_LOT_VALUES = """
    SELECT v.*, coalesce(p.started_at, 'infinity'::TIMESTAMPTZ) AS passed_at
    FROM lot_values v
    LEFT JOIN passes p USING (pass_id)
    WHERE NOT EXISTS (
      FROM lot_value_sources s
      JOIN estimates e USING (estimate_id)
      JOIN analyses a USING (analysis_id)
      WHERE s.lot_value_id = v.lot_value_id AND a.superseded_by IS NOT NULL
    )
"""

LOT_LATEST = View(
    "lot_latest",
    "Each lot's constants as they stand after the latest pass that saw the lot",
    columns(
        taken(LOT_VALUES, "lot", "assay", "role", "modulator", "constant"),
        taken(LOT_VALUES, "value", "standard_error", "low", "high"),
        taken(LOT_VALUES, "unit", "between_plate_sd", "plate_read_count", "series_count"),
        taken(
            LOT_VALUES, "held_series_count", "measured_at", "standing", "reason", "lot_value_id", "pass_id"
        ),
    ),
    f"""
    SELECT lot, assay, role, modulator, constant, value, standard_error, low, high,
           unit, between_plate_sd, plate_read_count, series_count,
           held_series_count, measured_at, standing, reason, lot_value_id, pass_id
    FROM ({_CURRENT_LOT_VALUES})
    QUALIFY rank() OVER (PARTITION BY lot, assay, role ORDER BY passed_at DESC, pass_id DESC) = 1
    """,
)

LOT_HISTORY = View(
    "lot_history",
    "What each lot came to, pass after pass: one row each time its value changed",
    columns(
        taken(LOT_VALUES, "lot", "assay"),
        renamed(taken(LOT_VALUES, "measured_at")[0], "date"),
        taken(LOT_VALUES, "constant"),
        renamed(taken(LOT_VALUES, "value")[0], "estimate"),
        taken(LOT_VALUES, "low", "high", "unit"),
        renamed(taken(LOT_VALUES, "plate_read_count")[0], "plate_reads"),
        taken(LOT_VALUES, "standing", "modulator"),
    ),
    f"""
    SELECT lot, assay, measured_at AS date, constant,
           value AS estimate, low, high, unit, plate_read_count AS plate_reads, standing, modulator
    FROM ({_CURRENT_LOT_VALUES})
    ORDER BY lot, assay, modulator NULLS FIRST, constant, measured_at, passed_at
    """,
)

REFERENCE_CHART = View(
    "reference_chart",
    "Constants of the reference lots, plate read after plate read, with the moving range between neighbours",
    columns(
        taken(CURRENT_ESTIMATES, "assay", "lot", "constant", "measured_at", "plate_id"),
        Column("place", "integer", "Place in the lot's sequence of plate reads, counted from 1"),
        taken(ESTIMATES, "value", "standard_error", "low", "high", "unit"),
        Column(
            "moving_range",
            "real",
            "Absolute difference from the plate read before, in the unit of the row; NULL for the first",
            nullable=True,
        ),
        _SERIES_STANDING,
        taken(CURRENT_ESTIMATES, "law", "plate_read_id", "estimate_id"),
    ),
    """
    SELECT assay, lot, constant, measured_at, plate_id,
           row_number() OVER in_order AS place,
           value, standard_error, low, high, unit,
           abs(value - lag(value) OVER in_order) AS moving_range,
           series_standing, law, plate_read_id, estimate_id
    FROM current_estimates
    WHERE role = 'reference' AND wells = 'clear' AND series_id IS NOT NULL
    WINDOW in_order AS (
      PARTITION BY assay, lot, constant, unit, enzyme_nm, enzyme_ng_per_ml, modulator, modulator_um
      ORDER BY measured_at, plate_read_id, series_id
    )
    """,
)

ESTIMATE_LINEAGE = View(
    "estimate_lineage",
    "Every current estimate with the ids of all it came from, down to the export's bytes",
    columns(
        taken(ESTIMATES, "estimate_id", "assay", "lot", "constant", "value", "unit"),
        taken(ESTIMATES, "fit_id", "law", "wells", "series_id", "grid_id", "analysis_id"),
        taken(ANALYSES, "revision", "recipe_id"),
        taken(RECIPES, "code_version", "profile"),
        taken(ANALYSES, "map_id"),
        taken(PLATE_READS, "plate_read_id", "plate_id", "place_in_export", "export_id"),
        renamed(taken(FILES, "file_name")[0], "export_file_name"),
        renamed(taken(FILES, "byte_count")[0], "export_byte_count"),
        renamed(taken(FILES, "received_at")[0], "export_received_at"),
        taken(ANALYSES, "pass_id"),
    ),
    """
    SELECT e.estimate_id, e.assay, e.lot, e.constant, e.value, e.unit,
           e.fit_id, e.law, e.wells, e.series_id, e.grid_id, e.analysis_id,
           c.revision, c.recipe_id, r.code_version, r.profile, c.map_id,
           c.plate_read_id, c.plate_id, c.place_in_export, c.export_id,
           f.file_name AS export_file_name, f.byte_count AS export_byte_count,
           f.received_at AS export_received_at, c.pass_id
    FROM estimates e
    JOIN current_analyses c USING (analysis_id)
    LEFT JOIN recipes r USING (recipe_id)
    LEFT JOIN files f ON f.file_id = c.export_id
    """,
)

RESULT_VIEWS: tuple[View, ...] = (
    CURRENT_ANALYSES,
    CURRENT_ESTIMATES,
    HELD_WELLS,
    GATE_TALLY,
    LOT_LATEST,
    LOT_HISTORY,
    REFERENCE_CHART,
    ESTIMATE_LINEAGE,
)
"""Views over the warehouse's tables, each after those it uses."""


def reading_view(readings: Path) -> View:
    """The view over the lake's readings.

    Parameters
    ----------
    readings
        Absolute path of the folder with one Parquet file a plate read, each named by its id: a condition on
        `plate_read_id` then opens that file alone.
    """
    names = READINGS.column_names
    if any(readings.glob("*.parquet")):
        parts = ["parse_filename(filename, true) AS plate_read_id", *names[1:]]
        pattern = quoted(f"{readings}/*.parquet")
        source = f"read_parquet({pattern}, filename = true)"
        sql = f"SELECT {', '.join(parts)} FROM {source}"
    else:
        types = {"text": "VARCHAR", "integer": "BIGINT", "real": "DOUBLE"}
        nulls = ", ".join(f"NULL::{types[c.kind]} AS {c.name}" for c in READINGS.columns)
        sql = f"SELECT {nulls} WHERE false"
    return View("reading", READINGS.meaning, READINGS.columns, sql)
