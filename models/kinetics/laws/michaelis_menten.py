"""The Michaelis-Menten law: a rectangular hyperbola."""

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

KM = Constant("km", "umol/L", "Substrate at which the rate is half of vmax", 1e-3, 1e3, True)


def evaluate(conditions: Conditions, constants: tuple[Array, ...]) -> tuple[Array, tuple[Array, ...]]:
    """Shape f = S / (Km + S) and df / d ln Km = -f (1 - f)."""
    shape = conditions.substrate_um / (constants[0] + conditions.substrate_um)
    return shape, (shape * shape - shape,)


def starts(conditions: Conditions, weights: Floats) -> Floats:
    """Eight Km from a quarter of the lowest level to four times the highest."""
    low, high = level_range(conditions, weights)
    return geometric_grid(low / 4.0, high * 4.0, 8)[:, None, :]


MICHAELIS_MENTEN = RateLaw(
    name="michaelis_menten",
    title="Michaelis-Menten",
    equation="v = vmax S / (km + S)",
    amplitude=VMAX,
    shape_constants=(KM,),
    evaluate=evaluate,
    starts=starts,
    half_saturation="km",
    source="Michaelis and Menten 1913, Biochem. Z. 49, 333; Johnson and Goody 2011, doi:10.1021/bi201284u",
    rank=1,
    fewest_levels=3,
)


def straight_line_shape(conditions: Conditions) -> Floats:
    """Limit of the law for Km to infinity with vmax / Km kept: a straight line through zero."""
    return conditions.substrate_um


def constant_shape(conditions: Conditions) -> Floats:
    """Limit of the law for Km to zero: a constant."""
    return np.ones_like(conditions.substrate_um)
