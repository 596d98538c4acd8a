"""Path length from volume and from the water band, with what cannot be true left unknown."""

from __future__ import annotations

import numpy as np
import pytest

from models.calibration.path_length import (
    WATER_PER_CM,
    WATER_PER_CM_RELATIVE_ERROR,
    path_from_volume_cm,
    path_from_water_band,
)


def test_volume_over_area() -> None:
    assert path_from_volume_cm(200.0, 32.0) == pytest.approx(0.625)


def test_each_well_has_its_own_path_and_its_error() -> None:
    generator = np.random.default_rng(1)
    true = np.array([0.3, 0.56, 0.8])
    base = np.array([[0.04], [0.5], [0.1]])
    reads = 400
    signal_900 = base + 0.001 * generator.standard_normal((3, reads))
    signal_977 = base + true[:, None] * 0.178 + 0.001 * generator.standard_normal((3, reads))
    found = path_from_water_band(signal_977, signal_900, water_per_cm=0.178)
    expected_error = np.sqrt(2.0) * 0.001 / 0.178 / np.sqrt(reads)
    assert found.standard_error_cm == pytest.approx(expected_error, rel=0.15)
    assert np.all(np.abs(found.path_cm - true) < 4.0 * expected_error)


def test_a_dry_or_unread_well_has_no_path_length() -> None:
    signal_900 = np.array([[0.05, 0.05], [0.05, np.nan], [np.nan, np.nan], [0.2, 0.2], [0.05, 0.05]])
    signal_977 = np.array([[0.15, 0.15], [0.15, 0.15], [0.15, 0.15], [0.1, 0.1], [0.051, 0.051]])
    found = path_from_water_band(signal_977, signal_900)
    assert np.isfinite(found.path_cm).tolist() == [True, True, False, False, False]
    assert np.isnan(found.standard_error_cm).tolist() == [False, True, True, True, True]
    assert found.path_cm[0] == pytest.approx(0.1 / WATER_PER_CM)


def test_a_borrowed_value_has_an_error() -> None:
    """0.172 to 0.186 about 0.18 (from memory, unconfirmed): 2.2 % as a rectangular distribution."""
    assert pytest.approx(0.0225, abs=5e-4) == WATER_PER_CM_RELATIVE_ERROR


def test_shapes_and_values_are_checked() -> None:
    with pytest.raises(ValueError, match="the shape"):
        path_from_water_band(np.ones((2, 3)), np.ones((2, 2)))
    with pytest.raises(ValueError, match="above 0"):
        path_from_water_band(np.ones((2, 2)), np.ones((2, 2)), water_per_cm=0.0)
