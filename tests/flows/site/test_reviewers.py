"""Reviewers: who may sign in, what is refused, and that no secret is in the ledger or in a message."""

from __future__ import annotations

import stat
from dataclasses import replace
from datetime import UTC, datetime

import pytest
from click.testing import CliRunner
from hypothesis import given
from hypothesis import strategies as st

from flows import ledger
from flows.cli.root import tree
from flows.history.rebuild import rebuild
from flows.history.verify import verify
from flows.site import reviewers as accounts
from flows.site.reviewers import (
    ReviewerError,
    SignInRefused,
    add_reviewer,
    authenticate,
    check_password,
    disable_reviewer,
    reset_password,
    reviewers,
    reviewers_file,
)
from models.errors import HalfsatError, SiteError
from tests.flows.tiny_site import empty_site, tiny_site

NOW = datetime(2031, 5, 4, 6, 0, tzinfo=UTC)
PASSWORD, OTHER = "tide-lamp-orchid-7", "quiet copper ladder 9"


@pytest.fixture
def site(tmp_path):
    made = empty_site(tmp_path)
    add_reviewer(made, "ida.marsh", "Ida  Marsh", "reviewer", PASSWORD, NOW, actor="keeper")
    return made


def test_a_reviewer_signs_in_with_the_right_password_only(site):
    found = authenticate(site, "ida.marsh", PASSWORD)
    assert (found.full_name, found.role, found.disabled, found.added_at) == (
        "Ida Marsh",
        "reviewer",
        False,
        NOW,
    )
    add_reviewer(site, "gone", "Gone Away", "approver", OTHER, NOW)
    disable_reviewer(site, "gone", NOW)
    said = set()
    for name, password in [("ida.marsh", PASSWORD + "x"), ("nobody", PASSWORD), ("gone", OTHER), ("", "")]:
        with pytest.raises(SignInRefused) as refused:
            authenticate(site, name, password)
        said.add(str(refused.value))
    assert len(said) == 1


def test_an_unknown_name_is_hashed_against_as_a_known_one(site, monkeypatch):
    asked = []
    real = accounts._hasher()

    class Watched:
        def verify(self, hashed, password):
            asked.append(hashed.split("$")[1:4])
            return real.verify(hashed, password)

        def hash(self, password):
            return real.hash(password)

    monkeypatch.setattr(accounts, "_hasher", Watched)
    for name in ("ida.marsh", "nobody"):
        with pytest.raises(SignInRefused):
            authenticate(site, name, OTHER)
    assert len(asked) == 2
    assert asked[0] == asked[1] == ["argon2id", "v=19", "m=19456,t=2,p=1"]


def test_only_the_owner_reads_the_file_and_it_holds_no_password(site):
    path = reviewers_file(site)
    assert stat.S_IMODE(path.stat().st_mode) == 0o600
    assert PASSWORD not in path.read_text()
    assert "$argon2id$" in path.read_text()


def test_the_ledger_has_every_change_and_no_secret(site):
    reset_password(site, "ida.marsh", OTHER, NOW, actor="keeper")
    disable_reviewer(site, "ida.marsh", NOW, actor="keeper")
    found = [(entry.kind, entry.actor) for entry in ledger.entries(site)]
    kinds = ["reviewer_added", "password_reset", "reviewer_disabled"]
    assert found == [(kind, "keeper") for kind in kinds]
    text = site.ledger_file.read_text()
    assert "argon2" not in text
    assert PASSWORD not in text
    assert OTHER not in text
    ledger.verify_chain(site)


def test_a_reset_takes_the_old_password_away_and_wakes_no_disabled_account(site):
    reset_password(site, "ida.marsh", OTHER, NOW)
    with pytest.raises(SignInRefused):
        authenticate(site, "ida.marsh", PASSWORD)
    assert authenticate(site, "ida.marsh", OTHER).name == "ida.marsh"
    disable_reviewer(site, "ida.marsh", NOW)
    reset_password(site, "ida.marsh", PASSWORD, NOW)
    with pytest.raises(SignInRefused):
        authenticate(site, "ida.marsh", PASSWORD)
    with pytest.raises(ReviewerError, match="disabled already"):
        disable_reviewer(site, "ida.marsh", NOW)


@pytest.mark.parametrize(
    ("password", "why"),
    [
        ("short-pass1", "11 characters"),
        ("x" * 201, "201 characters"),
        ("aaaaaaaaaaaaaaaa", "easy to guess"),
        ("password12345", "easy to guess"),
        ("qwertyuiop123", "easy to guess"),
        ("ida.marsh-2031-x", "holds the name"),
        ("my Marsh cottage 77", "holds the name"),
    ],
)
def test_a_weak_password_is_refused_and_never_repeated(site, password, why):
    with pytest.raises(ReviewerError, match=why) as refused:
        reset_password(site, "ida.marsh", password, NOW)
    assert password not in str(refused.value)
    assert authenticate(site, "ida.marsh", PASSWORD)


