"""What a rate law is: an equation, its constants with units, derivatives, limits and source.

A law is an amplitude times a shape, v = vmax * f(conditions; shape constants), so that the amplitude can be
eliminated while fitting; a law of one's own may do without. This module knows no data and no particular law.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Axis = Literal["substrate", "modulator"]
Array = NDArray[Any]
"""Real while fitting; complex where a test takes derivatives by complex step."""


_LOG_OF_NOTHING = -700.0
"""Stands for minus infinity where there is no substrate, so that it times 0 is 0."""


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
        Inhibitor or activator [umol/L], same shape, 0 where there is none; None where no law of the batch
        needs it.
    enzyme_um
        Enzyme's active sites [umol/L], same shape; None where no law of the batch needs it.
    further
        Other variables, each of the same shape, for laws of one's own.
    """

    substrate_um: Array
    log_substrate: Array
    modulator_um: Floats | None = None
    enzyme_um: Floats | None = None
    further: tuple[Floats, ...] = ()

    def select(self, series: Array | slice) -> Conditions:
        """Conditions of some of the series, by index, slice or mask."""
        modulator = None if self.modulator_um is None else self.modulator_um[:, series]
        enzyme = None if self.enzyme_um is None else self.enzyme_um[:, series]
        further = tuple(each[:, series] for each in self.further)
        return Conditions(
            self.substrate_um[:, series], self.log_substrate[:, series], modulator, enzyme, further
        )

    def points(self, used: Array) -> Conditions:
        """Conditions at some of the levels, by mask or index."""
        modulator = None if self.modulator_um is None else self.modulator_um[used]
        enzyme = None if self.enzyme_um is None else self.enzyme_um[used]
        further = tuple(each[used] for each in self.further)
        return Conditions(self.substrate_um[used], self.log_substrate[used], modulator, enzyme, further)

    @property
    def modulator(self) -> Floats:
        """Modulator [umol/L], for laws that need one.

        Raises
        ------
        ValueError
            If there is none: such a law must not be fitted to series without a modulator.
        """
        if self.modulator_um is None:
            raise ValueError("this rate law needs modulator concentrations")
        return self.modulator_um

    @property
    def enzyme(self) -> Floats:
        """Enzyme [umol/L], for laws that need it.

        Raises
        ------
        ValueError
            If it is not given.
        """
        if self.enzyme_um is None:
            raise ValueError("this rate law needs the enzyme's concentration")
        return self.enzyme_um

    def along(self, axis: Axis) -> Array:
        """Substrate or modulator [umol/L]."""
        return self.substrate_um if axis == "substrate" else self.modulator


def at_levels(
    substrate_um: Array, modulator_um: Floats | None = None, enzyme_um: Floats | None = None
) -> Conditions:
    """Conditions of series, each array of shape (levels, series)."""
    with np.errstate(divide="ignore", invalid="ignore"):
        log_substrate = np.where(substrate_um == 0, _LOG_OF_NOTHING, np.log(substrate_um))
    return Conditions(substrate_um, log_substrate, modulator_um, enzyme_um)


@dataclass(frozen=True)
class Constant:
    """A constant of a law.

    Attributes
    ----------
    name, unit, meaning
        As they appear in tables; the unit is one that pint parses.
    lowest, highest
        Limits of a pure number; for a concentration, limits as multiples of the lowest and the highest level
        above zero. An optimum at a limit means that the data do not hold the constant.
    is_concentration
        Whether the limits are multiples of the levels.
    axis
        Whose levels those are.
    positive
        Whether the constant is above zero and fitted on a logarithmic scale.
    """

    name: str
    unit: str
    meaning: str
    lowest: float
    highest: float
    is_concentration: bool
    axis: Axis = "substrate"
    positive: bool = True


Evaluate = Callable[[Conditions, tuple[Array, ...]], tuple[Array, tuple[Array, ...]]]
"""Shape f (levels, series) and its derivatives by the coordinate of each shape constant: its natural
logarithm, or itself where it need not be positive."""


