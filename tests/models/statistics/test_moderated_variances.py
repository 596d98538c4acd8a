"""Moderated variances, replicate scatter and order-free sums against simulation and direct formulas."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from models.statistics.moderation import moderate_variances
from models.statistics.replicates import pooled_cv
from models.statistics.sums import order_free_sum, sum_rows


def drawn(
    prior_degrees: float, prior: float, degrees: float, count: int, seed: int
) -> tuple[np.ndarray, np.ndarray]:
    """True variances from Smyth's scaled inverse chi-square, and residual variances drawn about them."""
    generator = np.random.default_rng(seed)
    true = prior * prior_degrees / generator.chisquare(prior_degrees, count)
    return true, true * generator.chisquare(degrees, count) / degrees


def test_prior_is_recovered() -> None:
    _, observed = drawn(8.0, 0.04, 3.0, 20000, 1)
    result = moderate_variances(observed, np.full(20000, 3.0))
    assert result.prior_degrees == pytest.approx(8.0, rel=0.1)
    assert result.prior_variance == pytest.approx(0.04, rel=0.05)


def test_moderated_variances_are_nearer_the_truth() -> None:
    true, observed = drawn(8.0, 0.04, 3.0, 400, 2)
    moderated = moderate_variances(observed, np.full(400, 3.0)).variance
    assert np.mean(np.log(moderated / true) ** 2) < 0.4 * np.mean(np.log(observed / true) ** 2)


def test_one_variance_for_all_is_pooled() -> None:
    generator = np.random.default_rng(3)
    observed = 2.0 * generator.chisquare(4.0, 300) / 4.0
    result = moderate_variances(observed, np.full(300, 4.0))
    assert result.variance == pytest.approx(np.full(300, 2.0), rel=0.35)
    assert result.variance.mean() == pytest.approx(observed.mean(), rel=0.02)


def test_what_is_not_known_takes_the_prior_and_nothing_gives_nothing() -> None:
    observed = np.array([1.0, 1.2, 0.8, 1.1, np.nan, 5.0])
    result = moderate_variances(observed, np.array([5.0, 5.0, 5.0, 5.0, 5.0, 0.0]))
    assert result.variance[4] == pytest.approx(result.prior_variance)
    assert result.variance[5] == pytest.approx(result.prior_variance)
    nothing = moderate_variances(np.array([np.nan, np.nan]), np.zeros(2))
    assert np.isnan(nothing.variance).all()
    assert np.isnan(nothing.prior_variance)


def test_noise_free_variances_stay_zero() -> None:
    result = moderate_variances(np.zeros(5), np.full(5, 3.0))
    assert (result.variance == 0.0).all()


@given(seed=st.integers(0, 2**20))
@settings(max_examples=20, deadline=None)
def test_order_does_not_matter_to_the_last_bit(seed: int) -> None:
    generator = np.random.default_rng(seed)
    observed, degrees = generator.chisquare(3.0, 50), generator.integers(1, 9, 50).astype(float)
    order = generator.permutation(50)
    plain = moderate_variances(observed, degrees)
    shuffled = moderate_variances(observed[order], degrees[order])
    np.testing.assert_array_equal(plain.variance[order], shuffled.variance)
    assert order_free_sum(observed) == order_free_sum(observed[order])


def test_rows_are_added_one_after_another_however_many_columns() -> None:
    values = np.random.default_rng(0).random((37, 9))
    wide = sum_rows(values)
    for column in range(9):
        assert sum_rows(values[:, column : column + 1])[0] == wide[column]
        total = 0.0
        for value in values[:, column]:
            total += value
        assert wide[column] == total


def test_replicate_cv_is_recovered_plate_by_plate() -> None:
    generator = np.random.default_rng(4)
    true = np.array([0.01, 0.05, 0.12])
    groups, replicates = 400, 3
    plate = np.repeat(np.arange(3), groups * replicates)
    group = np.repeat(np.arange(3 * groups), replicates)
    rate = np.repeat(generator.uniform(0.2, 2.0, 3 * groups), replicates)
    error = 0.005 * np.ones_like(rate)
    residual = rate * true[plate] * generator.standard_normal(rate.size)
    residual += error * generator.standard_normal(rate.size) + np.repeat(
        generator.normal(0, 1, 3 * groups), replicates
    )
    cv, degrees = pooled_cv(plate, group, residual, rate, error, 4)
    assert cv[:3] == pytest.approx(true, rel=0.1)
    assert degrees.tolist() == [800.0, 800.0, 800.0, 0.0]
    assert cv[3] == 0.0


def test_scatter_within_standard_errors_gives_no_cv() -> None:
    residual = np.array([0.001, -0.001, 0.002, -0.002])
    cv, _ = pooled_cv(np.zeros(4, int), np.array([0, 0, 1, 1]), residual, np.ones(4), np.full(4, 0.1), 1)
    assert cv[0] == 0.0
