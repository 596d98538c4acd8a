"""Lag and burst: where a progress curve settles exponentially to its steady rate.

P = P0 + vs t + (v0 - vs)(1 - exp(-k t)) / k, with t from the first usable read. It knows no plates, windows
or substrate: whether a curve may be read so is for its caller to say.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy.special import fdtrc

from models.statistics.sums import sum_rows

Floats = NDArray[np.float64]
Flags = NDArray[np.bool_]

_GRID = 32
_FEWEST_READS = 6
_STEPS = 60
_SAME_LOG_K = 1e-12
_WELLS_AT_ONCE = 256
_NARROW = 64
"""Columns up to which a running sum is the faster way to add rows in their order."""
_SETTLED = 3.0
"""Time constants within the reads: exp(-3) = 5 % of the transient is left at the last of them."""
_INTERVAL = 1.96
"""Standard errors to either end of a 95 % interval."""
_DOUBT = 1e-3
"""A transient is told from a line only where chance bends a line as far with less than this probability."""
_LARGEST_K_ERROR = 0.5
"""Standard error of k over k: beyond it the 95 % interval reaches 0, which is no transient."""
_ROUNDING = 1e-9
"""A bend this small beside the curve's rise is the arithmetic's, not the enzyme's."""


@dataclass(frozen=True)
class Transients:
    """Exponential approaches to a steady rate, one a well; NaN where a well has too few reads.

    Attributes
    ----------
    v0_um_per_s, vs_um_per_s
        Rate at the first usable read, and the rate that the curve settles to [umol/L/s], shape (wells,).
    k_per_s
        Rate constant of the approach [1/s], shape (wells,).
    p0_um
        The curve at the first usable read [umol/L], shape (wells,).
    read_variance
        Residual variance of one read [umol2/L2], shape (wells,).
    degrees_of_freedom
        Usable reads less the four constants, shape (wells,).
    influence
        How far v0, vs and k move with each read [1/s, 1/s, 1/(s umol/L)], shape (3, reads, wells).
    told
        Whether k is told: the curve bends beyond chance, k is not at a limit of the search, and its standard
        error is below half its value; shape (wells,).
    settles
        Whether the reads last for three time constants or more, shape (wells,).
    length_s
        Time from the first usable read to the last [s], shape (wells,).
    """

    v0_um_per_s: Floats
    vs_um_per_s: Floats
    k_per_s: Floats
    p0_um: Floats
    read_variance: Floats
    degrees_of_freedom: Floats
    influence: Floats
    told: Flags
    settles: Flags
    length_s: Floats

    @property
    def unit_covariance(self) -> Floats:
        """Covariance of v0, vs and k over the variance of one read, shape (3, 3, wells)."""
        return np.array([[_sum(self.influence[i] * self.influence[j]) for j in range(3)] for i in range(3)])

    @property
    def covariance(self) -> Floats:
        """Covariance of v0, vs and k from the wells' own residuals, shape (3, 3, wells)."""
        return self.unit_covariance * self.read_variance

    @property
    def standard_errors(self) -> Floats:
        """Standard errors of v0, vs [umol/L/s] and k [1/s] from own residuals, shape (3, wells)."""
        covariance = self.covariance
        errors: Floats = np.sqrt(np.stack([covariance[i, i] for i in range(3)]))
        return errors

    @property
    def surely_settles(self) -> Flags:
        """Whether they last as long at the lower end of the interval of k, shape (wells,)."""
        with np.errstate(invalid="ignore"):
            lowest = self.k_per_s - _INTERVAL * self.standard_errors[2]
            sure: Flags = lowest * self.length_s > _SETTLED
        return sure

    def table(self) -> pd.DataFrame:
        """One row a well: constants, standard errors, and whether they are told and settle."""
        v0_se, vs_se, k_se = self.standard_errors
        return pd.DataFrame(
            {
                "v0_um_per_s": self.v0_um_per_s,
                "v0_se_um_per_s": v0_se,
                "vs_um_per_s": self.vs_um_per_s,
                "vs_se_um_per_s": vs_se,
                "k_per_s": self.k_per_s,
                "k_se_per_s": k_se,
                "told": self.told,
                "settles": self.settles,
            }
        )


