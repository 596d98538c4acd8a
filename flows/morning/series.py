"""One series, and one well of it: constants with and without what is held, rates beside their fit, findings.

Reads; what is drawn from it is drawn elsewhere.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import duckdb

from flows.morning.asking import ask, one

NEIGHBOURS = 1


@dataclass(frozen=True)
class Constant:
    """A constant by what it rests on: rows of estimates (value, low, high) by `wells`, None where absent."""

    constant: str
    unit: str
    by_wells: dict[str, Any]


@dataclass(frozen=True)
class Series:
    """What the page of a series shows.

    Attributes
    ----------
    row
        Of the series table, with the plate read's columns.
    constants
        Of the series' law by each way of fitting, and those of another law that a way of fitting chose.
    candidates
        Fits of the clear wells: law, chosen, aicc, evidence_weight, trusted, distrust.
    wells
        Its wells with rate, standing and the gates that hold them, by substrate.
    findings
        On the series or its lot.
    comparison
        Whole curves against initial rates; None where they were not compared.
    suggestions
        Substrate levels for a repeat.
    """

    row: Any
    constants: list[Constant]
    candidates: list[Any]
    wells: list[Any]
    findings: list[Any]
    comparison: Any
    suggestions: list[Any]


@dataclass(frozen=True)
class Well:
    """What the right-hand side of a plate's page shows of one well.

    Attributes
    ----------
    row
        Columns of wells and rates.
    findings
        On the well, worst first.
    replicates, neighbours
        Other wells of its series and level; wells beside it on the plate.
    series
        The series it belongs to; None for a blank or a standard.
    """

    row: Any
    findings: list[Any]
    replicates: list[Any]
    neighbours: list[Any]
    series: Series | None


_WELL = """
    SELECT w.*, r.* EXCLUDE (analysis_id, well)
    FROM wells w LEFT JOIN rates r USING (analysis_id, well)
    WHERE w.analysis_id = $1
"""


def the_series(connection: duckdb.DuckDBPyConnection, series_id: str) -> Series:
    """Read a series of a current analysis.

    Raises
    ------
    NotFound
        If there is none with this id.
    """
    row = one(
        connection,
        f"series {series_id[:12]} in the current results",
        "SELECT s.*, c.plate_id, c.assay, c.measured_at, c.revision FROM series s "
        "JOIN current_analyses c USING (analysis_id) WHERE s.series_id = $1",
        series_id,
    )
    estimates = ask(
        connection,
        "SELECT e.wells, e.constant, e.value, e.standard_error, e.low, e.high, e.unit, e.law, t.trusted "
        "FROM estimates e JOIN fits t USING (fit_id) "
        "WHERE e.series_id = $1 AND (e.law = $2 OR e.chosen) ORDER BY e.constant, e.wells, e.law = $2",
        series_id,
        row.law,
    )
    names = dict.fromkeys((each.constant, each.unit) for each in estimates)
    return Series(
        row,
        [
            Constant(
                constant,
                unit,
                {e.wells: e for e in estimates if (e.constant, e.unit) == (constant, unit)},
            )
            for constant, unit in names
        ],
        ask(
            connection,
            "SELECT fit_id, law, chosen, aicc, evidence_weight, trusted, distrust, lack_of_fit_p "
            "FROM fits WHERE series_id = $1 AND wells = 'clear' ORDER BY chosen DESC, evidence_weight DESC",
            series_id,
        ),
        ask(
            connection,
            f"{_WELL} AND w.series_id = $2 ORDER BY w.substrate_um, w.row_number, w.column_number",
            row.analysis_id,
            series_id,
        ),
        ask(
            connection,
            "SELECT gate, subject, outcome, severity, sentence FROM findings WHERE analysis_id = $1 "
            "AND (series_id = $2 OR (subject = 'lot' AND lot = $3)) ORDER BY outcome, gate",
            row.analysis_id,
            series_id,
            row.lot,
        ),
        next(iter(ask(connection, "SELECT * FROM comparisons WHERE series_id = $1", series_id)), None),
        ask(connection, "SELECT * FROM suggestions WHERE series_id = $1 ORDER BY place", series_id),
    )


def the_well(connection: duckdb.DuckDBPyConnection, analysis_id: str, well: str) -> Well:
    """Read one well of a current analysis.

    Raises
    ------
    NotFound
        If the plate has no such well.
    """
    row = one(connection, f"well {well} on this plate", f"{_WELL} AND w.well = $2", analysis_id, well)
    return Well(
        row,
        ask(
            connection,
            "SELECT finding_id, gate, outcome, severity, sentence FROM findings "
            "WHERE analysis_id = $1 AND subject = 'well' AND well = $2 ORDER BY severity DESC, gate",
            analysis_id,
            well,
        ),
        ask(
            connection,
            f"{_WELL} AND w.well <> $2 AND w.series_id = $3 AND w.substrate_um = $4 ORDER BY w.well",
            analysis_id,
            well,
            row.series_id,
            row.substrate_um,
        ),
        ask(
            connection,
            f"{_WELL} AND w.well <> $2 AND abs(w.row_number - $3) <= {NEIGHBOURS} "
            f"AND abs(w.column_number - $4) <= {NEIGHBOURS} ORDER BY w.row_number, w.column_number",
            analysis_id,
            well,
            row.row_number,
            row.column_number,
        ),
        None if row.series_id is None else the_series(connection, row.series_id),
    )


def fitted_points(connection: duckdb.DuckDBPyConnection, series_id: str, wells_fitted: str) -> list[Any]:
    """Points of a series' chosen fit: well, substrate, rate, fitted rate and its standard deviation."""
    return ask(
        connection,
        "SELECT p.well, p.substrate_um, p.v_um_per_s, p.fitted_um_per_s, p.v_sd_um_per_s, t.law "
        "FROM fit_points p JOIN fits t USING (fit_id) "
        "WHERE t.series_id = $1 AND t.wells = $2 AND t.chosen ORDER BY p.substrate_um, p.well",
        series_id,
        wells_fitted,
    )
