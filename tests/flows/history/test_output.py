"""How answers are written: full values in files, nothing taken as a command, tables within 80 columns."""

import csv
import io
import json
from datetime import UTC, datetime
from zipfile import ZipFile

import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from openpyxl import load_workbook
from rich.console import Console

from flows.history.formats import FILE_FORMATS
from flows.history.output import encode, print_answer
from models.errors import QueryError

AT = datetime(2026, 3, 2, 21, 0, 0, 500_000, tzinfo=UTC)
ID = "0123456789abcdef" * 2
COMMANDS = ["=1+1", "+1", "-1", "@SUM(A1)", '=HYPERLINK("http://x")', "\t=1", "\r=1"]
TEXT = st.text(st.characters(exclude_categories=["Cs"]), max_size=12)


def answer(**columns: list[object]) -> pa.Table:
    return pa.table(columns)


def printed(table: pa.Table, width: int = 80, rows: int = 200) -> str:
    console = Console(width=width, highlight=False, color_system=None, file=io.StringIO())
    print_answer(table, console, rows)
    assert isinstance(console.file, io.StringIO)
    return console.file.getvalue()


def mixed() -> pa.Table:
    return answer(
        lot=["QX-7", 'a,b\n"c"', None],
        value=[0.1 + 0.2, 1e-12, None],
        plates=[3, 2**53 + 1, None],
        clear=[True, False, None],
        at=pa.array([AT, AT, None], pa.timestamp("us", "UTC")),
        wells=[["A1", "B2"], [], None],
    )


def test_csv_holds_full_values():
    lines = list(csv.reader(io.StringIO(encode(mixed(), "csv").decode())))
    assert lines[0] == ["lot", "value", "plates", "clear", "at", "wells"]
    assert lines[1] == ["QX-7", repr(0.1 + 0.2), "3", "true", "2026-03-02T21:00:00.500000Z", '["A1", "B2"]']
    assert lines[2][:3] == ['a,b\n"c"', "1e-12", str(2**53 + 1)]
    assert lines[3] == [""] * 6


def test_json_holds_full_values():
    rows = json.loads(encode(mixed(), "json"))
    assert rows[0] == {
        "lot": "QX-7",
        "value": 0.1 + 0.2,
        "plates": 3,
        "clear": True,
        "at": "2026-03-02T21:00:00.500000Z",
        "wells": ["A1", "B2"],
    }
    assert rows[1]["plates"] == 2**53 + 1
    assert set(rows[2].values()) == {None}


@pytest.mark.parametrize("value", [float("nan"), float("inf"), float("-inf")])
def test_json_and_xlsx_know_no_numbers_that_are_not_finite(value):
    assert json.loads(encode(answer(x=[value]), "json"), parse_constant=pytest.fail) == [{"x": None}]
    assert sheet(answer(x=[value], y=[1]))[1] == (None, 1)


def test_parquet_comes_back_with_its_types():
    table = mixed()
    assert pq.read_table(io.BytesIO(encode(table, "parquet"))).equals(table)


def sheet(table: pa.Table) -> list[tuple[object, ...]]:
    book = load_workbook(io.BytesIO(encode(table, "xlsx")))
    return list(book.active.iter_rows(values_only=True))


def test_xlsx_holds_values_and_utc_times():
    rows = sheet(mixed())
    assert rows[0] == ("lot", "value", "plates", "clear", "at", "wells")
    # The workbook's writer keeps 16 digits of a number.
    assert rows[1][1] == pytest.approx(0.1 + 0.2, rel=1e-15)
    assert rows[1] == ("QX-7", rows[1][1], 3, True, AT.replace(tzinfo=None), '["A1", "B2"]')
    assert rows[2][2] == str(2**53 + 1), "a number that a sheet would round stays text"
    assert rows[3:] == [], "a row of nothing but NULL is an empty row"


@pytest.mark.parametrize("text", COMMANDS)
def test_xlsx_takes_no_text_as_a_formula(text):
    content = encode(answer(**{text: [text]}), "xlsx")
    book = load_workbook(io.BytesIO(content))
    for row in book.active.iter_rows():
        for cell in row:
            assert cell.data_type == "s"
            assert cell.quotePrefix
            assert cell.value is not None
            assert cell.value.strip() == text.strip()
    with ZipFile(io.BytesIO(content)) as package:
        assert b"<f>" not in package.read("xl/worksheets/sheet1.xml")


