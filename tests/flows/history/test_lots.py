"""Lots of a simulated site: values, decisions, the reference, charts, and what is refused in which words."""

from __future__ import annotations

import io
import json
from dataclasses import replace
from pathlib import Path

import duckdb
import numpy as np
import pytest
from click.testing import CliRunner, Result
from rich.console import Console

from flows.cli.root import tree
from flows.history.lot_charts import lot_charts
from flows.history.lot_json import lot_json
from flows.history.lot_text import lot_view, signal_lines, statement
from flows.history.lots import lot_records, specification_digest
from flows.site.configuration import load_configuration
from flows.site.layout import Site
from models.errors import QueryError
from models.records.lot_specification import LotSpecification
from models.statistics.lots import combine_plate_reads
from tests.benchmarks.five_years import Size, write_site

ASSAY = "oxidase_405"


@pytest.fixture(scope="module")
def site(tmp_path_factory: pytest.TempPathFactory) -> Site:
    return write_site(tmp_path_factory.mktemp("lots"), Size(66, replicates=1))


def call(site: Site, *words: str) -> Result:
    result = CliRunner().invoke(tree, ["lot", *words, "--site", str(site.root)])
    if result.exception is not None and not isinstance(result.exception, SystemExit):
        raise result.exception
    return result


def specification(**changes: object) -> LotSpecification:
    base = {
        "assay": ASSAY,
        "source": "test, invented",
        "lots": ["L-*"],
        "reference_lot": "R-1",
        "rule": {"guard_band_factor": 1.0},
        "constants": [
            {
                "constant": "km",
                "lower": 60,
                "upper": 100,
                "unit": "umol/L",
                "equivalence": {"lowest_ratio": 0.8, "highest_ratio": 1.25},
            }
        ],
    }
    return LotSpecification.model_validate({**base, **changes})


def test_a_lot_is_decided_and_the_decision_names_its_specification(site: Site) -> None:
    (record,) = lot_records(site, "L-00003", ASSAY)
    assert record.decision == "conforms"
    assert statement(record) == "Every constant that the specification asks of conforms."
    used = load_configuration(site.config).specifications[ASSAY]
    assert record.specification is not None
    assert record.specification.digest == specification_digest(used)
    again = lot_records(site, "L-00003", ASSAY, used)[0]
    assert again.decision_id == record.decision_id
    stricter = lot_records(site, "L-00003", ASSAY, specification(source="a later version"))[0]
    assert stricter.decision_id != record.decision_id


@pytest.mark.parametrize(
    ("limits", "decision", "sentence"),
    [
        ({"lower": 60, "upper": 100}, "conforms", "conforms."),
        ({"lower": 90}, "does not conform", "Km does not conform."),
        ({"lower": 76.5}, "undecided", "Undecided on Km."),
    ],
)
def test_limits_decide(site: Site, limits: dict[str, float], decision: str, sentence: str) -> None:
    asked = specification(constants=[{"constant": "km", "unit": "umol/L", **limits}])
    (record,) = lot_records(site, "L-00003", ASSAY, asked)
    assert record.decision == decision
    assert statement(record).endswith(sentence)


def test_a_constant_that_is_asked_and_not_there_leaves_the_lot_undecided(site: Site) -> None:
    asked = specification(constants=[{"constant": "k_half", "unit": "umol/L", "lower": 1}])
    (record,) = lot_records(site, "L-00003", ASSAY, asked)
    assert record.decision == "undecided"
    assert record.missing == ("K0.5",)
    assert "K0.5, of which the lot has no value" in " ".join(record.notes)


def test_the_value_is_that_of_its_sources(site: Site) -> None:
    km = lot_records(site, "L-00003", ASSAY)[0].constant("km")
    assert km.value_plate_reads == len(km.sources) > 15
    values = np.array([each.value for each in km.sources])
    assert km.value == pytest.approx(float(np.exp(np.mean(np.log(values)))))
    record = lot_records(site, "L-00003", ASSAY)[0]
    with pytest.raises(KeyError):
        record.constant("vmax")