@dataclass(frozen=True)
class RateLaw:
    """One rate law.

    Attributes
    ----------
    name, title, equation
        Name in tables and configuration, name in print, and the equation as text.
    amplitude
        The constant that multiplies the shape (vmax), or None where the law is all shape.
    shape_constants
        The other constants.
    evaluate
        Shape and its derivatives by the constants' coordinates, elementwise over (levels, series).
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
    fewest_modulator_levels
        Distinct modulator levels (zero is one) below which the law is refused; 0 for a law without modulator.
    needs_enzyme
        Whether the enzyme's concentration is part of the equation.
    """

    name: str
    title: str
    equation: str
    amplitude: Constant | None
    shape_constants: tuple[Constant, ...]
    evaluate: Evaluate
    starts: Callable[[Conditions, Floats], Floats]
    half_saturation: str | None
    source: str
    rank: int
    fewest_levels: int
    fewest_modulator_levels: int = 0
    needs_enzyme: bool = False

    @property
    def constants(self) -> tuple[Constant, ...]:
        """All constants, the amplitude first."""
        return self.shape_constants if self.amplitude is None else (self.amplitude, *self.shape_constants)

    @property
    def constant_count(self) -> int:
        """Number of constants, the amplitude included."""
        return len(self.constants)

    @property
    def first_shape(self) -> int:
        """Place of the first shape constant among all constants."""
        return 0 if self.amplitude is None else 1

    def values(self, coordinates: Array) -> tuple[Array, ...]:
        """Shape constants from their coordinates, shape (constants, series)."""
        return tuple(
            np.exp(row) if constant.positive else row
            for constant, row in zip(self.shape_constants, coordinates, strict=True)
        )

    def coordinates(self, values: Array) -> Floats:
        """Coordinates of shape constants: logarithms, or the constants themselves; shape as given."""
        rows = [
            np.log(row) if constant.positive else row
            for constant, row in zip(self.shape_constants, values, strict=True)
        ]
        return np.array(rows, dtype=np.float64)

    def rate(self, conditions: Conditions, constants: tuple[Array, ...]) -> Array:
        """Rate [umol/L/s], shape (levels, series), for constants in order, the amplitude first."""
        shape, _ = self.evaluate(conditions, constants[self.first_shape :])
        return shape if self.amplitude is None else constants[0] * shape

    def gradient(self, conditions: Conditions, constants: tuple[Array, ...]) -> tuple[Array, ...]:
        """Derivatives of the rate by each constant itself, in order, each (levels, series)."""
        shape, slopes = self.evaluate(conditions, constants[self.first_shape :])
        amplitude = 1.0 if self.amplitude is None else constants[0]
        by_shape = tuple(
            amplitude * slope / value if constant.positive else amplitude * slope
            for constant, value, slope in zip(
                self.shape_constants, constants[self.first_shape :], slopes, strict=True
            )
        )
        return by_shape if self.amplitude is None else (shape, *by_shape)

    def limits(self, conditions: Conditions, weights: Floats) -> tuple[Floats, Floats]:
        """Lower and upper limit of each shape constant's coordinate, shape (constants, series)."""
        lower = np.empty((len(self.shape_constants), weights.shape[1]))
        upper = np.empty_like(lower)
        for row, constant in enumerate(self.shape_constants):
            if not constant.positive:
                lower[row], upper[row] = constant.lowest, constant.highest
                continue
            lower[row], upper[row] = np.log(constant.lowest), np.log(constant.highest)
            if constant.is_concentration:
                low_level, high_level = level_range(conditions, weights, constant.axis)
                lower[row] += np.log(low_level)
                upper[row] += np.log(high_level)
        return lower, upper


def level_range(conditions: Conditions, weights: Floats, axis: Axis = "substrate") -> tuple[Floats, Floats]:
    """Lowest and highest level above zero [umol/L] of each series' weighted points, shape (series,)."""
    levels = conditions.along(axis)
    used = (weights > 0) & (levels > 0)
    lowest = np.min(np.where(used, levels, np.inf), axis=0)
    highest = np.max(np.where(used, levels, -np.inf), axis=0)
    return lowest, highest


def start_grid(*grids: Floats) -> Floats:
    """Every combination of the start values of several constants.

    Parameters
    ----------
    grids
        Start values of each constant, shape (candidates, series).

    Returns
    -------
    array
        Shape (combinations, constants, series).
    """
    places = np.indices([len(grid) for grid in grids]).reshape(len(grids), -1)
    return np.stack([grid[place] for grid, place in zip(grids, places, strict=True)], axis=1)


def geometric_grid(low: Floats, high: Floats, count: int) -> Floats:
    """Values evenly spaced on a logarithmic scale, shape (count, series)."""
    steps = np.linspace(0.0, 1.0, count)[:, None]
    grid: Floats = np.exp(np.log(low) * (1.0 - steps) + np.log(high) * steps)
    return grid


VMAX = Constant("vmax", "umol/L/s", "Limiting rate at saturating substrate", 0.0, np.inf, False)
