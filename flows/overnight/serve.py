"""The one long-running process of a site: a Prefect server on loopback, the scheduled flow, the review page.

It starts the server as a child, waits until it is healthy, clears what an earlier one left behind, serves the
flow, and stops everything on SIGTERM. What a pass does is the business of others.
"""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from datetime import UTC, datetime
from importlib.util import find_spec
from typing import BinaryIO

import psutil

from flows.ledger import entries
from flows.overnight.launch import answers, prefect_home, running_server, server_file
from flows.overnight.schedule import is_missed, last_pass_started
from flows.site.configuration import load_configuration
from flows.site.durable import write_durably
from flows.site.layout import Site
from models.errors import SiteError
from models.records.site_settings import SiteSettings

START_UP_S = 90.0
STOP_S = 3.0
"""How long a child has to stop before it is killed: server, page and pass together stay below 10 s."""
RESTART_S = 5.0
_HALFSAT = (sys.executable, "-c", "from flows.cli import main; main()")


def serve(site: Site, announce: Callable[[str], object]) -> None:
    """Run passes on the site's schedule, and its review page, until SIGTERM or Ctrl-C.

    Runs that a killed server left behind are put away at the start. If a pass was due meanwhile, it is made
    up, once. A pass that is running at the end is stopped: the next one goes on from what is stored.

    Parameters
    ----------
    site
        The site; cron line, interval and ports come from its configuration.
    announce
        Told where the pages are once they answer.

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
        PREFECT_LOGGING_ROOT_LEVEL="WARNING",
        PREFECT_SERVER_LOGGING_LEVEL="WARNING",
        PREFECT_RUNNER_POLL_FREQUENCY="2",
    )
    with _terminated_as_interrupt():
        try:
            with _server(site, settings.prefect_port, api_url), _review_page(site, settings, announce):
                write_durably(
                    server_file(site), json.dumps({"api_url": api_url, "process": os.getpid()}).encode()
                )
                _serve_passes(site, settings, api_url, announce)
        except KeyboardInterrupt:
            announce("stopped")
        finally:
            server_file(site).unlink(missing_ok=True)


def _serve_passes(
    site: Site, settings: SiteSettings, api_url: str, announce: Callable[[str], object]
) -> None:
    from flows.overnight.deployment import run_scheduled

    make_up = is_missed(settings, last_pass_started(site), datetime.now(UTC))
    every = f" and every {settings.every_minutes} min" if settings.every_minutes else ""
    announce(f"serving {settings.name}: passes at '{settings.cron}'{every}, page at {api_url[:-4]}")
    if make_up:
        announce("a pass was due while nothing ran: it is made up now")
    try:
        run_scheduled(site, settings, make_up=make_up)
    finally:
        _stop([*psutil.Process().children(recursive=True)], but=_own_children())


@contextmanager
def _terminated_as_interrupt() -> Iterator[None]:
    """Let SIGTERM take the same way out as Ctrl-C, so that the server is always stopped."""

    def interrupt(*_: object) -> None:
        # A second one would break into the way out.
        signal.signal(signal.SIGTERM, signal.SIG_IGN)
        raise KeyboardInterrupt

    before = signal.signal(signal.SIGTERM, interrupt)
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)


_OWN: dict[str, subprocess.Popen[bytes]] = {}
"""Server and page, by name: they outlive the passes and are stopped by who started them."""


def _own_children() -> set[int]:
    return {child.pid for child in _OWN.values()}


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
        child = _start("server", [sys.executable, *words], log)
        try:
            deadline = time.monotonic() + START_UP_S
            while not answers(api_url):
                if child.poll() is not None or time.monotonic() > deadline:
                    raise SiteError("the scheduler's server did not come up", where=str(log_path))
                time.sleep(0.5)
            yield
        finally:
            _end("server")


@contextmanager
def _review_page(site: Site, settings: SiteSettings, announce: Callable[[str], object]) -> Iterator[None]:
    """Keep `halfsat morning` running beside the passes, where there is such a page and someone to sign in."""
    if find_spec("flows.cli.morning") is None or not _has_reviewers(site):
        yield
        return
    log_path = site.log / "morning.txt"
    log_path.parent.mkdir(exist_ok=True)
    words = [*_HALFSAT, "morning", "--site", str(site.root), "--port", str(settings.morning_port)]
    over = threading.Event()

    def keep_running() -> None:
        with log_path.open("ab") as log:
            while not over.is_set():
                child = _start("page", words, log)
                while child.poll() is None and not over.wait(0.5):
                    pass
                over.wait(RESTART_S)
        _end("page")

    watch = threading.Thread(target=keep_running, name="review page", daemon=True)
    watch.start()
    announce(f"review page at http://127.0.0.1:{settings.morning_port}")
    try:
        yield
    finally:
        over.set()
        watch.join(STOP_S + 1.0)


def _has_reviewers(site: Site) -> bool:
    return any(entry.kind == "reviewer_added" for entry in entries(site))


def _start(name: str, words: Sequence[str], log: BinaryIO) -> subprocess.Popen[bytes]:
    child = subprocess.Popen([*words], start_new_session=True, stdout=log, stderr=subprocess.STDOUT)
    _OWN[name] = child
    return child


def _end(name: str) -> None:
    child = _OWN.pop(name, None)
    if child is None:
        return
    child.terminate()
    try:
        child.wait(STOP_S)
    except subprocess.TimeoutExpired:
        child.kill()
        child.wait()


def _stop(processes: Sequence[psutil.Process], but: set[int]) -> None:
    """Stop what is left of passes: whoever does not follow SIGTERM is killed, which a pass survives."""
    passes = [each for each in processes if not _belongs_to(each, but)]
    for each in passes:
        _quietly(each.terminate)
    _, alive = psutil.wait_procs(passes, timeout=STOP_S)
    for each in alive:
        _quietly(each.kill)


def _belongs_to(process: psutil.Process, own: set[int]) -> bool:
    try:
        return process.pid in own or any(parent.pid in own for parent in process.parents())
    except psutil.NoSuchProcess:
        return False


def _quietly(act: Callable[[], object]) -> None:
    try:
        act()
    except psutil.NoSuchProcess:
        return
