"""The whole pass on real components: what comes out of a night, and what a second pass does."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from datetime import timedelta
from pathlib import Path

import duckdb
import pandas as pd
import pytest

from flows.demo.scenario import read_scenario
from flows.ledger import entries, verify_chain
from flows.overnight.nightly import run_pass
from flows.overnight.report import PassReport
from flows.site.layout import Site, open_site
from flows.site.lock import pass_lock
from flows.site.shipped import shipped
from flows.warehouse.reader import open_published
from models.errors import SiteError
from tests.conftest import NIGHT

Night = tuple[Site, PassReport]


def ask(site: Site, sql: str) -> pd.DataFrame:
    with open_published(site) as connection:
        frame: pd.DataFrame = connection.sql(sql).df()
    return frame


@pytest.fixture
def copied_night(demo_night: Night, tmp_path: Path) -> Site:
    """A copy of the demo site after its night, to change."""
    root = tmp_path / "site"
    shutil.copytree(demo_night[0].root, root, symlinks=True)
    return open_site(root)


def test_every_export_is_read_or_in_quarantine_with_a_reason(demo_night: Night) -> None:
    site, report = demo_night
    files = ask(site, "select * from files")
    assert set(files["file_name"]) == {path.name for path in site.inbox.iterdir()}
    refused = files[files["kind"] == "quarantined"]
    assert list(refused["file_name"]) == ["tower_0033.csv"]
    assert refused["reason"].str.contains("tower_0033.csv, line").all()
    assert [name for name, _ in report.quarantined] == ["tower_0033.csv"]
    assert len(report.analysis_ids) >= 12
    assert report.waiting == ()


def test_lots_come_out_as_they_were_made(demo_night: Night) -> None:
    """Constants against those that the scenario simulates: kcat and K within 4 standard errors or 6 %."""
    site, _ = demo_night
    scenario = read_scenario(shipped("fixtures/demo") / "scenario.toml")
    lots = ask(site, "select * from lot_latest").set_index(["lot", "constant"])
    checked = 0
    for name, truth in scenario.lots.items():
        for constants, true_value in (
            (("km", "k_half"), truth.k_um),
            (("kcat",), truth.kcat_per_s),
            (("hill_n",), truth.hill_n),
        ):
            for constant in constants:
                if (name, constant) in lots.index and lots.loc[(name, constant), "standing"] == "clear":
                    row = lots.loc[(name, constant)]
                    slack = max(4 * row["standard_error"], 0.06 * true_value)
                    assert abs(row["value"] - true_value) < slack, (name, constant, row["value"], true_value)
                    checked += 1
    assert checked >= 24


def test_the_slow_lot_and_the_unsaturated_lot_are_seen(demo_night: Night) -> None:
    site, _ = demo_night
    lots = ask(site, "select * from lot_latest").set_index(["lot", "constant"])
    slow, reference = lots.loc[("AP-2602", "kcat")], lots.loc[("R-AP-07", "kcat")]
    assert slow["high"] < 0.85 * reference["low"]
    assert (lots.loc["AP-2603"]["standing"] == "held").all()
    held = ask(site, "select * from findings where gate = 'saturation_not_reached' and outcome = 'breach'")
    series = ask(site, "select * from series").set_index("series_id")["lot"]
    # Beside it, the highest level of an inhibitor takes the apparent Km of a lot beyond its substrate.
    assert set(held["series_id"].map(series)) == {"AP-2603", "BG-0431"}


def test_each_fault_of_the_night_is_named_by_its_gate(demo_night: Night) -> None:
    site, _ = demo_night
    gates = set(ask(site, "select gate from findings where outcome = 'breach'")["gate"])
    assert gates == {
        "blank_drift",
        "substrate_depletion",
        "initial_slope_nonlinear",
        "saturation_not_reached",
        "detector_range",
        "read_schedule",
        "outlier_in_series",
    }
    held_share = ask(site, "select avg((standing = 'held')::int) as share from wells")["share"].iloc[0]
    assert held_share < 0.05


def test_held_wells_stay_out_of_the_fit_and_the_fit_with_them_is_kept(demo_night: Night) -> None:
    site, _ = demo_night
    counts = ask(
        site,
        """
        select s.series_id, s.clear_well_count, w.not_void,
               max(f.point_count) filter (f.wells = 'clear') as clear_points,
               max(f.point_count) filter (f.wells = 'all') as all_points
        from series s join fits f using (series_id)
        join (select series_id, count(*) filter (standing <> 'void') as not_void from wells group by 1) w
          using (series_id)
        where s.refusal is null
        group by all
        """,
    )
    assert (counts["clear_points"] == counts["clear_well_count"]).all()
    assert (counts["all_points"] == counts["not_void"]).all()
    assert (counts["all_points"] > counts["clear_points"]).any()


def test_a_second_pass_over_the_same_files_does_nothing(copied_night: Site) -> None:
    before = {
        path: path.read_bytes()
        for path in copied_night.root.rglob("*")
        if path.is_file() and not {"ledger", "log"} & {*path.parts} and path != copied_night.lock_file
        if path.suffix != ".duckdb"
    }
    tables = ask(copied_night, "select count(*) as n from analyses union all select count(*) from passes")
    report = run_pass(copied_night, lambda: NIGHT + timedelta(days=1))
    assert report.nothing_new
    after = ask(copied_night, "select count(*) as n from analyses union all select count(*) from passes")
    assert tables.equals(after)
    assert {path: path.read_bytes() for path in before} == before
    assert verify_chain(copied_night) == sum(1 for _ in entries(copied_night))


def test_random_bytes_end_in_quarantine_and_the_rest_goes_on(copied_night: Site) -> None:
    (copied_night.inbox / "noise.bin").write_bytes(bytes((i * 7919) % 251 for i in range(5000)))
    export = copied_night.inbox / "cold_SW104412.tsv"
    before, last_digit, after = export.read_text("latin-1").rpartition("3")
    assert last_digit
    export.write_text(f"{before}4{after}", "latin-1")
    report = run_pass(copied_night, lambda: NIGHT + timedelta(days=1))
    assert [name for name, _ in report.quarantined] == ["noise.bin"]
    assert report.quarantined[0][1]
    kept = [p for p in copied_night.quarantine.iterdir() if p.name.endswith("noise.bin")]
    assert len(kept) == 1
    assert kept[0].with_name(kept[0].name + ".reason.txt").read_text().startswith(report.quarantined[0][1])
    assert report.export_count == 1
    assert len(report.analysis_ids) == 1


def test_an_export_waits_for_its_plate_map(tmp_path: Path, demo_night: Night) -> None:
    done = demo_night[0]
    root = tmp_path / "site"
    shutil.copytree(done.config, root / "config", ignore=shutil.ignore_patterns("recipes"))
    for folder in ("inbox", "raw", "ledger"):
        (root / folder).mkdir()
    site = open_site(root)
    shutil.copy(done.inbox / "cold_SW104412.tsv", site.inbox)
    report = run_pass(site, lambda: NIGHT)
    assert [each.plate_id for each in report.waiting] == ["SW104412"]
    assert "plate map" in report.waiting[0].reason
    assert report.analysis_ids == ()
    for path in done.inbox.glob("map_*"):
        shutil.copy(path, site.inbox)
    later = run_pass(site, lambda: NIGHT + timedelta(hours=2))
    assert later.waiting == ()
    assert len(later.analysis_ids) == 1


def test_the_same_night_gives_the_same_numbers_on_another_day(demo_night: Night, tmp_path: Path) -> None:
    done = demo_night[0]
    root = tmp_path / "site"
    shutil.copytree(done.config, root / "config", ignore=shutil.ignore_patterns("recipes"))
    for folder in ("raw", "ledger"):
        (root / folder).mkdir()
    shutil.copytree(done.inbox, root / "inbox")
    again = open_site(root)
    run_pass(again, lambda: NIGHT + timedelta(days=30))
    for table, order in (
        ("estimates", "estimate_id"),
        ("rates", "analysis_id, well"),
        ("findings", "finding_id"),
    ):
        sql = f"select * from {table} order by {order}"
        pd.testing.assert_frame_equal(ask(done, sql), ask(again, sql), check_exact=True)


def test_two_passes_never_overlap(copied_night: Site) -> None:
    with pass_lock(copied_night), pytest.raises(SiteError, match="another pass is running"):
        run_pass(copied_night, lambda: NIGHT)


class Killed(BaseException):
    """Stands for a kill: nothing may catch it."""


@pytest.mark.parametrize("dies_at", ["pull", "stage", "gate", "fit", "load", "publish"])
def test_a_pass_killed_at_any_step_is_made_up_by_the_next(
    demo_night: Night, tmp_path: Path, dies_at: str
) -> None:
    done = demo_night[0]
    root = tmp_path / "site"
    shutil.copytree(done.config, root / "config", ignore=shutil.ignore_patterns("recipes"))
    for folder in ("inbox", "raw", "ledger"):
        (root / folder).mkdir()
    site = open_site(root)
    shutil.copy(done.inbox / "cold_SW104412.tsv", site.inbox)
    for path in done.inbox.glob("map_*"):
        shutil.copy(path, site.inbox)

    def run(name: str, step: Callable[..., object], *given: object) -> object:
        result = step(*given)
        if name == dies_at:
            raise Killed
        return result

    with pytest.raises(Killed):
        run_pass(site, lambda: NIGHT, run)
    run_pass(site, lambda: NIGHT + timedelta(hours=1))
    expected = ask(
        done,
        "select e.* from estimates e join current_analyses c using (analysis_id) "
        "where plate_id = 'SW104412' order by estimate_id",
    )
    found = ask(site, "select * from estimates order by estimate_id")
    pd.testing.assert_frame_equal(found, expected, check_exact=True)
    assert len(ask(site, "select * from files")) == len(list(site.inbox.iterdir()))


def test_the_loader_is_closed_after_a_pass(demo_night: Night) -> None:
    with duckdb.connect(str(demo_night[0].loader_file), read_only=True) as connection:
        assert connection.sql("select count(*) from analyses").fetchall()[0][0] >= 12
