"""Invariants that every rate law in the registry must keep."""

from __future__ import annotations

import numpy as np
import pint
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from models.errors import UnknownName
from models.kinetics.intervals import profile_intervals
from models.kinetics.law_fits import fit_law
from models.kinetics.laws import LAWS, TIGHT_BINDING, RateLaw, at_levels, law
from models.kinetics.laws.law import Conditions

SUBSTRATE_UM = np.geomspace(10.0, 960.0, 8)
MODULATOR_UM = np.array([0.0, 4.0, 12.0, 40.0])
DOSES_UM = np.array([0.0, *np.geomspace(0.05, 50.0, 10)])
ENZYME_UM = 0.4
TRUTH = {
    "km": 80.0,
    "k_half": 80.0,
    "hill_n": 1.7,
    "vmax": 0.05,
    "k_si": 700.0,
    "k_ic": 11.0,
    "k_iu": 25.0,
    "k_i": 17.0,
    "k_a": 9.0,
    "activation_fold": 6.0,
    "k_r": 40.0,
    "allosteric_l": 60.0,
    "c_ratio": 0.02,
    "v_uninhibited": 0.03,
    "ic50": 1.6,
    "dose_slope": 1.3,
    "residual_share": 0.12,
    "ki_app": 0.2,
}
LARGEST_SHAPE = {"partial_activation": np.inf}

every_law = pytest.mark.parametrize("each", LAWS, ids=[each.name for each in LAWS])


def truth(each: RateLaw) -> np.ndarray:
    return np.array([[TRUTH[constant.name]] for constant in each.constants])


def conditions_for(each: RateLaw, factor: float = 1.0) -> Conditions:
    """Levels, a grid or doses, whichever the law is for."""
    substrate, modulator = SUBSTRATE_UM, np.zeros(8)
    if each.fewest_levels == 1:
        substrate, modulator = np.full(DOSES_UM.size, 100.0), DOSES_UM
    elif each.fewest_modulator_levels:
        substrate, modulator = (axis.ravel() for axis in np.meshgrid(SUBSTRATE_UM, MODULATOR_UM))
    enzyme = np.full(substrate.size, ENZYME_UM)
    return at_levels(factor * substrate[:, None], factor * modulator[:, None], factor * enzyme[:, None])


def extreme_conditions() -> Conditions:
    axes = np.meshgrid([0.0, *np.geomspace(1e-6, 1e6, 13)], [0.0, *np.geomspace(1e-6, 1e6, 7)], [1e-6, 1e3])
    substrate, modulator, enzyme = (axis.ravel()[:, None] for axis in axes)
    return at_levels(substrate, modulator, enzyme)


@every_law
@given(data=st.data())
@settings(max_examples=10, deadline=None)
def test_derivatives_equal_the_complex_step(each: RateLaw, data: st.DataObject) -> None:
    # Squire and Trapp 1998, doi:10.1137/S003614459631241X: exact to rounding, no difference is taken.
    conditions = conditions_for(each)
    moves = [data.draw(st.floats(-2.0, 2.0)) for _ in each.shape_constants]
    at = each.coordinates(truth(each)[each.first_shape :])
    at = at + np.array(
        [[m if c.positive else 0.1 * m] for m, c in zip(moves, each.shape_constants, strict=True)]
    )
    _, slopes = each.evaluate(conditions, each.values(at))
    step = 1e-30
    for index, slope in enumerate(slopes):
        moved = at.astype(complex)
        moved[index] += 1j * step
        shape, _ = each.evaluate(conditions, each.values(moved))
        np.testing.assert_allclose(slope, shape.imag / step, rtol=1e-10, atol=1e-13)


@every_law
def test_units_parse_and_meanings_are_given(each: RateLaw) -> None:
    registry = pint.UnitRegistry()
    rate, concentration = (registry.parse_units(unit).dimensionality for unit in ("mol/L/s", "mol/L"))
    assert each.amplitude is not None
    assert registry.parse_units(each.amplitude.unit).dimensionality == rate
    for constant in each.constants:
        assert constant.meaning
        unit = registry.parse_units(constant.unit) if constant.unit != "1" else registry.dimensionless
        assert (unit.dimensionality == concentration) == constant.is_concentration
        assert constant.lowest < constant.highest
        assert constant.lowest >= 0 or not constant.positive
        assert constant.name in each.equation
    assert len({constant.name for constant in each.constants}) == each.constant_count
    assert any(mark in each.source for mark in ("doi:", "ISBN"))


