"""Times as instruments write them, in seconds: numbers, mm:ss, hh:mm:ss past a day, timestamps.

Knows nothing of wells. Nothing is put in order here: a clock that runs backwards is left to be seen.
"""

from __future__ import annotations

import datetime as dt
import re
from collections.abc import Sequence
from dataclasses import dataclass
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd

from flows.stages.read.numbers import OK, NumberRule, Reals, parse_numbers
from models.records.export_profile import ExportProfile

NUMERIC_DIVISORS = {"ms": (1.0, 1000.0), "s": (1.0, 1.0), "min": (60.0, 1.0), "h": (3600.0, 1.0)}
_DAY_S = 86_400.0
_MINUTES = re.compile(r"(?:(?P<h>\d+):)?(?P<m>\d+):(?P<s>[0-5]?\d(?:[.,]\d+)?)")
_HOURS = re.compile(
    r"(?:(?P<d>\d+)(?:\s*d(?:ays?)?[,\s]\s*|[.:\s]))?(?P<h>\d+):(?P<m>[0-5]?\d):(?P<s>[0-5]?\d(?:[.,]\d+)?)"
)
_DATE_DIRECTIVE = re.compile(r"%-?[dDjxcFsuUVW]")


@dataclass(frozen=True)
class TimeRule:
    """How one profile writes times."""

    notation: str
    format: str | None
    time_zone: str
    numbers: NumberRule
    workbook: bool = False

    @property
    def numeric(self) -> bool:
        """Whether times are plain numbers."""
        return self.notation in NUMERIC_DIVISORS

    @property
    def absolute(self) -> bool:
        """Whether times are dates on the calendar."""
        return self.format is not None and bool(_DATE_DIRECTIVE.search(self.format))


def time_rule(profile: ExportProfile, numbers: NumberRule) -> TimeRule | None:
    """The rule that a profile states, or None where it states an interval."""
    time = profile.time
    if time.notation is None:
        return None
    return TimeRule(time.notation, time.format, profile.plate.time_zone, numbers, profile.container == "xlsx")


def to_seconds(values: Reals, rule: TimeRule) -> Reals:
    """Seconds of times given as numbers."""
    factor, divisor = NUMERIC_DIVISORS[rule.notation]
    if factor == divisor:
        return values
    return values * factor / divisor


def parse_times(texts: Sequence[str], rule: TimeRule) -> Reals:
    """Times in s, from any zero; NaN where a text is no time.

    Timestamps with a date count from 1970-01-01 UTC; other notations from what the instrument took as zero.
    Shape (n,) for n texts.
    """
    if rule.numeric:
        values, states = parse_numbers(texts, rule.numbers)
        return to_seconds(np.where(states == OK, values, np.nan), rule)
    if rule.notation == "timestamp":
        return _timestamps(texts, rule)
    form = _MINUTES if rule.notation == "mm:ss" else _HOURS
    return np.array([_clock(text, form) for text in texts], dtype=np.float64)


def unwrap_midnight(times_s: Reals, rule: TimeRule) -> Reals:
    """Clock times without a date, a day added each time that the clock steps back by more than 12 h."""
    if rule.notation != "timestamp" or rule.absolute or len(times_s) < 2:
        return times_s
    return times_s + _DAY_S * np.concatenate([[0.0], np.cumsum(np.diff(times_s) < -_DAY_S / 2)])


def _clock(text: str, form: re.Pattern[str]) -> float:
    match = form.fullmatch(text.strip())
    if match is None:
        return float("nan")
    parts = {name: float((value or "0").replace(",", ".")) for name, value in match.groupdict().items()}
    return parts.get("d", 0.0) * _DAY_S + parts.get("h", 0.0) * 3600.0 + parts["m"] * 60.0 + parts["s"]


def _timestamps(texts: Sequence[str], rule: TimeRule) -> Reals:
    assert rule.format is not None
    stripped = pd.Series([text.strip() for text in texts], dtype=object)
    stamps = _as_utc(stripped, rule.format, rule)
    if rule.workbook and stamps.isna().any():
        # A date cell of a workbook is no text: it arrives in ISO 8601, whatever the profile's format.
        stamps = stamps.fillna(_as_utc(stripped, "ISO8601", rule))
    seconds = (stamps - pd.Timestamp(0, tz="UTC")) / pd.Timedelta(seconds=1)
    return np.asarray(seconds, dtype=np.float64)


def _as_utc(texts: pd.Series[str], form: str, rule: TimeRule) -> pd.Series[pd.Timestamp]:
    aware = "%z" in form
    stamps = pd.to_datetime(texts, format=form, errors="coerce", utc=aware)
    if aware:
        return stamps
    zone = rule.time_zone if rule.absolute else "UTC"
    first_pass = np.ones(len(stamps), dtype=bool)
    return stamps.dt.tz_localize(
        ZoneInfo(zone), ambiguous=first_pass, nonexistent="shift_forward"
    ).dt.tz_convert("UTC")


def parse_start(text: str, form: str | None, time_zone: str) -> dt.datetime | None:
    """Start of a read in UTC from its text, in the given format or in ISO 8601; None if it does not fit."""
    try:
        stamp = dt.datetime.fromisoformat(text.strip()) if form is None else _strptime(text.strip(), form)
        if stamp.tzinfo is None:
            stamp = stamp.replace(tzinfo=ZoneInfo(time_zone))
        return stamp.astimezone(dt.UTC)
    except (ValueError, OverflowError):
        return None


def _strptime(text: str, form: str) -> dt.datetime:
    # The zone is the profile's, set by the caller: a text without one is a reading of the instrument's clock.
    return dt.datetime.strptime(text, form)  # noqa: DTZ007
