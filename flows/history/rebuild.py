"""Rebuild: lake and warehouse made again from raw bytes, kept recipes and the ledger, equal row for row.

Every batch is taken from the lake where its files are whole, and computed again where they are not; the
ledger's digests decide whether what comes out is what was stored. The new warehouse grows beside the old one
and takes its place at the end, so that an interrupted rebuild harms nothing and can be run again.
"""

from __future__ import annotations

import shutil
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import datetime
from pathlib import Path

import pandas as pd
import pyarrow as pa

from flows import lake, ledger
from flows.history.recompute import Known, recompute
from flows.lake import LakeFile
from flows.site.durable import make_folder, sweep_parts, sync_folder, write_durably
from flows.site.layout import Site
from flows.site.lock import pass_lock
from flows.site.recipes import code_version
from flows.stages.gate_runs import read_run
from flows.stages.load import as_batch, stored_rows
from flows.stages.plate_work import RawReader
from flows.stages.publish import publish_results
from flows.stages.recorded import RecordedBatch, record_rebuilt, recorded_batches
from flows.warehouse import writer
from flows.warehouse.bookkeeping import STORED
from models.errors import HalfsatError, SiteError
from models.tables import ANALYSES, GATE_RUNS, LOT_VALUES, READINGS, table

Tell = Callable[[int, int], None]


@dataclass(frozen=True)
class Failure:
    """A batch that could not be made again as it was.

    Attributes
    ----------
    where
        Its line in the ledger.
    reason
        What is missing or differs, and what to do.
    """

    where: str
    reason: str


@dataclass(frozen=True)
class RebuildReport:
    """What a rebuild did.

    Attributes
    ----------
    kept_count, recomputed_count
        Batches taken from the lake as it was, and computed again.
    file_count
        Lake files written.
    other_bytes_count
        Those of them that hold the same rows in other bytes (another release of the Parquet library).
    row_counts
        Rows of the new warehouse by table; empty where it was not put in place.
    failures
        Batches that could not be made again; the warehouse is then as it was.
    """

    kept_count: int
    recomputed_count: int
    file_count: int
    other_bytes_count: int
    row_counts: Mapping[str, int]
    failures: tuple[Failure, ...]


class _Unlike(HalfsatError):
    """What comes out is not what was stored."""


@dataclass(frozen=True)
class _Beside(Site):
    """The same site with a warehouse of its own, and room for documents, below the warehouse folder."""

    @property
    def warehouse(self) -> Path:
        return self.root / "warehouse" / "rebuild"


class _Restorer:
    """Writes what a batch's lake files held, after holding it against the ledger's digests."""

    def __init__(self, site: Site, batch: RecordedBatch, later: set[tuple[str, str]]) -> None:
        self.site, self.batch, self.later = site, batch, later
        self.files = {(file.table_name, Path(file.path).stem): file for file in batch.lake_files}
        self.replaced: list[tuple[LakeFile, LakeFile]] = []
        self.restored: dict[tuple[str, str], LakeFile] = {}
        self.written = 0

    def put(self, table_name: str, stem: str, frame: pd.DataFrame) -> None:
        """Write one file, unless it is there.

        Raises
        ------
        _Unlike
            If the rows are not those that were stored.
        """
        file = self.files.get((table_name, stem))
        if file is None:
            if len(frame):
                raise _Unlike(f"{len(frame)} rows of {table_name} come out, and none were stored")
            return
        content = lake.encode_rows(table_name, _as_stored(file, frame))
        now = lake.described(file.path, table_name, content, len(frame))
        if now.sha256 != file.sha256:
            unlike = _unlike_columns(file, now)
            if unlike:
                raise _Unlike(f"{table_name}: {unlike}")
            if lake.locate(self.site, file.path, file.sha256) is not None and _has_all_columns(file):
                self.restored[table_name, stem] = file
                return
            self.replaced.append((file, now))
        self.restored[table_name, stem] = replace(now, columns=file.columns)
        if lake.locate(self.site, file.path, now.sha256) is None:
            later = (file.path, file.sha256) in self.later
            lake.restore(self.site, now, content, later=later)
            self.written += 1

    def put_all(self, frames: Mapping[str, pd.DataFrame]) -> None:
        """Write the files of a whole batch; readings must have been put before."""
        for name, frame in frames.items():
            self.put(name, self.batch.batch_id, frame)
        lost = set(self.files) - set(self.restored)
        if lost:
            raise _Unlike(f"no rows of {min(lost)[0]} come out, and some were stored")

    def batch_now(self) -> RecordedBatch:
        """The batch with its files as they are now."""
        return replace(self.batch, lake_files=tuple(self.restored[key] for key in self.files))


