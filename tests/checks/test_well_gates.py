"""Gates on the curve of a well, just below and just above each of its limits, and where it cannot judge."""

from __future__ import annotations

import re
from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from checks.assess import Assessment, assess
from checks.gates import GATES, GateInput, resolve_limits
from models.records.assay import Schedule
from models.tables import FINDINGS
from tests.checks.batches import (
    BLANKS,
    READS,
    an_assay,
    clean_batch,
    together,
    unread,
    with_rates,
    with_reads,
)

Change = Callable[[GateInput], GateInput]

JUDGED_HERE = (
    "detector_range",
    "read_schedule",
    "substrate_depletion",
    "initial_slope_nonlinear",
    "blank_drift",
)


def findings_of(data: GateInput, gate: str, **settings: bool | int | float) -> pd.DataFrame:
    """Findings of one gate under its defaults but for some settings."""
    limits = resolve_limits({gate: settings}, {})
    recipes = dict.fromkeys(data.analyses["recipe_id"], limits)
    return assess("wells", data, recipes, {gate: GATES[gate]}).findings


def told(findings: pd.DataFrame) -> set[tuple[object, ...]]:
    columns = findings[["gate", "well", "outcome", "severity"]]
    return {tuple(row) for row in columns.itertuples(index=False)}


def bend(**values: object) -> Change:
    return lambda data: with_rates(data, "B3", **values)


def lost(numbers: list[int], state: str) -> Change:
    return lambda data: with_reads(data, "B3", numbers, state=state, signal=np.nan)


def gone_then_lost(gone: int, past: int) -> Change:
    return lambda data: with_reads(
        lost([past], "overflow")(data), "B3", [gone], state="missing", signal=np.nan
    )


def timed(number: int, time_s: float) -> Change:
    return lambda data: with_reads(data, "B3", [number], time_s=time_s)


# Limits are the defaults of the gates. The values on either side are our own arithmetic.
HELD: dict[str, tuple[str, Change]] = {
    "depletion above": ("substrate_depletion", bend(shortest_conversion=0.1001)),
    "window bends up": ("initial_slope_nonlinear", bend(slope_change=0.1001, slope_change_t=4.0)),
    "window bends down": ("initial_slope_nonlinear", bend(slope_change=-0.1001, slope_change_t=-4.0)),
    "early bend": ("initial_slope_nonlinear", bend(early_slope_change=-0.1001, early_slope_change_t=-4.0)),
    "falls at the start": ("initial_slope_nonlinear", bend(shape="falling")),
    "lag": ("initial_slope_nonlinear", bend(shape="lag", lag_s=95.0)),
    "burst": ("initial_slope_nonlinear", bend(shape="burst", early_slope_change=-0.4)),
    "blank above": ("blank_drift", bend(blank_rate_um_per_s=0.1001)),
    "blank falls": ("blank_drift", bend(blank_rate_um_per_s=-0.1001)),
    "blank of unknown error": (
        "blank_drift",
        bend(blank_rate_um_per_s=0.1001, blank_rate_se_um_per_s=np.nan),
    ),
    "blank just stands out": ("blank_drift", bend(blank_rate_um_per_s=0.15, blank_rate_se_um_per_s=0.0499)),
    "overflow at the window's end": ("detector_range", lost([15], "overflow")),
    "past the limit at once": ("detector_range", lost([1], "past_limit")),
    "overflow ends the window": ("detector_range", lost([16], "overflow")),
    "overflow ends the window after a missing read": ("detector_range", gone_then_lost(16, 17)),
    "two of 20 missing": ("read_schedule", lost([17, 20], "missing")),
    "long gap": ("read_schedule", timed(20, 190.0 + 15.1)),
    "time stands still": ("read_schedule", timed(20, 180.0)),
}
CLEAR: dict[str, Change] = {
    "depletion at the limit": bend(shortest_conversion=0.10),
    "window bends little": bend(slope_change=0.10, slope_change_t=50.0),
    "window bend not significant": bend(slope_change=0.9, slope_change_t=3.99),
    "early bend little": bend(early_slope_change=-0.10, early_slope_change_t=-50.0),
    "early bend not significant": bend(early_slope_change=-0.9, early_slope_change_t=-3.99),
    "blank at the limit": bend(blank_rate_um_per_s=0.10),
    "blank in its noise": bend(blank_rate_um_per_s=0.15, blank_rate_se_um_per_s=0.0501),
    "overflow later than the window's end": lost([17], "overflow"),
    "overflow past the conversion limit": lambda data: lost([16], "overflow")(bend(conversion=0.0934)(data)),
    "one of 20 missing": lost([17], "missing"),
    "gap of one read": timed(20, 190.0 + 14.9),
}


NEEDED = {
    "shortest_conversion": "substrate_depletion",
    "slope_change": "initial_slope_nonlinear",
    "slope_change_t": "initial_slope_nonlinear",
    "early_slope_change": "initial_slope_nonlinear",
    "early_slope_change_t": "initial_slope_nonlinear",
    "raw_rate_um_per_s": "blank_drift",
    "blank_rate_um_per_s": "blank_drift",
}
MOST = list(range(4, READS + 1))
ALL = list(range(1, READS + 1))


