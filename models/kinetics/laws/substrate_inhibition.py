"""Substrate inhibition (Haldane): a second substrate molecule binds and blocks turnover."""

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

KM = Constant(
    "km", "umol/L", "Substrate at which the rate would be half of vmax without inhibition", 1e-3, 1e3, True
)
K_SI = Constant("k_si", "umol/L", "Dissociation constant of the substrate that inhibits", 1e-3, 1e3, True)


def evaluate(conditions: Conditions, constants: tuple[Array, ...]) -> tuple[Array, tuple[Array, ...]]:
    """Shape f = S / D, D = Km + S + S^2 / Ksi: df / d ln Km = -f Km / D, df / d ln Ksi = f S^2 / (Ksi D)."""
    substrate, km = conditions.substrate_um, constants[0]
    blocked = substrate * (substrate / constants[1])
    total = km + substrate + blocked
    shape = substrate / total
    return shape, (-shape * (km / total), shape * (blocked / total))


def starts(conditions: Conditions, weights: Floats) -> Floats:
    """Five Km from below the lowest level to the highest, with five Ksi from there to above it."""
    low, high = level_range(conditions, weights)
    return start_grid(geometric_grid(low / 2.0, high, 5), geometric_grid(low, high * 8.0, 5))


SUBSTRATE_INHIBITION = RateLaw(
    name="substrate_inhibition",
    title="Substrate inhibition",
    equation="v = vmax S / (km + S + S^2 / k_si)",
    amplitude=VMAX,
    shape_constants=(KM, K_SI),
    evaluate=evaluate,
    starts=starts,
    half_saturation="km",
    source="Haldane 1930, Enzymes, Longmans; Reed, Lieb and Nijhout 2010, doi:10.1002/bies.200900167",
    rank=3,
    fewest_levels=4,
)
