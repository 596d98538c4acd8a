"""Path length of light through a well: from volume and area, or from the water band in the near infrared.

Water absorbs at 977 nm and hardly at 900 nm; the difference grows with the path and is all but free of what
is dissolved. This module knows wells as rows only.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

WATER_PER_CM = 0.18
"""A977 - A900 of 1 cm of water near 25 degC; 0.172 to 0.186 across aqueous media (both from memory,
unconfirmed). A site does better with its own value, read in a 1 cm cuvette at the assay's temperature."""

WATER_PER_CM_RELATIVE_ERROR = (0.186 - 0.172) / 2.0 / np.sqrt(3.0) / WATER_PER_CM
"""Relative standard error of that value where it is not the site's own: half the range over sqrt(3)
(JCGM 100:2008, 4.3.7). All wells share it."""

SHORTEST_CM, LONGEST_CM = 0.05, 2.0
"""No liquid in a well is shallower or deeper: a value beyond these is a dry well, a bubble or a wrong channel
(common practice, no source)."""

UL_PER_MM2_IN_CM = 0.1


@dataclass(frozen=True, eq=False)
class PathLengths:
    """Path length of each well.

    Attributes
    ----------
    path_cm
        Path length [cm], shape (wells,); NaN where it is not known or cannot be true.
    standard_error_cm
        Standard error from the scatter of repeated reads [cm], shape (wells,); NaN with fewer than two.
    """

    path_cm: Floats
    standard_error_cm: Floats


def path_from_volume_cm(fill_volume_ul: float, well_area_mm2: float) -> float:
    """Path length [cm] of a straight-walled well: volume over area, 1 uL over 1 mm2 being 1 mm.

    It leaves out the meniscus, which shortens the path in the middle of a well that water wets.
    """
    return fill_volume_ul / well_area_mm2 * UL_PER_MM2_IN_CM


def path_from_water_band(
    signal_977: Floats, signal_900: Floats, water_per_cm: float = WATER_PER_CM
) -> PathLengths:
    """Path length of each well from its absorbance at 977 and 900 nm.

    l = (A977 - A900) / (A977 - A900 of 1 cm of water at the assay's temperature). The classic slip is to take
    the value of another temperature: the band moves with it.

    Parameters
    ----------
    signal_977, signal_900
        Absorbance at both wavelengths, shape (wells, reads), the same reads in both; NaN where not read.
    water_per_cm
        Difference per cm of water.

    Returns
    -------
    PathLengths

    Raises
    ------
    ValueError
        If the shapes differ, or `water_per_cm` is not above 0.
    """
    if signal_977.shape != signal_900.shape or signal_977.ndim != 2:
        raise ValueError(
            f"signal_977 and signal_900 must both have the shape (wells, reads), not "
            f"{signal_977.shape} and {signal_900.shape}"
        )
    if not water_per_cm > 0:
        raise ValueError(f"water_per_cm must be above 0, not {water_per_cm}")
    each = (signal_977 - signal_900) / water_per_cm
    known = np.isfinite(each)
    count = np.count_nonzero(known, axis=1)
    path, error = np.full(count.size, np.nan), np.full(count.size, np.nan)
    for well in np.flatnonzero(count):
        reads = each[well][known[well]]
        path[well] = np.mean(reads)
        if reads.size > 1:
            error[well] = np.std(reads, ddof=1) / np.sqrt(reads.size)
    plausible = (path >= SHORTEST_CM) & (path <= LONGEST_CM)
    return PathLengths(np.where(plausible, path, np.nan), np.where(plausible, error, np.nan))
