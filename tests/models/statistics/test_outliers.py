"""Outlier tests: critical values and levels on normal samples, masking, and who is named."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import t as t_distribution

from models.statistics.outliers import bonferroni_p, critical_distance, generalised_esd, grubbs


def test_p_value_and_critical_value_are_one_test() -> None:
    rng = np.random.default_rng(3)
    for count in (3, 5, 12, 40):
        for values in rng.standard_normal((50, count)):
            found = grubbs(values)
            for level in (0.01, 0.05, 0.1):
                assert (found.p_value <= level) == (found.statistic >= critical_distance(count, level))


@pytest.mark.parametrize("count", [5, 10, 30])
def test_clean_samples_have_an_outlier_as_often_as_said(count: int) -> None:
    rng = np.random.default_rng(count)
    samples = rng.standard_normal((4000, count))
    share = np.mean([grubbs(values).p_value <= 0.05 for values in samples])
    # 4 standard errors of a share of 4000 samples.
    assert abs(share - 0.05) < 4 * np.sqrt(0.05 * 0.95 / 4000)


def test_two_outliers_mask_each_other_from_grubbs_but_not_from_rosner() -> None:
    values = np.array([*np.random.default_rng(8).standard_normal(18), 9.0, 9.5])
    together = generalised_esd(values, most=4)
    assert sorted(together.outliers) == [18, 19]
    few = np.array([0.0, 0.1, -0.1, 0.05, 9.0, 9.1])
    assert grubbs(few).p_value > 0.5


def test_a_far_value_is_named() -> None:
    found = grubbs(np.array([1.0, 1.1, 0.9, 1.05, 3.0, 0.95]))
    assert found.position == 4
    assert found.p_value < 0.001
    assert generalised_esd(np.array([1.0, 1.1, 0.9, 1.05, 3.0, 0.95]), most=1).outliers.tolist() == [4]


@given(st.lists(st.floats(-100, 100), min_size=3, max_size=20), st.floats(0.1, 10), st.floats(-50, 50))
def test_scale_and_origin_do_not_matter(values: list[float], scale: float, origin: float) -> None:
    given_values = np.round(np.array(values), 3)
    if np.ptp(given_values) < 0.01:
        return
    assert grubbs(scale * given_values + origin).statistic == pytest.approx(
        grubbs(given_values).statistic, rel=1e-6
    )


@pytest.mark.parametrize("values", [[], [1.0, 2.0], [1.0, 2.0, np.nan]])
def test_too_few_or_unknown_values_are_refused(values: list[float]) -> None:
    with pytest.raises(ValueError, match="at least 3 values"):
        grubbs(np.array(values))
    with pytest.raises(ValueError, match="at least 3 values"):
        generalised_esd(np.array(values), most=1)


@pytest.mark.parametrize("most", [0, 9])
def test_more_outliers_than_values_allow_are_refused(most: int) -> None:
    with pytest.raises(ValueError, match="up to 8 outliers"):
        generalised_esd(np.arange(10.0), most=most)


def test_equal_values_have_no_outlier() -> None:
    assert grubbs(np.full(6, 2.0)).p_value == 1.0
    assert generalised_esd(np.full(6, 2.0), most=2).outlier_count == 0


def test_bonferroni_multiplies_both_tails_by_the_points_tried() -> None:
    tail = t_distribution.sf(5.0, 21.0)
    found = bonferroni_p(
        np.array([5.0, -5.0, 0.5, np.nan, 5.0]), np.array([22.0] * 4 + [1.0]), np.full(5, 24.0)
    )
    assert found[:2] == pytest.approx([48 * tail] * 2)
    assert found[2] == 1.0
    assert np.isnan(found[3:]).all()


def test_clean_lines_have_an_outlier_as_often_as_said() -> None:
    rng = np.random.default_rng(21)
    x = np.linspace(0.0, 1.0, 12)
    design = np.column_stack([np.ones(12), x])
    hat = design @ np.linalg.pinv(design)
    residual = (np.eye(12) - hat) @ rng.standard_normal((12, 4000))
    spare = 1.0 - np.diag(hat)[:, None]
    total = np.sum(residual**2, axis=0)
    studentised = residual / np.sqrt((total - residual**2 / spare) / 9.0 * spare)
    p_value = bonferroni_p(studentised, np.full(studentised.shape, 10.0), np.full(studentised.shape, 12.0))
    share = np.mean(p_value.min(axis=0) <= 0.05)
    assert abs(share - 0.05) < 4 * np.sqrt(0.05 * 0.95 / 4000)
