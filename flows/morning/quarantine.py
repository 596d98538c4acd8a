"""What could not be read: the reason, the first lines, and what a profile would make of it. Reads only."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import duckdb

from flows.morning.asking import ask, one
from flows.site.archive import fetch
from flows.site.layout import Site
from flows.stages.read import TrialReport
from flows.stages.read.trial import trial_report
from models.records.export_profile import ExportProfile

LINES_SHOWN, LINE_LENGTH = 30, 200
_WAITING = "FROM files WHERE kind = 'quarantined'"


@dataclass(frozen=True)
class Quarantined:
    """One file in quarantine.

    Attributes
    ----------
    row
        file_id, file_name, byte_count, received_at, reason.
    lines
        Its first lines as text; empty where it is no text.
    trial
        What a profile makes of it; None where none was tried.
    """

    row: Any
    lines: list[str]
    trial: TrialReport | None


def quarantined_files(connection: duckdb.DuckDBPyConnection) -> list[Any]:
    """Files in quarantine, the latest first."""
    return ask(
        connection,
        f"SELECT file_id, file_name, byte_count, received_at, reason {_WAITING} "
        "ORDER BY received_at DESC, file_name",
    )


def quarantined_file(
    connection: duckdb.DuckDBPyConnection, site: Site, file_id: str, profile: ExportProfile | None
) -> Quarantined:
    """One of them with its first lines, and what a profile makes of it.

    Raises
    ------
    NotFound
        If no such file is in quarantine.
    SiteError
        If its bytes are missing or have changed.
    """
    row = one(
        connection,
        f"file {file_id[:12]} in quarantine",
        f"SELECT file_id, file_name, byte_count, received_at, reason {_WAITING} AND file_id = $1",
        file_id,
    )
    content = fetch(site, file_id)
    head = content[: LINES_SHOWN * LINE_LENGTH]
    text = "" if b"\x00" in head[:512] else head.decode("utf-8", errors="replace")
    lines = [line[:LINE_LENGTH] for line in text.splitlines()[:LINES_SHOWN]]
    trial = None if profile is None else trial_report(content, row.file_name, profile)
    return Quarantined(row, lines, trial)
