"""What a site says of itself: its log, and the ten lines of `halfsat site status`."""

from __future__ import annotations

import json
import logging
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner

from flows import ledger
from flows.cli.root import tree
from flows.overnight.nightly import run_pass
from flows.overnight.status import site_status
from flows.site.layout import Site
from flows.site.lock import pass_lock
from flows.site.log import about, site_log
from models.errors import ConfigurationError
from tests.flows.tiny_plates import FIRST_NIGHT
from tests.flows.tiny_site import TinySite, empty_site, tiny_site

NOW = FIRST_NIGHT + timedelta(days=30)


def lines(site: Site) -> list[dict[str, Any]]:
    return [json.loads(line) for path in sorted(site.log.iterdir()) for line in path.read_text().splitlines()]


@pytest.fixture
def tiny(tmp_path: Path) -> TinySite:
    return tiny_site(tmp_path)


def printed(site: Site) -> dict[str, str]:
    done = CliRunner().invoke(tree, ["site", "status", "--site", str(site.root)])
    assert done.exit_code == 0, done.output
    found = [line for line in done.output.splitlines() if line.strip()]
    assert len(found) == 10
    assert max(map(len, found)) <= 80
    return {line[:13].strip(): line[13:].strip() for line in found}


def test_a_pass_with_nothing_new_logs_one_line(tmp_path: Path) -> None:
    site = empty_site(tmp_path)
    report = run_pass(site, lambda: NOW)
    (only,) = lines(site)
    assert (only["level"], only["pass_id"], only["plate"], only["file"]) == (
        "INFO",
        report.pass_id,
        None,
        None,
    )
    assert datetime.fromisoformat(only["time"]).utcoffset() == timedelta(0)


def test_a_refused_file_is_a_line_with_its_name_and_reason(tmp_path: Path) -> None:
    site = empty_site(tmp_path)
    (site.inbox / 'odd "name"\n.csv').write_bytes(b"\x00\x01nothing")
    report = run_pass(site, lambda: NOW)
    warning, done = lines(site)
    assert (warning["level"], warning["file"]) == ("WARNING", 'odd "name"\n.csv')
    assert warning["message"] == report.quarantined[0][1]
    assert (done["level"], done["quarantined"]) == ("INFO", 1)


def test_a_pass_that_fails_leaves_its_traceback(tmp_path: Path) -> None:
    site = empty_site(tmp_path)
    (site.config / "site.toml").write_text("name = 3\n")
    with pytest.raises(ConfigurationError):
        run_pass(site, lambda: NOW)
    (only,) = lines(site)
    assert only["level"] == "ERROR"
    assert "ConfigurationError" in only["exc_info"]


def test_a_line_says_what_it_is_about_and_nothing_after_it(tmp_path: Path) -> None:
    site = empty_site(tmp_path)
    log = logging.getLogger("flows.anything")
    before = log.getEffectiveLevel()
    with site_log(site, NOW):
        with about(pass_id="p", plate="TP-1"), about(file="a.csv"):
            log.warning("100 %% of %s", "it", extra={"count": 3})
        log.info("outside")
    log.warning("after the pass")
    inside, outside = lines(site)
    assert inside["message"] == "100 % of it"
    assert (inside["pass_id"], inside["plate"], inside["file"], inside["count"]) == ("p", "TP-1", "a.csv", 3)
    assert (outside["pass_id"], outside["plate"], outside["file"]) == (None, None, None)
    assert log.getEffectiveLevel() == before


def test_status_of_a_new_site_knows_nothing_and_says_what_to_type(tmp_path: Path) -> None:
    told = printed(empty_site(tmp_path))
    assert told["last pass"] == "none yet: halfsat overnight"
    assert told["held"] == "not known, not known"
    assert told["last verify"] == "never: halfsat verify"


def test_status_counts_what_is_there(tiny: TinySite) -> None:
    site = tiny.site
    (site.inbox / "new.csv").write_bytes(b"later")
    found = site_status(site, NOW)
    assert (found.backlog, found.waiting, found.held_wells, found.held_series, found.quarantined) == (
        1,
        0,
        1,
        0,
        0,
    )
    assert found.last_started == FIRST_NIGHT + timedelta(days=7, hours=8)
    assert found.last_finished == found.last_started + timedelta(minutes=3)
    assert found.next_pass == (NOW + timedelta(days=NOW.hour >= 4)).replace(hour=4, minute=0, second=0)
    assert found.site_bytes > site.loader_file.stat().st_size
    assert not found.running
    with pass_lock(site):
        assert site_status(site, NOW).running


def test_a_pass_that_was_cut_off_is_told(tiny: TinySite) -> None:
    ledger.append(tiny.site, "pass_started", {"pass_id": "cut off"}, at=NOW)
    assert "did not come to its end" in printed(tiny.site)["last pass"]


def test_status_says_when_everything_was_verified_and_what_came_of_it(tiny: TinySite) -> None:
    CliRunner().invoke(tree, ["verify", "--site", str(tiny.site.root)])
    before = site_status(tiny.site, NOW).verified
    assert before is not None
    raw = next(path for path in sorted(tiny.site.raw.rglob("*")) if path.is_file())
    raw.unlink()
    CliRunner().invoke(tree, ["verify", "--site", str(tiny.site.root)])
    after = site_status(tiny.site, NOW).verified
    assert after is not None
    assert after.damage_count == before.damage_count + 1
    assert printed(tiny.site)["last verify"].endswith(f"{after.damage_count} damaged or missing")
    assert ledger.verify_chain(tiny.site)


def test_status_as_json_has_every_field(tiny: TinySite) -> None:
    done = CliRunner().invoke(tree, ["site", "status", "--format", "json", "--site", str(tiny.site.root)])
    found = json.loads(done.output)
    assert found["held_wells"] == 1
    assert set(found) == set(vars(site_status(tiny.site, NOW)))
