"""The lake: Parquet files, one a plate read or one a batch and table, written whole and never changed.

The schema is that of models.tables. Which files belong to which batch, ledger and warehouse know.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Literal

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from flows.site.durable import write_durably
from flows.site.layout import Site
from models.errors import SiteError
from models.identity import content_id
from models.tables import table

# Earlier versions of a file lie below this folder, where no view over the lake looks.
EARLIER = "earlier"
_ROWS_A_GROUP = 122_880
_READ_ONLY = 0o444


@dataclass(frozen=True)
class LakeFile:
    """One Parquet file of the lake.

    Attributes
    ----------
    path
        Where it is, below the site's folder, with forward slashes.
    sha256
        Digest of its bytes.
    """

    path: str
    sha256: str
    table_name: str
    row_count: int
    byte_count: int


def encode_rows(table_name: str, frame: pd.DataFrame) -> bytes:
    """Rows as Parquet bytes: the same rows give the same bytes.

    Raises
    ------
    UnknownName
        If there is no such table.
    KeyError, pyarrow.ArrowInvalid
        If the rows do not fit the table.
    """
    sink = pa.BufferOutputStream()
    pq.write_table(
        table(table_name).to_arrow(frame),
        sink,
        compression="zstd",
        compression_level=3,
        row_group_size=_ROWS_A_GROUP,
        store_schema=True,
    )
    return sink.getvalue().to_pybytes()


def write_rows(site: Site, table_name: str, file_stem: str, frame: pd.DataFrame) -> LakeFile:
    """Write rows as `lake/<table>/<file_stem>.parquet`.

    The same rows again change nothing. Other rows under the same name (readings of a plate read after its
    profile was mended) put the earlier file away under `lake/earlier/` first, so that older results keep
    what they rest on.

    Parameters
    ----------
    table_name
        A table of models.tables.
    file_stem
        Name of the file: the plate read's id, or the batch's.
    frame
        The rows, with at least the table's columns.

    Raises
    ------
    KeyError, pyarrow.ArrowInvalid
        If the rows do not fit the table.
    OSError
        If the file cannot be written.
    """
    return write_encoded(site, table_name, file_stem, encode_rows(table_name, frame), len(frame))


def write_encoded(site: Site, table_name: str, file_stem: str, content: bytes, row_count: int) -> LakeFile:
    """Write Parquet bytes from `encode_rows`; otherwise as `write_rows`."""
    path = lake_path(site, table_name, file_stem)
    kept = LakeFile(_below(site, path), content_id(content), table_name, row_count, len(content))
    try:
        present = path.read_bytes()
    except FileNotFoundError:
        present = None
    if present == content:
        return kept
    if present is not None:
        write_durably(_earlier_path(site, path, content_id(present)), present, mode=_READ_ONLY)
    write_durably(path, content, mode=_READ_ONLY)
    return kept


def read_rows(site: Site, table_name: str, file_stem: str) -> pd.DataFrame:
    """Rows of one file, in the table's columns.

    Raises
    ------
    SiteError
        If the file is missing or damaged.
    """
    frame: pd.DataFrame = _read(lake_path(site, table_name, file_stem)).to_pandas()
    return frame


def read_arrow(site: Site, path: str, sha256: str) -> pa.Table:
    """Rows of the file that was at `path` when it had this digest, wherever it lies now.

    Raises
    ------
    SiteError
        If no file with that digest is there any more.
    """
    found = locate(site, path, sha256)
    if found is None:
        raise SiteError(
            f"the lake file {path} is missing or has changed",
            where=str(site.root),
            remedy="bring it back from a backup, or have the lake rebuilt from raw/",
        )
    return _read(found)


def locate(site: Site, path: str, sha256: str) -> Path | None:
    """Where the file with this digest lies now: in its place or among the earlier versions, or None."""
    current = site.root / path
    for candidate in (current, _earlier_path(site, current, sha256)):
        if candidate.is_file() and content_id(candidate.read_bytes()) == sha256:
            return candidate
    return None


def condition(site: Site, path: str, sha256: str) -> Literal["unchanged", "changed", "missing"]:
    """Whether a lake file is as it was written."""
    if locate(site, path, sha256) is not None:
        return "unchanged"
    return "changed" if (site.root / path).is_file() else "missing"


def lake_path(site: Site, table_name: str, file_stem: str) -> Path:
    """Where a file of the lake lies."""
    return site.lake / table_name / f"{file_stem}.parquet"


def describe(site: Site, table_name: str, file_stem: str) -> LakeFile:
    """What a file that is there already holds.

    Raises
    ------
    SiteError
        If it is missing or damaged.
    """
    path = lake_path(site, table_name, file_stem)
    rows = _metadata(path).num_rows
    content = path.read_bytes()
    return LakeFile(_below(site, path), content_id(content), table_name, rows, len(content))


def _metadata(path: Path) -> pq.FileMetaData:
    try:
        return pq.read_metadata(path)
    except (FileNotFoundError, pa.ArrowInvalid, OSError) as error:
        raise _unreadable(path, error) from error


def _read(path: Path) -> pa.Table:
    try:
        # Not through pyarrow's dataset layer, which would guess partitions from folder names.
        return pq.ParquetFile(path).read()
    except (FileNotFoundError, pa.ArrowInvalid, OSError) as error:
        raise _unreadable(path, error) from error


def _unreadable(path: Path, error: Exception) -> SiteError:
    what = "the lake file is missing" if isinstance(error, FileNotFoundError) else "the lake file is damaged"
    return SiteError(what, where=str(path), remedy="have the lake rebuilt from raw/")


def _earlier_path(site: Site, path: Path, sha256: str) -> Path:
    below = path.relative_to(site.lake)
    return site.lake / EARLIER / below.parent / f"{below.stem}.{sha256[:12]}.parquet"


def _below(site: Site, path: Path) -> str:
    return path.relative_to(site.root).as_posix()
