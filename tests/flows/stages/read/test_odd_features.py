"""Each odd feature of an export on its own: blocks, summaries, times, wells, tokens, ends, workbooks."""

from __future__ import annotations

import datetime as dt
import io
from pathlib import Path
from typing import Any

import openpyxl
import pytest

from flows.site.configuration import load_configuration
from flows.stages.read import StagedRead, choose_profile, read_export, trial_report
from models.records.export_profile import ExportProfile

ROOT = Path(__file__).resolve().parents[4]
WIDE = {
    "shape": "wide",
    "detect": {"file_name": ["*"]},
    "plate": {"id_in_file_name": r"(?P<plate_id>\w+)\."},
    "time": {"notation": "s"},
    "columns": {"time": "Time"},
}
LONG = {
    **WIDE,
    "shape": "long",
    "columns": {"well": "Well", "time": "Time", "signal": "Signal"},
}
ROWS = {**WIDE, "shape": "wells_by_rows", "columns": {"well": "Well"}}
GRIDS = {**WIDE, "shape": "grids", "time": {"notation": "s", "pattern": r"Time (?P<time>\d+)"}, "columns": {}}


def read(
    written: str | bytes, base: dict[str, Any], file_name: str = "P1.csv", **changes: Any
) -> list[StagedRead]:
    content = written if isinstance(written, bytes) else written.encode()
    return read_export(content, file_name, ExportProfile.model_validate(base | changes))


def values(staged: StagedRead, *names: str) -> list[tuple[object, ...]]:
    return list(staged.readings[list(names)].itertuples(index=False, name=None))


def workbook(*sheets: tuple[str, list[list[object]]]) -> bytes:
    book = openpyxl.Workbook()
    book.remove(book.worksheets[0])
    for title, rows in sheets:
        sheet = book.create_sheet(title)
        for row in rows:
            sheet.append(row)
    stream = io.BytesIO()
    book.save(stream)
    return stream.getvalue()


def test_each_example_file_is_read_by_the_profile_of_its_shape() -> None:
    profiles = load_configuration(ROOT / "config").profiles
    found = {}
    for path in sorted((ROOT / "fixtures" / "exports").glob("*")):
        if path.name.endswith("_map.csv"):
            continue
        content = path.read_bytes()
        name = choose_profile(content, path.name, profiles)
        reads = read_export(content, path.name, profiles[name])
        found[path.name] = (name, [each.plate_id for each in reads], [len(each.readings) for each in reads])
        assert trial_report(content, path.name, profiles[name]).problems == ()
    assert found == {
        "P0414_kinetic.tsv": ("wells_by_rows", ["P0414"], [24 * 7]),
        "grids.xlsx": ("grids", ["P0415"], [24 * 4]),
        "long.csv": ("long", ["P0413", "P0416"], [24 * 5 * 2, 24 * 5 * 2]),
        "wide.csv": ("wide", ["P0412"], [24 * 8]),
    }


def test_plates_and_channels_in_blocks_of_a_wide_file() -> None:
    text = (
        "Device\nPlate: P1 at 2026-03-02T21:00:00\n[340]\nTime,A1,A2\n0,1,2\n30,3,4\n"
        "[405]\nTime,A1,A2\n0,5,6\n30,7,8\n"
        "Plate: P2 at 2026-03-02T22:00:00\n[340]\nTime,A1,A2\n10,9,10\n40,11,12\n"
    )
    plate = {"started_in_preamble": r" at (?P<started>\S+)", "time_zone": "Europe/Vienna"}
    blocks = {"plate": r"^Plate: (?P<plate_id>\S+)", "channel": r"^\[(?P<channel>\d+)\]"}
    first, second = read(text, WIDE, plate=plate, blocks=blocks)
    assert (first.plate_id, first.place_in_export, second.plate_id, second.place_in_export) == (
        "P1",
        1,
        "P2",
        2,
    )
    assert first.started_at == dt.datetime(2026, 3, 2, 20, 0, tzinfo=dt.UTC)
    assert second.started_at == dt.datetime(2026, 3, 2, 21, 0, tzinfo=dt.UTC)
    assert values(first, "channel", "well", "signal", "source_row", "source_column") == [
        ("340", "A1", 1, 5, 2),
        ("340", "A1", 3, 6, 2),
        ("340", "A2", 2, 5, 3),
        ("340", "A2", 4, 6, 3),
        ("405", "A1", 5, 9, 2),
        ("405", "A1", 7, 10, 2),
        ("405", "A2", 6, 9, 3),
        ("405", "A2", 8, 10, 3),
    ]
    assert values(second, "time_s", "signal", "source_row")[:2] == [(0, 9, 14), (30, 11, 15)]


