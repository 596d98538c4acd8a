"""What the ledger says of the batches that were loaded: which rows, in which files, with which digests.

Batches are read and written here; how their rows are computed or stored is the business of others.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import datetime
from typing import Any

import pandas as pd

from flows import ledger
from flows.lake import LakeFile
from flows.ledger import Entry
from flows.site.layout import Site
from models.errors import LedgerError
from models.identity import Json
from models.tables import ANALYSES, FILES, GATE_RUNS, LOT_VALUES, PASSES, PLATE_READS, TABLES, Table

LOADING_KINDS = ("analysis_loaded", "tables_loaded")

# What raw files and recipes do not say stands in the ledger itself; the rest of a row is computed from them.
KEPT: dict[str, tuple[str, ...]] = {
    PASSES.name: tuple(PASSES.column_names),
    FILES.name: tuple(FILES.column_names),
    PLATE_READS.name: ("plate_read_id", "export_id", "place_in_export"),
    ANALYSES.name: ("analysis_id", "plate_read_id", "map_id", "recipe_id", "revision", "computed_at"),
    GATE_RUNS.name: ("gate_run_id", "recipe_id", "suite", "file"),
}
PROFILE_ID = "profile_id"
"""Column that a frame of `files` may have beside its own: the kept profile that an export was read with."""
LOTS = "lots"
"""Key of a body: assay and lot of the lot values in the batch."""


@dataclass(frozen=True)
class RecordedBatch:
    """One batch of rows as the ledger records it.

    Attributes
    ----------
    seq, time
        Place of its entry in the ledger, and when it was loaded, UTC.
    lake_files
        The files that hold its rows, as they were last written.
    body
        The entry's body.
    where
        Its line in the ledger, as a message names it.
    """

    batch_id: str
    pass_id: str
    seq: int
    time: datetime
    lake_files: tuple[LakeFile, ...]
    body: Mapping[str, Json]
    where: str

    def rows(self, key: str) -> list[dict[str, Any]]:
        """What the entry says of a table, row by row; none where it does not name it."""
        found = self.body.get(key)
        return [dict(row) for row in found if isinstance(row, Mapping)] if isinstance(found, list) else []

    def frame(self, table: Table) -> pd.DataFrame:
        """Rows of a table that the ledger holds whole, times as times.

        Raises
        ------
        LedgerError
            If a column was not recorded.
        """
        frame = pd.DataFrame(self.rows(table.name), dtype=object)
        for column in table.columns:
            if column.name not in frame:
                raise LedgerError(
                    f"the entry does not say {column.name} of its {table.name}",
                    where=self.where,
                    remedy="it was written before halfsat kept that in the ledger: "
                    "bring lake/ back from a backup of the site",
                )
            if column.kind == "timestamp":
                frame[column.name] = pd.to_datetime(frame[column.name], utc=True, format="ISO8601")
        return frame


def recorded_batches(site: Site, entries: Sequence[Entry] | None = None) -> Iterator[RecordedBatch]:
    """Yield every batch in the order in which they were loaded.

    Parameters
    ----------
    entries
        The ledger's entries where the caller has them; None reads them.

    Raises
    ------
    LedgerError
        If a line is no entry, or an entry does not say which lake files were loaded.
    """
    written_again = _written_again(ledger.entries(site) if entries is None else entries)
    for entry in ledger.entries(site) if entries is None else entries:
        if entry.kind in LOADING_KINDS:
            yield _batch(site, entry, written_again)


def profiles_used(site: Site) -> dict[str, str]:
    """Id of the kept profile that read each export, by the export's id; the last of several."""
    return {
        str(row["file_id"]): str(row[PROFILE_ID])
        for recorded in recorded_batches(site)
        for row in recorded.rows(FILES.name)
        if row["kind"] == "export" and row.get(PROFILE_ID)
    }


