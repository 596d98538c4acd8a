"""Named questions on the demo's night, and on rows altered so that the right answer is known; heads."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path

import duckdb
import numpy as np
import pandas as pd
import pytest

from flows.history.questions import ask, bind, find_question, is_name, load_questions, read_question
from flows.overnight.report import PassReport
from flows.site.layout import Site
from flows.warehouse.reader import open_published, run_query
from models.errors import ConfigurationError, QueryError
from tests.flows.tiny_site import tiny_site

ROOT = Path(__file__).resolve().parents[3]
NAMES = sorted(path.stem for path in (ROOT / "config" / "questions").glob("*.sql"))
NEEDED = {"lot-trend": {"lot": "AP-2602"}, "from-export": {"export": "tower_0031.csv"}}
Altered = Callable[..., Site]


@pytest.fixture(scope="module")
def demo(demo_night: tuple[Site, PassReport]) -> Site:
    return demo_night[0]


@pytest.fixture(scope="module")
def tiny(tmp_path_factory: pytest.TempPathFactory) -> Site:
    return tiny_site(tmp_path_factory.mktemp("tiny")).site


@pytest.fixture
def altered(demo: Site, tmp_path: Path) -> Altered:
    """A copy of the demo's published warehouse with statements run on it, to ask questions of."""

    def make(*statements: str) -> Site:
        site = Site(tmp_path)
        site.warehouse.mkdir()
        shutil.copyfile(demo.published_link.resolve(), site.published_link)
        site.published_link.chmod(0o600)
        with duckdb.connect(str(site.published_link)) as connection:
            for statement in statements:
                connection.execute(statement)
        return site

    return make


def answer(site: Site, name: str, **given: str) -> pd.DataFrame:
    return ask(site, find_question(site, name), given).to_pandas()


def all_of(site: Site, sql: str) -> pd.DataFrame:
    with open_published(site) as connection:
        return connection.execute(sql).df()


def test_a_dozen_and_more_are_supplied() -> None:
    assert len(NAMES) >= 12


@pytest.mark.parametrize("name", NAMES)
def test_every_question_runs_and_tells_what_it_takes(demo: Site, tiny: Site, name: str) -> None:
    question = load_questions(None)[name]
    assert len(question.title) <= 50
    assert len(question.answers) > 40
    of_demo = ask(demo, question, NEEDED.get(name, {}))
    assert of_demo.num_rows > 0
    assert len(set(of_demo.column_names)) == of_demo.num_columns
    given = {"lot-trend": {"lot": "QX-7"}, "from-export": {"export": "TP-1.csv"}}.get(name, {})
    assert ask(tiny, question, given).column_names == of_demo.column_names


def test_a_lots_trend_stands_beside_the_reference_of_the_same_plate_read(demo: Site) -> None:
    found = answer(demo, "lot-trend", lot="AP-2602", constant="kcat")
    assert list(found["plate_id"]) == ["SW104401", "SW104403", "SW104406"]
    # The scenario's truth: 79 against 106 per second.
    assert found["ratio_to_reference"].to_numpy() == pytest.approx(79 / 106, rel=0.03)
    assert (found["low"] < found["value"]).all()
    assert len(answer(demo, "lot-trend", lot="AP-2602")) > len(found)
    assert len(answer(demo, "lot-trend", lot="AP-2602", until="2026-11-02")) == 0
    own = answer(demo, "lot-trend", lot="R-AP-07", constant="km", since="2026-11-03")
    assert own.groupby("plate_id")["ratio_to_reference"].nunique().le(2).all()
    assert own["ratio_to_reference"].mean() == pytest.approx(1.0, abs=0.01)


def test_the_one_slow_lot_of_the_scenario_is_told(demo: Site) -> None:
    found = answer(demo, "slow-lots")
    assert list(found["lot"]) == ["AP-2602"]
    assert found["slower_by_percent"][0] == pytest.approx(100 * (1 - 79 / 106), abs=2)
    assert found["surely"].all()
    assert set(answer(demo, "slow-lots", percent="3")["lot"]) >= {"AP-2602", "BG-0433", "PK-0119"}
    assert answer(demo, "slow-lots", assay="pyruvate_kinase").empty


