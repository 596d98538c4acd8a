"""Rebuild: what was lost comes back row for row and byte for byte, or is named and left alone."""

from __future__ import annotations

import shutil
from dataclasses import replace
from datetime import timedelta
from pathlib import Path

import pandas as pd
import pytest

from flows import lake, ledger
from flows.history import rebuild as rebuilding
from flows.history import recompute
from flows.history.rebuild import rebuild
from flows.history.verify import verify
from flows.overnight.nightly import run_pass
from flows.site.archive import raw_path
from flows.site.layout import Site
from flows.stages.recorded import recorded_batches
from flows.warehouse import writer
from flows.warehouse.bookkeeping import STORED
from models.errors import LedgerError, SiteError
from models.tables import LOT_VALUES, Column
from tests.flows.conftest import REVISED

LATER = REVISED + timedelta(days=7)


def snapshot(site: Site, *, but: tuple[str, ...] = ()) -> dict[str, list[tuple[object, ...]]]:
    """Every row of the warehouse."""
    names = [each.name for each in STORED if each.name not in but]
    with writer.loader(site) as connection:
        return {name: connection.execute(f"FROM {name} ORDER BY ALL").fetchall() for name in names}


def lake_bytes(site: Site) -> dict[str, bytes]:
    files = [path for path in site.lake.rglob("*") if path.is_file()]
    return {path.relative_to(site.root).as_posix(): path.read_bytes() for path in files}


def lose(site: Site, table_name: str) -> list[Path]:
    """Remove every file of a table from the lake."""
    files = sorted((site.lake / table_name).iterdir())
    for path in files:
        path.unlink()
    return files


def test_lake_and_warehouse_come_back_though_the_rebuild_is_stopped_on_the_way(nights: Site) -> None:
    rows, files = snapshot(nights), lake_bytes(nights)
    shutil.rmtree(nights.lake)
    shutil.rmtree(nights.warehouse)

    def stop(done: int, total: int) -> None:
        assert total == len(list(recorded_batches(nights)))
        if done == 2:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        rebuild(nights, LATER, stop)
    assert not nights.loader_file.exists()
    report = rebuild(nights, LATER)
    assert report.failures == ()
    assert report.kept_count == 2
    assert report.recomputed_count == len(rows["loads"]) - 2
    assert report.other_bytes_count == 0
    assert snapshot(nights) == rows
    assert lake_bytes(nights) == files
    assert report.row_counts == {name: len(found) for name, found in rows.items()}
    verified = verify(nights)
    assert (verified.damages, verified.notes) == ((), ())
    assert run_pass(nights, lambda: LATER + timedelta(days=1)).nothing_new
    assert snapshot(nights) == rows


def test_a_warehouse_alone_comes_back_from_the_lake_and_superseded_results_stay_so(nights: Site) -> None:
    rows = snapshot(nights)
    revisions = [(row[6], row[9] is None) for row in rows["analyses"]]
    assert sorted(revisions) == [(1, False), (1, True), (1, True), (2, True)]
    nights.loader_file.write_bytes(b"nothing that a database would open" * 100)
    report = rebuild(nights, LATER)
    assert (report.recomputed_count, report.file_count) == (0, 0)
    assert snapshot(nights) == rows
    assert verify(nights).damages == ()


def test_single_lost_and_damaged_files_are_computed_again_and_the_rest_is_left_alone(nights: Site) -> None:
    rows, files = snapshot(nights), lake_bytes(nights)
    *_, revision = (batch for batch in recorded_batches(nights) if "analyses" in batch.body)
    wells = nights.lake / "wells" / f"{revision.batch_id}.parquet"
    wells.chmod(0o644)
    wells.write_bytes(wells.read_bytes()[:-1] + b"?")
    (nights.root / str(revision.rows("gate_runs")[0]["file"])).unlink()
    untouched = nights.lake / "fits" / f"{revision.batch_id}.parquet"
    before = untouched.stat().st_mtime_ns
    report = rebuild(nights, LATER)
    assert (report.recomputed_count, report.file_count, report.failures) == (1, 1, ())
    assert snapshot(nights) == rows
    assert lake_bytes(nights) == files
    assert untouched.stat().st_mtime_ns == before


