"""How a site is doing, in ten lines: passes, backlog, what waits for a person, disk, the last verification.

Reads ledger, published warehouse and folders; changes nothing.
"""

from __future__ import annotations

import shutil
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime
from pathlib import Path

from flows.ledger import Entry, entries
from flows.overnight.launch import running_server
from flows.overnight.schedule import next_due
from flows.site.configuration import load_configuration
from flows.site.layout import Site
from flows.site.lock import is_held
from flows.stages.pull import inbox_names, known_files
from flows.warehouse.reader import open_published

_COUNTS = """
    SELECT
        (SELECT count(*) FROM plate_reads p ANTI JOIN analyses a ON a.plate_read_id = p.plate_read_id),
        (SELECT count(*) FROM wells w JOIN current_analyses USING (analysis_id) WHERE w.standing = 'held'),
        (SELECT count(*) FROM series s JOIN current_analyses USING (analysis_id) WHERE s.standing = 'held'),
        (SELECT count(*) FROM files WHERE kind = 'quarantined')
"""


@dataclass(frozen=True)
class Verified:
    """The last verification: when, and how many things were damaged or missing."""

    at: datetime
    damage_count: int


@dataclass(frozen=True)
class SiteStatus:
    """How a site is doing.

    Attributes
    ----------
    served_at
        Address of the scheduler's page; None where the site is not served.
    running
        Whether a pass runs now.
    last_started, last_finished
        The last pass, UTC; the second is None where it did not come to its end.
    last_files, last_analyses
        What the last finished pass took in and analysed.
    next_pass
        When the next pass is due by the schedule, UTC; it comes if the site is served.
    backlog
        Files in the inbox that no pass has taken in; None where the inbox cannot be looked into from here.
    waiting, held_wells, held_series, quarantined
        Plate reads without analysis, and what waits for a person; None before anything was published.
    site_bytes, free_bytes
        What the site's folder takes, and what its disk has left.
    """

    name: str
    served_at: str | None
    running: bool
    last_started: datetime | None
    last_finished: datetime | None
    last_files: int | None
    last_analyses: int | None
    next_pass: datetime
    backlog: int | None
    waiting: int | None
    held_wells: int | None
    held_series: int | None
    quarantined: int | None
    site_bytes: int
    free_bytes: int
    verified: Verified | None


def site_status(site: Site, now: datetime) -> SiteStatus:
    """Look at a site.

    Parameters
    ----------
    now
        The time, UTC; the next pass is counted from it.

    Raises
    ------
    ConfigurationError
        If site.toml does not say what it must.
    LedgerError
        If a line of the ledger is no entry.
    """
    settings = load_configuration(site.config).settings
    last = {entry.kind: entry for entry in entries(site)}
    started, finished = last.get("pass_started"), last.get("pass_finished")
    ended = finished if _is_of(finished, started) else None
    waiting, held_wells, held_series, quarantined = _counts(site)
    server = running_server(site)
    verified = last.get("verified")
    return SiteStatus(
        name=settings.name,
        served_at=None if server is None else server.removesuffix("/api"),
        running=is_held(site),
        last_started=None if started is None else started.time,
        last_finished=None if ended is None else ended.time,
        last_files=_number(ended, "file_count"),
        last_analyses=_number(ended, "analysis_count"),
        next_pass=next_due(settings, now),
        backlog=_backlog(site, settings.inbox),
        waiting=waiting,
        held_wells=held_wells,
        held_series=held_series,
        quarantined=quarantined,
        site_bytes=_size(site.root),
        free_bytes=shutil.disk_usage(site.root).free,
        verified=None
        if verified is None
        else Verified(verified.time, int(str(verified.body["damage_count"]))),
    )


def _is_of(finished: Entry | None, started: Entry | None) -> bool:
    """Whether the end belongs to the last pass that began."""
    if finished is None or started is None:
        return False
    return finished.body.get("pass_id") == started.body.get("pass_id")


def _number(entry: Entry | None, key: str) -> int | None:
    body: Mapping[str, object] = {} if entry is None else entry.body
    return int(str(body[key])) if key in body else None


def _counts(site: Site) -> tuple[int | None, ...]:
    if not site.published_link.exists():
        return (None,) * 4
    with open_published(site) as connection:
        found = connection.execute(_COUNTS).fetchall()[0]
    return tuple(int(count) for count in found)


def _backlog(site: Site, inbox: str) -> int | None:
    if "://" in inbox or not (site.root / inbox).is_dir():
        return None
    taken = {name for file in known_files(site).values() for name in file.names}
    return sum(name not in taken for name in inbox_names(site.root / inbox))


def _size(folder: Path) -> int:
    return sum(path.lstat().st_size for path in folder.rglob("*") if path.is_file() and not path.is_symlink())