def test_drift_of_a_reference_is_the_slope_put_there(altered: Altered, demo: Site) -> None:
    """Plate reads 40 days apart, km rising by 12 a year on 60 with a small zigzag."""
    site = altered(
        "CREATE TEMP TABLE moved AS SELECT plate_read_id, row_number() OVER (ORDER BY plate_id) - 1 AS n "
        "FROM plate_reads",
        "CREATE TEMP TABLE chart AS SELECT estimate_id, plate_read_id FROM reference_chart "
        "WHERE constant = 'km'",
        "UPDATE plate_reads SET started_at = TIMESTAMPTZ '2025-01-01 00:00:00+00' "
        "+ to_days(CAST(40 * n AS INTEGER)) "
        "FROM moved WHERE moved.plate_read_id = plate_reads.plate_read_id",
        "UPDATE estimates SET value = 60 + 12 * 40 * n / 365.25 + 0.1 * (n % 2) "
        "FROM chart, moved WHERE chart.estimate_id = estimates.estimate_id "
        "AND moved.plate_read_id = chart.plate_read_id",
    )
    found = answer(site, "reference-drift", days="3650").set_index("lot").loc["R-AP-07"]
    assert found["percent_a_year"] * found["mean"] / 100 == pytest.approx(12.0, rel=0.03)
    assert found["percent_change"] == pytest.approx(
        found["percent_a_year"] * found["days_covered"] / 365.25, rel=1e-9
    )
    assert found["t_value"] > 20
    # One night says nothing of a year.
    assert answer(demo, "reference-drift")["percent_a_year"].isna().all()
    recent = answer(site, "reference-drift", days="90").set_index("lot").loc["R-AP-07"]
    assert recent["plate_reads"] < found["plate_reads"]


def test_gate_causes_add_up_to_the_findings(demo: Site) -> None:
    found = answer(demo, "gate-causes")
    findings = all_of(demo, "SELECT * FROM findings WHERE outcome = 'breach'")
    assert found.groupby("gate")["findings"].sum().to_dict() == findings["gate"].value_counts().to_dict()
    assert set(found["month"]) == {"2026-11"}
    assert found["percent_of_reads"].between(0, 100, inclusive="right").all()
    one = answer(demo, "gate-causes", gate="blank_drift", since="2026-11-01", until="2026-11-30")
    assert set(one["gate"]) == {"blank_drift"}
    assert answer(demo, "gate-causes", until="2026-10-31").empty


def test_what_waits_is_what_is_held(demo: Site) -> None:
    found = answer(demo, "awaiting-decision").set_index("lot")
    wells = all_of(demo, "SELECT lot FROM held_wells WHERE lot IS NOT NULL")["lot"].value_counts()
    assert found["held_wells"][found["held_wells"] > 0].to_dict() == wells.to_dict()
    assert found.loc["AP-2603", "held_series"] == 3
    assert "saturation_not_reached" in found.loc["AP-2603", "gates"]
    assert found["waits_since"].notna().all()


def test_a_plate_read_again_is_counted_in_its_shift(altered: Altered, demo: Site) -> None:
    assert answer(demo, "repeats-by-shift")["read_again"].sum() == 0
    site = altered("UPDATE plate_reads SET plate_id = 'SW104401' WHERE plate_id = 'SW104403'")
    found = answer(site, "repeats-by-shift").set_index("shift_from_hour")
    # SW104403 began at 19:50 UTC.
    assert found["read_again"].to_dict() == {14: 1, 22: 0}
    assert found["plate_reads"].sum() == 16
    assert found["held_or_void"].sum() == sum(
        all_of(demo, "SELECT standing FROM current_analyses")["standing"] != "clear"
    )
    later = answer(site, "repeats-by-shift", utc_offset_hours="3").set_index("shift_from_hour")
    assert later["read_again"].to_dict() == {22: 1}


def test_potency_is_told_against_all_lots(altered: Altered, demo: Site) -> None:
    one = answer(demo, "inhibitor-potency")
    assert list(one["lot"]) == ["BG-0431"]
    # The scenario's truth: Kic 45 umol/L.
    assert one["value"][0] == pytest.approx(45, rel=0.05)
    assert one["ratio_to_all_lots"].isna().all()
    site = altered(
        "INSERT INTO lot_values SELECT * REPLACE ('x' AS lot_value_id, 'BG-9999' AS lot, 4 * value AS value) "
        "FROM lot_values WHERE modulator IS NOT NULL"
    )
    two = answer(site, "inhibitor-potency", modulator="gluconolactone").set_index("lot")
    assert two["ratio_to_all_lots"].to_dict() == pytest.approx({"BG-0431": 0.5, "BG-9999": 2.0})
    assert answer(site, "inhibitor-potency", modulator="none such").empty


def test_two_temperatures_of_a_lot_give_their_q10(altered: Altered) -> None:
    site = altered(
        "UPDATE estimates SET value = 3 * value WHERE constant = 'kcat' AND analysis_id IN "
        "(SELECT analysis_id FROM current_analyses WHERE plate_id IN ('SW104403', 'SW104407'))",
        "UPDATE plate_reads SET temperature_low_c = 44.9, temperature_high_c = 45.1 "
        "WHERE plate_id IN ('SW104403', 'SW104407')",
    )
    found = answer(site, "two-temperatures", lot="AP-2601", constant="kcat")
    assert list(found["temperature_c"]) == [30.0, 45.0]
    assert np.isnan(found["ratio_to_cooler"][0])
    assert found["ratio_to_cooler"][1] == pytest.approx(3.0, rel=0.03)
    assert found["q10"][1] == pytest.approx(found["ratio_to_cooler"][1] ** (10 / 15), rel=1e-9)