def fit_transients(time_s: Floats, product_um: Floats) -> Transients:
    """Fit the exponential approach to a steady rate to the curve of every well.

    A lag has v0 < vs: with v0 = 0 it is a coupled assay, k being the coupling enzyme's Vmax/Km (McClure 1969,
    doi:10.1021/bi00835a014, for a first-order coupling step); a slowly activated enzyme starts above 0. A
    burst has v0 > vs: slow binding of an inhibitor, k being the rate at which that binding comes to its
    equilibrium, or a slow step after the first turnover. Of these the fit tells nothing apart.

    By variable projection: for a given k the other three constants are linear. Log k starts from the best of
    32 values between 1/2 over the length of the reads and 2 over their mean interval, and goes to the optimum
    by steps kept inside a bracket. Every read weighs the same, and a well's result depends neither on the
    other wells nor on their order.

    Parameters
    ----------
    time_s
        Time of each read, rising [s], shape (reads,) or (reads, wells).
    product_um
        Product, or substrate turned over [umol/L], shape (reads,) or (reads, wells); what is not finite is a
        gap.

    Returns
    -------
    Transients
        Wells with fewer than 6 reads, and straight or flat ones, are not `told`. The classic slip is to take
        v0 or vs of a curve that runs out of substrate meanwhile: the exponential takes up its depletion.

    Raises
    ------
    ValueError
        If the shapes do not fit each other.

    References
    ----------
    Morrison and Walsh (1988), Adv. Enzymol. 61, 201-301, doi:10.1002/9780470123072.ch5.
    Golub and Pereyra (1973), SIAM J. Numer. Anal. 10, 413-432, doi:10.1137/0710036, for the projection.
    """
    product = np.asarray(product_um, dtype=np.float64)
    product = product[:, None] if product.ndim == 1 else product
    time = np.asarray(time_s, dtype=np.float64)
    time = time[:, None] if time.ndim == 1 else time
    if product.ndim != 2 or time.shape[0] != product.shape[0] or time.shape[1] not in (1, product.shape[1]):
        raise ValueError(
            f"time_s has the shape {np.shape(time_s)} and product_um {np.shape(product_um)}: "
            "give product as (reads, wells) and time as (reads,) or (reads, wells)"
        )
    time = np.broadcast_to(time, product.shape)
    parts = [
        _fit(time[:, first : first + _WELLS_AT_ONCE], product[:, first : first + _WELLS_AT_ONCE])
        for first in range(0, max(product.shape[1], 1), _WELLS_AT_ONCE)
    ]
    if len(parts) == 1:
        return parts[0]
    return Transients(
        **{
            name: np.concatenate([getattr(part, name) for part in parts], axis=-1)
            for name in Transients.__dataclass_fields__
        }
    )


@dataclass(frozen=True)
class _Lines:
    """Reads of each well on a unit scale with their line taken out; arrays (reads, wells) and (wells,).

    `place` is time since the first usable read over the length of the reads, `centred` the same less its
    mean; both are 0 where a read is a gap, and `usable` is 1 or 0.
    """

    usable: Floats
    place: Floats
    centred: Floats
    count: Floats
    square: Floats

    def slope(self, values: Floats) -> Floats:
        return _sum(self.centred * values) / self.square

    def mean(self, values: Floats) -> Floats:
        return _sum(values) / self.count

    def less_line(self, values: Floats) -> Floats:
        """Values, 0 at gaps, less their line."""
        left: Floats = self.usable * (values - self.mean(values)) - self.slope(values) * self.centred
        return left

    def tiled(self, times: int) -> _Lines:
        """Every well so many times side by side."""
        return _Lines(**{name: np.repeat(getattr(self, name), times, axis=-1) for name in self.__dict__})


def _sum(values: Floats) -> Floats:
    """Sum over the reads, one after the other, so that it is the same to the last bit in any batch."""
    if values.shape[-1] > _NARROW or values.shape[0] == 0:
        return sum_rows(values)
    total: Floats = np.cumsum(values, axis=0)[-1]
    return total


def _fit(time_s: Floats, product_um: Floats) -> Transients:
    wells = np.arange(product_um.shape[1])
    usable = np.isfinite(time_s) & np.isfinite(product_um)
    if product_um.size == 0:
        nothing, never = np.full(wells.size, np.nan), np.zeros(wells.size, dtype=bool)
        influence = np.full((3, *product_um.shape), np.nan)
        return Transients(
            nothing, nothing, nothing, nothing, nothing, nothing, influence, never, never, nothing
        )
    first = np.argmax(usable, axis=0)
    since = np.where(usable, time_s - time_s[first, wells], 0.0)
    length = np.max(since, axis=0)
    read_um = np.where(usable, product_um, 0.0)
    first_um = read_um[first, wells]
    rise = np.where(usable, read_um - first_um, 0.0)
    with np.errstate(all="ignore"):
        place = since / length
        count = _sum(usable.astype(np.float64))
        centred = np.where(usable, place - _sum(place) / count, 0.0)
        lines = _Lines(usable.astype(np.float64), place, centred, count, _sum(centred * centred))
        bent = lines.less_line(rise)
        log_k, at_limit = _optimum(lines, bent)
        return _judged(lines, rise, bent, log_k, at_limit, length, first_um)


def _approach(place: Floats, log_k: Floats) -> tuple[Floats, Floats]:
    """(1 - exp(-k t)) / k, and its derivative by log k."""
    k = np.exp(log_k)
    approach = -np.expm1(-k * place) / k
    return approach, place * np.exp(-k * place) - approach


