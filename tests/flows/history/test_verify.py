"""Verify: one flipped bit anywhere is found and named; what a pass left in the open is no damage."""

from __future__ import annotations

import random
import subprocess
import sys
from pathlib import Path

import duckdb
import pytest

from flows.history.verify import VerifyReport, verify
from flows.site.layout import Site
from flows.stages.load import load_results
from flows.warehouse import writer
from models.tables import PASSES
from tests.flows.conftest import REVISED
from tests.flows.tiny_site import rows

FLIPS = 60
SEED = 20261104


def places(report: VerifyReport) -> set[str]:
    return {damage.place for damage in report.damages}


def kept_files(site: Site) -> list[Path]:
    """Every file that the site rests on."""
    folders = (site.raw, site.lake, site.recipes, site.warehouse, site.ledger)
    return sorted(
        path for folder in folders for path in folder.rglob("*") if path.is_file() and not path.is_symlink()
    )


def test_a_whole_site_is_whole_and_every_kind_of_thing_was_looked_at(kept_nights: Site) -> None:
    told: set[str] = set()
    before = {path: path.stat().st_mtime_ns for path in kept_nights.root.rglob("*")}
    report = verify(kept_nights, lambda name, done, total: told.add(name))
    assert (report.damages, report.notes) == ((), ())
    counts = {each.name: each.count for each in report.checked}
    assert min(counts.values()) >= 1
    assert told == set(counts) - {"ledger entries"}
    files = [path.relative_to(kept_nights.root).parts for path in kept_files(kept_nights)]
    assert counts["raw files"] == sum(parts[0] == "raw" for parts in files)
    assert counts["lake files"] == sum(parts[-1].endswith(".parquet") for parts in files)
    assert counts["gate documents"] == sum("gate_documents" in parts for parts in files)
    assert counts["recipes"] + counts["profiles"] == sum(
        parts[:2] == ("config", "recipes") for parts in files
    )
    assert counts["published copies"] == sum(parts[-1].startswith("published-") for parts in files)
    lines = kept_nights.ledger_file.read_bytes().count(b"\n")
    assert counts["ledger entries"] == lines
    assert {path: path.stat().st_mtime_ns for path in kept_nights.root.rglob("*")} == before


def test_a_flipped_bit_anywhere_is_found_and_its_file_named(nights: Site) -> None:
    chosen = random.Random(SEED)
    files = kept_files(nights)
    by_folder: dict[str, list[Path]] = {}
    for path in files:
        below = path.relative_to(nights.root)
        by_folder.setdefault("/".join(below.parts[:2]) if below.parts[0] != "raw" else "raw", []).append(path)
    kinds = sorted(by_folder)
    for flip in range(FLIPS):
        path = chosen.choice(by_folder[kinds[flip % len(kinds)]])
        content = path.read_bytes()
        place = chosen.randrange(len(content))
        spoilt = bytearray(content)
        spoilt[place] ^= 1 << chosen.randrange(8)
        path.chmod(0o644)
        path.write_bytes(bytes(spoilt))
        name = path.relative_to(nights.root).as_posix()
        found = {each.partition(",")[0] for each in places(verify(nights))}
        assert name in found, (name, place)
        path.write_bytes(content)
    assert verify(nights).damages == ()


def test_every_lost_file_is_named_with_a_remedy(nights: Site) -> None:
    lost = [
        path
        for path in kept_files(nights)
        if path not in (nights.ledger_file, nights.published_link.resolve())
    ]
    older = [path for path in lost if path.name.startswith("published-")]
    for path in lost:
        path.unlink()
    report = verify(nights)
    assert places(report) == {path.relative_to(nights.root).as_posix() for path in lost if path not in older}
    for damage in report.damages:
        expected = "halfsat rebuild" if damage.place.startswith(("lake", "warehouse")) else "backup"
        assert expected in damage.remedy
    nights.published_link.resolve().unlink()
    assert f"warehouse/{nights.published_link.readlink()}" in places(verify(nights))
    nights.published_link.unlink()
    assert "warehouse/published.duckdb" in places(verify(nights))
    nights.ledger_file.unlink()
    assert "ledger/ledger.jsonl" in places(verify(nights))


