"""The writer: whole batches or nothing, revisions that supersede, copies swapped under open readers."""

import hashlib
import os
import subprocess
import sys
import threading
from datetime import UTC, datetime, timedelta
from pathlib import Path

import duckdb
import pandas as pd
import pyarrow as pa
import pytest

from flows.site.layout import create_site
from flows.warehouse import writer
from flows.warehouse.bookkeeping import STORED
from flows.warehouse.reader import open_published
from models.errors import SiteError
from models.tables import FILES, PASSES, TABLES
from tests.flows.tiny_site import (
    FIRST_NIGHT,
    analysed_tables,
    config_source,
    empty_site,
    rows,
    tiny_recipe,
    tiny_site,
)

ROOT = Path(__file__).resolve().parents[3]


@pytest.fixture
def site(tmp_path):
    return empty_site(tmp_path)


def a_file(number: int, **changed: object) -> dict[str, object]:
    return {
        "file_id": f"{number:064x}",
        "kind": "export",
        "file_name": f"n{number}.csv",
        "byte_count": number,
        "received_at": FIRST_NIGHT,
        "pass_id": "p1",
        **changed,
    }


def a_pass(**changed: object) -> dict[str, object]:
    counts = ("export_count", "map_count", "quarantined_count", "analysis_count")
    times = {"started_at": FIRST_NIGHT, "finished_at": FIRST_NIGHT}
    return {"pass_id": "p1", "code_version": "0", **times, **dict.fromkeys(counts, 0), **changed}


def ask(site, sql: str) -> list[tuple[object, ...]]:
    with writer.loader(site) as connection:
        return connection.execute(sql).fetchall()


def snapshot(site) -> dict[str, list[tuple[object, ...]]]:
    with writer.loader(site) as connection:
        return {each.name: connection.execute(f"FROM {each.name} ORDER BY ALL").fetchall() for each in STORED}


def test_loading_the_same_rows_again_changes_nothing(tmp_path):
    made = tiny_site(tmp_path)
    before = snapshot(made.site)
    again = analysed_tables(made, "TP-2", "pass-2", FIRST_NIGHT + timedelta(days=7, hours=8))
    assert writer.load(made.site, again) is True
    assert snapshot(made.site) == before
    assert all(before[each.name] for each in TABLES if each.stored_in != "lake")


def test_a_batch_is_loaded_once(site):
    batch = writer.Batch("b1", 1, FIRST_NIGHT)
    assert writer.load(site, {"files": rows(FILES, [a_file(1)])}, batch) is True
    assert writer.load(site, {"files": rows(FILES, [a_file(2)])}, batch) is False
    assert ask(site, "SELECT file_name FROM files") == [("n1.csv",)]


def test_rows_that_may_change_change_and_no_others(site):
    writer.load(
        site,
        {
            "passes": rows(PASSES, [a_pass()]),
            "files": rows(FILES, [a_file(1, kind="quarantined", reason="torn"), a_file(2)]),
        },
    )
    later = {"kind": "export", "reason": None, "profile": "wide", "file_name": "other.csv", "pass_id": "p2"}
    writer.load(
        site,
        {
            "passes": rows(PASSES, [a_pass(export_count=7)]),
            "files": rows(FILES, [a_file(1, **later)]),
        },
    )
    assert ask(site, "SELECT export_count FROM passes") == [(7,)]
    found = ask(site, "SELECT kind, reason, profile, file_name, pass_id FROM files ORDER BY file_id")
    assert found == [("export", None, "wide", "n1.csv", "p1"), ("export", None, None, "n2.csv", "p1")]


def test_a_later_analysis_supersedes_and_an_earlier_one_can_come_back(tmp_path):
    made = tiny_site(tmp_path)
    first = made.analysis_ids["TP-1"]
    at = FIRST_NIGHT + timedelta(days=30)
    revised = analysed_tables(made, "TP-1", "pass-3", at, revision=2, recipe=tiny_recipe(0.2))
    second = made.analysis_ids["TP-1"]
    assert second != first
    writer.load(made.site, revised)
    current = "SELECT analysis_id FROM analyses WHERE superseded_by IS NULL AND plate_read_id = '{}'"
    current = current.format(made.plate_read_ids["TP-1"])
    assert ask(made.site, current) == [(second,)]
    assert ask(made.site, f"SELECT superseded_by FROM analyses WHERE analysis_id = '{first}'") == [(second,)]
    seen = (
        "SELECT count(*) FILTER (analysis_id = '{}'), count(*) FROM current_estimates WHERE plate_id = 'TP-1'"
    )
    assert ask(made.site, seen.format(second)) == [(8, 8)]
    third = analysed_tables(made, "TP-1", "pass-4", at, revision=3)
    writer.load(made.site, third)
    assert ask(made.site, current) == [(first,)]
    assert ask(made.site, f"SELECT superseded_by FROM analyses WHERE analysis_id = '{second}'") == [(first,)]
    assert ask(made.site, "SELECT count(*) FROM estimates") == [(48,)]


