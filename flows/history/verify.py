"""Verify: every hash that the site rests on, held against the bytes as they are now.

Changes nothing of what it checks. The ledger says what must be there; what it does not name is not looked at.
"""

from __future__ import annotations

import hashlib
import tempfile
from collections.abc import Callable, Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from pathlib import Path

import duckdb

from flows import lake, ledger
from flows.ledger import Entry
from flows.site import archive
from flows.site.layout import Site
from flows.site.recipes import recipe_path
from flows.site.reviewers import account_rows, recorded_reviewers, reviewers_file
from flows.stages.gate_runs import read_run
from flows.stages.kept_profiles import profile_path
from flows.stages.load import as_batch, stored_rows
from flows.stages.recorded import PROFILE_ID, RecordedBatch, recorded_batches
from flows.warehouse import writer
from flows.warehouse.bookkeeping import SCHEMA, STORED
from flows.warehouse.view import quoted
from models.errors import HalfsatError, LedgerError
from models.identity import Json, content_id
from models.tables import ANALYSES, FILES, GATE_RUNS

Tell = Callable[[str, int, int], None]

_BACKUP = "bring it back from a backup of the site"
_REBUILD = "make it again: halfsat rebuild"
_CONDITIONS = {"changed": "its bytes are not those that were written", "missing": "it is missing"}


@dataclass(frozen=True)
class Damage:
    """One thing that is not as it was written.

    Attributes
    ----------
    place
        Its path below the site's folder, or the line of the ledger.
    what
        What is wrong.
    remedy
        What to do about it.
    """

    place: str
    what: str
    remedy: str


@dataclass(frozen=True)
class Checked:
    """One kind of thing that was checked: how many there are, and what is wrong with some of them."""

    name: str
    count: int
    damages: tuple[Damage, ...] = ()


@dataclass(frozen=True)
class VerifyReport:
    """What a verification found.

    Attributes
    ----------
    checked
        Kinds of things in the order in which they were checked.
    notes
        What could not be checked, and why.
    """

    checked: tuple[Checked, ...]
    notes: tuple[str, ...] = ()

    @property
    def damages(self) -> tuple[Damage, ...]:
        """All that is wrong."""
        return tuple(damage for each in self.checked for damage in each.damages)


@dataclass
class _Named:
    """What the ledger says must be there."""

    raw: dict[str, str] = field(default_factory=dict)
    recipes: dict[str, None] = field(default_factory=dict)
    profiles: dict[str, None] = field(default_factory=dict)
    batches: list[RecordedBatch] = field(default_factory=list)
    published: dict[str, str] = field(default_factory=dict)


def record_verified(site: Site, report: VerifyReport, now: datetime) -> bool:
    """Write into the ledger that the site was verified, and what came out; not into a damaged one.

    Returns
    -------
    bool
        Whether it was written. A site that may only be read has been verified all the same.
    """
    if any(each.name == "ledger entries" and each.damages for each in report.checked):
        return False
    body: dict[str, Json] = {
        "checked": {each.name: each.count for each in report.checked},
        "damage_count": len(report.damages),
    }
    try:
        ledger.append(site, "verified", body, at=now)
    except OSError:
        return False
    return True


def verify(site: Site, tell: Tell | None = None) -> VerifyReport:
    """Check every hash of a site.

    Parameters
    ----------
    tell
        Told what is being checked, how many of it are done, of how many.

    Returns
    -------
    VerifyReport
        Counts and damages: the ledger's chain, raw files, kept recipes and profiles, lake files, gate
        documents, the published copies, the loader's database, and the accounts of reviewers.
    """
    notes: list[str] = []
    chain, entries = _chain(site)
    named = _named(site, entries)
    if chain.damages:
        notes.append(f"What the ledger names after its entry {len(entries)} was not checked.")
    told = tell or _silent
    checked = [
        chain,
        _check("raw files", named.raw.items(), lambda each: _raw(site, *each), told),
        _check("recipes", named.recipes, lambda each: _kept(site, recipe_path(site, each), each), told),
        _check("profiles", named.profiles, lambda each: _kept(site, profile_path(site, each), each), told),
        _check("lake files", _lake_files(named), lambda each: _lake(site, *each), told),
        _check("gate documents", _gate_runs(site, named).values(), lambda each: _document(site, each), told),
        _check("published copies", _copies(site, named), lambda each: _published(site, named, each), told),
        _check("warehouse", [site.loader_file], lambda _: _loader(site, named, notes), told),
        *_reviewers(site),
    ]
    return VerifyReport(tuple(checked), tuple(notes))


def _silent(name: str, done: int, total: int) -> None:
    """Nobody watches."""


def _check(
    name: str, things: Iterable[object], check: Callable[..., Iterator[Damage]], tell: Tell
) -> Checked:
    every = list(things)
    damages: list[Damage] = []
    for done, each in enumerate(every):
        tell(name, done, len(every))
        damages += check(each)
    tell(name, len(every), len(every))
    return Checked(name, len(every), tuple(damages))


