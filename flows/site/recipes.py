"""Recipes: everything besides the data that fixes a result, kept by hash so that it can be used again.

A recipe is JSON, spelled in one way only; its id is the SHA-256 of that spelling.
"""

from __future__ import annotations

import importlib.metadata
import json
from dataclasses import dataclass
from functools import cache, cached_property
from pathlib import Path

from pydantic import ValidationError

import checks
import models
from flows import stages
from flows.site.durable import write_durably
from flows.site.layout import Site
from models.errors import SiteError
from models.identity import Json, canonical_json, content_id
from models.records.assay import Assay
from models.records.export_profile import ExportProfile

DIGEST_LENGTH = 12

Limits = dict[str, dict[str, bool | int | float]]


@dataclass(frozen=True)
class Recipe:
    """What one plate read is analysed with.

    Attributes
    ----------
    assay_name, assay
        The assay and what its file is called.
    profile_name, profile
        The export profile and what its file is called.
    limits
        Every gate's settings in force, by gate.
    code_version
        Version and digest of the code that makes numbers.
    """

    assay_name: str
    assay: Assay
    profile_name: str
    profile: ExportProfile
    limits: Limits
    code_version: str

    @cached_property
    def canonical(self) -> str:
        """The recipe as canonical JSON."""
        return canonical_json(
            {
                "assay_name": self.assay_name,
                "assay": self.assay.model_dump(mode="json"),
                "profile_name": self.profile_name,
                "profile": self.profile.model_dump(mode="json"),
                "limits": self.limits,
                "code_version": self.code_version,
            }
        )

    @cached_property
    def recipe_id(self) -> str:
        """SHA-256 of the canonical JSON."""
        return content_id(self.canonical.encode())

    def row(self) -> dict[str, str]:
        """The recipe as a row of the `recipes` table."""
        return {
            "recipe_id": self.recipe_id,
            "assay": self.assay_name,
            "profile": self.profile_name,
            "code_version": self.code_version,
            "recipe": self.canonical,
        }


def recipe_path(site: Site, recipe_id: str) -> Path:
    """Where a kept recipe lies."""
    return site.recipes / f"{recipe_id}.json"


def keep_recipe(site: Site, recipe: Recipe) -> bool:
    """Keep a recipe in the site's configuration; say whether it was new.

    The caller records `recipe_kept` in the ledger where it was.
    """
    path = recipe_path(site, recipe.recipe_id)
    content = recipe.canonical.encode()
    if path.is_file() and path.read_bytes() == content:
        return False
    write_durably(path, content, mode=0o444)
    return True


def read_recipe(site: Site, recipe_id: str) -> Recipe:
    """Return a kept recipe after checking its hash.

    Raises
    ------
    SiteError
        If it is missing, has changed, or was kept by a version of halfsat whose records this one cannot read.
    """
    path = recipe_path(site, recipe_id)
    try:
        content = path.read_bytes()
    except FileNotFoundError as error:
        raise SiteError(
            f"the recipe {recipe_id[:12]} is missing",
            where=str(site.recipes),
            remedy="bring config/recipes/ back from a backup of the site",
        ) from error
    if content_id(content) != recipe_id:
        raise SiteError(
            f"the recipe {recipe_id[:12]} has changed since it was used",
            where=str(path),
            remedy="bring it back from a backup of the site",
        )
    document = json.loads(content)
    try:
        return Recipe(
            document["assay_name"],
            Assay.model_validate_json(canonical_json(document["assay"])),
            document["profile_name"],
            ExportProfile.model_validate_json(canonical_json(document["profile"])),
            document["limits"],
            document["code_version"],
        )
    except (KeyError, ValidationError) as error:
        raise SiteError(
            f"the recipe {recipe_id[:12]} cannot be used by this version of halfsat",
            where=str(path),
            remedy="use the version that is named in it",
        ) from error


@cache
def code_version() -> str:
    """Package version, and a digest of the source that makes numbers: models/, checks/ and flows/stages/."""
    try:
        version = importlib.metadata.version("halfsat")
    except importlib.metadata.PackageNotFoundError:
        version = "unreleased"
    return f"{version}+{source_digest([Path(package.__path__[0]) for package in (models, checks, stages)])}"


def source_digest(packages: list[Path]) -> str:
    """First 12 hexadecimal digits of a digest over the Python files of packages, names included."""
    sources: dict[str, Json] = {
        f"{package.name}/{path.relative_to(package).as_posix()}": content_id(path.read_bytes())
        for package in packages
        for path in package.rglob("*.py")
    }
    return content_id(canonical_json(sources).encode())[:DIGEST_LENGTH]
