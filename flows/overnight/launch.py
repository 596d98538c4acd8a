"""Start one pass the way it is asked for: in this process, or as a Prefect flow.

Prefect is imported only where a pass goes through it, and what computes only when a pass starts.
"""

from __future__ import annotations

import json
import os
from collections.abc import Callable
from datetime import datetime
from pathlib import Path
from typing import Literal, get_args

from flows.overnight.report import PassReport
from flows.site.layout import Site

Route = Literal["auto", "process", "prefect"]
ROUTES: tuple[Route, ...] = get_args(Route)

_QUIET = {
    "DO_NOT_TRACK": "1",
    "PREFECT_SERVER_ANALYTICS_ENABLED": "false",
    "PREFECT_LOGGING_LEVEL": "WARNING",
    "PREFECT_LOGGING_ROOT_LEVEL": "CRITICAL",
    "PREFECT_SERVER_LOGGING_LEVEL": "CRITICAL",
    # A server of its own takes 12 to 21 s to come up, and several times that on a busy machine.
    "PREFECT_SERVER_EPHEMERAL_STARTUP_TIMEOUT_SECONDS": "180",
}


def server_file(site: Site) -> Path:
    """Where a running `halfsat serve` says which address its server has."""
    return site.root / ".server.json"


def prefect_home(site: Site) -> Path:
    """Where the site's scheduler keeps its own records; nothing of halfsat's truth is there."""
    return site.root / ".prefect"


def running_server(site: Site) -> str | None:
    """Address of the site's own server, None where none answers."""
    try:
        address = str(json.loads(server_file(site).read_text())["api_url"])
    except (FileNotFoundError, ValueError, KeyError):
        return None
    return address if answers(address) else None


def answers(api_url: str) -> bool:
    """Whether a server at this loopback address says that it is healthy."""
    if not api_url.startswith("http://127.0.0.1:"):
        return False
    from urllib.error import URLError
    from urllib.request import urlopen

    try:
        with urlopen(f"{api_url}/health", timeout=2) as reply:
            return int(reply.status) == 200
    except (URLError, OSError, ValueError):
        return False


def run_pass_by(route: Route, site: Site, clock: Callable[[], datetime]) -> PassReport:
    """Run one pass.

    Parameters
    ----------
    route
        `process`: in this process. `prefect`: as a Prefect flow, on the site's server if one runs, else on
        a server of its own that ends with the pass. `auto`: `prefect` where the site's server runs, else
        `process`, which has nothing to wait for.
    site
        The site.
    clock
        Tells the time, UTC; a flow asks the system's clock.

    Raises
    ------
    HalfsatError
        As `run_pass` does.
    """
    server = running_server(site) if route != "process" else None
    if route == "process" or (route == "auto" and server is None):
        from flows.overnight.nightly import run_pass

        return run_pass(site, clock)
    os.environ.update(_QUIET, PREFECT_HOME=str(prefect_home(site)))
    if server is not None:
        os.environ["PREFECT_API_URL"] = server
    from flows.overnight.orchestration import run_flow

    return run_flow(site)