def test_a_cut_off_ledger_is_found_by_what_it_no_longer_names(nights: Site) -> None:
    whole = nights.ledger_file.read_bytes().splitlines(keepends=True)
    nights.ledger_file.write_bytes(b"".join(whole[:-1]))
    report = verify(nights)
    assert "the ledger does not name it" in {damage.what for damage in report.damages}
    nights.ledger_file.write_bytes(b"".join(whole[:-6]))
    assert any("end of the ledger is lost" in damage.what for damage in verify(nights).damages)
    nights.ledger_file.write_bytes(b"".join(whole[:-1]) + whole[-1][:40])
    report = verify(nights)
    assert any("the last line is incomplete" in damage.what for damage in report.damages)
    assert "was not checked" in report.notes[0]


def test_what_a_killed_pass_loaded_and_did_not_publish_is_no_damage(nights: Site) -> None:
    a_pass = {
        **dict.fromkeys(("export_count", "map_count", "quarantined_count", "analysis_count"), 0),
        "pass_id": "killed",
        "started_at": REVISED,
        "finished_at": REVISED,
        "code_version": "0",
    }
    load_results(nights, "killed", {"passes": rows(PASSES, [a_pass])}, REVISED)
    report = verify(nights)
    assert (report.damages, report.notes) == ((), ())
    with writer.loader(nights) as connection:
        connection.execute("UPDATE estimates SET value = value + 1 WHERE wells = 'clear'")
        connection.execute("DELETE FROM passes WHERE pass_id = 'killed'")
    report = verify(nights)
    assert sorted(damage.what for damage in report.damages) == [
        "its rows of estimates are not those of the lake",
        "its rows of passes are not those of the lake",
    ]
    with writer.loader(nights) as connection:
        last = connection.execute("SELECT arg_max(batch_id, ledger_seq) FROM loads").fetchone()
        assert last is not None
        connection.execute("DELETE FROM loads WHERE batch_id = ?", [last[0]])
        connection.execute("CHECKPOINT")
    assert [each.what for each in verify(nights).damages] == [
        "its bytes are not those that were published, though nothing was loaded since"
    ]


def test_a_warehouse_that_is_being_written_is_left_to_later(nights: Site) -> None:
    with duckdb.connect(str(nights.loader_file)) as connection:
        connection.execute("CREATE TABLE more AS SELECT 1")
    script = (
        "import duckdb, sys, time\n"
        "held = duckdb.connect(sys.argv[1]); print('held', flush=True); time.sleep(60)\n"
    )
    holder = subprocess.Popen(
        [sys.executable, "-c", script, str(nights.loader_file)], stdout=subprocess.PIPE, text=True
    )
    try:
        assert holder.stdout is not None
        assert holder.stdout.readline() == "held\n"
        report = verify(nights)
        assert report.damages == ()
        assert report.notes == ("A pass is writing the warehouse: the loader's database was not checked.",)
    finally:
        holder.kill()
        holder.wait()
        holder.stdout.close()


@pytest.mark.parametrize("kind", ["recipes", "profiles", "gate documents"])
def test_what_is_kept_by_its_hash_is_held_against_it(nights: Site, kind: str) -> None:
    folder = {
        "recipes": nights.recipes,
        "profiles": nights.recipes / "profiles",
        "gate documents": nights.gate_documents,
    }[kind]
    path = next(path for path in sorted(folder.iterdir()) if path.is_file())
    path.chmod(0o644)
    path.write_bytes(path.read_bytes().replace(b":", b": ", 1))
    (checked,) = (each for each in verify(nights).checked if each.name == kind)
    (damage,) = checked.damages
    assert damage.place == path.relative_to(nights.root).as_posix()
    assert damage.what == "its bytes are not those that were written"