def test_a_lot_value_on_superseded_estimates_leaves_the_views(tmp_path):
    made = tiny_site(tmp_path)
    count = "SELECT (SELECT count(*) FROM lot_history), (SELECT count(*) FROM lot_latest)"
    assert ask(made.site, count) == [(4, 2)]
    at = FIRST_NIGHT + timedelta(days=30)
    writer.load(made.site, analysed_tables(made, "TP-2", "p3", at, revision=2, recipe=tiny_recipe(0.2)))
    assert ask(made.site, count) == [(2, 2)]
    assert ask(made.site, "SELECT DISTINCT value, plate_read_count FROM lot_latest") == [(50.0, 1)]


@pytest.mark.parametrize(
    ("spoilt", "error", "says"),
    [
        ({"files": rows(FILES, [a_file(2), a_file(2)])}, ValueError, "two rows of files"),
        ({"files": rows(FILES, [a_file(2, received_at=None)])}, pa.ArrowInvalid, "must be known"),
        ({"nights": pd.DataFrame()}, ValueError, "no table nights"),
    ],
)
def test_a_batch_with_one_bad_row_leaves_no_trace(site, spoilt, error, says):
    writer.load(site, {"files": rows(FILES, [a_file(1)])})
    before = snapshot(site)
    with pytest.raises(error, match=says):
        writer.load(site, {"passes": rows(PASSES, [a_pass()]), **spoilt}, writer.Batch("b", 1, FIRST_NIGHT))
    assert snapshot(site) == before


def test_a_transaction_that_fails_half_way_leaves_no_trace(site, monkeypatch):
    monkeypatch.setattr(writer, "_record", lambda *_: (_ for _ in ()).throw(RuntimeError("power")))
    with pytest.raises(RuntimeError, match="power"):
        writer.load(site, {"files": rows(FILES, [a_file(1)])}, writer.Batch("b", 1, FIRST_NIGHT))
    assert ask(site, "SELECT count(*) FROM files") == [(0,)]


def test_a_killed_load_leaves_no_trace(site):
    script = (
        "import os, sys; from pathlib import Path; from flows.site.layout import open_site\n"
        "from flows.warehouse import writer; from tests.flows.warehouse.test_warehouse_writer import *\n"
        "writer._record = lambda *_: os.kill(os.getpid(), 9)\n"
        "batch = writer.Batch('b', 1, FIRST_NIGHT)\n"
        "many = rows(FILES, [a_file(n) for n in range(999)])\n"
        "writer.load(open_site(Path(sys.argv[1])), {'files': many}, batch)\n"
    )
    writer.load(site, {"files": rows(FILES, [a_file(5000)])})
    done = subprocess.run(
        [sys.executable, "-c", script, str(site.root)],
        cwd=ROOT,
        check=False,
        env={**os.environ, "PYTHONPATH": "."},
    )
    assert done.returncode == -9
    assert ask(site, "SELECT count(*) FROM files") == [(1,)]
    assert ask(site, "SELECT count(*) FROM loads") == [(0,)]


def test_a_warehouse_of_another_version_or_in_use_or_damaged_is_refused(site):
    with writer.loader(site) as connection:
        connection.execute("UPDATE schema_version SET schema_version = 99")
    with pytest.raises(SiteError, match=r"a newer halfsat \(its tables are version 99"):
        ask(site, "SELECT 1")
    site.loader_file.unlink()
    script = (
        "import duckdb, sys, time\n"
        "held = duckdb.connect(sys.argv[1]); print('held', flush=True); time.sleep(60)\n"
    )
    holder = subprocess.Popen(
        [sys.executable, "-c", script, str(site.loader_file)], stdout=subprocess.PIPE, text=True
    )
    try:
        assert holder.stdout is not None
        assert holder.stdout.readline() == "held\n"
        with pytest.raises(SiteError, match="being written by another process"):
            ask(site, "SELECT 1")
    finally:
        holder.kill()
        holder.wait()
        holder.stdout.close()
    site.loader_file.write_bytes(b"no database" * 1000)
    with pytest.raises(writer.DamagedWarehouse, match="damaged"):
        ask(site, "SELECT 1")


