"""Too few runs of one sign: exact against counting all orders, and what replicates may not do."""

from __future__ import annotations

from itertools import groupby, product
from random import Random

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from models.statistics.runs import runs_tail, too_few_runs


def one_fit(residual: list[float], order: list[float] | None = None) -> float:
    values = np.array(residual)
    places = np.arange(values.size, dtype=float) if order is None else np.array(order)
    return float(too_few_runs(np.zeros(values.size, dtype=int), places, values, 1)[0])


@pytest.mark.parametrize(("positive", "negative"), [(1, 1), (1, 6), (3, 4), (5, 5), (4, 7)])
def test_the_tail_is_the_share_of_all_orders(positive: int, negative: int) -> None:
    orders = [signs for signs in product((0, 1), repeat=positive + negative) if sum(signs) == positive]
    runs = np.array([len(list(groupby(signs))) for signs in orders])
    for seen in range(2, positive + negative + 1):
        tail = runs_tail(np.array([float(seen)]), np.array([float(positive)]), np.array([float(negative)]))
        assert tail[0] == pytest.approx(np.mean(runs <= seen), rel=1e-12)


@pytest.mark.parametrize(
    ("positive", "negative", "runs", "tail"),
    [
        # Swed and Eisenhart 1943 (doi:10.1214/aoms/1177731494), table I; from memory, as are the next two:
        # the 0.05 critical number of runs is 6 for 10 and 10, 2 for 4 and 4 and 3 for 5 and 5.
        (10, 10, 6, 0.019),
        (4, 4, 2, 0.029),
        (5, 5, 3, 0.040),
    ],
)
def test_critical_numbers_of_runs(positive: int, negative: int, runs: int, tail: float) -> None:
    found, beyond = runs_tail(
        np.array([runs, runs + 1.0]), np.full(2, float(positive)), np.full(2, float(negative))
    )
    assert found == pytest.approx(tail, abs=0.0006)
    assert found <= 0.05 < beyond


def test_an_arch_of_residuals_is_told() -> None:
    arch = [-1.0] * 4 + [1.0] * 8 + [-1.0] * 4
    zigzag = [(-1.0) ** k for k in range(16)]
    assert one_fit(arch) < 0.01
    assert one_fit(zigzag) == pytest.approx(1.0)


def test_replicates_of_one_level_count_once_in_any_order() -> None:
    # Three replicates each of 10 levels that alternate: counted singly, the signs would make runs of three.
    levels = np.repeat(np.arange(10.0), 3)
    signs = np.repeat([(-1.0) ** k for k in range(10)], 3)
    assert one_fit(list(signs), list(levels)) == pytest.approx(1.0)
    mixed = signs + np.tile([0.0, 2.5, -2.5], 10)
    shuffled = np.random.default_rng(5).permutation(30)
    assert one_fit(list(mixed[shuffled]), list(levels[shuffled])) == one_fit(list(signs), list(levels))


@pytest.mark.parametrize(
    "residual",
    [[], [1.0], [1.0] * 12, [-1.0, -1.0, -1.0, 1.0, 1.0, 1.0, 1.0], [1.0] + [-1.0] * 11, [0.0] * 12],
)
def test_signs_that_cannot_tell_have_no_p_value(residual: list[float]) -> None:
    assert np.isnan(one_fit(residual))


def test_eight_levels_can_tell() -> None:
    # 2 / C(8, 4), from the definition.
    assert one_fit([-1.0] * 4 + [1.0] * 4) == pytest.approx(2 / 70)


def test_unknown_and_zero_residuals_are_left_out() -> None:
    plain = [-1.0] * 5 + [1.0] * 5
    assert one_fit([-1.0, np.nan, -1.0, 0.0, *plain[2:]]) == one_fit(plain)


@given(
    st.lists(st.lists(st.sampled_from([-2.0, -1.0, 1.0, 2.0]), max_size=20), min_size=1, max_size=6),
    st.randoms(use_true_random=False),
)
def test_a_fit_has_the_same_p_value_in_any_batch(fits: list[list[float]], random: Random) -> None:
    rows = [
        (number, float(place), value) for number, fit in enumerate(fits) for place, value in enumerate(fit)
    ]
    random.shuffle(rows)
    columns = np.array(rows).reshape(-1, 3)
    together = too_few_runs(columns[:, 0].astype(int), columns[:, 1], columns[:, 2], len(fits))
    np.testing.assert_array_equal(together, [one_fit(fit) for fit in fits])


def test_true_residuals_seldom_look_like_misfit() -> None:
    rng = np.random.default_rng(11)
    fits, places = 4000, 12
    residual = rng.standard_normal((fits, places))
    p_value = too_few_runs(
        np.repeat(np.arange(fits), places),
        np.tile(np.arange(places, dtype=float), fits),
        residual.ravel(),
        fits,
    )
    for level in (0.01, 0.05, 0.2):
        # Exact tests of discrete counts stay at or below their level; 4 standard errors of the share of fits.
        assert np.nanmean(p_value <= level) <= level + 4 * np.sqrt(level / fits)
    assert np.nanmean(p_value <= 0.2) > 0.05
