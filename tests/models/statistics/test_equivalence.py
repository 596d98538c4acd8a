"""Equivalence of a lot with the reference: what pairing brings, levels kept, and what cannot be said."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from models.statistics.equivalence import (
    Equivalence,
    compare_with_reference,
    independent_log_ratio,
    paired_log_ratio,
    two_one_sided_tests,
    welch,
)

MARGINS = (0.9, 1 / 0.9)
Lot = tuple[np.ndarray, np.ndarray, np.ndarray]


def lot(values: list[float], plates: list[int], relative_error: float = 0.01) -> Lot:
    given = np.array(values, dtype=float)
    return given, relative_error * given, np.array(plates, dtype=int)


@given(
    st.floats(-0.3, 0.3), st.floats(0.001, 0.2), st.floats(1, 60), st.floats(0.05, 0.3), st.floats(0.01, 0.2)
)
def test_the_interval_and_the_tests_say_the_same(
    difference: float, error: float, degrees: float, margin: float, alpha: float
) -> None:
    tests = two_one_sided_tests(difference, error, degrees, (-margin, margin), alpha)
    within = bool(tests.low > -margin and tests.high < margin)
    if abs(float(tests.p_value) - alpha) > 1e-9:
        assert within == bool(tests.p_value < alpha)
    turned = two_one_sided_tests(-difference, error, degrees, (-margin, margin), alpha)
    assert float(turned.p_below) == pytest.approx(float(tests.p_above))


def test_pairing_cancels_what_a_plate_does_to_both() -> None:
    """Plates differ by 30 %, lots by 2 %: within plates that is plain, between them it drowns."""
    random = np.random.default_rng(7)
    plate = np.exp(random.normal(0, 0.3, 8))
    noise = np.exp(random.normal(0, 0.01, 16))
    reference = lot(list(60 * plate * noise[:8]), list(range(8)))
    sample = lot(list(61.2 * plate * noise[8:]), list(range(8)))
    paired = compare_with_reference(sample, reference, MARGINS)
    assert (paired.decision, paired.design, paired.lot_plate_read_count) == ("equivalent", "paired", 8)
    assert abs(np.log(paired.ratio / 1.02)) < 3 * paired.log_standard_error
    assert paired.high - paired.low < 0.04
    apart = compare_with_reference((*sample[:2], sample[2] + 100), reference, MARGINS)
    assert (apart.decision, apart.design) == ("undecided", "independent")
    assert apart.log_standard_error > 10 * paired.log_standard_error


@pytest.mark.parametrize("shared", [True, False], ids=["paired", "independent"])
def test_a_lot_on_the_margin_passes_no_more_often_than_alpha(shared: bool) -> None:
    random = np.random.default_rng(11)
    runs, plates = 400, 5
    passed = covered = 0
    for _ in range(runs):
        of_plate = random.normal(0, 0.05, 2 * plates)
        own = random.normal(0, 0.02, 2 * plates)
        first = of_plate[:plates]
        second = first if shared else of_plate[plates:]
        reference = lot(list(np.exp(first + own[:plates])), list(range(plates)), 0.02)
        places = list(range(plates)) if shared else list(range(plates, 2 * plates))
        sample = lot(list(np.exp(np.log(MARGINS[1]) + second + own[plates:])), places, 0.02)
        found = compare_with_reference(sample, reference, MARGINS)
        passed += found.decision == "equivalent"
        covered += found.low <= MARGINS[1] <= found.high
    # Level 5 % and coverage 90 %, with three standard errors of the simulation (1.1 and 1.5 %).
    assert passed / runs < 0.05 + 3 * 0.011
    assert covered / runs > 0.90 - 3 * 0.015
    assert passed > 0


def test_a_lot_far_off_is_not_equivalent() -> None:
    found = compare_with_reference(
        lot([79, 80, 78], [1, 2, 3]), lot([106, 105, 107, 106], [1, 2, 3, 4]), MARGINS
    )
    assert found.decision == "not equivalent"
    assert found.ratio == pytest.approx(0.7453, abs=0.002)
    assert (found.left_out_count, found.reference_plate_read_count) == (1, 3)
    assert found.p_value > 0.99


def swapped(found: Equivalence) -> tuple[float, float, float]:
    return 1 / found.ratio, 1 / found.high, 1 / found.low


def test_the_ratio_turned_round_is_its_reciprocal() -> None:
    a, b = lot([61, 62.5, 60, 63], [1, 2, 3, 4]), lot([59, 60.5, 58, 61.5], [2, 3, 4, 5])
    there, back = compare_with_reference(a, b, MARGINS), compare_with_reference(b, a, MARGINS)
    assert swapped(back) == pytest.approx((there.ratio, there.low, there.high), rel=1e-12)


def test_several_estimates_of_a_plate_read_are_pooled_first() -> None:
    one = paired_log_ratio(lot([60, 62, 61], [1, 2, 3]), lot([50, 51, 52], [1, 2, 3]))
    twice = paired_log_ratio(lot([60, 60, 62, 61], [1, 1, 2, 3]), lot([50, 51, 52], [1, 2, 3]))
    assert twice.degrees == one.degrees == 2.0
    assert twice.difference == pytest.approx(one.difference, abs=1e-3)


@pytest.mark.parametrize(
    ("sample", "reference", "words"),
    [
        (lot([60], [1]), lot([61, 62, 60], [1, 2, 3]), "the lot has one plate read only"),
        (lot([60, 61, 59], [1, 2, 3]), lot([61], [9]), "the reference lot has one plate read only"),
        (lot([], []), lot([61, 60], [1, 2]), "the lot has no usable estimate"),
        (lot([60, 61], [1, 2]), lot([np.nan, -3.0], [1, 2]), "the reference lot has no usable estimate"),
        (lot([60, 61], [1, 2], 0.9), lot([61, 62], [1, 2], 0.9), "fewer than two plate reads hold the ratio"),
    ],
)
def test_what_cannot_be_said_has_a_reason_and_no_interval(sample: Lot, reference: Lot, words: str) -> None:
    found = compare_with_reference(sample, reference, MARGINS)
    assert found.decision == "undecided"
    assert found.reason is not None
    assert words in found.reason
    assert np.isnan([found.low, found.high, found.p_value, found.degrees, found.log_standard_error]).all()


def test_one_plate_a_side_gives_a_ratio_all_the_same() -> None:
    alone = independent_log_ratio(lot([66], [1]), lot([60], [2]))
    assert np.exp(alone.difference) == pytest.approx(1.1)
    assert np.isnan(alone.standard_error)


def test_welch_lies_between_the_smaller_and_the_sum_of_the_degrees() -> None:
    assert welch((1, 0), (0.1, 0.1), (5, 5)).degrees == pytest.approx(10.0)
    assert welch((1, 0), (0.1, 1e-9), (5, 50)).degrees == pytest.approx(5.0)


@pytest.mark.parametrize("margins", [(1.1, 1.2), (0.8, 0.9), (0.0, 1.2), (1.2, 0.8)])
def test_margins_enclose_one(margins: tuple[float, float]) -> None:
    with pytest.raises(ValueError, match="margins are ratios"):
        compare_with_reference(lot([60, 61], [1, 2]), lot([60, 61], [1, 2]), margins)


def test_impossible_numbers_are_refused() -> None:
    with pytest.raises(ValueError, match="alpha"):
        two_one_sided_tests(0, 1, 5, (-1, 1), 0.5)
    with pytest.raises(ValueError, match="below the upper"):
        two_one_sided_tests(0, 1, 5, (1, -1))
    with pytest.raises(ValueError, match="above 0"):
        two_one_sided_tests(0, 0, 5, (-1, 1))
    with pytest.raises(ValueError, match="above 0"):
        welch((0, 0), (0, 0), (1, 1))