def test_publishing_swaps_a_whole_copy(site):
    with pytest.raises(SiteError, match="no published results yet"):
        open_published(site)
    first = writer.publish(site)
    assert (first.version, first.path.name) == (1, "published-00000001.duckdb")
    assert first.sha256 == hashlib.sha256(first.path.read_bytes()).hexdigest()
    assert site.published_link.readlink() == Path(first.path.name)
    assert writer.publish(site) == first
    with open_published(site) as old:
        writer.load(site, {"files": rows(FILES, [a_file(1)])})
        second = writer.publish(site)
        assert second.version == 2
        with open_published(site) as new:
            assert old.execute("SELECT count(*) FROM files").fetchone() == (0,)
            assert new.execute("SELECT count(*) FROM files").fetchone() == (1,)
            with pytest.raises(duckdb.Error, match="read-only"):
                new.execute("DELETE FROM files")


def test_a_few_old_copies_stay_and_open_readers_keep_theirs(site):
    writer.publish(site)
    with open_published(site) as old:
        for number in range(1, 6):
            writer.load(site, {"files": rows(FILES, [a_file(number)])})
            writer.publish(site, keep=2)
        kept = sorted(path.name for path in site.warehouse.glob("published-*"))
        assert kept == ["published-00000005.duckdb", "published-00000006.duckdb"]
        assert old.execute("SELECT count(*) FROM files").fetchone() == (0,)


def test_a_leftover_of_a_killed_publication_is_harmless(site):
    writer.publish(site)
    (site.warehouse / ".published-00000002.duckdb.abc.part").write_bytes(b"half")
    (site.warehouse / "published-00000002.duckdb").write_bytes(b"whole, but not yet pointed at")
    (site.warehouse / ".published.duckdb.part").symlink_to("nowhere")
    writer.load(site, {"files": rows(FILES, [a_file(1)])})
    published = writer.publish(site)
    assert published.version == 3
    with open_published(site) as connection:
        assert connection.execute("SELECT count(*) FROM files").fetchone() == (1,)


def test_readers_never_see_a_mixed_state_while_copies_are_swapped(site):
    """Each load adds a file and a pass; a reader must always count as many of one as of the other."""
    writer.publish(site)
    stop, errors, seen = threading.Event(), [], set()

    def read() -> None:
        while not stop.is_set():
            try:
                with open_published(site) as connection:
                    counts = connection.execute(
                        "SELECT (SELECT count(*) FROM files), (SELECT count(*) FROM passes)"
                    ).fetchone()
                assert counts is not None
                assert counts[0] == counts[1]
                seen.add(counts[0])
            except Exception as error:
                errors.append(error)

    readers = [threading.Thread(target=read) for _ in range(3)]
    for reader in readers:
        reader.start()
    for number in range(12):
        tables = {
            "files": rows(FILES, [a_file(number)]),
            "passes": rows(PASSES, [a_pass(pass_id=f"p{number}")]),
        }
        writer.load(site, tables)
        writer.publish(site)
    stop.set()
    for reader in readers:
        reader.join()
    assert errors == []
    assert len(seen) > 2


def test_the_published_copy_moves_with_the_site(tmp_path):
    made = tiny_site(tmp_path / "here")
    (tmp_path / "there").mkdir()
    moved = made.site.root.rename(tmp_path / "there" / "site")
    site = create_site(tmp_path / "other", config_source(tmp_path / "source"))
    site = type(site)(moved)
    with open_published(site) as connection:
        assert connection.execute("SELECT count(*) FROM lot_latest").fetchone() == (2,)
    now = datetime(2026, 4, 1, tzinfo=UTC)
    assert writer.load(site, {"passes": rows(PASSES, [a_pass(pass_id="p9", started_at=now)])})
    writer.publish(site)
    with open_published(site) as connection:
        assert connection.execute("SELECT count(*) FROM reading").fetchone() == (90,)
