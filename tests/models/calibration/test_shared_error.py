"""The shared error widens intervals, is not averaged away over wells, and leaves open ends open."""

from __future__ import annotations

import numpy as np
import pytest

from models.calibration.calibration import Calibration
from models.calibration.shared_error import add_shared_error, relative_error_of_factors
from models.calibration.standard_curve import calibrate
from models.calibration.standards import standard_wells


def test_nothing_shared_changes_nothing_and_all_shared_is_the_shared() -> None:
    value, error = np.array([10.0]), np.array([0.5])
    none = add_shared_error(value, error, np.array([9.0]), np.array([11.2]), 0.0)
    assert (none.standard_error[0], none.low[0], none.high[0]) == pytest.approx((0.5, 9.0, 11.2))
    all_shared = add_shared_error(value, np.zeros(1), value, value, 0.02)
    assert all_shared.standard_error[0] == pytest.approx(0.2)
    # 1.96: the normal quantile.
    assert all_shared.high[0] == pytest.approx(10.0 * np.exp(1.959964 * 0.02))
    assert all_shared.low[0] == pytest.approx(10.0 * np.exp(-1.959964 * 0.02))


def test_open_ends_stay_open_and_intervals_only_grow() -> None:
    found = add_shared_error(
        np.array([10.0, 10.0]), np.ones(2), np.array([np.nan, 8.0]), np.array([12.0, np.nan]), 0.03, 5
    )
    assert np.isnan(found.low[0])
    assert np.isnan(found.high[1])
    assert found.high[0] > 12.0
    assert found.low[1] < 8.0
    below = add_shared_error(np.array([1.0]), np.ones(1), np.array([-1.0]), np.array([3.0]), 0.1)
    assert below.low[0] < -1.0


def test_a_rate_with_its_shared_error_covers_however_many_wells() -> None:
    """Wells of one plate, one curve of 6 standards: without the shared error the mean rate covers seldom."""
    generator, true, wells, runs = np.random.default_rng(1), 0.5, 48, 600
    standards, times = np.repeat([0.0, 50.0, 100.0], 2), np.linspace(0.0, 100.0, 21)
    plain, widened = 0, 0
    for _ in range(runs):
        curve = calibrate(standards, 0.1 + 0.01 * standards + 0.02 * generator.standard_normal(6))
        assert isinstance(curve, Calibration)
        signal = 0.1 + 0.01 * true * times + 0.005 * generator.standard_normal((wells, times.size))
        product = (signal - curve.parameters[0]) / curve.parameters[1]
        rates = np.polyfit(times, product.T, 1)[0]
        mean, error = np.mean(rates, keepdims=True), np.std(rates, ddof=1, keepdims=True) / np.sqrt(wells)
        ends = mean - 2.01 * error, mean + 2.01 * error
        plain += bool(ends[0][0] <= true <= ends[1][0])
        wide = add_shared_error(mean, error, *ends, curve.relative_error_shared, curve.degrees_of_freedom)
        widened += bool(wide.low[0] <= true <= wide.high[0])
    assert plain / runs < 0.5
    assert 0.93 < widened / runs < 0.98


def test_factors_add_as_squares() -> None:
    assert relative_error_of_factors(0.03, 0.04) == pytest.approx(0.05)
    assert relative_error_of_factors() == 0.0


def test_a_standard_well_gives_one_signal_and_shows_its_drift() -> None:
    falling = np.linspace(1.1, 0.9, 9)
    found = standard_wells(
        np.stack([np.full(9, 0.5), falling, np.full(9, np.nan), np.r_[1.0, 3.0, [np.nan] * 7]])
    )
    np.testing.assert_allclose(found.signal, [0.5, 1.0, np.nan, 2.0])
    np.testing.assert_allclose(found.drift_share, [0.0, -0.15, np.nan, np.nan], atol=1e-12)
