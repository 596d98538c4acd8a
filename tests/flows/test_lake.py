"""The lake: rows come back as they went in, the same rows give the same bytes, nothing is overwritten."""

import pandas as pd
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from flows import lake
from models.errors import SiteError, UnknownName
from models.identity import content_id
from models.tables import READINGS
from tests.flows.tiny_site import empty_site, readings

REAL = st.none() | st.floats(allow_nan=False)


@pytest.fixture
def site(tmp_path):
    return empty_site(tmp_path)


def test_rows_come_back_as_they_went_in(site):
    frame = readings("TP-1", "ab" * 16)
    written = lake.write_rows(site, "readings", "ab" * 16, frame)
    assert written.path == f"lake/readings/{'ab' * 16}.parquet"
    assert written.row_count == len(frame) == 45
    path = site.root / written.path
    assert content_id(path.read_bytes()) == written.sha256
    assert path.stat().st_size == written.byte_count
    assert not path.stat().st_mode & 0o222
    back = lake.read_rows(site, "readings", "ab" * 16)
    pd.testing.assert_frame_equal(back, READINGS.to_arrow(frame).to_pandas())
    assert lake.describe(site, "readings", "ab" * 16) == written


def test_the_file_says_what_its_columns_mean(site):
    written = lake.write_rows(site, "readings", "x", readings("TP-1", "x"))
    schema = pq.read_schema(site.root / written.path)
    assert schema.field("time_s").metadata == {
        b"meaning": b"Time since the plate's first read",
        b"unit": b"s",
    }
    metadata = pq.read_metadata(site.root / written.path)
    assert metadata.row_group(0).column(0).compression == "ZSTD"


@settings(max_examples=15, suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None)
@given(signals=st.lists(REAL, min_size=1, max_size=20), name=st.text(max_size=8))
def test_the_same_rows_give_the_same_bytes(signals, name):
    def frame() -> pd.DataFrame:
        return pd.DataFrame(
            {
                "plate_read_id": "p",
                "channel": name.encode("utf-8", "replace").decode(),
                "well": "A1",
                "read_number": range(1, len(signals) + 1),
                "time_s": 1.5,
                "signal": signals,
                "state": "ok",
                "temperature_c": None,
                "source_sheet": None,
                "source_row": 1,
                "source_column": 1,
            }
        )

    once, again = lake.encode_rows("readings", frame()), lake.encode_rows("readings", frame())
    assert once == again
    assert pq.read_table(pa.BufferReader(once))["signal"].to_pylist() == signals


def test_the_same_rows_again_leave_the_file_alone(site):
    first = lake.write_rows(site, "readings", "x", readings("TP-1", "x"))
    before = (site.root / first.path).stat()
    assert lake.write_rows(site, "readings", "x", readings("TP-1", "x")) == first
    assert (site.root / first.path).stat().st_mtime_ns == before.st_mtime_ns
    assert not (site.lake / lake.EARLIER).exists()


def test_other_rows_under_the_name_keep_the_earlier_file(site):
    first = lake.write_rows(site, "readings", "x", readings("TP-1", "x"))
    second = lake.write_rows(site, "readings", "x", readings("TP-2", "x"))
    assert first.path == second.path
    assert lake.locate(site, first.path, first.sha256) != lake.locate(site, second.path, second.sha256)
    earlier = lake.read_arrow(site, first.path, first.sha256)
    assert earlier["signal"][0].as_py() == pytest.approx(0.1)
    assert lake.read_rows(site, "readings", "x")["signal"][0] == pytest.approx(0.101)
    assert [path.name for path in (site.lake / "readings").iterdir()] == ["x.parquet"]


