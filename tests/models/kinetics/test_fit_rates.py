"""Fits of rates: optimum, invariances, independence of batch and order, refusals, trust."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import curve_fit

from models.errors import UnknownName
from models.kinetics.fit_results import FitResult
from models.kinetics.fitting import fit_rates
from models.kinetics.law_fits import fit_law
from models.kinetics.laws import HILL, MICHAELIS_MENTEN, at_levels

LEVELS_UM = np.geomspace(10.0, 960.0, 8)
MM, BOTH = ("michaelis_menten",), ("michaelis_menten", "hill")


def series_rows(
    number: int,
    *,
    km: float = 80.0,
    vmax: float = 0.05,
    n: float = 1.0,
    cv: float = 0.02,
    levels: np.ndarray = LEVELS_UM,
    replicates: int = 3,
    plate: int | None = None,
    seed: int | None = None,
) -> pd.DataFrame:
    generator = np.random.default_rng(number if seed is None else seed)
    substrate = np.repeat(levels, replicates)
    rate = vmax * substrate**n / (km**n + substrate**n)
    error = np.full(substrate.size, 0.004 * vmax)
    measured = rate * (1.0 + cv * generator.standard_normal(rate.size)) + error * generator.standard_normal(
        rate.size
    )
    return pd.DataFrame(
        {
            "series": number,
            "plate": number if plate is None else plate,
            "substrate_um": substrate,
            "nominal_substrate_um": substrate,
            "v_um_per_s": measured,
            "v_se_um_per_s": error,
        }
    )


def constants_of(result: FitResult, series: int, law: str = "michaelis_menten") -> pd.DataFrame:
    rows = result.constants
    return rows[(rows["series"] == series) & (rows["law"] == law)].set_index("constant")


@given(seed=st.integers(0, 2**20), cv=st.floats(0.005, 0.15))
@settings(max_examples=20, deadline=None)
def test_optimum_is_that_of_scipy(seed: int, cv: float) -> None:
    rows = series_rows(0, seed=seed, cv=cv)
    substrate, rate = rows["substrate_um"].to_numpy(), rows["v_um_per_s"].to_numpy()
    weights = 1.0 / (0.001 + 0.02 * rate) ** 2
    fit = fit_law(MICHAELIS_MENTEN, at_levels(substrate[:, None]), rate[:, None], weights[:, None])
    expected, covariance = curve_fit(
        lambda s, vmax, km: vmax * s / (km + s),
        substrate,
        rate,
        p0=[0.05, 80.0],
        sigma=1.0 / np.sqrt(weights),
        ftol=1e-15,
        xtol=1e-15,
        gtol=1e-15,
    )
    np.testing.assert_allclose(fit.constants[:, 0], expected, rtol=1e-6)
    np.testing.assert_allclose(fit.standard_error[:, 0], np.sqrt(np.diag(covariance)), rtol=1e-5)


def test_hill_finds_cooperativity_and_is_chosen_for_it() -> None:
    rows = pd.concat([series_rows(0, n=2.2), series_rows(1)], ignore_index=True)
    result = fit_rates(rows, [BOTH, BOTH])
    chosen = result.fits[result.fits["chosen"]].set_index("series")["law"]
    assert chosen.to_dict() == {0: "hill", 1: "michaelis_menten"}
    found = constants_of(result, 0, "hill")
    assert abs(found.loc["hill_n", "value"] - 2.2) < 3 * found.loc["hill_n", "standard_error"]
    assert (result.fits.groupby("series")["evidence_weight"].sum() - 1.0).abs().max() < 1e-12


@given(concentration=st.floats(1e-6, 1e6), rate=st.floats(1e-6, 1e6))
@settings(max_examples=6, deadline=None)
def test_units_scale_through(concentration: float, rate: float) -> None:
    rows = series_rows(0)
    scaled = rows.assign(
        substrate_um=rows["substrate_um"] * concentration,
        nominal_substrate_um=rows["nominal_substrate_um"] * concentration,
        v_um_per_s=rows["v_um_per_s"] * rate,
        v_se_um_per_s=rows["v_se_um_per_s"] * rate,
    )
    plain, moved = fit_rates(rows, [BOTH]), fit_rates(scaled, [BOTH])
    factor = {"km": concentration, "k_half": concentration, "vmax": rate, "hill_n": 1.0}
    for column in ("value", "standard_error", "low", "high"):
        expected = plain.constants[column] * plain.constants["constant"].map(factor)
        np.testing.assert_allclose(moved.constants[column], expected, rtol=1e-6)
    assert moved.fits["weighted_residual_sum"].to_numpy() == pytest.approx(
        plain.fits["weighted_residual_sum"].to_numpy(), rel=1e-6
    )


def test_bits_do_not_depend_on_batch_or_order() -> None:
    numbers = range(40)
    rows = pd.concat(
        [series_rows(i, km=20.0 + 10 * i, n=1.0 + 0.02 * i, replicates=2 + i % 2) for i in numbers],
        ignore_index=True,
    )
    together = fit_rates(rows, [BOTH] * 40)
    shuffled = fit_rates(rows.sample(frac=1.0, random_state=3), [BOTH] * 40)
    pd.testing.assert_frame_equal(together.constants, shuffled.constants, check_exact=True)
    pd.testing.assert_frame_equal(together.fits, shuffled.fits, check_exact=True)
    for number in (0, 7, 39):
        alone = fit_rates(rows[rows["series"] == number].assign(series=0), [BOTH])
        columns = ["value", "standard_error", "low", "high"]
        mine = together.constants[together.constants["series"] == number]
        np.testing.assert_array_equal(alone.constants[columns].to_numpy(), mine[columns].to_numpy())


def test_a_series_is_the_same_whatever_number_it_and_its_plate_mates_have() -> None:
    first, second = series_rows(0, plate=0), series_rows(1, km=30.0, plate=0)
    one = fit_rates(pd.concat([first, second]), [BOTH] * 2)
    swapped = fit_rates(pd.concat([first.assign(series=1), second.assign(series=0)]), [BOTH] * 2)
    for law in BOTH:
        np.testing.assert_array_equal(
            constants_of(one, 0, law)["value"].to_numpy(), constants_of(swapped, 1, law)["value"].to_numpy()
        )


def test_batches_larger_than_a_chunk_give_the_same_bits() -> None:
    generator = np.random.default_rng(1)
    levels = np.repeat(LEVELS_UM[:, None], 5000, axis=1)
    rates = 0.05 * levels / (80.0 + levels) * (1.0 + 0.03 * generator.standard_normal(levels.shape))
    for law in (MICHAELIS_MENTEN, HILL):
        many = fit_law(law, at_levels(levels), rates)
        few = fit_law(law, at_levels(levels[:, 4095:4098]), rates[:, 4095:4098])
        one = fit_law(law, at_levels(levels[:, 4096:4097]), rates[:, 4096:4097])
        np.testing.assert_array_equal(many.constants[:, 4095:4098], few.constants)
        np.testing.assert_array_equal(many.covariance[4096], one.covariance[0])
        assert many.converged.all()


REFUSED = {
    "no_rates": lambda rows: rows.assign(v_um_per_s=np.nan),
    "unknown_substrate": lambda rows: rows.assign(substrate_um=np.nan),
    "unknown_error": lambda rows: rows.assign(v_se_um_per_s=np.nan),
    "too_few_levels": lambda rows: rows[rows["nominal_substrate_um"] > 300.0],
    "no_positive_rate": lambda rows: rows.assign(v_um_per_s=-rows["v_um_per_s"].abs()),
    "no_half_saturation": lambda rows: rows.assign(v_um_per_s=1e-4 * rows["substrate_um"]),
}


@pytest.mark.parametrize("kind", REFUSED)
def test_bad_series_are_refused_by_name_and_the_others_go_on(kind: str) -> None:
    bad = REFUSED[kind](series_rows(1))
    result = fit_rates(pd.concat([series_rows(0), bad], ignore_index=True), [MM, MM])
    assert result.refusals[["series", "kind"]].to_numpy().tolist() == [[1, kind]]
    assert len(result.refusals["reason"].iloc[0]) > 15
    assert set(result.constants["series"]) == {0}
    assert set(result.fits["series"]) == {0}


def test_more_refusals() -> None:
    flat = series_rows(0).assign(v_um_per_s=0.05)
    single = series_rows(1, levels=LEVELS_UM[:3], replicates=1).iloc[:2]
    zero = series_rows(2).assign(v_um_per_s=0.0)
    infinite = series_rows(3)
    infinite.loc[0, "v_se_um_per_s"] = np.inf
    same = series_rows(4, levels=np.full(8, 50.0))
    rows = pd.concat([flat, single, zero, infinite, same], ignore_index=True)
    result = fit_rates(rows, [BOTH] * 6)
    kinds = result.refusals.set_index("series")["kind"].to_dict()
    assert kinds == {
        0: "no_half_saturation",
        1: "too_few_levels",
        2: "no_positive_rate",
        3: "unknown_error",
        4: "too_few_levels",
        5: "no_rates",
    }
    assert result.fits.empty


def test_too_few_levels_for_hill_alone_leave_michaelis_menten() -> None:
    result = fit_rates(series_rows(0, levels=np.array([20.0, 80.0, 320.0])), [BOTH])
    assert result.fits["law"].tolist() == ["michaelis_menten"]
    assert result.fits["chosen"].tolist() == [True]
    assert result.refusals.empty


def test_wells_without_substrate_are_left_out() -> None:
    rows = series_rows(0)
    empty = rows.iloc[:3].assign(substrate_um=0.0, nominal_substrate_um=0.0, v_um_per_s=1e-5)
    with_empty = fit_rates(pd.concat([rows, empty], ignore_index=True), [MM])
    pd.testing.assert_frame_equal(with_empty.constants, fit_rates(rows, [MM]).constants, check_exact=True)


def test_an_unsaturated_series_is_open_and_not_trusted() -> None:
    rows = series_rows(0, km=20000.0, cv=0.05)
    result = fit_rates(rows, [MM])
    assert result.refusals.empty
    fit = result.fits.iloc[0]
    assert fit["converged"]
    assert not fit["trusted"]
    assert "open above" in fit["distrust"]
    found = constants_of(result, 0)
    assert np.isnan(found.loc["km", "high"])
    assert np.isnan(found.loc["vmax", "high"])
    assert found.loc["vmax", "low"] > 0


def test_noise_free_rates_without_error_fit_exactly() -> None:
    rows = series_rows(0, cv=0.0).assign(v_se_um_per_s=0.0)
    rows["v_um_per_s"] = 0.05 * rows["substrate_um"] / (80.0 + rows["substrate_um"])
    found = constants_of(fit_rates(rows, [MM]), 0)
    assert found.loc["km", "value"] == pytest.approx(80.0, rel=1e-9)
    assert found.loc["vmax", "value"] == pytest.approx(0.05, rel=1e-9)


def test_weights_use_the_pooled_replicate_cv() -> None:
    rows = pd.concat([series_rows(i, cv=0.06, plate=0) for i in range(12)], ignore_index=True)
    result = fit_rates(rows, [MM] * 12)
    assert result.plate_cv[0] == pytest.approx(0.06, rel=0.15)
    scale = result.fits["weighted_residual_sum"] / result.fits["degrees_of_freedom"]
    assert scale.mean() == pytest.approx(1.0, abs=0.25)


def test_an_unknown_law_is_an_error() -> None:
    with pytest.raises(UnknownName, match="parabola"):
        fit_rates(series_rows(0), [("parabola",)])
