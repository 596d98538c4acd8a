"""Profile-likelihood intervals against profiles traced by brute force, and their open ends."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import minimize_scalar
from scipy.stats import t as t_distribution

from models.kinetics.intervals import profile_intervals
from models.kinetics.law_fits import LawFit, fit_law
from models.kinetics.laws import HILL, MICHAELIS_MENTEN, at_levels

LEVELS_UM = np.repeat(np.geomspace(10.0, 960.0, 8), 2)


def fitted(
    rates: np.ndarray, law=MICHAELIS_MENTEN, levels: np.ndarray = LEVELS_UM
) -> tuple[LawFit, np.ndarray, np.ndarray]:
    conditions = at_levels(np.repeat(levels[:, None], rates.shape[1], axis=1))
    weights = np.ones_like(rates)
    fit = fit_law(law, conditions, rates, weights)
    return (fit, *profile_intervals(fit, conditions, rates, weights))


def noisy(seed: int, cv: float, km: float = 80.0, n: float = 1.0, series: int = 1) -> np.ndarray:
    generator = np.random.default_rng(seed)
    rate = 0.05 * LEVELS_UM**n / (km**n + LEVELS_UM**n)
    return rate[:, None] + cv * 0.05 * generator.standard_normal((rate.size, series))


def least_sum(rates: np.ndarray, *, km: float | None = None, vmax: float | None = None) -> float:
    """Least sum of squares with one constant held, the other found by brute force."""
    s = LEVELS_UM
    if km is not None:
        f = s / (km + s)
        return float(np.sum((rates - f * (f @ rates) / (f @ f)) ** 2))
    grid = np.linspace(-12.0, 16.0, 4001)
    curves = vmax * s[:, None] / (np.exp(grid) + s[:, None])
    sums = np.sum((rates[:, None] - curves) ** 2, axis=0)
    at = int(np.argmin(sums))
    found = minimize_scalar(
        lambda u: np.sum((rates - vmax * s / (np.exp(u) + s)) ** 2),
        bounds=(grid[max(at - 1, 0)], grid[min(at + 1, 4000)]),
        method="bounded",
        options={"xatol": 1e-12},
    )
    return float(min(found.fun, sums[at]))


@given(seed=st.integers(0, 2**20), cv=st.floats(0.01, 0.12))
@settings(max_examples=25, deadline=None)
def test_ends_lie_where_the_profile_crosses_the_threshold(seed: int, cv: float) -> None:
    rates = noisy(seed, cv)
    fit, low, high = fitted(rates)
    degrees = LEVELS_UM.size - 2
    threshold = fit.residual_sum[0] * (1.0 + t_distribution.ppf(0.975, degrees) ** 2 / degrees)
    for row, held in enumerate(("vmax", "km")):
        for end in (low[row, 0], high[row, 0]):
            if np.isfinite(end):
                assert least_sum(rates[:, 0], **{held: end}) == pytest.approx(threshold, rel=1e-5)
        assert not low[row, 0] > fit.constants[row, 0]
        assert not high[row, 0] < fit.constants[row, 0]


@given(seed=st.integers(0, 2**20), km=st.floats(300.0, 30000.0))
@settings(max_examples=25, deadline=None)
def test_km_is_open_above_exactly_where_a_straight_line_is_good_enough(seed: int, km: float) -> None:
    rates = noisy(seed, 0.02, km)
    fit, _, high = fitted(rates)
    if not fit.converged[0] or fit.at_limit[0]:
        return
    line = LEVELS_UM * (LEVELS_UM @ rates[:, 0]) / (LEVELS_UM @ LEVELS_UM)
    degrees = LEVELS_UM.size - 2
    threshold = fit.residual_sum[0] * (1.0 + t_distribution.ppf(0.975, degrees) ** 2 / degrees)
    is_open = np.sum((rates[:, 0] - line) ** 2) <= threshold
    assert np.isnan(high[1, 0]) == is_open
    assert np.isnan(high[0, 0]) == is_open


def test_km_far_below_the_levels_is_open_below_while_vmax_is_closed() -> None:
    fit, low, high = fitted(noisy(4, 0.03, km=0.3))
    assert fit.constants[1, 0] > 0
    assert np.isnan(low[1, 0])
    assert np.all(np.isfinite([low[0, 0], high[0, 0], high[1, 0]]))


def test_hill_ends_lie_on_the_threshold_too() -> None:
    rates = noisy(11, 0.02, n=1.8, series=3)
    fit, low, high = fitted(rates, HILL)
    degrees = LEVELS_UM.size - 3
    factor = 1.0 + t_distribution.ppf(0.975, degrees) ** 2 / degrees
    log_s = np.log(LEVELS_UM)
    for series in range(3):
        for ends in (low, high):
            n = ends[2, series]
            # For a held n, trace K0.5 on a fine grid, the amplitude being linear.
            k = np.exp(np.linspace(np.log(20.0), np.log(400.0), 20001))
            f = 1.0 / (1.0 + np.exp(-n * (log_s[:, None] - np.log(k))))
            amplitude = (f * rates[:, [series]]).sum(axis=0) / (f * f).sum(axis=0)
            least = np.min(np.sum((rates[:, [series]] - amplitude * f) ** 2, axis=0))
            assert least == pytest.approx(fit.residual_sum[series] * factor, rel=1e-5)


def test_intervals_do_not_depend_on_the_batch() -> None:
    rates = noisy(2, 0.04, series=1500)
    _, low, high = fitted(rates)
    _, one_low, one_high = fitted(rates[:, 1234:1235])
    np.testing.assert_array_equal(low[:, 1234], one_low[:, 0])
    np.testing.assert_array_equal(high[:, 1234], one_high[:, 0])


def test_intervals_cover_the_truth_as_often_as_they_say() -> None:
    _, low, high = fitted(noisy(3, 0.03, series=2000))
    for row, true in enumerate((0.05, 80.0)):
        covered = np.mean((low[row] <= true) & (true <= high[row]))
        # Three standard errors of a proportion of 0.95 over 2000 series.
        assert abs(covered - 0.95) < 3.0 * np.sqrt(0.95 * 0.05 / 2000)
