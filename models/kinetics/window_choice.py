"""Which reads of a progress curve make its initial rate: end of the lag, conversion limit, straightness.

Curvature is judged beyond what depletion explains: beyond the course that the series' fit predicts, or, where
there is none, beyond the band between a straight line and first-order decay.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.kinetics.curvature import (
    FEWEST_FOR_CURVATURE,
    Curves,
    begins_slowly,
    bend_beyond,
    curved_early,
    read_with_count,
)
from models.kinetics.prediction import SeriesCourse
from models.kinetics.settling import Settling, fit_settling, goes_on, slowing
from models.kinetics.transients import fit_transients
from models.kinetics.windows import WindowFits, all_windows, windows_from
from models.statistics.moderation import moderate_variances

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]
Flags = NDArray[np.bool_]

_LAG_TIME_CONSTANTS = 3.0
"""A window starts when exp(-3) = 5 % of the lag is left at its first read, far less on average over it."""


@dataclass(frozen=True)
class Choice:
    """The window of each well and what was seen of its curvature, shape (wells,) each.

    `zero_um` is where the curve stands when nothing is consumed yet: 0 where product counts from the blank,
    else the first read, smoothed. `settling` has the transients of the wells that lag or burst.
    """

    start: Integers
    end: Integers
    shortest_end: Integers
    readable: Flags
    usable_count: Floats
    first_s: Floats
    zero_um: Floats
    lagging: Flags
    lag_s: Floats
    slope_change: Floats
    slope_change_t: Floats
    depletion_slope_change: Floats
    early_slope_change: Floats
    early_slope_change_t: Floats
    falls_early: Flags
    bursts: Flags
    bends: Flags
    plain: Flags
    depletion_limit: Floats
    settling: Settling

    def shape(self, shortest_conversion: Floats) -> NDArray[np.object_]:
        """straight, falling, lag, burst or unread, shape (wells,)."""
        shape = np.full(self.start.size, "straight", dtype=object)
        with np.errstate(invalid="ignore"):
            shape[self.bends & (self.plain | (shortest_conversion > self.depletion_limit))] = "falling"
        shape[self.falls_early] = "falling"
        shape[self.bursts] = "burst"
        shape[self.lagging] = "lag"
        shape[~self.readable] = "unread"
        return shape


def choose_windows(curves: Curves, course: SeriesCourse) -> Choice:
    """Choose the window of every well.

    Parameters
    ----------
    curves
        Curves of one plate read and the rules.
    course
        What the series' fits predict; wells it does not know are judged by their own reads.

    Returns
    -------
    Choice
    """
    wells = np.arange(curves.net_um.shape[1])
    usable = np.isfinite(curves.net_um) & np.isfinite(curves.time_s)
    running = np.cumsum(usable, axis=0, dtype=np.intp)
    usable_count = running[-1] if running.size else np.zeros(wells.size)
    readable = usable_count >= curves.shortest_points
    first = np.argmax(usable, axis=0)
    last = usable.shape[0] - 1 - np.argmax(usable[::-1], axis=0)
    first_s = curves.time_s[first, wells]
    early_um = _early_mean(curves.net_um, running, usable)

    fits = windows_from(curves.time_s, curves.net_um, first)
    shortest_end = read_with_count(running, curves.shortest_points)
    before = np.where(
        curves.zero_is_blank, _before_first_read(curves, course, fits.pick(shortest_end).at(first_s)), 0.0
    )
    consumed = course.consumed(curves.time_s, first_s, curves.substrate_um - before)
    end = _conversion_end(curves, course, fits, first_s, before, consumed, last)
    end = np.where(curves.plain, last, np.maximum(end, shortest_end))

    predicted = _depletion(curves, course, fits.pick(end), first_s, before, consumed)
    excess = windows_from(curves.time_s, curves.net_um - predicted, first)
    noise = _read_variance(fits.pick(end), readable)
    early = bend_beyond(fits.pick(end), excess.pick(end), noise, course.known)
    enough = running[end, wells] >= np.maximum(curves.shortest_points, FEWEST_FOR_CURVATURE)
    lagging, falls = curved_early(curves, fits, excess, noise, course.known, running, end)
    lagging |= begins_slowly(curves, predicted, fits.pick(end), noise, first, end)
    lagging &= readable & ~curves.plain & enough
    falls &= readable & ~curves.plain & enough & ~lagging

    bursts = _bursts(curves, falls, last)
    base_um = np.where(curves.zero_is_blank, 0.0, early_um)
    settling = _settle(curves, course, base_um, lagging | bursts)
    start, lag_shortest = _after_lag(curves, lagging, first, shortest_end, base_um, settling)
    late_fits, late_excess = fits, excess
    if lagging.any():
        start_s = curves.time_s[start, wells]
        late_fits = windows_from(curves.time_s, curves.net_um, start)
        done = late_fits.pick(lag_shortest).at(start_s) - np.where(curves.zero_is_blank, 0.0, early_um)
        before = np.where(lagging, done, before)
        consumed = course.consumed(curves.time_s, start_s, curves.substrate_um - before)
        late_end = _conversion_end(curves, course, late_fits, start_s, before, consumed, last)
        end = np.where(lagging, np.maximum(late_end, lag_shortest), end)
        late_predicted = _depletion(curves, course, late_fits.pick(end), start_s, before, consumed)
        late_excess = windows_from(curves.time_s, curves.net_um - late_predicted, start)
        shortest_end = np.where(lagging, lag_shortest, shortest_end)

    end = _straight_end(curves, late_fits, late_excess, noise, course.known, shortest_end, end)
    bend = bend_beyond(late_fits.pick(end), late_excess.pick(end), noise, course.known)
    # The line alone would start too high by what depletion bends the curve within the window.
    zero = np.where(course.known, late_excess.pick(end).at(first_s), late_fits.pick(end).at(first_s))
    with np.errstate(invalid="ignore"):
        bends = (bend.raw_change < -curves.slope_change_limit) & (-bend.raw_t > curves.slope_change_t_limit)
    return Choice(
        start=start,
        end=end,
        shortest_end=shortest_end,
        readable=readable,
        usable_count=usable_count.astype(np.float64),
        first_s=first_s,
        zero_um=np.where(curves.zero_is_blank, 0.0, np.where(lagging, early_um, zero)),
        lagging=lagging,
        lag_s=np.where(lagging, curves.time_s[start, wells] - first_s, 0.0),
        slope_change=bend.change,
        slope_change_t=bend.t,
        depletion_slope_change=bend.raw_change - bend.change,
        early_slope_change=early.change,
        early_slope_change_t=early.t,
        falls_early=falls,
        bursts=bursts,
        bends=bends,
        plain=curves.plain,
        depletion_limit=curves.depletion_limit,
        settling=settling,
    )


def _early_mean(net_um: Floats, running: Integers, usable: Flags) -> Floats:
    """Mean of the first three usable reads: where the curve stands before a lag ends."""
    early = usable & (running <= 3)
    with np.errstate(all="ignore"):
        mean: Floats = np.sum(np.where(early, net_um, 0.0), axis=0) / np.sum(early, axis=0)
    return mean


def _before_first_read(curves: Curves, course: SeriesCourse, own_um: Floats) -> Floats:
    """What was consumed before the first read, counted from the blank [umol/L], shape (wells,).

    Wells of a series were started alike, so the time that the consumption stands for is pooled over them: a
    well's own offset is noisy, goes against its own slope, and must not choose its window.
    """
    before = np.where(np.isfinite(own_um), own_um, 0.0)
    rate = course.rate(curves.substrate_um)
    for _, wells, _ in course.laws:
        ordered = wells[np.lexsort((before[wells], rate[wells]))]
        time_s = float(np.sum(before[ordered] * rate[ordered]) / np.sum(rate[ordered] ** 2))
        before[wells] = np.minimum(max(time_s, 0.0) * rate[wells], curves.substrate_um[wells])
    return before


def _conversion_end(
    curves: Curves,
    course: SeriesCourse,
    fits: WindowFits,
    start_s: Floats,
    before: Floats,
    consumed: Floats,
    last: Integers,
) -> Integers:
    """Last read at which conversion stays within the limit: predicted, or by the line of the well itself."""
    with np.errstate(invalid="ignore"):
        own = np.where(
            curves.zero_is_blank, fits.at(fits.end_s), before + fits.slope * (fits.end_s - start_s)
        )
        beyond = (
            np.where(course.known, before + consumed, own) > curves.depletion_limit * curves.consumable_um
        )
    reads = np.arange(consumed.shape[0])[:, None]
    within = ~beyond & (reads <= last) & np.isfinite(curves.net_um)
    final = within.shape[0] - 1 - np.argmax(within[::-1], axis=0)
    return np.where(within.any(axis=0), final, 0)


def _depletion(
    curves: Curves,
    course: SeriesCourse,
    line: WindowFits,
    start_s: Floats,
    before: Floats,
    consumed: Floats,
) -> Floats:
    """Product [umol/L] that depletion alone gives: predicted, or first-order at the well's own rate."""
    left = curves.substrate_um - before
    with np.errstate(all="ignore"):
        turnover = np.maximum(line.slope, 0.0) / np.maximum(left - (line.mean - line.at(start_s)), 0.1 * left)
        since = np.maximum(curves.time_s - start_s, 0.0)
        first_order = left * -np.expm1(-turnover * since)
    usable = np.isfinite(first_order) & np.isfinite(curves.consumable_um)
    return np.where(course.known, consumed, np.where(usable, first_order, 0.0))


