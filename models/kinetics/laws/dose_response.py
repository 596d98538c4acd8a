"""Four-parameter dose response: the rate against inhibitor at one substrate level, with IC50."""

from __future__ import annotations

import numpy as np

from models.kinetics.laws.law import (
    Array,
    Conditions,
    Constant,
    Floats,
    RateLaw,
    geometric_grid,
    level_range,
    start_grid,
)

V_UNINHIBITED = Constant("v_uninhibited", "umol/L/s", "Rate without inhibitor", 0.0, np.inf, False)
IC50 = Constant(
    "ic50", "umol/L", "Inhibitor that takes away half of what can be inhibited", 1e-3, 1e3, True, "modulator"
)
SLOPE = Constant("dose_slope", "1", "Steepness on a logarithmic scale of inhibitor", 0.1, 20.0, False)
RESIDUAL = Constant(
    "residual_share",
    "1",
    "Share of the rate that no amount of inhibitor takes away",
    -1.0,
    0.99,
    False,
    "modulator",
    positive=False,
)
_NONE = -700.0
"""Stands for minus infinity where there is no inhibitor: its exponential vanishes, and it times 0 is 0."""


def evaluate(conditions: Conditions, constants: tuple[Array, ...]) -> tuple[Array, tuple[Array, ...]]:
    """Shape f = b + (1 - b) / (1 + (I / IC50)^h)."""
    ic50, slope, residual = constants
    inhibitor = conditions.modulator
    some = inhibitor > 0
    x = np.where(some, slope * (np.log(np.where(some, inhibitor, 1.0)) - np.log(ic50)), _NONE)
    active, inhibited = 1.0 / (1.0 + np.exp(x)), 1.0 / (1.0 + np.exp(-x))
    part = 1.0 - residual
    change = part * (active * inhibited)
    return residual + part * active, (slope * change, -x * change, inhibited)


def starts(conditions: Conditions, weights: Floats) -> Floats:
    """Six IC50 over the levels, each with slopes of 0.7, 1 and 2 and no or a fifth of residual rate."""
    low, high = level_range(conditions, weights, "modulator")
    one = np.ones((1, low.size))
    slopes, shares = np.array([[0.7], [1.0], [2.0]]) * one, np.array([[0.0], [0.2]]) * one
    return start_grid(geometric_grid(low, high, 6), slopes, shares)


DOSE_RESPONSE = RateLaw(
    name="dose_response",
    title="Four-parameter dose response",
    equation="v = v_uninhibited (residual_share + (1 - residual_share) / (1 + (I / ic50)^dose_slope))",
    amplitude=V_UNINHIBITED,
    shape_constants=(IC50, SLOPE, RESIDUAL),
    evaluate=evaluate,
    starts=starts,
    half_saturation=None,
    source="Finney 1952, Statistical Method in Biological Assay; DeLean, Munson and Rodbard 1978, "
    "doi:10.1152/ajpendo.1978.235.2.E97",
    rank=31,
    fewest_levels=1,
    fewest_modulator_levels=5,
)
