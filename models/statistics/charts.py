"""Control charts of a sequence of single values: individuals and moving range, EWMA, Western Electric rules.

Limits come from a stated base period and are held against every point. Knows numbers in order only.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from numpy.typing import NDArray
from scipy.signal import lfilter

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

D2 = 2.0 / math.sqrt(math.pi)
"""Mean range of two values of a normal distribution over its standard deviation; tables print 1.128."""
D3 = math.sqrt(2.0 - 4.0 / math.pi)
"""Standard deviation of that range; tables print 0.853."""
LIMIT_SD = 3.0
"""Distance of the limits from the centre line (Shewhart 1931, Economic Control of Quality)."""
FEWEST_BASE = 2

RULES = {
    1: "one point beyond 3 sd",
    2: "two of three in a row beyond 2 sd on one side",
    3: "four of five in a row beyond 1 sd on one side",
    4: "eight in a row on one side of the centre line",
}
"""The Western Electric rules, by number."""


class ChartBase(NamedTuple):
    """Centre line and spread of a base period.

    Attributes
    ----------
    centre
        Mean of its points.
    sd
        Standard deviation from the mean moving range, which a slow drift hardly widens; NaN with fewer than
        two neighbours.
    moving_range
        Mean moving range.
    point_count
        Points in the base period.
    """

    centre: float
    sd: float
    moving_range: float
    point_count: int


class Signal(NamedTuple):
    """One point that breaks one rule: its place, counted from 0, and the rule's number."""

    place: int
    rule: int


@dataclass(frozen=True)
class IndividualsChart:
    """Individuals and moving range chart; arrays of shape (points,).

    Attributes
    ----------
    values
        The points.
    base
        What the limits rest on.
    lower, upper
        Limits of the points; NaN where the base gives no spread.
    beyond
        Points outside their limits.
    moving_range
        Absolute difference from the point before; NaN for the first.
    moving_range_upper
        Upper limit of the moving range.
    moving_range_beyond
        Points whose moving range lies above it.
    """

    values: Floats
    base: ChartBase
    lower: float
    upper: float
    beyond: Flags
    moving_range: Floats
    moving_range_upper: float
    moving_range_beyond: Flags


@dataclass(frozen=True)
class EwmaChart:
    """Chart of the exponentially weighted moving average; arrays of shape (points,).

    Attributes
    ----------
    ewma
        The average after each point.
    centre
        Centre line, where the average starts.
    lower, upper
        Limits at each point.
    beyond
        Points at which the average lies outside its limits.
    """

    ewma: Floats
    centre: float
    lower: Floats
    upper: Floats
    beyond: Flags


def chart_base(values: Floats, in_base: Flags | None = None, d2: float = D2) -> ChartBase:
    """Centre line and spread from a base period.

        sd = mean(|x_i - x_(i-1)|) / d2

    over neighbours that both lie in the base period (NIST/SEMATECH e-Handbook, 6.3.2.2, doi:10.18434/M32189).

    Parameters
    ----------
    values
        Points in order of time, shape (points,), all known.
    in_base
        Which of them make the base period, shape (points,); all where it is not given.
    d2
        2 / sqrt(pi), or 1.128 to agree with printed tables to the last digit.

    Returns
    -------
    ChartBase
        With centre NaN where no point is in the base, and spread NaN where no two neighbours are.

    Raises
    ------
    ValueError
        If a value is not finite, or shapes differ.
    """
    x, chosen = _points(values, in_base)
    both = chosen[1:] & chosen[:-1]
    ranges = np.abs(np.diff(x))[both]
    centre = float(np.mean(x[chosen])) if chosen.any() else math.nan
    moving_range = float(np.mean(ranges)) if ranges.size else math.nan
    return ChartBase(centre, moving_range / d2, moving_range, int(chosen.sum()))


def individuals_chart(
    values: Floats, in_base: Flags | None = None, limit_sd: float = LIMIT_SD, d2: float = D2
) -> IndividualsChart:
    """Individuals and moving range chart.

        centre +- 3 sd, and mean moving range (1 + 3 d3 / d2) = 3.267 mean moving range

    (NIST/SEMATECH e-Handbook, 6.3.2.2, doi:10.18434/M32189).

    Parameters
    ----------
    values, in_base, d2
        As for `chart_base`.
    limit_sd
        Distance of both limits from their centre, in standard deviations.

    Raises
    ------
    ValueError
        As `chart_base`.
    """
    x, _ = _points(values, in_base)
    base = chart_base(x, in_base, d2)
    lower, upper = base.centre - limit_sd * base.sd, base.centre + limit_sd * base.sd
    moving_range = np.abs(np.diff(x, prepend=np.nan)) if x.size else x
    top = base.moving_range * (1.0 + limit_sd * D3 / D2)
    return IndividualsChart(
        x, base, lower, upper, (x < lower) | (x > upper), moving_range, top, moving_range > top
    )


