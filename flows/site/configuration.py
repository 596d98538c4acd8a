"""A site's configuration as records: settings, profiles, assays, gate limits, lot specifications, from TOML.

Says what is wrong with a file in words that name file, key and what is allowed. What the records mean is
their own business.
"""

from __future__ import annotations

import tomllib
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from difflib import get_close_matches
from pathlib import Path
from types import UnionType
from typing import Any, TypeVar, Union, get_args, get_origin

from pydantic import BaseModel, ValidationError
from pydantic_core import ErrorDetails

from models.errors import ConfigurationError
from models.records.assay import Assay, SettingValue
from models.records.export_profile import ExportProfile
from models.records.lot_specification import LotSpecification
from models.records.record import Record
from models.records.site_settings import SiteSettings

RECORDS: dict[str, type[Record]] = {
    "site": SiteSettings,
    "profile": ExportProfile,
    "assay": Assay,
    "specification": LotSpecification,
}

R = TypeVar("R", bound=Record)


@dataclass(frozen=True)
class Configuration:
    """Everything that a site's configuration folder says.

    Attributes
    ----------
    profiles, assays, specifications
        By name, which is the file's name without its ending.
    gates
        Content of gates.toml, by gate and setting; which gates there are is known to the checks alone.
    """

    settings: SiteSettings
    profiles: dict[str, ExportProfile]
    assays: dict[str, Assay]
    gates: dict[str, dict[str, SettingValue]]
    specifications: dict[str, LotSpecification] = field(default_factory=dict)

    def specification_of(self, assay: str, lot: str) -> LotSpecification | None:
        """The specification that a lot is held against, or None where there is none.

        Raises
        ------
        ConfigurationError
            If several are for this lot: it would be held against one by chance.
        """
        found = {
            name: each
            for name, each in self.specifications.items()
            if each.assay == assay and each.covers(lot)
        }
        if len(found) > 1 and all(each.reference_lot == lot for each in found.values()):
            return next(iter(found.values()))
        if len(found) > 1:
            raise ConfigurationError(
                f"several specifications are for lot {lot} of {assay}",
                where=", ".join(f"specifications/{name}.toml" for name in found),
                remedy="narrow their lots",
            )
        return next(iter(found.values()), None)


def load_configuration(config_dir: Path) -> Configuration:
    """Read and check every file of a configuration folder.

    Parameters
    ----------
    config_dir
        Folder with site.toml, gates.toml, profiles/*.toml, assays/*.toml and specifications/*.toml; all but
        site.toml may be absent.

    Raises
    ------
    ConfigurationError
        If a file is missing, is no TOML, or a key is unknown, missing or wrong; one line for all that is
        wrong with a file.
    """
    if not config_dir.is_dir():
        raise ConfigurationError(
            "there is no configuration folder here",
            where=str(config_dir),
            remedy="make one: halfsat site new",
        )
    settings = read_record(config_dir / "site.toml", SiteSettings, config_dir)
    profiles = {
        path.stem: read_record(path, ExportProfile, config_dir)
        for path in _toml_files(config_dir / "profiles")
    }
    assays = {path.stem: read_record(path, Assay, config_dir) for path in _toml_files(config_dir / "assays")}
    return Configuration(
        settings, profiles, assays, _read_gates(config_dir), _read_specifications(config_dir, assays)
    )


def read_record(path: Path, kind: type[R], config_dir: Path | None = None) -> R:
    """One TOML file as a record.

    Raises
    ------
    ConfigurationError
        If the file is missing, no TOML, or not what the record allows.
    """
    where = _name(path, config_dir)
    content = _read_toml(path, where)
    try:
        return kind.model_validate(content)
    except ValidationError as invalid:
        raise _as_configuration_error(invalid, kind, where) from invalid


def schemas() -> dict[str, dict[str, Any]]:
    """JSON Schemas of the configuration files, by kind of file: site, profile, assay, specification."""
    return {
        name: {"$schema": "https://json-schema.org/draft/2020-12/schema", **kind.model_json_schema()}
        for name, kind in RECORDS.items()
    }


def _toml_files(folder: Path) -> list[Path]:
    return sorted(folder.glob("*.toml")) if folder.is_dir() else []


def _name(path: Path, config_dir: Path | None) -> str:
    return path.relative_to(config_dir).as_posix() if config_dir is not None else path.name


def _read_toml(path: Path, where: str) -> dict[str, Any]:
    try:
        text = path.read_bytes().decode("utf-8-sig")
    except FileNotFoundError as absent:
        raise ConfigurationError(
            "the file is missing", where=str(path), remedy="copy it from a new site: halfsat site new"
        ) from absent
    except UnicodeDecodeError as flaw:
        raise ConfigurationError(
            f"byte {flaw.start + 1} is not UTF-8", where=where, remedy="save the file as UTF-8"
        ) from flaw
    except OSError as flaw:
        raise ConfigurationError(
            f"the file cannot be read ({flaw.strerror})", where=where, remedy="check its permissions"
        ) from flaw
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as flaw:
        raise ConfigurationError(
            f"this is not TOML: {flaw}",
            where=where,
            remedy="text stands in quotes, and regular expressions in single quotes",
        ) from flaw


