"""Straight lines and parabolas through windows of progress curves, all wells at once, by cumulative moments.

Sums run from the window's first read and time counts from there, so that a short window loses no digits to
what lies before it. A NaN read is a gap: it carries weight 0. This module knows nothing of enzymes or plates.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class WindowFits:
    """Least-squares line and parabola of each window; every array has one shape.

    Attributes
    ----------
    count
        Usable reads.
    start_s, end_s, mean_s
        Time of the first and last usable read and mean time of all [s].
    mean
        Mean value, in the curve's unit: the line passes through (mean_s, mean).
    slope
        Slope of the line, curve's unit per s.
    slope_factor
        Variance of the slope over the variance of one read, 1 / sum (t - mean_s)^2 [1/s2].
    line_variance
        Residual variance about the line, count - 2 degrees of freedom.
    curvature
        Coefficient of t^2 in the parabola, curve's unit per s2.
    curvature_factor
        Variance of that coefficient over the variance of one read [1/s4].
    parabola_variance
        Residual variance about the parabola, count - 3 degrees of freedom.
    """

    count: Floats
    start_s: Floats
    end_s: Floats
    mean_s: Floats
    mean: Floats
    slope: Floats
    slope_factor: Floats
    line_variance: Floats
    curvature: Floats
    curvature_factor: Floats
    parabola_variance: Floats

    @property
    def slope_se(self) -> Floats:
        """Standard error of the slope from the window's own residuals."""
        return np.sqrt(self.line_variance * self.slope_factor)

    @property
    def slope_change(self) -> Floats:
        """Change of slope from the window's start to its end over the slope of the line."""
        return 2.0 * self.curvature * (self.end_s - self.start_s) / self.slope

    @property
    def slope_change_t(self) -> Floats:
        """t value of the change of slope, from the parabola's own residuals."""
        return self.curvature / np.sqrt(self.parabola_variance * self.curvature_factor)

    def at(self, time_s: Floats) -> Floats:
        """Value of the line at a time [s]."""
        return self.mean + self.slope * (time_s - self.mean_s)

    def pick(self, read: NDArray[np.int_]) -> WindowFits:
        """Of fits with shape (reads, wells), the window that ends with the given read of each well."""
        wells = np.arange(read.size)
        return WindowFits(**{name: getattr(self, name)[read, wells] for name in self.__dataclass_fields__})


def windows_from(time_s: Floats, values: Floats, first: NDArray[np.int_]) -> WindowFits:
    """Fit every window that starts with a given read of each well.

    Parameters
    ----------
    time_s, values
        Shape (reads, wells); NaN values are gaps.
    first
        First read of each well's windows, shape (wells,).

    Returns
    -------
    WindowFits
        Row e holds the windows [first, e], shape (reads, wells); NaN where the reads do not suffice.
    """
    reads = np.arange(time_s.shape[0])[:, None]
    usable = np.isfinite(values) & np.isfinite(time_s) & (reads >= first[None, :])
    origin_read = np.argmax(usable, axis=0)
    wells = np.arange(time_s.shape[1])
    return _prefix_fits(time_s, values, usable, time_s[origin_read, wells], values[origin_read, wells])


