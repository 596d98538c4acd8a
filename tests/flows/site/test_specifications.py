"""Lot specifications of a site: the shipped ones load, mistakes are told with file and key."""

from __future__ import annotations

import re
import shutil
from pathlib import Path

import pytest

from flows.site.configuration import load_configuration, schemas
from models.errors import ConfigurationError
from models.records.lot_specification import (
    ChartSettings,
    ConstantSpecification,
    DecisionRule,
    EquivalenceMargins,
    LotSpecification,
)

ROOT = Path(__file__).resolve().parents[3]
EXAMPLE = "alkaline_phosphatase_405"


@pytest.fixture
def config(tmp_path: Path) -> Path:
    return Path(shutil.copytree(ROOT / "config", tmp_path / "config"))


def refusal(config: Path) -> str:
    with pytest.raises(ConfigurationError) as caught:
        load_configuration(config)
    assert caught.value.remedy
    return str(caught.value)


def test_the_shipped_example_loads_and_is_for_no_lot_of_the_site() -> None:
    configuration = load_configuration(ROOT / "config")
    specification = configuration.specifications[EXAMPLE]
    assert configuration.specification_of(EXAMPLE, "EXAMPLE-7") is specification
    assert configuration.specification_of(EXAMPLE, "AP-2601") is None
    assert configuration.specification_of("lactate_dehydrogenase_340", "EXAMPLE-7") is None


def test_every_key_is_shown_in_the_example_with_a_comment() -> None:
    text = (ROOT / f"config/specifications/{EXAMPLE}.toml").read_text(encoding="utf-8")
    for record in (LotSpecification, DecisionRule, ConstantSpecification, EquivalenceMargins, ChartSettings):
        for name, field in record.model_fields.items():
            assert field.description, name
            shown = rf"^(# )?(\[+(constants\.)?{name}\]+|{name} = )"
            assert re.search(shown, text, re.MULTILINE), name


def test_every_lot_of_the_demo_has_one_specification() -> None:
    configuration = load_configuration(ROOT / "fixtures/demo/config")
    lots = re.findall(
        r'^([A-Z][A-Z0-9\-]+) = \{ assay = "(\w+)"',
        (ROOT / "fixtures/demo/scenario.toml").read_text(),
        re.MULTILINE,
    )
    assert len(lots) == 14
    for lot, assay in lots:
        found = configuration.specification_of(assay, lot)
        assert found is not None
        assert found.assay == assay


def test_the_schema_tells_editors_what_a_specification_holds() -> None:
    schema = schemas()["specification"]
    assert set(schema["required"]) == {"assay", "source", "rule", "constants"}
    assert "patterns" in schema["properties"]["lots"]["description"].lower()


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ('unit = "mmol/L"', 'unit = "mm"', ("constants[1]", "'mm' cannot be converted to 'umol/L'")),
        (
            "guard_band_factor = 1.0",
            "guard_band = 1.0",
            ("rule.guard_band", "did you mean guard_band_factor?"),
        ),
        ("lower = 0.04", "lower = 4.0", ("constants[1]", "must be below upper")),
        (
            'assay = "alkaline_phosphatase_405"',
            'assay = "alkaline_phosphatase"',
            ("key assay", "there is no assay", f"did you mean {EXAMPLE}?"),
        ),
        ('reference_lot = "EXAMPLE-R1"', "", ("equivalence needs reference_lot",)),
        ("base_last_day = 2026-03-31", "", ("charts", "go together")),
        ('source = "example, invented"', "", ("key source", "the key is missing")),
    ],
)
def test_mistakes_are_told_with_file_and_key(
    config: Path, old: str, new: str, words: tuple[str, ...]
) -> None:
    path = config / f"specifications/{EXAMPLE}.toml"
    text = path.read_text(encoding="utf-8")
    assert old in text
    path.write_text(text.replace(old, new, 1), encoding="utf-8")
    told = refusal(config)
    assert told.startswith(f"specifications/{EXAMPLE}.toml")
    for each in words:
        assert each in told


def test_two_specifications_for_one_lot_are_told(config: Path) -> None:
    text = (config / f"specifications/{EXAMPLE}.toml").read_text(encoding="utf-8")
    (config / "specifications/other.toml").write_text(text.replace("EXAMPLE-*", "EXAMPLE-9?"))
    configuration = load_configuration(config)
    assert configuration.specification_of(EXAMPLE, "EXAMPLE-7") is not None
    # The reference lot of both is no lot to be told apart.
    assert configuration.specification_of(EXAMPLE, "EXAMPLE-R1") is not None
    with pytest.raises(ConfigurationError, match="several specifications are for lot EXAMPLE-99"):
        configuration.specification_of(EXAMPLE, "EXAMPLE-99")


def test_a_site_without_specifications_loads(config: Path) -> None:
    shutil.rmtree(config / "specifications")
    assert load_configuration(config).specifications == {}
