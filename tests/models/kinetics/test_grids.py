"""Grids of substrate and modulator: the right law, its constants, bad grids refused, Ki from IC50."""

from __future__ import annotations

import numpy as np
import pandas as pd
import pytest

from models.errors import UnknownName
from models.kinetics.fitting import fit_rates
from models.kinetics.grids import (
    ACTIVATION_LAWS,
    INHIBITION_LAWS,
    DerivedConstant,
    fit_grids,
    ki_from_ic50,
)
from models.kinetics.laws import at_levels, law
from models.kinetics.turnover import turnover
from tests.models.kinetics.test_rate_laws import conditions_for, truth


def grid_rows(name: str, number: int = 0, cv: float = 0.02, replicates: int = 2) -> pd.DataFrame:
    each = law(name)
    conditions = conditions_for(each).select(np.zeros(replicates, dtype=int))
    generator = np.random.default_rng(number)
    exact = each.rate(conditions, tuple(truth(each)))
    noise = generator.standard_normal(exact.shape)
    rate = exact * (1.0 + cv * noise) + 0.002 * exact.max() * generator.standard_normal(exact.shape)
    return pd.DataFrame(
        {
            "series": number,
            "plate": number,
            "substrate_um": conditions.substrate_um.ravel(),
            "nominal_substrate_um": conditions.substrate_um.ravel(),
            "modulator_um": conditions.modulator.ravel(),
            "enzyme_um": conditions.enzyme.ravel(),
            "v_um_per_s": rate.ravel(),
            "v_se_um_per_s": 0.002 * exact.max(),
        }
    )


def test_the_law_that_made_a_grid_is_chosen_and_its_constants_recovered() -> None:
    rows = pd.concat([grid_rows(name, n) for n, name in enumerate(INHIBITION_LAWS)], ignore_index=True)
    result = fit_grids(rows)
    chosen = result.fits[result.fits["chosen"]].set_index("series")["law"].to_dict()
    assert chosen == dict(enumerate(INHIBITION_LAWS))
    assert result.fits.groupby("series").size().tolist() == [4] * 4
    assert result.fits.groupby("series")["evidence_weight"].sum().to_numpy() == pytest.approx(np.ones(4))
    for number, name in enumerate(INHIBITION_LAWS):
        found = result.constants[(result.constants["series"] == number) & (result.constants["law"] == name)]
        off = np.abs(found["value"].to_numpy() - truth(law(name))[:, 0]) / found["standard_error"].to_numpy()
        assert np.all(off < 4.0)
        assert np.isfinite(found[["low", "high"]].to_numpy()).all()


@pytest.mark.parametrize("name", [*ACTIVATION_LAWS, "dose_response", "tight_binding"])
def test_other_laws_with_a_modulator_are_fitted_over_all_wells(name: str) -> None:
    result = fit_grids(grid_rows(name), [(name,)])
    assert result.refusals.empty
    off = np.abs(result.constants["value"].to_numpy() - truth(law(name))[:, 0])
    assert np.all(off < 4.0 * result.constants["standard_error"].to_numpy())


def test_a_modulator_without_effect_is_told_by_the_law_without_it() -> None:
    rows = grid_rows("competitive_inhibition")
    plain = law("michaelis_menten").rate(
        at_levels(rows["substrate_um"].to_numpy()[:, None]), (np.array([0.05]), np.array([80.0]))
    )[:, 0]
    rows["v_um_per_s"] = plain * (1.0 + 0.02 * np.random.default_rng(1).standard_normal(plain.size))
    result = fit_grids(rows, [("michaelis_menten", *INHIBITION_LAWS)])
    assert result.fits.loc[result.fits["chosen"], "law"].tolist() == ["michaelis_menten"]
    inhibited = result.constants[result.constants["constant"].isin(["k_ic", "k_iu", "k_i"])]
    assert inhibited["high"].isna().all()


def test_bits_do_not_depend_on_order_or_batch_of_grids() -> None:
    rows = pd.concat([grid_rows("competitive_inhibition", n) for n in range(4)], ignore_index=True)
    together = fit_grids(rows)
    shuffled = fit_grids(rows.sample(frac=1.0, random_state=1))
    pd.testing.assert_frame_equal(together.constants, shuffled.constants, check_exact=True)
    alone = fit_grids(rows[rows["series"] == 2].assign(series=0))
    columns = ["value", "standard_error", "low", "high"]
    mine = together.constants[together.constants["series"] == 2]
    np.testing.assert_array_equal(alone.constants[columns].to_numpy(), mine[columns].to_numpy())


