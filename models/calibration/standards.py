"""From wells of role standard to the points of a curve: one signal a well, whatever was read over time.

Reads of one well are no replicates of each other; wells are. Knows wells as rows only.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class StandardWells:
    """What each standard well showed, shape (wells,) each; NaN where it was not read.

    Attributes
    ----------
    signal
        Mean of its usable reads.
    drift_share
        Last third of its usable reads less the first third, over the mean [1]: a standard does not react, so
        this is bleaching, evaporation or a lamp. NaN with fewer than six reads.
    """

    signal: Floats
    drift_share: Floats


def standard_wells(signal: Floats) -> StandardWells:
    """One signal a standard well.

    Parameters
    ----------
    signal
        Reads of standard wells in order of time, shape (wells, reads); NaN where not usable.
    """
    mean, drift = np.full(signal.shape[0], np.nan), np.full(signal.shape[0], np.nan)
    for well, reads in enumerate(signal):
        usable = reads[np.isfinite(reads)]
        if usable.size == 0:
            continue
        mean[well] = np.mean(usable)
        third = usable.size // 3
        if third >= 2 and mean[well] != 0:
            drift[well] = (np.mean(usable[-third:]) - np.mean(usable[:third])) / mean[well]
    return StandardWells(mean, drift)
