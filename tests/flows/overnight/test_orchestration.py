"""The pass as a real Prefect flow: on a server of its own, and on the one that `halfsat serve` runs."""

from __future__ import annotations

import json
import os
import shutil
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator
from datetime import UTC, datetime
from pathlib import Path
from urllib.request import Request, urlopen

import pytest

from flows.overnight.launch import answers, running_server, server_file
from flows.overnight.report import PassReport
from flows.site.layout import Site, open_site
from flows.warehouse.reader import open_published

COMMAND = [sys.executable, "-c", "from flows.cli import main; main()"]


def small_site(done: Site, root: Path) -> Site:
    """A site with one export of the demo and its map in the inbox."""
    shutil.copytree(done.config, root / "config", ignore=shutil.ignore_patterns("recipes"))
    for folder in ("inbox", "raw", "ledger"):
        (root / folder).mkdir()
    shutil.copy(done.inbox / "cold_SW104412.tsv", root / "inbox")
    for path in done.inbox.glob("map_*"):
        shutil.copy(path, root / "inbox")
    return open_site(root)


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


@pytest.fixture
def served(demo_night: tuple[Site, PassReport], tmp_path: Path) -> Iterator[tuple[Site, str]]:
    """A site with `halfsat serve` running on a free port, its schedule far away."""
    site = small_site(demo_night[0], tmp_path / "site")
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port = probe.getsockname()[1]
    settings = (site.config / "site.toml").read_text()
    lines = [line for line in settings.splitlines() if not line.startswith(("prefect_port", "cron"))]
    head = [f"prefect_port = {port}", 'cron = "0 4 1 1 *"']
    (site.config / "site.toml").write_text("\n".join([*head, *lines]) + "\n")
    process = subprocess.Popen(
        [*COMMAND, "serve", "--site", str(site.root)],
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
    )
    try:
        deadline = time.monotonic() + 240
        while running_server(site) is None:
            assert process.poll() is None, process.stdout.read() if process.stdout else ""
            assert time.monotonic() < deadline, "the server did not come up"
            time.sleep(0.5)
        yield site, f"http://127.0.0.1:{port}/api"
        process.send_signal(signal.SIGTERM)
        assert process.wait(30) == 0
        assert not answers(f"http://127.0.0.1:{port}/api")
        assert not server_file(site).exists()
    finally:
        if process.poll() is None:
            process.kill()
            process.wait()


def flow_runs(api_url: str) -> list[dict[str, str]]:
    asked = Request(
        f"{api_url}/flow_runs/filter", data=b"{}", headers={"content-type": "application/json"}, method="POST"
    )
    with urlopen(asked, timeout=10) as reply:
        runs: list[dict[str, str]] = json.load(reply)
    return runs


def test_serve_runs_the_flow_on_demand_and_on_schedule_and_stops_cleanly(served: tuple[Site, str]) -> None:
    site, api_url = served
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

    deadline = time.monotonic() + 90
    scheduled: list[dict[str, str]] = []
    while not scheduled:
        assert time.monotonic() < deadline, "no run of the schedule was planned"
        time.sleep(1)
        scheduled = [run for run in flow_runs(api_url) if run["state_type"] == "SCHEDULED"]
    # Started now instead of at new year: the runner picks it up and a process of its own runs the pass.
    now = {"scheduled_time": datetime.now(UTC).isoformat()}
    body = {"state": {"type": "SCHEDULED", "state_details": now}, "force": True}
    first = scheduled[0]["id"]
    asked = Request(
        f"{api_url}/flow_runs/{first}/set_state",
        data=json.dumps(body).encode(),
        headers={"content-type": "application/json"},
        method="POST",
    )
    urlopen(asked, timeout=10).close()
    deadline = time.monotonic() + 240
    while not any(run["id"] == first and run["state_type"] == "COMPLETED" for run in flow_runs(api_url)):
        assert time.monotonic() < deadline, flow_runs(api_url)
        time.sleep(1)