def test_a_lost_or_damaged_file_is_named(site):
    with pytest.raises(SiteError, match="missing"):
        lake.read_rows(site, "readings", "x")
    written = lake.write_rows(site, "readings", "x", readings("TP-1", "x"))
    path = site.root / written.path
    assert lake.condition(site, written.path, written.sha256) == "unchanged"
    content = bytearray(path.read_bytes())
    content[len(content) // 2] ^= 1
    path.chmod(0o644)
    path.write_bytes(bytes(content))
    assert lake.condition(site, written.path, written.sha256) == "changed"
    with pytest.raises(SiteError, match="missing or has changed"):
        lake.read_arrow(site, written.path, written.sha256)
    path.write_bytes(b"PAR1")
    with pytest.raises(SiteError, match="damaged"):
        lake.read_rows(site, "readings", "x")
    path.unlink()
    assert lake.condition(site, written.path, written.sha256) == "missing"


def test_rows_that_do_not_fit_are_refused(site):
    frame = readings("TP-1", "x")
    with pytest.raises(KeyError):
        lake.write_rows(site, "readings", "x", frame.drop(columns="state"))
    with pytest.raises(pa.ArrowInvalid, match="must be known"):
        lake.write_rows(site, "readings", "x", frame.assign(time_s=None))
    with pytest.raises(UnknownName, match="no table 'nights'"):
        lake.write_rows(site, "nights", "x", frame)
    assert not (site.lake / "readings").exists()


def test_a_files_columns_have_digests_of_their_values_whatever_its_bytes(site, monkeypatch):
    frame = readings("TP-1", "x")
    written = lake.write_rows(site, "readings", "x", frame)
    assert set(written.columns) == set(READINGS.column_names)
    assert written.columns == lake.column_digests(READINGS.to_arrow(frame))
    assert lake.describe(site, "readings", "x").columns == written.columns
    plain = pq.write_table
    monkeypatch.setattr(
        lake.pq, "write_table", lambda *given, **more: plain(*given, **{**more, "use_dictionary": False})
    )
    other = lake.write_rows(site, "readings", "y", frame)
    assert other.sha256 != written.sha256
    assert other.columns == written.columns


@settings(max_examples=40, deadline=None)
@given(
    values=st.lists(REAL, min_size=1, max_size=12),
    words=st.lists(st.none() | st.text(max_size=3), min_size=1, max_size=12),
    place=st.integers(0, 11),
)
def test_a_column_digest_tells_any_change_and_only_that(values, words, place):
    def digest(column: pa.Array) -> str:
        return lake.column_digests(pa.table({"c": column}))["c"]

    numbers, texts = pa.array(values, pa.float64()), pa.array(words, pa.string())
    longer = pa.concat_arrays([pa.array([1.5], pa.float64()), numbers]).slice(1)
    in_chunks = pa.table({"c": pa.chunked_array([texts.slice(0, 1), texts.slice(1)])})
    assert digest(longer) == digest(numbers)
    assert lake.column_digests(in_chunks)["c"] == digest(texts)
    changed = list(values)
    changed[place % len(values)] = None if changed[place % len(values)] is not None else 0.0
    assert digest(pa.array(changed, pa.float64())) != digest(numbers)
    respelt = [*words, "more"]
    assert digest(pa.array(respelt, pa.string())) != digest(texts)
    reworded = list(words)
    reworded[place % len(words)] = (reworded[place % len(words)] or "") + "x"
    assert digest(pa.array(reworded, pa.string())) != digest(texts)


def test_rows_of_an_earlier_shape_get_the_present_columns_or_are_refused():
    rows = READINGS.to_arrow(readings("TP-1", "x"))
    earlier = rows.drop_columns(["temperature_c", "source_sheet"]).append_column(
        "old_note", pa.array(["?"] * rows.num_rows)
    )
    now = lake.conformed(READINGS, earlier, "x.parquet")
    assert now.schema.equals(READINGS.arrow_schema())
    assert now["temperature_c"].null_count == now["source_sheet"].null_count == rows.num_rows
    assert now.drop_columns(["temperature_c", "source_sheet"]).equals(
        rows.drop_columns(["temperature_c", "source_sheet"])
    )
    with pytest.raises(SiteError, match=r"x\.parquet: readings\.state must be known now; 45 rows"):
        lake.conformed(READINGS, rows.drop_columns(["state"]), "x.parquet")
    words = pa.array(["soon"] * rows.num_rows)
    other = rows.drop_columns(["time_s"]).append_column("time_s", words)
    with pytest.raises(SiteError, match="was written as string and is double now"):
        lake.conformed(READINGS, other, "x.parquet")
