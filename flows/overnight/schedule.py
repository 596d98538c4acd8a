"""When passes are due: the site's cron line in its time zone, and its interval. Starts nothing."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from zoneinfo import ZoneInfo

from cronsim import CronSim

from flows.ledger import entries
from flows.site.layout import Site
from models.records.site_settings import SiteSettings

ANCHOR = datetime(2000, 1, 1, tzinfo=UTC)
"""Where intervals are counted from, so that every start of the scheduler counts alike."""


def next_due(settings: SiteSettings, after: datetime) -> datetime:
    """When the first pass after a moment is due, UTC.

    Parameters
    ----------
    settings
        Cron line, time zone and interval.
    after
        The moment, with its time zone.
    """
    local = after.astimezone(ZoneInfo(settings.time_zone))
    due: datetime = next(CronSim(settings.cron, local)).astimezone(UTC)
    if settings.every_minutes:
        due = min(due, _interval_before(settings.every_minutes, after) + _step(settings.every_minutes))
    return due


def last_due(settings: SiteSettings, until: datetime) -> datetime:
    """When the last pass up to and including a moment was due, UTC."""
    # The search goes backwards from just after the moment, so that the moment itself counts.
    local = (
        (until + timedelta(minutes=1))
        .replace(second=0, microsecond=0)
        .astimezone(ZoneInfo(settings.time_zone))
    )
    due: datetime = next(CronSim(settings.cron, local, reverse=True)).astimezone(UTC)
    if settings.every_minutes:
        due = max(due, _interval_before(settings.every_minutes, until))
    return due


def last_pass_started(site: Site) -> datetime | None:
    """When the last pass began, UTC; None where there was none."""
    started = [entry.time for entry in entries(site) if entry.kind == "pass_started"]
    return started[-1] if started else None


def is_missed(settings: SiteSettings, last_pass: datetime | None, now: datetime) -> bool:
    """Whether a pass was due since the last one began; never on a site that has had none.

    However many were missed, one pass makes up for them all: it takes in whatever has arrived.
    """
    return last_pass is not None and last_due(settings, now) > last_pass


def _step(minutes: int) -> timedelta:
    return timedelta(minutes=minutes)


def _interval_before(minutes: int, moment: datetime) -> datetime:
    """The last moment of the interval that is not after this one."""
    step = _step(minutes)
    return ANCHOR + step * ((moment - ANCHOR) // step)