@given(st.text(max_size=11))
def test_fewer_than_twelve_characters_never_do(password):
    with pytest.raises(ReviewerError):
        check_password(password, "someone")


def test_the_same_letters_composed_in_two_ways_are_one_password(site):
    reset_password(site, "ida.marsh", "k\u00fcste-lamp-orchid", NOW)
    assert authenticate(site, "ida.marsh", "ku\u0308ste-lamp-orchid")


@pytest.mark.parametrize("name", ["", "a", "Ida", "ida marsh", "../ida", "ida\n", "1da", "i" * 33, "<b>"])
def test_a_name_that_could_be_anything_else_is_refused(site, name):
    with pytest.raises(ReviewerError, match="no name"):
        add_reviewer(site, name, "Ida", "reader", PASSWORD, NOW)


def test_no_name_twice_no_other_role_no_empty_full_name(site):
    with pytest.raises(ReviewerError, match="already"):
        add_reviewer(site, "ida.marsh", "Another", "reader", OTHER, NOW)
    with pytest.raises(ReviewerError, match="no role 'owner'"):
        add_reviewer(site, "new", "New One", "owner", OTHER, NOW)
    for full_name in ("  ", "A\x00B", "x" * 81, "a\u202eb"):
        with pytest.raises(ReviewerError, match="no full name"):
            add_reviewer(site, "new", full_name, "reader", OTHER, NOW)
    assert [each.name for each in reviewers(site)] == ["ida.marsh"]


def test_a_damaged_file_is_told_with_its_name(site):
    reviewers_file(site).write_text("{")
    with pytest.raises(SiteError, match="reviewers is damaged"):
        authenticate(site, "ida.marsh", PASSWORD)


def test_a_disabling_that_was_killed_is_recorded_by_the_same_command(site, monkeypatch):
    def die(*_given, **_words):
        raise RuntimeError("power")

    monkeypatch.setattr(ledger, "append", die)
    with pytest.raises(RuntimeError):
        disable_reviewer(site, "ida.marsh", NOW)
    monkeypatch.undo()
    with pytest.raises(SignInRefused):
        authenticate(site, "ida.marsh", PASSWORD)
    disable_reviewer(site, "ida.marsh", NOW)
    assert [entry.kind for entry in ledger.entries(site)][-1] == "reviewer_disabled"


def test_verify_holds_accounts_against_the_ledger_and_rebuild_leaves_them(tmp_path):
    site = tiny_site(tmp_path).site
    add_reviewer(site, "ida.marsh", "Ida Marsh", "reader", PASSWORD, NOW)
    add_reviewer(site, "olan", "Olan Reed", "approver", OTHER, NOW)
    before = reviewers_file(site).read_bytes()
    rebuild(site, NOW)
    assert reviewers_file(site).read_bytes() == before

    def told():
        return [
            damage.what
            for each in verify(site).checked
            if each.name == "reviewers"
            for damage in each.damages
        ]

    assert told() == []
    reviewers_file(site).write_bytes(before.replace(b'"reader"', b'"approver"'))
    assert told() == ["role of ida.marsh is not what the ledger says"]
    found = accounts._accounts(site)
    accounts._write(
        site, {"eve": replace(found["olan"], reviewer=replace(found["olan"].reviewer, name="eve"))}
    )
    assert len(told()) == 3


def test_commands_take_the_password_from_standard_input_and_print_none(tmp_path):
    site = empty_site(tmp_path)

    def call(*words, given=None):
        return CliRunner().invoke(tree, ["reviewer", *words, "--site", str(site.root)], input=given)

    done = call("add", "ida.marsh", "--full-name", "Ida Marsh", "--password-stdin", given=PASSWORD + "\n")
    assert done.exit_code == 0, done.output
    assert "added ida.marsh (Ida Marsh), reviewer" in done.output
    typed = call("reset", "ida.marsh", given=f"{OTHER}\n{OTHER}\n")
    assert typed.exit_code == 0, typed.output
    assert authenticate(site, "ida.marsh", OTHER)
    assert OTHER not in done.output + typed.output
    assert call("disable", "ida.marsh").exit_code == 0
    listed = call("list").output
    assert "ida.marsh" in listed
    assert "disabled" in listed
    refused = call("add", "new", "--full-name", "New One", "--password-stdin", given="short\n")
    assert isinstance(refused.exception, HalfsatError)
    assert [each.name for each in reviewers(site)] == ["ida.marsh"]
    assert "no such option" in call("add", "new", "--password", "x", given="").output.casefold()
