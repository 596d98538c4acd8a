"""Rates of wells with a lag or a burst: which rate is used, what it is paired with, and who has none."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pandas as pd
import pytest

from models.kinetics.laws import MICHAELIS_MENTEN
from models.kinetics.prediction import SeriesCourse, no_course
from models.kinetics.rates import measure_rates
from models.kinetics.settling import slowing
from models.simulation import TRIPLICATE_NOISE, TRIPLICATE_TRUTH, Noise, simulate_plate, triplicate_design
from models.simulation.faults import ActivityLoss, Burst, Depletion, Lag
from tests.models.kinetics.kinetic_plates import curve_batch, plain_batch

DESIGN = triplicate_design()
MM = ("michaelis_menten",)
CLEAR = Noise(signal_sd=2e-4)
TRANSIENT = [
    "transient_v0_um_per_s",
    "transient_v0_se_um_per_s",
    "transient_vs_um_per_s",
    "transient_vs_se_um_per_s",
    "transient_k_per_s",
    "transient_k_se_per_s",
]


def steady(substrate_um):
    return 0.05 * substrate_um / (80.0 + substrate_um)


def measured(faults=(), *, noise=CLEAR, plates=1, design=DESIGN, zero_is_blank=False) -> pd.DataFrame:
    simulated = [
        simulate_plate(design, {"lot": TRIPLICATE_TRUTH}, noise, faults, np.random.default_rng(seed))
        for seed in range(plates)
    ]
    batch = curve_batch(simulated, design, zero_is_blank=zero_is_blank)
    rates = measure_rates(batch, [MM] * plates)
    return rates.assign(level_um=batch.substrate_um)[~batch.is_blank]


def deviation(wells: pd.DataFrame, true: pd.Series) -> pd.Series:
    return (wells["v0_um_per_s"] - true) / wells["v0_se_um_per_s"]


def test_an_undisturbed_plate_has_lines_only() -> None:
    wells = measured(noise=TRIPLICATE_NOISE, plates=5)
    assert (wells["rate_basis"] == "line").all()
    assert wells[TRANSIENT].isna().all().all()


def test_depletion_is_no_transient() -> None:
    wells = measured([Depletion(20.0)], noise=TRIPLICATE_NOISE, plates=3)
    assert (wells["shortest_conversion"] > 0.2).any()
    assert (wells["rate_basis"] == "line").all()
    assert wells[TRANSIENT].isna().all().all()


def test_loss_of_activity_is_no_transient() -> None:
    wells = measured([ActivityLoss(1 / 400)])
    assert (wells["rate_basis"] == "line").all()
    assert wells[TRANSIENT].isna().all().all()


def test_the_steady_rate_is_used_after_a_lag() -> None:
    wells = measured([Lag(40.0)], plates=5)
    used = wells[wells["rate_basis"] == "steady_state"]
    assert len(used) > 0.8 * len(wells)
    assert (used["shape"] == "lag").all()
    assert (used["v0_um_per_s"] == used["transient_vs_um_per_s"]).all()
    assert (used["v0_se_um_per_s"] == used["transient_vs_se_um_per_s"]).all()
    error = used["v0_um_per_s"] / steady(used["mean_substrate_um"]) - 1.0
    assert abs(error.mean()) < 0.005
    assert 0.90 < (deviation(used, steady(used["mean_substrate_um"])).abs() < 1.96).mean() < 0.99
    assert (used["mean_substrate_um"] < used["level_um"]).all()
    fast = used[used["level_um"] > 60]
    assert ((fast["transient_k_per_s"] - 1 / 40.0).abs() < 4.0 * fast["transient_k_se_per_s"]).all()
    assert fast["transient_k_per_s"].mean() == pytest.approx(1 / 40.0, rel=0.02)
    assert (fast["transient_v0_um_per_s"].abs() < 4.0 * fast["transient_v0_se_um_per_s"]).all()


def test_the_initial_rate_is_used_of_a_burst() -> None:
    wells = measured([Burst(3.0, 60.0)], plates=5)
    used = wells[wells["rate_basis"] == "initial"]
    assert len(used) > 0.6 * len(wells)
    assert (used["shape"] == "burst").all()
    assert (used["v0_um_per_s"] == used["transient_v0_um_per_s"]).all()
    # Nothing is consumed at the first read: depletion must bear neither on the rate nor on its substrate.
    assert (used["mean_substrate_um"] == used["level_um"]).all()
    true = 3.0 * steady(used["level_um"])
    assert abs((used["v0_um_per_s"] / true - 1.0).mean()) < 0.015
    assert 0.88 < (deviation(used, true).abs() < 1.96).mean() < 0.99
    fast = used[used["level_um"] > 200]
    assert fast["transient_vs_um_per_s"].to_numpy() == pytest.approx(steady(fast["level_um"]), rel=0.03)


def test_depletion_within_a_burst_is_taken_out() -> None:
    quiet = Noise(signal_sd=2e-6)
    used = measured([Burst(3.0, 20.0)], noise=quiet).query("rate_basis == 'initial'")
    low = used[used["level_um"] < 100.0]
    assert len(low) > 6
    np.testing.assert_allclose(low["v0_um_per_s"], 3.0 * steady(low["level_um"]), rtol=6e-3)


def test_a_burst_read_late_is_paired_with_what_is_left() -> None:
    late = replace(DESIGN, dead_time_s=20.0)
    used = measured([Burst(3.0, 60.0)], design=late, zero_is_blank=True).query("rate_basis == 'initial'")
    used = used[used["level_um"] > 60]
    assert len(used) > 10
    done = used["level_um"] - used["mean_substrate_um"]
    clock = 20.0 + 2.0 * 60.0 * -np.expm1(-20.0 / 60.0)
    # Five times the noise of a read: what is gone by the first one is read off the fit.
    np.testing.assert_allclose(done, steady(used["level_um"]) * clock, rtol=0.08, atol=0.1)
    true = (1.0 + 2.0 * np.exp(-20.0 / 60.0)) * steady(used["mean_substrate_um"])
    assert (deviation(used, true).abs() < 4.0).all()


def test_a_coupled_assay_gives_the_steady_rate() -> None:
    """Two consecutive first-order steps at rates a and b: product = S0 (1 - (b e^-at - a e^-bt)/(b - a))."""
    time_s = np.arange(0.0, 600.0, 10.0)
    substrate_um, a, b = 2000.0, 2e-5, 1 / 40.0
    product = substrate_um * (1.0 - (b * np.exp(-a * time_s) - a * np.exp(-b * time_s)) / (b - a))
    noise = 0.03 * np.random.default_rng(2).standard_normal((40, time_s.size))
    rates = measure_rates(plain_batch(time_s, product + noise, substrate_um=[substrate_um] * 40), [])
    assert (rates["rate_basis"] == "steady_state").all()
    ratio = rates["v0_um_per_s"] / (a * rates["mean_substrate_um"])
    assert abs(ratio.mean() - 1.0) < 3e-3
    # Without a series no law says how the 1 % that is consumed slows the reaction: k takes that up.
    assert rates["transient_k_per_s"].mean() == pytest.approx(b, rel=0.06)
    assert np.abs(rates["transient_v0_um_per_s"]).mean() < 0.06 * a * substrate_um


def test_a_lag_that_does_not_settle_keeps_its_line() -> None:
    wells = measured([Lag(400.0)])
    lagging = wells[(wells["shape"] == "lag") & (wells["level_um"] > 200)]
    assert len(lagging) > 6
    assert (lagging["rate_basis"] == "line").all()
    assert (lagging["v0_um_per_s"] != lagging["transient_vs_um_per_s"]).all()
    assert (lagging["transient_k_per_s"].dropna() < 3.0 / 600.0).all()


def test_noise_does_not_pass_a_long_lag_off_as_settled() -> None:
    wells = measured([Lag(250.0)], noise=Noise(signal_sd=5e-4), plates=5)
    assert (wells["shape"] == "lag").sum() > 60
    assert (wells["rate_basis"] == "steady_state").sum() <= 1


def test_too_few_reads_keep_the_line() -> None:
    short = replace(DESIGN, time_s=DESIGN.time_s[:5] * 12.0)
    wells = measured([Burst(3.0, 60.0)], design=short)
    assert (wells["rate_basis"] == "line").all()
    assert wells[TRANSIENT].isna().all().all()


def test_where_there_is_no_rate_there_is_no_basis() -> None:
    time_s = np.arange(0.0, 300.0, 10.0)
    product = np.vstack([0.05 * time_s, np.full(time_s.size, np.nan)])
    rates = measure_rates(plain_batch(time_s, product), [])
    assert rates["rate_basis"][0] == "line"
    assert pd.isna(rates["rate_basis"][1])


def test_the_blanks_error_is_in_the_transients_too() -> None:
    time_s = np.arange(0.0, 600.0, 10.0)
    generator = np.random.default_rng(2)
    burst = 0.05 * time_s + 6.0 * -np.expm1(-time_s / 60.0)
    sizes = np.array([[0.02], [0.4]])
    product = np.vstack([burst, 0.001 * time_s]) + sizes * generator.standard_normal((2, time_s.size))
    noisy = measure_rates(plain_batch(time_s, product, blank=[False, True], substrate_um=[1e4] * 2), [])
    product[1] = 0.001 * time_s
    quiet = measure_rates(plain_batch(time_s, product, blank=[False, True], substrate_um=[1e4] * 2), [])
    assert noisy["rate_basis"][0] == quiet["rate_basis"][0] == "initial"
    for name in ("v0_se_um_per_s", "transient_vs_se_um_per_s", "transient_k_se_per_s"):
        assert noisy[name][0] > 1.5 * quiet[name][0]


@pytest.mark.parametrize("fault", [Lag(40.0), Burst(3.0, 60.0)])
def test_order_and_batch_do_not_matter(fault) -> None:
    plates = [
        simulate_plate(DESIGN, {"lot": TRIPLICATE_TRUTH}, CLEAR, [fault], np.random.default_rng(seed))
        for seed in range(2)
    ]
    alone = curve_batch(plates[:1], DESIGN)
    order = np.random.default_rng(0).permutation(alone.well_count)
    plain, shuffled = measure_rates(alone, [MM]), measure_rates(alone.select(order), [MM])
    restored = shuffled.iloc[np.argsort(order)].reset_index(drop=True)
    pd.testing.assert_frame_equal(plain, restored, check_exact=True)
    together = measure_rates(curve_batch(plates, DESIGN), [MM] * 2).iloc[: len(plain)]
    pd.testing.assert_frame_equal(plain, together, check_exact=True)


def test_product_without_depletion_is_the_integral_of_the_law() -> None:
    substrate_um = np.array([10.0, 80.0, 1000.0, 0.0])

    constants = np.repeat([[1.0], [80.0]], 4, axis=1)
    course = SeriesCourse(np.ones(4, dtype=bool), ((MICHAELIS_MENTEN, np.arange(4), constants),))
    slowed = slowing(course, substrate_um, 0.1 * substrate_um)
    product = np.linspace(0.0, 0.1, 6)[:, None] * substrate_um
    s = substrate_um[:3]
    exact = s / (80.0 + s) * (product[:, :3] - 80.0 * np.log1p(-product[:, :3] / s))
    np.testing.assert_allclose(slowed.undepleted(product)[:, :3], exact, rtol=1e-4)
    np.testing.assert_allclose(slowed.depleted(slowed.undepleted(product)), product, rtol=1e-5)
    assert (slowed.undepleted(product)[:, 3] == 0.0).all()
    unknown = slowing(no_course(4), substrate_um, 0.1 * substrate_um)
    np.testing.assert_array_equal(unknown.undepleted(product), product)
