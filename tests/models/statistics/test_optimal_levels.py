"""Levels for a repeat: known analytic designs, the equivalence theorem, and what they are said to bring."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from models.kinetics.intervals import profile_intervals
from models.kinetics.law_fits import fit_law
from models.kinetics.laws import LAWS, RateLaw, at_levels, law
from models.kinetics.laws.law import Array, Conditions, Constant, Floats
from models.statistics.optimal_levels import (
    RateError,
    Rates,
    expected_fit,
    information,
    optimal_levels,
    rate_error,
)

NOTHING = {count: np.zeros((count, count)) for count in (2, 3, 4)}
CONSTANT_ERROR = RateError(0.01, 0.0)
# Laws of the substrate alone with constants of an invented enzyme.
CASES = {
    "michaelis_menten": np.array([1.0, 80.0]),
    "hill": np.array([1.0, 80.0, 2.1]),
    "substrate_inhibition": np.array([1.0, 80.0, 400.0]),
    "concerted_dimer": np.array([1.0, 30.0, 50.0]),
    "concerted_tetramer": np.array([1.0, 30.0, 200.0]),
}


def rate_of(of: RateLaw, constants: Floats, substrate_um: Floats) -> Floats:
    rates: Floats = of.rate(at_levels(substrate_um[:, None]), tuple(constants[:, None]))[:, 0]
    return rates


def log_det(
    of: RateLaw, constants: Floats, known: Floats, error: RateError, levels: Floats, wells: int
) -> float:
    variance = error.variance(rate_of(of, constants, levels)) / wells
    return float(np.linalg.slogdet(known + information(of, constants, levels, variance))[1])


@pytest.mark.parametrize("highest_um", [50.0, 200.0, 1000.0, 1e5])
def test_michaelis_menten_with_constant_error_has_its_analytic_design(highest_um: float) -> None:
    """The highest level and Km S_max / (2 Km + S_max): solved by hand from d det / d S = 0."""
    km = 80.0
    ranges = [(1e-3, highest_um)] * 2
    levels = optimal_levels(
        law("michaelis_menten"), np.array([1.0, km]), NOTHING[2], CONSTANT_ERROR, ranges, 1
    )
    assert np.sort(levels) == pytest.approx([km * highest_um / (2 * km + highest_um), highest_um], rel=1e-5)


def test_michaelis_menten_with_proportional_error_has_the_two_ends() -> None:
    """With a constant CV, det is (S2 - S1)^2 / ((Km + S1) (Km + S2))^2 Km^2: largest at the ends, by hand."""
    ranges = [(2.0, 900.0)] * 2
    constants = np.array([1.0, 80.0])
    levels = optimal_levels(law("michaelis_menten"), constants, NOTHING[2], RateError(0.0, 0.02), ranges, 1)
    assert np.sort(levels) == pytest.approx([2.0, 900.0], rel=1e-6)


def test_box_and_lucas_first_example() -> None:
    """Two reactions in a row, k1 = 0.7, k2 = 0.2: times 1.23 and 6.86.

    Box and Lucas 1959, doi:10.1093/biomet/46.1-2.77; the two times from memory. Time stands in the place of
    the substrate here.
    """

    def evaluate(conditions: Conditions, constants: tuple[Array, ...]) -> tuple[Array, tuple[Array, ...]]:
        time, (k1, k2) = conditions.substrate_um, constants
        first, second = np.exp(-k1 * time), np.exp(-k2 * time)
        shape = k1 / (k1 - k2) * (second - first)
        by_k1 = -k2 / (k1 - k2) ** 2 * (second - first) + k1 / (k1 - k2) * time * first
        by_k2 = k1 / (k1 - k2) ** 2 * (second - first) - k1 / (k1 - k2) * time * second
        return shape, (k1 * by_k1, k2 * by_k2)

    in_a_row = RateLaw(
        name="in_a_row",
        title="Two first-order reactions in a row",
        equation="eta = k1 / (k1 - k2) (exp(-k2 t) - exp(-k1 t))",
        amplitude=None,
        shape_constants=(
            Constant("k1", "1/s", "first", 1e-3, 1e3, False),
            Constant("k2", "1/s", "second", 1e-3, 1e3, False),
        ),
        evaluate=evaluate,
        starts=lambda conditions, weights: np.ones((1, 2, weights.shape[1])),
        half_saturation=None,
        source="Box and Lucas 1959",
        rank=1,
        fewest_levels=2,
    )
    times = optimal_levels(in_a_row, np.array([0.7, 0.2]), NOTHING[2], CONSTANT_ERROR, [(0.01, 50.0)] * 2, 1)
    assert np.sort(times) == pytest.approx([1.23, 6.86], abs=0.005)


@pytest.mark.parametrize("name", CASES)
@pytest.mark.parametrize("error", [CONSTANT_ERROR, RateError(0.01, 0.03)])
def test_levels_from_nothing_meet_the_equivalence_theorem(name: str, error: RateError) -> None:
    """No level anywhere would be foretold worse than the constants are many.

    With as many levels as constants and equal wells, a D-optimal design has n times the variance of the
    fitted rate over its own error at most p everywhere (Kiefer and Wolfowitz 1960,
    doi:10.4153/CJM-1960-030-4).
    """
    of, constants = law(name), CASES[name]
    count = of.constant_count
    levels = optimal_levels(of, constants, NOTHING[count], error, [(0.5, 3000.0)] * count, 1)
    matrix = information(of, constants, levels, error.variance(rate_of(of, constants, levels)))
    everywhere = np.geomspace(0.5, 3000.0, 401)
    inverse = np.linalg.inv(matrix)
    foretold = [
        np.trace(inverse @ information(of, constants, one, error.variance(rate_of(of, constants, one))))
        for one in everywhere[:, None]
    ]
    assert max(foretold) == pytest.approx(1.0, abs=1e-4)


@settings(max_examples=12, deadline=None)
@given(
    name=st.sampled_from(list(CASES)),
    relative=st.floats(0.0, 0.1),
    highest=st.floats(100.0, 5000.0),
    seed=st.integers(0, 1000),
)
def test_no_other_levels_tell_more_beside_those_measured(
    name: str, relative: float, highest: float, seed: int
) -> None:
    of, constants, error = law(name), CASES[name], RateError(0.005, relative)
    measured = np.repeat(np.array([10.0, 20.0, 40.0, 80.0, 100.0]), 2)
    known = information(of, constants, measured, error.variance(rate_of(of, constants, measured)))
    ranges = [(5.0, highest)] * of.constant_count
    levels = optimal_levels(of, constants, known, error, ranges, 3)
    assert ((levels >= 5.0 * (1 - 1e-9)) & (levels <= highest * (1 + 1e-9))).all()
    best = log_det(of, constants, known, error, levels, 3)
    draw = np.random.default_rng(seed)
    others = np.exp(draw.uniform(np.log(5.0), np.log(highest), size=(100, of.constant_count)))
    near = np.clip(levels * np.exp(draw.normal(0.0, 0.05, size=(100, of.constant_count))), 5.0, highest)
    for other in (*others, *near):
        assert log_det(of, constants, known, error, other, 3) <= best + 1e-7


def test_what_is_measured_moves_the_levels() -> None:
    """Where the low end is well measured, all new wells go to the high end."""
    of, constants, error = law("michaelis_menten"), CASES["michaelis_menten"], RateError(0.005, 0.01)
    low = np.repeat([10.0, 20.0, 40.0, 80.0], 6)
    known = information(of, constants, low, error.variance(rate_of(of, constants, low)))
    assert optimal_levels(of, constants, known, error, [(5.0, 800.0)] * 2, 3) == pytest.approx([800.0, 800.0])
    alone = optimal_levels(of, constants, NOTHING[2], error, [(5.0, 800.0)] * 2, 3)
    assert np.sort(alone)[0] < 100.0


def test_levels_keep_to_their_own_ranges() -> None:
    of, constants = law("hill"), CASES["hill"]
    ranges = [(300.0, 500.0), (5.0, 20.0), (5.0, 500.0)]
    levels = optimal_levels(of, constants, NOTHING[3], CONSTANT_ERROR, ranges, 2)
    assert all(low <= level <= high for level, (low, high) in zip(levels, ranges, strict=True))


def test_levels_that_cannot_tell_the_constants_apart_are_refused() -> None:
    with pytest.raises(ValueError, match="cannot tell the constants apart"):
        optimal_levels(
            law("michaelis_menten"), CASES["michaelis_menten"], NOTHING[2], CONSTANT_ERROR, [(5.0, 50.0)], 3
        )
    with pytest.raises(ValueError, match="above zero"):
        optimal_levels(
            law("michaelis_menten"),
            CASES["michaelis_menten"],
            NOTHING[2],
            CONSTANT_ERROR,
            [(0.0, 50.0)] * 2,
            3,
        )


@settings(max_examples=30, deadline=None)
@given(constant=st.floats(1e-4, 1.0), relative=st.floats(0.0, 0.3))
def test_the_error_of_a_rate_is_recovered(constant: float, relative: float) -> None:
    rate = np.array([0.05, 0.2, 0.9, 2.0, 5.0])
    found = rate_error(rate, np.sqrt(constant**2 + (relative * rate) ** 2))
    assert found.variance(rate) == pytest.approx(constant**2 + (relative * rate) ** 2, rel=1e-6)


def simulated(seed: int, levels: Floats, error: RateError, constants: Floats) -> Rates:
    draw = np.random.default_rng(seed)
    true = rate_of(law("michaelis_menten"), constants, levels)
    return Rates(
        levels, true + draw.normal(size=true.size) * np.sqrt(error.variance(true)), error.variance(true)
    )


def fitted(rates: Rates) -> tuple[Floats, Floats, Floats]:
    of = law("michaelis_menten")
    conditions, rate = at_levels(rates.substrate_um[:, None]), rates.rate_um_per_s[:, None]
    fit = fit_law(of, conditions, rate, 1.0 / rates.variance[:, None])
    low, high = profile_intervals(fit, conditions, rate, 1.0 / rates.variance[:, None])
    return fit.constants[:, 0], low[:, 0], high[:, 0]


def test_what_new_levels_bring_is_what_a_fit_with_them_has() -> None:
    """Standard errors as they come out, on average, of fits to new rates that are then really drawn."""
    true, error = np.array([1.0, 400.0]), RateError(0.0005, 0.02)
    old = simulated(3, np.repeat([40.0, 80.0, 160.0, 320.0], 3), error, true)
    constants, low, high = fitted(old)
    new = np.array([200.0, 2400.0])
    foretold = expected_fit(law("michaelis_menten"), constants, old, new, error, 3)
    assert foretold.high[1] - foretold.low[1] < 0.6 * (high[1] - low[1])
    assert foretold.low[1] < constants[1] < foretold.high[1]
    of = law("michaelis_menten")
    residual = old.rate_um_per_s - rate_of(of, constants, old.substrate_um)
    scale = np.sqrt(np.sum(residual**2 / old.variance) / (residual.size - 2))
    as_scattered = RateError(error.constant_um_per_s * scale, error.relative * scale)
    errors = []
    for seed in range(100):
        drawn = simulated(1000 + seed, np.repeat(new, 3), as_scattered, constants)
        conditions = at_levels(np.concatenate([old.substrate_um, drawn.substrate_um])[:, None])
        rate = np.concatenate([old.rate_um_per_s, drawn.rate_um_per_s])[:, None]
        weights = 1.0 / np.concatenate([old.variance, drawn.variance / scale**2])[:, None]
        errors.append(fit_law(of, conditions, rate, weights).standard_error[:, 0])
    assert foretold.standard_error == pytest.approx(np.mean(errors, axis=0), rel=0.05)


def test_an_open_interval_is_foretold_to_close() -> None:
    true, error = np.array([1.0, 2000.0]), RateError(0.001, 0.15)
    old = simulated(1, np.repeat([50.0, 100.0, 200.0, 400.0], 2), error, true)
    constants, _, high = fitted(old)
    assert np.isnan(high[1]), "the case is to begin with an open interval"
    nothing_new = expected_fit(law("michaelis_menten"), constants, old, np.array([50.0]), error, 2)
    assert np.isnan(nothing_new.high[1])
    foretold = expected_fit(
        law("michaelis_menten"), constants, old, np.array([6.0 * constants[1]] * 2), error, 4
    )
    assert np.isfinite(foretold.high).all()


def test_one_well_a_level_cannot_be_foretold() -> None:
    old = simulated(1, np.repeat([50.0, 100.0, 200.0, 400.0], 2), CONSTANT_ERROR, np.array([1.0, 200.0]))
    with pytest.raises(ValueError, match="two wells"):
        expected_fit(
            law("michaelis_menten"), np.array([1.0, 200.0]), old, np.array([900.0]), CONSTANT_ERROR, 1
        )


def test_every_law_of_the_substrate_alone_is_planned_for() -> None:
    """A law added to the registry must be added to the cases, or need a modulator."""
    planned = {each.name for each in LAWS if not each.fewest_modulator_levels and not each.needs_enzyme}
    assert planned - {"concerted_tetramer_general"} == set(CASES)