@every_law
def test_shape_and_derivatives_are_finite_at_all_extremes(each: RateLaw) -> None:
    conditions = extreme_conditions()
    lower, upper = each.limits(conditions, np.ones_like(conditions.substrate_um))
    corners = np.stack(np.meshgrid(*zip(lower[:, 0], upper[:, 0], strict=True)), axis=-1)
    for corner in [*corners.reshape(-1, len(lower)), 0.5 * (lower + upper)[:, 0]]:
        with np.errstate(over="ignore"):
            shape, slopes = each.evaluate(conditions, each.values(corner[:, None]))
        least = min(0.0, *(c.lowest for c in each.shape_constants if not c.positive), 0.0)
        assert np.all((shape >= least) & (shape <= LARGEST_SHAPE.get(each.name, 1.0 + 1e-12)))
        assert all(np.all(np.isfinite(slope)) for slope in slopes)


@pytest.mark.parametrize("name", ["michaelis_menten", "hill"])
def test_half_saturation_gives_half_of_vmax(name: str) -> None:
    each = law(name)
    constants = truth(each)
    half = [constant.name for constant in each.constants].index(str(each.half_saturation))
    conditions = at_levels(constants[half][None, :])
    assert each.rate(conditions, tuple(constants))[0, 0] == pytest.approx(0.5 * TRUTH["vmax"], rel=1e-14)


@every_law
def test_exact_rates_give_back_their_constants(each: RateLaw) -> None:
    conditions = conditions_for(each)
    rates = each.rate(conditions, tuple(truth(each)))
    fit = fit_law(each, conditions, rates)
    assert fit.converged.all()
    np.testing.assert_allclose(fit.constants, truth(each), rtol=1e-6)


@every_law
def test_noisy_rates_give_back_their_constants_within_their_intervals(each: RateLaw) -> None:
    """100 series at 1 %: each interval holds the truth about 95 times, and nothing fails in silence."""
    one = conditions_for(each)
    every = np.zeros(100, dtype=int)
    conditions = one.select(every)
    generator = np.random.default_rng(5)
    exact = each.rate(one, tuple(truth(each)))[:, every]
    error = 0.01 * np.hypot(exact, 0.02 * exact.max())
    rates, weights = exact + error * generator.standard_normal(exact.shape), error**-2
    fit = fit_law(each, conditions, rates, weights)
    low, high = profile_intervals(fit, conditions, rates, weights)
    sound = fit.converged & ~fit.at_limit & fit.full_rank
    assert sound.mean() > 0.9
    held = ~((low > truth(each)) | (high < truth(each)))
    # Three standard errors of a share of 0.95 among 100.
    assert np.all(held[:, sound].mean(axis=1) > 0.95 - 3.0 * np.sqrt(0.95 * 0.05 / 100))
    assert not np.any((low > fit.constants) | (high < fit.constants))


@every_law
def test_units_scale_through(each: RateLaw) -> None:
    conditions, scaled = conditions_for(each), conditions_for(each, 1e-3)
    generator = np.random.default_rng(8)
    rates = each.rate(conditions, tuple(truth(each)))
    rates = rates * (1.0 + 0.005 * generator.standard_normal(rates.shape))
    plain, moved = fit_law(each, conditions, rates), fit_law(each, scaled, rates * 1e4)
    factor = [
        1e-3 if constant.is_concentration else 1e4 if constant is each.amplitude else 1.0
        for constant in each.constants
    ]
    np.testing.assert_allclose(moved.constants[:, 0], plain.constants[:, 0] * factor, rtol=1e-5)
    np.testing.assert_allclose(moved.standard_error[:, 0], plain.standard_error[:, 0] * factor, rtol=1e-4)


