"""What the pages say of a real night, and that nothing a file brings can act on them."""

from __future__ import annotations

import os
import re
import xml.etree.ElementTree as ET

import duckdb
import numpy as np
import pytest
from starlette.testclient import TestClient

from flows.morning import drawings, series
from flows.morning.asking import published
from flows.morning.plate import SHOWN
from flows.site.layout import Site
from tests.flows.morning.room import Room, first, make_room

HOSTILE = "<script>alert(1)</script>\"'><img src=x onerror=alert(2)>&{{7*7}}"
FIELDS = (
    ("wells", "lot"), ("wells", "modulator"), ("series", "lot"), ("series", "refusal"), ("estimates", "lot"),
    ("analyses", "assay"), ("files", "file_name"), ("files", "reason"),
    ("findings", "sentence"), ("findings", "gate"), ("lot_values", "lot"), ("lot_values", "assay"),
    ("estimates", "assay"), ("fits", "distrust"), ("suggestions", "sentence"),
)  # fmt: skip


@pytest.fixture(scope="module")
def room(kept_nights: Site, tmp_path_factory: pytest.TempPathFactory) -> Room:
    return make_room(kept_nights, tmp_path_factory.mktemp("room"))


@pytest.fixture(scope="module")
def browser(room: Room) -> TestClient:
    return room.signed_in()


def held_plate(room: Room) -> tuple[str, list[str]]:
    with published(room.site) as connection:
        found = connection.execute(
            "SELECT analysis_id, list(well ORDER BY row_number, column_number) FROM wells "
            "JOIN current_analyses c USING (analysis_id) "
            "WHERE wells.standing = 'held' GROUP BY analysis_id ORDER BY count(*) DESC, 1 LIMIT 1"
        ).fetchone()
    assert found is not None
    return str(found[0]), [str(well) for well in found[1]]


def test_the_night_lists_what_waits_and_what_holds_it(room: Room, browser: TestClient) -> None:
    text = browser.get("/").text
    with published(room.site) as connection:
        waiting = connection.execute(
            "SELECT plate_id FROM current_analyses WHERE standing = 'held' ORDER BY measured_at, plate_id"
        ).fetchall()
        gates = connection.execute(
            "SELECT DISTINCT gate FROM findings JOIN current_analyses c USING (analysis_id) "
            "WHERE outcome = 'breach' AND c.standing = 'held'"
        ).fetchall()
    assert waiting
    shown = re.findall(r"<strong>(SW\d+)</strong>", text.split("Clear in the last pass")[0])
    assert shown == [plate for (plate,) in waiting]
    for (gate,) in gates:
        assert gate.replace("_", " ") in text
    assert "1 file in quarantine" in text


def test_a_plate_shows_every_well_and_opens_at_the_first_held_one(room: Room, browser: TestClient) -> None:
    analysis_id, held = held_plate(room)
    for way in SHOWN:
        text = browser.get(f"/plate/{analysis_id}?show={way}").text
        wells = re.findall(r'class="well (\w+) (\w+)( chosen)?" data-well="(\w+)"', text)
        assert [well for standing, _, _, well in wells if standing == "held"] == held
        assert [well for _, _, chosen, well in wells if chosen] == held[:1]
        if way == "progress":
            assert text.count('<polyline class="curve"') > 0.9 * len(wells)
        else:
            assert text.count('<circle class="amount"') > 10
    assert browser.get(f"/plate/{analysis_id}?show=nothing").status_code == 422
    assert browser.get("/plate/0123").status_code == 404
    assert browser.get(f"/plate/{analysis_id}?well=Z99").status_code == 404


def test_a_held_well_is_told_in_sentences_with_its_series(room: Room, browser: TestClient) -> None:
    analysis_id, held = held_plate(room)
    with published(room.site) as connection:
        found = series.the_well(connection, analysis_id, held[0])
    text = browser.get(f"/plate/{analysis_id}/well/{held[0]}").text
    assert found.findings
    for finding in found.findings:
        assert finding.sentence.replace("'", "&#39;") in text
    assert found.series is not None
    assert f"/series/{found.series.row.series_id}" in text
    assert "with them" in text
    for well in (*found.replicates, *found.neighbours):
        assert f'data-well="{well.well}"' in text


