"""From findings to standings: the rules as tables, and the few lines that apply them.

`clear` stands, `held` waits for a person, `void` cannot be used; the worst that applies counts.
Decisions of reviewers are no business of this module.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
import pandas as pd

from checks.gates import GATES

Standing = Literal["clear", "held", "void"]
STANDINGS: tuple[Standing, ...] = ("clear", "held", "void")
ANY = "any"
SEVERITIES = ("none", "hold", "void")


@dataclass(frozen=True)
class StandingRule:
    """A finding on `subject` with this outcome, severity and gate (or `ANY`) gives this standing."""

    subject: str
    outcome: str
    severity: str
    gate: str
    standing: Standing
    why: str


STANDING_RULES: tuple[StandingRule, ...] = (
    StandingRule("well", "breach", "void", ANY, "void", "there is no rate to judge"),
    StandingRule("well", "breach", "hold", ANY, "held", "a person decides"),
    StandingRule("series", "breach", "void", ANY, "void", "there is nothing to fit"),
    StandingRule("series", "breach", "hold", ANY, "held", "a person decides"),
    StandingRule("lot", "breach", "void", ANY, "void", "there is nothing of the lot to fit"),
    StandingRule("lot", "breach", "hold", ANY, "held", "a person decides"),
    StandingRule("plate_read", "breach", "void", ANY, "void", "the whole read is no data"),
    StandingRule("plate_read", "breach", "hold", ANY, "held", "a person decides"),
    *(
        StandingRule(
            subject, "not_assessed", "none", gate.name, "held", "what nothing vouches for is not clear"
        )
        for gate in GATES.values()
        if gate.unassessed == "held"
        for subject in gate.subjects
    ),
)
"""What is not named here leaves a subject clear, such as blanks that a plate does not have."""


@dataclass(frozen=True)
class Consequence:
    """A finding of `gate` with `outcome` that only follows from a cause on the same subject."""

    cause: str
    cause_severity: str
    gate: str
    outcome: str
    why: str


CONSEQUENCES: tuple[Consequence, ...] = (
    Consequence("detector_range", "void", ANY, ANY, "without readable signal there is nothing else to say"),
    Consequence("read_schedule", "void", ANY, ANY, "without reads there is nothing else to say"),
    Consequence(
        "detector_range", "hold", "initial_slope_nonlinear", ANY, "a curve bends where the detector ends"
    ),
    Consequence("substrate_depletion", "hold", "initial_slope_nonlinear", ANY, "the bend is the substrate's"),
    Consequence(
        "substrate_depletion", "none", "initial_slope_nonlinear", "not_assessed", "no rate is told once"
    ),
    Consequence("substrate_depletion", "none", "blank_drift", "not_assessed", "no rate is told once"),
    Consequence("initial_slope_nonlinear", "none", "blank_drift", "not_assessed", "no rate is told once"),
    Consequence("substrate_depletion", "none", "below_detection", "not_assessed", "no rate is told once"),
    Consequence("blank_drift", "none", "below_detection", "not_assessed", "no blank is told once"),
    *(
        Consequence("saturation_not_reached", "none", gate, "not_assessed", "no fit is told once")
        for gate in (
            "low_end_not_covered",
            "replicate_scatter",
            "fit_misfit",
            "initial_vs_full_curve",
            "steady_state_valid",
        )
    ),
)
"""In order: a finding that is itself a consequence is not taken for a cause."""

MOST_WELLS = 0.5
"""Share of wells not clear beyond which a series waits: what is left may no longer stand for the lot."""


def without_consequences(findings: pd.DataFrame) -> pd.DataFrame:
    """Findings without those that only follow from another on the same subject.

    Parameters
    ----------
    findings
        FINDINGS columns.

    Returns
    -------
    pandas.DataFrame
        The rows that remain, in their order, numbered anew. No standing changes by what is left out.
    """
    kept = np.ones(len(findings), dtype=bool)
    subject = pd.Series(_subject_code(findings), index=findings.index)
    for rule in CONSEQUENCES:
        cause = kept & (findings["gate"] == rule.cause) & (findings["severity"] == rule.cause_severity)
        struck = subject.isin(subject[cause]) & ~cause & (findings["gate"] != rule.cause)
        # What is worse than the cause cannot follow from it.
        struck &= findings["severity"].isin(SEVERITIES[: SEVERITIES.index(rule.cause_severity) + 1])
        if rule.gate != ANY:
            struck &= findings["gate"] == rule.gate
        if rule.outcome != ANY:
            struck &= findings["outcome"] == rule.outcome
        kept &= ~struck.to_numpy()
    return findings[kept].reset_index(drop=True)


def well_standings(wells: pd.DataFrame, findings: pd.DataFrame) -> pd.Series:
    """Standing of each well.

    Parameters
    ----------
    wells
        analysis_id, well.
    findings
        FINDINGS columns.

    Returns
    -------
    pandas.Series
        Standings on the index of `wells`.
    """
    return _worst_by(wells, findings, "well", ["analysis_id", "well"])


def series_standings(
    series: pd.DataFrame, findings: pd.DataFrame, wells: pd.DataFrame | None = None
) -> pd.Series:
    """Standing of each series.

    Held where a finding on the series, its lot or its plate read holds it, where it was refused, or where
    more than `MOST_WELLS` of its wells are not clear. Void where a finding voids it, or all its wells are
    void.

    Parameters
    ----------
    series
        series_id, analysis_id, lot, well_count, clear_well_count, refusal.
    findings
        FINDINGS columns, those on plate reads included.
    wells
        series_id, standing; without it no series is found void for its wells.

    Returns
    -------
    pandas.Series
        Standings on the index of `series`.
    """
    own = _worst_by(series, findings, "series", ["analysis_id", "series_id"])
    # A finding on the lot or the plate read holds for every rate of it, so for what is fitted to them.
    lot = _worst_by(series, findings, "lot", ["analysis_id", "lot"])
    plate = _worst_by(series, findings, "plate_read", ["analysis_id"])
    lost = series["well_count"].to_numpy(dtype=float) - series["clear_well_count"].to_numpy(dtype=float)
    most_lost = pd.Series(lost > MOST_WELLS * series["well_count"].to_numpy(dtype=float), index=series.index)
    refused = series["refusal"].notna()
    waits = pd.Series("clear", index=series.index, dtype=object).mask(most_lost | refused, "held")
    parts = [own, lot, plate, waits]
    if wells is not None:
        member = wells[wells["series_id"].notna()]
        all_void = (member["standing"] == "void").groupby(member["series_id"]).all()
        void = series["series_id"].map(all_void).fillna(False).astype(bool)
        parts.append(pd.Series("clear", index=series.index, dtype=object).mask(void, "void"))
    return worst_standing(*parts)


def plate_read_standing(wells: pd.DataFrame, series: pd.DataFrame, findings: pd.DataFrame) -> pd.Series:
    """Standing of each plate read.

    Held where a finding on it holds it, or anything on it (a well, a series) waits for a person. Void where a
    finding voids it, or all wells of its series are void.

    Parameters
    ----------
    wells
        analysis_id, series_id, standing.
    series
        analysis_id, standing.
    findings
        FINDINGS columns.

    Returns
    -------
    pandas.Series
        Standings on an index of analysis ids.
    """
    plates = pd.DataFrame({"analysis_id": list(dict.fromkeys(wells["analysis_id"]))})
    own = _worst_by(plates, findings, "plate_read", ["analysis_id"])
    waiting = set(wells.loc[wells["standing"] == "held", "analysis_id"])
    waiting |= set(series.loc[series["standing"] == "held", "analysis_id"])
    member = wells[wells["series_id"].notna()]
    all_void = (member["standing"] == "void").groupby(member["analysis_id"]).all()
    void = plates["analysis_id"].map(all_void).fillna(False).astype(bool)
    clear = pd.Series("clear", index=plates.index, dtype=object)
    waits = clear.mask(plates["analysis_id"].isin(waiting), "held")
    worst = worst_standing(own, waits, clear.mask(void, "void"))
    return pd.Series(worst.to_numpy(), index=plates["analysis_id"].to_numpy(), dtype=object)


def _worst_by(rows: pd.DataFrame, findings: pd.DataFrame, subject: str, keys: Sequence[str]) -> pd.Series:
    """The worst standing that findings on this kind of subject give to each row."""
    rank = np.zeros(len(findings), dtype=int)
    for rule in STANDING_RULES:
        hit = (findings["subject"] == rule.subject) & (findings["outcome"] == rule.outcome)
        hit &= findings["severity"] == rule.severity
        if rule.gate != ANY:
            hit &= findings["gate"] == rule.gate
        rank = np.where(hit, np.maximum(rank, STANDINGS.index(rule.standing)), rank)
    of_subject = (findings["subject"] == subject).to_numpy()
    index = _key_index(findings.loc[of_subject, list(keys)])
    worst = pd.Series(rank[of_subject], index=index).groupby(level=list(range(index.nlevels))).max()
    found = worst.reindex(_key_index(rows[list(keys)])).fillna(0).to_numpy(dtype=int)
    return pd.Series(np.array(STANDINGS, dtype=object)[found], index=rows.index, dtype=object)


def worst_standing(*parts: pd.Series) -> pd.Series:
    """The worst of several standings of the same rows."""
    ranks = np.stack([part.map(STANDINGS.index).to_numpy(dtype=int) for part in parts]).max(axis=0)
    return pd.Series(np.array(STANDINGS, dtype=object)[ranks], index=parts[0].index, dtype=object)


def _key_index(frame: pd.DataFrame) -> pd.Index:
    columns = [frame[name].astype(object) for name in frame.columns]
    return pd.Index(columns[0]) if len(columns) == 1 else pd.MultiIndex.from_arrays(columns)


def _subject_code(findings: pd.DataFrame) -> np.ndarray:
    keys = findings[["subject", "analysis_id", "well", "series_id", "lot"]].astype(object)
    return keys.groupby(list(keys.columns), dropna=False, sort=False).ngroup().to_numpy()
