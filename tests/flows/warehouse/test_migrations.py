"""Warehouses and lakes that an earlier definition of the tables wrote: brought up to date, no row lost."""

import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace

import pytest

from flows.stages.load import repair
from flows.stages.publish import publish_results
from flows.warehouse import migrations, schema, writer
from flows.warehouse.bookkeeping import COLUMNS_DIGEST, SCHEMA, SCHEMA_VERSION, STORED, columns_digest
from flows.warehouse.reader import open_published
from models.errors import SiteError
from models.tables import FITS, Column, Table
from tests.flows.tiny_site import FIRST_NIGHT, tiny_site

RUNS_P = next(column for column in FITS.columns if column.name == "runs_p")
POINT_COUNT = next(column for column in FITS.columns if column.name == "point_count")
GONE = Column("old_note", "text", "A column of the past", nullable=True)


@contextmanager
def as_before(table: Table, columns: tuple[Column, ...]) -> Iterator[None]:
    """The table with the columns that it had once, for all that is written meanwhile."""
    now = table.columns
    object.__setattr__(table, "columns", columns)
    try:
        yield
    finally:
        object.__setattr__(table, "columns", now)


def without(*gone: Column) -> tuple[Column, ...]:
    return tuple(column for column in FITS.columns if column not in gone)


def snapshot(site) -> dict[str, list[tuple[object, ...]]]:
    """Every row, columns in the order in which they are declared."""
    with writer.loader(site) as connection:
        return {
            each.name: connection.execute(
                f"SELECT {', '.join(each.column_names)} FROM {each.name} ORDER BY ALL"
            ).fetchall()
            for each in STORED
            if each.name != SCHEMA.name
        }


def database_of(site, sql: str) -> list[tuple[object, ...]]:
    with writer.loader(site) as connection:
        return connection.execute(sql).fetchall()


def test_a_new_column_is_added_where_rows_are_and_is_unknown_in_them(tmp_path):
    with as_before(FITS, without(RUNS_P)):
        made = tiny_site(tmp_path)
        before = snapshot(made.site)
    after = snapshot(made.site)
    place = FITS.column_names.index("runs_p")
    assert [row[:place] + row[place + 1 :] for row in after["fits"]] == before["fits"]
    assert {row[place] for row in after["fits"]} == {None}
    assert {name: rows for name, rows in after.items() if name != "fits"} == {
        name: rows for name, rows in before.items() if name != "fits"
    }
    comment = "SELECT comment FROM duckdb_columns() WHERE table_name = 'fits' AND column_name = 'runs_p'"
    assert database_of(made.site, comment) == [(RUNS_P.comment,)]
    assert list(made.site.warehouse.glob("loader.*-*")) == []
    publish_results(made.site, FIRST_NIGHT)
    with open_published(made.site) as connection:
        assert connection.execute("SELECT count(runs_p), count(*) FROM fits").fetchone() == (0, 16)
        assert connection.execute("SELECT count(*) FROM current_estimates").fetchone() == (16,)


def test_a_lake_of_before_loads_and_gives_the_same_warehouse(tmp_path):
    with as_before(FITS, without(RUNS_P)):
        made = tiny_site(tmp_path)
    brought_up = snapshot(made.site)
    shutil.rmtree(made.site.warehouse)
    assert repair(made.site) > 0
    assert snapshot(made.site) == brought_up


def test_a_new_table_and_new_views_are_made(tmp_path):
    made = tiny_site(tmp_path)
    whole = snapshot(made.site)
    with writer.loader(made.site) as connection:
        connection.execute("DROP TABLE shifts")
        connection.execute("CREATE VIEW stale AS SELECT 1")
        connection.execute("UPDATE schema_version SET tables_digest = 'earlier', views_digest = 'earlier'")
    assert snapshot(made.site) == {**whole, "shifts": []}
    views = "SELECT count(*) FROM duckdb_views() WHERE view_name = 'stale'"
    assert database_of(made.site, views) == [(0,)]
    shape = "SELECT schema_version, tables_digest <> 'earlier' FROM schema_version"
    assert database_of(made.site, shape) == [(SCHEMA_VERSION, True)]


@pytest.mark.parametrize(
    "columns",
    [
        (*without(POINT_COUNT), replace(POINT_COUNT, nullable=True)),
        (*FITS.columns, GONE),
        (*without(RUNS_P), replace(RUNS_P, kind="integer", unit=None)),
    ],
    ids=["could be unknown", "column that went", "other kind"],
)
def test_what_cannot_be_changed_in_place_is_made_again_from_the_lake(tmp_path, columns):
    made = tiny_site(tmp_path / "now")
    with as_before(FITS, columns):
        before = tiny_site(tmp_path / "before")
    with pytest.raises(migrations.OutdatedWarehouse, match="earlier halfsat: fits"):
        snapshot(before.site)
    loads = len(snapshot(made.site)["loads"])
    assert repair(before.site) == loads
    assert same_but_names(snapshot(before.site), snapshot(made.site))
    assert list(before.site.warehouse.glob("loader.*-*")) == []


def same_but_names(one, other) -> bool:
    """Whether all results are equal; batches and lake files of another shape have other digests."""
    apart = ("lake_files", "loads")
    return all(one[name] == other[name] for name in one if name not in apart) and len(one) == len(other)


def test_an_earlier_warehouse_stays_where_the_lake_cannot_replace_it(tmp_path):
    with as_before(FITS, without(POINT_COUNT)):
        made = tiny_site(tmp_path)
    with pytest.raises(SiteError, match=r"fits\.point_count must be known now; 8 rows do not have it"):
        repair(made.site)
    (aside,) = made.site.warehouse.glob("loader.outdated-*.duckdb")
    assert aside.stat().st_size > 0


def test_a_migration_that_fails_leaves_the_file_as_it_was(tmp_path, monkeypatch):
    with as_before(FITS, without(RUNS_P)):
        made = tiny_site(tmp_path)
        before = snapshot(made.site)

    def die(*_given):
        migrations.apply(*_given)
        raise RuntimeError("power")

    monkeypatch.setattr(schema, "apply", die)
    with pytest.raises(RuntimeError, match="power"):
        snapshot(made.site)
    monkeypatch.undo()
    with as_before(FITS, without(RUNS_P)):
        assert snapshot(made.site) == before
    assert len(snapshot(made.site)["fits"]) == len(before["fits"])


def test_a_newer_warehouse_is_refused_and_left_alone(tmp_path):
    made = tiny_site(tmp_path)
    with writer.loader(made.site) as connection:
        connection.execute("UPDATE schema_version SET schema_version = ?", [SCHEMA_VERSION + 1])
    content = made.site.loader_file.read_bytes()
    with pytest.raises(SiteError, match="made by a newer halfsat"):
        repair(made.site)
    assert made.site.loader_file.read_bytes() == content


def test_a_change_of_the_tables_raises_their_number():
    assert columns_digest() == COLUMNS_DIGEST, (
        f"the tables changed: in flows/warehouse/bookkeeping.py set SCHEMA_VERSION = {SCHEMA_VERSION + 1} "
        f'and COLUMNS_DIGEST = "{columns_digest()}"'
    )
