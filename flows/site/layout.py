"""Where everything of a site lies on disk, and how a site is made and opened.

Knows folders only: what is in a configuration, an export or the ledger is the business of others.
"""

from __future__ import annotations

import os
import shutil
import tempfile
from dataclasses import dataclass
from pathlib import Path

from flows.site.durable import sync_folder
from models.errors import SiteError


@dataclass(frozen=True)
class Site:
    """The folders and files of one site.

    Attributes
    ----------
    root
        The site's folder, absolute.
    """

    root: Path

    @property
    def config(self) -> Path:
        """The site's own configuration."""
        return self.root / "config"

    @property
    def recipes(self) -> Path:
        """Every recipe that was ever used, one JSON file each."""
        return self.config / "recipes"

    @property
    def inbox(self) -> Path:
        """Where exports and plate maps are dropped, unless the configuration names another place."""
        return self.root / "inbox"

    @property
    def raw(self) -> Path:
        """Every file ever accepted, named by its SHA-256."""
        return self.root / "raw"

    @property
    def quarantine(self) -> Path:
        """What could not be read, with a reason beside each."""
        return self.root / "quarantine"

    @property
    def lake(self) -> Path:
        """Parquet files that are never changed."""
        return self.root / "lake"

    @property
    def gate_documents(self) -> Path:
        """Suites and results of the gates, as JSON."""
        return self.lake / "gate_documents"

    @property
    def ledger(self) -> Path:
        """Folder of the ledger."""
        return self.root / "ledger"

    @property
    def ledger_file(self) -> Path:
        """The hash-chained record itself."""
        return self.ledger / "ledger.jsonl"

    @property
    def warehouse(self) -> Path:
        """Folder of the loader's database and of the published copies."""
        return self.root / "warehouse"

    @property
    def loader_file(self) -> Path:
        """The DuckDB file that the loader alone opens."""
        return self.warehouse / "loader.duckdb"

    @property
    def published_link(self) -> Path:
        """Link to the latest published copy: what every reader opens."""
        return self.warehouse / "published.duckdb"

    @property
    def log(self) -> Path:
        """Folder of the logs: what passes had to say, and what their helpers wrote. No truth is there."""
        return self.root / "log"

    @property
    def outbox(self) -> Path:
        """What the site hands out: digests and worklists."""
        return self.root / "outbox"

    @property
    def lock_file(self) -> Path:
        """The file whose lock a pass holds."""
        return self.root / ".pass.lock"


def create_site(root: Path, config_source: Path) -> Site:
    """Make a site folder with a copy of a configuration.

    The configuration is put in place last, by one rename: a folder is a site when it has one. Nothing is
    written to the ledger; the caller records `site_created`.

    Parameters
    ----------
    root
        Folder of the new site. It may exist if it is empty, or was left half made.
    config_source
        Folder with `site.toml`, `gates.toml`, `profiles/` and `assays/`, copied as it is.

    Raises
    ------
    SiteError
        If the folder already is a site or holds other things, or the configuration is not there.
    """
    site = _site_at(root)
    if not (config_source / "site.toml").is_file():
        raise SiteError("there is no site.toml to start from", where=str(config_source))
    if site.config.exists():
        raise SiteError(
            "there is a site already", where=str(root), remedy="choose a new folder, or use this one as it is"
        )
    folders = (site.inbox, site.raw, site.quarantine, site.lake, site.ledger, site.warehouse)
    ours = {folder.name for folder in folders}
    try:
        site.root.mkdir(parents=True, exist_ok=True)
        others = sorted(p.name for p in site.root.iterdir() if p.name not in ours and p.name[0] != ".")
        if others:
            raise SiteError(
                f"the folder is not empty: it holds {others[0]}",
                where=str(root),
                remedy="choose a new folder",
            )
        for folder in folders:
            folder.mkdir(exist_ok=True)
        with tempfile.TemporaryDirectory(prefix=".config-", dir=site.root) as staging:
            shutil.copytree(config_source, Path(staging) / "config")
            (Path(staging) / "config").rename(site.config)
    except OSError as error:
        raise SiteError(f"the site cannot be made: {error.strerror}", where=str(root)) from error
    sync_folder(site.root)
    sync_folder(site.root.parent)
    return site


def open_site(root: Path) -> Site:
    """Return the site in a folder after looking that its truth is there: configuration, raw files, ledger.

    Lake and warehouse are not asked for: they are rebuilt from the others.

    Raises
    ------
    SiteError
        If the folder is missing, is no site, or has lost a part that cannot be made again.
    """
    site = _site_at(root)
    if not site.root.is_dir():
        raise SiteError(
            "there is no such folder", where=str(root), remedy=f"type: halfsat site new {_typed(root)}"
        )
    if not (site.config / "site.toml").is_file():
        what = "config/site.toml is missing" if site.config.is_dir() else "the folder is no halfsat site"
        remedy = "put the file back" if site.config.is_dir() else f"type: halfsat site new {_typed(root)}"
        raise SiteError(what, where=str(root), remedy=remedy)
    for folder in (site.raw, site.ledger):
        if not folder.is_dir():
            raise SiteError(
                f"the folder {folder.name}/ is missing, and nothing else can replace it",
                where=str(root),
                remedy="bring it back from a backup of the site",
            )
    if not os.access(site.root, os.R_OK | os.X_OK):
        raise SiteError("the folder may not be read", where=str(root), remedy="ask for read permission on it")
    return site


def _site_at(root: Path) -> Site:
    site = Site(root.expanduser().absolute())
    # DuckDB takes these for patterns, wherever they stand in a path.
    unusable = sorted(set(str(site.root)) & set("*?["))
    if unusable:
        raise SiteError(
            f"a site's path may not hold '{unusable[0]}'", where=str(root), remedy="choose another folder"
        )
    return site


def _typed(path: Path) -> str:
    text = str(path)
    return f"'{text}'" if " " in text else text
