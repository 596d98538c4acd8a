"""Exponential approaches to a steady rate: recovery, errors, the optimum itself, and what cannot be told."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import curve_fit

from models.kinetics.transients import fit_transients

TIME_S = np.linspace(0.0, 600.0, 61)
WELLS = 200


def approach(time_s, p0, vs, v0, log_k):
    """The form of Morrison and Walsh 1988 (doi:10.1002/9780470123072.ch5)."""
    return p0 + vs * time_s + (v0 - vs) * -np.expm1(-np.exp(log_k) * time_s) * np.exp(-log_k)


def curves(p0, vs, v0, k, noise_um=0.0, wells=1, seed=0, time_s=TIME_S):
    noise = np.random.default_rng(seed).standard_normal((time_s.size, wells))
    return approach(time_s, p0, vs, v0, np.log(k))[:, None] + noise_um * noise


RATE = st.floats(0.0, 0.2)
K = st.floats(1 / 150, 1 / 20)


@given(v0=RATE, vs=RATE, k=K, p0=st.floats(-50.0, 50.0))
@settings(max_examples=60, deadline=None)
def test_exact_curves_give_back_their_constants(v0: float, vs: float, k: float, p0: float) -> None:
    fits = fit_transients(TIME_S, curves(p0, vs, v0, k))
    if abs(v0 - vs) < 1e-4:
        return
    assert fits.told[0]
    assert fits.k_per_s[0] == pytest.approx(k, rel=1e-6)
    assert fits.v0_um_per_s[0] == pytest.approx(v0, abs=1e-8)
    assert fits.vs_um_per_s[0] == pytest.approx(vs, abs=1e-8)
    assert fits.p0_um[0] == pytest.approx(p0, abs=1e-6)
    assert fits.settles[0]


@given(
    v0=RATE, vs=RATE, k=st.floats(1 / 120, 1 / 25), bend=st.floats(60.0, 400.0), seed=st.integers(0, 10**6)
)
@settings(max_examples=15, deadline=None, derandomize=True)
def test_constants_are_unbiased_and_their_errors_cover(
    v0: float, vs: float, k: float, bend: float, seed: int
) -> None:
    if abs(v0 - vs) < 0.01:
        return
    # Noise such that the bend, (v0 - vs) / k, stands well clear of it; less, and k has no symmetric error.
    noise_um = abs(v0 - vs) / k / bend
    fits = fit_transients(TIME_S, curves(3.0, vs, v0, k, noise_um, WELLS, seed))
    assert fits.told.all()
    found = np.stack([fits.v0_um_per_s, fits.vs_um_per_s, fits.k_per_s])
    deviation = (found - np.array([[v0], [vs], [k]])) / fits.standard_errors
    # 200 wells tell a mean to 0.07, a scatter to 0.05 and a share of 95 % to 1.5 %: four of each and more.
    assert (np.abs(deviation.mean(axis=1)) < 0.35).all()
    assert (np.abs(deviation.std(axis=1) - 1.0) < 0.25).all()
    covered = (np.abs(deviation) < 1.96).mean(axis=1)
    assert (covered > 0.88).all()


def test_optimum_and_covariance_are_those_of_scipy() -> None:
    generator = np.random.default_rng(3)
    v0, vs = generator.uniform(0.0, 0.1, (2, 40))
    k = np.exp(generator.uniform(np.log(1 / 150), np.log(1 / 25), 40))
    product = approach(TIME_S[:, None], 5.0, vs, v0, np.log(k)) + 0.05 * generator.standard_normal((61, 40))
    fits = fit_transients(TIME_S, product)
    told = np.flatnonzero(fits.told)
    assert told.size > 30
    for well in told:
        start = [
            5.0,
            1.02 * fits.vs_um_per_s[well],
            0.98 * fits.v0_um_per_s[well],
            np.log(1.02 * fits.k_per_s[well]),
        ]
        best, covariance = curve_fit(
            approach, TIME_S, product[:, well], p0=start, ftol=1e-15, xtol=1e-15, gtol=1e-15, maxfev=5000
        )
        assert fits.k_per_s[well] == pytest.approx(np.exp(best[3]), rel=2e-5)
        assert fits.v0_um_per_s[well] == pytest.approx(best[2], abs=2e-6)
        assert fits.vs_um_per_s[well] == pytest.approx(best[1], abs=2e-6)
        turned = np.array([[0, 0, 1, 0], [0, 1, 0, 0], [0, 0, 0, fits.k_per_s[well]]])
        theirs = turned @ covariance @ turned.T
        scale = np.sqrt(np.outer(np.diag(theirs), np.diag(theirs)))
        np.testing.assert_allclose(fits.covariance[:, :, well] / scale, theirs / scale, atol=2e-3)


def test_no_other_k_fits_better() -> None:
    product = curves(1.0, 0.05, 0.01, 1 / 60, 0.2, 30, seed=8)
    fits = fit_transients(TIME_S, product)

    def left(k: float, well: int) -> float:
        design = np.stack([np.ones(61), TIME_S, -np.expm1(-k * TIME_S) / k], axis=1)
        return float(np.linalg.lstsq(design, product[:, well], rcond=None)[1][0])

    for well in np.flatnonzero(fits.told):
        best = left(fits.k_per_s[well], well)
        assert best == pytest.approx(fits.read_variance[well] * 57.0, rel=1e-9)
        for k in np.geomspace(1 / 1200, 1 / 5, 300):
            assert left(k, well) >= best * (1.0 - 1e-9)


def test_influence_says_what_a_read_does() -> None:
    product = curves(1.0, 0.05, 0.01, 1 / 60, 0.02, 1, seed=4)
    fits = fit_transients(TIME_S, product)
    for read in (0, 3, 20, 60):
        moved = []
        for sign in (1.0, -1.0):
            pushed = product.copy()
            pushed[read] += sign * 1e-3
            there = fit_transients(TIME_S, pushed)
            moved.append([there.v0_um_per_s[0], there.vs_um_per_s[0], there.k_per_s[0]])
        slope = (np.array(moved[0]) - np.array(moved[1])) / 2e-3
        # Gauss and Newton's influence leaves out what the residuals bend: small, as the noise is.
        size = np.abs(fits.influence[:, :, 0]).max(axis=1)
        np.testing.assert_allclose(fits.influence[:, read, 0] / size, slope / size, atol=0.05)


def test_batch_order_and_gaps_at_the_end_do_not_matter() -> None:
    product = curves(1.0, 0.05, 0.01, 1 / 60, 0.1, 300, seed=5)
    together = fit_transients(TIME_S, product)
    order = np.random.default_rng(0).permutation(300)
    shuffled = fit_transients(TIME_S, product[:, order])
    alone = fit_transients(TIME_S, product[:, 7])
    padded = fit_transients(
        np.append(TIME_S, [610.0, np.nan]), np.vstack([product[:, 7:9], np.full((2, 2), np.nan)])
    )
    for name in ("v0_um_per_s", "vs_um_per_s", "k_per_s", "p0_um", "read_variance", "standard_errors"):
        values = getattr(together, name)
        np.testing.assert_array_equal(values[..., order], getattr(shuffled, name))
        np.testing.assert_array_equal(values[..., 7], getattr(alone, name)[..., 0])
        np.testing.assert_array_equal(values[..., 7], getattr(padded, name)[..., 0])


def test_unit_and_origin_of_time_do_not_matter() -> None:
    product = curves(1.0, 0.05, 0.01, 1 / 60, 0.1, 5, seed=6)
    seconds, minutes = fit_transients(TIME_S, product), fit_transients(TIME_S / 60.0 + 3.0, product)
    np.testing.assert_allclose(minutes.k_per_s / 60.0, seconds.k_per_s, rtol=1e-9)
    np.testing.assert_allclose(minutes.v0_um_per_s / 60.0, seconds.v0_um_per_s, rtol=1e-9)


def test_lines_are_rarely_taken_for_transients() -> None:
    noise = np.random.default_rng(7).standard_normal((61, 4000))
    told = fit_transients(TIME_S, 0.05 * TIME_S[:, None] + 0.1 * noise).told
    # An F test at 1 in 1000, not quite exact as k is searched for.
    assert told.mean() < 0.004


@pytest.mark.parametrize(
    "product",
    [
        pytest.param(np.zeros(61), id="flat"),
        pytest.param(np.full(61, 5.0), id="flat above zero"),
        pytest.param(0.05 * TIME_S, id="straight"),
        pytest.param(np.full(61, np.nan), id="nothing read"),
        pytest.param(np.where(np.arange(61) < 5, 0.05 * TIME_S**2, np.nan), id="five reads"),
        pytest.param(np.where(np.arange(61) == 9, 1.0, np.nan), id="one read"),
        pytest.param(np.full(61, np.inf), id="overflowed"),
        pytest.param(TIME_S**2, id="no end to the lag"),
        pytest.param(np.where(TIME_S > 0, 1.0, 0.0), id="over before the second read"),
    ],
)
def test_what_tells_no_transient_is_not_told(product: np.ndarray) -> None:
    fits = fit_transients(TIME_S, product)
    assert not fits.told[0]
    if np.isfinite(product).sum() < 6:
        assert np.isnan([fits.v0_um_per_s[0], fits.vs_um_per_s[0], fits.k_per_s[0]]).all()
        assert not fits.settles[0]


def test_a_transient_longer_than_the_reads_does_not_settle() -> None:
    fits = fit_transients(TIME_S, curves(0.0, 0.05, 0.0, 1 / 300, 0.01))
    assert fits.told[0]
    assert not fits.settles[0]


def test_gaps_are_left_out() -> None:
    product = curves(2.0, 0.05, 0.0, 1 / 50)
    product[[0, 4, 5, 30]] = np.nan
    fits = fit_transients(TIME_S, product)
    # The first usable read is the second: by then the rate has risen.
    assert fits.v0_um_per_s[0] == pytest.approx(0.05 * -np.expm1(-10.0 / 50.0), rel=1e-7)
    assert fits.vs_um_per_s[0] == pytest.approx(0.05, rel=1e-7)
    assert fits.degrees_of_freedom[0] == 53.0


def test_no_wells_and_no_reads_are_no_error() -> None:
    assert fit_transients(TIME_S, np.zeros((61, 0))).told.shape == (0,)
    assert fit_transients(np.zeros(0), np.zeros((0, 3))).told.tolist() == [False] * 3


def test_shapes_that_do_not_fit_are_refused() -> None:
    with pytest.raises(ValueError, match=r"\(60,\)"):
        fit_transients(TIME_S[:60], np.zeros((61, 3)))


def test_table_has_a_row_a_well() -> None:
    table = fit_transients(TIME_S, curves(1.0, 0.05, 0.01, 1 / 60, 0.1, 3)).table()
    assert len(table) == 3
    assert table["told"].all()
    assert (table["vs_se_um_per_s"] > 0).all()
    assert table["vs_um_per_s"].to_numpy() == pytest.approx(0.05, rel=0.05)
