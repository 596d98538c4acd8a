"""What the commands print and how they end, on the demo's night and on sites made for the purpose."""

from __future__ import annotations

import json
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from flows.cli.root import EXIT_ATTENTION, EXIT_FAILED, EXIT_WRONG_USE, tree
from flows.overnight.report import PassReport
from flows.site.layout import Site

Night = tuple[Site, PassReport]


def call(*words: str | Path) -> Result:
    return CliRunner().invoke(tree, [str(word) for word in words])


def typed(*words: str | Path) -> subprocess.CompletedProcess[str]:
    """The command as a user types it, in a process of its own."""
    code = "from flows.cli import main; main()"
    return subprocess.run(
        [sys.executable, "-c", code, *(str(word) for word in words)],
        capture_output=True,
        text=True,
        check=False,
    )


def assert_holds_at_80_columns(text: str, but: Sequence[str] = ()) -> None:
    wide = [line for line in text.splitlines() if len(line) > 80 and not any(word in line for word in but)]
    assert wide == []


def test_a_new_site_checks_out_and_says_what_to_type_next(tmp_path: Path) -> None:
    made = call("site", "new", tmp_path / "site")
    assert made.exit_code == 0, made.output
    assert "halfsat site check" in made.output
    checked = call("site", "check", "--site", tmp_path / "site")
    assert checked.exit_code == 0, checked.output
    for name in ("long", "wide", "wells_by_rows", "grids", "lactate_dehydrogenase_340"):
        assert name in checked.output
    again = typed("site", "new", tmp_path / "site")
    assert again.returncode == EXIT_FAILED
    assert "already" in again.stderr
    assert "Traceback" not in again.stderr


@pytest.mark.parametrize(
    ("file", "line", "named"),
    [
        ("site.toml", "plates_per_bach = 3\n", ("site.toml", "plates_per_bach", "plates_per_batch")),
        ("gates.toml", "[blank_drfit]\nlimit = 0.2\n", ("gates.toml", "blank_drfit", "blank_drift")),
        ("gates.toml", "nonsense = = 1\n", ("gates.toml", "line")),
    ],
)
def test_check_names_file_key_and_remedy(tmp_path: Path, file: str, line: str, named: Sequence[str]) -> None:
    call("site", "new", tmp_path / "site")
    path = tmp_path / "site" / "config" / file
    path.write_text(line + path.read_text())
    done = typed("site", "check", "--site", tmp_path / "site")
    assert done.returncode == EXIT_FAILED
    assert "Traceback" not in done.stderr
    for word in named:
        assert word in done.stderr


def test_try_profile_shows_what_a_profile_makes_of_a_file(demo_night: Night) -> None:
    site = demo_night[0]
    done = call("site", "try-profile", site.inbox / "cold_SW104412.tsv", "--site", site.root)
    assert done.exit_code == 0, done.output
    for word in ("cold_room", "SW104412", "utf-16", "96 of 96", "61 over 600 s", "Nothing to mend"):
        assert word in done.output
    assert_holds_at_80_columns(done.output)
    torn = call(
        "site", "try-profile", site.inbox / "tower_0033.csv", "--profile", "tower", "--site", site.root
    )
    assert torn.exit_code == EXIT_ATTENTION
    assert "To mend" in torn.output


def test_schemas_are_written_for_editors(tmp_path: Path) -> None:
    done = call("site", "schemas", tmp_path)
    assert done.exit_code == 0
    written = {path.name: json.loads(path.read_text()) for path in tmp_path.iterdir()}
    assert "signal" in written["assay.schema.json"]["properties"]
    assert len(written) >= 3


def test_a_pass_with_nothing_new_says_so(demo_night: Night) -> None:
    done = call("overnight", "--site", demo_night[0].root)
    assert done.exit_code == 0, done.output
    assert "Nothing new" in done.output
    assert_holds_at_80_columns(done.output)