def without_blanks(data: GateInput) -> GateInput:
    blank = (data.wells["analysis_id"] == "plate-2") & data.wells["well"].isin(BLANKS)
    return replace(data, wells=data.wells[~blank])


def not_exported(data: GateInput) -> GateInput:
    rows = (data.readings["well"] == "B3") & (data.readings["analysis_id"] == "plate-1")
    return replace(unread(data, "B3"), readings=data.readings[~rows])


SPECIAL: dict[str, Change] = {
    "clean": lambda data: data,
    "unread": lambda data: unread(data, "B3"),
    "overflow without window": lambda data: with_reads(unread(data, "B3"), "B3", MOST, state="overflow"),
    "missing without window": lambda data: with_reads(unread(data, "B3"), "B3", MOST, state="missing"),
    "all missing": lambda data: with_reads(unread(data, "B3"), "B3", ALL, state="missing"),
    "not exported": not_exported,
    "no blanks": without_blanks,
    "rate in its noise": bend(raw_rate_um_per_s=0.01, v0_se_um_per_s=0.02),
    "sentence": bend(shortest_conversion=0.124),
    "gone": bend(shortest_conversion=1.02),
}


@pytest.fixture(scope="module")
def outcome() -> Assessment:
    """All cases in one batch, under default limits: one suite judges them."""
    changes = {
        **{name: change for name, (_, change) in HELD.items()},
        **CLEAR,
        **{f"unknown {column}": bend(**{column: np.nan}) for column in NEEDED},
        **SPECIAL,
    }
    data = together({name: change(clean_batch()) for name, change in changes.items()})
    judged_here = {name: GATES[name] for name in JUDGED_HERE}
    return assess("wells", data, {"recipe-1": resolve_limits({}, {})}, judged_here)


def case(outcome: Assessment, name: str) -> pd.DataFrame:
    return outcome.findings[outcome.findings["analysis_id"].str.startswith(f"{name} / ")]


def test_nothing_is_found_where_nothing_is_wrong(outcome: Assessment) -> None:
    assert case(outcome, "clean").empty


@pytest.mark.parametrize("name", HELD)
def test_a_breach_is_held_by_its_own_gate_alone(outcome: Assessment, name: str) -> None:
    findings = case(outcome, name)
    assert told(findings) == {(HELD[name][0], "B3", "breach", "hold")}
    assert findings["analysis_id"].tolist() == [f"{name} / plate-1"]


@pytest.mark.parametrize("name", CLEAR)
def test_what_keeps_within_its_limit_is_not_held(outcome: Assessment, name: str) -> None:
    assert case(outcome, name).empty


@pytest.mark.parametrize(
    ("schedule", "words"),
    [
        (Schedule(read_count=READS + 1), "20 reads, the assay's schedule 21: a difference of 1 (limit 0)"),
        (Schedule(read_count=READS - 1), "20 reads, the assay's schedule 19: a difference of 1 (limit 0)"),
        (Schedule(interval_s=10.0 / 1.051), "5.1 % off (limit 5 %)"),
        (Schedule(interval_s=20.0), "50.0 % off (limit 5 %)"),
        (Schedule(read_count=READS, interval_s=10.0 / 1.049), None),
    ],
)
def test_a_schedule_is_held_in_every_well_of_that_recipe(schedule: Schedule, words: str | None) -> None:
    data = clean_batch(("recipe-1", "recipe-2"))
    data = replace(data, assays={"recipe-1": an_assay(schedule), "recipe-2": an_assay()})
    findings = findings_of(data, "read_schedule")
    assert len(findings) == (0 if words is None else 12)
    if words is not None:
        assert set(findings["analysis_id"]) == {"plate-1"}
        assert findings["sentence"].str.contains(words, regex=False).all()


@pytest.mark.parametrize(
    ("name", "gate", "measured", "words"),
    [
        ("overflow without window", "detector_range", 17.0, "17 of 20 reads overflowed"),
        ("missing without window", "read_schedule", 17.0, "17 of 20 reads are missing"),
        ("all missing", "read_schedule", 0.0, "0 reads were made (all 20 reads are missing"),
        ("not exported", "read_schedule", 0.0, "0 reads were made (no read of this well"),
    ],
)
def test_what_leaves_no_window_is_void(
    outcome: Assessment, name: str, gate: str, measured: float, words: str
) -> None:
    findings = case(outcome, name).query("outcome == 'breach'")
    assert told(findings) == {(gate, "B3", "breach", "void")}
    assert findings["measured"].tolist() == [measured]
    assert findings["sentence"].tolist()[0].startswith(words)


