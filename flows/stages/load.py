"""Store what a pass has made: lake, then ledger, then warehouse.

The order is what makes a kill harmless. Lake files that no ledger entry names are only spare: the next pass
makes them again or passes them by. The ledger's line is the moment from which the results exist: it names
every lake file with its hash. A warehouse that has not followed is brought up from those by `repair`.
"""

from __future__ import annotations

from collections.abc import Mapping
from datetime import UTC, datetime
from pathlib import Path

import duckdb
import pandas as pd
import pyarrow as pa

from flows import lake, ledger
from flows.site.durable import sweep_parts
from flows.site.layout import Site
from flows.stages.recorded import RecordedBatch, describe_batch, recorded_batches
from flows.warehouse import writer
from flows.warehouse.migrations import DamagedWarehouse, OutdatedWarehouse
from flows.warehouse.writer import Batch
from models.identity import Json, content_id, result_id
from models.tables import ANALYSES, PLATE_READS, READINGS, TABLES


def load_results(
    site: Site, pass_id: str, tables: Mapping[str, pd.DataFrame], now: datetime
) -> ledger.Entry | None:
    """Store rows of any tables as one batch. The caller holds the pass lock.

    Parameters
    ----------
    pass_id
        The pass that made them.
    tables
        Rows by table name, with the tables' columns. `readings` must be in the lake already (one file a
        plate read); those of every row in `plate_reads` are recorded with the batch.
    now
        When, UTC.

    Returns
    -------
    Entry or None
        The ledger's entry, None where there was not one row.

    Raises
    ------
    SiteError
        If readings of a plate read are not in the lake, or the warehouse cannot be opened.
    KeyError, ValueError, pyarrow.ArrowInvalid
        If rows do not fit their table.
    """
    given = {name: frame for name, frame in sorted(tables.items()) if len(frame) and name != READINGS.name}
    if not given:
        return None
    encoded = {name: lake.encode_rows(name, frame) for name, frame in given.items()}
    digests: dict[str, Json] = {name: content_id(content) for name, content in encoded.items()}
    batch_id = result_id("batch", pass_id, digests)
    files = [
        lake.write_encoded(site, name, batch_id, content, len(given[name]))
        for name, content in encoded.items()
    ]
    if PLATE_READS.name in given:
        files += [
            lake.describe(site, READINGS.name, each) for each in given[PLATE_READS.name]["plate_read_id"]
        ]
    kind: ledger.Kind = "analysis_loaded" if ANALYSES.name in given else "tables_loaded"
    entry = ledger.append(site, kind, describe_batch(pass_id, batch_id, given, files), at=now)
    writer.load(site, given, Batch(batch_id, entry.seq, entry.time, files))
    return entry


def repair(site: Site) -> int:
    """Bring the warehouse up to the ledger: load every recorded batch that it lacks, from the lake.

    A damaged or missing warehouse is made anew this way, and so is one of an earlier version that cannot be
    brought up to date in place. A damaged one is put aside under another name; an earlier one is too, until
    all its batches are in the new one. What killed writes left behind is cleared away. The caller holds the
    pass lock.

    Returns
    -------
    int
        Batches that were loaded.

    Raises
    ------
    SiteError
        If a lake file that a batch rests on is missing or has changed.
    """
    for folder in (site.lake, site.warehouse, site.raw, site.quarantine):
        sweep_parts(folder)
    aside: Path | None = None
    try:
        with writer.loader(site) as connection:
            present = writer.loaded_batches(connection)
    except DamagedWarehouse as found:
        outdated = isinstance(found, OutdatedWarehouse)
        path = _put_aside(site.loader_file, "outdated" if outdated else "damaged")
        aside = path if outdated else None
        present = set()
    loaded = 0
    for recorded in recorded_batches(site):
        if recorded.batch_id not in present:
            loaded += writer.load(site, stored_rows(site, recorded), as_batch(recorded))
    if aside is not None and _holds_all_of(site, aside):
        aside.unlink()
    return loaded


def stored_rows(site: Site, recorded: RecordedBatch) -> dict[str, pa.Table]:
    """Rows of a recorded batch from the lake, by table, in the tables' present columns.

    Rows of a table that there is no more stay in the lake.

    Raises
    ------
    SiteError
        If a lake file is missing or has changed, or its rows cannot be given the present columns.
    """
    known = {each.name for each in TABLES} - {READINGS.name}
    return {
        each.table_name: lake.read_arrow(site, each.path, each.sha256, each.table_name)
        for each in recorded.lake_files
        if each.table_name in known
    }


def as_batch(recorded: RecordedBatch) -> Batch:
    """The batch as the warehouse records it."""
    return Batch(recorded.batch_id, recorded.seq, recorded.time, recorded.lake_files)


def _put_aside(path: Path, why: str) -> Path:
    """Give the loader's database another name; its log, which belongs to it alone, goes."""
    stamp = datetime.fromtimestamp(path.stat().st_mtime, UTC).strftime("%Y%m%dT%H%M%S%f")
    aside = path.with_name(f"{path.stem}.{why}-{stamp}.duckdb")
    path.rename(aside)
    path.with_name(path.name + ".wal").unlink(missing_ok=True)
    return aside


def _holds_all_of(site: Site, earlier: Path) -> bool:
    """Whether every batch of an earlier database is in the present one."""
    with duckdb.connect(str(earlier), read_only=True) as connection:
        wanted = writer.loaded_batches(connection)
    with writer.loader(site) as connection:
        return wanted <= writer.loaded_batches(connection)
