"""Holds a batch against its gates: metrics tables, one suite a recipe and subject, findings of flagged rows.

The expectations decide: a finding exists where Great Expectations flags a row, and nowhere else. Causes
and consequences are sorted out in `checks.verdicts`.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pandas as pd

from checks.gates import GATES
from checks.gates.gate import ID_COLUMNS, SUBJECT_KEYS, Gate, GateInput, Limits, Phase, Subject
from checks.validation import Validation, validate
from models.errors import UnknownName
from models.identity import Json, result_id
from models.tables import FINDINGS

NOT_ASSESSED = "not_assessed"
UNKNOWN_VALUE = "what the gate measures is not known here"


@dataclass(frozen=True)
class GateRun:
    """One suite over the metrics of one recipe's subjects.

    Attributes
    ----------
    suite
        Phase and subject, such as `wells.plate_read`.
    document
        `suite`, `result` (counts and ids of flagged rows) and `limits`, ready for JSON.
    """

    suite: str
    recipe_id: str
    expectation_count: int
    row_count: int
    success: bool
    document: dict[str, Json]


@dataclass(frozen=True)
class Assessment:
    """Findings (FINDINGS columns) of a batch, the runs behind them, and what each gate measured."""

    findings: pd.DataFrame
    runs: list[GateRun]
    metrics: Mapping[str, pd.DataFrame] = field(default_factory=dict)


def assess(
    phase: Phase, data: GateInput, limits: Mapping[str, Limits], gates: Mapping[str, Gate] = GATES
) -> Assessment:
    """Hold a batch against the gates of one phase.

    Parameters
    ----------
    phase
        `wells` before the fit, `fit` after a first fit, `series` after the last; for these two, `data` must
        hold series, estimates, fits and points.
    data
        Frames of the batch.
    limits
        Limits in force, by recipe, as `checks.gates.resolve_limits` gives them.
    gates
        The gates to apply, by name.

    Returns
    -------
    Assessment
        One finding at most for each gate and subject, ordered by recipe, subject, gate and row.

    Raises
    ------
    UnknownName
        If an analysis has a recipe without limits.
    ExpectationFailed
        If an expectation could not be evaluated.
    """
    recipes = list(dict.fromkeys(data.analyses["recipe_id"]))
    if missing := [recipe for recipe in recipes if recipe not in limits]:
        raise UnknownName(
            f"no gate limits for recipe {missing[0]}", remedy="resolve them with resolve_limits"
        )
    applied = [gate for gate in gates.values() if gate.phase == phase]
    # What is measured does not depend on limits: once for the batch, whatever its recipes.
    metrics = {
        gate.name: gate.metrics(data)
        for gate in applied
        if any(limits[recipe][gate.name]["on"] for recipe in recipes)
    }
    findings: list[dict[str, Any]] = []
    runs: list[GateRun] = []
    for recipe_id in recipes:
        analyses = set(data.analyses.loc[data.analyses["recipe_id"] == recipe_id, "analysis_id"])
        for subject in SUBJECT_KEYS:
            on = [gate for gate in applied if subject in gate.subjects and limits[recipe_id][gate.name]["on"]]
            table = metrics_table(on, metrics, subject, analyses)
            if table.empty:
                continue
            outcome = _run(on, table, phase, subject, limits[recipe_id])
            findings += _findings(on, outcome, table, subject, limits[recipe_id])
            runs.append(_gate_run(outcome, f"{phase}.{subject}", recipe_id, len(table), limits[recipe_id]))
    frame = pd.DataFrame(findings, columns=FINDINGS.column_names) if findings else FINDINGS.empty()
    return Assessment(frame, runs, metrics)


def metrics_table(
    gates: Sequence[Gate], metrics: Mapping[str, pd.DataFrame], subject: Subject, analyses: set[str]
) -> pd.DataFrame:
    """One row a subject of these analyses, with the metrics of every gate side by side.

    Each gate adds its columns as `gate__metric`, and `gate__state`: `assessed`, `not assessed` (then
    `gate__reason` says why) or `not applicable`, where the gate has no row for the subject.
    """
    keys = list(SUBJECT_KEYS[subject])
    parts = []
    for gate in gates:
        rows = metrics[gate.name]
        rows = rows[(rows["subject"] == subject) & rows["analysis_id"].isin(analyses)].copy()
        unknown = rows[list(gate.needs[subject])].isna().any(axis=1)
        rows["reason"] = rows["reason"].where(rows["reason"].notna() | ~unknown, UNKNOWN_VALUE)
        rows["state"] = np.where(rows["reason"].notna(), "not assessed", "assessed")
        measured = [name for name in rows.columns if name not in ID_COLUMNS]
        indexed = rows.set_index(keys)[measured].add_prefix(f"{gate.name}__")
        if not indexed.index.is_unique:
            raise ValueError(f"gate {gate.name} measures a {subject} twice")
        parts.append(indexed)
    if not parts:
        return pd.DataFrame(columns=keys)
    index = parts[0].index
    for part in parts[1:]:
        index = index.append(part.index.difference(index, sort=False))
    table = pd.concat([part.reindex(index) for part in parts], axis=1)
    for gate in gates:
        state = f"{gate.name}__state"
        table[state] = table[state].astype(object).where(table[state].notna(), "not applicable")
    return table.reset_index(names=keys)


def _run(
    gates: Sequence[Gate], table: pd.DataFrame, phase: Phase, subject: Subject, limits: Limits
) -> Validation:
    from checks.expectations import assessed

    expectations = [
        expectation
        for gate in gates
        for expectation in (*gate.expectations(limits, subject), assessed(gate.name))
    ]
    return validate(f"{phase}.{subject}", expectations, table, SUBJECT_KEYS[subject])


def _gate_run(outcome: Validation, suite: str, recipe_id: str, row_count: int, limits: Limits) -> GateRun:
    document: dict[str, Json] = {
        **outcome.document,
        "recipe_id": recipe_id,
        "limits": {gate: dict(settings) for gate, settings in limits.items()},
    }
    return GateRun(suite, recipe_id, len(outcome.flagged), row_count, outcome.success, document)


def _findings(
    gates: Sequence[Gate], outcome: Validation, table: pd.DataFrame, subject: Subject, limits: Limits
) -> list[dict[str, Any]]:
    """Findings from flagged rows; of several rules of a gate the first (the worst) that flags a row tells."""
    findings = []
    for gate in gates:
        told: set[int] = set()
        prefix = f"{gate.name}__"
        own = [name for name in table.columns if name.startswith(prefix)]
        for entry in (entry for entry in outcome.flagged if entry.meta["gate"] == gate.name):
            positions = [int(row) for row in entry.rows if int(row) not in told]
            told.update(positions)
            chosen = table.iloc[positions][[*SUBJECT_KEYS[subject], *own]]
            for values in chosen.to_dict("records"):
                row = {str(key).removeprefix(prefix): value for key, value in values.items()}
                row |= {"subject": subject, "rule": entry.meta["rule"]}
                findings.append(_finding(gate, row, entry.meta, limits))
    return findings


def _finding(gate: Gate, row: dict[str, Any], meta: Mapping[str, str], limits: Limits) -> dict[str, Any]:
    well, series_id, lot = row.get("well"), row.get("series_id"), row.get("lot")
    finding: dict[str, Any] = {
        "finding_id": result_id(row["analysis_id"], gate.name, row["subject"], well, series_id, lot),
        "analysis_id": row["analysis_id"],
        "gate": gate.name,
        "subject": row["subject"],
        "well": well,
        "series_id": series_id,
        "lot": lot,
        "severity": meta["severity"],
    }
    if meta["rule"] == NOT_ASSESSED:
        sentence = f"Not assessed: {row['reason']}."
        return finding | {
            "outcome": NOT_ASSESSED,
            "measured": None,
            "limit_value": None,
            "unit": "1",
            "sentence": sentence,
        }
    measure = gate.measure(row, limits)
    return finding | {
        "outcome": "breach",
        "measured": measure.value,
        "limit_value": measure.limit,
        "unit": measure.unit,
        "sentence": gate.sentence(row, limits),
    }
