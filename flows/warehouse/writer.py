"""The one writer of the warehouse: whole batches in one transaction each, and the published copy.

Whoever calls it holds the site's pass lock. Rows arrive as frames and go in through Arrow, never one by one.
"""

from __future__ import annotations

import hashlib
import re
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path

import duckdb
import pandas as pd
import pyarrow as pa

from flows.lake import LakeFile
from flows.site.durable import make_folder, replacing, sync_folder
from flows.site.layout import Site
from flows.warehouse.bookkeeping import LAKE_FILES, LOADS, STORED
from flows.warehouse.migrations import DamagedWarehouse
from flows.warehouse.schema import prepare
from models.errors import SiteError
from models.tables import ANALYSES, FILES, LOT_VALUES, PASSES, Table

# A pass ends, a file is read after all, a lot is looked at again: these rows alone may change.
_MAY_CHANGE: dict[str, tuple[str, ...]] = {
    PASSES.name: tuple(name for name in PASSES.column_names if name != "pass_id"),
    FILES.name: ("kind", "profile", "reason"),
    LOT_VALUES.name: tuple(name for name in LOT_VALUES.column_names if name != "lot_value_id"),
}
_COPY_BLOCK = 1 << 22
_VERSIONED = re.compile(r"published-(\d{8})\.duckdb")


@dataclass(frozen=True)
class Batch:
    """Where rows that are loaded together are recorded.

    Attributes
    ----------
    batch_id
        Digest of the pass and the rows. A batch that is in the warehouse is not loaded again.
    ledger_seq
        The ledger's entry about it.
    loaded_at
        When it was recorded, UTC.
    lake_files
        The lake files that hold its rows.
    """

    batch_id: str
    ledger_seq: int
    loaded_at: datetime
    lake_files: Sequence[LakeFile] = field(default_factory=tuple)


@dataclass(frozen=True)
class Published:
    """A published copy of the warehouse.

    Attributes
    ----------
    version
        Number of the copy, counted from 1.
    sha256
        Digest of its bytes.
    """

    path: Path
    version: int
    sha256: str
    byte_count: int


@contextmanager
def loader(site: Site) -> Iterator[duckdb.DuckDBPyConnection]:
    """Open the loader's database, made ready with all tables and views.

    Raises
    ------
    SiteError
        If another process has it open, or it was made by a newer version of halfsat.
    DamagedWarehouse
        If it is no readable database, or one of an earlier version that must be made again.
    """
    make_folder(site.warehouse)
    connection = _connect(site)
    try:
        connection.execute("SET TimeZone = 'UTC'")
        prepare(connection, site)
        yield connection
    finally:
        connection.close()


def load(site: Site, tables: Mapping[str, pd.DataFrame | pa.Table], batch: Batch | None = None) -> bool:
    """Load rows of any tables in one transaction: all of them are in afterwards, or none.

    Rows that are there already stay as they are, but for passes, files (what was read after all) and lot
    values. An analysis that comes in becomes the current one of its plate read; the one before it is marked
    as superseded by it.

    Parameters
    ----------
    tables
        Rows by table name; tables that live in the lake only are passed over.
    batch
        Where the rows are recorded. A batch that was loaded before changes nothing.

    Returns
    -------
    bool
        False where the batch was there already.

    Raises
    ------
    SiteError
        If the warehouse cannot be opened.
    ValueError
        If two rows of a table have the same key, or there is no such table.
    KeyError, pyarrow.ArrowInvalid
        If rows do not fit their table.
    """
    stored = {each.name: each for each in STORED}
    unknown = set(tables) - set(stored) - {"readings"}
    if unknown:
        raise ValueError(f"the warehouse has no table {sorted(unknown)[0]}")
    rows = {name: _as_arrow(stored[name], tables[name]) for name in stored if name in tables}
    with loader(site) as connection:
        if batch is not None and batch.batch_id in loaded_batches(connection):
            return False
        connection.begin()
        try:
            for name, incoming in rows.items():
                _insert(connection, stored[name], incoming)
            if ANALYSES.name in rows:
                _supersede(connection, rows[ANALYSES.name])
            if batch is not None:
                _record(connection, batch)
            connection.commit()
        except BaseException:
            connection.rollback()
            raise
    return True


def loaded_batches(connection: duckdb.DuckDBPyConnection) -> set[str]:
    """Ids of the batches that a warehouse holds."""
    return {str(row[0]) for row in connection.execute(f"SELECT batch_id FROM {LOADS.name}").fetchall()}


