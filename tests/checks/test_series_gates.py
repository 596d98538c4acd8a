"""Series: how far the substrate reaches, for a hyperbola and for a cooperative enzyme."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from checks.assess import assess
from checks.gates import GateInput, resolve_limits
from checks.gates.saturation_not_reached import GATE
from tests.checks.batches import clean_batch, clean_series, with_estimate

NAN = float("nan")


def findings_of(data: GateInput, **settings: bool | float) -> pd.DataFrame:
    limits = resolve_limits({"saturation_not_reached": settings}, {})
    return assess("series", data, {"recipe-1": limits}, {GATE.name: GATE}).findings


@pytest.mark.parametrize(
    ("series", "constant", "k_um", "words"),
    [
        ("hyperbolic", "km", 400 / 3.0, None),
        # S / Km below 3: 400 / 133.8 = 2.99.
        ("hyperbolic", "km", 133.8, "400 µM, is 2.99 times Km (limit 3): it reaches 75 % of Vmax"),
        ("hyperbolic", "km", 400.0, "400 µM, is 1.0 times Km (limit 3): it reaches 50 % of Vmax"),
        ("cooperative", "k_half", 400 / 3.001**0.5, None),
        # (S / K0.5)^2 = 2.25, 69 % of Vmax, though S / K0.5 itself is 1.5.
        ("cooperative", "k_half", 400 / 1.5, "gives (S/K0.5)^2.00 = 2.2 (limit 3): it reaches 69 % of Vmax"),
    ],
)
def test_three_times_k_is_the_limit(series: str, constant: str, k_um: float, words: str | None) -> None:
    findings = findings_of(with_estimate(clean_series(), series, constant, value=k_um))
    assert findings["series_id"].tolist() == ([] if words is None else [series])
    if words is not None:
        assert words in findings["sentence"].tolist()[0]
        assert findings["limit_value"].tolist() == [3.0]
        assert findings["measured"].tolist()[0] < 3.0


def test_cooperativity_reaches_further_than_its_ratio() -> None:
    data = with_estimate(clean_series(), "cooperative", "hill_n", value=1.0)
    assert findings_of(clean_series()).empty
    assert findings_of(data)["measured"].tolist() == [2.0]


@pytest.mark.parametrize(
    ("constants", "words"),
    [
        (["vmax"], "interval of Vmax is open above (1 constant, limit 0): the data do not bound it."),
        (["km"], "interval of Km is open above (1 constant, limit 0): the data do not bound it."),
        (["vmax", "km"], "intervals of Vmax and Km are open above (2 constants, limit 0)"),
    ],
)
def test_an_interval_open_above_is_held_unless_the_site_turns_that_off(
    constants: list[str], words: str
) -> None:
    data = clean_series()
    for constant in constants:
        data = with_estimate(data, "hyperbolic", constant, high=NAN)
    findings = findings_of(data)
    assert findings["measured"].tolist() == [float(len(constants))]
    assert words in findings["sentence"].tolist()[0]
    assert findings_of(data, hold_open_interval=False).empty


def test_an_interval_open_below_is_not_held() -> None:
    assert findings_of(with_estimate(clean_series(), "hyperbolic", "km", low=NAN)).empty


def test_a_refused_series_is_not_assessed_and_says_why() -> None:
    data = clean_series()
    assert data.series is not None
    assert data.estimates is not None
    series = data.series.assign(refusal=["two levels only", None], highest_substrate_um=[np.nan, 400.0])
    estimates = data.estimates[data.estimates["series_id"] != "hyperbolic"]
    findings = findings_of(replace(data, series=series, estimates=estimates))
    assert findings[["series_id", "outcome", "severity"]].to_numpy().tolist() == [
        ["hyperbolic", "not_assessed", "none"]
    ]
    assert findings["sentence"].tolist() == ["Not assessed: the series was not fitted: two levels only."]
    assert findings["measured"].isna().all()


@pytest.mark.parametrize(
    ("constant", "values"),
    [("km", {"unit": "mmol/L"}), ("km", {"value": NAN}), ("vmax", {"value": NAN}), ("km", {"chosen": False})],
)
def test_what_cannot_be_compared_is_not_assessed(constant: str, values: dict[str, object]) -> None:
    findings = findings_of(with_estimate(clean_series(), "hyperbolic", constant, **values))
    assert findings[["series_id", "outcome"]].to_numpy().tolist() == [["hyperbolic", "not_assessed"]]


def test_fits_with_held_wells_are_not_judged() -> None:
    data = clean_series()
    assert data.estimates is not None
    beside = data.estimates.assign(wells="all", value=1e6, high=NAN)
    assert findings_of(replace(data, estimates=pd.concat([beside, data.estimates]))).empty


def test_series_gates_need_series() -> None:
    with pytest.raises(ValueError, match="needs series and estimates"):
        findings_of(clean_batch())
