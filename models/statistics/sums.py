"""Sums whose last bit depends neither on the order of the values nor on what else is in the batch.

NumPy sums along an axis in an order that depends on the array's shape; results that must be the same bit for
bit in any batch use these instead.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def order_free_sum(values: Floats) -> float:
    """Sum of a one-dimensional array, the same for any order of its values."""
    return float(np.sum(np.sort(values)))


def sum_rows(values: Floats) -> Floats:
    """Sum over the first axis, row after row, whatever the number of columns."""
    total: Floats = values[0].copy()
    for row in values[1:]:
        total += row
    return total
