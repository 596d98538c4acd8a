"""Whether values depend on where a well lies: rows, columns, the edge, and the order of reading.

Effects are measured by medians, which a few odd wells do not move, and tested by permutation, which supposes
no distribution. This module knows neither rates nor fits.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.stats import kendalltau

Floats = NDArray[np.float64]
Integers = NDArray[np.integer[Any]]
Flags = NDArray[np.bool_]

SEED = 19770101
"""Of all permutations: a plate's p value must depend on nothing but the plate."""
PERMUTATIONS = 999
"""Largest number drawn: the smallest p value is one over this and one."""
FEWEST_WELLS = 3
"""Wells of a row, column or edge below which its median says little."""

_POLISHES = 10
_SETTLED = 1e-9
_PORTIONS = (25, 75, 150, 250, 499)
"""Permutations are drawn in portions: most clean plates are settled by the first two."""
_ENOUGH_EXCEEDED = 10
_LEAST_SPREAD = 1e-9
_ALIKE = 1.0 - 1e-9
"""Orders that give the same sum in another order of adding count as equal to it."""


@dataclass(frozen=True, eq=False)
class MedianPolish:
    """Tables taken apart into overall, row and column effects and what is left, shapes (tables, ...).

    Attributes
    ----------
    overall
        Typical value, shape (tables,).
    row, column
        Effects, shapes (tables, rows) and (tables, columns); NaN for a row or column without values.
    residual
        Shape (tables, rows, columns); NaN where there was no value.
    """

    overall: Floats
    row: Floats
    column: Floats
    residual: Floats


def median_polish(tables: Floats) -> MedianPolish:
    """Tukey's median polish, rows first, of many tables at once.

    Medians of rows, then of columns, are taken out again and again until the sum of the absolute residuals
    falls no further, or ten times (Tukey 1977, Exploratory Data Analysis, chapter 11, ISBN 0-201-07616-0).

    Parameters
    ----------
    tables
        Shape (tables, rows, columns); NaN where there is no value.

    Returns
    -------
    MedianPolish
    """
    count, rows, columns = tables.shape
    left = tables.copy()
    overall, row, column = np.zeros(count), np.zeros((count, rows)), np.zeros((count, columns))
    size = np.full(count, np.inf)
    going = np.arange(count)
    for _ in range(_POLISHES):
        if going.size == 0:
            break
        part = left[going]
        step = _known_or_zero(_median(part))
        part -= step[:, :, None]
        moved = _median(column[going][:, None, :])[:, 0]
        row[going] += step
        column[going] -= moved[:, None]
        overall[going] += moved
        step = _known_or_zero(_median(part.transpose(0, 2, 1)))
        part -= step[:, None, :]
        column[going] += step
        moved = _median(row[going][:, None, :])[:, 0]
        row[going] -= moved[:, None]
        overall[going] += moved
        left[going] = part
        now = np.array([np.sum(np.abs(each[np.isfinite(each)])) for each in part])
        settled = (now == 0) | (np.abs(now - size[going]) <= _SETTLED * now)
        size[going] = now
        going = going[~settled]
    known = np.isfinite(tables)
    return MedianPolish(
        overall,
        np.where(known.any(axis=2), row, np.nan),
        np.where(known.any(axis=1), column, np.nan),
        left,
    )


@dataclass(frozen=True, eq=False)
class PositionEffects:
    """Effects of position on each plate, in the unit of the values.

    Attributes
    ----------
    row, column
        By median polish, shapes (plates, rows) and (plates, columns), counted from row and column 1; NaN with
        fewer than `FEWEST_WELLS` wells.
    edge
        Median of the outermost wells less that of the others, shape (plates,); NaN where either has fewer
        than `FEWEST_WELLS`.
    """

    row: Floats
    column: Floats
    edge: Floats


