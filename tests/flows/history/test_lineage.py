"""Lineage: from any id down to lines and fields of the export, with every hash looked at on the way."""

import csv
import io

import pytest

from flows.history.lineage import Node, lineage, lineage_text
from flows.site.archive import raw_path
from flows.stages.load import load_results
from flows.stages.publish import publish_results
from models.errors import QueryError, SiteError
from tests.flows.tiny_plates import FIRST_NIGHT, HELD, LEVELS_UM, signal
from tests.flows.tiny_site import analysed_tables, empty_site, tiny_recipe, tiny_site


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    return tiny_site(tmp_path_factory.mktemp("tiny"))


def of_kind(node: Node, kind: str) -> list[Node]:
    return [each for each in node.walk() if each.kind == kind]


def ids_by_kind(made) -> dict[str, str]:
    key = ("TP-2", "QX-7")
    return {
        "lot value": made.lot_value_ids["pass-2", "QX-7"],
        "estimate": made.estimate_ids[key],
        "fit": made.fit_ids[key],
        "series": made.series_ids[key],
        "grid": made.grid_ids[key],
        "analysis": made.analysis_ids["TP-2"],
        "plate read": made.plate_read_ids["TP-2"],
        "export": made.export_ids["TP-2"],
        "plate map": made.map_id,
        "recipe": made.recipe.recipe_id,
    }


KINDS = [
    "lot value",
    "estimate",
    "fit",
    "series",
    "grid",
    "analysis",
    "plate read",
    "export",
    "plate map",
    "recipe",
]


@pytest.mark.parametrize("kind", KINDS)
def test_any_id_or_its_first_digits_will_do(made, kind):
    full_id = ids_by_kind(made)[kind]
    node = lineage(made.site, full_id)
    assert (node.kind, node.id) == (kind, full_id)
    assert lineage(made.site, f" {full_id[:12].upper()} ") == node


def test_an_estimate_leads_to_everything_it_rests_on(made):
    node = lineage(made.site, ids_by_kind(made)["estimate"])
    kinds = [each.kind for each in node.walk()]
    assert kinds[:3] == ["estimate", "fit", "series"]
    for kind in ("rate", "analysis", "recipe", "plate map", "plate read", "readings", "export", "pass"):
        assert kind in kinds
    (export,) = of_kind(node, "export")
    assert export.id == made.export_ids["TP-2"]
    assert export.fact("file_name") == "TP-2.csv"
    assert export.fact("byte_count") == len(made.exports["TP-2"])
    assert export.fact("condition") == "unchanged"
    (readings,) = of_kind(node, "readings")
    assert readings.fact("condition") == "unchanged"
    assert readings.fact("path") == f"lake/readings/{made.plate_read_ids['TP-2']}.parquet"


def test_a_grid_unfolds_the_series_that_it_spans(made):
    node = lineage(made.site, made.grid_ids["TP-2", "QX-7"])
    assert [series.id for series in node.children] == [made.series_ids["TP-2", "QX-7"]]
    assert "not fitted: one modulator level only" in node.details


def test_a_lot_value_gathers_its_estimates_over_plates(made):
    node = lineage(made.site, ids_by_kind(made)["lot value"])
    expected = {made.estimate_ids[plate, "QX-7"] for plate in ("TP-1", "TP-2")}
    assert {each.id for each in of_kind(node, "estimate")} == expected
    assert {each.id for each in of_kind(node, "export")} == set(made.export_ids.values())


def test_the_span_of_a_rate_holds_its_signals_in_the_export(made):
    """The lines and fields that are named are read from the raw bytes and must hold the window's signals."""
    node = lineage(made.site, made.fit_ids["TP-2", "QX-7"])
    lines = list(csv.reader(io.StringIO(made.exports["TP-2"].decode())))
    rates = of_kind(node, "rate")
    assert [rate.fact("well") for rate in rates] == ["A1", "A2", "A3", "A4"]
    assert [rate.fact("mean_substrate_um") for rate in rates] == list(LEVELS_UM)
    for rate in rates:
        well = str(rate.fact("well"))
        first, last = rate.fact("source_first_row"), rate.fact("source_last_row")
        column = rate.fact("source_first_column")
        assert isinstance(first, int)
        assert isinstance(last, int)
        assert isinstance(column, int)
        assert column == rate.fact("source_last_column")
        assert (rate.fact("window_first_read"), rate.fact("window_last_read")) == (1, 4)
        found = [float(line[column - 1]) for line in lines[first - 1 : last]]
        assert found == [signal("TP-2", well, time_s) for time_s in (0, 10, 20, 30)]