def _chain(site: Site) -> tuple[Checked, list[Entry]]:
    """Whether the ledger is whole, and its entries up to the first line that is not."""
    entries: list[Entry] = []
    damages = []
    if not site.ledger_file.is_file():
        damages.append(Damage("ledger/ledger.jsonl", "it is missing", _BACKUP))
    try:
        for entry in ledger.checked_entries(site):
            entries.append(entry)
    except LedgerError as error:
        damages.append(Damage(error.where.removeprefix(f"{site.root}/"), error.what, error.remedy))
    return Checked("ledger entries", len(entries), tuple(damages)), entries


def _named(site: Site, entries: Sequence[Entry]) -> _Named:
    named = _Named()
    for entry in entries:
        body = entry.body
        if entry.kind == "file_accepted":
            named.raw[str(body["file_id"])] = str(body["file_name"])
        elif entry.kind == "recipe_kept":
            named.recipes[str(body["recipe_id"])] = None
        elif entry.kind == "published":
            # A rebuilt warehouse numbers its copies anew: the last entry of a name counts, and stands last.
            named.published.pop(str(body["file"]), None)
            named.published[str(body["file"])] = str(body["sha256"])
    for batch in recorded_batches(site, entries):
        named.batches.append(batch)
        for row in batch.rows(ANALYSES.name):
            named.recipes[str(row["recipe_id"])] = None
        for row in batch.rows(FILES.name):
            if row.get(PROFILE_ID):
                named.profiles[str(row[PROFILE_ID])] = None
    return named


def _raw(site: Site, file_id: str, file_name: str) -> Iterator[Damage]:
    found = archive.condition(site, file_id)
    if found != "unchanged":
        place = _below(site, archive.raw_path(site, file_id))
        remedy = f"{_BACKUP}, or drop the original {file_name} into the inbox again"
        yield Damage(place, f"{_CONDITIONS[found]} ({file_name})", remedy)


def _kept(site: Site, path: Path, kept_id: str) -> Iterator[Damage]:
    try:
        changed = content_id(path.read_bytes()) != kept_id
    except FileNotFoundError:
        yield Damage(_below(site, path), _CONDITIONS["missing"], _BACKUP)
        return
    if changed:
        yield Damage(_below(site, path), _CONDITIONS["changed"], _BACKUP)


def _lake_files(named: _Named) -> dict[tuple[str, str], None]:
    """Path and digest of every lake file, each once."""
    return {(file.path, file.sha256): None for batch in named.batches for file in batch.lake_files}


def _lake(site: Site, path: str, sha256: str) -> Iterator[Damage]:
    found = lake.condition(site, path, sha256)
    if found != "unchanged":
        yield Damage(path, _CONDITIONS[found], _REBUILD)


def _gate_runs(site: Site, named: _Named) -> dict[str, Mapping[str, object]]:
    """Rows of the gate runs by id: from the ledger, or from the lake where the ledger does not have them."""
    found: dict[str, Mapping[str, object]] = {}
    for batch in named.batches:
        rows = [row for row in batch.rows(GATE_RUNS.name) if "file" in row]
        files = [file for file in batch.lake_files if file.table_name == GATE_RUNS.name]
        if files and not rows:
            for file in files:
                try:
                    rows += lake.read_arrow(site, file.path, file.sha256).to_pylist()
                except HalfsatError:
                    # The lake's own check names the file.
                    continue
        found |= {str(row["gate_run_id"]): row for row in rows}
    return found


def _document(site: Site, row: Mapping[str, object]) -> Iterator[Damage]:
    run_id, suite, recipe_id, file = (str(row[n]) for n in ("gate_run_id", "suite", "recipe_id", "file"))
    found = read_run(site, run_id, suite, recipe_id, file).condition
    if found != "unchanged":
        yield Damage(file, _CONDITIONS[found], _REBUILD)


def _copies(site: Site, named: _Named) -> list[Path]:
    """Published copies that are there, and the one that readers open, there or not."""
    copies = set(site.warehouse.glob("published-*.duckdb"))
    if site.published_link.is_symlink():
        copies.add(site.warehouse / site.published_link.readlink().name)
    elif named.published:
        copies.add(site.published_link)
    return sorted(copies)


def _published(site: Site, named: _Named, path: Path) -> Iterator[Damage]:
    place = _below(site, path)
    if not path.is_file():
        yield Damage(place, "it is missing, and readers open it", _REBUILD)
    elif path.name not in named.published:
        yield Damage(
            place,
            "the ledger does not name it",
            "run a pass, which records what a killed one left; if none was killed, the ledger's end is lost: "
            + _BACKUP,
        )
    elif _sha256(path) != named.published[path.name]:
        yield Damage(place, _CONDITIONS["changed"], _REBUILD)


