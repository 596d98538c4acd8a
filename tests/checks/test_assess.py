"""The run itself: recipes, switches, errors, documents, and that expectations flag what their rule names."""

from __future__ import annotations

import json
import math
from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import Phase, given, settings
from hypothesis import strategies as st

from checks.assess import assess
from checks.gates import GATES, Gate, Limits, resolve_limits
from checks.gates.gate import metrics_frame
from checks.validation import ExpectationFailed
from models.errors import UnknownName
from models.identity import result_id
from tests.checks.batches import clean_batch, clean_series, with_rates

DEFAULTS = resolve_limits({}, {})
DEPLETION = {"substrate_depletion": GATES["substrate_depletion"]}


def depleted(conversion: float = 0.12) -> Any:
    return with_rates(
        with_rates(clean_batch(("recipe-1", "recipe-2")), "B3", shortest_conversion=conversion),
        "C1",
        "plate-2",
        shortest_conversion=conversion,
    )


def test_each_recipe_is_judged_by_its_own_limits() -> None:
    lenient = resolve_limits({}, {"substrate_depletion": {"limit": 0.13}})
    result = assess("wells", depleted(), {"recipe-1": DEFAULTS, "recipe-2": lenient}, DEPLETION)
    assert result.findings[["analysis_id", "well", "limit_value"]].to_numpy().tolist() == [
        ["plate-1", "B3", 0.10]
    ]
    assert [(run.suite, run.recipe_id, run.success) for run in result.runs] == [
        ("wells.well", "recipe-1", False),
        ("wells.well", "recipe-2", True),
    ]


def test_a_gate_turned_off_finds_nothing_and_the_document_says_so() -> None:
    off = resolve_limits({"substrate_depletion": {"on": False}}, {})
    result = assess("wells", depleted(), {"recipe-1": off, "recipe-2": DEFAULTS})
    breaches = result.findings[result.findings["outcome"] == "breach"]
    assert breaches["analysis_id"].tolist() == ["plate-2"]
    well_run = next(run for run in result.runs if run.suite == "wells.well" and run.recipe_id == "recipe-1")
    assert well_run.document["limits"]["substrate_depletion"]["on"] is False
    rules = [expectation["meta"]["gate"] for expectation in well_run.document["suite"]["expectations"]]
    assert "substrate_depletion" not in rules
    assert "blank_drift" in rules


def test_document_is_plain_small_and_names_rule_limit_and_flagged_wells() -> None:
    result = assess("wells", depleted(), {"recipe-1": DEFAULTS, "recipe-2": DEFAULTS})
    run = result.runs[0]
    document = run.document
    assert json.loads(json.dumps(document, allow_nan=False)) == document
    assert set(document) == {"suite", "result", "limits", "recipe_id"}
    assert run.row_count == 12
    assert run.expectation_count == len(document["suite"]["expectations"])
    flagged = [entry for entry in document["result"]["results"] if not entry["success"]]
    assert [(entry["meta"]["rule"], entry["flagged"]) for entry in flagged] == [
        ("conversion", {"plate-1": ["B3"]})
    ]
    rule = next(e for e in document["suite"]["expectations"] if e["meta"]["rule"] == "conversion")
    assert rule["kwargs"] == {"column": "substrate_depletion__conversion", "max_value": 0.1}
    assert len(json.dumps(document)) < 20_000


def test_a_stored_suite_loads_again_and_judges_the_same() -> None:
    import great_expectations as gx

    from checks.assess import metrics_table
    from checks.validation import validate

    data = depleted()
    stored = json.loads(
        json.dumps(assess("wells", data, dict.fromkeys(("recipe-1", "recipe-2"), DEFAULTS)).runs[0].document)
    )
    suite = gx.ExpectationSuite(
        name="wells.well", expectations=[dict(entry) for entry in stored["suite"]["expectations"]]
    )
    gates = [gate for gate in GATES.values() if "well" in gate.subjects and gate.phase == "wells"]
    metrics = {gate.name: gate.metrics(data) for gate in gates}
    table = metrics_table(gates, metrics, "well", {"plate-1"})
    again = validate("wells.well", suite.expectations, table, ("analysis_id", "well"))
    assert again.document["result"] == stored["result"]