def _read_variance(line: WindowFits, readable: Flags) -> Floats:
    steadied = moderate_variances(
        np.where(readable, line.parabola_variance, np.nan), np.maximum(line.count - 3.0, 0.0)
    )
    return steadied.variance


def _settle(curves: Curves, course: SeriesCourse, base_um: Floats, curved: Flags) -> Settling:
    """Transients of the curved wells, over their reads up to the last one below the conversion limit."""
    ceiling = curves.depletion_limit * curves.consumable_um
    return fit_settling(
        curves.time_s,
        curves.net_um - base_um,
        _before_limit(curves, base_um),
        slowing(course, curves.substrate_um, ceiling),
        np.flatnonzero(curved),
    )


def _before_limit(curves: Curves, base_um: Floats) -> Flags:
    """Usable reads up to the last one below the conversion limit, shape (reads, wells)."""
    product, known = curves.net_um - base_um, np.isfinite(curves.net_um)
    with np.errstate(invalid="ignore"):
        below = known & ~(product > curves.depletion_limit * curves.consumable_um)
    until_last: Flags = np.logical_or.accumulate(below[::-1], axis=0)[::-1]
    return until_last & known


def _after_lag(
    curves: Curves,
    lagging: Flags,
    first: Integers,
    shortest_end: Integers,
    base_um: Floats,
    settling: Settling,
) -> tuple[Integers, Integers]:
    """First read after the lag, and the end of the shortest window from there."""
    start, stop = first.copy(), shortest_end.copy()
    before_limit = _before_limit(curves, base_um)
    for place, well in enumerate(settling.wells):
        if not lagging[well]:
            continue
        net, time_s = curves.net_um[:, well], curves.time_s[:, well]
        fewest = int(curves.shortest_points[well])
        reads = np.flatnonzero(before_limit[:, well])
        if reads.size < fewest + 1:
            continue
        if settling.fits.settles[place]:
            settled_s = time_s[first[well]] + _LAG_TIME_CONSTANTS / settling.fits.k_per_s[place]
            begin = min(int(np.searchsorted(time_s[reads], settled_s)), reads.size - fewest)
        else:
            begin = _steepest(time_s[reads], net[reads], fewest)
        start[well], stop[well] = reads[begin], reads[begin + fewest - 1]
    return start, stop


