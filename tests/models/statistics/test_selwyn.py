"""Selwyn's test on simulated curves: a dying enzyme is told from one that runs dry."""

from __future__ import annotations

import numpy as np
import pytest

from models.kinetics.progress.integrated import product_formed
from models.statistics.selwyn import Inactivation, combine, selwyn_test

TIME_S = np.arange(61) * 10.0
KM_UM = 80.0
NOISE_UM = 0.24
QUARTER_LOST_PER_S = -np.log(0.75) / 600.0


def one_test(
    rng: np.random.Generator,
    substrate_um: float,
    enzyme: list[float],
    loss_per_s: float,
    *,
    noise_um: float = NOISE_UM,
    cv: float = 0.02,
) -> Inactivation | None:
    """Curves with dispensing errors, baselines of their own and noise of 1.5 mAU at 6220 L/mol/cm."""
    levels = np.array(enzyme)
    dispensed = levels * (1 + cv * rng.standard_normal(levels.size))
    curves = [product_formed(substrate_um, 0.025 * e, KM_UM, TIME_S, np.inf, loss_per_s) for e in dispensed]
    product = np.array(curves) + noise_um * rng.standard_normal((levels.size, TIME_S.size))
    product += rng.standard_normal((levels.size, 1))
    curve = np.repeat(np.arange(levels.size), TIME_S.size)
    return selwyn_test(curve, np.tile(TIME_S, levels.size), product.ravel(), levels, 0.4 * substrate_um)


@pytest.mark.parametrize("substrate_um", [80.0, 960.0])
@pytest.mark.parametrize("enzyme", [[1.0] * 3 + [2.0] * 3, [1.0, 2.0, 4.0]])
def test_a_lasting_enzyme_superimposes(substrate_um: float, enzyme: list[float]) -> None:
    rng = np.random.default_rng(31)
    p_value = [one_test(rng, substrate_um, enzyme, 0.0).p_value for _ in range(150)]
    # 4 standard errors of a share of 150 lots.
    for level in (0.01, 0.1):
        assert np.mean(np.array(p_value) <= level) <= level + 4 * np.sqrt(level / 150)


def test_the_loss_is_recovered_with_its_error() -> None:
    rng = np.random.default_rng(32)
    found = [one_test(rng, 960.0, [1.0] * 3 + [2.0] * 3 + [4.0] * 3, QUARTER_LOST_PER_S) for _ in range(40)]
    loss = np.array([each.loss_per_s for each in found])
    error = np.array([each.standard_error for each in found])
    assert np.mean(loss) == pytest.approx(QUARTER_LOST_PER_S, rel=0.08)
    assert np.std(loss) == pytest.approx(np.median(error), rel=0.4)
    assert np.mean([each.p_value <= 0.01 for each in found]) > 0.95


@pytest.mark.parametrize("loss_per_s", [0.0, QUARTER_LOST_PER_S, 3 * QUARTER_LOST_PER_S])
@pytest.mark.parametrize("substrate_um", [10.0, 80.0, 960.0])
def test_without_noise_the_loss_is_exact_at_any_conversion(substrate_um: float, loss_per_s: float) -> None:
    rng = np.random.default_rng(33)
    found = one_test(rng, substrate_um, [1.0, 2.0, 4.0], loss_per_s, noise_um=0.0, cv=0.2)
    assert found is not None
    assert found.loss_per_s * 600 == pytest.approx(loss_per_s * 600, abs=0.02)


@pytest.mark.parametrize("lag_s", [10.0, 30.0, 60.0])
@pytest.mark.parametrize("loss_per_s", [0.0, QUARTER_LOST_PER_S])
def test_a_lag_is_no_loss(lag_s: float, loss_per_s: float) -> None:
    rng = np.random.default_rng(34)
    levels = np.repeat([1.0, 2.0, 4.0], 3)
    activity = np.exp(-loss_per_s * TIME_S) * (1 - np.exp(-TIME_S / lag_s))
    effective = np.concatenate([[0.0], np.cumsum((activity[1:] + activity[:-1]) * 5.0)])
    product = np.array([product_formed(960.0, 0.025 * e, KM_UM, effective) for e in levels])
    product += NOISE_UM * rng.standard_normal(product.shape)
    curve = np.repeat(np.arange(9), TIME_S.size)
    found = selwyn_test(curve, np.tile(TIME_S, 9), product.ravel(), levels, 384.0)
    assert found is not None
    assert found.loss_per_s == pytest.approx(loss_per_s, abs=4 * found.standard_error)
    # The lag costs certainty, but no more than half of the loss that is looked for.
    assert found.standard_error < 0.5 * QUARTER_LOST_PER_S


