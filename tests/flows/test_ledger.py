"""The ledger: whatever is changed in it is found, and a torn end is mended without losing a line."""

import fcntl
import json
import os
import threading
from contextlib import suppress
from datetime import UTC, datetime, timedelta, timezone

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from flows import ledger
from flows.site.layout import Site
from models.errors import LedgerError
from tests.flows.tiny_site import empty_site

NOW = datetime(2026, 3, 3, 5, 0, tzinfo=UTC)
IN_ONE_FOLDER = [HealthCheck.function_scoped_fixture]
JSON = st.recursive(
    st.none()
    | st.booleans()
    | st.integers(-(2**53), 2**53)
    | st.floats(allow_nan=False, allow_infinity=False)
    | st.text(st.characters(exclude_categories=["Cs"])),
    lambda inner: (
        st.lists(inner, max_size=3) | st.dictionaries(st.text("abcä\n", max_size=3), inner, max_size=3)
    ),
    max_leaves=8,
)


@pytest.fixture
def site(tmp_path) -> Site:
    return empty_site(tmp_path)


@pytest.fixture
def filled(site) -> Site:
    for place in range(6):
        ledger.append(site, "file_accepted", {"place": place, "name": f"nächt{place}.csv"}, at=NOW)
    return site


def test_an_empty_ledger_is_whole(site):
    assert ledger.verify_chain(site) == 0
    assert list(ledger.entries(site)) == []


def test_each_entry_holds_the_hash_of_the_one_before(filled):
    found = list(ledger.entries(filled))
    assert [entry.seq for entry in found] == [1, 2, 3, 4, 5, 6]
    assert found[0].previous == ledger.GENESIS
    assert [entry.previous for entry in found[1:]] == [entry.hash for entry in found[:-1]]
    assert ledger.verify_chain(filled) == 6


def test_times_are_kept_as_utc_and_need_a_zone(site):
    there = timezone(timedelta(hours=2))
    entry = ledger.append(site, "pass_started", {}, at=datetime(2026, 3, 3, 7, 0, 0, 125, tzinfo=there))
    assert entry.time == datetime(2026, 3, 3, 5, 0, 0, 125, tzinfo=UTC)
    assert '"time":"2026-03-03T05:00:00.000125Z"' in site.ledger_file.read_text()
    with pytest.raises(ValueError, match="time zone"):
        ledger.append(site, "pass_started", {}, at=datetime(2026, 3, 3))  # noqa: DTZ001 - the point of the test


@settings(max_examples=40, suppress_health_check=IN_ONE_FOLDER, deadline=None)
@given(body=st.dictionaries(st.text(st.characters(exclude_categories=["Cs"]), max_size=5), JSON, max_size=4))
def test_any_body_comes_back_as_it_was(site, body):
    written = ledger.append(site, "tables_loaded", body, at=NOW, actor="Ada\u2028")
    *_, last = ledger.entries(site)
    assert last == written
    assert last.body == json.loads(json.dumps(body))
    assert ledger.verify_chain(site) == last.seq


def test_any_flipped_bit_is_found(site):
    """Every byte once, in one of its bits and in the one that turns small letters into capitals."""
    ledger.append_all(
        site, [("file_accepted", {"place": n, "name": f"nächt{n}.csv"}) for n in range(3)], at=NOW
    )
    whole = site.ledger_file.read_bytes()
    missed = []
    for place in range(len(whole)):
        for bit in {place % 8, 5}:
            damaged = bytearray(whole)
            damaged[place] ^= 1 << bit
            site.ledger_file.write_bytes(bytes(damaged))
            with suppress(LedgerError):
                ledger.verify_chain(site)
                missed.append((place, bit))
    assert missed == []


@settings(max_examples=150, suppress_health_check=IN_ONE_FOLDER, deadline=None)
@given(data=st.data())
def test_any_edit_is_found(filled, data):
    """Lines taken out, doubled or swapped; bytes put in, taken out or changed."""
    whole = filled.ledger_file.read_bytes()
    lines = whole.splitlines(keepends=True)
    first = data.draw(st.integers(0, len(lines) - 2))
    second = data.draw(st.integers(first + 1, len(lines) - 1))
    place = data.draw(st.integers(0, len(whole) - 1))
    edits = {
        "line out": b"".join(lines[:first] + lines[first + 1 :]),
        "line twice": b"".join([*lines[: first + 1], *lines[first:]]),
        "lines swapped": b"".join(
            [*lines[:first], lines[second], *lines[first + 1 : second], lines[first], *lines[second + 1 :]]
        ),
        "byte in": whole[:place] + data.draw(st.binary(min_size=1, max_size=1)) + whole[place:],
        "byte out": whole[:place] + whole[place + 1 :],
        "byte changed": whole[:place]
        + bytes([whole[place] ^ data.draw(st.integers(1, 255))])
        + whole[place + 1 :],
    }
    edited = edits[data.draw(st.sampled_from(sorted(edits)))]
    filled.ledger_file.write_bytes(edited)
    try:
        with pytest.raises(LedgerError):
            ledger.verify_chain(filled)
    finally:
        filled.ledger_file.write_bytes(whole)


