"""The lake: Parquet files, one a plate read or one a batch and table, written whole and never changed.

The schema is that of models.tables. Which files belong to which batch, ledger and warehouse know.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Literal

import numpy as np
import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq

from flows.site.durable import write_durably
from flows.site.layout import Site
from models.errors import SiteError
from models.identity import canonical_json, content_id
from models.tables import Table, table

# Earlier versions of a file lie below this folder, where no view over the lake looks.
EARLIER = "earlier"
_ROWS_A_GROUP = 122_880
_READ_ONLY = 0o444
_DIGESTS_KEY = b"halfsat.columns"
_DIGEST_LENGTH = 16
_REBUILD = "make it again from raw/: halfsat rebuild"


@dataclass(frozen=True)
class LakeFile:
    """One Parquet file of the lake.

    Attributes
    ----------
    path
        Where it is, below the site's folder, with forward slashes.
    sha256
        Digest of its bytes.
    columns
        Digest of each column's values (`column_digests`): the same rows have the same, whatever release of
        the Parquet library wrote the bytes. Empty for files of before there were any.
    """

    path: str
    sha256: str
    table_name: str
    row_count: int
    byte_count: int
    columns: Mapping[str, str] = field(default_factory=dict)


def encode_rows(table_name: str, frame: pd.DataFrame) -> bytes:
    """Rows as Parquet bytes: the same rows give the same bytes.

    Raises
    ------
    UnknownName
        If there is no such table.
    KeyError, pyarrow.ArrowInvalid
        If the rows do not fit the table.
    """
    arrow = table(table_name).to_arrow(frame)
    digests = canonical_json(column_digests(arrow)).encode()
    sink = pa.BufferOutputStream()
    pq.write_table(
        arrow.replace_schema_metadata({_DIGESTS_KEY: digests}),
        sink,
        compression="zstd",
        compression_level=3,
        row_group_size=_ROWS_A_GROUP,
        store_schema=True,
    )
    return sink.getvalue().to_pybytes()


def column_digests(rows: pa.Table) -> dict[str, str]:
    """Digest of each column's values in their order: first 16 hexadecimal digits of a SHA-256.

    Depends on the values alone, not on how Arrow or Parquet lay them out.
    """
    return {name: _column_digest(rows.column(name)) for name in rows.column_names}


def _column_digest(column: pa.ChunkedArray[pa.Scalar[pa.DataType]]) -> str:
    whole = pa.concat_arrays(column.chunks) if column.num_chunks else pa.array([], column.type)
    known = np.asarray(whole.is_valid())
    hashed = hashlib.sha256(f"{len(whole)}:".encode())
    hashed.update(np.packbits(known).tobytes())
    if pa.types.is_string(whole.type) or pa.types.is_large_string(whole.type):
        encoded = whole.dictionary_encode()
        hashed.update(canonical_json(encoded.dictionary.to_pylist()).encode())
        hashed.update(np.asarray(encoded.indices.fill_null(-1)).astype("<i4").tobytes())
    elif pa.types.is_floating(whole.type):
        values = np.asarray(whole.to_numpy(zero_copy_only=False), dtype="<f8")
        hashed.update(np.where(known, values, 0.0).tobytes())
    else:
        hashed.update(np.asarray(whole.cast(pa.int64()).fill_null(0)).astype("<i8").tobytes())
    return hashed.hexdigest()[:_DIGEST_LENGTH]


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
    kept = described(_below(site, path), table_name, content, row_count)
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


def described(path: str, table_name: str, content: bytes, row_count: int) -> LakeFile:
    """What a file with these bytes would be, without writing it."""
    digests = _kept_digests(pq.read_metadata(pa.BufferReader(content)))
    return LakeFile(path, content_id(content), table_name, row_count, len(content), digests)


def restore(site: Site, file: LakeFile, content: bytes, *, later: bool) -> None:
    """Put the bytes of a file that was lost or damaged back where they belong.

    Parameters
    ----------
    file
        The file as it is recorded.
    content
        Its bytes.
    later
        Whether a later version of it lies, or will lie, in its place: then this one goes below `earlier/`.
    """
    path = site.root / file.path
    if later:
        path = _earlier_path(site, path, content_id(content))
    write_durably(path, content, mode=_READ_ONLY)


def read_rows(site: Site, table_name: str, file_stem: str) -> pd.DataFrame:
    """Rows of one file, in the table's columns.

    Raises
    ------
    SiteError
        If the file is missing or damaged.
    """
    path = lake_path(site, table_name, file_stem)
    frame: pd.DataFrame = conformed(table(table_name), _read(path), str(path)).to_pandas()
    return frame


def read_arrow(site: Site, path: str, sha256: str, table_name: str | None = None) -> pa.Table:
    """Rows of the file that was at `path` when it had this digest, wherever it lies now.

    Parameters
    ----------
    table_name
        The table whose columns the rows shall have; None leaves them as they were written.

    Raises
    ------
    SiteError
        If no file with that digest is there any more, or its rows cannot be given the table's columns.
    """
    found = locate(site, path, sha256)
    if found is None:
        raise SiteError(
            f"the lake file {path} is missing or has changed",
            where=str(site.root),
            remedy=_REBUILD,
        )
    rows = _read(found)
    return rows if table_name is None else conformed(table(table_name), rows, path)


def conformed(declared: Table, rows: pa.Table, where: str) -> pa.Table:
    """Rows that an earlier version wrote, with exactly the columns that the table has now.

    A column that was not there yet is NULL in every row; one that the table has no more is left out.

    Parameters
    ----------
    declared
        The table as it is now.
    rows
        The rows as they were written.
    where
        The file, as a message names it.

    Raises
    ------
    SiteError
        If a column that must be known was not there yet, or has values that do not fit its kind.
    """
    schema = declared.arrow_schema()
    if rows.schema.equals(schema):
        return rows
    columns = []
    for column in schema:
        if column.name in rows.column_names:
            found = rows.column(column.name)
        else:
            found = pa.chunked_array([pa.nulls(rows.num_rows, column.type)])
        try:
            found = found.cast(column.type)
        except (pa.ArrowInvalid, pa.ArrowNotImplementedError) as error:
            raise SiteError(
                f"{declared.name}.{column.name} was written as {found.type} and is {column.type} now",
                where=where,
                remedy=_REBUILD,
            ) from error
        if found.null_count and not column.nullable:
            raise SiteError(
                f"{declared.name}.{column.name} must be known now; {found.null_count} rows do not have it",
                where=where,
                remedy=_REBUILD,
            )
        columns.append(found)
    return pa.Table.from_arrays(columns, schema=schema)


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
    metadata = _metadata(path)
    content = path.read_bytes()
    digests = _kept_digests(metadata)
    return LakeFile(
        _below(site, path), content_id(content), table_name, metadata.num_rows, len(content), digests
    )


def _kept_digests(metadata: pq.FileMetaData) -> dict[str, str]:
    kept = (metadata.metadata or {}).get(_DIGESTS_KEY)
    return {} if kept is None else {str(name): str(each) for name, each in json.loads(kept).items()}


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
    return SiteError(what, where=str(path), remedy=_REBUILD)


def _earlier_path(site: Site, path: Path, sha256: str) -> Path:
    below = path.relative_to(site.lake)
    return site.lake / EARLIER / below.parent / f"{below.stem}.{sha256[:12]}.parquet"


def _below(site: Site, path: Path) -> str:
    return path.relative_to(site.root).as_posix()
