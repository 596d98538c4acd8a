"""What cannot be read is an ExportError that names the place and a remedy, and never anything else."""

from __future__ import annotations

import contextlib
import io
import zipfile
from pathlib import Path
from typing import Any

import openpyxl
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from test_odd_features import GRIDS, LONG, ROWS, WIDE, workbook

from flows.site.configuration import load_configuration
from flows.stages.read import choose_profile, is_plate_map, read_export, read_plate_map, trial_report
from models.errors import ExportError, PlateMapError
from models.records.export_profile import ExportProfile

ROOT = Path(__file__).resolve().parents[4]
PROFILES = load_configuration(ROOT / "config").profiles
EXAMPLES = {
    "wide": ROOT / "fixtures/exports/wide.csv",
    "long": ROOT / "fixtures/exports/long.csv",
    "wells_by_rows": ROOT / "fixtures/exports/P0414_kinetic.tsv",
    "grids": ROOT / "fixtures/exports/grids.xlsx",
}
XLSX = {**WIDE, "container": "xlsx"}


def refusal(written: str | bytes, base: dict[str, Any], **changes: Any) -> str:
    content = written if isinstance(written, bytes) else written.encode()
    with pytest.raises(ExportError) as caught:
        read_export(content, "P1.csv", ExportProfile.model_validate(base | changes))
    assert caught.value.where.startswith("P1.csv")
    assert caught.value.remedy
    return str(caught.value)


@pytest.mark.parametrize(
    ("written", "base", "words"),
    [
        (
            "Time,A1,A2\n0,1,2\n30,x?,4\n",
            WIDE,
            ["line 3, field 2", "'x?' is not a number", "values.overflow"],
        ),
        ("Time,A1\n0,1\n30,nan\n", WIDE, ["line 3, field 2", "'nan' is not a number"]),
        ("Time,A1\n0,1\n30,inf\n", WIDE, ["line 3, field 2", "'inf' is not a number"]),
        ("Time,A1\n0,1\n30,1_000\n", WIDE, ["'1_000' is not a number"]),
        ("Time,A1\n0,1\n30,0x1F\n", WIDE, ["'0x1F' is not a number"]),
        ("Time,A1,A2\n0,1,2\n30,3\n", WIDE, ["line 3", "2 fields", "has 3", "cut off"]),
        ("Time,A1,A2\n0,1,2\n30,3,4,5\n", WIDE, ["line 3", "4 fields", "table.end"]),
        ("Time,A1\n0,1\nsoon,2\n", WIDE, ["line 3, field 1", "'soon' is not a number", "table.end"]),
        ("Time,A1\n0,1\n,2\n", WIDE, ["line 3, field 1", "the time is missing"]),
        ("Time,A1,Z99\n0,1,2\n", WIDE, ["line 1, field 3", "'Z99'", "no well", "columns.ignore"]),
        ("Clock,A1\n0,1\n", WIDE, ["line 1", "no column 'Time'", "Clock"]),
        ("Time,A1\n", WIDE, ["line 1", "no data follow the header"]),
        ("Time,A1,A01\n0,1,2\n", WIDE, ["line 2, field 3", "well A1 is read twice", "line 2, field 2"]),
        ("Time,A1\n0,1\n30,2\n30,3\n", WIDE, ["line 4, field 2", "twice at 30 s", "line 3, field 2"]),
        ("Well,Time,Signal\nA1,0,1\nB1,0,1\nA01,0,2\n", LONG, ["line 4", "well A1 is read twice"]),
        ("Well,Time,Signal\nA1,0,1\nQQ,0,1\n", LONG, ["line 3, field 1", "'QQ' is not a well"]),
        ("Well,Time,Signal\nA1,0,1\n,0,1\n", LONG, ["line 3, field 1", "the well is missing"]),
        ("Well,Time,Signal\nA1,0,1\nA1,3\n", LONG, ["line 3", "2 fields", "cut off"]),
        ("Well,0,soon\nA1,1,2\n", ROWS, ["line 1, field 3", "'soon' heads a column but is no time"]),
        ("Well,0,30\nA1,1,2\nMean,1,2\n", ROWS, ["line 3, field 1", "'Mean' is not a well"]),
        ("Well,0,30\nA1,1,2\nA1,1,2\n", ROWS, ["line 3, field 2", "well A1 is read twice"]),
        ("Time 0\n,1,2\nA,1,2\nB,1,2\nTime 9\n,1,2\nA,3,4\n", GRIDS, ["line 6", "1 rows", "cut off"]),
        ("Time 0\n,1,2\nA,1,2\nB,1\n", GRIDS, ["line 4", "2 fields", "cut off"]),
        ("Time 0\n,1,2\nA,1,?\n", GRIDS, ["line 3, field 3", "'?' is not a number"]),
        ("Hello\n,1,2\nA,1,2\n", GRIDS, ["line 2", "no time stands above"]),
        ("Time 0\nnothing here\n", GRIDS, ["no grid"]),
        ("Time 0\n,1,2\nA,1,2\nMean\n,1,2\nA,1,2\n", GRIDS, ["line 6, field 2", "read twice at 0 s"]),
    ],
)
def test_a_flaw_is_named_with_its_place(written: str, base: dict[str, Any], words: list[str]) -> None:
    message = refusal(written, base)
    for word in words:
        assert word in message


def test_wells_outside_the_stated_plate() -> None:
    message = refusal("Time,A1,P24\n0,1,2\n", WIDE, plate={**WIDE["plate"], "format": 96})
    assert "wells out to P24, which no plate of 96 wells has" in message


def test_a_barcode_that_is_not_there() -> None:
    message = refusal("Time,A1\n0,1\n", WIDE, plate={"id_in_preamble": r"Plate (?P<plate_id>\d+)"})
    assert "barcode is not where the profile looks" in message


