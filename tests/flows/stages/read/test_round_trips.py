"""A plate written in any shape and notation is read back equal, and every reading points at its own cell."""

from __future__ import annotations

import datetime as dt
import math

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from written_exports import CODECS, MISSING, OVERFLOW, START, Plate, Style, cell_at, well_text, write

from flows.stages.read import choose_profile, read_export
from models.tables import READINGS

SHAPES = ("long", "wide", "wells_by_rows", "grids")
NOTATIONS = ("s", "min", "h", "ms", "mm:ss", "hh:mm:ss", "timestamp")


@st.composite
def number_texts(draw: st.DrawFn, decimal: str) -> str:
    kind = draw(st.integers(0, 11))
    if kind < 3:
        return ("", OVERFLOW, MISSING)[kind]
    whole, places = draw(st.integers(-4_000_000, 4_000_000)), draw(st.integers(0, 4))
    return f"{whole / 10**places:.{places}f}".replace(".", decimal)


@st.composite
def plates_and_styles(draw: st.DrawFn, container: str = "text") -> tuple[Plate, Style]:
    shape = draw(st.sampled_from(SHAPES))
    notation = draw(st.sampled_from(NOTATIONS))
    decimal = draw(st.sampled_from(".,"))
    rows = sorted(draw(st.sets(st.integers(1, 8), min_size=1, max_size=3)))
    columns = sorted(draw(st.sets(st.integers(1, 12), min_size=1, max_size=3)))
    if shape == "grids":
        first_row, first_column = min(rows[0], 6), min(columns[0], 10)
        rows = list(range(first_row, first_row + len(rows)))
        columns = list(range(first_column, first_column + max(len(columns), 2)))
    wells = [(row, column) for row in rows for column in columns]
    if shape != "grids":
        wells = draw(st.permutations(wells))
    steps = draw(st.lists(st.integers(1, 40_000), min_size=1, max_size=5))
    times = [float(sum(steps[: n + 1])) for n in range(len(steps))]
    cells = {
        well: draw(st.lists(number_texts(decimal), min_size=len(times), max_size=len(times)))
        for well in wells
    }
    warm = draw(st.booleans())
    temperatures = [f"{25 + n / 10:.1f}".replace(".", decimal) for n in range(len(times))] if warm else None
    style = Style(
        shape=shape,
        notation=notation,
        decimal=decimal,
        delimiter=draw(st.sampled_from(",;\t|")),
        encoding=draw(st.sampled_from(sorted(CODECS))),
        newline=draw(st.sampled_from(["\n", "\r\n", "\r"])),
        well_style="A1" if shape == "grids" else draw(st.sampled_from(["A1", "A01", "R1C1"])),
        container=container,
        blank_rows=draw(st.booleans()),
        trailing=draw(st.booleans()),
    )
    return Plate(wells, times, cells, temperatures), style


def held_against(plate: Plate, style: Style) -> None:
    content, profile = write(plate, style)
    assert choose_profile(content, "night.csv", {"mine": profile}) == "mine"
    (read,) = read_export(content, "night.csv", profile)
    frame = read.readings
    assert list(frame.columns) == [name for name in READINGS.column_names if name != "plate_read_id"]
    assert (read.plate_id, read.place_in_export, read.plate_format) == ("P7", 1, 96)
    assert read.started_at == (START + _elapsed(plate.times_s[0]) if style.notation == "timestamp" else None)
    assert len(frame) == len(plate.wells) * len(plate.times_s)
    found = {(row.well, row.read_number): row for row in frame.itertuples()}
    for well in plate.wells:
        for n, text in enumerate(plate.cells[well]):
            row = found[well_text(well, "A1"), n + 1]
            state = {"": "missing", MISSING: "missing", OVERFLOW: "overflow"}.get(text, "ok")
            assert row.state == state
            assert row.time_s == pytest.approx(plate.times_s[n] - plate.times_s[0], abs=1e-6)
            if state == "ok":
                assert row.signal == float(text.replace(style.decimal, "."))
            else:
                assert math.isnan(row.signal)
            if plate.temperatures:
                assert row.temperature_c == float(plate.temperatures[n].replace(style.decimal, "."))
            else:
                assert math.isnan(row.temperature_c)
            assert row.channel == "signal"
            assert cell_at(content, style, row.source_row, row.source_column) == text
    key = [(LETTER_ORDER[row.well[0]], int(row.well[1:]), row.read_number) for row in frame.itertuples()]
    assert key == sorted(key)


LETTER_ORDER = {letter: place for place, letter in enumerate("ABCDEFGHIJKLMNOP")}


def _elapsed(seconds: float) -> dt.timedelta:
    return dt.timedelta(seconds=seconds)


@settings(max_examples=150, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(plates_and_styles())
def test_text_reads_back_equal(drawn: tuple[Plate, Style]) -> None:
    plate, style = drawn
    held_against(plate, style)


@settings(max_examples=12, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(plates_and_styles(container="xlsx"))
def test_workbooks_read_back_equal(drawn: tuple[Plate, Style]) -> None:
    plate, style = drawn
    held_against(plate, style)


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("notation", NOTATIONS)
def test_every_shape_with_every_notation(shape: str, notation: str) -> None:
    wells = [(1, 1), (1, 2), (2, 1), (2, 2)]
    cells = {well: [f"{n}.{well[0]}{well[1]}" for n in range(4)] for well in wells}
    plate = Plate(wells, [36.0, 72.0, 3_636.0, 180_036.0], cells, ["25.0", "25.1", "25.2", "25.3"])
    held_against(plate, Style(shape, notation))
