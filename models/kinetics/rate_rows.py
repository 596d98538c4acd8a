"""Rows of rates that may be fitted, by series: what is known, where it comes from, and how it is laid out.

Unknown rates and rates at no substrate are left out here; nothing is fitted.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from models.kinetics.packing import Packed, pack
from models.kinetics.refusals import Counts, Refusal, refuse_series

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]


@dataclass(frozen=True)
class RateRows:
    """Known rates, ordered by series.

    Attributes
    ----------
    place
        Place of each row in the frame it was taken from, shape (rows,).
    series, plate
        Series number and place of the plate in `plates`, shape (rows,).
    plates
        Plate numbers, shape (plates,).
    substrate_um, level_um
        Mean substrate over the window and nominal level [umol/L], shape (rows,).
    rate, standard_error
        [umol/L/s], shape (rows,).
    modulator_um, enzyme_um
        Modulator and the enzyme's active sites [umol/L], shape (rows,); None where the frame has no such
        column.
    """

    place: Integers
    series: Integers
    plate: Integers
    plates: Integers
    substrate_um: Floats
    level_um: Floats
    rate: Floats
    standard_error: Floats
    modulator_um: Floats | None
    enzyme_um: Floats | None

    @classmethod
    def of(cls, rates: pd.DataFrame) -> RateRows:
        """Take the rows of a frame that hold a rate at some substrate."""
        rate = rates["v_um_per_s"].to_numpy(dtype=np.float64)
        substrate = rates["substrate_um"].to_numpy(dtype=np.float64)
        level = rates["nominal_substrate_um"].to_numpy(dtype=np.float64)
        series = rates["series"].to_numpy(dtype=np.intp)
        plates, plate = np.unique(rates["plate"].to_numpy(dtype=np.intp), return_inverse=True)
        # A rate at no substrate says nothing of a law that passes through zero; an unknown substrate is kept,
        # so that its series is refused.
        kept = np.flatnonzero(np.isfinite(rate) & ~(substrate <= 0) & ~(level <= 0) & (series >= 0))
        kept = kept[np.argsort(series[kept], kind="stable")]
        further = [
            rates[name].to_numpy(dtype=np.float64)[kept] if name in rates.columns else None
            for name in ("modulator_um", "enzyme_um")
        ]
        return cls(
            kept,
            series[kept],
            np.asarray(plate)[kept],
            plates,
            substrate[kept],
            level[kept],
            rate[kept],
            rates["v_se_um_per_s"].to_numpy(dtype=np.float64)[kept],
            *further,
        )

    def refusal(self, number: int) -> Refusal | None:
        """Why a series is refused before any law is tried, or None."""
        mine = self._members(number)
        modulator = None if self.modulator_um is None else self.modulator_um[mine]
        return refuse_series(self.rate[mine], self.standard_error[mine], self.substrate_um[mine], modulator)

    def counts(self, number: int) -> Counts:
        """What of a series can be counted."""
        mine = self._members(number)
        modulator_levels = 1 if self.modulator_um is None else np.unique(self.modulator_um[mine]).size
        enzyme = None if self.enzyme_um is None else self.enzyme_um[mine]
        return Counts(
            levels=int(np.unique(self.level_um[mine]).size),
            points=int(self.level_um[mine].size),
            modulator_levels=int(modulator_levels),
            enzyme_known=enzyme is not None and bool(np.all(np.isfinite(enzyme) & (enzyme > 0))),
        )

    def plate_of(self, series: Integers) -> Integers:
        """Place of each series' plate in `plates`."""
        return self.plate[np.searchsorted(self.series, series)]

    def packed(self, series: Integers) -> Packed:
        """Rates of some of the series, laid out for the batched fit."""
        chosen = np.where(np.isin(self.series, series), self.series, -1)
        return pack(
            chosen,
            self.substrate_um,
            self.rate,
            self.standard_error,
            self.modulator_um,
            self.enzyme_um,
        )

    def _members(self, number: int) -> slice:
        first, last = np.searchsorted(self.series, [number, number + 1])
        return slice(int(first), int(last))