def _read_gates(config_dir: Path) -> dict[str, dict[str, SettingValue]]:
    path = config_dir / "gates.toml"
    if not path.exists():
        return {}
    where = _name(path, config_dir)
    gates: dict[str, dict[str, SettingValue]] = {}
    for gate, settings in _read_toml(path, where).items():
        if not isinstance(settings, dict):
            raise ConfigurationError(
                f"'{gate}' stands outside a gate",
                where=where,
                remedy="put it below the gate's name, as in [blank_drift]",
            )
        for key, value in settings.items():
            if not isinstance(value, bool | int | float):
                raise ConfigurationError(
                    f"must be a number, true or false, and is {value!r}"[:120],
                    where=f"{where}, key {gate}.{key}",
                    remedy="gate limits are numbers",
                )
        gates[gate] = dict(settings)
    return gates


def _read_specifications(config_dir: Path, assays: dict[str, Assay]) -> dict[str, LotSpecification]:
    found: dict[str, LotSpecification] = {}
    for path in _toml_files(config_dir / "specifications"):
        specification = read_record(path, LotSpecification, config_dir)
        if specification.assay not in assays:
            near = get_close_matches(specification.assay, assays, n=1, cutoff=0.5)
            meant = f"did you mean {near[0]}? " if near else ""
            raise ConfigurationError(
                f"there is no assay '{specification.assay}'",
                where=f"{_name(path, config_dir)}, key assay",
                remedy=f"{meant}assays are {', '.join(assays) or 'none yet'}",
            )
        found[path.stem] = specification
    return found


def _as_configuration_error(invalid: ValidationError, kind: type[Record], where: str) -> ConfigurationError:
    """All that pydantic found in one file, the first with its place and remedy, the others behind it."""
    found = [_told(error, kind) for error in _plain(invalid.errors(include_url=False))]
    key, what, remedy = found[0]
    more = "".join(f"; also {f'{other}: ' if other else ''}{text}" for other, text, _ in found[1:5])
    rest = f"; and {len(found) - 5} more" if len(found) > 5 else ""
    return ConfigurationError(
        f"{what}{more}{rest}", where=f"{where}, key {key}" if key else where, remedy=remedy
    )


def _plain(errors: Sequence[ErrorDetails]) -> list[ErrorDetails]:
    """One error a key: each branch of a union complains, and the first complaint tells enough."""
    seen: dict[tuple[str | int, ...], ErrorDetails] = {}
    for error in errors:
        place = tuple(part for part in error["loc"] if isinstance(part, int) or part.isidentifier())
        seen.setdefault(place, error)
    return list(seen.values())


def _told(error: ErrorDetails, kind: type[Record]) -> tuple[str, str, str]:
    place = list(error["loc"])
    key = _key(place)
    if error["type"] == "extra_forbidden":
        known = _keys_at(kind, place[:-1])
        near = get_close_matches(str(place[-1]), known, n=1, cutoff=0.5)
        meant = f"did you mean {near[0]}? " if near else ""
        return key, "there is no such key", f"{meant}keys here are {', '.join(known)}"
    if error["type"] == "missing":
        return key, "the key is missing", "add it"
    message = error["msg"].removeprefix("Value error, ").removeprefix("Input ")
    found = error.get("input")
    shown = f", found {found!r}"[:80] if isinstance(found, str | bool | int | float) else ""
    if error["type"] == "value_error":
        return key, message, "mend it"
    near_word = _nearest_literal(error, found)
    return key, f"{message}{shown}", near_word or "mend it"


def _nearest_literal(error: ErrorDetails, found: object) -> str | None:
    if error["type"] != "literal_error" or not isinstance(found, str):
        return None
    words = [
        word.strip("' ")
        for word in str(error.get("ctx", {}).get("expected", "")).replace(" or ", ", ").split(",")
    ]
    near = get_close_matches(found, words, n=1, cutoff=0.4)
    return f"did you mean {near[0]}?" if near else None


def _key(place: Sequence[str | int]) -> str:
    parts: list[str] = []
    for part in place:
        if isinstance(part, int):
            parts[-1:] = [f"{parts[-1]}[{part + 1}]"] if parts else [f"[{part + 1}]"]
        elif part.isidentifier():
            parts.append(part)
    return ".".join(parts)


def _keys_at(kind: type[BaseModel], place: Sequence[str | int]) -> list[str]:
    """Keys that the record at this place allows."""
    here: type[BaseModel] = kind
    for part in place:
        field = here.model_fields.get(str(part))
        inner = next(_records_in(field.annotation), None) if field is not None else None
        if inner is None:
            break
        here = inner
    return list(here.model_fields)


def _records_in(annotation: Any) -> Iterator[type[BaseModel]]:
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        yield annotation
    elif get_origin(annotation) in (Union, UnionType):
        for each in get_args(annotation):
            yield from _records_in(each)
