"""Where a result came from: from any id down to the bytes that the instrument wrote.

Reads the published warehouse, the lake and the raw archive, and checks the hashes of what it passes.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Mapping

import duckdb

from flows import lake
from flows.history.drawing import lineage_text, render
from flows.history.lookup import find_id, readings_file
from flows.history.node import Fact, Node, NodeKind
from flows.history.spans import Span, source_spans
from flows.site import archive
from flows.site.layout import Site
from flows.warehouse.reader import open_published
from flows.wording import MARKS, constant_symbol, interval, number, unit_symbol
from models.errors import QueryError

__all__ = ["Node", "lineage", "lineage_text", "render"]

Row = Mapping[str, object]

_WELLS_FITTED = {
    "clear": "clear wells",
    "all": "all wells that are not void",
    "curves": "whole curves",
}
_FINDING_MARKS = {"hold": MARKS["held"], "void": MARKS["void"], "none": "·"}
_CONDITIONS = {
    "unchanged": "bytes unchanged",
    "changed": "BYTES CHANGED since they were written",
    "missing": "MISSING",
}


def lineage(site: Site, id_or_prefix: str) -> Node:
    """Trace a result back to the export's bytes.

    Parameters
    ----------
    id_or_prefix
        Id of a lot value, estimate, fit, series, grid, analysis, plate read, file or recipe, or its first
        digits if no other id begins with them.

    Raises
    ------
    QueryError
        If there is no such id, or several begin like this.
    SiteError
        If nothing is published yet.
    """
    with open_published(site) as connection:
        kind, full_id = find_id(connection, id_or_prefix)
        return _Tracer(site, connection).node(kind, full_id)


class _Tracer:
    """Builds the tree; what was shown once is not unfolded a second time."""

    def __init__(self, site: Site, connection: duckdb.DuckDBPyConnection) -> None:
        self.site, self.connection = site, connection
        self._shown: set[tuple[str, str]] = set()
        self._makers: dict[str, Callable[[str], Node]] = {
            "lot value": self.lot_value,
            "estimate": self.estimate,
            "fit": self.fit,
            "series": self.series,
            "grid": self.grid,
            "analysis": self.analysis,
            "plate read": self.plate_read,
            "file": lambda file_id: self.file("file", file_id),
            "recipe": self.recipe,
        }

    def node(self, kind: str, full_id: str) -> Node:
        """The tree below one thing."""
        return self._makers[kind](full_id)

    def lot_value(self, lot_value_id: str) -> Node:
        row = self._row("SELECT * FROM lot_values WHERE lot_value_id = ?", lot_value_id)
        sources = self._rows(
            "SELECT e.estimate_id FROM lot_value_sources s JOIN estimates e USING (estimate_id) "
            "JOIN analyses a USING (analysis_id) WHERE s.lot_value_id = ? "
            "ORDER BY a.computed_at, a.plate_read_id, e.series_id, e.grid_id, e.estimate_id",
            lot_value_id,
        )
        counts = f"{row['plate_read_count']} plate reads, {row['series_count']} series, {_standing(row)}"
        return Node(
            "lot value",
            lot_value_id,
            _constant(row),
            (f"lot {row['lot']} in assay {row['assay']}: {counts}",),
            _facts(row),
            (
                *(self.estimate(str(each["estimate_id"])) for each in sources),
                *self.pass_(str(row["pass_id"])),
            ),
        )

    def estimate(self, estimate_id: str) -> Node:
        row = self._row("SELECT * FROM estimates WHERE estimate_id = ?", estimate_id)
        return Node(
            "estimate",
            estimate_id,
            _constant(row),
            (f"lot {row['lot']} in assay {row['assay']}, {_wells_fitted(row)}",),
            _facts(row),
            (self.fit(str(row["fit_id"])),),
        )

    def fit(self, fit_id: str) -> Node:
        row = self._row("SELECT * FROM fits WHERE fit_id = ?", fit_id)
        what = "reads" if row["wells"] == "curves" else "rates"
        details = [f"{row['point_count']} {what}, degrees of freedom: {row['degrees_of_freedom']}"]
        details += [] if row["converged"] else ["the solver did not reach the optimum"]
        details += [] if row["trusted"] else [f"uncertainty not to be trusted: {row['distrust']}"]
        chosen = "chosen" if row["chosen"] else "not chosen"
        title = f"{str(row['law']).replace('_', ' ')}, {_wells_fitted(row)}, {chosen}"
        wells = str(row["wells"])
        if row["series_id"] is not None:
            children = (self.series(str(row["series_id"]), wells=wells),)
        else:
            children = (self.grid(str(row["grid_id"]), wells=wells),)
        return Node("fit", fit_id, title, tuple(details), _facts(row), children)

    def series(self, series_id: str, *, wells: str = "") -> Node:
        row = self._row("SELECT * FROM series WHERE series_id = ?", series_id)
        analysis_id = str(row["analysis_id"])
        details = [f"{row['well_count']} wells, {row['clear_well_count']} of them clear, {_standing(row)}"]
        if row["refusal"] is not None:
            details.append(f"not fitted: {row['refusal']}")
        if self._again("series", series_id):
            return Node("series", series_id, f"{_level(row)} (as above)", (), _facts(row))
        children = (
            *self._rates(series_id, analysis_id, wells),
            *self._findings(
                "f.analysis_id = ? AND (f.series_id = ? OR f.well IN "
                "(SELECT well FROM wells w WHERE w.analysis_id = f.analysis_id AND w.series_id = ?))",
                analysis_id,
                series_id,
                series_id,
            ),
            self.analysis(analysis_id),
        )
        return Node("series", series_id, _level(row), tuple(details), _facts(row), children)

    def grid(self, grid_id: str, *, wells: str = "") -> Node:
        row = self._row("SELECT * FROM grids WHERE grid_id = ?", grid_id)
        details = [f"{row['well_count']} wells, {row['clear_well_count']} of them clear, {_standing(row)}"]
        if row["refusal"] is not None:
            details.append(f"not fitted: {row['refusal']}")
        if self._again("grid", grid_id):
            return Node("grid", grid_id, f"{_level(row)} (as above)", (), _facts(row))
        # The series that it spans: every level of the modulator, and the wells without.
        spanned = self._rows(
            "SELECT s.series_id FROM series s JOIN grids g USING (analysis_id, lot, role) "
            "WHERE g.grid_id = ? AND s.enzyme_nm IS NOT DISTINCT FROM g.enzyme_nm "
            "AND s.enzyme_ng_per_ml IS NOT DISTINCT FROM g.enzyme_ng_per_ml "
            "AND (s.modulator = g.modulator OR coalesce(s.modulator_um, 0) = 0) "
            "ORDER BY s.modulator_um NULLS FIRST, s.series_id",
            grid_id,
        )
        children = tuple(self.series(str(each["series_id"]), wells=wells) for each in spanned)
        return Node(
            "grid", grid_id, f"{_level(row)} at all its levels", tuple(details), _facts(row), children
        )

    def analysis(self, analysis_id: str) -> Node:
        row = self._row("SELECT * FROM analyses WHERE analysis_id = ?", analysis_id)
        title = f"revision {row['revision']}, {_standing(row)}"
        if self._again("analysis", analysis_id):
            return Node("analysis", analysis_id, f"{title} (as above)", (), _facts(row))
        after = row["superseded_by"]
        details = (f"superseded by {str(after)[:12]}",) if after is not None else ()
        children = (
            *self._findings("f.analysis_id = ? AND f.subject = 'plate_read'", analysis_id),
            self.recipe(str(row["recipe_id"])),
            self.file("plate map", str(row["map_id"])),
            self.plate_read(str(row["plate_read_id"]), analysis_id),
            *self.pass_(str(row["pass_id"])),
        )
        return Node("analysis", analysis_id, title, details, _facts(row), children)

    def plate_read(self, plate_read_id: str, analysis_id: str | None = None) -> Node:
        row = self._row("SELECT * FROM plate_reads WHERE plate_read_id = ?", plate_read_id)
        title = f"plate {row['plate_id']}, number {row['place_in_export']} in its export"
        started = row["started_at"]
        details = (
            f"{row['well_count']} wells, {row['read_count']} reads each"
            + ("" if started is None else f", begun {_time(started)}"),
        )
        children = (
            *self._readings(plate_read_id, analysis_id),
            self.file("export", str(row["export_id"])),
        )
        return Node("plate read", plate_read_id, title, details, _facts(row), children)

    def recipe(self, recipe_id: str) -> Node:
        row = self._row(
            "SELECT recipe_id, assay, profile, code_version FROM recipes WHERE recipe_id = ?", recipe_id
        )
        title = f"assay {row['assay']}, profile {row['profile']}"
        return Node("recipe", recipe_id, title, (f"halfsat {row['code_version']}",), _facts(row))

    def file(self, kind: NodeKind, file_id: str) -> Node:
        row = self._row("SELECT * FROM files WHERE file_id = ?", file_id)
        if kind == "file" and row["kind"] in ("export", "plate_map"):
            kind = "export" if row["kind"] == "export" else "plate map"
        found = archive.condition(self.site, file_id)
        details = [
            f"{row['byte_count']} byte, received {_time(row['received_at'])}",
            *_digest_lines(file_id),
            _CONDITIONS[found],
        ]
        if row["reason"] is not None:
            details.append(f"in quarantine: {row['reason']}")
        facts = (*_facts(row), ("condition", found))
        return Node(kind, file_id, str(row["file_name"]), tuple(details), facts)

    def pass_(self, pass_id: str) -> tuple[Node, ...]:
        rows = self._rows("SELECT * FROM passes WHERE pass_id = ?", pass_id)
        return tuple(
            Node("pass", pass_id, f"begun {_time(row['started_at'])}", (), _facts(row)) for row in rows
        )

    def _rates(self, series_id: str, analysis_id: str, wells: str) -> list[Node]:
        rows = self._rows(
            "SELECT r.*, w.substrate_um, w.standing FROM wells w JOIN rates r USING (analysis_id, well) "
            "WHERE w.analysis_id = ? AND w.series_id = ? "
            "ORDER BY w.substrate_um, w.row_number, w.column_number",
            analysis_id,
            series_id,
        )
        source = self._row(
            "SELECT a.plate_read_id, r.recipe FROM analyses a JOIN recipes r USING (recipe_id) "
            "WHERE a.analysis_id = ?",
            analysis_id,
        )
        file = readings_file(self.connection, str(source["plate_read_id"]), analysis_id)
        spans = source_spans(self.site, file, str(source["recipe"]), rows) if file else {}
        return [_rate(row, spans.get(str(row["well"])), wells) for row in rows]

    def _findings(self, condition: str, *given: str) -> list[Node]:
        rows = self._rows(
            f"SELECT f.* FROM findings f WHERE {condition} ORDER BY f.subject, f.gate, f.well", *given
        )
        return [
            Node(
                "finding",
                str(row["finding_id"]),
                f"{_FINDING_MARKS[str(row['severity'])]} {row['gate']}"
                + ("" if row["well"] is None else f", well {row['well']}"),
                (str(row["sentence"]),),
                _facts(row),
            )
            for row in rows
        ]

    def _readings(self, plate_read_id: str, analysis_id: str | None) -> list[Node]:
        file = readings_file(self.connection, plate_read_id, analysis_id)
        if file is None:
            return []
        path, sha256 = file
        found = lake.condition(self.site, path, sha256)
        details = (*_digest_lines(sha256), _CONDITIONS[found])
        facts: tuple[tuple[str, Fact], ...] = (("path", path), ("sha256", sha256), ("condition", found))
        return [Node("readings", sha256, _short_path(path), details, facts)]

    def _again(self, kind: str, full_id: str) -> bool:
        seen = (kind, full_id) in self._shown
        self._shown.add((kind, full_id))
        return seen

    def _rows(self, sql: str, *given: str | None) -> list[Row]:
        table = self.connection.sql(sql, params=list(given)).to_arrow_table()
        return [] if table is None else list(table.to_pylist())

    def _row(self, sql: str, wanted: str) -> Row:
        rows = self._rows(sql, wanted)
        if not rows:
            raise QueryError(
                f"the warehouse has no row for {wanted[:12]}, though a result rests on it",
                remedy="check the site: halfsat verify",
            )
        return rows[0]


def _rate(row: Row, span: Span | None, wells: str) -> Node:
    substrate = row["substrate_um"] if row["mean_substrate_um"] is None else row["mean_substrate_um"]
    title = f"{MARKS[str(row['standing'])]} {row['well']}  {number(_real(substrate))} µM"
    value, error = _real(row["v0_um_per_s"]), _real(row["v0_se_um_per_s"])
    title += "  no rate" if value is None else f"  v {number(value, error)} ± {number(error, digits=2)} µM/s"
    if wells == "clear" and row["standing"] != "clear":
        title += "  (left out)"
    details = []
    if row["window_first_read"] is not None:
        details.append(
            f"reads {row['window_first_read']} to {row['window_last_read']}, "
            f"{number(_real(row['window_start_s']))} to {number(_real(row['window_end_s']))} s"
        )
    facts = _facts(row)
    if span is not None:
        details.append(span.text)
        facts = (*facts, *span.facts)
    return Node("rate", f"{row['analysis_id']}:{row['well']}", title, ("; ".join(details),), facts)


def _constant(row: Row) -> str:
    value, error = _real(row["value"]), _real(row["standard_error"])
    unit = unit_symbol(str(row["unit"]))
    low_high = interval(_real(row["low"]), _real(row["high"]), error)
    return (
        f"{constant_symbol(str(row['constant']))} {number(value, error)} {unit}".rstrip() + f" ({low_high})"
    )


def _level(row: Row) -> str:
    parts = [f"lot {row['lot']} ({row['role']})"]
    if row["enzyme_nm"] is not None:
        parts.append(f"enzyme {number(_real(row['enzyme_nm']))} nM")
    if row["enzyme_ng_per_ml"] is not None:
        parts.append(f"enzyme {number(_real(row['enzyme_ng_per_ml']))} ng/mL")
    if row["modulator"] is not None:
        level = _real(row.get("modulator_um"))
        parts.append(str(row["modulator"]) + ("" if level is None else f" {number(level)} µM"))
    return ", ".join(parts)


def _wells_fitted(row: Row) -> str:
    return _WELLS_FITTED[str(row["wells"])]


def _standing(row: Row) -> str:
    return f"{MARKS[str(row['standing'])]} {row['standing']}"


def _short_path(path: str) -> str:
    return re.sub(r"([0-9a-f]{12})[0-9a-f]{20,}", r"\1…", path)


def _digest_lines(sha256: str) -> tuple[str, str]:
    """A SHA-256 in two halves, which fit where the tree is deep."""
    return f"SHA-256 {sha256[:32]}", f"        {sha256[32:]}"


def _time(value: object) -> str:
    return f"{value:%Y-%m-%d %H:%M:%S} UTC" if value is not None else "at an unknown time"


def _real(value: object) -> float | None:
    return float(value) if isinstance(value, (int, float)) else None


def _facts(row: Row) -> tuple[tuple[str, Fact], ...]:
    return tuple(
        (name, value if value is None or isinstance(value, (str, int, float)) else str(value))
        for name, value in row.items()
    )