def test_the_same_rows_in_other_bytes_are_taken_and_recorded(
    nights: Site, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Another release of the Parquet library writes other bytes: here, without dictionaries."""
    rows = snapshot(nights, but=("lake_files",))
    lost = lose(nights, "lot_values") + lose(nights, "passes")
    written = lake.pq.write_table
    monkeypatch.setattr(
        lake.pq, "write_table", lambda *given, **more: written(*given, **{**more, "use_dictionary": False})
    )
    report = rebuild(nights, LATER)
    monkeypatch.undo()
    # The sources of lot values are computed with them, and are left as they are.
    assert report.file_count == report.other_bytes_count == len(lost)
    assert snapshot(nights, but=("lake_files",)) == rows
    assert [entry.kind for entry in ledger.entries(nights)].count("lake_rebuilt") == report.recomputed_count
    assert verify(nights).damages == ()
    again = rebuild(nights, LATER)
    assert (again.recomputed_count, again.failures) == (0, ())


def test_rows_that_are_not_those_stored_are_refused_by_table_and_column(
    nights: Site, monkeypatch: pytest.MonkeyPatch
) -> None:
    rows, files = snapshot(nights), lake_bytes(nights)
    (_, *lost) = lose(nights, "lot_values")
    combined = recompute.lot_values

    def otherwise(*given: object) -> tuple[pd.DataFrame, pd.DataFrame]:
        values, sources = combined(*given)  # type: ignore[arg-type]
        return values.assign(value=values["value"] * (1 + 1e-15)), sources

    monkeypatch.setattr(recompute, "lot_values", otherwise)
    before = nights.loader_file.read_bytes()
    report = rebuild(nights, LATER)
    assert len(report.failures) == len(lost) + 1
    assert "lot_values: value come out otherwise than stored" in report.failures[0].reason
    assert f"{nights.ledger_file}, line " in report.failures[0].where
    assert report.row_counts == {}
    assert nights.loader_file.read_bytes() == before
    assert set(lake_bytes(nights)) == {name for name in files if "lot_values/" not in name}
    monkeypatch.undo()
    assert rebuild(nights, LATER).failures == ()
    assert snapshot(nights) == rows
    assert lake_bytes(nights) == files


def test_a_lost_export_and_code_that_cannot_follow_are_named(
    nights: Site, monkeypatch: pytest.MonkeyPatch
) -> None:
    def cannot(_works: object) -> object:
        raise KeyError("a limit that the recipe lacks")

    lose(nights, "readings")
    lose(nights, "series")
    torn = next(batch for batch in recorded_batches(nights) if "files" in batch.body)
    export = next(row for row in torn.rows("files") if row["kind"] == "export")
    raw_path(nights, str(export["file_id"])).unlink()
    monkeypatch.setattr(recompute, "analysed", cannot)
    with pytest.raises(KeyError):
        rebuild(nights, LATER)
    monkeypatch.setattr(rebuilding, "code_version", lambda: "9.9+other")
    report = rebuild(nights, LATER)
    reasons = [failure.reason for failure in report.failures]
    assert f"the raw file {str(export['file_id'])[:12]} is missing" in reasons[0]
    assert any("a limit that the recipe lacks" in reason for reason in reasons)
    assert any("it was made by halfsat" in reason and "9.9+other" in reason for reason in reasons)


def test_a_new_column_that_must_be_known_is_filled_by_computing_again(
    nights: Site, monkeypatch: pytest.MonkeyPatch
) -> None:
    rows = snapshot(nights, but=("lake_files", "schema_version"))
    combined = recompute.lot_values
    monkeypatch.setattr(
        recompute,
        "lot_values",
        lambda *given: tuple(
            part.assign(month_count=3) if "value" in part else part for part in combined(*given)
        ),
    )
    now = LOT_VALUES.columns
    object.__setattr__(LOT_VALUES, "columns", (*now, Column("month_count", "integer", "Invented")))
    try:
        report = rebuild(nights, LATER)
        assert report.failures == ()
        after = snapshot(nights, but=("lake_files", "schema_version"))
        assert [row[:-1] for row in after["lot_values"]] == rows["lot_values"]
        assert {row[-1] for row in after["lot_values"]} == {3}
        assert {**after, "lot_values": []} == {**rows, "lot_values": []}
        assert verify(nights).damages == ()
    finally:
        object.__setattr__(LOT_VALUES, "columns", now)


def test_a_broken_ledger_and_a_running_pass_stop_a_rebuild(nights: Site) -> None:
    with rebuilding.pass_lock(nights), pytest.raises(SiteError, match="another pass is running"):
        rebuild(nights, LATER)
    before = nights.loader_file.read_bytes()
    content = nights.ledger_file.read_bytes()
    nights.ledger_file.write_bytes(content.replace(b'"plate_map"', b'"plate_mop"', 1))
    with pytest.raises(LedgerError, match="edited after it was written"):
        rebuild(nights, LATER)
    assert nights.loader_file.read_bytes() == before


def test_what_an_older_ledger_does_not_say_is_named(nights: Site) -> None:
    batches = {
        next(iter(batch.body.keys() & {"analyses", "files", "passes", "lots"})): batch
        for batch in recorded_batches(nights)
    }
    site, known = nights, recompute.Known()
    for batch in batches.values():
        known.learn(batch)
    reader = rebuilding.RawReader(site)
    for key, lacking, says in (
        ("analyses", "revision", "does not say which revision"),
        ("files", "profile_id", "which version of its profile read"),
        ("passes", "code_version", "does not say code_version of its passes"),
        ("lots", "lot", "which lots its values are of"),
    ):
        batch = batches[key]
        rows = [{k: v for k, v in row.items() if k != lacking} for row in batch.rows(key)]
        older = replace(batch, body={**batch.body, key: [] if key == "lots" else rows})
        with pytest.raises(LedgerError, match=says):
            recompute.recompute(site, reader, known, older, Site(site.root / "x"), lambda *_: None)
