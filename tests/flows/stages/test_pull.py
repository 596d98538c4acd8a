"""Pulling: what is new comes in once, whole and archived first; what is being written waits."""

import os
from datetime import timedelta

import pytest

from flows import ledger
from flows.site import archive
from flows.stages.load import load_results
from flows.stages.pull import known_files, pull
from models.errors import SiteError
from models.identity import content_id
from models.tables import FILES
from tests.flows.tiny_site import FIRST_NIGHT, Settings, empty_site, rows, tiny_site

NOW = FIRST_NIGHT
LATER = NOW + timedelta(days=1)


@pytest.fixture
def site(tmp_path):
    return empty_site(tmp_path)


def settle(site, *files, kind="export") -> None:
    """Say that a pass has loaded these files."""
    loaded = [
        {
            "file_id": file.file_id,
            "kind": kind,
            "file_name": file.file_name,
            "byte_count": 1,
            "received_at": NOW,
            "pass_id": "p",
        }
        for file in files
    ]
    load_results(site, "p", {"files": rows(FILES, loaded)}, NOW)


def test_new_files_are_archived_and_recorded(site):
    (site.inbox / "deep").mkdir()
    (site.inbox / "b.csv").write_bytes(b"two")
    (site.inbox / "deep" / "a.csv").write_bytes(b"one")
    pulled = pull(site, Settings(), NOW)
    assert [(file.file_name, file.content, file.received_at) for file in pulled] == [
        ("a.csv", b"one", NOW),
        ("b.csv", b"two", NOW),
    ]
    assert [archive.fetch(site, file.file_id) for file in pulled] == [b"one", b"two"]
    events = [(entry.kind, entry.body["path"], entry.body["file_id"]) for entry in ledger.entries(site)]
    assert events == [
        ("file_accepted", "b.csv", content_id(b"two")),
        ("file_accepted", "deep/a.csv", content_id(b"one")),
    ]
    assert sorted(path.name for path in site.inbox.rglob("*.csv")) == ["a.csv", "b.csv"]


def test_a_second_pull_brings_nothing_once_the_first_was_loaded(site):
    (site.inbox / "a.csv").write_bytes(b"one")
    settle(site, *pull(site, Settings(), NOW))
    before = site.ledger_file.read_bytes()
    assert pull(site, Settings(), LATER) == []
    assert site.ledger_file.read_bytes() == before


def test_what_a_killed_pass_accepted_comes_again(site):
    (site.inbox / "a.csv").write_bytes(b"one")
    first = pull(site, Settings(), NOW)
    (site.inbox / "a.csv").unlink()
    assert pull(site, Settings(), LATER) == first
    settle(site, *first)
    assert pull(site, Settings(), LATER) == []


def test_bytes_archived_but_not_recorded_are_new(site):
    """A kill between archive and ledger."""
    archive.keep(site, b"one")
    (site.inbox / "a.csv").write_bytes(b"one")
    assert [file.file_name for file in pull(site, Settings(), NOW)] == ["a.csv"]


def test_a_quarantined_file_is_not_pulled_again(site):
    (site.inbox / "a.csv").write_bytes(b"torn")
    settle(site, *pull(site, Settings(), NOW), kind="quarantined")
    assert pull(site, Settings(), LATER) == []
    assert known_files(site)[content_id(b"torn")].kind == "quarantined"


def test_the_same_bytes_under_two_names_are_one_file(site):
    for name in ("a.csv", "copy of a.csv"):
        (site.inbox / name).write_bytes(b"one")
    settle(site, *pull(site, Settings(), NOW))
    (site.inbox / "third.csv").write_bytes(b"one")
    assert pull(site, Settings(), LATER) == []
    before = site.ledger_file.read_bytes()
    assert pull(site, Settings(), LATER) == []
    assert site.ledger_file.read_bytes() == before
    (known,) = known_files(site).values()
    assert (known.file_name, known.names) == ("a.csv", ("a.csv", "copy of a.csv", "third.csv"))
    kinds = [entry.kind for entry in ledger.entries(site)]
    assert kinds.count("file_accepted") == 1
    assert kinds.count("file_seen_again") == 2


