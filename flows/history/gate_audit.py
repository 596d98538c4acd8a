"""What the gates did, gathered: suites and results from their documents, findings from the warehouse.

Reads the published warehouse and the documents below the lake, and checks each document against its id;
draws nothing and judges nothing.
"""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any

import duckdb
import pandas as pd

from checks.assess import NOT_ASSESSED
from checks.gates import GATES
from flows.frames import rows
from flows.history.gate_record import (
    AuditRecord,
    DocumentRecord,
    GateRecord,
    PassTimes,
    PlateRecord,
    RecipeRecord,
    RuleRun,
    Scope,
    SettingRecord,
    SuiteRun,
    Told,
    Unassessed,
    rule_text,
    value_text,
)
from flows.site.configuration import load_configuration
from flows.site.layout import Site
from flows.stages.gate_runs import BATCH, NO_RECIPE, KeptRun, gates_off, read_run
from flows.warehouse.reader import open_published
from models.errors import ConfigurationError, QueryError
from models.identity import content_id

STRUCTURE = "structure"
_SHORTEST_PREFIX = 4
_STANDINGS = {"hold": "held", "void": "void"}
_LIST_THEM = 'list them: halfsat history "SELECT pass_id, started_at FROM passes ORDER BY 2"'

_ANALYSES = """
    SELECT a.*, p.plate_id, f.pass_id AS staged_in, r.profile, r.code_version, r.recipe
    FROM analyses a
    JOIN plate_reads p USING (plate_read_id)
    LEFT JOIN files f ON f.file_id = p.export_id
    JOIN recipes r USING (recipe_id)
    WHERE {condition}
    ORDER BY a.assay, a.recipe_id, p.plate_id, p.place_in_export, a.revision
"""
_FINDINGS = """
    SELECT f.*, coalesce(f.lot, s.lot) AS lot_told, s.modulator, s.modulator_um, p.plate_id
    FROM findings f
    JOIN analyses a USING (analysis_id)
    JOIN plate_reads p USING (plate_read_id)
    LEFT JOIN series s ON s.series_id = f.series_id
    LEFT JOIN wells w ON w.analysis_id = f.analysis_id AND w.well = f.well
    WHERE f.analysis_id IN (SELECT unnest($ids))
    ORDER BY p.plate_id, p.place_in_export, w.row_number, w.column_number, lot_told, f.finding_id
"""


def audit_record(site: Site, scope: Scope | None = None) -> AuditRecord:
    """Gather what the gates did.

    Parameters
    ----------
    site
        The site, its warehouse published.
    scope
        A pass, an analysis (both by id or its first digits) or a plate's current results.

    Raises
    ------
    QueryError
        If there is no such pass, analysis or plate, or several ids begin like this.
    SiteError
        If nothing is published yet.
    """
    with open_published(site) as connection:
        analyses, pass_ids, about = _in_scope(connection, scope or Scope())
        staged = {str(each) for each in analyses["staged_in"].dropna()}
        runs = _kept_runs(site, connection, analyses, pass_ids, staged | pass_ids)
        ids = list(analyses["analysis_id"])
        findings = connection.execute(_FINDINGS, {"ids": ids}).df()
        times = connection.execute(
            "SELECT * FROM passes WHERE pass_id IN (SELECT unnest($ids)) ORDER BY started_at",
            {"ids": sorted(staged | pass_ids)},
        ).df()
    recipes = tuple(
        _recipe(part, [run for run in runs if run.recipe_id == recipe_id], findings)
        for recipe_id, part in analyses.groupby("recipe_id", sort=False)
    )
    structure = [run for run in runs if run.suite == STRUCTURE and run.kept.document is not None]
    whole_pass = scope is None or (scope.analysis_id is None and scope.plate_id is None)
    plate_reads = None if whole_pass else set(analyses["plate_read_id"])
    return AuditRecord(
        site_name=_site_name(site),
        about=about,
        passes=tuple(_times(row) for row in rows(times)),
        recipes=recipes,
        structure=_rules(structure, plate_reads),
        documents=tuple(run.record for run in runs),
        partial=not whole_pass,
    )


@dataclass(frozen=True)
class _Run:
    gate_run_id: str
    recipe_id: str
    suite: str
    record: DocumentRecord
    kept: KeptRun

    @property
    def expectations(self) -> list[tuple[Mapping[str, Any], Mapping[str, Any]]]:
        """Each expectation of the suite with its result."""
        document = self.kept.document
        if document is None:
            return []
        return list(zip(document["suite"]["expectations"], document["result"]["results"], strict=True))


