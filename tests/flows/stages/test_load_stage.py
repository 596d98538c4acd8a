"""Loading and publishing: wherever a pass is killed, the next one brings it to where it would be."""

import shutil
from datetime import timedelta

import pytest

from flows import lake, ledger
from flows.stages.load import load_results, repair
from flows.stages.publish import publish_results
from flows.warehouse import writer
from flows.warehouse.bookkeeping import SCHEMA, STORED
from flows.warehouse.reader import open_published
from models.errors import SiteError
from models.tables import READINGS
from tests.flows.tiny_site import FIRST_NIGHT, analysed_tables, empty_site, tiny_recipe, tiny_site

AT = FIRST_NIGHT + timedelta(days=30)


@pytest.fixture
def made(tmp_path):
    return tiny_site(tmp_path)


def snapshot(site) -> dict[str, list[tuple[object, ...]]]:
    """Every row but the schema's own, whose digest names the site's folder."""
    names = [each.name for each in STORED if each.name != SCHEMA.name]
    with writer.loader(site) as connection:
        return {name: connection.execute(f"FROM {name} ORDER BY ALL").fetchall() for name in names}


def revised(made):
    return analysed_tables(made, "TP-1", "pass-3", AT, revision=2, recipe=tiny_recipe(0.2))


def test_the_ledger_names_every_lake_file_with_its_hash(made):
    named = {
        (each["path"], each["sha256"])
        for entry in ledger.entries(made.site)
        for each in entry.body.get("lake_files", ())
    }
    on_disk = {path.relative_to(made.site.root).as_posix() for path in made.site.lake.rglob("*.parquet")}
    assert {path for path, _ in named} == on_disk
    assert all(lake.condition(made.site, *each) == "unchanged" for each in named)
    with writer.loader(made.site) as connection:
        assert set(connection.execute("SELECT path, sha256 FROM lake_files").fetchall()) == named


def test_a_batch_says_which_analyses_it_holds(made):
    entries = [entry for entry in ledger.entries(made.site) if entry.kind == "analysis_loaded"]
    assert [entry.body["analyses"][0]["analysis_id"] for entry in entries] == list(made.analysis_ids.values())
    assert entries[0].body["analyses"][0]["recipe_id"] == made.recipe.recipe_id
    assert entries[0].body["pass_id"] == "pass-1"


def test_nothing_to_load_is_not_recorded(made):
    before = ledger.verify_chain(made.site)
    assert (
        load_results(made.site, "p", {"files": analysed_tables(made, "TP-1", "p", AT)["wells"][:0]}, AT)
        is None
    )
    assert ledger.verify_chain(made.site) == before


@pytest.mark.parametrize("lost", ["warehouse folder", "database", "damaged database", "written over in part"])
def test_a_lost_warehouse_is_made_again_row_for_row(made, lost):
    load_results(made.site, "pass-3", revised(made), AT)
    before = snapshot(made.site)
    loader_file = made.site.loader_file
    if lost == "warehouse folder":
        shutil.rmtree(made.site.warehouse)
    elif lost == "database":
        loader_file.unlink()
    elif lost == "damaged database":
        loader_file.write_bytes(b"nothing that a database would open" * 500)
    else:
        loader_file.write_bytes(b"\0" * 8192 + loader_file.read_bytes()[8192:])
    assert repair(made.site) == len(before["loads"])
    assert snapshot(made.site) == before
    assert repair(made.site) == 0
    aside = list(made.site.warehouse.glob("loader.damaged-*.duckdb"))
    assert len(aside) == (lost in ("damaged database", "written over in part"))


@pytest.mark.parametrize("killed_at", ["lake", "ledger", "warehouse", "commit"])
def test_a_kill_at_any_step_is_mended_by_the_next_pass(tmp_path, monkeypatch, killed_at):
    whole = tiny_site(tmp_path / "whole")
    load_results(whole.site, "pass-3", revised(whole), AT)

    killed = tiny_site(tmp_path / "killed")
    tables = revised(killed)
    owner, name = {
        "lake": (lake, "write_encoded"),
        "ledger": (ledger, "append"),
        "warehouse": (writer, "load"),
        "commit": (writer, "_record"),
    }[killed_at]

    def die(*_given, **_more):
        raise KeyboardInterrupt

    monkeypatch.setattr(owner, name, die)
    with pytest.raises(KeyboardInterrupt):
        load_results(killed.site, "pass-3", tables, AT)
    monkeypatch.undo()
    recorded = killed_at in ("warehouse", "commit")
    assert repair(killed.site) == recorded
    if not recorded:
        load_results(killed.site, "pass-3", tables, AT)
    assert snapshot(killed.site) == snapshot(whole.site)
    assert ledger.verify_chain(killed.site) == ledger.verify_chain(whole.site)


def test_repair_clears_what_killed_writes_left(made):
    for folder in (made.site.lake / "readings", made.site.warehouse, made.site.raw):
        (folder / ".x.abc.part").write_bytes(b"half")
    repair(made.site)
    assert list(made.site.root.rglob("*.part")) == []


def test_a_lost_lake_file_stops_the_repair_and_is_named(made):
    made.site.loader_file.unlink()
    lost = next((made.site.lake / "wells").iterdir())
    lost.unlink()
    with pytest.raises(SiteError, match=f"lake/wells/{lost.name} is missing"):
        repair(made.site)


def test_readings_must_be_in_the_lake_before_their_plate_read_is_recorded(made):
    lake.lake_path(made.site, READINGS.name, made.plate_read_ids["TP-1"]).unlink()
    with writer.loader(made.site) as connection:
        plate_reads = connection.sql("FROM plate_reads").df()
    before = ledger.verify_chain(made.site)
    with pytest.raises(SiteError, match="missing"):
        load_results(made.site, "p", {"plate_reads": plate_reads}, AT)
    assert ledger.verify_chain(made.site) == before


def test_a_publication_is_recorded_once_with_the_hash_of_the_copy(made):
    before = ledger.verify_chain(made.site)
    copy = publish_results(made.site, AT)
    assert ledger.verify_chain(made.site) == before
    load_results(made.site, "pass-3", revised(made), AT)
    newer = publish_results(made.site, AT)
    *_, last = ledger.entries(made.site)
    assert (last.kind, last.body["sha256"], last.body["file"]) == ("published", newer.sha256, newer.path.name)
    assert newer.version == copy.version + 1


def test_a_kill_between_copy_and_record_is_mended(tmp_path):
    site = empty_site(tmp_path)
    copy = writer.publish(site)
    assert publish_results(site, AT) == copy
    (entry,) = ledger.entries(site)
    assert entry.body["sha256"] == copy.sha256
    with open_published(site) as connection:
        assert connection.execute("SELECT count(*) FROM files").fetchone() == (0,)
