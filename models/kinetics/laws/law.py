"""What a rate law is: an equation, its constants with units, derivatives, limits and source.

Every law here is an amplitude times a shape, v = vmax * f(conditions; shape constants), so that the amplitude
can be eliminated while fitting. This module knows no data and no particular law.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Array = NDArray[Any]
"""Real while fitting; complex where a test takes derivatives by complex step."""


@dataclass(frozen=True)
class Conditions:
    """What the rates of a batch of series were measured at.

    Attributes
    ----------
    substrate_um
        Substrate [umol/L], shape (levels, series), positive.
    log_substrate
        Its natural logarithm, same shape: computed once for the laws that need powers.
    modulator_um
        Inhibitor or activator [umol/L], same shape; None where no law of the batch needs it.
    """

    substrate_um: Floats
    log_substrate: Floats
    modulator_um: Floats | None = None

    def select(self, series: Array) -> Conditions:
        """Conditions of some of the series, by index or mask."""
        modulator = None if self.modulator_um is None else self.modulator_um[:, series]
        return Conditions(self.substrate_um[:, series], self.log_substrate[:, series], modulator)


def at_levels(substrate_um: Floats) -> Conditions:
    """Conditions of series that differ in substrate alone, shape (levels, series)."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return Conditions(substrate_um, np.log(substrate_um))


@dataclass(frozen=True)
class Constant:
    """A constant of a law.

    Attributes
    ----------
    name, unit, meaning
        As they appear in tables; the unit is one that pint parses.
    lowest, highest
        Limits of a pure number; for a concentration, limits as multiples of the lowest and the highest
        substrate. An optimum at a limit means that the data do not hold the constant.
    is_concentration
        Whether the limits are multiples of the substrate levels.
    """

    name: str
    unit: str
    meaning: str
    lowest: float
    highest: float
    is_concentration: bool


Evaluate = Callable[[Conditions, tuple[Array, ...]], tuple[Array, tuple[Array, ...]]]
"""Shape f (levels, series) and its derivatives by the natural logarithm of each shape constant."""


@dataclass(frozen=True)
class RateLaw:
    """One rate law.

    Attributes
    ----------
    name, title, equation
        Name in tables and configuration, name in print, and the equation as text.
    amplitude
        The constant that multiplies the shape (vmax).
    shape_constants
        The other constants, all positive, fitted on a logarithmic scale.
    evaluate
        Shape and its logarithmic derivatives, elementwise over (levels, series).
    starts
        From conditions and weights: start values, shape (candidates, constants, series).
    half_saturation
        Name of the constant that turnover is divided by (km, k_half), or None.
    source
        Publication with DOI.
    rank
        Place among candidate laws, 1 the simplest.
    fewest_levels
        Distinct substrate levels below which the law is refused.
    """

    name: str
    title: str
    equation: str
    amplitude: Constant
    shape_constants: tuple[Constant, ...]
    evaluate: Evaluate
    starts: Callable[[Conditions, Floats], Floats]
    half_saturation: str | None
    source: str
    rank: int
    fewest_levels: int

    @property
    def constants(self) -> tuple[Constant, ...]:
        """All constants, the amplitude first."""
        return (self.amplitude, *self.shape_constants)

    @property
    def constant_count(self) -> int:
        """Number of constants, the amplitude included."""
        return 1 + len(self.shape_constants)

    def rate(self, conditions: Conditions, constants: tuple[Array, ...]) -> Array:
        """Rate [umol/L/s], shape (levels, series), for constants in order, the amplitude first."""
        shape, _ = self.evaluate(conditions, constants[1:])
        return constants[0] * shape

    def log_limits(self, conditions: Conditions, weights: Floats) -> tuple[Floats, Floats]:
        """Lower and upper limit of each shape constant's logarithm, shape (constants, series)."""
        low_level, high_level = level_range(conditions, weights)
        lower = np.empty((len(self.shape_constants), low_level.size))
        upper = np.empty_like(lower)
        for row, constant in enumerate(self.shape_constants):
            if constant.is_concentration:
                lower[row] = np.log(low_level) + np.log(constant.lowest)
                upper[row] = np.log(high_level) + np.log(constant.highest)
            else:
                lower[row], upper[row] = np.log(constant.lowest), np.log(constant.highest)
        return lower, upper


def level_range(conditions: Conditions, weights: Floats) -> tuple[Floats, Floats]:
    """Lowest and highest substrate [umol/L] of each series among its weighted points, shape (series,)."""
    used = weights > 0
    lowest = np.min(np.where(used, conditions.substrate_um, np.inf), axis=0)
    highest = np.max(np.where(used, conditions.substrate_um, -np.inf), axis=0)
    return lowest, highest


def geometric_grid(low: Floats, high: Floats, count: int) -> Floats:
    """Values evenly spaced on a logarithmic scale, shape (count, series)."""
    steps = np.linspace(0.0, 1.0, count)[:, None]
    grid: Floats = np.exp(np.log(low) * (1.0 - steps) + np.log(high) * steps)
    return grid


VMAX = Constant("vmax", "umol/L/s", "Limiting rate at saturating substrate", 0.0, np.inf, False)
