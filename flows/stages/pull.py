"""The first step of a pass: find what is new in the inbox and copy it into the raw archive before all else.

Knows files and hashes only; what a file holds is found out by the next step.
"""

from __future__ import annotations

import logging
import os
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from datetime import datetime
from pathlib import Path
from typing import Protocol

from flows import ledger
from flows.site import archive
from flows.site.layout import Site
from models.errors import SiteError
from models.identity import Json, content_id

log = logging.getLogger(__name__)

# Names under which programs keep a file while they write it.
_TEMPORARY_ENDINGS = (".tmp", ".temp", ".part", ".partial", ".filepart", ".crdownload", ".swp", "~")
_TEMPORARY_BEGINNINGS = (".", "~$", "#")
_FILES_A_CHUNK = 64


class InboxSettings(Protocol):
    """What pulling needs to know of a site's settings."""

    @property
    def inbox(self) -> str:
        """Folder of the inbox, below the site or absolute."""

    @property
    def settle_s(self) -> float:
        """How long a file must have stayed unchanged, s."""


@dataclass(frozen=True)
class PulledFile:
    """A file whose bytes are in the raw archive.

    Attributes
    ----------
    file_id
        SHA-256 of its bytes.
    file_name
        Its name without folders, as it was first seen.
    received_at
        When it was first pulled, UTC.
    path
        Where its bytes are in the archive.
    """

    file_id: str
    file_name: str
    received_at: datetime
    path: Path

    @property
    def content(self) -> bytes:
        """Its bytes, read from the archive and checked against the hash.

        Raises
        ------
        SiteError
            If the archived file has changed.
        """
        content = self.path.read_bytes()
        if content_id(content) != self.file_id:
            raise SiteError("the raw file has changed since it was accepted", where=str(self.path))
        return content


@dataclass(frozen=True)
class KnownFile:
    """What the ledger knows of one file.

    Attributes
    ----------
    names
        Every path in the inbox under which its bytes were seen, the first one first.
    kind
        export, plate_map or quarantined; None while nothing has been loaded of it.
    analysed
        Ids of its plate reads that have been analysed.
    """

    file_id: str
    file_name: str
    received_at: datetime
    byte_count: int
    names: tuple[str, ...]
    kind: str | None = None
    analysed: frozenset[str] = frozenset()


def known_files(site: Site) -> dict[str, KnownFile]:
    """Every file that was ever accepted, by id, as the ledger tells it.

    Raises
    ------
    LedgerError
        If a line of the ledger is no entry.
    """
    known: dict[str, KnownFile] = {}
    exports: dict[str, str] = {}
    for entry in ledger.entries(site):
        body = entry.body
        if entry.kind == "file_accepted":
            file_id, name = str(body["file_id"]), str(body["file_name"])
            size = int(str(body["byte_count"]))
            known.setdefault(file_id, KnownFile(file_id, name, entry.time, size, (str(body["path"]),)))
        elif entry.kind == "file_seen_again":
            file_id = str(body["file_id"])
            known[file_id] = replace(known[file_id], names=(*known[file_id].names, str(body["path"])))
        for row in _rows(body, "files"):
            if (file_id := str(row["file_id"])) in known:
                known[file_id] = replace(known[file_id], kind=str(row["kind"]))
        exports.update(
            (str(row["plate_read_id"]), str(row["export_id"])) for row in _rows(body, "plate_reads")
        )
        for row in _rows(body, "analyses"):
            plate_read_id = str(row["plate_read_id"])
            if (file_id := exports.get(plate_read_id, "")) in known:
                file = known[file_id]
                known[file_id] = replace(file, analysed=file.analysed | {plate_read_id})
    return known


