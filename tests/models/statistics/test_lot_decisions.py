"""A lot's constant against its limits: few plate reads decide less, one plate read decides nothing."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from models.statistics.lot_decisions import (
    Rule,
    coverage_on,
    decide_lot,
    degrees_of_lot,
    judge_constant,
)
from models.statistics.lots import combine_plate_reads

BAND, CHANCE = Rule(guard_band_factor=1.0), Rule(minimum_probability=0.95)


def test_a_value_far_inside_conforms_and_one_far_outside_does_not() -> None:
    inside = judge_constant(60.0, 1.0, 6.0, (45.0, 80.0), BAND)
    assert inside.decision == "conforms"
    assert inside.probability == pytest.approx(1.0, abs=1e-4)
    assert inside.accepted_from is not None
    assert inside.accepted_to is not None
    assert 45.0 < inside.accepted_from < 60.0 < inside.accepted_to < 80.0
    outside = judge_constant(30.0, 1.0, 6.0, (45.0, 80.0), CHANCE)
    assert outside.decision == "does not conform"
    assert outside.risk == outside.probability
    assert outside.accepted_from is None


def test_the_acceptance_limit_is_where_the_decision_turns() -> None:
    zone = judge_constant(60.0, 3.0, 4.0, (45.0, None), BAND).accepted_from
    assert zone is not None
    # The relative uncertainty is what the scale keeps.
    above = judge_constant(zone * 1.0001, zone * 1.0001 * 0.05, 4.0, (45.0, None), BAND)
    below = judge_constant(zone * 0.9999, zone * 0.9999 * 0.05, 4.0, (45.0, None), BAND)
    assert (above.decision, below.decision) == ("conforms", "undecided")


@pytest.mark.parametrize(
    ("value", "error", "degrees", "says"),
    [
        (None, 1.0, 3.0, "no value"),
        (60.0, None, 3.0, "uncertainty"),
        (60.0, 1.0, None, "one plate read only"),
        (math.nan, 1.0, 3.0, "no value"),
    ],
)
def test_what_is_not_known_decides_nothing(
    value: float | None, error: float | None, degrees: float | None, says: str
) -> None:
    judged = judge_constant(value, error, degrees, (45.0, 80.0), BAND)
    assert judged.decision == "undecided"
    assert judged.probability is None
    assert says in str(judged.reason)


def test_the_coverage_factor_of_few_degrees() -> None:
    # GUM, JCGM 100:2008, table G.2, column 95.45 %: k on 1, 4 and 10 degrees of freedom.
    assert [coverage_on(2.0, nu) for nu in (1, 4, 10)] == pytest.approx([13.97, 2.87, 2.28], abs=0.005)
    assert coverage_on(2.0, math.inf) == 2.0


def test_a_shared_error_lends_its_degrees() -> None:
    assert degrees_of_lot(100.0, 2.0, 4) == 3
    assert degrees_of_lot(100.0, 2.0, 1) is None
    # Half of the variance shared: nu = 3 * 2^2.
    assert degrees_of_lot(100.0, 2.0, 4, math.sqrt(2.0) / 100.0) == pytest.approx(12.0)
    assert degrees_of_lot(100.0, 2.0, 4, 0.02) == math.inf


def test_one_constant_that_fails_decides_the_lot() -> None:
    assert decide_lot(["conforms", "conforms"]) == "conforms"
    assert decide_lot(["conforms", "undecided"]) == "undecided"
    assert decide_lot(["undecided", "does not conform"]) == "does not conform"
    assert decide_lot([]) == "undecided"


@pytest.mark.parametrize("rule", [Rule(), Rule(guard_band_factor=1.0, minimum_probability=0.9)])
def test_a_rule_is_one_rule(rule: Rule) -> None:
    with pytest.raises(ValueError, match="guard band or a least probability"):
        judge_constant(60.0, 1.0, 3.0, (45.0, 80.0), rule)


@given(st.floats(20.0, 200.0), st.floats(0.1, 30.0), st.floats(1.0, 40.0))
def test_more_is_not_decided_with_fewer_degrees(value: float, error: float, degrees: float) -> None:
    few = judge_constant(value, error, degrees, (45.0, 80.0), BAND).decision
    many = judge_constant(value, error, math.inf, (45.0, 80.0), BAND).decision
    assert few in (many, "undecided")


@pytest.mark.parametrize("rule", [BAND, CHANCE], ids=["guard band", "probability"])
def test_a_lot_at_its_limit_passes_no_oftener_than_the_rule_says(rule: Rule) -> None:
    """A lot that truly lies on its lower limit: of 1,500 simulated lots of four plate reads at most the share
    that the rule allows conform (2.3 % for a whole U with k = 2, 5 % for a probability of 0.95)."""
    random = np.random.default_rng(106)
    plates, sd, between = np.arange(4), 0.03, 0.04
    wrong, lots = 0, 1500
    for _ in range(lots):
        values = 50.0 * np.exp(random.normal(0.0, math.hypot(sd, between), 4))
        lot = combine_plate_reads(values, values * sd, plates)
        judged = judge_constant(
            lot.value,
            lot.standard_error,
            degrees_of_lot(lot.value, lot.standard_error, 4),
            (50.0, None),
            rule,
        )
        wrong += judged.decision == "conforms"
    allowed = 0.0228 if rule is BAND else 0.05
    assert 0 < wrong / lots <= allowed + 3 * math.sqrt(allowed * (1 - allowed) / lots)