def test_a_lag_or_burst_can_be_accepted_without_being_held_as_a_bend() -> None:
    data = with_rates(clean_batch(), "B3", shape="lag", lag_s=95.0, early_slope_change=0.4)
    data = with_rates(data, "B3", early_slope_change_t=20.0)
    data = with_rates(data, "B4", shape="burst", early_slope_change=-0.4, early_slope_change_t=-20.0)
    both = findings_of(data, "initial_slope_nonlinear")
    assert both["well"].tolist() == ["B3", "B4"]
    assert both["unit"].tolist() == ["s", "1"]
    assert "A lag of 95 s" in both["sentence"].tolist()[0]
    assert "begins with a burst" in both["sentence"].tolist()[1]
    assert findings_of(data, "initial_slope_nonlinear", hold_lag_and_burst=False).empty


def test_slow_wells_are_judged_against_a_floor_of_their_series() -> None:
    slow = {"raw_rate_um_per_s": 0.02, "v0_se_um_per_s": 0.0051}
    small = with_rates(clean_batch(), "B3", **slow, blank_rate_um_per_s=0.0099, blank_rate_se_um_per_s=0.001)
    large = with_rates(clean_batch(), "B3", **slow, blank_rate_um_per_s=0.0101, blank_rate_se_um_per_s=0.001)
    assert findings_of(small, "blank_drift").empty
    said = findings_of(large, "blank_drift")["sentence"].tolist()
    assert "10.1 % of 10 % of its series' highest rate" in said[0]
    without_floor = findings_of(small, "blank_drift", low_rate_share=0.0)
    assert without_floor["measured"].tolist() == [pytest.approx(0.495)]


def test_a_rate_lost_in_noise_has_no_share(outcome: Assessment) -> None:
    findings = case(outcome, "rate in its noise")
    assert told(findings) == {("blank_drift", "B3", "not_assessed", "none")}
    assert "lost in the noise" in findings["sentence"].tolist()[0]


def test_a_plate_without_blanks_says_so_once(outcome: Assessment) -> None:
    findings = case(outcome, "no blanks")
    assert findings[["gate", "analysis_id", "subject", "outcome"]].to_numpy().tolist() == [
        ["blank_drift", "no blanks / plate-2", "plate_read", "not_assessed"]
    ]
    assert "the plate has no blank" in findings["sentence"].tolist()[0]


def test_blanks_of_a_plate_are_held_against_the_site_limit_once_it_is_set() -> None:
    data = clean_batch()
    for well, slope in zip(BLANKS, (0.0010, 0.0014), strict=True):
        for number in range(1, READS + 1):
            signal = 0.1 - slope / 60 * 10.0 * (number - 1)
            data = with_reads(data, well, [number], signal=signal)
    assert findings_of(data, "blank_drift").empty
    assert findings_of(data, "blank_drift", plate_slope_on=True, plate_slope_limit=0.00121).empty
    findings = findings_of(data, "blank_drift", plate_slope_on=True, plate_slope_limit=0.00119)
    assert findings["subject"].tolist() == ["plate_read"]
    assert findings["measured"].tolist() == [pytest.approx(0.0012)]
    assert "0.0012 signal per min (limit 0.00119)" in findings["sentence"].tolist()[0]


def test_a_well_without_a_rate_is_not_assessed_by_any_gate_that_needs_one(outcome: Assessment) -> None:
    assert told(case(outcome, "unread")) == {
        (gate, "B3", "not_assessed", "none")
        for gate in ("substrate_depletion", "initial_slope_nonlinear", "blank_drift")
    }


@pytest.mark.parametrize(("column", "gate"), NEEDED.items(), ids=NEEDED)
def test_an_unknown_value_never_passes(outcome: Assessment, column: str, gate: str) -> None:
    findings = case(outcome, f"unknown {column}")
    assert told(findings) == {(gate, "B3", "not_assessed", "none")}
    assert findings["sentence"].str.startswith("Not assessed: ").all()


def test_a_conversion_says_how_low_the_rate_is(outcome: Assessment) -> None:
    # First-order decay: 0.124 / -ln(1 - 0.124) = 0.9366, so 6 % low.
    assert case(outcome, "sentence")["sentence"].tolist() == [
        "12.4 % of the substrate was consumed within the shortest usable window (limit 10 %). "
        "Its rate is up to 6 % low."
    ]
    assert "The substrate ran out" in case(outcome, "gone")["sentence"].tolist()[0]


def test_every_sentence_tells_what_was_measured_and_the_limit(outcome: Assessment) -> None:
    breaches = outcome.findings[outcome.findings["outcome"] == "breach"]
    assert set(breaches["gate"]) == set(JUDGED_HERE)
    for row in breaches.itertuples():
        said = [float(text) for text in re.findall(r"-?\d+(?:\.\d+)?", row.sentence)]
        for value in (row.measured, row.limit_value):
            shares = (value, value * 100)
            assert any(abs(text - share) <= 0.051 for text in said for share in shares), row.sentence
        assert "limit" in row.sentence


def test_findings_fill_the_table_of_findings(outcome: Assessment) -> None:
    stored = FINDINGS.to_arrow(outcome.findings)
    assert stored.num_rows == len(outcome.findings) > len(HELD)
    assert outcome.findings["finding_id"].is_unique