def test_one_plate_read_twice_in_a_file_is_two_reads() -> None:
    text = "Plate: P1\nTime,A1\n0,1\n30,2\nPlate: P1\nTime,A1\n0,3\n30,4\n"
    reads = read(text, WIDE, blocks={"plate": r"^Plate: (?P<plate_id>\S+)"}, plate={})
    assert [(each.plate_id, each.place_in_export) for each in reads] == [("P1", 1), ("P1", 2)]


def test_grids_of_two_channels_share_the_time_above_them() -> None:
    text = ""
    for time, warm in ((0, 25), (60, 26)):
        text += f"Time {time} s, {warm} C\n"
        for channel in (340, 405):
            text += f"Ch {channel}\n<>,1,2\nA,{time + channel},2\n\nB,3,4\n\n"
    text += "Mean\n<>,1,2\nA,9,9\nB,9,9\n"
    (staged,) = read(
        text,
        GRIDS,
        blocks={"channel": r"^Ch (?P<channel>\d+)"},
        temperature={"pattern": r", (?P<temperature>\d+) C"},
        table={"end_pattern": "^Mean"},
    )
    a1 = staged.readings[staged.readings["well"] == "A1"]
    assert list(a1["channel"]) == ["340", "340", "405", "405"]
    assert list(a1["time_s"]) == [0, 60, 0, 60]
    assert list(a1["signal"]) == [340, 400, 405, 465]
    assert list(a1["temperature_c"]) == [25, 26, 25, 26]


@pytest.mark.parametrize(("count", "rows", "columns"), [(96, 8, 12), (384, 16, 24), (1536, 32, 48)])
def test_grids_without_labels_are_as_wide_as_a_plate(count: int, rows: int, columns: int) -> None:
    grid = [",".join(str(1000 * row + column) for column in range(columns)) for row in range(rows)]
    text = "\n".join(["Time 0", *grid, "Time 30", *grid])
    (staged,) = read(text, GRIDS, grids={"row_labels": False, "column_numbers": False})
    assert staged.plate_format == count
    assert len(staged.readings) == 2 * count
    last = staged.readings.iloc[-1]
    assert last["signal"] == 1000 * (rows - 1) + columns - 1
    assert (last["source_row"], last["source_column"]) == (2 * rows + 2, columns)


def test_well_names_of_two_numbers_by_a_pattern() -> None:
    text = "Chamber\t1\t2\nS01-A01\t5\t6\nS12-A02\t7\t\nS16-A24\t9\t10\n"
    (staged,) = read(
        text,
        ROWS,
        columns={"well": "Chamber"},
        wells={"pattern": r"S(?P<row>\d+)-A(?P<column>\d+)"},
        time={"interval_s": 30},
    )
    assert staged.plate_format == 384
    assert values(staged, "well", "read_number", "time_s", "state") == [
        ("A1", 1, 0, "ok"),
        ("A1", 2, 30, "ok"),
        ("L2", 1, 0, "ok"),
        ("L2", 2, 30, "missing"),
        ("P24", 1, 0, "ok"),
        ("P24", 2, 30, "ok"),
    ]


def test_row_and_column_of_a_well_may_stand_apart() -> None:
    text = "Row,Col,Time,Signal\nB,2,0,1\n2,2,30,2\n"
    columns = {"row": "Row", "column": "Col", "time": "Time", "signal": "Signal"}
    (staged,) = read(text, LONG, columns=columns)
    assert values(staged, "well", "read_number", "signal") == [("B2", 1, 1), ("B2", 2, 2)]


def test_a_table_without_header_names_its_columns_by_number() -> None:
    text = "A1,0,1\nA1,30,2\n"
    (staged,) = read(text, LONG, columns={"well": 1, "time": 2, "signal": 3}, table={"has_header": False})
    assert values(staged, "time_s", "signal", "source_row") == [(0, 1, 1), (30, 2, 2)]


