"""Lack of fit against published values, its own definition, and simulation."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from scipy.optimize import least_squares
from scipy.stats import kstest

from models.statistics.lack_of_fit import lack_of_fit

PUROMYCIN = Path(__file__).resolve().parents[3] / "fixtures" / "reference" / "puromycin.csv"


def test_puromycin() -> None:
    """Bates and Watts 1988, A1.3, both groups in one call; F and p from R 4.2 (nls against lm on levels)."""
    data = pd.read_csv(PUROMYCIN, comment="#")
    residual = np.zeros(len(data))
    for state in ("treated", "untreated"):
        mine = (data["state"] == state).to_numpy()
        x, y = data.loc[mine, "conc_ppm"].to_numpy(), data.loc[mine, "rate_counts_per_min2"].to_numpy(float)

        def misfit(p: np.ndarray, x: np.ndarray = x, y: np.ndarray = y) -> np.ndarray:
            return np.asarray(y - p[0] * x / (p[1] + x))

        residual[mine] = least_squares(misfit, [200.0, 0.05], x_scale="jac", xtol=1e-15, ftol=1e-15).fun
    fit = (data["state"] == "untreated").to_numpy().astype(int)
    group = data.groupby(["state", "conc_ppm"]).ngroup().to_numpy()
    found = lack_of_fit(fit, group, residual, np.ones(len(data)), np.array([2.0, 2.0]))
    assert found.f_value == pytest.approx([1.07085766568004, 1.45656263785221], rel=1e-6)
    assert found.p_value == pytest.approx([0.446834995563335, 0.339974667149296], rel=1e-6)
    assert found.lack_degrees.tolist() == [4.0, 4.0]
    assert found.pure_degrees.tolist() == [6.0, 5.0]


def line_fits(generator: np.random.Generator, fits: int, bend: float) -> tuple[np.ndarray, ...]:
    """Weighted lines through triplicates at six places of a parabola, scatter in proportion to place."""
    place = np.repeat(np.arange(1.0, 7.0), 3)
    y = place + bend * (place - 3.5) ** 2 + 0.1 * place * generator.standard_normal((fits, 18))
    root = 1.0 / place
    design = np.stack([root, place * root], axis=1)
    solved = np.linalg.lstsq(design, (y * root).T, rcond=None)[0]
    residual = (y - (solved[0][:, None] + solved[1][:, None] * place)).ravel()
    fit = np.repeat(np.arange(fits), 18)
    return fit, np.repeat(np.arange(6 * fits), 3), residual, np.tile(place**-2.0, fits), np.full(fits, 2.0)


def test_p_is_uniform_where_the_law_holds_and_small_where_it_does_not() -> None:
    true = lack_of_fit(*line_fits(np.random.default_rng(1), 1500, 0.0))
    assert kstest(true.p_value, "uniform").pvalue > 0.01
    assert true.pure_error_variance.mean() == pytest.approx(0.01, rel=0.05)
    bent = lack_of_fit(*line_fits(np.random.default_rng(2), 1500, 0.15))
    assert np.mean(bent.p_value < 0.01) > 0.6


def test_scale_of_the_weights_does_not_matter() -> None:
    fit, group, residual, weight, constants = line_fits(np.random.default_rng(3), 4, 0.1)
    plain = lack_of_fit(fit, group, residual, weight, constants)
    scaled = lack_of_fit(fit, group, 1e-6 * residual, 7.0 * weight, constants)
    np.testing.assert_allclose(plain.p_value, scaled.p_value, rtol=1e-9)


def test_without_replicates_or_levels_to_spare_nothing_is_claimed() -> None:
    lonely = lack_of_fit(
        np.zeros(5, int), np.arange(5), np.array([0.1, -0.2, 0.1, 0.3, -0.3]), np.ones(5), np.array([2.0])
    )
    assert np.isnan(lonely.f_value[0])
    assert np.isnan(lonely.p_value[0])
    assert np.isnan(lonely.pure_error_variance[0])
    two_levels = np.array([0, 0, 1, 1])
    full = lack_of_fit(
        np.zeros(4, int), two_levels, np.array([0.1, -0.1, 0.2, -0.2]), np.ones(4), np.array([2.0])
    )
    assert np.isnan(full.p_value[0])
    assert full.pure_error_variance[0] == pytest.approx(0.05)


def test_replicates_that_agree_exactly_give_no_verdict() -> None:
    group = np.array([0, 0, 1, 1, 2, 2])
    found = lack_of_fit(
        np.zeros(6, int), group, np.array([1.0, 1.0, -2.0, -2.0, 1.0, 1.0]), np.ones(6), np.array([2.0])
    )
    assert np.isnan(found.f_value[0])