def _in_scope(connection: duckdb.DuckDBPyConnection, scope: Scope) -> tuple[pd.DataFrame, set[str], str]:
    """Analyses asked about, the passes they were made in, and what they are in words."""

    def ask(condition: str, **given: object) -> pd.DataFrame:
        return connection.execute(_ANALYSES.format(condition=condition), given).df()

    if scope.analysis_id is not None:
        full = _full_id(connection, "analyses", "analysis_id", scope.analysis_id)
        analyses = ask("a.analysis_id = $id", id=full)
        about = f"plate {analyses['plate_id'].iloc[0]}, analysis {full[:12]}"
    elif scope.plate_id is not None:
        analyses = ask("p.plate_id = $plate AND a.superseded_by IS NULL", plate=scope.plate_id)
        if analyses.empty:
            raise QueryError(
                f"no plate '{scope.plate_id}' has been analysed",
                remedy='list them: halfsat history "SELECT plate_id FROM current_analyses"',
            )
        about = f"plate {scope.plate_id}, current results"
    else:
        wanted = scope.pass_id
        if wanted is None:
            found = connection.execute(
                "SELECT pass_id FROM gate_runs JOIN passes USING (pass_id) ORDER BY started_at DESC LIMIT 1"
            ).fetchall()
            if not found:
                raise QueryError(
                    "the gates have not run on anything yet", remedy="run a pass: halfsat overnight"
                )
            wanted = str(found[0][0])
        full = _full_id(connection, "passes", "pass_id", wanted)
        return ask("a.pass_id = $id", id=full), {full}, f"pass {full[:12]}"
    return analyses, {str(each) for each in analyses["pass_id"]}, about


def _full_id(connection: duckdb.DuckDBPyConnection, table: str, column: str, prefix: str) -> str:
    wanted = prefix.strip()
    what = column.removesuffix("_id")
    if len(wanted) < _SHORTEST_PREFIX:
        raise QueryError(
            f"'{prefix}' is too short for an id", remedy=f"type {_SHORTEST_PREFIX} digits or more"
        )
    found = connection.execute(
        f"SELECT {column} FROM {table} WHERE starts_with({column}, $prefix) ORDER BY 1 LIMIT 2",
        {"prefix": wanted},
    ).fetchall()
    if not found:
        remedy = (
            _LIST_THEM if what == "pass" else 'list them: halfsat history "SELECT * FROM current_analyses"'
        )
        raise QueryError(f"there is no {what} '{prefix}'", remedy=remedy)
    if len(found) > 1:
        raise QueryError(f"several {what} ids begin with '{prefix}'", remedy="type more digits")
    return str(found[0][0])


def _kept_runs(
    site: Site,
    connection: duckdb.DuckDBPyConnection,
    analyses: pd.DataFrame,
    pass_ids: set[str],
    staged: set[str],
) -> list[_Run]:
    """Runs of the gates on these analyses, and of the structure suite on what came in with them."""
    found = connection.execute(
        "SELECT * FROM gate_runs WHERE (pass_id IN (SELECT unnest($passes)) AND recipe_id IN "
        "(SELECT unnest($recipes))) OR (suite = $structure AND pass_id IN (SELECT unnest($staged)))",
        {
            "passes": sorted(pass_ids),
            "recipes": sorted(set(analyses["recipe_id"])),
            "staged": sorted(staged),
            "structure": STRUCTURE,
        },
    ).df()
    wanted = set(analyses["analysis_id"])
    runs = []
    for row in rows(found):
        kept = read_run(site, row.gate_run_id, row.suite, row.recipe_id, row.file)
        batch = (kept.document or {}).get(BATCH)
        if row.suite != STRUCTURE and batch and not wanted & set(batch):
            continue
        record = DocumentRecord(
            row.file, row.suite, row.recipe_id, int(row.row_count), kept.sha256, kept.condition
        )
        runs.append(_Run(row.gate_run_id, row.recipe_id, row.suite, record, kept))
    order = {"structure": 0, "wells": 1, "fit": 2, "series": 3}
    return sorted(
        runs,
        key=lambda run: (
            run.recipe_id != NO_RECIPE,
            run.recipe_id,
            order[run.suite.split(".")[0]],
            run.suite,
            run.gate_run_id,
        ),
    )


def _recipe(analyses: pd.DataFrame, runs: Sequence[_Run], findings: pd.DataFrame) -> RecipeRecord:
    first = analyses.iloc[0]
    limits: dict[str, dict[str, Any]] = json.loads(first["recipe"])["limits"]
    off = set(gates_off(limits))
    for run in runs:
        off |= set(gates_off((run.kept.document or {}).get("limits", {})))
    mine = findings[findings["analysis_id"].isin(analyses["analysis_id"])]
    wanted = set(analyses["analysis_id"])
    names = [name for name in GATES if name in limits] + [name for name in limits if name not in GATES]
    return RecipeRecord(
        recipe_id=str(first["recipe_id"]),
        recipe_unchanged=content_id(str(first["recipe"]).encode()) == first["recipe_id"],
        assay=str(first["assay"]),
        profile=str(first["profile"]),
        code_version=str(first["code_version"]),
        plates=tuple(
            PlateRecord(
                row.plate_id,
                row.analysis_id,
                int(row.revision),
                row.standing,
                row.computed_at.to_pydatetime(),
                isinstance(row.superseded_by, str),
            )
            for row in rows(analyses)
        ),
        gates=tuple(
            _gate(name, name not in off, limits[name], runs, mine[mine["gate"] == name], wanted)
            for name in names
        ),
    )