def _loader(site: Site, named: _Named, notes: list[str]) -> Iterator[Damage]:
    """The loader's database: the bytes of the last copy published, or rows that are those of the lake."""
    place = _below(site, site.loader_file)
    if not site.loader_file.is_file():
        if named.batches:
            yield Damage(place, "it is missing", _REBUILD)
        return
    last = list(named.published.values())[-1:]
    no_log = not site.loader_file.with_name(site.loader_file.name + ".wal").exists()
    if no_log and [_sha256(site.loader_file)] == last:
        return
    try:
        yield from _since_publication(site, named, place, notes)
    except duckdb.Error as error:
        if "lock" in str(error).lower():
            notes.append("A pass is writing the warehouse: the loader's database was not checked.")
        else:
            yield Damage(place, "it cannot be read as a database", _REBUILD)


def _reviewers(site: Site) -> list[Checked]:
    """Accounts of reviewers held against what the ledger says of them; nothing where there are none."""
    recorded = recorded_reviewers(site)
    place = _below(site, reviewers_file(site))
    try:
        accounts = account_rows(site)
    except HalfsatError as error:
        return [Checked("reviewers", len(recorded), (Damage(place, error.what, error.remedy),))]
    if not recorded and not accounts:
        return []
    damages = []
    for name in sorted({*recorded, *accounts}):
        if name not in accounts:
            what = f"the account of {name} is missing, which the ledger names"
            damages.append(Damage(place, what, f"{_BACKUP}, or type: halfsat reviewer add {name}"))
        elif name not in recorded:
            damages.append(Damage(place, f"the ledger does not name the account of {name}", _BACKUP))
        elif accounts[name] != recorded[name]:
            unlike = [key for key in recorded[name] if accounts[name].get(key) != recorded[name][key]]
            what = f"{', '.join(unlike)} of {name} is not what the ledger says"
            damages.append(Damage(place, what, _BACKUP))
    return [Checked("reviewers", len({*recorded, *accounts}), tuple(damages))]


def _since_publication(site: Site, named: _Named, place: str, notes: list[str]) -> Iterator[Damage]:
    """Look into a database that is not the one last published: a killed pass may have loaded more into it."""
    present = _loaded(site.loader_file)
    recorded = {batch.batch_id: batch for batch in named.batches}
    if unknown := present - set(recorded):
        what = f"it holds {len(unknown)} batches that the ledger does not name: the end of the ledger is lost"
        yield Damage("ledger/ledger.jsonl", what, _BACKUP)
        return
    if site.published_link.is_file() and present == _loaded(site.published_link):
        what = "its bytes are not those that were published, though nothing was loaded since"
        yield Damage(place, what, _REBUILD)
        return
    lacking = len(set(recorded) - present)
    if lacking:
        notes.append(
            f"The warehouse lacks {lacking} batches that the ledger names: the next pass loads them."
        )
    with tempfile.TemporaryDirectory(prefix="halfsat-verify-") as folder:
        fresh = _Aside(site.root, Path(folder))
        try:
            for batch in named.batches:
                if batch.batch_id in present:
                    writer.load(fresh, stored_rows(site, batch), as_batch(batch))
        except HalfsatError as error:
            notes.append(f"The warehouse's rows could not be held against the lake: {error}")
            return
        for name in _unlike_tables(site.loader_file, fresh.loader_file):
            yield Damage(place, f"its rows of {name} are not those of the lake", _REBUILD)


@dataclass(frozen=True)
class _Aside(Site):
    """The same site with its warehouse in another folder."""

    folder: Path

    @property
    def warehouse(self) -> Path:
        return self.folder


def _loaded(database: Path) -> set[str]:
    with duckdb.connect(str(database.resolve()), read_only=True) as connection:
        return writer.loaded_batches(connection)


def _unlike_tables(database: Path, fresh: Path) -> list[str]:
    """Names of tables whose rows differ between two databases, in the columns that the first one has."""
    unlike = []
    with duckdb.connect(str(fresh), read_only=True) as connection:
        connection.execute(f"ATTACH {quoted(str(database))} AS checked (READ_ONLY)")
        found = connection.execute(
            "SELECT table_name, column_name FROM duckdb_columns() WHERE database_name = 'checked'"
        ).fetchall()
        for table in STORED:
            names = ", ".join(c.name for c in table.columns if (table.name, c.name) in found)
            if table.name == SCHEMA.name or not names:
                continue
            one, other = f"SELECT {names} FROM checked.{table.name}", f"SELECT {names} FROM {table.name}"
            differing = connection.execute(
                f"SELECT 1 FROM (({one} EXCEPT ALL {other}) UNION ALL ({other} EXCEPT ALL {one})) LIMIT 1"
            ).fetchall()
            if differing:
                unlike.append(table.name)
    return unlike


def _sha256(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def _below(site: Site, path: Path) -> str:
    return path.relative_to(site.root).as_posix()