def test_one_plate_read_gives_no_interval_and_decides_nothing(tmp_path: Path) -> None:
    alone = write_site(tmp_path, Size(1, replicates=1))
    (record,) = lot_records(alone, "L-00001")
    assert record.decision == "undecided"
    for each in record.constants:
        assert each.value is not None
        assert (each.low, each.high, each.between_plate_sd) == (None, None, None)
    km = record.constant("km")
    assert km.judgement is not None
    assert km.judgement.probability is None
    assert km.equivalence is not None
    assert km.equivalence.decision == "undecided"
    assert np.isnan(km.equivalence.low)
    printed = call(alone, "L-00001").output
    assert "One plate read only" in printed
    assert "no interval is given" in " ".join(printed.split())
    assert "fewer than two plate reads" in record.chart_note


def test_the_reference_is_compared_within_plate_reads(site: Site) -> None:
    equivalence = lot_records(site, "L-00003", ASSAY)[0].constant("km").equivalence
    assert equivalence is not None
    assert (equivalence.decision, equivalence.design) == ("equivalent", "paired")
    assert lot_records(site, "R-1", ASSAY)[0].constant("km").equivalence is None


def test_the_error_of_the_calibration_cancels_in_the_ratio(site: Site, tmp_path: Path) -> None:
    """An error of 10 % that all plates share changes neither ratio nor interval of the comparison."""
    before = lot_records(site, "L-00003", ASSAY)[0].constant("km").equivalence
    path = site.published_link.resolve()
    kept = path.read_bytes()
    path.chmod(0o644)
    try:
        with duckdb.connect(str(path)) as connection:
            connection.execute(
                "UPDATE estimates SET assay_relative_error = 0.1, "
                "standard_error = sqrt(standard_error ** 2 + (0.1 * value) ** 2)"
            )
        after = lot_records(site, "L-00003", ASSAY)[0].constant("km").equivalence
    finally:
        path.write_bytes(kept)
    assert before is not None
    assert after is not None
    assert (after.ratio, after.low, after.high) == pytest.approx(
        (before.ratio, before.low, before.high), rel=1e-9
    )


def test_charts_rest_on_the_base_period_and_see_the_step(site: Site) -> None:
    (record,) = lot_records(site, "R-1", ASSAY)
    chart = next(each for each in record.charts if each.constant == "km")
    inside = [each.value for each in chart.points if each.in_base]
    assert chart.base.centre == pytest.approx(float(np.mean(inside)))
    assert 2 < len(inside) < len(chart.points)
    # The site's reference is made to rise by 15 % after 60 % of its plates: plate 42 is the first.
    assert [chart.points[each.place].plate_id for each in chart.changes] == ["P000042"]
    assert any(each.rule == 1 for each in chart.signals)
    assert chart.ewma.beyond[-1]
    assert {each.plate_read_id for each in chart.points} <= {
        each.plate_read_id for each in record.plate_reads
    }
    told = list(signal_lines(chart))
    assert any(plate == "P000042" and "level changes" in said for plate, _, said in told)


def test_plates_in_a_base_of_days_follow_the_sites_zone(site: Site) -> None:
    charts = {"base_first_day": "2021-01-05", "base_last_day": "2021-01-06"}
    (record,) = lot_records(site, "R-1", ASSAY, specification(charts=charts))
    days = {f"{each.measured_at:%d}" for each in record.charts[0].points if each.in_base}
    assert days == {"05", "06"}
    names = [each.plate_id for each in record.charts[0].points[:3]]
    (named,) = lot_records(site, "R-1", ASSAY, specification(charts={"base_plate_reads": names}))
    assert [each.plate_id for each in named.charts[0].points if each.in_base] == names


