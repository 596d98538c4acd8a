"""Export profiles as they were when they read a file, kept by hash: an edited profile changes no old reading.

Knows no export; which file was read with which profile, the ledger says.
"""

from __future__ import annotations

import json
from pathlib import Path

from pydantic import ValidationError

from flows.site.durable import write_durably
from flows.site.layout import Site
from models.errors import SiteError
from models.identity import canonical_json, content_id
from models.records.export_profile import ExportProfile


def profile_id(name: str, profile: ExportProfile) -> str:
    """SHA-256 of the profile's name and content in their one spelling."""
    return content_id(_spelled(name, profile))


def profile_path(site: Site, kept_id: str) -> Path:
    """Where a kept profile lies."""
    return site.recipes / "profiles" / f"{kept_id}.json"


def keep_profile(site: Site, name: str, profile: ExportProfile) -> str:
    """Keep a profile in the site's configuration and return its id; one that is there is left alone."""
    content = _spelled(name, profile)
    kept_id = content_id(content)
    path = profile_path(site, kept_id)
    if not path.is_file() or path.read_bytes() != content:
        write_durably(path, content, mode=0o444)
    return kept_id


def read_profile(site: Site, kept_id: str) -> tuple[str, ExportProfile]:
    """Name and content of a kept profile, after checking its hash.

    Raises
    ------
    SiteError
        If it is missing, has changed, or was kept by a version of halfsat whose records this one cannot read.
    """
    path = profile_path(site, kept_id)
    backup = "bring config/recipes/ back from a backup of the site"
    try:
        content = path.read_bytes()
    except FileNotFoundError as error:
        raise SiteError(
            f"the kept export profile {kept_id[:12]} is missing", where=str(path.parent), remedy=backup
        ) from error
    if content_id(content) != kept_id:
        raise SiteError(
            f"the kept export profile {kept_id[:12]} has changed since it was used",
            where=str(path),
            remedy=backup,
        )
    document = json.loads(content)
    try:
        profile = ExportProfile.model_validate_json(canonical_json(document["profile"]))
        return str(document["name"]), profile
    except (KeyError, ValidationError) as error:
        raise SiteError(
            f"the kept export profile {kept_id[:12]} cannot be used by this version of halfsat",
            where=str(path),
            remedy="use the version that kept it",
        ) from error


def _spelled(name: str, profile: ExportProfile) -> bytes:
    return canonical_json({"name": name, "profile": profile.model_dump(mode="json")}).encode()
