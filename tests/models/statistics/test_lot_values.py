"""Random-effects combination of plate reads: published values, coverage, and what one plate read can tell."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from models.statistics.lots import between_variance, combine_plate_reads


def test_between_variance_solves_its_moment_equation() -> None:
    """Paule and Mandel 1982, doi:10.6028/jres.087.022: the scatter equals its degrees of freedom."""
    means, errors = np.array([10.1, 9.2, 10.9, 9.9, 11.4]), np.array([0.3, 0.2, 0.5, 0.1, 0.4])
    between = between_variance(means, errors**2)
    weights = 1.0 / (errors**2 + between)
    centre = np.sum(weights * means) / np.sum(weights)
    assert between > 0
    assert np.sum(weights * (means - centre) ** 2) == pytest.approx(4.0, rel=1e-10)


def test_equal_relative_errors_reduce_to_the_variance_of_logarithms() -> None:
    """With equal standard errors the estimate is that of one-way analysis of variance (closed form)."""
    means = np.array([4.0, 5.0, 7.0, 8.0])
    logs = np.log(means)
    value = combine_plate_reads(means, 0.1 * means, np.arange(4))
    centre = np.exp(np.mean(logs))
    assert value.value == pytest.approx(centre)
    assert (value.between_plate_sd / centre) ** 2 == pytest.approx(np.var(logs, ddof=1) - 0.01, rel=1e-9)
    assert value.standard_error == pytest.approx(centre * np.std(logs, ddof=1) / 2.0, rel=1e-9)
    # t(0.975, 3) = 3.182446 (tabulated).
    assert np.log(value.high / centre) == pytest.approx(3.182446 * np.std(logs, ddof=1) / 2.0, rel=1e-6)
    assert value.high / centre == pytest.approx(centre / value.low, rel=1e-9)
    assert value.plate_read_count == 4
    assert not value.within_plate_only
    assert value.reason is None


def test_values_of_either_sign_are_combined_as_they_are() -> None:
    means = np.array([-1.0, 0.0, 2.0, 3.0])
    value = combine_plate_reads(means, np.full(4, 0.5), np.arange(4))
    assert value.value == pytest.approx(1.0)
    assert value.between_plate_sd**2 == pytest.approx(np.var(means, ddof=1) - 0.25, rel=1e-9)
    assert value.high - 1.0 == pytest.approx(3.182446 * value.standard_error, rel=1e-6)


@given(seed=st.integers(0, 2**20), spread=st.floats(0.01, 2.0), count=st.integers(2, 6))
@settings(max_examples=60, deadline=None)
def test_value_and_interval_of_a_positive_constant_stay_positive(
    seed: int, spread: float, count: int
) -> None:
    generator = np.random.default_rng(seed)
    values = 80.0 * np.exp(spread * generator.standard_normal(count))
    errors = values * generator.uniform(0.01, 1.5, count)
    value = combine_plate_reads(values, errors, np.arange(count))
    if np.all(errors > values):
        assert np.isnan(value.value)
        assert value.reason is not None
    else:
        assert not value.low <= 0.0
        assert value.value > 0.0


def test_series_of_one_plate_read_are_pooled_first() -> None:
    pooled = combine_plate_reads(np.array([4.0, 6.0, 8.0]), np.array([1.0, 0.5, 0.5]), np.array([0, 0, 1]))
    weights = np.array([4.0 / 1.0, 6.0 / 0.5]) ** 2
    mean = np.exp(np.sum(weights * np.log([4.0, 6.0])) / np.sum(weights))
    error = mean / np.sqrt(np.sum(weights))
    by_hand = combine_plate_reads(np.array([mean, 8.0]), np.array([error, 0.5]), np.array([0, 1]))
    assert pooled.value == pytest.approx(by_hand.value, rel=1e-12)
    assert pooled.high == pytest.approx(by_hand.high, rel=1e-12)
    assert pooled.plate_read_count == 2


def test_one_plate_read_tells_nothing_of_the_spread_between_plates() -> None:
    single = combine_plate_reads(
        np.array([80.0]), np.array([2.0]), np.array([3]), low=np.array([76.0]), high=np.array([np.nan])
    )
    assert (single.value, single.standard_error, single.low) == (80.0, 2.0, 76.0)
    assert np.isnan(single.high)
    assert single.reason is not None
    assert "open above" in single.reason
    assert np.isnan(single.between_plate_sd)
    assert single.within_plate_only
    two_series = combine_plate_reads(np.array([80.0, 84.0]), np.array([2.0, 2.1]), np.array([0, 0]))
    assert two_series.value == pytest.approx(np.sqrt(80.0 * 84.0))
    assert two_series.within_plate_only
    assert np.isnan(two_series.between_plate_sd)
    assert two_series.low < two_series.value < two_series.high


def test_an_open_end_stays_open_while_most_weight_rests_on_it() -> None:
    values, errors, plates = np.array([80.0, 90.0, 85.0]), np.array([40.0, 4.0, 4.0]), np.arange(3)
    low, closed = values - 1.96 * np.array([20.0, 4.0, 4.0]), values + 8.0
    light = combine_plate_reads(values, errors, plates, low, np.where(plates == 0, np.nan, closed))
    assert np.isfinite(light.high)
    assert light.reason is None
    heavy = combine_plate_reads(values, errors, plates, low, np.where(plates == 0, closed, np.nan))
    assert np.isnan(heavy.high)
    assert heavy.low > 0
    assert heavy.reason == "the plate reads leave the interval open above"


def test_what_no_plate_read_holds_has_no_value() -> None:
    value = combine_plate_reads(
        np.array([400.0, 500.0]),
        np.array([900.0, 800.0]),
        np.array([0, 1]),
        low=np.array([30.0, 60.0]),
        high=np.array([np.nan, 9000.0]),
    )
    assert np.isnan(value.value)
    assert np.isnan(value.standard_error)
    assert value.low == 30.0
    assert np.isnan(value.high)
    assert value.reason is not None
    assert "exceeds its value" in value.reason
    with_a_good_one = combine_plate_reads(
        np.array([400.0, 500.0]),
        np.array([900.0, 50.0]),
        np.array([0, 1]),
        np.full(2, 9.0),
        np.full(2, 900.0),
    )
    assert (with_a_good_one.value, with_a_good_one.plate_read_count) == (500.0, 1)


def test_agreeing_plates_have_no_spread_and_no_interval_narrower_than_their_errors() -> None:
    value = combine_plate_reads(np.array([5.0, 5.0001, 4.9999]), np.full(3, 0.3), np.arange(3))
    assert value.between_plate_sd == 0.0
    assert value.standard_error == pytest.approx(0.3 / np.sqrt(3.0), rel=1e-6)


def test_estimates_without_a_usable_error_are_not_weighed() -> None:
    value = combine_plate_reads(
        np.array([5.0, 6.0, 50.0, np.nan]), np.array([0.5, 0.5, np.nan, 0.1]), np.array([0, 1, 2, 3])
    )
    assert 5.0 < value.value < 6.0
    assert value.plate_read_count == 2
    unweighed = combine_plate_reads(np.array([5.0, 6.0]), np.array([np.nan, 0.0]), np.array([0, 1]))
    assert unweighed.value == pytest.approx(np.sqrt(30.0))
    assert np.isnan(unweighed.low)
    nothing = combine_plate_reads(np.array([np.nan]), np.array([1.0]), np.array([0]))
    assert np.isnan(nothing.value)
    assert nothing.plate_read_count == 0


@given(seed=st.integers(0, 2**20), factor=st.floats(1e-6, 1e6), count=st.integers(2, 12))
@settings(max_examples=40, deadline=None)
def test_order_and_unit_do_not_matter(seed: int, factor: float, count: int) -> None:
    generator = np.random.default_rng(seed)
    values, errors = generator.normal(80.0, 4.0, count), generator.uniform(1.0, 3.0, count)
    plate = generator.integers(0, count, count)
    order = generator.permutation(count)
    plain = combine_plate_reads(values, errors, plate)
    shuffled = combine_plate_reads(values[order], errors[order], plate[order])
    assert (plain.value, plain.low, plain.high) == pytest.approx(
        (shuffled.value, shuffled.low, shuffled.high), rel=1e-12, nan_ok=True
    )
    scaled = combine_plate_reads(values * factor, errors * factor, plate)
    assert scaled.value == pytest.approx(plain.value * factor, rel=1e-9)
    assert scaled.high == pytest.approx(plain.high * factor, rel=1e-9)


def test_intervals_cover_the_lots_true_value() -> None:
    generator = np.random.default_rng(6)
    covered = 0
    for _ in range(1000):
        errors = generator.uniform(0.5, 2.0, 6)
        values = 80.0 + 1.5 * generator.standard_normal(6) + errors * generator.standard_normal(6)
        value = combine_plate_reads(values, errors, np.arange(6))
        covered += value.low <= 80.0 <= value.high
    # Never below 0.93; the scale kept at 1 or above makes it a little wide where plates agree.
    assert 930 <= covered <= 990
