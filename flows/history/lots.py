"""A lot as it stands now: its values, the decision against its specification, its reference, its charts.

Reads the published warehouse and the site's specifications; computes nothing that models.statistics does not.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import replace
from difflib import get_close_matches
from typing import Any

import duckdb
import numpy as np

from flows.frames import rows
from flows.history.lot_charts import lot_charts
from flows.history.lot_record import (
    ConstantRecord,
    LotRecord,
    PlateReadOfLot,
    SourceValue,
    UsedSpecification,
)
from flows.site.configuration import Configuration, load_configuration
from flows.site.layout import Site
from flows.warehouse.reader import open_published
from flows.wording import constant_symbol
from models.calibration.shared_error import without_shared_error
from models.errors import QueryError
from models.identity import digest, known, known_text, result_id
from models.records.lot_specification import (
    ConstantSpecification,
    DecisionRule,
    LotSpecification,
)
from models.statistics.equivalence import compare_with_reference
from models.statistics.lot_decisions import Rule, decide_lot, degrees_of_lot, judge_constant

Sources = Mapping[str, Sequence[SourceValue]]

_ORDER = ("km", "k_half", "hill_n", "kcat", "kcat_per_km", "kcat_per_k_half", "specific_activity")
_VALUES = "SELECT * FROM lot_latest WHERE lot = $lot AND assay = $assay"
_SOURCES = """
    SELECT s.lot_value_id, e.estimate_id, e.fit_id, e.law, e.series_id, e.analysis_id, e.value,
           e.standard_error, e.low, e.high, e.assay_relative_error,
           coalesce(r.standing, g.standing) AS series_standing,
           c.plate_read_id, c.plate_id, c.measured_at
    FROM lot_value_sources s
    JOIN estimates e USING (estimate_id)
    JOIN current_analyses c ON c.analysis_id = e.analysis_id
    LEFT JOIN series r ON r.series_id = e.series_id
    LEFT JOIN grids g ON g.grid_id = e.grid_id
    WHERE s.lot_value_id IN (SELECT unnest($ids)) AND e.value IS NOT NULL
    ORDER BY c.measured_at, c.plate_read_id, e.series_id, e.estimate_id
"""
_PLATE_READS = """
    SELECT c.plate_read_id, c.plate_id, c.measured_at, c.analysis_id, c.revision, c.standing,
           count(*) AS series_count, count(*) FILTER (s.standing <> 'clear') AS held_series_count
    FROM series s
    JOIN current_analyses c USING (analysis_id)
    WHERE s.lot = $lot AND c.assay = $assay
    GROUP BY ALL
    ORDER BY c.measured_at, c.plate_read_id
