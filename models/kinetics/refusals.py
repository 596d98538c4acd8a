"""Why a series cannot be fitted, found before any fit and named so that a person can mend it.

A refusal is a value, not an exception: one bad series must not end a pass.
"""

from __future__ import annotations

from dataclasses import dataclass
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

from models.kinetics.laws import RateLaw

Floats = NDArray[np.float64]


class RefusalKind(StrEnum):
    """What is wrong with a series."""

    NO_RATES = "no_rates"
    UNKNOWN_SUBSTRATE = "unknown_substrate"
    UNKNOWN_ERROR = "unknown_error"
    TOO_FEW_LEVELS = "too_few_levels"
    TOO_FEW_POINTS = "too_few_points"
    NO_POSITIVE_RATE = "no_positive_rate"
    NO_HALF_SATURATION = "no_half_saturation"
    NOT_CONVERGED = "not_converged"


@dataclass(frozen=True)
class Refusal:
    """Why a series, or one law on it, is not fitted."""

    kind: RefusalKind
    reason: str


def refuse_series(rate: Floats, standard_error: Floats, substrate_um: Floats) -> Refusal | None:
    """Look for what rules out every law.

    Parameters
    ----------
    rate, standard_error
        Known rates of the series and their standard errors [umol/L/s], shape (points,).
    substrate_um
        Substrate that goes with each [umol/L], shape (points,).
    """
    if rate.size == 0:
        return Refusal(RefusalKind.NO_RATES, "no rate is known in this series")
    if not np.all(np.isfinite(substrate_um)):
        return Refusal(RefusalKind.UNKNOWN_SUBSTRATE, "a rate has no known substrate concentration")
    if not np.all(np.isfinite(standard_error)) or np.any(standard_error < 0):
        return Refusal(RefusalKind.UNKNOWN_ERROR, "a rate has no known standard error")
    if not np.any(rate > 0):
        return Refusal(RefusalKind.NO_POSITIVE_RATE, "no rate is above zero")
    return None


def refuse_law(law: RateLaw, level_count: int, point_count: int) -> Refusal | None:
    """Look for what rules out one law: too few levels or rates for its constants."""
    if level_count < law.fewest_levels:
        return Refusal(
            RefusalKind.TOO_FEW_LEVELS,
            f"{level_count} distinct substrate level{'' if level_count == 1 else 's'}; "
            f"{law.title} needs {law.fewest_levels}",
        )
    if point_count <= law.constant_count:
        return Refusal(
            RefusalKind.TOO_FEW_POINTS,
            f"{point_count} rates; {law.title} needs more than its {law.constant_count} constants",
        )
    return None


def refuse_fit(
    law: RateLaw, vmax: float, log_half: float, low: float, high: float, converged: bool
) -> Refusal | None:
    """Look for what a finished fit shows to be no fit: vmax not above zero, or half saturation out of reach.

    Parameters
    ----------
    law
        The law.
    vmax
        Fitted amplitude.
    log_half, low, high
        Logarithm of the first shape constant and its limits.
    converged
        Whether the search came to rest.
    """
    if not np.isfinite(vmax) or vmax <= 0:
        return Refusal(RefusalKind.NO_POSITIVE_RATE, f"{law.title} finds no rate above zero")
    name = law.shape_constants[0].name
    if log_half >= high - 1e-9:
        return Refusal(
            RefusalKind.NO_HALF_SATURATION,
            f"the rates rise in proportion to substrate: {name} lies beyond all levels and cannot be told",
        )
    if log_half <= low + 1e-9:
        return Refusal(
            RefusalKind.NO_HALF_SATURATION,
            f"the rates do not depend on substrate: {name} lies below all levels and cannot be told",
        )
    if not converged:
        return Refusal(RefusalKind.NOT_CONVERGED, f"the search for {law.title} did not come to rest")
    return None
