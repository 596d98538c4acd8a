"""Settings of a site as a whole: its name, clock, inbox and schedule. One file, site.toml.

Nothing here reads a file or starts anything.
"""

from __future__ import annotations

import re
from datetime import UTC, datetime, time
from typing import Annotated
from zoneinfo import ZoneInfo

from cronsim import CronSim, CronSimError
from pydantic import AfterValidator, Field

from models.records.record import Record

_CRON_FIELD = re.compile(r"[0-9A-Za-z*/,\-#]+")


def _known_zone(name: str) -> str:
    try:
        ZoneInfo(name)
    except (KeyError, ValueError, OSError) as unknown:
        raise ValueError(f"'{name}' is not a time zone: write it as Europe/Vienna or UTC") from unknown
    return name


def _five_fields(cron: str) -> str:
    fields = cron.split()
    if len(fields) != 5 or not all(_CRON_FIELD.fullmatch(field) for field in fields):
        raise ValueError(f"'{cron}' is not a cron line: minute, hour, day, month, weekday, such as 0 4 * * *")
    try:
        # The moment is without meaning: the line is only read.
        CronSim(cron, datetime(2000, 1, 1, tzinfo=UTC))
    except CronSimError as flaw:
        raise ValueError(f"'{cron}' is not a cron line ({flaw}): write it as 0 4 * * *") from flaw
    return cron


TimeZoneName = Annotated[str, AfterValidator(_known_zone)]


class SiteSettings(Record):
    """What site.toml says."""

    name: str = Field(min_length=1)
    """Name of the site, as it heads reports."""
    time_zone: TimeZoneName = "UTC"
    """IANA time zone of the site, such as Europe/Vienna."""
    inbox: str = Field(default="inbox", min_length=1)
    """Where exports and plate maps arrive: a folder below the site, or any address that fsspec opens."""
    settle_s: float = Field(default=0.0, ge=0, le=86_400)
    """How long a file must have stayed unchanged before it is pulled, s."""
    plates_per_batch: int = Field(default=40, ge=1, le=10_000)
    """Plate reads that are gated and fitted together."""
    cron: Annotated[str, AfterValidator(_five_fields)] = "0 4 * * *"
    """When the pass runs under `halfsat serve`: minute, hour, day, month, weekday."""
    every_minutes: int = Field(default=0, ge=0, le=10_080)
    """A pass this often as well, min, counted from midnight UTC; 0 leaves it at the cron line."""
    prefect_port: int = Field(default=4231, ge=1024, le=65_535)
    """Local port of the scheduler under `halfsat serve`."""
    morning_port: int = Field(default=4232, ge=1024, le=65_535)
    """Local port of the review page under `halfsat serve`."""
    processes: int = Field(default=0, ge=0, le=1024)
    """Processes that a pass spreads its batches over; 0 is one a core."""
    dask: str = ""
    """Address of a Dask scheduler, tcp://robot-2:8786, or `local`; empty keeps a pass on this machine."""
    digest_at: time = time(7, 0)
    """When the morning digest is due, in the site's time zone."""
    digest_to: tuple[str, ...] = ()
    """Where the digest goes: apprise addresses. ${NAME} in one stands for that environment variable."""
