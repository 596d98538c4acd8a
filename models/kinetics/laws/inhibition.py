"""Reversible inhibition over a grid of substrate and inhibitor: competitive, uncompetitive, pure
noncompetitive and mixed.

All four are S / (Km (1 + I / Kic) + S (1 + I / Kiu)) with one of the two terms left out or both constants
equal.
"""

from __future__ import annotations

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

KM = Constant("km", "umol/L", "Michaelis constant without inhibitor", 1e-3, 1e3, True)
K_IC = Constant(
    "k_ic", "umol/L", "Dissociation constant of the inhibitor from free enzyme", 1e-3, 1e3, True, "modulator"
)
K_IU = Constant(
    "k_iu",
    "umol/L",
    "Dissociation constant of the inhibitor from the enzyme-substrate complex",
    1e-3,
    1e3,
    True,
    "modulator",
)
K_I = Constant(
    "k_i",
    "umol/L",
    "Dissociation constant of the inhibitor, the same with and without substrate bound",
    1e-3,
    1e3,
    True,
    "modulator",
)

_SOURCE = "Cleland 1963, doi:10.1016/0926-6569(63)90226-8; Cornish-Bowden 1974, doi:10.1042/bj1370143"


def competitive(conditions: Conditions, constants: tuple[Array, ...]) -> tuple[Array, tuple[Array, ...]]:
    """Shape S / (Km + Km I / Kic + S); the slopes are shares of enzyme times the shape."""
    substrate, km = conditions.substrate_um, constants[0]
    taken = km * (conditions.modulator / constants[1])
    total = km + taken + substrate
    shape, bound = substrate / total, taken / total
    return shape, (-shape * (km / total + bound), shape * bound)


def uncompetitive(conditions: Conditions, constants: tuple[Array, ...]) -> tuple[Array, tuple[Array, ...]]:
    """Shape S / (Km + S + S I / Kiu)."""
    substrate, km = conditions.substrate_um, constants[0]
    taken = substrate * (conditions.modulator / constants[1])
    total = km + substrate + taken
    shape = substrate / total
    return shape, (-shape * (km / total), shape * (taken / total))


def noncompetitive(conditions: Conditions, constants: tuple[Array, ...]) -> tuple[Array, tuple[Array, ...]]:
    """Shape S / (Km + S) Ki / (Ki + I)."""
    saturation = conditions.substrate_um / (constants[0] + conditions.substrate_um)
    free = constants[1] / (constants[1] + conditions.modulator)
    shape = saturation * free
    return shape, (-shape * (1.0 - saturation), shape * (1.0 - free))


def mixed(conditions: Conditions, constants: tuple[Array, ...]) -> tuple[Array, tuple[Array, ...]]:
    """Shape S / (Km + Km I / Kic + S + S I / Kiu)."""
    substrate, km = conditions.substrate_um, constants[0]
    from_free = km * (conditions.modulator / constants[1])
    from_complex = substrate * (conditions.modulator / constants[2])
    total = km + from_free + substrate + from_complex
    shape, bound = substrate / total, from_free / total
    return shape, (-shape * (km / total + bound), shape * bound, shape * (from_complex / total))


def starts_with_one(conditions: Conditions, weights: Floats) -> Floats:
    """Five Km over the substrate levels, each with five Ki over the inhibitor levels."""
    low, high = level_range(conditions, weights)
    low_i, high_i = level_range(conditions, weights, "modulator")
    return start_grid(geometric_grid(low / 2.0, high * 2.0, 5), geometric_grid(low_i / 2.0, high_i * 4.0, 5))


def starts_with_two(conditions: Conditions, weights: Floats) -> Floats:
    """Five Km over the substrate levels, each with four Kic and four Kiu over the inhibitor levels."""
    low, high = level_range(conditions, weights)
    low_i, high_i = level_range(conditions, weights, "modulator")
    over_inhibitor = geometric_grid(low_i / 2.0, high_i * 8.0, 4)
    return start_grid(geometric_grid(low / 2.0, high * 2.0, 5), over_inhibitor, over_inhibitor)


COMPETITIVE = RateLaw(
    name="competitive_inhibition",
    title="Competitive inhibition",
    equation="v = vmax S / (km (1 + I / k_ic) + S)",
    amplitude=VMAX,
    shape_constants=(KM, K_IC),
    evaluate=competitive,
    starts=starts_with_one,
    half_saturation="km",
    source=_SOURCE,
    rank=10,
    fewest_levels=3,
    fewest_modulator_levels=2,
)
UNCOMPETITIVE = RateLaw(
    name="uncompetitive_inhibition",
    title="Uncompetitive inhibition",
    equation="v = vmax S / (km + S (1 + I / k_iu))",
    amplitude=VMAX,
    shape_constants=(KM, K_IU),
    evaluate=uncompetitive,
    starts=starts_with_one,
    half_saturation="km",
    source=_SOURCE,
    rank=11,
    fewest_levels=3,
    fewest_modulator_levels=2,
)
NONCOMPETITIVE = RateLaw(
    name="noncompetitive_inhibition",
    title="Pure noncompetitive inhibition",
    equation="v = vmax S / ((km + S) (1 + I / k_i))",
    amplitude=VMAX,
    shape_constants=(KM, K_I),
    evaluate=noncompetitive,
    starts=starts_with_one,
    half_saturation="km",
    source=_SOURCE,
    rank=12,
    fewest_levels=3,
    fewest_modulator_levels=2,
)
MIXED = RateLaw(
    name="mixed_inhibition",
    title="Mixed inhibition",
    equation="v = vmax S / (km (1 + I / k_ic) + S (1 + I / k_iu))",
    amplitude=VMAX,
    shape_constants=(KM, K_IC, K_IU),
    evaluate=mixed,
    starts=starts_with_two,
    half_saturation="km",
    source=_SOURCE,
    rank=13,
    fewest_levels=3,
    fewest_modulator_levels=2,
)
