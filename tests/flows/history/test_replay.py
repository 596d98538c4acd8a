"""Replay: equal where nothing was touched, and exactly what differs where something was."""

from __future__ import annotations

from pathlib import Path

import duckdb
import pytest

from flows.history import replay as replaying
from flows.history.replay import replay
from flows.site.archive import raw_path
from flows.site.layout import Site
from flows.site.recipes import recipe_path
from flows.warehouse.reader import open_published
from models.errors import QueryError
from models.identity import content_id
from tests.flows.conftest import PLATES


def one(site: Site, sql: str) -> str:
    with open_published(site) as connection:
        row = connection.execute(sql).fetchone()
    assert row is not None
    return str(row[0])


def spoil(site: Site, sql: str) -> None:
    """Change what readers see, as a slip of a hand would."""
    path = site.published_link.resolve()
    path.chmod(0o644)
    with duckdb.connect(str(path)) as connection:
        connection.execute(sql)


def test_every_result_of_real_nights_comes_out_again_bit_for_bit(kept_nights: Site) -> None:
    told: list[tuple[int, int]] = []
    report = replay(kept_nights, tell=lambda done, total: told.append((done, total)))
    assert [each.differences for each in report.analyses] == [()] * 4
    assert [each.refusal for each in report.analyses] == [None] * 4
    assert sorted(each.plate_id for each in report.analyses) == sorted([*PLATES, PLATES[0]])
    assert report.equal_count == 4
    assert told[-1] == (4, 4)
    with open_published(kept_nights) as connection:
        counted = sum(
            connection.execute(f"SELECT count(*) FROM {name}").fetchall()[0][0]
            for name in ("wells", "rates", "findings", "series", "grids", "fits", "estimates", "fit_points")
        )
    assert report.row_count > counted + 3 * 96 * 61


@pytest.mark.parametrize(
    ("column", "table"),
    [
        ("estimate_id", "estimates"),
        ("fit_id", "fits"),
        ("series_id", "series"),
        ("analysis_id", "analyses"),
        ("recipe_id", "recipes WHERE recipe_id IN (SELECT recipe_id FROM analyses WHERE revision = 2)"),
    ],
)
def test_any_id_or_its_first_digits_replays_its_analysis(
    kept_nights: Site, monkeypatch: pytest.MonkeyPatch, column: str, table: str
) -> None:
    monkeypatch.setattr(replaying, "_replayed", lambda *given: [each.outcome() for each in given[-1]])
    full_id = one(kept_nights, f"SELECT {column} FROM {table} ORDER BY 1 LIMIT 1")
    report = replay(kept_nights, full_id[:14])
    assert full_id[:12] in report.about
    if table in ("estimates", "fits", "series", "analyses"):
        of_id = f"SELECT analysis_id FROM {table} WHERE {column} = '{full_id}'"
        assert [each.analysis_id for each in report.analyses] == [one(kept_nights, of_id)]
    else:
        assert [each.revision for each in report.analyses] == [2]