def _steepest(time_s: Floats, net_um: Floats, fewest: int) -> int:
    """First read of the steepest window, where a lag does not end within the reads."""
    windows = all_windows(time_s[:, None], net_um[:, None], fewest)
    return int(windows.first[int(np.argmax(windows.slope[:, 0]))])


def _straight_end(
    curves: Curves,
    fits: WindowFits,
    excess: WindowFits,
    noise: Floats,
    known: Flags,
    shortest_end: Integers,
    end: Integers,
) -> Integers:
    """The last read up to which a straight line holds, not before the shortest window's end."""
    bend = bend_beyond(fits, excess, noise, known)
    with np.errstate(invalid="ignore"):
        curved = (np.abs(bend.change) > curves.slope_change_limit) & (
            np.abs(bend.t) > curves.slope_change_t_limit
        )
    reads = np.arange(curved.shape[0])[:, None]
    straight = ~curved & (reads >= shortest_end) & (reads <= end) & np.isfinite(curves.net_um)
    longest = straight.shape[0] - 1 - np.argmax(straight[::-1], axis=0)
    longest = np.where(straight.any(axis=0), longest, shortest_end)
    return np.where(curves.plain | (end < shortest_end), end, longest)


def _bursts(curves: Curves, falls: Flags, last: Integers) -> Flags:
    """Which slowing curves settle to a steady rate within all their reads instead of falling on."""
    bursts = np.zeros(falls.size, dtype=bool)
    wells = np.flatnonzero(falls)
    if wells.size:
        reads = np.arange(curves.net_um.shape[0])[:, None]
        net = np.where(reads <= last, curves.net_um, np.nan)[:, wells]
        fits = fit_transients(curves.time_s[:, wells], net)
        bursts[wells] = fits.settles & goes_on(fits)
    return bursts