def position_effects(
    plate: Integers, row: Integers, column: Integers, at_edge: Flags, values: Floats, plate_count: int
) -> PositionEffects:
    """Row, column and edge effects of many plates.

    Parameters
    ----------
    plate
        Plate of each well, counted from 0, shape (wells,).
    row, column
        Where it lies, counted from 1, shape (wells,). A place of a plate occurs once.
    at_edge
        Whether it is one of the plate's outermost wells, shape (wells,).
    values
        All known, shape (wells,).
    plate_count
        Number of plates.

    Returns
    -------
    PositionEffects
    """
    shape = (plate_count, int(row.max(initial=0)), int(column.max(initial=0)))
    tables = np.full(shape, np.nan)
    tables[plate, row - 1, column - 1] = values
    polished = median_polish(tables)
    known = np.isfinite(tables)
    outer = np.zeros(shape, dtype=bool)
    outer[plate, row - 1, column - 1] = at_edge
    edge = _median_of_few(np.where(outer, tables, np.nan)) - _median_of_few(np.where(outer, np.nan, tables))
    return PositionEffects(
        np.where(known.sum(axis=2) >= FEWEST_WELLS, polished.row, np.nan),
        np.where(known.sum(axis=1) >= FEWEST_WELLS, polished.column, np.nan),
        edge,
    )


def set_contrasts(block: Integers, member: Flags, values: Floats) -> tuple[Floats, Integers]:
    """How far sets of wells lie from the wells of the same blocks that are not in them.

    The median, over the wells of a set, of the value less the mean of the wells of its block outside the set.
    A well whose block lies wholly inside says nothing. What a block's wells share, such as a curve's misfit
    at their level, is no part of it; and unlike a residual about a mean that the set helped to make, it is
    not too small.

    Parameters
    ----------
    block
        Wells that are alike but for where they lie, such as replicates, counted from 0, shape (wells,).
    member
        Which wells each set holds, shape (sets, wells).
    values
        All known, shape (wells,).

    Returns
    -------
    tuple of arrays
        Contrast of each set in the unit of the values (NaN with fewer than `FEWEST_WELLS` wells that tell),
        and the number of wells that tell, shape (sets,).
    """
    one_hot = _one_hot(block)
    outside = (~member).astype(np.float64)
    count = outside @ one_hot
    with np.errstate(invalid="ignore", divide="ignore"):
        elsewhere = (outside * values) @ one_hot / count
    contrast = np.where(member, values - elsewhere[:, block], np.nan)
    telling = np.sum(np.isfinite(contrast), axis=1)
    return np.where(telling >= FEWEST_WELLS, _median(contrast), np.nan), telling


def permutation_test(block: Integers, effects: Floats, scores: Floats) -> tuple[Floats, Floats]:
    """Chance of sets of wells standing out as they do, corrected for the number of sets tried.

    What the wells of a block share is taken out of the scores and of the effects; the statistic of an effect
    is the t value of its coefficient. What is left of the scores is permuted among all wells, and what blocks
    share taken out again (Freedman and Lane 1983, doi:10.1080/07350015.1983.10509354). The p value is the
    share of permutations in which any effect's statistic is as large (max T: Westfall and Young 1993, ISBN
    978-0-471-55761-6), the observed order counted in. Drawing ends early once ten permutations reach the
    strongest effect (after Besag and Clifford 1991, doi:10.1093/biomet/78.2.301), else at `PERMUTATIONS`.

    Parameters
    ----------
    block
        Wells that are alike but for where they lie, such as replicates, counted from 0, shape (wells,).
    effects
        What an effect of size 1 would add to each score, 0 outside its set, shape (effects, wells).
    scores
        Residuals of equal spread, such as those over their standard deviations, shape (wells,).

    Returns
    -------
    tuple of arrays
        t value and p value of each effect, shape (effects,); NaN where blocks lie wholly in or out of its
        set, or where the wells of all blocks agree exactly.
    """
    statistic, p_value = np.full(effects.shape[0], np.nan), np.full(effects.shape[0], np.nan)
    _, block, members = np.unique(block, return_inverse=True, return_counts=True)
    several = members[block] > 1
    _, block, members = np.unique(block[several], return_inverse=True, return_counts=True)
    one_hot = _one_hot(block)
    within = _less_block_means(effects[:, several], one_hot, members)
    left = _less_block_means(scores[None, several], one_hot, members)[0]
    length = np.sqrt(np.sum(within**2, axis=1))
    tested = length > _LEAST_SPREAD * np.sqrt(np.sum(effects**2, axis=1))
    degrees = block.size - members.size
    total = float(np.sum(left**2))
    if degrees < 2 or not tested.any() or total <= (_LEAST_SPREAD * _LEAST_SPREAD) * np.sum(scores**2):
        return statistic, p_value
    unit = within[tested] / length[tested, None]
    seen = unit @ left / np.sqrt(total)
    drawn, exceeded = 0, np.zeros(seen.size)
    for portion in range(len(_PORTIONS)):
        shuffled = left[_shuffles(block.size, portion)]
        remainder = np.sum(shuffled**2, axis=0) - members @ ((one_hot.T @ shuffled) / members[:, None]) ** 2
        largest = np.max(np.abs(unit @ shuffled), axis=0) / np.sqrt(remainder)
        exceeded += np.sum(largest[None, :] >= np.abs(seen)[:, None] * _ALIKE, axis=1)
        drawn += _PORTIONS[portion]
        if exceeded.min() >= _ENOUGH_EXCEEDED:
            break
    with np.errstate(divide="ignore"):
        statistic[tested] = seen * np.sqrt((degrees - 1.0) / np.maximum(1.0 - seen**2, 0.0))
    p_value[tested] = (exceeded + 1.0) / (drawn + 1.0)
    return statistic, p_value


