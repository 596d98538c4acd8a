"""Both parts of replicate scatter are recovered, as the highest restricted likelihood, alike in any batch."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import minimize

from models.statistics.pipetting import VarianceComponents, rate_variance, replicate_variance_components

Floats = NDArray[np.float64]


def plates_of_rates(
    generator: np.random.Generator,
    plate_count: int,
    series: int,
    constant_cv: float,
    substrate_cv: float,
    error: float = 0.001,
    order: float = 1.0,
) -> dict[str, NDArray[np.generic]]:
    """Triplicates at 8 levels from 0.125 to 12 K, with the true rate as the fitted one."""
    levels, replicates = np.geomspace(0.125, 12.0, 8), 3
    substrate = np.tile(np.repeat(levels, replicates), plate_count * series)
    group = np.repeat(np.arange(plate_count * series * 8), replicates)
    size = substrate**order / (1.0 + substrate**order)
    pipetted = substrate * (1.0 + substrate_cv * generator.standard_normal(group.size))
    enzyme = 1.0 + constant_cv * generator.standard_normal(group.size)
    rate = enzyme * pipetted**order / (1.0 + pipetted**order) + error * generator.standard_normal(group.size)
    return {
        "plate": group // (8 * series),
        "group": group,
        "residual": rate - size,
        "size": size,
        "order": order / (1.0 + substrate**order),
        "standard_error": np.full(group.size, error),
    }


def components(rows: dict[str, NDArray[np.generic]], count: int, **more: float) -> VarianceComponents:
    return replicate_variance_components(**rows, plate_count=count, **more)


@pytest.mark.parametrize(
    ("constant_cv", "substrate_cv", "tolerance"),
    # The tolerances are about two standard errors of a part seen through the other.
    [(0.02, 0.02, 0.06), (0.01, 0.03, 0.03), (0.03, 0.01, 0.2)],
)
def test_both_parts_are_recovered(constant_cv: float, substrate_cv: float, tolerance: float) -> None:
    rows = plates_of_rates(np.random.default_rng(5), 1, 2000, constant_cv, substrate_cv)
    found = components(rows, 1)
    assert found.constant_cv[0] == pytest.approx(constant_cv, rel=0.03)
    assert found.substrate_cv[0] == pytest.approx(substrate_cv, rel=tolerance)
    assert found.degrees_of_freedom[0] == 2000 * 8 * 2
    assert found.separable[0]


def test_a_part_that_is_not_there_is_found_to_be_small() -> None:
    rows = plates_of_rates(np.random.default_rng(6), 1, 2000, 0.0, 0.03)
    assert components(rows, 1).constant_cv[0] < 0.002
    rows = plates_of_rates(np.random.default_rng(7), 1, 2000, 0.03, 0.0)
    assert components(rows, 1).substrate_cv[0] < 0.01


def test_without_the_ridge_it_is_the_highest_restricted_likelihood() -> None:
    rows = plates_of_rates(np.random.default_rng(8), 1, 3, 0.02, 0.03, error=0.003)
    y, size, order = rows["residual"].reshape(-1, 3), rows["size"], rows["order"]

    def minus_log_likelihood(squares: Floats) -> float:
        """From the contrasts of each triplicate, an orthonormal basis of what is left without its mean."""
        contrasts = np.array([[1, -1, 0], [1, 1, -2]]) / np.sqrt([[2.0], [6.0]])
        variance = rate_variance(0.003, size, order, *np.sqrt(squares)).reshape(-1, 3)
        total = 0.0
        for values, of_rates in zip(y, variance, strict=True):
            covariance = contrasts @ np.diag(of_rates) @ contrasts.T
            z = contrasts @ values
            total += np.log(np.linalg.det(covariance)) + z @ np.linalg.solve(covariance, z)
        return float(total)

    best = minimize(
        minus_log_likelihood,
        [4e-4, 4e-4],
        method="Nelder-Mead",
        bounds=[(0, 1), (0, 1)],
        options={"xatol": 1e-12, "fatol": 1e-12},
    )
    found = components(rows, 1, prior_degrees=0.0)
    assert found.constant_cv[0] == pytest.approx(np.sqrt(best.x[0]), rel=1e-4)
    assert found.substrate_cv[0] == pytest.approx(np.sqrt(best.x[1]), rel=1e-4)


def test_a_plate_alone_gives_the_same_bits_as_in_a_batch() -> None:
    rows = plates_of_rates(np.random.default_rng(9), 6, 2, 0.02, 0.02)
    batch = components(rows, 6)
    for plate in range(6):
        own = {name: values[rows["plate"] == plate] for name, values in rows.items()}
        own["plate"], own["group"] = np.zeros_like(own["plate"]), own["group"] - own["group"].min()
        alone = components(own, 1)
        assert alone.constant_cv[0] == batch.constant_cv[plate]
        assert alone.substrate_cv[0] == batch.substrate_cv[plate]


def test_scale_of_the_rates_does_not_matter() -> None:
    rows = plates_of_rates(np.random.default_rng(10), 1, 2, 0.02, 0.02)
    scaled = {
        name: values * 1e-5 if name in ("residual", "size", "standard_error") else values
        for name, values in rows.items()
    }
    assert components(scaled, 1).substrate_cv[0] == pytest.approx(
        components(rows, 1).substrate_cv[0], rel=1e-9
    )


def test_one_level_cannot_tell_the_parts_apart_but_keeps_their_sum() -> None:
    generator = np.random.default_rng(11)
    group = np.repeat(np.arange(400), 3)
    ones = np.ones(group.size)
    rows = {
        "plate": np.zeros_like(group),
        "group": group,
        "residual": 0.05 * generator.standard_normal(group.size),
        "size": ones,
        "order": 0.7 * ones,
        "standard_error": 1e-4 * ones,
    }
    found = components(rows, 1)
    assert not found.separable[0]
    variance = rate_variance(ones, ones, 0.7 * ones, found.constant_cv, found.substrate_cv) - 1.0
    assert np.sqrt(variance[0]) == pytest.approx(0.05, rel=0.05)


def test_no_replicates_no_scatter_and_drowned_scatter_give_zero() -> None:
    rows = plates_of_rates(np.random.default_rng(12), 1, 1, 0.02, 0.02)
    lonely = components({**rows, "group": np.arange(rows["group"].size)}, 2)
    assert lonely.degrees_of_freedom.tolist() == [0.0, 0.0]
    assert not lonely.separable.any()
    silent = components({**rows, "residual": np.zeros(24), "standard_error": np.zeros(24)}, 1)
    drowned = components({**rows, "standard_error": np.full(24, 1.0)}, 1)
    for found in (lonely, silent, drowned):
        assert (found.constant_cv == 0.0).all()
        assert (found.substrate_cv == 0.0).all()


def test_rates_without_any_standard_error_are_no_trouble() -> None:
    rows = plates_of_rates(np.random.default_rng(13), 1, 200, 0.02, 0.02, error=0.0)
    found = components(rows, 1)
    assert found.constant_cv[0] == pytest.approx(0.02, rel=0.1)
    assert found.substrate_cv[0] == pytest.approx(0.02, rel=0.2)
