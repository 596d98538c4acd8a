"""Progress curves of many wells as arrays: what rates are measured from.

The signal is already product; roles and concentrations come from the plate map. This module computes nothing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]
Flags = NDArray[np.bool_]


@dataclass(frozen=True)
class CurveBatch:
    """Progress curves of W wells of any number of plate reads, T reads at most.

    Attributes
    ----------
    time_s
        Time of each read [s], shape (W, T), rising; NaN past the end.
    product_um
        Substrate turned over per volume [umol/L] up to a constant, shape (W, T); NaN where a read is not
        usable. The classic slip is to leave the stoichiometry out: this is substrate consumed, not product
        formed.
    plate, series
        Plate read and series each well belongs to, shape (W,); -1 for no series.
    is_blank, is_enzyme_blank
        Wells without enzyme, and wells without substrate, shape (W,).
    substrate_um
        Nominal substrate at the start [umol/L], shape (W,).
    consumable_um
        What can be consumed before substrate or another reagent runs out [umol/L], shape (W,); NaN without
        substrate.
    product_zero_is_blank
        Whether product counts from the matching blank instead of from the well's first read, shape (W,).

    Raises
    ------
    ValueError
        If the arrays' shapes do not fit each other.
    """

    time_s: Floats
    product_um: Floats
    plate: Integers
    series: Integers
    is_blank: Flags
    is_enzyme_blank: Flags
    substrate_um: Floats
    consumable_um: Floats
    product_zero_is_blank: Flags

    def __post_init__(self) -> None:
        if self.time_s.ndim != 2 or self.time_s.shape != self.product_um.shape:
            raise ValueError("time_s and product_um must both have the shape (wells, reads)")
        wells = self.time_s.shape[0]
        for name in list(self.__dataclass_fields__)[2:]:
            if getattr(self, name).shape != (wells,):
                raise ValueError(
                    f"{name} must have one value a well: {wells}, not {getattr(self, name).shape}"
                )

    @property
    def well_count(self) -> int:
        """Number of wells."""
        return int(self.time_s.shape[0])

    def select(self, wells: Integers) -> CurveBatch:
        """Curves of some of the wells, by index."""
        return CurveBatch(**{name: getattr(self, name)[wells] for name in self.__dataclass_fields__})