"""


def lot_records(
    site: Site, lot: str, assay: str | None = None, specification: LotSpecification | None = None
) -> tuple[LotRecord, ...]:
    """A lot in each assay that it was measured in.

    Parameters
    ----------
    lot
        Its name, as plate maps write it.
    assay
        One assay only.
    specification
        Hold the lot against this one, such as an earlier version, in place of the site's own.

    Raises
    ------
    QueryError
        If there is no such lot, or not in that assay; the nearest names are told.
    ConfigurationError
        If the site's configuration cannot be read, or several specifications are for the lot.
    SiteError
        If nothing is published yet.
    """
    configuration = load_configuration(site.config)
    with open_published(site) as connection:
        assays = _assays_of(connection, lot, assay)
        return tuple(_record(connection, configuration, lot, each, specification) for each in assays)


def _assays_of(connection: duckdb.DuckDBPyConnection, lot: str, assay: str | None) -> list[str]:
    found = connection.execute("SELECT DISTINCT lot, assay FROM lot_latest ORDER BY ALL").fetchall()
    lots = sorted({str(row[0]) for row in found})
    if lot not in lots:
        _refuse_lot(connection, lot, lots)
    of_lot = [str(row[1]) for row in found if row[0] == lot]
    if assay is not None and assay not in of_lot:
        near = get_close_matches(assay, of_lot, n=1, cutoff=0.4)
        raise QueryError(
            f"lot {lot} has no values in an assay '{assay}'",
            remedy=f"did you mean {near[0]}?" if near else f"it has in {', '.join(of_lot)}",
        )
    return of_lot if assay is None else [assay]


def _refuse_lot(connection: duckdb.DuckDBPyConnection, lot: str, lots: Sequence[str]) -> None:
    wells = connection.execute(
        "SELECT count(*) FROM wells JOIN current_analyses USING (analysis_id) WHERE lot = ?", [lot]
    ).fetchall()
    if wells[0][0]:
        raise QueryError(
            f"lot {lot} stands on {wells[0][0]} wells, and none of its series could be fitted",
            remedy=f"see why: halfsat history \"select well, standing, lot from wells where lot = '{lot}'\"",
        )
    folded = {each.lower(): each for each in lots}
    near = [folded[lot.lower()]] if lot.lower() in folded else []
    near = near or [folded[each] for each in get_close_matches(lot.lower(), folded, n=3, cutoff=0.5)]
    some = ", ".join(lots[:8]) + (" ..." if len(lots) > 8 else "")
    remedy = f"did you mean {' or '.join(near)}?" if near else f"there are {some or 'none yet'}"
    raise QueryError(f"there is no lot '{lot}'", remedy=remedy)


def _record(
    connection: duckdb.DuckDBPyConnection,
    configuration: Configuration,
    lot: str,
    assay: str,
    given: LotSpecification | None,
) -> LotRecord:
    specification = given or configuration.specification_of(assay, lot)
    bare, first = _constants(connection, lot, assay)
    names = [name for name, each in configuration.specifications.items() if each is specification]
    used = None if specification is None else _used(names[0] if names else "given", specification)
    reference_lot = None if specification is None else specification.reference_lot
    reference: tuple[ConstantRecord, ...] = ()
    if reference_lot is not None:
        reference = bare if reference_lot == lot else _constants(connection, reference_lot, assay)[0]
    constants = tuple(_held_against(each, specification, lot, reference) for each in bare)
    plate_reads = tuple(
        PlateReadOfLot(
            row.plate_read_id,
            row.plate_id,
            row.measured_at.to_pydatetime(),
            row.analysis_id,
            int(row.revision),
            row.standing,
            int(row.series_count),
            int(row.held_series_count),
        )
        for row in rows(connection.execute(_PLATE_READS, {"lot": lot, "assay": assay}).df())
    )
    missing = _missing(specification, constants)
    judged = [each.judgement.decision for each in constants if each.judgement is not None]
    decision = decide_lot([*judged, *("undecided" for _ in missing)]) if judged or missing else None
    charts, chart_note = lot_charts(
        configuration.settings.time_zone,
        specification,
        reference,
        frozenset(each.plate_read_id for each in plate_reads),
    )
    return LotRecord(
        lot=lot,
        assay=assay,
        role=str(first["role"]),
        standing="held" if any(each.held_series_count for each in plate_reads) else "clear",
        pass_id=str(first["pass_id"]),
        measured_at=first["measured_at"].to_pydatetime(),
        constants=constants,
        plate_reads=plate_reads,
        specification=used,
        decision=decision,
        decision_id=None
        if used is None
        else result_id("lot_decision", assay, lot, sorted(e.lot_value_id for e in bare), used.digest),
        missing=missing,
        charts=charts,
        chart_note=chart_note,
        notes=tuple(_notes(constants, plate_reads, specification, missing)),
    )


def _constants(
    connection: duckdb.DuckDBPyConnection, lot: str, assay: str
) -> tuple[tuple[ConstantRecord, ...], Mapping[str, Any]]:
    """Constants of a lot with what they rest on, and one row of its values; none where it has none."""
    values = connection.execute(_VALUES, {"lot": lot, "assay": assay}).df()
    sources: dict[str, list[SourceValue]] = {}
    for row in rows(connection.execute(_SOURCES, {"ids": list(values["lot_value_id"])}).df()):
        sources.setdefault(row.lot_value_id, []).append(_source(row))
    made = tuple(
        _constant(row, tuple(sources.get(row.lot_value_id, ())))
        for row in rows(values)
        if not row.constant.endswith("_katal")
    )
    ordered = sorted(made, key=lambda each: (each.modulator or "", _place(each.constant), each.constant))
    first = {str(name): value for name, value in values.iloc[0].items()} if len(values) else {}
    return tuple(ordered), first


def _place(constant: str) -> int:
    return _ORDER.index(constant) if constant in _ORDER else len(_ORDER)


def _source(row: Any) -> SourceValue:
    shared = float(row.assay_relative_error)
    error = math.nan if row.standard_error is None else float(row.standard_error)
    if shared > 0:
        one = np.array([row.value]), np.array([error]), np.array([np.nan]), np.array([np.nan])
        error_alone = float(without_shared_error(*one, np.array([shared])).standard_error[0])
    else:
        error_alone = error
    return SourceValue(
        row.estimate_id,
        row.plate_read_id,
        row.plate_id,
        row.measured_at.to_pydatetime(),
        row.analysis_id,
        known_text(row.series_id),
        row.fit_id,
        row.law,
        float(row.value),
        known(error),
        known(row.low),
        known(row.high),
        error_alone,
        shared,
        row.series_standing,
    )


def _constant(row: Any, sources: tuple[SourceValue, ...]) -> ConstantRecord:
    usable = [
        each for each in sources if each.own_error > 0 and (each.value <= 0 or each.own_error <= each.value)
    ]
    plates = len({each.plate_read_id for each in usable})
    one = plates < 2
    return ConstantRecord(
        lot_value_id=row.lot_value_id,
        constant=row.constant,
        modulator=known_text(row.modulator),
        value=known(row.value),
        standard_error=known(row.standard_error),
        # With one plate read the stored interval knows nothing of the spread between plates.
        low=None if one else known(row.low),
        high=None if one else known(row.high),
        unit=row.unit,
        between_plate_sd=known(row.between_plate_sd),
        value_plate_reads=plates,
        held_only=bool(sources) and all(each.series_standing != "clear" for each in sources),
        reason=known_text(row.reason),
        sources=sources,
    )


def _held_against(
    constant: ConstantRecord,
    specification: LotSpecification | None,
    lot: str,
    reference: Sequence[ConstantRecord],
) -> ConstantRecord:
    asked = (
        None if specification is None else specification.of_constant(constant.constant, constant.modulator)
    )
    if specification is None or asked is None:
        return constant
    made = _judged(constant, asked, specification.rule_of(asked))
    if asked.equivalence is None or lot == specification.reference_lot:
        return made
    margins = asked.equivalence.lowest_ratio, asked.equivalence.highest_ratio
    other = [
        each
        for each in reference
        if (each.constant, each.modulator) == (constant.constant, constant.modulator)
    ]
    plates: dict[str, int] = {}
    for each in (constant, *other):
        for source in each.sources:
            plates.setdefault(source.plate_read_id, len(plates))
    equivalence = compare_with_reference(
        _sample(constant.sources, plates),
        _sample([source for each in other for source in each.sources], plates),
        margins,
        asked.equivalence.alpha,
    )
    if constant.held_only:
        equivalence = replace(
            equivalence, decision="undecided", reason="every series of the lot waits for a person"
        )
    return replace(made, equivalence=equivalence, margins=margins)


def _sample(sources: Sequence[SourceValue], plates: Mapping[str, int]) -> tuple[Any, Any, Any]:
    return (
        np.array([each.value for each in sources], dtype=np.float64),
        np.array([each.own_error for each in sources], dtype=np.float64),
        np.array([plates[each.plate_read_id] for each in sources], dtype=np.int_),
    )


def _judged(constant: ConstantRecord, asked: ConstantSpecification, rule: DecisionRule) -> ConstantRecord:
    limits = asked.limits_in(constant.unit)
    if limits == (None, None):
        return constant
    shared = max((each.shared_relative_error for each in constant.sources), default=0.0)
    degrees = None
    if constant.value is not None and constant.standard_error is not None:
        degrees = degrees_of_lot(constant.value, constant.standard_error, constant.value_plate_reads, shared)
    used = Rule(rule.guard_band_factor, rule.coverage_factor, rule.minimum_probability)
    judgement = judge_constant(constant.value, constant.standard_error, degrees, limits, used)
    if constant.held_only:
        judgement = replace(
            judgement, decision="undecided", risk=None, reason="every series of the lot waits for a person"
        )
    return replace(constant, judgement=judgement, rule=rule_text(rule))


def rule_text(rule: DecisionRule) -> str:
    """A decision rule in words."""
    if rule.minimum_probability is not None:
        return f"conformity probability at least {rule.minimum_probability:g}"
    return f"guard band {rule.guard_band_factor:g} U, U = {rule.coverage_factor:g} u"


def specification_digest(specification: LotSpecification) -> str:
    """SHA-256 of a specification's canonical JSON: what its decisions depend on, and nothing else."""
    return digest(specification.model_dump(mode="json"))