def _optimum(lines: _Lines, bent: Floats) -> tuple[Floats, Flags]:
    """Log k over the length of the reads with the least sum of squares, and whether it is at a limit."""
    wells = np.arange(bent.shape[1])
    lowest = np.full(wells.size, np.log(0.5))
    highest = np.log(2.0 * np.maximum(lines.count - 1.0, 1.0))
    grid = lowest[:, None] + np.linspace(0.0, 1.0, _GRID) * (highest - lowest)[:, None]
    tiled = lines.tiled(_GRID)
    shape = tiled.less_line(_approach(tiled.place, grid.ravel())[0])
    explained = _sum(shape * np.repeat(bent, _GRID, axis=1)) ** 2 / _sum(shape * shape)
    explained = np.where(np.isfinite(explained), explained, -1.0).reshape(wells.size, _GRID)
    best = np.argmax(explained, axis=1)
    low = grid[wells, np.maximum(best - 1, 0)]
    high = grid[wells, np.minimum(best + 1, _GRID - 1)]
    log_k = grid[wells, best]
    slope_before, log_before = np.full(wells.size, np.nan), np.full(wells.size, np.nan)
    done = ~np.isfinite(log_k)
    for step in range(_STEPS):
        # The sum of squares falls with log k where `downhill` is positive: a minimum stays in the bracket.
        downhill, curvature = _descent(lines, bent, log_k)
        low, high = np.where(downhill > 0, log_k, low), np.where(downhill > 0, high, log_k)
        secant = (slope_before - downhill) / (log_k - log_before)
        proposed = log_k + downhill / np.where(secant > 0, secant, curvature)
        halved = 0.5 * (low + high)
        inside = (proposed > low) & (proposed < high) & (step % 4 != 3)
        moved = np.where(inside, proposed, halved)
        log_before, slope_before = np.where(done, log_before, log_k), np.where(done, slope_before, downhill)
        now_done = done | (np.abs(moved - log_k) <= _SAME_LOG_K) | (downhill == 0.0)
        log_k = np.where(done | (downhill == 0.0), log_k, moved)
        done = now_done
        if done.all():
            break
    width = (highest - lowest) / _GRID
    at_limit = (log_k - lowest < 0.01 * width) | (highest - log_k < 0.01 * width)
    return log_k, at_limit


def _descent(lines: _Lines, bent: Floats, log_k: Floats) -> tuple[Floats, Floats]:
    """Half the fall of the sum of squares with log k, and half its curvature by Gauss and Newton."""
    approach, turning = _approach(lines.place, log_k)
    shape, turn = lines.less_line(approach), lines.less_line(turning)
    square = _sum(shape * shape)
    amplitude = _sum(shape * bent) / square
    residual = bent - amplitude * shape
    own_turn = turn - _sum(shape * turn) / square * shape
    return (
        amplitude * _sum(residual * turn),
        amplitude * amplitude * _sum(own_turn * own_turn),
    )


def _judged(
    lines: _Lines,
    rise: Floats,
    bent: Floats,
    log_k: Floats,
    at_limit: Flags,
    length_s: Floats,
    first_um: Floats,
) -> Transients:
    """Constants, what each read does to them, and what they are worth, at the optimum of k."""
    approach, turning = _approach(lines.place, log_k)
    shape, turn = lines.less_line(approach), lines.less_line(turning)
    square, cross = _sum(shape * shape), _sum(shape * turn)
    amplitude = _sum(shape * bent) / square
    own_shape = shape - cross / _sum(turn * turn) * turn
    own_turn = turn - cross / square * shape
    to_amplitude = own_shape / _sum(own_shape * own_shape)
    to_log_k = own_turn / _sum(own_turn * own_turn) / amplitude
    steady = lines.slope(rise) - amplitude * lines.slope(approach)
    to_steady = (
        lines.centred / lines.square
        - lines.slope(approach) * to_amplitude
        - amplitude * lines.slope(turning) * to_log_k
    )
    residual = bent - amplitude * shape
    left = _sum(residual * residual)
    degrees = lines.count - 4.0
    enough = lines.count >= _FEWEST_READS
    variance = np.where(enough, left / degrees, np.nan)
    k_per_s = np.exp(log_k) / length_s
    influence = np.stack(
        [(to_steady + to_amplitude) / length_s, to_steady / length_s, k_per_s * to_log_k],
    )
    log_k_error = np.sqrt(variance * _sum(to_log_k * to_log_k))
    gained = np.maximum(_sum(bent * bent) - left, 0.0)
    by_chance = fdtrc(2.0, np.maximum(degrees, 1.0), gained / 2.0 / variance)
    by_chance = np.where(variance == 0.0, np.where(gained > 0.0, 0.0, 1.0), by_chance)
    beyond_rounding = gained > _ROUNDING**2 * _sum(rise * rise)
    told = enough & ~at_limit & beyond_rounding & (by_chance < _DOUBT) & (log_k_error < _LARGEST_K_ERROR)

    def where_enough(values: Floats) -> Floats:
        return np.where(enough, values, np.nan)

    return Transients(
        v0_um_per_s=where_enough((steady + amplitude) / length_s),
        vs_um_per_s=where_enough(steady / length_s),
        k_per_s=where_enough(k_per_s),
        p0_um=where_enough(
            first_um + lines.mean(rise) - steady * lines.mean(lines.place) - amplitude * lines.mean(approach)
        ),
        read_variance=variance,
        degrees_of_freedom=np.where(enough, degrees, np.nan),
        influence=where_enough(influence),
        told=told,
        settles=enough & (np.exp(log_k) > _SETTLED),
        length_s=where_enough(length_s),
    )