def publish(site: Site, *, keep: int = 3) -> Published:
    """Put a copy of the warehouse before its readers in one step.

    The copy gets a new name and the link is replaced: open readers keep what they see, the next ones see the
    new copy. Where nothing has changed since the last copy, that one stays.

    Parameters
    ----------
    keep
        How many copies stay on disk, the new one included.

    Raises
    ------
    SiteError
        If the warehouse cannot be opened.
    """
    with loader(site) as connection:
        connection.execute("CHECKPOINT")
    earlier = _copies(site)
    version = max(earlier, default=0) + 1
    path = site.warehouse / f"published-{version:08d}.duckdb"
    with replacing(path, mode=0o444) as part:
        sha256, byte_count = _copy(site.loader_file, part)
    latest = site.published_link.resolve()
    if latest.is_file() and latest.stat().st_size == byte_count and _sha256(latest) == sha256:
        path.unlink()
        return Published(latest, int(latest.stem.rpartition("-")[2]), sha256, byte_count)
    _point(site.published_link, path)
    for old in sorted(earlier)[: max(0, len(earlier) + 1 - max(1, keep))]:
        earlier[old].unlink()
    sync_folder(site.warehouse)
    return Published(path, version, sha256, byte_count)


def _connect(site: Site) -> duckdb.DuckDBPyConnection:
    try:
        return duckdb.connect(str(site.loader_file))
    except duckdb.Error as error:
        if "lock" in str(error).lower():
            raise SiteError(
                "the warehouse is being written by another process",
                where=str(site.loader_file),
                remedy="wait until it has finished; to read, open warehouse/published.duckdb",
            ) from error
        raise DamagedWarehouse(
            "the warehouse is damaged and cannot be opened",
            where=str(site.loader_file),
            remedy="the next pass makes it again from the lake",
        ) from error


def _as_arrow(table: Table, rows: pd.DataFrame | pa.Table) -> pa.Table:
    arrow = rows if isinstance(rows, pa.Table) else table.to_arrow(rows)
    keys = list(table.key)
    if arrow.select(keys).group_by(keys).aggregate([]).num_rows != arrow.num_rows:
        raise ValueError(f"two rows of {table.name} have the same {', '.join(keys)}")
    return arrow


def _insert(connection: duckdb.DuckDBPyConnection, table: Table, incoming: pa.Table) -> None:
    changes = ", ".join(f"{name} = excluded.{name}" for name in _MAY_CHANGE.get(table.name, ()))
    action = f"UPDATE SET {changes}" if changes else "NOTHING"
    names = ", ".join(table.column_names)
    connection.register("incoming", incoming)
    connection.execute(
        f"INSERT INTO {table.name} ({names}) SELECT {names} FROM incoming "
        f"ON CONFLICT ({', '.join(table.key)}) DO {action}"
    )
    connection.unregister("incoming")


def _supersede(connection: duckdb.DuckDBPyConnection, incoming: pa.Table) -> None:
    connection.register("incoming", incoming)
    connection.execute(
        "CREATE TEMP TABLE latest AS SELECT plate_read_id, arg_max(analysis_id, revision) AS analysis_id "
        "FROM incoming GROUP BY plate_read_id"
    )
    connection.execute(
        "UPDATE analyses SET superseded_by = latest.analysis_id FROM latest "
        "WHERE analyses.plate_read_id = latest.plate_read_id "
        "AND analyses.analysis_id <> latest.analysis_id AND analyses.superseded_by IS NULL"
    )
    connection.execute(
        "UPDATE analyses SET superseded_by = NULL FROM latest "
        "WHERE analyses.analysis_id = latest.analysis_id AND analyses.superseded_by IS NOT NULL"
    )
    connection.execute("DROP TABLE latest")
    connection.unregister("incoming")


def _record(connection: duckdb.DuckDBPyConnection, batch: Batch) -> None:
    load_row = pd.DataFrame(
        {
            "batch_id": [batch.batch_id],
            "ledger_seq": [batch.ledger_seq],
            "loaded_at": pd.to_datetime([batch.loaded_at], utc=True),
        }
    )
    _insert(connection, LOADS, LOADS.to_arrow(load_row))
    if batch.lake_files:
        files = pd.DataFrame([{**vars(each), "batch_id": batch.batch_id} for each in batch.lake_files])
        _insert(connection, LAKE_FILES, LAKE_FILES.to_arrow(files))


def _copies(site: Site) -> dict[int, Path]:
    found = ((_VERSIONED.fullmatch(path.name), path) for path in site.warehouse.iterdir())
    return {int(match[1]): path for match, path in found if match}


def _copy(source: Path, target: Path) -> tuple[str, int]:
    digest, byte_count = hashlib.sha256(), 0
    with source.open("rb") as reading, target.open("wb") as writing:
        while block := reading.read(_COPY_BLOCK):
            digest.update(block)
            byte_count += len(block)
            writing.write(block)
    return digest.hexdigest(), byte_count


def _sha256(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def _point(link: Path, target: Path) -> None:
    # Relative, so that the site can be moved or mounted elsewhere.
    part = link.with_name(f".{link.name}.part")
    part.unlink(missing_ok=True)
    part.symlink_to(target.name)
    part.replace(link)
    sync_folder(link.parent)
