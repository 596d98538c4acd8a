"""Standings from findings, and consequences told apart from causes."""

from __future__ import annotations

import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from checks.gates import GATES
from checks.verdicts import (
    CONSEQUENCES,
    STANDING_RULES,
    STANDINGS,
    plate_read_standing,
    series_standings,
    well_standings,
    without_consequences,
)
from models.tables import FINDINGS

WELLS = pd.DataFrame({"analysis_id": ["a", "a", "b"], "well": ["A1", "A2", "A1"]}, index=[7, 8, 9])


def findings(*rows: tuple[str, str, str, str, str]) -> pd.DataFrame:
    """Rows of analysis, well or series or lot or '', gate, outcome, severity."""
    full = []
    for number, (analysis, subject, gate, outcome, severity) in enumerate(rows):
        named = {"s": "series", "L": "lot"}
        kind = "plate_read" if not subject else named.get(subject[0], "well")
        full.append(
            {
                "finding_id": str(number),
                "analysis_id": analysis,
                "gate": gate,
                "subject": kind,
                "well": subject if kind == "well" else None,
                "series_id": subject if kind == "series" else None,
                "lot": subject if kind == "lot" else None,
                "outcome": outcome,
                "severity": severity,
            }
        )
    return pd.DataFrame(full, columns=FINDINGS.column_names)


HOLD, VOID, UNKNOWN = ("breach", "hold"), ("breach", "void"), ("not_assessed", "none")


@pytest.mark.parametrize(
    ("rows", "standing"),
    [
        ([], "clear"),
        ([("blank_drift", *HOLD)], "held"),
        ([("detector_range", *VOID)], "void"),
        ([("blank_drift", *HOLD), ("read_schedule", *VOID)], "void"),
        ([("blank_drift", *UNKNOWN)], "clear"),
        ([("substrate_depletion", *UNKNOWN)], "held"),
        ([("initial_slope_nonlinear", *UNKNOWN)], "held"),
    ],
)
def test_the_worst_finding_gives_a_well_its_standing(rows: list[tuple[str, str, str]], standing: str) -> None:
    found = well_standings(WELLS, findings(*(("a", "A2", *row) for row in rows)))
    assert found.to_dict() == {7: "clear", 8: standing, 9: "clear"}


def test_findings_on_series_and_plates_leave_wells_as_they_are() -> None:
    found = findings(("a", "series 1", "saturation_not_reached", *HOLD), ("a", "", "blank_drift", *HOLD))
    assert set(well_standings(WELLS, found)) == {"clear"}


@pytest.mark.parametrize(
    ("cause", "consequence"),
    [
        (("detector_range", *VOID), ("initial_slope_nonlinear", *HOLD)),
        (("detector_range", *VOID), ("substrate_depletion", *UNKNOWN)),
        (("detector_range", *VOID), ("read_schedule", *HOLD)),
        (("read_schedule", *VOID), ("blank_drift", *UNKNOWN)),
        (("detector_range", *HOLD), ("initial_slope_nonlinear", *HOLD)),
        (("substrate_depletion", *HOLD), ("initial_slope_nonlinear", *HOLD)),
        (("substrate_depletion", *UNKNOWN), ("initial_slope_nonlinear", *UNKNOWN)),
        (("substrate_depletion", *UNKNOWN), ("blank_drift", *UNKNOWN)),
    ],
)
@pytest.mark.parametrize("turned", [False, True])
def test_a_consequence_is_not_told_beside_its_cause(
    cause: tuple[str, str, str], consequence: tuple[str, str, str], turned: bool
) -> None:
    rows = [("a", "A1", *cause), ("a", "A1", *consequence)]
    both = findings(*(reversed(rows) if turned else rows))
    assert without_consequences(both)["gate"].tolist() == [cause[0]]
    apart = findings(("a", "A1", *cause), ("a", "A2", *consequence), ("b", "A1", *consequence))
    assert len(without_consequences(apart)) == 3


@pytest.mark.parametrize(
    ("one", "other"),
    [
        (("substrate_depletion", *HOLD), ("blank_drift", *HOLD)),
        (("blank_drift", *HOLD), ("initial_slope_nonlinear", *HOLD)),
        (("read_schedule", *HOLD), ("initial_slope_nonlinear", *HOLD)),
        (("detector_range", *HOLD), ("substrate_depletion", *HOLD)),
        (("substrate_depletion", *UNKNOWN), ("initial_slope_nonlinear", *HOLD)),
    ],
)
def test_two_causes_are_both_told(one: tuple[str, str, str], other: tuple[str, str, str]) -> None:
    assert len(without_consequences(findings(("a", "A1", *one), ("a", "A1", *other)))) == 2