@every_law
def test_bits_do_not_depend_on_the_batch(each: RateLaw) -> None:
    one = conditions_for(each)
    generator = np.random.default_rng(4)
    rates = each.rate(one, tuple(truth(each)))
    rates = rates * (1.0 + 0.01 * generator.standard_normal((rates.size, 30)))
    conditions = one.select(np.zeros(30, dtype=int))
    many, alone = fit_law(each, conditions, rates), fit_law(each, one, rates[:, 17:18])
    np.testing.assert_array_equal(many.constants[:, 17], alone.constants[:, 0])
    np.testing.assert_array_equal(many.covariance[17], alone.covariance[0])
    weights = np.ones_like(rates)
    together = profile_intervals(many, conditions, rates, weights)
    by_itself = profile_intervals(alone, one, rates[:, 17:18], weights[:, :1])
    for ends, own in zip(together, by_itself, strict=True):
        np.testing.assert_array_equal(ends[:, 17], own[:, 0])


@every_law
def test_starts_are_inside_the_limits(each: RateLaw) -> None:
    one = conditions_for(each)
    both = one.select(np.zeros(2, dtype=int))
    weights = np.ones_like(both.substrate_um)
    lower, upper = each.limits(both, weights)
    candidates = each.starts(both, weights)
    assert candidates.shape[1:] == (len(each.shape_constants), 2)
    for candidate in candidates:
        coordinates = each.coordinates(candidate)
        assert np.all((coordinates >= lower) & (coordinates <= upper))


def test_ranks_differ_and_names_find_their_law() -> None:
    assert len({each.rank for each in LAWS}) == len(LAWS)
    assert all(law(each.name) is each for each in LAWS)
    with pytest.raises(UnknownName, match="michaelis_menten"):
        law("straight")


def test_a_law_that_needs_a_modulator_or_enzyme_says_so() -> None:
    levels = at_levels(SUBSTRATE_UM[:, None])
    with pytest.raises(ValueError, match="modulator"):
        law("competitive_inhibition").evaluate(levels, (np.array([1.0]), np.array([1.0])))
    with pytest.raises(ValueError, match="enzyme"):
        TIGHT_BINDING.evaluate(at_levels(levels.substrate_um, levels.substrate_um), (np.array([1.0]),))


def test_some_series_of_conditions_are_taken_with_all_they_hold() -> None:
    grid = np.arange(1.0, 7.0).reshape(2, 3)
    some = Conditions(grid, np.log(grid), grid * 10.0, grid * 100.0, (grid * 1e3,)).select(np.array([2, 0]))
    np.testing.assert_array_equal(some.substrate_um, [[3.0, 1.0], [6.0, 4.0]])
    np.testing.assert_array_equal(some.modulator, some.substrate_um * 10.0)
    np.testing.assert_array_equal(some.enzyme, some.substrate_um * 100.0)
    np.testing.assert_array_equal(some.further[0], some.substrate_um * 1e3)


def test_laws_meet_where_they_must() -> None:
    """Mixed with one term gone, concerted with one state, tight binding with hardly any enzyme."""
    grid = conditions_for(law("mixed_inhibition"))
    far = np.array([1e300])
    km, k_ic = np.array([80.0]), np.array([11.0])
    mixed = law("mixed_inhibition").evaluate(grid, (km, k_ic, far))[0]
    np.testing.assert_allclose(mixed, law("competitive_inhibition").evaluate(grid, (km, k_ic))[0], rtol=1e-14)
    both = law("mixed_inhibition").evaluate(grid, (km, k_ic, k_ic))[0]
    pure = law("noncompetitive_inhibition").evaluate(grid, (km, k_ic))[0]
    np.testing.assert_allclose(both, pure, rtol=1e-14)
    levels = conditions_for(law("michaelis_menten"))
    one_state = law("concerted_tetramer").evaluate(levels, (km, np.array([1e-300])))[0]
    hyperbola = law("michaelis_menten").evaluate(levels, (km,))[0]
    np.testing.assert_allclose(one_state, hyperbola, rtol=1e-14)
    no_difference = law("concerted_tetramer_general").evaluate(
        levels, (km, np.array([50.0]), np.array([1.0]))
    )
    np.testing.assert_allclose(no_difference[0], hyperbola, rtol=1e-14)
    doses = conditions_for(TIGHT_BINDING)
    little_enzyme = at_levels(doses.substrate_um, doses.modulator_um, np.full_like(doses.enzyme, 1e-9))
    free = law("dose_response").evaluate(doses, (np.array([0.2]), np.array([1.0]), np.array([0.0])))[0]
    np.testing.assert_allclose(TIGHT_BINDING.evaluate(little_enzyme, (np.array([0.2]),))[0], free, rtol=1e-7)
