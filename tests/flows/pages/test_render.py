"""The shared look: legible colours in light, dark and print, templates that neither leak nor leave gaps."""

from __future__ import annotations

import re
from datetime import UTC, datetime
from pathlib import Path

import pytest
from jinja2 import UndefinedError

import flows.pages
from flows.pages import render_page
from flows.pages.render import breakable, counted, utc

STYLE = (Path(flows.pages.__file__).parent / "style.css").read_text(encoding="utf-8")
THEMES = re.findall(r":root \{(.*?)\}", STYLE, re.S)
LEAST_FOR_TEXT = 4.5
"""Contrast of text against its ground: WCAG 2.2, success criterion 1.4.3, level AA."""


def luminance(colour: str) -> float:
    """Relative luminance, as WCAG 2.2 defines it."""
    digits = colour.lstrip("#")
    digits = digits if len(digits) == 6 else "".join(2 * digit for digit in digits)
    parts = [int(digits[k : k + 2], 16) / 255 for k in (0, 2, 4)]
    linear = [part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
    return 0.2126 * linear[0] + 0.7152 * linear[1] + 0.0722 * linear[2]


def contrast(one: str, other: str) -> float:
    darker, lighter = sorted((luminance(one), luminance(other)))
    return (lighter + 0.05) / (darker + 0.05)


@pytest.mark.parametrize("theme", THEMES, ids=["light", "dark", "print"])
@pytest.mark.parametrize("colour", ["ink", "soft", "pale", "held", "chosen"])
def test_every_colour_of_text_is_legible_on_its_paper(theme: str, colour: str) -> None:
    named = dict(re.findall(r"--([a-z]+): (#[0-9a-f]+)", theme))
    for paper in ("paper", "raised"):
        assert contrast(named[colour], named[paper]) >= LEAST_FOR_TEXT, (colour, paper)


def test_the_style_fetches_nothing() -> None:
    assert "url(" not in STYLE
    assert "@import" not in STYLE
    assert "</style" not in STYLE


def test_a_name_that_is_not_given_is_an_error() -> None:
    with pytest.raises(UndefinedError):
        render_page("gates.html")


def test_a_breakable_name_is_still_escaped() -> None:
    assert str(breakable("a_<b>_c")) == "a_<wbr>&lt;b&gt;_<wbr>c"


def test_times_and_counts_are_written_one_way() -> None:
    assert utc(datetime(2026, 3, 2, 21, 4, 5, tzinfo=UTC)) == "2026-03-02 21:04:05 UTC"
    assert utc(None) == "–"
    assert [counted(1, "finding"), counted(2, "finding"), counted(2, "series", "series")] == [
        "1 finding",
        "2 findings",
        "2 series",
    ]