ROW = st.tuples(
    st.sampled_from(["a", "b"]),
    st.sampled_from(["A1", "A2"]),
    st.sampled_from(sorted(GATES)),
    st.sampled_from([HOLD, VOID, UNKNOWN]),
).map(lambda row: (row[0], row[1], row[2], *row[3]))


@settings(max_examples=25, deadline=None)
@given(st.lists(ROW, max_size=8, unique_by=lambda row: row[:3]))
def test_leaving_out_consequences_changes_no_standing_and_keeps_a_cause(rows: list[tuple[str, ...]]) -> None:
    before = findings(*rows)
    after = without_consequences(before)
    assert well_standings(WELLS, before).equals(well_standings(WELLS, after))
    subjects = ["analysis_id", "well"]
    assert set(map(tuple, before[subjects].to_numpy())) == set(map(tuple, after[subjects].to_numpy()))
    assert without_consequences(after).equals(after)


def test_the_rules_name_gates_and_standings_that_exist() -> None:
    assert {rule.gate for rule in STANDING_RULES} <= {*GATES, "any"}
    assert {rule.standing for rule in STANDING_RULES} <= set(STANDINGS)
    assert {rule.cause for rule in CONSEQUENCES} <= set(GATES)
    assert {rule.gate for rule in CONSEQUENCES} <= {*GATES, "any"}
    assert all(rule.why for rule in (*STANDING_RULES, *CONSEQUENCES))


def one_series(**values: object) -> pd.DataFrame:
    row = {
        "series_id": "series 1",
        "analysis_id": "a",
        "lot": "L1",
        "well_count": 10,
        "clear_well_count": 10,
        "refusal": None,
    }
    return pd.DataFrame([row | values]).astype({"refusal": object})


@pytest.mark.parametrize(
    ("series", "found", "standing"),
    [
        (one_series(), findings(), "clear"),
        (one_series(clear_well_count=5), findings(), "clear"),
        (one_series(clear_well_count=4), findings(), "held"),
        (one_series(refusal="two levels only"), findings(), "held"),
        (one_series(), findings(("a", "series 1", "saturation_not_reached", *HOLD)), "held"),
        (one_series(), findings(("a", "series 1", "saturation_not_reached", *UNKNOWN)), "held"),
        (one_series(), findings(("a", "series 2", "saturation_not_reached", *HOLD)), "clear"),
        (one_series(), findings(("a", "L1", "enzyme_linearity", *HOLD)), "held"),
        (one_series(), findings(("a", "L2", "enzyme_linearity", *HOLD)), "clear"),
        (one_series(), findings(("b", "L1", "enzyme_linearity", *HOLD)), "clear"),
        (one_series(), findings(("a", "", "blank_drift", *HOLD)), "held"),
        (one_series(), findings(("a", "", "blank_drift", *UNKNOWN)), "clear"),
        (one_series(), findings(("b", "", "blank_drift", *HOLD)), "clear"),
    ],
)
def test_standing_of_a_series(series: pd.DataFrame, found: pd.DataFrame, standing: str) -> None:
    assert series_standings(series, found).tolist() == [standing]


def test_a_series_of_void_wells_only_is_void() -> None:
    wells = pd.DataFrame({"series_id": ["series 1", "series 1", None], "standing": ["void", "void", "clear"]})
    series = one_series(clear_well_count=0, refusal="no clear well")
    assert series_standings(series, findings(), wells).tolist() == ["void"]
    wells.loc[1, "standing"] = "held"
    assert series_standings(series, findings(), wells).tolist() == ["held"]


@pytest.mark.parametrize(
    ("wells", "series", "found", "standing"),
    [
        (["clear", "clear"], "clear", findings(), "clear"),
        (["held", "clear"], "clear", findings(), "held"),
        (["void", "clear"], "clear", findings(), "clear"),
        (["void", "void"], "held", findings(), "void"),
        (["clear", "clear"], "held", findings(), "held"),
        (["clear", "clear"], "clear", findings(("a", "", "blank_drift", *HOLD)), "held"),
        (["clear", "clear"], "clear", findings(("a", "", "blank_drift", *UNKNOWN)), "clear"),
    ],
)
def test_standing_of_a_plate_read(wells: list[str], series: str, found: pd.DataFrame, standing: str) -> None:
    well_rows = pd.DataFrame(
        {
            "analysis_id": ["a", "a", "a", "b"],
            "series_id": ["series 1", "series 1", None, "series 2"],
            "standing": [*wells, "clear", "clear"],
        }
    )
    series_rows = pd.DataFrame({"analysis_id": ["a", "b"], "standing": [series, "clear"]})
    standings = plate_read_standing(well_rows, series_rows, found)
    assert standings.to_dict() == {"a": standing, "b": "clear"}
