"""The ledger: an append-only file of JSON lines, each holding the hash of the one before.

Any edit breaks the chain. Knows nothing of what its entries mean; times are given to it.
"""

from __future__ import annotations

import fcntl
import json
import os
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import BinaryIO, Literal

from flows.site.durable import make_folder, sync_folder
from flows.site.layout import Site
from models.errors import LedgerError
from models.identity import Json, canonical_json, digest

Kind = Literal[
    "site_created",
    "file_accepted",
    "file_seen_again",
    "file_quarantined",
    "recipe_kept",
    "analysis_loaded",
    "tables_loaded",
    "lake_rebuilt",
    "pass_started",
    "pass_finished",
    "published",
    "verified",
    "digest_written",
    "ledger_repaired",
    "reviewer_added",
    "reviewer_disabled",
    "password_reset",
    "plate_signed",
    "plate_countersigned",
]

GENESIS = "0" * 64
_BLOCK = 1 << 16
_RESTORE = "bring ledger/ back from a backup of the site"


@dataclass(frozen=True)
class Entry:
    """One line of the ledger.

    Attributes
    ----------
    seq
        Place in the ledger, counted from 1.
    time
        When it was written, UTC.
    previous, hash
        Hash of the entry before, and of this one with everything but the hash itself.
    """

    seq: int
    time: datetime
    kind: str
    actor: str
    body: Mapping[str, Json]
    previous: str
    hash: str


def append(
    site: Site, kind: Kind, body: Mapping[str, Json], *, at: datetime, actor: str = "halfsat"
) -> Entry:
    """Write one entry at the end and wait until it is on the disk. See `append_all`."""
    return append_all(site, [(kind, body)], at=at, actor=actor)[0]


def append_all(
    site: Site, events: Sequence[tuple[Kind, Mapping[str, Json]]], *, at: datetime, actor: str = "halfsat"
) -> list[Entry]:
    """Write entries at the end, all in one go, and wait until they are on the disk.

    Only the end of the file is read. A last line that a power failure left incomplete is cut off first, and
    the cut is recorded as an entry of its own.

    Parameters
    ----------
    events
        Kind and body of each entry.
    at
        When it happened, with its time zone.
    actor
        Who did it.

    Raises
    ------
    LedgerError
        If the last whole line is no entry, or was edited.
    OSError
        If it cannot be written; the ledger is then as it was.
    """
    if at.tzinfo is None:
        raise ValueError("a ledger time needs its time zone")
    make_folder(site.ledger)
    is_new = not site.ledger_file.exists()
    with _locked(site, "ab+", fcntl.LOCK_EX) as file:
        last, torn = _tail(file, str(site.ledger_file))
        end = file.seek(0, os.SEEK_END) - len(torn)
        if torn:
            file.truncate(end)
            repair: dict[str, Json] = {"dropped_byte_count": len(torn), "dropped": _shown(torn)}
            events = [("ledger_repaired", repair), *events]
        written: list[Entry] = []
        for kind, body in events:
            last = _next_entry(last, kind, body, at, actor)
            written.append(last)
        try:
            _write_all(file.fileno(), b"".join(_line(entry) for entry in written))
            os.fsync(file.fileno())
        except OSError:
            os.ftruncate(file.fileno(), end)
            raise
    if is_new:
        sync_folder(site.ledger)
    return written[1:] if torn else written


def entries(site: Site) -> Iterator[Entry]:
    """Yield every entry in order; a last line that is not finished is left out.

    Raises
    ------
    LedgerError
        If a line is no entry. Hashes are not checked here: `verify_chain` does.
    """
    try:
        file = site.ledger_file.open("rb")
    except FileNotFoundError:
        return
    with file:
        for number, line in enumerate(file, start=1):
            if not line.endswith(b"\n"):
                return
            yield _parse(line[:-1], f"{site.ledger_file}, line {number}")


def verify_chain(site: Site) -> int:
    """Check every byte of the ledger and return how many entries it has.

    Raises
    ------
    LedgerError
        At the first line that is not exactly what was written, or where lines are missing or moved.
    """
    return sum(1 for _ in checked_entries(site))


