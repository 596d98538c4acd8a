"""The structure suite on readings made to be wrong, one rule at a time."""

from __future__ import annotations

import json
from typing import Any

import numpy as np
import pandas as pd
import pytest

from checks.structure import RULES, StructureReport, check_structure, summarise
from models.errors import HalfsatError
from models.tables import READINGS

PLATES = ("one", "two")
READS = 4


def readings() -> pd.DataFrame:
    rows = [
        (plate, channel, well, number, 10.0 * (number - 1), 0.1 * number, "ok", 25.0, None, number, 1)
        for plate in PLATES
        for channel in ("340", "600")
        for well in ("A1", "B7", "H12")
        for number in range(1, READS + 1)
    ]
    frame = pd.DataFrame(rows, columns=READINGS.column_names)
    return frame.astype(dict.fromkeys(("signal", "time_s", "read_number", "temperature_c"), object))


def changed(**values: Any) -> pd.DataFrame:
    """Readings with other values in the second read of B7 in channel 340 of plate one."""
    frame = readings()
    row = (frame["plate_read_id"] == "one") & (frame["channel"] == "340") & (frame["well"] == "B7")
    row &= frame["read_number"] == 2
    assert row.sum() == 1
    for name, value in values.items():
        frame.loc[row, name] = value
    return frame


BROKEN: dict[str, tuple[pd.DataFrame, str]] = {
    "signal is text": (changed(signal="0.2"), "wrong_type_count"),
    "time is text": (changed(time_s="0:10"), "wrong_type_count"),
    "temperature is text": (changed(temperature_c="warm"), "wrong_type_count"),
    "ok without signal": (changed(signal=None), "lost_signal_count"),
    "ok with endless signal": (changed(signal=np.inf), "lost_signal_count"),
    "overflow with signal": (changed(state="overflow"), "stray_signal_count"),
    "missing with signal": (changed(state="missing"), "stray_signal_count"),
    "state unheard of": (changed(state="saturated"), "unknown_state_count"),
    "state past_limit is for the gates": (changed(state="past_limit"), "unknown_state_count"),
    "state unknown": (changed(state=None), "unknown_state_count"),
    "time before the start": (changed(time_s=-1.0), "wrong_time_count"),
    "time unknown": (changed(time_s=None), "wrong_time_count"),
    "time endless": (changed(time_s=np.inf), "wrong_time_count"),
    "number skipped": (changed(read_number=5), "unnumbered_count"),
    "number from 0": (changed(read_number=0), "unnumbered_count"),
    "number broken": (changed(read_number=2.5), "unnumbered_count"),
}


@pytest.fixture(scope="module")
def report() -> StructureReport:
    """All broken readings as plate reads of one batch: one suite judges them."""
    parts = [
        frame.assign(plate_read_id=f"{name} / " + frame["plate_read_id"])
        for name, (frame, _) in BROKEN.items()
    ]
    return check_structure(pd.concat([readings(), *parts], ignore_index=True))


@pytest.mark.parametrize("name", BROKEN)
def test_a_broken_rule_is_told_of_its_plate_read_alone(report: StructureReport, name: str) -> None:
    rule = BROKEN[name][1]
    reasons = report.reasons[f"{name} / one"]
    assert len(reasons) == 1
    assert reasons[0].startswith(RULES[rule])
    assert reasons[0].endswith("well B7)")
    assert f"{name} / two" not in report.reasons


def test_good_readings_pass_beside_bad_ones(report: StructureReport) -> None:
    assert not report.success
    assert not set(PLATES) & set(report.reasons)
    assert report.expectation_count == len(RULES)
    assert json.loads(json.dumps(report.document, allow_nan=False)) == report.document


def test_good_readings_pass_with_plain_types_too() -> None:
    frame = readings().astype({"signal": float, "time_s": float, "read_number": int, "temperature_c": float})
    lost = frame["read_number"] == 3
    frame.loc[lost, "state"] = "overflow"
    frame.loc[lost, "signal"] = np.nan
    outcome = check_structure(frame, {"one": 96, "two": 96})
    assert outcome.success
    assert outcome.reasons == {}
    assert outcome.row_count == 12


def counts(frame: pd.DataFrame, formats: dict[str, int] | None = None) -> dict[str, int]:
    summary = summarise(frame, formats or {})
    return {rule: int(summary[rule].sum()) for rule in RULES if summary[rule].sum()}


@pytest.mark.parametrize("name", ["A0", "A49", "AG1", "a1", "A01", "well 3", "", None])
def test_a_well_must_have_its_plain_name(name: str | None) -> None:
    frame = readings()
    frame["well"] = frame["well"].astype(object).where(frame["well"] != "B7", name)
    assert counts(frame) == {"unnamed_count": 2 * 2 * READS}


def test_a_well_must_lie_on_its_plate() -> None:
    frame = readings().replace({"well": {"B7": "I1"}})
    assert counts(frame, {"one": 384, "two": 384}) == {}
    assert counts(frame, {"one": 384, "two": 96}) == {"unnamed_count": 2 * READS}


def test_a_read_must_not_stand_twice() -> None:
    frame = readings()
    assert counts(pd.concat([frame, frame.iloc[[5]]])) == {"doubled_count": 1}


def test_times_must_pass_but_their_order_is_for_the_gates() -> None:
    frame = readings()
    assert counts(frame.assign(time_s=7.0)) == {"timeless_count": len(frame)}
    turned = frame.assign(time_s=frame["time_s"].to_numpy()[::-1])
    assert counts(turned) == {}


def test_many_wells_are_told_shortly() -> None:
    one = readings().query("plate_read_id == 'one' and channel == '340' and well == 'A1'")
    frame = pd.concat([one.assign(well=f"A{column}") for column in range(1, 9)]).assign(state="odd")
    reasons = check_structure(frame).reasons["one"]
    assert reasons == (f"{RULES['unknown_state_count']} (32 reads; well A1, A2, A3, A4, A5 and 3 more)",)


def test_frames_that_are_no_readings_are_refused() -> None:
    with pytest.raises(HalfsatError, match="lack the columns state"):
        check_structure(readings().drop(columns="state"))
    with pytest.raises(HalfsatError, match="no readings"):
        check_structure(readings()[:0])
