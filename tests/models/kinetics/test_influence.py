"""Influence of each rate on a law's constants, held against fits without the rate."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from models.errors import UnknownName
from models.kinetics.fitting import fit_rates
from models.kinetics.influence import influence, rate_influence
from models.kinetics.law_fits import fit_law
from models.kinetics.laws import LAWS, RateLaw, law
from models.kinetics.laws.law import Conditions
from tests.benchmarks.laws import ENZYME_UM, simulate

SERIES = 3
EXACT = [each for each in LAWS if each.name in ("michaelis_menten", "hill", "competitive_inhibition")]


def laid_out(each: RateLaw) -> tuple[Conditions, np.ndarray]:
    frame = simulate(each, SERIES, 5)

    def column(name: str) -> np.ndarray:
        return frame[name].to_numpy(dtype=float).reshape(SERIES, -1).T.copy()

    substrate = column("substrate_um")
    modulator = column("modulator_um") if each.fewest_modulator_levels else None
    enzyme = np.full_like(substrate, ENZYME_UM)
    return Conditions(substrate, np.log(substrate), modulator, enzyme), column("v_um_per_s")


@pytest.mark.parametrize("each", EXACT, ids=[each.name for each in EXACT])
def test_a_rate_moves_the_constants_as_a_fit_without_it_says(each: RateLaw) -> None:
    conditions, rate = laid_out(each)
    weights = np.linspace(1.0, 2.0, rate.shape[0])[:, None] * np.ones_like(rate)
    fit = fit_law(each, conditions, rate, weights)
    fitted = each.rate(conditions, tuple(fit.constants))
    moved = influence(each, conditions, fit.constants, rate - fitted, weights)
    assert moved.shape == (each.constant_count, *rate.shape)
    for place in range(0, rate.shape[0], 5):
        left_out = weights.copy()
        left_out[place] = 0.0
        without = fit_law(each, conditions, rate, left_out, fit.constants)
        expected = np.log(without.constants / fit.constants)
        # First order: what is left is of second order in a change of at most a few per cent.
        np.testing.assert_allclose(moved[:, place], expected, atol=0.04 * np.abs(moved).max() + 1e-9)


@pytest.mark.parametrize("each", LAWS, ids=[each.name for each in LAWS])
def test_all_influences_cancel_at_the_optimum(each: RateLaw) -> None:
    """Pulls sum to zero where the sum of squares is least; a place without weight pulls at nothing."""
    conditions, rate = laid_out(each)
    weights = np.ones_like(rate)
    weights[0] = 0.0
    fit = fit_law(each, conditions, rate, weights)
    residual = rate - each.rate(conditions, tuple(fit.constants))
    moved = influence(each, conditions, fit.constants, residual, weights)
    told = fit.converged & fit.full_rank & ~fit.at_limit
    assert told.any()
    alone = influence(each, conditions.select([0]), fit.constants[:, 0], residual[:, [0]], weights[:, [0]])
    np.testing.assert_array_equal(alone[:, :, 0], moved[:, :, 0])
    for column in np.flatnonzero(told):
        assert np.all(moved[:, 0, column] == 0.0)
        leverage = _leverage(
            each, conditions.select([column]), fit.constants[:, [column]], weights[:, [column]]
        )
        pulls = moved[:, :, column] * (1.0 - leverage)
        assert np.all(np.abs(pulls.sum(axis=1)) < 1e-4 * np.abs(pulls).sum(axis=1) + 1e-12)


def _leverage(
    each: RateLaw, conditions: Conditions, constants: np.ndarray, weights: np.ndarray
) -> np.ndarray:
    """From the projection on the columns of the Jacobian, by QR; not as the module does it."""
    shape, slopes = each.evaluate(conditions, tuple(constants[each.first_shape :]))
    columns = [shape, *slopes] if each.amplitude is not None else list(slopes)
    jacobian = np.sqrt(weights[:, 0])[:, None] * np.column_stack([column[:, 0] for column in columns])
    orthogonal, _ = np.linalg.qr(jacobian / np.linalg.norm(jacobian, axis=0))
    return np.sum(orthogonal**2, axis=1)


def test_rates_that_tell_no_constants_apart_have_no_influence_to_tell() -> None:
    each = law("michaelis_menten")
    same = np.full((6, 1), 50.0)
    conditions = Conditions(same, np.log(same))
    moved = influence(each, conditions, np.array([1.0, 50.0]), np.zeros((6, 1)), np.ones((6, 1)))
    assert np.isnan(moved).all()


def test_rows_of_a_fit_carry_their_influence_in_any_order() -> None:
    frame = simulate(law("michaelis_menten"), SERIES, 6)
    result = fit_rates(frame, [("michaelis_menten",)] * SERIES)
    found = rate_influence(result.points, result.constants)
    assert list(found.columns) == ["series", "row", "leverage", "vmax", "km"]
    assert len(found) == len(frame)
    shuffled = result.points.sample(frac=1.0, random_state=1)
    again = rate_influence(shuffled, result.constants).sort_values("row", ignore_index=True)
    pd.testing.assert_frame_equal(again, found.sort_values("row", ignore_index=True), check_exact=True)
    # Jackknife standard errors are about those of the fit.
    jackknife = np.sqrt((found["km"] ** 2).groupby(found["series"]).sum())
    km = result.constants[result.constants["constant"] == "km"].set_index("series")
    ratio = jackknife / (km["standard_error"] / km["value"])
    assert ratio.between(0.5, 2.0).all()


def test_series_of_other_laws_are_left_out_and_laws_with_a_modulator_refused() -> None:
    frame = simulate(law("michaelis_menten"), 1, 6)
    result = fit_rates(frame, [("michaelis_menten",)])
    assert rate_influence(result.points, result.constants, "hill").empty
    with pytest.raises(ValueError, match="competitive_inhibition"):
        rate_influence(result.points, result.constants, "competitive_inhibition")
    with pytest.raises(UnknownName):
        rate_influence(result.points, result.constants, "no such law")