def test_figures_are_drawings_and_the_same_every_time(room: Room, browser: TestClient) -> None:
    analysis_id, held = held_plate(room)
    page = browser.get(f"/plate/{analysis_id}?well={held[0]}").text
    images = re.findall(r'<img class="figure" src="([^"]+)"', page)
    assert len(images) == 2
    for image in images:
        light = browser.get(image.replace("&amp;", "&"))
        assert light.headers["content-type"] == "image/svg+xml"
        assert ET.fromstring(light.content).tag.endswith("svg")
        assert room.signed_in().get(image).content == light.content


def test_the_line_drawn_is_the_stored_fit(room: Room) -> None:
    with published(room.site) as connection:
        fits = connection.execute(
            "SELECT DISTINCT series_id FROM estimates JOIN current_analyses c USING (analysis_id) "
            "WHERE chosen AND wells = 'clear' AND series_id IS NOT NULL ORDER BY 1"
        ).fetchall()
        assert len(fits) > 3
        for (series_id,) in fits:
            points = series.fitted_points(connection, series_id, "clear")
            found = drawings.refitted(points)
            assert found is not None
            stored = [point.fitted_um_per_s for point in points]
            again = found.rate([point.substrate_um for point in points])
            np.testing.assert_allclose(again, stored, rtol=2e-3)


def test_a_series_shows_laws_profiles_and_linear_plots_with_their_caution(
    room: Room, browser: TestClient
) -> None:
    analysis_id, _ = held_plate(room)
    address = first(browser, f"/plate/{analysis_id}", r"/series/[0-9a-f]+")
    text = browser.get(f"{address}?linear=hanes&log=true&wells=all").text
    assert "they distort the errors" in text
    assert "Candidate laws" in text
    figures = {image.replace("&amp;", "&") for image in re.findall(r'src="(/figure/[^"]+)"', text)}
    assert {image.split("/")[2] for image in figures} == {"series", "profile", "linear"}
    for image in figures:
        assert browser.get(image).status_code == 200, image
    lot = first(browser, address, r"/lot/[^\"]+")
    assert browser.get(lot).status_code == 200
    assert browser.get("/lot/none/none").status_code == 404


def test_a_file_in_quarantine_is_shown_and_tried(browser: TestClient) -> None:
    address = first(browser, "/quarantine", r"/quarantine/[0-9a-f]{64}")
    text = browser.get(address).text
    assert "<pre" in text
    profile = re.search(r'\?profile=(\w+)"', text)
    assert profile is not None
    assert browser.get(f"{address}?profile={profile[1]}").status_code == 200
    assert browser.get(f"{address}?profile=../site").status_code == 404
    assert browser.get("/quarantine/..%2f..%2fconfig%2fsite.toml").status_code == 404


def test_nothing_that_a_file_brings_can_act_on_a_page(
    kept_nights: Site, tmp_path_factory: pytest.TempPathFactory
) -> None:
    hostile = make_room(kept_nights, tmp_path_factory.mktemp("hostile"))
    analysis_id, held = held_plate(hostile)
    with duckdb.connect(os.path.realpath(hostile.site.published_link)) as connection:
        for table, column in FIELDS:
            connection.execute(f"UPDATE {table} SET {column} = $1 WHERE {column} IS NOT NULL", [HOSTILE])
    browser = hostile.signed_in()
    page = browser.get(f"/plate/{analysis_id}").text
    addresses = {
        "/", "/quarantine", f"/plate/{analysis_id}", f"/plate/{analysis_id}/well/{held[0]}",
        *re.findall(r"/series/[0-9a-f]+", page), *re.findall(r"/lot/[^\"]+", page),
    }  # fmt: skip
    assert len(addresses) > 5
    with duckdb.connect(os.path.realpath(hostile.site.published_link)) as connection:
        connection.execute("UPDATE plate_reads SET plate_id = $1", [HOSTILE])
    seen = 0
    for address in addresses:
        text = browser.get(address).text
        assert "<script>alert" not in text
        assert "<img src=x" not in text
        assert "49" not in re.findall(r"alert\(2\)&gt;&amp;(..)", text)
        seen += "&lt;script&gt;" in text
    assert seen == len(addresses)
