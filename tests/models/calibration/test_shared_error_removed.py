"""What is added as shared error comes out again whole."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from models.calibration.shared_error import add_shared_error, without_shared_error

ERRORS = st.floats(1e-4, 0.5)


@given(st.floats(1e-6, 1e6), ERRORS, ERRORS)
def test_adding_and_taking_out_again_changes_nothing(value: float, own: float, shared: float) -> None:
    values = np.array([value])
    low, high = values * np.exp(-2 * own), values * np.exp(2.2 * own)
    added = add_shared_error(values, values * own, low, high, shared)
    assert added.low[0] < low[0]
    back = without_shared_error(values, added.standard_error, added.low, added.high, np.array([shared]))
    np.testing.assert_allclose(back.standard_error, values * own, rtol=1e-6)
    np.testing.assert_allclose([back.low[0], back.high[0]], [low[0], high[0]], rtol=1e-6)


def test_an_open_end_stays_open() -> None:
    one = np.ones(1)
    back = without_shared_error(one, one * 0.1, np.array([0.8]), np.array([np.nan]), np.array([0.05]))
    assert np.isnan(back.high[0])
    assert back.low[0] > 0.8
