"""When passes are due: time zones, daylight saving, the interval, and what was missed."""

from __future__ import annotations

from configparser import ConfigParser
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from flows.cli.root import COMMANDS
from flows.overnight.schedule import is_missed, last_due, next_due
from flows.site.shipped import shipped
from models.records.site_settings import SiteSettings

START = datetime(2026, 1, 1, tzinfo=UTC)
moments = st.integers(0, 2 * 366 * 86_400).map(lambda second: START + timedelta(seconds=second))
lines = st.sampled_from(["0 4 * * *", "30 2 * * *", "*/7 * * * *", "15 22 * * 1-5", "0 0 1 * *"])
zones = st.sampled_from(["UTC", "Europe/Vienna", "America/New_York", "Asia/Kolkata", "Australia/Lord_Howe"])
intervals = st.sampled_from([0, 1, 30, 45, 1440])


def settings(cron: str, zone: str = "UTC", every_minutes: int = 0) -> SiteSettings:
    return SiteSettings(name="Tiny", cron=cron, time_zone=zone, every_minutes=every_minutes)


def test_a_line_is_meant_in_the_zone_of_the_site_on_both_sides_of_a_clock_change() -> None:
    """Vienna is an hour ahead of UTC in winter and two in summer (EU directive 2000/84/EC)."""
    vienna = settings("0 4 * * *", "Europe/Vienna")
    assert next_due(vienna, datetime(2026, 3, 28, 12, tzinfo=UTC)) == datetime(2026, 3, 29, 2, tzinfo=UTC)
    assert next_due(vienna, datetime(2026, 3, 27, 12, tzinfo=UTC)) == datetime(2026, 3, 28, 3, tzinfo=UTC)
    assert next_due(vienna, datetime(2026, 10, 25, 12, tzinfo=UTC)) == datetime(2026, 10, 26, 3, tzinfo=UTC)


@pytest.mark.parametrize("day", [datetime(2026, 3, 29, tzinfo=UTC), datetime(2026, 10, 25, tzinfo=UTC)])
def test_a_night_with_a_clock_change_has_one_pass(day: datetime) -> None:
    """02:30 does not exist on the first of these days and comes twice on the second."""
    vienna = settings("30 2 * * *", "Europe/Vienna")
    due = next_due(vienna, day - timedelta(hours=2))
    assert due - day < timedelta(hours=4)
    assert next_due(vienna, due) - due > timedelta(hours=20)


@given(lines, zones, intervals, moments)
def test_what_comes_next_was_last_once_it_is_there(
    cron: str, zone: str, every_minutes: int, moment: datetime
) -> None:
    site = settings(cron, zone, every_minutes)
    due = next_due(site, moment)
    assert due > moment
    assert last_due(site, due) == due
    assert last_due(site, moment) <= moment
    if every_minutes:
        assert due - moment <= timedelta(minutes=every_minutes)


@given(lines, zones, intervals, moments, st.timedeltas(timedelta(0), timedelta(days=40)))
def test_a_pass_is_missed_exactly_when_one_was_due_since_the_last(
    cron: str, zone: str, every_minutes: int, last: datetime, later: timedelta
) -> None:
    site = settings(cron, zone, every_minutes)
    assert is_missed(site, last, last + later) == (next_due(site, last) <= last + later)


def test_nothing_is_missed_on_a_new_site() -> None:
    assert not is_missed(settings("* * * * *"), None, datetime(2026, 5, 1, tzinfo=UTC))


def test_a_line_that_no_clock_can_follow_is_refused() -> None:
    with pytest.raises(ValueError, match="Bad minute"):
        settings("99 4 * * *")


def test_the_systemd_unit_starts_a_command_that_there_is_and_allows_it_to_stop() -> None:
    unit = ConfigParser(strict=True)
    unit.optionxform = str  # type: ignore[assignment,method-assign]  # keys of a unit keep their capitals
    unit.read_string((shipped("config") / "halfsat.service").read_text())
    program, command = unit["Service"]["ExecStart"].split()
    assert Path(program).name == "halfsat"
    assert command in COMMANDS
    assert int(unit["Service"]["TimeoutStopSec"]) >= 10
    assert unit["Service"]["KillMode"] == "mixed"
