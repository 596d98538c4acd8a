"""Gates on plate reads: temperature, standards, baseline of the blanks; and wells against their blank."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from checks.gates.below_detection import GATE as BELOW_DETECTION
from checks.gates.blank_drift import GATE as BLANK_DRIFT
from checks.gates.gate import GateInput
from checks.gates.standard_curve import GATE as STANDARD_CURVE
from checks.gates.standard_curve import metrics as standard_metrics
from checks.gates.temperature_band import GATE as TEMPERATURE_BAND
from tests.checks.batches import (
    BLANKS,
    READS,
    STANDARDS_UM,
    clean_batch,
    judged,
    standards,
    unread,
    with_assay,
    with_frame,
    with_rates,
    with_reads,
)

NAN = float("nan")
OWN_CURVE = {"response": None, "standard_curve": {"points_from": "plate"}}


def told(findings: pd.DataFrame) -> list[list[Any]]:
    return findings[["subject", "analysis_id", "outcome", "severity"]].to_numpy().tolist()


def at_temperature(low: float, high: float) -> GateInput:
    place = {"analysis_id": "plate-1"}
    return with_frame(clean_batch(), "plate_reads", place, temperature_low_c=low, temperature_high_c=high)


@pytest.mark.parametrize(
    ("low", "high", "words"),
    [
        # The limit itself, in tenths that are no binary fractions: 25.5 - 25.0 and 25.0 - 24.5.
        (24.5, 25.5, None),
        (24.9, 25.6, "from 24.9 to 25.6 °C, up to 0.6 K from the assay's 25 °C (limit 0.5 K)"),
        (24.4, 25.0, "from 24.4 to 25 °C, up to 0.6 K from"),
        (NAN, 26.5, "from 26.5 to 26.5 °C, up to 1.5 K from"),
    ],
)
def test_half_a_kelvin_to_either_side_is_the_band(low: float, high: float, words: str | None) -> None:
    findings = judged(TEMPERATURE_BAND, at_temperature(low, high))
    assert told(findings) == ([] if words is None else [["plate_read", "plate-1", "breach", "hold"]])
    if words is not None:
        assert words in findings["sentence"].tolist()[0]
        assert findings[["limit_value", "unit"]].to_numpy().tolist() == [[0.5, "K"]]


@pytest.mark.parametrize("assay_c", [24.6, 36.8, 37.3])
def test_tenths_of_a_degree_at_the_limit_are_within_it(assay_c: float) -> None:
    data = with_assay(clean_batch(), conditions={"temperature_c": assay_c})
    reads = data.plate_reads.assign(
        temperature_low_c=float(f"{assay_c - 0.5:.1f}"), temperature_high_c=float(f"{assay_c + 0.5:.1f}")
    )
    assert judged(TEMPERATURE_BAND, replace(data, plate_reads=reads)).empty


def test_a_temperature_that_no_export_reports_is_not_assessed_and_one_not_demanded_is_no_matter() -> None:
    for data in (at_temperature(NAN, NAN), replace(clean_batch(), plate_reads=clean_batch().plate_reads[1:])):
        findings = judged(TEMPERATURE_BAND, data)
        assert told(findings) == [["plate_read", "plate-1", "not_assessed", "none"]]
        assert "the export reports none" in findings["sentence"].tolist()[0]
        assert TEMPERATURE_BAND.metrics(with_assay(data, conditions={})).empty


def read_back(read_um: list[float], plate: str = "plate-1") -> GateInput:
    """The clean batch with other standards on plate-1, and none on plate-2."""
    return replace(clean_batch(), standards=standards(plate, read_um))


@pytest.mark.parametrize(
    ("read_um", "words"),
    [
        ([0.0, 5.0, 10.0, 20.0, 40.0, 80.0], None),
        # 20 µM off by 1.001 µM: just above 5 %.
        (
            [0.0, 5.0, 10.0, 21.001, 40.0, 80.0],
            "The standards of 20 µM read back as 21 µM from their own curve: 5.01 % off (limit 5 %)",
        ),
        ([0.0, 5.0, 10.0, 20.999, 40.0, 80.0], None),
        # A fifth of the highest standard is 16 µM; 5 % of that is 0.8 µM, for 0, 5 and 10 µM alike.
        ([0.79, 5.0, 10.0, 20.0, 40.0, 80.0], None),
        (
            [0.0, 5.0, 9.1, 20.0, 40.0, 80.0],
            "The standards of 10 µM read back as 9.1 µM from their own curve: 5.6 % off, against 16 µM,",
        ),
        ([0.82, 5.0, 10.0, 20.0, 40.0, 80.0], "The standards of 0 µM read back as 0.82 µM"),
    ],
)
def test_a_level_off_by_5_per_cent_holds_the_plate(read_um: list[float], words: str | None) -> None:
    findings = judged(STANDARD_CURVE, read_back(read_um), t_limit=100.0)
    assert told(findings) == ([] if words is None else [["plate_read", "plate-1", "breach", "hold"]])
    if words is not None:
        assert words in findings["sentence"].tolist()[0]
        assert findings["limit_value"].tolist() == [0.05]
        assert findings["measured"].tolist()[0] == pytest.approx(0.053, abs=0.004)


def bent(change: float, noise_um: float = 0.01) -> list[float]:
    """Standards with this change of slope over their range, over the slope in its middle."""
    known = np.array(STANDARDS_UM)
    square = known**2 - 80.0 * known
    return list(known + change / 160.0 * square + noise_um * np.array([1, -1, 1, -1, 1, -1]))


def test_a_bend_is_told_before_the_errors_that_it_makes() -> None:
    assert judged(STANDARD_CURVE, read_back(bent(0.048))).empty
    findings = judged(STANDARD_CURVE, read_back(bent(0.053)))
    assert findings["measured"].tolist() == [pytest.approx(0.054, rel=0.02)]
    assert "the standards change slope by 5.4 % over their range (limit 5 %)" in findings["sentence"].iloc[0]
    strong = judged(STANDARD_CURVE, read_back(bent(0.3)))
    assert strong["sentence"].str.contains("change slope by").all()
    assert len(strong) == 1


def test_a_bend_in_the_noise_of_the_standards_is_not_believed() -> None:
    # A change of slope of 7 % or so and scatter of half a µM: every level within its 5 %, t below 4.
    noisy = bent(0.06, 0.45)
    row = standard_metrics(read_back(noisy)).query("analysis_id == 'plate-1'").iloc[0]
    assert row["slope_change"] > 0.05
    assert row["slope_change_t"] < 4.0
    assert row["error"] < 0.05
    assert judged(STANDARD_CURVE, read_back(noisy)).empty
    assert len(judged(STANDARD_CURVE, read_back(noisy), t_limit=0.0)) == 1


@settings(max_examples=30, deadline=None)
@given(st.lists(st.floats(-2.0, 2.0), min_size=12, max_size=12), st.floats(-0.5, 0.5), st.randoms())
def test_the_bend_is_that_of_a_parabola_by_least_squares(
    errors: list[float], bend: float, random: Any
) -> None:
    known = np.repeat(STANDARDS_UM, 2)
    read = known + bend / 160.0 * known**2 + np.array(errors) + 0.01 * np.arange(12)
    frame = standards("plate-1").assign(back_calculated_um=read)
    order = list(range(12))
    random.shuffle(order)
    row = standard_metrics(replace(clean_batch(), standards=frame.iloc[order])).iloc[0]
    # By numpy's own least squares: over the slope of the line, and with a fifth of 80 µM as floor.
    root = 1.0 / np.maximum(known, 16.0)
    coefficients, covariance = np.polyfit(known, read, 2, w=root, cov=True)
    line = np.polyfit(known, read, 1, w=root)[0]
    assert row["slope_change"] == pytest.approx(abs(2 * coefficients[0] * 80.0 / line), rel=1e-6)
    assert row["slope_change_t"] == pytest.approx(
        abs(coefficients[0]) / np.sqrt(covariance[0, 0]), rel=1e-6, abs=1e-9
    )


def test_plates_without_a_curve_of_their_own_are_no_matter_and_those_that_need_one_are_not_assessed() -> None:
    none = replace(clean_batch(), standards=clean_batch().standards[:0])
    assert STANDARD_CURVE.metrics(none).empty
    needed = judged(STANDARD_CURVE, with_assay(none, **OWN_CURVE))
    assert needed[["analysis_id", "outcome"]].to_numpy().tolist() == [
        ["plate-1", "not_assessed"],
        ["plate-2", "not_assessed"],
    ]
    lost = read_back([0.0, 5.0, NAN, NAN, NAN, NAN])
    findings = judged(STANDARD_CURVE, lost)
    assert told(findings) == [["plate_read", "plate-1", "not_assessed", "none"]]
    assert "fewer than 3 levels of the plate's standards can be read back" in findings["sentence"].iloc[0]


def test_a_standard_beyond_the_curve_is_left_out_and_the_others_are_judged() -> None:
    # Without 80 µM the highest is 40, a fifth of it 8 µM: 5 µM off by 0.5 is 6.3 % of that.
    findings = judged(STANDARD_CURVE, read_back([0.0, 5.5, 10.0, 20.0, 40.0, NAN]), t_limit=100.0)
    assert findings["measured"].tolist() == [pytest.approx(0.0625)]
    assert judged(STANDARD_CURVE, read_back([0.0, 5.0, 10.0, 20.0, 40.0, NAN])).empty


def test_a_plate_without_enzyme_has_no_rates_that_temperature_or_standards_could_spoil() -> None:
    data = with_frame(at_temperature(30.0, 31.0), "wells", {"analysis_id": "plate-1"}, role="blank")
    data = replace(data, standards=standards("plate-1", [0.0, 5.0, 10.0, 50.0, 40.0, 80.0]))
    assert TEMPERATURE_BAND.metrics(data)["analysis_id"].tolist() == ["plate-2"]
    assert STANDARD_CURVE.metrics(data).empty


def wandering(amplitude: float) -> GateInput:
    """Both blanks of plate-1 on one slope with one wave, symmetric in time, about it."""
    data = clean_batch()
    for number in range(1, READS + 1):
        phase = 2 * np.pi * (number - 0.5) / READS
        signal = 0.1 + 0.002 * number + amplitude / 2 * np.cos(phase)
        for well in BLANKS:
            data = with_reads(data, well, [number], signal=signal)
    return data


def test_blanks_that_wander_are_held_once_a_site_sets_a_limit() -> None:
    # One whole cosine is orthogonal to the line; its 20 reads reach cos(pi / 20) of the amplitude.
    height = 0.02 * np.cos(np.pi / READS)
    assert judged(BLANK_DRIFT, wandering(0.02)).empty
    assert judged(BLANK_DRIFT, wandering(0.02), plate_wander_limit=height + 1e-5).empty
    findings = judged(BLANK_DRIFT, wandering(0.02), plate_wander_limit=height - 1e-5)
    assert told(findings) == [["plate_read", "plate-1", "breach", "hold"]]
    assert findings["measured"].tolist() == [pytest.approx(height)]
    assert "wander by 0.0198 signal about their line (limit 0.019" in findings["sentence"].iloc[0]


def test_wander_is_the_middle_of_the_blanks_and_knows_no_lost_read() -> None:
    data = wandering(0.0)
    jump = with_reads(data, "A1", [READS], signal=5.0)
    assert judged(BLANK_DRIFT, jump, plate_wander_limit=5.0).empty
    lost = with_reads(data, "A1", [READS], signal=5.0, state="overflow")
    lost = with_reads(lost, "A2", [3], signal=NAN, state="missing")
    assert judged(BLANK_DRIFT, lost, plate_wander_limit=1e-9).empty
    both = with_reads(with_reads(data, "A1", [READS], signal=5.0), "A2", [READS], signal=5.0)
    assert len(judged(BLANK_DRIFT, both, plate_wander_limit=1.0)) == 1


@pytest.mark.parametrize(
    ("rate", "error", "words"),
    [
        (0.0301, 0.01, None),
        (0.0299, 0.01, "The rate, 0.0299 µM/s, is 2.99 standard errors of its blank's slope (limit 3)"),
        (0.0, 0.0, "is 0.0 standard errors"),
        (-0.05, 0.01, "The rate, -0.05 µM/s, is -5.0 standard errors"),
        (0.001, 0.0, None),
    ],
)
def test_a_rate_must_stand_out_of_its_blank(rate: float, error: float, words: str | None) -> None:
    data = with_rates(clean_batch(), "B3", v0_um_per_s=rate, blank_rate_se_um_per_s=error)
    findings = judged(BELOW_DETECTION, data)
    assert findings["well"].tolist() == ([] if words is None else ["B3"])
    if words is not None:
        assert words in findings["sentence"].iloc[0]
        assert findings["limit_value"].tolist() == [3.0]


def test_wells_without_substrate_or_enzyme_have_no_rate_to_detect() -> None:
    data = with_rates(clean_batch(), "B3", v0_um_per_s=0.0)
    assert judged(BELOW_DETECTION, with_frame(data, "wells", {"well": "B3"}, substrate_um=0.0)).empty
    assert judged(BELOW_DETECTION, with_rates(clean_batch(), "A1", v0_um_per_s=0.0)).empty
    reference = with_frame(data, "wells", {"well": "B3"}, role="reference")
    assert judged(BELOW_DETECTION, reference)["well"].tolist() == ["B3"]


def test_detection_without_a_blank_a_rate_or_an_error_is_not_assessed() -> None:
    data = clean_batch()
    blank = (data.wells["analysis_id"] == "plate-2") & data.wells["well"].isin(BLANKS)
    findings = judged(BELOW_DETECTION, replace(data, wells=data.wells[~blank]))
    assert told(findings) == [["plate_read", "plate-2", "not_assessed", "none"]]
    for odd, why in (
        (unread(data, "B3"), "no rate could be measured"),
        (with_rates(data, "B3", blank_rate_se_um_per_s=NAN), "no usable blank"),
    ):
        findings = judged(BELOW_DETECTION, odd)
        assert told(findings) == [["well", "plate-1", "not_assessed", "none"]]
        assert why in findings["sentence"].iloc[0]
