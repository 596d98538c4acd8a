"""A standard curve that can be used: product from signal, and the error of both reading and curve.

All wells of a plate share their curve, so its error is kept apart from that of reading. This module fits
nothing and knows neither plates nor files.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.calibration.choices import Direction, Weighting
from models.calibration.curves import FOUR_PARAMETER, CurveShape
from models.calibration.variances import VarianceModel
from models.statistics.lack_of_fit import LackOfFit

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class ProductError:
    """Standard error of product read from signal [umol/L], shape of the signal; NaN outside the range.

    Attributes
    ----------
    reading
        From the scatter of the reading: differs from well to well.
    curve
        From the curve: shared by all wells that use it, and so not averaged away over them.
    total
        Both together.
    """

    reading: Floats
    curve: Floats
    total: Floats


@dataclass(frozen=True, eq=False)
class Calibration:
    """A standard curve that can be used.

    Attributes
    ----------
    shape
        Shape of the curve.
    weighting, variance_model
        Stated variance model, and the variance of a signal up to `residual_sd` squared.
    parameters, covariance
        In the shape's order, shape (parameters,) and (parameters, parameters).
    residual_sd
        Square root of the weighted mean square of residuals: in signal with weighting "constant", relative to
        the signal with "proportional", near 1 with "replicates".
    degrees_of_freedom
        Standards less parameters.
    standard_um, standard_signal
        The standards, shape (standards,).
    lowest_um, highest_um
        Product that may be read: the range of the standards with what may be extrapolated, cut where the
        curve turns.
    misfit
        Lack of fit against the replicates' pure error, of one fit.
    """

    shape: CurveShape
    weighting: Weighting
    variance_model: VarianceModel
    parameters: Floats
    covariance: Floats
    residual_sd: float
    degrees_of_freedom: int
    standard_um: Floats
    standard_signal: Floats
    lowest_um: float
    highest_um: float
    misfit: LackOfFit

    @property
    def direction(self) -> Direction:
        """Whether the signal rises or falls with product."""
        return "rises" if self._sign > 0 else "falls"

    @property
    def standard_errors(self) -> Floats:
        """Standard error of each parameter, shape (parameters,)."""
        return np.sqrt(np.diag(self.covariance))

    @property
    def signal_range(self) -> tuple[float, float]:
        """Lowest and highest signal that may be read."""
        ends = self.signal(np.array([self.lowest_um, self.highest_um]))
        return float(np.min(ends)), float(np.max(ends))

    @property
    def relative_error_shared(self) -> float:
        """Relative standard error [1] of product over the standards' range, from the curve alone.

        It is that of the difference from lowest to highest standard; a rate is such a difference over time.
        For a line it is that of its slope. It multiplies every rate of
        every well that uses the curve in the same way: it belongs to the interval of vmax, kcat and all in
        proportion to them, and not into the weights of wells.
        """
        low = float(np.min(self.standard_um))
        if self.shape is FOUR_PARAMETER and low == 0:
            # At 0 the inverse of a logistic has no slope, or an endless one.
            low = float(np.min(self.standard_um[self.standard_um > 0]))
        return self.relative_error_between(low, float(np.max(self.standard_um)))

    def signal(self, product_um: Floats) -> Floats:
        """Signal that the curve gives for product [umol/L], any shape."""
        return self.shape.signal(product_um, self.parameters)

    def to_product(self, signal: Floats) -> tuple[Floats, Floats]:
        """Product [umol/L] and the slope of the curve there [signal per umol/L], both of the signal's shape.

        NaN where the signal is not known or lies outside the range: see `in_range`.
        """
        product = self._invert(signal)
        inside = (product >= self.lowest_um) & (product <= self.highest_um)
        product = np.where(inside, product, np.nan)
        return product, self.shape.slope(product, self.parameters)

    def in_range(self, signal: Floats) -> NDArray[np.bool_]:
        """Whether product can be read from each signal."""
        return np.isfinite(self.to_product(signal)[0])

    def reading_sd(self, signal: Floats) -> Floats:
        """Standard deviation of one reading, by the curve's own residuals and variance model."""
        sd: Floats = self.residual_sd * np.sqrt(self.variance_model.variance(signal))
        return sd

    def product_error(self, signal: Floats, reading_sd: Floats | None = None) -> ProductError:
        """Standard error of product read from signal, to first order.

        var(P) = (reading variance + g' C g) / slope^2 with g the gradient of the curve by its parameters
        (JCGM 100:2008, 5.1.2; for a line, Fieller 1954 without the term of second order).

        Parameters
        ----------
        signal
            Signals, any shape.
        reading_sd
            Standard deviation of each; None for that of one reading by the curve's own residuals. For a mean
            of m readings, divide by sqrt(m).
        """
        product, slope = self.to_product(signal)
        sd = self.reading_sd(signal) if reading_sd is None else reading_sd
        gradient = self.shape.gradient(product, self.parameters)
        with np.errstate(all="ignore"):
            reading = np.where(np.isfinite(product), sd / np.abs(slope), np.nan)
            curve = np.sqrt(_quadratic_form(gradient, self.covariance)) / np.abs(slope)
        return ProductError(reading, curve, np.hypot(reading, curve))

    def relative_error_between(self, low_um: float, high_um: float) -> float:
        """Relative standard error [1], from the curve alone, of a difference read between two products.

        At fixed signals a change of the parameters by d moves a product by -g d / slope.

        Parameters
        ----------
        low_um, high_um
            The two products [umol/L], apart from each other.
        """
        ends = np.array([low_um, high_um])
        with np.errstate(all="ignore"):
            moves = self.shape.gradient(ends, self.parameters) / self.shape.slope(ends, self.parameters)
            change = (moves[:, 1] - moves[:, 0]) / (high_um - low_um)
        return float(np.sqrt(_quadratic_form(change[:, None], self.covariance)[0]))

    def back_calculated_um(self) -> Floats:
        """Product read back from the signal of each standard [umol/L], range or not, shape (standards,)."""
        return self._invert(self.standard_signal)

    def back_error_percent(self) -> Floats:
        """Error of each standard as read back, percent of its nominal; NaN for product 0 or no reading."""
        with np.errstate(all="ignore"):
            error = 100.0 * (self.back_calculated_um() - self.standard_um) / self.standard_um
        return np.where(self.standard_um == 0, np.nan, error)

    @property
    def _sign(self) -> float:
        low, high = self.signal(np.array([np.min(self.standard_um), np.max(self.standard_um)]))
        return 1.0 if high > low else -1.0

    def _invert(self, signal: Floats) -> Floats:
        return self.shape.inverse(signal, self.parameters, self._sign)


def _quadratic_form(vectors: Floats, matrix: Floats) -> Floats:
    """v' M v for vectors of shape (parameters, *any), term after term: the same bits in any shape."""
    total = np.zeros(vectors.shape[1:])
    for i in range(vectors.shape[0]):
        for j in range(vectors.shape[0]):
            total = total + vectors[i] * matrix[i, j] * vectors[j]
    return np.maximum(total, 0.0)
