"""Views: every table, view and column says what it is, and the answers are what the tiny site's rows say."""

from datetime import UTC, datetime

import pytest

from flows.warehouse import writer
from flows.warehouse.bookkeeping import STORED
from flows.warehouse.page import PAGE, table_page
from flows.warehouse.reader import open_published
from flows.warehouse.schema import all_views
from flows.warehouse.views import RESULT_VIEWS
from models.tables import READINGS
from tests.flows.tiny_site import HELD, PLATES, all_wells, empty_site, signal, tiny_site

VIEW_NAMES = [*(view.name for view in RESULT_VIEWS), "reading"]
ARROW = {
    "text": "string",
    "integer": "int64",
    "real": "double",
    "flag": "bool",
    "timestamp": "timestamp[us, tz=UTC]",
}


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    return tiny_site(tmp_path_factory.mktemp("tiny"))


@pytest.fixture(scope="module")
def connection(made):
    with open_published(made.site) as opened:
        yield opened


def rows_of(connection, sql: str) -> list[dict[str, object]]:
    return connection.sql(sql).to_arrow_table().to_pylist()


@pytest.mark.parametrize("kind", ["tables", "views"])
def test_every_table_and_view_has_its_comment(connection, made, kind):
    declared = STORED if kind == "tables" else all_views(made.site)
    name = "table_name" if kind == "tables" else "view_name"
    found = connection.execute(f"SELECT {name}, comment FROM duckdb_{kind}() WHERE NOT internal").fetchall()
    assert dict(found) == {each.name: each.meaning for each in declared}


def test_every_column_has_its_comment_with_its_unit(connection, made):
    found = connection.execute(
        "SELECT table_name, column_name, comment FROM duckdb_columns() WHERE NOT internal ORDER BY ALL"
    ).fetchall()
    declared = [
        (each.name, column.name, column.comment)
        for each in (*STORED, *all_views(made.site))
        for column in each.columns
    ]
    assert found == sorted(declared)
    assert all(comment for _, _, comment in found)
    assert ("reading", "time_s", "Time since the plate's first read [s]") in found


@pytest.mark.parametrize("name", VIEW_NAMES)
def test_a_view_gives_the_columns_it_declares(connection, made, name):
    view = next(each for each in all_views(made.site) if each.name == name)
    answer = connection.sql(f"SELECT * FROM {name}").to_arrow_table()
    assert answer.column_names == [column.name for column in view.columns]
    assert [str(kind) for kind in answer.schema.types] == [ARROW[column.kind] for column in view.columns]
    assert answer.num_rows > 0
    for column in view.columns:
        assert column.nullable or answer[column.name].null_count == 0, column.name


def test_views_answer_over_an_empty_warehouse(tmp_path):
    site = empty_site(tmp_path)
    writer.publish(site)
    with open_published(site) as connection:
        for view in all_views(site):
            answer = connection.sql(f"SELECT * FROM {view.name}").to_arrow_table()
            assert answer.num_rows == 0
            assert [str(kind) for kind in answer.schema.types] == [ARROW[c.kind] for c in view.columns]


def test_lot_history_has_the_columns_that_were_agreed(made):
    view = next(each for each in all_views(made.site) if each.name == "lot_history")
    names = ["lot", "assay", "date", "constant", "estimate", "low", "high", "unit", "plate_reads", "standing"]
    assert [column.name for column in view.columns] == [*names, "modulator"]


def test_held_wells_say_what_holds_them(connection):
    (held,) = rows_of(connection, "SELECT plate_id, well, gates, sentences, lot FROM held_wells")
    assert held == {
        "plate_id": HELD[0],
        "well": HELD[1],
        "gates": "substrate_depletion, blank_drift",
        "sentences": "21 % of the substrate was consumed. The blanks drift.",
        "lot": "QX-7",
    }


def test_gate_tally_counts_plate_reads(connection):
    found = rows_of(
        connection,
        "SELECT gate, finding_count, plate_read_count, plate_read_share FROM gate_tally ORDER BY 1",
    )
    assert [tuple(row.values()) for row in found] == [
        ("blank_drift", 1, 1, 0.5),
        ("substrate_depletion", 1, 1, 0.5),
    ]


def test_lot_latest_has_one_row_a_lot_and_constant(connection):
    found = rows_of(
        connection, "SELECT lot, constant, value, plate_read_count, pass_id FROM lot_latest ORDER BY lot"
    )
    assert [tuple(row.values()) for row in found] == [
        ("QX-7", "km", 51.0, 2, "pass-2"),
        ("REF-1", "km", 51.0, 2, "pass-2"),
    ]


def test_lot_history_has_a_row_a_pass(connection):
    found = rows_of(
        connection, "SELECT date, estimate, plate_reads FROM lot_history WHERE lot = 'QX-7' ORDER BY date"
    )
    assert [tuple(row.values()) for row in found] == [
        (datetime(2026, 3, 2, 21, tzinfo=UTC), 50.0, 1),
        (datetime(2026, 3, 9, 21, tzinfo=UTC), 51.0, 2),
    ]


def test_reference_chart_follows_the_reference_lot_plate_after_plate(connection):
    found = rows_of(
        connection,
        "SELECT lot, plate_id, place, value, moving_range FROM reference_chart "
        "WHERE constant = 'km' ORDER BY place",
    )
    assert [tuple(row.values()) for row in found] == [
        ("REF-1", "TP-1", 1, 50.0, None),
        ("REF-1", "TP-2", 2, 52.0, 2.0),
    ]


def test_a_plate_read_without_a_start_is_dated_by_its_receipt(connection):
    found = rows_of(connection, "SELECT plate_id, measured_at FROM current_analyses ORDER BY plate_id")
    assert [tuple(row.values()) for row in found] == [
        ("TP-1", datetime(2026, 3, 2, 21, tzinfo=UTC)),
        ("TP-2", datetime(2026, 3, 10, 5, tzinfo=UTC)),
    ]


def test_estimate_lineage_names_the_export(connection, made):
    (found,) = rows_of(
        connection,
        "SELECT export_file_name, export_id, map_id, recipe_id, plate_read_id FROM estimate_lineage "
        f"WHERE estimate_id = '{made.estimate_ids['TP-2', 'QX-7']}'",
    )
    assert tuple(found.values()) == (
        "TP-2.csv",
        made.export_ids["TP-2"],
        made.map_id,
        made.recipe.recipe_id,
        made.plate_read_ids["TP-2"],
    )


def test_reading_gives_what_the_export_says_and_opens_one_file_for_one_plate(connection, made):
    plate_read_id = made.plate_read_ids["TP-2"]
    found = connection.execute(
        "SELECT well, time_s, signal FROM reading WHERE plate_read_id = ? ORDER BY ALL", [plate_read_id]
    ).fetchall()
    expected = [
        (well, t, signal("TP-2", well, t)) for well in all_wells() for t in (0.0, 10.0, 20.0, 30.0, 40.0)
    ]
    assert found == sorted(expected)
    plan = connection.execute(
        f"EXPLAIN ANALYZE SELECT count(*) FROM reading WHERE plate_read_id = '{plate_read_id}'"
    ).fetchall()[0][1]
    assert f"1/{len(PLATES)}" in plan


def test_the_page_is_what_the_declarations_say(made):
    assert PAGE.read_text() == table_page()
    for each in (*STORED, *all_views(made.site)):
        section = table_page().split(f"### {each.name}\n")[1].split("###")[0]
        for column in each.columns:
            assert f"| `{column.name}` | {column.kind} | {column.unit or ''} | {column.meaning}" in section
    assert READINGS.meaning in table_page()