def test_xlsx_refuses_what_no_sheet_can_hold():
    with pytest.raises(QueryError, match="csv or parquet"):
        encode(pa.table({"x": pa.nulls(1_048_576, pa.int8())}), "xlsx")


@settings(max_examples=60, deadline=None)
@given(texts=st.lists(st.none() | TEXT, min_size=1, max_size=4))
def test_any_text_survives_csv_json_and_parquet_and_breaks_no_workbook(texts):
    table = answer(x=pa.array(texts, pa.string()))
    assert [row["x"] for row in json.loads(encode(table, "json"))] == texts
    assert pq.read_table(io.BytesIO(encode(table, "parquet")))["x"].to_pylist() == texts
    read = list(csv.reader(io.StringIO(encode(table, "csv").decode(), newline="")))
    assert [row[0] if row else "" for row in read[1:]] == [text or "" for text in texts]
    assert len(sheet(table)) >= 1


def test_columns_of_one_name_are_told_apart():
    table = pa.Table.from_arrays([pa.array([1]), pa.array([2]), pa.array([3])], names=["a", "a", "a_2"])
    assert json.loads(encode(table, "json")) == [{"a": 1, "a_2": 2, "a_2_2": 3}]
    for name in FILE_FORMATS:
        assert encode(table, name)


def test_an_unknown_format_names_the_known():
    with pytest.raises(QueryError, match="csv, json, parquet, xlsx"):
        encode(mixed(), "docx")


def test_the_table_shortens_for_reading_only():
    text = printed(answer(estimate_id=[ID], km_um=[82.43172], share=[1.23456e-7], n=[123456], at=[AT]))
    assert ID[:12] in text
    assert ID[:13] not in text
    assert "82.43" in text
    assert "82.431" not in text
    assert "1.235e-7" in text or "1.235e-07" in text
    assert "123456" in text
    assert "2026-03-02 21:00" in text
    assert "1 row" in text


def test_unknown_is_a_dash_and_empty_says_so():
    assert "–" in printed(answer(x=pa.array([None, 1.0])))
    assert "no rows" in printed(answer(x=pa.array([], pa.int64())))


def test_a_long_answer_says_how_much_is_not_shown():
    text = printed(answer(x=list(range(1000))), rows=10)
    assert "1000 rows, the first 10 shown" in text
    assert "\n 10" not in text


@settings(max_examples=60, deadline=None)
@given(
    width=st.integers(60, 120),
    columns=st.lists(
        st.lists(TEXT, min_size=2, max_size=2)
        | st.lists(st.floats(), min_size=2, max_size=2)
        | st.just([ID, ID]),
        min_size=1,
        max_size=14,
    ),
)
def test_a_table_is_never_wider_than_the_terminal(width, columns):
    table = pa.table({f"a_long_column_name_{n}": column for n, column in enumerate(columns)})
    console = Console(width=width)
    assert all(console.measure(line).maximum <= width for line in printed(table, width).splitlines())


def test_heads_are_never_cut_but_broken_at_underscores():
    table = pa.table(
        {
            "lot": ["QX-7"],
            "constant": ["specific_activity"],
            "value": [102.0],
            "between_plate_sd": [1.5],
            "unit": ["umol/min/mg"],
            "plate_read_count": [3],
            "held_series_count": [0],
            "standing": ["clear"],
        }
    )
    broken = printed(table).split("────")[0]
    broken_names = {"between_", "plate_sd", "plate_", "read_", "held_", "series_", "count"}
    assert set(broken.split()) == broken_names | {"lot", "constant", "value", "unit", "standing"}
    whole = printed(table, width=120).split("────")[0]
    assert whole.split() == table.column_names


def test_a_wide_answer_becomes_a_block_a_row():
    text = printed(pa.table({f"column_{n}": [f"value {n} of the first", "x"] for n in range(12)}))
    assert "row 1" in text
    assert "row 2" in text
    assert all(f"value {n} of the first" in text for n in range(12))


@pytest.mark.parametrize(
    "evil", ["\x1b[2J\x1b[31mred", "\x9b31m", "[bold]x[/bold]", "[link=file:///x]y[/link]", "a\u202eb"]
)
def test_text_from_a_file_steers_no_terminal(evil):
    text = printed(answer(**{evil: [evil]}))
    assert not set("\x1b\x9b\u202e") & set(text)
    if evil.startswith("["):
        assert evil in text
