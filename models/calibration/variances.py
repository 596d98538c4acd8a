"""How the scatter of a signal grows with the signal: constant, in proportion, or as replicates show.

Knows signals and groups only: no curve, no concentration.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.statistics.pipetting import replicate_variance_components

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]

LEAST_PROPORTION = 0.01
"""A scatter in proportion to the signal is not taken to fall below that at this share of the highest signal:
a blank standard near 0 would else outweigh all others (common practice, no source)."""


@dataclass(frozen=True)
class VarianceModel:
    """Variance of a signal up to a factor: constant^2 + (proportion signal)^2.

    Attributes
    ----------
    constant
        Constant part of the standard deviation, in signal; with weighting "constant" 1.
    proportion
        Part in proportion to the signal [1].
    least_signal
        The signal below which the part in proportion falls no further.
    """

    constant: float
    proportion: float
    least_signal: float

    def variance(self, signal: Floats) -> Floats:
        """Variance at these signals, up to the residual variance of the curve."""
        size = np.maximum(np.abs(signal), self.least_signal)
        variance: Floats = self.constant**2 + (self.proportion * size) ** 2
        return variance


CONSTANT = VarianceModel(1.0, 0.0, 0.0)


def proportional_variance(fitted: Floats) -> VarianceModel:
    """Scatter in proportion to the signal."""
    return VarianceModel(0.0, 1.0, LEAST_PROPORTION * float(np.max(np.abs(fitted))))


def variance_from_replicates(group: Integers, signal: Floats, fitted: Floats) -> VarianceModel | None:
    """Constant and proportional part from replicates, by restricted likelihood; None if they show none.

    Parameters
    ----------
    group
        Level of each standard, counted from 0, shape (standards,).
    signal, fitted
        Signal as read and by the curve, shape (standards,).
    """
    height = float(np.max(np.abs(fitted)))
    # In units of the highest signal both parts are shares of it, as coefficients of variation are.
    found = replicate_variance_components(
        plate=np.zeros(group.size, dtype=np.intp),
        group=group,
        residual=(signal - fitted) / height,
        size=np.ones(group.size),
        order=fitted / height,
        standard_error=np.zeros(group.size),
        plate_count=1,
    )
    constant, proportion = float(found.constant_cv[0]) * height, float(found.substrate_cv[0])
    if constant == 0.0 and proportion == 0.0:
        return None
    return VarianceModel(constant, proportion, LEAST_PROPORTION * height)
