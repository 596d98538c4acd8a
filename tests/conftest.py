"""What several rooms' tests share: the demo's night, run once."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path

import pytest

from flows.demo import write_demo
from flows.overnight.nightly import run_pass
from flows.overnight.report import PassReport
from flows.site.layout import Site, open_site

NIGHT = datetime(2026, 11, 4, 4, 0, tzinfo=UTC)


@pytest.fixture(scope="session")
def demo_night(tmp_path_factory: pytest.TempPathFactory) -> tuple[Site, PassReport]:
    """The demo site after its night. Tests only read it."""
    root: Path = tmp_path_factory.mktemp("demo") / "site"
    write_demo(root)
    site = open_site(root)
    return site, run_pass(site, lambda: NIGHT)
