"""Well names and geometry. Grids and lettering: ANSI/SLAS 4-2004 (R2012)."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from models.errors import UnknownName
from models.plates import (
    PLATE_FORMATS,
    PlateFormat,
    plate_format,
    row_letters,
    row_number,
    smallest_format,
    well_name,
    well_position,
)


@pytest.mark.parametrize("plate", PLATE_FORMATS, ids=lambda plate: str(plate.well_count))
def test_every_well_has_one_name_and_goes_back_to_its_place(plate: PlateFormat) -> None:
    names = plate.wells()
    assert len(set(names)) == plate.well_count == plate.row_count * plate.column_count
    assert plate_format(plate.well_count) is plate
    for place, name in enumerate(names):
        row, column = divmod(place, plate.column_count)
        assert well_position(name) == (row + 1, column + 1)
        assert plate.holds(row + 1, column + 1)
    assert names[-1] == {96: "H12", 384: "P24", 1536: "AF48"}[plate.well_count]
    assert smallest_format([well_position(names[-1])]) is plate


@given(st.integers(1, 32), st.integers(1, 48))
def test_any_notation_of_a_well(row: int, column: int) -> None:
    letters = row_letters(row)
    assert row_number(letters) == row_number(letters.lower()) == row_number(str(row)) == row
    for text in (f"{letters}{column}", f"{letters.lower()}{column:02d}", f" {letters} {column:03d} "):
        assert well_position(text) == (row, column)
    numbers = r"S(?P<row>\d+)-A(?P<column>\d+)"
    assert well_position(f"S{row:02d}-A{column:02d}", numbers) == (row, column)
    assert well_name(row, column) == f"{letters}{column}"


def test_letters_and_numbers_may_change_places() -> None:
    assert well_position("3/B", r"(?P<column>\d+)/(?P<row>\w)") == (2, 3)
    assert well_position("2.C", r"(?P<row>\d+)\.(?P<column>\w)") == (2, 3)


@pytest.mark.parametrize("text", ["", "A", "1", "A0", "A49", "AG1", "ZZ1", "A1B", "1A", "A-1", "A1.5", "Ä1"])
def test_what_is_no_well(text: str) -> None:
    with pytest.raises(UnknownName):
        well_position(text)


@pytest.mark.parametrize("text", ["S17A1", "S-A1", "S33-A01", "S01-A49"])
def test_what_a_pattern_does_not_take_apart(text: str) -> None:
    with pytest.raises(UnknownName):
        well_position(text, r"S(?P<row>\d+)-A(?P<column>\d+)")


def test_plates_that_do_not_exist() -> None:
    with pytest.raises(UnknownName):
        plate_format(24)
    with pytest.raises(UnknownName):
        smallest_format([(33, 1)])
    with pytest.raises(UnknownName):
        row_letters(0)
    assert smallest_format([(9, 1)]).well_count == 384
    assert smallest_format([]).well_count == 96