def rebuild(site: Site, now: datetime, tell: Tell | None = None) -> RebuildReport:
    """Make lake and warehouse again and publish the warehouse. Holds the site's pass lock.

    Parameters
    ----------
    now
        When, UTC.
    tell
        Told how many batches are done, of how many.

    Raises
    ------
    SiteError
        If a pass is running.
    LedgerError
        If the ledger's chain is broken: it is what everything is rebuilt by.
    """
    with pass_lock(site):
        ledger.verify_chain(site)
        for folder in (site.lake, site.warehouse, site.raw):
            sweep_parts(folder)
        beside = _Beside(site.root)
        shutil.rmtree(beside.warehouse, ignore_errors=True)
        make_folder(site.warehouse)
        work = _Rebuilding(site, beside, list(recorded_batches(site)), now)
        for place, batch in enumerate(work.batches, start=1):
            work.take(batch)
            if tell is not None:
                tell(place, len(work.batches))
        counts: dict[str, int] = {}
        if not work.failures:
            counts = _put_in_place(site, beside)
            publish_results(site, now)
        shutil.rmtree(beside.warehouse, ignore_errors=True)
    return RebuildReport(
        work.kept, work.recomputed, work.written, work.other_bytes, counts, tuple(work.failures)
    )


class _Rebuilding:
    """The state of a rebuild while it goes through the batches in order."""

    def __init__(self, site: Site, beside: Site, batches: Sequence[RecordedBatch], now: datetime) -> None:
        self.site, self.beside, self.batches, self.now = site, beside, batches, now
        self.reader, self.known = RawReader(site), Known()
        self.later = _with_later_versions(batches)
        self.failures: list[Failure] = []
        self.kept = self.recomputed = self.written = self.other_bytes = 0

    def take(self, batch: RecordedBatch) -> None:
        """Bring one batch into the new warehouse, from the lake or computed again."""
        self.known.learn(batch)
        rows = _rows_in_lake(self.site, batch)
        if rows is not None:
            writer.load(self.beside, rows, as_batch(batch))
            self.kept += 1
            return
        try:
            restored = self._recomputed(batch)
        except HalfsatError as error:
            self.failures.append(Failure(batch.where, self._reason(batch, error)))
        else:
            writer.load(self.beside, stored_rows(self.site, restored), as_batch(restored))
            self.recomputed += 1

    def _recomputed(self, batch: RecordedBatch) -> RecordedBatch:
        if self.failures and any(file.table_name == LOT_VALUES.name for file in batch.lake_files):
            raise HalfsatError("its lot values rest on results that could not be rebuilt")
        scratch = Site(self.beside.warehouse / "documents")
        restorer = _Restorer(self.site, batch, self.later)

        def put_readings(plate_read_id: str, frame: pd.DataFrame) -> None:
            restorer.put(READINGS.name, plate_read_id, frame)

        try:
            frames = recompute(self.beside, self.reader, self.known, batch, scratch, put_readings)
        except (KeyError, ValueError) as error:
            if self._versions(batch) <= {code_version()}:
                raise
            raise HalfsatError(f"this code cannot carry out the recipe: {error!r}") from error
        runs = frames.get(GATE_RUNS.name)
        if runs is not None:
            self._keep_documents(batch, scratch, list(runs["gate_run_id"]))
        restorer.put_all(frames)
        record_rebuilt(self.site, restorer.replaced, self.now)
        self.written += restorer.written
        self.other_bytes += len(restorer.replaced)
        return restorer.batch_now()

    def _keep_documents(self, batch: RecordedBatch, scratch: Site, made: Sequence[str]) -> None:
        recorded = {str(row["gate_run_id"]): str(row["file"]) for row in batch.rows(GATE_RUNS.name)}
        if recorded and set(recorded) != set(made):
            raise _Unlike(f"{len(set(recorded) ^ set(made))} gate documents are not what was stored")
        for gate_run_id, file in recorded.items():
            content = (scratch.gate_documents / f"{gate_run_id}.json").read_bytes()
            path = self.site.root / file
            if not path.is_file() or path.read_bytes() != content:
                write_durably(path, content, mode=0o444)
        shutil.rmtree(scratch.root, ignore_errors=True)

    def _versions(self, batch: RecordedBatch) -> set[str]:
        """Versions of the code that made a batch's results."""
        found = set()
        for row in batch.rows(ANALYSES.name):
            found.add(self.reader.recipe(str(row["recipe_id"])).code_version)
        return found

    def _reason(self, batch: RecordedBatch, error: HalfsatError) -> str:
        try:
            others = sorted(self._versions(batch) - {code_version()})
        except HalfsatError:
            others = []
        if not others:
            return str(error)
        return (
            f"{error}; it was made by halfsat {', '.join(others)}, and this is {code_version()} "
            "(rebuild with that version first, then with this one)"
        )