@pytest.mark.parametrize("lot", ["L-00003", "R-1"])
def test_the_view_holds_at_80_columns(site: Site, lot: str) -> None:
    screen = Console(file=io.StringIO(), width=80)
    for record in lot_records(site, lot):
        screen.print(lot_view(record))
    assert isinstance(screen.file, io.StringIO)
    lines = screen.file.getvalue().splitlines()
    assert max(map(len, lines)) <= 80
    assert any(line.startswith("Control charts of R-1") for line in lines)


def test_the_command_prints_and_writes_json(site: Site) -> None:
    printed = call(site, "L-00003").output
    assert printed.count("Lot L-00003: ") == 3
    assert "Next: halfsat lineage" in printed
    one = json.loads(call(site, "L-00003", "--assay", ASSAY, "--format", "json").output)
    (record,) = lot_records(site, "L-00003", ASSAY)
    assert one == [lot_json(record)]
    assert one[0]["specification"]["content"]["reference_lot"] == "R-1"


def test_a_specification_from_a_file(site: Site, tmp_path: Path) -> None:
    text = (site.config / "specifications" / f"{ASSAY}.toml").read_text().replace("lower = 60", "lower = 90")
    (tmp_path / "strict.toml").write_text(text)
    printed = call(site, "L-00003", "--assay", ASSAY, "--specification", str(tmp_path / "strict.toml")).output
    assert "Lot L-00003: does not conform" in printed


@pytest.mark.parametrize(
    ("lot", "assay", "says"),
    [
        ("l-00003", None, "did you mean L-00003?"),
        ("L-0003", None, "did you mean L-0000"),
        ("zzz", None, "there are L-00001"),
        ("L-00003", "oxidase_450", "did you mean oxidase_405?"),
        ("L-00003", "zzz", "it has in esterase_405"),
    ],
)
def test_a_name_that_is_none_is_answered_with_the_nearest(
    site: Site, lot: str, assay: str | None, says: str
) -> None:
    with pytest.raises(QueryError) as refused:
        lot_records(site, lot, assay)
    assert says in str(refused.value)


def test_what_waits_is_told_and_decides_nothing(site: Site) -> None:
    path = site.published_link.resolve()
    kept = path.read_bytes()
    path.chmod(0o644)
    try:
        with duckdb.connect(str(path)) as connection:
            connection.execute("UPDATE series SET standing = 'held' WHERE lot = 'L-00003'")
        (record,) = lot_records(site, "L-00003", ASSAY)
    finally:
        path.write_bytes(kept)
    assert record.standing == "held"
    assert record.decision == "undecided"
    assert "Every series waits for a person" in record.notes[0]
    assert all(each.held_only for each in record.constants)


def test_no_specification_decides_nothing(site: Site) -> None:
    (site.config / "specifications" / f"{ASSAY}.toml").rename(site.root / "aside.toml")
    try:
        (record,) = lot_records(site, "L-00003", ASSAY)
    finally:
        (site.root / "aside.toml").rename(site.config / "specifications" / f"{ASSAY}.toml")
    assert (record.decision, record.decision_id, record.specification) == (None, None, None)
    assert "nothing is decided" in statement(record)


def test_charts_pool_the_series_of_a_plate_read(site: Site) -> None:
    """A chart has one point a plate read, whatever many series of the lot it holds."""
    (record,) = lot_records(site, "R-1", ASSAY)
    km = record.constant("km")
    doubled = replace(km, sources=(*km.sources, *km.sources))
    charts, _ = lot_charts(
        "UTC", specification(charts={"base_plate_reads": ["P000000", "P000003"]}), [doubled], frozenset()
    )
    assert len(charts[0].points) == len(km.sources)
    one = km.sources[0]
    pooled = combine_plate_reads(
        np.array([one.value] * 2), np.array([one.own_error] * 2), np.zeros(2, dtype=int)
    )
    assert charts[0].points[0].value == pytest.approx(pooled.value)
