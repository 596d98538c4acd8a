"""Tight binding (Morrison): the inhibitor that the enzyme binds is no longer free."""

from __future__ import annotations

import numpy as np

from models.kinetics.laws.dose_response import V_UNINHIBITED
from models.kinetics.laws.law import Array, Conditions, Constant, Floats, RateLaw, geometric_grid, level_range

KI_APP = Constant(
    "ki_app",
    "umol/L",
    "Apparent dissociation constant of the inhibitor at the substrate level of the assay",
    1e-6,
    1e3,
    True,
    "modulator",
)


def evaluate(conditions: Conditions, constants: tuple[Array, ...]) -> tuple[Array, tuple[Array, ...]]:
    """Shape f = F / E, F free enzyme: F^2 + F (I + K - E) - K E = 0, the root that does not cancel."""
    k = constants[0]
    enzyme, excess = conditions.enzyme, conditions.modulator + k - conditions.enzyme
    root = np.sqrt(excess * excess + 4.0 * k * enzyme)
    crowded = np.real(excess) > 0
    sum_of_both = root + np.where(crowded, excess, -excess)
    free = np.where(crowded, 2.0 * k * enzyme / sum_of_both, 0.5 * sum_of_both)
    return free / enzyme, (k * (enzyme - free) / (enzyme * root),)


def starts(conditions: Conditions, weights: Floats) -> Floats:
    """Eight constants from a thousandth of the lowest inhibitor level to the highest."""
    low, high = level_range(conditions, weights, "modulator")
    return geometric_grid(low / 1000.0, high * 2.0, 8)[:, None, :]


TIGHT_BINDING = RateLaw(
    name="tight_binding",
    title="Tight binding",
    equation="v = v_uninhibited (1 - (E + I + ki_app - sqrt((E + I + ki_app)^2 - 4 E I)) / (2 E))",
    amplitude=V_UNINHIBITED,
    shape_constants=(KI_APP,),
    evaluate=evaluate,
    starts=starts,
    half_saturation=None,
    source="Morrison 1969, doi:10.1016/0005-2744(69)90420-3",
    rank=30,
    fewest_levels=1,
    fewest_modulator_levels=4,
    needs_enzyme=True,
)