def test_a_start_in_another_format() -> None:
    plate = {**WIDE["plate"], "started_in_preamble": r"Start (?P<started>\S+)"}
    message = refusal("Start 02.03.2026\nTime,A1\n0,1\n", WIDE, plate=plate, table={"header": "^Time"})
    assert "'02.03.2026' is not a start" in message


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"", "empty"),
        (b" \r\n\t\n", "empty"),
        (b"\x00" * 50, "empty"),
        (b"Time,A1\n0,1\n\x00\x00\x01", "binary"),
        (bytes(range(256)) * 20, "binary"),
        ("Time,A1\n0,1\n".encode("utf-16-le"), "binary"),
    ],
)
def test_what_is_no_text(content: bytes, words: str) -> None:
    assert words in refusal(content, WIDE)


def test_text_in_another_encoding_than_stated() -> None:
    message = refusal("Time,A1\n0,1\nµ".encode("latin-1"), WIDE, text={"encoding": "utf-8"})
    assert "line 3" in message
    assert "text.encoding" in message
    assert "cut off" in refusal("Time,A1\n0,1\n".encode("utf-16")[:-1], WIDE)


def bomb() -> bytes:
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_DEFLATED) as archive:
        for part in range(4):
            archive.writestr(f"xl/worksheets/sheet{part}.xml", b"\0" * 90_000_000)
    return stream.getvalue()


def far_cell() -> bytes:
    """A workbook of one cell that claims the last place of the sheet: 17 thousand million cells."""
    book = openpyxl.Workbook()
    book.worksheets[0]["XFD1048576"] = 1
    stream = io.BytesIO()
    book.save(stream)
    return stream.getvalue()


GOOD = workbook(("S", [["Time", "A1"], [0, 1.5]]))


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (b"", "empty"),
        (b"Time,A1\n0,1\n", "not an xlsx"),
        (b"\xd0\xcf\x11\xe0" + b"\0" * 600, "old or password-protected"),
        (GOOD[: len(GOOD) // 2], "damaged or cut off"),
        (b"PK\x03\x04" + b"\0" * 100, "damaged or cut off"),
        (bomb(), "unpacks to far more"),
        (far_cell(), "unpacks to far more"),
    ],
    ids=["empty", "text", "old", "torn", "zeros", "bomb", "far cell"],
)
def test_what_is_no_workbook(content: bytes, words: str) -> None:
    assert words in refusal(content, XLSX)


def test_a_workbook_without_the_sheet_and_a_workbook_read_as_text() -> None:
    assert "its sheets are S" in refusal(GOOD, XLSX, workbook={"sheet": "Results*"})
    assert 'container = "xlsx"' in refusal(GOOD, WIDE)


@settings(max_examples=150, deadline=None)
@given(st.sampled_from(sorted(EXAMPLES)), st.data())
def test_a_damaged_example_is_read_or_refused_but_never_crashes(name: str, data: st.DataObject) -> None:
    content = bytearray(EXAMPLES[name].read_bytes())
    cut = data.draw(st.integers(0, len(content)))
    for _ in range(data.draw(st.integers(0, 4))):
        content[data.draw(st.integers(0, len(content) - 1))] = data.draw(st.integers(0, 255))
    damaged = bytes(content[:cut])
    # Anything but an ExportError goes through and fails the test.
    with contextlib.suppress(ExportError):
        reads = read_export(damaged, EXAMPLES[name].name, PROFILES[name])
        assert all(len(each.readings) for each in reads)
    trial_report(damaged, EXAMPLES[name].name, PROFILES[name])


@settings(max_examples=60, deadline=None)
@given(st.binary(max_size=300))
def test_random_bytes_fit_no_profile_and_are_no_map(content: bytes) -> None:
    with pytest.raises(ExportError):
        choose_profile(content, "night.csv", PROFILES)
    assert not is_plate_map(content, "night.csv")
    with pytest.raises(PlateMapError):
        read_plate_map(content, "night.csv")
    for profile in PROFILES.values():
        with pytest.raises(ExportError):
            read_export(content, "night.csv", profile)


def test_choosing_tells_what_each_profile_missed() -> None:
    with pytest.raises(ExportError) as caught:
        choose_profile(b"hello\nworld\n", "night.csv", PROFILES)
    message = str(caught.value)
    assert "grids: the file name is not like *.xlsx" in message
    assert "wide: none of its first 60 lines has ^Plate:" in message


def test_choosing_refuses_when_two_profiles_fit_or_there_is_none() -> None:
    content = EXAMPLES["wide"].read_bytes()
    with pytest.raises(ExportError, match="several export profiles fit: one, two"):
        choose_profile(content, "x.csv", {"two": PROFILES["wide"], "one": PROFILES["wide"]})
    with pytest.raises(ExportError, match="the site has none"):
        choose_profile(content, "x.csv", {})


def test_choosing_looks_at_the_head_of_a_long_file_only() -> None:
    profile = ExportProfile.model_validate({**WIDE, "detect": {"head": ["^Time"], "head_lines": 2}})
    tail = "0,µ\n" * 200_000
    for encoding in ("utf-8", "utf-16", "utf-16-be"):
        text = {**WIDE, "text": {"encoding": encoding if encoding == "utf-16-be" else "auto"}}
        chosen = ExportProfile.model_validate({**text, "detect": {"head": ["^Time"], "head_lines": 2}})
        assert choose_profile(("Time,A1\n" + tail).encode(encoding), "x.csv", {"p": chosen}) == "p"
    with pytest.raises(ExportError, match="none of its first 2 lines"):
        choose_profile(b"a\nb\nTime,A1\n0,1\n", "x.csv", {"p": profile})