def describe_batch(
    pass_id: str, batch_id: str, given: Mapping[str, pd.DataFrame], files: Sequence[LakeFile]
) -> dict[str, Json]:
    """Body of the entry about a batch.

    Parameters
    ----------
    given
        The batch's rows by table name.
    files
        The lake files that hold them, and those of its plate reads' readings.
    """
    body: dict[str, Json] = {
        "pass_id": pass_id,
        "batch_id": batch_id,
        "lake_files": [
            {
                "path": each.path,
                "sha256": each.sha256,
                "table_name": each.table_name,
                "row_count": each.row_count,
                "byte_count": each.byte_count,
                "columns": dict(each.columns),
            }
            for each in files
        ],
    }
    tables = {each.name: each for each in TABLES}
    for name, columns in KEPT.items():
        if name in given:
            body[name] = _as_json(tables[name], given[name], columns)
    if LOT_VALUES.name in given:
        lots = given[LOT_VALUES.name][["assay", "lot"]].drop_duplicates()
        body[LOTS] = [{"assay": str(assay), "lot": str(lot)} for assay, lot in lots.to_numpy()]
    return body


def record_rebuilt(site: Site, replaced: Sequence[tuple[LakeFile, LakeFile]], now: datetime) -> None:
    """Record lake files whose rows are what they were, and whose bytes are not.

    Parameters
    ----------
    replaced
        Each file as it was recorded, and as it is now.
    """
    if replaced:
        files: list[Json] = [
            {"path": old.path, "was": old.sha256, "sha256": new.sha256, "byte_count": new.byte_count}
            for old, new in replaced
        ]
        ledger.append(site, "lake_rebuilt", {"lake_files": files}, at=now)


def _written_again(entries: Iterable[Entry]) -> dict[tuple[str, str], tuple[str, int]]:
    """Digest and size that a file has now, by its path and the digest that it had."""
    found: dict[tuple[str, str], tuple[str, int]] = {}
    for entry in entries:
        files = entry.body.get("lake_files") if entry.kind == "lake_rebuilt" else None
        for each in files if isinstance(files, list) else ():
            if isinstance(each, Mapping):
                now = (str(each["sha256"]), int(str(each["byte_count"])))
                found[str(each["path"]), str(each["was"])] = now
    return found


def _batch(
    site: Site, entry: Entry, written_again: Mapping[tuple[str, str], tuple[str, int]]
) -> RecordedBatch:
    where = f"{site.ledger_file}, line {entry.seq}"
    try:
        # Any JSON may stand there; what is no list of lake files is caught below.
        files = [LakeFile(**each) for each in entry.body["lake_files"]]  # type: ignore[union-attr, arg-type]
        batch_id, pass_id = str(entry.body["batch_id"]), str(entry.body["pass_id"])
    except (KeyError, TypeError) as error:
        raise LedgerError(
            "the entry does not say which lake files were loaded",
            where=where,
            remedy="bring ledger/ back from a backup of the site",
        ) from error
    for place, file in enumerate(files):
        while (file.path, file.sha256) in written_again:
            sha256, byte_count = written_again[file.path, file.sha256]
            file = replace(file, sha256=sha256, byte_count=byte_count)
        files[place] = file
    return RecordedBatch(batch_id, pass_id, entry.seq, entry.time, tuple(files), entry.body, where)


def _as_json(table: Table, frame: pd.DataFrame, columns: Sequence[str]) -> list[Json]:
    """Rows as JSON: what is not known is null, times in UTC to the microsecond."""
    arrow = table.to_arrow(frame).select(list(columns))
    records: list[dict[str, Json]] = [
        {
            str(name): f"{value:%Y-%m-%dT%H:%M:%S.%fZ}" if isinstance(value, datetime) else value
            for name, value in row.items()
        }
        for row in arrow.to_pylist()
    ]
    if PROFILE_ID in frame and table.name == FILES.name:
        for record, profile_id in zip(records, frame[PROFILE_ID], strict=True):
            record[PROFILE_ID] = profile_id if isinstance(profile_id, str) else None
    return list(records)
