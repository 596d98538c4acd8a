"""A site's configuration: the shipped one loads and is commented; every mistake is told with file and key."""

from __future__ import annotations

import json
import re
import shutil
import tomllib
from pathlib import Path
from typing import get_args

import pytest
from pydantic import BaseModel

from flows.site.configuration import RECORDS, load_configuration, schemas
from models.errors import ConfigurationError
from models.records.export_profile import Shape

ROOT = Path(__file__).resolve().parents[3]


@pytest.fixture
def config(tmp_path: Path) -> Path:
    return Path(shutil.copytree(ROOT / "config", tmp_path / "config"))


def refusal(config: Path) -> str:
    with pytest.raises(ConfigurationError) as caught:
        load_configuration(config)
    assert caught.value.remedy
    return str(caught.value)


def replace(path: Path, old: str, new: str) -> None:
    text = path.read_text(encoding="utf-8")
    assert old in text
    path.write_text(text.replace(old, new, 1), encoding="utf-8")


def test_the_shipped_configuration_loads() -> None:
    loaded = load_configuration(ROOT / "config")
    assert set(loaded.profiles) == set(get_args(Shape))
    assert all(profile.shape == name for name, profile in loaded.profiles.items())
    nadh = loaded.assays["lactate_dehydrogenase_340"].absorption
    # Horecker and Kornberg 1948, J. Biol. Chem. 175, 385: NADH, 340 nm.
    assert nadh is not None
    assert nadh.change_per_molar_per_cm == 6220
    nitrophenolate = loaded.assays["alkaline_phosphatase_405"].absorption
    # 4-nitrophenolate, 405 nm: from memory, 18000 to 18500 in use.
    assert nitrophenolate is not None
    assert 18_000 <= nitrophenolate.change_per_molar_per_cm <= 18_500


@pytest.mark.parametrize("files", ["site.toml", "profiles/*.toml", "assays/*.toml"])
def test_every_key_of_the_shipped_files_is_explained_by_a_comment(files: str) -> None:
    """In one file of the kind: a comment above the key, or above keys that stand together with it."""
    texts = [path.read_text(encoding="utf-8") for path in sorted((ROOT / "config").glob(files))]
    keys = {key for text in texts for key in re.findall(r"^(\w+) = ", text, re.MULTILINE)}
    explained = r"^#[^\n]*\n(\[[\w.]+\]\n)?(\w+ = [^\n]*\n)*{} = "
    silent = {
        key for key in keys if not any(re.search(explained.format(key), text, re.MULTILINE) for text in texts)
    }
    assert keys
    assert silent == set()
    if files == "site.toml":
        assert keys == set(RECORDS["site"].model_fields)


def test_gates_are_read_as_they_stand_and_may_be_absent(config: Path) -> None:
    (config / "gates.toml").write_text("[blank_drift]\non = true\nlimit = 0.1\nreads = 3\n")
    assert load_configuration(config).gates == {"blank_drift": {"on": True, "limit": 0.1, "reads": 3}}
    (config / "gates.toml").unlink()
    assert load_configuration(config).gates == {}