def checked_entries(site: Site) -> Iterator[Entry]:
    """Yield every entry in order after checking each of its bytes. No entry can be written meanwhile.

    Raises
    ------
    LedgerError
        As `verify_chain`, after the entries before that line.
    """
    if not site.ledger_file.exists():
        return
    previous = GENESIS
    with _locked(site, "rb", fcntl.LOCK_SH) as file:
        for count, line in enumerate(file, start=1):
            where = f"{site.ledger_file}, line {count}"
            if not line.endswith(b"\n"):
                raise LedgerError(
                    "the last line is incomplete", where=where, remedy="the next pass cuts it off"
                )
            entry = _parse(line[:-1], where)
            if _line(entry) != line or _hash(entry) != entry.hash:
                raise LedgerError("the line was edited after it was written", where=where, remedy=_RESTORE)
            if entry.previous != previous or entry.seq != count:
                raise LedgerError("a line before this one is missing or moved", where=where, remedy=_RESTORE)
            previous = entry.hash
            yield entry


@contextmanager
def _locked(site: Site, mode: Literal["ab+", "rb"], lock: int) -> Iterator[BinaryIO]:
    # Appends go past Python's buffer: after a failed write nothing may be left to be written later.
    with site.ledger_file.open(mode, buffering=0 if mode == "ab+" else _BLOCK) as file:
        fcntl.flock(file, lock)
        yield file


def _write_all(handle: int, content: bytes) -> None:
    rest = memoryview(content)
    while rest:
        rest = rest[os.write(handle, rest) :]


def _tail(file: BinaryIO, where: str) -> tuple[Entry | None, bytes]:
    """Last whole entry, and the bytes of an incomplete line after it."""
    position = file.seek(0, os.SEEK_END)
    tail = b""
    while position > 0 and tail.count(b"\n") < 2:
        start = max(0, position - _BLOCK)
        file.seek(start)
        tail = file.read(position - start) + tail
        position = start
    whole, newline, torn = tail.rpartition(b"\n")
    # A line that ends in a foreign byte where its line feed should be was edited, not torn.
    if torn and _is_entry(torn[:-1]):
        raise LedgerError("the last line was edited after it was written", where=where, remedy=_RESTORE)
    if not newline:
        return None, torn
    line = whole.rpartition(b"\n")[2]
    entry = _parse(line, f"{where}, last line")
    if _line(entry) != line + b"\n" or _hash(entry) != entry.hash:
        raise LedgerError("the last line was edited after it was written", where=where, remedy=_RESTORE)
    return entry, torn


def _is_entry(line: bytes) -> bool:
    try:
        entry = _parse(line, "")
    except LedgerError:
        return False
    return _hash(entry) == entry.hash


def _next_entry(last: Entry | None, kind: str, body: Mapping[str, Json], at: datetime, actor: str) -> Entry:
    seq, previous = (last.seq + 1, last.hash) if last else (1, GENESIS)
    unsigned = Entry(seq, at.astimezone(UTC), kind, actor, body, previous, "")
    return Entry(seq, unsigned.time, kind, actor, body, previous, _hash(unsigned))


def _hash(entry: Entry) -> str:
    return digest(_document(entry))


def _line(entry: Entry) -> bytes:
    return (canonical_json({**_document(entry), "hash": entry.hash}) + "\n").encode()


def _document(entry: Entry) -> dict[str, Json]:
    return {
        "seq": entry.seq,
        "time": entry.time.isoformat(timespec="microseconds").replace("+00:00", "Z"),
        "kind": entry.kind,
        "actor": entry.actor,
        "body": entry.body,
        "previous": entry.previous,
    }


def _parse(line: bytes, where: str) -> Entry:
    try:
        document = json.loads(line)
        return Entry(
            seq=document["seq"],
            time=datetime.fromisoformat(document["time"]),
            kind=document["kind"],
            actor=document["actor"],
            body=document["body"],
            previous=document["previous"],
            hash=document["hash"],
        )
    except (ValueError, KeyError, TypeError, RecursionError) as error:
        raise LedgerError("the line is no ledger entry", where=where, remedy=_RESTORE) from error


def _shown(torn: bytes) -> str:
    return torn[:2000].decode("ascii", errors="backslashreplace").replace("\x00", "\\x00")
