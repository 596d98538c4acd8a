"""`halfsat history` with named questions, as they are typed and printed."""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from flows.cli.root import EXIT_WRONG_USE, tree
from flows.history.questions import RESERVED, load_questions
from flows.overnight.report import PassReport
from flows.site.layout import Site
from models.errors import QueryError

Night = tuple[Site, PassReport]


def call(*words: str | Path) -> Result:
    return CliRunner().invoke(tree, ["history", *(str(word) for word in words)])


def test_a_named_question_takes_its_parameters_in_either_way(demo_night: Night) -> None:
    site = demo_night[0].root
    one = call("lot-trend", "--lot", "AP-2602", "--site", site, "--format", "csv", "--constant=km")
    assert one.exit_code == 0, one.output
    other = call("--site", site, "--format", "csv", "lot-trend", "--constant", "km", "--lot=AP-2602")
    assert other.output == one.output
    assert one.output.count("\n") == 4
    found = json.loads(call("slow-lots", "--site", site, "--format", "json", "--percent", "5").output)
    assert [row["lot"] for row in found] == ["AP-2602", "BG-0433"]
    earlier = call("repeats-by-shift", "--site", site, "--utc-offset-hours", "-5", "--format", "csv")
    assert earlier.exit_code == 0, earlier.output


@pytest.mark.parametrize(
    "words", [("lot-trend", "--lot", "AP-2601", "--constant", "km"), ("slow-lots",), ("gate-causes",)]
)
def test_answers_stand_side_by_side_at_80_columns(demo_night: Night, words: tuple[str, ...]) -> None:
    output = call(*words, "--site", demo_night[0].root).output
    assert max(len(line.rstrip()) for line in output.splitlines()) <= 80
    assert "row 1" not in output


def test_the_list_names_every_question_and_one_in_full(demo_night: Night) -> None:
    site = demo_night[0].root
    listed = call("--list", "--site", site).output
    for name, question in load_questions(None).items():
        assert f"{name} " in listed
        assert question.title in listed
    assert max(len(line) for line in listed.splitlines()) <= 80
    shown = call("--list", "lot-trend", "--site", site).output
    assert "--lot" in shown
    assert "not allowed" in shown
    assert "WHERE o.lot = $lot" in shown


def test_the_list_needs_no_site(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> None:
    monkeypatch.chdir(tmp_path)
    monkeypatch.delenv("HALFSAT_SITE", raising=False)
    assert "slow-lots" in call("--list").output
    named = CliRunner().invoke(tree, ["history", "--list", "--site", str(tmp_path / "none")])
    assert named.exit_code != 0


@pytest.mark.parametrize(
    ("words", "told"),
    [
        ((), "--list shows them"),
        (("lot-trend",), "needs --lot"),
        (("lot-trend", "--lot"), "--lot needs a value"),
        (("lot-trend", "AP-2602"), "belongs to no parameter"),
        (("lot-trend", "--lot", "a", "--lot", "b"), "stands twice"),
        (("slow-lots", "--percnt", "3"), "did you mean --percent?"),
        (("slow-lots", "--formt", "csv"), "has no parameter 'formt'"),
        (("select 1", "--lot", "3"), "SQL takes no parameters"),
        (("select", "1"), "there is no question 'select'"),
        (("--lot", "3"), "stands before its parameters"),
    ],
)
def test_wrong_use_is_told(demo_night: Night, words: tuple[str, ...], told: str) -> None:
    done = call(*words, "--site", demo_night[0].root)
    shown = done.output + str(done.exception)
    assert told in " ".join(shown.split())
    # A question that does not exist is the site's word, which the command line turns into exit code 3.
    assert done.exit_code == (1 if isinstance(done.exception, QueryError) else EXIT_WRONG_USE)


def test_options_of_the_command_are_no_names_of_parameters() -> None:
    command = tree.get_command(tree.make_context("halfsat", ["demo"]), "history")
    assert command is not None
    options = {option.lstrip("-") for parameter in command.params for option in parameter.opts}
    assert options - {"question", "given"} <= RESERVED
