"""How well a plate tells enzyme from no enzyme, and how well its replicates agree.

Z', signal to blank and replicate scatter of many plates at once. This module knows neither wells nor gates:
it is given values and which plate and side each belongs to.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from models.statistics.replicates import replicate_cv

Floats = NDArray[np.float64]
Integers = NDArray[np.int_]
Flags = NDArray[np.bool_]


@dataclass(frozen=True)
class ControlWindow:
    """The room between reference wells and blanks, one value a plate, shape (plates,).

    Attributes
    ----------
    z_prime
        1 for no scatter at all; NaN where a side has fewer than two values, or both have one mean.
    signal_to_blank
        Mean of the reference over mean of the blanks [1]; NaN where the blanks' mean is not above 0.
    reference_mean, reference_sd, blank_mean, blank_sd
        In the unit of the values; standard deviations over n - 1.
    reference_count, blank_count
        Known values of each side.
    """

    z_prime: Floats
    signal_to_blank: Floats
    reference_mean: Floats
    reference_sd: Floats
    blank_mean: Floats
    blank_sd: Floats
    reference_count: Floats
    blank_count: Floats


def control_window(plate: Integers, is_reference: Flags, values: Floats, plate_count: int) -> ControlWindow:
    """Z' = 1 - 3 (sd_reference + sd_blank) / |mean_reference - mean_blank| of each plate.

    Zhang, Chung and Oldenburg 1999 (doi:10.1177/108705719900400206), equation 5. The classic slip is to pool
    both sides' variances: the standard deviations themselves are added.

    Parameters
    ----------
    plate
        Plate of each value, counted from 0, shape (n,).
    is_reference
        Whether it is of the reference, else of a blank, shape (n,).
    values
        Rates or signals, one unit for both sides, shape (n,); NaN is left out.
    plate_count
        Number of plates.

    Returns
    -------
    ControlWindow
    """
    sides = [
        _mean_and_sd(plate[chosen], values[chosen], plate_count)
        for chosen in (is_reference & np.isfinite(values), ~is_reference & np.isfinite(values))
    ]
    (reference, reference_sd, reference_count), (blank, blank_sd, blank_count) = sides
    with np.errstate(all="ignore"):
        distance = np.abs(reference - blank)
        z_prime = np.where(distance > 0, 1.0 - 3.0 * (reference_sd + blank_sd) / distance, np.nan)
        ratio = np.where(blank > 0, reference / blank, np.nan)
    return ControlWindow(
        z_prime, ratio, reference, reference_sd, blank, blank_sd, reference_count, blank_count
    )


def replicate_cvs(plate: Integers, group: Integers, values: Floats, plate_count: int) -> Floats:
    """Pooled coefficient of variation of the replicates of each plate; see `replicate_cv`.

    Parameters
    ----------
    plate, group
        Plate and replicate group of each value, counted from 0, shape (n,). A group belongs to one plate.
    values
        Rates or any other positive quantity, shape (n,); NaN is left out.
    plate_count
        Number of plates.

    Returns
    -------
    array
        Coefficient of variation [1], shape (plates,); NaN where a plate has no replicates.
    """
    found = np.full(plate_count, np.nan)
    for number in np.unique(plate):
        mine = plate == number
        _, own_group = np.unique(group[mine], return_inverse=True)
        found[number] = replicate_cv(values[mine], own_group).cv
    return found


def _mean_and_sd(plate: Integers, values: Floats, count: int) -> tuple[Floats, Floats, Floats]:
    members = np.bincount(plate, minlength=count).astype(np.float64)
    with np.errstate(all="ignore"):
        mean = np.bincount(plate, values, minlength=count) / members
        squares = np.bincount(plate, (values - mean[plate]) ** 2, minlength=count)
        sd = np.where(members > 1, np.sqrt(squares / (members - 1.0)), np.nan)
    return mean, sd, members
