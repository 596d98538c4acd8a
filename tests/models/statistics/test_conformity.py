"""Conformity probability, decisions and risks: limits of the formulas, and what must hold for any numbers."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import norm

from models.statistics.conformity import (
    CONFORMS,
    DOES_NOT_CONFORM,
    UNDECIDED,
    acceptance,
    conformity_probability,
    decide_by_guard_band,
    decide_by_probability,
    global_risks,
    log_scale,
    specific_risk,
)

numbers = st.floats(-50, 50)
positive = st.floats(0.01, 20)


@given(numbers, positive, numbers, positive, st.sampled_from([1.0, 3.0, 12.0, np.inf]))
def test_two_limits_hold_what_one_sided_limits_leave(
    y: float, u: float, low: float, width: float, nu: float
) -> None:
    both = conformity_probability(y, u, low, low + width, nu)
    below = 1.0 - conformity_probability(y, u, lower=low, degrees=nu)
    above = 1.0 - conformity_probability(y, u, upper=low + width, degrees=nu)
    assert float(both + below + above) == pytest.approx(1.0, abs=1e-12)
    assert float(conformity_probability(-y, u, -low - width, -low, nu)) == pytest.approx(
        float(both), rel=1e-9
    )


def test_many_degrees_become_the_normal_and_few_keep_more_in_the_tails() -> None:
    few, many, normal = conformity_probability(9.0, 1.0, upper=11.0, degrees=[3.0, 1e7, np.inf])
    assert few < normal
    assert many == pytest.approx(normal, abs=1e-7)
    # Student's t with 3 degrees of freedom at 2: 1/2 + (2 sqrt(3)/7 + atan(2/sqrt(3))) / pi, its closed form.
    assert few == pytest.approx(0.5 + (2 * np.sqrt(3) / 7 + np.arctan(2 / np.sqrt(3))) / np.pi, rel=1e-12)


def test_far_tails_keep_their_digits() -> None:
    # 1 - Phi(10) = 7.6198530241605e-24 (Abramowitz and Stegun 1964, table 26.2, to five digits).
    assert float(conformity_probability(0.0, 1.0, lower=10.0)) == pytest.approx(7.61985e-24, rel=1e-6)
    assert float(conformity_probability(0.0, 1.0, 10.0, 30.0)) == pytest.approx(7.61985e-24, rel=1e-6)


def test_what_is_not_known_is_not_a_probability() -> None:
    given = conformity_probability([np.nan, 1.0, 1.0, 1.0], [1.0, np.nan, 0.0, 0.0], upper=[2, 2, 1, 0.9])
    assert np.isnan(given[:2]).all()
    assert given[2:].tolist() == [1.0, 0.0]
    assert decide_by_guard_band([np.nan, 1.0], [0.1, np.nan], upper=2.0).tolist() == [UNDECIDED] * 2
    assert decide_by_probability(np.nan, 0.95) == UNDECIDED


@given(numbers, positive, numbers, positive, st.floats(0, 2))
def test_guard_bands_divide_the_line_into_zones(
    y: float, u: float, low: float, width: float, r: float
) -> None:
    word = decide_by_guard_band(y, u, low, low + width, r)
    band = 2.0 * r * u
    expected = UNDECIDED
    if low + band <= y <= low + width - band:
        expected = CONFORMS
    elif y < low - band or y > low + width + band:
        expected = DOES_NOT_CONFORM
    assert word == expected
    zones = acceptance(u, low, low + width, r)
    assert bool(zones.empty) == (low + band > low + width - band)


@given(numbers, positive, numbers)
def test_a_one_sided_guard_band_is_a_probability_rule(y: float, u: float, high: float) -> None:
    """w = 1.645 u at one limit accepts exactly where p_c is at least 95 % (JCGM 106, 8.3.2, note)."""
    z = float(norm.ppf(0.95))
    if abs(abs(y - high) - z * u) < 1e-9:
        return
    by_band = decide_by_guard_band(y, u, upper=high, guard_band_factor=1.0, coverage_factor=z)
    assert by_band == decide_by_probability(conformity_probability(y, u, upper=high), 0.95)


def test_simple_acceptance_leaves_nothing_undecided() -> None:
    words = decide_by_guard_band([0.9, 1.0, 1.5, 2.0, 2.1], 5.0, 1.0, 2.0, guard_band_factor=0.0)
    assert words.tolist() == [DOES_NOT_CONFORM, CONFORMS, CONFORMS, CONFORMS, DOES_NOT_CONFORM]


def test_risk_of_one_item_belongs_to_the_decision_made() -> None:
    risks = specific_risk([0.97, 0.02, 0.6], [CONFORMS, DOES_NOT_CONFORM, UNDECIDED])
    assert risks[:2] == pytest.approx([0.03, 0.02])
    assert np.isnan(risks[2])


@pytest.mark.parametrize("accepted", [(9.2, 11.0), (8.7, 11.6), (np.nan, 11.0)])
def test_global_risks_are_those_of_a_simulated_production(accepted: tuple[float, float]) -> None:
    random = np.random.default_rng(20260301)
    true = random.normal(10.1, 0.8, 400_000)
    seen = true + random.normal(0.0, 0.3, true.size)
    good = (true >= 9.0) & (true <= 11.5)
    taken = ~(seen < accepted[0]) & ~(seen > accepted[1])
    risks = global_risks(10.1, 0.8, 0.3, (9.0, 11.5), accepted)
    assert risks.consumer == pytest.approx(np.mean(taken & ~good), abs=1e-3)
    assert risks.producer == pytest.approx(np.mean(good & ~taken), abs=2e-3)


def test_a_very_good_measurement_has_next_to_no_risk() -> None:
    risks = global_risks(0.0, 1.0, 1e-6, (-1.0, 1.0), (-1.0, 1.0))
    # Each limit: density there times u / sqrt(2 pi), for either risk.
    expected = 2 * norm.pdf(1.0) * 1e-6 / np.sqrt(2 * np.pi)
    assert risks.consumer == pytest.approx(expected, rel=1e-3)
    assert risks.producer == pytest.approx(expected, rel=1e-3)


def test_logarithms_of_value_and_limits() -> None:
    y, u, low, high = log_scale([60.0, 60.0], 3.0, [50.0, 0.0], np.nan)
    assert y == pytest.approx(np.log(60.0))
    assert u == pytest.approx(0.05)
    assert low[0] == pytest.approx(np.log(50.0))
    assert np.isnan(low[1])
    assert np.isnan(high).all()


@pytest.mark.parametrize(
    ("given", "words"),
    [
        ({"value": 1, "standard_uncertainty": 1}, "lower limit, an upper limit, or both"),
        ({"value": 1, "standard_uncertainty": 1, "lower": 2, "upper": 1}, "above its upper"),
        ({"value": 1, "standard_uncertainty": -1, "lower": 0}, "never negative"),
        ({"value": 1, "standard_uncertainty": 1, "lower": 0, "degrees": 0}, "degrees"),
    ],
)
def test_what_cannot_be_judged_is_refused(given: dict[str, float], words: str) -> None:
    with pytest.raises(ValueError, match=words):
        conformity_probability(**given)
    with pytest.raises(ValueError, match=r"0\.5"):
        decide_by_probability(0.9, 0.4)
    with pytest.raises(ValueError, match="guard band factor"):
        acceptance(1.0, 0.0, guard_band_factor=-1)
    with pytest.raises(ValueError, match="above 0"):
        log_scale(-1.0, 1.0)
    with pytest.raises(ValueError, match="above 0"):
        global_risks(0, 0, 1, (0, 1), (0, 1))
    with pytest.raises(ValueError, match="above its upper"):
        global_risks(0, 1, 1, (1, 0), (0, 1))