def ewma_chart(
    values: Floats,
    centre: float,
    sd: float,
    weight: float = 0.2,
    limit_sd: float = LIMIT_SD,
    settled: bool = False,
) -> EwmaChart:
    """Chart of the exponentially weighted moving average: it sees small lasting shifts that single points do
    not show.

        z_i = w x_i + (1 - w) z_(i-1),  z_0 = centre
        limits: centre +- L sd sqrt(w / (2 - w) (1 - (1 - w)^(2 i)))

    (Roberts 1959, doi:10.1080/00401706.1959.10489860; limits: Lucas and Saccucci 1990,
    doi:10.1080/00401706.1990.10484583).

    Parameters
    ----------
    values
        Points in order of time, shape (points,), all known.
    centre, sd
        Of the base period, as `chart_base` gives them.
    weight
        w of the newest point, above 0 and up to 1; 0.2 to 0.3 is common practice.
    limit_sd
        L.
    settled
        Limits as after many points, without the last factor, from the first point on.

    Raises
    ------
    ValueError
        If a value is not finite, or the weight is not above 0 and up to 1.
    """
    x, _ = _points(values, None)
    if not 0.0 < weight <= 1.0:
        raise ValueError("the weight of an EWMA chart lies above 0 and is at most 1")
    smoothed, _ = lfilter([weight], [1.0, weight - 1.0], x, zi=np.array([(1.0 - weight) * centre]))
    ewma: Floats = np.asarray(smoothed, dtype=np.float64)
    share = np.ones(x.size) if settled else 1.0 - (1.0 - weight) ** (2.0 * np.arange(1, x.size + 1))
    reach = limit_sd * sd * np.sqrt(weight / (2.0 - weight) * share)
    lower, upper = centre - reach, centre + reach
    return EwmaChart(ewma, centre, lower, upper, (ewma < lower) | (ewma > upper))


def western_electric(values: Floats, centre: float, sd: float) -> Flags:
    """Which points break which of the Western Electric rules 1 to 4.

    A rule is broken at the point that completes its pattern, so that point itself lies beyond the line. A
    point on a line is not beyond it, and one on the centre line ends a run. Looks back from each point only:
    what comes later changes nothing.

    Source: Western Electric Co., Statistical Quality Control Handbook, 1956; run lengths of their use in
    Champ and Woodall 1987 (doi:10.1080/00401706.1987.10488266).

    Parameters
    ----------
    values
        Points in order of time, shape (..., points): several sequences may be judged at once.
    centre, sd
        Centre line and standard deviation of the chart.

    Returns
    -------
    array of bool
        Shape (4, ..., points), rule 1 first; nothing is broken where the spread is not known.

    Raises
    ------
    ValueError
        If a value is not finite.
    """
    x = np.asarray(values, dtype=np.float64)
    if not np.all(np.isfinite(x)):
        raise ValueError("a chart's points are all known: leave out those that are not")
    deviation = x - centre
    broken = np.zeros((4, *x.shape), dtype=bool)
    for side in (deviation, -deviation):
        broken[0] |= side > 3.0 * sd
        for rule, (needed, window, line) in enumerate(((2, 3, 2.0), (4, 5, 1.0), (8, 8, 0.0)), start=1):
            past = side > line * sd if np.isfinite(sd) else np.zeros(x.shape, dtype=bool)
            broken[rule] |= past & (_of_last(past, window) >= needed)
    return broken


def signals(broken: Flags) -> tuple[Signal, ...]:
    """Every broken rule of one sequence as place and rule, in order of place.

    Parameters
    ----------
    broken
        As `western_electric` gives it for one sequence, shape (4, points).
    """
    place, rule = np.nonzero(broken.T)
    return tuple(Signal(int(at), int(which) + 1) for at, which in zip(place, rule, strict=True))


def _of_last(past: Flags, window: int) -> NDArray[np.int_]:
    """How many of the last `window` points are flagged, fewer where the sequence has just begun."""
    if past.shape[-1] == 0:
        return np.zeros(past.shape, dtype=np.int_)
    begun = np.zeros((*past.shape[:-1], window - 1), dtype=bool)
    padded = np.concatenate([begun, past], axis=-1)
    return np.asarray(sliding_window_view(padded, window, axis=-1).sum(axis=-1), dtype=np.int_)


def _points(values: Floats, in_base: Flags | None) -> tuple[Floats, Flags]:
    x = np.asarray(values, dtype=np.float64)
    chosen = np.ones(x.shape, dtype=bool) if in_base is None else np.asarray(in_base, dtype=bool)
    if x.ndim != 1 or chosen.shape != x.shape:
        raise ValueError("a chart takes one sequence of points, and a flag for each")
    if not np.all(np.isfinite(x)):
        raise ValueError("a chart's points are all known: leave out those that are not")
    return x, chosen
