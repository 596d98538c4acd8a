"""The surface for notebooks: its examples run, published data take three lines, bad input is refused."""

from __future__ import annotations

import doctest
import pickle
import subprocess
import sys
from dataclasses import replace

import numpy as np
import pandas as pd
import pytest
from scipy.stats import t

import models.kinetics
from models.errors import UnknownName
from models.kinetics import FitRefused, fit, fit_michaelis_menten, notebook, own_law, single_fit
from models.kinetics.grids import INHIBITION_LAWS
from models.kinetics.laws import LAWS
from tests.models.kinetics.test_rate_laws import conditions_for, truth
from tests.models.kinetics.test_weights import pipetted
from tests.published.published_values import REFERENCE


def test_examples_run() -> None:
    for module, examples in ((notebook, 5), (single_fit, 4)):
        result = doctest.testmod(module, optionflags=doctest.NORMALIZE_WHITESPACE)
        assert result.attempted > examples
        assert result.failed == 0


def test_the_package_is_light_until_asked() -> None:
    code = "import models.kinetics, sys; print('pandas' in sys.modules, 'scipy' in sys.modules)"
    found = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert found.stdout.split() == ["False", "False"]
    assert all(getattr(models.kinetics, name) for name in models.kinetics.__all__)
    with pytest.raises(AttributeError, match="fit_lines"):
        _ = models.kinetics.fit_lines


def test_published_data_take_three_lines() -> None:
    """INRA set vmkmki (Baty et al. 2015, doi:10.18637/jss.v066.i05): AIC is lowest for uncompetitive."""
    data = pd.read_csv(REFERENCE / "inra_inhibition.csv", comment="#")
    found = fit("s_unstated", "v_unstated", INHIBITION_LAWS, data=data, modulator="i_unstated")
    assert found.law.name == "uncompetitive_inhibition"
    assert found.table().loc["k_iu", "value"] == pytest.approx(71.9780834289628, rel=1e-5)
    by_law = found.candidates.set_index("law")
    assert by_law.loc["mixed_inhibition", "distrust"] is not None
    assert by_law.loc["uncompetitive_inhibition", "trusted"]
    curve = found.curve(50)
    assert curve["modulator"].nunique() == data["i_unstated"].nunique()
    assert len(curve) == 50 * curve["modulator"].nunique()
    assert np.isfinite(curve["rate"]).all()


def test_correlation_and_units() -> None:
    # Bates and Watts 1988, A1.3, treated: correlation 0.765083423227466 (R 4.2 nls).
    data = pd.read_csv(REFERENCE / "puromycin.csv", comment="#").query("state == 'treated'")
    found = fit("conc_ppm", "rate_counts_per_min2", data=data, concentration_unit="mg/L", rate_unit="1/min^2")
    assert found.correlation().loc["vmax", "km"] == pytest.approx(0.765083423227466, rel=1e-4)
    assert found.table()["unit"].to_dict() == {"vmax": "1/min^2", "km": "mg/L"}
    assert found.degrees_of_freedom == 10


@pytest.mark.parametrize("each", LAWS, ids=[each.name for each in LAWS])
def test_every_law_can_be_fitted_and_drawn(each: object) -> None:
    conditions = conditions_for(each)
    rates = each.rate(conditions, tuple(truth(each)))[:, 0]
    rates = rates * (1.0 + 0.002 * np.random.default_rng(1).standard_normal(rates.size))
    with_modulator = each.fewest_modulator_levels > 0
    found = fit(
        conditions.substrate_um[:, 0],
        rates,
        each.name,
        modulator=conditions.modulator[:, 0] if with_modulator else None,
        enzyme=conditions.enzyme[:, 0] if each.needs_enzyme else None,
    )
    assert np.all(
        np.abs(found.constants["value"] - truth(each)[:, 0]) < 5.0 * found.constants["standard_error"]
    )
    curve = found.curve(30)
    assert curve["rate"].max() == pytest.approx(rates.max(), rel=0.25)


@pytest.mark.parametrize("each", LAWS, ids=[each.name for each in LAWS])
def test_the_profile_meets_its_limit_at_the_ends_of_the_interval(each: object) -> None:
    conditions = conditions_for(each)
    rates = each.rate(conditions, tuple(truth(each)))[:, 0]
    rates = rates * (1.0 + 0.002 * np.random.default_rng(1).standard_normal(rates.size))
    found = fit(
        conditions.substrate_um[:, 0],
        rates,
        each.name,
        modulator=conditions.modulator[:, 0] if each.fewest_modulator_levels else None,
        enzyme=conditions.enzyme[:, 0] if each.needs_enzyme else None,
    )
    for constant, row in found.table().iterrows():
        profile = found.profile(str(constant), 33)
        assert profile["value"].iloc[16] == pytest.approx(row["value"], rel=1e-12)
        assert profile["rise"].iloc[16] == 0.0
        # Its 95 % limit is the square of t, here with the fit's own degrees of freedom.
        assert profile["limit"].iloc[0] == pytest.approx(t.ppf(0.975, found.degrees_of_freedom) ** 2)
        below, above = profile.iloc[16::-1], profile.iloc[16:]
        for side, end in ((below, row["low"]), (above, row["high"])):
            assert np.all(np.diff(side["rise"]) > -1e-9)
            if np.isfinite(end):
                inside = np.interp(0.9 * side["limit"].iloc[0], side["rise"], side["value"])
                outside = np.interp(1.1 * side["limit"].iloc[0], side["rise"], side["value"])
                assert min(inside, outside) < end < max(inside, outside)