def test_history_answers_in_every_format(demo_night: Night, tmp_path: Path) -> None:
    site = demo_night[0].root
    question = "select lot, constant, value from lot_latest order by all limit 5"
    assert_holds_at_80_columns(call("history", "--site", site, "select * from lot_latest").output)
    assert "AP-2601" in call("history", "--site", site, question).output
    assert call("history", "--site", site, question, "--format", "csv").output.count("\n") == 6
    assert len(json.loads(call("history", "--site", site, question, "--format", "json").output)) == 5
    for name in ("parquet", "xlsx"):
        target = tmp_path / f"answer.{name}"
        done = call("history", "--site", site, question, "--format", name, "--output", target)
        assert done.exit_code == 0, done.output
        assert target.stat().st_size > 100
        assert call("history", "--site", site, question, "--format", name).exit_code == EXIT_WRONG_USE


def test_history_refuses_what_is_no_question(demo_night: Night) -> None:
    for sql in ("drop table wells", "select lott from lot_latest", "copy lots to 'x.csv'"):
        done = typed("history", "--site", demo_night[0].root, sql)
        assert done.returncode == EXIT_FAILED
        assert "Traceback" not in done.stderr
        assert done.stderr.startswith("halfsat: ")


def test_lineage_leads_from_a_lot_value_to_unchanged_bytes(demo_night: Night) -> None:
    site = demo_night[0].root
    sql = "select lot_value_id from lot_latest where lot = 'AP-2602' and constant = 'kcat'"
    answer = call("history", "--site", site, sql, "--format", "csv").output
    done = call("lineage", "--site", site, answer.split()[-1].strip('"'))
    assert done.exit_code == 0, done.output
    for word in (
        "kcat",
        "AP-2602",
        "estimate",
        "fit",
        "series",
        "recipe",
        "export",
        "SHA-256",
        "bytes unchanged",
    ):
        assert word in done.output
    assert "changed since" not in done.output
    assert_holds_at_80_columns(done.output)
    assert typed("lineage", "--site", site, "ffffffffffff").returncode == EXIT_FAILED


def test_wrong_use_is_told_apart_from_failure(tmp_path: Path) -> None:
    assert typed("overnight", "--no-such-option").returncode == EXIT_WRONG_USE
    assert typed("no-such-command").returncode == EXIT_WRONG_USE
    missing = typed("overnight", "--site", tmp_path / "nowhere")
    assert missing.returncode == EXIT_FAILED
    assert "halfsat site new" in missing.stderr


def test_strict_tells_by_its_exit_code_that_something_needs_a_person(tmp_path: Path) -> None:
    call("site", "new", tmp_path / "site")
    (tmp_path / "site" / "inbox" / "noise.bin").write_bytes(b"\x00\x01\x02" * 500)
    done = call("overnight", "--strict", "--site", tmp_path / "site")
    assert done.exit_code == EXIT_ATTENTION, done.output
    assert "In quarantine" in done.output
    assert "noise.bin" in done.output


def test_the_demo_runs_again_in_its_own_folder_and_nowhere_else(demo_night: Night, tmp_path: Path) -> None:
    again = call("demo", demo_night[0].root)
    assert again.exit_code == 0, again.output
    assert "Nothing new" in again.output
    assert "AP-2602" in again.output
    assert "Next, in the same folder" in again.output
    assert_holds_at_80_columns(again.output, but=["halfsat history", "halfsat lineage", "halfsat overnight"])
    (tmp_path / "letter.txt").write_text("not a site")
    assert typed("demo", tmp_path).returncode == EXIT_FAILED


def test_the_shipped_profiles_and_assays_work_together(tmp_path: Path) -> None:
    """An export that names no channel has the only one, whatever its assay would choose among several."""
    call("site", "new", tmp_path / "site")
    examples = Path(__file__).resolve().parents[3] / "fixtures" / "exports"
    for path in examples.iterdir():
        (tmp_path / "site" / "inbox" / path.name).write_bytes(path.read_bytes())
    done = call("overnight", "--site", tmp_path / "site")
    assert done.exit_code == 0, done.output
    assert "no channel" not in done.output
    assert "In quarantine" not in done.output
