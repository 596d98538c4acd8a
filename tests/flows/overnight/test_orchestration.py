"""The pass as a real Prefect flow: on a server of its own, and on the one that `halfsat serve` runs."""

from __future__ import annotations

import os
import subprocess
import time
from collections.abc import Callable
from datetime import UTC, datetime
from pathlib import Path

import psutil

from flows.ledger import entries
from flows.overnight.report import PassReport
from flows.overnight.schedule import last_pass_started
from flows.site.layout import Site
from flows.site.lock import is_held
from flows.warehouse.reader import open_published
from tests.flows.overnight.served_site import (
    COMMAND,
    flow_runs,
    free_port,
    post,
    serving,
    set_keys,
    small_site,
    stop,
)


def analysis_count(site: Site) -> int:
    with open_published(site) as connection:
        return int(connection.sql("select count(*) from analyses").fetchall()[0][0])


def test_a_pass_by_prefect_needs_no_server_of_the_user(
    demo_night: tuple[Site, PassReport], tmp_path: Path
) -> None:
    site = small_site(demo_night[0], tmp_path / "site")
    done = subprocess.run(
        [*COMMAND, "overnight", "--via", "prefect", "--site", str(site.root)],
        capture_output=True,
        text=True,
        check=False,
        timeout=300,
    )
    assert done.returncode == 0, done.stdout + done.stderr
    assert "SW104412" in done.stdout
    assert analysis_count(site) == 1


def test_serve_runs_the_flow_on_demand_and_on_schedule_and_makes_up_what_a_kill_cost(
    demo_night: tuple[Site, PassReport], tmp_path: Path
) -> None:
    site = small_site(demo_night[0], tmp_path / "site")
    port = free_port()
    api_url = f"http://127.0.0.1:{port}/api"
    set_keys(site, prefect_port=port, cron="0 4 1 1 *")
    with serving(site) as process:
        _runs_on_demand(site, api_url)
        _runs_on_schedule(api_url)
        # Killed with its server, while a run was under way as the server knows.
        left = str(flow_runs(api_url)[0]["id"])
        post(api_url, f"flow_runs/{left}/set_state", {"state": {"type": "RUNNING"}, "force": True})
        for child in psutil.Process(process.pid).children(recursive=True):
            child.kill()
        process.kill()
        process.wait()

    before = pass_count(site)
    # Every minute: one was missed by now, and more will be while the server comes up.
    set_keys(site, cron="* * * * *")
    time.sleep(max(0.0, 61.0 - (datetime.now(UTC) - last_pass_started(site)).total_seconds()))
    with serving(site) as process:
        wait_for(lambda: any(r["name"] == "made-up" for r in flow_runs(api_url)), api_url)
        wait_for(lambda: state_of(api_url, "made-up") == "COMPLETED", api_url)
        assert pass_count(site) == before + 1
        assert state_of(api_url, left, by="id") == "CRASHED"
        # A pass is under way when it is told to stop.
        deployment = next(r["deployment_id"] for r in flow_runs(api_url) if r["name"] == "made-up")
        post(api_url, f"deployments/{deployment}/create_flow_run", {"name": "stopped"})
        wait_for(lambda: state_of(api_url, "stopped") == "RUNNING", api_url)
        assert stop(site, process, api_url) < 10
    assert not is_held(site)


def pass_count(site: Site) -> int:
    return sum(entry.kind == "pass_started" for entry in entries(site))


def state_of(api_url: str, wanted: str, by: str = "name") -> str | None:
    return next((str(run["state_type"]) for run in flow_runs(api_url) if run[by] == wanted), None)


def wait_for(holds: Callable[[], bool], api_url: str, longest_s: float = 240.0) -> None:
    deadline = time.monotonic() + longest_s
    while not holds():
        assert time.monotonic() < deadline, flow_runs(api_url)
        time.sleep(0.5)


def _runs_on_demand(site: Site, api_url: str) -> None:
    done = subprocess.run(
        [*COMMAND, "overnight", "--site", str(site.root)],
        capture_output=True,
        text=True,
        check=False,
        timeout=300,
        env={**os.environ, "PREFECT_LOGGING_LEVEL": "CRITICAL"},
    )
    assert done.returncode == 0, done.stdout + done.stderr
    assert analysis_count(site) == 1
    assert any(run["state_type"] == "COMPLETED" for run in flow_runs(api_url))


def _runs_on_schedule(api_url: str) -> None:
    wait_for(lambda: any(run["state_type"] == "SCHEDULED" for run in flow_runs(api_url)), api_url)
    first = next(run["id"] for run in flow_runs(api_url) if run["state_type"] == "SCHEDULED")
    # Started now instead of at new year: the runner picks it up and a process of its own runs the pass.
    now = {"scheduled_time": datetime.now(UTC).isoformat()}
    body = {"state": {"type": "SCHEDULED", "state_details": now}, "force": True}
    post(api_url, f"flow_runs/{first}/set_state", body)
    wait_for(lambda: state_of(api_url, first, by="id") == "COMPLETED", api_url)
