"""A site of three plates of the demo's scenario, through two real passes and a revision, shared by the tests.

The first night has a plate with its map, a plate that waits for one, and a torn export. Before the second,
which brings the missing map, the profile of the waiting plate is edited. Afterwards one plate is analysed
again under another limit.
"""

from __future__ import annotations

import shutil
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pandas as pd
import pytest

from flows.demo import write_demo
from flows.history.recompute import analysed
from flows.overnight.nightly import run_pass
from flows.site.layout import Site, open_site
from flows.site.recipes import Recipe, keep_recipe
from flows.stages.gate_runs import keep_runs
from flows.stages.load import load_results
from flows.stages.lots import current_estimates, lot_values
from flows.stages.plate_work import RawReader, WorkSource, work_from_raw
from flows.stages.publish import publish_results
from flows.warehouse.reader import open_published
from models.identity import result_id
from models.tables import ANALYSES, GATE_RUNS, RECIPES, SERIES

FIRST = datetime(2026, 11, 4, 4, 0, 0, 123456, tzinfo=UTC)
SECOND = FIRST + timedelta(days=1)
REVISED = FIRST + timedelta(days=2)
FIRST_FILES = ("Nacht_SW104403.txt", "map_phosphatase_night.csv", "tower_0031.csv", "tower_0033.csv")
SECOND_FILES = ("Nacht_SW104404.txt", "map_kinase_night.xlsx")
PLATES = ("SW104403", "SW104404", "SW104413")


@pytest.fixture(scope="session")
def kept_nights(tmp_path_factory: pytest.TempPathFactory) -> Site:
    """The site; tests that change it take a copy."""
    folder: Path = tmp_path_factory.mktemp("nights")
    write_demo(folder / "site")
    site = open_site(folder / "site")
    site.inbox.rename(folder / "night")
    site.inbox.mkdir()
    drop(folder / "night", FIRST_FILES, site)
    waiting = run_pass(site, lambda: FIRST).waiting
    assert [each.plate_id for each in waiting] == ["SW104413"]
    edit_profile(site)
    drop(folder / "night", SECOND_FILES, site)
    assert len(run_pass(site, lambda: SECOND).analysis_ids) == 2
    revise(site, "SW104403", REVISED)
    return site


@pytest.fixture
def nights(kept_nights: Site, tmp_path: Path) -> Site:
    """A copy of the site, to change."""
    shutil.copytree(kept_nights.root, tmp_path / "site", symlinks=True)
    return open_site(tmp_path / "site")


def drop(folder: Path, names: tuple[str, ...], site: Site) -> None:
    for name in names:
        shutil.copy(folder / name, site.inbox)


def edit_profile(site: Site) -> None:
    """Name the channels by their first digit: read with the edited profile, no export has the channel 340."""
    path = site.config / "profiles" / "tower.toml"
    text = path.read_text()
    assert "(?P<channel>\\\\d+)" in text
    path.write_text(text.replace("(?P<channel>\\\\d+)", "(?P<channel>\\\\d)"))


def revise(site: Site, plate_id: str, at: datetime) -> None:
    """A second revision of a plate under a stricter limit on depletion, loaded and published."""
    with open_published(site) as connection:
        row = connection.execute(
            "SELECT p.plate_read_id, p.export_id, e.file_name, p.place_in_export, a.map_id, m.file_name, "
            "a.recipe_id FROM analyses a JOIN plate_reads p USING (plate_read_id) "
            "JOIN files e ON e.file_id = p.export_id JOIN files m ON m.file_id = a.map_id "
            "WHERE p.plate_id = ?",
            [plate_id],
        ).fetchone()
    assert row is not None
    reader = RawReader(site)
    kept = reader.recipe(row[6])
    limits = {**kept.limits, "substrate_depletion": {**kept.limits["substrate_depletion"], "limit": 0.05}}
    recipe = Recipe(kept.assay_name, kept.assay, kept.profile_name, kept.profile, limits, kept.code_version)
    keep_recipe(site, recipe)
    fitted = analysed([work_from_raw(reader, WorkSource(*row[:6]), recipe)])
    pass_id = result_id("pass", at.isoformat())
    ids = [work.analysis_id for work in fitted.plates]
    facts = {"pass_id": pass_id, "computed_at": at, "superseded_by": None, "revision": 2}
    tables = {
        **fitted.tables,
        ANALYSES.name: fitted.tables[ANALYSES.name].assign(**facts),
        RECIPES.name: pd.DataFrame([recipe.row()]),
        GATE_RUNS.name: keep_runs(site, pass_id, fitted.runs, ids),
    }
    load_results(site, pass_id, tables, at)
    assay = fitted.tables[ANALYSES.name]["assay"].iloc[0]
    values, sources = lot_values(
        current_estimates(site, fitted.tables[SERIES.name].assign(assay=assay)), pass_id
    )
    load_results(site, pass_id, {"lot_values": values, "lot_value_sources": sources}, at)
    publish_results(site, at)
