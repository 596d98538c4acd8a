"""Settings of a site as a whole: its name, clock, inbox and schedule. One file, site.toml.

Nothing here reads a file or starts anything.
"""

from __future__ import annotations

import re
from typing import Annotated
from zoneinfo import ZoneInfo

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
    prefect_port: int = Field(default=4231, ge=1024, le=65_535)
    """Local port of the scheduler under `halfsat serve`."""