def test_findings_and_wells_left_out_are_told(made):
    node = lineage(made.site, made.estimate_ids["TP-2", "QX-7"])
    assert {each.fact("gate") for each in of_kind(node, "finding")} == {"substrate_depletion", "blank_drift"}
    held = [rate for rate in of_kind(node, "rate") if rate.fact("standing") == "held"]
    assert [rate.fact("well") for rate in held] == [HELD[1]]
    text = lineage_text(node)
    assert "◐ A4" in text
    assert "(left out)" in text
    assert "21 % of the substrate was consumed." in text
    other = lineage(made.site, made.estimate_ids["TP-2", "REF-1"])
    assert {each.fact("gate") for each in of_kind(other, "finding")} == {"blank_drift"}


@pytest.mark.parametrize("kind", KINDS)
def test_the_tree_holds_at_80_columns(made, kind):
    text = lineage_text(lineage(made.site, ids_by_kind(made)[kind]))
    assert max(len(line) for line in text.splitlines()) <= 80
    assert ids_by_kind(made)[kind][:12] in text


def test_an_analysis_that_two_estimates_share_is_unfolded_once(made):
    estimates = {
        each.id for each in of_kind(lineage(made.site, made.lot_value_ids["pass-2", "QX-7"]), "estimate")
    }
    assert len(estimates) == 2
    sharing = lineage(made.site, made.lot_value_ids["pass-1", "QX-7"])
    assert len(of_kind(sharing, "export")) == 1


def test_many_wells_are_counted_past_a_limit(made):
    text = lineage_text(lineage(made.site, made.series_ids["TP-1", "QX-7"]), most=3)
    assert "and 1 more rate" in text
    assert "A3" in text
    assert "A4" not in text


def test_changed_and_missing_bytes_are_told(tmp_path):
    made = tiny_site(tmp_path)
    estimate_id = made.estimate_ids["TP-1", "QX-7"]
    export = raw_path(made.site, made.export_ids["TP-1"])
    export.chmod(0o644)
    export.write_bytes(export.read_bytes().replace(b"0.1", b"0.2", 1))
    raw_path(made.site, made.map_id).unlink()
    (made.site.lake / "readings" / f"{made.plate_read_ids['TP-1']}.parquet").unlink()
    node = lineage(made.site, estimate_id)
    assert of_kind(node, "export")[0].fact("condition") == "changed"
    assert of_kind(node, "plate map")[0].fact("condition") == "missing"
    assert of_kind(node, "readings")[0].fact("condition") == "missing"
    text = lineage_text(node)
    assert "BYTES CHANGED" in text
    assert text.count("MISSING") == 2


def test_a_superseded_result_stays_traceable(tmp_path):
    made = tiny_site(tmp_path)
    first, estimate_id = made.analysis_ids["TP-1"], made.estimate_ids["TP-1", "QX-7"]
    again = analysed_tables(made, "TP-1", "pass-3", FIRST_NIGHT, revision=2, recipe=tiny_recipe(0.2))
    load_results(made.site, "pass-3", again, FIRST_NIGHT)
    publish_results(made.site, FIRST_NIGHT)
    node = lineage(made.site, estimate_id)
    (analysis,) = of_kind(node, "analysis")
    assert analysis.id == first
    assert f"superseded by {made.analysis_ids['TP-1'][:12]}" in lineage_text(node)
    assert lineage(made.site, made.estimate_ids["TP-1", "QX-7"]).id != estimate_id


@pytest.mark.parametrize(
    ("asked", "says"),
    [
        ("ffffffffffff", "nothing here has an id that begins with 'ffffffffffff'"),
        ("abc", "is no id"),
        ("QX-7", "is no id"),
        ("", "is no id"),
        ("abcd'; DROP TABLE files; --", "is no id"),
    ],
)
def test_an_unknown_id_is_answered_with_what_to_type(made, asked, says):
    with pytest.raises(QueryError, match=says) as refused:
        lineage(made.site, asked)
    assert "halfsat history" in refused.value.remedy


def test_digits_that_several_ids_share_ask_for_more(made, monkeypatch):
    monkeypatch.setattr("flows.history.lookup.SHORTEST_PREFIX", 0)
    with pytest.raises(QueryError, match="several ids begin with") as refused:
        lineage(made.site, "")
    assert refused.value.remedy == "type more digits"


def test_without_a_publication_there_is_a_next_step(tmp_path):
    with pytest.raises(SiteError, match="halfsat overnight"):
        lineage(empty_site(tmp_path), "abcdef")
