"""What verify, replay and rebuild print and how they end."""

from __future__ import annotations

import csv
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path

import duckdb
import pytest
from click.testing import CliRunner, Result

from flows.cli.root import EXIT_FAILED, EXIT_WRONG_USE, tree
from flows.history import replay as replaying
from flows.site.layout import Site
from flows.warehouse.reader import open_published
from tests.flows.conftest import PLATES


def call(*words: str | Path) -> Result:
    return CliRunner().invoke(tree, [str(word) for word in words])


def assert_holds_at_80_columns(text: str, but: Sequence[str] = ()) -> None:
    wide = [line for line in text.splitlines() if len(line) > 80 and not any(word in line for word in but)]
    assert wide == []


def an_estimate(site: Site) -> str:
    with open_published(site) as connection:
        row = connection.execute(
            f"SELECT estimate_id FROM current_estimates WHERE plate_id = '{PLATES[2]}' ORDER BY 1 LIMIT 1"
        ).fetchone()
    assert row is not None
    return str(row[0])


@pytest.mark.parametrize("name", ["verify", "replay", "rebuild"])
def test_help_computes_nothing_and_imports_nothing_that_does(name: str) -> None:
    code = (
        f"import sys; sys.argv = ['halfsat', '{name}', '--help']\n"
        "from flows.cli import main\n"
        "try: main()\n"
        "except SystemExit as done: assert done.code in (0, None)\n"
        "heavy = {'pandas', 'scipy', 'duckdb', 'prefect', 'great_expectations', 'pyarrow', 'pydantic'}\n"
        "assert not heavy & set(sys.modules), heavy & set(sys.modules)\n"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
    assert "Exit code 3" in done.stdout
    assert_holds_at_80_columns(done.stdout)


def test_verify_counts_what_it_checked_and_names_what_is_damaged(nights: Site) -> None:
    whole = call("verify", "--site", nights.root)
    assert whole.exit_code == 0, whole.output
    assert "Everything is as it was written." in whole.output
    for kind in ("ledger entries", "raw files", "lake files", "recipes", "gate documents", "warehouse"):
        assert kind in whole.output
    raw = next(path for path in sorted(nights.raw.rglob("*")) if path.is_file())
    raw.unlink()
    wells = next((nights.lake / "wells").iterdir())
    wells.chmod(0o644)
    wells.write_bytes(wells.read_bytes() + b"\n")
    damaged = call("verify", "--site", nights.root)
    assert damaged.exit_code == EXIT_FAILED
    for path in (raw, wells):
        assert path.relative_to(nights.root).as_posix() in damaged.output.splitlines()
    assert "halfsat rebuild" in damaged.output
    assert "into the inbox again" in damaged.output.replace("\n ", "")
    assert "Everything" not in damaged.output
    assert_holds_at_80_columns(damaged.output)


@pytest.mark.parametrize("words", [(), ("abcdef", "--all")])
def test_replay_wants_one_id_or_all(kept_nights: Site, words: Sequence[str]) -> None:
    done = call("replay", "--site", kept_nights.root, *words)
    assert done.exit_code == EXIT_WRONG_USE
    assert "name one ID, or --all" in done.output


def test_replay_says_equal_or_what_differs(nights: Site, tmp_path: Path) -> None:
    estimate = an_estimate(nights)
    equal = call("replay", estimate, "--site", nights.root)
    assert equal.exit_code == 0, equal.output
    assert f"Replayed estimate {estimate[:12]}: 1 analysis, 1 equal; " in equal.output
    path = nights.published_link.resolve()
    path.chmod(0o644)
    with duckdb.connect(str(path)) as connection:
        value = connection.execute("SELECT value FROM estimates WHERE estimate_id = ?", [estimate]).fetchall()
        connection.execute("UPDATE estimates SET value = 42.5 WHERE estimate_id = ?", [estimate])
        connection.execute("UPDATE wells SET standing = 'void' WHERE standing = 'clear'")
    target = tmp_path / "differences.csv"
    differs = call("replay", estimate, "--site", nights.root, "--output", target)
    assert differs.exit_code == EXIT_FAILED
    assert f"plate {PLATES[2]}, revision 1" in differs.output
    assert "1 not equal" in differs.output
    assert "more: --output FILE.csv writes them all" in differs.output
    assert_holds_at_80_columns(differs.output)
    with target.open(newline="") as file:
        lines = list(csv.DictReader(file))
    (of_value,) = (line for line in lines if line["table_name"] == "estimates")
    assert (of_value["column_name"], of_value["stored"]) == ("value", "42.5")
    assert float(of_value["recomputed"]) == value[0][0]
    assert {line["stored"] for line in lines if line["table_name"] == "wells"} == {"void"}


def test_replay_names_the_version_that_made_a_result(
    kept_nights: Site, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(replaying, "code_version", lambda: "9.9+other")
    refused = call("replay", "--all", "--site", kept_nights.root)
    assert refused.exit_code == EXIT_FAILED
    assert "9.9+other" in refused.output
    assert "--other-code" in refused.output
    assert "4 analyses, 0 equal, 4 not replayed" in refused.output
    monkeypatch.setattr(replaying, "_replayed", lambda *given: [each.outcome() for each in given[-1]])
    compared = call("replay", "--all", "--other-code", "--site", kept_nights.root)
    assert compared.exit_code == 0
    assert "replayed with 9.9+other: 4 analyses." in compared.output.replace("\n", " ")


def test_rebuild_says_what_it_made_and_what_it_could_not(nights: Site) -> None:
    nights.loader_file.unlink()
    done = call("rebuild", "--site", nights.root)
    assert done.exit_code == 0, done.output
    assert "Rebuilt and published" in done.output
    assert "estimates" in done.output
    assert call("verify", "--site", nights.root).exit_code == 0
    assert_holds_at_80_columns(done.output)
    exports = [path for path in nights.raw.rglob("*") if path.is_file()]
    for path in (*exports, *(nights.lake / "readings").iterdir()):
        path.unlink()
    failed = call("rebuild", "--site", nights.root)
    assert failed.exit_code == EXIT_FAILED
    assert "Could not be made again as it was" in failed.output
    assert "is missing" in failed.output
    assert "The warehouse is as it was." in " ".join(failed.output.split())


def test_a_broken_ledger_is_one_line_and_no_traceback(nights: Site) -> None:
    content = nights.ledger_file.read_bytes()
    nights.ledger_file.write_bytes(content.replace(b'"plate_map"', b'"plate_mop"', 1))
    code = "from flows.cli import main; main()"
    done = subprocess.run(
        [sys.executable, "-c", code, "rebuild", "--site", str(nights.root)],
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == EXIT_FAILED
    assert done.stderr.startswith("halfsat: ")
    assert "edited after it was written" in done.stderr
    assert "Traceback" not in done.stderr
