"""Renders the review page's templates: all escaped, numbers as the house writes them, times in two zones.

Knows no route and no query.
"""

from __future__ import annotations

from datetime import datetime
from functools import lru_cache
from pathlib import Path
from typing import cast
from zoneinfo import ZoneInfo

from fastapi import Request
from jinja2 import Environment
from markupsafe import Markup, escape
from starlette.responses import HTMLResponse

from flows.morning.guard import RANK
from flows.morning.sessions import Session
from flows.pages.render import page_environment
from flows.site.configuration import load_configuration
from flows.site.layout import Site
from flows.wording import constant_symbol, interval, number, unit_symbol

_HERE = Path(__file__).resolve().parent


def page(
    request: Request, session: Session | None, template: str, *, status: int = 200, **given: object
) -> HTMLResponse:
    """Render a template for the person who is signed in.

    Parameters
    ----------
    session
        None on the pages that need no sign-in.
    given
        What the template prints; a name that is missing is an error.
    """
    site = cast(Site, request.app.state.site)
    settings = _settings(site, (site.config / "site.toml").stat().st_mtime_ns)
    text = (
        environment()
        .get_template(template)
        .render(
            session=session,
            may_decide=session is not None and RANK[session.role] >= RANK["reviewer"],
            site_name=settings[0],
            zone=ZoneInfo(settings[1]),
            **given,
        )
    )
    return HTMLResponse(text, status)


@lru_cache(maxsize=1)
def environment() -> Environment:
    """The templates of this folder, over those that all pages share."""
    made = page_environment(_HERE / "templates")
    made.filters["symbol"] = constant_symbol
    made.filters["unit"] = unit_symbol
    made.filters["significant"] = lambda value, digits=3: number(value, digits=digits)
    made.globals["value_text"] = value_text
    made.globals["time_text"] = time_text
    return made


def value_text(estimate: object) -> Markup:
    """A constant with its interval and unit: `82.4 (76.1 to 89.5) µM`; a dash where it is not known."""
    value, low, high, unit = (getattr(estimate, name, None) for name in ("value", "low", "high", "unit"))
    if value is None:
        return Markup("–")
    error = getattr(estimate, "standard_error", None)
    unit_text = (
        f' <span class="unit">{escape(unit_symbol(str(unit)))}</span>' if unit_symbol(str(unit)) else ""
    )
    between = interval(low, high, error)
    inside = f' <span class="soft">({escape(between)})</span>' if between else ""
    return Markup(f"{escape(number(value, error))}{unit_text}{inside}")


def time_text(at: datetime | None, zone: ZoneInfo) -> Markup:
    """A time in the site's zone, with UTC on hover."""
    if at is None:
        return Markup("–")
    utc = f"{at.astimezone(ZoneInfo('UTC')):%Y-%m-%d %H:%M:%S} UTC"
    local = f"{at.astimezone(zone):%Y-%m-%d %H:%M}"
    return Markup(f'<time datetime="{at.isoformat()}" title="{utc}">{local}</time>')


@lru_cache(maxsize=4)
def _settings(site: Site, changed_ns: int) -> tuple[str, str]:
    del changed_ns
    settings = load_configuration(site.config).settings
    return settings.name, settings.time_zone