def test_same_input_gives_the_same_findings_runs_and_ids() -> None:
    limits = dict.fromkeys(("recipe-1", "recipe-2"), DEFAULTS)
    first, second = (assess("wells", depleted(), limits, DEPLETION) for _ in range(2))
    pd.testing.assert_frame_equal(first.findings, second.findings)
    assert first.runs == second.runs
    expected = result_id("plate-1", "substrate_depletion", "well", "B3", None, None)
    assert first.findings["finding_id"].tolist()[0] == expected


def test_a_missing_column_is_an_error_and_never_a_pass() -> None:
    def without_column(data: Any) -> pd.DataFrame:
        return GATES["substrate_depletion"].metrics(data).rename(columns={"conversion": "other"})

    broken = replace(GATES["substrate_depletion"], metrics=without_column, needs={"well": ()})
    with pytest.raises(ExpectationFailed, match=r"could not be evaluated: .*conversion"):
        assess("wells", clean_batch(), {"recipe-1": DEFAULTS}, {broken.name: broken})


def test_an_expectation_that_raises_is_an_error_and_never_a_pass() -> None:
    def words(data: Any) -> pd.DataFrame:
        return GATES["blank_drift"].metrics(data).assign(blank_t="many")

    broken = replace(GATES["blank_drift"], metrics=words)
    with pytest.raises(ExpectationFailed, match="could not be evaluated"):
        assess("wells", clean_batch(), {"recipe-1": DEFAULTS}, {broken.name: broken})


def test_a_recipe_without_limits_is_refused() -> None:
    with pytest.raises(UnknownName, match="no gate limits for recipe"):
        assess("wells", clean_batch(), {})


def test_a_batch_without_wells_has_neither_findings_nor_runs() -> None:
    data = clean_batch()
    nothing = replace(data, wells=data.wells[:0], rates=data.rates[:0], readings=data.readings[:0])
    result = assess("wells", nothing, {"recipe-1": DEFAULTS})
    assert result.findings.empty
    assert result.runs == []


NUMBER = st.one_of(st.floats(-1.0, 4.0), st.sampled_from([0.0, 0.1, 3.0, 4.0, math.nan, math.inf]))
COLUMNS: dict[str, tuple[str, ...]] = {
    "detector_range": (
        "lost_count", "lost_without_window_count", "read_count", "cut_off_conversion", "cut_off_count",
    ),
    "read_schedule": (
        "made_count", "missing_without_window_count", "disorder_count", "missing_share", "gap_ratio",
        "count_difference", "interval_departure", "read_count", "missing_count", "interval_s",
        "planned_count", "planned_interval_s",
    ),
    "substrate_depletion": ("conversion",),
    "initial_slope_nonlinear": (
        "slope_change", "slope_change_t", "early_slope_change", "early_slope_change_t", "early_bend", "lag_s",
    ),
    "blank_drift": ("blank_rate_um_per_s", "raw_rate_um_per_s", "highest_rate_um_per_s", "blank_t"),
    "saturation_not_reached": ("ratio", "open_count", "highest_substrate_um", "hill_n"),
    "low_end_not_covered": ("ratio", "lowest_substrate_um", "hill_n"),
    "below_detection": ("ratio", "rate_um_per_s"),
    "temperature_band": ("excursion_k", "low_c", "high_c", "assay_c"),
    "replicate_scatter": ("unexplained_cv", "explained_cv", "level_um"),
    "steady_state_valid": ("enzyme_share", "enzyme_nm", "sum_um"),
    "standard_curve": ("error", "slope_change", "slope_change_t", "level_um", "read_um", "against_um"),
    "reference_off_chart": ("distance_sd", "of_value", "of_mean", "of_sd"),
    "fit_misfit": ("p_value", "lack_of_fit_p", "runs_p"),
    "initial_vs_full_curve": ("p_value", "km_ratio", "km_ratio_low", "km_ratio_high", "vmax_ratio"),
    "control_window": (
        "z_prime", "signal_to_blank", "reference_mean", "reference_sd", "blank_mean", "blank_sd",
        "reference_count", "blank_count", "substrate_um",
    ),
    "outlier_in_series": ("p_value", "relative_residual", "studentised_residual", "point_count"),
    "enzyme_linearity": ("departure", "certainty", "p_value", "level"),
    "enzyme_inactivation": ("lost", "certainty", "p_value", "longest_s", "curve_count"),
    "plate_position": ("effect", "certainty", "p_value", "well_count"),
}  # fmt: skip


