"""A site with `halfsat serve` running on a free port, for tests that ask the real scheduler."""

from __future__ import annotations

import json
import shutil
import signal
import socket
import subprocess
import sys
import time
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any
from urllib.request import Request, urlopen

from flows.overnight.launch import answers, running_server, server_file
from flows.site.layout import Site, open_site

COMMAND = [sys.executable, "-c", "from flows.cli import main; main()"]
START_UP_S = 240.0


def small_site(done: Site, root: Path) -> Site:
    """A site with one export of the demo and its map in the inbox."""
    shutil.copytree(done.config, root / "config", ignore=shutil.ignore_patterns("recipes"))
    for folder in ("inbox", "raw", "ledger"):
        (root / folder).mkdir()
    shutil.copy(done.inbox / "cold_SW104412.tsv", root / "inbox")
    for path in done.inbox.glob("map_*"):
        shutil.copy(path, root / "inbox")
    return open_site(root)


def free_port() -> int:
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        return int(probe.getsockname()[1])


def set_keys(site: Site, **values: object) -> None:
    """Write keys of site.toml, those that are there already anew."""
    path = site.config / "site.toml"
    kept = [line for line in path.read_text().splitlines() if line.partition(" =")[0] not in values]
    set_now = [f"{key} = {json.dumps(value)}" for key, value in values.items()]
    path.write_text("\n".join([*set_now, *kept]) + "\n")


@contextmanager
def serving(site: Site) -> Iterator[subprocess.Popen[str]]:
    """`halfsat serve`, from when it answers; killed at the end if it was not stopped."""
    process = subprocess.Popen(
        [*COMMAND, "serve", "--site", str(site.root)],
        stdout=subprocess.PIPE,
        stderr=subprocess.STDOUT,
        text=True,
    )
    try:
        deadline = time.monotonic() + START_UP_S
        while running_server(site) is None:
            assert process.poll() is None, process.stdout.read() if process.stdout else ""
            assert time.monotonic() < deadline, "the server did not come up"
            time.sleep(0.3)
        yield process
    finally:
        if process.poll() is None:
            process.kill()
            process.wait()


def stop(site: Site, process: subprocess.Popen[str], api_url: str) -> float:
    """Stop it by SIGTERM; how long that took, s."""
    began = time.monotonic()
    process.send_signal(signal.SIGTERM)
    assert process.wait(30) == 0
    took_s = time.monotonic() - began
    assert not answers(api_url)
    assert not server_file(site).exists()
    return took_s


def post(api_url: str, path: str, body: Mapping[str, object]) -> Any:
    asked = Request(
        f"{api_url}/{path}",
        data=json.dumps(body).encode(),
        headers={"content-type": "application/json"},
        method="POST",
    )
    with urlopen(asked, timeout=10) as reply:
        content = reply.read()
    return json.loads(content) if content else None


def flow_runs(api_url: str) -> list[dict[str, Any]]:
    runs: list[dict[str, Any]] = post(api_url, "flow_runs/filter", {})
    return runs
