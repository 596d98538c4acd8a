"""Weights: scatter told apart by where it comes from, the order that carries it, and robust losses."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from models.kinetics.fitting import FitSettings, fit_rates
from models.kinetics.laws import LAWS, at_levels, law
from models.kinetics.replicate_weights import apparent_order
from models.kinetics.robust import robust_factor

LEVELS_UM = np.repeat(80.0 * np.geomspace(0.125, 12.0, 8), 3)


def pipetted(
    name: str, constants: tuple[float, ...], series: int, substrate_cv: float, seed: int = 3
) -> pd.DataFrame:
    """Rates of series, a plate each, with 2 % error of enzyme and an error of the substrate dispensed."""
    generator, each, frames = np.random.default_rng(seed), law(name), []
    for number in range(series):
        dispensed = LEVELS_UM * (1.0 + substrate_cv * generator.standard_normal(LEVELS_UM.size))
        rate = each.rate(at_levels(dispensed[:, None]), tuple(np.array([c]) for c in constants))[:, 0]
        rate = rate * (1.0 + 0.02 * generator.standard_normal(rate.size))
        error = np.full(rate.size, 0.002 * constants[0])
        frames.append(
            pd.DataFrame(
                {
                    "series": number,
                    "plate": number,
                    "substrate_um": LEVELS_UM,
                    "nominal_substrate_um": LEVELS_UM,
                    "v_um_per_s": rate + error * generator.standard_normal(rate.size),
                    "v_se_um_per_s": error,
                }
            )
        )
    return pd.concat(frames, ignore_index=True)


@pytest.mark.parametrize(
    ("name", "constants"), [("hill", (0.05, 80.0, 2.0)), ("michaelis_menten", (0.05, 80.0))]
)
def test_intervals_hold_the_truth_when_substrate_is_dispensed_with_error(
    name: str, constants: tuple[float, ...]
) -> None:
    result = fit_rates(pipetted(name, constants, 300, 0.02), [(name,)] * 300)
    for constant, true in zip(law(name).constants, constants, strict=True):
        mine = result.constants[result.constants["constant"] == constant.name]
        covered = np.mean(~((mine["low"] > true) | (mine["high"] < true)))
        # Three standard errors of a share of 0.95 among 300; one CV for all levels covers the Hill
        # coefficient in 88 %.
        assert abs(covered - 0.95) < 3.0 * np.sqrt(0.95 * 0.05 / 300)


def test_scatter_of_the_substrate_is_told_apart() -> None:
    rows = pipetted("hill", (0.05, 80.0, 2.0), 30, 0.05).assign(plate=0)
    result = fit_rates(rows, [("hill",)] * 30)
    assert result.substrate_cv[0] == pytest.approx(0.05, rel=0.2)
    assert result.plate_cv[0] == pytest.approx(0.02, rel=0.4)


@pytest.mark.parametrize("each", LAWS, ids=[each.name for each in LAWS])
def test_apparent_order_is_the_slope_on_logarithmic_scales(each: object) -> None:
    from tests.models.kinetics.test_rate_laws import conditions_for, truth

    conditions, constants = conditions_for(each), tuple(truth(each))
    step = 1e-6
    rates = [
        each.rate(
            at_levels(
                conditions.substrate_um * np.exp(sign * step), conditions.modulator_um, conditions.enzyme_um
            ),
            constants,
        )
        for sign in (1.0, -1.0)
    ]
    with np.errstate(all="ignore"):
        slope = (np.log(rates[0]) - np.log(rates[1])) / (2.0 * step)
    slope = np.where(np.isfinite(slope), slope, 0.0)
    np.testing.assert_allclose(apparent_order(each, conditions, constants), slope, atol=1e-8)


def test_a_robust_loss_keeps_gross_errors_out() -> None:
    rows = pipetted("michaelis_menten", (0.05, 80.0), 40, 0.0, seed=9).assign(plate=0)
    rows.loc[rows.index % 24 == 4, "v_um_per_s"] *= 2.0
    bias = {}
    for loss in ("none", "huber", "tukey"):
        result = fit_rates(rows, [("michaelis_menten",)] * 40, FitSettings(loss=loss))
        km = result.constants[result.constants["constant"] == "km"]["value"]
        bias[loss] = abs(km.mean() / 80.0 - 1.0)
    assert max(bias["tukey"], bias["huber"]) < 0.01 < bias["none"]


def test_robust_factors_are_those_of_the_published_losses() -> None:
    # Median absolute residual 1, so the scale is 1.4826; Huber 1964 and Beaton and Tukey 1974.
    residual = np.array([[-1.0], [0.5], [1.0], [1.0], [14.826]])
    present = np.ones_like(residual, dtype=bool)
    huber = robust_factor(residual, present, "huber")[:, 0]
    assert huber[:4].tolist() == [1.0] * 4
    assert huber[4] == pytest.approx(0.1345)
    tukey = robust_factor(residual, present, "tukey")[:, 0]
    assert tukey[4] == 0.0
    assert tukey[1] == pytest.approx((1.0 - (0.5 / 1.4826 / 4.685) ** 2) ** 2)
