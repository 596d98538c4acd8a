"""Invariants that every rate law in the registry must keep."""

from __future__ import annotations

import numpy as np
import pint
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from models.errors import UnknownName
from models.kinetics.law_fits import fit_law
from models.kinetics.laws import LAWS, RateLaw, at_levels, law
from models.kinetics.laws.law import Conditions

LEVELS_UM = np.geomspace(10.0, 960.0, 8)
TRUTH = {"km": 80.0, "k_half": 80.0, "hill_n": 1.7, "vmax": 0.05}

every_law = pytest.mark.parametrize("each", LAWS, ids=[each.name for each in LAWS])


def truth(each: RateLaw) -> np.ndarray:
    return np.array([[TRUTH[constant.name]] for constant in each.constants])


@every_law
@given(k=st.floats(-3.0, 3.0), other=st.floats(-0.5, 1.5))
@settings(max_examples=30, deadline=None)
def test_derivatives_equal_the_complex_step(each: RateLaw, k: float, other: float) -> None:
    # Squire and Trapp 1998, doi:10.1137/S003614459631241X: exact to rounding, no difference is taken.
    conditions = at_levels(LEVELS_UM[:, None])
    logs = np.array([np.log(80.0) + k, other][: len(each.shape_constants)])
    _, slopes = each.evaluate(conditions, tuple(np.array([value]) for value in np.exp(logs)))
    step = 1e-30
    for index, slope in enumerate(slopes):
        moved = logs.astype(complex)
        moved[index] += 1j * step
        shape, _ = each.evaluate(conditions, tuple(np.array([value]) for value in np.exp(moved)))
        np.testing.assert_allclose(slope, shape.imag / step, rtol=1e-11, atol=1e-14)


@every_law
def test_units_parse_and_meanings_are_given(each: RateLaw) -> None:
    registry = pint.UnitRegistry()
    assert each.amplitude.name == "vmax"
    assert (
        registry.parse_units(each.amplitude.unit).dimensionality
        == registry.parse_units("mol/L/s").dimensionality
    )
    for constant in each.constants:
        assert constant.meaning
        unit = registry.parse_units(constant.unit) if constant.unit != "1" else registry.dimensionless
        assert (
            unit.dimensionality == registry.parse_units("mol/L").dimensionality
        ) == constant.is_concentration
        assert constant.lowest < constant.highest
    assert "doi:" in each.source


@every_law
def test_shape_is_finite_and_between_0_and_1_at_the_limits(each: RateLaw) -> None:
    conditions = at_levels(np.geomspace(1e-6, 1e6, 25)[:, None])
    lower, upper = each.log_limits(conditions, np.ones((25, 1)))
    for logs in (lower, upper, 0.5 * (lower + upper)):
        with np.errstate(over="ignore"):
            shape, slopes = each.evaluate(conditions, tuple(np.exp(logs)))
        assert np.all((shape >= 0) & (shape <= 1))
        assert all(np.all(np.isfinite(slope)) for slope in slopes)


@every_law
def test_half_saturation_gives_half_of_vmax(each: RateLaw) -> None:
    constants = truth(each)
    half = [constant.name for constant in each.constants].index(each.half_saturation)
    conditions = at_levels(constants[half][None, :])
    assert each.rate(conditions, tuple(constants))[0, 0] == pytest.approx(0.5 * TRUTH["vmax"], rel=1e-14)


@every_law
def test_exact_rates_give_back_their_constants(each: RateLaw) -> None:
    conditions = at_levels(LEVELS_UM[:, None])
    rates = each.rate(conditions, tuple(truth(each)))
    fit = fit_law(each, conditions, rates)
    assert fit.converged.all()
    np.testing.assert_allclose(fit.constants, truth(each), rtol=1e-9)


@every_law
def test_starts_are_positive_and_inside_the_limits(each: RateLaw) -> None:
    conditions = at_levels(np.stack([LEVELS_UM, LEVELS_UM * 1e-4], axis=1))
    weights = np.ones((8, 2))
    lower, upper = each.log_limits(conditions, weights)
    candidates = each.starts(conditions, weights)
    assert candidates.shape[1:] == (len(each.shape_constants), 2)
    assert np.all(np.log(candidates) >= lower)
    assert np.all(np.log(candidates) <= upper)


def test_ranks_differ_and_names_find_their_law() -> None:
    assert len({each.rank for each in LAWS}) == len(LAWS)
    assert all(law(each.name) is each for each in LAWS)
    with pytest.raises(UnknownName, match="michaelis_menten"):
        law("straight")


def test_some_series_of_conditions_are_taken_with_their_modulator() -> None:
    grid = np.arange(1.0, 7.0).reshape(2, 3)
    some = Conditions(grid, np.log(grid), grid * 10.0).select(np.array([2, 0]))
    np.testing.assert_array_equal(some.substrate_um, [[3.0, 1.0], [6.0, 4.0]])
    assert some.modulator_um is not None
    np.testing.assert_array_equal(some.modulator_um, some.substrate_um * 10.0)
