"""Choice of law by AICc, and constants per enzyme."""

from __future__ import annotations

import math

import numpy as np
import pint
import pytest

from models.errors import UnknownName
from models.kinetics.fitting import fit_rates
from models.kinetics.selection import aicc, choose_law, evidence_weights
from models.kinetics.turnover import turnover
from tests.models.kinetics.test_fit_rates import BOTH, MM, series_rows

UNKNOWN = np.array([np.nan])


def test_the_simpler_law_wins_inside_two_units() -> None:
    assert choose_law({"hill": 10.0, "michaelis_menten": 11.9}) == "michaelis_menten"
    assert choose_law({"hill": 10.0, "michaelis_menten": 12.1}) == "hill"
    assert choose_law({"hill": math.nan, "michaelis_menten": math.nan}) == "michaelis_menten"
    assert choose_law({"hill": 3.0, "michaelis_menten": math.nan}) == "hill"
    with pytest.raises(ValueError, match="no candidate"):
        choose_law({})
    with pytest.raises(UnknownName):
        choose_law({"line": 1.0, "hill": 2.0})


def test_evidence_weights_follow_the_criterion() -> None:
    weights = evidence_weights({"michaelis_menten": 0.0, "hill": 2.0})
    assert weights["hill"] / weights["michaelis_menten"] == pytest.approx(math.exp(-1.0))
    assert sum(weights.values()) == pytest.approx(1.0)
    partly = evidence_weights({"michaelis_menten": 5.0, "hill": math.nan})
    assert partly["michaelis_menten"] == 1.0
    assert math.isnan(partly["hill"])


def test_aicc_is_the_likelihoods_own() -> None:
    # Puromycin, treated: AIC 95.2709686499701 with k = 3, n = 12 (data of Bates and Watts 1988,
    # doi:10.1002/9780470316757, fitted with R 4.2 nls); AICc adds 2 k (k + 1) / (n - k - 1).
    value = aicc(np.array([1195.44881454122]), np.array([0.0]), np.array([12.0]), 2)[0]
    assert value == pytest.approx(95.2709686499701 + 24.0 / 8.0, rel=1e-10)
    assert np.isnan(aicc(np.array([1.0]), np.array([0.0]), np.array([4.0]), 2)[0])


def test_units_of_turnover_agree_with_pint() -> None:
    result = fit_rates(series_rows(0), [BOTH])
    registry = pint.UnitRegistry()
    mass, molar_mass = 150.0, 50000.0
    rows = turnover(result, UNKNOWN, np.array([mass]), np.array([molar_mass]))
    amount = registry.Quantity(mass, "ng/mL") / registry.Quantity(molar_mass, "g/mol")
    for law, half in (("michaelis_menten", "km"), ("hill", "k_half")):
        own = result.constants[result.constants["law"] == law].set_index("constant")["value"]
        found = rows[rows["law"] == law].set_index("constant")
        vmax = registry.Quantity(own["vmax"], "umol/L/s")
        expected = {
            "kcat": vmax / amount,
            "specific_activity": vmax / registry.Quantity(mass, "ng/mL"),
            f"kcat_per_{half}": vmax / amount / registry.Quantity(own[half], "umol/L"),
        }
        assert set(found.index) == set(expected)
        for name, quantity in expected.items():
            value = quantity.to(found.loc[name, "unit"]).magnitude
            assert found.loc[name, "value"] == pytest.approx(value, rel=1e-12)


def test_enzyme_that_is_not_known_gives_no_turnover() -> None:
    result = fit_rates(series_rows(0), [MM])
    assert turnover(result, UNKNOWN, UNKNOWN, UNKNOWN).empty
    assert turnover(result, np.array([0.0]), np.array([0.0]), UNKNOWN).empty
    by_mass = turnover(result, UNKNOWN, np.array([100.0]), UNKNOWN)
    assert by_mass["constant"].tolist() == ["specific_activity"]
    by_amount = turnover(result, np.array([2.0]), UNKNOWN, UNKNOWN)
    assert by_amount["constant"].tolist() == ["kcat", "kcat_per_km"]
    vmax = result.constants.set_index("constant").loc["vmax"]
    assert by_amount["value"].iloc[0] == pytest.approx(vmax["value"] / 2.0 * 1000.0)
    assert by_amount["high"].iloc[0] == pytest.approx(vmax["high"] / 2.0 * 1000.0)


def test_uncertainty_of_the_ratio_is_that_of_a_fit_in_the_ratio() -> None:
    """vmax / K as a constant of its own has the standard error that propagation with covariance gives."""
    rows = series_rows(0)
    result = fit_rates(rows, [MM])
    own = result.constants.set_index("constant")["value"]
    covariance = result.covariance[0, "michaelis_menten"]
    gradient = np.array([1.0 / own["km"], -own["vmax"] / own["km"] ** 2])
    expected = np.sqrt(gradient @ covariance @ gradient) * 1e3 * 1e6
    found = turnover(result, np.array([1.0]), UNKNOWN, UNKNOWN).set_index("constant").loc["kcat_per_km"]
    assert found["standard_error"] == pytest.approx(expected, rel=1e-10)
    assert 0 < found["low"] < found["value"] < found["high"]
