"""Shapes of standard curves: signal as a function of product, its derivatives and its inverse.

A shape knows its equation only: no data, no weights, no limits.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import expit

from models.errors import UnknownName

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class CurveShape:
    """One shape of standard curve.

    Attributes
    ----------
    name, title, equation
        Name in configuration, name in print, and the equation as text.
    parameters
        Names of the parameters, in order.
    fewest_levels
        Fewest distinct standards that leave something to judge the curve by.
    signal
        (product, parameters) -> signal, shape of product.
    gradient
        (product, parameters) -> derivative of the signal by each parameter, shape (parameters, *product).
    slope
        (product, parameters) -> derivative of the signal by product.
    inverse
        (signal, parameters, sign) -> product on the branch whose slope has this sign; NaN where none is.
    """

    name: str
    title: str
    equation: str
    parameters: tuple[str, ...]
    fewest_levels: int
    signal: Callable[[Floats, Floats], Floats]
    gradient: Callable[[Floats, Floats], Floats]
    slope: Callable[[Floats, Floats], Floats]
    inverse: Callable[[Floats, Floats, float], Floats]


def _line(product: Floats, parameters: Floats) -> Floats:
    intercept, slope = parameters
    signal: Floats = intercept + slope * product
    return signal


def _line_gradient(product: Floats, parameters: Floats) -> Floats:
    return np.stack([np.ones_like(product), product])


def _line_slope(product: Floats, parameters: Floats) -> Floats:
    return np.full_like(product, parameters[1])


def _line_inverse(signal: Floats, parameters: Floats, sign: float) -> Floats:
    product: Floats = (signal - parameters[0]) / parameters[1]
    return product


def _parabola(product: Floats, parameters: Floats) -> Floats:
    intercept, slope, bend = parameters
    signal: Floats = intercept + product * (slope + bend * product)
    return signal


def _parabola_gradient(product: Floats, parameters: Floats) -> Floats:
    return np.stack([np.ones_like(product), product, product * product])


def _parabola_slope(product: Floats, parameters: Floats) -> Floats:
    slope: Floats = parameters[1] + 2.0 * parameters[2] * product
    return slope


def _parabola_inverse(signal: Floats, parameters: Floats, sign: float) -> Floats:
    intercept, slope, bend = parameters
    with np.errstate(all="ignore"):
        # The slope at the root, by the discriminant; of the root's two forms, the one that does not cancel.
        at_root = sign * np.sqrt(slope * slope + 4.0 * bend * (signal - intercept))
        if slope * sign > 0 or bend == 0:
            product: Floats = 2.0 * (signal - intercept) / (slope + at_root)
        else:
            product = (at_root - slope) / (2.0 * bend)
    return product


def _share(product: Floats, parameters: Floats) -> tuple[Floats, Floats]:
    """Share of the way from bottom to top, and the logarithm of product over half."""
    with np.errstate(divide="ignore", invalid="ignore"):
        log_ratio = np.log(product / parameters[2])
    share: Floats = expit(parameters[3] * log_ratio)
    return share, log_ratio


def _logistic(product: Floats, parameters: Floats) -> Floats:
    share, _ = _share(product, parameters)
    signal: Floats = parameters[0] + (parameters[1] - parameters[0]) * share
    return signal


def _logistic_gradient(product: Floats, parameters: Floats) -> Floats:
    bottom, top, half, hill = parameters
    share, log_ratio = _share(product, parameters)
    rise = (top - bottom) * share * (1.0 - share)
    with np.errstate(invalid="ignore"):
        by_hill = np.where(product == 0, 0.0, rise * log_ratio)
    return np.stack([1.0 - share, share, -rise * hill / half, by_hill])


def _logistic_slope(product: Floats, parameters: Floats) -> Floats:
    bottom, top, half, hill = parameters
    share, _ = _share(product, parameters)
    with np.errstate(divide="ignore", invalid="ignore"):
        slope = (top - bottom) * hill * share * (1.0 - share) / product
        # (product / half)^hill over product, as product goes to 0.
        at_zero = (top - bottom) * hill / half * np.float64(0.0) ** (hill - 1.0)
    here: Floats = np.where(product == 0, at_zero, slope)
    return here


def _logistic_inverse(signal: Floats, parameters: Floats, sign: float) -> Floats:
    bottom, top, half, hill = parameters
    with np.errstate(all="ignore"):
        ratio = (signal - bottom) / (top - signal)
        root = half * np.where(ratio >= 0, ratio, np.nan) ** (1.0 / hill)
    product: Floats = np.where(np.isfinite(root), root, np.nan)
    return product


LINEAR = CurveShape(
    name="linear",
    title="Straight line",
    equation="y = intercept + slope P",
    parameters=("intercept", "slope"),
    fewest_levels=3,
    signal=_line,
    gradient=_line_gradient,
    slope=_line_slope,
    inverse=_line_inverse,
)
QUADRATIC = CurveShape(
    name="quadratic",
    title="Parabola",
    equation="y = intercept + slope P + bend P^2",
    parameters=("intercept", "slope", "bend"),
    fewest_levels=4,
    signal=_parabola,
    gradient=_parabola_gradient,
    slope=_parabola_slope,
    inverse=_parabola_inverse,
)
FOUR_PARAMETER = CurveShape(
    name="four_parameter",
    title="Four-parameter logistic",
    equation="y = bottom + (top - bottom) P^hill / (P^hill + half^hill)",
    parameters=("bottom", "top", "half_um", "hill"),
    fewest_levels=5,
    signal=_logistic,
    gradient=_logistic_gradient,
    slope=_logistic_slope,
    inverse=_logistic_inverse,
)
CURVES = {shape.name: shape for shape in (LINEAR, QUADRATIC, FOUR_PARAMETER)}


def curve_shape(name: str) -> CurveShape:
    """The shape of this name.

    Raises
    ------
    UnknownName
        If there is none.
    """
    if name not in CURVES:
        raise UnknownName(f"no standard curve is called '{name}'", remedy=f"use {', '.join(CURVES)}")
    return CURVES[name]
