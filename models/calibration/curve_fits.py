"""Weighted least squares for the shapes of standard curves, to the digits that the data carry.

Polynomials by QR on scaled product; the logistic by a search over its two shape constants that SciPy ends and
Gauss-Newton steps polish. This module judges nothing: what the curve is worth is said elsewhere.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares

from models.calibration.curves import FOUR_PARAMETER, CurveShape

Floats = NDArray[np.float64]

_WIDEST = 1e3
"""Half of a logistic may lie this many times below the lowest or above the highest standard."""
_HILL_LIMITS = (0.05, 20.0)
_HILL_STARTS = (0.5, 1.0, 2.0, 4.0)
_BEST_STARTS = 3
_POLISH_ROUNDS = 20
_RANK_TOLERANCE = 1e-10


@dataclass(frozen=True)
class CurveFit:
    """A shape fitted to standards.

    Attributes
    ----------
    parameters
        In the shape's order, shape (parameters,).
    unscaled_covariance
        Inverse of J'WJ, shape (parameters, parameters): times the residual variance it is the covariance.
    residual_sum
        Weighted sum of squared residuals.
    determined
        Whether the data tell all parameters apart and none lies at its limit.
    """

    parameters: Floats
    unscaled_covariance: Floats
    residual_sum: float
    determined: bool


def fit_curve(
    shape: CurveShape, product_um: Floats, signal: Floats, weights: Floats, start: Floats | None = None
) -> CurveFit:
    """Fit a shape by weighted least squares.

    Parameters
    ----------
    shape
        The shape.
    product_um, signal, weights
        Of each standard, shape (standards,); weights are one over a variance up to a factor.
    start
        Parameters to start from, as of a fit with slightly different weights; None to search.

    Returns
    -------
    CurveFit
    """
    if shape is FOUR_PARAMETER:
        return _fit_logistic(product_um, signal, weights, start)
    return _fit_polynomial(shape, product_um, signal, weights)


def _fit_polynomial(shape: CurveShape, product_um: Floats, signal: Floats, weights: Floats) -> CurveFit:
    span = float(np.max(np.abs(product_um)))
    powers = np.arange(len(shape.parameters))
    root = np.sqrt(weights)
    design = (product_um[:, None] / span) ** powers * root[:, None]
    q, r = np.linalg.qr(design)
    singular = np.linalg.svd(r, compute_uv=False)
    if singular[-1] <= _RANK_TOLERANCE * singular[0]:
        return _undetermined(powers.size)
    inverse = np.linalg.inv(r)
    parameters = inverse @ (q.T @ (root * signal))
    # One step of refinement, since a residual is known better than a parameter.
    parameters = parameters + inverse @ (q.T @ (root * signal - design @ parameters))
    residual = root * signal - design @ parameters
    back = span ** -powers.astype(np.float64)
    covariance = (inverse @ inverse.T) * np.outer(back, back)
    return CurveFit(parameters * back, covariance, float(residual @ residual), True)


def _undetermined(count: int) -> CurveFit:
    return CurveFit(np.full(count, np.nan), np.full((count, count), np.nan), np.nan, False)


def _fit_logistic(product_um: Floats, signal: Floats, weights: Floats, start: Floats | None) -> CurveFit:
    """Bottom and top follow from half and hill, so starts are compared on a grid of those two alone."""
    positive = product_um[product_um > 0]
    root = np.sqrt(weights / np.max(weights))
    height = float(np.max(np.abs(signal)))
    scaled = signal / height
    lower = np.array([-np.inf, -np.inf, np.log(positive.min() / _WIDEST), np.log(_HILL_LIMITS[0])])
    upper = np.array([np.inf, np.inf, np.log(positive.max() * _WIDEST), np.log(_HILL_LIMITS[1])])

    def natural(logs: Floats) -> Floats:
        return np.array([logs[0], logs[1], np.exp(logs[2]), np.exp(logs[3])])

    def residual(logs: Floats) -> Floats:
        misfit: Floats = root * (FOUR_PARAMETER.signal(product_um, natural(logs)) - scaled)
        return misfit

    def jacobian(logs: Floats) -> Floats:
        here = natural(logs)
        by_log = np.array([1.0, 1.0, here[2], here[3]])
        by_standard: Floats = (FOUR_PARAMETER.gradient(product_um, here) * by_log[:, None] * root).T
        return by_standard

    grid = (
        [(half, hill) for half in np.unique(positive) for hill in _HILL_STARTS]
        if start is None
        else [(start[2], start[3])]
    )
    starts = sorted(
        (_with_ends(product_um, scaled, root, half, hill) for half, hill in grid),
        key=lambda each: float(np.sum(residual(each) ** 2)),
    )
    ends = [
        least_squares(
            residual,
            np.clip(each, lower, upper),
            jac=jacobian,
            bounds=(lower, upper),
            x_scale="jac",
            xtol=1e-14,
            ftol=1e-14,
            gtol=1e-14,
        ).x
        for each in starts[:_BEST_STARTS]
    ]
    best = min(ends, key=lambda end: float(np.sum(residual(end) ** 2)))
    for _ in range(_POLISH_ROUNDS):
        step = np.linalg.lstsq(jacobian(best), -residual(best), rcond=None)[0]
        if float(np.sum(residual(best + step) ** 2)) > float(np.sum(residual(best) ** 2)):
            break
        best = best + step
    parameters = natural(best)
    singular = np.linalg.svd(jacobian(best), compute_uv=False)
    at_limit = bool(np.any(best[2:] <= lower[2:] + 1e-6) or np.any(best[2:] >= upper[2:] - 1e-6))
    if at_limit or singular[-1] <= _RANK_TOLERANCE * singular[0]:
        return _undetermined(4)
    to_signal = np.array([height, height, 1.0, 1.0])
    parameters = parameters * to_signal
    weighted = FOUR_PARAMETER.gradient(product_um, parameters).T * np.sqrt(weights)[:, None]
    unit = np.linalg.norm(weighted, axis=0)
    _, r = np.linalg.qr(weighted / unit)
    inverse = np.linalg.inv(r) / unit[:, None]
    misfit = np.sqrt(weights) * (signal - FOUR_PARAMETER.signal(product_um, parameters))
    return CurveFit(parameters, inverse @ inverse.T, float(misfit @ misfit), True)


def _with_ends(product_um: Floats, signal: Floats, root: Floats, half: float, hill: float) -> Floats:
    """Best bottom and top for this half and hill, and the logarithms of these."""
    share = FOUR_PARAMETER.signal(product_um, np.array([0.0, 1.0, half, hill]))
    ends = np.linalg.lstsq(np.stack([1.0 - share, share], axis=1) * root[:, None], root * signal, rcond=None)[
        0
    ]
    return np.array([ends[0], ends[1], np.log(half), np.log(hill)])