@pytest.mark.parametrize(
    ("file", "old", "new", "words"),
    [
        (
            "site.toml",
            "plates_per_batch = 40",
            "plates_per_bach = 40",
            ["plates_per_bach", "plates_per_batch?"],
        ),
        ("site.toml", "plates_per_batch = 40", "plates_per_batch = 0", ["plates_per_batch", "1", "found 0"]),
        (
            "site.toml",
            'time_zone = "UTC"',
            'time_zone = "Mars"',
            ["key time_zone", "'Mars' is not a time zone"],
        ),
        ("site.toml", 'cron = "0 4 * * *"', 'cron = "daily"', ["key cron", "minute, hour, day"]),
        ("site.toml", 'name = "Harbour works"', "", ["key name", "missing"]),
        ("site.toml", 'name = "Harbour works"', "name = Harbour", ["not TOML", "line 4"]),
        (
            "profiles/wide.toml",
            'shape = "wide"',
            'shape = "wyde"',
            ["key shape", "'wide'", "did you mean wide?"],
        ),
        ("profiles/wide.toml", "[columns]", "[colums]", ["colums", "did you mean columns?"]),
        ("profiles/wide.toml", 'time = "Time [s]"', 'tiem = "Time [s]"', ["columns.tiem", "time?"]),
        ("profiles/wide.toml", 'time = "Time [s]"', "", ['shape = "wide" needs columns.time']),
        ("profiles/wide.toml", 'time = "Time [s]"', "time = 0", ["key columns.time", "found 0"]),
        ("profiles/wide.toml", "(?P<plate_id>[", "(?P<plate>[", ["key plate", "(?P<plate_id>...)"]),
        (
            "profiles/wide.toml",
            "(?P<plate_id>[",
            "(?P<plate_id>([",
            ["id_in_preamble", "not a regular expression"],
        ),
        ("profiles/wide.toml", 'notation = "s"', 'notation = "sec"', ["key time.notation", "found 'sec'"]),
        ("profiles/wide.toml", 'notation = "s"', "", ["key time", "notation, or interval_s"]),
        ("profiles/wide.toml", 'missing = ["NA"]', 'missing = ["OVER"]', ["values", "'OVER' stands in both"]),
        ("profiles/long.toml", 'signal = "Signal"', "", ["needs columns.signal"]),
        ("profiles/long.toml", 'plate = "Plate"', "", ["where the plate's barcode stands"]),
        (
            "profiles/grids.toml",
            "pattern = '^Read \\d+\\t(?P<time>",
            "pattern = '(?P<tim>",
            ["(?P<time>...)"],
        ),
        ("profiles/grids.toml", "[grids]", '[columns]\nwell = "W"\n[grids]', ["columns.well has no meaning"]),
        ("profiles/wells_by_rows.toml", 'row = "T [C]"', 'pattern = "(?P<temperature>x)"', ["no meaning"]),
        ("assays/alkaline_phosphatase_405.toml", 'kind = "absorbance"', 'kind = "colour"', ["signal.kind"]),
        ("assays/alkaline_phosphatase_405.toml", "ph = 9.8", "pH = 9.8", ["conditions.pH", "keys here are"]),
        (
            "assays/alkaline_phosphatase_405.toml",
            "path_length_cm = 0.56",
            "",
            ["absorption", "path_length_cm"],
        ),
    ],
)
def test_a_mistake_is_told_with_file_and_key(
    config: Path, file: str, old: str, new: str, words: list[str]
) -> None:
    replace(config / file, old, new)
    message = refusal(config)
    assert message.startswith(file)
    for word in words:
        assert word in message


def test_several_mistakes_in_one_file_are_told_together(config: Path) -> None:
    replace(config / "site.toml", "settle_s = 0", "settle_s = -1")
    replace(config / "site.toml", "prefect_port = 4231", 'prefect_port = "high"')
    message = refusal(config)
    assert "settle_s" in message
    assert "prefect_port" in message


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("limit = 1\n", "'limit' stands outside a gate"),
        ("[blank_drift]\nlimit = 'x'\n", "gates.toml, key blank_drift.limit"),
        ("[blank_drift\n", "not TOML"),
    ],
)
def test_mistakes_in_gates(config: Path, text: str, words: str) -> None:
    (config / "gates.toml").write_text(text)
    assert words in refusal(config)


def test_missing_folder_missing_file_and_wrong_encoding(config: Path, tmp_path: Path) -> None:
    assert "no configuration folder" in refusal(tmp_path / "nowhere")
    (config / "site.toml").write_bytes('name = "Küste"'.encode("latin-1"))
    assert "not UTF-8" in refusal(config)
    (config / "site.toml").unlink()
    assert "the file is missing" in refusal(config)


def test_a_byte_order_mark_before_toml_is_no_mistake(config: Path) -> None:
    path = config / "site.toml"
    path.write_bytes(b"\xef\xbb\xbf" + path.read_bytes())
    assert load_configuration(config).settings.name == "Harbour works"


def all_records(record: type[BaseModel]) -> set[type[BaseModel]]:
    found = {record}
    for field in record.model_fields.values():
        for part in (field.annotation, *get_args(field.annotation)):
            if isinstance(part, type) and issubclass(part, BaseModel):
                found |= all_records(part)
    return found


def test_schemas_describe_every_key() -> None:
    told = schemas()
    assert set(told) == {"site", "profile", "assay", "specification"}
    assert json.loads(json.dumps(told)) == told
    for kind in RECORDS.values():
        for record in all_records(kind):
            for name, field in record.model_fields.items():
                assert field.description, f"{record.__name__}.{name} has no description"


def test_schemas_allow_the_shipped_files_keys() -> None:
    told = schemas()
    for name in get_args(Shape):
        content = tomllib.loads((ROOT / f"config/profiles/{name}.toml").read_text(encoding="utf-8"))
        assert set(content) <= set(told["profile"]["properties"])
        assert set(told["profile"]["required"]) <= set(content)
