"""Whole curves fitted: recovery where no initial rate is left, refusals, open ends, any batch alike."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from models.kinetics.curves import CurveBatch
from models.kinetics.progress.fitting import ProgressOptions, fit_progress
from models.kinetics.progress.integrated import product_formed
from models.simulation import TRIPLICATE_NOISE, TRIPLICATE_TRUTH, simulate_plate, triplicate_design
from tests.models.kinetics.kinetic_plates import curve_batch

KM_UM, KCAT_PER_S = 80.0, 2000.0
PLATES = 60


def depleted(plates: int, *, highest: float = 12.0, seed: int = 11) -> CurveBatch:
    """Plates on which Vmax is 2 umol/L/s: five reads use up 11 % of the highest level, 60 % of the lowest."""
    design = triplicate_design(highest=highest)
    truth = {"lot": replace(TRIPLICATE_TRUTH, k_um=KM_UM, kcat_per_s=KCAT_PER_S)}
    simulated = [
        simulate_plate(design, truth, TRIPLICATE_NOISE, (), np.random.default_rng([seed, number]))
        for number in range(plates)
    ]
    return curve_batch(simulated, design)


@pytest.fixture(scope="module")
def batch() -> CurveBatch:
    return depleted(PLATES)


def test_constants_come_out_of_curves_that_leave_no_initial_rate(batch: CurveBatch) -> None:
    """Mean of Km and Vmax within 1 % of the truth, 95 % intervals that hold it as often as chance allows."""
    result = fit_progress(batch, PLATES)
    assert result.refusals.empty
    assert result.fits["converged"].all()
    for constant, true in (("km", KM_UM), ("vmax", KCAT_PER_S * 1e-3)):
        found = result.constants[result.constants["constant"] == constant]
        assert len(found) == PLATES
        assert found["value"].mean() == pytest.approx(true, rel=0.01)
        covered = ((found["low"] < true) & (true < found["high"])).mean()
        # Three standard errors of a share of 0.95 over 60 plates.
        assert covered >= 0.95 - 3 * np.sqrt(0.95 * 0.05 / PLATES)
        assert (found["low"] < found["value"]).all()
        assert (found["value"] < found["high"]).all()


def test_a_series_is_fitted_the_same_alone_and_among_others(batch: CurveBatch) -> None:
    together = fit_progress(batch.select(np.flatnonzero(batch.plate < 3)), 3).constants
    one = batch.select(np.flatnonzero(batch.plate == 1))
    alone = fit_progress(replace(one, series=np.where(one.series == 1, 0, -1)), 1).constants
    expected = together[together["series"] == 1].assign(series=0).reset_index(drop=True)
    pd.testing.assert_frame_equal(alone.reset_index(drop=True), expected, check_exact=True)


def test_constants_that_the_curves_leave_open_are_open_or_not_trusted() -> None:
    """All levels far below Km, little turned over: only Vmax / Km is known."""
    design = triplicate_design(lowest=0.001, highest=0.01)
    plate = simulate_plate(design, {"lot": TRIPLICATE_TRUTH}, TRIPLICATE_NOISE, (), np.random.default_rng(3))
    result = fit_progress(curve_batch([plate], design), 1)
    if result.refusals.empty:
        km = result.constants.set_index("constant").loc["km"]
        assert np.isnan(km["high"]) or not result.fits["trusted"].iloc[0]
    else:
        assert result.refusals["reason"].str.len().gt(10).all()


def test_what_cannot_be_fitted_is_refused_by_name(batch: CurveBatch) -> None:
    one = batch.select(np.flatnonzero(batch.plate == 0))
    unread = replace(one, product_um=np.full_like(one.product_um, np.nan))
    flat = replace(one, product_um=np.zeros_like(one.product_um))
    for broken in (unread, flat):
        result = fit_progress(broken, 1)
        assert list(result.refusals["series"]) == [0]
        assert result.constants.empty


def test_curves_at_levels_that_are_not_theirs_are_refused_or_not_trusted(batch: CurveBatch) -> None:
    """Every well said to hold 100 umol/L: they differ far more than wells are dispensed."""
    one = batch.select(np.flatnonzero(batch.plate == 0))
    result = fit_progress(replace(one, substrate_um=np.full_like(one.substrate_um, 100.0)), 1)
    assert not result.fits["trusted"].any()
    if result.refusals.empty:
        assert "unevenly" in result.fits["distrust"].iloc[0] or "follow" in result.fits["distrust"].iloc[0]


def test_product_inhibition_is_found_where_there_is_some_and_left_open_where_there_is_none(
    batch: CurveBatch,
) -> None:
    """The same plate with each well's turnover replaced by what a product with Kp 30 umol/L leaves of it."""
    one = batch.select(np.flatnonzero(batch.plate == 0))
    asked = ProgressOptions(product_inhibition=True)
    without = fit_progress(one, 1, asked).constants.set_index("constant").loc["kp"]
    assert np.isnan(without["high"]) or without["high"] > 1000.0

    vmax = np.where(one.is_blank, 0.0, KCAT_PER_S * 1e-3)[:, None]
    level = one.substrate_um[:, None]
    change = product_formed(level, vmax, KM_UM, one.time_s, 30.0) - product_formed(
        level, vmax, KM_UM, one.time_s
    )
    inhibited = replace(one, product_um=one.product_um + change)
    kp = fit_progress(inhibited, 1, asked).constants.set_index("constant").loc["kp"]
    assert kp["low"] < 30.0 < kp["high"]
    assert kp["high"] < 100.0
