"""Control window: Z' of reference against blanks, and what it is taken from."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from checks.assess import assess
from checks.gates.control_window import GATE, metrics
from checks.gates.gate import GateInput
from checks.gates.limits import resolve
from tests.checks.batches import clean_batch

# Constructed; Z' 0.9343697065908071 recomputed from the published formula (Zhang, Chung and Oldenburg 1999,
# doi:10.1177/108705719900400206).
REFERENCE = [98.2, 101.5, 99.8, 100.6, 97.9, 102.0, 100.1, 99.9]
BLANK = [10.2, 9.6, 10.9, 9.1, 10.4, 9.8, 10.0, 10.1]


def a_plate(
    reference: list[float], blank: list[float], substrate_um: float = 400.0, **others: list[float]
) -> GateInput:
    """One plate read with reference wells at one level and blanks there; `others` are further references."""
    rows = [("reference", "REF", substrate_um, rate) for rate in reference]
    rows += [("blank", None, substrate_um, rate) for rate in blank]
    rows += [("reference", name, 100.0, rate) for name, rates in others.items() for rate in rates]
    rows.append(("sample", "L1", substrate_um, 20.0))
    frame = pd.DataFrame(rows, columns=["role", "lot", "substrate_um", "raw_rate_um_per_s"])
    frame = frame.assign(
        analysis_id="plate-1", well=[f"A{n}" for n in range(1, len(frame) + 1)], enzyme_nm=1.0
    )
    return replace(
        clean_batch(),
        analyses=pd.DataFrame({"analysis_id": ["plate-1"], "recipe_id": "recipe-1", "assay": "an assay"}),
        wells=frame.drop(columns="raw_rate_um_per_s"),
        rates=frame[["analysis_id", "well", "raw_rate_um_per_s"]],
    )


def findings_of(data: GateInput, **settings: float) -> pd.DataFrame:
    limits = resolve({GATE.name: GATE}, {GATE.name: settings}, {})
    return assess("wells", data, {"recipe-1": limits}, {GATE.name: GATE}).findings


def test_a_wide_window_passes_and_its_z_prime_is_the_published_formula() -> None:
    data = a_plate(REFERENCE, BLANK)
    assert metrics(data)["z_prime"].item() == pytest.approx(0.9343697065908071, rel=1e-12)
    assert findings_of(data).empty
    assert len(findings_of(data, limit=0.95)) == 1


def test_a_narrow_window_holds_the_plate_read_and_says_why() -> None:
    findings = findings_of(a_plate([20.0, 24.0, 28.0], [10.0, 10.5, 9.5]))
    # 1 - 3 (4 + 0.5) / 14, from the formula.
    assert findings["measured"].tolist() == pytest.approx([1 - 13.5 / 14])
    assert findings[["subject", "severity", "limit_value"]].to_numpy().tolist() == [
        ["plate_read", "hold", 0.5]
    ]
    sentence = findings["sentence"].item()
    assert "Z′ of reference against blank is 0.0 (limit 0.5)" in sentence
    assert "at 400 µM substrate the reference runs at 24 ± 4 µM/s (3 wells)" in sentence


def test_the_highest_level_with_three_wells_of_one_lot_is_taken() -> None:
    lower = a_plate(REFERENCE[:2], BLANK, REF=[50.0, 51.0, 52.0])
    assert metrics(lower)["substrate_um"].item() == 100.0
    assert metrics(lower)["reference_mean"].item() == pytest.approx(51.0)
    two_lots = a_plate(REFERENCE, BLANK, substrate_um=100.0, OTHER=[5.0, 90.0, 40.0])
    assert metrics(two_lots)["reference_count"].item() == 8


def test_blanks_of_the_same_level_are_taken_where_there_are_three() -> None:
    data = a_plate(REFERENCE, BLANK)
    elsewhere = data.wells["substrate_um"].where(data.wells.index < 11, 50.0)
    same = metrics(replace(data, wells=data.wells.assign(substrate_um=elsewhere)))
    assert same["blank_count"].item() == 3
    fewer = data.wells["substrate_um"].where(data.wells.index < 10, 50.0)
    every = metrics(replace(data, wells=data.wells.assign(substrate_um=fewer)))
    assert every["blank_count"].item() == 8


@pytest.mark.parametrize(
    ("reference", "blank", "words"),
    [
        ([], BLANK, "the plate has no reference"),
        (REFERENCE, [], "the plate has no blank"),
        (REFERENCE[:2], BLANK, "no condition of the reference has 3 wells with a rate"),
        (REFERENCE, BLANK[:2], "fewer than 3 blanks have a rate"),
        ([*REFERENCE[:2], np.nan], BLANK, "no condition of the reference has 3 wells with a rate"),
        ([1.0, 2.0, 3.0], [2.0, 2.0, 2.0], "reference and blanks have the same mean rate"),
    ],
)
def test_what_cannot_be_computed_says_so(reference: list[float], blank: list[float], words: str) -> None:
    findings = findings_of(a_plate(reference, blank))
    assert findings["outcome"].tolist() == ["not_assessed"]
    assert words in findings["sentence"].item()