@pytest.mark.parametrize(
    ("notation", "texts", "seconds"),
    [
        ("hh:mm:ss", ["23:59:30", "24:00:00", "30:00:00.5"], [0, 30, 21_630.5]),
        ("hh:mm:ss", ["0.23:00:00", "1.00:30:00", "2:01:00:00"], [0, 5_400, 93_600]),
        ("hh:mm:ss", ["1 d 00:00:00", "1 day, 00:00:10", "2 days, 0:00:00"], [0, 10, 86_400]),
        ("mm:ss", ["59:30", "75:00", "1:20:00"], [0, 930, 1_230]),
        ("ms", ["1500", "2500", "3000.5"], [0, 1, 1.5005]),
        ("h", ["1", "1.5", "30"], [0, 1_800, 104_400]),
    ],
)
def test_time_notations(notation: str, texts: list[str], seconds: list[float]) -> None:
    text = "\n".join(["Time;A1", *(f"{each};1" for each in texts)])
    (staged,) = read(text, WIDE, time={"notation": notation})
    assert list(staged.readings["time_s"]) == pytest.approx(seconds)


def test_a_clock_without_date_passes_midnight() -> None:
    text = "Well,Time,Signal\nA1,23:59:50,1\nA1,00:00:20,2\nA2,00:00:05,3\nA2,00:00:35,4\n"
    (staged,) = read(text, LONG, time={"notation": "timestamp", "format": "%H:%M:%S"})
    assert values(staged, "well", "time_s") == [("A1", 0), ("A1", 30), ("A2", 15), ("A2", 45)]
    assert staged.started_at is None


def test_timestamps_give_the_start_in_the_instruments_zone() -> None:
    text = "Time,A1\n02.03.2026 22:00:00,1\n02.03.2026 22:00:30,2\n"
    (staged,) = read(
        text,
        WIDE,
        time={"notation": "timestamp", "format": "%d.%m.%Y %H:%M:%S"},
        plate={**WIDE["plate"], "time_zone": "Europe/Vienna"},
    )
    assert staged.started_at == dt.datetime(2026, 3, 2, 21, 0, tzinfo=dt.UTC)
    assert list(staged.readings["time_s"]) == [0, 30]


def test_disorder_in_time_is_left_to_be_seen() -> None:
    (staged,) = read("Time,A1\n0,1\n60,2\n30,3\n90,4\n", WIDE)
    assert values(staged, "read_number", "time_s", "signal") == [
        (1, 0, 1),
        (2, 60, 2),
        (3, 30, 3),
        (4, 90, 4),
    ]
    report = trial_report(b"Time,A1\n0,1\n60,2\n30,3\n", "P1.csv", ExportProfile.model_validate(WIDE))
    assert report.problems == ("plate P1: time runs backwards in 1 wells, such as A1",)


def test_numbered_reads_and_counted_reads_get_the_stated_interval() -> None:
    columns = {"well": "Well", "signal": "Signal"}
    numbered = "Well,Read,Signal\nA1,1,5\nA1,3,6\nB1,2,7\n"
    (staged,) = read(numbered, LONG, columns={**columns, "read": "Read"}, time={"interval_s": 20})
    assert values(staged, "well", "time_s", "signal") == [("A1", 0, 5), ("A1", 40, 6), ("B1", 20, 7)]
    counted = "Well,Signal\nA1,5\nB1,6\nA1,7\nB1,8\n"
    (staged,) = read(counted, LONG, columns=columns, time={"interval_s": 20})
    assert values(staged, "well", "time_s", "signal") == [
        ("A1", 0, 5),
        ("A1", 20, 7),
        ("B1", 0, 6),
        ("B1", 20, 8),
    ]


def test_thousands_and_blanks_round_values() -> None:
    text = "Time;A1;A2\n0; 1.234,5 ;-12\n30;12.345.678;OVER \n"
    (staged,) = read(text, WIDE, values={"decimal": ",", "thousands": ".", "overflow": ["OVER"]})
    assert values(staged, "well", "signal", "state")[:3] == [
        ("A1", 1234.5, "ok"),
        ("A1", 12_345_678.0, "ok"),
        ("A2", -12.0, "ok"),
    ]
    assert values(staged, "state")[3] == ("overflow",)


@pytest.mark.parametrize(
    ("table", "tail"),
    [
        ({"end": "blank_row"}, "\nMean,1,2\n"),
        ({"end": "first_unreadable_row"}, "Mean,1,2\nSD,0,0\n"),
        ({"end_pattern": "^Mean"}, "Mean,1,2\nSD,0,0\n"),
    ],
)
def test_trailing_blocks_are_left_out(table: dict[str, str], tail: str) -> None:
    (staged,) = read("Time,A1,A2\n0,1,2\n30,3,4\n" + tail, WIDE, table=table)
    assert len(staged.readings) == 4


