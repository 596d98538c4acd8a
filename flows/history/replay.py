"""Replay: results computed again from raw bytes with the kept recipe, and held against what is stored.

Reads the published warehouse, the lake, the raw archive and the kept recipes; writes nothing.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any, Literal

import duckdb
import pandas as pd
import pyarrow as pa

from flows import lake
from flows.history.lookup import find_id, readings_file
from flows.site.layout import Site
from flows.site.recipes import code_version
from flows.stages.fit import fit_batch
from flows.stages.gate import gate_batch
from flows.stages.plate_work import KeptRecipe, RawReader, WorkSource, stored_readings, work_from_raw
from flows.stages.rate import rate_batch
from flows.stages.work import FittedBatch, PlateWork
from flows.warehouse.reader import open_published
from models.errors import HalfsatError, QueryError
from models.tables import READINGS, TABLES, Table
from models.tables.keys import ANALYSIS_ID

Value = str | int | float | bool | datetime | None
Tell = Callable[[int, int], None]

PLATES_A_BATCH = 8

_ANALYSES_OF: dict[str, str] = {
    "lot value": "SELECT e.analysis_id FROM lot_value_sources s JOIN estimates e USING (estimate_id) "
    "WHERE s.lot_value_id = $id",
    "estimate": "SELECT analysis_id FROM estimates WHERE estimate_id = $id",
    "fit": "SELECT analysis_id FROM fits WHERE fit_id = $id",
    "series": "SELECT analysis_id FROM series WHERE series_id = $id",
    "grid": "SELECT analysis_id FROM grids WHERE grid_id = $id",
    "analysis": "SELECT analysis_id FROM analyses WHERE analysis_id = $id",
    "plate read": "SELECT analysis_id FROM analyses WHERE plate_read_id = $id",
    "file": "SELECT a.analysis_id FROM analyses a JOIN plate_reads p USING (plate_read_id) "
    "WHERE p.export_id = $id OR a.map_id = $id",
    "recipe": "SELECT analysis_id FROM analyses WHERE recipe_id = $id",
}
_SOURCES = """
    SELECT a.analysis_id, a.plate_read_id, a.map_id, a.recipe_id, a.revision, r.code_version,
           p.plate_id, p.export_id, p.place_in_export, e.file_name AS export_name, m.file_name AS map_name
    FROM analyses a
    JOIN plate_reads p USING (plate_read_id)
    JOIN files e ON e.file_id = p.export_id
    JOIN files m ON m.file_id = a.map_id
    JOIN recipes r USING (recipe_id)
    {chosen}
    ORDER BY r.code_version, e.file_name, p.place_in_export, a.revision