WORDS: dict[str, dict[str, object]] = {
    "low_end_not_covered": {"k_name": "Km"},
    "steady_state_valid": {"k_name": "Km"},
    "replicate_scatter": {"wells": ("A1", "A2")},
    "reference_off_chart": {"of_lot": "R1", "of_constant": "km", "of_unit": "umol/L"},
    "fit_misfit": {"law": "hill"},
    "control_window": {"reference_count": 3, "blank_count": 3},
    "outlier_in_series": {"point_count": 24},
    "enzyme_linearity": {"unit": "nmol/L"},
    "enzyme_inactivation": {"longest_s": 600.0, "curve_count": 12},
    "plate_position": {"kind": "column", "place": 3, "well_count": 8},
}
"""Text that the sentences of these gates need."""
BEYOND: dict[str, Callable[[dict[str, Any]], bool]] = {
    "low_end_not_covered": lambda row: row["ratio"] > 1,
    "below_detection": lambda row: row["ratio"] < 3,
    "temperature_band": lambda row: row["excursion_k"] > 0.5,
    "replicate_scatter": lambda row: row["unexplained_cv"] > 0.15,
    "steady_state_valid": lambda row: row["enzyme_share"] > 0.01,
    "standard_curve": lambda row: (
        row["error"] > 0.05 or (abs(row["slope_change"]) > 0.05 and abs(row["slope_change_t"]) >= 4)
    ),
    "reference_off_chart": lambda row: row["distance_sd"] > 3,
    "fit_misfit": lambda row: row["p_value"] < 0.01,
    "initial_vs_full_curve": lambda row: row["p_value"] < 0.01,
    "control_window": lambda row: row["z_prime"] < 0.5,
    "outlier_in_series": lambda row: row["p_value"] < 0.01,
    "enzyme_linearity": lambda row: abs(row["departure"]) > 0.1 and abs(row["certainty"]) >= 0.99,
    "enzyme_inactivation": lambda row: abs(row["lost"]) > 0.1 and abs(row["certainty"]) >= 0.99,
    "plate_position": lambda row: abs(row["effect"]) > 0.05 and abs(row["certainty"]) >= 0.99,
}
"""Rules of one line."""


def rule_says(gate: str, row: dict[str, Any]) -> bool:
    """The rules once more, one row at a time in plain Python, under default limits."""
    if gate in BEYOND:
        return BEYOND[gate](row)
    if gate == "detector_range":
        return (
            row["lost_count"] > 0 or row["lost_without_window_count"] > 0 or row["cut_off_conversion"] < 0.10
        )
    if gate == "read_schedule":
        return (
            row["made_count"] < 1
            or row["missing_without_window_count"] > 0
            or row["disorder_count"] > 0
            or row["missing_share"] > 0.05
            or row["gap_ratio"] > 2.5
            or row["count_difference"] > 0
            or row["interval_departure"] > 0.05
        )
    if gate == "substrate_depletion":
        return row["conversion"] > 0.10
    if gate == "initial_slope_nonlinear":
        return (
            row["shape"] in ("lag", "burst", "falling")
            or (abs(row["slope_change"]) > 0.10 and abs(row["slope_change_t"]) >= 4)
            or (abs(row["early_bend"]) > 0.10 and abs(row["early_slope_change_t"]) >= 4)
        )
    if gate == "blank_drift":
        floor = 0.10 * row["highest_rate_um_per_s"]
        raw = row["raw_rate_um_per_s"]
        if math.isnan(raw) or math.isnan(floor):
            return False
        blank, over = row["blank_rate_um_per_s"], max(raw, floor)
        return bool(np.float64(blank) / np.float64(over) > 0.10) and row["blank_t"] >= 3
    return row["ratio"] < 3 or row["open_count"] > 0


