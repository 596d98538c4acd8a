"""What passes had to say, as JSON lines in SITE/log, one file a month, each with pass, plate and file.

Written for people and their tools to search; nothing reads it back, and no truth is there.
"""

from __future__ import annotations

import logging
from collections.abc import Iterator
from contextlib import contextmanager
from contextvars import ContextVar
from datetime import UTC, datetime

from pythonjsonlogger.json import JsonFormatter

from flows.site.layout import Site

ROOMS = ("flows", "checks", "models")
ABOUT = ("pass_id", "plate", "file")
"""What a line may be about; null where it is about none."""

_about: ContextVar[dict[str, str] | None] = ContextVar("about", default=None)


@contextmanager
def about(**named: str) -> Iterator[None]:
    """Let every line that is logged meanwhile say what it is about.

    Parameters
    ----------
    named
        Any of ABOUT.
    """
    before = _about.get()
    token = _about.set({**(before or {}), **named})
    try:
        yield
    finally:
        _about.reset(token)


@contextmanager
def site_log(site: Site, now: datetime) -> Iterator[None]:
    """Let what halfsat logs go to the site's log as well: information, warnings and errors.

    Parameters
    ----------
    now
        Says which month's file it is, UTC.
    """
    site.log.mkdir(exist_ok=True)
    handler = logging.FileHandler(site.log / f"{now.astimezone(UTC):%Y-%m}.jsonl", encoding="utf-8")
    handler.setFormatter(_Line("%(levelname)s %(message)s", rename_fields={"levelname": "level"}))
    rooms = [logging.getLogger(name) for name in ROOMS]
    levels = [room.level for room in rooms]
    for room in rooms:
        room.addHandler(handler)
        room.setLevel(logging.INFO)
    try:
        yield
    finally:
        for room, level in zip(rooms, levels, strict=True):
            room.removeHandler(handler)
            room.setLevel(level)
        handler.close()


class _Line(JsonFormatter):
    """A line: time, level and message, what it is about, and whatever else it was given."""

    def add_fields(
        self, log_data: dict[str, object], record: logging.LogRecord, message_dict: dict[str, object]
    ) -> None:
        super().add_fields(log_data, record, message_dict)
        named = _about.get() or {}
        told = {name: log_data.pop(name, None) or named.get(name) for name in ABOUT}
        at = datetime.fromtimestamp(record.created, UTC).isoformat(timespec="milliseconds")
        rest = dict(log_data)
        log_data.clear()
        log_data.update(time=at.replace("+00:00", "Z"), **rest, **told, where=record.name)