"""


@dataclass(frozen=True)
class Difference:
    """One place where what is stored is not what comes out again.

    Attributes
    ----------
    row
        The row's key, as `well B7`; empty where it is about the whole table.
    column
        The column that differs; None where a whole row stands on one side only.
    """

    table: str
    row: str
    column: str | None
    stored: Value
    recomputed: Value


@dataclass(frozen=True)
class Replayed:
    """One analysis held against its replay.

    Attributes
    ----------
    row_count
        Stored rows compared, readings included.
    differences
        Where the two differ; none where they are equal.
    refusal
        Why it was not replayed, and what to do; None where it was.
    """

    analysis_id: str
    plate_id: str
    revision: int
    code_version: str
    row_count: int = 0
    differences: tuple[Difference, ...] = ()
    refusal: str | None = None

    @property
    def equal(self) -> bool:
        """Whether it was replayed and nothing differs."""
        return self.refusal is None and not self.differences


@dataclass(frozen=True)
class ReplayReport:
    """What a replay found.

    Attributes
    ----------
    about
        What was asked for, in words.
    running
        Version of the code that computed.
    """

    about: str
    running: str
    analyses: tuple[Replayed, ...]

    @property
    def equal_count(self) -> int:
        """Analyses that came out as they are stored."""
        return sum(each.equal for each in self.analyses)

    @property
    def row_count(self) -> int:
        """Stored rows that were compared."""
        return sum(each.row_count for each in self.analyses)

    @property
    def by_other_code(self) -> tuple[Replayed, ...]:
        """Analyses that were made by other code than what runs now."""
        return tuple(each for each in self.analyses if each.code_version != self.running)


@dataclass(frozen=True)
class _Stored:
    """An analysis in the warehouse, and where its work comes from."""

    analysis_id: str
    plate_id: str
    revision: int
    recipe_id: str
    code_version: str
    source: WorkSource

    def outcome(self, **more: Any) -> Replayed:
        return Replayed(self.analysis_id, self.plate_id, self.revision, self.code_version, **more)


def replay(
    site: Site, id_or_prefix: str | None = None, *, other_code: bool = False, tell: Tell | None = None
) -> ReplayReport:
    """Compute results again from raw bytes with their kept recipes and compare them with what is stored.

    Parameters
    ----------
    id_or_prefix
        Id of an estimate, fit, series, grid, analysis, plate read, lot value, file or recipe, or its first
        digits: every analysis that it belongs to is replayed. None replays all there are.
    other_code
        Compare also where the recipe names another version of the code than the one that runs.
    tell
        Told how many analyses are done, of how many.

    Raises
    ------
    QueryError
        If there is no such id, or no analysis belongs to it.
    SiteError
        If nothing is published yet.
    """
    running = code_version()
    with open_published(site) as connection:
        about, wanted = _wanted(connection, id_or_prefix)
        done: list[Replayed] = []
        reader = RawReader(site)
        for part in _parts(wanted):
            if part[0].code_version != running and not other_code:
                done += [each.outcome(refusal=_other_code(each, running)) for each in part]
            else:
                done += _replayed(site, connection, reader, part)
            if tell is not None:
                tell(len(done), len(wanted))
    return ReplayReport(about, running, tuple(done))


def _wanted(connection: duckdb.DuckDBPyConnection, id_or_prefix: str | None) -> tuple[str, list[_Stored]]:
    if id_or_prefix is None:
        about, chosen = "every analysis", ""
        given: dict[str, object] = {}
    else:
        kind, full_id = find_id(connection, id_or_prefix)
        about, given = f"{kind} {full_id[:12]}", {"id": full_id}
        chosen = f"WHERE a.analysis_id IN ({_ANALYSES_OF[kind]})"
    rows = _ask(connection, _SOURCES.format(chosen=chosen), given).to_pylist()
    if not rows and id_or_prefix is not None:
        raise QueryError(
            f"no result belongs to {about}", remedy="it waits to be analysed, or is in quarantine"
        )
    return about, [_stored(row) for row in rows]


def _stored(row: Mapping[str, Any]) -> _Stored:
    source = WorkSource(
        row["plate_read_id"],
        row["export_id"],
        row["export_name"],
        row["place_in_export"],
        row["map_id"],
        row["map_name"],
    )
    return _Stored(
        row["analysis_id"], row["plate_id"], row["revision"], row["recipe_id"], row["code_version"], source
    )


def _parts(wanted: Sequence[_Stored]) -> Iterator[Sequence[_Stored]]:
    """Analyses in parts that are computed together, each by one version of the code."""
    start = 0
    for end in range(1, len(wanted) + 1):
        last = end == len(wanted)
        if last or end - start == PLATES_A_BATCH or wanted[end].code_version != wanted[start].code_version:
            yield wanted[start:end]
            start = end


def _other_code(each: _Stored, running: str) -> str:
    return (
        f"made by halfsat {each.code_version}, and this is {running} "
        "(replay with that version, or compare all the same with --other-code)"
    )


def _replayed(
    site: Site, connection: duckdb.DuckDBPyConnection, reader: RawReader, part: Sequence[_Stored]
) -> list[Replayed]:
    done: dict[str, Replayed] = {}
    works: dict[str, PlateWork] = {}
    differences: dict[str, list[Difference]] = {}
    counts: dict[str, int] = {}
    for each in part:
        try:
            recipe = reader.recipe(each.recipe_id)
            works[each.analysis_id] = work_from_raw(reader, each.source, recipe)
            found, count = _readings(site, connection, reader, each, recipe)
        except HalfsatError as error:
            works.pop(each.analysis_id, None)
            done[each.analysis_id] = each.outcome(refusal=str(error))
            continue
        differences[each.analysis_id], counts[each.analysis_id] = found, count
    if works:
        try:
            fitted = analysed(list(works.values()))
        except (HalfsatError, KeyError, ValueError) as error:
            if part[0].code_version == code_version():
                raise
            reason = f"this version of the code cannot carry out its recipe: {error!r}"
            done |= {
                each.analysis_id: each.outcome(refusal=reason) for each in part if each.analysis_id in works
            }
        else:
            for table, stored, again in compared(connection, fitted):
                for analysis_id, difference in unlike(table, stored, again):
                    differences[analysis_id].append(difference)
                for owner in stored.column("analysis_id").to_pylist():
                    counts[str(owner)] += 1
    for each in part:
        if each.analysis_id not in done:
            found = differences[each.analysis_id]
            done[each.analysis_id] = each.outcome(
                row_count=counts[each.analysis_id], differences=tuple(found)
            )
    return [done[each.analysis_id] for each in part]


def analysed(works: Sequence[PlateWork]) -> FittedBatch:
    """Work carried through the stages as in a pass."""
    return fit_batch(gate_batch(rate_batch(works)))


def compared(
    connection: duckdb.DuckDBPyConnection, fitted: FittedBatch
) -> Iterator[tuple[Table, pa.Table, pa.Table]]:
    """Yield every table that hangs on analyses, its stored rows and those that came out again.

    Only columns that are both computed by the stages and stored are compared: when a result was loaded, and
    what superseded it, is the ledger's to say.
    """
    ids = [work.analysis_id for work in fitted.plates]
    for table in TABLES:
        frame = fitted.tables.get(table.name)
        if frame is None or "analysis_id" not in table.column_names:
            continue
        present = _stored_columns(connection, table.name)
        names = [c.name for c in table.columns if c.name in present and c.name in frame.columns]
        if not set(table.key) <= set(names):
            continue
        columns = tuple(c for c in table.columns if c.name in names)
        declared = Table(table.name, table.meaning, table.key, columns)
        asked = f"SELECT {', '.join(names)} FROM {table.name} WHERE list_contains($ids, analysis_id)"
        stored = _ask(connection, asked, {"ids": ids}).cast(declared.arrow_schema())
        yield declared, stored, declared.to_arrow(frame)


def _ask(connection: duckdb.DuckDBPyConnection, sql: str, given: Mapping[str, object]) -> pa.Table:
    found: pa.Table | None = connection.sql(sql, params=dict(given)).to_arrow_table()
    assert found is not None, "a SELECT gives rows"
    return found


def unlike(table: Table, stored: pa.Table, again: pa.Table) -> Iterator[tuple[str, Difference]]:
    """Yield each difference between two sets of rows of a table, with the analysis that it belongs to.

    Parameters
    ----------
    table
        Its key tells the rows apart; one of its columns is analysis_id.
    stored, again
        Rows in the table's columns, in any order. Numbers are equal when every bit is.
    """
    order: list[tuple[str, Literal["ascending", "descending"]]] = [(name, "ascending") for name in table.key]
    stored, again = stored.sort_by(order), again.sort_by(order)
    if stored.equals(again):
        return
    before, after = _by_key(table, stored), _by_key(table, again)
    for key in {**before, **after}:
        one, other = before.get(key), after.get(key)
        row = ", ".join(f"{name} {value}" for name, value in zip(table.key, key, strict=True))
        if one is None or other is None:
            owner = (one or other or {})["analysis_id"]
            words = ("stored", None) if other is None else (None, "comes out")
            yield owner, Difference(table.name, row, None, *words)
            continue
        for name in table.column_names:
            if one[name] != other[name]:
                yield one["analysis_id"], Difference(table.name, row, name, one[name], other[name])


def _by_key(table: Table, rows: pa.Table) -> dict[tuple[Any, ...], dict[str, Any]]:
    return {tuple(row[name] for name in table.key): row for row in rows.to_pylist()}


def _stored_columns(connection: duckdb.DuckDBPyConnection, name: str) -> set[str]:
    found = connection.execute(
        "SELECT column_name FROM duckdb_columns() WHERE table_name = ? AND NOT internal", [name]
    ).fetchall()
    return {str(row[0]) for row in found}


def _readings(
    site: Site,
    connection: duckdb.DuckDBPyConnection,
    reader: RawReader,
    each: _Stored,
    recipe: KeptRecipe,
) -> tuple[list[Difference], int]:
    """How the readings in the lake differ from the export's bytes, and how many there are."""
    file = readings_file(connection, each.source.plate_read_id, each.analysis_id)
    if file is None:
        return [Difference(READINGS.name, "", None, None, "comes out")], 0
    path, sha256 = file
    state = lake.condition(site, path, sha256)
    if state != "unchanged":
        return [Difference(READINGS.name, path, None, f"file {state}", "comes out")], 0
    owned = Table(READINGS.name, READINGS.meaning, READINGS.key, (*READINGS.columns, ANALYSIS_ID))
    stored = lake.read_arrow(site, path, sha256, READINGS.name)
    again = stored_readings(each.source.plate_read_id, reader.plate_read(each.source, recipe.profile))
    frames: list[pd.DataFrame] = [stored.to_pandas(), again]
    before, after = (owned.to_arrow(frame.assign(analysis_id=each.analysis_id)) for frame in frames)
    return [difference for _, difference in unlike(owned, before, after)], stored.num_rows