def fixed(gate: Gate, rows: list[dict[str, Any]]) -> Gate:
    """The gate with these metrics, on wells or series of plate-1, or on plate reads of their own."""
    number = [str(one) for one in range(len(rows))]
    plate = number if gate.subjects[0] == "plate_read" else "plate-1"
    ids = pd.DataFrame({"analysis_id": plate, "well": number, "series_id": number, "lot": number})
    frame = metrics_frame(gate.subjects[0], ids, "", **pd.DataFrame(rows).to_dict("list"))
    return replace(gate, subjects=gate.subjects[:1], metrics=lambda _: frame)


@pytest.mark.parametrize("gate", GATES.values(), ids=GATES)
@settings(max_examples=3, deadline=None, phases=[Phase.explicit, Phase.generate])
@given(data=st.data())
def test_expectations_flag_exactly_the_rows_that_the_rule_names(gate: Gate, data: st.DataObject) -> None:
    columns: dict[str, Any] = dict.fromkeys(COLUMNS[gate.name], NUMBER)
    columns |= {name: st.just(value) for name, value in WORDS.get(gate.name, {}).items()}
    if gate.name == "low_end_not_covered":
        columns["hill_n"] = st.just(1.0)
    if gate.name == "initial_slope_nonlinear":
        columns["shape"] = st.sampled_from(["straight", "falling", "lag", "burst"])
    if gate.name == "blank_drift":
        columns = {name: st.one_of(st.floats(0.01, 4.0), st.just(math.nan)) for name in columns}
    if gate.name == "saturation_not_reached":
        # A power of a positive ratio and a count: neither is ever negative.
        columns |= dict.fromkeys(
            ("ratio", "open_count"), st.one_of(st.floats(0, 9), st.sampled_from([3.0, math.nan]))
        )
        columns |= {"k_name": st.just("Km"), "vmax_open": st.just(True), "k_open": st.just(True)}
    rows = data.draw(st.lists(st.fixed_dictionaries(columns), min_size=20, max_size=40))
    batch = clean_batch() if gate.phase == "wells" else clean_series()
    if gate.subjects[0] == "plate_read":
        plates = pd.DataFrame({"analysis_id": [str(one) for one in range(len(rows))]})
        batch = replace(batch, analyses=plates.assign(recipe_id="recipe-1"))
    limits: dict[str, Limits] = {"recipe-1": DEFAULTS}
    with np.errstate(all="ignore"):
        findings = assess(gate.phase, batch, limits, {gate.name: fixed(gate, rows)}).findings
        expected = {str(number) for number, row in enumerate(rows) if rule_says(gate.name, row)}
    key = {"well": "well", "series": "series_id", "lot": "lot", "plate_read": "analysis_id"}[gate.subjects[0]]
    breaches = findings[findings["outcome"] == "breach"]
    assert set(breaches[key]) == expected
    unknown = {
        str(number)
        for number, row in enumerate(rows)
        if any(math.isnan(row[name]) for name in gate.needs[gate.subjects[0]])
    }
    assert set(findings.loc[findings["outcome"] == "not_assessed", key]) == unknown - expected
    assert not breaches["sentence"].str.contains("limit").eq(False).any()
