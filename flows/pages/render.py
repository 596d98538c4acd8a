"""Renders a page from its template into one self-contained text: style inside, no script, nothing fetched.

Whatever a template prints is escaped, and freed of signs that turn the direction of writing. Knows no table
and no page in particular.
"""

from __future__ import annotations

import re
from datetime import datetime
from functools import cache
from pathlib import Path

from jinja2 import Environment, FileSystemLoader, StrictUndefined
from markupsafe import Markup, escape

_HERE = Path(__file__).resolve().parent
_CONTROLS = re.compile(r"[\x00-\x08\x0b-\x1f\x7f-\x9f\u200e\u200f\u202a-\u202e\u2066-\u2069]")


def render_page(template: str, **given: object) -> str:
    """Render a template of `flows/pages/templates`.

    Parameters
    ----------
    template
        Its file name.
    given
        What it prints. A name that the template uses and is not given is an error, never an empty place.

    Raises
    ------
    jinja2.UndefinedError
        If the template uses what was not given.
    """
    return _environment().get_template(template).render(**given)


@cache
def _environment() -> Environment:
    return page_environment()


def page_environment(*folders: Path) -> Environment:
    """Templates of these folders, then of this one: all escaped, and a missing name is an error."""
    environment = Environment(
        loader=FileSystemLoader([*folders, _HERE / "templates"]),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        finalize=_plain,
    )
    # The project's own file, not somebody's text: the one thing that is not escaped.
    environment.globals["style"] = Markup((_HERE / "style.css").read_text(encoding="utf-8"))
    environment.filters["utc"] = utc
    environment.filters["words"] = lambda name: str(name).replace("_", " ")
    environment.filters["count"] = counted
    environment.filters["breakable"] = breakable
    environment.filters["capitalize_first"] = lambda text: str(text)[:1].upper() + str(text)[1:]
    return environment


def breakable(name: str) -> Markup:
    """A name that may be broken after its underscores, escaped."""
    return Markup("_<wbr>").join(escape(_plain(part)) for part in name.split("_"))


def utc(at: datetime | None) -> str:
    """A time to the second in UTC, or a dash."""
    return "–" if at is None else f"{at:%Y-%m-%d %H:%M:%S} UTC"


def counted(number: int, one: str, many: str | None = None) -> str:
    """A number with its noun: `1 finding`, `3 findings`."""
    return f"{number} {one if number == 1 else many or f'{one}s'}"


def _plain(value: object) -> object:
    """Text without signs that steer or turn the writing."""
    if isinstance(value, str) and not isinstance(value, Markup):
        return _CONTROLS.sub("\ufffd", value)
    return value