def test_a_profile_with_an_open_end_stays_below_its_limit_there() -> None:
    s = np.repeat([5.0, 10.0, 15.0, 20.0], 3)
    v = 0.05 * s / (80.0 + s) * (1.0 + 0.05 * np.random.default_rng(3).standard_normal(s.size))
    found = fit_michaelis_menten(s, v)
    assert np.isnan(found.table().loc["km", "high"])
    profile = found.profile("km")
    assert profile["rise"].iloc[-1] < profile["limit"].iloc[-1]
    assert profile["rise"].iloc[0] > profile["limit"].iloc[0]


def test_no_profile_is_made_up() -> None:
    few = fit_michaelis_menten([10.0, 80.0, 960.0], [5.0, 25.0, 46.0])
    unsettled = replace(few, law_fit=replace(few.law_fit, converged=np.array([False])))
    assert unsettled.profile("km")["rise"].isna().all()
    with pytest.raises(UnknownName, match="no constant 'k'"):
        few.profile("k")


def test_weights_of_replicates_and_of_errors_and_robust_loss() -> None:
    rows = pipetted("hill", (0.05, 80.0, 2.0), 1, 0.02)
    arguments = (rows["substrate_um"], rows["v_um_per_s"], "hill")
    equal = fit(*arguments)
    pooled = fit(*arguments, standard_error=rows["v_se_um_per_s"], weights="replicates")
    assert pooled.table().loc["hill_n", "standard_error"] < equal.table().loc["hill_n", "standard_error"]
    same = fit(*arguments, standard_error=rows["v_se_um_per_s"])
    np.testing.assert_allclose(same.constants["value"], equal.constants["value"], rtol=1e-8)
    spoiled = rows["v_um_per_s"].where(rows.index != 20, 0.2)
    robust = fit(rows["substrate_um"], spoiled, "hill", loss="tukey")
    plain = fit(rows["substrate_um"], spoiled, "hill")
    off = [np.abs(one.constants["value"] / equal.constants["value"] - 1.0).max() for one in (robust, plain)]
    assert off[0] < 0.1 < off[1]


def test_a_law_of_ones_own_may_be_negative_and_stand_beside_others() -> None:
    x = np.linspace(-1.0, 2.0, 12)
    wave = own_law("wave", lambda x, a, b: a * np.sin(b * x) - 3.0, {"a": 1.5, "b": 1.2})
    found = fit(x, 2.0 * np.sin(1.3 * x) - 3.0 + 1e-3 * np.cos(40 * x), wave)
    np.testing.assert_allclose(found.constants["value"], [2.0, 1.3], rtol=1e-2)
    s = np.repeat(np.geomspace(10.0, 960.0, 8), 3)
    v = 0.05 * s / (80.0 + s) * (1.0 + 0.02 * np.random.default_rng(1).standard_normal(s.size))
    power = own_law("power", lambda s, a, b: a * s**b, {"a": 0.01, "b": 0.5})
    both = fit(s, v, ["michaelis_menten", power])
    assert both.candidates["law"].tolist() == ["michaelis_menten", "power"]
    assert both.law.name == "michaelis_menten"


S = np.repeat(np.geomspace(10.0, 960.0, 8), 2)
V = 0.05 * S / (80.0 + S)
REFUSED = {
    "too_few_levels": (np.repeat([20.0, 400.0], 8), V),
    "no_rates": (S, np.full(16, np.nan)),
    "no_positive_rate": (S, np.zeros(16)),
    "no_half_saturation": (S, 1e-4 * S),
    "unknown_substrate": (np.where(S < 15.0, np.nan, S), V),
}


@pytest.mark.parametrize("kind", REFUSED)
def test_bad_input_is_refused_by_kind(kind: str) -> None:
    with pytest.raises(FitRefused) as refused:
        fit_michaelis_menten(*REFUSED[kind])
    assert refused.value.kind == kind
    assert pickle.loads(pickle.dumps(refused.value)).kind == kind


def test_more_bad_input() -> None:
    identical = np.full(16, 50.0)
    with pytest.raises(FitRefused, match="1 distinct substrate level"):
        fit_michaelis_menten(identical, V)
    with pytest.raises(FitRefused, match="below zero"):
        fit_michaelis_menten(-S, V)
    with pytest.raises(FitRefused, match="no rate is above zero"):
        fit_michaelis_menten(S, -V)
    with pytest.raises(FitRefused, match="enzyme"):
        fit(np.full(16, 9.0), V, "tight_binding", modulator=S, enzyme=0.0)
    with pytest.raises(ValueError, match="do not go with"):
        fit_michaelis_menten(S[:5], V)
    with pytest.raises(ValueError, match="no column"):
        fit("s", "v", data=pd.DataFrame({"s": S}))
    with pytest.raises(ValueError, match="no data frame"):
        fit("s", V)
    single = fit_michaelis_menten(S[::2], V[::2] * (1 + 0.01 * np.cos(S[::2])))
    assert single.trusted
