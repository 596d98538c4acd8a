"""Export profiles: what they refuse, and that blanks and tabs in patterns and delimiters survive."""

from __future__ import annotations

from typing import Any

import pytest
from pydantic import ValidationError

from models.records.export_profile import ExportProfile, TextFile, Values
from models.records.site_settings import SiteSettings

LEAST: dict[str, Any] = {
    "shape": "wide",
    "detect": {"file_name": ["*.csv"]},
    "plate": {"id_in_file_name": "(?P<plate_id>.+)"},
    "time": {"notation": "s"},
    "columns": {"time": "Time"},
}


def test_the_least_profile_and_its_defaults() -> None:
    profile = ExportProfile.model_validate(LEAST)
    assert (profile.container, profile.channel, profile.text.encoding) == ("text", "signal", "auto")
    assert profile.text.separator is None
    assert (profile.values.decimal, profile.table.end, profile.plate.time_zone) == (".", "file", "UTC")


@pytest.mark.parametrize(
    ("delimiter", "separator"),
    [
        ("auto", None),
        ("tab", "\t"),
        ("\t", "\t"),
        ("space", " "),
        (" ", " "),
        ("whitespace", ""),
        ("::", "::"),
    ],
)
def test_delimiters_keep_their_blanks(delimiter: str, separator: str | None) -> None:
    assert TextFile(delimiter=delimiter).separator == separator


def test_a_blank_may_part_thousands() -> None:
    assert Values(thousands=" ").thousands == " "


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"detect": {}}, "file_name patterns or head patterns"),
        ({"detect": {"head": ["("]}}, "not a regular expression"),
        ({"plate": {}}, "where the plate's barcode stands"),
        ({"plate": {"id_in_file_name": "x"}}, "plate_id"),
        ({"plate": {**LEAST["plate"], "started_in_preamble": "x"}}, "started"),
        ({"plate": {**LEAST["plate"], "started_format": "%Y"}}, "started_format needs"),
        ({"plate": {**LEAST["plate"], "time_zone": "Nowhere/Town"}}, "not a time zone"),
        ({"plate": {**LEAST["plate"], "format": 24}}, "96"),
        ({"time": {}}, "notation, or interval_s"),
        ({"time": {"notation": "s", "interval_s": 5}}, "notation, or interval_s"),
        ({"time": {"notation": "timestamp"}}, "format go together"),
        ({"time": {"notation": "s", "format": "%S"}}, "format go together"),
        ({"time": {"interval_s": 0}}, "greater than 0"),
        ({"blocks": {"channel": "x"}}, "(?P<channel>...)"),
        ({"wells": {"pattern": "(?P<row>.)"}}, "(?P<column>...)"),
        ({"values": {"decimal": ",", "thousands": ","}}, "must differ"),
        ({"columns": {"time": "Time", "read": "n"}}, "columns.read has no meaning"),
        ({"table": {"has_header": False}}, "needs a header line"),
        ({"text": {"quote": "''"}}, "at most 1"),
        ({"volume": 3}, "Extra inputs"),
    ],
)
def test_what_is_refused(changes: dict[str, Any], words: str) -> None:
    with pytest.raises(ValidationError) as caught:
        ExportProfile.model_validate(LEAST | changes)
    assert words in str(caught.value)


def test_read_numbers_need_an_interval() -> None:
    columns = {"well": "W", "signal": "S", "time": "T", "read": "N"}
    with pytest.raises(ValidationError, match=r"only together with time\.interval_s"):
        ExportProfile.model_validate(LEAST | {"shape": "long", "columns": columns})


@pytest.mark.parametrize("cron", ["0 4 * * *", "*/15 0-6 1,15 * mon-fri"])
def test_cron_lines(cron: str) -> None:
    assert SiteSettings(name="x", cron=cron).cron == cron


@pytest.mark.parametrize("cron", ["", "0 4 * *", "0 4 * * * *", "0 4 * * ; rm"])
def test_what_is_no_cron_line(cron: str) -> None:
    with pytest.raises(ValidationError, match="cron"):
        SiteSettings(name="x", cron=cron)