def test_a_plate_read_a_lot_value_and_a_file_replay_all_that_hangs_on_them(
    kept_nights: Site, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(replaying, "_replayed", lambda *given: [each.outcome() for each in given[-1]])
    read = one(kept_nights, f"SELECT plate_read_id FROM plate_reads WHERE plate_id = '{PLATES[0]}'")
    assert sorted(each.revision for each in replay(kept_nights, read).analyses) == [1, 2]
    lot = one(kept_nights, "SELECT lot_value_id FROM lot_values WHERE plate_read_count = 2 LIMIT 1")
    assert {each.plate_id for each in replay(kept_nights, lot).analyses} == set(PLATES[:2])
    plate_map = one(kept_nights, "SELECT map_id FROM analyses JOIN plate_reads USING (plate_read_id) LIMIT 1")
    assert len(replay(kept_nights, plate_map).analyses) >= 1
    torn = one(kept_nights, "SELECT file_id FROM files WHERE kind = 'quarantined'")
    with pytest.raises(QueryError, match="no result belongs to file"):
        replay(kept_nights, torn)


def test_a_changed_value_a_lost_row_and_a_row_too_many_are_told(nights: Site) -> None:
    well = f"analysis_id = (SELECT analysis_id FROM current_analyses WHERE plate_id = '{PLATES[2]}')"
    lost = one(nights, f"SELECT well FROM wells WHERE {well} AND standing = 'clear' ORDER BY well LIMIT 1")
    estimate = one(nights, f"SELECT estimate_id FROM estimates WHERE {well} ORDER BY 1 LIMIT 1")
    value = float(one(nights, f"SELECT value FROM estimates WHERE estimate_id = '{estimate}'"))
    spoil(nights, f"UPDATE estimates SET value = value * (1 + 1e-12) WHERE estimate_id = '{estimate}'")
    spoil(nights, f"DELETE FROM rates WHERE {well} AND well = '{lost}'")
    spoil(
        nights,
        f"INSERT INTO wells SELECT * REPLACE ('P24' AS well) FROM wells WHERE {well} AND well = '{lost}'",
    )
    (found,) = replay(nights, estimate).analyses
    told = {(each.table, each.column): each for each in found.differences}
    assert set(told) == {("estimates", "value"), ("rates", None), ("wells", None)}
    assert told["estimates", "value"].row == f"estimate_id {estimate}"
    assert told["estimates", "value"].recomputed == value
    assert told["estimates", "value"].stored == value * (1 + 1e-12)
    assert (told["rates", None].stored, told["rates", None].recomputed) == (None, "comes out")
    assert (told["wells", None].stored, told["wells", None].recomputed) == ("stored", None)
    assert told["wells", None].row.endswith("well P24")


def test_readings_are_held_against_the_bytes_of_the_export(nights: Site) -> None:
    """The lake's own file is damaged: the results still come out, and the readings are told."""
    read = one(nights, f"SELECT plate_read_id FROM plate_reads WHERE plate_id = '{PLATES[2]}'")
    path = nights.lake / "readings" / f"{read}.parquet"
    path.chmod(0o644)
    path.write_bytes(path.read_bytes()[:-9] + b"123456789")
    (found,) = replay(nights, read).analyses
    (difference,) = found.differences
    assert (difference.table, difference.row) == ("readings", f"lake/readings/{path.name}")
    assert difference.stored == "file changed"


def test_a_lost_export_a_changed_map_and_a_lost_recipe_are_named(nights: Site) -> None:
    export = one(nights, f"SELECT export_id FROM plate_reads WHERE plate_id = '{PLATES[0]}'")
    raw_path(nights, export).unlink()
    lost = one(nights, f"SELECT recipe_id FROM current_analyses WHERE plate_id = '{PLATES[2]}'")
    recipe_path(nights, lost).unlink()
    refusals = {each.plate_id: each.refusal for each in replay(nights).analyses}
    assert f"the raw file {export[:12]} is missing" in str(refusals[PLATES[0]])
    assert f"the recipe {lost[:12]} is missing" in str(refusals[PLATES[2]])
    assert refusals[PLATES[1]] is None


def test_other_code_is_refused_by_name_and_compared_on_request_and_nothing_written(
    kept_nights: Site, monkeypatch: pytest.MonkeyPatch
) -> None:
    analysis = one(kept_nights, f"SELECT analysis_id FROM current_analyses WHERE plate_id = '{PLATES[2]}'")
    made_by = one(kept_nights, "SELECT code_version FROM recipes LIMIT 1")
    monkeypatch.setattr(replaying, "code_version", lambda: "9.9+other")
    (refused,) = replay(kept_nights, analysis).analyses
    assert f"made by halfsat {made_by}, and this is 9.9+other" in str(refused.refusal)
    assert not refused.equal

    def state() -> dict[Path, int]:
        return {path: path.stat().st_mtime_ns for path in kept_nights.root.rglob("*")}

    before = state()
    report = replay(kept_nights, analysis, other_code=True)
    assert report.by_other_code == report.analyses
    assert report.equal_count == 1
    assert state() == before


def test_a_kept_recipe_keeps_its_id_whatever_its_records_gain(kept_nights: Site) -> None:
    recipe_id = one(kept_nights, "SELECT recipe_id FROM recipes LIMIT 1")
    recipe = replaying.RawReader(kept_nights).recipe(recipe_id)
    assert recipe.recipe_id == recipe_id
    assert content_id(recipe.canonical.encode()) == recipe_id