REFUSED = {
    "too_few_modulator_levels": lambda rows: rows[rows["modulator_um"] == 0.0],
    "unknown_modulator": lambda rows: rows.assign(modulator_um=np.nan),
    "too_few_levels": lambda rows: rows[rows["substrate_um"] > 500.0],
    "no_positive_rate": lambda rows: rows.assign(v_um_per_s=0.0),
    "no_rates": lambda rows: rows.assign(v_um_per_s=np.nan),
}


@pytest.mark.parametrize("kind", REFUSED)
def test_bad_grids_are_refused_by_name_and_the_others_go_on(kind: str) -> None:
    bad = REFUSED[kind](grid_rows("competitive_inhibition", 1))
    result = fit_grids(pd.concat([grid_rows("competitive_inhibition"), bad], ignore_index=True))
    rest = [INHIBITION_LAWS] * 2
    if kind == "no_rates":
        result = fit_rates(pd.concat([grid_rows("competitive_inhibition"), bad]), rest)
    assert result.refusals[["series", "kind"]].to_numpy().tolist() == [[1, kind]]
    assert set(result.fits["series"]) == {0}


def test_tight_binding_without_enzyme_and_flat_doses_are_refused() -> None:
    none = fit_grids(grid_rows("tight_binding").assign(enzyme_um=0.0), [("tight_binding",)])
    assert none.refusals["kind"].tolist() == ["unknown_enzyme"]
    rows = grid_rows("tight_binding")
    flat = fit_grids(rows.assign(v_um_per_s=0.03), [("tight_binding",)])
    assert flat.refusals["kind"].tolist() == ["no_modulation"]
    with pytest.raises(UnknownName, match="modulator_um"):
        fit_grids(rows.drop(columns="modulator_um"))


def test_a_rate_without_saturation_has_no_turnover() -> None:
    result = fit_grids(grid_rows("dose_response"), [("dose_response",)])
    unknown = np.array([np.nan])
    assert turnover(result, np.array([1.0]), unknown, unknown).empty


def test_ki_follows_cheng_and_prusoff() -> None:
    """Cheng and Prusoff 1973, doi:10.1016/0006-2952(73)90196-2; S = 3 Km quarters a competitive IC50."""
    ic50 = DerivedConstant(8.0, 0.4, 7.0, np.nan)
    competitive = ki_from_ic50(ic50, "competitive", 300.0, 100.0)
    assert (competitive.value, competitive.standard_error) == pytest.approx((2.0, 0.1))
    assert competitive.low == pytest.approx(1.75)
    assert np.isnan(competitive.high)
    assert ki_from_ic50(ic50, "uncompetitive", 300.0, 100.0).value == pytest.approx(6.0)
    assert ki_from_ic50(ic50, "noncompetitive", 300.0, 100.0).value == 8.0
    with_error = ki_from_ic50(ic50, "competitive", 300.0, 100.0, 10.0)
    assert with_error.standard_error / 2.0 == pytest.approx(np.hypot(0.05, 0.75 * 0.1))
    assert with_error.low < competitive.low
    with pytest.raises(ValueError, match="above zero"):
        ki_from_ic50(ic50, "competitive", 0.0, 100.0)


def test_ki_from_a_fitted_dose_response_is_that_of_the_grid() -> None:
    """Doses simulated from competitive inhibition: IC50 = Ki (1 + S / Km), exactly."""
    doses = np.array([0.0, *np.geomspace(0.5, 500.0, 12)])
    conditions = at_levels(np.full((13, 1), 160.0), doses[:, None])
    each = law("competitive_inhibition")
    rate = each.rate(conditions, tuple(truth(each)))[:, 0]
    rows = pd.DataFrame(
        {
            "series": 0,
            "plate": 0,
            "substrate_um": 160.0,
            "nominal_substrate_um": 160.0,
            "modulator_um": doses,
            "v_um_per_s": rate,
            "v_se_um_per_s": 1e-3 * rate,
        }
    )
    found = fit_grids(rows, [("dose_response",)]).constants.set_index("constant")
    ic50 = DerivedConstant(*(float(found.loc["ic50", c]) for c in ("value", "standard_error", "low", "high")))
    assert ki_from_ic50(ic50, "competitive", 160.0, 80.0).value == pytest.approx(11.0, rel=1e-5)
