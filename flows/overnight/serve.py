"""The one long-running process of a site: a Prefect server on loopback and the scheduled overnight flow.

It starts the server as a child, waits until it is healthy, serves the flow, and stops both on SIGTERM.
"""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

from flows.overnight.launch import answers, prefect_home, running_server, server_file
from flows.site.configuration import load_configuration
from flows.site.durable import write_durably
from flows.site.layout import Site
from models.errors import SiteError

START_UP_S = 90.0
STOP_S = 6.0


def serve(site: Site, announce: Callable[[str], object]) -> None:
    """Run passes on the site's schedule until SIGTERM or Ctrl-C.

    Parameters
    ----------
    site
        The site; cron line and port come from its configuration.
    announce
        Told where the scheduler's page is once it answers.

    Raises
    ------
    SiteError
        If the site is served already, or the server does not come up.
    """
    settings = load_configuration(site.config).settings
    running = running_server(site)
    if running is not None:
        raise SiteError(f"the site is served already, at {running}", where=str(site.root))
    api_url = f"http://127.0.0.1:{settings.prefect_port}/api"
    os.environ.update(
        PREFECT_HOME=str(prefect_home(site)),
        PREFECT_API_URL=api_url,
        DO_NOT_TRACK="1",
        PREFECT_SERVER_ANALYTICS_ENABLED="false",
        PREFECT_SERVER_SERVICES_LATE_RUNS_ENABLED="false",
        PREFECT_LOGGING_LEVEL="WARNING",
        PREFECT_SERVER_LOGGING_LEVEL="WARNING",
        PREFECT_RUNNER_POLL_FREQUENCY="2",
    )
    with _terminated_as_interrupt(), _server(site, settings.prefect_port, api_url):
        write_durably(server_file(site), json.dumps({"api_url": api_url, "process": os.getpid()}).encode())
        try:
            from flows.overnight.orchestration import overnight

            announce(f"serving {settings.name}: passes at '{settings.cron}', page at {api_url[:-4]}")
            overnight.serve(
                name=settings.name,
                cron=settings.cron,
                parameters={"site_root": str(site.root)},
                limit=1,
                pause_on_shutdown=False,
                print_starting_message=False,
            )
        except KeyboardInterrupt:
            announce("stopped")
        finally:
            server_file(site).unlink(missing_ok=True)


@contextmanager
def _terminated_as_interrupt() -> Iterator[None]:
    """Let SIGTERM take the same way out as Ctrl-C, so that the server is always stopped."""

    def interrupt(*_: object) -> None:
        raise KeyboardInterrupt

    before = signal.signal(signal.SIGTERM, interrupt)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)


@contextmanager
def _server(site: Site, port: int, api_url: str) -> Iterator[None]:
    if answers(api_url):
        raise SiteError(
            f"another server answers on port {port}", remedy="choose another prefect_port in config/site.toml"
        )
    prefect_home(site).mkdir(exist_ok=True)
    words = ["-m", "prefect", "server", "start", "--host", "127.0.0.1", "--port", str(port)]
    log_path = prefect_home(site) / "server.log"
    with log_path.open("ab") as log:
        child = subprocess.Popen(
            [sys.executable, *words], start_new_session=True, stdout=log, stderr=subprocess.STDOUT
        )
        try:
            deadline = time.monotonic() + START_UP_S
            while not answers(api_url):
                if child.poll() is not None or time.monotonic() > deadline:
                    raise SiteError("the scheduler's server did not come up", where=str(log_path))
                time.sleep(0.5)
            yield
        finally:
            child.terminate()
            try:
                child.wait(STOP_S)
            except subprocess.TimeoutExpired:
                child.kill()
                child.wait()
