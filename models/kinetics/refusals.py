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
    UNKNOWN_MODULATOR = "unknown_modulator"
    UNKNOWN_ENZYME = "unknown_enzyme"
    TOO_FEW_MODULATOR_LEVELS = "too_few_modulator_levels"
    NO_MODULATION = "no_modulation"


@dataclass(frozen=True)
class Refusal:
    """Why a series, or one law on it, is not fitted."""

    kind: RefusalKind
    reason: str


@dataclass(frozen=True)
class Counts:
    """Distinct substrate and modulator levels and rates of a series, and whether its enzyme is known."""

    levels: int
    points: int
    modulator_levels: int = 1
    enzyme_known: bool = False


def refuse_series(
    rate: Floats, standard_error: Floats, substrate_um: Floats, modulator_um: Floats | None = None
) -> Refusal | None:
    """Look for what rules out every law.

    Parameters
    ----------
    rate, standard_error
        Known rates of the series and their standard errors [umol/L/s], shape (points,).
    substrate_um
        Substrate that goes with each [umol/L], shape (points,).
    modulator_um
        Modulator [umol/L], shape (points,), 0 where there is none; None where no law needs it.
    """
    if rate.size == 0:
        return Refusal(RefusalKind.NO_RATES, "no rate is known in this series")
    if not np.all(np.isfinite(substrate_um)):
        return Refusal(RefusalKind.UNKNOWN_SUBSTRATE, "a rate has no known substrate concentration")
    if not np.all(np.isfinite(standard_error)) or np.any(standard_error < 0):
        return Refusal(RefusalKind.UNKNOWN_ERROR, "a rate has no known standard error")
    if modulator_um is not None and not np.all(np.isfinite(modulator_um) & (modulator_um >= 0)):
        return Refusal(RefusalKind.UNKNOWN_MODULATOR, "a rate has no known modulator concentration")
    if not np.any(rate > 0):
        return Refusal(RefusalKind.NO_POSITIVE_RATE, "no rate is above zero")
    return None


def refuse_law(law: RateLaw, counts: Counts) -> Refusal | None:
    """Look for what rules out one law: too few levels or rates for its constants, or enzyme not known."""
    if counts.levels < law.fewest_levels:
        return Refusal(
            RefusalKind.TOO_FEW_LEVELS,
            f"{_counted(counts.levels, 'distinct substrate level')}; {law.title} needs {law.fewest_levels}",
        )
    if counts.modulator_levels < law.fewest_modulator_levels:
        return Refusal(
            RefusalKind.TOO_FEW_MODULATOR_LEVELS,
            f"{_counted(counts.modulator_levels, 'distinct modulator level')}; "
            f"{law.title} needs {law.fewest_modulator_levels}",
        )
    if law.needs_enzyme and not counts.enzyme_known:
        return Refusal(
            RefusalKind.UNKNOWN_ENZYME, f"{law.title} needs the enzyme's concentration, above zero"
        )
    if counts.points <= law.constant_count:
        return Refusal(
            RefusalKind.TOO_FEW_POINTS,
            f"{counts.points} rates; {law.title} needs more than its {law.constant_count} constants",
        )
    return None


def _counted(count: int, what: str) -> str:
    return f"{count} {what}{'' if count == 1 else 's'}"


def refuse_fit(
    law: RateLaw, amplitude: float, log_half: float, low: float, high: float, converged: bool
) -> Refusal | None:
    """Look for what a finished fit shows to be no fit: no rate above zero, or half saturation out of reach.

    Parameters
    ----------
    law
        The law.
    amplitude
        Fitted amplitude.
    log_half, low, high
        Logarithm of the first shape constant and its limits.
    converged
        Whether the search came to rest.
    """
    if not np.isfinite(amplitude) or amplitude <= 0:
        return Refusal(RefusalKind.NO_POSITIVE_RATE, f"{law.title} finds no rate above zero")
    first = law.shape_constants[0]
    name, at_limit = first.name, log_half >= high - 1e-9 or log_half <= low + 1e-9
    if first.axis == "modulator" and at_limit:
        return Refusal(
            RefusalKind.NO_MODULATION,
            f"the rates do not follow the modulator as {law.title} would have it: {name} cannot be told",
        )
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
