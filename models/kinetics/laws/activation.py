"""Activation over a grid of substrate and activator: essential, and partial where there is turnover without.

The activator binds with and without substrate alike; what differs is the turnover.
"""

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
    start_grid,
)

KM = Constant("km", "umol/L", "Michaelis constant, the same with and without activator", 1e-3, 1e3, True)
K_A = Constant("k_a", "umol/L", "Dissociation constant of the activator", 1e-3, 1e3, True, "modulator")
BETA = Constant(
    "activation_fold", "1", "Turnover with the activator bound over turnover without", 1e-3, 1e4, False
)
V_BASAL = Constant("vmax", "umol/L/s", "Limiting rate without activator", 0.0, np.inf, False)

_SOURCE = "Segel 1975, Enzyme Kinetics, Wiley, chapter 5; Cleland 1963, doi:10.1016/0926-6569(63)90226-8"


def essential(conditions: Conditions, constants: tuple[Array, ...]) -> tuple[Array, tuple[Array, ...]]:
    """Shape f = S / (Km + S) A / (Ka + A)."""
    saturation = conditions.substrate_um / (constants[0] + conditions.substrate_um)
    bound = conditions.modulator / (constants[1] + conditions.modulator)
    shape = saturation * bound
    return shape, (-shape * (1.0 - saturation), -shape * (1.0 - bound))


def partial(conditions: Conditions, constants: tuple[Array, ...]) -> tuple[Array, tuple[Array, ...]]:
    """Shape f = S / (Km + S) (Ka + beta A) / (Ka + A)."""
    km, k_a, beta = constants
    saturation = conditions.substrate_um / (km + conditions.substrate_um)
    bound = conditions.modulator / (k_a + conditions.modulator)
    gain = (1.0 - bound) + beta * bound
    shape = saturation * gain
    by_ka = saturation * ((1.0 - beta) * bound * (1.0 - bound))
    return shape, (-shape * (1.0 - saturation), by_ka, saturation * (beta * bound))


def _grids(conditions: Conditions, weights: Floats) -> tuple[Floats, Floats]:
    low, high = level_range(conditions, weights)
    low_a, high_a = level_range(conditions, weights, "modulator")
    return geometric_grid(low / 2.0, high * 2.0, 5), geometric_grid(low_a / 2.0, high_a * 4.0, 5)


def essential_starts(conditions: Conditions, weights: Floats) -> Floats:
    """Five Km over the substrate levels, each with five Ka over the activator levels."""
    return start_grid(*_grids(conditions, weights))


def partial_starts(conditions: Conditions, weights: Floats) -> Floats:
    """The same, each with a gain of 0.2, 2, 8 and 60."""
    km, k_a = _grids(conditions, weights)
    gain = np.repeat(np.array([[0.2], [2.0], [8.0], [60.0]]), km.shape[1], axis=1)
    return start_grid(km, k_a, gain)


ESSENTIAL_ACTIVATION = RateLaw(
    name="essential_activation",
    title="Essential activation",
    equation="v = vmax S A / ((km + S) (k_a + A))",
    amplitude=VMAX,
    shape_constants=(KM, K_A),
    evaluate=essential,
    starts=essential_starts,
    half_saturation="km",
    source=_SOURCE,
    rank=20,
    fewest_levels=3,
    fewest_modulator_levels=3,
)
PARTIAL_ACTIVATION = RateLaw(
    name="partial_activation",
    title="Partial activation",
    equation="v = vmax S (k_a + activation_fold A) / ((km + S) (k_a + A))",
    amplitude=V_BASAL,
    shape_constants=(KM, K_A, BETA),
    evaluate=partial,
    starts=partial_starts,
    half_saturation="km",
    source=_SOURCE,
    rank=21,
    fewest_levels=3,
    fewest_modulator_levels=3,
)