def _prefix_fits(
    time_s: Floats, values: Floats, usable: NDArray[np.bool_], origin_s: Floats, origin: Floats
) -> WindowFits:
    """Running moments over the first axis, turned into central ones, turned into fits."""
    x = np.where(usable, time_s - origin_s, 0.0)
    scale = np.max(x, axis=0, initial=0.0)
    scale = np.where(scale > 0, scale, 1.0)
    x = x / scale
    y = np.where(usable, values - origin, 0.0)
    with np.errstate(all="ignore"):
        n = np.cumsum(usable, axis=0, dtype=np.float64)
        square = x * x
        mean_x = np.cumsum(x, axis=0) / n
        mean_y = np.cumsum(y, axis=0) / n
        raw2 = np.cumsum(square, axis=0) / n
        raw3 = np.cumsum(square * x, axis=0) / n
        raw4 = np.cumsum(square * square, axis=0) / n
        raw_xy = np.cumsum(x * y, axis=0) / n
        raw_xxy = np.cumsum(square * y, axis=0) / n
        mean_square = mean_x * mean_x
        c2 = raw2 - mean_square
        c3 = raw3 - mean_x * (3.0 * raw2 - 2.0 * mean_square)
        c4 = raw4 - mean_x * (4.0 * raw3 - mean_x * (6.0 * raw2 - 3.0 * mean_square))
        cxy = raw_xy - mean_x * mean_y
        cxxy = raw_xxy - raw2 * mean_y - 2.0 * mean_x * cxy
        cyy = np.cumsum(y * y, axis=0) / n - mean_y * mean_y
        slope = cxy / c2
        line_left = n * np.maximum(cyy - slope * cxy, 0.0)
        # The parabola's own regressor: (x - mean)^2 made orthogonal to the line.
        skew = c3 / c2
        quadratic = c4 - skew * c3 - c2 * c2
        curvature = (cxxy - skew * cxy) / quadratic
        parabola_left = np.maximum(line_left - n * curvature * curvature * quadratic, 0.0)
        too_few, no_parabola = n < 2, n < 3
        return WindowFits(
            count=n,
            start_s=np.broadcast_to(origin_s, n.shape),
            end_s=origin_s + scale * np.maximum.accumulate(x, axis=0),
            mean_s=origin_s + scale * mean_x,
            mean=origin + mean_y,
            slope=np.where(too_few, np.nan, slope / scale),
            slope_factor=np.where(too_few, np.nan, 1.0 / (n * c2 * scale * scale)),
            line_variance=np.where(n > 2, line_left / (n - 2.0), np.nan),
            curvature=np.where(no_parabola, np.nan, curvature / (scale * scale)),
            curvature_factor=np.where(no_parabola, np.nan, 1.0 / (n * quadratic * scale**4)),
            parabola_variance=np.where(n > 3, parabola_left / (n - 3.0), np.nan),
        )


@dataclass(frozen=True)
class AllWindows:
    """Every window [first, stop) of every well.

    Attributes
    ----------
    first, stop
        First read and the read after the last, shape (windows,).
    slope, slope_se, line_variance, slope_change, slope_change_t
        As in `WindowFits`, shape (windows, wells).
    """

    first: NDArray[np.int_]
    stop: NDArray[np.int_]
    slope: Floats
    slope_se: Floats
    line_variance: Floats
    slope_change: Floats
    slope_change_t: Floats


def all_windows(time_s: Floats, values: Floats, fewest: int = 2) -> AllWindows:
    """Fit a line and a parabola to every window of every well.

    Parameters
    ----------
    time_s, values
        Shape (reads, wells); NaN values are gaps.
    fewest
        Reads, gaps included, of the shortest window.

    Returns
    -------
    AllWindows
        Windows in order of their first read, then of their last.
    """
    read_count, well_count = time_s.shape
    starts = range(max(read_count - fewest + 1, 0))
    sizes = [read_count - start - fewest + 1 for start in starts]
    first = np.repeat(np.arange(len(sizes)), sizes)
    stop = np.concatenate([np.arange(s + fewest, read_count + 1) for s in starts]) if sizes else first
    fields = {
        name: np.empty((first.size, well_count))
        for name in AllWindows.__dataclass_fields__
        if name not in ("first", "stop")
    }
    usable = np.isfinite(values) & np.isfinite(time_s)
    row = 0
    with np.errstate(all="ignore"):
        for start, size in zip(starts, sizes, strict=True):
            here = usable[start:]
            wells = np.arange(well_count)
            origin_read = start + np.argmax(here, axis=0)
            fits = _prefix_fits(
                time_s[start:], values[start:], here, time_s[origin_read, wells], values[origin_read, wells]
            )
            for name, block in fields.items():
                block[row : row + size] = getattr(fits, name)[fewest - 1 :]
            row += size
    return AllWindows(first=first, stop=stop, **fields)