def test_wells_lost_are_those_not_clear(demo: Site) -> None:
    for plate_format in (96, 384):
        found = answer(demo, "wells-lost", plate_format=str(plate_format))
        wells = all_of(
            demo,
            "SELECT w.* FROM wells w JOIN current_analyses c USING (analysis_id) "
            "JOIN plate_reads p ON p.plate_read_id = c.plate_read_id "
            f"WHERE w.role IN ('sample', 'reference') AND p.plate_format = {plate_format}",
        )
        for line in ("row", "column"):
            part = found[found["line"] == line].set_index("number")
            lost = wells["standing"] != "clear"
            expected = lost.groupby(wells[f"{line}_number"]).sum().astype(int).to_dict()
            assert (part["held"] + part["void"]).to_dict() == expected
            assert part["wells"].sum() == len(wells)
    assert answer(demo, "wells-lost", plate_format="1536").empty


def test_hold_rates_and_nights_agree_with_the_pass(
    demo_night: tuple[Site, PassReport], altered: Altered
) -> None:
    demo, report = demo_night
    rates = answer(demo, "hold-rate")
    (night,) = answer(demo, "night-summary").to_dict("records")
    held = all_of(demo, "SELECT role FROM wells WHERE standing = 'held'")["role"].isin(
        ["sample", "reference"]
    )
    assert rates["held"].sum() == night["held"] == held.sum()
    assert rates["plate_reads"].sum() == night["analysis_count"] == len(report.analysis_ids)
    assert night["quarantined_count"] == len(report.quarantined) == 1
    assert list(rates["percent_held"]) == sorted(rates["percent_held"], reverse=True)
    assert rates.set_index("assay").loc["alkaline_phosphatase", "commonest_gate"] == "blank_drift"
    site = altered(
        "INSERT INTO passes SELECT * REPLACE ('later' AS pass_id, started_at + to_days(1) AS started_at) "
        "FROM passes"
    )
    assert answer(site, "night-summary", nights="1")["pass_id"].tolist() == ["later"]
    assert len(answer(site, "night-summary")) == 2


def test_scatter_of_replicates_is_the_pooled_cv(demo: Site) -> None:
    found = answer(demo, "replicate-scatter", assay="beta_glucosidase")
    rows = all_of(
        demo,
        "SELECT w.*, r.v0_um_per_s FROM rates r JOIN wells w USING (analysis_id, well) "
        "JOIN current_analyses c USING (analysis_id) WHERE c.assay = 'beta_glucosidase' "
        "AND w.standing = 'clear' AND w.role IN ('sample', 'reference')",
    )
    keys = ["analysis_id", "series_id", "lot", "substrate_um", "modulator", "modulator_um"]
    level = rows.groupby(keys, dropna=False)["v0_um_per_s"].agg(["count", "mean", "var"]).query("count > 1")
    pooled = ((level["count"] - 1) * level["var"] / level["mean"] ** 2).sum() / (level["count"] - 1).sum()
    assert found["pooled_cv_percent"][0] == pytest.approx(100 * np.sqrt(pooled), rel=1e-9)
    assert found["levels"][0] == len(level)


def test_open_intervals_are_not_settled(altered: Altered, demo: Site) -> None:
    assert set(answer(demo, "not-settled")["lot"]) == {"AP-2603"}
    site = altered(
        "UPDATE lot_values SET high = NULL WHERE lot = 'AP-2601' AND constant = 'km'",
        "UPDATE lot_values SET value = NULL, low = NULL WHERE lot = 'AP-2602' AND constant = 'km'",
    )
    found = answer(site, "not-settled", percent="90").set_index("lot")
    assert found["what"].to_dict() == {"AP-2601": "open interval", "AP-2602": "no value"}


def test_suggestions_quarantine_and_exports_are_found(demo: Site) -> None:
    assert set(answer(demo, "measure-next", assay="alkaline_phosphatase")["lot"]) == {"AP-2603"}
    (bad,) = answer(demo, "quarantined").to_dict("records")
    assert bad["file_name"] == "tower_0033.csv"
    assert "rows" in bad["reason"]
    assert answer(demo, "quarantined", since="2027-01-01").empty
    by_name = answer(demo, "from-export", export="tower_0031.csv")
    by_digits = answer(demo, "from-export", export=by_name["export_id"][0][:9].upper())
    pd.testing.assert_frame_equal(by_name, by_digits)
    every = all_of(
        demo, "SELECT count(*) AS n FROM estimate_lineage WHERE export_file_name = 'tower_0031.csv'"
    )
    assert len(by_name) == every["n"][0]
    assert answer(demo, "from-export", export="1").empty