def test_the_same_name_with_other_bytes_is_another_file(site):
    (site.inbox / "a.csv").write_bytes(b"one")
    settle(site, *pull(site, Settings(), NOW))
    (site.inbox / "a.csv").write_bytes(b"other")
    assert [file.content for file in pull(site, Settings(), LATER)] == [b"other"]


@pytest.mark.parametrize(
    "name",
    [
        ".hidden.csv",
        "~$night.xlsx",
        "#night.csv#",
        "a.csv.part",
        "a.TMP",
        "a.filepart",
        "a.csv~",
        ".deep/a.csv",
    ],
)
def test_hidden_and_temporary_names_are_left(site, name):
    (site.inbox / name).parent.mkdir(exist_ok=True)
    (site.inbox / name).write_bytes(b"half")
    assert pull(site, Settings(), NOW) == []
    (site.inbox / name).rename(site.inbox / "a.csv")
    assert len(pull(site, Settings(), NOW)) == 1


def test_a_file_that_was_just_changed_waits(site):
    path = site.inbox / "a.csv"
    path.write_bytes(b"one")
    os.utime(path, (NOW.timestamp() - 30, NOW.timestamp() - 30))
    assert pull(site, Settings(settle_s=60), NOW) == []
    assert len(pull(site, Settings(settle_s=60), NOW + timedelta(seconds=31))) == 1


def test_a_file_that_grows_while_it_is_read_waits(site, monkeypatch):
    path = site.inbox / "a.csv"
    path.write_bytes(b"one")
    read = type(path).read_bytes

    def grow(self):
        content = read(self)
        if self == path:
            path.write_bytes(content + b" more")
        return content

    monkeypatch.setattr(type(path), "read_bytes", grow)
    assert pull(site, Settings(), NOW) == []
    monkeypatch.undo()
    assert [file.content for file in pull(site, Settings(), NOW)] == [b"one more"]


def test_links_and_pipes_are_left(site, tmp_path):
    (tmp_path / "secret").write_text("password")
    (site.inbox / "link.csv").symlink_to(tmp_path / "secret")
    (site.inbox / "round").symlink_to(site.inbox)
    os.mkfifo(site.inbox / "pipe.csv")
    assert pull(site, Settings(), NOW) == []


def test_a_name_that_is_no_text_is_taken(site):
    (site.inbox / os.fsdecode(b"n\xe4cht.csv")).write_bytes(b"one")
    (file,) = pull(site, Settings(), NOW)
    assert file.file_name == "n\\xe4cht.csv"
    assert ledger.verify_chain(site) == 1


def test_many_files_are_recorded_in_chunks(site):
    for number in range(150):
        (site.inbox / f"{number:03}.csv").write_bytes(str(number).encode())
    assert len(pull(site, Settings(), NOW)) == 150
    assert ledger.verify_chain(site) == 150


def test_content_is_checked_when_it_is_read(site):
    (site.inbox / "a.csv").write_bytes(b"one")
    (file,) = pull(site, Settings(), NOW)
    file.path.chmod(0o644)
    file.path.write_bytes(b"two")
    with pytest.raises(SiteError, match="changed"):
        _ = file.content


def test_a_missing_inbox_is_named(site):
    with pytest.raises(SiteError, match=r"elsewhere: there is no inbox \(make the folder"):
        pull(site, Settings(inbox="elsewhere"), NOW)


def test_the_ledger_knows_which_plate_reads_were_analysed(tmp_path):
    made = tiny_site(tmp_path)
    known = known_files(made.site)
    assert known[made.map_id].kind == "plate_map"
    assert known[made.map_id].analysed == frozenset()
    for plate, export_id in made.export_ids.items():
        assert known[export_id].kind == "export"
        assert known[export_id].analysed == {made.plate_read_ids[plate]}