def test_skipped_lines_and_a_marker_before_the_header() -> None:
    text = "Time,A1\n9,9\nkinetic data\nnote\nTime,A1\n0,1\n30,2\n"
    (staged,) = read(text, WIDE, table={"skip_lines": 1, "after": "kinetic", "header": "^Time"})
    assert values(staged, "signal", "source_row") == [(1, 6), (2, 7)]


def test_a_delimiter_at_the_end_of_each_line() -> None:
    (staged,) = read("Time,A1,A2,\n0,1,2,\n30,3,4,\n", WIDE)
    assert len(staged.readings) == 4
    (staged,) = read("Time,A1,A2\n0,1,2,\n30,3,4,\n", WIDE)
    assert len(staged.readings) == 4


@pytest.mark.parametrize("delimiter", ["::", "whitespace", "tab", "~"])
def test_any_delimiter(delimiter: str) -> None:
    sign = {"whitespace": "   ", "tab": "\t"}.get(delimiter, delimiter)
    text = "\n".join(sign.join(row) for row in (["Time", "A1", "A2"], ["0", "1", "2"], ["30", "3", "4"]))
    (staged,) = read(text, WIDE, text={"delimiter": delimiter})
    assert values(staged, "signal", "source_column") == [(1, 2), (3, 2), (2, 3), (4, 3)]


def test_absent_fields_are_missing_reads_where_the_profile_says_so() -> None:
    (staged,) = read("Well,0,30,60\nA1,1,2,3\nA2,4\n", ROWS, table={"short_rows": "missing"})
    assert values(staged, "state")[3:] == [("ok",), ("missing",), ("missing",)]


def test_sheets_of_a_workbook_are_plates_and_native_times_are_read() -> None:
    rows = [["Time", "A1"], [dt.timedelta(hours=25), 0.5], [dt.time(1, 0, 30), 0.25]]
    content = workbook(("Notes", [["hello"]]), ("Plate P8", rows), ("Plate P9", rows))
    reads = read(
        content,
        WIDE,
        container="xlsx",
        workbook={"sheet": "Plate*"},
        plate={"id_in_sheet_name": r"Plate (?P<plate_id>\w+)"},
        time={"notation": "hh:mm:ss"},
    )
    assert [each.plate_id for each in reads] == ["P8", "P9"]
    assert values(reads[1], "time_s", "signal", "source_sheet", "source_row") == [
        (86_370, 0.5, "Plate P9", 2),
        (0, 0.25, "Plate P9", 3),
    ]


def test_numeric_cells_keep_their_value_under_a_decimal_comma() -> None:
    content = workbook(("S", [["Time", "A1"], [0, 1234.5], [30, "1,5"]]))
    (staged,) = read(content, WIDE, container="xlsx", values={"decimal": ",", "thousands": "."})
    assert list(staged.readings["signal"]) == [1234.5, 1.5]


def test_date_cells_of_a_workbook_need_no_format_of_their_own() -> None:
    stamps = [dt.datetime(2026, 3, 2, 21, 0, 0), dt.datetime(2026, 3, 2, 21, 1, 0)]  # noqa: DTZ001 (a workbook's dates bear no zone)
    content = workbook(("S", [["Time", "A1"], [stamps[0], 1], [stamps[1], 2]]))
    (staged,) = read(
        content, WIDE, container="xlsx", time={"notation": "timestamp", "format": "%d/%m/%Y %H:%M"}
    )
    assert staged.started_at == dt.datetime(2026, 3, 2, 21, 0, tzinfo=dt.UTC)
    assert list(staged.readings["time_s"]) == [0, 60]


def test_a_trial_shows_places_and_first_values() -> None:
    report = trial_report(b"Time,A1,A2\n5,1,\n35,3,4\n", "P1.csv", ExportProfile.model_validate(WIDE))
    (plate,) = report.plates
    assert (report.delimiter, report.encoding, report.byte_count) == (",", "utf-8", 23)
    assert (plate.well_count, plate.read_count, plate.interval_s, plate.missing_count) == (2, 2, 30, 1)
    first = plate.first_values[1]
    assert (first.well, first.time_s, first.signal, first.source_row, first.source_column) == (
        "A1",
        30,
        3,
        3,
        2,
    )
    assert plate.first_values[2].signal is None