def _gate(
    name: str,
    on: bool,
    settings: Mapping[str, Any],
    runs: Sequence[_Run],
    findings: pd.DataFrame,
    wanted: set[str],
) -> GateRecord:
    known = GATES.get(name)
    breaches = findings[findings["outcome"] == "breach"]
    untold = findings[findings["outcome"] == NOT_ASSESSED]
    suites = dict.fromkeys(run.suite for run in runs)
    return GateRecord(
        name=name,
        purpose=known.purpose if known is not None else "",
        on=on,
        runs=tuple(
            made
            for suite in suites
            if (made := _suite_run(suite, [run for run in runs if run.suite == suite], wanted, name))
        ),
        told=tuple(
            Told(_place(row), row.plate_id, _STANDINGS.get(row.severity, "none"), row.sentence)
            for row in rows(breaches)
        ),
        unassessed=tuple(
            Unassessed(str(reason), tuple(_place(row) for row in rows(part)))
            for reason, part in untold.groupby("sentence", sort=False)
        ),
        settings=tuple(_setting(name, each, value) for each, value in settings.items() if each != "on"),
    )


def _suite_run(suite: str, runs: Sequence[_Run], wanted: set[str], gate: str) -> SuiteRun | None:
    """What one gate did in the runs of one suite, or None where it stood in none of them."""
    rules = _rules(runs, wanted, gate)
    if not rules:
        return None
    state = [rule for rule in rules if rule.name == NOT_ASSESSED]
    judged = tuple(rule for rule in rules if rule.name != NOT_ASSESSED)
    return SuiteRun(
        suite, sum(rule.row_count for rule in state), sum(rule.flagged_count for rule in state), judged
    )


def _setting(gate: str, name: str, value: Any) -> SettingRecord:
    known = {each.name: each for each in GATES[gate].settings} if gate in GATES else {}
    if name not in known:
        return SettingRecord(name, value_text(value), "", None)
    return SettingRecord(name, value_text(value), known[name].unit, value_text(known[name].default))


def _rules(runs: Sequence[_Run], wanted: set[str] | None, gate: str | None = None) -> tuple[RuleRun, ...]:
    """Rules of one gate (or of the structure suite) summed over runs, only the flagged ids wanted counted."""
    totals: dict[tuple[str, str, str], list[int]] = {}
    one_column: dict[tuple[str, str, str], bool] = {}
    for run in runs:
        for expectation, result in run.expectations:
            meta = expectation["meta"]
            if meta.get("gate") != gate:
                continue
            key = (str(meta["rule"]), rule_text(expectation), str(meta.get("severity", "void")))
            counts = totals.setdefault(key, [0, 0, 0])
            one_column[key] = "column" in expectation["kwargs"]
            element_count = int(result["element_count"])
            counts[0] += element_count
            counts[1] += element_count - int(result["missing_count"])
            counts[2] += _flagged_count(result["flagged"], wanted)
    return tuple(
        RuleRun(*key, rows_run, with_value if one_column[key] else None, flagged)
        for key, (rows_run, with_value, flagged) in totals.items()
    )


def _flagged_count(flagged: Any, wanted: set[str] | None) -> int:
    if isinstance(flagged, Mapping):
        return sum(len(each) for key, each in flagged.items() if wanted is None or key in wanted)
    return sum(1 for each in flagged if wanted is None or each in wanted)


def _place(row: Any) -> str:
    parts = [str(row.plate_id)]
    if isinstance(row.well, str):
        parts.append(f"well {row.well}")
    elif isinstance(row.lot_told, str):
        parts.append(f"lot {row.lot_told}")
        if isinstance(row.modulator, str):
            parts.append(f"{row.modulator} {row.modulator_um:g} µM")
    return ", ".join(parts)


def _times(row: Any) -> PassTimes:
    def at(value: Any) -> datetime | None:
        return None if pd.isna(value) else value.to_pydatetime()

    return PassTimes(str(row.pass_id), at(row.started_at), at(row.finished_at), row.code_version)


def _site_name(site: Site) -> str:
    """The site's name; what ran is shown even where the configuration of today cannot be read."""
    try:
        return load_configuration(site.config).settings.name
    except ConfigurationError:
        return site.root.name