@dataclass(frozen=True)
class ReadOrderDrift:
    """How values move along the order of reading.

    Attributes
    ----------
    change
        From the first to the last place, by the median of all pairwise slopes, in the unit of the values.
    p_value
        Of Kendall's rank correlation with the order, two-sided.
    """

    change: float
    p_value: float


def read_order_drift(order: Floats, values: Floats) -> ReadOrderDrift | None:
    """Drift of values across the order in which the wells were read.

    The median of the slopes between all pairs of wells (Theil 1950; Sen 1968,
    doi:10.1080/01621459.1968.10480934) times the length of the order, with Kendall's test of the rank
    correlation.

    Parameters
    ----------
    order
        Place or time in the order of reading, shape (wells,).
    values
        Such as relative residuals, shape (wells,); NaN is left out.

    Returns
    -------
    ReadOrderDrift or None
        None with fewer than 4 wells, or all at one place.
    """
    known = np.isfinite(order) & np.isfinite(values)
    order, values = order[known], values[known]
    if order.size < 4 or np.ptp(order) == 0:
        return None
    first, second = np.triu_indices(order.size, k=1)
    apart = order[second] - order[first]
    slopes = (values[second] - values[first])[apart != 0] / apart[apart != 0]
    p_value = 1.0 if np.ptp(values) == 0 else float(kendalltau(order, values).pvalue)
    return ReadOrderDrift(float(np.median(slopes)) * float(np.ptp(order)), p_value)


def _one_hot(block: Integers) -> Floats:
    found = np.zeros((block.size, int(block.max(initial=-1)) + 1))
    found[np.arange(block.size), block] = 1.0
    return found


@lru_cache(maxsize=64)
def _shuffles(count: int, portion: int) -> Integers:
    """Which well's score each well gets, in each permutation of a portion, shape (wells, permutations).

    Drawn once for all plates of so many wells.
    """
    keys = np.random.default_rng((SEED, portion)).random((count, _PORTIONS[portion]))
    return np.argsort(keys, axis=0).astype(np.int32)


def _less_block_means(values: Floats, one_hot: Floats, members: Integers) -> Floats:
    less: Floats = values - (values @ one_hot / members) @ one_hot.T
    return less


def _median(values: Floats) -> Floats:
    """Median along the last axis without unknown values; NaN where there is none."""
    ordered = np.sort(values, axis=-1)
    count = np.sum(np.isfinite(ordered), axis=-1)
    low, high = np.maximum(count - 1, 0) // 2, np.maximum(count, 1) // 2
    middle = [
        np.take_along_axis(ordered, np.minimum(place, values.shape[-1] - 1)[..., None], axis=-1)[..., 0]
        for place in (low, high)
    ]
    return np.where(count > 0, 0.5 * (middle[0] + middle[1]), np.nan)


def _median_of_few(tables: Floats) -> Floats:
    flat = tables.reshape(tables.shape[0], -1)
    if flat.shape[1] == 0:
        return np.full(tables.shape[0], np.nan)
    return np.where(np.isfinite(flat).sum(axis=1) >= FEWEST_WELLS, _median(flat), np.nan)


def _known_or_zero(values: Floats) -> Floats:
    return np.where(np.isfinite(values), values, 0.0)