def _used(name: str, specification: LotSpecification) -> UsedSpecification:
    charts = specification.charts
    if charts is None:
        base = ""
    elif charts.base_plate_reads:
        base = f"plate reads {', '.join(charts.base_plate_reads)}"
    else:
        base = f"{charts.base_first_day} to {charts.base_last_day}"
    return UsedSpecification(
        name,
        specification.source,
        specification_digest(specification),
        specification.model_dump(mode="json"),
        specification.reference_lot,
        base,
    )


def _missing(specification: LotSpecification | None, constants: Sequence[ConstantRecord]) -> tuple[str, ...]:
    if specification is None:
        return ()
    present = {(each.constant, each.modulator) for each in constants}
    return tuple(
        constant_symbol(each.constant) + (f" with {each.modulator}" if each.modulator else "")
        for each in specification.constants
        if each.unit is not None and (each.constant, each.modulator) not in present
    )


def _notes(
    constants: Sequence[ConstantRecord],
    plate_reads: Sequence[PlateReadOfLot],
    specification: LotSpecification | None,
    missing: Sequence[str],
) -> list[str]:
    notes = []
    if constants and all(each.one_plate_only for each in constants):
        notes.append(
            "One plate read only: the spread between plate reads is not known, so no interval is given and "
            "nothing is decided."
        )
    elif one := [each for each in constants if each.one_plate_only]:
        names = ", ".join(constant_symbol(each.constant) for each in one)
        notes.append(
            f"{names}: one plate read only, so no interval is given and nothing is decided on "
            f"{'it' if len(one) == 1 else 'them'}."
        )
    held = sum(each.held_series_count for each in plate_reads)
    if held and all(each.held_only for each in constants):
        notes.append(
            "Every series waits for a person: the values are those of held series, and decide nothing."
        )
    elif held:
        are = "series waits" if held == 1 else "series wait"
        notes.append(f"{held} {are} for a person and {'is' if held == 1 else 'are'} left out of the values.")
    if missing:
        notes.append(f"The specification asks of {', '.join(missing)}, of which the lot has no value.")
    if specification is None:
        notes.append("No specification is for this lot: nothing is decided.")
    return notes