def test_a_rewritten_entry_breaks_the_chain_after_it(filled):
    lines = filled.ledger_file.read_bytes().splitlines(keepends=True)
    forged = json.loads(lines[2])
    forged["body"]["place"] = 99
    entry = ledger._parse(json.dumps(forged).encode(), "")
    lines[2] = ledger._line(ledger.Entry(**{**vars(entry), "hash": ledger._hash(entry)}))
    filled.ledger_file.write_bytes(b"".join(lines))
    with pytest.raises(LedgerError, match="line 4: a line before this one is missing or moved"):
        ledger.verify_chain(filled)


@settings(max_examples=60, suppress_health_check=IN_ONE_FOLDER, deadline=None)
@given(data=st.data())
def test_a_torn_last_line_is_cut_off_and_the_cut_recorded(filled, data):
    whole = filled.ledger_file.read_bytes()
    start = whole.rstrip(b"\n").rfind(b"\n") + 1
    end = data.draw(st.integers(start + 1, len(whole) - 1))
    zeros = data.draw(st.sampled_from([b"", b"\0" * 9]))
    torn = whole[:end] + zeros
    filled.ledger_file.write_bytes(torn)
    try:
        assert len(list(ledger.entries(filled))) == 5
        with pytest.raises(LedgerError, match="incomplete"):
            ledger.verify_chain(filled)
        appended = ledger.append(filled, "pass_started", {"pass_id": "p"}, at=NOW)
        kinds = [entry.kind for entry in ledger.entries(filled)]
        assert kinds == ["file_accepted"] * 5 + ["ledger_repaired", "pass_started"]
        assert appended.seq == 7
        repaired = list(ledger.entries(filled))[5]
        assert repaired.body["dropped_byte_count"] == len(torn) - start
        assert ledger.verify_chain(filled) == 7
    finally:
        filled.ledger_file.write_bytes(whole)


def test_an_edited_last_line_is_not_taken_for_a_torn_one(filled):
    whole = filled.ledger_file.read_bytes()
    for damaged in (whole[:-1] + b"x", whole[:-1] + b"\x0b", whole.replace(b'"place":5', b'"place":6')):
        filled.ledger_file.write_bytes(damaged)
        with pytest.raises(LedgerError, match="edited"):
            ledger.append(filled, "pass_started", {}, at=NOW)
        assert filled.ledger_file.read_bytes() == damaged


def test_a_first_line_that_is_torn_starts_the_ledger_again(site):
    site.ledger_file.write_bytes(b'{"actor":"half')
    entry = ledger.append(site, "pass_started", {}, at=NOW)
    assert entry.seq == 2
    assert ledger.verify_chain(site) == 2


def test_appending_reads_the_end_only(filled, monkeypatch):
    """Ten thousand entries before it make an append no slower: the bytes read are counted."""
    ledger.append_all(filled, [("file_accepted", {"n": n}) for n in range(10_000)], at=NOW)
    read: list[int] = []
    original = ledger._tail

    class Counting:
        def __init__(self, file):
            self.file = file

        def __getattr__(self, name):
            return getattr(self.file, name)

        def read(self, size):
            read.append(size)
            return self.file.read(size)

    monkeypatch.setattr(ledger, "_tail", lambda file, where: original(Counting(file), where))
    ledger.append(filled, "pass_started", {}, at=NOW)
    assert sum(read) <= 1 << 16
    assert filled.ledger_file.stat().st_size > 10 * (1 << 16)


def test_an_entry_longer_than_a_block_is_read_back(site):
    ledger.append(site, "tables_loaded", {"long": "x" * 200_000}, at=NOW)
    assert ledger.append(site, "pass_started", {}, at=NOW).seq == 2
    assert ledger.verify_chain(site) == 2


def test_writers_do_not_interleave(site):
    def write(name):
        for _ in range(20):
            ledger.append(site, "file_accepted", {"by": name}, at=NOW, actor=name)

    threads = [threading.Thread(target=write, args=(f"writer{n}",)) for n in range(4)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert ledger.verify_chain(site) == 80


def test_a_full_disk_leaves_the_ledger_as_it_was(filled, monkeypatch):
    whole = filled.ledger_file.read_bytes()
    write = os.write

    def half_then_full(handle, content):
        if len(content) < 100:
            raise OSError(28, "No space left on device")
        return write(handle, bytes(content[: len(content) - 50]))

    monkeypatch.setattr(os, "write", half_then_full)
    with pytest.raises(OSError, match="No space"):
        ledger.append(filled, "pass_started", {"pass_id": "p"}, at=NOW)
    monkeypatch.undo()
    assert filled.ledger_file.read_bytes() == whole
    assert ledger.append(filled, "pass_started", {}, at=NOW).seq == 7


def test_verifying_waits_for_a_writer(filled):
    with filled.ledger_file.open("ab") as held:
        fcntl.flock(held, fcntl.LOCK_EX)
        done: list[int] = []
        thread = threading.Thread(target=lambda: done.append(ledger.verify_chain(filled)))
        thread.start()
        thread.join(0.2)
        assert done == []
    thread.join(5)
    assert done == [6]
