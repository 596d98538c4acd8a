"""Rates in rows, laid out as (levels, series) for the batched fit and back.

Rows of a series are put in an order of their own (by substrate, then rate), so that a fit's last bit does not
depend on the order in which wells arrive.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.kinetics.laws.law import Conditions, Floats, at_levels

Integers = NDArray[np.int_]


@dataclass(frozen=True)
class Packed:
    """Rates of several series side by side; places that no rate fills carry NaN rates and substrate 1.

    Attributes
    ----------
    series
        Number of each series, shape (series,).
    conditions
        Substrate, shape (levels, series).
    rate, standard_error
        Rate and its standard error [umol/L/s], shape (levels, series).
    row
        Row each place came from, -1 where none, shape (levels, series).
    """

    series: Integers
    conditions: Conditions
    rate: Floats
    standard_error: Floats
    row: Integers

    @property
    def present(self) -> NDArray[np.bool_]:
        """Places that hold a rate, shape (levels, series)."""
        return self.row >= 0

    @property
    def point_count(self) -> Integers:
        """Rates of each series, shape (series,)."""
        count: Integers = np.count_nonzero(self.present, axis=0)
        return count

    def spread(self, values: Floats) -> Floats:
        """Values of rows laid out as (levels, series), 0 where there is no row."""
        return np.where(self.present, values[np.maximum(self.row, 0)], 0.0)

    def gather(self, values: Floats, row_count: int) -> Floats:
        """Values (levels, series) back as rows, NaN for rows that are in no series."""
        rows = np.full(row_count, np.nan)
        rows[self.row[self.present]] = values[self.present]
        return rows

    def part(self, start: int, stop: int) -> Packed:
        """Some neighbouring series, with no more levels than they need."""
        levels = int(self.point_count[start:stop].max(initial=1))
        cut = (slice(0, levels), slice(start, stop))
        whole = self.conditions
        conditions = Conditions(
            np.ascontiguousarray(whole.substrate_um[cut]),
            np.ascontiguousarray(whole.log_substrate[cut]),
            None if whole.modulator_um is None else np.ascontiguousarray(whole.modulator_um[cut]),
            None if whole.enzyme_um is None else np.ascontiguousarray(whole.enzyme_um[cut]),
        )
        return Packed(
            self.series[start:stop],
            conditions,
            np.ascontiguousarray(self.rate[cut]),
            np.ascontiguousarray(self.standard_error[cut]),
            np.ascontiguousarray(self.row[cut]),
        )


def pack(
    series: Integers,
    substrate_um: Floats,
    rate: Floats,
    standard_error: Floats,
    modulator_um: Floats | None = None,
    enzyme_um: Floats | None = None,
) -> Packed:
    """Lay rows out by series.

    Parameters
    ----------
    series
        Series of each row, shape (rows,); rows with -1 are left out.
    substrate_um, rate, standard_error
        Of each row, shape (rows,).
    modulator_um, enzyme_um
        Of each row, shape (rows,); None where no law needs them.

    Returns
    -------
    Packed
        Series by number of rates, then by number; empty places carry weight 0 through `present`.
    """
    kept = np.flatnonzero(series >= 0)
    keys = [standard_error[kept], rate[kept], substrate_um[kept], series[kept]]
    if modulator_um is not None:
        keys.insert(2, modulator_um[kept])
    order = kept[np.lexsort(keys)]
    numbers, first, counts = np.unique(series[order], return_index=True, return_counts=True)
    by_size = np.lexsort((numbers, counts))
    levels = int(counts.max(initial=1))
    places = np.arange(levels)[:, None]
    filled = places < counts[by_size]
    source = np.where(filled, np.minimum(first[by_size] + places, max(order.size - 1, 0)), 0)
    row = np.where(filled, order[source] if order.size else 0, -1)

    def laid_out(values: Floats, empty: float) -> Floats:
        return np.where(filled, values[np.maximum(row, 0)] if values.size else empty, empty)

    return Packed(
        series=numbers[by_size],
        conditions=at_levels(
            laid_out(substrate_um, 1.0),
            None if modulator_um is None else laid_out(modulator_um, 0.0),
            None if enzyme_um is None else laid_out(enzyme_um, 1.0),
        ),
        rate=laid_out(rate, 0.0),
        standard_error=laid_out(standard_error, 0.0),
        row=row,
    )
