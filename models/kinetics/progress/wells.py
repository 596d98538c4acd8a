"""The progress curves of a batch of series laid out for one fit: net of their blanks, wells side by side.

Says which reads can be used and what the blanks leave uncertain; fits nothing.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from models.kinetics.blanks import match_blanks
from models.kinetics.curves import CurveBatch

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]
Flags = NDArray[np.bool_]

FEWEST_READS = 4
_REAGENT_SHARE = 0.5
"""Where another reagent runs out before the substrate, reads past this share of it are left out: from there
on its own shortage slows the reaction. Common practice, no source."""


@dataclass(frozen=True)
class Wells:
    """Curves of W wells of K series, T reads; wells of a series in an order of their own.

    Attributes
    ----------
    time_s, product_um
        Time since the reaction began [s] and product net of the blank, less a rough offset [umol/L], shape
        (T, W); 0 where a read is not used.
    used
        Reads that are used, shape (T, W).
    substrate_um
        Nominal substrate at the start [umol/L], shape (W,).
    series
        Series of each well, 0 to K - 1, shape (W,).
    drift
        Wells that share a blank curve, numbered over all series, shape (W,).
    drift_error
        Standard error of that curve's slope [umol/L/s], 0 without blanks, shape (drifts,).
    drift_series
        Series of each drift, shape (drifts,).
    row
        Row of each well in the batch it comes from, shape (W,).
    series_count
        K.
    """

    time_s: Floats
    product_um: Floats
    used: Flags
    substrate_um: Floats
    series: Integers
    drift: Integers
    drift_error: Floats
    drift_series: Integers
    row: Integers
    series_count: int

    @property
    def read_count(self) -> Floats:
        """Reads used of each well, shape (W,)."""
        return np.asarray(np.count_nonzero(self.used, axis=0), dtype=np.float64)

    def by_series(self, values: Floats) -> Floats:
        """Sum of well values (..., W) over each series, (..., K), one well after another."""
        return grouped(values, self.series, self.series_count)

    def by_drift(self, values: Floats) -> Floats:
        """Sum of well values (..., W) over each drift, (..., drifts)."""
        return grouped(values, self.drift, self.drift_series.size)

    def drifts_by_series(self, values: Floats) -> Floats:
        """Sum of drift values (..., drifts) over each series, (..., K)."""
        return grouped(values, self.drift_series, self.series_count)

    def select(self, series: Integers, *, reads: bool = True) -> Selection:
        """Some of the series, by rising number; with their reads, or for sums over wells only."""
        number = np.full(self.series_count, -1)
        number[series] = np.arange(series.size)
        wells = np.flatnonzero(number[self.series] >= 0)
        drifts = np.flatnonzero(number[self.drift_series] >= 0)
        drift_number = np.full(self.drift_series.size, -1)
        drift_number[drifts] = np.arange(drifts.size)
        rows = slice(None) if reads else slice(0)
        part = Wells(
            np.ascontiguousarray(self.time_s[rows, wells]),
            np.ascontiguousarray(self.product_um[rows, wells]),
            np.ascontiguousarray(self.used[rows, wells]),
            self.substrate_um[wells],
            number[self.series[wells]],
            drift_number[self.drift[wells]],
            self.drift_error[drifts],
            number[self.drift_series[drifts]],
            self.row[wells],
            int(series.size),
        )
        return Selection(part, wells, drifts)

    def cut(self, wells: slice) -> Wells:
        """Some neighbouring wells, whatever their series."""
        return replace(
            self,
            time_s=np.ascontiguousarray(self.time_s[:, wells]),
            product_um=np.ascontiguousarray(self.product_um[:, wells]),
            used=np.ascontiguousarray(self.used[:, wells]),
            substrate_um=self.substrate_um[wells],
            series=self.series[wells],
            drift=self.drift[wells],
            row=self.row[wells],
        )

    def repeated(self, times: int) -> Wells:
        """The same series several times over, numbered on; for sums over wells, without reads."""
        empty = np.empty((0, times * self.series.size))
        turn = np.arange(times)[:, None]
        return Wells(
            empty,
            empty,
            empty > 0,
            np.tile(self.substrate_um, times),
            (self.series + turn * self.series_count).ravel(),
            (self.drift + turn * self.drift_series.size).ravel(),
            np.tile(self.drift_error, times),
            (self.drift_series + turn * self.series_count).ravel(),
            np.tile(self.row, times),
            times * self.series_count,
        )

    def thinned(self, reads: int) -> Wells:
        """About so many reads of each well, evenly spread."""
        step = max(1, -(-self.time_s.shape[0] // reads))
        return Wells(
            np.ascontiguousarray(self.time_s[::step]),
            np.ascontiguousarray(self.product_um[::step]),
            np.ascontiguousarray(self.used[::step]),
            self.substrate_um,
            self.series,
            self.drift,
            self.drift_error,
            self.drift_series,
            self.row,
            self.series_count,
        )


@dataclass(frozen=True)
class Selection:
    """Wells of some series, and where they and their drifts stand in the whole."""

    wells: Wells
    well_places: Integers
    drift_places: Integers


def grouped(values: Floats, group: Integers, count: int) -> Floats:
    """Sums of the last axis by group; each sum is taken in the order of the values."""
    flat = values.reshape(math.prod(values.shape[:-1]), values.shape[-1])
    sums = [np.bincount(group, row, minlength=count) for row in flat]
    return np.array(sums, dtype=np.float64).reshape(*values.shape[:-1], count)


@dataclass(frozen=True)
class NetCurves:
    """Every well of a batch net of its blank, shape (T, W) and (W,).

    `drift` numbers the blank curves, -1 for none; `drift_error` is the standard error of the blank's slope.
    """

    time_s: Floats
    product_um: Floats
    used: Flags
    drift: Integers
    drift_error: Floats


def net_curves(batch: CurveBatch) -> NetCurves:
    """Subtract from each well with enzyme the smoothed curve of its matching blanks, plate by plate."""
    time_s, product_um = np.ascontiguousarray(batch.time_s.T), np.ascontiguousarray(batch.product_um.T).copy()
    drift, error = np.full(batch.well_count, -1), np.zeros(batch.well_count)
    plain = batch.is_blank | batch.is_enzyme_blank
    first = 0
    for plate in np.unique(batch.plate):
        mine = np.flatnonzero(batch.plate == plate)
        blanks = match_blanks(
            np.ascontiguousarray(time_s[:, mine]),
            np.ascontiguousarray(product_um[:, mine]),
            batch.is_blank[mine],
            ~plain[mine],
            batch.substrate_um[mine],
        )
        product_um[:, mine] -= blanks.value_um
        usable = np.isfinite(product_um[:, mine]) & np.isfinite(time_s[:, mine])
        _, slope_error = blanks.slope(time_s[:, mine], usable)
        drift[mine] = np.where(blanks.curve >= 0, blanks.curve + first, -1)
        error[mine] = np.where(np.isfinite(slope_error), slope_error, 0.0)
        first += len(blanks.curves)
    used = np.isfinite(product_um) & np.isfinite(time_s)
    return NetCurves(time_s, product_um, used, drift, error)


def lay_out(batch: CurveBatch, series: Integers, dead_time_s: Floats) -> Wells:
    """Lay out the usable wells of the named series.

    Parameters
    ----------
    batch
        Curves with their blanks.
    series
        Numbers of the series to be fitted, rising; they become 0, 1, ...
    dead_time_s
        Time from the start of the reaction to time 0 of the reads [s], shape (W,) over the batch.

    Returns
    -------
    Wells
        Wells with known positive substrate and enough usable reads.
    """
    net = net_curves(batch)
    number = np.searchsorted(series, batch.series)
    number = np.where(np.isin(batch.series, series), number, -1)
    used = net.used & ~_past_reagent(net, batch)
    wanted = (
        (number >= 0)
        & ~batch.is_blank
        & ~batch.is_enzyme_blank
        & (batch.substrate_um > 0)
        & (np.count_nonzero(used, axis=0) >= FEWEST_READS)
    )
    rows = np.flatnonzero(wanted)
    first = _first_reads(net.product_um, used)
    # An order that comes from the data alone, whatever the order of the rows.
    last = np.sum(np.where(used, net.product_um, 0.0), axis=0)
    rows = rows[np.lexsort((first[rows], last[rows], batch.substrate_um[rows], number[rows]))]
    key = np.stack([number[rows], net.drift[rows]])
    pairs, drift = np.unique(key, axis=1, return_inverse=True)
    drift = np.asarray(drift).reshape(-1)
    error = np.zeros(pairs.shape[1])
    np.maximum.at(error, drift, net.drift_error[rows])
    kept = used[:, rows]
    return Wells(
        np.ascontiguousarray(np.where(kept, net.time_s[:, rows] + dead_time_s[rows], 0.0)),
        np.ascontiguousarray(np.where(kept, net.product_um[:, rows] - first[rows], 0.0)),
        np.ascontiguousarray(kept),
        batch.substrate_um[rows],
        number[rows],
        drift,
        error,
        pairs[0],
        rows,
        int(series.size),
    )


def _first_reads(product_um: Floats, used: Flags) -> Floats:
    """Mean of the first three usable reads [umol/L], shape (W,)."""
    early = used & (np.cumsum(used, axis=0) <= 3)
    total = np.cumsum(np.where(early, product_um, 0.0), axis=0)[-1] if used.shape[0] else np.zeros(0)
    mean: Floats = total / np.maximum(np.count_nonzero(early, axis=0), 1)
    return mean


def _past_reagent(net: NetCurves, batch: CurveBatch) -> Flags:
    """Reads from the first on that stands past the share of a reagent that is scarcer than the substrate."""
    scarce = batch.consumable_um < batch.substrate_um
    risen = net.product_um - _first_reads(net.product_um, net.used)
    with np.errstate(invalid="ignore"):
        past = scarce & (risen > _REAGENT_SHARE * batch.consumable_um)
    beyond: Flags = np.cumsum(past, axis=0) > 0
    return beyond
