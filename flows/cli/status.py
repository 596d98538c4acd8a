"""`halfsat site status`: how the site is doing, in ten lines or as JSON."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path
from typing import TYPE_CHECKING

import click

from flows.cli.options import site_option
from flows.site.layout import open_site

if TYPE_CHECKING:
    from flows.overnight.status import SiteStatus


@click.command("status")
@click.option(
    "--format",
    "form",
    type=click.Choice(["table", "json"]),
    default="table",
    show_default=True,
    help="Output.",
)
@site_option
def status(form: str, site_dir: Path) -> None:
    """Say in ten lines how the site is doing.

    Last and next pass, what has not been taken in, what waits for a person, disk, and when every hash was
    last verified. Times are UTC.
    """
    from dataclasses import asdict
    from json import dumps

    from flows.cli.tables import console, plain_table
    from flows.overnight.status import site_status

    found = site_status(open_site(site_dir), datetime.now(UTC))
    if form == "json":
        click.echo(dumps(asdict(found), default=lambda at: at.isoformat(), indent=2))
        return
    console().print(plain_table([("", "left"), ("", "left")], status_lines(found)))


def status_lines(found: SiteStatus) -> list[tuple[str, str]]:
    """The ten lines: what, and how it stands."""
    import humanize

    verified = "never: halfsat verify"
    if found.verified is not None:
        damaged = found.verified.damage_count
        verified = (
            f"{_time(found.verified.at)}, {f'{damaged} damaged or missing' if damaged else 'all whole'}"
        )
    free, used = (humanize.naturalsize(size) for size in (found.free_bytes, found.site_bytes))
    return [
        ("site", found.name),
        ("served", found.served_at or "no: halfsat serve"),
        ("last pass", _last_pass(found)),
        ("next pass", _time(found.next_pass) + ("" if found.served_at else ", if the site is served")),
        ("backlog", _count(found.backlog, "file in the inbox", "files in the inbox")),
        ("waiting", _count(found.waiting, "plate read without results", "plate reads without results")),
        (
            "held",
            f"{_count(found.held_wells, 'well', 'wells')}, {_count(found.held_series, 'series', 'series')}",
        ),
        ("quarantined", _count(found.quarantined, "file", "files")),
        ("disk", f"{free} free, the site takes {used}"),
        ("last verify", verified),
    ]


def _last_pass(found: SiteStatus) -> str:
    if found.last_started is None:
        return "none yet: halfsat overnight"
    began = _time(found.last_started)
    if found.last_finished is None:
        return f"{began}, {'runs now' if found.running else 'did not come to its end: the next makes it up'}"
    took_s = (found.last_finished - found.last_started).total_seconds()
    files = _count(found.last_files, "file", "files")
    analyses = _count(found.last_analyses, "plate read analysed", "plate reads analysed")
    return f"{began}, {took_s:.0f} s: {files}, {analyses}"


def _time(at: datetime) -> str:
    return f"{at:%Y-%m-%d %H:%M}"


def _count(number: int | None, one: str, many: str) -> str:
    return "not known" if number is None else f"{number} {one if number == 1 else many}"
