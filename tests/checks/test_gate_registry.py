"""What holds for every gate, its settings, its page and its configuration file."""

from __future__ import annotations

import re
import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

from checks.gates import GATES, Gate, Limits, resolve_limits
from checks.gates.page import gates_page, gates_toml
from checks.gates.wording import beside, counted
from models.errors import ConfigurationError

ROOT = Path(__file__).resolve().parents[2]
DEFAULTS: Limits = resolve_limits({}, {})
EVERY_SETTING = [(gate, setting) for gate in GATES.values() for setting in gate.settings]


@pytest.mark.parametrize("gate", GATES.values(), ids=GATES)
def test_a_gate_tells_purpose_formula_source_and_default(gate: Gate) -> None:
    for part in ("Purpose: ", "Formula", "Source: ", "Default: "):
        assert f"\n\n{part}" in gate.text, part
    assert gate.text == sys.modules[f"checks.gates.{gate.name}"].__doc__
    assert len(gate.purpose) < 110


@pytest.mark.parametrize(("gate", "setting"), EVERY_SETTING, ids=lambda part: part.name)
def test_a_setting_has_meaning_reason_unit_and_a_default_in_its_range(gate: Gate, setting: object) -> None:
    assert setting.meaning
    assert setting.why
    assert (setting.unit == "") == isinstance(setting.default, bool)
    assert setting.low <= setting.default <= setting.high
    assert resolve_limits({gate.name: {setting.name: setting.default}}, {}) == DEFAULTS


def test_the_limits_that_windows_are_chosen_by_have_the_names_that_rates_look_for() -> None:
    assert DEFAULTS["substrate_depletion"]["limit"] == 0.10
    assert DEFAULTS["initial_slope_nonlinear"]["limit"] == 0.10
    assert DEFAULTS["initial_slope_nonlinear"]["t_limit"] == 4.0
    assert DEFAULTS["saturation_not_reached"]["limit"] == 3.0


def test_configuration_file_and_page_are_those_of_the_registry() -> None:
    written = (ROOT / "config" / "gates.toml").read_text(encoding="utf-8")
    assert written == gates_toml()
    assert tomllib.loads(written) == DEFAULTS
    assert (ROOT / "checks" / "gates" / "README.md").read_text(encoding="utf-8") == gates_page()


def test_every_value_in_the_configuration_file_has_a_comment_above_it() -> None:
    lines = gates_toml().splitlines()
    for number, line in enumerate(lines):
        if re.match(r"\w+ = |\[", line):
            assert lines[number - 1].startswith("# "), line


def test_assay_overrides_site_overrides_default() -> None:
    limits = resolve_limits(
        {"substrate_depletion": {"limit": 0.15}, "blank_drift": {"limit": 0.2, "on": False}},
        {"substrate_depletion": {"limit": 0.05}},
    )
    assert limits["substrate_depletion"]["limit"] == 0.05
    assert limits["blank_drift"] == {**DEFAULTS["blank_drift"], "limit": 0.2, "on": False}
    assert limits["detector_range"] == DEFAULTS["detector_range"]
    assert DEFAULTS["blank_drift"]["on"] is True


def test_whole_numbers_are_taken_for_reals_and_kept_whole_for_counts() -> None:
    limits = resolve_limits(
        {"saturation_not_reached": {"limit": 2}, "detector_range": {"point_limit": 2.0}}, {}
    )
    assert type(limits["saturation_not_reached"]["limit"]) is float
    assert type(limits["detector_range"]["point_limit"]) is int


@pytest.mark.parametrize(
    ("given", "message"),
    [
        ({"blank_drfit": {}}, "there is no gate 'blank_drfit' (did you mean 'blank_drift'?)"),
        ({"zzz": {}}, "there is no gate 'zzz' (gates are detector_range"),
        ({"blank_drift": {"limits": 1}}, "has no setting 'limits' (did you mean 'limit'?)"),
        ({"blank_drift": {"limit": "a"}}, "blank_drift.limit: 'a' is no number (allowed is 0.001 to 10)"),
        ({"blank_drift": {"limit": True}}, "True is no number"),
        ({"blank_drift": {"limit": float("nan")}}, "nan is no number"),
        ({"blank_drift": {"limit": -0.1}}, "-0.1 is out of range (allowed is 0.001 to 10)"),
        ({"blank_drift": {"on": 1}}, "1 is no switch (write true or false)"),
        ({"detector_range": {"point_limit": 1.5}}, "1.5 is no whole number"),
        ({"blank_drift": 3}, "a gate is a table of settings"),
        ([], "gate limits must be a table"),
    ],
)
@pytest.mark.parametrize("source", ["site", "assay"])
def test_a_wrong_limit_is_refused_with_its_place_and_remedy(given: object, message: str, source: str) -> None:
    site, assay = (given, {}) if source == "site" else ({}, given)
    with pytest.raises(ConfigurationError) as error:
        resolve_limits(site, assay, where=("gates.toml", "assays/x.toml [gates]"))
    assert message in str(error.value)
    assert str(error.value).startswith("gates.toml" if source == "site" else "assays/x.toml [gates]")


def test_importing_the_room_does_not_import_great_expectations() -> None:
    code = (
        "import sys, checks, checks.gates.page, checks.assess, checks.verdicts, checks.structure\n"
        "assert 'great_expectations' not in sys.modules\n"
        "assert 'checks.expectations' not in sys.modules\n"
    )
    done = subprocess.run([sys.executable, "-c", code], cwd=ROOT, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


@pytest.mark.parametrize(
    ("measured", "limit", "texts"),
    [
        (0.124, 0.10, ("12.4", "10")),
        (0.1001, 0.10, ("10.01", "10")),
        (0.10000001, 0.10, ("10.000001", "10")),
        (0.1 + 1e-12, 0.10, ("10", "10")),
        (0.0999, 0.125, ("10.0", "12.5")),
    ],
)
def test_measured_and_limit_are_told_apart(measured: float, limit: float, texts: tuple[str, str]) -> None:
    assert beside(measured, limit, 100) == texts


def test_one_read_is_not_one_reads() -> None:
    assert (counted(1, "read"), counted(2, "read"), counted(0, "read")) == ("1 read", "2 reads", "0 reads")