@pytest.mark.parametrize(
    "value", ["AP-2602' OR 'a' = 'a", "'; DROP TABLE wells; --", "$lot", "%", '"', "\x00"]
)
def test_values_are_bound_and_never_become_sql(demo: Site, value: str) -> None:
    with pytest.raises(QueryError, match="there is no lot"):
        answer(demo, "lot-trend", lot=value)
    told = run_query(demo, "SELECT $a AS a, $b AS b, $c AS c", None, {"a": value, "b": 2.5, "c": None})
    assert told.to_pylist() == [{"a": value, "b": 2.5, "c": None}]


@pytest.mark.parametrize(
    ("name", "given", "words"),
    [
        ("lot-trnd", {}, "there is no question 'lot-trnd' .did you mean lot-trend"),
        ("zzzz", {}, "list them: halfsat history --list"),
        ("lot-trend", {}, "needs --lot"),
        ("lot-trend", {"lot": "AP-26022"}, "there is no lot 'AP-26022' .did you mean AP-2602"),
        ("lot-trend", {"lot": "AP-2602", "sinse": "2026-01-01"}, "did you mean --since"),
        ("lot-trend", {"lot": "AP-2602", "since": "1.2.2026"}, "write a day, such as 2026-01-15"),
        ("slow-lots", {"percent": "ten"}, "write a number"),
        ("slow-lots", {"percent": "nan"}, "write a number"),
        ("wells-lost", {"plate_format": "9.6"}, "write a whole number"),
        ("slow-lots", {"assay": "alkaline_fosfatase"}, "did you mean alkaline_phosphatase"),
    ],
)
def test_what_cannot_be_asked_is_told(demo: Site, name: str, given: dict[str, str], words: str) -> None:
    with pytest.raises(QueryError, match=words):
        answer(demo, name, **given)


HEAD = "-- title: T\n-- answers: long\n--     and longer\n"


def test_a_sites_own_question_stands_in_the_place_of_a_shipped_one(tmp_path: Path) -> None:
    site = Site(tmp_path)
    folder = site.config / "questions"
    folder.mkdir(parents=True)
    (folder / "slow-lots.sql").write_text(
        HEAD
        + "-- parameter: least_n (integer, default 3): Fewest\nSELECT $least_n, '$not_one' -- $nor_this\n"
    )
    (folder / "mine.sql").write_text(HEAD + "SELECT 1\n")
    found = load_questions(site)
    assert found["slow-lots"].own
    assert not found["lot-trend"].own
    assert found["mine"].answers == "long and longer"
    assert found["mine"].query == "SELECT 1"
    assert bind(found["slow-lots"], {}) == {"least_n": 3}
    assert bind(found["slow-lots"], {"least_n": "7"}) == {"least_n": 7}
    assert found["slow-lots"].parameters[0].option == "--least-n"


@pytest.mark.parametrize(
    ("name", "text", "words"),
    [
        ("a.sql", "SELECT 1", "title and answers stand once each"),
        ("a.sql", HEAD + "-- titel: x\nSELECT 1", "line 4: '-- titel: x' is no line of a head"),
        ("a.sql", HEAD + "SELECT $lot", "head and SQL name other parameters: lot"),
        ("a.sql", HEAD + "-- parameter: lot (lot, required): The lot\nSELECT 1", "other parameters: lot"),
        ("a.sql", HEAD + "-- parameter: lot lot: The lot\nSELECT $lot", "describes no parameter"),
        ("a.sql", HEAD + "-- parameter: lot (batch, required): The lot\nSELECT $lot", "kinds are text, lot"),
        ("a.sql", HEAD + "-- parameter: n (integer, default x): N\nSELECT $n", "write a whole number"),
        ("a.sql", HEAD + "-- parameter: site (text, optional): S\nSELECT $site", "cannot be called 'site'"),
        ("A b.sql", HEAD + "SELECT 1", "is no name for a question"),
    ],
)
def test_a_question_that_cannot_be_used_is_told_with_its_file(
    tmp_path: Path, name: str, text: str, words: str
) -> None:
    (tmp_path / name).write_text(text)
    with pytest.raises(ConfigurationError) as caught:
        read_question(tmp_path / name, True)
    assert words in str(caught.value)
    assert str(caught.value).startswith(f"questions/{name}")
    assert caught.value.remedy


def test_names_are_told_from_sql() -> None:
    assert is_name("lot-trend")
    assert is_name("mine2")
    for sql in ("select 1", "FROM wells", "SHOW TABLES", "lot_trend", "", "-a", "VALUES(1)"):
        assert not is_name(sql)
