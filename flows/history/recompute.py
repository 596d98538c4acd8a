"""The rows of a recorded batch computed again from raw bytes, kept recipes and the ledger's own words.

Follows the order of a pass: what it stored is what comes out here. Writes gate documents where it is told to,
and nothing else.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field

import pandas as pd

from checks.assess import GateRun
from flows.history.replay import analysed
from flows.site import archive
from flows.site.layout import Site
from flows.stages.gate_runs import keep_runs, structure_run
from flows.stages.kept_profiles import read_profile
from flows.stages.lots import current_estimates, lot_values
from flows.stages.plate_work import RawReader, WorkSource, work_from_raw
from flows.stages.pull import PulledFile
from flows.stages.read import read_plate_map
from flows.stages.recorded import LOTS, PROFILE_ID, RecordedBatch
from flows.stages.stage_files import (
    ExportRead,
    check_exports,
    chunks,
    map_rows,
    plate_read_row,
    read_plates,
)
from models.errors import LedgerError, SiteError
from models.tables import (
    ANALYSES,
    FILES,
    GATE_RUNS,
    LOT_VALUE_SOURCES,
    LOT_VALUES,
    PASSES,
    PLATE_MAPS,
    PLATE_READS,
    RECIPES,
)

Frames = dict[str, pd.DataFrame]
_BEFORE = "it was written before halfsat kept that in the ledger: bring lake/ back from a backup"

PutReadings = Callable[[str, pd.DataFrame], None]


@dataclass
class Known:
    """What the batches so far say of files and plate reads.

    Attributes
    ----------
    names
        File name by file id.
    places
        Export and place in it, by plate read id.
    """

    names: dict[str, str] = field(default_factory=dict)
    places: dict[str, tuple[str, int]] = field(default_factory=dict)

    def learn(self, batch: RecordedBatch) -> None:
        """Take in what a batch says."""
        for row in batch.rows(FILES.name):
            self.names.setdefault(str(row["file_id"]), str(row.get("file_name", "")))
        for row in batch.rows(PLATE_READS.name):
            self.places[str(row["plate_read_id"])] = (str(row["export_id"]), int(row["place_in_export"]))

    def source(self, analysis: Mapping[str, object]) -> WorkSource:
        """Where the work of a recorded analysis comes from.

        Raises
        ------
        LedgerError
            If the ledger does not name its plate read or its files.
        """
        plate_read_id, map_id = str(analysis["plate_read_id"]), str(analysis["map_id"])
        try:
            export_id, place = self.places[plate_read_id]
            return WorkSource(
                plate_read_id, export_id, self.names[export_id], place, map_id, self.names[map_id]
            )
        except KeyError as missing:
            raise LedgerError(
                f"the ledger names no {missing.args[0][:12]}, which an analysis rests on",
                remedy="bring ledger/ back from a backup of the site",
            ) from missing


def recompute(
    site: Site, reader: RawReader, known: Known, batch: RecordedBatch, documents: Site, put: PutReadings
) -> Frames:
    """Rows of a batch by table, as the pass had them.

    Parameters
    ----------
    site
        Its raw archive and recipes are read, and for lot values its warehouse, which must hold every batch
        before this one and none after it.
    reader
        Reads raw files and recipes.
    known
        What the batches up to this one say.
    documents
        A site folder below which the gates' documents are written.
    put
        Given the readings of each plate read as they are read, by its id.

    Raises
    ------
    HalfsatError
        If a raw file or recipe is missing or has changed, or the ledger does not say what is needed.
    """
    tables = {file.table_name for file in batch.lake_files}
    if ANALYSES.name in tables:
        return _analyses(reader, known, batch, documents)
    if FILES.name in tables:
        return _staged(site, batch, documents, put)
    if LOT_VALUES.name in tables:
        return _lots(site, batch)
    if tables == {PASSES.name}:
        return {PASSES.name: batch.frame(PASSES)}
    raise SiteError(f"nothing here knows how {', '.join(sorted(tables))} came about", where=batch.where)


def _analyses(reader: RawReader, known: Known, batch: RecordedBatch, documents: Site) -> Frames:
    recorded = batch.rows(ANALYSES.name)
    works = []
    for row in recorded:
        if "revision" not in row or "computed_at" not in row:
            raise LedgerError(
                "the entry does not say which revision its analyses are",
                where=batch.where,
                remedy=_BEFORE,
            )
        work = work_from_raw(reader, known.source(row), reader.recipe(str(row["recipe_id"])))
        if work.analysis_id != row["analysis_id"]:
            raise SiteError(
                f"the analysis {str(row['analysis_id'])[:12]} rests on more than plate read, map and recipe",
                where=batch.where,
            )
        works.append(work)
    fitted = analysed(works)
    of_ledger = pd.DataFrame(recorded).set_index("analysis_id")
    ids = fitted.tables[ANALYSES.name]["analysis_id"]
    analyses = fitted.tables[ANALYSES.name].assign(
        pass_id=batch.pass_id,
        computed_at=pd.to_datetime(ids.map(of_ledger["computed_at"]), utc=True, format="ISO8601"),
        superseded_by=None,
        revision=ids.map(of_ledger["revision"]),
    )
    recipes = {work.recipe.recipe_id: work.recipe for work in fitted.plates}
    analysis_ids = [work.analysis_id for work in fitted.plates]
    return {
        **fitted.tables,
        ANALYSES.name: analyses,
        RECIPES.name: pd.DataFrame([recipe.row() for recipe in recipes.values()]),
        GATE_RUNS.name: keep_runs(documents, batch.pass_id, fitted.runs, analysis_ids),
    }


def _staged(site: Site, batch: RecordedBatch, documents: Site, put: PutReadings) -> Frames:
    files = batch.frame(FILES)
    recorded = {str(row["file_id"]): row for row in batch.rows(FILES.name)}
    pulled = [
        PulledFile(
            file_id,
            str(recorded[file_id]["file_name"]),
            received_at.to_pydatetime(),
            archive.raw_path(site, file_id),
        )
        for file_id, received_at in zip(files["file_id"], files["received_at"], strict=True)
    ]
    maps: list[dict[str, object]] = []
    plate_reads: list[dict[str, object]] = []
    runs: list[GateRun] = []
    for chunk in chunks(sorted(pulled, key=lambda file: (file.file_name, file.file_id))):
        exports = []
        for file in chunk:
            row = recorded[file.file_id]
            content = archive.fetch(site, file.file_id)
            if row["kind"] == "plate_map":
                maps += map_rows(file, read_plate_map(content, file.file_name))
            elif row.get(PROFILE_ID):
                name, profile = read_profile(site, str(row[PROFILE_ID]))
                plates = read_plates(file, content, profile)
                exports.append(ExportRead(file, name, str(row[PROFILE_ID]), plates))
            elif row["kind"] == "export":
                raise LedgerError(
                    f"the entry does not say which version of its profile read {file.file_name}",
                    where=batch.where,
                    remedy=_BEFORE,
                )
        frames, report = check_exports(exports)
        if report is None:
            continue
        runs.append(structure_run(report))
        for export in exports:
            if recorded[export.file.file_id]["kind"] != "export":
                continue
            for plate_read_id, read in export.plates.items():
                put(plate_read_id, frames[plate_read_id])
                plate_reads.append(plate_read_row(plate_read_id, export.file.file_id, read))
    return {
        FILES.name: files,
        PLATE_MAPS.name: pd.DataFrame(maps, columns=PLATE_MAPS.column_names),
        PLATE_READS.name: pd.DataFrame(plate_reads, columns=PLATE_READS.column_names),
        GATE_RUNS.name: keep_runs(documents, batch.pass_id, runs, ()),
    }


def _lots(site: Site, batch: RecordedBatch) -> Frames:
    lots = pd.DataFrame(batch.rows(LOTS), columns=["assay", "lot"])
    if lots.empty:
        raise LedgerError(
            "the entry does not say which lots its values are of",
            where=batch.where,
            remedy=_BEFORE,
        )
    values, sources = lot_values(current_estimates(site, lots), batch.pass_id)
    return {LOT_VALUES.name: values, LOT_VALUE_SOURCES.name: sources}
