"""The pooled coefficient of variation of replicates: its value, its interval, and what it leaves out."""

from __future__ import annotations

import numpy as np
import pytest

from models.statistics.replicates import replicate_cv


def test_by_hand() -> None:
    """Two pairs: CVs of sqrt(2)/10 and 0, one degree of freedom each."""
    found = replicate_cv(np.array([9.0, 11.0, 5.0, 5.0]), np.array([0, 0, 1, 1]))
    assert found.cv == pytest.approx(0.1)
    assert found.degrees_of_freedom == 2
    assert found.group_cv == pytest.approx([np.sqrt(2.0) / 10.0, 0.0])


def test_recovered_from_pairs_and_covered_by_the_interval() -> None:
    generator = np.random.default_rng(1)
    group, true, hits, pooled = np.repeat(np.arange(8), 2), 0.05, 0, []
    for _ in range(1000):
        means = np.repeat(np.geomspace(0.1, 3.0, 8), 2)
        found = replicate_cv(means * (1.0 + true * generator.standard_normal(16)), group)
        hits += found.low <= true <= found.high
        pooled.append(found.cv**2)
    assert np.sqrt(np.mean(pooled)) == pytest.approx(true, rel=0.03)
    assert 0.93 < hits / 1000 < 0.97


def test_what_says_nothing_is_left_out() -> None:
    values = np.array([1.0, 1.2, np.nan, 3.0, -1.0, 1.0])
    found = replicate_cv(values, np.array([0, 0, 0, 1, 2, 2]))
    assert found.degrees_of_freedom == 1
    assert np.isnan(found.group_cv[1:]).all()
    nothing = replicate_cv(np.array([1.0, 2.0]), np.array([0, 1]))
    assert np.isnan([nothing.cv, nothing.low, nothing.high]).all()
    assert nothing.degrees_of_freedom == 0