def test_wandering_baselines_are_not_taken_for_noise_of_reads() -> None:
    rng = np.random.default_rng(37)
    levels = np.repeat([1.0, 2.0, 4.0], 3)
    curve, time_s = np.repeat(np.arange(9), TIME_S.size), np.tile(TIME_S, 9)
    p_value = []
    for _ in range(150):
        product = np.array([product_formed(960.0, 0.025 * e, KM_UM, TIME_S) for e in levels])
        product += 1.5 * rng.standard_normal((9, 1)) * (TIME_S / 600) ** 2
        product += NOISE_UM * rng.standard_normal(product.shape)
        found = selwyn_test(curve, time_s, product.ravel(), levels, 384.0)
        assert found is not None
        p_value.append(found.p_value)
    # By the reads' noise alone a fifth of such lots would be found to lose activity.
    assert np.mean(np.array(p_value) <= 0.01) < 0.01 + 4 * np.sqrt(0.01 / 150)


def test_what_one_level_alone_reaches_does_not_count() -> None:
    levels = np.array([1.0, 2.0, 8.0])
    rng = np.random.default_rng(38)
    product = np.array([product_formed(960.0, 0.025 * e, KM_UM, TIME_S) for e in levels])
    product += 0.1 * rng.standard_normal(product.shape)
    curve, time_s = np.repeat(np.arange(3), TIME_S.size), np.tile(TIME_S, 3)
    odd = product.copy()
    odd[2, 16:] = odd[2, 15]
    plain, other = (selwyn_test(curve, time_s, each.ravel(), levels, 384.0) for each in (product, odd))
    assert other == plain


def test_order_of_reads_and_units_of_enzyme_do_not_matter() -> None:
    levels = np.array([1.0, 2.0, 4.0])
    rng = np.random.default_rng(35)
    product = np.array([product_formed(80.0, 0.025 * e, KM_UM, TIME_S, np.inf, 1e-3) for e in levels])
    product = (product + 0.1 * rng.standard_normal(product.shape)).ravel()
    curve, time_s = np.repeat(np.arange(3), 61), np.tile(TIME_S, 3)
    plain = selwyn_test(curve, time_s, product, levels, 32.0)
    mixed = rng.permutation(183)
    other = selwyn_test(curve[mixed], time_s[mixed], product[mixed], 1e-3 * levels, 32.0)
    assert plain is not None
    assert other is not None
    assert other.loss_per_s == pytest.approx(plain.loss_per_s, rel=1e-6)
    assert other.p_value == pytest.approx(plain.p_value, rel=1e-5)


def test_what_cannot_tell_gives_no_test() -> None:
    rng = np.random.default_rng(36)
    assert one_test(rng, 80.0, [2.0, 2.0, 2.0], 0.0) is None
    assert one_test(rng, 80.0, [1.0], 0.0) is None
    assert one_test(rng, 80.0, [1e-6, 2e-6], 0.0) is None
    assert one_test(rng, 80.0, [1.0, 1000.0], 0.0) is None
    nothing = np.full(40, np.nan)
    curve = np.repeat([0, 1], 20)
    assert selwyn_test(curve, np.tile(np.arange(20.0), 2), nothing, np.array([1.0, 2.0]), 10.0) is None


def test_levels_together_tell_more_than_each() -> None:
    one = Inactivation(1e-3, 5e-4, 50.0, 0.025, 6, 200)
    both = combine([one, one])
    assert both.loss_per_s == pytest.approx(1e-3)
    assert both.standard_error == pytest.approx(5e-4 / np.sqrt(2))
    assert both.p_value < 0.01
    assert combine([one]) is one
    # A vague level with its chance loss hardly counts beside a clear one without.
    clear, vague = Inactivation(0.0, 1e-5, 50.0, 0.5, 6, 200), Inactivation(5e-3, 1e-3, 3.0, 1e-3, 3, 60)
    assert combine([clear, vague]).p_value > 0.4
