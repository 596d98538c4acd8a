"""What a lot specification allows, converts and refuses."""

from __future__ import annotations

from datetime import UTC, date, datetime
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import ValidationError

from models.errors import UnknownName
from models.records.lot_specification import (
    ConstantSpecification,
    LotSpecification,
    stored_units,
    unit_factor,
)

CONTENT: dict[str, Any] = {
    "assay": "tiny",
    "source": "invented",
    "reference_lot": "REF-1",
    "lots": ["QX-*"],
    "rule": {"guard_band_factor": 1.0},
    "constants": [
        {"constant": "km", "lower": 0.04, "upper": 0.09, "unit": "mmol/L"},
        {
            "constant": "kcat",
            "lower": 5400,
            "unit": "1/min",
            "rule": {"minimum_probability": 0.95},
            "equivalence": {"lowest_ratio": 0.9, "highest_ratio": 1.11},
        },
        {"constant": "k_ic", "modulator": "tinol", "upper": 60, "unit": "µM"},
    ],
    "charts": {"base_first_day": date(2026, 1, 1), "base_last_day": date(2026, 3, 31)},
}


def changed(**changes: Any) -> dict[str, Any]:
    return {key: value for key, value in {**CONTENT, **changes}.items() if value is not None}


def one_constant(**keys: Any) -> dict[str, Any]:
    return changed(constants=[{"constant": "km", **keys}])


def test_limits_are_converted_to_the_stored_unit() -> None:
    specification = LotSpecification.model_validate(CONTENT)
    km, kcat, k_ic = specification.constants
    assert km.limits_in("umol/L") == (40.0, 90.0)
    assert kcat.limits_in("1/s") == (pytest.approx(90.0, rel=1e-13), None)
    assert k_ic.limits_in("umol/L") == (None, 60.0)
    with pytest.raises(UnknownName, match="cannot be converted"):
        km.limits_in("1/s")


def test_a_constant_is_found_with_its_modulator_and_its_rule() -> None:
    specification = LotSpecification.model_validate(CONTENT)
    kcat = specification.of_constant("kcat")
    assert kcat is not None
    assert specification.rule_of(kcat).minimum_probability == 0.95
    km = specification.of_constant("km")
    assert km is not None
    assert specification.rule_of(km).guard_band_factor == 1.0
    assert specification.of_constant("k_ic") is None
    assert specification.of_constant("k_ic", "tinol") is not None
    assert specification.of_constant("hill_n") is None


def test_lots_are_patterns_and_the_reference_is_always_among_them() -> None:
    specification = LotSpecification.model_validate(CONTENT)
    assert specification.covers("QX-7")
    assert specification.covers("REF-1")
    assert not specification.covers("qx-7")
    assert not specification.covers("RX-7")


def test_a_base_period_is_days_or_plate_reads() -> None:
    days = LotSpecification.model_validate(CONTENT).charts
    assert days is not None
    assert days.in_base(datetime(2026, 3, 31, 23, 59, tzinfo=UTC), "id", "P1")
    assert not days.in_base(datetime(2026, 4, 1, 0, 0, tzinfo=UTC), "id", "P1")
    assert not days.in_base(datetime(2025, 12, 31, 12, 0, tzinfo=UTC), "id", "P1")
    named = LotSpecification.model_validate(changed(charts={"base_plate_reads": ["P1", "id-2"]})).charts
    assert named is not None
    assert named.in_base(datetime(2030, 1, 1, tzinfo=UTC), "id-1", "P1")
    assert named.in_base(datetime(2030, 1, 1, tzinfo=UTC), "id-2", "P9")
    assert not named.in_base(datetime(2030, 1, 1, tzinfo=UTC), "id-3", "P9")


@given(
    st.sampled_from([("mol/L", "mmol/L"), ("1/h", "1/s"), ("U/mg", "kat/kg"), ("L/mol/s", "1/mM/min")]),
    st.sampled_from([1, -1]),
)
def test_there_and_back_is_where_one_was(pair: tuple[str, str], way: int) -> None:
    first, second = pair[::way]
    assert unit_factor(first, second) * unit_factor(second, first) == pytest.approx(1.0, rel=1e-12)


def test_activities_in_units_and_katal_agree() -> None:
    # 1 U = 1 umol/min = 16.67 nkat (NC-IUB 1979, doi:10.1111/j.1432-1033.1979.tb13116.x).
    assert unit_factor("U/mg", "nmol/s/mg") == pytest.approx(1000 / 60, rel=1e-12)
    assert unit_factor("nkat/mg", "umol/min/mg") == pytest.approx(0.06, rel=1e-12)


@pytest.mark.parametrize("constant", sorted(stored_units()))
def test_every_constant_takes_limits_in_its_stored_unit(constant: str) -> None:
    unit = stored_units()[constant]
    taken = ConstantSpecification.model_validate({"constant": constant, "lower": 2, "unit": unit})
    assert taken.limits_in(unit) == (2.0, None)


@pytest.mark.parametrize(
    ("content", "words"),
    [
        (changed(rule={}), "guard_band_factor or minimum_probability, one of both"),
        (changed(rule={"guard_band_factor": 1, "minimum_probability": 0.9}), "one of both"),
        (changed(rule={"minimum_probability": 0.9, "coverage_factor": 2}), "belongs to guard_band_factor"),
        (changed(rule={"minimum_probability": 0.4}), "greater than or equal to 0.5"),
        (changed(constants=[]), "at least 1"),
        (one_constant(), "nothing is asked"),
        (one_constant(lower=40), "limits and their unit go together"),
        (
            one_constant(unit="umol/L", equivalence={"lowest_ratio": 0.9, "highest_ratio": 1.1}),
            "go together",
        ),
        (one_constant(lower=90, upper=40, unit="umol/L"), r"lower \(90\) must be below upper \(40\)"),
        (one_constant(lower=40, unit="mm"), "'mm' cannot be converted to 'umol/L'"),
        (one_constant(lower=40, unit="bananas"), "'bananas' is not a unit"),
        (one_constant(lower=40, unit="9**9**9"), "is not a unit"),
        (one_constant(lower=40, unit="5 mM"), "is a number with a unit"),
        (
            changed(constants=[{"constant": "kmm", "lower": 1, "unit": "mM"}]),
            "no constant 'kmm', did you mean km",
        ),
        (changed(constants=[CONTENT["constants"][0]] * 2), "state km twice"),
        (changed(reference_lot=None, charts=None), "equivalence needs reference_lot"),
        (changed(reference_lot=None, constants=CONTENT["constants"][:1]), "charts need reference_lot"),
        (
            one_constant(equivalence={"lowest_ratio": 1.1, "highest_ratio": 1.2}),
            "less than 1",
        ),
        (changed(charts={}), "one of both"),
        (changed(charts={"base_first_day": date(2026, 1, 1)}), "go together"),
        (
            changed(charts={"base_first_day": date(2026, 2, 1), "base_last_day": date(2026, 1, 1)}),
            "lies after",
        ),
        (changed(charts={"base_plate_reads": ["P1", "P1"]}), "two plate reads or more"),
        (changed(limit=3), "Extra inputs"),
    ],
)
def test_what_is_refused_and_in_which_words(content: dict[str, Any], words: str) -> None:
    with pytest.raises(ValidationError, match=words):
        LotSpecification.model_validate(content)
