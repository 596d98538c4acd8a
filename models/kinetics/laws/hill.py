"""The Hill law: a sigmoid for cooperative enzymes."""

from __future__ import annotations

import numpy as np

from models.kinetics.laws.law import (
    VMAX,
    Array,
    Conditions,
    Constant,
    Floats,
    RateLaw,
    geometric_grid,
    level_range,
)

K_HALF = Constant("k_half", "umol/L", "Substrate at which the rate is half of vmax", 1e-3, 1e3, True)
HILL_N = Constant(
    "hill_n", "1", "Hill coefficient: steepness on a logarithmic scale, 1 for a hyperbola", 0.1, 20.0, False
)

_START_N = (0.8, 1.3, 2.0, 3.2)


def evaluate(conditions: Conditions, constants: tuple[Array, ...]) -> tuple[Array, tuple[Array, ...]]:
    """Shape f = S^n / (K^n + S^n) with x = n ln(S / K): df / d ln K = -n f (1 - f), df / d ln n = x f (1 -
    f)."""
    k_half, n = constants
    x = n * (conditions.log_substrate - np.log(k_half))
    shape = 1.0 / (1.0 + np.exp(-x))
    slope = shape - shape * shape
    return shape, (-n * slope, x * slope)


def starts(conditions: Conditions, weights: Floats) -> Floats:
    """Six K0.5 over the levels and a little beyond, each with four Hill coefficients."""
    low, high = level_range(conditions, weights)
    grid = geometric_grid(low, high * 2.0, 6)
    return np.array([[k_half, np.full_like(k_half, n)] for k_half in grid for n in _START_N])


HILL = RateLaw(
    name="hill",
    title="Hill",
    equation="v = vmax S^hill_n / (k_half^hill_n + S^hill_n)",
    amplitude=VMAX,
    shape_constants=(K_HALF, HILL_N),
    evaluate=evaluate,
    starts=starts,
    half_saturation="k_half",
    source="Hill 1910, J. Physiol. 40, iv-vii; review by Weiss 1997, doi:10.1096/fasebj.11.11.9285481",
    rank=2,
    fewest_levels=4,
)
