"""Change points: found where they are, not found where there are none, with a p value that keeps its word."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import brentq
from scipy.stats import t as t_distribution
from scipy.stats import ttest_ind

from models.statistics.change_points import change_points, largest_t_p, strongest_change


def steps(levels: list[float], length: int, seed: int, sd: float = 1.0) -> np.ndarray:
    random = np.random.default_rng(seed)
    return np.repeat(levels, length) + random.normal(0, sd, length * len(levels))


def test_changes_are_found_where_they_are() -> None:
    for seed in range(20):
        found = change_points(steps([0.0, 4.0, 4.0, 1.0], 15, seed), alpha=0.001)
        assert len(found) == 2
        assert found[0].place == pytest.approx(15, abs=2)
        assert found[1].place == pytest.approx(45, abs=2)
        assert found[0].before == pytest.approx(0.0, abs=1.2)
        assert found[0].after == found[1].before == pytest.approx(4.0, abs=0.8)
        assert found[0].t_value > 0 > found[1].t_value


@given(st.integers(7, 25), st.integers(0, 1000))
def test_the_statistic_is_the_largest_of_all_t_tests(n: int, seed: int) -> None:
    x = np.random.default_rng(seed).normal(size=n)
    place, t_value, p_value = strongest_change(x, 2)
    tests = {k: float(ttest_ind(x[k:], x[:k]).statistic) for k in range(2, n - 1)}
    best = max(tests, key=lambda k: abs(tests[k]))
    assert place == best
    assert t_value == pytest.approx(tests[best], rel=1e-9)
    assert p_value == pytest.approx(largest_t_p(t_value, n, 2), rel=1e-9)
    alone = 2 * t_distribution.sf(abs(t_value), n - 2)
    assert alone * (1 - 1e-4) <= p_value <= min(1.0, (n - 3) * alone) * (1 + 1e-4)


@pytest.mark.parametrize("n", [8, 20, 60])
@pytest.mark.parametrize("alpha", [0.01, 0.05])
def test_a_constant_level_is_split_as_often_as_alpha_says_and_no_more(n: int, alpha: float) -> None:
    critical = brentq(lambda t_value: largest_t_p(t_value, n) - alpha, 1.0, 40.0, xtol=1e-4)
    runs = 40_000
    x = np.random.default_rng(n).normal(size=(runs, n))
    places = np.arange(1, n)
    centred = x - x.mean(axis=1, keepdims=True)
    r = np.cumsum(centred, axis=1)[:, :-1] * np.sqrt(n / (places * (n - places)))
    r = np.abs(r).max(axis=1) / np.sqrt(np.sum(centred**2, axis=1))
    share = float(np.mean(r * np.sqrt((n - 2) / (1 - r**2)) >= critical))
    room = 3 * np.sqrt(alpha * (1 - alpha) / runs)
    # An upper bound that is near the truth: even for 60 points it finds two thirds of alpha.
    assert 0.65 * alpha - room < share < alpha + room


@given(st.lists(st.integers(-5, 5), min_size=0, max_size=30), st.integers(1, 4))
def test_scale_and_direction_do_not_matter(x: list[int], shortest: int) -> None:
    given_values = np.array(x, dtype=float)
    found = change_points(given_values, 0.05, shortest)
    turned = change_points(-8.0 * given_values + 64.0, 0.05, shortest)
    assert [each.place for each in turned] == [each.place for each in found]
    for before, after in zip(found, turned, strict=True):
        assert after.after == pytest.approx(-8.0 * before.after + 64.0)
    edges = [0, *(each.place for each in found), len(x)]
    assert all(end - first >= shortest for first, end in pairwise(edges) if found)


def test_no_point_and_equal_points_have_no_change() -> None:
    assert change_points(np.array([])) == ()
    assert change_points(np.full(50, 0.1)) == ()
    assert np.isnan(strongest_change(np.array([1.0, 2.0, 3.0]))[2])


def test_a_step_without_any_scatter_is_certain() -> None:
    (found,) = change_points(np.repeat([1.0, 2.0], 6))
    assert (found.place, found.before, found.after, found.p_value) == (6, 1.0, 2.0, 0.0)
    assert found.t_value > 1e6


def test_one_point_off_is_an_outlier_and_no_level() -> None:
    x = steps([0.0], 30, 4)
    x[29] += 12.0
    assert change_points(x) == ()


def test_what_is_no_sequence_is_refused() -> None:
    with pytest.raises(ValueError, match="all known"):
        change_points(np.array([1.0, np.nan]))
    with pytest.raises(ValueError, match="at least one"):
        change_points(np.ones(5), shortest=0)
    with pytest.raises(ValueError, match="too few"):
        largest_t_p(3.0, 4, 3)