def pull(
    site: Site, settings: InboxSettings, now: datetime, known: Mapping[str, KnownFile] | None = None
) -> list[PulledFile]:
    """Copy what is new in the inbox into the raw archive and record it.

    A file that is hidden, has the name of a temporary file, is no regular file, or was changed within
    `settle_s` or while it was read, is left for the next pass. Bytes that are known already are passed over;
    a new name for them is recorded. The inbox itself is not changed.

    Each file is in the archive before the ledger says so. Killed in between, the next pass finds the bytes
    archived and unrecorded, and takes them as new.

    Parameters
    ----------
    settings
        The site's settings: inbox and settling time.
    now
        The time of the pass, UTC.
    known
        What `known_files` says, if the caller has asked already.

    Returns
    -------
    list of PulledFile
        The new files, and those that an earlier pass accepted but did not come to load, in order of names.

    Raises
    ------
    SiteError
        If there is no inbox.
    """
    index = dict(known_files(site) if known is None else known)
    unfinished = [file for file in index.values() if file.kind is None]
    pulled = [_pulled(site, file) for file in unfinished]
    events: list[tuple[ledger.Kind, Mapping[str, Json]]] = []
    for name, content in _settled_files(_inbox(site, settings), settings.settle_s, now):
        file_id = content_id(content)
        if file_id not in index:
            archive.keep(site, content)
            index[file_id] = KnownFile(file_id, name.rpartition("/")[2], now, len(content), (name,))
            pulled.append(_pulled(site, index[file_id]))
            events.append(("file_accepted", _accepted(index[file_id])))
        elif name not in index[file_id].names:
            index[file_id] = replace(index[file_id], names=(*index[file_id].names, name))
            events.append(("file_seen_again", {"file_id": file_id, "path": name}))
        if len(events) >= _FILES_A_CHUNK:
            ledger.append_all(site, events, at=now)
            events = []
    if events:
        ledger.append_all(site, events, at=now)
    return sorted(pulled, key=lambda file: (file.file_name, file.file_id))


def _pulled(site: Site, file: KnownFile) -> PulledFile:
    return PulledFile(file.file_id, file.file_name, file.received_at, archive.raw_path(site, file.file_id))


def _accepted(file: KnownFile) -> dict[str, Json]:
    return {
        "file_id": file.file_id,
        "file_name": file.file_name,
        "path": file.names[0],
        "byte_count": file.byte_count,
    }


def _rows(body: Mapping[str, Json], name: str) -> Iterator[Mapping[str, Json]]:
    rows = body.get(name)
    for row in rows if isinstance(rows, list) else ():
        if isinstance(row, Mapping):
            yield row


def _inbox(site: Site, settings: InboxSettings) -> Path:
    inbox = site.root / settings.inbox
    if not inbox.is_dir():
        raise SiteError(
            "there is no inbox",
            where=str(inbox),
            remedy="make the folder, or name another in config/site.toml",
        )
    return inbox


def inbox_names(inbox: Path) -> list[str]:
    """Paths below a local inbox of the files that a pass would look at, with forward slashes, in order."""
    return sorted(_printable(path.relative_to(inbox).as_posix()) for path in _regular_files(inbox))


def _settled_files(inbox: Path, settle_s: float, now: datetime) -> Iterator[tuple[str, bytes]]:
    """Paths below the inbox with forward slashes, and bytes, of all files that nobody is writing."""
    for path in sorted(_regular_files(inbox)):
        name = _printable(path.relative_to(inbox).as_posix())
        try:
            before = path.stat()
            if settle_s > 0 and now.timestamp() - before.st_mtime < settle_s:
                continue
            content = path.read_bytes()
            after = path.stat()
        except FileNotFoundError:
            continue
        except OSError as error:
            log.warning("%s in the inbox cannot be read: %s", name, error.strerror)
            continue
        if (
            (before.st_size, before.st_mtime_ns)
            == (after.st_size, after.st_mtime_ns)
            == (
                len(content),
                before.st_mtime_ns,
            )
        ):
            yield name, content


def _regular_files(folder: Path) -> Iterator[Path]:
    try:
        found = list(os.scandir(folder))
    except FileNotFoundError:
        return
    except OSError as error:
        log.warning("the folder %s of the inbox cannot be read: %s", folder.name, error.strerror)
        return
    for entry in found:
        if entry.name.startswith(_TEMPORARY_BEGINNINGS) or entry.name.lower().endswith(_TEMPORARY_ENDINGS):
            continue
        # A link could lead out of the inbox or round in a circle; a pipe would never end.
        if entry.is_dir(follow_symlinks=False):
            yield from _regular_files(Path(entry.path))
        elif entry.is_file(follow_symlinks=False):
            yield Path(entry.path)


def _printable(name: str) -> str:
    """A file name that can be written as UTF-8, whatever bytes it has on disk."""
    return os.fsencode(name).decode("utf-8", errors="backslashreplace")
