"""What curves beyond depletion: bends of a window, and wells that speed up or slow down at their start.

Sees one plate read's curves and what depletion takes from them; chooses no window.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.kinetics.windows import WindowFits

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]
Flags = NDArray[np.bool_]

_STRETCHES = (1.0, 0.5, 0.25)
"""Shares of the reads before the conversion limit on which curvature is looked for: a short lag is lost in a
long one."""
FEWEST_FOR_CURVATURE = 5
_LAG_SHARES = (0.06, 0.15, 0.35)
"""Time constants of lags that are looked for besides a curvature, as shares of the time before the conversion
limit: a parabola sees little of a lag that ends early."""


@dataclass(frozen=True)
class Curves:
    """Curves of one plate read with the rules for their windows; arrays (reads, wells) and (wells,).

    `net_um` is product less the matching blank; `plain` marks wells whose whole course is one window
    (blanks).
    """

    time_s: Floats
    net_um: Floats
    substrate_um: Floats
    consumable_um: Floats
    zero_is_blank: Flags
    plain: Flags
    depletion_limit: Floats
    slope_change_limit: Floats
    slope_change_t_limit: Floats
    shortest_points: Integers


@dataclass(frozen=True)
class Bend:
    """Curvature beyond depletion of one window a well: change of slope over the slope, its t, and the raw
    ones."""

    change: Floats
    t: Floats
    raw_change: Floats
    raw_t: Floats


def bend_beyond(line: WindowFits, excess: WindowFits, noise: Floats, known: Flags) -> Bend:
    """Curvature beyond depletion. Without a prediction, nothing within the band to first-order decay
    counts."""
    with np.errstate(all="ignore"):
        beyond = np.where(
            known,
            excess.curvature,
            np.where(line.curvature > 0, line.curvature, np.minimum(excess.curvature, 0.0)),
        )
        # Relative to the slope's size, so that a falling signal's sign does not turn the meaning round.
        over_slope = 2.0 * (line.end_s - line.start_s) / line.slope
        sign = np.sign(line.slope)
        error = np.sqrt(noise * line.curvature_factor)
        return Bend(
            beyond * over_slope,
            sign * beyond / error,
            line.curvature * over_slope,
            sign * line.curvature / error,
        )


def curved_early(
    curves: Curves,
    fits: WindowFits,
    excess: WindowFits,
    noise: Floats,
    known: Flags,
    running: Integers,
    end: Integers,
) -> tuple[Flags, Flags]:
    """Wells that speed up, and wells that slow down more than depletion explains, before the conversion
    limit."""
    wells = np.arange(end.size)
    lagging, falls = np.zeros(end.size, dtype=bool), np.zeros(end.size, dtype=bool)
    total = running[end, wells]
    for share in _STRETCHES:
        count = np.ceil(share * total).astype(np.intp)
        enough = count >= np.maximum(curves.shortest_points, FEWEST_FOR_CURVATURE)
        stop = np.minimum(read_with_count(running, count), end)
        bend = bend_beyond(fits.pick(stop), excess.pick(stop), noise, known)
        with np.errstate(invalid="ignore"):
            limit, t_limit = curves.slope_change_limit, curves.slope_change_t_limit
            rises = (np.minimum(bend.change, bend.raw_change) > limit) & (
                np.minimum(bend.t, bend.raw_t) > t_limit
            )
            slows = (bend.change < -limit) & (bend.t < -t_limit)
        lagging |= enough & rises & (fits.pick(stop).slope > 0)
        falls |= enough & slows & (fits.pick(stop).slope > 0)
    return lagging, falls


def begins_slowly(
    curves: Curves, predicted: Floats, fits: WindowFits, noise: Floats, first: Integers, end: Integers
) -> Flags:
    """Wells that start with a lag, by its trace: an exponential beside start and slope, by least squares.

    What depletion does to the slope must not pass for a lag, nor a wrong prediction of it: the trace stands
    out of what depletion leaves, and at least by half as much out of the reads themselves.
    """
    wells = np.arange(end.size)
    reads = np.arange(curves.net_um.shape[0])[:, None]
    usable = (reads >= first) & (reads <= end) & np.isfinite(curves.net_um)
    weight = usable.astype(np.float64)
    length_s = curves.time_s[end, wells] - curves.time_s[first, wells]
    with np.errstate(all="ignore"):
        share = np.where(usable, (curves.time_s - curves.time_s[first, wells]) / length_s, 0.0)
        raw = np.where(usable, curves.net_um, 0.0)
        excess = np.where(usable, curves.net_um - predicted, 0.0)
    found = np.zeros(end.size, dtype=bool)
    slope = fits.slope * length_s
    for constant in _LAG_SHARES:
        trace = _beside_line(np.where(usable, np.exp(-share / constant), 0.0), share, weight)
        with np.errstate(all="ignore"):
            square = np.sum(trace**2, axis=0)
            error = np.sqrt(noise / square)
            of_excess, of_raw = (np.sum(trace * each, axis=0) / square for each in (excess, raw))
            change = np.minimum(of_excess, of_raw) / constant / slope
            found |= (
                (change > curves.slope_change_limit)
                & (of_excess > curves.slope_change_t_limit * error)
                & (of_raw > 0.5 * curves.slope_change_t_limit * error)
            )
    return found & (slope > 0)


def _beside_line(trace: Floats, share: Floats, weight: Floats) -> Floats:
    """What of a trace a straight line over the weighted reads does not explain, shape (reads, wells)."""
    count = np.sum(weight, axis=0)
    with np.errstate(all="ignore"):
        mean, middle = np.sum(trace, axis=0) / count, np.sum(share * weight, axis=0) / count
        centred = (share - middle) * weight
        slope = np.sum(centred * trace, axis=0) / np.sum(centred**2, axis=0)
        left: Floats = (trace - mean) * weight - slope * centred
    return left


def read_with_count(running: Integers, count: Integers) -> Integers:
    """First read at which so many reads are usable, or the last read."""
    reached = running >= count
    read: Integers = np.where(reached.any(axis=0), np.argmax(reached, axis=0), running.shape[0] - 1)
    return read
