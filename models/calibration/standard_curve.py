"""Standard curves fitted to standards and judged: a `Calibration`, or a refusal with its reason.

This module knows no plate and no file.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray
from scipy.stats import f as f_distribution

from models.calibration.calibration import Calibration
from models.calibration.choices import EXTRAPOLATION, WEIGHTINGS, Direction, Weighting
from models.calibration.curve_fits import CurveFit, fit_curve
from models.calibration.curves import FOUR_PARAMETER, CurveShape, curve_shape
from models.calibration.variances import (
    CONSTANT,
    VarianceModel,
    proportional_variance,
    variance_from_replicates,
)
from models.errors import UnknownName
from models.statistics.lack_of_fit import lack_of_fit

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]

_FLAT_P = 0.01
_FLAT_SHARE = 1e-9
_WEIGHT_ROUNDS = 30
_VARIANCE_ROUNDS = 3
"""What replicates show hardly depends on the curve: it is asked anew in the first rounds only."""


class CalibrationRefusalKind(StrEnum):
    """What is wrong with a set of standards."""

    UNKNOWN_VALUE = "unknown_value"
    TOO_FEW_LEVELS = "too_few_levels"
    NO_REPLICATES = "no_replicates"
    FLAT = "flat"
    WRONG_DIRECTION = "wrong_direction"
    NOT_MONOTONIC = "not_monotonic"
    NOT_DETERMINED = "not_determined"


@dataclass(frozen=True)
class CalibrationRefusal:
    """Why no curve can be used."""

    kind: CalibrationRefusalKind
    reason: str


def calibrate(
    product_um: Floats,
    signal: Floats,
    model: str = "linear",
    weighting: Weighting = "constant",
    direction: Direction | None = None,
    extrapolation: float = EXTRAPOLATION,
) -> Calibration | CalibrationRefusal:
    """Fit a standard curve.

    Parameters
    ----------
    product_um, signal
        Known product [umol/L] and signal of each standard, shape (standards,). The order does not matter.
    model
        Name of a shape: linear, quadratic or four_parameter.
    weighting
        How the scatter of a signal grows with it: constant, proportional to it, or as replicates show.
    direction
        Whether the signal must rise or fall with product; None for either.
    extrapolation
        Share of the standards' range by which a product may lie beyond it.

    Returns
    -------
    Calibration or CalibrationRefusal

    Raises
    ------
    UnknownName
        If the model or the weighting is not one of these.
    """
    shape = curve_shape(model)
    if weighting not in WEIGHTINGS:
        raise UnknownName(f"no weighting is called '{weighting}'", remedy=f"use {', '.join(WEIGHTINGS)}")
    refusal = _refuse_standards(shape, product_um, signal)
    if refusal is not None:
        return refusal
    order = np.lexsort((signal, product_um))
    product_um, signal = product_um[order].astype(np.float64), signal[order].astype(np.float64)
    levels, group = np.unique(product_um, return_inverse=True)
    fitted = _fit_weighted(shape, weighting, group, product_um, signal)
    if isinstance(fitted, CalibrationRefusal):
        return fitted
    fit, variances, weights = fitted
    residual = signal - shape.signal(product_um, fit.parameters)
    constants = len(shape.parameters)
    refusal = (
        _refuse_flat(signal, weights, fit.residual_sum, constants)
        or _refuse_turning(shape, fit.parameters, levels)
        or _refuse_direction(shape, fit.parameters, levels, direction)
    )
    if refusal is not None:
        return refusal
    degrees = product_um.size - constants
    scale = fit.residual_sum / degrees
    lowest, highest = _range(shape, fit.parameters, levels, extrapolation)
    every = np.zeros(product_um.size, dtype=np.intp)
    return Calibration(
        shape=shape,
        weighting=weighting,
        variance_model=variances,
        parameters=fit.parameters,
        covariance=fit.unscaled_covariance * scale,
        residual_sd=float(np.sqrt(scale)),
        degrees_of_freedom=degrees,
        standard_um=product_um,
        standard_signal=signal,
        lowest_um=lowest,
        highest_um=highest,
        misfit=lack_of_fit(every, group, residual, weights, np.array([float(constants)])),
    )


def _fit_weighted(
    shape: CurveShape, weighting: Weighting, group: Integers, product_um: Floats, signal: Floats
) -> tuple[CurveFit, VarianceModel, Floats] | CalibrationRefusal:
    """Fit with weights from the fitted, not the measured, signals, until both agree."""
    variances: VarianceModel | None = CONSTANT
    weights = np.ones(signal.size)
    fit = fit_curve(shape, product_um, signal, weights)
    for number in range(0 if weighting == "constant" else _WEIGHT_ROUNDS):
        if not fit.determined:
            break
        fitted = shape.signal(product_um, fit.parameters)
        if weighting == "proportional":
            variances = proportional_variance(fitted)
        elif number < _VARIANCE_ROUNDS:
            variances = variance_from_replicates(group, signal, fitted)
        if variances is None:
            return CalibrationRefusal(
                CalibrationRefusalKind.NO_REPLICATES,
                "no standard has replicates that differ: their scatter gives no weights",
            )
        weights = 1.0 / variances.variance(fitted)
        # Weights differ much from none, little from round to round: only the second fit searches afresh.
        fit = fit_curve(shape, product_um, signal, weights, fit.parameters if number else None)
        moved = shape.signal(product_um, fit.parameters) - fitted
        if fit.determined and np.max(np.abs(moved)) <= 1e-12 * np.max(np.abs(fitted)):
            break
    if not fit.determined:
        return CalibrationRefusal(
            CalibrationRefusalKind.NOT_DETERMINED,
            f"the standards do not determine the {shape.title.lower()}: spread them wider or simplify it",
        )
    assert variances is not None
    return fit, variances, weights


def _refuse_standards(shape: CurveShape, product_um: Floats, signal: Floats) -> CalibrationRefusal | None:
    if not (np.all(np.isfinite(product_um)) and np.all(np.isfinite(signal)) and np.all(product_um >= 0)):
        return CalibrationRefusal(
            CalibrationRefusalKind.UNKNOWN_VALUE,
            "a standard has no known signal, or product that is not 0 or more",
        )
    levels = np.unique(product_um).size
    if levels < shape.fewest_levels:
        return CalibrationRefusal(
            CalibrationRefusalKind.TOO_FEW_LEVELS,
            f"{levels} distinct standard{'' if levels == 1 else 's'}; "
            f"{shape.title} needs {shape.fewest_levels}",
        )
    return None


def _refuse_flat(
    signal: Floats, weights: Floats, residual_sum: float, constants: int
) -> CalibrationRefusal | None:
    """By an F test of the curve against one mean signal."""
    mean = np.sum(weights * signal) / np.sum(weights)
    of_mean = float(np.sum(weights * (signal - mean) ** 2))
    degrees = signal.size - constants
    explained = (of_mean - residual_sum) / (constants - 1)
    critical = float(f_distribution.isf(_FLAT_P, constants - 1, degrees))
    size = float(np.sum(weights * signal**2))
    if of_mean > _FLAT_SHARE**2 * size and explained > critical * residual_sum / degrees:
        return None
    return CalibrationRefusal(
        CalibrationRefusalKind.FLAT, "the signal of the standards does not depend on their product"
    )


def _refuse_turning(shape: CurveShape, parameters: Floats, levels: Floats) -> CalibrationRefusal | None:
    turn = _turning_point_um(shape, parameters)
    if not levels[0] < turn < levels[-1]:
        return None
    return CalibrationRefusal(
        CalibrationRefusalKind.NOT_MONOTONIC,
        f"the curve turns at {turn:.4g} umol/L, within the standards: leave out those beyond it",
    )


def _refuse_direction(
    shape: CurveShape, parameters: Floats, levels: Floats, direction: Direction | None
) -> CalibrationRefusal | None:
    low, high = shape.signal(levels[[0, -1]], parameters)
    found = "rises" if high > low else "falls"
    if direction in (None, found):
        return None
    return CalibrationRefusal(
        CalibrationRefusalKind.WRONG_DIRECTION,
        f"the signal of the standards {found} with product; the assay says that it {direction}",
    )


def _turning_point_um(shape: CurveShape, parameters: Floats) -> float:
    """Product at which the curve turns; NaN where it never does."""
    if shape.name != "quadratic" or parameters[2] == 0:
        return np.nan
    return float(-parameters[1] / (2.0 * parameters[2]))


def _range(
    shape: CurveShape, parameters: Floats, levels: Floats, extrapolation: float
) -> tuple[float, float]:
    beyond = extrapolation * (levels[-1] - levels[0])
    lowest, highest = float(levels[0] - beyond), float(levels[-1] + beyond)
    if shape is FOUR_PARAMETER:
        # Its standards are spread by factors, and it says nothing below 0.
        lowest = float(levels[0] * (1.0 - extrapolation))
    turn = _turning_point_um(shape, parameters)
    if turn >= levels[-1]:
        highest = min(highest, turn)
    elif turn <= levels[0]:
        lowest = max(lowest, turn)
    return lowest, highest