def _rows_in_lake(site: Site, batch: RecordedBatch) -> dict[str, pa.Table] | None:
    """Rows of a batch as the lake has them; None where they must be computed again."""
    if not _whole(site, batch):
        return None
    try:
        return stored_rows(site, batch)
    except SiteError:
        # A column that must be known now was not there when the files were written.
        return None


def _whole(site: Site, batch: RecordedBatch) -> bool:
    """Whether every lake file and gate document of a batch is as it was written."""
    return all(lake.locate(site, file.path, file.sha256) is not None for file in batch.lake_files) and all(
        read_run(
            site, str(row["gate_run_id"]), str(row["suite"]), str(row["recipe_id"]), str(row["file"])
        ).condition
        == "unchanged"
        for row in batch.rows(GATE_RUNS.name)
        if "file" in row
    )


def _with_later_versions(batches: Sequence[RecordedBatch]) -> set[tuple[str, str]]:
    """Path and digest of every lake file that a later batch wrote over."""
    last = {file.path: file.sha256 for batch in batches for file in batch.lake_files}
    return {
        (file.path, file.sha256)
        for batch in batches
        for file in batch.lake_files
        if last[file.path] != file.sha256
    }


def _as_stored(file: LakeFile, frame: pd.DataFrame) -> pd.DataFrame:
    """Rows without what only a later version of the tables would say of them."""
    if not file.columns:
        return frame
    since = [c.name for c in table(file.table_name).columns if c.name not in file.columns and c.nullable]
    return frame.assign(**dict.fromkeys(since)) if since else frame


def _has_all_columns(file: LakeFile) -> bool:
    """Whether a file was written with every column that must be known now."""
    return all(c.nullable or c.name in file.columns for c in table(file.table_name).columns)


def _unlike_columns(file: LakeFile, now: LakeFile) -> str:
    """What keeps rows from being those that were stored; empty where they are."""
    if now.row_count != file.row_count:
        return f"{now.row_count} rows come out, and {file.row_count} were stored"
    if not file.columns:
        return "the ledger has no digests of its columns to hold what comes out against"
    unlike = [name for name, digest in file.columns.items() if now.columns.get(name) != digest]
    return f"{', '.join(unlike)} come out otherwise than stored" if unlike else ""


def _put_in_place(site: Site, beside: Site) -> dict[str, int]:
    """Put the new warehouse in the old one's place; count its rows."""
    with writer.loader(beside) as connection:
        counts = {}
        for each in STORED:
            row = connection.execute(f"SELECT count(*) FROM {each.name}").fetchone()
            counts[each.name] = int(row[0]) if row else 0
        connection.execute("CHECKPOINT")
    # The old file's log must never be read into the new one; killed in between, the next pass loads the lake.
    site.loader_file.unlink(missing_ok=True)
    site.loader_file.with_name(site.loader_file.name + ".wal").unlink(missing_ok=True)
    beside.loader_file.replace(site.loader_file)
    sync_folder(site.warehouse)
    return counts
